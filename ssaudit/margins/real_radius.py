"""Smallest real perturbation of A that loses stability."""

import numpy as np
from numpy.typing import ArrayLike

from ssaudit.margins.peak_search import find_peak, near_axis
from ssaudit.margins.resolvent import boundary_frequencies
from ssaudit.margins.stability_radius import StabilityRadius
from ssaudit.margins.state_matrices import find_stable, finite_points, read_models, scale_models
from ssaudit.margins.state_space import Bool, Index, Real, join
from ssaudit.modes.poles import find_poles, isolate

# Stated accuracy of the radius: no frequency has a value smaller than (1 - REAL_RTOL) of it.
REAL_RTOL = 1e-6
# Roundings of the size of sI - A that a radius may be off by: over up to twelve decades none of
# some thousand models with a known radius was off by more than 1.4 of them.
ROUNDINGS = 4.0
# The eigenproblem has 4 n (sampled: 8 n) rows; beyond 40 states it is no longer worth its time.
MOST_STATES = 40
# The best multiplier γ lies in (0, 1]; below e^-SMALLEST_LOG it no longer changes the value.
SMALLEST_LOG = 25.0
# Golden-section steps: 0.618^62 of 25 is 3e-12, and the value is flat at its maximum.
GOLDEN_STEPS = 62
# Enough (25 to 0.03) where it is only to be shown that a frequency is not the worst.
ROUGH_STEPS = 14
GOLDEN = (np.sqrt(5) - 1) / 2


def find_real_radius(A: ArrayLike, dt: float = 0.0, *, scaled: bool = False) -> StabilityRadius:
    """Smallest real perturbation of A that puts a pole on the boundary.

    Parameters
    ----------
    A : (points, n, n) float
        Closed-loop state matrices [1/s when continuous].
    dt : float
        Sampling time [s]; 0 means continuous.
    scaled : bool
        Whether to balance the states first, so that those in odd units do not dominate.

    Returns
    -------
    StabilityRadius
        The radius within a relative tolerance of 1e-6 from above. Not confirmed where rounding of
        sI - A may hide more: where the radius is below some 1e-9 of the size of A. Models of more
        than 40 states get NaN and are not confirmed.

    References
    ----------
    Qiu, Bernhardsson, Rantzer, Davison, Young and Doyle, Automatica 31(6), 1995 (the value at a
    frequency); Sreedhar, Van Dooren and Tits, 1996 (level crossings at a held multiplier).

    Examples
    --------
    >>> A = np.array([[[-1.0, 2.0], [-2.0, -1.0]]])
    >>> find_real_radius(A).radius.round(6)  # -1 ± 2j: the diagonal must rise by 1
    array([1.])
    """
    models = read_models(A)
    models = scale_models(models) if scaled else models
    poles, stable = find_stable(models, dt)
    radius = np.full(len(models), np.nan)
    frequency = radius.copy()
    confirmed = finite_points(models)
    chosen = np.nonzero(stable)[0]
    if models.shape[-1] > MOST_STATES:
        confirmed[:] = False
    elif len(chosen):
        curve = RealCurve(models[chosen], dt)
        norm = np.linalg.norm(models[chosen], axis=(1, 2))
        upper = 2 * norm if dt == 0 else np.full(len(chosen), np.pi)
        starts = boundary_frequencies(poles[chosen], dt)
        peak = find_peak(curve, starts, upper, upper / 2, REAL_RTOL)
        radius[chosen] = 1 / peak.value
        # Singular values have an absolute error, of the size of their matrix.
        size = norm + (np.abs(peak.frequency) if dt == 0 else np.sqrt(models.shape[-1]))
        hidden = ROUNDINGS * np.finfo(float).eps * size * peak.value
        confirmed[chosen] = peak.confirmed & (hidden <= REAL_RTOL)
        frequency[chosen] = peak.frequency / (dt or 1.0)
    return StabilityRadius(radius, frequency, stable, confirmed)


