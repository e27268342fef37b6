"""Patterns of file, group and column names: text with fields in braces, matched in linear time."""

import re
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Protocol

from ssaudit.errors import SourceError

_FIELD = re.compile(r"\{([A-Za-z_][A-Za-z0-9_]*)(?::([1-9]))?\}|\*")
# Longest pattern that is taken.
LONGEST_PATTERN = 500


class Matcher(Protocol):
    """What finds named fields in a name."""

    @property
    def fields(self) -> tuple[str, ...]:
        """Names of the fields."""
        ...

    @property
    def depth(self) -> int:
        """How many folders or groups the pattern goes down."""
        ...

    def match(self, name: str) -> dict[str, str] | None:
        """Fields of a name, or None when the pattern does not fit it."""
        ...

    def without(self, field: str, values: dict[str, str]) -> str:
        """Write what is left of a name without one of its fields."""
        ...


@dataclass(frozen=True)
class Pattern:
    """Text with fields: ``V{speed}_M{mass}.csv``; ``*`` is a field without a name.

    ``{row:1}`` is a field of that many characters, and may touch the next. Any other field is the
    shortest text, of one character or more and without "/", before the first place at which the
    text that follows the field occurs. Nothing is tried twice, so matching takes a time
    proportional to the name, whatever the pattern and the name are.

    Parameters
    ----------
    text : str
        The pattern.
    where : str
        File and key, for messages.

    Raises
    ------
    SourceError
        When two fields stand side by side, a field occurs twice, or the pattern leads out of the
        folder ("..", "~" or a leading "/").

    Examples
    --------
    >>> Pattern("V{speed}_M{mass}.csv").match("V12.5_M90.csv")
    {'speed': '12.5', 'mass': '90'}
    >>> Pattern("A{row:1}{column:1}").match("A12")
    {'row': '1', 'column': '2'}
    >>> Pattern("V{speed}.csv").match("V12/90.csv") is None
    True
    """

    text: str
    where: str = "pattern"

    def __post_init__(self) -> None:
        parts = self.text.replace("\\", "/").split("/")
        if not self.text or len(self.text) > LONGEST_PATTERN:
            raise SourceError(f"a pattern of {len(self.text)} characters", where=self.where)
        if self.text[0] in "/~" or "\\" in self.text or any(p in ("..", ".", "") for p in parts):
            raise SourceError(
                f"the pattern {self.text!r} leads out of its folder",
                where=self.where,
                do='write it relative to the folder, parted by "/"',
            )
        touching = zip(self._literals[1:-1], self._widths, strict=False)
        if any(not literal and not width for literal, width in touching):
            raise SourceError(f"two fields of {self.text!r} touch", where=self.where)
        twice = [field for field in self.fields if self.fields.count(field) > 1]
        if twice:
            raise SourceError(f"the field {twice[0]!r} occurs twice", where=self.where)
        if re.search(r"[{}]", _FIELD.sub("", self.text)):
            raise SourceError(
                f"a brace of {self.text!r} is no field", where=self.where, do="write {speed}"
            )

    @cached_property
    def _literals(self) -> list[str]:
        return _FIELD.sub("\0", self.text).split("\0")

    @cached_property
    def _names(self) -> list[str]:
        return [field.group(1) or "" for field in _FIELD.finditer(self.text)]

    @cached_property
    def _widths(self) -> list[int]:
        return [int(field.group(2) or 0) for field in _FIELD.finditer(self.text)]

    @property
    def fields(self) -> tuple[str, ...]:
        """Names of the fields, in order."""
        return tuple(name for name in self._names if name)

    @property
    def depth(self) -> int:
        """How many folders or groups the pattern goes down."""
        return self.text.count("/")

    def match(self, name: str) -> dict[str, str] | None:
        """Fields of a name, or None when the pattern does not fit it."""
        first, *others = self._literals
        if not name.startswith(first):
            return None
        if not others:
            return {} if name == first else None
        found, at = {}, len(first)
        for number, (field, literal) in enumerate(zip(self._names, others, strict=True)):
            width = self._widths[number]
            if width:
                end = at + width
                last = number == len(others) - 1
                if not name.startswith(literal, end) or (last and end + len(literal) != len(name)):
                    return None
            elif number == len(others) - 1:
                end = len(name) - len(literal)
                if end <= at or not name.endswith(literal):
                    return None
            else:
                end = name.find(literal, at + 1)
                if end < 0:
                    return None
            if "/" in name[at:end]:
                return None
            if field:
                found[field] = name[at:end]
            at = end + len(literal)
        return found

    def without(self, field: str, values: dict[str, str]) -> str:
        """Write the pattern with values for its fields, one of them left out.

        Examples
        --------
        >>> Pattern("{matrix}_V{speed}.mtx").without("matrix", {"speed": "12"})
        'V12'
        """
        texts = ["" if name == field else values.get(name, "") for name in self._names]
        filled = self._literals[0]
        for text, literal in zip(texts, self._literals[1:], strict=True):
            filled += text + literal
        return _trimmed(filled)


