"""Peaks of the sensitivity S = (I + L)⁻¹ and of T = I - S, and H-infinity norms."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from ssaudit.margins.balance import balance_loop
from ssaudit.margins.gain_curve import find_gain_peak
from ssaudit.margins.peak_search import Peak
from ssaudit.margins.stability_radius import find_stable, finite_points
from ssaudit.margins.state_space import (
    Bool,
    Real,
    StateSpace,
    feed_back,
    read_loop,
    sensitivity_of,
    to_continuous,
    unwarp,
)


@dataclass(frozen=True)
class SensitivityPeaks:
    """Peaks of S and T of each point.

    Attributes
    ----------
    sensitivity, complementary : (points,) float
        Largest singular value of S, and of T, over all frequencies; NaN where the closed loop is
        not stable (not defined) or not confirmed.
    sensitivity_frequency, complementary_frequency : (points,) float
        Where [rad/s]; inf where the peak is the limit at high frequency.
    stable, confirmed : (points,) bool
        Whether the closed loop is stable; whether the numbers decide.
    """

    sensitivity: Real
    sensitivity_frequency: Real
    complementary: Real
    complementary_frequency: Real
    stable: Bool
    confirmed: Bool


def find_sensitivity_peaks(
    A: ArrayLike, B: ArrayLike, C: ArrayLike, D: ArrayLike, dt: float = 0.0
) -> SensitivityPeaks:
    """Peaks of S and T of loops closed by negative unity feedback.

    With several channels the singular values depend on the units of the signals.

    Parameters
    ----------
    A, B, C, D : (points, n, n), (points, n, m), (points, m, n), (points, m, m) float
        The open loop L.
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    SensitivityPeaks
        Attained values; no frequency exceeds them by more than 1e-7, relative.

    References
    ----------
    As in `ssaudit.margins.gain_curve.find_gain_peak`.

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> peaks = find_sensitivity_peaks(0 * one, one, 2 * one, 0 * one)  # L = 2/s
    >>> peaks.sensitivity.round(6), peaks.complementary.round(6)
    (array([1.]), array([1.]))
    """
    loop = balance_loop(read_loop(A, B, C, D))
    S = sensitivity_of(loop)
    T = feed_back(loop, np.ones(len(loop)))
    stable = find_stable(S.A, dt)[1]
    first, second = peak_where(S, dt, stable), peak_where(T, dt, stable)
    confirmed = first.confirmed & second.confirmed
    return SensitivityPeaks(
        first.value, first.frequency, second.value, second.frequency, stable, confirmed
    )


def find_norm(A: ArrayLike, B: ArrayLike, C: ArrayLike, D: ArrayLike, dt: float = 0.0) -> Peak:
    """H-infinity norm of stable systems with its frequency.

    Parameters
    ----------
    A, B, C, D : (points, n, n), (points, n, inputs), (points, outputs, n), (points, ...) float
        Any stable systems.
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    Peak
        Value NaN where a system is not stable; frequency [rad/s].

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> find_norm(-one, one, 5 * one, 0 * one).value.round(6)
    array([5.])
    """
    system = StateSpace(*(np.asarray(matrix, dtype=float) for matrix in (A, B, C, D)))
    system = balance_loop(system)
    return peak_where(system, dt, find_stable(system.A, dt)[1])


def peak_where(system: StateSpace, dt: float, chosen: Bool, *, structured: bool = False) -> Peak:
    """Peak gain of the chosen systems, NaN for the others.

    Parameters
    ----------
    system : StateSpace
        Systems that are stable where chosen.
    dt : float
        Sampling time [s]; 0 means continuous.
    chosen : (points,) bool
    structured : bool
        As in `ssaudit.margins.gain_curve.find_gain_peak`.

    Returns
    -------
    Peak
        Points not chosen are confirmed as long as their numbers are finite. Where nothing passes
        the value is 0, at no frequency.

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> lag = StateSpace(-one, one, 5 * one, 0 * one)
    >>> peak_where(lag, 0.0, np.array([False])).value
    array([nan])
    """
    value, frequency = np.full((2, len(system)), np.nan)
    confirmed = finite_points(system.A, system.D)
    silent = chosen & _nothing_passes(system)
    value[silent] = 0.0
    chosen = chosen & ~silent
    if chosen.any():
        mapped = to_continuous(system[chosen], dt)
        poles, stable = find_stable(mapped.A, 0.0)
        peak = find_gain_peak(mapped, poles, structured=structured)
        decided = peak.confirmed & stable
        value[chosen] = np.where(decided, peak.value, np.nan)
        frequency[chosen] = np.where(decided, unwarp(peak.frequency, dt), np.nan)
        confirmed[chosen] = decided
    return Peak(value, frequency, confirmed)


def _nothing_passes(system: StateSpace) -> Bool:
    """Where no path leads from any input to any output, whatever the numbers on it."""
    reached = (system.B != 0).any(axis=2)
    steps = system.A != 0
    for _ in range(system.A.shape[-1]):
        further = reached | (steps & reached[:, np.newaxis]).any(axis=2)
        if (further == reached).all():
            break
        reached = further
    shown = ((system.C != 0) & reached[:, np.newaxis]).any(axis=(1, 2))
    return np.asarray(~(shown | (system.D != 0).any(axis=(1, 2))))
