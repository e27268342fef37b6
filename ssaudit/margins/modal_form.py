"""Responses as sums over their poles, and a bound of what rounding does to the sum."""

from dataclasses import dataclass

import numpy as np

from ssaudit.margins.state_space import Bool, Complex, Index, Real, StateSpace
from ssaudit.modes.poles import find_modes, isolate

# Corrections of the eigenvectors that are tried where rounding hides a peak.
CORRECTIONS = 2
# One rounding, with room for the few operations that each product of complex numbers goes through;
# sums of n terms add up to sqrt(n) of them (Higham and Mary, SIAM J. Sci. Comput. 41(5), 2019).
UNIT = 4 * np.finfo(float).eps
# Errors of a modal form are followed to first order: beyond this they are not followed at all.
FIRST_ORDER = 0.05


@dataclass(frozen=True)
class ModalForm:
    """A response as a sum over its poles, D + Σ left_k right_k / (jw - pole_k), and its error.

    Attributes
    ----------
    poles : (points, n) complex
        [1/s]
    left : (points, outputs, n) complex
    right : (points, n, inputs) complex
    D : (points, outputs, inputs) float
    doubt : (points, n) float
    floor : (points,) float
        The response is within floor + Σ doubt_k / abs(jw - pole_k) of the sum. Where the form
        says nothing, because the eigenvectors depend on each other, ``doubt`` is inf, or so large
        that it hides the response.
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

    Sampled ones are mapped as by `ssaudit.margins.state_space.to_continuous`, pole by
    pole, which no inverse spoils. Of these A - I is to be given: of poles sampled fast all digits
    but a few go into the 1.

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
    >>> lag = StateSpace(*(np.full((1, 1, 1), x) for x in (-1.0, 1.0, 2.0, 0.5)))
    >>> form = to_modes(lag)
    >>> form.poles.real, (form.left * form.right).real, bool(form.doubt[0, 0] < 1e-13)
    (array([[-1.]]), array([[[2.]]]), True)
    """
    # What overflows on the way is in doubt without end.
    with np.errstate(all="ignore"):
        return _find_modal_form(system, carried, sampled, steps)


def _find_modal_form(
    system: StateSpace, carried: Real | float, sampled: bool, steps: int
) -> ModalForm:
    """Find the poles and eigenvectors, correct them, and follow their errors."""
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
