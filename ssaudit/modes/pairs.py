"""Modes with each conjugate pair once, which halves the work of all that is done with them."""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.modes.poles import isolate

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Integers = NDArray[np.int64]

EPS = float(np.finfo(float).eps)


@dataclass(frozen=True, eq=False)
class PairedModes:
    """Poles of models with equally many pairs, and vectors of each pair's first and of real ones.

    Attributes
    ----------
    poles : (points, n) complex
        All poles, as from `ssaudit.modes.poles.find_poles`.
    place : (points, kept) int
        Which of the modes are kept.
    stands_for : (points, kept) int
        How many modes each of them stands for: 2 for a pair, 1 alone.
    back : (points, n) int
        Which of the kept ones stands for each mode.
    right : (points, n, kept) complex
        Right eigenvectors in columns, each of unit length.
    left : (points, kept, n) complex
        Left eigenvectors in rows, inverse to the right ones; NaN where those are dependent.
    defect : (points, kept) float
        Bound on the sums of the rows of abs(left @ right - I), all n of each right and left.
    """

    poles: Complexes
    place: Integers
    stands_for: Integers
    back: Integers
    right: Complexes
    left: Complexes
    defect: Floats

    @property
    def kept(self) -> Complexes:
        """The poles that are kept, (points, kept)."""
        return self.poles[np.arange(len(self.poles))[:, np.newaxis], self.place]

    def each(self, values: NDArray[Any]) -> NDArray[Any]:
        """From something of every kept mode, (points, kept), to that of all, (points, n)."""
        return values[np.arange(len(values))[:, np.newaxis], self.back]


def equally_paired(poles: Complexes) -> Iterator[tuple[Integers, int]]:
    """Find the points that have equally many conjugate pairs.

    What is found for a point must not depend on which others stand beside it, so that only those
    with the same number are worked on together.

    Parameters
    ----------
    poles : (points, n) complex
        Poles.

    Yields
    ------
    rows : (some points,) int
        Points with the same number of pairs.
    kept : int
        Their number of poles, a pair counted once.

    Examples
    --------
    >>> list(equally_paired(np.array([[-1.0, -2.0], [-1 + 1j, -1 - 1j], [-3.0, -4.0]])))
    [(array([1]), 1), (array([0, 2]), 2)]
    """
    number = (~_second_of_pair(poles)).sum(axis=1)
    for kept in np.unique(number):
        yield np.flatnonzero(number == kept), int(kept)


def _second_of_pair(poles: Complexes) -> NDArray[np.bool_]:
    """Where the second pole of a pair stands; nowhere at points with other complex poles."""
    second = np.zeros(poles.shape, dtype=bool)
    second[:, 1:] = (poles.imag[:, 1:] < 0) & (poles[:, 1:] == poles[:, :-1].conj())
    other = (poles.imag != 0).sum(axis=1) != 2 * second.sum(axis=1)
    second[other] = False
    return second


def _choose(poles: Complexes) -> tuple[Integers, Integers, Integers]:
    """``place``, ``stands_for`` and ``back`` of points with equally many pairs."""
    points, n = poles.shape
    second = _second_of_pair(poles)
    number = np.flatnonzero(~second).reshape(points, -1) if points else np.zeros((0, n), np.int64)
    alone = np.ones(poles.shape, dtype=np.int64)
    alone[:, :-1] += second[:, 1:]
    place = number - n * np.arange(points)[:, np.newaxis]
    return place, alone.ravel()[number], np.cumsum(~second, axis=1) - 1


def pair_modes(poles: Complexes, right: Complexes, left: Complexes) -> PairedModes:
    """Keep each pair once of what `ssaudit.modes.poles.find_modes` gives.

    Parameters
    ----------
    poles, right, left : complex arrays
        Of points with equally many pairs.

    Returns
    -------
    PairedModes

    Examples
    --------
    >>> from ssaudit.modes.poles import find_modes
    >>> pair_modes(*find_modes(np.array([[[0.0, 1.0], [-4.0, 0.0]]]))[:3]).kept
    array([[0.+2.j]])
    """
    place, stands_for, back = _choose(poles)
    point = np.arange(len(poles))[:, np.newaxis]
    defect = inverse_defect(left, right)[point, place]
    vectors = _columns(right, place), left[point, place]
    return PairedModes(poles, place, stands_for, back, *vectors, defect)


def _columns(right: Complexes, place: Integers) -> Complexes:
    """Columns of each matrix, (points, n, kept); picked as rows, which is several times faster."""
    rows = np.swapaxes(right, 1, 2)[np.arange(len(right))[:, np.newaxis], place]
    return np.ascontiguousarray(np.swapaxes(rows, 1, 2))


def inverse_defect(left: Complexes | Floats, right: Complexes | Floats) -> Floats:
    """Bound on the sums of the rows of abs(left @ right - I), rounding included.

    Parameters
    ----------
    left, right : (points, n, n) complex or float
        Matrices that should be inverse to each other.

    Returns
    -------
    (points, n) float

    Examples
    --------
    >>> inverse_defect(np.array([[[0.5]]]), np.array([[[2.25]]])).round(6)
    array([[0.125]])
    """
    n = right.shape[-1]
    product = left @ right
    np.einsum("pii->pi", product)[:] -= 1.0
    # Sums over a row as products with ones, which are several times faster.
    ones = np.ones((n, 1))
    rounding = (n + 4) * EPS * (np.abs(left) @ (np.abs(right) @ ones))
    defect: Floats = (np.abs(product) @ ones + rounding)[..., 0]
    return defect


def add_left_vectors(poles: Complexes, right: Complexes) -> PairedModes:
    """Find the left vectors that belong to right ones, each conjugate pair once.

    The columns v and conj(v) of a pair span the same plane as Re v and Im v. So a real inverse
    does, at half the cost: with y and y' its rows for that plane, the left vector is (y - iy')/2.
    Row sums of a complex matrix are at most those of the real one's two rows together.

    Parameters
    ----------
    poles, right : complex arrays
        From `ssaudit.modes.poles.find_vectors`, of points with equally many pairs.

    Returns
    -------
    PairedModes

    Examples
    --------
    >>> from ssaudit.modes.poles import find_vectors
    >>> poles, right, _ = find_vectors(np.array([[[0.0, 1.0], [-4.0, 0.0]]]))
    >>> modes = add_left_vectors(poles, right)
    >>> modes.kept, modes.stands_for, (modes.left @ modes.right).round(12)
    (array([[0.+2.j]]), array([[2]]), array([[[1.+0.j]]]))
    """
    points, n = poles.shape
    place, stands_for, back = _choose(poles)
    plane = np.where((poles.imag < 0)[:, None, :], -right.imag, right.real)
    (inverse,), _ = isolate(lambda stack: (np.linalg.inv(stack),), plane)
    # Numbers of the kept modes and of the two rows of their planes, over all points.
    one = place + n * np.arange(points)[:, np.newaxis]
    two = one + (stands_for == 2)
    rows, defect = inverse.reshape(points * n, n), inverse_defect(inverse, plane).ravel()
    left = np.empty((*place.shape, n), dtype=complex)
    left.real = rows[one] / stands_for[:, :, np.newaxis]
    left.imag = rows[two] * np.where(stands_for == 2, -0.5, 0.0)[:, :, np.newaxis]
    defect = defect[one] + defect[two]
    return PairedModes(poles, place, stands_for, back, _columns(right, place), left, defect)
