"""Peaks of responses over all frequencies, by covering the axis pole by pole.

A response that is a sum over its poles lies as near to the chord of a piece of the axis as its
second derivative allows, term by term, and a chord is no longer than the longer of its ends (a norm
is convex). Pieces on which that keeps the response below the best value found are dropped, the rest
are halved. Nothing in this is as large as the fastest pole, so that slow poles keep their digits;
what rounding may do to the sum is added to every bound.
"""

from dataclasses import dataclass

import numpy as np

from ssaudit.margins.modal_form import ModalForm
from ssaudit.margins.norms import Norm
from ssaudit.margins.peak_search import Peak, fill_in
from ssaudit.margins.pieces import WIDE
from ssaudit.margins.state_space import Bool, Complex, Index, Real

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
        than the tolerance, or the pieces become too many. Else no frequency exceeds the value by
        more than the tolerance. Frequency [rad/s], it may be inf.

    References
    ----------
    Piyavskii, USSR Comp. Math. and Math. Physics 12(4), 1972 (covering by bounds; from memory).
    The error of a chord is that of linear interpolation.

    Examples
    --------
    >>> from ssaudit.margins.modal_form import to_modes
    >>> from ssaudit.margins.norms import PlainNorm
    >>> from ssaudit.margins.state_space import StateSpace
    >>> lag = StateSpace(*(np.full((1, 1, 1), x) for x in (-2.0, 1.0, 6.0, 0.0)))  # 6/(s + 2)
    >>> peak = cover_peak(to_modes(lag), PlainNorm(), 1e-7)
    >>> peak.value.round(9), peak.frequency, peak.confirmed
    (array([3.]), array([0.]), array([ True]))
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

    Roughly is within 1e-6: rounding of the value, and what may exceed it, are each below 5e-7.

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

    Examples
    --------
    >>> from ssaudit.margins.modal_form import to_modes
    >>> from ssaudit.margins.norms import PlainNorm
    >>> from ssaudit.margins.state_space import StateSpace
    >>> lag = StateSpace(*(np.full((1, 1, 1), x) for x in (-2.0, 1.0, 6.0, 0.0)))  # 6/(s + 2)
    >>> peak = Peak(np.full(1, np.nan), np.full(1, np.nan), np.zeros(1, dtype=bool))
    >>> cover_left(peak, np.array([0]), to_modes(lag), PlainNorm(), 1e-7)
    >>> peak.value.round(9), peak.confirmed
    (array([3.]), array([ True]))
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
