"""Frequencies at which a single loop meets the real axis or the unit circle, without a grid.

With T = L/(1 + kL), the loop closed through a factor k, two facts turn both questions into the
zeros of real rational functions of x = -ω² whose poles are the eigenvalues of A²:

- L is real where T is: Im T(jω) = ω C (xI - A²)⁻¹ B;
- abs L = 1, for k = ±1, where Re T = k/2: Re T(jω) = D + C A (xI - A²)⁻¹ B.

The poles of T are away from the axis, so that integrators of L do no harm, and the eigenproblem
has the size of the model: half that of the Hamiltonian.
"""

import numpy as np
from numpy.typing import NDArray

from ssaudit.margins.peak_search import near_axis
from ssaudit.margins.stability_radius import join
from ssaudit.margins.state_space import (
    Bool,
    Complex,
    Index,
    Real,
    StateSpace,
    invert,
    respond,
    respond_with_slope,
    typical_frequency,
)
from ssaudit.modes.poles import find_poles

# Shifts tried, as multiples of the square of the typical frequency; irregular on purpose.
SHIFTS = np.array([0.317, 1.733, 7.29, 0.0531, 41.7])
# Where the function is this much smaller at a shift than its terms, the next shift is tried.
SMALL_AT_SHIFT = 1e-8
# Squaring A loses what is this much slower than the fastest pole; then s itself is solved for.
WIDEST_SQUARED = 1e4
# Smaller than this it is rounding.
ZERO_THROUGHOUT = 1e-15
# An eigenvalue x this far from the negative real axis, relative, is still tried as a crossing.
NEAR_REAL = 1e-4
NEWTON_STEPS = 5
# Where each resonance is looked at, in half widths from its frequency.
ABOVE = np.geomspace(0.1, 1e4, 11)
FLANKS = np.concatenate([-ABOVE[::-1], [0.0], ABOVE])
BISECTIONS = 50
# A crossing is accepted when the last Newton step moved it by less than this, relative.
SETTLED = 1e-8


