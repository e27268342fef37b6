"""Neutral states: a heading or a position that nothing depends on, set apart exactly."""

import numpy as np
from numpy.typing import NDArray


def neutral_states(
    A: NDArray[np.float64], named: NDArray[np.int64], sampled: bool
) -> NDArray[np.bool_]:
    """Find which of the named states nothing depends on.

    Such a state only sums up the others: its column is exactly zero (of A - I, when sampled), and
    leaving out its row and column leaves all other poles what they are. A named state that
    anything does depend on stays: one that the loop feeds back, and one that another sums up, as a
    position does a heading, for then an offset makes that one grow (`grows_at_rest`).

    Parameters
    ----------
    A : (points, n, n) float
        Closed-loop state matrices.
    named : (k,) int
        States that the criteria exempt.
    sampled : bool
        Whether the models are sampled.

    Returns
    -------
    (points, n) bool
        The states to leave out.

    Examples
    --------
    >>> A = np.array([[[-1.0, 0.0], [1.0, 0.0]]])
    >>> neutral_states(A, np.array([1]), sampled=False)
    array([[False,  True]])
    """
    found = np.zeros(A.shape[:2], dtype=bool)
    if not len(named):
        return found
    columns = A[:, :, named]
    if sampled:
        columns = columns - np.eye(A.shape[1])[:, named]
    found[:, named] = ~columns.any(axis=1)
    return found


def grows_at_rest(A: NDArray[np.float64], sampled: bool) -> NDArray[np.bool_]:
    """Find models in which a sum feeds another sum, so that an offset makes one of them grow as t.

    A state whose column is zero has a pole at 0 (a pole at 1, when sampled, of a column of A - I).
    Another state whose column has entries only in the rows of such states depends on nothing else
    either: both poles are the same, and the second state drives the first.

    Parameters
    ----------
    A : (points, n, n) float
        Closed-loop state matrices.
    sampled : bool
        Whether the models are sampled.

    Returns
    -------
    (points,) bool
        Where such a pair is plain from the zeros of A; elsewhere nothing is said.

    Examples
    --------
    >>> grows_at_rest(np.array([[[0.0, 1.0], [0.0, 0.0]], [[0.0, 0.0], [0.0, 0.0]]]), False)
    array([ True, False])
    """
    entries = (A - np.eye(A.shape[1]) if sampled else A) != 0
    sums = ~entries.any(axis=1)
    elsewhere = (entries & ~sums[:, :, np.newaxis]).any(axis=1)
    return np.asarray((~sums & ~elsewhere).any(axis=1))
