"""Neutral states: a heading or a position that nothing depends on, set apart exactly."""

import numpy as np
from numpy.typing import NDArray


def neutral_states(
    A: NDArray[np.float64], named: NDArray[np.int64], sampled: bool
) -> NDArray[np.bool_]:
    """Find which of the named states nothing depends on.

    Such a state only sums up the others: its column is exactly zero (of A - I, when sampled), and
    leaving out its row and column leaves all other poles what they are. A named state that
    something does depend on, because the loop feeds it back, is not neutral and stays.

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
    if len(named):
        columns = A[:, :, named]
        if sampled:
            columns = columns - np.eye(A.shape[1])[:, named]
        found[:, named] = ~columns.any(axis=1)
    return found
