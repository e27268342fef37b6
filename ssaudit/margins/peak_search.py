"""Global maximum over frequency of a gain-like function, certified by its level crossings.

For each point the frequencies not yet excluded are kept as pieces of the axis. A round takes one
multiplier a point (the scaling that made the function small, or none), asks one eigenproblem at
which frequencies the function held at that multiplier crosses a level just above the best value
found, cuts the pieces there, and drops those on which it lies below. What is left is looked at in
the middle. With no multiplier this is the two-sided method of Boyd and Balakrishnan; with one it
covers the axis by upper bounds, as Sreedhar, Van Dooren and Tits do for the real radius.

The eigenproblem is as large as the fastest pole, and its rounding hides slow crossings where poles
lie many decades apart; `ssaudit.margins.cover` knows no such limit.
"""

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from ssaudit.margins.pieces import cut_pieces, middle_of
from ssaudit.margins.state_space import Bool, Complex, Index, Real

# Usual searches end within 3 to 8 rounds; this many means that the numbers do not decide.
MOST_ROUNDS = 80
# And so do this many pieces of one point, where usual searches have less than a hundred: rounding
# hides where its curve is below the level, and the pieces double with every round.
MOST_PIECES = 100_000
# Eigenvalues this near to the axis are looked at as crossings (a false one costs an evaluation,
# a missed one would be an error): relative to the largest eigenvalue, and to their own size.
NEAR_AXIS_OF_LARGEST = 1e-8
NEAR_AXIS_OF_OWN = 1e-5
# The eigenvalues found of a matrix of k rows are those of one that differs by k times this,
# relative to its size (usual backward error of the QR iteration; from memory).
BACKWARD = 2 * np.finfo(float).eps
# Cuts are eigenvalues, of a relative accuracy no better than this at times: what is left between
# them is widened by as much.
CUT_SLACK = 1e-6


class Curve(Protocol):
    """What a peak search needs to know of a function over frequency."""

    @property
    def tunable(self) -> bool:
        """Whether there are multipliers at all."""

    def guess(self, owner: Index, w: Real) -> Real:
        """Multipliers (count, k) at frequencies that are cheap and fair."""

    def tune(self, owner: Index, w: Real, floor: Real) -> tuple[Real, Real]:
        """Values at frequencies, and the best multipliers (count, k), which give them.

        Where the value is below the floor a fair multiplier that shows it is enough.
        """

    def hold(self, owner: Index, w: Real, multiplier: Real) -> Real:
        """Upper bounds at frequencies by given multipliers."""

    def cross(self, owner: Index, multiplier: Real, level: Real) -> tuple[Real, Bool]:
        """Frequencies (count, any) where the held function equals the level, NaN-padded.

        The second result says where the eigenproblem failed.
        """


@dataclass(frozen=True)
class Peak:
    """Largest value over frequency of each point.

    Attributes
    ----------
    value : (points,) float
        Attained at ``frequency``; no other frequency exceeds it by more than the tolerance.
    frequency : (points,) float
        In the units of the search [rad/s, or rad a sample].
    confirmed : (points,) bool
        False where the search could not decide.
    """

    value: Real
    frequency: Real
    confirmed: Bool


def fill_in(peak: Peak, rows: Index, found: Peak) -> None:
    """Enter the peaks found for some points, in place.

    Parameters
    ----------
    peak : Peak
        Of all points.
    rows : (k,) int
        Which points were searched.
    found : Peak
        Of these.

    Examples
    --------
    >>> peak = Peak(np.full(2, np.nan), np.full(2, np.nan), np.zeros(2, dtype=bool))
    >>> fill_in(peak, np.array([1]), Peak(np.ones(1), np.zeros(1), np.ones(1, dtype=bool)))
    >>> peak.value
    array([nan,  1.])
    """
    peak.value[rows], peak.frequency[rows] = found.value, found.frequency
    peak.confirmed[rows] = found.confirmed


@dataclass
class _State:
    """The search as it goes on: best values a point, and the pieces left."""

    value: Real
    frequency: Real
    multiplier: Real
    failed: Bool
    owner: Index
    low: Real
    high: Real
    scale: Real
    upper: Real


def find_peak(curve: Curve, starts: Real, upper: Real, scale: Real, rtol: float) -> Peak:
    """Find the largest value of a curve over [0, upper] at each point.

    Parameters
    ----------
    curve : Curve
        The function, stacked over points.
    starts : (points, count) float
        Frequencies to look at first [rad/s], NaN-padded; at least one a point.
    upper : (points,) float
        End of the frequency axis [rad/s]; may be inf.
    scale : (points,) float
        A typical frequency of each point [rad/s], positive.
    rtol : float
        Relative tolerance of the value.

    Returns
    -------
    Peak
        ``confirmed`` is false (and the value NaN) where evaluation failed or the search did not
        end. What rounding of the eigenproblems may hide is not examined here.

    References
    ----------
    Boyd and Balakrishnan, Systems & Control Letters 15, 1990; with multipliers Sreedhar, Van Dooren
    and Tits, 1996.

    Examples
    --------
    >>> from ssaudit.margins.gain_curve import GainCurve
    >>> from ssaudit.margins.state_space import StateSpace
    >>> lag = StateSpace(*(np.full((1, 1, 1), x) for x in (-2.0, 1.0, 6.0, 0.0)))  # 6/(s + 2)
    >>> curve = GainCurve(lag, False)
    >>> find_peak(curve, np.array([[1.0]]), np.array([np.inf]), np.ones(1), 1e-7).value.round(6)
    array([3.])
    """
    state = _begin(curve, starts, upper, scale)
    for _ in range(MOST_ROUNDS):
        state.owner, state.low, state.high = _drop_failed(state)
        if len(state.owner) == 0:
            break
        _refine(curve, state, rtol)
    state.failed[state.owner] = True
    value = np.where(state.failed, np.nan, state.value)
    frequency = np.where(state.failed, np.nan, state.frequency)
    return Peak(value, frequency, ~state.failed)


