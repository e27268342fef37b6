"""Pole radii of nearly defective models: invariant subspaces of clusters instead of vectors.

Called by `ssaudit.modes.radii` for the few points whose eigenvectors prove too little.
"""

from typing import Any

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

EPS = float(np.finfo(float).eps)

BALANCE_SWEEPS = 20
"""Most passes over all states; balancing settles in a handful."""

LEVEL_RATIO = 10.0
"""A jump of the merging distance by this factor separates two levels of clustering; a choice that
costs only tightness, as every clustering gives a valid bound."""

MAX_LEVELS = 4
"""Clusterings tried for a point, finest first."""


def balance_scaling(A: Floats) -> Floats:
    """Powers of two by which to scale the states so that rows and columns match in size.

    Parameters
    ----------
    A : (points, n, n) float
        Matrices in any units.

    Returns
    -------
    (points, n) float
        Scales d; ``A * d[:, None, :] / d[:, :, None]`` is balanced, and exactly similar to A as
        powers of two round nothing.

    References
    ----------
    Osborne, On pre-conditioning of matrices, J. ACM 7 (1960); Parlett & Reinsch, Balancing a
    matrix for calculation of eigenvalues and eigenvectors, Numer. Math. 13 (1969). From memory.

    Examples
    --------
    >>> balance_scaling(np.array([[[-1.0, 65536.0], [1.0, -2.0]]]))
    array([[256.,   1.]])
    """
    size = np.abs(A)
    np.einsum("pii->pi", size)[:] = 0.0
    scale = np.ones(A.shape[:2])
    for _ in range(BALANCE_SWEEPS):
        changed = False
        for i in range(A.shape[-1]):
            column, row = size[:, :, i].sum(axis=1), size[:, i, :].sum(axis=1)
            linked = (column > 0) & (row > 0)
            ratio = np.where(linked, row, 1.0) / np.where(linked, column, 1.0)
            factor = 2.0 ** np.round(0.5 * np.log2(ratio))
            size[:, :, i] *= factor[:, None]
            size[:, i, :] /= factor[:, None]
            scale[:, i] *= factor
            changed = changed or bool(np.any(factor != 1.0))
        if not changed:
            break
    return scale


def gather_components(
    poles: Complexes, centres: Complexes, radii: Floats, gap: Floats | None = None
) -> Floats:
    """Radii around poles that cover the whole group of overlapping disks each belongs to.

    Parameters
    ----------
    poles : (points, n) complex
        Computed poles, the i-th in the i-th disk.
    centres : (points, n) complex
        Centres of the disks.
    radii : (points, n) float
        Radii of the disks.
    gap : (points, n, n) float, optional
        Distances between the centres, when known.

    Returns
    -------
    (points, n) float
        Largest distance from the pole to any place of its group.

    Examples
    --------
    >>> gather_components(np.array([[0, 1, 9]]), np.array([[0, 1, 9]]), np.array([[0.6, 0.5, 1]]))
    array([[1.5, 1.6, 1. ]])
    """
    if gap is None:
        gap = np.abs(centres[:, :, None] - centres[:, None, :])
    # "not further apart" rather than "closer": NaN then joins.
    joined = ~(gap > radii[:, :, None] + radii[:, None, :])
    joined |= np.eye(poles.shape[1], dtype=bool)
    for _ in range(int(np.ceil(np.log2(max(poles.shape[1], 2))))):
        joined = (joined.astype(np.float32) @ joined.astype(np.float32)) > 0
    reach = np.abs(poles[:, :, None] - centres[:, None, :]) + radii[:, None, :]
    widest: Floats = np.where(joined, reach, 0.0).max(axis=-1)
    return widest


