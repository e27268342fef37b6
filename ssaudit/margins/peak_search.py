"""Global maximum over frequency of a gain-like function, certified in one of two ways.

By its level crossings (`find_peak`), or by covering the axis with pieces on which it cannot rise
above the best value found (`cover_peak`).

For each point the frequencies not yet excluded are kept as pieces of the axis. A round takes one
multiplier a point (the scaling that made the function small, or none), asks one eigenproblem at
which frequencies the function held at that multiplier crosses a level just above the best value
found, cuts the pieces there, and drops those on which it lies below. What is left is looked at in
the middle. With no multiplier this is the two-sided method of Boyd and Balakrishnan; with one it
covers the axis by upper bounds, as Sreedhar, Van Dooren and Tits do for the real radius.

The eigenproblem is as large as the fastest pole, and its rounding hides slow crossings where poles
lie many decades apart. The cover knows no such limit: a response that is a sum over its poles lies
as near to the chord of a piece as its second derivative allows, term by term, and a chord is no
longer than the longer of its ends (a norm is convex).
"""

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from ssaudit.margins.state_space import Bool, Complex, Index, ModalForm, Real
from ssaudit.modes.poles import isolate

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
# An endless piece that begins this many typical frequencies out is looked at in the limit.
FAR = 1e4
# Cuts are eigenvalues, of a relative accuracy no better than this at times: what is left between
# them is widened by as much.
CUT_SLACK = 1e-6
# A piece whose ends differ by more than this factor is halved by its logarithm.
WIDE = 4.0
# A cover looks at frequencies up to this many times the fastest pole, then at their inverses.
BEYOND = 2.0
# Usual covers take 15 to 30 rounds of halving, and some dozen pieces a point at a time.
MOST_HALVINGS = 100
MOST_CELLS = 4000
# Where rounding leaves no more digits, a cover to this tolerance stands in for a finer one: both
# the value's own error and what may exceed it are then below it.
ROUGH_RTOL = 5e-7
# Points are covered in lots of about this many numbers a table: they stay in the cache.
LOT_NUMBERS = 100_000


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
        Frequencies to look at first, NaN-padded; at least one a point.
    upper : (points,) float
        End of the frequency axis; may be inf.
    scale : (points,) float
        A typical frequency of each point, positive.
    rtol : float
        Relative tolerance of the value.

    Returns
    -------
    Peak
        ``confirmed`` is false (and the value NaN) where evaluation failed.
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


def cut_pieces(owner: Index, low: Real, high: Real, cuts: Real) -> tuple[Index, Real, Real]:
    """Cut pieces of the frequency axis.

    Parameters
    ----------
    owner : (pieces,) int
    low, high : (pieces,) float
        Ends of the pieces.
    cuts : (pieces, any) float
        Where to cut each; those outside, and NaN, do nothing.

    Returns
    -------
    owner, low, high
        Of the new pieces, none of them empty.

    Examples
    --------
    >>> cut_pieces(np.array([0]), np.array([0.0]), np.array([4.0]), np.array([[3.0, 9.0]]))
    (array([0, 0]), array([0., 3.]), array([3., 4.]))
    """
    inside = np.clip(np.where(np.isnan(cuts), low[:, None], cuts), low[:, None], high[:, None])
    edges = np.concatenate([low[:, None], np.sort(inside, axis=1), high[:, None]], axis=1)
    piece, column = np.nonzero(edges[:, 1:] > edges[:, :-1])
    return owner[piece], edges[piece, column], edges[piece, column + 1]


def middle_of(low: Real, high: Real, scale: Real) -> Real:
    """Pick a frequency inside each piece: its middle, or beyond ``low`` where it is endless.

    Parameters
    ----------
    low, high : (pieces,) float
    scale : (pieces,) float
        Typical frequency, taken where ``low`` is 0 and ``high`` inf.

    Returns
    -------
    (pieces,) float

    Examples
    --------
    >>> middle_of(np.array([0.0, 1.0, 0.0]), np.array([2.0, np.inf, np.inf]), np.full(3, 5.0))
    array([1., 2., 5.])
    """
    endless = np.where(low > 0, 2 * low, scale)
    endless = np.where(low > FAR * scale, np.inf, endless)
    with np.errstate(over="ignore", invalid="ignore"):
        halfway = low + (high - low) / 2
        # Over decades the middle is that of the logarithms, or the typical frequency.
        wide = np.where(low > 0, np.sqrt(low) * np.sqrt(high), scale)
        finite = np.where(high > WIDE * np.where(low > 0, low, scale), wide, halfway)
    return np.where(np.isinf(high), endless, finite)


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