class RealCurve:
    """1/ν(ω), where ν = max over γ of the second smallest singular value of P_γ(sI - A).

    P_γ(X) = [[Re X, -γ Im X], [Im X / γ, Re X]] with γ in (0, 1]; ν is the size of the smallest
    real perturbation that puts a pole at s. Any γ gives a lower bound of ν.

    Parameters
    ----------
    A : (points, n, n) float
    dt : float
        Sampling time [s]; 0 means continuous. Frequencies are in rad/s, of sampled models angles
        in rad.

    References
    ----------
    Qiu, Bernhardsson, Rantzer, Davison, Young and Doyle, Automatica 31(6), 1995.

    Examples
    --------
    >>> curve = RealCurve(np.array([[[-2.0]]]), 0.0)
    >>> curve.hold(np.array([0]), np.zeros(1), np.ones((1, 1)))
    array([0.5])
    """

    tunable = True

    def __init__(self, A: Real, dt: float) -> None:
        self.A, self.dt = A, dt

    def blocks(self, owner: Index, w: Real, gamma: Real) -> Real:
        """P_γ(sI - A) at boundary frequencies."""
        identity = np.eye(self.A.shape[-1])
        real = np.zeros_like(w) if self.dt == 0 else np.cos(w)
        imaginary = w if self.dt == 0 else np.where(w == np.pi, 0.0, np.sin(w))
        across = identity * (imaginary * gamma)[:, None, None]
        down = identity * (imaginary / gamma)[:, None, None]
        along = real[:, None, None] * identity - self.A[owner]
        return join(along, -across, down, along)

    def hold(self, owner: Index, w: Real, multiplier: Real) -> Real:
        """Upper bounds at frequencies by given multipliers."""
        if len(owner) == 0:
            return np.zeros(0)
        blocks = self.blocks(owner, w, multiplier[:, 0])
        (sigma,), _ = isolate(lambda M: (np.linalg.svd(M, compute_uv=False),), blocks)
        with np.errstate(divide="ignore"):
            return np.asarray(1 / sigma[:, -2])

    def guess(self, owner: Index, w: Real) -> Real:
        """γ = 1, which stands for complex perturbations."""
        return np.ones((len(owner), 1))

    def tune(self, owner: Index, w: Real, floor: Real) -> tuple[Real, Real]:
        """Values and best multipliers: the second smallest singular value has one peak in γ."""
        value, gamma = np.full(len(owner), np.inf), np.ones((len(owner), 1))
        left = np.arange(len(owner))
        for steps in (ROUGH_STEPS, GOLDEN_STEPS):
            value[left], gamma[left] = self._search_golden(owner[left], w[left], steps)
            left = np.nonzero(~(value <= floor))[0]
        return value, gamma

    def _search_golden(self, owner: Index, w: Real, steps: int) -> tuple[Real, Real]:
        """Golden-section search for the least 1/σ over log γ."""
        low, high = np.full(len(owner), -SMALLEST_LOG), np.zeros(len(owner))
        x = np.stack([high - GOLDEN * (high - low), low + GOLDEN * (high - low)])
        value = np.stack([self.hold(owner, w, np.exp(each)[:, None]) for each in x])
        for _ in range(steps):
            left = value[0] <= value[1]
            low, high = np.where(left, low, x[0]), np.where(left, x[1], high)
            fresh = np.where(left, high - GOLDEN * (high - low), low + GOLDEN * (high - low))
            fresh_value = self.hold(owner, w, np.exp(fresh)[:, None])
            x = np.where(left, [fresh, x[0]], [x[1], fresh])
            value = np.where(left, [fresh_value, value[0]], [value[1], fresh_value])
        return self._choose(owner, w, *x, *value)

    def _choose(self, owner: Index, w: Real, *found: Real) -> tuple[Real, Real]:
        """Take the best of both last multipliers and of γ = 1, the end of the range."""
        logs = np.stack([found[0], found[1], np.zeros(len(owner))])
        values = np.stack([found[2], found[3], self.hold(owner, w, np.ones((len(owner), 1)))])
        best = np.nan_to_num(values, nan=np.inf).argmin(axis=0)[None]
        gamma = np.exp(np.take_along_axis(logs, best, axis=0)[0])
        return np.take_along_axis(values, best, axis=0)[0], gamma[:, None]

    def cross(self, owner: Index, multiplier: Real, level: Real) -> tuple[Real, Bool]:
        """Frequencies where a singular value of P_γ equals 1/level."""
        if self.dt == 0:
            return self._cross_axis(owner, multiplier[:, 0], 1 / level)
        return self._cross_circle(owner, multiplier[:, 0], 1 / level)

    def _cross_axis(self, owner: Index, gamma: Real, sigma: Real) -> tuple[Real, Bool]:
        """[[-σ, P], [Pᵀ, -σ]] = F0 + w F1 is singular; F1 is a permutation scaled by γ."""
        A = self.A[owner]
        n = A.shape[-1]
        along = join(-A, np.zeros_like(A), np.zeros_like(A), -A)
        sized = np.eye(2 * n) * sigma[:, None, None]
        F0 = join(-sized, along, along.swapaxes(1, 2), -sized)
        J = quarter_turn(n, gamma)
        F1 = join(np.zeros_like(J), J, J.swapaxes(1, 2), np.zeros_like(J))
        (inverted,), _ = isolate(lambda P, Q: (np.linalg.solve(P, Q),), F1, -F0)
        eigenvalues, _ = find_poles(inverted)
        return near_axis(1j * eigenvalues)

    def _cross_circle(self, owner: Index, gamma: Real, sigma: Real) -> tuple[Real, Bool]:
        """Do the same on the circle, quadratic in t = tan(w/2): Q0 + t Q1 + t² Q2 is singular."""
        A = self.A[owner]
        n = A.shape[-1]
        nothing, identity = np.zeros_like(A), np.eye(n)
        sized = np.eye(2 * n) * sigma[:, None, None]
        ends = []
        for sign in (1.0, -1.0):
            along = join(sign * identity - A, nothing, nothing, sign * identity - A)
            ends.append(join(-sized, along, along.swapaxes(1, 2), -sized))
        J = 2 * quarter_turn(n, gamma)
        Q1 = join(np.zeros_like(J), J, J.swapaxes(1, 2), np.zeros_like(J))
        right = np.concatenate([-ends[0], -Q1], axis=2)
        (solved,), _ = isolate(lambda P, Q: (np.linalg.solve(P, Q),), ends[1], right)
        shift = np.concatenate([np.zeros_like(Q1), np.broadcast_to(np.eye(4 * n), Q1.shape)], 2)
        eigenvalues, _ = find_poles(np.concatenate([shift, solved], axis=1))
        t, failed = near_axis(1j * eigenvalues)
        return 2 * np.arctan(t), failed


def quarter_turn(n: int, gamma: Real) -> Real:
    """Build the matrices [[0, -γ I], [I/γ, 0]].

    Parameters
    ----------
    n : int
        States.
    gamma : (count,) float

    Returns
    -------
    (count, 2n, 2n) float

    Examples
    --------
    >>> quarter_turn(1, np.array([0.5]))
    array([[[ 0. , -0.5],
            [ 2. ,  0. ]]])
    """
    identity = np.eye(n)
    nothing = np.zeros((len(gamma), n, n))
    column = gamma[:, None, None]
    return join(nothing, -column * identity, identity / column, nothing)