def cluster_radii(
    A: Floats,
    poles: Complexes,
    entry_error: Floats | None = None,
    scale: Floats | None = None,
) -> Floats:
    """Pole radii of one model through the invariant subspaces of clusters of poles.

    The balanced matrix is brought to Schur form and that to block diagonal form, a block T_I for
    each cluster, by a basis S of cluster subspaces; with the coupling F = S⁻¹((A + δA)S - S T), a
    true pole z has, for some cluster, 1 <= norm((zI - T_I)⁻¹) Σ_J norm(F_IJ) (Gershgorin in
    blocks). With T_I = D + N and dist(z, D) = d, the resolvent is at most Σ_k norm(|N|^k) / d^(k+1)
    (Henrici), so z is within the root d of Σ_k norm(|N|^k) f_I / d^(k+1) = 1 of a pole of the
    cluster. Several clusterings are tried; each is valid, the tightest is taken. One cluster of all
    the poles is among them, so that a finite bound always results.

    Parameters
    ----------
    A : (n, n) float
        State matrix [1/s when continuous].
    poles : (n,) complex
        Computed poles.
    entry_error : (n, n) float, optional
        Absolute uncertainty of every entry of A.
    scale : (n,) float, optional
        From `balance_scaling`, when it was done for a whole stack at once.

    Returns
    -------
    (n,) float
        Radii; inf if even the coarsest clustering fails.

    References
    ----------
    Feingold & Varga, Block diagonally dominant matrices and generalizations of the Gerschgorin
    circle theorem, Pacific J. Math. 12 (1962). Henrici, Bounds for iterates, inverses, spectral
    variation and fields of values of non-normal matrices, Numer. Math. 4 (1962). Bavely & Stewart,
    An algorithm for computing reducing subspaces by block diagonalization, SIAM J. Numer. Anal. 16
    (1979). From memory.

    Examples
    --------
    >>> lags = np.array([[-10.0, 10.0], [0.0, -10.0]])
    >>> bool(cluster_radii(lags, np.array([-10.0, -10.0])).max() < 1e-6)
    True
    """
    from scipy.linalg import schur

    n = len(A)
    best = np.full(n, np.inf)
    if not (np.isfinite(A).all() and np.isfinite(poles).all()):
        return best
    if scale is None:
        scale = balance_scaling(A[None])[0]
    A = A * scale[None, :] / scale[:, None]
    E = np.zeros_like(A) if entry_error is None else entry_error * scale[None, :] / scale[:, None]
    if not np.isfinite(E).all():
        return best
    T, U = schur(A.astype(complex), output="complex")
    for labels in _clusterings(np.diag(T)):
        radii = _clustered_radii(A, E, T, U, labels, poles)
        if np.log(radii + 1e-300).sum() < np.log(best + 1e-300).sum():
            best = radii
    return best


def _clusterings(values: Complexes) -> list[NDArray[np.intp]]:
    """Labels of the clusters of each natural level of nearness, finest first; last all in one."""
    n = len(values)
    gap = np.abs(values[:, None] - values[None, :])
    labels = np.arange(n)
    heights, levels = [], []
    for _ in range(n - 1):
        apart = np.where(labels[:, None] != labels[None, :], gap, np.inf)
        i, j = np.unravel_index(np.argmin(apart), apart.shape)
        heights.append(apart[i, j])
        levels.append(labels.copy())
        labels = np.where(labels == labels[j], labels[i], labels)
    natural = [
        levels[k]
        for k in range(1, n - 1)
        if heights[k] > LEVEL_RATIO * max(heights[k - 1], 1e-16 * np.abs(values).max())
    ]
    return [*natural[: MAX_LEVELS - 1], labels]


def _clustered_radii(
    A: Floats,
    E: Floats,
    T: Complexes,
    U: Complexes,
    labels: NDArray[np.intp],
    poles: Complexes,
) -> Floats:
    """Radii of one clustering, about the given poles."""
    T, U, labels = _sort_clusters(T, U, labels)
    starts = np.flatnonzero(np.r_[True, labels[1:] != labels[:-1]])
    blocks = [slice(a, b) for a, b in zip(starts, [*starts[1:], len(labels)], strict=True)]
    parts = _cluster_bases(T, U, blocks)
    if parts is None:
        return np.full(len(poles), np.inf)
    S, blocked = parts
    F = _block_coupling(A, E, S, blocked)
    squares = np.add.reduceat(np.add.reduceat(F * F, starts, axis=0), starts, axis=1)
    couplings = np.sqrt(squares).sum(axis=1)
    disks = np.empty(len(poles))
    for block, coupling in zip(blocks, couplings, strict=True):
        disks[block] = _henrici_distance(blocked[block, block], float(coupling))
    return _match(poles, np.diag(blocked), disks)


def _sort_clusters(
    T: Complexes, U: Complexes, labels: NDArray[np.intp]
) -> tuple[Complexes, Complexes, NDArray[np.intp]]:
    """Schur form with the poles of each cluster next to each other."""
    from scipy.linalg.lapack import ztrexc

    order = list(labels)
    for place in range(1, len(order)):
        if order[place] == order[place - 1] or order[place - 1] not in order[place:]:
            continue
        found = order.index(order[place - 1], place)
        T, U, _ = ztrexc(T, U, found + 1, place + 1)
        order.insert(place, order.pop(found))
    return T, U, np.array(order)


