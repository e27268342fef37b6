"""The command line: arguments → one library call → a report and an exit code."""

import argparse
import io
import os
import shutil
import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import TYPE_CHECKING, Any, NoReturn

from ssaudit import __version__
from ssaudit.errors import SsauditError
from ssaudit.tuning import tune_process

if TYPE_CHECKING:
    from rich.console import RenderableType

    from ssaudit.progress import Progress

OK, NOT_OK, CANNOT_RUN, INTERRUPTED = 0, 1, 2, 130
# Where the width of the output is not known, as in a file.
WIDTH = 100


class _Parser(argparse.ArgumentParser):
    """Says what is wrong with the arguments in one line."""

    def error(self, message: str) -> NoReturn:
        self.exit(CANNOT_RUN, f"{self.prog}: {message}; see {self.prog} --help\n")


def main(arguments: Sequence[str] | None = None) -> int:
    """Run a command.

    Parameters
    ----------
    arguments : sequence of str, optional
        As after ``ssaudit``; those of the process when absent.

    Returns
    -------
    int
        0: all ok; 1: finished, and something is not ok; 2: could not run; 130: interrupted.
    """
    options = _parser().parse_args(arguments)
    tune_process()
    command: Callable[[argparse.Namespace], int] = options.command
    try:
        return command(options)
    except SsauditError as error:
        print(f"ssaudit: {error}", file=sys.stderr)
        return CANNOT_RUN
    except KeyboardInterrupt:
        print("ssaudit: interrupted", file=sys.stderr)
        return INTERRUPTED
    except BrokenPipeError:
        return CANNOT_RUN  # the reader of the output has gone, and with it who could be told why


def _parser() -> argparse.ArgumentParser:
    parser = _Parser(
        prog="ssaudit",
        description="Close gain-scheduled state-space models at every operating point, judge their "
        "stability, and keep a record that revisions can be compared in.",
        epilog="Exit: 0 all points ok; 1 finished, and some point is not ok (drift: something got "
        "worse); 2 could not run; 130 interrupted.",
    )
    parser.add_argument("--version", action="version", version=f"ssaudit {__version__}")
    commands = parser.add_subparsers(metavar="COMMAND", required=True, parser_class=_Parser)
    _add_look(commands)
    _add_ingest(commands)
    _add_audit(commands)
    _add_point(commands)
    _add_drift(commands)
    _add_trend(commands)
    _add_run(commands)
    return parser


def _add(commands: Any, name: str, command: Callable[[argparse.Namespace], int], help: str) -> Any:
    parser = commands.add_parser(name, help=help, description=help[0].upper() + help[1:] + ".")
    parser.set_defaults(command=command)
    return parser


def _add_look(commands: Any) -> None:
    parser = _add(commands, "look", _look, "say what an unknown export holds, and draft a layout")
    parser.add_argument("path", type=Path, metavar="PATH", help="a file or a folder")
    parser.add_argument("--draft", type=Path, metavar="FILE", help="write the draft layout here")


def _add_ingest(commands: Any) -> None:
    parser = _add(commands, "ingest", _ingest, "take exports in and write them as one bank")
    parser.add_argument("sources", nargs="+", metavar="SOURCE", help="file, folder or pattern")
    parser.add_argument(
        "--revision", metavar="R", help="name of the model revision, unless the layout states it"
    )
    parser.add_argument("--bank", required=True, type=Path, metavar="OUT.h5", help="bank to write")
    parser.add_argument(
        "--layout", type=Path, metavar="L.toml", help="where in the export what lies"
    )


