"""Read CSV tables with a header line, a block at a time; every cell is kept as text."""

import csv
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from ssaudit.errors import SourceError
from ssaudit.intake.guard import damage_reported
from ssaudit.intake.layout import Layout
from ssaudit.intake.table import Cells

# Bytes that are parsed at a time; no row may be longer.
BLOCK_BYTES = 8_000_000
LONGEST_HEADER = 4_000_000
SEPARATORS = (",", ";", "\t", "|")


@dataclass(frozen=True, eq=False)
class CsvTable:
    """A CSV file with a header.

    Attributes
    ----------
    path : Path
        The file.
    columns : list of str
        Names of its columns.
    separator, decimal : str
        What stands between cells, and for the decimal point.
    skip_lines : int
        Lines above the header.
    """

    path: Path
    columns: list[str]
    separator: str
    decimal: str
    skip_lines: int

    @property
    def where(self) -> str:
        """The file, for messages."""
        return str(self.path)

    def blocks(self, wanted: Sequence[str]) -> Iterator[dict[str, Cells]]:
        """Read blocks of rows of some columns.

        Raises
        ------
        SourceError
            When a row has another number of cells than the header, or is no UTF-8.
        """
        import pyarrow
        import pyarrow.csv

        with damage_reported(self.path):
            if not _has_rows(self.path, self.skip_lines):
                raise SourceError("holds no rows below its header", where=self.where)
            reader = pyarrow.csv.open_csv(
                self.path,
                read_options=pyarrow.csv.ReadOptions(
                    use_threads=False,
                    block_size=BLOCK_BYTES,
                    column_names=self.columns,
                    skip_rows=self.skip_lines + 1,
                ),
                parse_options=pyarrow.csv.ParseOptions(delimiter=self.separator),
                convert_options=pyarrow.csv.ConvertOptions(
                    column_types=dict.fromkeys(self.columns, pyarrow.string()),
                    include_columns=list(wanted),
                    strings_can_be_null=False,
                ),
            )
        with reader:
            while True:
                with damage_reported(self.path):
                    block = _next(reader)
                if block is None:
                    return
                yield {name: Cells(block.column(name), self.decimal) for name in wanted}


def _next(reader: Any) -> Any:
    try:
        return reader.read_next_batch()
    except StopIteration:
        return None


def _has_rows(path: Path, skip_lines: int) -> bool:
    """Whether anything stands below the header; the parser takes its absence for damage."""
    with open(path, "rb") as stream:
        for _ in range(skip_lines + 1):
            stream.readline(LONGEST_HEADER)
        return bool(stream.read(1))


def open_csv(path: Path, layout: Layout) -> CsvTable:
    """Read the header of a CSV table.

    Parameters
    ----------
    path : Path
        The file.
    layout : Layout
        Its separator (found by inspection when absent), decimal point and lines to skip.

    Returns
    -------
    CsvTable

    Raises
    ------
    SourceError
        When there is no header, or it names a column twice.
    """
    line = read_header(path, layout.skip_lines)
    separator = layout.separator or find_separator(line)
    try:
        columns = [name.strip() for name in next(csv.reader([line], delimiter=separator))]
    except (csv.Error, StopIteration) as error:
        raise SourceError("has no header that can be read", where=str(path)) from error
    for name in columns:
        if not name or columns.count(name) > 1:
            what = f"the header names {name!r} twice" if name else "a column has no name"
            if name or not _is_index(columns):
                raise SourceError(what, where=str(path), do="name every column once")
    names = [name or "row" for name in columns]
    decimal = "," if layout.decimal == "," else layout.decimal
    if decimal == separator:
        raise SourceError(f"{decimal!r} parts cells and decimals", where=str(path))
    return CsvTable(path, names, separator, decimal, layout.skip_lines)


def _is_index(columns: list[str]) -> bool:
    """Whether only the first column lacks a name, as that of row numbers often does."""
    return columns[0] == "" and columns.count("") == 1 and "row" not in columns


def read_header(path: Path, skip_lines: int) -> str:
    """Line with the names of the columns.

    Raises
    ------
    SourceError
        When there is none, or it is no UTF-8.
    """
    with damage_reported(path), open(path, "rb") as stream:
        for _ in range(skip_lines):
            stream.readline(LONGEST_HEADER)
        line = stream.readline(LONGEST_HEADER)
    try:
        text = line.decode("utf-8-sig").rstrip("\r\n")
    except UnicodeDecodeError as error:
        raise SourceError("is not UTF-8 text", where=str(path)) from error
    if not text.strip() or "\0" in text or len(line) >= LONGEST_HEADER:
        raise SourceError("has no header line", where=str(path), do="name the columns in it")
    return text


def find_separator(line: str) -> str:
    """Find what parts the cells of a header: what parts it into most names.

    Examples
    --------
    >>> find_separator('"A[1,1]";"A[1,2]";speed')
    ';'
    """

    def parts(separator: str) -> int:
        try:
            return len(next(csv.reader([line], delimiter=separator)))
        except (csv.Error, StopIteration):
            return 0

    return max(SEPARATORS, key=parts)
