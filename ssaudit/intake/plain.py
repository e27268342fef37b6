"""Exports in the default layout: what their names mean, whichever file format holds them.

Matrices ``A B C D E`` have the point axis first; ``ids`` names the points; ``states``, ``inputs``,
``outputs``, ``dt`` and ``digits`` describe them; coordinates (numbers) and tags (words) lie one
array each beside them.
"""

from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from ssaudit.bank import (
    MATRIX_NAMES,
    Points,
    Section,
    Strings,
    check_shapes,
    non_finite_reasons,
    number_points,
)
from ssaudit.bank_file import Batch
from ssaudit.errors import BankError, SourceError, SsauditError

# Bytes of matrices read at a time: large enough to be quick, small enough to bound memory.
BATCH_BYTES = 8_000_000
# Longer names are damage, not names; and every name is stored at the width of the longest.
LONGEST_NAME = 200
# What one file may hold at the most besides its matrices.
MOST_POINTS = 50_000_000


@dataclass(frozen=True, eq=False)
class PlainExport:
    """An export in the default layout, opened: everything but the matrices is read.

    Attributes
    ----------
    path : Path
        The file.
    shapes : dict of tuple
        Shape of each matrix array that is there.
    read : callable
        ``read(name, start, stop)`` gives the matrices of a range of points.
    columns : dict of (points,) array
        Coordinates (numbers) and tags (words) by name.
    units : dict of str
        Unit of each coordinate.
    about : dict
        Those of ids, states, inputs, outputs, dt and digits that are there.
    """

    path: Path
    shapes: Mapping[str, tuple[int, ...]]
    read: Callable[[str, int, int], Any]
    columns: Mapping[str, Any]
    units: Mapping[str, str]
    about: Mapping[str, Any]


@contextmanager
def damage_reported(path: Path, what: str = "cannot be read") -> Iterator[None]:
    """Turn whatever a reading library raises on a damaged file into one SourceError.

    Parameters
    ----------
    path : Path
        The file that is read.
    what : str
        What to say of it.

    Raises
    ------
    SourceError
    """
    try:
        yield
    except SsauditError:
        raise
    # Libraries that parse files raise nearly any kind of error when bytes were changed at will.
    except Exception as error:
        raise SourceError(f"{what} ({error})", where=str(path), do="export it again") from error