def _add_audit(commands: Any) -> None:
    parser = _add(commands, "audit", _audit, "close all models of a bank and judge every point")
    parser.add_argument("bank", type=Path, metavar="BANK", help="bank that ingest wrote")
    parser.add_argument("--loop", required=True, type=Path, metavar="L.toml", help="how to close")
    parser.add_argument(
        "--criteria", required=True, type=Path, metavar="C.toml", help="what to judge by"
    )
    parser.add_argument("--ledger", type=Path, metavar="DIR", help="log the run in this ledger")
    parser.add_argument(
        "--depth",
        choices=("poles", "modes", "margins"),
        default="modes",
        help="poles: the fast look; modes (default): vectors, participation, trust; margins: the "
        "distance to trouble",
    )
    parser.add_argument(
        "--real-radius",
        action="store_true",
        help="at depth margins, find the stability radii for real changes too (slow)",
    )
    parser.add_argument(
        "--prove",
        choices=("doubt", "worst", "all"),
        default="",
        help="settle these points by exact or ball arithmetic (needs the extra: prove)",
    )
    _add_worst(parser)
    _add_json(parser)
    parser.add_argument("--csv", type=Path, metavar="FILE", help="write the points table as CSV")
    parser.add_argument(
        "--workers", type=_positive, metavar="N", help="worker threads (default: one a processor)"
    )


def _add_point(commands: Any) -> None:
    parser = _add(commands, "point", _point, "explain one point: modes, loops, margins, gains")
    parser.add_argument("bank", type=Path, metavar="BANK", help="bank that ingest wrote")
    parser.add_argument("--loop", required=True, type=Path, metavar="L.toml", help="how to close")
    parser.add_argument("--criteria", type=Path, metavar="C.toml", help="what to judge by")
    chosen = parser.add_mutually_exclusive_group(required=True)
    chosen.add_argument("--id", metavar="ID", help="name of the point")
    chosen.add_argument(
        "--near", type=_coordinates, metavar="speed=20,mass=95", help="coordinates near it"
    )
    _add_json(parser)


def _add_drift(commands: Any) -> None:
    parser = _add(commands, "drift", _drift, "compare two runs of a ledger point by point")
    parser.add_argument("ledger", type=Path, metavar="LEDGER", help="the ledger")
    parser.add_argument(
        "--from",
        required=True,
        dest="before",
        metavar="REV_OR_RUN",
        help="the earlier: a revision (its newest run) or a run",
    )
    parser.add_argument(
        "--to", required=True, dest="after", metavar="REV_OR_RUN", help="the later, likewise"
    )
    parser.add_argument(
        "--tolerance",
        type=_share,
        metavar="SHARE",
        help="share of each coordinate's range within which coordinates are the same "
        "(default 1e-9)",
    )
    _add_worst(parser)
    _add_json(parser)


def _add_trend(commands: Any) -> None:
    parser = _add(commands, "trend", _trend, "show how the revisions of a ledger compare")
    parser.add_argument("ledger", type=Path, metavar="LEDGER", help="the ledger")


def _add_run(commands: Any) -> None:
    parser = _add(commands, "run", _run, "run a pipeline: ingest, audit and compare revisions")
    parser.add_argument("pipeline", type=Path, metavar="PIPELINE.toml", help="the pipeline file")
    _add_worst(parser)


def _add_worst(parser: Any) -> None:
    parser.add_argument(
        "--worst",
        type=_natural,
        metavar="N",
        help="points to list (default: as many as leave a screen room for the rest)",
    )


def _add_json(parser: Any) -> None:
    parser.add_argument(
        "--json", metavar="FILE", help="write the findings as JSON; - prints them and nothing else"
    )


def _coordinates(text: str) -> dict[str, float]:
    found = {}
    for pair in text.split(","):
        name, equals, number = pair.partition("=")
        try:
            value = float(number)
        except ValueError:
            value = float("nan")
        if not (name.strip() and equals and abs(value) < float("inf")):
            raise argparse.ArgumentTypeError(f"{pair!r} is not NAME=NUMBER")
        found[name.strip()] = value
    return found


def _natural(text: str) -> int:
    value = int(text) if text.isdecimal() else -1
    if value < 0:
        raise argparse.ArgumentTypeError(f"{text!r} is not a whole number from 0")
    return value


def _positive(text: str) -> int:
    if _natural(text) == 0:
        raise argparse.ArgumentTypeError("0 is too few")
    return int(text)


