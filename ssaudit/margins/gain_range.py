"""Stable ranges of one gain factor on a loop, or on all its channels together."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from ssaudit.margins.balance import balance_loop
from ssaudit.margins.crossings import WIDEST_SQUARED, find_crossings
from ssaudit.margins.stability_radius import find_stable, finite_points
from ssaudit.margins.state_space import (
    Bool,
    Complex,
    Index,
    Real,
    StateSpace,
    feed_back,
    read_loop,
    respond,
    response_noise,
    to_continuous,
    unwarp,
)
from ssaudit.margins.tensor_crossings import MOST_STATES, find_gain_crossings
from ssaudit.modes.poles import find_poles

# Factors at which the loop may be closed to look for crossings; the first is taken unless it
# puts a pole on the boundary (or the loop is ill-posed there).
BASE_FACTORS = np.array([1.0, 0.817, 1.239, 0.371, -0.613, 2.71])
# Nearer to the boundary than this, relative to the fastest pole, another factor is taken.
CLEAR_OF_BOUNDARY = 1e-7
# Factors are found as differences from 1 or so: one this small is zero to working precision.
ZERO_FACTOR = 1e-13
# Real matrices have exactly real eigenvalues, or pairs; rounding splits double ones by less.
REAL_EIGENVALUE = 1e-7
# Crossings whose factors agree to this are one.
SAME_FACTOR = 1e-10
# An end with stable poles on both sides counts when a pole is this near the boundary there.
TOUCHING = 1e-6
# Where there is no crossing, the poles are looked at this many times the last factor out.
FAR_OUT = 100.0
# And at this factor: a crossing beyond it that were missed would hardly matter.
FARTHEST = 1e4
# Where poles spread widely, they are looked at these parts of the way to an end too.
PROBES = np.array([1e-4, 1e-3, 0.01, 0.1, 0.8, 0.9, 0.97, 0.99, 0.999])
# Where 1 is (nearly) a crossing itself, the nominal loop is on the boundary.
AT_ONE = 1e-12


@dataclass(frozen=True)
class GainRange:
    """Interval of the gain factor around 1 in which the closed loop stays stable.

    Attributes
    ----------
    low, high : (points,) float
        Its ends: -inf and inf where there is none; NaN where the loop is not stable at 1.
    low_frequency, high_frequency : (points,) float
        Where a pole meets the boundary at the end [rad/s]; inf where the loop becomes
        ill-posed (of sampled loops π/dt is half the sampling rate); NaN where no end is.
    stable : (points,) bool
        Whether the loop is stable at factor 1.
    confirmed : (points,) bool
        Whether the poles on both sides of each end agree; ends are NaN where not.
    """

    low: Real
    high: Real
    low_frequency: Real
    high_frequency: Real
    stable: Bool
    confirmed: Bool


@dataclass(frozen=True)
class StableGains:
    """All stable intervals of the gain factor.

    Attributes
    ----------
    low, high : (points, intervals) float
        Ends in rising order, NaN-padded; a point with NaN alone is stable at no factor.
    low_frequency, high_frequency : (points, intervals) float
        Where a pole meets the boundary [rad/s], as in `GainRange`.
    confirmed : (points,) bool
        False where the eigenproblem failed or the model is too large.
    """

    low: Real
    high: Real
    low_frequency: Real
    high_frequency: Real
    confirmed: Bool


@dataclass(frozen=True)
class GainCrossings:
    """Factors at which a pole is on the boundary.

    Attributes
    ----------
    factor, frequency : (points, any) float
        In rising order of the factor, NaN-padded; [rad/s].
    failed : (points,) bool
        Where they could not be found.
    """

    factor: Real
    frequency: Real
    failed: Bool


def find_gain_range(
    A: ArrayLike, B: ArrayLike, C: ArrayLike, D: ArrayLike, dt: float = 0.0
) -> GainRange:
    """Exact interval of one factor on the loop, around 1, in which it stays stable.

    Parameters
    ----------
    A, B, C, D : (points, n, n), (points, n, m), (points, m, n), (points, m, m) float
        The open loop L; the factor k multiplies all m channels: lost when I + kL is. With more
        than one channel, models of more than 40 states are not confirmed.
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    GainRange

    References
    ----------
    Crossings from eigenproblems (see `ssaudit.margins.crossings` and ``tensor_crossings``), each
    settled by Newton steps on L(jω).

    Examples
    --------
    L = 6/(s + 1)³ is stable for factors from -1/6 to 8/6.

    >>> A = np.array([[[-1.0, 1.0, 0.0], [0.0, -1.0, 1.0], [0.0, 0.0, -1.0]]])
    >>> B, C = np.array([[[0.0], [0.0], [6.0]]]), np.array([[[1.0, 0.0, 0.0]]])
    >>> found = find_gain_range(A, B, C, np.zeros((1, 1, 1)))
    >>> found.low.round(9), found.high.round(9), found.high_frequency.round(9)
    (array([-0.16666667]), array([1.33333333]), array([1.73205081]))
    """
    loop = balance_loop(read_loop(A, B, C, D))
    crossings = locate_crossings(loop, dt)
    return range_around_one(loop, crossings, dt)


def find_stable_gains(
    A: ArrayLike, B: ArrayLike, C: ArrayLike, D: ArrayLike, dt: float = 0.0
) -> StableGains:
    """All intervals of one factor on the loop in which it is stable, be it stable at 1 or not.

    Parameters
    ----------
    A, B, C, D, dt
        As in `find_gain_range`.

    Returns
    -------
    StableGains

    Examples
    --------
    L = 1/(s - 2) is stable for factors above 2, and so lost at 1.

    >>> one = np.ones((1, 1, 1))
    >>> gains = find_stable_gains(2 * one, one, one, 0 * one)
    >>> gains.low.round(9), gains.high
    (array([[2.]]), array([[inf]]))
    """
    loop = balance_loop(read_loop(A, B, C, D))
    crossings = locate_crossings(loop, dt)
    points = len(loop)
    pad = np.full((points, 1), np.inf)
    factor = np.where(np.isnan(crossings.factor), np.inf, crossings.factor)
    factor = np.concatenate([-pad, factor, pad], axis=1)
    nowhere = np.full((points, 1), np.nan)
    frequency = np.concatenate([nowhere, crossings.frequency, nowhere], axis=1)
    owner, column = np.nonzero(factor[:, 1:] > factor[:, :-1])
    probe = between(factor[owner, column], factor[owner, column + 1])
    stable = stable_at(loop, owner, probe, dt)
    owner, column = owner[stable], column[stable]
    place = np.arange(len(owner)) - np.searchsorted(owner, owner)
    width = int(place.max(initial=0)) + 1
    ends = np.full((4, points, width), np.nan)
    ends[0, owner, place], ends[1, owner, place] = factor[owner, column], factor[owner, column + 1]
    ends[2, owner, place] = frequency[owner, column]
    ends[3, owner, place] = frequency[owner, column + 1]
    ends[:, crossings.failed] = np.nan
    return StableGains(ends[0], ends[1], ends[2], ends[3], ~crossings.failed)


def locate_crossings(loop: StateSpace, dt: float) -> GainCrossings:
    """Factors, of any sign, at which a pole of the closed loop is on the boundary.

    Parameters
    ----------
    loop : StateSpace
        The open loop, balanced.
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    GainCrossings

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> locate_crossings(StateSpace(-one, one, one, 0 * one), 0.0).factor
    array([[-1.]])
    """
    base, T, poles = _close_at_base(loop, dt)
    points = len(loop)
    failed = ~finite_points(T.A, T.D)
    sound = np.nonzero(~failed)[0]
    owner, w, change = _settled_changes(T[sound], poles[sound], failed, sound)
    return _arrange(points, sound[owner], unwarp(w, dt), base[sound[owner]] + change, failed)


def _close_at_base(loop: StateSpace, dt: float) -> tuple[Real, StateSpace, Complex]:
    """Close each loop at a factor that leaves no pole on the boundary; map it to continuous."""
    base = np.full(len(loop), BASE_FACTORS[0])
    clearance = _clearance(loop, base, dt)
    near = np.nonzero(~(clearance > CLEAR_OF_BOUNDARY))[0]
    for factor in BASE_FACTORS[1:]:
        if len(near) == 0:
            break
        trial = np.full(len(near), factor)
        found = _clearance(loop[near], trial, dt)
        better = found > np.nan_to_num(clearance[near], nan=-1.0)
        base[near[better]], clearance[near[better]] = factor, found[better]
    T = to_continuous(feed_back(loop, base), dt)
    return base, T, find_poles(T.A)[0]


def _clearance(loop: StateSpace, factor: Real, dt: float) -> Real:
    """Distance of the nearest pole from the boundary, relative to the fastest pole."""
    closed = feed_back(loop, factor)
    poles, _ = find_poles(closed.A)
    if poles.shape[1] == 0:
        return np.where(np.isfinite(closed.D).all(axis=(1, 2)), 1.0, 0.0)
    distance = np.abs(poles.real) if dt == 0 else np.abs(np.abs(poles) - 1)
    largest = np.abs(poles).max(axis=1) if dt == 0 else 1.0
    with np.errstate(invalid="ignore"):
        return np.asarray(distance.min(axis=1) / largest)


def _settled_changes(
    T: StateSpace, poles: Complex, failed: Bool, sound: Index
) -> tuple[Index, Real, Real]:
    """Crossings at zero and infinite frequency and between, as changes of the factor."""
    owner, w, change = _end_changes(T)
    if T.D.shape[-1] == 1:
        inner, inner_w, failed[sound] = find_crossings(T, poles, None)
        with np.errstate(divide="ignore"):
            value = respond(T, inner, inner_w)[:, 0, 0].real
            inner_change = np.where(
                np.abs(value) > response_noise(T, inner, inner_w), -1 / value, np.inf
            )
    elif T.A.shape[-1] <= MOST_STATES and T.A.shape[-1] > 0:
        inner, inner_w, inner_change = find_gain_crossings(T)
    else:
        failed[sound] = T.A.shape[-1] > MOST_STATES
        return owner, w, change
    return (
        np.concatenate([owner, inner]),
        np.concatenate([w, inner_w]),
        np.concatenate([change, inner_change]),
    )


def _end_changes(T: StateSpace) -> tuple[Index, Real, Real]:
    """Crossings at zero and infinite frequency: real eigenvalues of T(0) and of D."""
    owners, frequencies, changes = [], [], []
    everyone = np.arange(len(T))
    for w in (0.0, np.inf):
        response = respond(T, everyone, np.full(len(T), w)).real
        eigenvalues = find_poles(response)[0]
        size = np.abs(eigenvalues)
        noise = response_noise(T, everyone, np.full(len(T), w))[:, None]
        real = (np.abs(eigenvalues.imag) <= REAL_EIGENVALUE * size) & (size > noise)
        owner, column = np.nonzero(real)
        owners.append(owner)
        frequencies.append(np.full(len(owner), w))
        changes.append(-1 / eigenvalues[owner, column].real)
    return np.concatenate(owners), np.concatenate(frequencies), np.concatenate(changes)


def _arrange(points: int, owner: Index, w: Real, factor: Real, failed: Bool) -> GainCrossings:
    """Sort crossings by point and factor, merge equal ones, and pad to a rectangle."""
    finite = np.isfinite(factor)
    factor = np.where(np.abs(factor) < ZERO_FACTOR, 0.0, factor)
    owner, w, factor = owner[finite], w[finite], factor[finite]
    order = np.lexsort((factor, owner))
    owner, w, factor = owner[order], w[order], factor[order]
    fresh = np.ones(len(factor), dtype=bool)
    fresh[1:] = (np.diff(owner) > 0) | (np.diff(factor) > SAME_FACTOR * np.abs(factor[1:]))
    owner, w, factor = owner[fresh], w[fresh], factor[fresh]
    place = np.arange(len(owner)) - np.searchsorted(owner, owner)
    table = np.full((2, points, int(place.max(initial=0)) + 1), np.nan)
    table[0, owner, place], table[1, owner, place] = factor, w
    return GainCrossings(table[0], table[1], failed)


def between(low: Real, high: Real) -> Real:
    """Pick a factor between two crossings, or well beyond the last one.

    Parameters
    ----------
    low, high : (...) float
        May be infinite.

    Returns
    -------
    (...) float

    Examples
    --------
    >>> between(np.array([1.0, 2.0]), np.array([3.0, np.inf]))
    array([  2., 302.])
    """
    first, last = np.isinf(low), np.isinf(high)
    near, far = np.where(first, high, low), np.where(last, low, high)
    reach = FAR_OUT * (1 + np.abs(np.where(first & last, 0.0, near)))
    with np.errstate(invalid="ignore"):
        inside = np.where(first, far - reach, np.where(last, near + reach, near + (far - near) / 2))
    return np.where(first & last, 0.5, inside)


def stable_at(loop: StateSpace, owner: Index, factor: Real, dt: float) -> Bool:
    """Whether loops are stable at given factors, by their poles.

    Parameters
    ----------
    loop : StateSpace
    owner : (count,) int
    factor : (count,) float
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    (count,) bool

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> loop = StateSpace(-one, one, one, 0 * one)
    >>> stable_at(loop, np.array([0, 0]), np.array([0.0, -3.0]), 0.0)
    array([ True, False])
    """
    return find_stable(feed_back(loop[owner], factor).A, dt)[1]


def range_around_one(loop: StateSpace, crossings: GainCrossings, dt: float) -> GainRange:
    """Find the stable interval around 1 between crossings, confirmed by poles on both sides.

    Parameters
    ----------
    loop : StateSpace
        The open loop, balanced.
    crossings : GainCrossings
        Those of `locate_crossings`.
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    GainRange

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> loop = StateSpace(-one, one, one, 0 * one)
    >>> range_around_one(loop, locate_crossings(loop, 0.0), 0.0).low
    array([-1.])
    """
    points = np.arange(len(loop))
    at_one = (np.abs(crossings.factor - 1) <= AT_ONE).any(axis=1)
    stable = stable_at(loop, points, np.ones(len(loop)), dt) & ~at_one
    confirmed = ~crossings.failed
    ends = []
    for side in (-1, 1):
        end, frequency, agreed = _end_on_side(loop, crossings, side, dt)
        confirmed = confirmed & (agreed | ~stable)
        ends += [end, frequency]
    low, low_frequency, high, high_frequency = (
        np.where(stable & confirmed, value, np.nan) for value in ends
    )
    return GainRange(low, high, low_frequency, high_frequency, stable, confirmed)


def _end_on_side(
    loop: StateSpace, crossings: GainCrossings, side: int, dt: float
) -> tuple[Real, Real, Bool]:
    """Find the crossing next to 1 above (side 1) or below (-1), and whether the poles agree."""
    out = side * (crossings.factor - 1)
    out = np.where(out > 0, out, np.inf)
    pad = np.full((len(loop), 2), np.inf)
    order = np.argsort(np.concatenate([out, pad], axis=1), axis=1)[:, :2]
    nearest, beyond = np.take_along_axis(np.concatenate([out, pad], axis=1), order, axis=1).T
    padded = np.concatenate([crossings.frequency, pad * np.nan], axis=1)
    frequency = np.take_along_axis(padded, order[:, :1], axis=1)[:, 0]
    frequency = np.where(np.isinf(nearest), np.nan, frequency)
    end = 1 + side * nearest
    endless = np.isinf(nearest)
    inside = 1 + side * np.where(endless, FAR_OUT, nearest / 2)
    outside = np.where(endless, inside, between_outside(nearest, beyond) * side + 1)
    points = np.arange(len(loop))
    inner = stable_at(loop, points, inside, dt)
    inner[endless] &= stable_at(loop, points[endless], np.full(endless.sum(), side * FARTHEST), dt)
    inner &= _stable_on_the_way(loop, np.where(endless, side * FARTHEST, end), dt)
    outer = stable_at(loop, points, outside, dt)
    # Where the loop is ill-posed there need not be unstable poles beyond.
    touching = np.isinf(frequency)
    doubted = np.nonzero(inner & outer & ~endless & ~touching)[0]
    if len(doubted):
        touching[doubted] = _clearance(loop[doubted], end[doubted], dt) <= TOUCHING
    return end, frequency, inner & (endless | ~outer | touching)


def _stable_on_the_way(loop: StateSpace, end: Real, dt: float) -> Bool:
    """Whether loops whose poles spread widely are stable at some factors on the way to the end.

    Among such poles a slow crossing may be missed (see `ssaudit.margins.crossings`).
    """
    size = np.abs(find_poles(feed_back(loop, np.ones(len(loop))).A)[0])
    wide = size.max(axis=1, initial=0.0) > WIDEST_SQUARED * size.min(axis=1, initial=np.inf)
    chosen = np.nonzero(wide & np.isfinite(end))[0]
    owner = np.repeat(chosen, len(PROBES))
    steady = np.ones(len(loop), dtype=bool)
    if len(owner):
        factor = 1 + (end[owner] - 1) * np.tile(PROBES, len(chosen))
        np.logical_and.at(steady, owner, stable_at(loop, owner, factor, dt))
    return steady


def between_outside(nearest: Real, beyond: Real) -> Real:
    """Distance from 1 halfway from one crossing to the next, or half as far again.

    Parameters
    ----------
    nearest, beyond : (points,) float
        Distances of both crossings; ``beyond`` may be inf.

    Returns
    -------
    (points,) float

    Examples
    --------
    >>> between_outside(np.array([2.0, 2.0]), np.array([4.0, np.inf]))
    array([3., 3.])
    """
    with np.errstate(invalid="ignore"):
        return np.where(np.isinf(beyond), 1.5 * nearest, nearest + (beyond - nearest) / 2)
