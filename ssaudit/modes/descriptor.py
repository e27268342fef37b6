"""Poles of descriptor models E x' = A x + B u in stacks, infinite poles set apart.

Each pencil becomes a standard problem. Where E, scaled by itself, is well-conditioned on its range,
the algebraic variables are eliminated and only that part of E is solved with; without algebraic
variables this is E⁻¹A. Otherwise E is not inverted at all: with a real shift m that is no pole,
M = (mE - A)⁻¹E has the eigenvalues t = 1/(m - s), an infinite pole s being t = 0. In both ways the
null space of E is split off by its basis, so that rounding cannot turn an infinite pole into a fast
finite one.
"""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ssaudit.modes.poles import find_modes
from ssaudit.modes.radii import pole_radii

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

Modes = tuple[Complexes, Floats, Complexes, Complexes, NDArray[np.str_]]
"""Finite poles, radii, right and left vectors, and the reason of each point."""

EPS = float(np.finfo(float).eps)

SCALING_SWEEPS = 6
"""Alternations of row and column scaling of E; beyond a few, powers of two no longer change."""

BENIGN_CONDITION = 1e6
"""Condition of the scaled E on its range, and of the algebraic equations, up to which they are
solved with; it costs six of sixteen digits at worst, and the radii know."""

RANK_ROUNDOFFS = 32.0
"""A singular value below this many n eps, relative to the largest, counts as zero: a small multiple
of the backward error of the singular value decomposition."""

ALGEBRAIC_ROUNDOFFS = 1e4
"""The same for the block that decides the index, which has been through two multiplications and a
scaling; poles faster than the rest by the inverse of this count as infinite of higher index."""

SHIFTS = (1.0, 1.618, 0.414, 3.303, 0.146)
"""Shifts tried, as multiples of norm(A)/norm(E): real, positive and in no simple ratio, as physical
models seldom have poles there."""

GOOD_SHIFT = 1e-6
"""Reciprocal condition of mE - A with which the search for a shift ends."""

SINGULAR_PENCIL = "singular-pencil"
HIGHER_INDEX = "index-above-one"
NOT_CONVERGED = "not-converged"

REASONS = {
    SINGULAR_PENCIL: "the pencil (A, E) is singular: det(sE - A) vanishes for every s",
    HIGHER_INDEX: "the descriptor model has an index above one",
    NOT_CONVERGED: "the eigenvalue iteration did not converge",
}
"""What each reason of `DescriptorModes` says."""


@dataclass(frozen=True)
class DescriptorModes:
    """Poles of descriptor models.

    Parameters
    ----------
    poles : (points, n) complex
        Finite poles [1/s when continuous] first; NaN in the places of infinite ones, and all NaN
        where there is a reason.
    radii : (points, n) float
        How far each finite pole may be off, as from `ssaudit.modes.radii.pole_radii`; NaN else.
    right : (points, n, n) complex
        Right vectors of finite poles in columns, of unit length: s E v = A v.
    left : (points, n, n) complex
        Left vectors in rows, such that ``left @ right`` is the identity on the finite poles.
    infinite : (points,) int
        Number of infinite poles.
    reason : (points,) str
        "" or a key of `REASONS`: why the model cannot be judged.
    """

    poles: Complexes
    radii: Floats
    right: Complexes
    left: Complexes
    infinite: NDArray[np.intp]
    reason: NDArray[np.str_]


