"""Signs that a function of frequency must have between its crossings, and crossings missed.

The functions are those of `ssaudit.margins.crossings`: Im T, or Re T less a target.
"""

from dataclasses import dataclass

import numpy as np

from ssaudit.margins.crossing_accuracy import ROUNDING, on_axis, response_error
from ssaudit.margins.crossing_candidates import reach_of
from ssaudit.margins.responses import RESPONSE_ROUNDING, respond, response_noise
from ssaudit.margins.state_space import Bool, Complex, Index, Real, StateSpace, invert

# Where each resonance is looked at, in half widths from its frequency.
ABOVE = np.geomspace(0.1, 1e4, 11)
FLANKS = np.concatenate([-ABOVE[::-1], [0.0], ABOVE])
# Frequencies looked at in a decade, besides the flanks of resonances.
LOOKS = 4
BISECTIONS = 50
# A value larger than this, relative to its terms, is no rounding.
CLEAR = 1e-6
# Looks within so many times the uncertainty of a crossing are hidden by it alone.
NEIGHBOURHOOD = 4.0
# A limit at zero or infinite frequency has a sign when it is this large, relative to its terms.
SURE_SIGN = 1e-12


def do_alternate(points: int, owner: Index, rising: Bool, ends: tuple[Index, Index]) -> Bool:
    """Whether functions rise and fall through their zeros in turn, their ends included.

    Parameters
    ----------
    points : int
        How many functions there are.
    owner : (count,) int
        The function of each zero, in order of the functions and, in each, of frequency.
    rising : (count,) bool
        Whether it rises there.
    ends : pair of (points,) int
        Signs at the lower and the upper end; 0 where not known.

    Returns
    -------
    (points,) bool

    Examples
    --------
    >>> signs = np.array([-1, -1]), np.array([1, 1])
    >>> do_alternate(2, np.array([0, 1, 1]), np.array([True, True, True]), signs)
    array([ True, False])
    """
    number = np.bincount(owner, minlength=points)
    same = np.zeros(points, dtype=bool)
    twice = (np.diff(owner) == 0) & (rising[1:] == rising[:-1])
    same[owner[1:][twice]] = True
    # The sign before the first zero, and after the last, as the slopes there tell.
    first = np.searchsorted(owner, np.arange(points))
    some = np.nonzero(number > 0)[0]
    before, after = np.array(ends[1]), np.array(ends[0])
    before[some] = np.where(rising[first[some]], -1, 1)
    after[some] = np.where(rising[first[some] + number[some] - 1], 1, -1)
    return np.asarray(~same & (before * ends[0] >= 0) & (after * ends[1] >= 0))


@dataclass(frozen=True)
class Looks:
    """Values of functions at many places.

    Attributes
    ----------
    owner : (count,) int
        The function, in rising order.
    w : (count,) float
        Frequency [rad/s], in rising order of each; it may be negative on flanks.
    value : (count,) float
        Im T, or Re T less the target.
    error : (count,) float
        How far rounding may move it; 0 where the value is clearly larger.
    """

    owner: Index
    w: Real
    value: Real
    error: Real


def look_along(T: StateSpace, poles: Complex, target: Real | None) -> Looks:
    """Values on the flanks of every resonance, and all along the axis.

    Parameters
    ----------
    T : StateSpace
        Single loops.
    poles : (points, n) complex
        Their poles.
    target : (points,) float, optional
        What the real part is to be; without it, T is to be real.

    Returns
    -------
    Looks

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> looks = look_along(StateSpace(-one, one, one, 0 * one), np.array([[-1.0 + 0j]]), None)
    >>> bool(np.all(looks.value[looks.w > 0] < 0))  # Im 1/(jω + 1)
    True
    """
    places = _places(poles)
    owner, w = np.repeat(np.arange(len(T)), places.shape[1]), places.ravel()
    value, error = _value_at(T, owner, w, target), np.zeros(len(w))
    # The bound costs more than the value: it is found where it could matter.
    small = np.nonzero(~(np.abs(value) > CLEAR * _terms_at(T, owner, w)))[0]
    error[small] = response_error(T, owner[small], on_axis(w[small]))[:, 0, 0]
    if target is not None:
        error[small] += ROUNDING * np.abs(target[owner[small]])
    return Looks(owner, w, value, error)


