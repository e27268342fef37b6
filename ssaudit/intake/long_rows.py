"""One matrix entry a row: point, matrix, row, column, value, in any order of rows.

The table is read once to learn which points, matrices and labels there are, and once more for
every window of points whose matrices fit in memory together.
"""

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import MATRIX_NAMES
from ssaudit.errors import SourceError
from ssaudit.intake.entries import Axes, find_axes
from ssaudit.intake.guard import MOST_POINTS
from ssaudit.intake.layout import Column, Layout
from ssaudit.intake.orientation import BY_LABELS
from ssaudit.intake.piece import AXES, Piece
from ssaudit.intake.rows import select
from ssaudit.intake.table import Cells, DigitCounter, Table
from ssaudit.settings import nearest

# Bytes of matrices that are put together at a time.
WINDOW_BYTES = 64_000_000


@dataclass(eq=False)
class _Contents:
    """What a first reading of the table finds."""

    points: dict[str, int] = field(default_factory=dict)
    entries: dict[str, dict[tuple[str, str], None]] = field(default_factory=dict)
    ranges: list[tuple[int, int]] = field(default_factory=list)


def long_pieces(
    table: Table, layout: Layout, fields: Mapping[str, str], stem: str
) -> Iterator[Piece]:
    """Read a table with one matrix entry a row.

    Parameters
    ----------
    table : Table
        The open table.
    layout : Layout
        Its ``long`` names the columns.
    fields : dict of str
        Fields of the file name.
    stem : str
        Id of the point of a file that holds a single one.

    Yields
    ------
    Piece
        Points that lack an entry which others have are void, unless ``absent = "zero"``.

    Raises
    ------
    SourceError
        When columns of the layout are not there.
    """
    wanted = _wanted(table, layout)
    contents = _contents_of(table, layout, stem)
    axes = find_axes(contents.entries, table.where)
    size = 8 * sum(int(np.prod(axes.shape(name))) for name in contents.entries)
    step = max(1, WINDOW_BYTES // max(8, 2 * size))
    counter = DigitCounter()
    for first in range(0, len(contents.points), step):
        window = _Window(contents, axes, layout, first, min(first + step, len(contents.points)))
        for number, block in enumerate(table.blocks(wanted)):
            low, high = contents.ranges[number]
            if low < window.stop and high >= window.first:
                window.take(block, stem, table.where, counter)
        yield from window.pieces(fields, counter)


def _wanted(table: Table, layout: Layout) -> list[str]:
    wanted = [layout.long[key] for key in ("matrix", "row", "column", "value")]
    wanted += [*layout.long["point"]]
    wanted += [c.place.text for c in layout.columns if c.place.field is None]
    for name in wanted:
        if name not in table.columns:
            raise SourceError(
                f"has no column {name!r}",
                where=table.where,
                do=f"correct {layout.name}; {nearest(name, table.columns[:50])}",
            )
    return list(dict.fromkeys(wanted))


def _contents_of(table: Table, layout: Layout, stem: str) -> _Contents:
    long = layout.long
    spelled = {text: name for name, text in layout.matrices.items()}
    contents = _Contents()
    keys = [*long["point"], long["matrix"], long["row"], long["column"]]
    for block in table.blocks(list(dict.fromkeys(keys))):
        words, _ = _point_keys(block, layout, stem, table.where)
        codes = [contents.points.setdefault(key, len(contents.points)) for key in words.tolist()]
        contents.ranges.append((min(codes, default=0), max(codes, default=-1)))
        if len(contents.points) > MOST_POINTS:
            raise SourceError(f"holds more than {MOST_POINTS} points", where=table.where)
        for matrix, row, column in _distinct_entries(block, layout, table.where):
            if matrix in spelled:
                contents.entries.setdefault(spelled[matrix], {})[row, column] = None
            if len(contents.entries.get(spelled.get(matrix, ""), ())) > 25_000_000:
                raise SourceError("names too many entries of a matrix", where=table.where)
    if "A" not in contents.entries:
        raise SourceError(
            f"has no rows of {layout.matrices.get('A', 'A')!r}",
            where=table.where,
            do=f"correct [matrices] in {layout.name}",
        )
    return contents


def _distinct_entries(
    block: Mapping[str, Cells], layout: Layout, where: str
) -> list[tuple[str, str, str]]:
    """Matrix, row and column labels that occur together, by first appearance."""
    coded = [block[layout.long[key]].coded(where, key) for key in ("matrix", "row", "column")]
    code = np.zeros(len(coded[0][1]), dtype=np.int64)
    for words, places in coded:
        code = code * max(1, len(words)) + places
    _, first = np.unique(code, return_index=True)
    return [
        (str(coded[0][0][m]), str(coded[1][0][i]), str(coded[2][0][j]))
        for m, i, j in zip(*(places[np.sort(first)] for _, places in coded), strict=True)
    ]


def _point_keys(
    block: Mapping[str, Cells], layout: Layout, stem: str, where: str
) -> tuple[NDArray[np.str_], NDArray[np.int64]]:
    """Text that tells points apart (one column, several joined, or the file), and each row's."""
    columns = [block[name].coded(where, name) for name in layout.long["point"]]
    count = len(next(iter(block.values())))
    if not columns:
        return np.array([stem]), np.zeros(count, dtype=np.int64)
    words, places = columns[0]
    for others, other_places in columns[1:]:
        code = places * max(1, len(others)) + other_places
        found, first, places = np.unique(code, return_index=True, return_inverse=True)
        left = words[found // max(1, len(others))]
        words = np.strings.add(np.strings.add(left, ","), others[found % max(1, len(others))])
        words, places = _by_first_appearance(words, first, places)
    return words, places


def _by_first_appearance(
    words: NDArray[np.str_], first: NDArray[np.int64], places: NDArray[np.int64]
) -> tuple[NDArray[np.str_], NDArray[np.int64]]:
    order = np.argsort(first)
    rank = np.empty(len(order), dtype=np.int64)
    rank[order] = np.arange(len(order))
    return words[order], rank[places]


class _Window:
    """Points whose matrices are put together at the same time."""

    def __init__(
        self, contents: _Contents, axes: Axes, layout: Layout, first: int, stop: int
    ) -> None:
        self.first, self.stop, self.axes, self.layout = first, stop, axes, layout
        self._contents = contents
        count = stop - first
        names = [name for name in MATRIX_NAMES if name in contents.entries]
        self._values = {name: np.zeros((count, *axes.shape(name))) for name in names}
        self._times = {name: np.zeros((count, *axes.shape(name)), np.uint8) for name in names}
        self._void = np.full(count, "", dtype=object)
        self._columns: dict[str, NDArray[Any]] = {
            c.name: np.full(count, "" if c.is_tag else np.nan, object if c.is_tag else float)
            for c in layout.columns
            if c.place.field is None
        }
        self._known = {name: np.zeros(count, dtype=bool) for name in self._columns}

    def take(
        self, block: Mapping[str, Cells], stem: str, where: str, counter: DigitCounter
    ) -> None:
        """Put the entries of a block in their places."""
        layout, long = self.layout, self.layout.long
        words, place = _point_keys(block, layout, stem, where)
        codes = np.array([self._contents.points[key] for key in words.tolist()])[place]
        inside = np.flatnonzero((codes >= self.first) & (codes < self.stop))
        points = codes[inside] - self.first
        values, wrong = block[long["value"]].numbers()
        counter.look_at(block[long["value"]], 1)
        labels = {}
        for key in ("matrix", "row", "column"):
            names, places = block[long[key]].coded(where, key)
            labels[key] = (names, places[inside])
        for name in self._values:
            text = layout.matrices[name]
            here = labels["matrix"][0][labels["matrix"][1]] == text
            self._place(name, here, inside, points, values, labels, wrong)
        for column in layout.columns:
            if column.place.field is None:
                self._take_column(column, block[column.place.text], inside, points, where)

    def _place(
        self,
        name: str,
        here: NDArray[np.bool_],
        inside: NDArray[Any],
        points: NDArray[Any],
        values: NDArray[np.float64],
        labels: Mapping[str, tuple[NDArray[Any], NDArray[Any]]],
        wrong: Mapping[int, str],
    ) -> None:
        rows_of, columns_of = (self.axes.labels[kind] for kind in AXES[name])
        i = _positions(labels["row"], rows_of)[here]
        j = _positions(labels["column"], columns_of)[here]
        at = points[here]
        self._values[name][at, i, j] = values[inside[here]]
        np.add.at(self._times[name], (at, i, j), 1)
        if not wrong:
            return
        for k in np.flatnonzero(here).tolist():
            reason = wrong.get(int(inside[k]))
            if reason and not self._void[points[k]]:
                row, column = labels["row"], labels["column"]
                entry = (
                    rows_of.index(row[0][row[1][k]]) + 1,
                    columns_of.index(column[0][column[1][k]]) + 1,
                )
                self._void[points[k]] = f"{name}[{entry[0]},{entry[1]}] {reason}"

    def _take_column(
        self, column: Column, cells: Cells, inside: NDArray[Any], points: NDArray[Any], where: str
    ) -> None:
        """Take a coordinate or tag, the same in all rows of a point."""
        stored, known = self._columns[column.name], self._known[column.name]
        if column.is_tag:
            names, places = cells.coded(where, column.name)
            values = names.astype(object)[places[inside]]
        else:
            numbers, _ = cells.numbers()
            values = numbers[inside]
        # The last row of each point decides within a block; others must agree with it.
        new = points[~known[points]]
        stored[new] = values[~known[points]]
        known[new] = True
        differs = stored[points] != values
        if not column.is_tag:
            differs &= ~(np.isnan(stored[points]) & np.isnan(values.astype(float)))
        for point in np.unique(points[differs]):
            self._void[point] = self._void[point] or f"{column.name} differs between its rows"

    def pieces(self, fields: Mapping[str, str], counter: DigitCounter) -> Iterator[Piece]:
        """Points of the window, those of the same states, inputs and outputs together."""
        for name, times in self._times.items():
            for point in np.flatnonzero((times > 1).any(axis=(1, 2)) & (self._void == "")):
                i, j = np.argwhere(times[point] > 1)[0]
                self._void[point] = f"{name}[{i + 1},{j + 1}] is given {times[point, i, j]} times"
        present = self._present()
        piece = self._whole(fields, counter)
        patterns, group = np.unique(present, axis=0, return_inverse=True)
        for number, pattern in enumerate(patterns):
            chosen = np.flatnonzero(group.reshape(-1) == number)
            yield self._cut(select(piece, chosen), pattern, chosen)

    def _whole(self, fields: Mapping[str, str], counter: DigitCounter) -> Piece:
        layout = self.layout
        ids = np.array(list(self._contents.points)[self.first : self.stop], dtype=np.str_)
        columns: dict[str, NDArray[Any]] = {}
        for column in layout.columns:
            if column.place.field is None:
                columns[column.name] = self._columns[column.name]
            else:
                columns[column.name] = np.full(len(ids), fields[column.place.field])
        dt = layout.dt if isinstance(layout.dt, float) else 0.0
        return Piece(
            ids, columns, self._values, self._void, {}, {}, dt, None, counter.most,
            BY_LABELS,
        )  # fmt: skip

    def _present(self) -> NDArray[np.bool_]:
        """Which states, inputs and outputs each point has any entry of; (points, labels)."""
        found = {
            kind: np.zeros((self.stop - self.first, len(words)), dtype=bool)
            for kind, words in self.axes.labels.items()
        }
        for name, times in self._times.items():
            rows, columns = AXES[name]
            found[rows] |= (times > 0).any(axis=2)
            found[columns] |= (times > 0).any(axis=1)
        for present in found.values():
            if self.layout.absent == "zero":
                present[:] = True
            elif not self.axes.named and present.size:
                # A number that is missing below a greater one is a gap, not a smaller model.
                present[:] = np.maximum.accumulate(present[:, ::-1], axis=1)[:, ::-1]
        return np.concatenate([found[kind] for kind in ("states", "inputs", "outputs")], axis=1)

    def _cut(self, piece: Piece, pattern: NDArray[np.bool_], chosen: NDArray[Any]) -> Piece:
        """Leave out the states, inputs and outputs that these points do not have."""
        bounds = np.cumsum([len(words) for words in self.axes.labels.values()])[:-1]
        kept = dict(zip(self.axes.labels, np.split(pattern, bounds), strict=True))
        matrices, names = {}, {}
        void = piece.void.copy()
        for name, stack in piece.matrices.items():
            rows, columns = (np.flatnonzero(kept[kind]) for kind in AXES[name])
            times = self._times[name][chosen][:, rows][:, :, columns]
            if not times.any():
                continue
            matrices[name] = stack[:, rows][:, :, columns]
            if self.layout.absent == "void":
                lacking = (times == 0).any(axis=(1, 2)) & (void == "")
                for point in np.flatnonzero(lacking):
                    i, j = np.argwhere(times[point] == 0)[0]
                    void[point] = f"{name}[{i + 1},{j + 1}] is missing"
        if self.axes.named:
            for kind, words in self.axes.labels.items():
                names[kind] = tuple(words[k] for k in np.flatnonzero(kept[kind]))
        return Piece(
            piece.ids, piece.columns, matrices, void, {}, names,
            piece.dt, piece.digits, piece.digits_seen, piece.basis,
        )  # fmt: skip


def _positions(
    labels: tuple[NDArray[Any], NDArray[Any]], order: tuple[str, ...]
) -> NDArray[np.int64]:
    """Position of each label in the order of an axis; labels of other axes get -1."""
    places = {label: k for k, label in enumerate(order)}
    found = np.array([places.get(label, -1) for label in labels[0].tolist()], dtype=np.int64)
    positions: NDArray[np.int64] = found[labels[1]]
    return positions
