"""Frequency responses of stacks of systems, their slopes, and the size of their rounding."""

import numpy as np

from ssaudit.margins.state_space import Complex, Index, Real, StateSpace
from ssaudit.modes.poles import isolate

# Sums of a few dozen terms, each exact to 1e-16, are trusted to this.
RESPONSE_ROUNDING = 1e-14


def respond(system: StateSpace, owner: Index, w: Real) -> Complex:
    """Frequency response at a flat list of frequencies, each of its own point.

    Parameters
    ----------
    system : StateSpace
    owner : (count,) int
        The point each frequency belongs to.
    w : (count,) float
        Frequency [rad/s]; inf gives D.

    Returns
    -------
    (count, outputs, inputs) complex
        NaN where the frequency is a pole to working precision.

    Examples
    --------
    >>> system = StateSpace(*(np.full((1, 1, 1), x) for x in (-1.0, 1.0, 2.0, 0.5)))
    >>> respond(system, np.array([0, 0]), np.array([0.0, np.inf])).ravel()
    array([2.5+0.j, 0.5+0.j])
    """
    response, _ = respond_with_slope(system, owner, w, slope=False)
    return response


def respond_with_slope(
    system: StateSpace, owner: Index, w: Real, *, slope: bool = True
) -> tuple[Complex, Complex]:
    """Frequency response and its derivative with respect to frequency.

    Parameters
    ----------
    system : StateSpace
    owner : (count,) int
        The point each frequency belongs to.
    w : (count,) float
        Frequency [rad/s]; inf gives D and a zero slope.
    slope : bool
        Without it the second result is the response again, at half the cost.

    Returns
    -------
    response, derivative : (count, outputs, inputs) complex

    Examples
    --------
    >>> system = StateSpace(*(np.full((1, 1, 1), x) for x in (-1.0, 1.0, 2.0, 0.5)))
    >>> _, derivative = respond_with_slope(system, np.array([0]), np.array([0.0]))
    >>> derivative.ravel()
    array([0.-2.j])
    """
    D = system.D[owner].astype(complex)
    n = system.A.shape[-1]
    if n == 0 or len(owner) == 0:
        return D, np.zeros_like(D) if slope else D
    far = np.isinf(w)
    state, resolved = _resolve(system.A, owner, np.where(far, 0.0, w), system.B[owner])
    resolved[far] = 0
    C = system.C[owner]
    response = D + C @ resolved
    if not slope:
        return response, response
    (twice,), _ = isolate(lambda M, X: (np.linalg.solve(M, X),), state, resolved)
    return response, np.asarray(-1j * (C @ twice), dtype=complex)


def response_noise(system: StateSpace, owner: Index, w: Real) -> Real:
    """Size below which a frequency response is rounding: that of its terms times 1e-14.

    Parameters
    ----------
    system : StateSpace
    owner : (count,) int
        The point each frequency belongs to.
    w : (count,) float
        Frequency [rad/s]; inf gives that of D.

    Returns
    -------
    (count,) float

    Examples
    --------
    >>> system = StateSpace(*(np.full((1, 1, 1), x) for x in (-1.0, 1.0, 2.0, -2.0)))
    >>> float(response_noise(system, np.array([0]), np.array([0.0]))[0])
    4e-14
    """
    size = np.linalg.norm(system.D[owner], axis=(1, 2))
    if system.A.shape[-1] and len(owner):
        _, resolved = _resolve(system.A, owner, np.where(np.isinf(w), 0.0, w), system.B[owner])
        terms = np.linalg.norm(system.C[owner], axis=(1, 2)) * np.linalg.norm(resolved, axis=(1, 2))
        size = size + np.where(np.isinf(w), 0.0, terms)
    return np.asarray(RESPONSE_ROUNDING * size)


def _resolve(A: Real, owner: Index, w: Real, B: Real) -> tuple[Complex, Complex]:
    """JwI - A, and its inverse times B."""
    state = -A[owner].astype(complex)
    diagonal = np.arange(A.shape[-1])
    state[:, diagonal, diagonal] += 1j * w[:, None]
    (resolved,), _ = isolate(lambda M, X: (np.linalg.solve(M, X),), state, B.astype(complex))
    return state, np.array(resolved)
