"""Poles of stacked models, with one bad model never spoiling the stack."""

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

Stacked = tuple[NDArray[Any], ...]


def isolate(
    function: Callable[..., Stacked], *stacks: NDArray[Any]
) -> tuple[Stacked, NDArray[np.bool_]]:
    """Apply a stacked linear-algebra function, setting apart the models at which it fails.

    numpy's stacked solvers raise for the whole stack when one matrix is singular or does not
    converge. Here a stack that raises is halved until the culprits stand alone; each gets NaN.

    Parameters
    ----------
    function : callable
        Takes the stacks and returns a tuple of arrays, the point axis first in each.
    *stacks : (points, ...) arrays
        At least one; all with the same, non-zero number of points.

    Returns
    -------
    results : tuple of (points, ...) arrays
        What ``function`` returns, NaN at the points where it failed.
    failed : (points,) bool
        Where it failed.

    Examples
    --------
    >>> A = np.array([[[2.0]], [[0.0]], [[4.0]]])
    >>> (inverse,), failed = isolate(lambda a: (np.linalg.inv(a),), A)
    >>> inverse.ravel(), failed
    (array([0.5 ,  nan, 0.25]), array([False,  True, False]))
    """
    points = len(stacks[0])
    try:
        return function(*stacks), np.zeros(points, dtype=bool)
    except np.linalg.LinAlgError:
        if points == 1:
            return _nan_like(function, stacks), np.ones(1, dtype=bool)
    half = points // 2
    first, first_failed = isolate(function, *(stack[:half] for stack in stacks))
    second, second_failed = isolate(function, *(stack[half:] for stack in stacks))
    joined = tuple(np.concatenate(pair) for pair in zip(first, second, strict=True))
    return joined, np.concatenate([first_failed, second_failed])


def _nan_like(function: Callable[..., Stacked], stacks: tuple[NDArray[Any], ...]) -> Stacked:
    """NaN in the shape of the function's results, learnt from identity matrices of that size."""
    identities = tuple(np.broadcast_to(np.eye(*s.shape[-2:]), s.shape).copy() for s in stacks)
    return tuple(np.full_like(result, np.nan) for result in function(*identities))


def find_poles(A: NDArray[np.float64]) -> tuple[NDArray[np.complex128], NDArray[np.bool_]]:
    """Poles of each model of a stack: the eigenvalues of its state matrix.

    Parameters
    ----------
    A : (points, n, n) float
        Closed-loop state matrices [1/s when continuous], all entries finite.

    Returns
    -------
    poles : (points, n) complex
        In the order of LAPACK; a conjugate pair stands together. NaN where the solver failed.
    failed : (points,) bool
        Where the QR iteration did not converge.

    References
    ----------
    Anderson et al., LAPACK Users' Guide, 3rd ed. (1999), driver GEEV: balancing, reduction to
    Hessenberg form and the implicitly shifted QR iteration.

    Examples
    --------
    >>> poles, failed = find_poles(np.array([[[0.0, 1.0], [-4.0, 0.0]]]))
    >>> poles
    array([[0.+2.j, 0.-2.j]])
    """
    if A.size == 0:
        return np.zeros(A.shape[:2], dtype=complex), np.zeros(len(A), dtype=bool)
    (poles,), failed = isolate(
        lambda stack: (np.asarray(np.linalg.eigvals(stack), dtype=complex),), A
    )
    return poles, failed


def find_vectors(
    A: NDArray[np.float64],
) -> tuple[NDArray[np.complex128], NDArray[np.complex128], NDArray[np.bool_]]:
    """Poles and right eigenvectors of each model of a stack.

    Parameters
    ----------
    A : (points, n, n) float
        Closed-loop state matrices [1/s when continuous], all entries finite.

    Returns
    -------
    poles, right, failed
        As from `find_modes`.

    Examples
    --------
    >>> poles, right, failed = find_vectors(np.array([[[-1.0, 0.0], [0.0, -2.0]]]))
    >>> poles.real, right[0].real
    (array([[-1., -2.]]), array([[1., 0.],
           [0., 1.]]))
    """
    if A.size == 0:
        poles, failed = find_poles(A)
        return poles, np.zeros(A.shape, dtype=complex), failed

    def vectors(stack: NDArray[np.float64]) -> Stacked:
        poles, right = np.linalg.eig(stack)
        return np.asarray(poles, dtype=complex), np.asarray(right, dtype=complex)

    (poles, right), failed = isolate(vectors, A)
    return poles, right, failed


def find_modes(
    A: NDArray[np.float64],
) -> tuple[
    NDArray[np.complex128], NDArray[np.complex128], NDArray[np.complex128], NDArray[np.bool_]
]:
    """Poles with right and left eigenvectors of each model of a stack.

    Parameters
    ----------
    A : (points, n, n) float
        Closed-loop state matrices [1/s when continuous], all entries finite.

    Returns
    -------
    poles : (points, n) complex
        As in `find_poles`.
    right : (points, n, n) complex
        Right eigenvectors in columns, each of unit length.
    left : (points, n, n) complex
        Left eigenvectors in rows, scaled so that ``left @ right`` is the identity; NaN where the
        right vectors are linearly dependent to working precision (a defective model).
    failed : (points,) bool
        Where the QR iteration did not converge.

    Examples
    --------
    >>> poles, right, left, failed = find_modes(np.array([[[-1.0, 1.0], [0.0, -2.0]]]))
    >>> np.allclose(left @ right, np.eye(2))
    True
    """
    poles, right, failed = find_vectors(A)
    if A.size == 0:
        return poles, right, right, failed
    (left,), _ = isolate(lambda stack: (np.linalg.inv(stack),), right)
    return poles, right, left, failed
