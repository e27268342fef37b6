"""How far rounding may move a frequency response, and the gain factor of a crossing."""

import numpy as np

from ssaudit.margins.responses import respond_with_slope
from ssaudit.margins.state_space import Bool, Complex, Index, Real, StateSpace
from ssaudit.modes.poles import isolate

# Rounding of one entry, with what gathers in a few operations.
ROUNDING = 1e-15
# Of an entry of a system that is solved: eliminations mix entries with larger ones of their row.
# Of 3,168 crossings against exact arithmetic 19 were off by more than the bound that this gives,
# and those by no more than 2e-10 of the factor.
SOLVED_ROUNDING = 3e-15
# A pole whose path makes a smaller angle than this with the axis may only touch it [rad].
TANGENT = 1e-5
# A slope smaller than this, relative to its terms, may be zero.
SURE_SLOPE = 1e-9


def on_axis(w: Real) -> Complex:
    """Places of frequencies on the imaginary axis.

    Parameters
    ----------
    w : (...) float
        Frequency [rad/s]; may be inf.

    Returns
    -------
    (...) complex

    Examples
    --------
    >>> on_axis(np.array([2.0, np.inf]))
    array([ 0.+2.j, inf+0.j])
    """
    finite = 1j * np.where(np.isinf(w), 0.0, w)
    return np.asarray(np.where(np.isinf(w), np.inf, finite), dtype=complex)


def response_error(system: StateSpace, owner: Index, s: Complex, size: Real | None = None) -> Real:
    """Bound of the rounding in a response, entry by entry of its model.

    Parameters
    ----------
    system : StateSpace
    owner : (count,) int
        The point each place belongs to.
    s : (count,) complex
        Where, in the plane of the Laplace or the z transform; inf gives that of D.
    size : (points, n, n) float, optional
        Sizes of the terms that A is the sum of; without it those of A itself.

    Returns
    -------
    (count, outputs, inputs) float
        That of changes of 3e-15 of every entry of sI, A, B, C and D, one independent of the other.

    References
    ----------
    Oettli and Prager, Numerische Mathematik 6, 1964 (componentwise backward error; from memory).

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> lag = StateSpace(-one, one, one, 0 * one)
    >>> round(response_error(lag, np.array([0]), np.zeros(1, dtype=complex)).item(), 17)
    4.24e-15
    """
    # Roundings are of either sign: their squares add up.
    terms = np.square(system.D[owner])
    if system.A.shape[-1] and len(owner):
        near = np.isfinite(s)
        s = np.where(near, s, 0.0)
        inner = _resolvent(system, owner, s)
        entries = np.abs(system.A[owner]) if size is None else size[owner]
        state = np.abs(s)[:, None, None] * np.eye(system.A.shape[-1]) + entries
        right, left = _squared(inner @ system.B[owner]), _squared(system.C[owner] @ inner)
        through = left @ np.square(state) @ right + np.square(system.C[owner]) @ right
        terms = terms + np.where(near[:, None, None], through, 0.0)
    return np.asarray(SOLVED_ROUNDING * np.sqrt(terms))


def _squared(z: Complex) -> Real:
    """Square of the size of every entry."""
    return np.asarray(np.square(z.real) + np.square(z.imag))


def _resolvent(system: StateSpace, owner: Index, s: Complex) -> Complex:
    """Find (sI - A)⁻¹."""
    state = s[:, None, None] * np.eye(system.A.shape[-1]) - system.A[owner]
    (inner,), _ = isolate(lambda M: (np.linalg.inv(M),), state)
    return np.asarray(inner)


def factor_error(
    T: StateSpace, owner: Index, w: Real, change: Real, given: tuple[StateSpace, Complex, Real]
) -> tuple[Real, Index]:
    """How far rounding may move the change of the factor at crossings, and where poles go.

    Parameters
    ----------
    T : StateSpace
        Loops closed at some factor, continuous.
    owner : (count,) int
        The point of each crossing.
    w : (count,) float
        Its frequency [rad/s]: det(I + κ T(jω)) = 0; at 0 and inf it is held.
    change : (count,) float
        κ.
    given : StateSpace, (count,) complex, (points, n, n) float
        The closed loops whose entries were given (of sampled loops the sampled ones), the places
        of the crossings in their plane, and the sizes of the terms of their A.

    Returns
    -------
    error : (count,) float
        To first order.
    direction : (count,) int
        1 where a pole crosses to the right as κ rises, -1 where to the left; 0 where it cannot be
        told, as where it touches the axis only.

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> T = StateSpace(-one, one, one, 0 * one)  # 1/(s + 1), crosses at κ = -1
    >>> at = np.zeros(1)
    >>> error, direction = factor_error(T, np.array([0]), at, np.array([-1.0]), (T, 1j * at, one))
    >>> round(float(error[0]), 17), int(direction[0])
    (4.24e-15, -1)
    """
    response, slope = respond_with_slope(T, owner, w)
    left, right = _null_vectors(response, change)
    # Towards infinity T is D + C B/s: there the pole is followed by its inverse x = 1/s.
    far = np.isinf(w)
    slope[far] = 1j * (T.C[owner[far]] @ T.B[owner[far]])
    moved = (np.abs(left) @ response_error(given[0], owner, *given[1:]) @ np.abs(right))[:, 0, 0]
    by_w, by_change = ((left @ M @ right)[:, 0, 0] for M in (slope, response))
    # Where the frequency may move too, only what it cannot make up for moves the factor.
    free = ~far & (w > 0)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        across = (by_change * by_w.conj()).imag / np.abs(by_w)
        sine = across / np.abs(by_change)
        error = np.abs(change) * moved / np.where(free, np.abs(across), np.abs(by_change))
    clear = (np.nan_to_num(np.abs(sine)) > TANGENT) & _has_slope(T, owner, w, by_w, left, right)
    direction = np.where(clear, np.sign(sine) * np.sign(change), 0.0).astype(np.intp)
    return np.asarray(error), direction


def _has_slope(
    T: StateSpace, owner: Index, w: Real, by_w: Complex, left: Complex, right: Complex
) -> Bool:
    """Whether slopes stand out from the rounding of their terms; where not, poles meet there."""
    ahead, behind = left @ T.C[owner], T.B[owner] @ right
    near = np.nonzero(np.isfinite(w))[0]
    if T.A.shape[-1] and len(near):
        inner = _resolvent(T, owner[near], on_axis(w[near]))
        ahead[near], behind[near] = ahead[near] @ inner, inner @ behind[near]
    terms = np.linalg.norm(ahead, axis=(1, 2)) * np.linalg.norm(behind, axis=(1, 2))
    return np.asarray(np.abs(by_w) > SURE_SLOPE * terms)


def _null_vectors(response: Complex, change: Real) -> tuple[Complex, Complex]:
    """Row and column that I + κ T takes to (nearly) zero."""
    points, m = len(response), response.shape[-1]
    if m == 1:
        one = np.ones((points, 1, 1), dtype=complex)
        return one, one

    def vectors(M: Complex) -> tuple[Complex, Complex]:
        U, _, V = np.linalg.svd(M)
        return U[:, :, -1:].conj().swapaxes(1, 2), V[:, -1:].conj().swapaxes(1, 2)

    loop = np.eye(m) + change[:, None, None] * response
    loop = np.where(np.isfinite(loop).all(axis=(1, 2), keepdims=True), loop, 0.0)
    (left, right), _ = isolate(vectors, loop)
    return left, right
