"""Margins of single loops: gain up and down, phase and delay, with their frequencies."""

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import ArrayLike

from ssaudit.errors import LoopError
from ssaudit.margins.balance import balance_loop
from ssaudit.margins.crossings import find_crossings
from ssaudit.margins.delayed import (
    BEFORE_LIMIT,
    LARGEST_FACTOR,
    NEARER_FACTORS,
    TURN,
    count_unstable,
    find_phase_crossings,
    find_unit_crossings,
    scale_loop,
)
from ssaudit.margins.gain_checks import between_outside
from ssaudit.margins.gain_crossings import locate_crossings
from ssaudit.margins.gain_range import range_around_one
from ssaudit.margins.responses import respond
from ssaudit.margins.state_matrices import find_stable
from ssaudit.margins.state_space import (
    Bool,
    Index,
    Real,
    StateSpace,
    feed_back,
    read_loop,
    to_continuous,
    unwarp,
)

# abs D this near to 1: the loop's gain tends to 1 at high frequency.
UNIT_LIMIT = 1e-12


@dataclass(frozen=True)
class LoopMargins:
    """Margins of single loops; all NaN where the closed loop is not stable or not confirmed.

    Attributes
    ----------
    gain_low, gain_high : (points,) float
        The gain may fall to, and rise to, these factors: 0 and inf where there is no limit, at
        least none below 1e9 (180 dB), or 1000 (60 dB) of loops with a transport delay.
    gain_low_db, gain_high_db : (points,) float
        The same in decibel: -inf and inf where there is no limit.
    gain_low_frequency, gain_high_frequency : (points,) float
        Where the boundary is met [rad/s]; NaN where there is no limit.
    phase_deg : (points,) float
        The phase may turn by less than this either way [deg]; inf where abs L is never 1.
    phase_frequency : (points,) float
        Where [rad/s].
    delay_s : (points,) float
        A delay below this may come in addition [s]; inf where abs L is never 1, 0 where the
        gain at infinite frequency is 1 or more.
    delay_frequency : (points,) float
        Where [rad/s].
    stable, confirmed : (points,) bool
        Whether the closed loop is stable; whether the numbers decide.
    """

    gain_low: Real
    gain_high: Real
    gain_low_db: Real
    gain_high_db: Real
    gain_low_frequency: Real
    gain_high_frequency: Real
    phase_deg: Real
    phase_frequency: Real
    delay_s: Real
    delay_frequency: Real
    stable: Bool
    confirmed: Bool


@dataclass(frozen=True)
class _Ends:
    """Gain margins as factors with frequencies, and whether the loop is stable."""

    low: Real
    high: Real
    low_frequency: Real
    high_frequency: Real
    stable: Bool
    confirmed: Bool


def find_loop_margins(
    A: ArrayLike,
    B: ArrayLike,
    C: ArrayLike,
    D: ArrayLike,
    dt: float = 0.0,
    *,
    delay: ArrayLike | None = None,
) -> LoopMargins:
    """Gain, phase and delay margins of single loops, exact and without a frequency grid.

    Parameters
    ----------
    A, B, C, D : (points, n, n), (points, n, 1), (points, 1, n), (points, 1, 1) float
        The open loop L, other loops closed in it; closed by negative unity feedback.
    dt : float
        Sampling time [s]; 0 means continuous. The delay margin of a sampled loop is that of its
        phase: exact for whole samples.
    delay : (points,) float, optional
        Transport delay in each loop besides A, B, C, D [s], treated exactly. Continuous loops
        only. Gain margins are then searched up to 60 dB; beyond that there is no limit.

    Returns
    -------
    LoopMargins

    Raises
    ------
    ssaudit.errors.LoopError
        When the loop has more than one channel, or a delay does not fit.

    References
    ----------
    The definitions are those of any text on feedback. Frequencies from eigenproblems of n rows,
    see `ssaudit.margins.crossings`; delayed loops as in Walton and Marshall, IEE Proc. D 134,
    1987, see `ssaudit.margins.delayed`.

    Examples
    --------
    L = 1/s: no gain limit but zero, 90 deg, π/2 s.

    >>> one = np.ones((1, 1, 1))
    >>> margins = find_loop_margins(0 * one, one, one, 0 * one)
    >>> margins.gain_high, margins.phase_deg.round(9), margins.delay_s.round(6)
    (array([inf]), array([90.]), array([1.570796]))
    """
    loop = balance_loop(read_loop(A, B, C, D))
    if loop.D.shape[-1] != 1:
        raise LoopError(
            f"a single loop is needed, and this has {loop.D.shape[-1]} channels",
            do="open one channel, close the others, and ask again for each",
        )
    tau = _read_delay(delay, len(loop), dt)
    if delay is None:
        ends = _plain_ends(loop, dt)
        owner, w, angle, failed = _unit_circle(loop, ends.stable, dt)
    else:
        ends = _mixed_ends(loop, tau)
        unit = find_unit_crossings(loop)
        owner, w, failed = unit.owner, unit.w, unit.failed
        angle = unit.angle - w * tau[owner]
    return _assemble(loop, ends, _turning(loop, owner, w, angle, dt), failed)


