import numpy as np
import pytest

from ssaudit.margins.stable_gains import find_stable_gains


@pytest.mark.parametrize("dt", [0.0, 0.1])
def test_several_channels_against_poles(tools, dt):
    loops = tools.random(np.random.default_rng(5), 12, 7, 3, dt=dt, direct=0.1)
    gains = find_stable_gains(*loops, dt)
    assert gains.confirmed.all()
    k = np.linspace(-20, 20, 1601) + 1e-3
    for p in range(12):
        A, B, C, D = (x[p] for x in loops)
        inner = np.linalg.inv(np.eye(3) + k[:, None, None] * D)
        poles = np.linalg.eigvals(A - k[:, None, None] * B @ inner @ C)
        truth = (poles.real.max(1) if dt == 0 else np.abs(poles).max(1) - 1) < 0
        ours = ((gains.low[p] < k[:, None]) & (k[:, None] < gains.high[p])).any(axis=1)
        np.testing.assert_array_equal(ours, truth)


def test_two_loops_side_by_side_have_the_common_range(tools):
    first, second = tools.loop([6], [1, 3, 3, 1]), tools.loop([2, 1], [1, 1, 4, 0, 1])
    joined = []
    for a, b in zip(first, second, strict=True):
        block = np.zeros((1, a.shape[1] + b.shape[1], a.shape[2] + b.shape[2]))
        block[:, : a.shape[1], : a.shape[2]], block[:, a.shape[1] :, a.shape[2] :] = a, b
        joined.append(block)
    both = find_stable_gains(*joined)
    one, two = find_stable_gains(*first), find_stable_gains(*second)
    k = np.linspace(-3, 5, 4001) + 1e-4
    common = [
        ((g.low[0] < k[:, None]) & (k[:, None] < g.high[0])).any(axis=1) for g in (one, two, both)
    ]
    np.testing.assert_array_equal(common[0] & common[1], common[2])
    assert common[0].any()
