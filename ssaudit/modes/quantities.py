"""What engineers ask of a pole: damping ratio, natural frequency, time constant."""

import numpy as np
from numpy.typing import NDArray


def continuous_poles(z: NDArray[np.complex128], dt: float) -> NDArray[np.complex128]:
    """Continuous equivalent log(z)/dt of the poles of sampled models.

    Parameters
    ----------
    z : (...) complex
        Poles of the sampled models.
    dt : float
        Sampling time [s], positive.

    Returns
    -------
    s : (...) complex
        Equivalent poles [1/s]. z = 0 (gone within a sample) becomes -inf; a pole on the negative
        real axis gets the imaginary part pi/dt, half the sampling rate.

    Examples
    --------
    >>> continuous_poles(np.array([np.exp(-0.5 + 1j), 0.0]), 0.1).round(6)
    array([ -5.+10.j, -inf +0.j])
    """
    with np.errstate(divide="ignore"):
        real = np.log(np.abs(z)) / dt
    s: NDArray[np.complex128] = np.empty(np.shape(z), dtype=np.complex128)
    # Adding zero turns -0 into 0, so that a negative real z gets +pi/dt, never -pi/dt.
    s.real, s.imag = real, np.arctan2(z.imag + 0.0, z.real) / dt
    return s


def natural_frequency(s: NDArray[np.complex128]) -> NDArray[np.float64]:
    """Undamped natural frequency ω_n = abs(s) [rad/s] of poles [1/s].

    Parameters
    ----------
    s : (...) complex
        Poles [1/s].

    Returns
    -------
    (...) float
        Natural frequency [rad/s]; of a real pole its distance from the origin.

    Examples
    --------
    >>> natural_frequency(np.array([-3 + 4j]))
    array([5.])
    """
    return np.abs(s)


def damping_ratio(s: NDArray[np.complex128]) -> NDArray[np.float64]:
    """Damping ratio ζ = -Re s / abs(s) of poles; a pole at s = 0 has none.

    Parameters
    ----------
    s : (...) complex
        Poles [1/s].

    Returns
    -------
    (...) float
        Between -1 and 1; NaN at s = 0. A real pole has 1 (decaying) or -1 (growing).

    Examples
    --------
    >>> damping_ratio(np.array([-3 + 4j, 0, 2]))
    array([ 0.6,  nan, -1. ])
    """
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = -s.real / np.abs(s)
    return np.where(np.isinf(s.real), -np.sign(s.real), ratio)


def time_constant(s: NDArray[np.complex128]) -> NDArray[np.float64]:
    """Time constant τ = -1 / Re s [s]: the time in which a mode decays by a factor of e.

    Parameters
    ----------
    s : (...) complex
        Poles [1/s].

    Returns
    -------
    (...) float
        Positive for decaying modes, negative for growing ones (the time to grow by e),
        +inf on the imaginary axis.

    Examples
    --------
    >>> time_constant(np.array([-4 + 1j, 0.5, 2j]))
    array([ 0.25, -2.  ,   inf])
    """
    with np.errstate(divide="ignore"):
        return np.where(s.real == 0, np.inf, -1.0 / s.real)


def sampled_notes(z: NDArray[np.complex128]) -> NDArray[np.object_]:
    """Name the poles of sampled models that have no continuous counterpart.

    Parameters
    ----------
    z : (...) complex
        Poles of sampled models.

    Returns
    -------
    (...) object
        "gone within a sample" for z = 0, "half the sampling rate" for a negative real z (it turns
        its sign every sample), else "".

    Examples
    --------
    >>> sampled_notes(np.array([0.0, -0.5, 0.5 + 0.1j])).tolist()
    ['gone within a sample', 'half the sampling rate', '']
    """
    notes = np.full(z.shape, "", dtype=object)
    notes[z == 0] = "gone within a sample"
    notes[(z.imag == 0) & (z.real < 0)] = "half the sampling rate"
    return notes
