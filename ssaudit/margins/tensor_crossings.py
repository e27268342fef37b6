"""Gain factors at which a loop of several channels meets the boundary, from one eigenproblem.

A pole on the axis means that A(κ) X + X A(κ)ᵀ = 0 has a symmetric solution X ≠ 0, where A(κ) =
A - κ B (I + κD)⁻¹ C. Taken as a feedback through U = κ (I + κD)⁻¹ C X around the Lyapunov
operator, this is an ordinary eigenproblem of size (channels × states) for 1/κ.
"""

import numpy as np

from ssaudit.margins.responses import respond_with_slope
from ssaudit.margins.state_space import Index, Real, StateSpace, feed_back
from ssaudit.modes.poles import find_poles, isolate

# The Lyapunov operator has n (n + 1)/2 rows: 820 for 40 states, 60 ms and 5 MB a point.
MOST_STATES = 40
# Numbers held at once while the operator is built; points are taken in parts of this size.
MOST_NUMBERS = 20_000_000
# An eigenvalue this far from the real axis, relative, is still tried.
NEAR_REAL = 1e-4
# Eigenvalues smaller than this, relative, stand for κ = inf.
SMALLEST = 1e-13
# At a crossing a pole is this near to the axis, relative to its size, before Newton steps.
NEAR_AXIS = 0.05
NEWTON_STEPS = 6
SETTLED = 1e-8
# A step this small, relative, is the last one: the next would be as its square.
AT_REST = 1e-9
# Small beside rounding, and irregular.
NUDGE = 3.7e-17 + 1.3e-16j
# Crossings found more than once agree to this; singular values below that, relative, are zero.
SAME = 1e-8
SINGULAR = 1e-7


