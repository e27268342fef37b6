"""Single continuous loops with a transport delay, treated exactly: no Padé, no grid.

Stability at a gain and a delay is counted from that without delay: as the delay grows, poles
cross the axis at the frequencies of abs L = 1 only, outwards where abs L falls with frequency
and inwards where it rises, at delays that are known in closed form (Walton and Marshall 1987).

Where L e^(-jωτ) is real and negative its phase is a multiple of 2π off -π. Between two
frequencies each pole, zero and the delay turns the phase one way only, by an amount known in
closed form, so that intervals without a crossing can be told for certain; the rest are halved.
"""

from dataclasses import dataclass

import numpy as np

from ssaudit.margins.crossings import drop_doubles, find_crossings
from ssaudit.margins.pieces import cut_pieces, middle_of
from ssaudit.margins.responses import respond, respond_with_slope
from ssaudit.margins.state_matrices import finite_points
from ssaudit.margins.state_space import Bool, Complex, Index, Real, StateSpace, feed_back, invert
from ssaudit.modes.poles import find_poles

# Gain margins of delayed loops are searched from 1/1000 to 1000 (60 dB); beyond: no limit.
LARGEST_FACTOR = 1000.0
# Upper margins are first looked for below these: high up there may be many crossings.
NEARER_FACTORS = (4.0, 32.0)
# Where D is not zero crossings pile up towards 1/abs D: the search ends this far before it, and
# what is left counts as the end, on the safe side.
BEFORE_LIMIT = 1e-3
# Intervals are halved until the phase cannot turn by more than this within [rad]; Newton steps
# do the rest.
SMALL_TURN = 1e-4
MOST_HALVINGS = 80
# Phases are trusted to this [rad].
PHASE_SLACK = 1e-7
NEWTON_STEPS = 4
TURN = 2 * np.pi


@dataclass(frozen=True)
class UnitCrossings:
    """Frequencies at which abs L equals 1.

    Attributes
    ----------
    owner : (count,) int
        Place of the loop.
    w : (count,) float
        Frequency [rad/s].
    angle : (count,) float
        arg(-L) without delay [rad], in (-π, π].
    rising : (count,) bool
        Whether abs L rises with frequency there.
    failed : (loops,) bool
        Where they could not be found.
    """

    owner: Index
    w: Real
    angle: Real
    rising: Bool
    failed: Bool


def scale_loop(loop: StateSpace, factor: Real) -> StateSpace:
    """Multiply loops by gain factors.

    Parameters
    ----------
    loop : StateSpace
    factor : (points,) float

    Returns
    -------
    StateSpace

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> scale_loop(StateSpace(-one, one, one, one), np.array([3.0])).D.item()
    3.0
    """
    k = factor[:, None, None]
    return StateSpace(loop.A, loop.B, k * loop.C, k * loop.D)


def find_unit_crossings(loop: StateSpace) -> UnitCrossings:
    """Frequencies at which abs L = 1, with what a delay needs to know there.

    Parameters
    ----------
    loop : StateSpace
        Single continuous loops.

    Returns
    -------
    UnitCrossings

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> found = find_unit_crossings(StateSpace(0 * one, one, 2 * one, 0 * one))  # 2/s
    >>> found.w.round(12), found.rising
    (array([2.]), array([False]))
    """
    base, T, poles = _close_clear(loop)
    failed = ~finite_points(T.A, T.D)
    sound = np.nonzero(~failed)[0]
    found = find_crossings(T[sound], poles[sound], base[sound] / 2)
    failed[sound] = found.failed
    failed[sound[found.hidden_owner]] = True
    owner, w = sound[found.owner], found.w
    response, slope = respond_with_slope(T, owner, w)
    t, k = response[:, 0, 0], base[owner]
    L = t / (1 - k * t)
    rate = (L.conj() * slope[:, 0, 0] / (1 - k * t) ** 2).real
    return UnitCrossings(owner, w, np.angle(-L), rate > 0, failed)


def _close_clear(loop: StateSpace) -> tuple[Real, StateSpace, Complex]:
    """Close each loop at 1 or, where that is nearer to the axis, at -1 (both serve abs L = 1)."""
    ones = np.ones(len(loop))
    T, other = feed_back(loop, ones), feed_back(loop, -ones)
    poles, other_poles = find_poles(T.A)[0], find_poles(other.A)[0]
    clear, other_clear = (_clearance_of(p) for p in (poles, other_poles))
    # At 1 unless that is nearly on the axis, so that results vary smoothly from point to point.
    swap = (~(clear > 1e-6) & (np.nan_to_num(other_clear) > np.nan_to_num(clear)))[:, None, None]
    mixed = StateSpace(*(np.where(swap, getattr(other, m), getattr(T, m)) for m in "ABCD"))
    base = np.where(swap[:, 0, 0], -1.0, 1.0)
    return base, mixed, np.where(swap[:, 0], other_poles, poles)


