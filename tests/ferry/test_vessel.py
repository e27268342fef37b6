"""Centre of gravity and pitch inertia against a swarm of point masses."""

import numpy as np
import pytest

from ssaudit.ferry.vessel import BOW_TANK, STERN_TANK, MassDistribution


def swarm(masses: MassDistribution, total: float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Each part as two halves, a gyradius before and behind its centre: mass, station, height."""
    rows = []
    for part, share in masses.parts(np.array([total])):
        for side in (-part.gyradius, part.gyradius):
            rows.append((share[0] / 2, part.station + side, part.height))
    mass, station, height = np.array(rows).T
    return mass, station, height


@pytest.mark.parametrize("masses", [BOW_TANK, STERN_TANK])
@pytest.mark.parametrize("total", [95e3, 105e3, 125e3])
def test_centre_and_inertia_agree_with_point_masses(masses: MassDistribution, total: float) -> None:
    mass, station, height = swarm(masses, total)
    middle = np.average(station, weights=mass), np.average(height, weights=mass)
    inertia = (mass * ((station - middle[0]) ** 2 + (height - middle[1]) ** 2)).sum()
    assert mass.sum() == pytest.approx(total, rel=1e-14)
    np.testing.assert_allclose(np.ravel(masses.centre(np.array([total]))), middle, rtol=1e-13)
    assert masses.pitch_inertia(np.array([total]))[0] == pytest.approx(inertia, rel=1e-13)
    # Control: without the parallel-axis term the inertia would be visibly smaller.
    own = sum(s[0] * p.gyradius**2 for p, s in masses.parts(np.array([total])))
    assert own < 0.999 * inertia


def test_tank_matters_only_once_it_is_filled() -> None:
    light, heavy = np.array([95e3, 98e3, 100e3]), np.array([105e3, 115e3, 120e3, 125e3])
    np.testing.assert_array_equal(BOW_TANK.centre(light), STERN_TANK.centre(light))
    np.testing.assert_array_equal(BOW_TANK.pitch_inertia(light), STERN_TANK.pitch_inertia(light))
    moved = BOW_TANK.centre(heavy)[0] - STERN_TANK.centre(heavy)[0]
    np.testing.assert_allclose(moved, 21.0 * (heavy - 100e3) / heavy, rtol=1e-12)
