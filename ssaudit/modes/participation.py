"""Which states take part in which mode."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

TOP = 3


def participation(
    right: NDArray[np.complex128], left: NDArray[np.complex128]
) -> NDArray[np.float64]:
    """Participation factors of the states in each mode, normalised to sum 1.

    Parameters
    ----------
    right : (points, n, n) complex
        Right eigenvectors in columns.
    left : (points, n, n) complex
        Left eigenvectors in rows, ``left @ right`` the identity.

    Returns
    -------
    (points, modes, states) float
        abs(p) with p = left × right of the same state, each mode's row scaled to sum 1; NaN where
        the vectors are. They do not depend on the units of the states.

    References
    ----------
    Pérez-Arriaga, Verghese & Schweppe, Selective modal analysis with applications to electric
    power systems, IEEE Trans. PAS-101(9), 1982 (from memory).

    Examples
    --------
    >>> right = np.array([[[1.0, 0.0], [1.0, 1.0]]])
    >>> participation(right, np.linalg.inv(right))
    array([[[1., 0.],
            [0., 1.]]])
    """
    return participation_of_modes(np.swapaxes(right, 1, 2), left)


def participation_of_modes(
    right: NDArray[np.complex128], left: NDArray[np.complex128]
) -> NDArray[np.float64]:
    """Participation factors of single modes, of whichever points.

    Parameters
    ----------
    right, left : (..., states) complex
        Right and left eigenvector of each mode.

    Returns
    -------
    (..., states) float
        As from `participation`.

    Examples
    --------
    >>> participation_of_modes(np.array([[3.0, 1.0]]), np.array([[0.25, 0.25]]))
    array([[0.75, 0.25]])
    """
    factors = np.abs(right * left)
    with np.errstate(invalid="ignore"):
        factors /= factors.sum(axis=-1, keepdims=True)
    return factors


def top_states(
    factors: NDArray[np.float64], count: int = TOP
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Find the states that take part most in each mode.

    Parameters
    ----------
    factors : (modes, states) float
        Participation factors.
    count : int
        How many to name.

    Returns
    -------
    index : (modes, count) int
        States in falling order of participation; -1 when there are no more, or where the factors
        are not known.
    share : (modes, count) float
        Their participation; NaN where the index is -1.

    Examples
    --------
    >>> index, share = top_states(np.array([[0.3, 0.6, 0.1]]), 2)
    >>> index, share
    (array([[1, 0]]), array([[0.6, 0.3]]))
    """
    modes, states = factors.shape
    index = np.full((modes, count), -1, dtype=np.int64)
    share = np.full((modes, count), np.nan)
    # Positive floating-point numbers are in order when read as integers. With the state's number in
    # the last bits, the largest names its state, and of equal ones the first is taken.
    mask = (1 << max(1, (states - 1).bit_length())) - 1
    known = np.where(factors > 0, factors, 0.0).T.copy().view(np.int64)
    keys = (known & ~mask | (mask - np.arange(states))[:, np.newaxis]).view(np.float64)
    rows = np.arange(modes)
    for place in range(min(count, states)):
        largest = keys.max(axis=0)
        best = mask - (largest.view(np.int64) & mask)
        found = factors[rows, best]
        index[:, place] = np.where(found > 0, best, -1)
        share[:, place] = np.where(found > 0, found, np.nan)
        keys[best, rows] = -1.0
    return index, share


def state_names(
    index: NDArray[np.int64], states: Sequence[str]
) -> tuple[NDArray[np.int64], NDArray[np.object_]]:
    """Write the names of the top states of each mode, in order.

    Parameters
    ----------
    index : (modes, count) int
        As from `top_states`.
    states : sequence of str
        Names of the states.

    Returns
    -------
    which : (modes,) int
        Which of the texts each mode has.
    texts : (texts,) object
        Each text once, such as "pitch, heave"; "" where none is known.

    Examples
    --------
    >>> which, texts = state_names(np.array([[1, 0], [0, -1]]), ["heave", "pitch"])
    >>> texts[which]
    array(['pitch, heave', 'heave'], dtype=object)
    """
    base = len(states) + 1
    code = np.zeros(len(index), dtype=np.int64)
    for column in index.T:
        code = code * base + (column + 1)
    codes, first, inverse = np.unique(code, return_index=True, return_inverse=True)
    texts = np.empty(len(codes), dtype=object)
    # A name that holds the separator itself would read as two.
    plain = [name.replace(", ", ",") for name in states]
    texts[:] = [", ".join([plain[i] for i in row if i >= 0]) for row in index[first].tolist()]
    return inverse, texts