def descriptor_modes(
    A: Floats,
    E: Floats,
    *,
    entry_error: ArrayLike | None = None,
    mass_error: ArrayLike | None = None,
) -> DescriptorModes:
    """Find poles, radii and vectors of descriptor models, in stacks.

    Parameters
    ----------
    A : (points, n, n) float
        Closed-loop state matrices, all entries finite.
    E : (points, n, n) float
        Left-hand matrices, all entries finite.
    entry_error, mass_error : arrays that broadcast to (points, n, n), optional
        Absolute uncertainty of every entry of A and of E. The rank of E is taken as certain.

    Returns
    -------
    DescriptorModes

    References
    ----------
    Golub & Van Loan, Matrix Computations, 4th ed. (2013), §7.7 (pencils). Index one by the block
    of A on the null spaces of E: Dai, Singular Control Systems (1989), ch. 1. From memory.

    Examples
    --------
    >>> A = np.array([[[-1.0, 2.0], [1.0, -1.0]], [[0.0, 1.0], [1.0, 0.0]]])
    >>> E = np.array([np.diag([1.0, 0.0]), np.diag([1.0, 0.0])])
    >>> modes = descriptor_modes(A, E)
    >>> modes.poles[0].round(6), modes.infinite.tolist(), modes.reason.tolist()
    (array([ 1. +0.j, nan+nanj]), [1, 0], ['', 'index-above-one'])
    """
    points, n = A.shape[:2]
    result = _blank(points, n)
    if A.size == 0:
        return result
    errors = [np.broadcast_to(0.0 if x is None else x, A.shape) for x in (entry_error, mass_error)]
    rows, columns = _equilibrate(E, A)
    scaled = [M * rows[:, :, None] * columns[:, None, :] for M in (A, E, *errors)]
    U, sigma, Vt = (np.array(M, dtype=float) for M in np.linalg.svd(scaled[1]))
    rank = (sigma > RANK_ROUNDOFFS * n * EPS * sigma[:, :1]).sum(axis=1)
    # Without algebraic variables no basis is needed, and the scales of the states stay apart.
    U[rank == n], Vt[rank == n] = np.eye(n), np.eye(n)
    for r in np.unique(rank):
        some = np.flatnonzero(rank == r)
        quality = _algebraic_quality(scaled[0][some], U[some], Vt[some], int(r))
        last = sigma[some, r - 1] if r else np.full(len(some), np.inf)
        benign = np.minimum(last / sigma[some, 0], quality) * BENIGN_CONDITION >= 1.0
        for chosen, solve in ((some[benign], _reduced), (some[~benign], _shifted)):
            if chosen.size:
                stacks = [M[chosen] for M in (*scaled, U, Vt)]
                _fill(result, chosen, *solve(*stacks, rank=int(r)))
    return _unscale(result, columns)


def _unscale(result: DescriptorModes, columns: Floats) -> DescriptorModes:
    """Vectors in the states as given: x = columns * (scaled x)."""
    with np.errstate(invalid="ignore", divide="ignore"):
        right, left = result.right * columns[:, :, None], result.left / columns[:, None, :]
        length = np.linalg.norm(right, axis=1)
        right, left = right / length[:, None, :], left * length[:, :, None]
    return replace(result, right=right, left=left)


def _blank(points: int, n: int) -> DescriptorModes:
    poles = np.full((points, n), np.nan + 1j * np.nan)
    vectors = np.full((points, n, n), np.nan + 1j * np.nan)
    return DescriptorModes(
        poles,
        np.full((points, n), np.nan),
        vectors,
        vectors.copy(),
        np.zeros(points, dtype=np.intp),
        np.full(points, "", dtype="<U16"),
    )


def _fill(
    result: DescriptorModes,
    some: NDArray[np.intp],
    poles: Complexes,
    radii: Floats,
    right: Complexes,
    left: Complexes,
    reason: NDArray[np.str_],
) -> None:
    """Enter the modes of some points into the arrays under construction."""
    finite = poles.shape[1]
    good: NDArray[np.bool_] = np.asarray(reason == "", dtype=bool)
    result.reason[some] = reason
    some = some[good]
    result.poles[some, :finite] = poles[good]
    result.radii[some, :finite] = radii[good]
    result.right[some, :, :finite] = right[good]
    result.left[some, :finite, :] = left[good]
    result.infinite[some] = result.poles.shape[1] - finite


def _equilibrate(E: Floats, A: Floats) -> tuple[Floats, Floats]:
    """Powers of two for rows and columns that bring E's own entries near 1; A's where E has none.

    Scaling by E alone tells a small entry from a missing rank: a diagonal E becomes the identity.
    """
    size = np.abs(E)
    rows, columns = np.ones(E.shape[:2]), np.ones(E.shape[:2])
    empty_rows = np.all(size == 0, axis=2)[:, :, None]
    empty_columns = np.all(size == 0, axis=1)[:, None, :]
    # Algebraic equations and variables are scaled by what couples them.
    size = np.where(empty_rows | empty_columns, np.abs(A), size)
    for _ in range(SCALING_SWEEPS):
        for axis, scale in ((2, rows), (1, columns)):
            widest = (size * rows[:, :, None] * columns[:, None, :]).max(axis=axis)
            scale *= np.where(widest > 0, 2.0 ** -np.round(np.log2(np.where(widest, widest, 1))), 1)
    return rows, columns


