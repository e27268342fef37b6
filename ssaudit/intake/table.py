"""What CSV and Parquet have in common: named columns, read a block of rows at a time."""

import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import Strings
from ssaudit.errors import SourceError
from ssaudit.intake.container import NARROW_DIGITS
from ssaudit.intake.guard import as_words
from ssaudit.intake.piece import parse_number

# Entries of a text file whose digits are counted; exporters write all entries alike.
INSPECTED = 200_000
_NUMBER = re.compile(r"[+-]?0*(\d*)\.?(\d*)(?:[eEdD][+-]?\d+)?")


class Table(Protocol):
    """An open table."""

    @property
    def where(self) -> str:
        """The file, for messages."""
        ...

    @property
    def columns(self) -> list[str]:
        """Names of its columns."""
        ...

    def blocks(self, wanted: Sequence[str]) -> Iterator[dict[str, "Cells"]]:
        """Blocks of rows of some columns."""
        ...


@dataclass(frozen=True, eq=False)
class Cells:
    """A block of one column.

    Attributes
    ----------
    values : pyarrow array
        Text or numbers.
    decimal : str
        What stands for the decimal point in text.
    """

    values: Any
    decimal: str = "."

    def __len__(self) -> int:
        return len(self.values)

    @property
    def is_text(self) -> bool:
        """Whether the cells hold text."""
        import pyarrow

        kind = self.values.type
        return bool(pyarrow.types.is_string(kind) or pyarrow.types.is_large_string(kind))

    @property
    def is_list(self) -> bool:
        """Whether each cell holds a list."""
        import pyarrow

        kind = self.values.type
        return bool(
            pyarrow.types.is_list(kind)
            or pyarrow.types.is_large_list(kind)
            or pyarrow.types.is_fixed_size_list(kind)
        )

    def numbers(self) -> tuple[NDArray[np.float64], dict[int, str]]:
        """Cells as numbers, and what is wrong with those that are none, by row.

        Raises
        ------
        SourceError
            When the column can hold no real numbers at all.
        """
        import pyarrow
        import pyarrow.compute

        if self.is_text:
            return self._parsed()
        kind = self.values.type
        types = pyarrow.types
        if not (types.is_integer(kind) or types.is_floating(kind) or types.is_null(kind)):
            raise SourceError(f"holds {kind}, not real numbers")
        found = pyarrow.compute.cast(self.values, pyarrow.float64(), safe=False)
        missing = np.flatnonzero(self.values.is_null().to_numpy(zero_copy_only=False))
        values = found.to_numpy(zero_copy_only=False)
        return values, dict.fromkeys(missing.tolist(), "is missing")

    def _parsed(self) -> tuple[NDArray[np.float64], dict[int, str]]:
        import pyarrow
        import pyarrow.compute

        texts = self.values
        if self.decimal != ".":
            texts = pyarrow.compute.replace_substring(texts, self.decimal, ".")
        try:
            found = pyarrow.compute.cast(texts, pyarrow.float64())
            if not found.null_count:
                return found.to_numpy(zero_copy_only=False), {}
        except pyarrow.ArrowInvalid:
            pass
        words = texts.to_pylist()
        values = np.array([np.nan if w is None else parse_number(w) for w in words])
        wrong = {}
        for row in np.flatnonzero(np.isnan(values)).tolist():
            text = (words[row] or "").strip()
            if text.lower().lstrip("+-") != "nan":
                wrong[row] = f"is {text[:40]!r}, not a number" if text else "is missing"
        return values, wrong

    def words(self, where: str, what: str) -> Strings:
        """Cells as text; "" for empty ones."""
        cells = self.values.to_pylist()
        return as_words(
            np.array(["" if cell is None else cell for cell in cells], dtype=object), where, what
        )

    def coded(self, where: str, what: str) -> tuple[Strings, NDArray[np.int64]]:
        """Cells as text: the distinct words, by first appearance, and the word of each cell."""
        import pyarrow
        import pyarrow.compute

        coded = pyarrow.compute.dictionary_encode(self.values, null_encoding="encode")
        words = Cells(coded.dictionary).words(where, what)
        places = coded.indices.to_numpy(zero_copy_only=False).astype(np.int64)
        return words, places

    def digits(self, most: int) -> tuple[int | None, int]:
        """Most significant digits in the first cells, and how many cells were looked at.

        Numbers in a narrow type have those of the type, and need no looking at.
        """
        if not self.is_text:
            import pyarrow

            kind = self.values.type.value_type if self.is_list else self.values.type
            narrow = pyarrow.types.is_float32(kind) or pyarrow.types.is_float16(kind)
            return (NARROW_DIGITS[kind.bit_width // 8] if narrow else None), 0
        texts = self.values.slice(0, most).to_pylist()
        return most_digits(texts, self.decimal), len(texts)

    def lists(self) -> list[Any]:
        """Cells as nested lists of numbers."""
        found: list[Any] = self.values.to_pylist()
        return found


def significant_digits(text: str) -> int | None:
    """Count the significant digits that a number was written with.

    Whole numbers without a point or an exponent may be exact, and zero has no digits: None.

    Examples
    --------
    >>> [significant_digits(text) for text in ("-0.01250", "1.50e-07", "3", "0.0", "x")]
    [4, 3, None, None, None]
    """
    match = _NUMBER.fullmatch(text.strip())
    if match is None or text.strip().lstrip("+-").isdigit():
        return None
    digits = (match.group(1) + match.group(2)).lstrip("0")
    return len(digits) or None


def most_digits(texts: Sequence[str | None], decimal: str = ".") -> int | None:
    """Most significant digits that any of some numbers was written with.

    Examples
    --------
    >>> most_digits(["0.5", "0.333", "1"])
    3
    """
    found = [
        significant_digits(text if decimal == "." else text.replace(decimal, "."))
        for text in texts
        if text
    ]
    return max((digits for digits in found if digits is not None), default=None)


class DigitCounter:
    """Keeps the most digits seen, and stops looking after `INSPECTED` entries."""

    def __init__(self) -> None:
        self.most: int | None = None
        self._left = INSPECTED

    def look_at(self, cells: Cells, columns: int) -> None:
        """Count the digits of a block of a column, one of ``columns`` columns."""
        if self._left > 0:
            digits, looked = cells.digits(max(1, min(self._left, INSPECTED // max(1, columns))))
            self._take(digits, looked)

    def look_at_texts(self, texts: Sequence[str | None]) -> None:
        """Count the digits of numbers as text."""
        if self._left > 0:
            self._take(most_digits(texts[: self._left]), len(texts))

    def _take(self, digits: int | None, looked: int) -> None:
        self._left -= looked
        if digits is not None:
            self.most = max(self.most or 0, digits)
