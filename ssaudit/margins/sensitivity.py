"""Peaks of the sensitivity S = (I + L)⁻¹ and of T = I - S."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from ssaudit.margins.balance import balance_loop
from ssaudit.margins.response_peaks import peaks_of_both
from ssaudit.margins.state_matrices import find_stable
from ssaudit.margins.state_space import (
    Bool,
    Real,
    StateSpace,
    given_form,
    less_identity,
    read_loop,
    sensitivity_of,
)


@dataclass(frozen=True)
class SensitivityPeaks:
    """Peaks of S and T of each point.

    Attributes
    ----------
    sensitivity, complementary : (points,) float
        Largest singular value of S, and of T, over all frequencies; NaN where the closed loop is
        not stable (not defined) or not confirmed. Within 1e-7, relative, from below; within 1e-6
        where slow poles beside fast ones leave no more digits.
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
        Attained values; no frequency exceeds them by more than 1e-7, relative, or 1e-6 where
        slow poles beside fast ones leave no more digits.

    References
    ----------
    Covered pole by pole as in `ssaudit.margins.cover.cover_peak`; where that does not decide, level
    sets as in `ssaudit.margins.gain_curve.find_gain_peak`.

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> peaks = find_sensitivity_peaks(0 * one, one, 2 * one, 0 * one)  # L = 2/s
    >>> peaks.sensitivity.round(6), peaks.complementary.round(6)
    (array([1.]), array([1.]))
    """
    S, carried = close_loop(read_loop(A, B, C, D), dt)
    stable = find_stable(given_form(S, dt).A, dt)[1]
    first, second = peaks_of_both(S, dt, stable, carried)
    confirmed = first.confirmed & second.confirmed
    return SensitivityPeaks(
        first.value, first.frequency, second.value, second.frequency, stable, confirmed
    )


def close_loop(loop: StateSpace, dt: float) -> tuple[StateSpace, Real]:
    """Sensitivity of loops with balanced states, and what closing rounds.

    Parameters
    ----------
    loop : StateSpace
        The open loop, closed by negative unity feedback.
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    S : StateSpace
        Of sampled loops A is less the identity: the closed poles next to 1 keep their digits.
    carried : (points, n, n) float
        Size of the terms that each entry of A was summed from.

    Examples
    --------
    >>> S, carried = close_loop(read_loop([[[-1.0]]], [[[2.0]]], [[[3.0]]], [[[0.0]]]), 0.0)
    >>> S.A.item(), carried.item()
    (-7.0, 7.0)
    """
    even = less_identity(balance_loop(loop), dt)
    S = sensitivity_of(even)
    return S, np.asarray(np.abs(even.A) + np.abs(S.B) @ np.abs(even.C))
