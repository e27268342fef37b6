import numpy as np

from ssaudit.margins.responses import respond, respond_with_slope, response_noise
from ssaudit.margins.state_space import read_loop


def test_slope_agrees_with_differences(tools):
    loop = read_loop(*tools.random(np.random.default_rng(3), 10, 4))
    owner, w, h = np.arange(10), np.geomspace(0.1, 100, 10), 1e-6
    _, slope = respond_with_slope(loop, owner, w)
    change = (respond(loop, owner, w * (1 + h)) - respond(loop, owner, w * (1 - h))) / (
        2 * h * w[:, None, None]
    )
    np.testing.assert_allclose(slope, change, rtol=1e-5, atol=1e-9 * np.abs(slope).max())


def test_a_pole_on_the_axis_and_infinity():
    loop = read_loop([[[0.0]]], [[[1.0]]], [[[1.0]]], [[[0.25]]])
    response = respond(loop, np.zeros(3, dtype=int), np.array([0.0, 1.0, np.inf]))[:, 0, 0]
    assert np.isnan(response[0])
    np.testing.assert_allclose(response[1:], [0.25 - 1j, 0.25])


def test_noise_is_that_of_cancelling_terms():
    # 1/(s + 1) - 1/(s + 1): nothing but rounding is left.
    A, B, C = -np.eye(2)[None], np.ones((1, 2, 1)), np.array([[[1.0, -1.0]]])
    loop = read_loop(A, B, C, np.zeros((1, 1, 1)))
    owner, w = np.array([0]), np.array([0.3])
    assert np.abs(respond(loop, owner, w)).item() <= response_noise(loop, owner, w).item()