def find_missed(
    T: StateSpace, looks: Looks, owner: Index, w: Real, target: Real | None
) -> tuple[Index, Real]:
    """Crossings that the eigenproblems missed, told by signs at many places.

    Between two looks of different sign there must be an odd number of crossings; where there is
    not, one is bisected.

    Parameters
    ----------
    T : StateSpace
        Single loops.
    looks : Looks
        Those of `look_along`.
    owner, w : (count,) int and float
        The crossings known, sorted by point and frequency [rad/s].
    target : (points,) float, optional
        What the real part is to be; without it, T is to be real.

    Returns
    -------
    owner, w : (more,) int and float
        Those missed.

    Examples
    --------
    >>> A = np.array([[[0.0, 1.0, 0.0], [0.0, 0.0, 1.0], [-6.0, -11.0, -6.0]]])
    >>> B, C = np.array([[[0.0], [0.0], [1.0]]]), np.array([[[1.0, 0.0, 0.0]]])
    >>> T = StateSpace(A, B, C, np.zeros((1, 1, 1)))  # 1/((s + 1)(s + 2)(s + 3))
    >>> looks = look_along(T, np.array([[-1.0 + 0j, -2.0, -3.0]]), None)
    >>> nothing = np.zeros(0, dtype=int), np.zeros(0)
    >>> find_missed(T, looks, *nothing, None)[1].round(9) ** 2
    array([11.])
    """
    flat, place, sign = looks.owner, looks.w, looks.value > 0
    count = _count_below(owner, w, flat, place)
    turned, odd = sign[1:] != sign[:-1], np.diff(count) % 2 == 1
    low = np.nonzero((flat[1:] == flat[:-1]) & (place[:-1] > 0) & turned & ~odd)[0]
    start, end, rising = place[low], place[low + 1], sign[low + 1]
    for _ in range(BISECTIONS):
        middle = (start + end) / 2
        up = (_value_at(T, flat[low], middle, target) > 0) == rising
        start, end = np.where(up, start, middle), np.where(up, middle, end)
    return flat[low], (start + end) / 2


def find_hidden(looks: Looks, owner: Index, w: Real, unsure: Real) -> tuple[Index, Real]:
    """Places away from known crossings where rounding hides whether there is one.

    Parameters
    ----------
    looks : Looks
        Those of `look_along`.
    owner, w : (count,) int and float
        The crossings known, sorted by point and frequency [rad/s].
    unsure : (count,) float
        How far rounding may move them [rad/s].

    Returns
    -------
    owner, w : (more,) int and float
        Those places.

    Examples
    --------
    >>> looks = Looks(np.zeros(2, dtype=int), np.array([1.0, 5.0]), np.full(2, 1e-20), np.ones(2))
    >>> find_hidden(looks, np.array([0]), np.array([1.0]), np.array([1e-3]))
    (array([0]), array([5.]))
    """
    hidden = np.nonzero((looks.error > 0) & (np.abs(looks.value) <= looks.error) & (looks.w > 0))[0]
    place, of = looks.w[hidden], looks.owner[hidden]
    below = np.searchsorted(owner, of) + _count_below(owner, w, of, place) - 1
    explained = np.zeros(len(place), dtype=bool)
    for neighbour in (below, below + 1):
        known = np.clip(neighbour, 0, max(len(w) - 1, 0))
        if len(w):
            near = np.abs(w[known] - place) <= NEIGHBOURHOOD * unsure[known]
            explained |= (owner[known] == of) & near
    return of[~explained], place[~explained]


def _places(poles: Complex) -> Real:
    """Frequencies on the flanks of every resonance, and all along the axis, in rising order."""
    centre, width = np.abs(poles.imag), np.abs(poles.real)
    flanks = (centre[:, :, None] + width[:, :, None] * FLANKS).reshape(len(poles), -1)
    low, high = reach_of(poles)
    number = int(np.max(LOOKS * (high - low), initial=0)) + 2
    along = 10.0 ** (low[:, None] + (high - low)[:, None] * np.linspace(0, 1, number))
    return np.sort(np.concatenate([flanks, along], axis=1), axis=1)


