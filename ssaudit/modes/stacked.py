"""Modes of a chunk: poles, and where asked their vectors, participation and radii."""

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ssaudit.modes.neutral import neutral_states
from ssaudit.modes.pairs import add_left_vectors, equally_paired
from ssaudit.modes.participation import TOP, participation_of_modes, top_states
from ssaudit.modes.poles import find_poles, find_vectors
from ssaudit.modes.quantities import continuous_poles
from ssaudit.modes.radii import SLICE_ENTRIES, continuous_radius, paired_radii

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
            _find_alike(found, A, rows, kept, entry_error, dt)
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
        at: tuple[NDArray[np.int64], NDArray[np.int64]],
        kept: NDArray[np.int64],
        factors: Floats,
    ) -> None:
        """Enter which of the states kept take part most in some modes, at (rows, places)."""
        if self.index is None or self.share is None:
            return
        top, share = top_states(factors.reshape(at[0].size, len(kept)))
        self.index[at] = np.where(top >= 0, kept[top], -1).reshape(*at[0].shape, TOP)
        self.share[at] = share.reshape(*at[0].shape, TOP)


def _find_alike(
    found: _Found,
    A: Floats,
    rows: NDArray[np.int64],
    kept: NDArray[np.int64],
    entry_error: ErrorsOf | None,
    dt: float,
) -> None:
    """Enter the modes of ordinary models that keep the same states."""
    k = len(kept)
    part = _of_states(A[rows], kept)
    if found.index is None:
        found.poles[rows, :k], failed = find_poles(part)
        largest = np.abs(part).max(axis=(1, 2), initial=0.0)
        found.radius[rows, :k] = np.finfo(float).eps * largest[:, np.newaxis]
    else:
        poles, right, failed = find_vectors(part)
        found.poles[rows, :k] = poles
        for some in _handfuls(poles):
            modes = add_left_vectors(poles[some], right[some])
            error = None if entry_error is None else entry_error(rows[some])
            error = None if error is None else _of_states(error, kept)
            distance = np.abs(1 - np.abs(modes.poles)) if dt > 0 else None
            found.radius[rows[some], :k] = paired_radii(part[some], modes, error, distance)
            at = np.broadcast_arrays(rows[some][:, np.newaxis], modes.place)
            factors = participation_of_modes(np.swapaxes(modes.right, 1, 2), modes.left)
            found.add_participation((at[0], at[1]), kept, factors)
    found.unsolved[rows[failed]] = NOT_CONVERGED


def _handfuls(poles: NDArray[np.complex128]) -> Iterator[NDArray[np.int64]]:
    """Points with equally many pairs, as many at a time as the processor's cache holds."""
    for alike, kept in equally_paired(poles):
        step = max(1, SLICE_ENTRIES // max(1, kept * poles.shape[1]))
        for start in range(0, len(alike), step):
            yield alike[start : start + step]


def _of_states(M: Floats, kept: NDArray[np.int64]) -> Floats:
    """Leave the rows and columns of the other states out."""
    return M if len(kept) == M.shape[1] else M[:, kept][:, :, kept]


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
    # Both modes of a pair have the same participation; the first one is enough.
    first = modes.poles.imag >= 0
    point, place = np.nonzero(first)
    factors = participation_of_modes(np.swapaxes(modes.right, 1, 2)[first], modes.left[first])
    found.add_participation((rows[point], place), np.arange(A.shape[1]), factors)


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
