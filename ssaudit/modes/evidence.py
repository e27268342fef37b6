"""Cheap evidence beside the poles: cross-checks of every point, and exact grounds for "not stable".

A cross-check that fails says that something is wrong with the poles or the machine that computed
them; the verdict is then doubt. Passing proves nothing. Exact grounds need no eigenvalues at all.
"""

from fractions import Fraction
from math import comb, fsum

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ssaudit.modes.clusters import balance_scaling

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Flags = NDArray[np.bool_]

EPS = float(np.finfo(float).eps)

TRACE_FACTOR = 10.0
"""Multiple of n eps norm(A) allowed between trace and sum of poles: the QR iteration's backward
error is a small multiple of eps norm(A) (LAPACK Users' Guide, 3rd ed., §4.8), and it changes the
sum of the poles by its trace, at most n times as much."""

COEFFICIENT_STATES = 4
"""Up to this many states the coefficients cost well below the poles, and their rounding leaves
their signs known."""

EXACT_STATES = 4
"""Up to this many states exact coefficients in rationals take about a millisecond."""

TRACE = "trace"
CONJUGATES = "conjugates"
COEFFICIENTS = "coefficients"
ZERO_ROW = "zero-row"
ZERO_COLUMN = "zero-column"
UNIT_ROW = "unit-row"
UNIT_COLUMN = "unit-column"
DETERMINANT = "determinant"

DISAGREEMENTS = {
    TRACE: "the sum of the poles differs from the trace",
    CONJUGATES: "the poles are not symmetric about the real axis",
    COEFFICIENTS: "the signs of the characteristic coefficients contradict the poles",
}
"""What each code of `cross_check` says."""

GROUNDS = {
    TRACE: "the trace, which is the sum of the poles, is exactly too large",
    ZERO_ROW: "an exactly zero row: a pole at 0",
    ZERO_COLUMN: "an exactly zero column: a pole at 0",
    UNIT_ROW: "a row of the unit matrix, exactly, up to its sign: a pole at 1 or -1",
    UNIT_COLUMN: "a column of the unit matrix, exactly, up to its sign: a pole at 1 or -1",
    DETERMINANT: "the determinant, which is the product of the poles, is exactly too large",
    COEFFICIENTS: "a characteristic coefficient has exactly the wrong sign or is zero",
}
"""What each code of `exact_not_stable` says."""


def cross_check(
    A: Floats, poles: Complexes, stable: Flags, unstable: Flags, *, sampled: bool = False
) -> NDArray[np.str_]:
    """First cross-check that the poles of each point fail, or an empty string.

    Parameters
    ----------
    A : (points, n, n) float
        Closed-loop state matrices [1/s when continuous].
    poles : (points, n) complex
        Computed poles.
    stable, unstable : (points,) bool
        Where the poles and their radii say so.
    sampled : bool
        Whether the models are sampled.

    Returns
    -------
    (points,) str
        "" or a key of `DISAGREEMENTS`. Points with NaN poles fail none; they are void anyhow.

    Examples
    --------
    >>> A = np.array([[[0.0, 1.0], [-4.0, -1.0]]])
    >>> yes, no = np.array([True]), np.array([False])
    >>> poles = np.linalg.eigvals(A)
    >>> str(cross_check(A, poles, yes, no)[0]), str(cross_check(A, poles - 1, yes, no)[0])
    ('', 'trace')
    """
    failed = np.full(len(A), "", dtype="<U16")
    if A.size == 0:
        return failed
    failed[coefficients_disagree(A, stable, unstable, sampled=sampled)] = COEFFICIENTS
    failed[conjugates_disagree(poles)] = CONJUGATES
    failed[trace_disagrees(A, poles)] = TRACE
    failed[np.isnan(poles).any(axis=1)] = ""
    return failed


def trace_disagrees(A: Floats, poles: Complexes) -> Flags:
    """Where the sum of the poles differs from the trace by more than rounding can explain.

    Parameters
    ----------
    A : (points, n, n) float
        State matrices [1/s when continuous].
    poles : (points, n) complex
        Computed poles.

    Returns
    -------
    (points,) bool

    Notes
    -----
    The bound is `TRACE_FACTOR` n eps times the Frobenius norm of the balanced matrix. As balancing
    is dear, points within a smaller bound, from the poles and the diagonal alone, pass at once.

    Examples
    --------
    >>> trace_disagrees(np.array([[[-1.0, 5.0], [0.0, -2.0]]]), np.array([[-1.0, -2.1]]))
    array([ True])
    """
    n = A.shape[-1]
    diagonal = np.einsum("pii->pi", A)
    gap = np.abs(poles.sum(axis=1) - diagonal.sum(axis=1))
    size = np.abs(poles)
    rounding = 4 * EPS * (size.sum(axis=1) + np.abs(diagonal).sum(axis=1))
    # No scaling makes the norm smaller than the largest pole.
    sure = rounding + TRACE_FACTOR * n * EPS * size.max(axis=1, initial=0.0)
    disagrees: Flags = gap > sure
    rest = np.flatnonzero(disagrees)
    if rest.size:
        scale = balance_scaling(A[rest])
        norm = np.linalg.norm(A[rest] * scale[:, None, :] / scale[:, :, None], axis=(1, 2))
        disagrees[rest] = gap[rest] > TRACE_FACTOR * n * EPS * norm + rounding[rest]
    return disagrees