def _cluster_bases(
    T: Complexes, U: Complexes, blocks: list[slice]
) -> tuple[Complexes, Complexes] | None:
    """Orthonormal basis of every cluster's invariant subspace, and the block diagonal form."""
    from scipy.linalg.lapack import ztrsyl

    S, blocked = np.empty_like(U), np.zeros_like(T)
    for block in blocks:
        lead, inner = slice(0, block.start), T[block, block]
        basis = U[:, block]
        if block.start:
            X, shrink, _ = ztrsyl(T[lead, lead], inner, -T[lead, block], isgn=-1)
            if not shrink > 0 or not np.isfinite(X).all():
                return None
            basis = basis + U[:, lead] @ (X / shrink)
        if basis.shape[1] == 1:
            S[:, block], blocked[block, block] = basis / np.linalg.norm(basis), inner
            continue
        Q, R = np.linalg.qr(basis)
        try:
            turned: Any = np.linalg.solve(R.T, (R @ inner).T).T
        except np.linalg.LinAlgError:
            return None
        S[:, block], blocked[block, block] = Q, np.triu(turned)
    return S, blocked


def _block_coupling(A: Floats, E: Floats, S: Complexes, T: Complexes) -> Floats:
    """Bound on the entries of S⁻¹((A + δA)S - S T), as in `ssaudit.modes.radii`; inf at worst."""
    n = len(A)
    gamma = (2 * n + 4) * EPS
    try:
        W = np.linalg.inv(S)
    except np.linalg.LinAlgError:
        return np.full((n, n), np.inf)
    size, W_size = np.abs(S), np.abs(W)
    outer = np.abs(A @ S - S @ T) + (E + gamma * np.abs(A)) @ size + gamma * size @ np.abs(T)
    F = W_size @ outer
    defect = (np.abs(W @ S - np.eye(n)) + gamma * W_size @ size).sum(axis=1)
    if not defect.max() <= 0.5:
        return np.full((n, n), np.inf)
    F += defect[:, None] / (1.0 - defect.max()) * F.max(axis=0)[None, :]
    bound: Floats = F * (1.0 + 8 * gamma)
    return bound


def _henrici_distance(T: Complexes, coupling: float) -> float:
    """Root d of Σ_k norm(|N|^k) coupling / d^(k+1) = 1, N the strict upper triangle of T."""
    if len(T) == 1 or coupling == 0.0 or not np.isfinite(coupling):
        return coupling if np.isfinite(coupling) else np.inf
    N = np.abs(np.triu(T, 1))
    power, norms = np.eye(len(T)), [1.0]
    for _ in range(len(T) - 1):
        power = power @ N
        norms.append(float(np.linalg.norm(power)))
    terms = coupling * np.array(norms)
    exponents = np.arange(1, len(T) + 1)
    # Each term alone gives a lower end; all terms together at most fill 1 at len(T) times the
    # largest of these.
    low = float((terms ** (1.0 / exponents)).max())
    high = low * len(T)
    for _ in range(60):
        middle = np.sqrt(low * high)
        low, high = (middle, high) if (terms / middle**exponents).sum() > 1 else (low, middle)
        if high <= 1.001 * low:
            break
    return float(high)


def _match(poles: Complexes, centres: Complexes, disks: Floats) -> Floats:
    """Radii about the given poles, provided every group of disks has as many poles as disks."""
    n = len(poles)
    gap = np.abs(centres[:, None] - centres[None, :])
    joined = ~(gap > disks[:, None] + disks[None, :]) | np.eye(n, dtype=bool)
    for _ in range(int(np.ceil(np.log2(max(n, 2))))):
        joined = (joined.astype(float) @ joined.astype(float)) > 0
    group = joined.argmax(axis=1)
    reach = np.abs(poles[:, None] - centres[None, :])
    inside = reach <= disks[None, :]
    if not inside.any(axis=1).all():
        return np.full(n, np.inf)
    home = group[inside.argmax(axis=1)]
    if not np.array_equal(np.bincount(home, minlength=n), np.bincount(group, minlength=n)):
        return np.full(n, np.inf)
    together = home[:, None] == group[None, :]
    radii: Floats = np.where(together, reach + disks[None, :], 0.0).max(axis=1)
    return radii
