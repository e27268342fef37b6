"""The ledger: the Parquet log of all runs, one folder a run, each written whole or not at all."""

import contextlib
import datetime
import fcntl
import hashlib
import json
import os
import shutil
import tempfile
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ssaudit import __version__
from ssaudit.arrow import arrow_array
from ssaudit.bank import ModelBank
from ssaudit.chunk import Part
from ssaudit.columns import concatenated
from ssaudit.criteria import POINT_QUANTITIES, Criteria
from ssaudit.errors import LedgerError
from ssaudit.loop.model import Loop
from ssaudit.settings import nearest
from ssaudit.summary import Summary

if TYPE_CHECKING:
    import pandas as pd

SCHEMA = 1
FOLDER = "run="
DIGEST_LENGTH = 12
# Points whose rows wait to be written as one Parquet row group.
GROUP_POINTS = 32_768
# What the commands read of a run.json, besides the counts of verdicts.
ENTRIES = ("run", "revision", "digest", "ids_given", "units", "max_real", "min_damping")
COUNTS = ("total", "ok", "short", "lost", "doubt", "void")
# What the commands read of the tables.
COLUMNS = {
    "points": ("point", "verdict", "reason", "max_real", "min_damping"),
    "modes": ("point", "real", "imag"),
}
UNITS = {
    **{name: unit for name, unit in POINT_QUANTITIES.items() if unit},
    **{f"{name}_frequency": "rad/s" for name in POINT_QUANTITIES},
    "max_real": "1/s",
    "real": "1/s",
    "imag": "1/s",
    "radius": "1/s",
    "natural_frequency": "rad/s",
    "time_constant": "s",
    "gain_margin_low_db": "dB",
    "gain_margin_high_db": "dB",
}


def run_digest(bank: ModelBank, loop: Loop, criteria: Criteria, settings: Mapping[str, str]) -> str:
    """Digest of everything that a run's numbers follow from.

    Parameters
    ----------
    bank, loop, criteria
        As audited.
    settings : dict of str
        Depth, and which points are proved.

    Returns
    -------
    str
        The same for the same content, wherever the files lie; other with another version.
    """
    inputs: dict[str, Any] = {**input_digests(bank, loop, criteria), "settings": dict(settings)}
    inputs["version"] = __version__
    return _digest(inputs)[:DIGEST_LENGTH]


def input_digests(bank: ModelBank, loop: Loop, criteria: Criteria) -> dict[str, str]:
    """Digests of bank, loop and criteria."""
    return {
        "bank": bank.digest,
        "loop": _digest(loop.description),
        "criteria": _digest(criteria.description),
    }


def _digest(content: Any) -> str:
    return hashlib.sha256(json.dumps(content, sort_keys=True).encode()).hexdigest()


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


