"""What values the coordinates of an export take, and whether they span a grid."""

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import Points
from ssaudit.intake.report import Coordinate, Grid, Tag

# Values closer than this part of their range are one value, written by different roundings.
SAME = 1e-9
# Points lie on a grid when they fill at least this part of it.
FILLED = 0.25
# Places of a grid that are counted at the most.
MOST_PLACES = 20_000_000
MOST_EXAMPLES = 5
MOST_WORDS = 50


def describe_coordinates(points: Points) -> tuple[Coordinate, ...]:
    """Range, number of values and spacing of each coordinate.

    Examples
    --------
    >>> from ssaudit.bank_arrays import build_bank
    >>> bank = build_bank(np.ones((3, 1, 1)), revision="R", coordinates={"v": ([1, 2, 4], "m/s")})
    >>> (found,) = describe_coordinates(bank.points)
    >>> found.distinct, found.least_step, found.greatest_step
    (3, 1.0, 2.0)
    """
    found = []
    for name, column in points.coordinates.items():
        values = levels(column)
        if not values.size:
            continue
        with np.errstate(over="ignore"):
            steps = np.diff(values) if values.size > 1 else np.zeros(1)
        found.append(
            Coordinate(
                name,
                points.units.get(name, ""),
                float(values[0]),
                float(values[-1]),
                int(values.size),
                float(steps.min()),
                float(steps.max()),
            )
        )
    return tuple(found)


def levels(column: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the values of a coordinate in order, nearly equal ones taken as one."""
    values: NDArray[np.float64] = np.unique(column[np.isfinite(column)])
    if values.size < 2:
        return values
    # Halves, so that the range of the largest numbers does not overflow.
    half = values / 2
    apart = np.diff(half) > SAME * (half[-1] - half[0])
    kept: NDArray[np.float64] = values[np.concatenate([[True], apart])]
    return kept


def describe_tags(points: Points) -> tuple[Tag, ...]:
    """Count the words of each tag, the most frequent first."""
    found = []
    for name, words in points.tags.items():
        values, counts = np.unique(words, return_counts=True)
        order = np.argsort(-counts, kind="stable")[:MOST_WORDS]
        found.append(Tag(name, {str(values[k]): int(counts[k]) for k in order}))
    return tuple(found)


def find_grid(points: Points) -> Grid | None:
    """Find the grid that the coordinates span, and places on it without a point.

    Returns
    -------
    Grid or None
        None where there are no coordinates, or points fill too little of a grid for it to be one.
    """
    columns = points.coordinates
    finite = np.all([np.isfinite(c) for c in columns.values()], axis=0) if columns else np.array([])
    if not np.any(finite):
        return None
    axes = {name: levels(column) for name, column in columns.items()}
    places = 1
    for values in axes.values():
        places *= values.size
    if places > min(MOST_PLACES, np.count_nonzero(finite) / FILLED):
        return None
    taken = np.zeros([values.size for values in axes.values()], dtype=bool)
    taken[tuple(_position(columns[n][finite], axes[n]) for n in axes)] = True
    return Grid(places, int(np.count_nonzero(~taken)), _examples(taken, axes))


def _position(column: NDArray[np.float64], values: NDArray[np.float64]) -> NDArray[np.int64]:
    """Position of the nearest value not above."""
    return np.clip(np.searchsorted(values, column, side="right") - 1, 0, values.size - 1)


def _examples(
    taken: NDArray[np.bool_], axes: Mapping[str, NDArray[np.float64]]
) -> tuple[dict[str, float], ...]:
    holes = np.flatnonzero(~taken)[:MOST_EXAMPLES]
    places = np.unravel_index(holes, taken.shape)
    return tuple(
        {name: float(values[places[axis][k]]) for axis, (name, values) in enumerate(axes.items())}
        for k in range(len(holes))
    )
