import numpy as np

from ssaudit.margins.balance import balance_loop, balance_states
from ssaudit.margins.responses import respond
from ssaudit.margins.state_space import read_loop


def test_balanced_rows_and_columns_are_equal():
    rng = np.random.default_rng(1)
    A = rng.standard_normal((20, 6, 6)) * 10.0 ** rng.uniform(-4, 4, (20, 1, 6))
    scale = balance_states(A)
    balanced = A * scale[:, None, :] / scale[:, :, None]
    off = np.square(balanced) * (1 - np.eye(6))
    np.testing.assert_allclose(off.sum(axis=1), off.sum(axis=2), rtol=1e-6)
    np.testing.assert_allclose(
        np.sort(np.linalg.eigvals(balanced)), np.sort(np.linalg.eigvals(A)), rtol=1e-6
    )


def test_balancing_a_loop_leaves_its_response_alone(tools):
    rng = np.random.default_rng(2)
    A, B, C, D = tools.random(rng, 10, 5)
    units = 10.0 ** rng.uniform(-8, 8, (10, 5))
    odd = read_loop(
        A * units[:, None, :] / units[:, :, None], B / units[:, :, None], C * units[:, None, :], D
    )
    even = balance_loop(odd)
    ratio = even.B / odd.B  # powers of two: no rounding at all
    np.testing.assert_array_equal(np.frexp(ratio)[0], 0.5)
    assert (
        np.linalg.norm(even.A, axis=(1, 2)).max() < 1e-3 * np.linalg.norm(odd.A, axis=(1, 2)).max()
    )
    owner, w = np.arange(10), np.full(10, 3.0)
    np.testing.assert_allclose(
        respond(even, owner, w), respond(read_loop(A, B, C, D), owner, w), rtol=1e-8
    )


def test_neighbours_in_the_stack_do_not_matter():
    A = np.random.default_rng(3).standard_normal((8, 4, 4))
    A[3] *= 10.0 ** np.arange(-8, 8, 4)[:, None]
    alone = np.concatenate([balance_states(A[i : i + 1]) for i in range(8)])
    np.testing.assert_array_equal(balance_states(A), alone)


def test_empty_rows_and_broken_entries_keep_their_scale():
    A = np.array([[[-1.0, 7.0], [0.0, -1.0]], [[np.nan, 1e9], [1.0, np.inf]]])
    scale = balance_states(A)
    np.testing.assert_array_equal(scale[0], 1.0)
    assert np.isfinite(scale).all()