@dataclass(frozen=True)
class RegexPattern:
    r"""A regular expression with named groups, ``V(?P<speed>\d+)\.csv``, for the whole name.

    It is run by RE2 (through pyarrow), an automaton that reads each character once: no expression
    can make it backtrack. Look-around and back-references do not exist there and are refused.

    Parameters
    ----------
    text : str
        The expression.
    where : str
        File and key, for messages.

    Raises
    ------
    SourceError
        When the expression has no named group or cannot be run.

    Examples
    --------
    >>> RegexPattern(r"V(?P<speed>[0-9.]+)\.csv").match("V12.5.csv")
    {'speed': '12.5'}
    """

    text: str
    where: str = "pattern"

    def __post_init__(self) -> None:
        if not self.text or len(self.text) > LONGEST_PATTERN:
            raise SourceError(f"an expression of {len(self.text)} characters", where=self.where)
        if not self.fields:
            raise SourceError(
                "the expression has no named group", where=self.where, do="write (?P<speed>...)"
            )
        if ".." in self.text and "/" in self.text:
            raise SourceError("the expression leads out of its folder", where=self.where)
        self.match("")

    @property
    def fields(self) -> tuple[str, ...]:
        """Names of the groups, in order."""
        return tuple(re.findall(r"\(\?P<([A-Za-z_][A-Za-z0-9_]*)>", self.text))

    @property
    def depth(self) -> int:
        """How many folders the expression goes down."""
        return self.text.count("/")

    def match(self, name: str) -> dict[str, str] | None:
        """Return the groups of a name, or None when the expression does not fit all of it."""
        import pyarrow
        import pyarrow.compute

        try:
            # Groups without a name are not allowed here, so the wrapping one has a name as well.
            found = pyarrow.compute.extract_regex(
                pyarrow.array([name]), f"^(?P<whole_name__>{self.text})$"
            )[0].as_py()
        except (pyarrow.ArrowException, ValueError) as error:
            raise SourceError(
                f"the expression cannot be run ({' '.join(str(error).split())[:120]})",
                where=self.where,
                do="write other groups as (?:...), without look-around or back-references",
            ) from error
        if found is None or found["whole_name__"] != name:
            return None
        return {field: found[field] for field in self.fields}

    def without(self, field: str, values: dict[str, str]) -> str:
        """Values of the fields but one, joined."""
        return "_".join(f"{name}{text}" for name, text in values.items() if name != field)


def _trimmed(name: str) -> str:
    stem = name.rsplit(".", 1)[0] if re.search(r"\.[A-Za-z][A-Za-z0-9]*$", name) else name
    return re.sub(r"([_\-. /])[_\-. /]+", r"\1", stem).strip("_-. /")


@dataclass(frozen=True)
class EntryNames:
    """Names of matrix entries found by a pattern such as ``A[{row},{column}]``.

    Attributes
    ----------
    rows, columns : tuple of str
        Labels of rows and columns in their order.
    names : dict
        Full name by (row, column) label.
    """

    rows: tuple[str, ...]
    columns: tuple[str, ...]
    names: dict[tuple[str, str], str]

    @property
    def numbered(self) -> bool:
        """Whether rows and columns are numbers, not names of states and signals."""
        return all(label.isascii() and label.isdigit() for label in (*self.rows, *self.columns))


def find_entries(names: Sequence[str], pattern: Pattern) -> EntryNames:
    """Match names of matrix entries, and put their labels in order.

    Numbers go from least to greatest, names by first appearance.

    Examples
    --------
    >>> find_entries(["A[1,1]", "A[1,2]", "speed"], Pattern("A[{row},{column}]")).columns
    ('1', '2')
    """
    found: dict[tuple[str, str], str] = {}
    for name in names:
        fields = pattern.match(name)
        if fields is not None:
            found[fields.get("row", "1"), fields.get("column", "1")] = name
    rows = in_order(dict.fromkeys(row for row, _ in found))
    columns = in_order(dict.fromkeys(column for _, column in found))
    return EntryNames(rows, columns, found)


def in_order(labels: Sequence[str] | dict[str, None]) -> tuple[str, ...]:
    """Labels of rows or columns: numbers by size, names as they came."""
    if all(label.isascii() and label.isdigit() and len(label) < 10 for label in labels):
        return tuple(sorted(labels, key=int))
    return tuple(labels)
