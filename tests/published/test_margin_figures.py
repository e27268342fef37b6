"""Margins, ranges and radii printed in textbooks and papers."""

import numpy as np
import pytest

from ssaudit.margins.disk import find_disk_margin
from ssaudit.margins.gain_range import find_gain_range
from ssaudit.margins.loop_margins import find_loop_margins
from ssaudit.margins.stability_radius import find_stability_radius
from ssaudit.margins.stable_gains import find_stable_gains


def make_loop(num, den):
    """Controllable canonical form of a strictly proper transfer function with leading 1."""
    n = len(den) - 1
    A = np.zeros((1, n, n))
    A[0, 0] = -np.array(den[1:], dtype=float)
    A[0, 1:, :-1] = np.eye(n - 1)
    B = np.eye(n)[None, :, :1]
    C = np.zeros((1, 1, n))
    C[0, 0, n - len(num) :] = num
    return A, B, C, np.zeros((1, 1, 1))


def test_three_lags():
    """Nise, Control Systems Engineering, Routh-Hurwitz example (from memory): 0 < K < 1386."""
    found = find_gain_range(*make_loop([1], [1, 18, 77, 0]))
    assert found.low[0] == pytest.approx(0, abs=1e-12)
    assert found.high[0] == pytest.approx(1386, rel=1e-12)
    assert found.high_frequency[0] == pytest.approx(np.sqrt(77), rel=1e-12)
    assert found.high_frequency[0] == pytest.approx(8.775, abs=5e-4)


def test_unstable_plant():
    """Franklin, Powell and Emami-Naeini, Routh example (from memory): K > 7.5."""
    loop = make_loop([1, 1], [1, 5, -6, 0])
    gains = find_stable_gains(*loop)
    np.testing.assert_allclose(gains.low, [[7.5]], rtol=1e-12)
    np.testing.assert_array_equal(gains.high, [[np.inf]])
    assert not find_gain_range(*loop).stable[0]


def test_disk_margin():
    """Seiler, Packard and Gahinet, IEEE Control Systems Magazine 40(5), 2020 (from memory)."""
    loop = make_loop([25], [1, 10, 10, 10])
    margins, disk = find_loop_margins(*loop), find_disk_margin(*loop)
    assert margins.gain_high[0] == pytest.approx(3.6, rel=1e-12)
    assert margins.phase_deg[0] == pytest.approx(29.1, abs=0.05)
    assert disk.alpha[0] == pytest.approx(0.458, abs=5e-4)
    assert disk.gain_low[0] == pytest.approx(0.627, abs=5e-4)
    assert disk.gain_high[0] == pytest.approx(1.594, abs=5e-4)
    assert disk.phase_deg[0] == pytest.approx(25.8, abs=0.05)


def test_no_guaranteed_margin():
    """Doyle, IEEE Trans. Automatic Control AC-23(4), 1978 (from memory): m < 1 + 1/(αβ)."""
    A, B, C = np.array([[1.0, 1.0], [0.0, 1.0]]), np.array([[0.0], [1.0]]), np.array([[1.0, 0.0]])
    K, Kf = 10 * np.array([[1.0, 1.0]]), 10 * np.array([[1.0], [1.0]])
    # The observer knows of the nominal gain only: the factor m is in the plant's input.
    loop_A = np.block([[A, np.zeros((2, 2))], [Kf @ C, A - B @ K - Kf @ C]])[None]
    loop_B = np.vstack([B, np.zeros((2, 1))])[None]
    loop_C = np.hstack([np.zeros((1, 2)), K])[None]
    found = find_gain_range(loop_A, loop_B, loop_C, np.zeros((1, 1, 1)))
    assert found.stable[0]
    assert found.confirmed[0]
    assert found.high[0] == pytest.approx(1.01, rel=1e-9)


def test_delay_of_an_integrator():
    """Standard result of any text on delay systems (from memory): K tau < π/2."""
    for K in (0.1, 1.0, 25.0):
        found = find_loop_margins(*make_loop([K], [1, 0]))
        assert found.delay_s[0] == pytest.approx(np.pi / (2 * K), rel=1e-12)


@pytest.mark.parametrize(
    ("zeta", "phase"), [(0.1, 11.42), (0.3, 33.27), (0.5, 51.83), (0.7, 65.16)]
)
def test_phase_margin_of_second_order(zeta, phase):
    """Ogata, Modern Control Engineering (from memory): phase margin over damping ratio."""
    found = find_loop_margins(*make_loop([1], [1, 2 * zeta, 0]))
    assert found.phase_deg[0] == pytest.approx(phase, abs=0.005)


def test_radius_of_a_jordan_block():
    """Closed form (sqrt(k² + 4) - k)/2 for [[-1, k], [0, -1]] at k = 4."""
    found = find_stability_radius(np.array([[[-1.0, 4.0], [0.0, -1.0]]]))
    assert found.radius[0] == pytest.approx(0.2360679775, rel=1e-7)


def test_sensitivity_of_poles_to_rounding_shows_in_the_radius():
    """Nilpotent integer matrix less I/128 (from memory): exactly stable, computed poles are not."""
    A = np.array(
        [
            [-9, 11, -21, 63, -252],
            [70, -69, 141, -421, 1684],
            [-575, 575, -1149, 3451, -13801],
            [3891, -3891, 7782, -23345, 93365],
            [1024, -1024, 2048, -6144, 24572],
        ],
        dtype=float,
    )
    found = find_stability_radius((A - np.eye(5) / 128)[None])
    # Never a comfortable number: either not stable by its poles, or a radius at rounding level.
    assert not found.stable[0] or found.radius[0] < 1e-9
    far = find_stability_radius((A - 2 * np.eye(5))[None])
    assert far.stable[0]
    assert far.radius[0] < 1e-3  # the poles at -2 look safe, and are not
