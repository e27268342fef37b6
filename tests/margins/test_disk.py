import numpy as np
import pytest

from ssaudit.errors import LoopError
from ssaudit.margins.disk import find_disk_margin, join_both_ends, spread_of
from ssaudit.margins.scaling import smallest_scaling
from ssaudit.margins.state_space import StateSpace


@pytest.mark.parametrize("dt", [0.0, 0.1])
def test_single_loops_against_a_sweep(tools, dt):
    loops = tools.random(np.random.default_rng(2), 40, 8, dt=dt, direct=0.1)
    found = find_disk_margin(*loops, dt)
    assert found.confirmed.all()
    w = np.linspace(0, np.pi / dt, 20000) if dt else np.append(0, np.geomspace(1e-4, 1e4, 20000))
    s = np.exp(1j * w * dt) if dt else 1j * w
    for p in np.nonzero(found.stable)[0]:
        S = 1 / (1 + tools.sweep(*(x[p] for x in loops), s))
        swept = 1 / np.abs(S - 0.5).max()
        assert found.alpha[p] <= swept * (1 + 1e-6)
        assert swept <= found.alpha[p] * 1.05


@pytest.mark.parametrize("m", [2, 3])
def test_several_channels_against_a_sweep_of_mu(tools, m):
    A, B, C, D = loops = tools.random(np.random.default_rng(m), 8, 6, m)
    found = find_disk_margin(*loops)
    assert found.confirmed.all()
    w = np.append(0, np.geomspace(1e-3, 1e4, 1500))
    for p in np.nonzero(found.stable)[0]:
        X = np.linalg.solve(1j * w[:, None, None] * np.eye(6) - A[p], B[p].astype(complex)[None])
        M = np.linalg.inv(np.eye(m) + C[p] @ X + D[p]) - np.eye(m) / 2
        swept = 1 / smallest_scaling(M, np.zeros(len(M)))[0].max()
        assert found.alpha[p] <= swept * (1 + 2e-3)
        assert swept <= found.alpha[p] * 1.02


def test_changes_within_the_disk_never_lose_stability(tools):
    rng = np.random.default_rng(9)
    A, B, C, D = tools.random(rng, 10, 5, 3)
    found = find_disk_margin(A, B, C, D)
    lost = 0
    for p in np.nonzero(found.stable & np.isfinite(found.gain_high))[0]:
        gains = rng.uniform(found.gain_low[p], found.gain_high[p], (1000, 3))
        gains[:8] = np.where(np.indices((2, 2, 2)).reshape(3, 8).T, *np.array(
            [found.gain_high[p] * 0.999999, found.gain_low[p] * 1.000001]))  # fmt: skip
        poles = np.linalg.eigvals(A[p] - (B[p] * gains[:, None, :]) @ C[p])
        assert poles.real.max() < 0
        far = gains**40  # negative control: far outside the disk some are lost
        lost += (np.linalg.eigvals(A[p] - (B[p] * far[:, None, :]) @ C[p]).real > 0).any()
    assert lost


def test_units_of_channels_do_not_matter(tools):
    rng = np.random.default_rng(3)
    A, B, C, D = tools.random(rng, 12, 6, 3, direct=0.05)
    unit = 10.0 ** rng.uniform(-3, 3, (12, 3))
    moved = find_disk_margin(
        A, B * unit[:, None, :], C / unit[:, :, None], D * unit[:, None, :] / unit[:, :, None]
    )
    np.testing.assert_allclose(moved.alpha, find_disk_margin(A, B, C, D).alpha, rtol=3e-3)


