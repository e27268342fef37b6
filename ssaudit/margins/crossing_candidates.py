"""Candidates for the frequencies at which a single loop crosses: eigenvalues by shift and invert.

The functions are those of `ssaudit.margins.crossings`: rational in x = -ω², with the eigenvalues of
A² as poles. Their zeros are brought to an ordinary eigenproblem by a shift: one for all where the
poles lie close together, or one for every band of frequencies.
"""

import numpy as np

from ssaudit.margins.state_space import Bool, Complex, Real, StateSpace, invert, typical_frequency
from ssaudit.modes.poles import find_poles

# Shifts tried, as multiples of the square of the typical frequency; irregular on purpose.
SHIFTS = np.array([0.317, 1.733, 7.29, 0.0531, 41.7])
# Where the function is this much smaller at a shift than its terms, the next shift is tried.
SMALL_AT_SHIFT = 1e-8
# Decades of frequency from one band to the next, and how far beyond the poles the bands reach: a
# shift finds what lies within some four decades of it either way.
BAND = 2.0
BEYOND_POLES = 4.0
# Shifts tried in a band; that farthest from all poles is taken.
WITHIN_BAND = np.array([1.0, 1.9, 0.53, 3.1])
# Smaller than this it is rounding.
ZERO_THROUGHOUT = 1e-15
# An eigenvalue x this far from the negative real axis, relative, is still tried as a crossing.
NEAR_REAL = 1e-4


def reach_of(poles: Complex) -> tuple[Real, Real]:
    """Lowest and highest frequency of interest: well beyond all poles.

    Parameters
    ----------
    poles : (points, n) complex

    Returns
    -------
    low, high : (points,) float
        Their decimal logarithms.

    Examples
    --------
    >>> reach_of(np.array([[-1.0 + 0j, -100.0]]))
    (array([-4.]), array([6.]))
    """
    size = np.abs(poles)
    least = np.where(size > 0, size, np.inf).min(axis=1)
    most = size.max(axis=1)
    least, most = np.where(np.isfinite(least), least, 1.0), np.where(most > 0, most, 1.0)
    return np.log10(least) - BEYOND_POLES, np.log10(most) + BEYOND_POLES


def solve_squared(T: StateSpace, poles: Complex, target: Real | None) -> tuple[Real, Bool]:
    """Crossings from the zeros over x = -ω².

    Parameters
    ----------
    T : StateSpace
        Single loops, continuous.
    poles : (points, n) complex
        Their poles.
    target : (points,) float, optional
        What the real part is to be; without it, T is to be real.

    Returns
    -------
    w : (points, any) float
        Frequencies [rad/s], NaN-padded; not all are crossings.
    failed : (points,) bool
        Where no eigenproblem could be solved.

    Examples
    --------
    >>> A = np.array([[[0.0, 1.0, 0.0], [0.0, 0.0, 1.0], [-6.0, -11.0, -6.0]]])
    >>> B, C = np.array([[[0.0], [0.0], [1.0]]]), np.array([[[1.0, 0.0, 0.0]]])
    >>> T = StateSpace(A, B, C, np.zeros((1, 1, 1)))  # 1/((s + 1)(s + 2)(s + 3))
    >>> w, _ = solve_squared(T, find_poles(A)[0], None)
    >>> bool(np.any(np.abs(w**2 - 11) < 1e-9))
    True
    """
    offset = np.zeros(len(T)) if target is None else T.D[:, 0, 0] - target
    C = T.C if target is None else T.C @ T.A
    typical = typical_frequency(poles)
    shifts = typical[:, None] ** 2 * SHIFTS
    x, failed = _zeros(T.A @ T.A, T.B, C, offset, poles**2, shifts)
    return _near_negative(x), failed


