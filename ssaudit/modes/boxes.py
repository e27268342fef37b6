"""How far the poles reach over a whole box of models, rigorously; for `ssaudit.modes.proof`.

The matrices of a model are known up to an absolute uncertainty of every entry. The closed loop is
expanded into first-order changes, each of which acts once, and a bounded rest; a similarity that
nearly diagonalises the nominal loop, with inverse and residual from ball arithmetic, carries both
to the poles.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.modes.clusters import balance_scaling
from ssaudit.modes.radii import even_rows

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

PRECISIONS = (128, 256, 512, 1024)
"""Bits of the balls, raised until the entries are known far beyond double precision."""

KNOWN = 1e-17
"""Radius of a ball, relative to the largest entry of its row, that counts as known."""

ROUNDING = 1e-15
"""Relative to the largest entry of a row: what conversion to double precision may change."""

MARGIN = 1e-9
"""Relative margin on sums of positive numbers done in double precision; their rounding stays below
1e-12 for any number of states that fits into memory."""

INSIDE = 1.0 - 1e-9
"""Witnesses are taken this far towards the corners of the box, so that rounding keeps them in."""

MAX_LOOP_CHANGE = 0.5
"""Largest relative change of I - σKD, as a row sum, that is expanded; well below 1, where the loop
might become ill-posed."""

WITNESSES = 2
"""Poles for which a corner of the box is tried: the worst, and one in case its sign misleads."""


@dataclass(frozen=True)
class Expansion:
    """Change of a closed loop: Σ left δ right over its matrices, and a rest of second order.

    Parameters
    ----------
    terms : tuple of (str, (n, a) float, (b, n) float)
        Name of the changed matrix, left and right factor of its change δ of shape (a, b).
    rest : (n, n) float
        Bound on the entries of all that is of second order in the changes.
    """

    terms: tuple[tuple[str, Floats, Floats], ...]
    rest: Floats


@dataclass(frozen=True)
class Reach:
    """How far each pole reaches, measured across the boundary of stability.

    Parameters
    ----------
    low, high : (n,) float
        Ends of the real part [1/s]; of abs(z) - 1 when sampled.
    influence : mapping of str to (n, a, b) float
        First-order effect on each pole, outwards, of every entry of each matrix.
    """

    low: Floats
    high: Floats
    influence: Mapping[str, Floats]


def rational(flint: Any, M: Floats) -> Any:
    """Exact matrix of binary floating-point numbers, as python-flint's ``fmpq_mat``."""
    return flint.fmpq_mat([[flint.fmpq(*x.as_integer_ratio()) for x in row] for row in M.tolist()])


def identity(flint: Any, n: int) -> Any:
    """Exact unit matrix."""
    return flint.fmpq_mat([[int(i == j) for j in range(n)] for i in range(n)])


def _floats(exact: Any) -> Floats:
    """Nearest floating-point numbers; Python divides integers of any length correctly rounded."""
    return np.array([[int(x.p) / int(x.q) for x in row] for row in exact.tolist()], dtype=float)


