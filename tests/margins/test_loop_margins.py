import os

import numpy as np
import pytest

from ssaudit.errors import LoopError
from ssaudit.margins.loop_margins import find_loop_margins

LONG = os.environ.get("SSAUDIT_LONG") == "1"


LOOPS = 20_000 if LONG else 2000


def second_order(zeta, wn):
    zero, one = np.zeros_like(zeta), np.ones_like(zeta)
    A = np.stack([zero, one, zero, -2 * zeta * wn], axis=1).reshape(-1, 2, 2)
    B = np.tile([[0.0], [1.0]], (len(zeta), 1, 1))
    return A, B, np.stack([wn**2, zero], axis=1)[:, None], np.zeros((len(zeta), 1, 1))


def test_second_order_closed_forms():
    rng = np.random.default_rng(1)
    zeta, wn = 10 ** rng.uniform(-5, 1, 1000), 10 ** rng.uniform(-4, 4, 1000)
    margins = find_loop_margins(*second_order(zeta, wn))
    assert margins.confirmed.all()
    # sqrt(sqrt(1 + 4ζ⁴) - 2ζ²), written so that it does not cancel.
    root = np.sqrt(1 / (np.sqrt(1 + 4 * zeta**4) + 2 * zeta**2))
    phase = np.arctan(2 * zeta / root)
    np.testing.assert_allclose(margins.phase_deg, np.degrees(phase), rtol=1e-9)
    np.testing.assert_allclose(margins.phase_frequency, wn * root, rtol=1e-11)
    np.testing.assert_allclose(margins.delay_s, phase / (wn * root), rtol=1e-9)
    np.testing.assert_array_equal(margins.gain_high, np.inf)
    np.testing.assert_array_equal(margins.gain_low, 0)


def test_delay_margin_of_an_integrator():
    K = np.geomspace(1e-3, 1e3, 50)
    one = np.ones((50, 1, 1))
    loop = 0 * one, one, K[:, None, None] * one, 0 * one
    margins = find_loop_margins(*loop)
    np.testing.assert_allclose(margins.delay_s, np.pi / (2 * K), rtol=1e-13)
    # With part of the delay already in the loop only the rest is left, and K tau < π/2.
    late = find_loop_margins(*loop, delay=0.4 / K)
    np.testing.assert_allclose(late.delay_s, (np.pi / 2 - 0.4) / K, rtol=1e-11)
    np.testing.assert_allclose(late.gain_high, np.pi / 0.8, rtol=1e-11)
    np.testing.assert_allclose(late.phase_deg, 90 - np.degrees(0.4), rtol=1e-11)
    lost = find_loop_margins(*loop, delay=1.6 / K)
    assert not lost.stable.any()
    assert lost.confirmed.all()
    assert np.isnan(lost.delay_s).all()


def crossings_of_sweep(value, w, refine):
    """Zeros of a swept function: sign changes, bisected on the function itself."""
    places = np.nonzero(np.sign(value[1:]) * np.sign(value[:-1]) < 0)[0]
    low, high = w[places], w[places + 1]
    rising = value[places + 1] > 0
    for _ in range(50):
        middle = (low + high) / 2
        up = (refine(middle) > 0) == rising
        low, high = np.where(up, low, middle), np.where(up, middle, high)
    return (low + high) / 2


