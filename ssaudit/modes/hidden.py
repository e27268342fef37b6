"""Which modes no input reaches or no output shows: stable inside, or only from outside.

Feedback from the same outputs to the same inputs moves neither kind, so that the test may be done
on the closed loop.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ssaudit.modes.radii import coupling_bound

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Flags = NDArray[np.bool_]
Answers = NDArray[np.int8]

HIDDEN_SHARE = 1e-8
"""A mode counts as hidden where the products of its vector and an input or output cancel to this
share: half of the digits of double precision, as models that were transformed or rounded keep about
that many. Common practice; no source."""

REPEATED_LIMIT = 1e-6
"""The same for the smallest singular value at a repeated pole, which is itself known only to the
square root of roundoff, 1.5e-8, times what scaling may add."""

REPEATED_UNSURE = 1e-4
"""Up to here a repeated pole's answer is unknown: a triple pole is known to the cube root only."""

CLUSTER_GAP = 1e-6
"""Poles nearer than this, relative to their size, have no vectors of their own worth the name."""

SCALING_SWEEPS = 4
"""Alternations of row and column scaling before a rank is judged."""

YES, NO, UNKNOWN = np.int8(1), np.int8(0), np.int8(-1)


@dataclass(frozen=True)
class HiddenModes:
    """How inputs reach and outputs show the chosen poles.

    Parameters
    ----------
    reach, show : (points, n) float
        From 0 to 1: for the best input or output, what is left of the sum of products with the
        mode's left or right vector, as a share of the sum of their sizes; for repeated poles the
        smallest singular value of the Popov-Belevitch-Hautus matrix, relative to the largest. NaN
        for poles not chosen.
    reached, shown : (points, n) int8
        1 yes, 0 no, -1 unknown or not chosen. For a repeated pole 0 says that some mode at it is
        hidden.
    visible : (points, n) int8
        Whether the pole appears in the transfer from inputs to outputs: 1, 0 or -1.
    """

    reach: Floats
    show: Floats
    reached: Answers
    shown: Answers
    visible: Answers


def hidden_modes(
    A: Floats,
    B: Floats,
    C: Floats,
    poles: Complexes,
    right: Complexes,
    left: Complexes,
    *,
    chosen: Flags | None = None,
    entry_error: Floats | None = None,
) -> HiddenModes:
    """Test whether inputs reach and outputs show each chosen pole.

    An input b reaches a simple pole with left vector w if w b is not zero. It counts as zero up to
    the error that rounding makes in w, and up to `HIDDEN_SHARE` of Σ|w_k b_k|; units of states,
    inputs and outputs do not matter for either. Where a pole is repeated or nearly so, the ranks of
    [sI - A, B] and [sI - A; C] are judged by singular values after scaling rows and columns, which
    leaves the rank alone.

    Parameters
    ----------
    A : (points, n, n) float
        State matrices, closed or open [1/s when continuous].
    B : (points, n, inputs) float
        Input matrices.
    C : (points, outputs, n) float
        Output matrices.
    poles, right, left : complex arrays
        From `ssaudit.modes.poles.find_modes`.
    chosen : (points, n) bool, optional
        Poles to test, by default all. Only unstable ones bear on stability from outside, and the
        test of repeated poles is dear.
    entry_error : (points, n, n) float, optional
        Absolute uncertainty of every entry of A: what it might turn into zero is unknown.

    Returns
    -------
    HiddenModes

    References
    ----------
    Hautus, Controllability and observability conditions of linear autonomous systems, Indag. Math.
    31 (1969), and the work of Popov and Belevitch. Change of a vector to first order: Stewart and
    Sun, Matrix Perturbation Theory (1990), ch. V. From memory.

    Examples
    --------
    >>> from ssaudit.modes.poles import find_modes
    >>> A = np.array([np.diag([-1.0, 2.0])])
    >>> B, C = np.array([[[1.0], [0.0]]]), np.array([[[1.0, 1.0]]])
    >>> found = hidden_modes(A, B, C, *find_modes(A)[:3])
    >>> found.reached.tolist(), found.shown.tolist(), found.visible.tolist()
    ([[1, 0]], [[1, 1]], [[1, 0]])
    """
    points, n = poles.shape
    result = _blank(points, n)
    wanted = np.ones((points, n), dtype=bool) if chosen is None else chosen
    wanted = wanted & np.isfinite(poles)
    some = np.flatnonzero(wanted.any(axis=1))
    if some.size == 0:
        return result
    A, B, C, poles, wanted = A[some], B[some], C[some], poles[some], wanted[some]
    V, W = right[some], left[some]
    with np.errstate(all="ignore"):
        mixed, lone = _mixing(poles, coupling_bound(A, poles, V, W, None))
        maybe = mixed
        if entry_error is not None:
            maybe, _ = _mixing(poles, coupling_bound(A, poles, V, W, entry_error[some]))
        reach, reached = _by_vectors(W, B, mixed, maybe)
        turned = (np.swapaxes(V, 1, 2), np.swapaxes(C, 1, 2))
        show, shown = _by_vectors(*turned, np.swapaxes(mixed, 1, 2), np.swapaxes(maybe, 1, 2))
    at = np.nonzero(wanted & ~lone)
    if at[0].size:
        pencil = poles[at][:, None, None] * np.eye(A.shape[1]) - A[at[0]]
        reach[at], reached[at] = _by_rank(pencil, B[at[0]])
        show[at], shown[at] = _by_rank(np.swapaxes(pencil, 1, 2), turned[1][at[0]])
    visible = _visible(reached, shown, lone)
    row, mode = np.nonzero(wanted)
    point = some[row]
    result.reach[point, mode], result.show[point, mode] = reach[wanted], show[wanted]
    result.reached[point, mode], result.shown[point, mode] = reached[wanted], shown[wanted]
    result.visible[point, mode] = visible[wanted]
    return result


