"""One point a row of a table: a column an entry, or a column of lists a matrix."""

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import MATRIX_NAMES
from ssaudit.errors import SourceError
from ssaudit.intake.container import unflatten
from ssaudit.intake.entries import Axes, find_axes
from ssaudit.intake.guard import as_digits
from ssaudit.intake.layout import COLUMN_MAJOR, Column, Layout, Place
from ssaudit.intake.orientation import BY_LABELS
from ssaudit.intake.pattern import Pattern, find_entries
from ssaudit.intake.piece import AXES, OnePoint, Piece, gather
from ssaudit.intake.records import read_matrix
from ssaudit.intake.table import Cells, DigitCounter, Table
from ssaudit.settings import nearest


@dataclass(frozen=True, eq=False)
class _Plan:
    """Which columns of a table are read as what."""

    entries: Mapping[str, Mapping[tuple[str, str], str]]
    lists: Mapping[str, str]
    axes: Axes

    @property
    def columns(self) -> list[str]:
        return [c for by in self.entries.values() for c in by.values()] + list(self.lists.values())


def row_pieces(table: Table, layout: Layout, fields: Mapping[str, str]) -> Iterator[Piece]:
    """Read a table with one point a row.

    Parameters
    ----------
    table : Table
        The open table.
    layout : Layout
        Its ``matrices`` are patterns such as ``A[{row},{column}]``, or names of columns of lists.
    fields : dict of str
        Fields of the file name.

    Yields
    ------
    Piece

    Raises
    ------
    SourceError
        When columns of the layout are not there, or a matrix lacks entries.
    """
    plan = _plan(table, layout)
    others = _other_columns(table, layout)
    counter = DigitCounter()
    for block in table.blocks(list(dict.fromkeys([*plan.columns, *others]))):
        for name in plan.columns:
            counter.look_at(block[name], len(plan.columns))
        yield from _pieces_of(block, plan, layout, fields, table.where, counter)


def _plan(table: Table, layout: Layout) -> _Plan:
    entries, lists = {}, {}
    for name in MATRIX_NAMES:
        text = layout.matrices.get(name)
        if text is None:
            continue
        pattern = Pattern(text, f"{layout.name}, [matrices], {name}")
        found = find_entries(table.columns, pattern).names if pattern.fields else {}
        if found:
            entries[name] = found
        elif text in table.columns:
            lists[name] = text
        elif layout.stated or name == "A":
            raise SourceError(
                f"has no column like {text!r} for {name}",
                where=table.where,
                do=f"correct {layout.name}; {nearest(text, table.columns[:50])}",
            )
    axes = find_axes(entries, table.where)
    _check_complete(entries, axes, layout, table.where)
    return _Plan(entries, lists, axes)


def _check_complete(
    entries: Mapping[str, Mapping[tuple[str, str], str]], axes: Axes, layout: Layout, where: str
) -> None:
    if layout.absent == "zero":
        return
    for name, found in entries.items():
        rows, columns = axes.shape(name)
        if len(found) < rows * columns:
            raise SourceError(
                f"{name} has {len(found)} columns where {rows}x{columns} entries belong",
                where=where,
                do='correct the pattern, or set absent = "zero"',
            )


def _other_columns(table: Table, layout: Layout) -> list[str]:
    """Columns of ids, coordinates and tags, checked to be there."""
    places = [("ids", layout.ids), *((c.name, c.place) for c in layout.columns)]
    places += [(key, getattr(layout, key)) for key in ("dt", "digits")]
    found = []
    for name, place in places:
        if not isinstance(place, Place) or place.field is not None:
            continue
        if place.text not in table.columns:
            raise SourceError(
                f"has no column {place.text!r} for {name}",
                where=table.where,
                do=f"correct {layout.name}; {nearest(place.text, table.columns[:50])}",
            )
        found.append(place.text)
    for kind, words in layout.names.items():
        if isinstance(words, Place):
            raise SourceError(
                f"{kind} is a place, and a table holds no names", where=f"{layout.name}, [names]",
                do="list the names",
            )  # fmt: skip
    return found


def _pieces_of(
    block: Mapping[str, Cells],
    plan: _Plan,
    layout: Layout,
    fields: Mapping[str, str],
    where: str,
    counter: DigitCounter,
) -> Iterator[Piece]:
    count = len(next(iter(block.values())))
    void = np.full(count, "", dtype=object)
    columns, units = _columns(block, layout, fields, void, where)
    ids = None
    if layout.ids is not None:
        field = layout.ids.field
        ids = (np.full(count, fields[field]) if field is not None
               else block[layout.ids.text].words(where, "ids"))  # fmt: skip
    piece = Piece(
        ids,
        columns,
        _matrices(block, plan, layout, void, where),
        void,
        units,
        plan.axes.names,
        0.0,
        _digits(block, layout, where),
        counter.most,
        "" if plan.lists else BY_LABELS,
    )
    dt = _times(block, layout, void)
    if plan.lists:
        yield from _with_lists(piece, dt, block, plan, layout)
    else:
        for value in np.unique(dt):
            rows = dt == value
            part = piece if rows.all() else select(piece, rows)
            yield replace(part, dt=float(value))


