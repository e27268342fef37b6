"""Points as a reader found them, and what makes a batch of the bank of them."""

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import Points, Section, Strings
from ssaudit.bank_checks import check_shapes, non_finite_reasons
from ssaudit.bank_writer import Batch
from ssaudit.errors import BankError, SourceError
from ssaudit.intake.guard import BATCH_BYTES, as_words
from ssaudit.intake.layout import KINDS, Column, Layout
from ssaudit.settings import nearest

# Which kind of name each axis of a matrix has.
AXES = {
    "A": ("states", "states"),
    "B": ("states", "inputs"),
    "C": ("outputs", "states"),
    "D": ("outputs", "inputs"),
    "E": ("states", "states"),
}
# Points that are gathered at the most before they go on.
GATHERED = 2000


@dataclass(frozen=True, eq=False)
class Piece:
    """Some points of one file that share names and shapes, as a reader found them.

    Attributes
    ----------
    ids : (points,) str or None
        Names of the points, where the file gives any.
    columns : dict of (points,) array
        Coordinates and tags before any conversion: numbers or words.
    matrices : dict of (points, rows, columns) float
        Matrices by name, rows first.
    void : (points,) object
        Why a point cannot be used, so far as the reader knows; "" elsewhere.
    units : dict of str
        Units that the file states for coordinates.
    names : dict of tuple
        Those of states, inputs and outputs that the file names.
    dt : float
        Sampling time [s].
    digits : int or None
        Significant digits stated.
    digits_seen : int or None
        Most significant digits that an entry was written with, found by inspection.
    basis : str
        How rows are told from columns: "labels" where the file says row and column of every
        entry, "shapes" where it holds matrices of stated shape, "" where it holds rows of entries.
    digits_by : str
        Type that ``digits`` are those of, such as "float32"; "" where the file states them.
    unused : tuple of str
        What else the file holds, and is not read.
    """

    ids: Strings | None
    columns: Mapping[str, NDArray[Any]]
    matrices: Mapping[str, NDArray[np.float64]]
    void: NDArray[np.object_]
    units: Mapping[str, str] = field(default_factory=dict)
    names: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    dt: float = 0.0
    digits: int | None = None
    digits_seen: int | None = None
    basis: str = ""
    digits_by: str = ""
    unused: tuple[str, ...] = ()

    def __len__(self) -> int:
        return len(self.void)


@dataclass(frozen=True, eq=False)
class OnePoint:
    """One point as a reader found it; `gather` makes pieces of them."""

    id: str
    matrices: Mapping[str, NDArray[np.float64]]
    columns: Mapping[str, Any]
    void: str = ""
    units: Mapping[str, str] = field(default_factory=dict)
    names: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    dt: float = 0.0
    digits: int | None = None
    digits_seen: int | None = None
    basis: str = ""
    digits_by: str = ""

    @property
    def signature(self) -> tuple[Any, ...]:
        """What points of one piece share."""
        shapes = tuple((name, matrix.shape) for name, matrix in self.matrices.items())
        columns = tuple((name, isinstance(value, str)) for name, value in self.columns.items())
        return (
            shapes, columns, tuple(self.names.items()), tuple(self.units.items()),
            self.dt, self.digits, self.digits_by, self.basis,
        )  # fmt: skip


def gather(points: Iterable[OnePoint]) -> Iterator[Piece]:
    """Join points that were found one by one, as far as they share names and shapes.

    Parameters
    ----------
    points : iterable of OnePoint
        In the order of the export, which is kept among points that share names and shapes.

    Yields
    ------
    Piece
    """
    waiting: dict[tuple[Any, ...], list[OnePoint]] = {}
    sizes: dict[tuple[Any, ...], int] = {}
    for point in points:
        key = point.signature
        waiting.setdefault(key, []).append(point)
        sizes[key] = sizes.get(key, 0) + sum(m.nbytes for m in point.matrices.values())
        full = sizes[key] > BATCH_BYTES or len(waiting[key]) >= GATHERED
        # Many shapes of few points each are no stacks; they must not pile up either.
        if full or len(waiting) > 100:
            keys = [key] if full else list(waiting)
            for chosen in keys:
                yield _joined(waiting.pop(chosen))
                sizes.pop(chosen)
    for group in waiting.values():
        yield _joined(group)


def _joined(points: list[OnePoint]) -> Piece:
    first = points[0]
    seen = [p.digits_seen for p in points if p.digits_seen is not None]
    return Piece(
        ids=np.array([p.id for p in points], dtype=np.str_),
        columns={name: np.array([p.columns[name] for p in points]) for name in first.columns},
        matrices={name: np.stack([p.matrices[name] for p in points]) for name in first.matrices},
        void=np.array([p.void for p in points], dtype=object),
        units=first.units,
        names=first.names,
        dt=first.dt,
        digits=first.digits,
        digits_seen=max(seen) if seen else None,
        basis=first.basis,
        digits_by=first.digits_by,
    )