def stable_from_outside(not_stable: Flags, found: HiddenModes) -> Answers:
    """Whether every bounded input gives a bounded output: 1 yes, 0 no, -1 unknown.

    Parameters
    ----------
    not_stable : (points, n) bool
        Poles on the boundary of stability or beyond; stability inside is that there are none.
    found : HiddenModes
        With at least these poles tested.

    Returns
    -------
    (points,) int8

    Examples
    --------
    >>> from ssaudit.modes.poles import find_modes
    >>> A = np.array([np.diag([-1.0, 2.0])])
    >>> B, C = np.array([[[1.0], [0.0]]]), np.array([[[1.0, 1.0]]])
    >>> poles, right, left, _ = find_modes(A)
    >>> stable_from_outside(poles.real >= 0, hidden_modes(A, B, C, poles, right, left)).tolist()
    [1]
    """
    seen: Flags = (not_stable & (found.visible == YES)).any(axis=1)
    unknown: Flags = (not_stable & (found.visible == UNKNOWN)).any(axis=1)
    answer: Answers = np.full(len(not_stable), YES)
    answer[unknown] = UNKNOWN
    answer[seen] = NO
    return answer


def _blank(points: int, n: int) -> HiddenModes:
    nothing = np.full((points, n), UNKNOWN)
    measure = np.full((points, n), np.nan)
    return HiddenModes(measure, measure.copy(), nothing, nothing.copy(), nothing.copy())


def _mixing(poles: Complexes, F: Floats) -> tuple[Floats, Flags]:
    """How much of vector l an error may mix into vector i, and which poles stand alone.

    To first order F_il / (distance of the poles), twice that for what is beyond; inf where this
    expansion does not hold.
    """
    gap = np.abs(poles[:, :, None] - poles[:, None, :])
    size = np.maximum(np.abs(poles)[:, :, None], np.abs(poles)[:, None, :])
    np.einsum("pii->pi", gap)[:] = np.inf
    mixed = 2.0 * F / gap
    # The product is free of the lengths of the vectors, as each factor alone is not.
    entangled = ~(mixed * np.swapaxes(mixed, 1, 2) < 0.25)
    lone = np.asarray(~(entangled | ~(gap > CLUSTER_GAP * size)).any(axis=2), dtype=bool)
    return np.where(entangled, np.inf, mixed), lone


def _by_vectors(W: Complexes, B: Floats, mixed: Floats, maybe: Floats) -> tuple[Floats, Answers]:
    """Measure and answer for each mode as if it were simple: whether W B is zero."""
    product, total = np.abs(W @ B), np.abs(W) @ np.abs(B)
    share = np.where(total > 0, product / np.where(total > 0, total, 1.0), 0.0)
    zero = product <= np.maximum(_mix(mixed, total), HIDDEN_SHARE * total)
    unsure = ~(product > _mix(maybe, total))
    answer = np.where(zero.all(axis=2), NO, np.where((zero | unsure).all(axis=2), UNKNOWN, YES))
    return share.max(axis=2, initial=0.0), answer.astype(np.int8)


def _mix(mixed: Floats, total: Floats) -> Floats:
    """Error of the products, where nothing times infinity is nothing."""
    mixed, total = mixed[:, :, :, None], total[:, None]
    error: Floats = np.where((mixed > 0) & (total > 0), mixed * total, 0.0).sum(axis=2)
    return error


def _by_rank(pencil: Complexes, coupling: Floats) -> tuple[Floats, Answers]:
    """Smallest singular value of [pencil, coupling], relative to the largest, and the answer."""
    joined = np.concatenate([pencil, coupling], axis=2)
    for _ in range(SCALING_SWEEPS):
        for axis in (2, 1):
            widest = np.abs(joined).max(axis=axis, keepdims=True)
            joined = joined / np.where(widest > 0, widest, 1.0)
    sigma = np.linalg.svd(joined, compute_uv=False)
    share: Floats = sigma[:, -1] / np.where(sigma[:, 0] > 0, sigma[:, 0], 1.0)
    answer = np.where(share <= REPEATED_LIMIT, NO, np.where(share <= REPEATED_UNSURE, UNKNOWN, YES))
    return share, answer.astype(np.int8)


def _visible(reached: Answers, shown: Answers, lone: Flags) -> Answers:
    """Whether poles appear from inputs to outputs.

    If a repeated pole is hidden, another mode at the same place may still be visible: unknown.
    """
    both = (reached == YES) & (shown == YES)
    hidden = ((reached == NO) | (shown == NO)) & lone
    return np.where(both, YES, np.where(hidden, NO, UNKNOWN)).astype(np.int8)