def batches_of(export: PlainExport, first: int) -> Iterator[Batch]:
    """Cut an export into batches of bounded size.

    Parameters
    ----------
    export : PlainExport
        The opened export.
    first : int
        Number of its first point, should the export not name its points.

    Yields
    ------
    Batch
        Points that cannot be used carry the reason; those whose matrices do not fit together
        come without matrices.

    Raises
    ------
    SourceError
        When the file does not say how many points it holds, or its columns differ in length.
    """
    single = len(export.shapes.get("A", ())) == 2
    count = _count_points(export, single)
    points = _points_of(export, count, first, single)
    shapes = {n: (1, *s) if single else tuple(s) for n, s in export.shapes.items()}
    try:
        section = _section_of(export, shapes)
    except BankError as error:
        void = np.where(points.void == "", error.what, points.void)
        yield Batch(replace(points, void=void.astype(object)), _no_matrices(count))
        return
    bytes_a_point = 8 * sum(int(np.prod(shape[1:])) for shape in shapes.values())
    step = max(1, BATCH_BYTES // max(8, bytes_a_point))
    for start in range(0, count, step):
        stop = min(start + step, count)
        matrices = {
            n: _as_float(export, n, start, stop).reshape(-1, *shapes[n][1:]) for n in shapes
        }
        part = points.between(start, stop)
        part = replace(part, void=non_finite_reasons(matrices, part))
        yield Batch(part, replace(section, matrices=matrices))


def _count_points(export: PlainExport, single: bool) -> int:
    lengths = {name: shape[0] for name, shape in export.shapes.items() if shape and not single}
    lengths |= {name: np.size(column) for name, column in export.columns.items()}
    if "ids" in export.about:
        lengths["ids"] = np.size(export.about["ids"])
    where = str(export.path)
    if single:
        lengths["A"] = 1
    if not lengths:
        expected = "datasets A, B, C, D with the point axis first"
        raise SourceError(f"holds no models: expected {expected}", where=where)
    key, count = next(iter(lengths.items()))
    for name, length in lengths.items():
        if length != count:
            raise SourceError(
                f"{name} has {length} points, {key} has {count}",
                where=where,
                do="export the same points in every array",
            )
    if not 0 < count <= MOST_POINTS:
        raise SourceError(f"holds {count} points", where=where, do="export at least one point")
    return count


def _points_of(export: PlainExport, count: int, first: int, single: bool) -> Points:
    where = str(export.path)
    numbers, words = {}, {}
    for name, column in export.columns.items():
        values = np.asarray(column).reshape(-1)
        if values.dtype.kind in "SUO":
            words[name] = as_words(values, where, name)
        elif values.dtype.kind in "fiub":
            numbers[name] = values.astype(np.float64)
        else:
            raise SourceError(f"coordinate {name} is neither numbers nor words", where=where)
    if "ids" in export.about:
        ids = as_words(np.asarray(export.about["ids"]).reshape(-1), where, "ids")
    else:
        ids = np.array([export.path.stem]) if single else number_points(first, count)
    units = {name: export.units.get(name, "") for name in numbers}
    return Points(ids, numbers, units, words, np.full(count, "", dtype=object))


def _section_of(export: PlainExport, shapes: Mapping[str, tuple[int, ...]]) -> Section:
    where = str(export.path)
    names = {
        kind: as_words(np.asarray(export.about[kind]).reshape(-1), where, kind).tolist()
        for kind in ("states", "inputs", "outputs")
        if kind in export.about
    }
    stand_ins = {name: _Shaped(shape) for name, shape in shapes.items()}
    checked = check_shapes(
        stand_ins, names.get("states"), names.get("inputs"), names.get("outputs")
    )
    digits = export.about.get("digits")
    return Section(
        *checked,
        _number(export, "dt", export.about.get("dt", 0.0)),
        None if digits is None else int(_number(export, "digits", digits)),
        {},
    )


@dataclass(frozen=True)
class _Shaped:
    """A stack of which only the shape matters."""

    shape: tuple[int, ...]

    def __getitem__(self, key: slice, /) -> Any:
        raise NotImplementedError


def _no_matrices(count: int) -> Section:
    return Section((), (), (), 0.0, None, {"A": np.zeros((count, 0, 0))})


def _number(export: PlainExport, name: str, value: Any) -> float:
    try:
        number = float(np.asarray(value).reshape(()))
    except (TypeError, ValueError) as error:
        raise SourceError(f"{name} is not a number", where=str(export.path)) from error
    if not (np.isfinite(number) and number >= 0):
        raise SourceError(f"{name} is {number}", where=str(export.path), do="give it in s, or 0")
    return number


def _as_float(export: PlainExport, name: str, start: int, stop: int) -> Any:
    values = np.asarray(export.read(name, start, stop))
    if values.dtype.kind not in "fiu":
        raise SourceError(
            f"{name} holds {values.dtype}, not real numbers",
            where=str(export.path),
            do="export real matrices",
        )
    return values.astype(np.float64, copy=False)


def as_words(values: Any, where: str, what: str) -> Strings:
    """Names as text, whatever they were stored as.

    Parameters
    ----------
    values : (n,) array
        Bytes (UTF-8), text, numbers or objects of these.
    where, what : str
        File and array, for messages.

    Returns
    -------
    (n,) str

    Raises
    ------
    SourceError
        When a name is no UTF-8, or longer than any name.
    """
    try:
        words = [_word(value) for value in values.tolist()]
    except UnicodeDecodeError as error:
        raise SourceError(f"{what} holds text that is not UTF-8", where=where) from error
    longest = max(map(len, words), default=0)
    if longest > LONGEST_NAME:
        raise SourceError(f"{what} holds a name of {longest} characters", where=where)
    return np.array(words, dtype=np.str_)


def _word(value: Any) -> str:
    text = value.decode("utf-8") if isinstance(value, bytes) else str(value)
    # A lone surrogate cannot be written as UTF-8, and an array of text drops a closing NUL.
    return text.encode("utf-8", "replace").decode("utf-8").replace("\0", "\ufffd")


def matrices_among(names: Mapping[str, Any]) -> list[str]:
    """Those of A, B, C, D and E that an export holds, in that order."""
    return [name for name in MATRIX_NAMES if name in names]
