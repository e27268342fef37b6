from fractions import Fraction

import numpy as np
import pytest

from ssaudit.margins.gain_range import find_gain_range
from ssaudit.margins.stable_gains import find_stable_gains


def is_hurwitz(coefficients):
    """Routh's test in exact arithmetic: all roots strictly to the left."""
    while coefficients and coefficients[0] == 0:
        coefficients = coefficients[1:]
    if coefficients[0] < 0:
        coefficients = [-c for c in coefficients]
    upper, lower = coefficients[0::2], coefficients[1::2]
    for _ in range(len(coefficients) - 1):
        if not lower or lower[0] <= 0:
            return False
        following = upper[1:] + [Fraction(0)] * (len(lower) - len(upper[1:]))
        beside = lower[1:] + [Fraction(0)] * (len(following) - len(lower[1:]))
        ratio = upper[0] / lower[0]
        upper, lower = lower, [a - ratio * b for a, b in zip(following, beside, strict=True)]
        while len(lower) > 1 and len(lower) > len(upper):
            lower = lower[:-1]
    return True


def closed(num, den, k):
    padded = [0] * (len(den) - len(num)) + list(num)
    return [Fraction(int(d)) + k * Fraction(int(n)) for n, d in zip(padded, den, strict=True)]


def test_routh_itself():
    assert is_hurwitz([Fraction(c) for c in (1, 6, 11, 6)])
    assert not is_hurwitz([Fraction(c) for c in (1, 6, 11, 66)])
    assert is_hurwitz([Fraction(c) for c in (1, 6, 11, 65)])
    assert not is_hurwitz([Fraction(c) for c in (1, 0, 1)])
    assert is_hurwitz([Fraction(c) for c in (-1, -3)])


def integer_loops(count):
    """Random integer loops of two to six states, biproper ones and integrators among them."""
    rng = np.random.default_rng(11)
    for i in range(count):
        n = int(rng.integers(2, 7))
        den = [1]
        for _ in range(n):
            den = np.convolve(den, [1, int(rng.integers(-1, 8))])
        num = rng.integers(-3, 12, int(rng.integers(1, n + (2 if i % 5 == 0 else 1))))
        if num.any():
            yield num, den


@pytest.mark.filterwarnings("error")
def test_against_exact_routh_arithmetic(tools):
    stable, tested = 0, 0
    for num, den in integer_loops(220):
        loop = tools.loop(num, den)
        gains = find_stable_gains(*loop)
        around = find_gain_range(*loop)
        assert gains.confirmed[0]
        assert around.confirmed[0]
        tested += 1
        assert is_hurwitz(closed(num, den, Fraction(1))) == around.stable[0]
        stable += around.stable[0]
        low, high = gains.low[0], gains.high[0]
        for sign, ends in ((1, low), (-1, high)):
            for end in ends[np.isfinite(ends)]:
                step = Fraction(1, 10**8) * max(abs(Fraction(end)), Fraction(1, 10**3))
                assert is_hurwitz(closed(num, den, Fraction(end) + sign * step))
                assert not is_hurwitz(closed(num, den, Fraction(end) - sign * step))
        for k in np.linspace(-30, 30, 61) + 0.123456789:
            ours = bool(np.any((low < k) & (k < high)))
            assert ours == is_hurwitz(closed(num, den, Fraction(float(k))))
    assert tested >= 200
    assert stable > 40


def test_range_around_one_is_one_of_all_ranges(tools):
    for dt in (0.0, 0.1):
        loops = tools.random(np.random.default_rng(4), 60, 9, dt=dt, direct=0.1)
        around, gains = find_gain_range(*loops, dt), find_stable_gains(*loops, dt)
        assert around.confirmed.all()
        inside = (gains.low < 1) & (gains.high > 1)
        np.testing.assert_array_equal(inside.any(axis=1), around.stable)
        np.testing.assert_array_equal(gains.low[inside], around.low[around.stable])
        np.testing.assert_array_equal(gains.high[inside], around.high[around.stable])
        assert (gains.low[:, 1:] >= 0).any()  # some have more than one interval


def test_tensor_and_scalar_ways_agree(tools):
    # A second, idle channel sends the loop through the general eigenproblem.
    A, B, C, D = tools.random(np.random.default_rng(8), 40, 6, direct=0.1)
    wide = A, np.append(B, 0 * B, 2), np.append(C, 0 * C, 1), np.zeros((40, 2, 2))
    wide[3][:, :1, :1] = D
    one, two = find_gain_range(A, B, C, D), find_gain_range(*wide)
    assert two.confirmed.all()
    np.testing.assert_allclose(two.low, one.low, rtol=1e-8)
    np.testing.assert_allclose(two.high, one.high, rtol=1e-8)


def test_sampled_integrator_and_half_the_sampling_rate():
    one = np.ones((1, 1, 1))
    found = find_gain_range(one, one, one, 0 * one, 0.5)  # 1/(z - 1): 0 < k < 2
    assert found.low[0] == 0
    assert found.high[0] == pytest.approx(2, rel=1e-14)
    assert found.low_frequency[0] == 0
    assert found.high_frequency[0] == pytest.approx(np.pi / 0.5)


