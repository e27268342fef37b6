"""Points to look at twice: entries that jump, points that are nearly or wholly alike."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import Points
from ssaudit.bank_checks import row_hashes
from ssaudit.bank_writer import Settled
from ssaudit.intake.report import Jump, Pair, Suspects
from ssaudit.intake.survey import Survey, entry_labels, entry_values

# An entry jumps when it is this many binary orders (a factor of 128) from both neighbours.
JUMP = 7
# Neighbours that are further apart than this (a factor of 8 to 16) show no common size.
AGREE = 3
# Entries that are compared at a time.
TOGETHER = 16
# Points closer than this part of the range are suspected to be one.
CLOSE = 1e-6
MOST_EXAMPLES = 20


@dataclass(frozen=True, eq=False)
class Line:
    """Points in the order of one coordinate, where all else is the same.

    Attributes
    ----------
    order : (points,) int
        Positions of the points.
    linked : (points - 1,) bool
        Whether ``order[k]`` and ``order[k + 1]`` are neighbours.
    """

    order: NDArray[np.int64]
    linked: NDArray[np.bool_]


def find_suspects(settled: Settled, survey: Survey) -> Suspects:
    """Find the suspect points of a finished bank.

    Parameters
    ----------
    settled : Settled
        The bank's points and sections.
    survey : Survey
        What was noted of its models.

    Returns
    -------
    Suspects
    """
    jumps: list[Jump] = []
    count, first = 0, 0
    pairs: dict[str, list[Pair]] = {"close": [], "alike": []}
    totals = {"close": 0, "alike": 0}
    for number, section in zip(settled.numbers, settled.sections, strict=True):
        points = settled.points.between(first, first + len(section))
        first += len(section)
        if not section.states:
            continue
        noted = survey.sections[number]
        if noted.sizes:
            names = list(section.matrices)
            found = find_jumps(noted.sizes, points)
            count += len(found)
            labels = entry_labels(section, names)
            for point, entry, factor in found[:MOST_EXAMPLES]:
                value = float(entry_values(section, point, names)[entry])
                jumps.append(Jump(str(points.ids[point]), labels[entry], value, factor))
        for kind, rows in (
            ("close", close_points(points)),
            ("alike", equal_rows(np.concatenate(noted.prints), points.void == "")),
        ):
            totals[kind] += sum(len(group) for group in rows)
            pairs[kind] += [Pair(*map(str, points.ids[g[:2]])) for g in rows[:MOST_EXAMPLES]]
    jumps.sort(key=lambda jump: -abs(np.log(jump.factor)))
    return Suspects(
        count,
        tuple(jumps[:MOST_EXAMPLES]),
        survey.sizes_kept,
        totals["close"],
        tuple(pairs["close"][:MOST_EXAMPLES]),
        totals["alike"],
        tuple(pairs["alike"][:MOST_EXAMPLES]),
    )


def lines_of(points: Points) -> list[Line]:
    """Order the usable points along each coordinate.

    Parameters
    ----------
    points : Points
        Points of one section.

    Returns
    -------
    list of Line
        One a coordinate along which some points are neighbours.
    """
    usable = np.flatnonzero(points.void == "")
    lines = []
    for name, column in points.coordinates.items():
        others: list[NDArray[Any]] = [*points.tags.values()]
        others += [points.coordinates[other] for other in points.coordinates if other != name]
        keys = row_hashes(others)[usable] if others else np.zeros(len(usable), dtype=np.uint64)
        order = usable[np.lexsort((column[usable], keys))]
        keys = np.sort(keys)
        linked = keys[:-1] == keys[1:]
        if linked.any():
            lines.append(Line(order, linked))
    return lines


def find_jumps(sizes: Sequence[NDArray[np.int8]], points: Points) -> list[tuple[int, int, float]]:
    """Find entries whose size jumps at single points against all their neighbours.

    Parameters
    ----------
    sizes : sequence of (points, entries) int8
        Coded sizes from `ssaudit.intake.survey.code_sizes`, batch by batch.
    points : Points
        The same points.

    Returns
    -------
    list of (point, entry, factor)
        The greatest jump first. An entry counts where, along every coordinate, it is at least
        `JUMP` binary orders greater than at both neighbours, or as much smaller than at both while
        these have one sign (else it just passes through zero). Where a point stands at the end of
        a line of points, it must differ as much from the one neighbour; it counts only if it has
        neighbours on both sides along some coordinate.

    Examples
    --------
    >>> from ssaudit.bank_arrays import build_bank
    >>> from ssaudit.intake.survey import code_sizes
    >>> A = np.array([1.0, 1.1, 1200.0, 1.3, 1.4]).reshape(5, 1, 1)
    >>> bank = build_bank(A, revision="R", coordinates={"speed": (np.arange(5.0), "m/s")})
    >>> find_jumps([code_sizes(A).reshape(5, 1)], bank.points)
    [(2, 0, 1024.0)]
    """
    lines = lines_of(points)
    found: list[tuple[int, int, float]] = []
    count = sizes[0].shape[1] if lines else 0
    for start in range(0, count, TOGETHER):
        block = np.concatenate([part[:, start : start + TOGETHER] for part in sizes])
        entries = np.flatnonzero(np.ptp(np.abs(block), axis=0) >= JUMP)
        if not entries.size:
            continue
        for point, column, orders in _jumps_along(block[:, entries], lines):
            found.append((point, start + int(entries[column]), 2.0**orders))
    found.sort(key=lambda jump: -abs(np.log2(jump[2])))
    return found


def _jumps_along(block: NDArray[np.int8], lines: Sequence[Line]) -> list[tuple[int, int, int]]:
    """Point, entry and binary orders of the jumps of some entries."""
    looked = np.zeros(len(block), dtype=np.int8)
    places: list[NDArray[np.int64]] = []
    ends: list[NDArray[np.int64]] = []
    orders: list[NDArray[np.int64]] = []
    width = block.shape[1]
    for line in lines:
        signed = block[line.order]
        sizes = np.abs(signed)
        rows, columns, how_much = _inner_jumps(signed, sizes, line)
        places.append(line.order[rows] * width + columns)
        orders.append(how_much)
        rows, columns = _end_jumps(sizes, line)
        ends.append(line.order[rows] * width + columns)
        has_neighbour = np.zeros(len(line.order), dtype=bool)
        has_neighbour[:-1] |= line.linked
        has_neighbour[1:] |= line.linked
        looked[line.order] += has_neighbour
    found, first, times = np.unique(np.concatenate(places), return_index=True, return_counts=True)
    # At the end of a line there is one neighbour; from it the entry must differ as well.
    beside = np.concatenate(ends)
    beside = beside[np.isin(beside, found)]
    np.add.at(times, np.searchsorted(found, beside), 1)
    agreed = np.flatnonzero(times == looked[found // width])
    chosen = np.concatenate(orders)[first[agreed]]
    points, columns = np.divmod(found[agreed], width)
    return list(zip(points.tolist(), columns.tolist(), chosen.tolist(), strict=True))


def _inner_jumps(
    signed: NDArray[np.int8], sizes: NDArray[np.int8], line: Line
) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]:
    """Jumps against the neighbours on both sides: place in the line, entry, binary orders."""
    before, here, after = sizes[:-2], sizes[1:-1], sizes[2:]
    # Sizes are 0 to 127, so that their differences do not overflow.
    least, greatest = np.minimum(before, after), np.maximum(before, after)
    down = (least - here >= JUMP) & ((signed[:-2] > 0) == (signed[2:] > 0))
    jumps = (greatest - least <= AGREE) & (least > 0) & (down | (here - greatest >= JUMP))
    inner = line.linked[:-1] & line.linked[1:]
    rows, columns = np.nonzero(jumps & inner[:, np.newaxis])
    how_much = here[rows, columns].astype(np.int64) - greatest[rows, columns]
    return rows + 1, columns, how_much


def _end_jumps(sizes: NDArray[np.int8], line: Line) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Differences from the only neighbour at both ends of every line: place in it, entry."""
    before = np.concatenate([[False], line.linked])
    after = np.concatenate([line.linked, [False]])
    found = []
    for ends, step in ((np.flatnonzero(after & ~before), 1), (np.flatnonzero(before & ~after), -1)):
        differ = np.abs(sizes[ends] - sizes[ends + step]) >= JUMP
        rows, columns = np.nonzero(differ)
        found.append((ends[rows], columns))
    return np.concatenate([rows for rows, _ in found]), np.concatenate([c for _, c in found])