def _share(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = -1.0
    if not 0 <= value < 1:
        raise argparse.ArgumentTypeError(f"{text!r} is not a share from 0 to 1")
    return value


def _look(options: argparse.Namespace) -> int:
    from ssaudit.intake.look import look
    from ssaudit.report.look_text import look_text

    if options.draft is not None and options.draft.resolve() == options.path.resolve():
        raise SsauditError("is an input and an output", where=str(options.draft),
                           do="choose another output")  # fmt: skip
    found = look(options.path)
    if options.draft is not None:
        _write(found.draft, str(options.draft))
    _show(look_text(found, draft=options.draft is None))
    return OK


def _ingest(options: argparse.Namespace) -> int:
    from ssaudit.intake.ingest import ingest
    from ssaudit.report.intake_text import intake_text

    with _progress() as progress:
        intake = ingest(
            options.sources,
            revision=options.revision,
            bank=options.bank,
            layout=options.layout,
            progress=progress,
        )
    _show(intake_text(intake))
    return OK


def _audit(options: argparse.Namespace) -> int:
    from ssaudit.bank_file import read_bank
    from ssaudit.criteria import read_criteria
    from ssaudit.loop.files import files_of_loop, read_loop
    from ssaudit.stages import stream_audit

    loop, criteria = read_loop(options.loop), read_criteria(options.criteria)
    inputs = (options.bank, options.criteria, *files_of_loop(options.loop))
    _check_outputs(inputs, options.json, options.csv)
    with read_bank(options.bank) as bank, _progress() as progress:
        report = stream_audit(
            bank,
            loop,
            criteria,
            ledger=options.ledger,
            csv=options.csv,
            depth=options.depth,
            real_radius=options.real_radius,
            prove=options.prove,
            worst=options.worst,
            workers=options.workers,
            progress=progress,
        )
    if options.json is not None:
        from ssaudit.report.records import as_json, audit_record

        _write_json(as_json(audit_record(report)), options.json)
    if options.json != "-":
        from ssaudit.report.audit_text import audit_text

        _show(audit_text(report))
    return OK if report.summary.all_ok else NOT_OK


def _point(options: argparse.Namespace) -> int:
    from ssaudit.bank_file import read_bank
    from ssaudit.criteria import read_criteria
    from ssaudit.loop.files import files_of_loop, read_loop
    from ssaudit.point import explain_point

    loop = read_loop(options.loop)
    criteria = read_criteria(options.criteria) if options.criteria else None
    stated = (options.criteria,) if options.criteria else ()
    _check_outputs((options.bank, *stated, *files_of_loop(options.loop)), options.json)
    with read_bank(options.bank) as bank:
        report = explain_point(bank, loop, id=options.id, near=options.near, criteria=criteria)
    if options.json is not None:
        from ssaudit.report.records import as_json, point_record

        _write_json(as_json(point_record(report)), options.json)
    if options.json != "-":
        from ssaudit.report.point_text import point_text

        _show(point_text(report))
    return OK if report.row["verdict"] == "ok" else NOT_OK


def _drift(options: argparse.Namespace) -> int:
    from ssaudit.drifting import TOLERANCE
    from ssaudit.stages import compare_runs

    tolerance = TOLERANCE if options.tolerance is None else options.tolerance
    found = compare_runs(options.ledger, options.before, options.after, tolerance=tolerance)
    _check_outputs([*found.before.path.iterdir(), *found.after.path.iterdir()], options.json)
    if options.json is not None:
        from ssaudit.report.records import as_json, drift_record

        record = drift_record(found.before, found.after, found.drift, options.worst)
        _write_json(as_json(record), options.json)
    if options.json != "-":
        from ssaudit.report.drift_text import drift_text

        _show(drift_text(found, options.worst))
    return NOT_OK if found.drift.got_worse else OK


def _trend(options: argparse.Namespace) -> int:
    from ssaudit.ledger import newest_of_revisions, read_ledger
    from ssaudit.report.drift_text import trend_text

    runs = newest_of_revisions(read_ledger(options.ledger))
    if not runs:
        raise SsauditError("holds no run", where=str(options.ledger), do="ssaudit audit --ledger")
    _show(trend_text(runs))
    return OK


def _run(options: argparse.Namespace) -> int:
    from ssaudit.ledger import newest_of_revisions, read_ledger
    from ssaudit.pipeline import read_pipeline, run_pipeline
    from ssaudit.report.drift_text import trend_text
    from ssaudit.report.pipeline_text import all_ok, stage_text

    pipeline = read_pipeline(options.pipeline)
    code = OK
    with _progress() as progress:
        for result in run_pipeline(options.pipeline, worst=options.worst, progress=progress):
            _show(stage_text(result, options.worst))
            code = code if all_ok(result) else NOT_OK
    if len(pipeline.revisions) > 1:
        _show(trend_text(newest_of_revisions(read_ledger(pipeline.ledger))))
    return code


def _check_outputs(inputs: Sequence[Path], *outputs: str | Path | None) -> None:
    """Refuse outputs that cannot be written or would overwrite, before there is work to lose."""
    # os.path answers where Path would raise: at names that are too long, at links in a circle.
    taken = {os.path.realpath(path): "is an input and an output" for path in inputs}
    for output in outputs:
        if output in (None, "-"):
            continue
        path = os.path.realpath(str(output))
        problem = taken.get(path, "")
        if os.path.isdir(path):
            problem = "is a folder"
        elif not os.path.isdir(os.path.dirname(path)):
            problem = "lies in no folder that there is"
        if problem:
            raise SsauditError(problem, where=str(output), do="choose another output")
        taken[path] = "is to hold two outputs"


def _write_json(text: str, target: str) -> None:
    if target == "-":
        _print(text + "\n")
    else:
        _write(text + "\n", target)


def _write(text: str, target: str) -> None:
    """Write a small text file, whole or not at all."""
    path = Path(target)
    temporary = path.with_name(f".writing-{path.name}-{os.getpid()}")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        temporary.write_text(text, encoding="utf-8")
        os.replace(temporary, path)
    except OSError as error:
        with suppress(OSError):
            temporary.unlink(missing_ok=True)
        raise SsauditError(f"cannot be written ({error.strerror})", where=target,
                           do="choose another place") from error  # fmt: skip


def _show(renderable: "RenderableType") -> None:
    from rich.console import Console

    screen = io.StringIO()
    console = Console(
        file=screen,
        force_terminal=True if sys.stdout is not None and sys.stdout.isatty() else None,
        width=shutil.get_terminal_size((WIDTH, 0)).columns,
        highlight=False,
        markup=False,
        emoji=False,
    )
    console.print(renderable, crop=False)
    console.print()
    _print(screen.getvalue())


def _print(text: str) -> None:
    """Write to standard output at once, so that what fails fails here and not at exit."""
    if sys.stdout is None:
        raise SsauditError("is closed", where="standard output", do="open it, or use --json FILE")
    encoding = sys.stdout.encoding or "utf-8"
    try:
        sys.stdout.write(text.encode(encoding, "replace").decode(encoding))
        sys.stdout.flush()
    except OSError as error:
        # What is left in the buffer would fail again at exit.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        if isinstance(error, BrokenPipeError):
            raise
        raise SsauditError(f"cannot be written ({error.strerror})", where="standard output",
                           do="write it elsewhere") from error  # fmt: skip


@contextmanager
def _progress() -> Iterator["Progress"]:
    """Show progress on stderr, and none where nobody watches."""
    from ssaudit.progress import no_progress

    if sys.stderr is None or not sys.stderr.isatty():
        yield no_progress
        return
    from rich.console import Console
    from rich.progress import Progress, TaskID

    with Progress(console=Console(stderr=True), transient=True) as bar:
        tasks: dict[str, TaskID] = {}

        def show(stage: str, done: int, total: int) -> None:
            if stage not in tasks or done == 0:
                tasks[stage] = bar.add_task(stage, total=total)
            bar.update(tasks[stage], completed=done, total=total)

        yield show


if __name__ == "__main__":
    sys.exit(main())