def _algebraic_quality(A: Floats, U: Floats, Vt: Floats, rank: int) -> Floats:
    """Smallest singular value of A between the null spaces of E, relative to its surroundings.

    Zero: the index is above one. Measured against the rows and columns that the block is part of,
    not against all of A.
    """
    if rank == A.shape[1]:
        return np.full(len(A), np.inf)
    equations, variables = (
        np.swapaxes(U[:, :, rank:], 1, 2) @ A,
        A @ np.swapaxes(Vt[:, rank:], 1, 2),
    )
    block = np.swapaxes(U[:, :, rank:], 1, 2) @ variables
    smallest = np.linalg.svd(block, compute_uv=False)[:, -1]
    around = np.minimum(
        np.linalg.norm(equations, axis=(1, 2)), np.linalg.norm(variables, axis=(1, 2))
    )
    quality: Floats = smallest / np.where(around > 0, around, 1.0)
    return quality


def _unknown_mass(dE: Floats, U: Floats, Vt: Floats, rank: int) -> NDArray[np.bool_]:
    """Where the uncertainty of E reaches its null spaces: its rank is then not certain."""
    into = np.abs(np.swapaxes(U[:, :, rank:], 1, 2)) @ dE
    out_of = dE @ np.abs(np.swapaxes(Vt[:, rank:], 1, 2))
    most = 1e3 * EPS * dE.max(axis=(1, 2))
    return np.asarray(
        (into.max(axis=(1, 2), initial=0.0) > most) | (out_of.max(axis=(1, 2), initial=0.0) > most)
    )


def _reduced(
    A: Floats, E: Floats, dA: Floats, dE: Floats, U: Floats, Vt: Floats, *, rank: int
) -> Modes:
    """Modes of E₁₁⁻¹(A₁₁ - A₁₂A₂₂⁻¹A₂₁), blocks on the range of E (1) and its null spaces (2)."""
    one, two = slice(0, rank), slice(rank, None)
    gamma = 2 * (A.shape[1] + 4) * EPS

    def turn(M: Floats, dM: Floats) -> tuple[Floats, Floats]:
        left, right = np.swapaxes(U, 1, 2), np.swapaxes(Vt, 1, 2)
        spread = np.abs(left) @ (dM + gamma * np.abs(M)) @ np.abs(right)
        return left @ M @ right, spread

    (A, dA), (E, dE_turned) = turn(A, dA), turn(E, dE)
    inverse, Y = _inverse_and_solution(A[:, two, two], A[:, two, one])
    dY = _solution_error(A[:, two, two], A[:, two, one], Y, inverse, dA[:, two, two],
                         dA[:, two, one])  # fmt: skip
    size, across = np.abs(Y), np.abs(A[:, one, two])
    G = A[:, one, one] - A[:, one, two] @ Y
    dG = dA[:, one, one] + dA[:, one, two] @ (size + dY) + across @ dY
    dG = dG + gamma * (np.abs(A[:, one, one]) + across @ size)
    inverse, explicit = _inverse_and_solution(E[:, one, one], G)
    error = _solution_error(E[:, one, one], G, explicit, inverse, dE_turned[:, one, one], dG)
    error[_unknown_mass(dE, U, Vt, rank)] = np.inf
    poles, vectors, duals, failed = find_modes(explicit)
    radii = pole_radii(explicit, poles, vectors, duals, entry_error=error)
    right = (np.swapaxes(Vt[:, one], 1, 2) - np.swapaxes(Vt[:, two], 1, 2) @ Y) @ vectors
    return poles, radii, right, duals @ Vt[:, one], np.where(failed, NOT_CONVERGED, "")


def _inverse_and_solution(P: Floats, Q: Floats) -> tuple[Floats, Floats]:
    """P⁻¹ and P⁻¹Q; none of the matrices is singular."""
    return np.asarray(np.linalg.inv(P), dtype=float), np.asarray(np.linalg.solve(P, Q), dtype=float)


