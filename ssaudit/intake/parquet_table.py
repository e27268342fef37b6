"""Read Parquet tables, a block of rows at a time."""

from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from ssaudit.errors import SourceError
from ssaudit.intake.guard import MOST_POINTS, WHOLE_BYTES, damage_reported
from ssaudit.intake.table import Cells

ROWS = 20_000
# Long tables have a row an entry, so more rows than points.
MOST_ROWS = 200 * MOST_POINTS
# Bytes of one unpacked row group, which is read a page at a time.
MOST_UNPACKED = 16 * WHOLE_BYTES
# Smaller files are read whole: a damaged page then cannot claim more memory than the file holds.
# In larger ones, the library may set aside up to 2 GB for such a page before it notices.
SMALL_BYTES = 32_000_000
# Memory that one page may claim; pages hold a megabyte as a rule.
BUFFER_BYTES = 1_000_000


@dataclass(frozen=True, eq=False)
class ParquetTable:
    """An open Parquet file.

    Attributes
    ----------
    file : pyarrow.parquet.ParquetFile
        The file.
    where : str
        Its name, for messages.
    """

    file: Any
    where: str

    @property
    def columns(self) -> list[str]:
        """Names of its columns."""
        return list(self.file.schema_arrow.names)

    def blocks(self, wanted: Sequence[str]) -> Iterator[dict[str, Cells]]:
        """Read blocks of rows of some columns."""
        reader = self.file.iter_batches(batch_size=ROWS, columns=list(wanted), use_threads=False)
        rows = 0
        while True:
            with damage_reported(self.where):
                block = next(reader, None)
                if block is None:
                    break
                plain = {name: _plain(block.column(block.schema.get_field_index(name)))
                         for name in wanted}  # fmt: skip
            rows += block.num_rows
            yield {name: Cells(values) for name, values in plain.items()}
        if rows != self.file.metadata.num_rows:
            claimed = self.file.metadata.num_rows
            raise SourceError(f"claims {claimed} rows and holds {rows}", where=self.where)


def _plain(values: Any) -> Any:
    """Cells that are sound, and not coded by a dictionary."""
    import pyarrow

    values.validate(full=True)
    return values.dictionary_decode() if pyarrow.types.is_dictionary(values.type) else values


@contextmanager
def open_parquet(path: Path) -> Iterator[ParquetTable]:
    """Open a Parquet table.

    Raises
    ------
    SourceError
        When the file is damaged, or claims sizes beyond reason.
    """
    import pyarrow
    import pyarrow.parquet

    with damage_reported(path, "is not Parquet, or is damaged"):
        small = path.stat().st_size <= SMALL_BYTES
        file = pyarrow.parquet.ParquetFile(
            pyarrow.BufferReader(path.read_bytes()) if small else path,
            buffer_size=0 if small else BUFFER_BYTES,
            pre_buffer=False,
        )
    with file:
        with damage_reported(path):
            _check_claims(file, path)
        yield ParquetTable(file, str(path))


def _check_claims(file: Any, path: Path) -> None:
    """Refuse sizes that the file cannot back, and blocks too large to unpack."""
    names = list(file.schema_arrow.names)
    twice = [name for name in names if names.count(name) > 1] if len(names) < 100_000 else []
    if twice:
        raise SourceError(f"names the column {twice[0]!r} twice", where=str(path))
    about = file.metadata
    if not 0 < about.num_rows <= MOST_ROWS:
        raise SourceError(f"claims {about.num_rows} rows", where=str(path))
    # Columns are not asked for their sizes: that alone can end the process on damaged metadata.
    for number in range(about.num_row_groups):
        size = about.row_group(number).total_byte_size
        if not 0 <= size <= MOST_UNPACKED:
            raise SourceError(
                f"is stored in blocks of {size} bytes",
                where=str(path),
                do="write smaller row groups",
            )
