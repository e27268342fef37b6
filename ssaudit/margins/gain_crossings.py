"""Gain factors at which a pole of the closed loop is on the boundary of stability."""

from dataclasses import dataclass

import numpy as np

from ssaudit.margins.crossing_accuracy import factor_error, on_axis, response_error
from ssaudit.margins.crossings import find_crossings, spread_widely
from ssaudit.margins.gain_checks import term_sizes
from ssaudit.margins.responses import respond, response_noise
from ssaudit.margins.state_matrices import finite_points
from ssaudit.margins.state_space import (
    Bool,
    Complex,
    Index,
    Real,
    StateSpace,
    feed_back,
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
# A response that rounding hides crosses at no factor below the inverse of that rounding, which
# must be larger than this (180 dB) for the crossing not to matter.
HIDDEN_FACTOR = 1e9


@dataclass(frozen=True)
class GainCrossings:
    """Factors at which a pole is on the boundary.

    Attributes
    ----------
    factor, frequency : (points, any) float
        In rising order of the factor, NaN-padded; [rad/s].
    jump : (points, any) float
        Most poles that may cross there: two where a pair does, one at either end of the axis,
        more where crossings coincide.
    mapped : (points, any) float
        The frequency as it is in ``closed`` (see `ssaudit.margins.state_space.to_continuous`).
    base : (points,) float
        The factor at which the loop was closed to find them.
    closed, given : StateSpace
        The loop closed there, continuous; and as it was given, sampled or not.
    size : (points, n, n) float
        Sizes of the terms of its A.
    place : (points, any) complex
        Where the pole is in the plane of ``given``.
    failed : (points,) bool
        Where they could not be found, or not all of them.
    doubtful : (points, any) float
        Factors at which rounding hides whether there is a crossing too, NaN-padded.
    wide : (points,) bool
        Whether the poles spread so widely that rounding endangers the slow ones.
    """

    factor: Real
    frequency: Real
    jump: Real
    mapped: Real
    base: Real
    closed: StateSpace
    given: StateSpace
    size: Real
    place: Complex
    failed: Bool
    doubtful: Real
    wide: Bool

    def examine(self, owner: Index, column: Index) -> tuple[Real, Index, Bool]:
        """How far rounding may move some factors, and the change in unstable poles there.

        The change is that as the factor rises: 0 where it cannot be told. The last result says
        where crossings coincide, so that any number up to their sum may change. Of the padding the
        error is NaN.
        """
        factor, w = self.factor[owner, column], self.mapped[owner, column]
        jump = np.nan_to_num(self.jump[owner, column]).astype(np.intp)
        error, change = np.full(len(owner), np.nan), np.zeros(len(owner), dtype=np.intp)
        real = np.nonzero(~np.isnan(factor))[0]
        kappa = factor[real] - self.base[owner[real]]
        given = self.given, self.place[owner[real], column[real]], self.size
        error[real], direction = factor_error(self.closed, owner[real], w[real], kappa, given)
        several = jump > np.where((w > 0) & np.isfinite(w), 2, 1)
        change[real] = np.where(several[real], 0, direction * jump[real])
        return error, change, several


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
    base, given, T, poles = _close_at_base(loop, dt)
    failed = ~finite_points(T.A, T.D)
    sound = np.nonzero(~failed)[0]
    found, failed[sound], (hidden, hidden_change) = _settled_changes(T[sound], poles[sound])
    owner, w, change = sound[found[0]], found[1], found[2]
    # At either end of the axis one pole crosses, elsewhere a pair.
    jump = np.where((w > 0) & np.isfinite(w), 2.0, 1.0)
    factor, mapped, jump = _arrange(len(loop), owner, base[owner] + change, w, jump)
    hidden = sound[hidden]
    return GainCrossings(
        factor=factor,
        frequency=unwarp(mapped, dt),
        jump=jump,
        mapped=mapped,
        base=base,
        closed=T,
        given=given,
        size=np.add(*term_sizes(loop, base)),
        place=on_axis(mapped) if dt == 0 else _on_circle(mapped),
        failed=failed,
        doubtful=_pad(len(loop), hidden, base[hidden] + hidden_change),
        wide=spread_widely(poles),
    )


def _on_circle(w: Real) -> Complex:
    """Place on the unit circle of a frequency as `to_continuous` maps it."""
    return np.asarray(np.exp(2j * np.arctan(w)), dtype=complex)


def _close_at_base(loop: StateSpace, dt: float) -> tuple[Real, StateSpace, StateSpace, Complex]:
    """Close each loop at a factor that leaves no pole on the boundary; map it to continuous."""
    base = np.full(len(loop), BASE_FACTORS[0])
    poles, clearance = _poles_at(loop, base, dt)
    near = np.nonzero(~(clearance > CLEAR_OF_BOUNDARY))[0]
    for factor in BASE_FACTORS[1:]:
        if len(near) == 0:
            break
        trial = np.full(len(near), factor)
        found, clear = _poles_at(loop[near], trial, dt)
        better = clear > np.nan_to_num(clearance[near], nan=-1.0)
        chosen = near[better]
        base[chosen], clearance[chosen], poles[chosen] = factor, clear[better], found[better]
    given = feed_back(loop, base)
    T = to_continuous(given, dt)
    return base, given, T, poles if dt == 0 else find_poles(T.A)[0]


def _poles_at(loop: StateSpace, factor: Real, dt: float) -> tuple[Complex, Real]:
    """Poles, and how far the nearest is from the boundary, relative to the fastest pole."""
    closed = feed_back(loop, factor)
    poles, _ = find_poles(closed.A)
    if poles.shape[1] == 0:
        return poles, np.where(np.isfinite(closed.D).all(axis=(1, 2)), 1.0, 0.0)
    distance = np.abs(poles.real) if dt == 0 else np.abs(np.abs(poles) - 1)
    largest = np.abs(poles).max(axis=1) if dt == 0 else 1.0
    with np.errstate(invalid="ignore"):
        return poles, np.asarray(distance.min(axis=1) / largest)


def _settled_changes(
    T: StateSpace, poles: Complex
) -> tuple[tuple[Index, Real, Real], Bool, tuple[Index, Real]]:
    """Crossings at zero and infinite frequency and between, as changes of the factor.

    Then where that failed, and changes at which rounding hides whether there is a crossing.
    """
    owner, w, change, failed = _end_changes(T)
    doubtful = np.zeros(0, dtype=np.intp), np.zeros(0)
    if T.D.shape[-1] == 1:
        found = find_crossings(T, poles, None)
        inner, inner_w = found.owner, found.w
        value = respond(T, inner, inner_w)[:, 0, 0].real
        seen, hidden = _tell_from_zero(T, inner, inner_w, value)
        failed = failed | found.failed | hidden
        there = respond(T, found.hidden_owner, found.hidden_w)[:, 0, 0].real
        with np.errstate(divide="ignore"):
            inner_change = np.where(seen, -1 / value, np.inf)
            doubtful = found.hidden_owner, -1 / there
    elif T.A.shape[-1] <= MOST_STATES and T.A.shape[-1] > 0:
        inner, inner_w, inner_change = find_gain_crossings(T)
    else:
        return (owner, w, change), failed | (T.A.shape[-1] > MOST_STATES), doubtful
    changes = np.concatenate([change, inner_change])
    joined = np.concatenate([owner, inner]), np.concatenate([w, inner_w]), changes
    return joined, failed, doubtful


def _tell_from_zero(T: StateSpace, owner: Index, w: Real, value: Real) -> tuple[Bool, Bool]:
    """Which values of the response are not rounding; points where that hides a crossing."""
    seen = np.abs(value) > response_noise(T, owner, w)
    hidden = np.zeros(len(T), dtype=bool)
    small = np.nonzero(~seen)[0]
    if len(small):
        error = response_error(T, owner[small], on_axis(w[small])).sum(axis=(1, 2))
        seen[small] = np.abs(value[small]) > error
        hidden[owner[small[~seen[small] & ~(error < 1 / HIDDEN_FACTOR)]]] = True
    return seen, hidden


def _end_changes(T: StateSpace) -> tuple[Index, Real, Real, Bool]:
    """Crossings at zero and infinite frequency: real eigenvalues of T(0) and of D."""
    owners, frequencies, changes = [], [], []
    everyone, failed = np.arange(len(T)), np.zeros(len(T), dtype=bool)
    for w in (0.0, np.inf):
        response = respond(T, everyone, np.full(len(T), w)).real
        eigenvalues = find_poles(response)[0]
        real = np.abs(eigenvalues.imag) <= REAL_EIGENVALUE * np.abs(eigenvalues)
        owner, column = np.nonzero(real & (eigenvalues != 0))
        value, places = eigenvalues[owner, column].real, np.full(len(owner), w)
        seen, hidden = _tell_from_zero(T, owner, places, value)
        failed |= hidden
        owners.append(owner[seen])
        frequencies.append(places[seen])
        changes.append(-1 / value[seen])
    return np.concatenate(owners), np.concatenate(frequencies), np.concatenate(changes), failed


def _arrange(
    points: int, owner: Index, factor: Real, w: Real, jump: Real
) -> tuple[Real, Real, Real]:
    """Sort crossings by point and factor, merge equal ones, and pad to a rectangle."""
    finite = np.isfinite(factor)
    factor = np.where(np.abs(factor) < ZERO_FACTOR, 0.0, factor)
    owner, w, factor, jump = owner[finite], w[finite], factor[finite], jump[finite]
    order = np.lexsort((factor, owner))
    owner, w, factor, jump = owner[order], w[order], factor[order], jump[order]
    fresh = np.ones(len(factor), dtype=bool)
    fresh[1:] = (np.diff(owner) > 0) | (np.diff(factor) > SAME_FACTOR * np.abs(factor[1:]))
    if len(factor):
        jump = np.add.reduceat(jump, np.nonzero(fresh)[0])
    owner, w, factor = owner[fresh], w[fresh], factor[fresh]
    return _pad(points, owner, factor), _pad(points, owner, w), _pad(points, owner, jump)


def _pad(points: int, owner: Index, value: Real) -> Real:
    """Rows of values, one for each point, filled up with NaN; the owners in rising order."""
    place = np.arange(len(owner)) - np.searchsorted(owner, owner)
    table = np.full((points, int(place.max(initial=0)) + 1), np.nan)
    table[owner, place] = value
    return table
