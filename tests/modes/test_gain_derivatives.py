"""Derivatives of poles and damping ratios with respect to gains, against differences."""

import mpmath
import numpy as np
import pytest

from ssaudit.loop.closing import close_output_feedback
from ssaudit.modes.gain_derivatives import damping_derivatives, pole_derivatives
from ssaudit.modes.poles import find_modes

STEP = 1e-6


def some_loop(seed, n=5, inputs=2, signals=3, through=0.3, dt=0.0):
    rng = np.random.default_rng(seed)
    shapes = [(n, n), (n, inputs), (signals, n), (signals, inputs), (inputs, signals)]
    A, B, C, D, K = (rng.standard_normal((1, *shape)) for shape in shapes)
    if dt:
        A *= 0.8 / np.abs(np.linalg.eigvals(A)).max()
        K *= 0.1
    return A, B, C, through * D, 0.5 * K


def poles_of(A, B, C, D, K, sign):
    closed, ill_posed = close_output_feedback(A, B, C, D, K, sign)
    assert not ill_posed.any()
    return closed


def matched(found, expected):
    """Poles in the order of those expected."""
    order = np.abs(expected[:, None] - found[None]).argmin(axis=1)
    assert len(set(order)) == len(order)
    return found[order]


def damping(poles, dt):
    s = np.log(poles) / dt if dt else poles
    return -s.real / np.abs(s)


def differences(A, B, C, D, K, sign, dt, poles):
    """Extrapolated central differences of poles and damping ratios for each gain."""
    _, inputs, signals = K.shape
    moves = np.empty((poles.size, inputs, signals), dtype=complex)
    ratios = np.empty((poles.size, inputs, signals))

    def central(i, j, step):
        ends = []
        for way in (step, -step):
            changed = K.copy()
            changed[0, i, j] += way
            ends.append(matched(np.linalg.eigvals(poles_of(A, B, C, D, changed, sign)[0]), poles))
        slopes = (ends[0] - ends[1]), damping(ends[0], dt) - damping(ends[1], dt)
        return [slope / (2 * step) for slope in slopes]

    for i in range(inputs):
        for j in range(signals):
            far, near = central(i, j, STEP), central(i, j, STEP / 2)
            moves[:, i, j], ratios[:, i, j] = (
                (4 * n - f) / 3 for n, f in zip(near, far, strict=True)
            )
    return moves, ratios


@pytest.mark.parametrize("sign", [-1, 1])
@pytest.mark.parametrize("dt", [0.0, 0.1])
@pytest.mark.parametrize("through", [0.0, 0.3])
def test_derivatives_agree_with_differences(sign, dt, through):
    for seed in range(5):
        A, B, C, D, K = some_loop(seed, through=through, dt=dt)
        poles, right, left, _ = find_modes(poles_of(A, B, C, D, K, sign))
        moves = pole_derivatives(B, C, D, K, sign, right, left)
        ratios = damping_derivatives(poles, moves, dt)
        expected, expected_ratios = differences(A, B, C, D, K, sign, dt, poles[0])
        size = np.abs(expected).max()
        np.testing.assert_allclose(moves[0], expected, atol=1e-6 * size)
        # Real poles have a damping ratio of 1 or -1 on either side.
        complex_ones = np.abs(poles[0].imag) > 1e-3
        scale = np.abs(expected_ratios[complex_ones]).max(initial=1.0)
        np.testing.assert_allclose(
            ratios[0][complex_ones], expected_ratios[complex_ones], atol=1e-6 * scale
        )
        # Negative controls: the other sign, and D left out, are other derivatives.
        other = pole_derivatives(B, C, D, K, -sign, right, left)
        assert not np.allclose(other[0], expected, atol=1e-3 * size)
        if through:
            without = pole_derivatives(B, C, 0 * D, K, sign, right, left)
            assert not np.allclose(without[0], expected, atol=1e-3 * size)


def test_second_order_loop_in_closed_form():
    """x'' = -K₁ x - K₂ x': ζ = K₂/(2 √K₁), exact to high precision."""
    mpmath.mp.dps = 30
    k1, k2 = mpmath.mpf("2.5"), mpmath.mpf("0.7")
    expected = [-k2 / (4 * k1 ** mpmath.mpf("1.5")), 1 / (2 * mpmath.sqrt(k1))]
    A, B = np.array([[[0.0, 1.0], [0.0, 0.0]]]), np.array([[[0.0], [1.0]]])
    C, D, K = np.eye(2)[None], np.zeros((1, 2, 1)), np.array([[[2.5, 0.7]]])
    poles, right, left, _ = find_modes(A - B @ K)
    ratios = damping_derivatives(poles, pole_derivatives(B, C, D, K, -1, right, left), 0.0)
    for of_pole in ratios[0]:
        np.testing.assert_allclose(of_pole[0], [float(x) for x in expected], rtol=1e-13)


def test_damping_of_a_sampled_pole_in_closed_form():
    """Radius r and angle θ of z: ζ = -ln r / sqrt(ln² r + θ²), by mpmath's own differences."""
    mpmath.mp.dps = 30
    dt, z = 0.1, mpmath.mpc("0.6", "0.5")

    def zeta(k):
        s = mpmath.log(z + k * mpmath.mpc("0.2", "-0.7")) / dt
        return -s.real / abs(s)

    found = damping_derivatives(np.array([complex(z)]), np.array([[[0.2 - 0.7j]]]), dt)
    assert found[0, 0, 0] == pytest.approx(float(mpmath.diff(zeta, 0)), rel=1e-12)


def test_real_poles_keep_their_damping_and_those_at_zero_have_none():
    moves = np.ones((3, 1, 1), dtype=complex)
    found = damping_derivatives(np.array([-2.0 + 0j, 3.0 + 0j, 0j]), moves, 0.0)
    assert found[:2, 0, 0].tolist() == [0.0, 0.0]
    assert np.isnan(found[2, 0, 0])
    # z = 0 is as fast as can be, and z = 1 is at s = 0.
    sampled = damping_derivatives(np.array([0j, 1 + 0j, 0.5 + 0j]), moves, 0.1)
    assert np.isnan(sampled[:2, 0, 0]).all()
    assert abs(sampled[2, 0, 0]) < 1e-14


def test_derivatives_of_a_stack_are_those_of_its_points():
    loops = [some_loop(seed) for seed in range(3)]
    stack = [np.concatenate(matrices) for matrices in zip(*loops, strict=True)]

    def derived(A, B, C, D, K):
        _, right, left, _ = find_modes(poles_of(A, B, C, D, K, -1))
        return pole_derivatives(B, C, D, K, -1, right, left)

    together = derived(*stack)
    for p, loop in enumerate(loops):
        np.testing.assert_allclose(together[p], derived(*loop)[0], rtol=1e-10)


def test_ill_posed_point_is_not_a_number_alone():
    loops = [some_loop(seed) for seed in range(2)]
    A, B, C, D, K = (np.concatenate(matrices) for matrices in zip(*loops, strict=True))
    closed = poles_of(A, B, C, D, K, -1)
    D[0], K[0] = 0.0, 0.0
    D[0, 0, 0], K[0, 0, 0] = 1.0, -1.0
    _, right, left, _ = find_modes(closed)
    moves = pole_derivatives(B, C, D, K, -1, right, left)
    assert not np.isfinite(moves[0]).all()
    assert np.isfinite(moves[1]).all()