def _columns(
    block: Mapping[str, Cells],
    layout: Layout,
    fields: Mapping[str, str],
    void: NDArray[np.object_],
    where: str,
) -> tuple[dict[str, NDArray[Any]], dict[str, str]]:
    found: dict[str, NDArray[Any]] = {}
    for column in layout.columns:
        field = column.place.field
        if field is not None:
            found[column.name] = np.full(len(void), fields[field])
        elif column.is_tag:
            found[column.name] = block[column.place.text].words(where, column.name)
        else:
            found[column.name] = _coordinate(block[column.place.text], column, void, where)
    return found, {}


def _coordinate(
    cells: Cells, column: Column, void: NDArray[np.object_], where: str
) -> NDArray[np.float64]:
    try:
        values, wrong = cells.numbers()
    except SourceError as error:
        raise SourceError(error.what, where=f"{where}, {column.place.text}") from error
    mark(void, wrong, f"coordinate {column.name}")
    return values


def mark(void: NDArray[np.object_], wrong: Mapping[int, str], what: str) -> None:
    """Note what is wrong with some points, unless something is wrong with them already."""
    for row, reason in wrong.items():
        if not void[row]:
            void[row] = f"{what} {reason}"


def _matrices(
    block: Mapping[str, Cells],
    plan: _Plan,
    layout: Layout,
    void: NDArray[np.object_],
    where: str,
) -> dict[str, NDArray[np.float64]]:
    found = {}
    for name, entries in plan.entries.items():
        rows, columns = plan.axes.shape(name)
        stack = np.zeros((len(void), rows, columns))
        row_axis, column_axis = _labels(plan.axes, name)
        for (row, column), text in entries.items():
            i, j = row_axis.index(row), column_axis.index(column)
            try:
                stack[:, i, j], wrong = block[text].numbers()
            except SourceError as error:
                raise SourceError(error.what, where=f"{where}, {text}") from error
            mark(void, wrong, f"{name}[{i + 1},{j + 1}]")
        found[name] = stack
    return found


def _labels(axes: Axes, matrix: str) -> tuple[tuple[str, ...], tuple[str, ...]]:
    rows, columns = AXES[matrix]
    return axes.labels[rows], axes.labels[columns]


def _with_lists(
    piece: Piece,
    dt: NDArray[np.float64],
    block: Mapping[str, Cells],
    plan: _Plan,
    layout: Layout,
) -> Iterator[Piece]:
    """Points whose matrices lie in columns of lists, which may differ in shape."""
    lists = {name: block[text].lists() for name, text in plan.lists.items()}
    points = (_point(piece, row, float(dt[row]), lists, layout) for row in range(len(piece)))
    for part in gather(points):
        yield replace(part, ids=None) if piece.ids is None else part


def _point(
    piece: Piece, row: int, dt: float, lists: Mapping[str, list[Any]], layout: Layout
) -> OnePoint:
    matrices, problem = {}, piece.void[row]
    for name in MATRIX_NAMES:
        if name in piece.matrices:
            matrices[name] = piece.matrices[name][row : row + 1]
        elif name in lists:
            matrix, wrong = read_matrix(lists[name][row], name)
            problem = problem or wrong
            if matrix is not None:
                matrices[name] = matrix[np.newaxis]
    shaped = unflatten(matrices, layout.order == COLUMN_MAJOR) if not problem else {}
    return OnePoint(
        "" if piece.ids is None else str(piece.ids[row]),
        {name: stack[0] for name, stack in shaped.items()},
        {name: _plain(values[row]) for name, values in piece.columns.items()},
        problem,
        piece.units,
        piece.names,
        dt,
        piece.digits,
        piece.digits_seen,
    )


def _plain(value: Any) -> Any:
    return str(value) if isinstance(value, str) else float(value)


def _digits(block: Mapping[str, Cells], layout: Layout, where: str) -> int | None:
    if not isinstance(layout.digits, Place):
        return layout.digits
    values, _ = block[layout.digits.text].numbers()
    return as_digits(np.unique(values[np.isfinite(values)])[:1], where)


def _times(
    block: Mapping[str, Cells], layout: Layout, void: NDArray[np.object_]
) -> NDArray[np.float64]:
    """Return the sampling time of each row [s]."""
    if not isinstance(layout.dt, Place):
        return np.full(len(void), layout.dt)
    values, wrong = block[layout.dt.text].numbers()
    mark(void, wrong, "dt")
    fits = np.isfinite(values) & (values >= 0)
    mark(void, dict.fromkeys(np.flatnonzero(~fits).tolist(), "is no time"), "dt")
    return np.where(fits, values, 0.0)


def select(piece: Piece, rows: NDArray[Any]) -> Piece:
    """Return some of the points of a piece."""
    return replace(
        piece,
        ids=None if piece.ids is None else piece.ids[rows],
        columns={name: values[rows] for name, values in piece.columns.items()},
        matrices={name: stack[rows] for name, stack in piece.matrices.items()},
        void=piece.void[rows],
    )
