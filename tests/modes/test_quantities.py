"""Damping ratio, natural frequency and time constant against their defining formulas."""

import cmath
import warnings

import mpmath
import numpy as np
import pytest

from ssaudit.modes.quantities import (
    continuous_poles,
    damping_ratio,
    natural_frequency,
    time_constant,
)


def second_order_pole(zeta: float, frequency: float) -> complex:
    return complex(-zeta * frequency, frequency * np.sqrt(1 - zeta**2))


@pytest.mark.parametrize("zeta", [0.0, 1e-9, 0.1, 0.5, 0.999, -0.3])
@pytest.mark.parametrize("frequency", [1e-6, 0.3, 7.0, 1e9])
def test_quantities_of_a_second_order_mode(zeta: float, frequency: float) -> None:
    s = np.array([second_order_pole(zeta, frequency)])
    assert natural_frequency(s)[0] == pytest.approx(frequency, rel=1e-14)
    assert damping_ratio(s)[0] == pytest.approx(zeta, rel=1e-14)
    if zeta:
        assert time_constant(s)[0] == pytest.approx(1 / (zeta * frequency), rel=1e-14)
    else:
        assert time_constant(s)[0] == np.inf


def test_conjugates_have_the_same_quantities() -> None:
    s = np.array([-0.2 + 3j])
    for quantity in (natural_frequency, damping_ratio, time_constant):
        np.testing.assert_array_equal(quantity(s), quantity(s.conj()))


def test_the_origin_has_no_damping_ratio_and_no_decay() -> None:
    s = np.array([0j])
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        assert np.isnan(damping_ratio(s)).all()
        assert time_constant(s).tolist() == [np.inf]
        assert natural_frequency(s).tolist() == [0.0]


def test_real_poles_have_a_damping_ratio_of_one_in_size() -> None:
    np.testing.assert_array_equal(damping_ratio(np.array([-2.0 + 0j, 5.0, -1e-300])), [1, -1, 1])


def test_poles_of_points_that_are_void_stay_unknown() -> None:
    s = np.array([complex(np.nan, np.nan)])
    for quantity in (natural_frequency, damping_ratio, time_constant):
        assert np.isnan(quantity(s)).all()


def test_sampled_poles_are_taken_back_through_the_logarithm() -> None:
    rng = np.random.default_rng(0)
    dt = 0.02
    s = rng.uniform(-50, 5, 40) + 1j * rng.uniform(-150, 150, 40)
    z = np.exp(s * dt)
    # Frequencies are below half the sampling rate, pi/dt = 157 rad/s.
    np.testing.assert_allclose(continuous_poles(z, dt), s, rtol=1e-12, atol=1e-12)
    for z_, s_ in zip(z, continuous_poles(z, dt), strict=True):
        with mpmath.workdps(30):
            assert s_ == pytest.approx(complex(mpmath.log(complex(z_)) / dt), rel=1e-14)


def test_sampled_pole_at_zero_is_gone_at_once() -> None:
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        s = continuous_poles(np.array([0j, complex(-0.0, -0.0)]), 0.1)
        assert s.real.tolist() == [-np.inf, -np.inf]
        assert damping_ratio(s).tolist() == [1.0, 1.0]
        assert time_constant(s).tolist() == [0.0, 0.0]
        assert natural_frequency(s).tolist() == [np.inf, np.inf]


@pytest.mark.parametrize("z", [-0.5 + 0j, complex(-0.5, -0.0)])
def test_negative_real_sampled_pole_swings_at_half_the_sampling_rate(z: complex) -> None:
    dt = 0.1
    s = continuous_poles(np.array([z]), dt)
    assert s[0].imag == pytest.approx(np.pi / dt, rel=1e-15)
    assert s[0].real == pytest.approx(cmath.log(0.5).real / dt, rel=1e-15)
    assert damping_ratio(s)[0] == pytest.approx(np.log(2) / np.hypot(np.log(2), np.pi), rel=1e-14)


@pytest.mark.parametrize(("z", "sign"), [(0.999, -1), (1.001, 1), (-1.001, 1), (1.0, 0), (1j, 0)])
def test_side_of_the_unit_circle_is_side_of_the_axis(z: complex, sign: int) -> None:
    assert np.sign(continuous_poles(np.array([complex(z)]), 0.5).real).tolist() == [sign]
