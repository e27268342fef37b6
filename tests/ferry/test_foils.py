"""Lift of one foil against closed forms, limits and independent numerical solutions."""

import mpmath
import numpy as np
import pytest

from ssaudit.ferry.foils import (
    Foil,
    added_mass,
    flap_effectiveness,
    free_surface_factor,
    free_surface_slope,
    lift_slope,
)

ROUNDING = 1e-13  # a few operations in double precision


def lifting_line_slope(aspect_ratio: float, terms: int = 8) -> float:
    """Slope from the lifting-line equation, solved by collocation for an elliptic plan form."""
    angle = np.arange(1, terms + 1) * np.pi / (terms + 1)
    order = np.arange(1, terms + 1)
    mid_chord = 4 / np.pi / aspect_ratio  # span 1: area is pi/4 times mid chord
    stiffness = 2 / (np.pi * mid_chord * np.sin(angle))  # 4 b / (a0 c), with a0 = 2 pi
    sines = np.sin(np.outer(angle, order))
    system = sines * (stiffness[:, None] + order / np.sin(angle)[:, None])
    return float(np.pi * aspect_ratio * np.linalg.solve(system, np.ones(terms))[0])


@pytest.mark.parametrize("aspect_ratio", [2.0, 5.9, 7.7, 100.0])
def test_lift_slope_solves_the_lifting_line_equation(aspect_ratio: float) -> None:
    assert lift_slope(aspect_ratio) == pytest.approx(lifting_line_slope(aspect_ratio), rel=1e-11)


def test_lift_slope_limits() -> None:
    assert lift_slope(np.inf) == pytest.approx(2 * np.pi, rel=ROUNDING)
    # A slender foil tends to pi/2 AR only in slender-body theory: lifting line gives twice that.
    assert lift_slope(1e-6) == pytest.approx(np.pi * 1e-6, rel=1e-5)


def test_free_surface_factor_limits() -> None:
    factor = free_surface_factor(np.array([0.0, 0.25, 1e6]), 1.0)
    np.testing.assert_allclose(factor, [1 / 2, 2 / 3, 1.0], rtol=1e-12)
    depth = np.linspace(0, 5, 50)
    assert (np.diff(free_surface_factor(depth, 1.3)) > 0).all()


def test_free_surface_factor_scales_with_chord() -> None:
    depth = np.array([0.7, 1.4])
    np.testing.assert_array_equal(
        free_surface_factor(depth, 0.5), free_surface_factor(2 * depth, 1.0)
    )


@pytest.mark.parametrize("immersion", [0.4, 1.0, 1.8])
def test_free_surface_slope_is_the_derivative(immersion: float) -> None:
    chord = mpmath.mpf("1.3")

    def factor(depth: mpmath.mpf) -> mpmath.mpf:
        square = 16 * (depth / chord) ** 2
        return (1 + square) / (2 + square)

    with mpmath.workdps(40):
        expected = float(mpmath.diff(factor, mpmath.mpf(immersion)))
    assert float(free_surface_slope(np.array(immersion), 1.3)) == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize("ratio", [0.1, 0.25, 0.6])
def test_flap_effectiveness_integrates_the_mean_line(ratio: float) -> None:
    # Zero-lift angle of a thin section: 1/pi times the integral of slope * (cos t - 1),
    # where x = (1 - cos t)/2 and the mean line falls with slope -1 behind the hinge.
    hinge = mpmath.acos(1 - 2 * (1 - ratio))
    expected = mpmath.quad(lambda t: (1 - mpmath.cos(t)) / mpmath.pi, [hinge, mpmath.pi])
    assert flap_effectiveness(ratio) == pytest.approx(float(expected), rel=1e-12)


def test_flap_effectiveness_closed_form_and_limits() -> None:
    assert flap_effectiveness(0.25) == pytest.approx(1 / 3 + np.sqrt(3) / (2 * np.pi), rel=ROUNDING)
    assert flap_effectiveness(0.0) == pytest.approx(0.0, abs=ROUNDING)
    assert flap_effectiveness(1.0) == 1.0


def test_added_mass_is_a_cylinder_of_water() -> None:
    # The plate's added mass is that of the water in the circle over its chord.
    assert added_mass(10.0, 1.2, 1000.0) == pytest.approx(np.pi * 0.6**2 * 10 * 1000, rel=ROUNDING)


def test_foil_area_and_aspect_ratio() -> None:
    foil = Foil(span=8.0, chord=2.0, station=0.0, flap_chord_ratio=0.25, strut_chord=1.0)
    assert (foil.area, foil.aspect_ratio) == (16.0, 4.0)