def _count_below(owner: Index, w: Real, flat: Index, place: Real) -> Index:
    """How many of the known crossings of its own point lie below each frequency."""
    order = np.lexsort((np.append(np.zeros(len(w)), np.ones(len(flat))), np.append(w, place),
                        np.append(owner, flat)))  # fmt: skip
    known = order < len(w)
    total = np.empty(len(order), dtype=np.intp)
    total[order] = np.cumsum(known)
    before = np.searchsorted(owner, flat)
    return np.asarray(total[len(w) :] - before)


def _value_at(T: StateSpace, owner: Index, w: Real, target: Real | None) -> Real:
    """Im T, or Re T less the target."""
    value = respond(T, owner, w)[:, 0, 0]
    return np.asarray(value.imag if target is None else value.real - target[owner])


def _terms_at(T: StateSpace, owner: Index, w: Real) -> Real:
    """Size of the terms of which the response is made up."""
    return np.asarray(response_noise(T, owner, w) / RESPONSE_ROUNDING)


def signs_at_limits(T: StateSpace, target: Real | None) -> tuple[Index, Index]:
    """Signs near zero and near infinite frequency, cheaply.

    Parameters
    ----------
    T : StateSpace
        Single loops.
    target : (points,) float, optional
        What the real part is to be; without it, T is to be real.

    Returns
    -------
    low, high : (points,) int
        0 where rounding hides them.

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> T = StateSpace(-one, one, one, 0 * one)  # 1/(s + 1)
    >>> signs_at_limits(T, None)
    (array([-1]), array([-1]))
    """
    inner = invert(T.A)
    right, left = inner @ T.B, T.C @ inner
    if target is None:
        slow, slow_terms = -(left @ right), np.abs(left) @ np.abs(right)
        fast, fast_terms = -(T.C @ T.B), np.abs(T.C) @ np.abs(T.B)
    else:
        offset = T.D - target[:, None, None]
        fast, fast_terms = offset, np.abs(T.D) + np.abs(target)[:, None, None]
        slow, slow_terms = offset - T.C @ right, fast_terms + np.abs(T.C) @ np.abs(right)
    with np.errstate(invalid="ignore"):
        signs = [
            np.where(np.abs(value) > SURE_SIGN * terms, np.sign(value), 0.0)[:, 0, 0]
            for value, terms in ((slow, slow_terms), (fast, fast_terms))
        ]
    return signs[0].astype(np.intp), signs[1].astype(np.intp)


def signs_at_ends(
    T: StateSpace, poles: Complex, owner: Index, w: Real, target: Real | None
) -> tuple[Index, Index]:
    """Signs far below and far above all poles and crossings.

    Parameters
    ----------
    T : StateSpace
        Single loops.
    poles : (points, n) complex
        Their poles.
    owner, w : (count,) int and float
        The crossings known [rad/s].
    target : (points,) float, optional
        What the real part is to be; without it, T is to be real.

    Returns
    -------
    low, high : (points,) int
        0 where rounding hides them.

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> T = StateSpace(-one, one, one, 0 * one)  # 1/(s + 1)
    >>> nothing = np.zeros(0, dtype=int), np.zeros(0)
    >>> signs_at_ends(T, np.array([[-1.0 + 0j]]), *nothing, None)
    (array([-1]), array([-1]))
    """
    signs, everyone = [], np.arange(len(T))
    low, high = (10.0**end for end in reach_of(poles))
    np.minimum.at(low, owner, w / 10)
    np.maximum.at(high, owner, w * 10)
    for place in (low, high):
        value = _value_at(T, everyone, place, target)
        error = response_error(T, everyone, on_axis(place))[:, 0, 0]
        if target is not None:
            error = error + ROUNDING * np.abs(target)
        signs.append(np.where(np.abs(value) > error, np.sign(value), 0).astype(np.intp))
    return signs[0], signs[1]