def close_points(points: Points) -> list[NDArray[np.int64]]:
    """Group the points whose coordinates differ by less than `CLOSE` of the range.

    Points of the same coordinates are void already, and not meant here.
    """
    usable = points.void == ""
    if not points.coordinates or np.count_nonzero(usable) < 2:
        return []
    cells = []
    for column in points.coordinates.values():
        values = np.where(usable, column, column[usable][0])
        # Coordinates may be so large, or lie so close, that their range is no finite number.
        with np.errstate(all="ignore"):
            cell = np.round((values - values.min()) / (np.ptp(values) * CLOSE))
        cells.append(np.where(np.isfinite(cell), cell, values))
    return equal_rows(row_hashes([*cells, *points.tags.values()]), usable)


def equal_rows(keys: NDArray[np.uint64], usable: NDArray[np.bool_]) -> list[NDArray[np.int64]]:
    """Group the usable rows of equal keys; groups of two or more.

    Examples
    --------
    >>> keys = np.array([5, 7, 5, 8], dtype=np.uint64)
    >>> [group.tolist() for group in equal_rows(keys, np.ones(4, dtype=bool))]
    [[0, 2]]
    """
    rows = np.flatnonzero(usable)
    ordered = np.sort(keys[rows])
    if not np.any(ordered[1:] == ordered[:-1]):
        return []
    order = rows[np.argsort(keys[rows], kind="stable")]
    ends = np.flatnonzero(np.diff(keys[order]) != 0) + 1
    starts = np.concatenate([[0], ends])
    lengths = np.diff(np.concatenate([starts, [len(order)]]))
    chosen = np.flatnonzero(lengths > 1)
    return [order[starts[k] : starts[k] + lengths[k]] for k in chosen]
