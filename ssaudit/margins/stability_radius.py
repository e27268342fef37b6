"""Smallest complex perturbation of A that loses stability, and the perturbation itself."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from ssaudit.errors import BankError
from ssaudit.margins.balance import balance_states, resolvent_of
from ssaudit.margins.peak_search import (
    BACKWARD,
    Peak,
    PlainNorm,
    cover_left,
    fill_in,
    find_peak,
    near_axis,
)
from ssaudit.margins.state_space import Bool, Complex, Index, Real, to_modes, unwarp
from ssaudit.modes.poles import find_poles, isolate

# Stated accuracy of the radius: no frequency has a value smaller than (1 - RADIUS_RTOL) of it.
RADIUS_RTOL = 1e-7
# What rounding of an eigenproblem may hide of that, so that nothing worse is left unseen.
HIDDEN = 0.1 * RADIUS_RTOL
# Limits of the last way: pieces of one point, halvings, and what stands for no singular value.
MOST_CELLS = 20_000
MOST_HALVINGS = 60
TINY = 1e-300
# Tolerance of the last way, and most of what rounding may add: there, eigenvectors that depend on
# each other leave no more digits.
LAST_RTOL = 5e-6
# Corrections of the eigenvectors that are tried where rounding hides a peak.
CORRECTIONS = 2
# Real shifts, off the unit circle, at which the sampled pencil is inverted; the one farthest
# from the poles and their mirror images is taken.
SHIFTS = np.array([0.0, 0.33, -0.33, 0.61, -0.61, 1.47, -1.47, 2.9, -2.9])


@dataclass(frozen=True)
class StabilityRadius:
    """How much the closed A of each point may change before stability is lost.

    Attributes
    ----------
    radius : (points,) float
        Spectral norm of the smallest destabilising perturbation, in the units of A; NaN where
        the model is not stable (no margin is defined) or not confirmed.
    frequency : (points,) float
        Where the pole meets the boundary [rad/s].
    stable : (points,) bool
        Whether the model itself is stable.
    confirmed : (points,) bool
        False where the numbers do not decide.
    """

    radius: Real
    frequency: Real
    stable: Bool
    confirmed: Bool


def read_models(A: ArrayLike) -> Real:
    """Check that state matrices are a stack of square ones.

    Parameters
    ----------
    A : (points, n, n) float

    Returns
    -------
    (points, n, n) float

    Raises
    ------
    ssaudit.errors.BankError
        When they are not.

    Examples
    --------
    >>> read_models([[[-1.0]]]).shape
    (1, 1, 1)
    """
    stack = np.asarray(A, dtype=float)
    if stack.ndim != 3 or stack.shape[1] != stack.shape[2] or stack.shape[1] == 0:
        raise BankError(
            f"state matrices have shape {stack.shape}", do="give (points, n, n) with n > 0"
        )
    return stack


def finite_points(*stacks: Real) -> Bool:
    """Points at which all entries of the stacks are finite.

    Parameters
    ----------
    *stacks : (points, rows, columns) float

    Returns
    -------
    (points,) bool

    Examples
    --------
    >>> finite_points(np.array([[[1.0]], [[np.nan]]]))
    array([ True, False])
    """
    return np.asarray(np.all([np.isfinite(s).all(axis=(1, 2)) for s in stacks], axis=0))


def find_stable(A: Real, dt: float) -> tuple[Complex, Bool]:
    """Poles of a stack, and which models are stable (on the boundary is not).

    Parameters
    ----------
    A : (points, n, n) float
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    poles : (points, n) complex
    stable : (points,) bool
        False where the poles could not be found.

    Examples
    --------
    >>> find_stable(np.array([[[-1.0]], [[0.0]]]), 0.0)[1]
    array([ True, False])
    """
    poles, _ = find_poles(A)
    inside = poles.real < 0 if dt == 0 else np.abs(poles) < 1
    return poles, np.asarray(inside.all(axis=1))


def find_stability_radius(
    A: ArrayLike, dt: float = 0.0, *, scaled: bool = False
) -> StabilityRadius:
    """Smallest complex perturbation of A that puts a pole on the boundary.

    Parameters
    ----------
    A : (points, n, n) float
        Closed-loop state matrices [1/s when continuous].
    dt : float
        Sampling time [s]; 0 means continuous, and the boundary is the imaginary axis, else the
        unit circle.
    scaled : bool
        Whether to balance the states first, so that those in odd units do not dominate.

    Returns
    -------
    StabilityRadius
        The radius within a relative tolerance of 1e-7 from above; of 1e-6 where slow poles beside
        fast ones leave no more digits, and of 1e-5 where eigenvectors that depend on each other
        do not.

    References
    ----------
    Byers, SIAM J. Sci. Stat. Comput. 9(5), 1988; He and Watson, SIAM J. Matrix Anal. Appl. 20,
    1999; level sets by Boyd and Balakrishnan, Systems & Control Letters 15, 1990.

    Examples
    --------
    >>> A = np.array([[[-1.0, 4.0], [0.0, -1.0]]])
    >>> find_stability_radius(A).radius.round(10)  # (sqrt(4² + 4) - 4)/2
    array([0.23606798])
    """
    models = read_models(A)
    if scaled:
        models = scale_models(models)
    poles, stable = find_stable(models, dt)
    radius = np.full(len(models), np.nan)
    frequency = radius.copy()
    confirmed = finite_points(models)
    chosen = np.nonzero(stable)[0]
    if len(chosen):
        peak = _search(models[chosen], poles[chosen], dt)
        radius[chosen], confirmed[chosen] = 1 / peak.value, peak.confirmed
        frequency[chosen] = peak.frequency
    return StabilityRadius(radius, frequency, stable, confirmed)


def _search(A: Real, poles: Complex, dt: float) -> Peak:
    """Peak of the resolvent by level sets, and by a cover where rounding spoils those."""
    curve = Resolvent(A, poles, dt)
    norm = np.linalg.norm(A, axis=(1, 2))
    upper = 2 * norm if dt == 0 else np.full(len(A), np.pi)
    peak = find_peak(curve, boundary_frequencies(poles, dt), upper, upper / 2, RADIUS_RTOL)
    with np.errstate(all="ignore"):
        sure = peak.confirmed & (curve.hidden(peak.value * (1 + RADIUS_RTOL)) <= HIDDEN)
    frequency = np.where(sure, peak.frequency / (dt or 1.0), np.nan)
    peak = Peak(np.where(sure, peak.value, np.nan), frequency, sure)
    left = np.nonzero(~peak.confirmed)[0]
    if len(left):
        beside = A[left] - (np.eye(A.shape[-1]) if dt > 0 else 0.0)
        form = to_modes(resolvent_of(beside), sampled=dt > 0, steps=CORRECTIONS)
        nothing = np.full(len(left), np.nan)
        found = Peak(nothing, nothing.copy(), np.zeros(len(left), dtype=bool))
        cover_left(found, np.arange(len(left)), form, PlainNorm(), RADIUS_RTOL)
        fill_in(peak, left, Peak(found.value, unwarp(found.frequency, dt), found.confirmed))
    left = np.nonzero(~peak.confirmed)[0]
    if len(left):
        with np.errstate(all="ignore"):
            found = _cover_resolvent(Resolvent(A[left], poles[left], dt), upper[left])
        fill_in(peak, left, Peak(found.value, found.frequency / (dt or 1.0), found.confirmed))
    return peak


def _cover_resolvent(curve: "Resolvent", upper: Real) -> Peak:
    """Cover the boundary by what the resolvent itself tells of its neighbourhood.

    For eigenvectors that depend on each other. σ_min changes no faster than s moves, and so the
    resolvent's second derivative is bounded by twice its cube (on the circle its square more).
    """
    points = np.arange(len(upper))
    value, frequency = np.zeros(len(upper)), np.zeros(len(upper))
    owner, low, high = np.tile(points, 2), np.repeat([0.0, 0.5], len(points)), np.tile(upper, 2)
    low, high = low * high, high * (0.5 + low)
    ends = curve.hold(owner, low, low), curve.hold(owner, high, high)
    confirmed = np.ones(len(upper), dtype=bool)
    for _ in range(MOST_HALVINGS):
        middle = (low + high) / 2
        seen = curve.hold(owner, middle, middle)
        for x, found in ((low, ends[0]), (high, ends[1]), (middle, seen)):
            np.maximum.at(value, owner, found)
            best = np.nonzero(found == value[owner])[0]
            frequency[owner[best]] = x[best]
        halves = (low, middle, ends[0], seen), (middle, high, seen, ends[1])
        x, y, at_x, at_y = (np.concatenate(pair) for pair in zip(*halves, strict=True))
        owner, length = np.tile(owner, 2), y - x
        most = 1 / np.maximum((1 / at_x + 1 / at_y - length) / 2, TINY)
        bend = 2 * most**3 + (0 if curve.dt == 0 else most**2)
        level = value[owner] * (1 + LAST_RTOL)
        left = ~(np.maximum(at_x, at_y) + np.square(length) / 8 * bend <= level)
        many = np.bincount(owner[left], minlength=len(value)) > MOST_CELLS
        confirmed &= (curve.rounding(value) <= LAST_RTOL) & ~many
        left &= confirmed[owner]
        owner, low, high, ends = owner[left], x[left], y[left], (at_x[left], at_y[left])
        if len(owner) == 0:
            break
    confirmed[owner] = False
    return Peak(np.where(confirmed, value, np.nan), frequency, confirmed)


def scale_models(A: Real) -> Real:
    """Balance the states of each model.

    Parameters
    ----------
    A : (points, n, n) float

    Returns
    -------
    (points, n, n) float
        Similar matrices whose rows and columns are equal in size.

    Examples
    --------
    >>> scale_models(np.array([[[-1.0, 100.0], [0.01, -1.0]]])).round(9)
    array([[[-1.,  1.],
            [ 1., -1.]]])
    """
    scale = balance_states(A)
    return np.asarray(A * scale[:, None, :] / scale[:, :, None])


def boundary_frequencies(poles: Complex, dt: float) -> Real:
    """Frequencies worth looking at first: zero, and that of the pole nearest to the boundary.

    Parameters
    ----------
    poles : (points, n) complex
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    (points, 3) float
        [rad/s]; of sampled models the angle [rad], with the half sampling rate π too.

    Examples
    --------
    >>> boundary_frequencies(np.array([[-1 + 2j, -1 - 2j]]), 0.0)
    array([[ 0.,  2., nan]])
    """
    distance = -poles.real if dt == 0 else 1 - np.abs(poles)
    nearest = np.take_along_axis(poles, distance.argmin(axis=1)[:, None], axis=1)[:, 0]
    w = np.abs(nearest.imag) if dt == 0 else np.abs(np.angle(nearest))
    last = np.full(len(poles), np.nan if dt == 0 else np.pi)
    return np.stack([np.zeros(len(poles)), w, last], axis=1)


def shifted(A: Real, owner: Index, w: Real, dt: float) -> Complex:
    """Build the matrices sI - A at boundary frequencies.

    Parameters
    ----------
    A : (points, n, n) float
    owner : (count,) int
    w : (count,) float
        Frequency [rad/s], or angle [rad] of sampled models.
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    (count, n, n) complex

    Examples
    --------
    >>> shifted(np.array([[[-1.0]]]), np.array([0]), np.array([2.0]), 0.0)
    array([[[1.+2.j]]])
    """
    state = -A[owner].astype(complex)
    diagonal = np.arange(A.shape[-1])
    state[:, diagonal, diagonal] += (1j * w if dt == 0 else np.exp(1j * w))[:, None]
    return state


class Resolvent:
    """The curve 1/σ_min(sI - A) along the boundary, whose peak is the inverse of the radius."""

    tunable = False

    def __init__(self, A: Real, poles: Complex, dt: float) -> None:
        self.A, self.dt = A, dt
        mirrored = np.concatenate([poles, 1 / np.where(poles == 0, 1e-300, poles)], axis=1)
        gap = np.abs(mirrored[:, :, None] - SHIFTS).min(axis=1)
        self.shift = SHIFTS[gap.argmax(axis=1)]

    def hold(self, owner: Index, w: Real, multiplier: Real) -> Real:
        """Values at frequencies."""
        if len(owner) == 0:
            return np.zeros(0)
        state = shifted(self.A, owner, w, self.dt)
        (sigma,), _ = isolate(lambda M: (np.linalg.svd(M, compute_uv=False),), state)
        with np.errstate(divide="ignore"):
            return np.asarray(1 / sigma[:, -1])

    def guess(self, owner: Index, w: Real) -> Real:
        """There is no multiplier."""
        return np.zeros((len(owner), 0))

    def tune(self, owner: Index, w: Real, floor: Real) -> tuple[Real, Real]:
        """Values at frequencies; there is no multiplier."""
        nothing = self.guess(owner, w)
        return self.hold(owner, w, nothing), nothing

    def cross(self, owner: Index, multiplier: Real, level: Real) -> tuple[Real, Bool]:
        """Frequencies where σ_min, or another singular value, of sI - A equals 1/level."""
        gamma = (1 / level)[:, None, None] * np.eye(self.A.shape[-1])
        A = self.A[owner]
        if self.dt == 0:
            eigenvalues, _ = find_poles(join(A, -gamma, gamma, -A.swapaxes(1, 2)))
            return near_axis(eigenvalues)
        return self._cross_circle(A, gamma, self.shift[owner])

    def hidden(self, level: Real) -> Real:
        """How much of a singular value, relative to the level, rounding may hide."""
        rounding = 2 * self.A.shape[-1] * BACKWARD
        if self.dt == 0:
            return 2 * self.rounding(level)
        gamma = (1 / level)[:, None, None] * np.eye(self.A.shape[-1])
        at_shift, N = self._pencil(self.A, gamma, self.shift)
        # The inverted pencil K is that of one that differs by (M - shift N) times the change of K.
        (inverted,), _ = isolate(lambda P, Q: (np.linalg.solve(P, Q),), at_shift, N)
        size = np.linalg.norm(at_shift, axis=(1, 2)) * np.linalg.norm(inverted, axis=(1, 2))
        return np.asarray((1 + np.abs(self.shift)) * rounding * size * level)

    def rounding(self, value: Real) -> Real:
        """Error of a value from its singular value decomposition, relative."""
        size = np.linalg.norm(self.A, axis=(1, 2)) + (1 / value if self.dt == 0 else 1.0)
        return np.asarray(2 * self.A.shape[-1] * BACKWARD * size * value)

    @staticmethod
    def _pencil(A: Real, gamma: Real, shift: Real) -> tuple[Real, Real]:
        """M - shift N and N of the pencil M - zN, singular where σ_min of zI - A is gamma."""
        identity = np.broadcast_to(np.eye(A.shape[-1]), A.shape)
        nothing = np.zeros_like(A)
        M = join(A, gamma, nothing, identity)
        N = join(identity, nothing, gamma, A.swapaxes(1, 2))
        return M - shift[:, None, None] * N, N

    def _cross_circle(self, A: Real, gamma: Real, shift: Real) -> tuple[Real, Bool]:
        """Do the same on the unit circle: the pencil M - zN, inverted at a real shift."""
        at_shift, N = self._pencil(A, gamma, shift)
        (inverted,), _ = isolate(lambda P, Q: (np.linalg.solve(P, Q),), at_shift, N)
        mu, _ = find_poles(inverted)
        never = mu == 0  # z = inf, far from the circle
        z = shift[:, None] + 1 / np.where(never, 1.0, mu)
        return near_axis(np.log(np.where(never | (z == 0), 1e9, z)))


def join(a: Real, b: Real, c: Real, d: Real) -> Real:
    """Stack four blocks into [[a, b], [c, d]] at each point.

    Parameters
    ----------
    a, b, c, d : (points, rows, columns) float

    Returns
    -------
    (points, rows, columns) float

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> join(one, 2 * one, 3 * one, 4 * one)
    array([[[1., 2.],
            [3., 4.]]])
    """
    upper = np.concatenate([a, b], axis=2)
    lower = np.concatenate([c, d], axis=2)
    return np.concatenate([upper, lower], axis=1)


def attain_radius(A: ArrayLike, found: StabilityRadius, dt: float = 0.0) -> Complex:
    """Build a perturbation of A, as large as the radius, that puts a pole on the boundary.

    Parameters
    ----------
    A : (points, n, n) float
        The matrices whose radius was found (balanced ones if it was a scaled radius).
    found : StabilityRadius
        What `find_stability_radius` gave for them.
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    (points, n, n) complex
        Of rank one, with the spectral norm σ_min(sI - A); NaN where there is no radius.

    Examples
    --------
    >>> A = np.array([[[-2.0]]])
    >>> attain_radius(A, find_stability_radius(A)).real
    array([[[2.]]])
    """
    models = read_models(A)
    state = shifted(models, np.arange(len(models)), found.frequency * (dt or 1.0), dt)
    (U, sigma, V), _ = isolate(lambda M: tuple(np.linalg.svd(M)), state)
    return np.asarray(sigma[:, -1, None, None] * U[:, :, -1:] @ V[:, -1:, :])