def _clearance_of(poles: Complex) -> Real:
    """Distance of the nearest pole from the axis, relative to the fastest pole."""
    if poles.shape[1] == 0:
        return np.ones(len(poles))
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(np.abs(poles.real).min(axis=1) / np.abs(poles).max(axis=1))


def count_unstable(loop: StateSpace, delay: Real) -> tuple[Real, Bool]:
    """Unstable closed-loop poles of delayed loops, counted exactly.

    Parameters
    ----------
    loop : StateSpace
        Single continuous loops, negative unity feedback.
    delay : (points,) float
        Transport delay of each [s], not negative.

    Returns
    -------
    count : (points,) float
        Poles on or to the right of the axis; inf where abs D ≥ 1 and the delay is positive.
    sound : (points,) bool
        False where the crossings could not be found, or the count is below zero.

    References
    ----------
    Walton and Marshall, IEE Proc. D 134(2), 1987 (from memory).

    Examples
    --------
    >>> one = np.ones((2, 1, 1))
    >>> loop = StateSpace(0 * one, one, one, 0 * one)  # 1/s, stable below π/2
    >>> count_unstable(loop, np.array([1.57, 1.58]))[0]
    array([0., 2.])
    """
    closed, _ = find_poles(feed_back(loop, np.ones(len(loop))).A)
    crossings = find_unit_crossings(loop)
    tau = delay[crossings.owner]
    first = np.mod(crossings.angle, TURN) / crossings.w
    passed = np.maximum(np.floor((tau - first) * crossings.w / TURN) + 1, 0)
    change = 2 * np.where(crossings.rising, -passed, passed)
    count = (~(closed.real < 0)).sum(axis=1) + np.bincount(
        crossings.owner, change, minlength=len(loop)
    )
    endless = (np.abs(loop.D[:, 0, 0]) >= 1) & (delay > 0)
    sound = ~crossings.failed & ~np.isnan(closed).any(axis=1) & (count >= 0)
    return np.where(endless, np.inf, count), sound | endless


def find_phase_crossings(
    loop: StateSpace, delay: Real, largest: float = LARGEST_FACTOR
) -> tuple[Index, Real, Real]:
    """Where L e^(-jωτ) is real and negative, at factors from 1/1000 to a largest one.

    Parameters
    ----------
    loop : StateSpace
        Single continuous loops.
    delay : (points,) float
        Transport delay of each [s].
    largest : float
        Largest factor looked for; the search may end before 1/abs D.

    Returns
    -------
    owner : (count,) int
    w : (count,) float
        Frequency [rad/s].
    factor : (count,) float
        The gain factor 1/abs L at which the loop is on the boundary there.

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> lag = StateSpace(0 * one, one, one, 0 * one)  # 1/s with 1 s: π/2, 5π/2 ...
    >>> _, w, factor = find_phase_crossings(lag, np.ones(1))
    >>> (w[:2] / np.pi).round(9), factor[:2].round(6)
    (array([0.5, 2.5]), array([1.570796, 7.853982]))
    """
    pieces = _searched_pieces(loop, largest)
    turns = _Turns(loop, delay)
    owners, middles = [pieces[0][:0]], [pieces[1][:0]]
    for _ in range(MOST_HALVINGS):
        owner, low, high = pieces
        reached, turn = turns.reach(owner, low, high)
        middle = low + (high - low) / 2
        small = reached & (turn <= SMALL_TURN)
        owners.append(owner[small])
        middles.append(middle[small])
        left = reached & ~small
        owner, low, high, middle = owner[left], low[left], high[left], middle[left]
        pieces = (np.tile(owner, 2), np.append(low, middle), np.append(middle, high))
        if len(owner) == 0:
            break
    return _settle(loop, delay, np.concatenate(owners), np.concatenate(middles))


