"""Smallest complex perturbation of A that loses stability."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from ssaudit.margins.balance import resolvent_of
from ssaudit.margins.cover import cover_left
from ssaudit.margins.modal_form import CORRECTIONS, to_modes
from ssaudit.margins.norms import PlainNorm
from ssaudit.margins.peak_search import Peak, fill_in, find_peak
from ssaudit.margins.resolvent import Resolvent, boundary_frequencies, cover_resolvent
from ssaudit.margins.state_matrices import find_stable, finite_points, read_models, scale_models
from ssaudit.margins.state_space import Bool, Complex, Real, unwarp

# Stated accuracy of the radius: no frequency has a value smaller than (1 - RADIUS_RTOL) of it.
RADIUS_RTOL = 1e-7
# What rounding of an eigenproblem may hide of that, so that nothing worse is left unseen.
HIDDEN = 0.1 * RADIUS_RTOL


@dataclass(frozen=True)
class StabilityRadius:
    """How much the closed A of each point may change before stability is lost.

    Attributes
    ----------
    radius : (points,) float
        Spectral norm of the smallest destabilising perturbation, in the units of A; NaN where
        the model is not stable (no margin is defined) or not confirmed. How exact it is, the
        function that found it states.
    frequency : (points,) float
        Where the pole meets the boundary [rad/s].
    stable : (points,) bool
        Whether the model itself is stable.
    confirmed : (points,) bool
        False where the numbers do not decide.
    """

    radius: Real
    frequency: Real
    stable: Bool
    confirmed: Bool


def find_stability_radius(
    A: ArrayLike, dt: float = 0.0, *, scaled: bool = False
) -> StabilityRadius:
    """Smallest complex perturbation of A that puts a pole on the boundary.

    Parameters
    ----------
    A : (points, n, n) float
        Closed-loop state matrices [1/s when continuous].
    dt : float
        Sampling time [s]; 0 means continuous, and the boundary is the imaginary axis, else the
        unit circle.
    scaled : bool
        Whether to balance the states first, so that those in odd units do not dominate.

    Returns
    -------
    StabilityRadius
        The radius within a relative tolerance of 1e-7 from above; of 1e-6 where slow poles beside
        fast ones leave no more digits, and of 1e-5 where eigenvectors that depend on each other
        leave none of these.

    References
    ----------
    Byers, SIAM J. Sci. Stat. Comput. 9(5), 1988; He and Watson, SIAM J. Matrix Anal. Appl. 20,
    1999; level sets by Boyd and Balakrishnan, Systems & Control Letters 15, 1990.

    Examples
    --------
    >>> A = np.array([[[-1.0, 4.0], [0.0, -1.0]]])
    >>> find_stability_radius(A).radius.round(10)  # (sqrt(4² + 4) - 4)/2
    array([0.23606798])
    """
    models = read_models(A)
    if scaled:
        models = scale_models(models)
    poles, stable = find_stable(models, dt)
    radius = np.full(len(models), np.nan)
    frequency = radius.copy()
    confirmed = finite_points(models)
    chosen = np.nonzero(stable)[0]
    if len(chosen):
        peak = _search(models[chosen], poles[chosen], dt)
        radius[chosen], confirmed[chosen] = 1 / peak.value, peak.confirmed
        frequency[chosen] = peak.frequency
    return StabilityRadius(radius, frequency, stable, confirmed)


def _search(A: Real, poles: Complex, dt: float) -> Peak:
    """Peak of the resolvent by level sets, and by a cover where rounding spoils those."""
    curve = Resolvent(A, poles, dt)
    norm = np.linalg.norm(A, axis=(1, 2))
    upper = 2 * norm if dt == 0 else np.full(len(A), np.pi)
    peak = find_peak(curve, boundary_frequencies(poles, dt), upper, upper / 2, RADIUS_RTOL)
    with np.errstate(all="ignore"):
        sure = peak.confirmed & (curve.hidden(peak.value * (1 + RADIUS_RTOL)) <= HIDDEN)
    frequency = np.where(sure, peak.frequency / (dt or 1.0), np.nan)
    peak = Peak(np.where(sure, peak.value, np.nan), frequency, sure)
    left = np.nonzero(~peak.confirmed)[0]
    if len(left):
        beside = A[left] - (np.eye(A.shape[-1]) if dt > 0 else 0.0)
        form = to_modes(resolvent_of(beside), sampled=dt > 0, steps=CORRECTIONS)
        nothing = np.full(len(left), np.nan)
        found = Peak(nothing, nothing.copy(), np.zeros(len(left), dtype=bool))
        cover_left(found, np.arange(len(left)), form, PlainNorm(), RADIUS_RTOL)
        fill_in(peak, left, Peak(found.value, unwarp(found.frequency, dt), found.confirmed))
    left = np.nonzero(~peak.confirmed)[0]
    if len(left):
        found = cover_resolvent(Resolvent(A[left], poles[left], dt), upper[left])
        fill_in(peak, left, Peak(found.value, found.frequency / (dt or 1.0), found.confirmed))
    return peak
