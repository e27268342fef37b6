"""Layout files: where in an export things lie."""

import os
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from ssaudit.bank import MATRIX_NAMES
from ssaudit.errors import SourceError
from ssaudit.intake.pattern import Matcher, Pattern, RegexPattern
from ssaudit.settings import check_keys, nearest, read_toml, take, take_words

FIRST_AXIS, LAST_AXIS, GROUP, FILE = "first axis", "last axis", "group", "file"
ROW, LONG_ROWS = "row", "long rows"
# Ways to count points that a format can have.
FORMATS: dict[str, tuple[str, ...]] = {
    "hdf5": (FIRST_AXIS, LAST_AXIS, GROUP, FILE),
    "npz": (FIRST_AXIS, LAST_AXIS, GROUP, FILE),
    "parquet": (ROW, LONG_ROWS),
    "csv": (ROW, LONG_ROWS, FILE),
    "json-lines": (ROW,),
    "matrix-market": (FILE,),
}
SUFFIXES = {
    "hdf5": (".h5", ".hdf5", ".he5", ".mat"),
    "npz": (".npz",),
    "parquet": (".parquet", ".pq"),
    "csv": (".csv", ".tsv", ".txt", ".dat"),
    "json-lines": (".jsonl", ".ndjson"),
    "matrix-market": (".mtx", ".mm"),
}
ROW_MAJOR, COLUMN_MAJOR = "row-major", "column-major"
KINDS = ("states", "inputs", "outputs")
KEYS = (
    "format", "points", "files", "files_regex", "groups", "order", "absent", "constant", "ids",
    "dt", "digits", "revision", "separator", "decimal", "skip_lines",
    "matrices", "names", "take", "coordinates", "tags", "long",
)  # fmt: skip
COORDINATE_KEYS = ("from", "unit", "scale", "offset", "decimal")
TAG_KEYS = ("from",)
LONG_KEYS = ("point", "matrix", "row", "column", "value")


@dataclass(frozen=True)
class Place:
    """Where one thing lies: in a field of a name, in an attribute, or in data.

    Attributes
    ----------
    text : str
        As the layout says it: ``{speed}``, ``@speed``, ``group/@speed``, or the name of a dataset,
        a column or a key.
    """

    text: str

    @property
    def field(self) -> str | None:
        """Name of the field, where it is one."""
        return self.text[1:-1] if self.text.startswith("{") and self.text.endswith("}") else None

    @property
    def attribute(self) -> tuple[str, str] | None:
        """Group or dataset, and the attribute's name, where it is one."""
        path, at, name = self.text.rpartition("@")
        return (path.rstrip("/"), name) if at and (not path or path.endswith("/")) else None


@dataclass(frozen=True)
class Column:
    """A coordinate or a tag of the points, and where it lies.

    Attributes
    ----------
    name : str
        Its name in the bank.
    place : Place
        Where it lies.
    unit : str or None
        Unit in the bank; None to take the file's.
    scale, offset : float
        Value in the bank = scale x value in the file + offset.
    decimal : str
        What stands for the decimal point in a file name.
    is_tag : bool
        Whether it is a word, not a number.
    """

    name: str
    place: Place
    unit: str | None = None
    scale: float = 1.0
    offset: float = 0.0
    decimal: str = "."
    is_tag: bool = False

    @property
    def converts(self) -> bool:
        """Whether values change on the way."""
        return (self.scale, self.offset) != (1.0, 0.0)


@dataclass(frozen=True)
class Layout:
    """Where in an export things lie. Attributes are the keys of the file; see its README.

    ``columns`` holds coordinates and tags; ``columns_under`` is a prefix under which every array
    is one; ``lenient`` layouts name things that need not be there; matrices need not be there
    either unless they are ``stated``.
    """

    format: str
    points: str
    name: str = "layout"
    files: Matcher | None = None
    groups: Pattern | None = None
    order: str | None = None
    absent: str = "void"
    constant: tuple[str, ...] = ()
    ids: Place | None = None
    dt: float | Place = 0.0
    digits: int | Place | None = None
    revision: str | None = None
    separator: str | None = None
    decimal: str = "."
    skip_lines: int = 0
    matrices: Mapping[str, str] = field(default_factory=lambda: {n: n for n in MATRIX_NAMES})
    names: Mapping[str, tuple[str, ...] | Place] = field(default_factory=dict)
    take: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    columns: tuple[Column, ...] = ()
    columns_under: str | None = None
    long: Mapping[str, Any] = field(default_factory=dict)
    lenient: bool = False
    stated: bool = False

    @property
    def suffixes(self) -> tuple[str, ...]:
        """How files of the format usually end."""
        return SUFFIXES[self.format]


def default_layout(format_: str) -> Layout:
    """Layout of an HDF5 or NPZ export that comes without a layout file.

    Examples
    --------
    >>> default_layout("npz").columns_under
    'at_'
    """
    at = "@" if format_ == "hdf5" else ""
    return Layout(
        format_,
        FIRST_AXIS,
        name="default layout",
        ids=Place("ids"),
        dt=Place(f"{at}dt"),
        digits=Place(f"{at}digits"),
        names={kind: Place(f"{at}{kind}") for kind in KINDS},
        columns_under="points/" if format_ == "hdf5" else "at_",
        lenient=True,
    )


