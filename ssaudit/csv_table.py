"""Tables as CSV files, safe to open in a spreadsheet."""

import contextlib
import os
import tempfile
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from ssaudit.arrow import arrow_array
from ssaudit.errors import SsauditError

# A cell that begins so is run as a formula by spreadsheets.
FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r")


def harmless(text: str) -> str:
    """Text that a spreadsheet shows and does not run.

    Examples
    --------
    >>> harmless("=1+1"), harmless("cruise")
    ("'=1+1", 'cruise')
    """
    return f"'{text}" if text.startswith(FORMULA_STARTS) else text


class CsvWriter:
    """Writes a table chunk by chunk; the file appears under its name when it is committed.

    Parameters
    ----------
    path : path
        Where the file goes.

    Raises
    ------
    SsauditError
        When it cannot be written.
    """

    def __init__(self, path: str | os.PathLike[str]) -> None:
        self._path = Path(path)
        self._writer: Any = None
        try:
            handle, name = tempfile.mkstemp(prefix=".writing-", dir=self._path.parent)
        except OSError as error:
            raise self._unwritable(error) from error
        self._temporary = Path(name)
        self._file = os.fdopen(handle, "wb")

    def __enter__(self) -> "CsvWriter":
        return self

    def __exit__(self, *_: object) -> None:
        with contextlib.suppress(OSError, ValueError):
            self._file.close()
        self._temporary.unlink(missing_ok=True)

    def append(self, columns: Mapping[str, Any]) -> None:
        """Add rows, given column by column."""
        import pyarrow as pa
        from pyarrow import csv

        arrays = {
            harmless(name): arrow_array(
                np.array([harmless(text) for text in column], dtype=object)
                if column.dtype == object
                else column
            )
            for name, column in columns.items()
        }
        table = pa.table(arrays)
        try:
            if self._writer is None:
                self._writer = csv.CSVWriter(self._file, table.schema)
            self._writer.write_table(table)
        except OSError as error:
            raise self._unwritable(error) from error

    def finish(self) -> None:
        """Write what remains: what fails for want of space fails here, before other outputs."""
        try:
            if self._writer is not None:
                self._writer.close()
            self._file.close()
        except OSError as error:
            raise self._unwritable(error) from error

    def commit(self) -> None:
        """Put the finished file in its place."""
        try:
            mask = os.umask(0)
            os.umask(mask)
            os.chmod(self._temporary, 0o666 & ~mask)
            os.replace(self._temporary, self._path)
        except OSError as error:
            raise self._unwritable(error) from error

    def _unwritable(self, error: OSError) -> SsauditError:
        return SsauditError(
            f"cannot be written ({error.strerror or error})",
            where=str(self._path),
            do="choose another place",
        )
