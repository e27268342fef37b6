"""``python -m ssaudit.ferry DIR [--configs DIR]``: write the demo exports and gain tables."""

import argparse
from pathlib import Path

from ssaudit.ferry.export import write_exports, write_gain_tables
from ssaudit.ferry.rounded import write_rounded


def main(arguments: list[str] | None = None) -> int:
    """Write the demo's files and print where.

    Parameters
    ----------
    arguments : list of str, optional
        The command line without the program; taken from the process when absent.

    Returns
    -------
    int
        Exit code.
    """
    parser = argparse.ArgumentParser(
        prog="python -m ssaudit.ferry", description="Write the demo exports."
    )
    parser.add_argument("folder", type=Path, help="where the exports go")
    parser.add_argument("--configs", type=Path, help="where the two gain tables go, if wanted")
    chosen = parser.parse_args(arguments)
    written = write_exports(chosen.folder)
    written.append(write_rounded(chosen.folder / "ferry-b-rounded.npz"))
    if chosen.configs is not None:
        written += write_gain_tables(chosen.configs)
    print("\n".join(map(str, written)))
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
