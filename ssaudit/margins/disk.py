"""Disk margins: how much gain and phase may change in all channels at once."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from ssaudit.errors import LoopError
from ssaudit.margins.response_peaks import peak_where
from ssaudit.margins.sensitivity import close_loop
from ssaudit.margins.state_matrices import find_stable
from ssaudit.margins.state_space import Bool, Real, StateSpace, given_form, join, read_loop


@dataclass(frozen=True)
class DiskMargin:
    """Disk margin of each point, without skew.

    Attributes
    ----------
    alpha : (points,) float
        Size of the disk; inf where nothing within the disk family can destabilise; NaN where the
        closed loop is not stable (not defined) or not confirmed. Too large by no more than 1e-7,
        relative, or 1e-6 where slow poles beside fast ones leave no more digits.
    frequency : (points,) float
        Where the disk is met [rad/s]; inf where only in the limit of high frequency.
    gain_low, gain_high : (points,) float
        Each channel's gain may change between these factors, all at once.
    phase_deg : (points,) float
        Each channel's phase may change by this much either way, all at once [deg].
    stable, confirmed : (points,) bool
        Whether the closed loop is stable; whether the numbers decide.
    """

    alpha: Real
    frequency: Real
    gain_low: Real
    gain_high: Real
    phase_deg: Real
    stable: Bool
    confirmed: Bool


def find_disk_margin(
    A: ArrayLike, B: ArrayLike, C: ArrayLike, D: ArrayLike, dt: float = 0.0
) -> DiskMargin:
    """Disk margin α = 1 / max over frequency of μ(S - I/2), all channels of L changing at once.

    Give the loop broken at the plant inputs for the margin at all inputs, broken at the outputs
    for that at all outputs, and `join_both_ends` of plant and controller for both. Channels
    change independently of each other, so units do not matter. The bound of μ used is exact for
    up to three channels, and on the safe side (α too small by a few per cent at most, usually
    by nothing) for more.

    Parameters
    ----------
    A, B, C, D : (points, n, n), (points, n, m), (points, m, n), (points, m, m) float
        The open loop L, closed by negative unity feedback.
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    DiskMargin
        No frequency allows a disk smaller than α by more than 1e-7, relative, or 1e-6 where slow
        poles beside fast ones leave no more digits. On the safe side α is as near as the bound of
        μ: within the same for one channel, about 1e-7 for two, 1e-3 for more (besides what the
        bound itself leaves).

    References
    ----------
    Seiler, Packard and Gahinet, IEEE Control Systems Magazine 40(5), 2020: skew σ = 0. Peaks as in
    `ssaudit.margins.response_peaks.peak_where`; scalings as in
    `ssaudit.margins.scaling.smallest_scaling`.

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> margin = find_disk_margin(0 * one, one, one, 0 * one)  # L = 1/s
    >>> margin.alpha.round(6), margin.phase_deg.round(4)
    (array([2.]), array([90.]))
    """
    S, carried = close_loop(read_loop(A, B, C, D), dt)
    stable = find_stable(given_form(S, dt).A, dt)[1]
    half = StateSpace(S.A, S.B, S.C, S.D - np.eye(S.D.shape[-1]) / 2)
    peak = peak_where(half, dt, stable, structured=True, carried=carried)
    with np.errstate(divide="ignore"):
        alpha = 1 / peak.value
    low, high, phase = spread_of(alpha)
    return DiskMargin(alpha, peak.frequency, low, high, phase, stable, peak.confirmed)


def spread_of(alpha: Real) -> tuple[Real, Real, Real]:
    """Gain interval and phase that a disk of size α allows.

    Parameters
    ----------
    alpha : (...) float
        Disk margin, positive.

    Returns
    -------
    gain_low, gain_high : (...) float
        Factors; for α of 2 and more there is no upper limit.
    phase_deg : (...) float
        [deg]

    References
    ----------
    Seiler, Packard and Gahinet (2020), skew 0: gains (1 - α/2)/(1 + α/2) to its inverse, phase
    2 atan(α/2).

    Examples
    --------
    >>> low, high, phase = spread_of(np.array([0.458]))
    >>> low.round(3), high.round(3), phase.round(1)
    (array([0.627]), array([1.594]), array([25.8]))
    """
    half = np.asarray(alpha) / 2
    with np.errstate(invalid="ignore", divide="ignore"):
        low = np.where(np.isinf(half), -1.0, (1 - half) / (1 + half))
        high = np.where(half < 1, (1 + half) / (1 - half), np.inf)
    high = np.where(np.isnan(half), np.nan, high)
    return low, high, np.degrees(2 * np.arctan(half))


def join_both_ends(plant: StateSpace, controller: StateSpace) -> StateSpace:
    """One loop with the channels of both plant inputs and plant outputs: [[0, K], [-P, 0]].

    Closed by negative unity feedback it is u = -K y, y = P u, so that its disk margin is that of
    simultaneous changes at both ends.

    Parameters
    ----------
    plant : StateSpace
        P, from m inputs to p outputs.
    controller : StateSpace
        K, from p signals to m; negative feedback. A constant gain has no states.

    Returns
    -------
    StateSpace
        With m + p channels, inputs first.

    Raises
    ------
    ssaudit.errors.LoopError
        When the controller does not fit the plant.

    Examples
    --------
    >>> P = StateSpace(*(np.full((1, 1, 1), x) for x in (-1.0, 1.0, 1.0, 0.0)))
    >>> K = StateSpace(np.zeros((1, 0, 0)), np.zeros((1, 0, 1)), np.zeros((1, 1, 0)),
    ...                np.full((1, 1, 1), 3.0))
    >>> join_both_ends(P, K).D[0]
    array([[ 0.,  3.],
           [-0.,  0.]])
    """
    points, p, m = plant.D.shape
    if controller.D.shape != (points, m, p):
        raise LoopError(
            f"the controller's D has shape {controller.D.shape}, the plant's {plant.D.shape}",
            do=f"give a controller from {p} signals to {m} inputs at {points} points",
        )
    n, c = plant.A.shape[-1], controller.A.shape[-1]
    zero = np.zeros
    A = join(plant.A, zero((points, n, c)), zero((points, c, n)), controller.A)
    B = join(plant.B, zero((points, n, p)), zero((points, c, m)), controller.B)
    C = join(zero((points, m, n)), controller.C, -plant.C, zero((points, p, c)))
    D = join(zero((points, m, m)), controller.D, -plant.D, zero((points, p, p)))
    return StateSpace(A, B, C, D)
