"""How far each true pole may lie from the computed one: rounding of the export and of arithmetic.

An uncertainty of every entry of the closed matrices (`ssaudit.modes.entry_errors`) becomes a radius
around every computed pole (`pole_radii`), and that a range of damping ratios
(`damping_ratio_radius`).
"""

from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ssaudit.modes.clusters import balance_scaling, cluster_radii, gather_components
from ssaudit.modes.pairs import PairedModes, equally_paired, inverse_defect, pair_modes

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

EPS = float(np.finfo(float).eps)
"""Spacing of binary floating-point numbers at 1: twice the unit roundoff."""

MAX_INVERSE_DEFECT = 0.5
"""Largest norm of I - left @ right for which the computed left vectors are still used: the Neumann
series that corrects them has converged well below 1; beyond, the vectors prove nothing."""

PERRON_STEPS = 12
"""Steps of the power iteration for the Perron vector: any positive vector is a valid scaling, and
so many steps come close to the best."""

LEAST_WEIGHT = 1e-8
"""Least entry of that vector, of the largest 1, so that poles far apart keep a scale."""

SLICE_ENTRIES = 60_000
"""Entries of a stack taken at once, so that the temporary arrays stay in the processor's cache."""


def pole_radii(
    A: Floats,
    poles: Complexes,
    right: Complexes,
    left: Complexes,
    *,
    entry_error: ArrayLike | None = None,
    distance: Floats | None = None,
) -> Floats:
    """How far each true pole may lie from the computed one.

    With the computed right vectors V, left vectors W and poles Λ, every matrix A + δA with
    |δA| <= entry_error is similar to Λ + V⁻¹(AV - VΛ + δA V). The residual is computed, its own
    rounding is added, and W's defect I - WV is allowed for; so Gershgorin's disks of that matrix,
    of radii Σ_j F_ij with F = |W|(|AV - VΛ| + rounding + entry_error |V|), hold the true poles
    without any assumption on the eigenvalue solver. A disk that can be scaled free of the others
    holds exactly one pole and shrinks to the first-order bound |w_i| E |v_i| and a second-order
    rest. Overlapping disks form a group; a true pole of the group may be anywhere in their union.
    Where this is too wide to decide, or there are no left vectors, invariant subspaces of clusters
    are used (`ssaudit.modes.clusters`). All is unchanged by scaling the states, whatever the units.

    Parameters
    ----------
    A : (points, n, n) float
        Closed-loop state matrices [1/s when continuous], all entries finite.
    poles, right, left : complex arrays
        From `ssaudit.modes.poles.find_modes`.
    entry_error : array that broadcasts to (points, n, n), optional
        Absolute uncertainty of every entry of A (`ssaudit.modes.entry_errors`); None: A is exact.
    distance : (points, n) float, optional
        How far the boundaries to be judged by are from each pole [1/s]. Overlapping groups whose
        radii reach that far get the dearer second bound. By default the distance from the
        imaginary axis; for sampled models give the distance from the unit circle.

    Returns
    -------
    (points, n) float
        Radii [1/s; without unit when sampled]: the true poles can be matched one to one to the
        computed ones so that each is within its radius. inf where nothing is known.

    References
    ----------
    Wilkinson, The Algebraic Eigenvalue Problem (1965), ch. 2 (Gershgorin's theorem with diagonal
    scaling) and ch. 9 (a posteriori bounds for computed eigensystems). Stewart & Sun, Matrix
    Perturbation Theory (1990), ch. IV. Rounding of the residual: Higham, Accuracy and Stability of
    Numerical Algorithms, 2nd ed. (2002), eq. 3.13. From memory.

    Examples
    --------
    >>> from ssaudit.modes.poles import find_modes
    >>> A = np.array([[[-1.0, 1.0], [0.0, -2.0]]])
    >>> poles, right, left, _ = find_modes(A)
    >>> bool(pole_radii(A, poles, right, left).max() < 1e-14)
    True
    >>> pole_radii(A, poles, right, left, entry_error=0.001).round(4)
    array([[0.002, 0.002]])
    """
    points, states = poles.shape
    radii = np.full((points, states), np.inf)
    step = max(1, SLICE_ENTRIES // max(1, states) ** 2)
    for rows, _ in equally_paired(poles):
        for start in range(0, len(rows), step):
            part = rows[start : start + step]
            radii[part] = paired_radii(
                A[part],
                pair_modes(poles[part], right[part], left[part]),
                None if entry_error is None else np.broadcast_to(entry_error, A.shape)[part],
                None if distance is None else distance[part],
            )
    return radii


def paired_radii(
    A: Floats, modes: PairedModes, entry_error: Floats | None, distance: Floats | None = None
) -> Floats:
    """`pole_radii` of a stack of few points, of which each conjugate pair is known once.

    Parameters
    ----------
    A, entry_error, distance
        As for `pole_radii`, of no more points than the processor's cache holds.
    modes : PairedModes
        From `ssaudit.modes.pairs`.

    Returns
    -------
    (points, n) float

    Examples
    --------
    >>> from ssaudit.modes.poles import find_modes
    >>> A = np.array([[[-1.0, 2.0], [-2.0, -1.0]]])
    >>> paired_radii(A, pair_modes(*find_modes(A)[:3]), np.full(A.shape, 0.001)).round(4)
    array([[0.002, 0.002]])
    """
    poles, E = modes.poles, entry_error
    if poles.size == 0:
        return np.full(poles.shape, np.inf)
    if distance is None:
        distance = np.abs(poles.real)
    with np.errstate(all="ignore"):
        F = _coupling_bound(A, modes.kept, modes.right, np.abs(modes.left), modes.defect, E)
        disks = _isolated_radii(F, _kept_gaps(modes), modes.stands_for.T)
        radii, isolated, rows = (modes.each(values.T) for values in disks)
        _share_groups(radii, isolated, rows, poles)
        again = np.flatnonzero((~(radii < distance)).any(axis=1) & np.isfinite(F).all(axis=(0, 1)))
        if again.size:
            whole = _of_all_modes(F[..., again], modes.back[again])
            even, apart = _disk_radii(even_rows(whole), poles[again])
            better = _smaller(even, radii[again])
            radii[again[better]], isolated[again[better]] = even[better], apart[better]
        reaching = (~isolated & ~(radii < distance)).any(axis=1) & np.isfinite(poles).all(axis=1)
        scales = balance_scaling(A[reaching]) if reaching.any() else ()
        for i, scale in zip(np.flatnonzero(reaching), scales, strict=True):
            tighter = cluster_radii(A[i], poles[i], None if E is None else E[i], scale)
            if _smaller(tighter, radii[i]):
                radii[i] = tighter
    return radii


def _kept_gaps(modes: PairedModes) -> Floats:
    """Distances of the kept poles from each other, and of each from its own conjugate.

    That of another pair is further away than the other pair's first pole. (kept, kept, points).
    """
    kept = np.ascontiguousarray(modes.kept.T)
    gap = np.abs(kept[:, None] - kept[None, :])
    conjugate = np.where(modes.stands_for.T == 1, np.inf, 2.0 * np.abs(kept.imag))
    np.einsum("iip->ip", gap)[:] = conjugate
    return gap


def _of_all_modes(F: Floats, back: NDArray[np.int64]) -> Floats:
    """From (kept, kept, points), where a pair has the same rows and columns, to (points, n, n)."""
    points = np.arange(len(back))[:, None, None]
    return np.asarray(np.moveaxis(F, -1, 0)[points, back[:, :, None], back[:, None, :]])


def _smaller(radii: Floats, others: Floats) -> NDArray[np.bool_]:
    """Where one method's radii of a whole point are the smaller ones: a matching may not mix two.

    The geometric mean of the radii compares them without regard to units.
    """
    logs = (np.log(values + 1e-300).sum(axis=-1) for values in (radii, others))
    return np.asarray(next(logs) < next(logs))


def even_rows(F: Floats) -> Floats:
    """Scale F by its Perron vector, which makes the sums of its rows as even as they can be.

    The sums are the radii of Gershgorin's disks, and how the vectors happen to be scaled should not
    widen them. A diagonal similarity leaves Λ and the poles.

    Parameters
    ----------
    F : (points, n, n) float
        Bounds as from `coupling_bound`, finite and not negative.

    Returns
    -------
    (points, n, n) float

    References
    ----------
    Horn & Johnson, Matrix Analysis, 2nd ed. (2013), §6.1 and §8.1: the least largest row sum that a
    positive diagonal similarity gives is the Perron root (from memory).

    Examples
    --------
    >>> even_rows(np.array([[[1.0, 100.0], [0.01, 1.0]]])).sum(axis=2).round(3)
    array([[2., 2.]])
    """
    vector = np.ones((*F.shape[:-1], 1))
    for _ in range(PERRON_STEPS):
        vector = F @ vector
        largest = vector.max(axis=1, keepdims=True)
        vector = np.maximum(vector / np.where(largest > 0, largest, 1.0), LEAST_WEIGHT)
    return np.asarray(F * np.swapaxes(vector, 1, 2) / vector * (1.0 + 8 * EPS))


def _disk_radii(F: Floats, poles: Complexes) -> tuple[Floats, NDArray[np.bool_]]:
    """Radii of Gershgorin's disks, shared in overlapping groups, and which disks stand alone.

    F is (points, n, n) and of all modes; the results are (points, n).
    """
    gap = np.abs(poles[:, :, None] - poles[:, None, :])
    np.einsum("pii->pi", gap)[:] = np.inf
    F, gap = np.moveaxis(F, 0, -1), np.moveaxis(gap, 0, -1)
    found, free, rows = _isolated_radii(F, gap, np.ones(poles.T.shape))
    radii, isolated = found.T.copy(), free.T.copy()
    _share_groups(radii, isolated, rows.T, poles)
    return radii, isolated


def _share_groups(
    radii: Floats, isolated: NDArray[np.bool_], rows: Floats, poles: Complexes
) -> None:
    """Enter the radii of disks that overlap: a true pole may be anywhere in their union."""
    loose = np.flatnonzero(~isolated.all(axis=1))
    if loose.size:
        gap = np.abs(poles[loose, :, None] - poles[loose, None, :])
        grouped = gather_components(poles[loose], poles[loose], rows[loose], gap)
        radii[loose] = np.where(isolated[loose], radii[loose], grouped)
    radii[np.isnan(radii)] = np.inf


def coupling_bound(
    A: Floats, poles: Complexes, V: Complexes, W: Complexes, E: Floats | None
) -> Floats:
    """Bound the entries of V⁻¹(A + δA)V - Λ, the matrix whose disks hold the true poles.

    Parameters
    ----------
    A : (points, n, n) float
        State matrices.
    poles, V, W : complex arrays
        Poles, right and left vectors from `ssaudit.modes.poles.find_modes`.
    E : (points, n, n) float or None
        Absolute uncertainty of every entry of A.

    Returns
    -------
    (points, n, n) float
        F of `pole_radii`; inf where the left vectors are of no use.

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> coupling_bound(-one, np.array([[-1.0 + 0j]]), one + 0j, one + 0j, 0.1 * one).round(6)
    array([[[0.1]]])
    """
    size = np.abs(W)
    return np.moveaxis(_coupling_bound(A, poles, V, size, inverse_defect(W, V), E), -1, 0)


def _coupling_bound(
    A: Floats, poles: Complexes, V: Complexes, left_size: Floats, defect: Floats, E: Floats | None
) -> Floats:
    """`coupling_bound` of the modes that are given, (modes, modes, points).

    Sums and extremes over a few modes run along the points then, which is several times faster.
    """
    points, n, modes = V.shape
    gamma = (n + 4) * EPS
    size = np.abs(V)
    # A is real: a real product of twice the columns costs half of a complex one.
    residual = (A @ V.view(float).reshape(points, n, 2 * modes)).view(complex)
    residual -= V * poles[:, None, :]
    known = gamma * np.abs(A)
    if E is not None:
        known += E
    outer = np.abs(residual)
    outer += known @ size
    outer += (gamma * np.abs(poles))[:, None, :] * size
    F = np.ascontiguousarray((left_size @ outer).transpose(1, 2, 0))
    worst = defect.max(axis=1)
    factor = np.where(worst <= MAX_INVERSE_DEFECT, 1.0 / (1.0 - worst), np.inf)
    F += (defect * factor[:, None]).T[:, None, :] * F.max(axis=0)
    # The bound's own sums are rounded too; all terms are positive, so a relative margin does.
    F *= 1.0 + 8 * gamma
    return F


def _isolated_radii(
    F: Floats, gap: Floats, stands_for: NDArray[Any]
) -> tuple[Floats, NDArray[np.bool_], Floats]:
    """Gershgorin radii after scaling row i by the smallest factor that frees disk i of the others.

    Scaling row i by a and column i by 1/a leaves the poles. With a = max_j 2 F_ji / gap_ij, F_ji/a
    takes at most half of each gap; the disk is free if the rest fits into the other half. F and the
    gaps are (modes, modes, points); radii, which are free, and sums of whole rows (modes, points).
    """
    n = len(F)
    diagonal = np.einsum("iip->ip", F)
    rows = (F * stands_for).sum(axis=1)
    scale = (2.0 * F / gap).max(axis=0)
    radii = diagonal + np.minimum(scale, 1.0) * (rows - diagonal)
    radii *= 1.0 + 16 * n * EPS
    room = (0.5 * gap - rows).min(axis=1)
    return radii, radii < room, rows


def damping_ratio_radius(s: Complexes, radius: ArrayLike) -> tuple[Floats, Floats]:
    """Lowest and highest damping ratio of a pole that lies anywhere in a disk.

    ζ = -cos(arg s), and a disk of radius r around s covers arg s ± asin(r / abs(s)).

    Parameters
    ----------
    s : (...) complex
        Centres: computed poles [1/s].
    radius : (...) float
        Radii of the disks [1/s].

    Returns
    -------
    low, high : (...) float
        Ends of the range of damping ratios; -1 and 1 when the disk reaches the origin.

    Examples
    --------
    >>> low, high = damping_ratio_radius(np.array([-3 + 4j]), 0.05)
    >>> low.round(4), high.round(4)
    (array([0.592]), array([0.608]))
    """
    size, radius = np.abs(s), np.asarray(radius, dtype=float)
    with np.errstate(divide="ignore", invalid="ignore"):
        sine = radius / size
        inside = sine < 1.0
        across, along = np.abs(s.imag) / size, -s.real / size
        cosine = np.sqrt((1.0 - sine) * (1.0 + sine))
        # Addition theorem for the two ends; a disk across the real axis holds a whole end, 1 or -1.
        low = np.where((across < sine) & (along < 0), -1.0, along * cosine - across * sine)
        high = np.where((across < sine) & (along > 0), 1.0, along * cosine + across * sine)
    return np.where(inside, low, -1.0), np.where(inside, high, 1.0)


def continuous_radius(z: Complexes, radius: ArrayLike, dt: float) -> Floats:
    """Radius around log(z)/dt that covers the image of a disk around a sampled pole z.

    abs(log(z + d) - log(z)) <= -log(1 - abs(d)/abs(z)), from the power series of the logarithm.

    Parameters
    ----------
    z : (...) complex
        Computed poles of sampled models.
    radius : (...) float
        Radii around them.
    dt : float
        Sampling time [s], positive.

    Returns
    -------
    (...) float
        Radii around the equivalent continuous poles [1/s]; inf when the disk reaches z = 0.

    Examples
    --------
    >>> continuous_radius(np.array([0.5 + 0j]), 0.001, 0.1).round(5)
    array([0.02002])
    """
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = np.asarray(radius, dtype=float) / np.abs(z)
        return np.where(ratio < 1.0, -np.log1p(-np.minimum(ratio, 1.0)) / dt, np.inf)
