"""All stable intervals of one gain factor on a loop, or on all its channels together."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from ssaudit.margins.balance import balance_loop
from ssaudit.margins.gain_checks import (
    DROWNING,
    END_ATOL,
    END_RTOL,
    FARTHEST,
    between,
    changes_fit,
    count_right,
    is_small,
    never_stable,
)
from ssaudit.margins.gain_crossings import HIDDEN_FACTOR, GainCrossings, locate_crossings
from ssaudit.margins.state_space import Bool, Index, Real, StateSpace, read_loop

# Of several channels nothing but counts shows crossings that were missed: there they are taken
# these parts of an interval from its ends too.
FROM_ENDS = np.array([1e-6, 1e-5, 1e-3])


@dataclass(frozen=True)
class StableGains:
    """All stable intervals of the gain factor.

    Attributes
    ----------
    low, high : (points, intervals) float
        Ends in rising order, NaN-padded; a point with NaN alone is stable at no factor.
    low_frequency, high_frequency : (points, intervals) float
        Where a pole meets the boundary [rad/s]; inf where the loop becomes ill-posed; NaN where
        there is no end.
    confirmed : (points,) bool
        False where the numbers do not decide, or the model is too large.
    """

    low: Real
    high: Real
    low_frequency: Real
    high_frequency: Real
    confirmed: Bool


def find_stable_gains(
    A: ArrayLike, B: ArrayLike, C: ArrayLike, D: ArrayLike, dt: float = 0.0
) -> StableGains:
    """All intervals of one factor on the loop in which it is stable, be it stable at 1 or not.

    Parameters
    ----------
    A, B, C, D, dt
        As in `ssaudit.margins.gain_range.find_gain_range`; so are the limits of what is told.

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
    least, most = _count_between(loop, owner, factor[owner, column], factor[owner, column + 1], dt)
    confirmed = ~crossings.failed & _counts_agree(loop, crossings, owner, column, least, most)
    stable = most == 0
    owner, column = owner[stable], column[stable]
    for side in (0, 1):
        confirmed &= _ends_certain(crossings, owner, column - 1 + side)
    confirmed &= _doubts_are_known(crossings)
    place = np.arange(len(owner)) - np.searchsorted(owner, owner)
    width = int(place.max(initial=0)) + 1
    ends = np.full((4, points, width), np.nan)
    ends[0, owner, place], ends[1, owner, place] = factor[owner, column], factor[owner, column + 1]
    ends[2, owner, place] = frequency[owner, column]
    ends[3, owner, place] = frequency[owner, column + 1]
    never = never_stable(loop, dt)
    ends[:, ~confirmed | never] = np.nan
    confirmed |= never
    return StableGains(ends[0], ends[1], ends[2], ends[3], confirmed)


def _count_between(
    loop: StateSpace, owner: Index, low: Real, high: Real, dt: float
) -> tuple[Index, Index]:
    """Poles outside the region of stability in intervals without a crossing; farther ones too."""
    least, most = count_right(loop, owner, between(low, high), dt)
    for side, endless in ((-1, np.isinf(low)), (1, np.isinf(high))):
        for factor in FARTHEST:
            known = low if side > 0 else -high
            beyond = np.nonzero(endless & (known < factor))[0]
            far = np.full(len(beyond), side * factor)
            less, more = count_right(loop, owner[beyond], far, dt, far=factor > DROWNING)
            other = (less > most[beyond]) | (more < least[beyond])
            if loop.D.shape[-1] > 1 and factor <= DROWNING:
                other |= (most[beyond] == 0) & (more > 0)
            least[beyond[other]] = -1
    if loop.D.shape[-1] > 1:
        least[~_alike_near_ends(loop, owner, low, high, least, most, dt)] = -1
    return least, most


def _alike_near_ends(
    loop: StateSpace, owner: Index, low: Real, high: Real, least: Index, most: Index, dt: float
) -> Bool:
    """Whether counts just inside both ends of intervals may be the same as in the middle."""
    alike = np.ones(len(owner), dtype=bool)
    inside = between(low, high)
    for end in (low, high):
        chosen = np.nonzero(np.isfinite(end))[0]
        for part in FROM_ENDS:
            width = np.minimum(np.abs(inside - end), 1 + np.abs(end))[chosen]
            factor = end[chosen] + np.sign(inside - end)[chosen] * part * width
            less, more = count_right(loop, owner[chosen], factor, dt)
            alike[chosen] &= (less <= most[chosen]) & (more >= least[chosen])
    return alike


def _counts_agree(
    loop: StateSpace,
    crossings: GainCrossings,
    owner: Index,
    column: Index,
    least: Index,
    most: Index,
) -> Bool:
    """Whether the poles counted in all intervals differ by those that cross between them."""
    agreed = np.ones(len(loop), dtype=bool)
    # Neither stable nor not, or other than at another factor of the same interval.
    agreed[owner[((least == 0) & (most > 0)) | (least < 0)]] = False
    left = np.nonzero(owner[1:] == owner[:-1])[0]
    own, at = owner[left], column[left]
    _, change, several = crossings.examine(own, at)
    below, above = (least[left], most[left]), (least[left + 1], most[left + 1])
    agreed[own[~changes_fit(change, several, crossings.jump[own, at], below, above)]] = False
    return agreed


def _ends_certain(crossings: GainCrossings, owner: Index, column: Index) -> Bool:
    """Whether rounding leaves the given ends where they are; columns off the table are no ends."""
    certain = np.ones(len(crossings.failed), dtype=bool)
    there = np.nonzero((column >= 0) & (column < crossings.factor.shape[1]))[0]
    owner, column = owner[there], column[there]
    error, _, _ = crossings.examine(owner, column)
    certain[owner[~is_small(error, crossings.factor[owner, column])]] = False
    return certain


def _doubts_are_known(crossings: GainCrossings) -> Bool:
    """Whether what rounding hides could only be at factors at which a crossing is known."""
    doubtful = crossings.doubtful
    slack = END_RTOL * np.abs(doubtful) + END_ATOL
    distance = np.abs(doubtful[:, :, None] - crossings.factor[:, None, :])
    with np.errstate(invalid="ignore"):
        known = (distance <= slack[:, :, None]).any(axis=2)
    return np.asarray((known | ~(np.abs(doubtful) < HIDDEN_FACTOR)).all(axis=1))