class Norm(Protocol):
    """What a cover needs to know of the size of a response."""

    @property
    def tunable(self) -> bool:
        """Whether there are multipliers at all."""

    def bound(self, response: Complex) -> Real:
        """Cheap upper bounds of the sizes of responses (count, outputs, inputs)."""

    def tune(self, response: Complex, floor: Real) -> tuple[Real, Real]:
        """Sizes of responses, and the multipliers (count, k) they take.

        Where the size is below the floor any upper bound that shows it is enough.
        """

    def hold(self, response: Complex, multiplier: Real) -> Real:
        """Upper bounds of the sizes by given multipliers."""

    def weigh(self, left: Complex, right: Complex, multiplier: Real) -> Real:
        """Upper bounds of the sizes of rank-one terms, by given multipliers.

        Of left (count, outputs, n) times right (count, n, inputs), one by one: (count, n).
        """


class PlainNorm:
    """Largest singular values."""

    tunable = False

    def bound(self, response: Complex) -> Real:
        """Frobenius norms."""
        return np.asarray(np.linalg.norm(response, axis=(1, 2)))

    def tune(self, response: Complex, floor: Real) -> tuple[Real, Real]:
        """Sizes; there is no multiplier."""
        value = self.bound(response)
        high = np.nonzero(value > floor)[0]
        if min(response.shape[1:]) > 1 and len(high):
            value[high] = self.hold(response[high], np.zeros(0))
        return value, np.zeros((len(value), 0))

    def hold(self, response: Complex, multiplier: Real) -> Real:
        """Sizes."""
        (sigma,), _ = isolate(lambda M: (np.linalg.svd(M, compute_uv=False),), response)
        return np.asarray(sigma[:, 0])

    def weigh(self, left: Complex, right: Complex, multiplier: Real) -> Real:
        """Sizes of rank-one terms."""
        return np.asarray(np.linalg.norm(left, axis=1) * np.linalg.norm(right, axis=2))

    def multipliers(self, response: Complex) -> Real:
        """Logarithms of scales (count, channels): zero."""
        return np.zeros((len(response), 1))


@dataclass
class _Cells:
    """Pieces of the axis left, each with the response at its ends.

    A piece is of x = w where ``far`` is 0, and of x = 1/w where it is 1.
    """

    owner: Index
    far: Index
    low: Real
    high: Real
    at_low: Complex
    at_high: Complex
    value_low: Real
    value_high: Real

    def __getitem__(self, kept: Bool) -> "_Cells":
        return _Cells(*(column[kept] for column in vars(self).values()))


@dataclass
class _Sum:
    """A modal form twice over, one below the other: in x = w, and in x = 1/w.

    In both the response is D + q Σ left right / (jx - pole), with q = 1 or x, and its second
    derivative is 2 Σ bent left right / (jx - pole)³, but for its sign.
    """

    form: ModalForm
    poles: Complex
    left: Complex
    bent: Complex
    size: Real
    doubt: Real
    counted: Real

    def at(self, owner: Index, far: Index, x: Real) -> tuple[Complex, Real]:
        """Responses, and sizes of their second derivatives."""
        row = owner + far * len(self.form)
        inverse = 1 / (1j * x[:, np.newaxis] - self.poles[row])
        first = np.where(far == 1, x, 1.0)[:, np.newaxis] * inverse
        third = 2 * self.bent[row] * inverse * inverse * inverse
        left, right = self.left[row], self.form.right[owner]
        response = self.form.D[owner] + (left * first[:, np.newaxis]) @ right
        bend = (left * third[:, np.newaxis]) @ right
        return response, np.linalg.norm(bend, axis=(1, 2))