def _read_delay(delay: ArrayLike | None, points: int, dt: float) -> Real:
    """Check the delays against the loops."""
    if delay is None:
        return np.zeros(points)
    if dt != 0:
        raise LoopError(
            "a sampled loop was given a transport delay besides its states",
            do="put whole samples of delay into its states",
        )
    tau = np.asarray(delay, dtype=float)
    if tau.shape != (points,) or not (np.isfinite(tau).all() and (tau >= 0).all()):
        raise LoopError(
            f"delays of shape {tau.shape} do not fit {points} loops, or are negative",
            do="give one delay [s] a loop, zero or more",
        )
    return tau


def _plain_ends(loop: StateSpace, dt: float) -> _Ends:
    """Gain margins of loops without delay: the stable interval around 1, above zero."""
    found = range_around_one(loop, locate_crossings(loop, dt), dt)
    limited = ~(found.low <= 0)
    low = np.where(limited, found.low, 0.0)
    low_frequency = np.where(limited, found.low_frequency, np.nan)
    return _Ends(
        low, found.high, low_frequency, found.high_frequency, found.stable, found.confirmed
    )


def _unit_circle(loop: StateSpace, stable: Bool, dt: float) -> tuple[Index, Real, Real, Bool]:
    """Frequencies [rad/s] with abs L = 1 and arg(-L) there, of the stable loops."""
    failed = np.zeros(len(loop), dtype=bool)
    chosen = np.nonzero(stable)[0]
    T = to_continuous(feed_back(loop[chosen], np.ones(len(chosen))), dt)
    poles = find_stable(T.A, 0.0)[0]
    found = find_crossings(T, poles, np.full(len(chosen), 0.5))
    owner, w = found.owner, found.w
    failed[chosen] = found.failed | _odd_one_out(T, owner)
    failed[chosen[found.hidden_owner]] = True
    t = respond(T, owner, w)[:, 0, 0]
    return chosen[owner], unwarp(w, dt), np.angle(-t / (1 - t)), failed


def _odd_one_out(T: StateSpace, owner: Index) -> Bool:
    """Whether abs L ends on the other side of 1 than the number of its crossings tells."""
    everyone = np.arange(len(T))
    side = [respond(T, everyone, np.full(len(T), w))[:, 0, 0].real - 0.5 for w in (0.0, np.inf)]
    count = np.bincount(owner, minlength=len(T))
    clear = (np.abs(side[0]) > 1e-9) & (np.abs(side[1]) > 1e-9)
    return np.asarray(clear & ((side[0] * side[1] < 0) != (count % 2 == 1)))


def _mixed_ends(loop: StateSpace, tau: Real) -> _Ends:
    """Gain margins where some loops have a delay and others none."""
    late = tau > 0
    parts = [(~late, _plain_ends(loop[~late], 0.0)), (late, _delayed_ends(loop[late], tau[late]))]
    joined = {
        field.name: np.zeros(len(loop), dtype=getattr(parts[0][1], field.name).dtype)
        for field in fields(_Ends)
    }
    for chosen, ends in parts:
        for name, value in joined.items():
            value[chosen] = getattr(ends, name)
    return _Ends(**joined)


def _delayed_ends(loop: StateSpace, tau: Real) -> _Ends:
    """Gain margins of loops with delay, confirmed by counting poles on both sides of each end."""
    count, sound = count_unstable(loop, tau)
    stable = sound & (count == 0)
    factor, frequency, limit = _collect_factors(loop, tau)
    confirmed, ends = sound, []
    for side in (-1, 1):
        out = np.where(side * (factor - 1) > 0, np.abs(factor - 1), np.inf)
        order = np.argsort(out, axis=1)[:, :2]
        nearest, beyond = np.take_along_axis(out, order, axis=1).T
        limited = np.isfinite(nearest)
        known = np.abs(limit - 1) if side > 0 else np.ones(len(loop))
        beyond = np.where(np.isinf(beyond) & (known > nearest), known, beyond)
        inside = 1 + side * np.where(limited, nearest, 0.0) / 2
        outside = 1 + side * np.where(limited, between_outside(nearest, beyond), 0.0)
        inner = count_unstable(scale_loop(loop, inside), tau)[0] == 0
        outer = count_unstable(scale_loop(loop, outside), tau)[0] == 0
        confirmed = confirmed & (~stable | (inner & (~limited | ~outer)))
        at = np.take_along_axis(frequency, order[:, :1], axis=1)[:, 0]
        none = np.inf if side > 0 else 0.0
        ends += [np.where(limited, 1 + side * nearest, none), np.where(limited, at, np.nan)]
    return _Ends(ends[0], ends[2], ends[1], ends[3], stable, confirmed)