def read_layout(path: str | os.PathLike[str]) -> Layout:
    """Read a layout file.

    Parameters
    ----------
    path : path
        A TOML file; its keys are explained in ``configs/layouts/README.md``.

    Returns
    -------
    Layout

    Raises
    ------
    SourceError
        Naming the file, the key and what is valid.
    """
    return parse_layout(read_toml(path, SourceError), Path(path).name)


def parse_layout(table: Mapping[str, Any], where: str) -> Layout:
    """Check a layout that was read from TOML.

    Parameters
    ----------
    table : dict
        The content.
    where : str
        File name, for messages.

    Returns
    -------
    Layout

    Raises
    ------
    SourceError
    """
    check_keys(table, KEYS, where=where, error=SourceError)
    format_ = _choice(table, "format", tuple(FORMATS), where)
    points = _choice(table, "points", FORMATS[format_], where)
    names, taken = (_words_or_places(table, key, where) for key in ("names", "take"))
    layout = Layout(
        format=format_,
        points=points,
        name=where,
        files=_files(table, where),
        groups=_groups(table, points, where),
        order=_choice(table, "order", (ROW_MAJOR, COLUMN_MAJOR), where, None),
        absent=_choice(table, "absent", ("void", "zero"), where, "void"),
        constant=take_words(table, "constant", where=where, error=SourceError) or (),
        ids=_place(table, "ids", where),
        dt=_number_or_place(table, "dt", where, 0.0),
        digits=_number_or_place(table, "digits", where, None),
        revision=take(table, "revision", str, where=where, error=SourceError),
        separator=_one_character(table, "separator", where, None),
        decimal=_one_character(table, "decimal", where, "."),
        skip_lines=take(table, "skip_lines", int, where=where, error=SourceError, default=0),
        matrices=_matrices(table, where),
        names=names,
        take={kind: words for kind, words in taken.items() if isinstance(words, tuple)},
        columns=(*_columns(table, where, False), *_columns(table, where, True)),
        long=_long(table, points, where),
        stated="matrices" in table,
    )
    _check_together(layout, table, taken, where)
    return layout


def _check_together(
    layout: Layout, table: Mapping[str, Any], taken: Mapping[str, Any], where: str
) -> None:
    for kind, words in taken.items():
        if not isinstance(words, tuple):
            raise SourceError(f"{kind} is no list of names", where=f"{where}, [take]")
    if layout.skip_lines < 0:
        raise SourceError(f"skip_lines is {layout.skip_lines}", where=where, do="give 0 or more")
    if isinstance(layout.dt, float) and layout.dt < 0:
        raise SourceError(f"dt is {layout.dt}", where=where, do="give it in s; 0 is continuous")
    if isinstance(layout.digits, int) and layout.digits < 1:
        raise SourceError(f"digits is {layout.digits}", where=where, do="give 1 or more")
    if layout.points == FILE and layout.format in ("csv", "matrix-market"):
        if layout.files is None or "matrix" not in layout.files.fields:
            raise SourceError(
                "files must have the field {matrix}: each file holds one",
                where=where,
                do='for example files = "{matrix}_{speed}.mtx"',
            )
    elif layout.points != LONG_ROWS and "A" not in layout.matrices:
        raise SourceError("A is missing", where=f"{where}, [matrices]", do='add A = "..."')
    for name in layout.constant:
        if name == "A" or name not in layout.matrices:
            raise SourceError(
                f"{name!r} cannot be constant", where=where, do="name some of B, C, D, E"
            )
    if layout.constant and layout.points not in (FIRST_AXIS, LAST_AXIS):
        raise SourceError("constant needs points counted by an axis", where=where)
    names = [column.name for column in layout.columns]
    for name in names:
        if names.count(name) > 1:
            raise SourceError(f"{name} is a coordinate and a tag", where=where, do="name one anew")
    fields = {f for p in (layout.files, layout.groups) if p is not None for f in p.fields}
    for place in (layout.ids, *(column.place for column in layout.columns)):
        if place and place.field is not None and place.field not in fields:
            raise SourceError(
                f"{place.text} is no field of files or groups",
                where=where,
                do=nearest(place.field, fields),
            )


def _choice(
    table: Mapping[str, Any], key: str, valid: tuple[str, ...], where: str, default: Any = ...
) -> Any:
    value = take(
        table, key, str, where=where, error=SourceError, default=default, required=default is ...
    )
    if key in table and value not in valid:
        raise SourceError(f"{key} is {value!r}", where=where, do=nearest(value, valid))
    return value


def _place(table: Mapping[str, Any], key: str, where: str) -> Place | None:
    text = take(table, key, str, where=where, error=SourceError)
    return None if text is None else _checked_place(text, where)