def conjugates_disagree(poles: Complexes) -> Flags:
    """Where complex poles lack their conjugate, which every real matrix has.

    Parameters
    ----------
    poles : (points, n) complex
        Computed poles [1/s when continuous], in any order.

    Returns
    -------
    (points,) bool
        LAPACK's real driver returns exact pairs, so that a few units of roundoff are the bound.

    Examples
    --------
    >>> conjugates_disagree(np.array([[1 + 1j, 1 - 1j], [1 + 1j, 1 + 1j]]))
    array([False,  True])
    """
    # LAPACK's pairs stand together: only a stack that breaks this order needs sorting.
    pairs = np.zeros(poles.shape, dtype=bool)
    upper = (poles.imag[:, :-1] > 0) & (poles[:, 1:] == poles[:, :-1].conj())
    pairs[:, :-1] |= upper
    pairs[:, 1:] |= upper
    disagrees: Flags = ((poles.imag != 0) & ~pairs).any(axis=1)
    rest = np.flatnonzero(disagrees)
    if rest.size:
        above = np.sort(np.where(poles[rest].imag > 0, poles[rest], 0), axis=1)
        below = np.sort(np.where(poles[rest].imag < 0, poles[rest].conj(), 0), axis=1)
        disagrees[rest] = (np.abs(above - below) > 4 * EPS * np.abs(above)).any(axis=1)
    return disagrees


def characteristic_coefficients(A: Floats) -> tuple[Floats, Floats]:
    """Coefficients of det(sI - A) for few states, and a bound on their rounding error.

    Parameters
    ----------
    A : (points, n, n) float
        Matrices of few states.

    Returns
    -------
    coefficients : (points, n + 1) float
        From that of s^n, which is 1, down to the constant.
    error : (points, n + 1) float
        Bound on the error: the same recursion over absolute values, where nothing cancels, times
        the roundoff of all operations in a chain.

    References
    ----------
    Faddeev & Faddeeva, Computational Methods of Linear Algebra (1963), §47 (Leverrier's method
    modified). From memory.

    Examples
    --------
    >>> characteristic_coefficients(np.array([[[0.0, 1.0], [-4.0, -1.0]]]))[0]
    array([[1., 1., 4.]])
    """
    points, n = A.shape[:2]
    eye, size = np.eye(n), np.abs(A)
    coefficients, bounds = np.ones((points, n + 1)), np.zeros((points, n + 1))
    product, bound = np.broadcast_to(eye, A.shape), np.broadcast_to(eye, A.shape)
    for k in range(1, n + 1):
        step, wide = A @ product, size @ bound
        coefficients[:, k] = -np.einsum("pii->p", step) / k
        # 1.0 in place of 1/k bounds the coefficient k of the absolute recursion from above.
        bounds[:, k] = np.einsum("pii->p", wide)
        product = step + coefficients[:, k, None, None] * eye
        bound = wide + bounds[:, k, None, None] * eye
    return coefficients, bounds * EPS * (n + 4) * np.arange(n + 1)


def coefficients_disagree(
    A: Floats, stable: Flags, unstable: Flags, *, sampled: bool = False
) -> Flags:
    """Where signs of the characteristic coefficients contradict what the poles say.

    All coefficients of a stable model are positive; for one and two states the converse holds too.
    For sampled models det(I - A) and (-1)^n det(-I - A) are positive and the coefficient k is
    smaller than the binomial of n and k. Common practice; no source. Models of more than
    `COEFFICIENT_STATES` states pass.

    Parameters
    ----------
    A : (points, n, n) float
        State matrices.
    stable, unstable : (points,) bool
        Where the poles say so.
    sampled : bool
        Whether the models are sampled.

    Returns
    -------
    (points,) bool

    Examples
    --------
    >>> A = np.array([[[0.0, 1.0], [4.0, -1.0]]])
    >>> coefficients_disagree(A, np.array([True]), np.array([False]))
    array([ True])
    """
    n = A.shape[-1]
    if n > COEFFICIENT_STATES:
        return np.zeros(len(A), dtype=bool)
    with np.errstate(over="ignore", invalid="ignore"):
        value, error = characteristic_coefficients(A)
        low, error = _jury_margins(value, error) if sampled else (value, error)
        denies = (low < -error).any(axis=1)
        affirms = (low > error).all(axis=1) & (n <= 2)
    contradicts: Flags = (stable & denies) | (unstable & affirms)
    return contradicts


