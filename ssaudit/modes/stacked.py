"""Modes of a chunk: poles, and where asked their vectors, participation and radii."""

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ssaudit.modes.neutral import neutral_states
from ssaudit.modes.participation import TOP, participation_of_modes, top_states
from ssaudit.modes.poles import find_modes, find_poles
from ssaudit.modes.quantities import continuous_poles
from ssaudit.modes.radii import SLICE_ENTRIES, continuous_radius, pole_radii

Floats = NDArray[np.float64]
ErrorsOf = Callable[[NDArray[np.int64]], Floats | None]
"""From rows of a stack to how far each entry of their matrices may be off; None: not at all."""


@dataclass(frozen=True, eq=False)
class Modes:
    """Modes of some points, stacked.

    Attributes
    ----------
    s : (points, n) complex
        Poles [1/s]; of sampled models log(z)/dt. NaN at void points and for neutral states.
    radius : (points, n) float
        How far each pole may be off [1/s].
    z : (points, n) complex or None
        Poles of sampled models themselves.
    index : (points, n, top) int or None
        States that take part most in each mode, -1 in the second mode of a pair; None where
        vectors were not computed.
    share : (points, n, top) float or None
        Their participation.
    infinite : (points,) int or None
        Infinite poles of descriptor models, which ``s`` leaves out; None for ordinary models.
    unsolved : (points,) object or None
        Why a model has no modes, as str; "" where it has. None: all have.
    z_radius : (points, n) float or None
        How far each pole of sampled models may be off.
    dt : float
        Sampling time [s]; 0 for continuous models.
    """

    s: NDArray[np.complex128]
    radius: Floats
    z: NDArray[np.complex128] | None = None
    index: NDArray[np.int64] | None = None
    share: Floats | None = None
    infinite: NDArray[np.int64] | None = None
    unsolved: NDArray[np.object_] | None = None
    z_radius: Floats | None = None
    dt: float = 0.0

    def real_range(self) -> tuple[Floats, Floats]:
        """Lowest and highest real part of each pole while it stays within its radius.

        Of sampled models they follow from abs(z), so that a pole near z = 0, of which log(z) may be
        anything far enough to the left, has a highest one all the same.

        Returns
        -------
        low, high : (points, n) float
            Real parts [1/s].
        """
        if self.z is None or self.z_radius is None:
            return self.s.real - self.radius, self.s.real + self.radius
        size = np.abs(self.z)
        with np.errstate(divide="ignore"):
            low = np.log(np.maximum(size - self.z_radius, 0.0)) / self.dt
            return low, np.log(size + self.z_radius) / self.dt


NOT_CONVERGED = "the eigenvalue iteration did not converge"