def test_both_ends_of_a_single_loop():
    # One channel at each end: S_both - I/2 has the diagonal S - 1/2 twice and off it P S, K S.
    A = np.array([[[-1.0, 1.0, 0.0], [0.0, -2.0, 1.0], [0.0, 0.0, -3.0]]])
    B, C = np.array([[[0.0], [0.0], [1.0]]]), np.array([[[1.0, 0.0, 0.0]]])
    zero = np.zeros((1, 1, 1))
    K = StateSpace(np.zeros((1, 0, 0)), np.zeros((1, 0, 1)), np.zeros((1, 1, 0)), zero + 20.0)
    both = join_both_ends(StateSpace(A, B, C, zero), K)
    joint = find_disk_margin(both.A, both.B, both.C, both.D)
    single = find_disk_margin(A, B, 20 * C, zero)
    w = np.geomspace(1e-2, 1e2, 200_000)
    L = 20 / ((1j * w + 1) * (1j * w + 2) * (1j * w + 3))
    S = 1 / (1 + L)
    # The best scaling of [[S - 1/2, -a], [b, S - 1/2]] makes abs a = abs b = sqrt(abs(T S)).
    cross = np.sqrt(np.abs(L)) * np.abs(S)
    inner, phase = S - 0.5, np.exp(1j * (np.angle(L) / 2 + np.angle(S)))
    M = np.stack([inner, -cross * phase, cross * phase, inner], axis=1).reshape(-1, 2, 2)
    expected = 1 / np.linalg.norm(M, 2, axis=(1, 2)).max()
    assert joint.alpha[0] == pytest.approx(expected, rel=1e-3)
    assert joint.alpha[0] < single.alpha[0]


def test_spread_at_and_beyond_the_half_plane():
    low, high, phase = spread_of(np.array([0.0, 2.0, 4.0, np.inf, np.nan]))
    np.testing.assert_allclose(low, [1, 0, -1 / 3, -1, np.nan])
    np.testing.assert_allclose(high, [1, np.inf, np.inf, np.inf, np.nan])
    np.testing.assert_allclose(phase, [0, 90, np.degrees(2 * np.arctan(2)), 180, np.nan])


def test_lost_points_and_shapes(tools):
    found = find_disk_margin(*tools.loop([1], [1, -2]))
    assert np.isnan(found.alpha[0])
    assert found.confirmed[0]
    assert not found.stable[0]
    P = StateSpace(*(np.zeros((1, 1, 1)),) * 4)
    with pytest.raises(LoopError, match="1 signals to 1 inputs"):
        join_both_ends(P, StateSpace(*(np.zeros((1, 2, 2)),) * 4))


@pytest.mark.parametrize("m", [2, 3])
def test_several_channels_spread_over_decades(m):
    # One loop a channel, each of its own decade, joined weakly: no frequency near any pole is
    # worse than the margin found.
    rng = np.random.default_rng(20 + m)
    decided = 0
    for _ in range(8):
        n = 2 * m
        A, B, C = np.zeros((n, n)), np.zeros((n, m)), np.zeros((m, n))
        for i in range(m):
            w, zeta = 10 ** rng.uniform(-4, 4), 10 ** rng.uniform(-4, -0.5)
            A[2 * i : 2 * i + 2, 2 * i : 2 * i + 2] = w * np.array([[0, 1], [-1, -2 * zeta]])
            B[2 * i + 1, i], C[:, 2 * i + 1] = 1, w * zeta * 0.3 * rng.standard_normal(m)
            C[i, 2 * i + 1] = w * zeta
        found = find_disk_margin(A[None], B[None], C[None], np.zeros((1, m, m)))
        if not found.stable[0] or not found.confirmed[0]:
            continue
        decided += 1
        p = np.linalg.eigvals(A - B @ C)
        near = p.imag[:, None] + p.real[:, None] * np.linspace(-5, 5, 41)
        w = np.concatenate([near[near > 0], np.geomspace(1e-6, 1e6, 300)])
        X = np.linalg.solve(1j * w[:, None, None] * np.eye(n) - A, B.astype(complex)[None])
        M = np.linalg.inv(np.eye(m) + C @ X) - np.eye(m) / 2
        swept = smallest_scaling(M, np.zeros(len(M)))[0].max()
        assert swept * found.alpha[0] <= 1 + (1e-6 if m == 2 else 2e-3)
        assert swept * found.alpha[0] >= 0.99
    assert decided >= 5