def find_gain_crossings(T: StateSpace) -> tuple[Index, Real, Real]:
    """Find the changes κ of the factor, from where T was closed, that put a pole on the axis.

    Parameters
    ----------
    T : StateSpace
        Loops closed through some factor, continuous, without poles on the axis there.

    Returns
    -------
    owner : (count,) int
    w : (count,) float
        Where the pole meets the axis [rad/s], positive; poles at zero and infinity are not here.
    change : (count,) float
        κ.

    References
    ----------
    Fuller, J. Math. Anal. Appl. 23, 1968 (sums of pairs of eigenvalues by Kronecker products).

    Examples
    --------
    >>> A = np.array([[[-1.0, 1.0, 0.0], [0.0, -1.0, 1.0], [0.0, 0.0, -1.0]]])
    >>> B, C = np.array([[[0.0], [0.0], [1.0]]]), np.array([[[1.0, 0.0, 0.0]]])
    >>> find_gain_crossings(StateSpace(A, B, C, np.zeros((1, 1, 1))))[2].round(9)
    array([8.])
    """
    n = T.A.shape[-1]
    width = n * (n + 1) // 2 * n * n * 3
    part = max(1, MOST_NUMBERS // width)
    stacks = [_solve(T[first : first + part]) for first in range(0, len(T), part)]
    mu = np.concatenate(stacks) if stacks else np.zeros((0, 1))
    owner, column = np.nonzero(~np.isnan(mu))
    change = 1 / mu[owner, column]
    w = _frequencies(T, owner, change)
    likely = np.nonzero(w > 0)[0]
    owner, w, change = owner[likely], w[likely], change[likely]
    return _once_each(T, *_settle(T, owner, w, change))


def _solve(T: StateSpace) -> Real:
    """Real eigenvalues 1/κ, NaN-padded."""
    points, n, m = T.B.shape
    X = _solve_lyapunov(T)
    Y = (T.C[:, None] @ X).reshape(points, m * n, m * n).swapaxes(1, 2)
    matrix = Y - np.kron(T.D, np.eye(n)[None])
    mu, _ = find_poles(matrix)
    size = np.abs(mu)
    large = size > SMALLEST * size.max(axis=1, keepdims=True)
    return np.where(large & (np.abs(mu.imag) <= NEAR_REAL * size), mu.real, np.nan)


def _solve_lyapunov(T: StateSpace) -> Real:
    """Symmetric X of A X + X Aᵀ = B U + (B U)ᵀ for each unit U (points, m n, n, n)."""
    points, n, m = T.B.shape
    row, column = np.triu_indices(n)
    basis = np.zeros((len(row), n, n))
    basis[np.arange(len(row)), row, column] = 1
    basis[np.arange(len(row)), column, row] = 1
    applied = T.A[:, None] @ basis
    applied = applied + applied.swapaxes(2, 3)
    operator = applied[:, :, row, column].swapaxes(1, 2)
    unit = np.eye(m * n).reshape(m * n, m, n)
    right = T.B[:, None] @ unit
    right = (right + right.swapaxes(2, 3))[:, :, row, column].swapaxes(1, 2)
    (solved,), _ = isolate(lambda M, R: (np.linalg.solve(M, R),), operator, right)
    X = np.empty((points, m * n, n, n))
    X[:, :, row, column] = X[:, :, column, row] = solved.swapaxes(1, 2)
    return X


def _frequencies(T: StateSpace, owner: Index, change: Real) -> Real:
    """Frequency of the pole nearest to the axis, for its size, at each factor; NaN if none is near.

    Where none is, two poles stand opposite one another about the origin, which is no crossing.
    """
    poles, _ = find_poles(feed_back(T[owner], change).A)
    upper = np.where(poles.imag > 0, poles, np.nan)
    angle = np.nan_to_num(np.abs(upper.real) / np.abs(upper), nan=np.inf)
    nearest = angle.argmin(axis=1)[:, None]
    w = np.take_along_axis(upper, nearest, axis=1)[:, 0].imag
    return np.where(np.take_along_axis(angle, nearest, axis=1)[:, 0] < NEAR_AXIS, w, np.nan)


def _settle(T: StateSpace, owner: Index, w: Real, change: Real) -> tuple[Index, Real, Real]:
    """Newton steps on det(I + κ T(jω)) = 0 in both unknowns; what does not settle goes."""
    w, change = w.copy(), change.copy()
    still, moving = np.ones(len(owner), dtype=bool), np.arange(len(owner))
    for _ in range(NEWTON_STEPS):
        step_w, step_change = _newton_step(T, owner[moving], w[moving], change[moving])
        with np.errstate(divide="ignore", invalid="ignore"):
            size = np.maximum(np.abs(step_w) / w[moving], np.abs(step_change / change[moving]))
        # Exactly on the root the inverse does not exist: nothing is left to do there.
        size[~np.isfinite(step_w) & np.isfinite(w[moving])] = 0
        still[moving] = size <= SETTLED
        w[moving] += np.where(np.isfinite(step_w), step_w, 0.0)
        change[moving] += np.where(np.isfinite(step_change), step_change, 0.0)
        moving = moving[~(size <= AT_REST)]
        if len(moving) == 0:
            break
    still &= (w > 0) & (change != 0)
    return owner[still], w[still], change[still]


def _once_each(T: StateSpace, owner: Index, w: Real, change: Real) -> tuple[Index, Real, Real]:
    """Crossings in order of the factor, each as often as there are poles in its place."""
    order = np.lexsort((w, change, owner))
    owner, w, change = owner[order], w[order], change[order]
    alike = np.diff(owner) == 0
    alike &= np.diff(change) <= SAME * np.abs(change[1:])
    alike &= np.abs(np.diff(w)) <= SAME * w[1:]
    first = np.append(True, ~alike)[: len(owner)]
    times = first.astype(np.intp)
    repeated = np.nonzero(first & np.append(alike, False)[: len(owner)])[0]
    if len(repeated):
        response, _ = respond_with_slope(T, owner[repeated], w[repeated], slope=False)
        loop = np.eye(T.D.shape[-1]) + change[repeated, None, None] * response
        sizes = np.linalg.svd(loop, compute_uv=False)
        times[repeated] = (sizes <= SINGULAR * np.maximum(sizes[:, :1], 1.0)).sum(axis=1).clip(1)
    return np.repeat(owner, times), np.repeat(w, times), np.repeat(change, times)


def _newton_step(T: StateSpace, owner: Index, w: Real, change: Real) -> tuple[Real, Real]:
    """Find the steps of ω and κ that make the determinant zero to first order."""
    response, slope = respond_with_slope(T, owner, w)
    # The nudge keeps matrices from being singular exactly, which would stop the whole stack.
    loop = (1 + NUDGE) * np.eye(T.D.shape[-1]) + change[:, None, None] * response
    (solved,), _ = isolate(
        lambda M, R: (np.linalg.solve(M, R),), loop, np.concatenate([slope, response], axis=2)
    )
    m = T.D.shape[-1]
    by_w = change * np.trace(solved[:, :, :m], axis1=1, axis2=2)
    by_change = np.trace(solved[:, :, m:], axis1=1, axis2=2)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        determinant = by_w.real * by_change.imag - by_w.imag * by_change.real
        return -by_change.imag / determinant, by_w.imag / determinant
