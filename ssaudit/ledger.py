"""The ledger: the Parquet log of all runs, one folder a run, read back."""

import json
import os
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ssaudit.errors import LedgerError
from ssaudit.settings import nearest

if TYPE_CHECKING:
    import pandas as pd

SCHEMA = 1
FOLDER = "run="
# What the commands read of a run.json, besides the counts of verdicts.
ENTRIES = ("run", "revision", "digest", "ids_given", "units", "max_real", "min_damping")
COUNTS = ("total", "ok", "short", "lost", "doubt", "void")
# What the commands read of the tables.
COLUMNS = {
    "points": ("point", "verdict", "reason", "max_real", "min_damping"),
    "modes": ("point", "real", "imag"),
}


@dataclass(frozen=True)
class LoggedRun:
    """One run in a ledger.

    Attributes
    ----------
    path : Path
        Its folder.
    about : dict
        Content of its ``run.json``.
    """

    path: Path
    about: Mapping[str, Any]

    @property
    def run(self) -> str:
        """Name of the run: UTC time and digest."""
        return str(self.about["run"])

    @property
    def revision(self) -> str:
        """Name of the model revision."""
        return str(self.about["revision"])

    @property
    def ids_given(self) -> bool:
        """Whether the export named its points."""
        return bool(self.about["ids_given"])

    @cached_property
    def points(self) -> "pd.DataFrame":
        """The points table."""
        return self._read("points")

    @cached_property
    def modes(self) -> "pd.DataFrame":
        """The modes table."""
        return self._read("modes")

    @cached_property
    def loops(self) -> "pd.DataFrame":
        """The loops table of a run at depth margins."""
        return self._read("loops")

    def _read(self, name: str) -> "pd.DataFrame":
        import pyarrow.parquet as pq

        path = self.path / f"{name}.parquet"
        try:
            table = pq.ParquetFile(path).read()
        except (OSError, ValueError) as error:
            raise LedgerError(f"cannot be read ({error})", where=str(path)) from error
        for column in COLUMNS[name]:
            if column not in table.column_names:
                raise LedgerError(f"is damaged: column {column} is missing", where=str(path))
        frame: pd.DataFrame = table.to_pandas()
        return frame


def read_ledger(ledger: str | os.PathLike[str]) -> list[LoggedRun]:
    """List the runs of a ledger, the oldest first.

    Parameters
    ----------
    ledger : path
        The ledger's folder.

    Returns
    -------
    list of LoggedRun
        Their tables are read when they are asked for.

    Raises
    ------
    LedgerError
        When there is no such folder, or a run in it is damaged.
    """
    folder = Path(ledger)
    if not os.path.isdir(folder):
        raise LedgerError(
            "there is no such ledger", where=str(folder), do="log a run: ssaudit audit --ledger"
        )
    runs = [_read_run(path) for path in sorted(folder.glob(f"{FOLDER}*")) if path.is_dir()]
    return sorted(runs, key=lambda run: run.run)


def _read_run(path: Path) -> LoggedRun:
    where = str(path / "run.json")
    try:
        about = json.loads((path / "run.json").read_text(encoding="utf-8"))
        schema = about["schema"]
        complete = set(ENTRIES) <= set(about) and set(COUNTS) <= set(about["counts"])
    except (OSError, ValueError, RecursionError) as error:
        raise LedgerError(f"cannot be read ({error})", where=where) from error
    except (KeyError, TypeError) as error:
        raise LedgerError("is damaged: entries are missing", where=where) from error
    if schema != SCHEMA:
        raise LedgerError(f"has schema {schema}, this version reads {SCHEMA}", where=where)
    if not complete:
        raise LedgerError("is damaged: entries are missing", where=where)
    return LoggedRun(path, about)


def find_run(ledger: str | os.PathLike[str], name: str) -> LoggedRun:
    """Find a run by its name, or the newest run of a revision.

    Parameters
    ----------
    ledger : path
        The ledger's folder.
    name : str
        A revision or a run.

    Returns
    -------
    LoggedRun

    Raises
    ------
    LedgerError
        Naming what there is.
    """
    runs = read_ledger(ledger)
    wanted = name.removeprefix(FOLDER)
    found = [run for run in runs if wanted in (run.run, run.revision)]
    if not found:
        valid = dict.fromkeys(run.revision for run in runs)
        raise LedgerError(
            f"no run and no revision is named {name!r}", where=str(ledger), do=nearest(name, valid)
        )
    return found[-1]


def find_logged(ledger: str | os.PathLike[str], digest: str) -> LoggedRun | None:
    """Find the run with a digest, if the ledger has it."""
    if not os.path.isdir(ledger):
        return None
    paths = sorted(Path(ledger).glob(f"{FOLDER}*-{digest}"))
    return _read_run(paths[0]) if paths else None


def newest_of_revisions(runs: list[LoggedRun]) -> list[LoggedRun]:
    """Keep the newest run of each revision, in the order in which the revisions first came.

    Parameters
    ----------
    runs : list of LoggedRun
        The oldest first, as from `read_ledger`.

    Returns
    -------
    list of LoggedRun
    """
    newest = {run.revision: run for run in runs}
    return list(newest.values())
