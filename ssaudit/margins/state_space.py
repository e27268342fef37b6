"""Stacks of loops in state space: checking, closing and mapping them."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ssaudit.errors import LoopError
from ssaudit.modes.poles import isolate

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Bool = NDArray[np.bool_]
Index = NDArray[np.intp]


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


def given_form(system: StateSpace, dt: float) -> StateSpace:
    """Add the identity back to A of sampled systems that are without.

    Parameters
    ----------
    system : StateSpace
        As `less_identity` returns it.
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    StateSpace

    Examples
    --------
    >>> system = read_loop([[[-0.5]]], [[[1.0]]], [[[1.0]]], [[[0.0]]])
    >>> given_form(system, 0.1).A.item(), given_form(system, 0.0).A.item()
    (0.5, -0.5)
    """
    return StateSpace(system.A + _identity(system, dt), system.B, system.C, system.D)


def less_identity(system: StateSpace, dt: float) -> StateSpace:
    """Take the identity from A of sampled systems: poles next to 1 then keep their digits.

    Parameters
    ----------
    system : StateSpace
    dt : float
        Sampling time [s]; 0 means continuous, and nothing is taken.

    Returns
    -------
    StateSpace

    Examples
    --------
    >>> system = read_loop([[[0.5]]], [[[1.0]]], [[[1.0]]], [[[0.0]]])
    >>> less_identity(system, 0.1).A.item(), less_identity(system, 0.0).A.item()
    (-0.5, 0.5)
    """
    return StateSpace(system.A - _identity(system, dt), system.B, system.C, system.D)


def _identity(system: StateSpace, dt: float) -> Real:
    """Return the identity of sampled systems, zero of continuous ones."""
    n = system.A.shape[-1]
    return np.eye(n) if dt > 0 else np.zeros((n, n))


def join(a: Real, b: Real, c: Real, d: Real) -> Real:
    """Stack four blocks into [[a, b], [c, d]] at each point.

    Parameters
    ----------
    a, b, c, d : (points, rows, columns) float

    Returns
    -------
    (points, rows, columns) float

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> join(one, 2 * one, 3 * one, 4 * one)
    array([[[1., 2.],
            [3., 4.]]])
    """
    upper = np.concatenate([a, b], axis=2)
    lower = np.concatenate([c, d], axis=2)
    return np.concatenate([upper, lower], axis=1)
