from dataclasses import replace

import numpy as np
import pytest

from ssaudit.margins.cover import cover_left, cover_peak
from ssaudit.margins.modal_form import to_modes
from ssaudit.margins.norms import PlainNorm
from ssaudit.margins.peak_search import Peak
from ssaudit.margins.state_space import StateSpace


def resonances(w, zeta, gain):
    """Sum of gain w²/(s² + 2 ζ w s + w²), as a stack of one."""
    n = 2 * len(w)
    A, B, C = np.zeros((1, n, n)), np.zeros((1, n, 1)), np.zeros((1, 1, n))
    for i, (each, damping, size) in enumerate(zip(w, zeta, gain, strict=True)):
        at = slice(2 * i, 2 * i + 2)
        A[0, at, at] = each * np.array([[0, 1], [-1, -2 * damping]])
        B[0, 2 * i + 1], C[0, 0, 2 * i] = each, size
    return StateSpace(A, B, C, np.zeros((1, 1, 1)))


def test_cover_of_one_resonance_has_its_closed_form():
    zeta = 10 ** np.linspace(-5, -0.2, 25)
    for each in zeta:
        peak = cover_peak(to_modes(resonances([3.0], [each], [1.0])), PlainNorm(), 1e-7)
        assert peak.value[0] == pytest.approx(1 / (2 * each * np.sqrt(1 - each**2)), rel=2e-7)
        assert peak.frequency[0] == pytest.approx(3 * np.sqrt(1 - 2 * each**2), rel=1e-3)


def test_cover_finds_the_higher_of_two_resonances_far_apart():
    # 500 at 1e5 rad/s; at 1e-5 rad/s a little more, and the other's response there is 1.
    system = resonances([1e5, 1e-5], [1e-3, 1e-3], [1.0, 1.00002])
    x = 1 + 1e-3 * np.linspace(-3, 3, 100_001)
    truth = np.abs(1.00002 / (1 - x**2 + 2e-3j * x) + 1).max()
    peak = cover_peak(to_modes(system), PlainNorm(), 1e-7)
    assert peak.value[0] == pytest.approx(truth, rel=2e-7)
    assert peak.frequency[0] == pytest.approx(1e-5, rel=1e-3)
    # Negative control: the first resonance alone is lower by more than the tolerance.
    alone = cover_peak(to_modes(resonances([1e5], [1e-3], [1.0])), PlainNorm(), 1e-7)
    assert alone.value[0] < truth * (1 - 1e-5)


def test_peak_at_high_frequency():
    lag = StateSpace(-np.eye(1)[None], np.ones((1, 1, 1)), -np.ones((1, 1, 1)), np.ones((1, 1, 1)))
    peak = cover_peak(to_modes(lag), PlainNorm(), 1e-7)  # s/(s + 1)
    assert peak.value[0] == pytest.approx(1.0, rel=1e-7)
    assert peak.frequency[0] > 1e3


def test_several_channels_are_covered_by_their_largest_singular_value():
    rng = np.random.default_rng(4)
    A = rng.standard_normal((1, 6, 6)) - 3 * np.eye(6)
    system = StateSpace(A, rng.standard_normal((1, 6, 2)), rng.standard_normal((1, 3, 6)),
                        np.zeros((1, 3, 2)))  # fmt: skip
    peak = cover_peak(to_modes(system), PlainNorm(), 1e-7)
    w = np.linspace(0, 20, 20001)
    G = system.C @ np.linalg.solve(1j * w[:, None, None] * np.eye(6) - A, system.B + 0j)
    swept = np.linalg.norm(G, 2, axis=(1, 2)).max()
    assert swept <= peak.value[0] * (1 + 1e-7)
    assert peak.value[0] <= swept * (1 + 1e-5)


def test_rounding_beyond_the_tolerance_is_not_confirmed():
    form = to_modes(resonances([3.0], [0.1], [1.0]))
    assert cover_peak(form, PlainNorm(), 1e-7).confirmed[0]  # negative control
    for doubt in (1e-6, np.inf, np.nan):
        spoilt = replace(form, doubt=np.full(form.doubt.shape, doubt))
        peak = cover_peak(spoilt, PlainNorm(), 1e-7)
        assert not peak.confirmed[0]
        assert np.isnan(peak.value[0])
    assert not cover_peak(replace(form, floor=np.ones(1)), PlainNorm(), 1e-7).confirmed[0]


def test_neighbours_in_the_stack_do_not_matter():
    rng = np.random.default_rng(1)
    A = rng.standard_normal((300, 6, 6)) - 8 * np.eye(6)
    B, C = rng.standard_normal((300, 6, 1)), rng.standard_normal((300, 1, 6))
    form = to_modes(StateSpace(A, B, C, np.zeros((300, 1, 1))))
    whole = cover_peak(form, PlainNorm(), 1e-7)
    for i in range(0, 300, 37):
        alone = cover_peak(form[i : i + 1], PlainNorm(), 1e-7)
        assert alone.value[0] == pytest.approx(whole.value[i], rel=1e-12)


def test_a_rough_cover_stands_in_where_rounding_leaves_no_more_digits():
    form = to_modes(resonances([3.0], [0.1], [1.0]))
    exact = 1 / (0.2 * np.sqrt(0.99))
    # The doubt at the peak, relative: between 1e-7 and 5e-7, or more.
    for doubt, decided in ((1.5e-7, True), (1.5e-6, False)):
        spoilt = replace(form, doubt=np.full(form.doubt.shape, doubt * exact * 0.3))
        peak = Peak(*np.full((2, 1), np.nan), np.zeros(1, dtype=bool))
        cover_left(peak, np.array([0]), spoilt, PlainNorm(), 1e-7)
        assert not cover_peak(spoilt, PlainNorm(), 1e-7).confirmed[0]
        assert peak.confirmed[0] == decided
        if decided:
            assert peak.value[0] == pytest.approx(exact, rel=1e-6)