def _solution_error(
    P: Floats, Q: Floats, X: Floats, inverse: Floats, dP: Floats, dQ: Floats
) -> Floats:
    """Bound on the error of X = P⁻¹Q, computed, for P and Q uncertain; inf if P may be singular.

    (P + dP)(X' - X) = Q + dQ - (P + dP)X, and with Z = |P⁻¹| dP the inverse of P + dP is within
    (I - Z)⁻¹|P⁻¹|. The computed inverse stands for P⁻¹; the factor 2 allows for its error, which is
    relative to a condition that was limited beforehand.
    """
    n = P.shape[-1]
    gamma = (n + 4) * EPS
    residual = np.abs(Q - P @ X) + gamma * (np.abs(P) @ np.abs(X) + np.abs(Q))
    size = 2.0 * np.abs(inverse)
    Z = size @ dP
    norm = Z.sum(axis=-1).max(axis=-1, initial=0.0)[:, None, None]
    error = size @ (residual + dQ + dP @ np.abs(X))
    # (I - Z)⁻¹ - I = Z (I - Z)⁻¹, with row sums of the inverse at most 1 / (1 - norm).
    with np.errstate(divide="ignore", invalid="ignore"):
        extra = (
            Z.sum(axis=-1, keepdims=True)
            / (1.0 - norm)
            * error.max(axis=1, keepdims=True, initial=0.0)
        )
    return np.where(norm < 1.0, error + extra, np.inf)


def _shifted(
    A: Floats, E: Floats, dA: Floats, dE: Floats, U: Floats, Vt: Floats, *, rank: int
) -> Modes:
    """Modes of (mE - A)⁻¹E with the null space of E projected out."""
    shift, reason = _choose_shift(A, E)
    limit = ALGEBRAIC_ROUNDOFFS * A.shape[1] * EPS
    high = _algebraic_quality(A, U, Vt, rank) <= limit
    reason = np.where((reason == "") & high, HIGHER_INDEX, reason)
    P = np.where((reason == "")[:, None, None], shift[:, None, None] * E - A, np.eye(A.shape[1]))
    inverse, M = _inverse_and_solution(P, E)
    rounding = 2 * EPS * (shift[:, None, None] * np.abs(E) + np.abs(A))
    dP = shift[:, None, None] * dE + dA + rounding
    error = _solution_error(P, E, M, inverse, dP, dE)
    kept = np.swapaxes(Vt[:, :rank], 1, 2)
    size = np.abs(kept)
    inner = Vt[:, :rank] @ M @ kept
    # Projection rounds, and E times its computed null space is zero to rounding only.
    error[_unknown_mass(dE, U, Vt, rank)] = np.inf
    spread = error + 4 * A.shape[1] * EPS * (np.abs(M) + np.abs(inverse) @ np.abs(E))
    inner_error = np.swapaxes(size, 1, 2) @ spread @ size
    values, vectors, duals, failed = find_modes(inner)
    radii = pole_radii(inner, values, vectors, duals, entry_error=inner_error)
    with np.errstate(divide="ignore", invalid="ignore"):
        poles = shift[:, None] - 1.0 / values
        room = np.abs(values) - radii
        radii = np.where(room > 0, radii / (np.abs(values) * room), np.inf)
        radii = radii + 4 * EPS * (shift[:, None] + np.abs(poles))
        right = (M @ kept @ vectors) / values[:, None, :]
    left = duals @ Vt[:, :rank]
    failed |= ~np.isfinite(poles).all(axis=1)
    reason = np.where((reason == "") & failed, NOT_CONVERGED, reason)
    return poles, radii, right, left, reason


def _choose_shift(A: Floats, E: Floats) -> tuple[Floats, NDArray[np.str_]]:
    """Real shift of those tried with the best mE - A; a reason where each makes it singular."""
    n = A.shape[1]
    norm_A, norm_E = np.linalg.norm(A, axis=(1, 2)), np.linalg.norm(E, axis=(1, 2))
    unit = np.where((norm_A > 0) & (norm_E > 0), norm_A / np.where(norm_E > 0, norm_E, 1.0), 1.0)
    shift, best = unit.copy(), np.full(len(A), -1.0)
    for factor in SHIFTS:
        open_points = np.flatnonzero(best < GOOD_SHIFT)
        if open_points.size == 0:
            break
        trial = factor * unit[open_points]
        pencil = trial[:, None, None] * E[open_points] - A[open_points]
        # Rows scaled, so that units of the equations do not look like singularity.
        widest = np.abs(pencil).max(axis=2, keepdims=True)
        sigma = np.linalg.svd(pencil / np.where(widest > 0, widest, 1.0), compute_uv=False)
        quality = sigma[:, -1] / np.where(sigma[:, 0] > 0, sigma[:, 0], 1.0)
        better = quality > best[open_points]
        shift[open_points[better]] = trial[better]
        best[open_points] = np.maximum(best[open_points], quality)
    return shift, np.where(best <= RANK_ROUNDOFFS * n * EPS, SINGULAR_PENCIL, "")
