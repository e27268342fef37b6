"""The stable range around 1 of one gain factor on a loop, or on all its channels together."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from ssaudit.margins.balance import balance_loop
from ssaudit.margins.gain_checks import (
    DROWNING,
    END_ATOL,
    END_RTOL,
    FAR_OUT,
    FARTHEST,
    between_outside,
    changes_fit,
    count_right,
    is_small,
    may_be_stable,
)
from ssaudit.margins.gain_crossings import HIDDEN_FACTOR, GainCrossings, locate_crossings
from ssaudit.margins.state_space import Bool, Real, StateSpace, read_loop

# Where poles spread widely, they are looked at these parts of the way to an end too.
PROBES = np.array([1e-4, 1e-3, 0.01, 0.1, 0.8, 0.9, 0.97, 0.99, 0.999, 1 - 1e-5, 1 - 1e-6])
# Where 1 is (nearly) a crossing itself, the nominal loop is on the boundary.
AT_ONE = 1e-12


@dataclass(frozen=True)
class GainRange:
    """Interval of the gain factor around 1 in which the closed loop stays stable.

    Attributes
    ----------
    low, high : (points,) float
        Its ends: -inf and inf where there is none, as far as `find_gain_range` tells; NaN where the
        loop is not stable at 1 or not confirmed.
    low_frequency, high_frequency : (points,) float
        Where a pole meets the boundary at the end [rad/s]; inf where the loop becomes
        ill-posed (of sampled loops π/dt is half the sampling rate); NaN where no end is.
    stable : (points,) bool
        Whether the loop is stable at factor 1.
    confirmed : (points,) bool
        Whether the poles on both sides of each end agree with what crosses there, and rounding
        moves no end by more than 1e-6; ends are NaN where not.
    """

    low: Real
    high: Real
    low_frequency: Real
    high_frequency: Real
    stable: Bool
    confirmed: Bool


def find_gain_range(
    A: ArrayLike, B: ArrayLike, C: ArrayLike, D: ArrayLike, dt: float = 0.0
) -> GainRange:
    """Exact interval of one factor on the loop, around 1, in which it stays stable.

    Parameters
    ----------
    A, B, C, D : (points, n, n), (points, n, m), (points, m, n), (points, m, m) float
        The open loop L; the factor k multiplies all m channels: lost when I + kL is. With more
        than one channel, models of more than 40 states are not confirmed, and where poles spread
        over more than four decades a limit beyond 1e6 (120 dB) is not told from none. With one
        channel that is so beyond 1e9.
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


def _is_doubtful(crossings: GainCrossings, low: Real, high: Real) -> Bool:
    """Whether rounding may hide a crossing between two ends."""
    doubtful = crossings.doubtful
    slack = END_RTOL * np.abs(doubtful) + END_ATOL
    with np.errstate(invalid="ignore"):
        inside = (doubtful - slack > low[:, None]) & (doubtful + slack < high[:, None])
    return np.asarray((inside & (np.abs(doubtful) < HIDDEN_FACTOR)).any(axis=1))


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
    least, most = count_right(loop, points, np.ones(len(loop)), dt)
    stable = (most == 0) & ~at_one
    confirmed = ~crossings.failed & (stable | at_one | (least > 0))
    ends = []
    for side in (-1, 1):
        end, frequency, agreed = _end_on_side(loop, crossings, side, dt)
        confirmed = confirmed & (agreed | ~stable)
        ends += [end, frequency]
    confirmed &= ~(stable & _is_doubtful(crossings, ends[0], ends[2]))
    low, low_frequency, high, high_frequency = (
        np.where(stable & confirmed, value, np.nan) for value in ends
    )
    return GainRange(low, high, low_frequency, high_frequency, stable, confirmed)


def _end_on_side(
    loop: StateSpace, crossings: GainCrossings, side: int, dt: float
) -> tuple[Real, Real, Bool]:
    """Find the crossing next to 1 above (side 1) or below (-1), and whether the poles agree."""
    points = np.arange(len(loop))
    out = side * (crossings.factor - 1)
    pad = np.full((len(loop), 2), np.inf)
    out = np.concatenate([np.where(out > 0, out, np.inf), pad], axis=1)
    order = np.argsort(out, axis=1)[:, :2]
    nearest, beyond = np.take_along_axis(out, order, axis=1).T
    endless = np.isinf(nearest)
    column = np.where(endless, -1, order[:, 0])
    frequency, jump = (
        np.where(endless, np.nan, table[points, column])
        for table in (crossings.frequency, crossings.jump)
    )
    end = 1 + side * nearest
    inner = _stable_inside(loop, crossings.wide, end, side, dt)
    outside = np.where(endless, 1.0, between_outside(nearest, beyond) * side + 1)
    outer = count_right(loop, points, outside, dt)
    error, change, several = crossings.examine(points, column)
    none = np.zeros(len(loop), dtype=np.intp)
    fits = changes_fit(side * change, several, jump, (none, none), outer)
    certain = is_small(error, np.where(endless, np.nan, end))
    return end, frequency, inner & (endless | (fits & certain))


def _stable_inside(loop: StateSpace, wide: Bool, end: Real, side: int, dt: float) -> Bool:
    """Whether no pole is lost on the way to the end, or far out where there is none."""
    points, endless = np.arange(len(loop)), np.isinf(end)
    halfway = np.where(endless, 1 + side * FAR_OUT, (1 + np.where(endless, 1.0, end)) / 2)
    owners, factors = [points], [halfway]
    for number, factor in enumerate(FARTHEST):
        chosen = np.nonzero(endless & (wide | (number == 0)))[0]
        owners.append(chosen)
        factors.append(np.full(len(chosen), side * factor))
    # Among widely spread poles a slow crossing may be missed.
    chosen = np.nonzero(wide)[0]
    last = np.where(endless, side * FARTHEST[0], end)[chosen]
    owners.append(np.repeat(chosen, len(PROBES)))
    factors.append((1 + (last[:, None] - 1) * PROBES).ravel())
    steady = may_be_stable(loop, np.concatenate(owners), np.concatenate(factors), dt)
    if loop.D.shape[-1] > 1:
        # Nothing else tells whether crossings of several channels are all known.
        chosen = np.nonzero(endless & wide & steady)[0]
        for factor in FARTHEST[FARTHEST <= DROWNING]:
            far = np.full(len(chosen), side * factor)
            steady[chosen[count_right(loop, chosen, far, dt)[1] > 0]] = False
    return steady