def expand_closing(
    flint: Any, parts: Mapping[str, Floats], spread: Mapping[str, Floats], sign: int
) -> Expansion | None:
    """Expand A + σB(I - σKD)⁻¹KC about the nominal matrices.

    With M = (I - σKD)⁻¹ and L = MK, a changed L is L + M δK (I + σDL) + σL δD L + ..., and what
    follows is bounded through Z = |M| dK (|D| + dD) + |L| dD, as in `ssaudit.modes.radii`. The
    factors come from rational arithmetic, so that each entry is correct to roundoff.

    Parameters
    ----------
    flint : module
        python-flint.
    parts : mapping of "A" and perhaps "B", "C", "D", "K" to arrays
        Nominal matrices; without "K", A is the closed loop. Without "C" the states are fed back.
    spread : mapping of the same names to arrays
        Absolute uncertainty of every entry.
    sign : int
        σ.

    Returns
    -------
    Expansion or None
        None where the algebraic loop might be ill-posed within the uncertainty.

    Examples
    --------
    >>> import flint
    >>> one = np.ones((1, 1))
    >>> parts = {"A": -one, "B": one, "K": one}
    >>> found = expand_closing(flint, parts, {"A": 0 * one, "B": one / 10, "K": one / 10}, -1)
    >>> [name for name, _, _ in found.terms], found.rest.round(4)
    (['A', 'B', 'K'], array([[0.01]]))
    """
    n = len(parts["A"])
    terms = [("A", np.eye(n), np.eye(n))]
    if "K" not in parts:
        return Expansion(tuple(terms), np.zeros((n, n)))
    exact = {name: rational(flint, M) for name, M in parts.items()}
    inputs, signals = parts["K"].shape
    B, K, C = exact["B"], exact["K"], exact.get("C", identity(flint, n))
    D = exact.get("D", flint.fmpq_mat(signals, inputs))
    M = (identity(flint, inputs) - sign * (K * D)).inv()
    L = M * K
    sizes = {name: np.abs(_floats(X)) for name, X in zip("BCDLM", (B, C, D, L, M), strict=True)}
    rest = _second_order(sizes, spread)
    if rest is None:
        return None
    terms.append(("B", np.eye(n), _floats(sign * (L * C))))
    around = (identity(flint, signals) + sign * (D * L)) * C
    terms.append(("K", _floats(sign * (B * M)), _floats(around)))
    if "C" in parts:
        terms.append(("C", _floats(sign * (B * L)), np.eye(n)))
    if "D" in parts:
        terms.append(("D", _floats(B * L), _floats(L * C)))
    return Expansion(tuple(terms), rest)


def _second_order(sizes: Mapping[str, Floats], spread: Mapping[str, Floats]) -> Floats | None:
    """Bound on what is of second order, from the sizes of the matrices; None if ill-posed."""
    B, C, D, L, M = (sizes[name] for name in "BCDLM")
    dB, dK = spread["B"], spread["K"]
    dC, dD = spread.get("C", np.zeros_like(C)), spread.get("D", np.zeros_like(D))
    gains = M @ dK
    Z = gains @ (D + dD) + L @ dD
    if not Z.sum(axis=1).max() < MAX_LOOP_CHANGE:
        return None
    geometric = np.linalg.inv(np.eye(len(Z)) - Z)
    change = geometric @ (Z @ L + gains)
    second = gains @ dD @ L + Z @ gains + geometric @ Z @ Z @ (L + gains)
    bound: Floats = (dB @ change + B @ second) @ C + (dB @ (L + change) + B @ change) @ dC
    return bound * (1 + MARGIN)


def reach(
    flint: Any, closed: Any, expansion: Expansion, spread: Mapping[str, Floats], *, sampled: bool
) -> Reach | None:
    """How far every pole of a closed loop reaches over the whole box.

    The first-order reach of pole i is Σ spread |Re(u_i (W left)_i (right V)_i)| with u_i the
    direction across the boundary: only what moves the pole across counts, and an entry of B, C, D
    or K acts once, not independently on each entry of the closed matrix. Gershgorin's disks, scaled
    as in `ssaudit.modes.radii`, add what is of higher order.

    Parameters
    ----------
    flint : module
        python-flint.
    closed : fmpq_mat
        Nominal closed loop, exact.
    expansion, spread
        From `expand_closing`, and the uncertainty that it was made with.
    sampled : bool
        Whether the boundary is the unit circle.

    Returns
    -------
    Reach or None
        None where the nominal loop has no usable eigenvectors.
    """
    similar = _diagonalise(flint, closed)
    if similar is None:
        return None
    V, W, X = similar
    centres = np.diag(X)
    outwards = np.exp(-1j * np.angle(centres)) if sampled else np.ones(len(X), dtype=complex)
    change = np.abs(W) @ expansion.rest @ np.abs(V)
    first, influence = np.diag(change).copy(), {}
    for name, left, right in expansion.terms:
        across, along = W @ left, (right @ V).T
        width = np.abs(across) @ spread[name] @ np.abs(along).T
        gain = (outwards[:, None, None] * across[:, :, None] * along[:, None, :]).real
        rounded = (np.abs(W) @ np.abs(left)) @ spread[name] @ (np.abs(right) @ np.abs(V))
        first += (np.abs(gain) * spread[name]).sum(axis=(1, 2))
        first += len(X) * ROUNDING * np.diag(rounded)
        change += len(X) * ROUNDING * rounded
        change += width
        influence[name] = gain
    rounding = ROUNDING * (np.abs(X).max(axis=1) + sampled)
    off = (np.abs(X) + change) * (1 + MARGIN) + 2 * rounding[:, None]
    width = np.diag(change) * (1 + MARGIN) + rounding
    first = first * (1 + MARGIN) + rounding
    middle = np.abs(centres) if sampled else centres.real
    top = np.hypot(middle + first, width) if sampled else middle + first
    low, high = _disk_ends(centres, width, off, middle - first, top)
    return Reach(low - sampled, high - sampled + rounding, influence)