def _settle(loop: StateSpace, delay: Real, owner: Index, w: Real) -> tuple[Index, Real, Real]:
    """Newton steps on the phase; each crossing once."""
    for _ in range(NEWTON_STEPS):
        response, slope = respond_with_slope(loop, owner, w)
        L = response[:, 0, 0]
        rate = (slope[:, 0, 0] / L).imag - delay[owner]
        angle = np.angle(-L * np.exp(-1j * w * delay[owner]))
        step = np.where(rate != 0, angle / np.where(rate != 0, rate, 1.0), 0.0)
        w = w - np.clip(step, -0.1 * w, 0.1 * w)
    owner, w = drop_doubles(owner, w)
    L = respond(loop, owner, w)[:, 0, 0] * np.exp(-1j * w * delay[owner])
    genuine = np.abs(np.angle(-L)) < 1e-8
    return owner[genuine], w[genuine], 1 / np.abs(L[genuine])


def _searched_pieces(loop: StateSpace, largest: float) -> tuple[Index, Real, Real]:
    """Pieces of the frequency axis on which abs L lies within the searched range."""
    points = len(loop)
    floor = np.maximum(1 / largest, np.abs(loop.D[:, 0, 0]) * (1 + BEFORE_LIMIT))
    owner, low, high = np.arange(points), np.zeros(points), np.full(points, np.inf)
    for level in (floor, np.full(points, LARGEST_FACTOR)):
        found = find_unit_crossings(scale_loop(loop, 1 / level))
        place = np.arange(len(found.owner)) - np.searchsorted(found.owner, found.owner)
        cuts = np.full((points, int(place.max(initial=0)) + 1), np.nan)
        cuts[found.owner, place] = found.w
        owner, low, high = cut_pieces(owner, low, high, cuts[owner])
    middle = middle_of(low, high, np.ones(len(low)))
    size = np.abs(respond(loop, owner, middle)[:, 0, 0])
    within = (size > floor[owner]) & (size < LARGEST_FACTOR) & np.isfinite(high)
    return owner[within], low[within], high[within]


class _Turns:
    """Bounds of the phase of delayed loops between two frequencies."""

    def __init__(self, loop: StateSpace, delay: Real) -> None:
        self.loop, self.delay = loop, delay
        self.poles, self.zeros = find_poles(loop.A)[0], _find_zeros(loop)

    def reach(self, owner: Index, low: Real, high: Real) -> tuple[Bool, Real]:
        """Whether the phase can be -π, give or take 2π, within intervals; its largest turn."""
        up_poles, down_poles = _turned(self.poles[owner], low, high)
        down_zeros, up_zeros = _turned(self.zeros[owner], low, high)
        down = down_poles + down_zeros + self.delay[owner] * (high - low)
        up = up_poles + up_zeros
        L = respond(self.loop, owner, low)[:, 0, 0]
        start = np.angle(-L * np.exp(-1j * low * self.delay[owner]))
        top, bottom = start + up + PHASE_SLACK, start - down - PHASE_SLACK
        return np.floor(top / TURN) >= np.ceil(bottom / TURN), up + down


def _turned(roots: Complex, low: Real, high: Real) -> tuple[Real, Real]:
    """Phase that 1/(jω - root) gains, over right roots, and loses, over left roots."""
    finite = np.isfinite(roots)
    real = np.where(finite, roots.real, 1.0)
    imaginary = np.where(finite, roots.imag, 0.0)
    a, b = low[:, None] - imaginary, high[:, None] - imaginary
    angle = np.arctan2(b, np.abs(real)) - np.arctan2(a, np.abs(real))
    angle = np.where(finite, angle, 0.0)
    right = real > 0
    return (angle * right).sum(axis=1), (angle * ~right).sum(axis=1)


def _find_zeros(loop: StateSpace) -> Complex:
    """Zeros of single loops; infinite ones are inf."""
    poles, _ = find_poles(loop.A)
    n = loop.A.shape[-1]
    typical = np.abs(poles).max(axis=1, initial=0.0)
    typical = np.where(typical > 0, typical, 1.0)
    # Off every pole and, with no measure, off every zero: to the right of the fastest pole.
    shift = 1.618 * typical
    inner = invert(loop.A - shift[:, None, None] * np.eye(n))
    left, right = inner @ loop.B, loop.C @ inner
    through = loop.D - loop.C @ left
    with np.errstate(divide="ignore", invalid="ignore"):
        mu, _ = find_poles(inner + left @ right / through)
        small = np.abs(mu) <= 1e-9 * np.abs(mu).max(axis=1, keepdims=True, initial=0.0)
        return np.where(small, np.inf, shift[:, None] + 1 / np.where(small, 1.0, mu))