def _begin(curve: Curve, starts: Real, upper: Real, scale: Real) -> _State:
    """Look at the first frequencies, and take the whole axis as one piece a point."""
    points = len(starts)
    everyone = np.arange(points)
    empty = np.full(points, -np.inf)
    multiplier = curve.guess(everyone, np.zeros(points))
    state = _State(empty, empty.copy(), multiplier, np.zeros(points, dtype=bool),
                   everyone, np.zeros(points), upper.astype(float), scale, upper)  # fmt: skip
    for w in starts.T:
        given = np.nonzero(~np.isnan(w))[0]
        value, multiplier = curve.tune(given, w[given], state.value[given])
        state.failed[given[np.isnan(value)]] = True
        _raise(state, given, w[given], value, multiplier)
    state.failed |= ~np.isfinite(state.value)
    return state


def _raise(state: _State, point: Index, w: Real, value: Real, multiplier: Real) -> None:
    """Replace the best values, and their multipliers, by better ones."""
    better = value > state.value[point]
    state.value[point[better]] = value[better]
    state.frequency[point[better]] = w[better]
    state.multiplier[point[better]] = multiplier[better]


def _drop_failed(state: _State) -> tuple[Index, Real, Real]:
    """Keep the pieces of the points still to be searched; give up on those with too many."""
    state.failed |= np.bincount(state.owner, minlength=len(state.failed)) > MOST_PIECES
    alive = ~state.failed[state.owner]
    return state.owner[alive], state.low[alive], state.high[alive]


def _refine(curve: Curve, state: _State, rtol: float) -> None:
    """One round: an eigenproblem a point, pieces cut and dropped, the rest looked at."""
    active, place = np.unique(state.owner, return_inverse=True)
    level = state.value[active] * (1 + rtol)
    crossings, failed = curve.cross(active, state.multiplier[active], level)
    state.failed[active[failed]] = True
    if curve.tunable:
        owner, low, high = cut_pieces(state.owner, state.low, state.high, crossings[place])
    else:  # one eigenproblem tells all, and so nothing hangs on the cuts of earlier rounds
        whole = np.zeros(len(active)), state.upper[active]
        owner, low, high = cut_pieces(active, *whole, crossings)
    middle = middle_of(low, high, state.scale[owner])
    held = curve.hold(owner, middle, state.multiplier[owner])
    left = ~(held <= level[np.searchsorted(active, owner)])
    slack = np.where(np.isinf(high), 0.0, CUT_SLACK * high)
    state.owner, state.low = owner[left], np.maximum(low - slack, 0.0)[left]
    state.high = np.minimum(high + slack, state.upper[owner])[left]
    _look(curve, state, state.owner, middle[left], None if curve.tunable else held[left])


def _look(curve: Curve, state: _State, owner: Index, w: Real, known: Real | None) -> None:
    """Take each point's most promising frequency: raise its best value, and set its multiplier."""
    multiplier = curve.guess(owner, w)
    value = curve.hold(owner, w, multiplier) if known is None else known
    state.failed[owner[np.isnan(value)]] = True
    order = np.lexsort((np.nan_to_num(value, nan=-np.inf), owner))
    chosen = order[np.nonzero(np.diff(owner[order], append=-1))[0]]
    point, w, value, multiplier = owner[chosen], w[chosen], value[chosen], multiplier[chosen]
    if curve.tunable:
        value, multiplier = curve.tune(point, w, state.value[point])
    _raise(state, point, w, value, multiplier)
    state.multiplier[point] = multiplier


def near_axis(eigenvalues: Complex) -> tuple[Real, Bool]:
    """Frequencies of the eigenvalues on, or nearly on, the imaginary axis.

    Parameters
    ----------
    eigenvalues : (count, k) complex

    Returns
    -------
    frequencies : (count, k) float
        Imaginary parts, NaN for eigenvalues off the axis or below it.
    failed : (count,) bool
        Where an eigenvalue is NaN: the solver did not converge.

    Examples
    --------
    >>> near_axis(np.array([[2j, -2j, -1.0]]))
    (array([[ 2., nan, nan]]), array([False]))
    """
    size = np.abs(eigenvalues)
    finite = np.isfinite(size)
    largest = np.where(finite, size, 0.0).max(axis=1, keepdims=True, initial=0.0)
    tolerance = NEAR_AXIS_OF_LARGEST * largest + NEAR_AXIS_OF_OWN * size
    on_axis = finite & (np.abs(eigenvalues.real) <= tolerance) & (eigenvalues.imag >= 0)
    return np.where(on_axis, eigenvalues.imag, np.nan), np.asarray(np.isnan(size).any(axis=1))
