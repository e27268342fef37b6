"""How poles and damping ratios move with the entries of the gains: exact derivatives."""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.modes.poles import isolate

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]


def pole_derivatives(
    B: Floats, C: Floats, D: Floats, K: Floats, sign: int, right: Complexes, left: Complexes
) -> Complexes:
    """Find the derivatives of the closed-loop poles with respect to every gain.

    Parameters
    ----------
    B, C, D : (points, …) float
        Matrices of what the gains close.
    K : (points, inputs, signals) float
        Gains, u = σ K y.
    sign : int
        σ: -1 or +1.
    right, left : (points, n, n) complex
        Eigenvectors of the closed loop, from `ssaudit.modes.poles.find_modes`.

    Returns
    -------
    (points, n, inputs, signals) complex
        dλ/dK [1/s, or no unit when sampled, a unit of the gain]; NaN for defective models.

    References
    ----------
    Derivative of a simple eigenvalue, w dA v: Wilkinson, The Algebraic Eigenvalue Problem (1965),
    ch. 2. The closed A = A + σ B (I - σKD)⁻¹ K C changes by σ B (I - σKD)⁻¹ dK (C + D σ …), by
    the derivative of the inverse.

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> pole_derivatives(2 * one, one, 0 * one, one, -1, one + 0j, one + 0j).real
    array([[[[-2.]]]])
    """
    loop = np.eye(K.shape[1]) - sign * np.matmul(K, D)
    (inverse,), _ = isolate(lambda M: (np.linalg.inv(M),), loop)
    fed = C + sign * D @ inverse @ K @ C
    reach, show = left @ B @ inverse, np.swapaxes(fed @ right, 1, 2)
    return np.asarray(sign * reach[:, :, :, np.newaxis] * show[:, :, np.newaxis, :])


def damping_derivatives(poles: Complexes, moves: Complexes, dt: float) -> Floats:
    """Turn derivatives of poles into those of their damping ratios.

    Parameters
    ----------
    poles : (...) complex
        Poles; of sampled models z.
    moves : (..., inputs, signals) complex
        Their derivatives with respect to the gains.
    dt : float
        Sampling time [s]; 0 when continuous.

    Returns
    -------
    (..., inputs, signals) float
        dζ/dK; NaN at a pole without a damping ratio.

    Examples
    --------
    >>> damping_derivatives(np.array([-1 + 1j]), np.array([[[-1.0 + 0j]]]), 0.0).round(4)
    array([[[0.3536]]])
    """
    at: Any = poles[..., np.newaxis, np.newaxis]
    with np.errstate(all="ignore"):
        if dt > 0:
            moves = moves / (at * dt)
            at = np.log(at) / dt
        size: Any = np.abs(at)
        # ζ = -a/|s| with s = a + jb: dζ = -da/|s| + a (a da + b db)/|s|³
        along = at.real * moves.real + at.imag * moves.imag
        return np.asarray(-moves.real / size + at.real * along / size**3)
