"""Checks of stable intervals of the gain factor.

Poles counted between the crossings, and whether the counts fit the crossings and their accuracy.
"""

import numpy as np

from ssaudit.margins.balance import balance_loop
from ssaudit.margins.crossing_accuracy import ROUNDING
from ssaudit.margins.state_space import Bool, Complex, Index, Real, StateSpace, feed_back, invert
from ssaudit.modes.poles import find_modes, find_poles

# Where there is no crossing, the poles are looked at this many times the last factor out.
FAR_OUT = 100.0
# And at these factors.
FARTHEST = np.array([1e4, 1e6, 1e8, 1e12])
# Beyond this factor what is fed back may drown the rest.
DROWNING = 1e7
# Poles nearer to the boundary than this, relative to the largest entry that rounding acts on, are
# given a radius by their vectors.
NEAR_BOUNDARY = 1e-7
# How often the difference of two ways to the same pole counts.
DISTRUST = 4.0
# Moved by the gain less than this, relative to what moves it at all, a pole is hidden from it.
HIDDEN = 1e-12
# Ends are confirmed where rounding moves them by no more than this, relative or absolute.
END_RTOL = 1e-6
END_ATOL = 1e-9


def count_right(
    loop: StateSpace, owner: Index, factor: Real, dt: float, *, far: bool = False
) -> tuple[Index, Index]:
    """Poles outside the region of stability at given factors: at least, and at most.

    Parameters
    ----------
    loop : StateSpace
    owner : (count,) int
    factor : (count,) float
    dt : float
        Sampling time [s]; 0 means continuous.
    far : bool
        Whether the factors are so large that what is fed back drowns the rest: then the solver's
        rounding is that of the largest entry, while else it is taken entry by entry.

    Returns
    -------
    least, most : (count,) int
        They differ where rounding of the model's entries may take a pole to the other side; -1
        and a large number where there are no poles to be found.

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> loop = StateSpace(-one, one, one, 0 * one)
    >>> count_right(loop, np.array([0, 0, 0]), np.array([0.0, -3.0, -1.0]), 0.0)
    (array([0, 1, 0]), array([0, 1, 1]))
    """
    closed = feed_back(loop[owner], factor).A
    poles, _ = find_poles(closed)
    out = poles.real if dt == 0 else np.abs(poles) - 1
    lost = np.isnan(poles).any(axis=1)
    radius = np.zeros(out.shape)
    own, fed = term_sizes(loop[owner], factor)
    scale = (own + fed).max(axis=(1, 2), initial=0.0)
    with np.errstate(invalid="ignore"):
        close = (np.abs(out) <= NEAR_BOUNDARY * scale[:, None]).any(axis=1)
    near = np.nonzero((close | far) & ~lost)[0]
    if len(near):
        find_radii = _coarse_radii if far else _radii
        poles, radius[near] = find_radii(closed[near], own[near], fed[near])
        out[near] = poles.real if dt == 0 else np.abs(poles) - 1
    unsure = (np.abs(out) <= radius) & ~((out == 0) & (radius == 0))
    least, most = ((out >= 0) & ~unsure).sum(axis=1), ((out >= 0) | unsure).sum(axis=1)
    return np.where(lost, -1, least), np.where(lost, 10**9, most)


def never_stable(loop: StateSpace, dt: float) -> Bool:
    """Whether a pole stands at zero, exactly, that no gain moves.

    Parameters
    ----------
    loop : StateSpace
    dt : float
        Sampling time [s]; of sampled loops none is told.

    Returns
    -------
    (points,) bool

    Examples
    --------
    >>> A = np.array([[[-1.0, 0.0], [1.0, 0.0]]])  # the second state is never read
    >>> B, C = np.array([[[1.0], [0.0]]]), np.array([[[1.0, 0.0]]])
    >>> never_stable(StateSpace(A, B, C, np.zeros((1, 1, 1))), 0.0)
    array([ True])
    """
    hidden = np.zeros(len(loop), dtype=bool)
    one = np.ones(len(loop))
    closed = feed_back(loop, one).A
    poles, _ = find_poles(closed)
    chosen = np.nonzero((poles == 0).any(axis=1))[0] if dt == 0 else np.zeros(0, dtype=np.intp)
    if len(chosen):
        sizes = term_sizes(loop[chosen], one[chosen])
        exact, radius = _radii(closed[chosen], *sizes)
        hidden[chosen] = ((exact == 0) & (radius == 0)).any(axis=1)
    return hidden


def term_sizes(loop: StateSpace, factor: Real) -> tuple[Real, Real]:
    """Sizes of the two terms of every entry of the closed A: of the loop's own, and fed back.

    Parameters
    ----------
    loop : StateSpace
    factor : (points,) float
        At which each is closed.

    Returns
    -------
    own, fed : (points, n, n) float

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> own, fed = term_sizes(StateSpace(-one, one, one, 0 * one), np.array([-3.0]))
    >>> own.item(), fed.item()
    (1.0, 3.0)
    """
    k = factor[:, None, None]
    inner = np.abs(invert(np.eye(loop.D.shape[-1]) + k * loop.D))
    return np.abs(loop.A), np.asarray(np.abs(k) * (np.abs(loop.B) @ inner @ np.abs(loop.C)))


