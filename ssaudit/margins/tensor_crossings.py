"""Gain factors at which a loop of several channels meets the boundary, from one eigenproblem.

A pole on the axis means that A(κ) X + X A(κ)ᵀ = 0 has a symmetric solution X ≠ 0, where A(κ) =
A - κ B (I + κD)⁻¹ C. Taken as a feedback through U = κ (I + κD)⁻¹ C X around the Lyapunov
operator, this is an ordinary eigenproblem of size (channels × states) for 1/κ.
"""

import numpy as np

from ssaudit.margins.state_space import (
    Index,
    Real,
    StateSpace,
    feed_back,
    respond_with_slope,
)
from ssaudit.modes.poles import find_poles, isolate

# The Lyapunov operator has n (n + 1)/2 rows: 820 for 40 states, 60 ms and 5 MB a point.
MOST_STATES = 40
# Numbers held at once while the operator is built; points are taken in parts of this size.
MOST_NUMBERS = 20_000_000
# An eigenvalue this far from the real axis, relative, is still tried.
NEAR_REAL = 1e-4
# Eigenvalues smaller than this, relative, stand for κ = inf.
SMALLEST = 1e-13
NEWTON_STEPS = 6
SETTLED = 1e-8


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
    return _settle(T, owner, w, change)


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
    """Frequency of the pole nearest to the axis at each factor."""
    poles, _ = find_poles(feed_back(T[owner], change).A)
    nearest = np.abs(poles.real).argmin(axis=1) if len(poles) else np.zeros(0, dtype=int)
    return np.abs(np.take_along_axis(poles, nearest[:, None], axis=1)[:, 0].imag)


def _settle(T: StateSpace, owner: Index, w: Real, change: Real) -> tuple[Index, Real, Real]:
    """Newton steps on det(I + κ T(jω)) = 0 in both unknowns; what does not settle goes."""
    still = np.ones(len(owner), dtype=bool)
    for _ in range(NEWTON_STEPS):
        step_w, step_change = _newton_step(T, owner, w, change)
        with np.errstate(invalid="ignore"):
            still = (np.abs(step_w) <= SETTLED * w) & (np.abs(step_change) <= SETTLED * abs(change))
        # Exactly on the root the inverse does not exist: nothing is left to do there.
        still |= ~np.isfinite(step_w) & np.isfinite(w)
        w = w + np.where(np.isfinite(step_w), step_w, 0.0)
        change = change + np.where(np.isfinite(step_change), step_change, 0.0)
    still &= (w > 0) & (change != 0)
    return owner[still], w[still], change[still]


def _newton_step(T: StateSpace, owner: Index, w: Real, change: Real) -> tuple[Real, Real]:
    """Find the steps of ω and κ that make the determinant zero to first order."""
    response, slope = respond_with_slope(T, owner, w)
    loop = np.eye(T.D.shape[-1]) + change[:, None, None] * response
    (solved,), _ = isolate(
        lambda M, R: (np.linalg.solve(M, R),), loop, np.concatenate([slope, response], axis=2)
    )
    m = T.D.shape[-1]
    by_w = change * np.trace(solved[:, :, :m], axis1=1, axis2=2)
    by_change = np.trace(solved[:, :, m:], axis1=1, axis2=2)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        determinant = by_w.real * by_change.imag - by_w.imag * by_change.real
        return -by_change.imag / determinant, by_w.imag / determinant
