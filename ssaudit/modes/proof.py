"""Proofs of stability for chosen points, in ball arithmetic and, where that is not enough, exactly.

Needs the extra ``prove`` (python-flint). A model that is known exactly is closed and judged by
Routh's array of its characteristic polynomial, in balls of rising precision and at last in
rationals, so that the answer is never open. A model known to some digits stands for a whole box of
models; these are judged together (`ssaudit.modes.boxes`).
"""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ssaudit.errors import SsauditError
from ssaudit.modes.boxes import critical_corners, expand_closing, rational, reach
from ssaudit.modes.entry_errors import rounding_error

Floats = NDArray[np.float64]


PRECISIONS = (128, 512)
"""Bits of the balls in which an exactly known model is tried before rationals are."""


@dataclass(frozen=True)
class Proof:
    """What was proved about one point.

    Parameters
    ----------
    outcome : {"stable", "unstable", "open"}
        "unstable" means not asymptotically stable: a pole on the boundary or beyond it.
    how : str
        The ground, in a few words for the report.

    Examples
    --------
    >>> Proof("stable", EXACT).outcome
    'stable'
    """

    outcome: Literal["stable", "unstable", "open"]
    how: str


EXACT = "for the model exactly as given"
BOX = "for every model within the uncertainty of the data"
BOTH = "stable and unstable models both lie within the uncertainty of the data"
UNSETTLED = "the bounds are too wide for the uncertainty of the data"
ILL_POSED = "the algebraic loop is ill-posed"
NOT_FINITE = "entries are not finite"
SINGULAR_PENCIL = "the pencil (A, E) is singular"
DESCRIPTOR_BOX = "descriptor models are proved from exact data only"


def prove_points(
    points: Iterable[int],
    A: Floats,
    B: Floats | None = None,
    C: Floats | None = None,
    D: Floats | None = None,
    K: Floats | None = None,
    *,
    E: Floats | None = None,
    sign: int = -1,
    feed: Literal["states", "outputs"] = "outputs",
    dt: ArrayLike = 0.0,
    digits: int | None = None,
    errors: Mapping[str, ArrayLike] | None = None,
) -> dict[int, Proof]:
    """Proofs for chosen points of a stack; parameters as in `prove_stability`, stacked.

    Parameters
    ----------
    points : iterable of int
        Which points, by their place in the stack.
    A, B, C, D, K, E : (points, ...) float or None
        Stacks of matrices; K and the arrays in `errors` may have one point for all, or none.
    sign, feed, digits, errors
        As in `prove_stability`.
    dt : float or (points,) float
        Sampling time of each point [s]; 0 where continuous.

    Returns
    -------
    dict of int to Proof

    Raises
    ------
    SsauditError
        If python-flint is not installed.

    Examples
    --------
    >>> A = np.array([[[-1.0]], [[0.0]]])
    >>> {i: proof.outcome for i, proof in prove_points([0, 1], A).items()}
    {0: 'stable', 1: 'unstable'}
    """

    def at(M: ArrayLike | None, i: int) -> Any:
        if M is None:
            return None
        stack = np.asarray(M, dtype=float)
        return stack if stack.ndim < 3 else stack[min(i, len(stack) - 1)]

    times = np.broadcast_to(np.asarray(dt, dtype=float), len(A))
    return {
        i: prove_stability(
            *(at(M, i) for M in (A, B, C, D, K)),
            E=at(E, i),
            sign=sign,
            feed=feed,
            dt=float(times[i]),
            digits=digits,
            errors={name: at(M, i) for name, M in (errors or {}).items()},
        )
        for i in points
    }


