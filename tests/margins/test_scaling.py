import numpy as np
import pytest

from ssaudit.margins.scaling import norm_of_scaled, smallest_scaling, smooth_norm


def greatest_radius(M, angles=400):
    """Lower bound of μ: the largest spectral radius of M with its channels turned in phase."""
    turn = np.exp(1j * np.linspace(0, 2 * np.pi, angles))
    if M.shape[-1] == 2:
        U = np.stack([np.ones_like(turn), turn], axis=1)
    else:
        first, second = (x.ravel() for x in np.meshgrid(turn, turn))
        U = np.stack([np.ones_like(first), first, second], axis=1)
    return np.abs(np.linalg.eigvals(U[:, :, None] * M)).max()


@pytest.mark.parametrize(("m", "rtol", "angles"), [(2, 1e-4, 2000), (3, 2e-3, 150)])
def test_scaled_bound_equals_mu_up_to_three_channels(m, rtol, angles):
    rng = np.random.default_rng(m)
    M = rng.standard_normal((15, m, m)) + 1j * rng.standard_normal((15, m, m))
    M *= 10.0 ** rng.uniform(-2, 2, (15, m, 1))
    bound, logs = smallest_scaling(M, np.zeros(15))
    np.testing.assert_allclose(norm_of_scaled(M, logs), bound, rtol=1e-12)
    for matrix, value in zip(M, bound, strict=True):
        lower = greatest_radius(matrix, angles)
        assert lower <= value * (1 + 1e-9)
        assert value <= lower * (1 + rtol)
    assert (bound < 0.999 * norm_of_scaled(M, np.zeros((15, m)))).any()  # negative control


@pytest.mark.parametrize("power", [2.0, 16.0, 128.0])
def test_derivatives_of_the_smooth_norm_agree_with_differences(power):
    rng = np.random.default_rng(5)
    M = rng.standard_normal((6, 4, 4)) + 1j * rng.standard_normal((6, 4, 4))
    M[0] = np.linalg.qr(M[0])[0]  # all singular values equal
    x, h = 0.3 * rng.standard_normal((6, 4)), 1e-6
    x[0] = 0
    _, norm, slope, bend = smooth_norm(M, x, power)
    np.testing.assert_allclose(norm, norm_of_scaled(M, x), rtol=1e-12)
    for k in range(4):
        above, below = (smooth_norm(M, x + sign * h * np.eye(4)[k], power) for sign in (1, -1))
        np.testing.assert_allclose((above[0] - below[0]) / (2 * h), slope[:, k], atol=1e-8)
        np.testing.assert_allclose((above[2] - below[2]) / (2 * h), bend[:, k], atol=1e-5)
    assert np.linalg.eigvalsh(bend).min() > -1e-9  # it is convex
    assert np.abs(bend).max() > 0.1
