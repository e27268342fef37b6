"""Stacks of loops in state space: checking, closing, mapping and evaluating them."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ssaudit.errors import LoopError
from ssaudit.modes.poles import isolate

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Bool = NDArray[np.bool_]
Index = NDArray[np.intp]

# Sums of a few dozen terms, each exact to 1e-16, are trusted to this.
RESPONSE_ROUNDING = 1e-14


@dataclass(frozen=True)
class StateSpace:
    """State-space stacks of one system at all points: y = (D + C (sI - A)⁻¹ B) u.

    Attributes
    ----------
    A : (points, n, n) float
    B : (points, n, inputs) float
    C : (points, outputs, n) float
    D : (points, outputs, inputs) float
    """

    A: Real
    B: Real
    C: Real
    D: Real

    def __getitem__(self, chosen: Index | Bool | slice) -> "StateSpace":
        """Take the chosen points only."""
        return StateSpace(self.A[chosen], self.B[chosen], self.C[chosen], self.D[chosen])

    def __len__(self) -> int:
        """Count the points."""
        return len(self.A)


def read_loop(A: ArrayLike, B: ArrayLike, C: ArrayLike, D: ArrayLike) -> StateSpace:
    """Check that four stacks make a square open loop.

    Parameters
    ----------
    A, B, C, D : (points, n, n), (points, n, m), (points, m, n), (points, m, m) float
        The open loop L; non-finite entries are allowed and spoil their own point only.

    Returns
    -------
    StateSpace
        The same numbers as float arrays.

    Raises
    ------
    ssaudit.errors.LoopError
        When the shapes do not fit one another.

    Examples
    --------
    >>> len(read_loop([[[-1.0]]], [[[1.0]]], [[[2.0]]], [[[0.0]]]))
    1
    """
    stacks = [np.asarray(matrix, dtype=float) for matrix in (A, B, C, D)]
    found = [stack.shape for stack in stacks]
    if all(len(shape) == 3 for shape in found):
        points, n, m = stacks[1].shape
        if found == [(points, n, n), (points, n, m), (points, m, n), (points, m, m)] and m > 0:
            return StateSpace(*stacks)
    raise LoopError(
        f"the open loop's A, B, C, D have shapes {', '.join(map(str, found))}",
        do="give (points, n, n), (points, n, m), (points, m, n) and (points, m, m), m > 0",
    )


def invert(matrices: Real) -> Real:
    """Inverse of each matrix of a stack, NaN where it is singular.

    Parameters
    ----------
    matrices : (points, n, n) float

    Returns
    -------
    (points, n, n) float

    Examples
    --------
    >>> invert(np.array([[[4.0]], [[0.0]]])).ravel()
    array([0.25,  nan])
    """
    if matrices.size == 0:
        return matrices.copy()
    (inverse,), _ = isolate(lambda stack: (np.linalg.inv(stack),), matrices)
    return np.asarray(inverse)


def feed_back(loop: StateSpace, gain: Real) -> StateSpace:
    """Close loops through a gain factor: from L to T = L (I + gain L)⁻¹.

    Parameters
    ----------
    loop : StateSpace
        The open loop L, inputs as many as outputs.
    gain : (points,) float
        Factor k; negative feedback.

    Returns
    -------
    StateSpace
        T, whose A is the closed loop A - k B (I + k D)⁻¹ C; NaN where I + k D is singular.

    Examples
    --------
    >>> loop = read_loop([[[0.0]]], [[[1.0]]], [[[3.0]]], [[[0.0]]])
    >>> feed_back(loop, np.array([2.0])).A.ravel()
    array([-6.])
    """
    k = gain[:, None, None]
    inner = invert(np.eye(loop.D.shape[-1]) + k * loop.D)
    BR = loop.B @ inner
    return StateSpace(loop.A - k * BR @ loop.C, BR, inner @ loop.C, loop.D @ inner)


def sensitivity_of(loop: StateSpace) -> StateSpace:
    """Sensitivity S = (I + L)⁻¹ of loops closed by negative unity feedback.

    Parameters
    ----------
    loop : StateSpace
        The open loop L.

    Returns
    -------
    StateSpace
        S; its A is the closed loop.

    Examples
    --------
    >>> loop = read_loop([[[0.0]]], [[[1.0]]], [[[3.0]]], [[[0.0]]])
    >>> S = sensitivity_of(loop)
    >>> S.A.item(), S.D.item()
    (-3.0, 1.0)
    """
    T = feed_back(loop, np.ones(len(loop)))
    return StateSpace(T.A, T.B, -T.C, np.eye(loop.D.shape[-1]) - T.D)


def to_continuous(system: StateSpace, dt: float) -> StateSpace:
    """Map sampled systems to continuous ones with the same frequency response, warped.

    The unit circle goes to the imaginary axis by z = (1 + s)/(1 - s), so that gains, peaks and
    stability carry over exactly; the frequency w there stands for ω = (2/dt) atan w.

    Parameters
    ----------
    system : StateSpace
        Sampled systems without a pole at z = -1 (NaN otherwise).
    dt : float
        Sampling time [s]; 0 means already continuous.

    Returns
    -------
    StateSpace

    References
    ----------
    Al-Saggaf and Franklin, IEEE Trans. Automatic Control 33(9), 1988 (bilinear map of
    state-space models; from memory).

    Examples
    --------
    >>> system = read_loop([[[0.5]]], [[[1.0]]], [[[1.0]]], [[[0.0]]])
    >>> mapped = to_continuous(system, 0.1)
    >>> round(mapped.D.item(), 6)  # the response at z = -1
    -0.666667
    """
    if dt == 0:
        return system
    identity = np.eye(system.A.shape[-1])
    inner = invert(system.A + identity)
    C, B = system.C @ inner, inner @ system.B
    A = inner @ (system.A - identity)
    return StateSpace(A, np.sqrt(2) * B, np.sqrt(2) * C, system.D - C @ system.B)


def unwarp(w: Real, dt: float) -> Real:
    """Frequency [rad/s] that a frequency of `to_continuous` stands for.

    Parameters
    ----------
    w : (...) float
        Frequency of the mapped system; of a continuous one [rad/s].
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    (...) float
        Frequency [rad/s].

    Examples
    --------
    >>> unwarp(np.array([0.0, np.inf]), 0.5).round(4)
    array([0.    , 6.2832])
    """
    return w if dt == 0 else 2 / dt * np.arctan(w)


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
    >>> system = read_loop([[[-1.0]]], [[[1.0]]], [[[2.0]]], [[[0.5]]])
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
    >>> system = read_loop([[[-1.0]]], [[[1.0]]], [[[2.0]]], [[[0.5]]])
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
    >>> system = read_loop([[[-1.0]]], [[[1.0]]], [[[2.0]]], [[[-2.0]]])
    >>> float(response_noise(system, np.array([0]), np.array([0.0]))[0])
    4e-14
    """
    size = np.linalg.norm(system.D[owner], axis=(1, 2))
    if system.A.shape[-1] and len(owner):
        _, resolved = _resolve(system.A, owner, np.where(np.isinf(w), 0.0, w), system.B[owner])
        terms = np.linalg.norm(system.C[owner], axis=(1, 2)) * np.linalg.norm(resolved, axis=(1, 2))
        size = size + np.where(np.isinf(w), 0.0, terms)
    return np.asarray(RESPONSE_ROUNDING * size)


def typical_frequency(poles: Complex) -> Real:
    """Geometric mean of the natural frequencies, those at zero left out; 1 where none is left.

    Parameters
    ----------
    poles : (points, n) complex

    Returns
    -------
    (points,) float

    Examples
    --------
    >>> typical_frequency(np.array([[-2.0 + 0j, -8.0, 0.0]])).round(9)
    array([4.])
    """
    size = np.abs(poles)
    counted = size > 0
    total = np.log(np.where(counted, size, 1.0)).sum(axis=1)
    return np.asarray(np.exp(total / np.maximum(counted.sum(axis=1), 1)))


def _resolve(A: Real, owner: Index, w: Real, B: Real) -> tuple[Complex, Complex]:
    """JwI - A, and its inverse times B."""
    state = -A[owner].astype(complex)
    diagonal = np.arange(A.shape[-1])
    state[:, diagonal, diagonal] += 1j * w[:, None]
    (resolved,), _ = isolate(lambda M, X: (np.linalg.solve(M, X),), state, B.astype(complex))
    return state, np.array(resolved)