def prove_stability(
    A: Floats,
    B: Floats | None = None,
    C: Floats | None = None,
    D: Floats | None = None,
    K: Floats | None = None,
    *,
    E: Floats | None = None,
    sign: int = -1,
    feed: Literal["states", "outputs"] = "outputs",
    dt: float = 0.0,
    digits: int | None = None,
    errors: Mapping[str, ArrayLike] | None = None,
) -> Proof:
    """Prove that one closed loop is stable, or that it is not, or say that this stays open.

    Parameters
    ----------
    A : (n, n) float
        State matrix [1/s when continuous]. Binary numbers are taken exactly.
    B, C, D : float or None
        Input (n, inputs), output (outputs, n) and feed-through (outputs, inputs) matrices.
    K : (inputs, signals) float or None
        Gains; None: A is the closed loop already.
    E : (n, n) float, optional
        Left-hand matrix of a descriptor model E x' = A x + B u.
    sign : int
        σ: -1 for u = -K y, +1 for u = +K y.
    feed : {"states", "outputs"}
        What y is.
    dt : float
        Sampling time [s]; 0: continuous.
    digits : int, optional
        Significant digits to which A, B, C and D were written; None: exact.
    errors : mapping of "A", "B", "C", "D", "K", "E" to arrays, optional
        Absolute uncertainty of every entry, added to that from `digits`; to that of E nothing is
        added.

    Returns
    -------
    Proof

    Raises
    ------
    SsauditError
        If python-flint is not installed.

    References
    ----------
    Routh's array: Gantmacher, The Theory of Matrices, vol. 2 (1959), ch. XV. Ball arithmetic:
    Johansson, Arb: efficient arbitrary-precision midpoint-radius interval arithmetic, IEEE Trans.
    Computers 66 (2017). Disks of Gershgorin: as in `ssaudit.modes.radii`. From memory.

    Examples
    --------
    >>> A, B, K = np.array([[0.0, 1], [0, 0]]), np.array([[0.0], [1]]), np.array([[4.0, 1]])
    >>> prove_stability(A, B, K=K, feed="states")
    Proof(outcome='stable', how='for the model exactly as given')
    >>> prove_stability(A, B, K=K, feed="states", digits=3).how
    'for every model within the uncertainty of the data'
    >>> lossless = np.array([[0.0, 1], [-4.0, -1e-3]])
    >>> prove_stability(lossless, errors={"A": [[0, 0], [0, 9e-4]]}).outcome
    'stable'
    >>> prove_stability(lossless, errors={"A": [[0, 0], [0, 2e-3]]}).how
    'stable and unstable models both lie within the uncertainty of the data'
    """
    flint = import_flint()
    if K is None or B is None:
        parts = {"A": A}
    elif feed == "states" or C is None:
        parts = {"A": A, "B": B, "K": K}
    else:
        parts = {"A": A, "B": B, "C": C, "K": K, **({} if D is None else {"D": D})}
    parts = {name: np.asarray(M, dtype=float) for name, M in parts.items()}
    spread = {name: _uncertainty(name, M, digits, errors) for name, M in parts.items()}
    if not all(np.isfinite(M).all() for M in (*parts.values(), *spread.values())):
        return Proof("open", NOT_FINITE)
    mass_spread = np.asarray((errors or {}).get("E", 0.0))
    if not any(M.any() for M in (*spread.values(), mass_spread)):
        return _exact_outcome(flint, parts, E, sign, dt)
    if E is not None:
        return Proof("open", DESCRIPTOR_BOX)
    return _box_outcome(flint, parts, spread, sign, dt)


def import_flint() -> Any:
    """Import python-flint, on which proofs rest.

    Returns
    -------
    module

    Raises
    ------
    SsauditError
        Naming the command that installs it.
    """
    try:
        import flint
    except ImportError as error:
        raise SsauditError(
            "proofs need python-flint, which is not installed",
            do='pip install "ssaudit[prove]"',
        ) from error
    return flint


def _uncertainty(
    name: str, M: Floats, digits: int | None, errors: Mapping[str, ArrayLike] | None
) -> Floats:
    stated = np.broadcast_to(np.asarray((errors or {}).get(name, 0.0), dtype=float), M.shape)
    return stated if digits is None or name == "K" else stated + rounding_error(M, digits)


def _exact_outcome(
    flint: Any, parts: Mapping[str, Floats], E: Floats | None, sign: int, dt: float
) -> Proof:
    """Judgement of one exactly known model."""
    if E is None:
        for precision in PRECISIONS:
            with flint.ctx.workprec(precision):
                stable = _ball_outcome(flint, parts, sign, dt)
            if stable is not None:
                return Proof("stable" if stable else "unstable", EXACT)
    try:
        closed = _close_exactly(flint, parts, sign)
    except ZeroDivisionError:
        return Proof("open", ILL_POSED)
    polynomial = closed.charpoly()
    if E is not None:
        polynomial = _pencil_polynomial(flint, closed, rational(flint, np.asarray(E, dtype=float)))
        if polynomial is None:
            return Proof("open", SINGULAR_PENCIL)
    coefficients = polynomial.coeffs()
    if dt:
        coefficients = _disk_to_half_plane(flint.fmpq_poly, coefficients)
    return Proof("stable" if _is_hurwitz(coefficients) else "unstable", EXACT)