def test_random_loops_against_dense_sweeps(tools):
    rng = np.random.default_rng(2)
    seen, severe = 0, 0
    for n in np.resize(np.arange(2, 31), LOOPS // 2):
        loops = tools.random(rng, 2, int(n), direct=0.05, damping=10 ** rng.uniform(-5, -1))
        margins = find_loop_margins(*loops)
        assert margins.confirmed.all()
        for p in np.nonzero(margins.stable)[0]:
            seen += 1
            severe += check_against_sweep(tools, [x[p] for x in loops], margins, p)
    assert seen > LOOPS * 0.5
    assert severe > LOOPS * 0.3


def check_against_sweep(tools, loop, margins, p):
    """No crossing of a sweep may be more severe than ours; ours must be true."""
    w = np.geomspace(1e-4, 1e5, 100_000)

    def at(w):
        return tools.sweep(*loop, 1j * w)

    L = at(w)
    axis = crossings_of_sweep(L.imag, w, lambda w: at(w).imag)
    k = -1 / at(axis).real
    assert (k[k > 1] >= margins.gain_high[p] * (1 - 1e-6)).all()
    assert (k[(k > 0) & (k < 1)] <= margins.gain_low[p] * (1 + 1e-6)).all()
    circle = crossings_of_sweep(np.abs(L) - 1, w, lambda w: np.abs(at(w)) - 1)
    angle = np.angle(-at(circle))
    assert (np.degrees(np.abs(angle)) >= margins.phase_deg[p] * (1 - 1e-6)).all()
    lag = np.mod(angle, 2 * np.pi) / circle
    assert (lag >= margins.delay_s[p] * (1 - 1e-6)).all()
    attained = 0
    for factor, where in (
        (margins.gain_high[p], margins.gain_high_frequency[p]),
        (margins.gain_low[p], margins.gain_low_frequency[p]),
    ):
        if np.isfinite(where):
            assert abs(1 + factor * at(np.array([where]))[0]) < 1e-6 * max(1, abs(factor))
            attained += 1
    if np.isfinite(margins.phase_frequency[p]):
        there = at(margins.phase_frequency[p : p + 1])[0]
        assert abs(abs(there) - 1) < 1e-6
        assert abs(np.degrees(abs(np.angle(-there))) - margins.phase_deg[p]) < 1e-4
        attained += 1
    return attained > 0


def test_resonances_that_a_sweep_steps_over():
    # A calm loop 0.5/(s + 1) and beside it a resonance of damping 1e-5 whose peak passes 1.
    rng = np.random.default_rng(3)
    wn, zeta = rng.uniform(3, 300, 100), 1e-5
    A = np.zeros((100, 3, 3))
    A[:, 0, 0], A[:, 1, 2] = -1, 1
    A[:, 2, 1], A[:, 2, 2] = -(wn**2), -2 * zeta * wn
    B = np.tile([[1.0], [0.0], [1.0]], (100, 1, 1))
    C = np.stack([np.full(100, 0.5), 0 * wn, 2 * zeta * wn * 3], axis=1)[:, None]
    margins = find_loop_margins(A, B, C, np.zeros((100, 1, 1)))
    assert margins.confirmed.all()
    assert np.isfinite(margins.phase_deg).all()
    # The crossings lie within a few half widths of the resonance.
    np.testing.assert_allclose(margins.phase_frequency, wn, rtol=1e-4)
    w = np.geomspace(0.01, 1000, 1000)  # negative control: the sweep sees no crossing at all
    missed = 0
    for f in wn:
        L = 0.5 / (1j * w + 1) + 6 * zeta * f * 1j * w / (f**2 - w**2 + 2j * zeta * f * w)
        missed += np.abs(L).max() < 1
    assert missed > 90


def test_loops_without_a_crossing_and_limits(tools):
    calm = find_loop_margins(*tools.loop([0.5], [1, 1]))
    assert (calm.phase_deg[0], calm.delay_s[0]) == (np.inf, np.inf)
    assert (calm.gain_high[0], calm.gain_high_db[0]) == (np.inf, np.inf)
    assert (calm.gain_low[0], calm.gain_low_db[0]) == (0, -np.inf)
    limit = find_loop_margins(*tools.loop([1, 3], [1, 1]))  # abs L falls from 3 to 1
    assert limit.phase_deg[0] == pytest.approx(180, rel=1e-8)
    assert limit.delay_s[0] == 0
    loud = find_loop_margins(*tools.loop([2, 3], [1, 1]))
    assert (loud.phase_deg[0], loud.delay_s[0]) == (np.inf, 0)
    lost = find_loop_margins(*tools.loop([1], [1, -3]))
    assert np.isnan([lost.gain_high[0], lost.phase_deg[0], lost.delay_s[0]]).all()
    assert lost.confirmed[0]
    unstable_plant = find_loop_margins(*tools.loop([4], [1, -2]))
    assert unstable_plant.gain_low[0] == pytest.approx(0.5)
    assert unstable_plant.gain_low_db[0] == pytest.approx(-6.0206, rel=1e-5)


def test_poles_on_the_axis_of_the_open_loop(tools):
    # (s + 1)²/s³: stable for k > 1/2, gain may fall to half at 1 rad/s; and an undamped pair.
    found = find_loop_margins(*tools.loop([1, 2, 1], [1, 0, 0, 0]))
    assert found.gain_low[0] == pytest.approx(0.5, rel=1e-10)
    assert found.gain_low_frequency[0] == pytest.approx(1.0, rel=1e-9)
    pair = find_loop_margins(*tools.loop([1, 0], [1, 0, 4]))
    assert pair.phase_deg[0] == pytest.approx(90, rel=1e-9)
    assert pair.gain_low[0] == 0


def sampled_twin(loop, h):
    """Euler's rule: the same loop sampled very fast."""
    A, B, C, D = loop
    return np.eye(A.shape[-1]) + h * A, h * B, C, D


def test_fast_sampling_tends_to_the_continuous_margins(tools):
    loop = tools.random(np.random.default_rng(4), 30, 5)
    continuous = find_loop_margins(*loop)
    slow, fast = (find_loop_margins(*sampled_twin(loop, h), h) for h in (2e-6, 1e-6))
    for name in ("gain_high", "phase_deg", "delay_s"):
        one, two, three = (getattr(found, name) for found in (continuous, slow, fast))
        both = np.isfinite(one) & np.isfinite(two) & np.isfinite(three)
        assert both.sum() > 3
        # What differs falls with the step: without its first order only the second is left.
        np.testing.assert_allclose(2 * three[both] - two[both], one[both], rtol=1e-4)


def test_sampled_delay_margin_in_whole_samples():
    # 0.2/(z - 1) at 0.1 s: with d samples of delay stable below a known gain 2 sin(π/(2(2d + 1))).
    dt = 0.1
    for d in range(1, 6):
        n = d + 1
        A, B, C = np.eye(n, k=1)[None].copy(), np.zeros((1, n, 1)), np.zeros((1, 1, n))
        A[0, 0, 0], B[0, -1, 0], C[0, 0, 0] = 1, 1, 1
        found = find_loop_margins(A, B, 0.2 * C, np.zeros((1, 1, 1)), dt)
        assert found.gain_high[0] == pytest.approx(10 * np.sin(np.pi / (4 * d + 2)), rel=1e-10)
    one = np.ones((1, 1, 1))
    plain = find_loop_margins(one, one, 0.2 * one, 0 * one, dt)
    most = plain.delay_s[0] / dt  # whole samples that fit
    assert 2 * np.sin(np.pi / (2 * (2 * np.floor(most) + 1))) > 0.2
    assert 2 * np.sin(np.pi / (2 * (2 * np.floor(most + 1) + 1))) < 0.2


@pytest.mark.parametrize("n", [1, 3, 8])
def test_delayed_loops_against_a_brute_sweep(tools, n):
    rng = np.random.default_rng(n)
    A, B, C, D = loop = tools.random(rng, 70, n, damping=0.05)
    plain = find_loop_margins(*loop)
    tau = np.where(np.isfinite(plain.delay_s), 0.5 * plain.delay_s, 1.0)
    late = find_loop_margins(*loop, delay=np.nan_to_num(tau))
    assert late.confirmed.all()
    both = plain.stable & (tau > 0)
    assert late.stable[both].all()
    finite = both & np.isfinite(plain.delay_s)
    assert finite.sum() > 5
    np.testing.assert_allclose(late.delay_s[finite], plain.delay_s[finite] / 2, rtol=1e-9)
    for p in np.nonzero(both)[0]:
        w = np.geomspace(1e-4, 1e4, 400_000)

        def at(w, p=p):
            return tools.sweep(A[p], B[p], C[p], D[p], 1j * w) * np.exp(-1j * w * tau[p])

        k = -1 / at(crossings_of_sweep(at(w).imag, w, lambda w, at=at: at(w).imag)).real
        k = np.append(k, -1 / at(np.zeros(1)).real)
        above, below = k[(k > 1) & (k < 900)], k[(k > 0) & (k < 1)]
        if len(above):
            assert late.gain_high[p] == pytest.approx(above.min(), rel=1e-6)
        if len(below):
            assert late.gain_low[p] == pytest.approx(below.max(), rel=1e-6)


def test_delay_with_direct_feedthrough():
    one = np.ones((2, 1, 1))
    D = one * [[[0.4]], [[1.5]]]
    found = find_loop_margins(-one, one, 0.1 * one, D, delay=[0.3, 0.3])
    np.testing.assert_array_equal(found.stable, [True, False])
    assert found.confirmed.all()
    # Just before 1/abs D, on the safe side.
    assert 2.0 * 0.99 < found.gain_high[0] <= 2.5


def test_units_and_order_of_states_do_not_matter(tools):
    rng = np.random.default_rng(5)
    A, B, C, D = tools.random(rng, 40, 8)
    units = np.exp2(rng.integers(-30, 30, (40, 8)))
    order = rng.permutation(8)
    odd = A * units[:, None, :] / units[:, :, None], B / units[:, :, None], C * units[:, None, :], D
    swapped = A[:, order][:, :, order], B[:, order], C[:, :, order], D
    expected = find_loop_margins(A, B, C, D)
    for changed in (odd, swapped):
        found = find_loop_margins(*changed)
        for name in ("gain_low", "gain_high", "phase_deg", "delay_s"):
            np.testing.assert_allclose(getattr(found, name), getattr(expected, name), rtol=1e-8)


def test_bad_input(tools):
    with pytest.raises(LoopError, match="2 channels"):
        find_loop_margins(*tools.random(np.random.default_rng(0), 1, 3, 2))
    one = np.ones((1, 1, 1))
    with pytest.raises(LoopError, match="sampled"):
        find_loop_margins(one, one, one, one, 0.1, delay=[0.1])
    with pytest.raises(LoopError, match="negative"):
        find_loop_margins(one, one, one, one, delay=[-0.1])
    mixed = np.array([[[-1.0]], [[np.nan]], [[np.inf]]])
    one = np.ones((3, 1, 1))
    found = find_loop_margins(mixed, one, 5 * one, 0 * one)
    assert np.isfinite(found.phase_deg[0])
    assert np.isnan(found.phase_deg[1:]).all()
    np.testing.assert_array_equal(found.confirmed, [True, False, False])
    found = find_loop_margins(mixed, one, 5 * one, 0 * one, delay=[0.1, 0.1, 0.1])
    np.testing.assert_array_equal(found.confirmed, [True, False, False])
    none = find_loop_margins(*(np.zeros((0, 1, 1)),) * 4)
    assert none.phase_deg.shape == (0,)
    static = find_loop_margins(
        np.zeros((1, 0, 0)), np.zeros((1, 0, 1)), np.zeros((1, 1, 0)), np.full((1, 1, 1), -0.5)
    )
    assert static.gain_high[0] == pytest.approx(2.0)
    assert static.phase_deg[0] == np.inf