def cover_peak(form: ModalForm, norm: Norm, rtol: float) -> Peak:
    """Find the largest size of responses over all frequencies, by covering the axis.

    Parameters
    ----------
    form : ModalForm
        Responses as sums over their poles, none of them on the axis.
    norm : Norm
        Their size.
    rtol : float
        Relative tolerance of the value.

    Returns
    -------
    Peak
        ``confirmed`` is false (and the value NaN) where rounding, as the form bounds it, is more
        than the tolerance, or the pieces become too many. Frequency [rad/s], it may be inf.

    References
    ----------
    Piyavskii, USSR Comp. Math. and Math. Physics 12(4), 1972 (covering by bounds; from memory).
    The error of a chord is that of linear interpolation.
    """
    points, n = form.poles.shape
    value, frequency = np.full((2, points), np.nan)
    lot = max(1, LOT_NUMBERS // (max(n, 1) * (2 * n + 2)))
    for first in range(0, points, lot):
        rows = slice(first, first + lot)
        with np.errstate(all="ignore"):
            value[rows], frequency[rows] = _cover(form[rows], norm, rtol)
    confirmed = np.isfinite(value)
    return Peak(value, np.where(confirmed, frequency, np.nan), confirmed)


def cover_left(peak: Peak, rows: Index, form: ModalForm, norm: Norm, rtol: float) -> None:
    """Enter in place what a cover finds for points not confirmed, roughly if need be.

    Parameters
    ----------
    peak : Peak
        Of all points.
    rows : (k,) int
        Those not confirmed.
    form : ModalForm
        Of these.
    norm : Norm
        As in `cover_peak`.
    rtol : float
        Relative tolerance to be tried first; then `ROUGH_RTOL` is.
    """
    for tolerance in (rtol, ROUGH_RTOL):
        left = ~peak.confirmed[rows]
        if left.any():
            fill_in(peak, rows[left], cover_peak(form[left], norm, tolerance))


def _cover(form: ModalForm, norm: Norm, rtol: float) -> tuple[Real, Real]:
    """Value and frequency of each peak, NaN where it is not decided."""
    terms = _double(form, norm)
    value, frequency = np.full(len(form), -np.inf), np.full(len(form), np.nan)
    cells = _first_cells(terms, norm, value, frequency)
    usable = np.isfinite(form.doubt) & (form.poles.real < 0)
    given_up: Bool = np.array(~usable.all(axis=1))
    for _ in range(MOST_HALVINGS):
        given_up |= ~np.isfinite(value)
        given_up |= np.bincount(cells.owner, minlength=len(form)) > MOST_CELLS
        cells = cells[~given_up[cells.owner]]
        if len(cells.owner) == 0:
            break
        cells = _halve(terms, norm, cells, value, frequency, rtol, given_up)
    given_up[cells.owner] = True
    apart = np.abs(1j * frequency[:, np.newaxis] - form.poles)
    noise = np.where(np.isinf(frequency), 0.0, (form.doubt / apart).sum(axis=1))
    given_up |= ~(form.floor + noise <= rtol * value)
    return np.where(given_up, np.nan, value), frequency


def _double(form: ModalForm, norm: Norm) -> _Sum:
    """Write the sum in x = 1/w too: poles at -1/p."""
    p = form.poles
    left = np.concatenate([form.left, form.left * (-1j / p)[:, np.newaxis]])
    bent = np.concatenate([np.ones_like(p), 1j / p])
    size = np.zeros(bent.shape)
    if not norm.tunable:
        right = np.concatenate([form.right, form.right])
        size = norm.weigh(left, right, np.zeros((len(left), 0))) * np.abs(bent)
    doubt = np.concatenate([form.doubt, form.doubt / np.abs(p)])
    # Of two conjugate poles the lower is farther off: the upper one is counted for both.
    counted = np.where(p.imag > 0, 2.0, np.where(p.imag < 0, 0.0, 1.0))
    return _Sum(form, np.concatenate([p, -1 / p]), left, bent, size, doubt,
                np.concatenate([counted, counted]))  # fmt: skip


def _first_cells(terms: _Sum, norm: Norm, value: Real, frequency: Real) -> _Cells:
    """Cut the axis at the poles, and look at all ends."""
    p = terms.form.poles
    size, everyone = np.abs(p), np.arange(len(p))
    last = BEYOND * size.max(axis=1, initial=0.0)
    last = np.where(last > 0, last, 1.0)
    ends = np.stack([np.zeros(len(p)), last], axis=1)
    cuts = np.sort(np.concatenate([size, np.abs(p.imag), ends], axis=1), axis=1)
    owner, column = np.nonzero(np.diff(cuts, axis=1, append=np.inf) > 0)
    begin = np.nonzero(owner[1:] == owner[:-1])[0]
    # Nodes: all cuts in x = w, then both ends of the one piece of x = 1/w.
    nodes = np.concatenate([owner, everyone, everyone])
    far = np.repeat([0, 1], [len(owner), 2 * len(p)])
    x = np.concatenate([cuts[owner, column], np.zeros(len(p)), 1 / last])
    response, _ = terms.at(nodes, far, x)
    bound, most = norm.bound(response), np.full(len(p), -np.inf)
    np.maximum.at(most, nodes, bound)
    likely = np.nonzero(bound == most[nodes])[0]
    best, _ = norm.tune(response[likely], np.zeros(len(likely)))
    _note(nodes[likely], far[likely], x[likely], best, value, frequency)
    seen, _ = norm.tune(response, value[nodes])
    _note(nodes, far, x, seen, value, frequency)
    begin = np.concatenate([begin, len(owner) + everyone])
    stop = np.concatenate([begin[: -len(p)] + 1, len(owner) + len(p) + everyone])
    return _Cells(nodes[begin], far[begin], x[begin], x[stop],
                  response[begin], response[stop], seen[begin], seen[stop])  # fmt: skip


def _note(owner: Index, far: Index, x: Real, seen: Real, value: Real, frequency: Real) -> None:
    """Keep the best value of each point, in place; NaN is kept too."""
    np.maximum.at(value, owner, seen)
    best = np.nonzero(seen == value[owner])[0]
    frequency[owner[best]] = np.where(far[best] == 1, 1 / x[best], x[best])


def _halve(
    terms: _Sum,
    norm: Norm,
    cells: _Cells,
    value: Real,
    frequency: Real,
    rtol: float,
    given_up: Bool,
) -> _Cells:
    """Halve all pieces, and drop the halves on which the response cannot reach the level."""
    owner, far, low, high = cells.owner, cells.far, cells.low, cells.high
    wide = (low > 0) & (high > WIDE * low)
    middle = np.where(wide, np.sqrt(low) * np.sqrt(high), (low + high) / 2)
    response, bend = terms.at(owner, far, middle)
    seen, multiplier = norm.tune(response, value[owner])
    _note(owner, far, middle, seen, value, frequency)
    ends = cells.value_low, cells.value_high
    if norm.tunable:
        ends = norm.hold(cells.at_low, multiplier), norm.hold(cells.at_high, multiplier)
        bend = np.full(len(owner), np.inf)
    halves = (
        _Cells(owner, far, low, middle, cells.at_low, response, ends[0], seen),
        _Cells(owner, far, middle, high, response, cells.at_high, seen, ends[1]),
    )
    kept = []
    for half in halves:
        rise, noise = _bound_rise(terms, norm, half, bend, multiplier)
        level = value[owner] * (1 + rtol)
        above = ~(np.maximum(half.value_low, half.value_high) + rise + noise <= level)
        # On a piece that tells its poles apart rounding will be no less after halving it.
        given_up[owner[above & (noise > rtol * level) & (rise < level)]] = True
        kept.append(vars(half[above]).values())
    return _Cells(*(np.concatenate(pair) for pair in zip(*kept, strict=True)))


def _bound_rise(
    terms: _Sum, norm: Norm, cells: _Cells, bend: Real, multiplier: Real
) -> tuple[Real, Real]:
    """How far responses may rise above their ends in between, and rounding beyond that."""
    row = cells.owner + cells.far * len(terms.form)
    p, length = terms.poles[row], cells.high - cells.low
    beside = np.maximum(cells.low[:, np.newaxis] - p.imag, p.imag - cells.high[:, np.newaxis])
    square = 1 / (np.square(p.real) + np.square(np.maximum(beside, 0.0)))
    inverse = terms.counted[row] * np.sqrt(square)
    size = terms.size[row]
    if norm.tunable:
        size = norm.weigh(terms.left[row], terms.form.right[cells.owner], multiplier)
        size = size * np.abs(terms.bent[row])
    third = size * square * inverse
    # Either all terms at their largest, or the second derivative at one end and how it may grow.
    second = 2 * third.sum(axis=1)
    second = np.minimum(second, bend + 6 * (third * np.sqrt(square)).sum(axis=1) * length)
    q = np.where(cells.far == 1, cells.high, 1.0)
    noise = terms.form.floor[cells.owner] + q * (terms.doubt[row] * inverse).sum(axis=1)
    return np.square(length) / 8 * second, noise