class RunWriter:
    """Writes one run chunk by chunk; it appears in the ledger only when it is committed.

    Use it in a ``with`` statement: leaving it without `commit` leaves nothing behind.

    Parameters
    ----------
    ledger : path
        The ledger's folder; made when it is missing.
    digest : str
        Digest of the run, from `run_digest`.
    units : dict of str
        Units of the coordinates.

    Raises
    ------
    LedgerError
        When the folder cannot be written to.
    """

    def __init__(
        self, ledger: str | os.PathLike[str], digest: str, units: Mapping[str, str]
    ) -> None:
        self._ledger = Path(ledger)
        self._digest = digest
        self._units = UNITS | {f"at_{name}": unit for name, unit in units.items()}
        self._files: dict[str, Any] = {}
        self._waiting: list[Part] = []
        self._made: list[Path] = []
        try:
            for folder in reversed([self._ledger, *self._ledger.parents]):
                if not folder.exists():
                    folder.mkdir()
                    self._made.append(folder)
            self._folder = Path(tempfile.mkdtemp(prefix=".writing-", dir=self._ledger))
        except (OSError, ValueError) as error:
            self._remove_made()
            raise _unwritable(self._ledger, error) from error

    def __enter__(self) -> "RunWriter":
        return self

    def __exit__(self, *_: object) -> None:
        for file in self._files.values():
            with contextlib.suppress(OSError, ValueError):
                file.close()
        shutil.rmtree(self._folder, ignore_errors=True)
        self._remove_made()

    def _remove_made(self) -> None:
        # Fails, as it should, when the ledger holds a run by now.
        with contextlib.suppress(OSError):
            for folder in reversed(self._made):
                folder.rmdir()

    def append(self, part: Part) -> None:
        """Add the points and modes of a chunk."""
        self._waiting.append(part)
        if sum(len(waiting.values) for waiting in self._waiting) >= GROUP_POINTS:
            self._flush()

    def _flush(self) -> None:
        if not self._waiting:
            return
        parts, self._waiting = self._waiting, []
        points = concatenated([part.points for part in parts])
        self._write("points", points)
        starts = np.cumsum([0, *(len(part.values) for part in parts[:-1])])
        for name in ("modes", "loops"):
            tables = [
                {**table, "row": table["row"] + start}
                for part, start in zip(parts, starts, strict=True)
                if (table := getattr(part, name))
            ]
            if tables:
                columns = concatenated(tables)
                row = columns.pop("row")
                of_point = {key: (row, points[key]) for key in ("point", "revision")}
                self._write(name, {**of_point, **columns})

    def _write(self, name: str, columns: Mapping[str, Any]) -> None:
        import pyarrow as pa
        import pyarrow.parquet as pq

        arrays = [_arrow(column) for column in columns.values()]
        fields = [
            pa.field(
                key, array.type, metadata={"unit": self._units[key]} if key in self._units else None
            )
            for key, array in zip(columns, arrays, strict=True)
        ]
        batch = pa.Table.from_arrays(arrays, schema=pa.schema(fields))
        try:
            if name not in self._files:
                words = [f.name for f in batch.schema if pa.types.is_string(f.type)]
                self._files[name] = pq.ParquetWriter(
                    self._folder / f"{name}.parquet",
                    batch.schema,
                    compression="lz4",
                    use_dictionary=words,
                )
            self._files[name].write_table(batch)
        except OSError as error:
            raise _unwritable(self._ledger, error) from error

    def commit(self, about: Mapping[str, Any]) -> LoggedRun:
        """Write what remains and put the run in its place.

        Parameters
        ----------
        about : dict
            Content of ``run.json`` besides schema, run and digest.

        Returns
        -------
        LoggedRun
            The new run, or the same one if another process has logged it meanwhile.

        Raises
        ------
        LedgerError
            When it cannot be written.
        """
        self._flush()
        # To the microsecond, because the newest run of a revision is found by its name.
        now = datetime.datetime.now(datetime.UTC)
        run = f"{now:%Y%m%dT%H%M%S.%fZ}-{self._digest}"
        record = {"schema": SCHEMA, "run": run, "digest": self._digest, **about}
        target = self._ledger / f"{FOLDER}{run}"
        try:
            for file in self._files.values():
                file.close()
            text = json.dumps(record, indent=1, allow_nan=False)
            (self._folder / "run.json").write_text(text, encoding="utf-8")
            for path in [*self._folder.iterdir(), self._folder]:
                _sync(path)
            with _alone(self._ledger):
                logged = find_logged(self._ledger, self._digest)
                if logged is not None:
                    return logged
                os.chmod(self._folder, self._ledger.stat().st_mode & 0o777)
                os.rename(self._folder, target)
                _sync(self._ledger)
        except OSError as error:
            raise _unwritable(self._ledger, error) from error
        return LoggedRun(target, record)


def describe_run(
    bank: ModelBank,
    loop: Loop,
    criteria: Criteria,
    settings: Mapping[str, str],
    summary: Summary,
) -> dict[str, Any]:
    """Content of a run's ``run.json``: what was audited by what, and what came of it.

    Parameters
    ----------
    bank, loop, criteria, settings
        As for `run_digest`.
    summary : Summary
        What came of it.

    Returns
    -------
    dict
        Ready for JSON.
    """
    return {
        "revision": bank.revision,
        "counts": {"total": summary.total, **summary.counts},
        "missed": {missed.name: missed.points for missed in summary.missed},
        "void": dict(summary.void),
        "held": summary.held,
        "max_real": finite(summary.max_real),
        "min_damping": finite(summary.min_damping),
        "digests": input_digests(bank, loop, criteria),
        "versions": _versions(),
        "settings": dict(settings),
        "proofs": dict(summary.proofs),
        "ids_given": bank.ids_given,
        "units": dict(bank.points.units),
        "sources": [vars(source) for source in bank.sources],
        "sections": [{**section.description, "points": len(section)} for section in bank.sections],
        "loop": loop.description,
        "criteria": criteria.description,
    }


def _versions() -> dict[str, str]:
    import platform

    import pyarrow

    return {
        "ssaudit": __version__,
        "python": platform.python_version(),
        "numpy": np.__version__,
        "pyarrow": pyarrow.__version__,
    }


def finite(value: Any) -> Any:
    """Return a number for JSON, which has neither infinity nor NaN: null in their place."""
    number = float(value)
    return number if np.isfinite(number) else None


def _arrow(column: Any) -> Any:
    """One column for Arrow; a pair is words, and which of them each row has."""
    if isinstance(column, tuple):
        row, words = column
        return arrow_array(words).take(arrow_array(row))
    return arrow_array(column)


@contextlib.contextmanager
def _alone(folder: Path) -> Iterator[None]:
    """Keep other writers waiting, so that none logs the same run between a look and a rename."""
    handle = os.open(folder, os.O_RDONLY)
    try:
        # Some network file systems have no locks; there the moment between the two remains.
        with contextlib.suppress(OSError):
            fcntl.flock(handle, fcntl.LOCK_EX)
        yield
    finally:
        os.close(handle)


def _sync(path: Path) -> None:
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def _unwritable(ledger: Path, error: OSError | ValueError) -> LedgerError:
    return LedgerError(
        f"cannot be written to ({getattr(error, 'strerror', None) or error})",
        where=str(ledger),
        do="choose another folder",
    )


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