def _checked_place(text: str, where: str) -> Place:
    if not text or text.startswith("/") or ".." in text.split("/"):
        raise SourceError(
            f"{text!r} is no place in a file", where=where, do="name a dataset, column or key"
        )
    return Place(text)


def _number_or_place(table: Mapping[str, Any], key: str, where: str, default: Any) -> Any:
    value = table.get(key, default)
    if isinstance(value, str):
        return _checked_place(value, f"{where}, {key}")
    if value is None:
        return None
    kind = int if key == "digits" else float
    return take(table, key, kind, where=where, error=SourceError, default=default)


def _one_character(table: Mapping[str, Any], key: str, where: str, default: Any) -> Any:
    value = take(table, key, str, where=where, error=SourceError, default=default)
    if value is not None and (len(value) != 1 or value in '"\r\n' or not value.isascii()):
        raise SourceError(f"{key} is {value!r}", where=where, do="give one character")
    return value


def _files(table: Mapping[str, Any], where: str) -> Matcher | None:
    pattern = take(table, "files", str, where=where, error=SourceError)
    regex = take(table, "files_regex", str, where=where, error=SourceError)
    if pattern is not None and regex is not None:
        raise SourceError("files and files_regex exclude each other", where=where)
    if pattern is not None:
        return Pattern(pattern, f"{where}, files")
    return None if regex is None else RegexPattern(regex, f"{where}, files_regex")


def _groups(table: Mapping[str, Any], points: str, where: str) -> Pattern | None:
    text = take(table, "groups", str, where=where, error=SourceError, required=points == GROUP)
    if text is not None and points != GROUP:
        raise SourceError('groups needs points = "group"', where=where)
    return None if text is None else Pattern(text, f"{where}, groups")


def _matrices(table: Mapping[str, Any], where: str) -> dict[str, str]:
    matrices = take(table, "matrices", dict, where=where, error=SourceError)
    if matrices is None:
        return {name: name for name in MATRIX_NAMES}
    where = f"{where}, [matrices]"
    check_keys(matrices, MATRIX_NAMES, where=where, error=SourceError)
    found = {}
    for name in matrices:
        text = take(matrices, name, str, where=where, error=SourceError)
        found[name] = _checked_place(text, where).text
    return found


def _words_or_places(
    table: Mapping[str, Any], key: str, where: str
) -> dict[str, tuple[str, ...] | Place]:
    inner = take(table, key, dict, where=where, error=SourceError, default={})
    where = f"{where}, [{key}]"
    check_keys(inner, KINDS, where=where, error=SourceError)
    found: dict[str, tuple[str, ...] | Place] = {}
    for kind, value in inner.items():
        if isinstance(value, str):
            found[kind] = _checked_place(value, where)
            continue
        words = take_words(inner, kind, where=where, error=SourceError) or ()
        twice = [word for word in words if words.count(word) > 1]
        if twice:
            raise SourceError(f"{kind} names {twice[0]!r} twice", where=where)
        found[kind] = words
    return found


def _columns(table: Mapping[str, Any], where: str, tags: bool) -> tuple[Column, ...]:
    key, keys = ("tags", TAG_KEYS) if tags else ("coordinates", COORDINATE_KEYS)
    columns = []
    for name, about in take(table, key, dict, where=where, error=SourceError, default={}).items():
        place = f"{where}, [{key}.{name}]"
        if isinstance(about, str):
            about = {"from": about}
        if not isinstance(about, dict):
            raise SourceError(f"{name} is {about!r}, not a table", where=f"{where}, [{key}]")
        check_keys(about, keys, where=place, error=SourceError)
        text = take(about, "from", str, where=place, error=SourceError, required=True)
        scale = take(about, "scale", float, where=place, error=SourceError, default=1.0)
        if scale == 0:
            raise SourceError("scale is 0", where=place, do="give the factor to the unit")
        offset = take(about, "offset", float, where=place, error=SourceError, default=0.0)
        columns.append(
            Column(
                name,
                _checked_place(text, place),
                take(about, "unit", str, where=place, error=SourceError),
                scale,
                offset,
                _one_character(about, "decimal", place, "."),
                tags,
            )
        )
    return tuple(columns)


def _long(table: Mapping[str, Any], points: str, where: str) -> dict[str, Any]:
    long = take(table, "long", dict, where=where, error=SourceError, required=points == LONG_ROWS)
    if long is None:
        return {}
    if points != LONG_ROWS:
        raise SourceError('[long] needs points = "long rows"', where=where)
    where = f"{where}, [long]"
    check_keys(long, LONG_KEYS, where=where, error=SourceError)
    found: dict[str, Any] = {
        key: take(long, key, str, where=where, error=SourceError, required=True)
        for key in LONG_KEYS[1:]
    }
    point = long.get("point", ())
    found["point"] = (point,) if isinstance(point, str) else take_words(
        {"point": list(point)} if isinstance(point, tuple) else long, "point",
        where=where, error=SourceError,
    )  # fmt: skip
    return found
