"""Stable inside, or only as seen from outside: modes that no input reaches or no output shows."""

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from ssaudit.modes.hidden import UNKNOWN, hidden_modes, stable_from_outside
from ssaudit.modes.poles import find_modes, isolate

Floats = NDArray[np.float64]


def seen_from_outside(
    closed: Floats,
    matrices: Mapping[str, Floats],
    K: Floats | None,
    *,
    sign: int,
    feed: str,
    entry_error: Floats | None,
    dt: float,
) -> NDArray[np.int8]:
    """Whether lost models give bounded outputs for bounded inputs all the same.

    Parameters
    ----------
    closed : (points, n, n) float
        Closed-loop state matrices of models that are not stable.
    matrices : dict of (points, rows, columns) float
        The matrices that they were closed from.
    K : (points or 1, inputs, signals) float or None
        The gains; None when they came closed.
    sign : int
        σ of u = σ K y.
    feed : str
        "states", "outputs" or "none".
    entry_error : (points, n, n) float or None
        How far each entry of ``closed`` may be off.
    dt : float
        Sampling time [s]; 0 for continuous models.

    Returns
    -------
    (points,) int8
        1 yes, 0 no, -1 unknown, or no input or output matrix to tell by.

    Examples
    --------
    >>> A = np.array([np.diag([-1.0, 2.0])])
    >>> parts = {"A": A, "B": np.array([[[1.0], [0.0]]]), "C": np.array([[[1.0, 1.0]]])}
    >>> seen_from_outside(A, parts, None, sign=-1, feed="none", entry_error=None, dt=0.0)
    array([1], dtype=int8)
    """
    if not len(closed) or "B" not in matrices or "C" not in matrices:
        return np.full(len(closed), UNKNOWN, dtype=np.int8)
    poles, right, left, _ = find_modes(closed)
    beyond = np.abs(poles) >= 1 if dt > 0 else poles.real >= 0
    C = closed_outputs(matrices, K, sign, feed)
    found = hidden_modes(
        closed, matrices["B"], C, poles, right, left, chosen=beyond, entry_error=entry_error
    )
    answer = np.asarray(stable_from_outside(beyond, found), dtype=np.int8)
    # Poles so close to the boundary that rounding hides which side they are on tell nothing.
    answer[~beyond.any(axis=1)] = UNKNOWN
    return answer


def closed_outputs(
    matrices: Mapping[str, Floats], K: Floats | None, sign: int, feed: str
) -> Floats:
    """Output matrices of the closed loop, C + σ D L with u = σ L x.

    Parameters
    ----------
    matrices, K, sign, feed
        As for `seen_from_outside`.

    Returns
    -------
    (points, outputs, n) float
    """
    C, D = matrices["C"], matrices.get("D")
    if K is None or D is None or not D.any():
        return C
    if feed == "states":
        return np.asarray(C + sign * np.matmul(D, K))
    loop = np.eye(D.shape[2]) - sign * np.matmul(K, D)
    commanded = np.broadcast_to(np.matmul(K, C), (len(C), D.shape[2], C.shape[2]))
    (effective,), _ = isolate(lambda m, r: (np.linalg.solve(m, r),), loop, commanded)
    return np.asarray(C + sign * np.matmul(D, effective))
