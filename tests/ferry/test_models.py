"""The linear models against the nonlinear equations of motion of the whole ferry."""

import numpy as np
import pytest

from ssaudit.ferry.forces import Trim, find_trim, force_and_moment
from ssaudit.ferry.models import INPUTS, OUTPUTS, STATES, build_models
from ssaudit.ferry.vessel import BOW_TANK, STERN_TANK, Ferry, MassDistribution

POINT = np.array([22.0]), np.array([120.0]), np.array([1.2])
STEP = 1e-3


def rates(ferry: Ferry, trim: Trim, x: np.ndarray, u: np.ndarray) -> np.ndarray:
    """Rates of all states, from the nonlinear forces and written without the product's matrices."""
    (z, w, pitch, q, fore, fore_rate, aft, aft_rate, filtered), mass = x, trim.mass[0]
    force = force_and_moment(ferry, trim, np.array([[z, w, pitch, q, fore, aft]]))[0]
    water = [np.pi / 4 * ferry.density * foil.chord**2 * foil.span for foil in ferry.foils]
    arm = trim.arm[:, 0]
    inertia = [
        [mass + sum(water), water @ arm],
        [water @ arm, ferry.masses.pitch_inertia(trim.mass)[0] + water @ arm**2],
    ]
    heave_acceleration, pitch_acceleration = np.linalg.solve(inertia, force)
    bow = z + (ferry.sensor_station - (18.0 - arm[0])) * pitch
    omega, damping = ferry.flap_frequency, ferry.flap_damping
    return np.array(
        [
            w,
            heave_acceleration,
            q,
            pitch_acceleration,
            fore_rate,
            omega**2 * (u[0] - fore) - 2 * damping * omega * fore_rate,
            aft_rate,
            omega**2 * (u[1] - aft) - 2 * damping * omega * aft_rate,
            (bow - filtered) / ferry.sensor_time,
        ]
    )


def slope(function: object, size: int) -> np.ndarray:
    """Jacobian of a function of one vector at zero by central differences with Richardson."""

    def central(step: float) -> np.ndarray:
        return np.stack(
            [(function(step * e) - function(-step * e)) / (2 * step) for e in np.eye(size)], axis=1
        )

    return (4 * central(STEP / 2) - central(STEP)) / 3


@pytest.mark.parametrize("masses", [BOW_TANK, STERN_TANK])
def test_a_and_b_linearise_the_equations_of_motion(masses: MassDistribution) -> None:
    ferry = Ferry(masses)
    models = build_models(ferry, *POINT)
    trim = find_trim(ferry, POINT[0], 1000 * POINT[1], POINT[2])
    A = slope(lambda x: rates(ferry, trim, x, np.zeros(2)), len(STATES))
    B = slope(lambda u: rates(ferry, trim, np.zeros(9), u), len(INPUTS))
    np.testing.assert_allclose(models.A[0], A, rtol=1e-7, atol=1e-7)
    np.testing.assert_allclose(models.B[0], B, rtol=1e-7, atol=1e-7)
    other = build_models(ferry, POINT[0], POINT[1], POINT[2] + 0.2)
    assert np.abs(other.A[0] - A).max() > 1e-2


def test_outputs_are_what_their_names_say() -> None:
    models = build_models(Ferry(BOW_TANK), *POINT)
    C = dict(zip(OUTPUTS, models.C[0], strict=True))
    assert C["height_measured"] @ np.eye(9)[STATES.index("height_filtered")] == 1
    assert C["pitch"].tolist() == np.eye(9)[STATES.index("pitch")].tolist()
    assert C["pitch_rate"].tolist() == np.eye(9)[STATES.index("pitch_rate")].tolist()
    np.testing.assert_array_equal(C["heave_acceleration"], models.A[0, STATES.index("heave_rate")])
    # The flaps lag, so a command reaches no output at once, not even the acceleration.
    assert not models.B[0, STATES.index("heave_rate")].any()
    assert not models.D.any()


def test_flaps_alone_have_their_actuator_poles() -> None:
    ferry = Ferry(BOW_TANK)
    poles = np.linalg.eigvals(build_models(ferry, *POINT).A[0])
    expected = ferry.flap_frequency * (
        -ferry.flap_damping + 1j * np.sqrt(1 - ferry.flap_damping**2)
    )
    assert np.sort(np.abs(poles - expected))[:2].max() < 1e-5  # a double pole: root of rounding


def test_points_keep_their_order() -> None:
    ferry = Ferry(STERN_TANK)
    speed, mass = np.array([15.0, 20.0, 24.0]), np.array([95.0, 110.0, 125.0])
    immersion = np.array([1.0, 1.4, 1.8])
    forwards = build_models(ferry, speed, mass, immersion)
    backwards = build_models(ferry, speed[::-1], mass[::-1], immersion[::-1])
    np.testing.assert_array_equal(forwards.A, backwards.A[::-1])
