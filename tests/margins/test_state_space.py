import numpy as np
import pytest

from ssaudit.errors import LoopError
from ssaudit.margins.responses import respond
from ssaudit.margins.state_space import (
    feed_back,
    read_loop,
    sensitivity_of,
    to_continuous,
    typical_frequency,
    unwarp,
)


def test_closing_agrees_with_the_responses(tools):
    loop = read_loop(*tools.random(np.random.default_rng(1), 20, 5, 2, direct=0.2))
    owner, w = np.arange(20), np.geomspace(0.1, 100, 20)
    L, k = respond(loop, owner, w), np.linspace(-2, 2, 20)
    closed = np.linalg.solve((np.eye(2) + k[:, None, None] * L).swapaxes(1, 2), L.swapaxes(1, 2))
    T = respond(feed_back(loop, k), owner, w)
    np.testing.assert_allclose(T, closed.swapaxes(1, 2), rtol=1e-9)
    S = respond(sensitivity_of(loop), owner, w)
    np.testing.assert_allclose(S @ (np.eye(2) + L), np.broadcast_to(np.eye(2), S.shape), atol=1e-9)


def test_mapped_response_equals_the_sampled_one(tools):
    dt = 0.02
    A, B, C, D = loops = tools.random(np.random.default_rng(2), 15, 4, dt=dt, direct=1.0)
    mapped = to_continuous(read_loop(*loops), dt)
    w = np.geomspace(0.01, 1e3, 15)
    z = np.exp(1j * unwarp(w, dt) * dt)
    sampled = D + C @ np.linalg.solve(z[:, None, None] * np.eye(4) - A, B.astype(complex))
    np.testing.assert_allclose(respond(mapped, np.arange(15), w), sampled, rtol=1e-9)


def test_typical_frequency_of_poles_at_zero():
    np.testing.assert_array_equal(typical_frequency(np.zeros((2, 3), dtype=complex)), 1.0)
    assert typical_frequency(np.zeros((2, 0), dtype=complex)).shape == (2,)


def test_shapes_are_named_in_the_error():
    with pytest.raises(LoopError, match=r"\(1, 2, 1\)"):
        read_loop(
            np.zeros((1, 3, 3)), np.zeros((1, 2, 1)), np.zeros((1, 1, 3)), np.zeros((1, 1, 1))
        )
