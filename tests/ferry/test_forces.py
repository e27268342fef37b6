"""Trim balances, and the derivatives agree with differences of the nonlinear forces."""

from dataclasses import replace

import numpy as np
import pytest

from ssaudit.ferry.forces import MOTIONS, Trim, find_trim, force_and_moment, force_derivatives
from ssaudit.ferry.vessel import BOW_TANK, GRAVITY, STERN_TANK, Ferry, MassDistribution

STEP = 1e-3  # of each motion [SI]; with Richardson's step the error is of order STEP**4
AGREEMENT = 1e-8  # of the largest derivative with respect to the same motion
POINTS = np.array([(15.0, 125e3, 1.0), (18.0, 95e3, 1.8), (20.0, 110e3, 1.4), (24.0, 125e3, 1.2)]).T


def differences(ferry: Ferry, trim: Trim) -> np.ndarray:
    """Central differences with one step of Richardson extrapolation, shape (points, 2, 6)."""

    def central(column: int, step: float) -> np.ndarray:
        motions = np.zeros((len(trim.speed), len(MOTIONS)))
        motions[:, column] = step
        ahead = force_and_moment(ferry, trim, motions)
        return (ahead - force_and_moment(ferry, trim, -motions)) / (2 * step)

    columns = [
        (4 * central(column, STEP / 2) - central(column, STEP)) / 3
        for column in range(len(MOTIONS))
    ]
    return np.stack(columns, axis=-1)


def worst_disagreement(analytic: np.ndarray, numeric: np.ndarray) -> float:
    """Largest difference over the largest derivative of the same force by the same motion."""
    scale = np.abs(numeric).max(axis=0, keepdims=True) + 1.0
    return float((np.abs(analytic - numeric) / scale).max())


@pytest.mark.parametrize("masses", [BOW_TANK, STERN_TANK])
def test_trim_balances_lift_thrust_and_moment(masses: MassDistribution) -> None:
    ferry = Ferry(masses)
    trim = find_trim(ferry, *POINTS)
    weight = trim.mass * GRAVITY
    np.testing.assert_allclose(trim.lift.sum(axis=0), weight, rtol=1e-13)
    residual = force_and_moment(ferry, trim, np.zeros((4, 6)))
    assert np.abs(residual[:, 0] / weight).max() < 1e-13
    assert np.abs(residual[:, 1] / (weight * 18)).max() < 1e-13
    # Without the couple of drag and thrust the lever rule holds exactly.
    level = find_trim(replace(ferry, thrust_height=0.0), *POINTS)
    np.testing.assert_allclose(level.lift[0], -level.arm[1] / 18 * weight, rtol=1e-12)


def test_drag_is_a_plausible_share_of_the_lift() -> None:
    trim = find_trim(Ferry(BOW_TANK), *POINTS)
    ratio = trim.mass * GRAVITY / trim.thrust
    assert ((ratio > 8) & (ratio < 30)).all()


@pytest.mark.parametrize("masses", [BOW_TANK, STERN_TANK])
def test_derivatives_agree_with_differences(masses: MassDistribution) -> None:
    ferry = Ferry(masses)
    trim = find_trim(ferry, *POINTS)
    analytic, numeric = force_derivatives(ferry, trim), differences(ferry, trim)
    assert worst_disagreement(analytic, numeric) < AGREEMENT
    # Control: leaving out one physical term, the foils swinging under the centre, is noticed.
    without = analytic.copy()
    without[:, 1, 2] -= trim.mass * GRAVITY * trim.depth
    assert worst_disagreement(without, numeric) > 1e4 * AGREEMENT


def test_derivatives_have_the_signs_of_physics() -> None:
    derivative = dict(
        zip(
            MOTIONS,
            np.moveaxis(
                force_derivatives(Ferry(BOW_TANK), find_trim(Ferry(BOW_TANK), *POINTS)), 2, 0
            ),
            strict=True,
        )
    )
    assert (derivative["heave"][:, 0] < 0).all()  # higher foils lift less
    assert (derivative["heave_rate"][:, 0] < 0).all()  # rising lowers the angle of attack
    assert (derivative["pitch"][:, 0] > 0).all()
    assert (derivative["pitch_rate"][:, 1] < 0).all()  # both foils damp pitch
    assert (derivative["flap_fore"] > 0).all()
    assert (derivative["flap_aft"][:, 0] > 0).all()
    assert (derivative["flap_aft"][:, 1] < 0).all()


def test_points_do_not_influence_each_other() -> None:
    ferry = Ferry(STERN_TANK)
    together = force_derivatives(ferry, find_trim(ferry, *POINTS))
    for index in range(POINTS.shape[1]):
        alone = force_derivatives(ferry, find_trim(ferry, *POINTS[:, index : index + 1]))
        np.testing.assert_array_equal(alone[0], together[index])