def solve_banded(T: StateSpace, poles: Complex, target: Real | None) -> tuple[Real, Bool]:
    """Crossings from the zeros over x = -ω², with a shift for each band of frequencies.

    Parameters
    ----------
    T : StateSpace
        Single loops, continuous.
    poles : (points, n) complex
        Their poles.
    target : (points,) float, optional
        What the real part is to be; without it, T is to be real.

    Returns
    -------
    w : (points, any) float
        Frequencies [rad/s], NaN-padded; not all are crossings.
    failed : (points,) bool
        Where no eigenproblem could be solved.

    Examples
    --------
    >>> A = np.array([[[0.0, 1.0, 0.0], [0.0, 0.0, 1.0], [-6.0, -11.0, -6.0]]])
    >>> B, C = np.array([[[0.0], [0.0], [1.0]]]), np.array([[[1.0, 0.0, 0.0]]])
    >>> T = StateSpace(A, B, C, np.zeros((1, 1, 1)))  # 1/((s + 1)(s + 2)(s + 3))
    >>> w, _ = solve_banded(T, find_poles(A)[0], None)
    >>> bool(np.any(np.abs(w**2 - 11) < 1e-9))
    True
    """
    offset = np.zeros(len(T)) if target is None else T.D[:, 0, 0] - target
    C = T.C if target is None else T.C @ T.A
    low, high = reach_of(poles)
    number = int(np.max((high - low) / BAND, initial=0)) + 2
    found, failed = [], np.ones(len(T), dtype=bool)
    for part in np.linspace(0, 1, number):
        shift = _clear_shift(poles, 10.0 ** (low + part * (high - low)))
        inner = _invert_squared(T.A, shift)
        matrix, _ = _correct(inner, T.B, C, offset)
        x, bad = _shifted_back(matrix, shift**2)
        found.append(_near_negative(x))
        failed &= bad
    return np.concatenate(found, axis=1), failed


def _clear_shift(poles: Complex, middle: Real) -> Real:
    """Pick the shift of a band farthest from all poles and their mirror images."""
    shifts = middle[:, None] * WITHIN_BAND
    folded = np.abs(poles.real) + 1j * poles.imag
    gap = np.abs(folded[:, :, None] - shifts[:, None, :])
    gap = (gap / (np.abs(poles)[:, :, None] + shifts[:, None, :])).min(axis=1)
    return np.take_along_axis(shifts, gap.argmax(axis=1)[:, None], axis=1)[:, 0]


def _invert_squared(A: Real, shift: Real) -> Real:
    """(A² - shift²)⁻¹ by its factors: squares would lose what is slow."""
    away = shift[:, None, None] * np.eye(A.shape[-1])
    inner = invert(A - away) @ invert(A + away)
    return np.asarray(np.where(np.isfinite(inner).all(axis=(1, 2), keepdims=True), inner, np.nan))


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
    return _shifted_back(inverted, shift)


def _shifted_back(inverted: Real, shift: Real) -> tuple[Complex, Bool]:
    """Zeros from eigenvalues 1/(x - shift); infinite ones are inf."""
    mu, failed = find_poles(inverted)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        x = shift[:, None] + np.where(mu == 0, np.inf, 1 / np.where(mu == 0, 1.0, mu))
    return np.asarray(x, dtype=complex), failed | np.isnan(mu).any(axis=1)


def _near_negative(x: Complex) -> Real:
    """Frequencies ω with x = -ω², NaN for what is not near the negative real axis."""
    with np.errstate(invalid="ignore"):
        real = np.isfinite(x) & (x.real < 0) & (np.abs(x.imag) <= NEAR_REAL * np.abs(x))
        return np.where(real, np.sqrt(np.where(real, -x.real, np.nan)), np.nan)


def _invert_at(A: Real, B: Real, C: Real, offset: Real, shift: Real) -> tuple[Real, Real]:
    """Matrix with eigenvalues 1/(x - shift) for the zeros x; relative size at the shift."""
    return _correct(invert(A - shift[:, None, None] * np.eye(A.shape[-1])), B, C, offset)


def _correct(inner: Real, B: Real, C: Real, offset: Real) -> tuple[Real, Real]:
    """Correct the inverse of A - shift by rank one, so that its eigenvalues are those of zeros."""
    left, right = inner @ B, C @ inner
    through = offset - (C @ left)[:, 0, 0]
    terms = np.abs(offset) + np.linalg.norm(right, axis=(1, 2)) * np.linalg.norm(B, axis=(1, 2))
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        matrix = inner + left @ right / through[:, None, None]
        relative = np.abs(through) / np.where(terms > 0, terms, 1.0)
    # Nothing but rounding: the function is zero throughout, and so has no zeros to be found.
    matrix[relative < ZERO_THROUGHOUT] = 0
    return matrix, relative
