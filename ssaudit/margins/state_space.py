"""Stacks of loops in state space: checking, closing, mapping and evaluating them."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ssaudit.errors import LoopError
from ssaudit.modes.poles import find_modes, isolate

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Bool = NDArray[np.bool_]
Index = NDArray[np.intp]

# Sums of a few dozen terms, each exact to 1e-16, are trusted to this.
RESPONSE_ROUNDING = 1e-14
# One rounding, with room for the few operations that each product of complex numbers goes through;
# sums of n terms add up to sqrt(n) of them (Higham and Mary, SIAM J. Sci. Comput. 41(5), 2019).
UNIT = 4 * np.finfo(float).eps
# Errors of a modal form are followed to first order: beyond this they are not followed at all.
FIRST_ORDER = 0.05


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


@dataclass(frozen=True)
class ModalForm:
    """A response as a sum over its poles, D + Σ left_k right_k / (jw - pole_k), and its error.

    Attributes
    ----------
    poles : (points, n) complex
    left : (points, outputs, n) complex
    right : (points, n, inputs) complex
    D : (points, outputs, inputs) float
    doubt : (points, n) float
    floor : (points,) float
        The response is within floor + Σ doubt_k / abs(jw - pole_k) of the sum; inf where the form
        says nothing, because the eigenvectors depend on each other.
    condition : (points, n) float
        Of each pole: length of its left eigenvector, its right one of about unit length.
    """

    poles: Complex
    left: Complex
    right: Complex
    D: Real
    doubt: Real
    floor: Real
    condition: Real

    def __getitem__(self, chosen: Index | Bool | slice) -> "ModalForm":
        """Take the chosen points only."""
        return ModalForm(*(column[chosen] for column in vars(self).values()))

    def __len__(self) -> int:
        """Count the points."""
        return len(self.poles)


def to_modes(
    system: StateSpace, carried: Real | float = 0.0, *, sampled: bool = False, steps: int = 0
) -> ModalForm:
    """Write responses as sums over their poles, and bound what rounding does to them.

    Sampled ones are mapped as by `to_continuous`, pole by pole, which no inverse spoils. Of these
    A - I is to be given: of poles sampled fast all digits but a few go into the 1.

    Parameters
    ----------
    system : StateSpace
        Stable systems, best with balanced states; sampled ones with A less the identity.
    carried : (points, n, n) float
        Absolute size of the terms that each entry of A was summed from, whose rounding it
        carries; 0 where A is as given.
    sampled : bool
        Whether the systems are sampled ones.
    steps : int
        Corrections of the eigenvectors. Without them slow poles beside fast ones are as far off
        as the rounding of the fast ones; one or two bring down what can be brought down.

    Returns
    -------
    ModalForm

    References
    ----------
    First-order perturbation of an eigendecomposition, and its correction by it: Golub and Van
    Loan, Matrix Computations, 4th ed. (2013), section 7.2 (from memory).

    Examples
    --------
    >>> form = to_modes(read_loop([[[-1.0]]], [[[1.0]]], [[[2.0]]], [[[0.5]]]))
    >>> form.poles.real, (form.left * form.right).real, bool(form.doubt[0, 0] < 1e-13)
    (array([[-1.]]), array([[[2.]]]), True)
    """
    # What overflows on the way is in doubt without end.
    with np.errstate(all="ignore"):
        return _find_modal_form(system, carried, sampled, steps)


def _find_modal_form(
    system: StateSpace, carried: Real | float, sampled: bool, steps: int
) -> ModalForm:
    A = system.A
    poles, V, W, _ = find_modes(A)
    F = W @ (A @ V)
    for _ in range(steps):
        between = poles[:, np.newaxis, :] - poles[:, :, np.newaxis]
        correction = np.where(between == 0, 0, F / np.where(between == 0, 1, between))
        V = V + V @ correction
        W = _invert_complex(V)
        F = W @ (A @ V)
        # Real ones stay real, and the upper of a pair stays above.
        moved = np.diagonal(F, axis1=1, axis2=2)
        poles = moved.real + 1j * np.sign(poles.imag) * np.abs(moved.imag)
    depth = -poles.real
    if sampled:  # 1 - abs(1 + q), written so that it does not cancel
        depth = (2 * depth - np.square(np.abs(poles))) / (1 + np.abs(1 + poles))
    left, right = system.C @ V, W @ system.B
    doubt = _doubt_of(system, poles, depth, np.abs(A) + carried, V, W, F)
    condition = np.linalg.norm(V, axis=1) * np.linalg.norm(W, axis=2)
    form = ModalForm(poles, left, right, system.D, doubt, np.zeros(len(poles)), condition)
    return _map_modes(form) if sampled else form


def _invert_complex(matrices: Complex) -> Complex:
    """Inverse of each complex matrix, NaN where it is singular or not finite."""
    (inverse,), _ = isolate(lambda stack: (np.linalg.inv(stack),), matrices)
    return np.asarray(inverse)


def _doubt_of(
    system: StateSpace, p: Complex, depth: Real, size: Real, V: Complex, W: Complex, F: Complex
) -> Real:
    """Bound the error of a modal form from what is left off the diagonal, and all rounding.

    With E the error of the diagonal form, c_k E_kl b_l / ((s - p_k)(s - p_l)) is at most
    c_k E_kl b_l (1/abs(s - p_k) + 1/abs(s - p_l)) / (abs(s - p_k) + abs(s - p_l)), and the last
    sum is no less than the distance of both poles, or of both from the boundary.
    """
    rounding = np.sqrt(p.shape[1]) * UNIT
    identity, sizes_V, sizes_W = np.eye(p.shape[1]), np.abs(V), np.abs(W)
    inverse = np.abs(W @ V - identity) + rounding * (sizes_W @ sizes_V)
    off = np.abs(F - p[:, np.newaxis, :] * identity) + rounding * (sizes_W @ (size @ sizes_V))
    apart = np.abs(p[:, :, np.newaxis] - p[:, np.newaxis, :])
    apart = np.maximum(apart, depth[:, :, np.newaxis] + depth[:, np.newaxis, :])
    mixed = (off + inverse * np.abs(p)[:, np.newaxis, :]) / apart
    c, b = np.linalg.norm(system.C @ V, axis=1), np.linalg.norm(W @ system.B, axis=2)
    c_sum = np.linalg.norm(np.abs(system.C) @ sizes_V, axis=1)
    b_sum = np.linalg.norm(sizes_W @ np.abs(system.B), axis=2)
    doubt = c * np.einsum("pkl,pl->pk", mixed + inverse, b)
    doubt += b * np.einsum("plk,pl->pk", mixed, c) + rounding * (c_sum * b + c * b_sum)
    followed = (mixed.sum(axis=(1, 2)) + inverse.sum(axis=(1, 2)) < FIRST_ORDER)[:, np.newaxis]
    # Terms of second order are no more than the first times what is followed.
    followed = followed & (depth > 0) & np.isfinite(doubt)
    return np.where(followed, (1 + 4 * FIRST_ORDER) * doubt, np.inf)


def _map_modes(form: ModalForm) -> ModalForm:
    """Map z = 1 + q = (1 + s)/(1 - s): 1/(z - p) = ((1 - s)/(1 + p)) / (s - (p - 1)/(p + 1))."""
    beside = 2 + form.poles
    left = np.sqrt(2) * form.left / beside[:, np.newaxis, :]
    right = np.sqrt(2) * form.right / beside[:, :, np.newaxis]
    D = form.D - (form.left @ (form.right / beside[:, :, np.newaxis])).real
    floor = (form.doubt / np.abs(beside)).sum(axis=1)
    doubt = 2 * form.doubt / np.square(np.abs(beside))
    return ModalForm(form.poles / beside, left, right, D, doubt, floor, form.condition)


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
