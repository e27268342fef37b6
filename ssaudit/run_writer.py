"""Writing a run into the ledger: whole or not at all, and the same run once."""

import contextlib
import datetime
import json
import os
import shutil
import tempfile
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import numpy as np

from ssaudit.arrow import arrow_array
from ssaudit.chunk import Part
from ssaudit.columns import Words, concatenated
from ssaudit.criteria import POINT_QUANTITIES
from ssaudit.errors import LedgerError
from ssaudit.ledger import FOLDER, SCHEMA, LoggedRun, find_logged

# Points whose rows wait to be written as one Parquet row group.
GROUP_POINTS = 32_768
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
                of_point = {key: Words(row, points[key]) for key in ("point", "revision")}
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


def _arrow(column: Any) -> Any:
    if isinstance(column, Words):
        return arrow_array(column.words).take(arrow_array(column.which))
    return arrow_array(column)


@contextlib.contextmanager
def _alone(folder: Path) -> Iterator[None]:
    """Keep other writers waiting, so that none logs the same run between a look and a rename."""
    try:
        import fcntl
    except ImportError:  # a system without such locks
        yield
        return
    handle = os.open(folder, os.O_RDONLY)
    try:
        # Some network file systems have no locks; there the moment between the two remains.
        with contextlib.suppress(OSError):
            fcntl.flock(handle, fcntl.LOCK_EX)
        yield
    finally:
        os.close(handle)


def _sync(path: Path) -> None:
    """Have the system write a file or folder out; some systems cannot do it for folders."""
    if path.is_dir() and not hasattr(os, "O_DIRECTORY"):
        return
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