def _collect_factors(loop: StateSpace, tau: Real) -> tuple[Real, Real, Real]:
    """Factors at which delayed loops are on the boundary, frequencies, and how far was searched."""
    points = len(loop)
    static = respond(loop, np.arange(points), np.zeros(points))[:, 0, 0].real
    with np.errstate(divide="ignore", invalid="ignore"):
        at_zero = np.where(static < 0, -1 / static, np.inf)
        far = 1 / np.abs(loop.D[:, 0, 0]) / (1 + BEFORE_LIMIT)
    far = np.where(far < LARGEST_FACTOR, far, np.inf)
    factor, frequency = np.stack([at_zero, far], axis=1), np.full((points, 2), np.inf)
    frequency[:, 0] = 0
    limit = np.full(points, np.inf)
    left = np.arange(points)
    for largest in (*NEARER_FACTORS, LARGEST_FACTOR):
        owner, w, found = find_phase_crossings(loop[left], tau[left], largest)
        place = np.arange(len(owner)) - np.searchsorted(owner, owner)
        table = np.full((2, points, int(place.max(initial=0)) + 1), np.inf)
        table[0, left[owner], place], table[1, left[owner], place] = found, w
        if largest > NEARER_FACTORS[0]:  # those below 1 are known from the first time
            table[0] = np.where(table[0] > 1, table[0], np.inf)
        factor, frequency = np.append(factor, table[0], 1), np.append(frequency, table[1], 1)
        limit[left] = np.where(far[left] > largest, largest, np.inf)
        done = np.where(factor[left] > 1, factor[left], np.inf).min(axis=1) <= largest
        left = left[~done]
        if len(left) == 0:
            break
    return factor, frequency, limit


def _turning(
    loop: StateSpace, owner: Index, w: Real, angle: Real, dt: float
) -> tuple[Real, Real, Real, Real]:
    """Phase margin [deg], delay margin [s] and their frequencies from the unit-circle crossings."""
    points = len(loop)
    direct = loop.D[:, 0, 0]
    turned = np.abs(np.angle(np.exp(1j * angle)))
    lag = np.mod(angle, TURN) / w
    if dt == 0:
        # The limit at infinite frequency: any delay turns it as far as one likes.
        limit = np.nonzero(np.abs(np.abs(direct) - 1) <= UNIT_LIMIT)[0]
        loud = np.nonzero(np.abs(direct) >= 1 - UNIT_LIMIT)[0]
        far = np.full(len(limit), np.inf)
        phase = _smallest(points, np.append(owner, limit), np.append(w, far),
                          np.append(turned, np.abs(np.angle(-direct[limit] + 0j))))  # fmt: skip
        delay = _smallest(points, np.append(owner, loud), np.append(w, np.full(len(loud), np.inf)),
                          np.append(lag, np.zeros(len(loud))))  # fmt: skip
    else:
        phase, delay = _smallest(points, owner, w, turned), _smallest(points, owner, w, lag)
    return np.degrees(phase[0]), phase[1], delay[0], delay[1]


def _smallest(points: int, owner: Index, w: Real, value: Real) -> tuple[Real, Real]:
    """Smallest value of each point and the frequency of it; inf and NaN where there is none."""
    order = np.lexsort((value, owner))
    first = order[np.nonzero(np.diff(owner[order], prepend=-1))[0]]
    least, frequency = np.full(points, np.inf), np.full(points, np.nan)
    least[owner[first]], frequency[owner[first]] = value[first], w[first]
    return least, frequency


def _assemble(
    loop: StateSpace, ends: _Ends, turning: tuple[Real, Real, Real, Real], failed: Bool
) -> LoopMargins:
    """Put the margins together, NaN where they are not defined or not confirmed."""
    confirmed = ends.confirmed & (~failed | ~ends.stable)
    shown = ends.stable & confirmed
    with np.errstate(divide="ignore", invalid="ignore"):
        decibels = [20 * np.log10(ends.low), 20 * np.log10(ends.high)]
    values = [ends.low, ends.high, *decibels, ends.low_frequency, ends.high_frequency, *turning]
    table = np.where(shown, values, np.nan)
    names = [field.name for field in fields(LoopMargins)][: len(table)]
    named = dict(zip(names, table, strict=True))
    return LoopMargins(**named, stable=ends.stable, confirmed=confirmed)
