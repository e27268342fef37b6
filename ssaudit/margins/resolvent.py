"""The resolvent (sI - A)⁻¹ along the boundary of stability.

Its peak, the largest 1/σ_min(sI - A), is the inverse of the stability radius. Where eigenvectors
depend on each other neither level sets nor a sum over poles find it: there it is covered by itself.
"""

import numpy as np

from ssaudit.margins.peak_search import BACKWARD, Peak, near_axis
from ssaudit.margins.state_space import Bool, Complex, Index, Real, join
from ssaudit.modes.poles import find_poles, isolate

# Limits of the last way: pieces of one point, halvings, and what stands for no singular value.
MOST_CELLS = 20_000
MOST_HALVINGS = 60
TINY = 1e-300
# Tolerance of the last way, and most of what rounding may add: there, eigenvectors that depend on
# each other leave no more digits.
LAST_RTOL = 5e-6
# Real shifts, off the unit circle, at which the sampled pencil is inverted; the one farthest
# from the poles and their mirror images is taken.
SHIFTS = np.array([0.0, 0.33, -0.33, 0.61, -0.61, 1.47, -1.47, 2.9, -2.9])


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
    """The curve 1/σ_min(sI - A) along the boundary, whose peak is the inverse of the radius.

    Parameters
    ----------
    A : (points, n, n) float
    poles : (points, n) complex
        Its eigenvalues.
    dt : float
        Sampling time [s]; 0 means continuous. Frequencies are in rad/s, of sampled models angles
        in rad.

    Examples
    --------
    >>> curve = Resolvent(np.array([[[-2.0]]]), np.array([[-2.0 + 0j]]), 0.0)
    >>> curve.hold(np.array([0]), np.zeros(1), np.zeros((1, 0)))
    array([0.5])
    """

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


def cover_resolvent(curve: Resolvent, upper: Real) -> Peak:
    """Cover the boundary by what the resolvent itself tells of its neighbourhood.

    For eigenvectors that depend on each other. σ_min changes no faster than s moves, and so the
    resolvent's second derivative is bounded by twice its cube (on the circle its square more).

    Parameters
    ----------
    curve : Resolvent
        Of stable models.
    upper : (points,) float
        Where to end [rad/s]; of sampled models the angle π [rad].

    Returns
    -------
    Peak
        Values within 1e-5, relative: half of it may exceed the value, half may be its rounding.
        Frequency as ``upper``.

    References
    ----------
    Piyavskii, USSR Comp. Math. and Math. Physics 12(4), 1972 (covering by bounds; from memory).

    Examples
    --------
    >>> A = np.array([[[-1.0, 4.0], [0.0, -1.0]]])
    >>> curve = Resolvent(A, np.array([[-1.0 + 0j, -1.0]]), 0.0)
    >>> (1 / cover_resolvent(curve, np.array([10.0])).value).round(5)  # (sqrt(4² + 4) - 4)/2
    array([0.23607])
    """
    # Over long pieces the bound overflows: they are halved.
    with np.errstate(all="ignore"):
        return _cover(curve, upper)


def _cover(curve: Resolvent, upper: Real) -> Peak:
    """Halve the pieces of the boundary on which the level may be exceeded, until none is left."""
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