def _ball_outcome(flint: Any, parts: Mapping[str, Floats], sign: int, dt: float) -> bool | None:
    """Whether the model is stable, as far as balls of the precision in force can tell."""
    balls = {name: flint.arb_mat(M.tolist()) for name, M in parts.items()}
    try:
        closed = _close(flint.arb_mat, balls, sign)
    except ZeroDivisionError:
        return None
    coefficients = closed.charpoly().coeffs()
    if dt:
        coefficients = _disk_to_half_plane(flint.arb_poly, coefficients)
    return _is_hurwitz(coefficients)


def _close_exactly(flint: Any, parts: Mapping[str, Floats], sign: int) -> Any:
    """Close the loop in rationals."""
    return _close(flint.fmpq_mat, {name: rational(flint, M) for name, M in parts.items()}, sign)


def _close(kind: Any, parts: Mapping[str, Any], sign: int) -> Any:
    """Compute A + σB(I - σKD)⁻¹KC in python-flint's matrices of some kind."""
    if "K" not in parts:
        return parts["A"]
    command = parts["K"]
    if "D" in parts:
        unit = kind(np.eye(command.nrows(), dtype=int).tolist())
        command = (unit - sign * (command * parts["D"])).solve(command)
    if "C" in parts:
        command = command * parts["C"]
    return parts["A"] + sign * (parts["B"] * command)


def _pencil_polynomial(flint: Any, A: Any, E: Any) -> Any:
    """det(sE - A) up to a factor, as a polynomial in rationals; None if it is zero for all s.

    With a shift m that is no pole and M = (mE - A)⁻¹E, poles s of the pencil are s = m - 1/t for
    the nonzero eigenvalues t of M; so det(sE - A) is proportional to Σ c_k (m - s)^(n - k), c_k the
    coefficients of det(tI - M), which starts with t^(number of infinite poles).
    """
    n = A.nrows()
    # A polynomial of degree n that is zero at n + 1 places is zero.
    for shift in range(n + 1):
        try:
            M = (shift * E - A).solve(E)
        except ZeroDivisionError:
            continue
        powers = flint.fmpq_poly([1])
        total = flint.fmpq_poly([0])
        for c in reversed(M.charpoly().coeffs()):
            total += c * powers
            powers *= flint.fmpq_poly([shift, -1])
        return total
    return None


def _disk_to_half_plane(kind: Any, coefficients: Sequence[Any]) -> list[Any]:
    """Coefficients after z = (1 + s)/(1 - s), which maps the left half-plane into the unit disk."""
    n = len(coefficients) - 1
    up, down = kind([1, 1]), kind([1, -1])
    total = kind([0])
    for k, c in enumerate(coefficients):
        total += c * up**k * down ** (n - k)
    found = list(total.coeffs())
    # A pole at z = -1 goes to infinity: the degree drops. A zero in its place says "not stable".
    return found + [0] * (n + 1 - len(found))


def _is_hurwitz(coefficients: Sequence[Any]) -> bool | None:
    """Routh's test, constant coefficient first: whether all roots lie strictly left.

    None where balls do not show the sign of an entry; numbers always do.
    """
    row = list(reversed(coefficients))
    if row[0] < 0:
        row = [-c for c in row]
    if any(c <= 0 for c in row):
        return False
    upper, lower = row[0::2], row[1::2]
    while lower:
        if lower[0] <= 0:
            return False
        if not (upper[0] > 0 and lower[0] > 0):
            return None
        ratio = upper[0] / lower[0]
        padded = [*lower[1:], *[0] * (len(upper) - len(lower))]
        following = [a - ratio * b for a, b in zip(upper[1:], padded, strict=True)]
        upper, lower = lower, following
    return True if upper[0] > 0 else None


def _box_outcome(
    flint: Any,
    parts: Mapping[str, Floats],
    spread: Mapping[str, Floats],
    sign: int,
    dt: float,
) -> Proof:
    """Judgement of all models of the box, together or not at all."""
    try:
        closed = _close_exactly(flint, parts, sign)
        expansion = expand_closing(flint, parts, spread, sign)
    except ZeroDivisionError:
        return Proof("open", ILL_POSED)
    if expansion is None:
        return Proof("open", UNSETTLED)
    found = reach(flint, closed, expansion, spread, sampled=dt > 0)
    if found is None:
        return Proof("open", UNSETTLED)
    if found.high.max() < 0:
        return Proof("stable", BOX)
    if found.low.max() > 0:
        return Proof("unstable", BOX)
    nominal = _exact_outcome(flint, parts, None, sign, dt)
    outwards = nominal.outcome == "stable"
    for corner in critical_corners(parts, spread, found, outwards=outwards):
        if _exact_outcome(flint, corner, None, sign, dt).outcome not in (nominal.outcome, "open"):
            return Proof("open", BOTH)
    return Proof("open", UNSETTLED)