def test_fast_sampling_tends_to_the_continuous_range(tools):
    A, B, C, D = tools.random(np.random.default_rng(9), 30, 5)
    continuous = find_gain_range(A, B, C, D)
    # Of much faster sampling the rounded numbers leave ends uncertain by 1e-6 and more.
    slow, fast = (find_gain_range(np.eye(5) + h * A, h * B, C, D, h) for h in (2e-6, 1e-6))
    both = continuous.stable & np.isfinite(continuous.high)
    assert both.sum() > 5
    assert slow.confirmed.all()
    assert fast.confirmed.all()
    # What differs falls with the step: without its first order only the second is left.
    limit = 2 * fast.high[both] - slow.high[both]
    np.testing.assert_allclose(limit, continuous.high[both], rtol=1e-4)


def test_a_factor_that_makes_the_loop_ill_posed_is_an_end():
    # L = -0.5 + 0.1/(s + 1): the pole -(1 - 0.4 k)/(1 - 0.5 k) passes through infinity at k = 2.
    one = np.ones((1, 1, 1))
    loop = -one, one, 0.1 * one, -0.5 * one
    found = find_gain_range(*loop)
    assert found.high[0] == pytest.approx(2, rel=1e-12)
    assert found.high_frequency[0] == np.inf
    gains = find_stable_gains(*loop)
    np.testing.assert_allclose(gains.low, [[-np.inf, 2.5]], rtol=1e-12)
    np.testing.assert_allclose(gains.high, [[2.0, np.inf]], rtol=1e-12)


def test_lost_at_one_broken_and_ill_posed_points():
    one = np.ones((5, 1, 1))
    A = one * [[[2.0]], [[1.0]], [[np.nan]], [[-1.0]], [[-1.0]]]
    D = one * [[[0.0]], [[0.0]], [[0.0]], [[-1.0]], [[0.0]]]
    found = find_gain_range(A, one, one, D)
    np.testing.assert_array_equal(found.stable, [False, False, False, False, True])
    np.testing.assert_allclose(found.low, [np.nan] * 4 + [-1])
    assert not found.confirmed[2]
    gains = find_stable_gains(A, one, one, D)
    np.testing.assert_allclose(gains.low[:2, 0], [2.0, 1.0])


def test_uncontrollable_axis_pole_is_stable_for_no_factor():
    A = np.array([[[0.0, 1.0, 0.0], [-4.0, 0.0, 0.0], [0.0, 0.0, -1.0]]])
    B, C = np.array([[[0.0], [0.0], [1.0]]]), np.array([[[0.0, 0.0, 1.0]]])
    assert np.isnan(find_stable_gains(A, B, C, np.zeros((1, 1, 1))).low).all()
    assert not find_gain_range(A, B, C, np.zeros((1, 1, 1))).stable[0]


def test_no_crossing_at_all_is_no_limit():
    one = np.ones((1, 1, 1))
    found = find_gain_range(-one, one, 0 * one, 0 * one)
    np.testing.assert_array_equal([found.low[0], found.high[0]], [-np.inf, np.inf])


@pytest.mark.parametrize("m", [1, 2])
def test_units_order_and_stacking_do_not_matter(tools, m):
    rng = np.random.default_rng(10)
    A, B, C, D = tools.random(rng, 25, 6, m, direct=0.1)
    expected = find_gain_range(A, B, C, D)
    units = np.exp2(rng.integers(-20, 20, (25, 6)))
    order = rng.permutation(6)
    odd = A * units[:, None, :] / units[:, :, None], B / units[:, :, None], C * units[:, None, :], D
    swapped = A[:, order][:, :, order], B[:, order], C[:, :, order], D
    for changed in (odd, swapped):
        found = find_gain_range(*changed)
        np.testing.assert_allclose(found.low, expected.low, rtol=1e-9)
        np.testing.assert_allclose(found.high, expected.high, rtol=1e-9)
    backwards = find_gain_range(*(x[::-1] for x in (A, B, C, D)))
    np.testing.assert_allclose(backwards.high[::-1], expected.high, rtol=1e-12)
    alone = [find_gain_range(*(x[i : i + 1] for x in (A, B, C, D))).high[0] for i in range(25)]
    np.testing.assert_allclose(alone, expected.high, rtol=1e-12)


def test_widely_spread_poles(tools):
    # Eleven decades between the slowest and the fastest pole.
    den = np.polymul(np.polymul([1, 1e-5], [1, 1e-5]), [1, 1e-5])
    slow = tools.loop([1e-15], den)
    A = np.zeros((1, 4, 4))
    A[:, :3, :3], A[0, 3, 3], A[0, 3, :3] = slow[0], -1e6, slow[2][0, 0]
    B, C = np.append(slow[1], [[[0.0]]], 1), np.array([[[0.0, 0.0, 0.0, 1e6]]])
    found = find_gain_range(A, B, C, np.zeros((1, 1, 1)))
    assert found.high[0] == pytest.approx(8, rel=1e-6)
    assert found.high_frequency[0] == pytest.approx(np.sqrt(3) * 1e-5, rel=1e-6)
