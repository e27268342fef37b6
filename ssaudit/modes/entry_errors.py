"""How far the entries of a closed loop may be off: rounding of the export, and what users state.

An uncertainty of every entry of the exported matrices (`rounding_error`, or stated) is carried
through closing (`closed_loop_entry_error`).
"""

from collections.abc import Mapping
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ssaudit.modes.poles import isolate

Floats = NDArray[np.float64]

EPS = float(np.finfo(float).eps)


def rounding_error(M: ArrayLike, digits: int) -> Floats:
    """Half a unit of the last significant digit of every entry of a matrix; zeros are exact.

    Parameters
    ----------
    M : (...) array
        Entries as they were written, in any unit.
    digits : int
        Significant decimal digits that the exporter wrote, at least 1.

    Returns
    -------
    (...) float
        How far the true entry may be from the written one, in the entry's own unit. The conversion
        of the decimal to binary is included.

    Examples
    --------
    >>> rounding_error([0.0, -32.2, 773.98], 5)
    array([0.    , 0.0005, 0.005 ])
    """
    if digits < 1:
        raise ValueError(f"digits is {digits}, expected at least 1")
    size = np.abs(np.asarray(M, dtype=float))
    with np.errstate(divide="ignore"):
        # The small addition keeps an exact power of ten in its own decade; that of 0 is -inf, and
        # ten to that power is 0.
        decade = np.floor(np.log10(size) + 1e-12)
    error: Floats = 0.5 * 10.0 ** (decade - (digits - 1)) + 0.5 * EPS * size
    return error


def closed_loop_entry_error(
    A: Floats,
    B: Floats,
    C: Floats | None,
    D: Floats | None,
    K: Floats,
    *,
    sign: int,
    feed: Literal["states", "outputs"] = "outputs",
    digits: int | None = None,
    errors: Mapping[str, ArrayLike] | None = None,
) -> Floats:
    """Uncertainty of every entry of A + σB(I - σKD)⁻¹KC from the matrices that it is made of.

    Not only to first order: with L = (I - σKD)⁻¹K, entrywise uncertainties dA, dB, ... and
    X = |L| dD + |(I - σKD)⁻¹| dK (|D| + dD), the changed L is within
    dL = (I - X)⁻¹(X |L| + |(I - σKD)⁻¹| dK) while the spectral radius of X is below 1, and the
    entries are within dA + dB(|L| + dL)(|C| + dC) + |B| dL (|C| + dC) + |B||L| dC. The rounding of
    the closing arithmetic itself is always included.

    Parameters
    ----------
    A : (points, n, n) float
        State matrices [1/s when continuous]; the other matrices in the units that belong to them.
    B : (points, n, inputs) float
        Input matrices.
    C : (points, outputs, n) float or None
        Output matrices; not used when the states are fed back.
    D : (points, outputs, inputs) float or None
        Direct feed-through; None: zero. Not used when the states are fed back.
    K : (inputs, signals) or (points, inputs, signals) float
        Gains as used at each point.
    sign : int
        σ: -1 for u = -K y, +1 for u = +K y.
    feed : {"states", "outputs"}
        What y is: the states themselves or the outputs C x + D u.
    digits : int, optional
        Significant digits to which A, B, C and D were written; None: exact.
    errors : mapping of "A", "B", "C", "D", "K" to arrays, optional
        Absolute uncertainty of every entry, broadcast to the matrix; added to that from `digits`.

    Returns
    -------
    (points, n, n) float
        Absolute uncertainty of every entry of the closed matrix; inf at points where the loop
        might be ill-posed within the uncertainty.

    References
    ----------
    Higham, Accuracy and Stability of Numerical Algorithms, 2nd ed. (2002), §3.1 (rounding of sums
    of products), §7.1 (perturbed linear systems, entrywise). From memory.

    Examples
    --------
    >>> A, B, C = np.array([[[-1.0]]]), np.array([[[2.0]]]), np.array([[[1.0]]])
    >>> closed_loop_entry_error(A, B, C, None, np.eye(1), sign=-1, digits=3).round(4)
    array([[[0.02]]])
    """
    states, inputs, signals = A.shape[-1], B.shape[-1], K.shape[-1]
    output, through = C, D
    if feed == "states" or output is None:
        output, through = np.eye(states), None

    def error(name: str, M: Floats, exact: bool = False) -> Floats:
        stated = np.broadcast_to(np.asarray((errors or {}).get(name, 0.0), dtype=float), M.shape)
        return stated if digits is None or exact else stated + rounding_error(M, digits)

    if feed == "states" and digits is None and not errors:
        # By far the most frequent case: only the rounding of A + σBK itself.
        path = np.abs(B) @ np.abs(K)
        total = EPS * ((inputs + signals + 3) * path + np.abs(A) * (path > 0))
        return np.where(np.isnan(total), np.inf, total)
    dA, dB, dK = error("A", A), error("B", B), error("K", K, exact=True)
    fixed = feed == "states" or C is None
    dC = np.zeros_like(output) if fixed else error("C", output)
    L, dL = np.abs(K), np.asarray(dK)
    if through is not None and (np.any(through) or "D" in (errors or {})):
        L, dL = _feed_through_error(K, dK, through, error("D", through), sign)
    wide, path = np.abs(output) + dC, np.abs(B) @ L @ np.abs(output)
    spread = dA + dB @ (L + dL) @ wide + np.abs(B) @ dL @ wide + np.abs(B) @ L @ dC
    # Adding an exact zero rounds nothing.
    total = spread + EPS * ((inputs + signals + 3) * path + np.abs(A) * (path > 0))
    return np.where(np.isnan(total), np.inf, total)


def _feed_through_error(
    K: Floats, dK: Floats, D: Floats, dD: Floats, sign: int
) -> tuple[Floats, Floats]:
    """Size of L = (I - σKD)⁻¹K and its uncertainty, both (points, inputs, signals)."""
    inputs, outputs = K.shape[-2], K.shape[-1]
    loop = np.eye(inputs) - sign * (K @ D)
    (inverse,), _ = isolate(lambda stack: (np.linalg.inv(stack),), loop.reshape(-1, inputs, inputs))
    inverse = inverse.reshape(loop.shape)
    L, size = np.abs(inverse @ K), np.abs(inverse)
    # Rounding of I - KD and of the solve, as an entrywise change of I - KD. The factor for
    # elimination is generous: growth of a few inputs' pivots is far below it.
    rounding = size @ (4 * (inputs + outputs) * EPS * (np.eye(inputs) + np.abs(K) @ np.abs(D)))
    X = L @ dD + size @ dK @ (np.abs(D) + dD) + rounding
    ill_posed = ~(X.sum(axis=-1).max(axis=-1) < 1.0)
    X = np.where(ill_posed[..., None, None], 0.0, X)
    gains = dK + (outputs + 2) * EPS * np.abs(K)
    dL = np.linalg.solve(np.eye(inputs) - X, X @ L + size @ gains)
    return L, np.where(ill_posed[..., None, None], np.nan, dL)