def complete(piece: Piece, layout: Layout, where: str, ids: Strings) -> Batch:
    """Check a piece, and make a batch for the bank of it.

    Parameters
    ----------
    piece : Piece
        Points as they were found.
    layout : Layout
        Which signals to take, and how coordinates convert.
    where : str
        The file, for messages.
    ids : (points,) str
        Names of the points.

    Returns
    -------
    Batch
        Points that cannot be used carry the reason; those whose matrices do not fit together
        come without matrices.

    Raises
    ------
    SourceError
        When the layout takes a signal that the file does not name, or units contradict.
    """
    points = _points_of(piece, layout, where, ids)
    try:
        names = dict(zip(KINDS, check_shapes(piece.matrices, *_stated(piece, layout)), strict=True))
    except BankError as error:
        void = np.where(points.void == "", error.what, points.void).astype(object)
        return Batch(replace(points, void=void), no_matrices(len(piece)))
    matrices, names = _taken(piece.matrices, names, layout, where)
    section = Section(
        names["states"], names["inputs"], names["outputs"],
        piece.dt, layout.digits if isinstance(layout.digits, int) else piece.digits, matrices,
    )  # fmt: skip
    points = replace(points, void=non_finite_reasons(matrices, points))
    given = frozenset(kind for kind, words in zip(KINDS, _stated(piece, layout), strict=True)
                      if words is not None)  # fmt: skip
    seen = None if section.digits is not None else piece.digits_seen
    return Batch(points, section, digits_seen=seen, named=given, basis=piece.basis)


def no_matrices(count: int) -> Section:
    """Section of points whose matrices do not fit together."""
    return Section((), (), (), 0.0, None, {"A": np.zeros((count, 0, 0))})


def _stated(piece: Piece, layout: Layout) -> list[tuple[str, ...] | None]:
    """Names of states, inputs and outputs where the file or the layout states any."""
    stated = []
    for kind in KINDS:
        from_layout = layout.names.get(kind)
        words = from_layout if isinstance(from_layout, tuple) else piece.names.get(kind)
        stated.append(words)
    return stated


def _taken(
    matrices: Mapping[str, NDArray[np.float64]],
    names: dict[str, tuple[str, ...]],
    layout: Layout,
    where: str,
) -> tuple[dict[str, NDArray[np.float64]], dict[str, tuple[str, ...]]]:
    """Rows and columns of the signals that the layout takes, in its order."""
    if not layout.take:
        return dict(matrices), names
    chosen = {}
    for kind, words in layout.take.items():
        for word in words:
            if word not in names[kind]:
                raise SourceError(
                    f"the layout takes {word!r}, which is none of the {kind}",
                    where=where,
                    do=nearest(word, names[kind]),
                )
        chosen[kind] = [names[kind].index(word) for word in words]
    return permuted(matrices, chosen), {**names, **layout.take}


def permuted(
    matrices: Mapping[str, NDArray[np.float64]], chosen: Mapping[str, list[int]]
) -> dict[str, NDArray[np.float64]]:
    """Matrices with rows and columns chosen anew.

    Parameters
    ----------
    matrices : dict of (points, rows, columns) float
        Matrices by name.
    chosen : dict of list of int
        Old positions in the new order, by "states", "inputs", "outputs"; absent: all, as they are.

    Returns
    -------
    dict of (points, rows, columns) float
    """
    result = {}
    for name, stack in matrices.items():
        rows, columns = AXES[name]
        if rows in chosen:
            stack = stack[:, chosen[rows], :]
        if columns in chosen:
            stack = stack[:, :, chosen[columns]]
        result[name] = np.ascontiguousarray(stack)
    return result


def _points_of(piece: Piece, layout: Layout, where: str, ids: Strings) -> Points:
    known = {column.name: column for column in layout.columns}
    numbers: dict[str, NDArray[np.float64]] = {}
    words: dict[str, Strings] = {}
    units: dict[str, str] = {}
    void = piece.void
    for name, values in piece.columns.items():
        column = known.get(name) or Column(name, layout.ids or _NOWHERE, is_tag=_is_text(values))
        if column.is_tag:
            words[name] = as_words(values, where, name)
            continue
        found, void = _numbers(column, values, void, where)
        numbers[name] = found * column.scale + column.offset if column.converts else found
        units[name] = _unit(column, piece.units.get(name, ""), where)
    return Points(ids, numbers, units, words, void)


def _is_text(values: NDArray[Any]) -> bool:
    return values.dtype.kind in "SUO"


_NOWHERE: Any = None


def _numbers(
    column: Column, values: NDArray[Any], void: NDArray[np.object_], where: str
) -> tuple[NDArray[np.float64], NDArray[np.object_]]:
    """Values of a coordinate as numbers; a point whose value is none becomes void."""
    if values.dtype.kind in "fiub":
        return values.astype(np.float64), void
    if not _is_text(values):
        raise SourceError(f"coordinate {column.name} is neither numbers nor words", where=where)
    texts = as_words(values, where, column.name).tolist()
    found = np.array([parse_number(text.replace(column.decimal, ".")) for text in texts])
    bad = np.flatnonzero(np.isnan(found) & (void == ""))
    if bad.size:
        void = void.copy()
        for row in bad:
            void[row] = f"coordinate {column.name} is {texts[row][:40]!r}, not a number"
    return found, void


def parse_number(text: str) -> float:
    """Read a number written as text; NaN when it is none.

    Exponents may be written with D, as some programs do.

    Examples
    --------
    >>> parse_number(" 1.5D+2 "), parse_number("1_0")
    (150.0, nan)
    """
    text = text.strip()
    if "_" in text or len(text) > 400:
        return float("nan")
    try:
        return float(text)
    except ValueError:
        try:
            return float(text.replace("D", "E").replace("d", "e"))
        except ValueError:
            return float("nan")


def _unit(column: Column, of_file: str, where: str) -> str:
    if column.unit is None:
        return "" if column.converts else of_file
    if of_file and of_file != column.unit and not column.converts:
        raise SourceError(
            f"coordinate {column.name} is in {of_file!r}, the layout says {column.unit!r}",
            where=where,
            do="give the scale between them in the layout",
        )
    return column.unit
