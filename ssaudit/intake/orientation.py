"""Evidence on whether matrices were read the right way round."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from ssaudit.intake.report import Orientation

AS_READ, TRANSPOSED, CANNOT_TELL = "as read", "transposed", "cannot tell"
# How names of rates follow from names of what changes; {} is the name of the state.
RATES = ("{}_rate", "{}_dot", "{}dot", "{}_velocity", "{}_speed", "d_{}", "d{}", "v_{}", "{}_d")
# What the reader knows of the order of entries.
BY_LABELS, BY_SHAPES = "labels", "shapes"


def weigh(
    states: Sequence[str],
    first: NDArray[np.float64],
    constant: NDArray[np.bool_],
    basis: str,
    odd_shapes: str,
) -> Orientation:
    """Weigh the evidence on the orientation of one section.

    Parameters
    ----------
    states : sequence of str
        Names of the states.
    first : (n, n) float
        A at one point.
    constant : (n, n) bool
        Whether an entry of A is the same at all usable points.
    basis : str
        `BY_LABELS` when the export says row and column of every entry, `BY_SHAPES` when it holds
        matrices of stated shape, "" when it holds a row of entries.
    odd_shapes : str
        Matrices that are not square and fit one way round only, in words; "" when there is none.

    Returns
    -------
    Orientation

    Examples
    --------
    >>> A = np.array([[0.0, 1.0], [-4.0, -0.4]])
    >>> weigh(["heave", "heave_rate"], A, A == A, "", "")
    Orientation(says='as read', why='d(heave)/dt = heave_rate')
    >>> weigh(["heave", "heave_rate"], A.T, A == A, "", "").says
    'transposed'
    """
    named = _kinematic_names(states, first, constant)
    if named is not None:
        return named
    rows, columns = _unit_rows(first, constant), _unit_rows(first.T, constant.T)
    if basis == BY_LABELS:
        why = "the export names row and column of every entry"
        if columns > rows:
            return Orientation(CANNOT_TELL, f"{why}, but A has the structure of a transposed one")
        return Orientation(AS_READ, why)
    if rows > columns:
        return Orientation(AS_READ, f"{_times(rows, 'row')} of A of the form dx/dt = another state")
    if columns > rows:
        return Orientation(
            TRANSPOSED,
            f"{_times(columns, 'column')} of A, but {rows} rows, hold one 1 and zeros as "
            "dx/dt = another state would",
        )
    if basis == BY_SHAPES and odd_shapes:
        return Orientation(AS_READ, f"this way round alone fits {odd_shapes}")
    return Orientation(CANNOT_TELL, "neither names, structure nor shapes of the export say it")


def _times(count: int, word: str) -> str:
    return f"{count} {word}{'' if count == 1 else 's'}"


def _kinematic_names(
    states: Sequence[str], first: NDArray[np.float64], constant: NDArray[np.bool_]
) -> Orientation | None:
    """Evidence of rows such as d(heave)/dt = heave_rate, by the names of the states."""
    one = constant & (np.abs(first) == 1)
    zero = constant & (first == 0)
    as_read, turned = [], []
    places = {name: k for k, name in enumerate(states)}
    for name, i in places.items():
        for rate in (pattern.format(name) for pattern in RATES):
            j = places.get(rate)
            if j is None:
                continue
            others = [k for k in range(len(states)) if k != j]
            if one[i, j] and zero[i, others].all():
                as_read.append(f"d({name})/dt = {rate}")
            elif one[j, i] and zero[others, i].all() and not zero[i].all():
                turned.append(f"the column of {name}, not its row, says d({name})/dt = {rate}")
    if as_read and not turned:
        return Orientation(AS_READ, as_read[0])
    if turned and not as_read:
        return Orientation(TRANSPOSED, turned[0])
    return None


def _unit_rows(first: NDArray[np.float64], constant: NDArray[np.bool_]) -> int:
    """Rows that hold a constant one beside the diagonal, and zeros."""
    nonzero = ~(constant & (first == 0))
    one = constant & (np.abs(first) == 1)
    np.fill_diagonal(one, False)
    return int(np.count_nonzero((nonzero.sum(axis=1) == 1) & one.any(axis=1)))


def looks_turned(pattern: NDArray[np.bool_], usual: NDArray[np.bool_]) -> bool:
    """Whether nonzero entries lie as in the usual pattern transposed, and not as in it.

    Parameters
    ----------
    pattern, usual : (n, n) bool
        Where entries are not zero: in one file, and in those before.

    Examples
    --------
    >>> usual = np.array([[False, True], [True, True]])
    >>> looks_turned(usual.T, usual), looks_turned(np.array([[0, 0], [1, 0]]) > 0, usual)
    (False, False)
    >>> upper = np.triu(np.ones((2, 2))) > 0
    >>> looks_turned(upper.T, upper)
    True
    """
    fits = not np.any(pattern & ~usual)
    return not fits and not np.any(pattern & ~usual.T)