def _radii(A: Real, own: Real, fed: Real) -> tuple[Complex, Real]:
    """Poles, and how far each moves when every term of every entry changes by its rounding.

    The poles are the Rayleigh quotients of their vectors, which keep what is small beside the rest.
    """
    found, right, left, _ = find_modes(A)
    with np.errstate(invalid="ignore", over="ignore"):
        poles = (left @ A * right.swapaxes(1, 2)).sum(axis=2)
        by_own, by_fed = (
            (np.abs(left) @ size * np.abs(right).swapaxes(1, 2)).sum(axis=2) for size in (own, fed)
        )
    # Where the quotient is not what the solver found, its vectors are not to be trusted either.
    radius = ROUNDING * A.shape[-1] * (by_own + by_fed) + DISTRUST * np.abs(poles - found)
    # A pole at zero that no gain moves is there exactly.
    radius[(poles == 0) & (by_fed <= HIDDEN * by_own)] = 0
    return poles, np.where(np.isnan(radius), np.inf, radius)


def _coarse_radii(A: Real, own: Real, fed: Real) -> tuple[Complex, Real]:
    """Poles, and how far each moves when the balanced matrix changes by its rounding."""
    nothing = np.zeros((len(A), A.shape[-1], 1))
    still = nothing.swapaxes(1, 2), np.zeros((len(A), 1, 1))
    balanced = balance_loop(StateSpace(A, nothing, *still)).A
    poles, right, left, _ = find_modes(balanced)
    condition = np.linalg.norm(left, axis=2) * np.linalg.norm(right, axis=1)
    size = np.linalg.norm(balanced, axis=(1, 2))[:, None]
    radius = ROUNDING * A.shape[-1] * size * condition
    return poles, np.where(np.isnan(radius), np.inf, radius)


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


def may_be_stable(loop: StateSpace, owner: Index, factor: Real, dt: float) -> Bool:
    """Points of which no pole is surely lost at any of some factors.

    Parameters
    ----------
    loop : StateSpace
    owner : (count,) int
    factor : (count,) float
        At which the owner is looked at.
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    (points,) bool

    Examples
    --------
    >>> one = np.ones((2, 1, 1))
    >>> loop = StateSpace(-one, one, one, 0 * one)
    >>> may_be_stable(loop, np.array([0, 1, 1]), np.array([0.0, 0.0, -3.0]), 0.0)
    array([ True, False])
    """
    steady = np.ones(len(loop), dtype=bool)
    for far in (False, True):
        chosen = np.nonzero((np.abs(factor) > DROWNING) == far)[0]
        if len(chosen):
            least, _ = count_right(loop, owner[chosen], factor[chosen], dt, far=far)
            steady[owner[chosen[least != 0]]] = False
    return steady


def changes_fit(
    change: Index,
    several: Bool,
    jump: Real,
    below: tuple[Index, Index],
    above: tuple[Index, Index],
) -> Bool:
    """Whether counts of unstable poles on both sides of crossings fit what crosses there.

    Where the direction is not known it may be either; where crossings coincide, any number up to
    their sum may cross.

    Parameters
    ----------
    change : (count,) int
        Poles that become unstable at each crossing, negative where stable; 0 where not known.
    several : (count,) bool
        Where crossings coincide.
    jump : (count,) float
        Most poles that may cross.
    below, above : pair of (count,) int
        Unstable poles on both sides, at least and at most.

    Returns
    -------
    (count,) bool

    Examples
    --------
    >>> none, two = (np.array([0]), np.array([0])), (np.array([2]), np.array([2]))
    >>> upwards, single, pair = np.array([2]), np.array([False]), np.array([2.0])
    >>> changes_fit(upwards, single, pair, none, two), changes_fit(upwards, single, pair, two, none)
    (array([ True]), array([False]))
    """
    smallest, largest = above[0] - below[1], above[1] - below[0]

    def may_be(wanted: Real | Index) -> Bool:
        return np.asarray((smallest <= wanted) & (wanted <= largest))

    single = np.where(change != 0, may_be(change), may_be(jump) | may_be(-jump))
    return np.where(several, (smallest <= jump) & (largest >= -jump), single)


def is_small(error: Real, factor: Real) -> Bool:
    """Whether errors of factors are within the stated accuracy, or there is no factor.

    Parameters
    ----------
    error : (count,) float
        How far rounding may move each.
    factor : (count,) float
        NaN where there is none.

    Returns
    -------
    (count,) bool

    Examples
    --------
    >>> is_small(np.array([1e-8, 1e-5, np.nan]), np.array([2.0, 2.0, np.nan]))
    array([ True, False,  True])
    """
    return np.asarray((error <= END_RTOL * np.abs(factor) + END_ATOL) | np.isnan(factor))
