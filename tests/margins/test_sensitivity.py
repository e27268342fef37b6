import numpy as np
import pytest

from ssaudit.errors import LoopError
from ssaudit.margins.sensitivity import find_norm, find_sensitivity_peaks


def second_order(zeta, wn):
    """wn²/(s (s + 2 ζ wn)) as stacks."""
    zero, one = np.zeros_like(zeta), np.ones_like(zeta)
    A = np.stack([zero, one, zero, -2 * zeta * wn], axis=1).reshape(-1, 2, 2)
    B = np.tile([[0.0], [1.0]], (len(zeta), 1, 1))
    C = np.stack([wn**2, zero], axis=1)[:, None]
    return A, B, C, np.zeros((len(zeta), 1, 1))


def test_closed_form_of_the_peak_of_t():
    rng = np.random.default_rng(1)
    zeta, wn = 10 ** rng.uniform(-5, np.log10(0.7), 1000), 10 ** rng.uniform(-4, 4, 1000)
    peaks = find_sensitivity_peaks(*second_order(zeta, wn))
    assert peaks.confirmed.all()
    np.testing.assert_allclose(
        peaks.complementary, 1 / (2 * zeta * np.sqrt(1 - zeta**2)), rtol=2e-7
    )
    # At rounding level the peak is flat over sqrt(1e-7) of its width.
    np.testing.assert_allclose(
        peaks.complementary_frequency, wn * np.sqrt(1 - 2 * zeta**2), rtol=0.02
    )


def test_overdamped_t_peaks_at_zero_frequency():
    zeta = np.array([0.75, 1.0, 3.0])
    peaks = find_sensitivity_peaks(*second_order(zeta, np.ones(3)))
    np.testing.assert_allclose(peaks.complementary, 1.0, rtol=1e-7)


@pytest.mark.parametrize("dt", [0.0, 0.05])
@pytest.mark.parametrize("n", [2, 7, 16])
def test_no_frequency_of_a_sweep_is_worse(tools, n, dt):
    loops = tools.random(np.random.default_rng(n), 50, n, dt=dt, direct=0.1)
    peaks = find_sensitivity_peaks(*loops, dt)
    assert peaks.confirmed.all()
    assert peaks.stable.sum() > 8
    w = np.linspace(0, np.pi / dt, 20000) if dt else np.append(0, np.geomspace(1e-4, 1e4, 20000))
    s = np.exp(1j * w * dt) if dt else 1j * w
    for p in np.nonzero(peaks.stable)[0]:
        L = tools.sweep(*(x[p] for x in loops), s)
        swept = np.abs(1 / (1 + L)).max(), np.abs(L / (1 + L)).max()
        for ours, found in zip((peaks.sensitivity[p], peaks.complementary[p]), swept, strict=True):
            assert found <= ours * (1 + 1e-6)
            assert ours <= found * 1.05  # a fine sweep comes near


@pytest.mark.parametrize("m", [2, 4])
def test_several_channels_against_a_sweep(tools, m):
    A, B, C, D = loops = tools.random(np.random.default_rng(m), 20, 9, m)
    peaks = find_sensitivity_peaks(*loops)
    w = np.append(0, np.geomspace(1e-3, 1e4, 3000))
    for p in np.nonzero(peaks.stable)[0]:
        X = np.linalg.solve(1j * w[:, None, None] * np.eye(9) - A[p], B[p].astype(complex)[None])
        S = np.linalg.inv(np.eye(m) + C[p] @ X + D[p])
        swept = np.linalg.norm(S, 2, axis=(1, 2)).max()
        assert swept <= peaks.sensitivity[p] * (1 + 1e-6)
        assert peaks.sensitivity[p] <= swept * 1.02


def test_resonance_that_a_sweep_steps_over():
    zeta, wn = np.array([1e-5]), np.array([7.3])
    A, B, C, D = second_order(zeta, wn)
    A = A - B @ C  # closed: the resonance itself
    peak = find_norm(A, B, C, D)
    assert peak.value[0] == pytest.approx(0.5e5, rel=1e-6)
    w = np.geomspace(0.01, 1000, 1000)  # negative control
    swept = np.abs(wn**2 / (wn**2 - w**2 + 2j * zeta * wn * w)).max()
    assert swept < 0.01 * peak.value[0]


def test_lost_ill_posed_and_broken_points(tools):
    one = np.ones((4, 1, 1))
    A, D = one * [[[-1.0]], [[3.0]], [[-1.0]], [[np.nan]]], one * [[[0.0]], [[0]], [[-1.0]], [[0]]]
    peaks = find_sensitivity_peaks(A, one, one, D)
    np.testing.assert_allclose(peaks.sensitivity, [1.0, np.nan, np.nan, np.nan])
    np.testing.assert_array_equal(peaks.stable, [True, False, False, False])
    np.testing.assert_array_equal(peaks.confirmed, [True, True, False, False])


def test_static_loop_and_no_points():
    empty = np.zeros((2, 0, 0)), np.zeros((2, 0, 1)), np.zeros((2, 1, 0))
    peaks = find_sensitivity_peaks(*empty, np.array([[[1.0]], [[-0.5]]]))
    np.testing.assert_allclose(peaks.sensitivity, [0.5, 2.0])
    none = find_sensitivity_peaks(*(np.zeros((0, 1, 1)),) * 4)
    assert none.sensitivity.shape == (0,)


def test_shapes_are_checked():
    with pytest.raises(LoopError, match="shapes"):
        find_sensitivity_peaks(np.eye(2), np.eye(2), np.eye(2), np.eye(2))