def _diagonalise(flint: Any, closed: Any) -> tuple[Complexes, Complexes, Complexes] | None:
    """V, V⁻¹ and V⁻¹ A V of the nominal loop, each entry correct to double precision of its row."""
    A = _floats(closed)
    scale = balance_scaling(A[None])[0]
    try:
        V = np.linalg.eig(A * scale[None, :] / scale[:, None])[1] * scale[:, None] + 0j
    except np.linalg.LinAlgError:
        return None
    before = flint.ctx.prec
    try:
        for precision in PRECISIONS:
            flint.ctx.prec = precision
            basis = flint.acb_mat([[flint.acb(x.real, x.imag) for x in row] for row in V.tolist()])
            try:
                inverse = basis.inv()
            except ZeroDivisionError:
                continue
            W = _to_double(inverse)
            X = _to_double(inverse * flint.acb_mat(flint.arb_mat(closed)) * basis)
            if W is not None and X is not None:
                return V, W, X
    finally:
        flint.ctx.prec = before
    return None


def _to_double(balls: Any) -> Complexes | None:
    """Midpoints of a matrix of balls; None if some ball is wider than `KNOWN`."""
    entries = balls.tolist()
    middle = np.array([[complex(x) for x in row] for row in entries])
    radius = np.array([[float(x.real.rad()) + float(x.imag.rad()) for x in row] for row in entries])
    known = radius <= KNOWN * np.abs(middle).max(axis=1, keepdims=True)
    return middle if bool(np.isfinite(middle).all() and known.all()) else None


def _disk_ends(
    centres: Complexes, width: Floats, off: Floats, low: Floats, high: Floats
) -> tuple[Floats, Floats]:
    """Add Gershgorin's disks to the ends of each pole; overlapping disks share theirs."""
    gap = np.abs(centres[:, None] - centres[None, :])
    np.fill_diagonal(gap, np.inf)
    off = off.copy()
    np.fill_diagonal(off, width)
    if np.isfinite(off).all():
        off = even_rows(off[np.newaxis])[0]
    np.fill_diagonal(off, 0.0)
    plain = off.sum(axis=1)
    with np.errstate(divide="ignore"):
        scale = np.minimum((2.0 * off / gap).max(axis=0), 1.0)
    free = scale * plain + width < (0.5 * gap - (plain + width)[None, :]).min(axis=1)
    joined = gap <= (plain + width)[:, None] + (plain + width)[None, :]
    np.fill_diagonal(joined, True)
    for _ in range(int(np.ceil(np.log2(max(len(off), 2))))):
        joined = (joined.astype(float) @ joined.astype(float)) > 0
    shared_low = np.where(joined, low - plain, np.inf).min(axis=1)
    shared_high = np.where(joined, high + plain, -np.inf).max(axis=1)
    return (
        np.where(free, low - scale * plain, shared_low),
        np.where(free, high + scale * plain, shared_high),
    )


def critical_corners(
    parts: Mapping[str, Floats], spread: Mapping[str, Floats], found: Reach, *, outwards: bool
) -> list[dict[str, Floats]]:
    """Corners of the box to which the most critical poles move furthest, to first order.

    Parameters
    ----------
    parts, spread : mapping of str to arrays
        Nominal matrices and their uncertainty.
    found : Reach
        From `reach`.
    outwards : bool
        Whether to move the poles towards instability or away from it.

    Returns
    -------
    list of mapping of str to arrays
        Models that lie within the box.
    """
    step = INSIDE if outwards else -INSIDE
    return [
        {
            name: M + step * spread[name] * np.sign(found.influence[name][i])
            for name, M in parts.items()
        }
        for i in np.argsort(-found.high)[:WITNESSES]
    ]
