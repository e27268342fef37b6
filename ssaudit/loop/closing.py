"""Closing the models: stacked A, B, C, D and gains to the closed-loop state matrices."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ssaudit.loop.assembly import OpenLoop
from ssaudit.modes.poles import isolate

Array = NDArray[np.float64]
# I - σKD counts as singular when its reciprocal condition number, in the best of units, is below
# this many units of roundoff a row: the closed loop would have no correct digit.
SINGULAR_ROUNDOFFS = 4.0


@dataclass(frozen=True, eq=False)
class ClosedModels:
    """Closed-loop models of some points.

    Attributes
    ----------
    A : (points, n, n) float
        Closed-loop state matrices; zero where a point is void.
    void : (points,) object
        Why a point could not be closed or used, as str; "" where it was.
    held : (points,) bool
        Where the gain table's edge value was held.
    K : (points or 1, inputs, signals) float or None
        Gains as they close ``open``; None for models that come closed.
    open : OpenLoop or None
        What the gains close, where it is more than the plant: parts, sampling, compensator.
    states : tuple of str
        Names of the states of A.
    dt : float
        Sampling time [s] of A; 0 when continuous.
    """

    A: Array
    void: NDArray[np.object_]
    held: NDArray[np.bool_]
    K: Array | None = None
    open: OpenLoop | None = None
    states: tuple[str, ...] = ()
    dt: float = 0.0

    def at(self, rows: NDArray[np.int64]) -> "ClosedModels":
        """Return the models of some points."""
        K = self.K if self.K is None or len(self.K) == 1 else self.K[rows]
        opened = None if self.open is None else self.open.at(rows)
        of_points = (self.A[rows], self.void[rows], self.held[rows])
        return ClosedModels(*of_points, K, opened, self.states, self.dt)


def close_state_feedback(A: Array, B: Array, K: Array, sign: int) -> Array:
    """Closed-loop state matrices A + σ B K of models under u = σ K x.

    Parameters
    ----------
    A : (points, n, n) float
        State matrices.
    B : (points, n, inputs) float
        Input matrices.
    K : (points, inputs, n) or (1, inputs, n) float
        Gains.
    sign : int
        σ: -1 for u = -K x, +1 for u = +K x.

    Returns
    -------
    (points, n, n) float

    Examples
    --------
    >>> close_state_feedback(np.array([[[1.0]]]), np.array([[[2.0]]]), np.array([[[3.0]]]), -1)
    array([[[-5.]]])
    """
    feedback = np.matmul(B, K)
    return np.add(A, feedback) if sign > 0 else np.subtract(A, feedback)


def close_output_feedback(
    A: Array, B: Array, C: Array, D: Array, K: Array, sign: int
) -> tuple[Array, NDArray[np.bool_]]:
    """Closed-loop state matrices of models under u = σ K y, y = C x + D u.

    Parameters
    ----------
    A : (points, n, n) float
        State matrices.
    B : (points, n, inputs) float
        Input matrices.
    C : (points, outputs, n) float
        Output matrices.
    D : (points, outputs, inputs) float
        Feedthrough matrices.
    K : (points, inputs, outputs) or (1, inputs, outputs) float
        Gains.
    sign : int
        σ: -1 for u = -K y, +1 for u = +K y.

    Returns
    -------
    closed : (points, n, n) float
        A + σ B (I - σ K D)⁻¹ K C; NaN where the algebraic loop is ill-posed.
    ill_posed : (points,) bool
        Where I - σ K D is singular to working precision.

    References
    ----------
    Well-posedness of feedback: Zhou, Doyle & Glover, Robust and Optimal Control (1996), Lemma 5.1
    (from memory).

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> close_output_feedback(-one, one, one, one, one, -1)
    (array([[[-1.5]]]), array([False]))
    """
    if not np.any(D):
        return close_state_feedback(A, B, np.matmul(K, C), sign), np.zeros(len(A), dtype=bool)
    loop = np.eye(B.shape[2]) - sign * np.matmul(K, D)
    ill_posed = _singular(loop, np.eye(B.shape[2]) + np.abs(K) @ np.abs(D))
    commanded = np.broadcast_to(np.matmul(K, C), (len(A), B.shape[2], A.shape[2]))
    safe = np.where(ill_posed[:, np.newaxis, np.newaxis], np.eye(B.shape[2]), loop)
    (effective,), failed = isolate(lambda m, r: (np.linalg.solve(m, r),), safe, commanded)
    ill_posed = ill_posed | failed
    effective[ill_posed] = np.nan
    return close_state_feedback(A, B, effective, sign), ill_posed


def _singular(loop: Array, size: Array) -> NDArray[np.bool_]:
    """Where a stack of I - σKD is singular to working precision, in whatever units.

    The spectral radius of abs(inverse) size, with size = I + abs(K) abs(D) the magnitude of what
    was added up, is the least condition number that any choice of units gives (Bauer, Optimally
    scaled matrices, Numer. Math. 5, 1963; from memory).
    """
    (inverse,), failed = isolate(lambda stack: (np.linalg.inv(stack),), loop)
    (values,), lost = isolate(
        lambda stack: (np.abs(np.linalg.eigvals(stack)),), np.abs(inverse) @ size
    )
    limit = SINGULAR_ROUNDOFFS * loop.shape[-1] * np.finfo(float).eps
    return np.asarray(failed | lost | ~(values.max(axis=1) * limit < 1.0))