def find_usable_modes(
    A: Floats,
    usable: NDArray[np.bool_],
    entry_error: ErrorsOf | None = None,
    *,
    E: Floats | None = None,
    mass_error: Floats | None = None,
    dt: float = 0.0,
    neutral: Sequence[int] = (),
    vectors: bool = True,
) -> tuple[Modes, NDArray[np.bool_]]:
    """Find the modes of the usable points of a stack.

    Parameters
    ----------
    A : (points, n, n) float
        Closed-loop state matrices.
    usable : (points,) bool
        Points to look at; the others get NaN.
    entry_error : callable, optional
        How far each entry of A may be off, by rows: (rows, n, n) float. None: A is exact.
    E : (points, n, n) float, optional
        Left-hand matrices of descriptor models E x' = A x.
    mass_error : (points, n, n) float, optional
        How far each entry of E may be off.
    dt : float
        Sampling time [s]; 0 for continuous models.
    neutral : sequence of int
        States whose poles are left out where nothing depends on them; descriptor models keep them.
    vectors : bool
        Whether to compute vectors, participation, and radii from them. Otherwise the radius is
        only what even a perfectly conditioned pole would have.

    Returns
    -------
    modes : Modes
    failed : (points,) bool
        Where there are no modes; ``modes.unsolved`` says why.

    Examples
    --------
    >>> modes, failed = find_usable_modes(np.array([[[0.0, 1.0], [-4.0, 0.0]]]), np.array([True]))
    >>> modes.s, modes.index[0, 0]
    (array([[0.+2.j, 0.-2.j]]), array([ 0,  1, -1]))
    """
    count, n = A.shape[:2]
    found = _Found.nothing(count, n, vectors)
    if E is not None:
        _find_descriptor(found, A, E, usable, entry_error, mass_error)
    else:
        left_out = neutral_states(A, np.array(neutral, dtype=np.int64), dt > 0)
        for rows, kept in _alike(left_out, usable):
            # Vectors of a few points at a time stay in the processor's cache until they are used.
            step = max(1, SLICE_ENTRIES // max(1, len(kept)) ** 2)
            for start in range(0, len(rows), step):
                _find_alike(found, A, rows[start : start + step], kept, entry_error, dt)
    failed = found.unsolved != ""
    poles, radius = found.poles, found.radius
    rest = (found.index, found.share, found.infinite if E is not None else None, found.unsolved)
    if dt > 0:
        s, off = continuous_poles(poles, dt), continuous_radius(poles, radius, dt)
        return Modes(s, off, poles, *rest, radius, dt), failed
    return Modes(poles, radius, None, *rest), failed


@dataclass(frozen=True, eq=False)
class _Found:
    """Arrays that are filled kind by kind of points."""

    poles: NDArray[np.complex128]
    radius: Floats
    index: NDArray[np.int64] | None
    share: Floats | None
    infinite: NDArray[np.int64]
    unsolved: NDArray[np.object_]

    @classmethod
    def nothing(cls, count: int, n: int, vectors: bool) -> "_Found":
        return cls(
            np.full((count, n), np.nan, dtype=np.complex128),
            np.full((count, n), np.nan),
            np.full((count, n, TOP), -1, dtype=np.int64) if vectors else None,
            np.full((count, n, TOP), np.nan) if vectors else None,
            np.zeros(count, dtype=np.int64),
            np.full(count, "", dtype=object),
        )

    def add_participation(
        self,
        rows: NDArray[np.int64],
        kept: NDArray[np.int64],
        poles: NDArray[np.complex128],
        right: NDArray[np.complex128],
        left: NDArray[np.complex128],
    ) -> None:
        """Enter which states take part most in the modes of some points."""
        if self.index is None or self.share is None:
            return
        # Both modes of a conjugate pair have the same participation; the first one is enough.
        first = poles.imag >= 0
        factors = participation_of_modes(np.swapaxes(right, 1, 2)[first], left[first])
        top, shares = top_states(factors)
        point, mode = np.nonzero(first)
        self.index[rows[point], mode] = np.where(top >= 0, kept[top], -1)
        self.share[rows[point], mode] = shares


def _find_alike(
    found: _Found,
    A: Floats,
    rows: NDArray[np.int64],
    kept: NDArray[np.int64],
    entry_error: ErrorsOf | None,
    dt: float,
) -> None:
    """Enter the modes of ordinary models that keep the same states."""
    k, whole = len(kept), len(kept) == A.shape[1]
    part = A[rows] if whole else A[rows][:, kept][:, :, kept]
    if found.index is None:
        found.poles[rows, :k], failed = find_poles(part)
        largest = np.abs(part).max(axis=(1, 2), initial=0.0)
        found.radius[rows, :k] = np.finfo(float).eps * largest[:, np.newaxis]
    else:
        poles, right, left, failed = find_modes(part)
        found.poles[rows, :k] = poles
        error = None if entry_error is None else entry_error(rows)
        if error is not None and not whole:
            error = error[:, kept][:, :, kept]
        distance = np.abs(1 - np.abs(poles)) if dt > 0 else None
        found.radius[rows, :k] = pole_radii(
            part, poles, right, left, entry_error=error, distance=distance
        )
        found.add_participation(rows, kept, poles, right, left)
    found.unsolved[rows[failed]] = NOT_CONVERGED


def _find_descriptor(
    found: _Found,
    A: Floats,
    E: Floats,
    usable: NDArray[np.bool_],
    entry_error: ErrorsOf | None,
    mass_error: Floats | None,
) -> None:
    """Enter the modes of descriptor models."""
    from ssaudit.modes.descriptor import REASONS, descriptor_modes

    rows = np.flatnonzero(usable)
    if not len(rows):
        return
    modes = descriptor_modes(
        A[rows],
        E[rows],
        entry_error=None if entry_error is None else entry_error(rows),
        mass_error=None if mass_error is None else mass_error[rows],
    )
    found.poles[rows], found.radius[rows] = modes.poles, modes.radii
    found.infinite[rows] = modes.infinite
    found.unsolved[rows] = [REASONS.get(str(reason), "") for reason in modes.reason]
    found.add_participation(rows, np.arange(A.shape[1]), modes.poles, modes.right, modes.left)


def _alike(
    left_out: NDArray[np.bool_], usable: NDArray[np.bool_]
) -> Iterator[tuple[NDArray[np.int64], NDArray[np.int64]]]:
    """Usable points with the same neutral states: their rows, and the states that stay."""
    kinds, kind_of = distinct_rows(left_out)
    for number, kind in enumerate(kinds):
        rows = np.flatnonzero((kind_of == number) & usable)
        kept = np.flatnonzero(~kind)
        if len(rows) and len(kept):
            yield rows, kept


def distinct_rows(rows: NDArray[np.bool_]) -> tuple[NDArray[np.bool_], NDArray[np.int64]]:
    """Find the distinct rows of a table of yes and no.

    Parameters
    ----------
    rows : (rows, columns) bool
        The table.

    Returns
    -------
    kinds : (kinds, columns) bool
        Each distinct row once.
    kind_of : (rows,) int
        Which of them each row is.

    Examples
    --------
    >>> distinct_rows(np.array([[True, False], [False, False], [True, False]]))[1]
    array([1, 0, 1])
    """
    # Whole rows as numbers sort far faster than rows of a table.
    code = np.zeros(len(rows), dtype=np.int64)
    for column in rows.T:
        if column.any():
            code = np.unique(2 * code + column, return_inverse=True)[1]
    _, first, kind_of = np.unique(code, return_index=True, return_inverse=True)
    return rows[first], kind_of