def find_crossings(T: StateSpace, poles: Complex, target: Real | None) -> tuple[Index, Real, Bool]:
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
    owner : (count,) int
        The point of each crossing.
    w : (count,) float
        Frequencies [rad/s], positive and finite, exact to working precision; each once.
    failed : (points,) bool
        Where the eigenproblem failed.

    Examples
    --------
    >>> A = np.array([[[0.0, 1.0, 0.0], [0.0, 0.0, 1.0], [-6.0, -11.0, -6.0]]])
    >>> B, C = np.array([[[0.0], [0.0], [1.0]]]), np.array([[[1.0, 0.0, 0.0]]])
    >>> T = StateSpace(A, B, C, np.zeros((1, 1, 1)))  # 1/((s + 1)(s + 2)(s + 3))
    >>> find_crossings(T, find_poles(A)[0], None)[1].round(12) ** 2
    array([11.])
    """
    points = len(T)
    found = np.full((points, 2 * T.A.shape[-1]), np.nan)
    failed = np.zeros(points, dtype=bool)
    if T.A.shape[-1] == 0:
        return np.zeros(0, dtype=np.intp), np.zeros(0), failed
    size = np.abs(poles)
    wide = size.max(axis=1) > WIDEST_SQUARED * size.min(axis=1)
    for chosen, solve in ((~wide, _solve_squared), (wide, _solve_plain)):
        if chosen.any():
            part = None if target is None else target[chosen]
            w, failed[chosen] = solve(T[chosen], poles[chosen], part)
            found[chosen, : w.shape[1]] = w
    owner, column = np.nonzero(found > 0)
    owner, w = _settle(T, owner, found[owner, column], target)
    if wide.any():
        extra_owner, extra_w = _bracketed(T, poles, wide, owner, w, target)
        both = np.append(owner, extra_owner), np.append(w, extra_w)
        owner, w = _settle(T, *both, target)
    return owner, w, failed


def _bracketed(
    T: StateSpace, poles: Complex, wide: Bool, owner: Index, w: Real, target: Real | None
) -> tuple[Index, Real]:
    """Crossings that the eigenproblem missed, told by signs on the flanks of every resonance.

    With poles over many decades the slow ones are at the mercy of rounding. Between two looks of
    different sign there must be an odd number of crossings; where there is not, one is bisected.
    """
    chosen = np.nonzero(wide)[0]
    centre, width = np.abs(poles[chosen].imag), np.abs(poles[chosen].real)
    looks = centre[:, :, None] + width[:, :, None] * FLANKS
    looks = np.sort(looks.reshape(len(chosen), -1), axis=1)
    flat, place = np.repeat(chosen, looks.shape[1]), looks.ravel()
    sign = _value_at(T, flat, place, target) > 0
    count = _count_below(owner, w, flat, place)
    turned, odd = sign[1:] != sign[:-1], np.diff(count) % 2 == 1
    low = np.nonzero((flat[1:] == flat[:-1]) & (place[:-1] > 0) & turned & ~odd)[0]
    start, end, rising = place[low], place[low + 1], sign[low + 1]
    for _ in range(BISECTIONS):
        middle = (start + end) / 2
        up = (_value_at(T, flat[low], middle, target) > 0) == rising
        start, end = np.where(up, start, middle), np.where(up, middle, end)
    return flat[low], (start + end) / 2


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


def _solve_squared(T: StateSpace, poles: Complex, target: Real | None) -> tuple[Real, Bool]:
    """Crossings from the zeros over x = -ω²."""
    offset = np.zeros(len(T)) if target is None else T.D[:, 0, 0] - target
    C = T.C if target is None else T.C @ T.A
    typical = typical_frequency(poles)
    shifts = typical[:, None] ** 2 * SHIFTS
    x, failed = _zeros(T.A @ T.A, T.B, C, offset, poles**2, shifts)
    with np.errstate(invalid="ignore"):
        real = np.isfinite(x) & (x.real < 0) & (np.abs(x.imag) <= NEAR_REAL * np.abs(x))
        return np.where(real, np.sqrt(np.where(real, -x.real, np.nan)), np.nan), failed


def _solve_plain(T: StateSpace, poles: Complex, target: Real | None) -> tuple[Real, Bool]:
    """Crossings from the zeros over s of T(s) - T(-s), or T(s) + T(-s) - 2 target."""
    offset = np.zeros(len(T)) if target is None else 2 * (T.D[:, 0, 0] - target)
    nothing = np.zeros_like(T.A)
    A = join(T.A, nothing, nothing, -T.A)
    B = np.concatenate([T.B, T.B], axis=1)
    C = np.concatenate([T.C, T.C if target is None else -T.C], axis=2)
    typical = typical_frequency(poles)
    both = np.concatenate([poles, -poles], axis=1)
    s, failed = _zeros(A, B, C, offset, both, typical[:, None] * np.sqrt(SHIFTS))
    return near_axis(np.where(np.isfinite(s), s, 1e300))[0], failed


def _zeros(
    A: Real, B: Real, C: Real, offset: Real, poles: Complex, shifts: Real
) -> tuple[Complex, Bool]:
    """Zeros of offset + C (xI - A)⁻¹ B: shift and invert, at the best of some real shifts."""
    gap = np.abs(poles[:, :, None] - shifts[:, None, :])
    gap = (gap / (np.abs(poles)[:, :, None] + shifts[:, None, :])).min(axis=1)
    order = np.argsort(-gap, axis=1)
    points = len(A)
    inverted = np.full(A.shape, np.nan)
    shift = np.take_along_axis(shifts, order[:, :1], axis=1)[:, 0]
    left = np.arange(points)
    for column in order.T:
        trial = shifts[left, column[left]]
        matrix, relative = _invert_at(A[left], B[left], C[left], offset[left], trial)
        good = relative > SMALL_AT_SHIFT
        usable = np.isfinite(matrix).all(axis=(1, 2))
        inverted[left[usable]], shift[left[usable]] = matrix[usable], trial[usable]
        left = left[~(good & usable)]
        if len(left) == 0:
            break
    mu, failed = find_poles(inverted)
    with np.errstate(divide="ignore", invalid="ignore"):
        x = shift[:, None] + np.where(mu == 0, np.inf, 1 / np.where(mu == 0, 1.0, mu))
    return np.asarray(x, dtype=complex), failed | np.isnan(mu).any(axis=1)


def _invert_at(A: Real, B: Real, C: Real, offset: Real, shift: Real) -> tuple[Real, Real]:
    """Matrix with eigenvalues 1/(x - shift) for the zeros x; relative size at the shift."""
    inner = invert(A - shift[:, None, None] * np.eye(A.shape[-1]))
    left, right = inner @ B, C @ inner
    through = offset - (C @ left)[:, 0, 0]
    terms = np.abs(offset) + np.linalg.norm(right, axis=(1, 2)) * np.linalg.norm(B, axis=(1, 2))
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        matrix = inner + left @ right / through[:, None, None]
        relative = np.abs(through) / np.where(terms > 0, terms, 1.0)
    # Nothing but rounding: the function is zero throughout, and so has no zeros to be found.
    matrix[relative < ZERO_THROUGHOUT] = 0
    return matrix, relative


def _settle(T: StateSpace, owner: Index, w: Real, target: Real | None) -> tuple[Index, Real]:
    """Newton steps on T(jω) itself; what does not settle is no crossing, doubles go."""
    step = np.zeros_like(w)
    for _ in range(NEWTON_STEPS):
        response, slope = respond_with_slope(T, owner, w)
        value, rate = response[:, 0, 0], slope[:, 0, 0]
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            if target is None:
                step = value.imag / rate.imag
            else:
                step = (value.real - target[owner]) / rate.real
        w = w - np.where(np.isfinite(step), step, 0.0)
    with np.errstate(invalid="ignore"):
        settled = (np.abs(step) <= SETTLED * w) & (w > 0) & np.isfinite(step)
    return drop_doubles(owner[settled], w[settled])


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
    fresh: NDArray[np.bool_] = np.ones(len(w), dtype=bool)
    fresh[1:] = (np.diff(owner) > 0) | (np.diff(w) > 1e-11 * w[1:])
    return owner[fresh], w[fresh]
