"""Checks of models and points before they enter a bank: shapes, numbers, duplicates."""

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import Matrices, Points, Section, Stack, Strings
from ssaudit.errors import BankError

# Stands in for the point's own reason when an id or a place in the envelope is claimed twice.
DUPLICATE_ID = "its id is used by {count} points of the export"

DUPLICATE_PLACE = "its coordinates are those of {count} points of the export"


def mark_unusable(points: Points, sections: Sequence[Section], *, ids_given: bool = True) -> Points:
    """Mark as void the points whose id or place in the envelope is claimed more than once.

    Which of the claimants is meant cannot be known, so none of them is judged. Points that are
    void already keep their reason.

    Parameters
    ----------
    points : Points
        All points, section by section.
    sections : sequence of Section
        The sections; the same coordinates in two sections are two models, not a duplicate.
    ids_given : bool
        Whether the export named its points; numbers that were given to them never recur.

    Returns
    -------
    Points
        The same points, more of them void.
    """
    void = points.void.copy()
    section_of = np.repeat(np.arange(len(sections)), [len(section) for section in sections])
    place = [section_of, *points.coordinates.values(), *points.tags.values()]
    claims: list[tuple[str, list[NDArray[Any]]]] = []
    if ids_given:
        claims.append((DUPLICATE_ID, [points.ids]))
    if points.coordinates:
        claims.append((DUPLICATE_PLACE, place))
    for reason, columns in claims:
        counts = _times_claimed(columns)
        for row in np.flatnonzero((counts > 1) & (void == "")):
            void[row] = reason.format(count=counts[row])
    return replace(points, void=void)


def _times_claimed(columns: Sequence[NDArray[Any]]) -> NDArray[np.int64]:
    """How many rows share the values of each row."""
    # Equal rows have equal hashes, so only rows whose hash recurs need an exact comparison.
    hashes = row_hashes(columns)
    ordered = np.sort(hashes)
    again = ordered[1:][ordered[1:] == ordered[:-1]]
    counts: NDArray[np.int64] = np.ones(len(columns[0]), dtype=np.int64)
    if again.size:
        recurring = np.flatnonzero(np.isin(hashes, again))
        counts[recurring] = _times_claimed_exactly([column[recurring] for column in columns])
    return counts


def _times_claimed_exactly(columns: Sequence[NDArray[Any]]) -> NDArray[np.int64]:
    code = np.zeros(len(columns[0]), dtype=np.int64)
    for column in columns:
        _, values = np.unique(column, return_inverse=True)
        # Renumbered after every column, so that the product cannot overflow.
        code = np.unique(code * (values.max(initial=0) + 1) + values, return_inverse=True)[1]
    counts: NDArray[np.int64] = np.bincount(code, minlength=1)[code]
    return counts


def row_hashes(columns: Sequence[NDArray[Any]]) -> NDArray[np.uint64]:
    """Hash of each row: equal for equal values, nearly always different for others."""
    hashes = np.zeros(len(columns[0]), dtype=np.uint64)
    for column in columns if len(hashes) else ():
        if column.dtype.kind == "f":
            # Zero and minus zero are one value, and so are all kinds of NaN.
            column = np.where(np.isnan(column), np.nan, column + 0.0)
        words = np.ascontiguousarray(column).view(np.uint32).reshape(len(column), -1)
        for word in words.T:
            # An odd multiplier (2^64 over the golden ratio) and a shift spread the bits; unsigned
            # products wrap around, which is meant.
            hashes = (hashes ^ word) * np.uint64(0x9E3779B97F4A7C15)
            hashes ^= hashes >> np.uint64(29)
    return hashes


def non_finite_reasons(matrices: Matrices, points: Points) -> NDArray[np.object_]:
    """Say which points hold an entry or coordinate that is not a finite number.

    Parameters
    ----------
    matrices : dict of (points, rows, columns) float
        Matrices by name.
    points : Points
        The same points.

    Returns
    -------
    (points,) object
        The points' own reasons, where they have one; else what is not finite, or "".
    """
    void = points.void.copy()
    for name, stack in matrices.items():
        finite = np.isfinite(stack)
        for row in np.flatnonzero(~finite.all(axis=(1, 2)) & (void == "")):
            i, j = np.argwhere(~finite[row])[0]
            kind = "NaN" if np.isnan(stack[row, i, j]) else "infinite"
            void[row] = f"{name}[{i + 1},{j + 1}] is {kind}"
    for name, column in points.coordinates.items():
        for row in np.flatnonzero(~np.isfinite(column) & (void == "")):
            void[row] = f"coordinate {name} is not a finite number"
    return void


def default_names(prefix: str, count: int) -> tuple[str, ...]:
    """Names for signals that the export does not name: x1, x2, … for states."""
    return tuple(f"{prefix}{number}" for number in range(1, count + 1))


def number_points(first: int, count: int) -> Strings:
    """Ids for points that the export does not name: their numbers."""
    return np.arange(first, first + count).astype(np.str_)


def check_shapes(
    matrices: Mapping[str, Stack],
    states: Sequence[str] | None,
    inputs: Sequence[str] | None,
    outputs: Sequence[str] | None,
) -> tuple[tuple[str, ...], tuple[str, ...], tuple[str, ...]]:
    """Check that stacked matrices and names agree in size, and complete the names.

    Parameters
    ----------
    matrices : dict of (points, rows, columns) stacks
        Matrices by name.
    states, inputs, outputs : sequence of str or None
        Names where the export states them.

    Returns
    -------
    states, inputs, outputs : tuple of str
        Names for every row and column.

    Raises
    ------
    BankError
        Saying which shapes disagree.
    """
    if "A" not in matrices:
        raise BankError("A is missing")
    for name, stack in matrices.items():
        if len(stack.shape) != 3:
            raise BankError(f"{name} has shape {stack.shape}, not (points, rows, columns)")
        if stack.shape[0] != matrices["A"].shape[0]:
            raise BankError(f"{name} has {stack.shape[0]} points, A has {matrices['A'].shape[0]}")
    n = matrices["A"].shape[1]
    width = next((matrices[m].shape[2] for m in ("B", "D") if m in matrices), len(inputs or ()))
    height = next((matrices[m].shape[1] for m in ("C", "D") if m in matrices), len(outputs or ()))
    expected = {
        "A": (n, n),
        "B": (n, width),
        "C": (height, n),
        "D": (height, width),
        "E": (n, n),
    }
    for name, stack in matrices.items():
        if tuple(stack.shape[1:]) != expected[name]:
            rows, columns = stack.shape[1:]
            raise BankError(
                f"{name} is {rows}x{columns} where {expected[name][0]}x{expected[name][1]} fits "
                f"{n} states, {width} inputs and {height} outputs"
            )
    return (
        _check_names("states", "x", n, states),
        _check_names("inputs", "u", width, inputs),
        _check_names("outputs", "y", height, outputs),
    )


def _check_names(
    kind: str, prefix: str, count: int, names: Sequence[str] | None
) -> tuple[str, ...]:
    if names is None:
        return default_names(prefix, count)
    if len(names) != count:
        raise BankError(f"{len(names)} names of {kind} for {count} {kind}")
    if len(set(names)) != count:
        twice = next(name for name in names if list(names).count(name) > 1)
        raise BankError(f"{kind} names {twice!r} twice")
    return tuple(str(name) for name in names)