def _jury_margins(value: Floats, error: Floats) -> tuple[Floats, Floats]:
    """Quantities that are all positive for a stable sampled model, and their errors.

    For two states det(I - A) > 0, det(-I - A) > 0 and 1 > c_2 are also sufficient (Jury).
    """
    n = value.shape[1] - 1
    alternating = (-1.0) ** np.arange(n + 1)
    binomials = np.array([comb(n, k) for k in range(n + 1)], dtype=float)
    sums = np.stack([value.sum(axis=1), (value * alternating).sum(axis=1)], axis=1)
    rest = (binomials - np.abs(value))[:, 1:]
    # Adding up n + 1 terms rounds too.
    slack = (error + 2 * (n + 2) * EPS * np.abs(value)).sum(axis=1)[:, None]
    return np.hstack([sums, rest]), np.hstack([slack, slack, error[:, 1:] + EPS * binomials[1:]])


def exact_not_stable(
    A: Floats, *, entry_error: ArrayLike | None = None, sampled: bool = False
) -> list[tuple[str, ...]]:
    """Exact grounds why each of a few models is not stable, as codes.

    Nothing is rounded: sums are exact (`math.fsum` rounds once, which keeps the sign) and small
    determinants are done in rationals. A ground counts only if it holds for every matrix within
    `entry_error`. No ground says nothing about stability.

    Parameters
    ----------
    A : (points, n, n) float
        The few state matrices in doubt; there is a Python loop over them.
    entry_error : array that broadcasts to (points, n, n), optional
        Absolute uncertainty of every entry.
    sampled : bool
        Whether the models are sampled.

    Returns
    -------
    list of tuple of str
        Keys of `GROUNDS` for each point; empty where there is none.

    References
    ----------
    The trace is the sum and the determinant the product of the poles; a stable polynomial has
    positive coefficients: any text on linear algebra and on stability.

    Examples
    --------
    >>> exact_not_stable(np.array([[[0.0, -0.108], [377.0, 0.0]], [[0.0, 1.0], [-1.0, -1e-300]]]))
    [('trace', 'coefficients'), ()]
    """
    E = np.zeros(A.shape) if entry_error is None else np.broadcast_to(entry_error, A.shape)
    find = _sampled_grounds if sampled else _continuous_grounds
    return [find(matrix, error) for matrix, error in zip(A, E, strict=True)]


def _continuous_grounds(A: Floats, E: Floats) -> tuple[str, ...]:
    zero = (A == 0) & (E == 0)
    grounds = {
        TRACE: fsum([*np.diag(A), *-np.diag(E)]) >= 0,
        ZERO_ROW: bool(zero.all(axis=1).any()),
        ZERO_COLUMN: bool(zero.all(axis=0).any()),
        COEFFICIENTS: not E.any() and len(A) <= EXACT_STATES and min(_exact_coefficients(A)) <= 0,
    }
    return tuple(code for code, found in grounds.items() if found)


def _sampled_grounds(A: Floats, E: Floats) -> tuple[str, ...]:
    trace, slack, n = list(np.diag(A)), list(-np.diag(E)), len(A)
    unit = np.abs(A) == np.eye(n)
    exact = E == 0
    grounds = {
        TRACE: fsum([*trace, *slack, -n]) >= 0 or fsum([*(-x for x in trace), *slack, -n]) >= 0,
        UNIT_ROW: bool((unit & exact).all(axis=1).any()),
        UNIT_COLUMN: bool((unit & exact).all(axis=0).any()),
    }
    if exact.all() and n <= EXACT_STATES:
        values = _exact_coefficients(A)
        grounds[DETERMINANT] = abs(values[-1]) >= 1
        alternating = [value * (-1) ** k for k, value in enumerate(values)]
        grounds[COEFFICIENTS] = sum(values) <= 0 or sum(alternating) <= 0
    return tuple(code for code, found in grounds.items() if found)


def _exact_coefficients(A: Floats) -> list[Fraction]:
    """Coefficients of det(sI - A) in rationals, by the recursion above."""
    n = len(A)
    exact = np.vectorize(Fraction, otypes=[object])(A)
    eye = np.vectorize(Fraction, otypes=[object])(np.eye(n))
    coefficients, product = [Fraction(1)], eye
    for k in range(1, n + 1):
        step = exact @ product
        coefficients.append(-sum(np.diag(step), Fraction(0)) / k)
        product = step + coefficients[-1] * eye
    return coefficients
