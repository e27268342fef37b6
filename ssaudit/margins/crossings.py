"""Frequencies at which a single loop meets the real axis or the unit circle, without a grid.

With T = L/(1 + kL), the loop closed through a factor k, two facts turn both questions into the
zeros of real rational functions of x = -ω² whose poles are the eigenvalues of A²:

- L is real where T is: Im T(jω) = ω C (xI - A²)⁻¹ B;
- abs L = 1, for k = ±1, where Re T = k/2: Re T(jω) = D + C A (xI - A²)⁻¹ B.

The poles of T are away from the axis, so that integrators of L do no harm, and the eigenproblem
has the size of the model: half that of the Hamiltonian.

Between neighbouring zeros a function has one sign, so that it rises and falls through them in turn.
Where the zeros found do not alternate, or poles spread over many decades (the slow ones are then at
the mercy of rounding), the eigenproblem is solved anew with a shift for every band of frequencies,
signs are looked at on both sides of every resonance, and what still does not alternate has failed.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ssaudit.margins.crossing_accuracy import on_axis, response_error
from ssaudit.margins.crossing_candidates import solve_banded, solve_squared
from ssaudit.margins.crossing_signs import (
    do_alternate,
    find_hidden,
    find_missed,
    look_along,
    signs_at_ends,
    signs_at_limits,
)
from ssaudit.margins.responses import respond_with_slope
from ssaudit.margins.state_space import Bool, Complex, Index, Real, StateSpace

# Squaring A loses what is this much slower than the fastest pole; then bands are solved one by one.
WIDEST_SQUARED = 1e4
NEWTON_STEPS = 5
# A step this small, relative, is the last one: the next would be as its square.
AT_REST = 1e-9
# A crossing is accepted when the last Newton step moved it by less than this, relative.
SETTLED = 1e-8
# One that rounding hides is tried when it moved by less than this, relative.
ROUGHLY = 1e-2


@dataclass(frozen=True)
class Crossings:
    """Frequencies at which single loops cross.

    Attributes
    ----------
    owner : (count,) int
        The point of each crossing.
    w : (count,) float
        Frequencies [rad/s], positive and finite, exact to working precision; each once.
    failed : (points,) bool
        Where the eigenproblem failed, or crossings are missing.
    hidden_owner, hidden_w : (more,) int and float
        Places where rounding hides whether there is a crossing too [rad/s].
    """

    owner: Index
    w: Real
    failed: Bool
    hidden_owner: Index
    hidden_w: Real


def find_crossings(T: StateSpace, poles: Complex, target: Real | None) -> Crossings:
    """Frequencies where T is real, or where its real part equals a target.

    Parameters
    ----------
    T : StateSpace
        Single loops closed through a factor, continuous, without poles on the axis.
    poles : (points, n) complex
        Their poles.
    target : (points,) float, optional
        What the real part is to be; without it, T is to be real.

    Returns
    -------
    Crossings

    Examples
    --------
    >>> from ssaudit.modes.poles import find_poles
    >>> A = np.array([[[0.0, 1.0, 0.0], [0.0, 0.0, 1.0], [-6.0, -11.0, -6.0]]])
    >>> B, C = np.array([[[0.0], [0.0], [1.0]]]), np.array([[[1.0, 0.0, 0.0]]])
    >>> T = StateSpace(A, B, C, np.zeros((1, 1, 1)))  # 1/((s + 1)(s + 2)(s + 3))
    >>> find_crossings(T, find_poles(A)[0], None).w.round(12) ** 2
    array([11.])
    """
    points, nowhere = len(T), (np.zeros(0, dtype=np.intp), np.zeros(0))
    if T.A.shape[-1] == 0:
        return Crossings(*nowhere, np.zeros(points, dtype=bool), *nowhere)
    wide = spread_widely(poles)
    found, failed = np.full(poles.shape, np.nan), np.zeros(points, dtype=bool)
    found[~wide], failed[~wide] = solve_squared(T[~wide], poles[~wide], part_of(target, ~wide))
    owner, column = np.nonzero(found > 0)
    owner, w, rising = _settle(T, owner, found[owner, column], target)
    regular = do_alternate(points, owner, rising, signs_at_limits(T, target))
    again = np.nonzero(~regular | wide)[0]
    if len(again) == 0:
        return Crossings(owner, w, failed, *nowhere)
    new = _search_again(T[again], poles[again], part_of(target, again))
    failed[again] = new.failed
    kept = ~np.isin(owner, again)
    owner, w = np.append(owner[kept], again[new.owner]), np.append(w[kept], new.w)
    return Crossings(*drop_doubles(owner, w), failed, again[new.hidden_owner], new.hidden_w)


def spread_widely(poles: Complex) -> Bool:
    """Whether poles spread so widely that rounding endangers the slow ones.

    Parameters
    ----------
    poles : (points, n) complex

    Returns
    -------
    (points,) bool

    Examples
    --------
    >>> spread_widely(np.array([[-1.0 + 0j, -2.0], [-1.0, -1e6]]))
    array([False,  True])
    """
    size = np.abs(poles)
    least, most = size.min(axis=1, initial=np.inf), size.max(axis=1, initial=0.0)
    return np.asarray(most > WIDEST_SQUARED * least)


def part_of(target: Real | None, chosen: Bool | Index) -> Real | None:
    """Take the targets of chosen points, where there are any.

    Parameters
    ----------
    target : (points,) float, optional
    chosen : (points,) bool or (count,) int

    Returns
    -------
    (count,) float, or None

    Examples
    --------
    >>> part_of(np.array([1.0, 2.0]), np.array([1]))
    array([2.])
    """
    return None if target is None else target[chosen]


def _search_again(T: StateSpace, poles: Complex, target: Real | None) -> Crossings:
    """Crossings band by band, those missed between looks; failed where they do not alternate."""
    candidates, failed = solve_banded(T, poles, target)
    owner, column = np.nonzero(candidates > 0)
    owner, w, _ = _settle(T, owner, candidates[owner, column], target, rough=True)
    looks = look_along(T, poles, target)
    extra_owner, extra_w = find_missed(T, looks, owner, w, target)
    owner, w, rising = _settle(
        T, np.append(owner, extra_owner), np.append(w, extra_w), target, rough=True
    )
    unsure = _unsure(T, owner, w, target)
    # What rounding alone sets apart from the crossing before it is no other one.
    alike = (np.diff(owner) == 0) & (rising[1:] == rising[:-1])
    fresh = np.append(True, ~(alike & (np.diff(w) <= unsure[1:] + unsure[:-1])))[: len(w)]
    owner, w, rising, unsure = owner[fresh], w[fresh], rising[fresh], unsure[fresh]
    failed |= ~do_alternate(len(T), owner, rising, signs_at_ends(T, poles, owner, w, target))
    return Crossings(owner, w, failed, *find_hidden(looks, owner, w, unsure))


def _unsure(T: StateSpace, owner: Index, w: Real, target: Real | None) -> Real:
    """How far rounding may move crossings [rad/s]."""
    _, derivative = respond_with_slope(T, owner, w)
    slope = derivative[:, 0, 0].imag if target is None else derivative[:, 0, 0].real
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(response_error(T, owner, on_axis(w))[:, 0, 0] / np.abs(slope))


def _settle(
    T: StateSpace, owner: Index, w: Real, target: Real | None, *, rough: bool = False
) -> tuple[Index, Real, Bool]:
    """Newton steps on T(jω) itself; what does not settle is no crossing, doubles go.

    The last result says where the function rises with frequency. Roughly, a crossing may also be
    as uncertain as rounding makes it.
    """
    w, slope, step = w.copy(), np.zeros_like(w), np.full_like(w, np.inf)
    moving = np.arange(len(w))
    for _ in range(NEWTON_STEPS):
        response, derivative = respond_with_slope(T, owner[moving], w[moving])
        value, rate = response[:, 0, 0], derivative[:, 0, 0]
        error = value.imag if target is None else value.real - target[owner[moving]]
        slope[moving] = rate.imag if target is None else rate.real
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            step[moving] = error / slope[moving]
        w[moving] -= np.where(np.isfinite(step[moving]), step[moving], 0.0)
        moving = moving[~(np.abs(step[moving]) <= AT_REST * w[moving])]
        if len(moving) == 0:
            break
    with np.errstate(invalid="ignore"):
        settled = (np.abs(step) <= SETTLED * w) & (w > 0) & np.isfinite(step)
    if rough:
        # Some move on and on, because rounding hides where they are.
        rest = np.nonzero(~settled & (w > 0) & (np.abs(step) < ROUGHLY * w))[0]
        unsure = _unsure(T, owner[rest], w[rest], target)
        settled[rest] = np.abs(step[rest]) <= unsure
    owner, w, slope = owner[settled], w[settled], slope[settled]
    order = np.lexsort((w, owner))
    owner, w, slope = owner[order], w[order], slope[order]
    fresh = first_of_each(owner, w)
    return owner[fresh], w[fresh], slope[fresh] > 0


def first_of_each(owner: Index, w: Real) -> Bool:
    """Mark the first of frequencies that agree to 1e-11, sorted by point and size.

    Parameters
    ----------
    owner : (count,) int
    w : (count,) float

    Returns
    -------
    (count,) bool

    Examples
    --------
    >>> first_of_each(np.array([0, 0, 1]), np.array([2.0, 2.0, 2.0]))
    array([ True, False,  True])
    """
    fresh: NDArray[np.bool_] = np.ones(len(w), dtype=bool)
    fresh[1:] = (np.diff(owner) > 0) | (np.diff(w) > 1e-11 * w[1:])
    return fresh


def drop_doubles(owner: Index, w: Real) -> tuple[Index, Real]:
    """Sort frequencies by point and size, and keep each once.

    Parameters
    ----------
    owner : (count,) int
    w : (count,) float

    Returns
    -------
    owner, w
        Sorted; neighbours that agree to 1e-11 are one.

    Examples
    --------
    >>> drop_doubles(np.array([0, 0, 1]), np.array([2.0, 2.0, 1.0]))
    (array([0, 1]), array([2., 1.]))
    """
    order = np.lexsort((w, owner))
    owner, w = owner[order], w[order]
    fresh = first_of_each(owner, w)
    return owner[fresh], w[fresh]
