"""Parts in the path: their models against the formulas they are named after."""

import numpy as np
import pytest
from scipy import signal

from ssaudit.errors import LoopError
from ssaudit.loop import parts
from ssaudit.loop.parts import chain, from_fraction, from_state_space

FREQUENCIES = np.logspace(-2, 3, 40)
S = 1j * FREQUENCIES


def response(model, s=S):
    n = len(model.A)
    inverse = [np.linalg.solve(value * np.eye(n) - model.A, model.B) for value in s]
    return np.array([(model.C @ x + model.D)[0, 0] for x in inverse])


@pytest.mark.parametrize(
    ("model", "formula"),
    [
        (parts.first_order(0.3), 1 / (0.3 * S + 1)),
        (parts.second_order(40.0, 0.6), 1600 / (S**2 + 48 * S + 1600)),
        (parts.notch(25.0, 0.4, 0.1), (S**2 + 2 * S + 625) / (S**2 + 20 * S + 625)),
        (parts.lead_lag(0.5, 0.02), (0.5 * S + 1) / (0.02 * S + 1)),
        (from_fraction([2.0, 0.0, 3.0], [1.0, 4.0, 0.0, 0.0]), (2 * S**2 + 3) / (S**3 + 4 * S**2)),
        (from_fraction([5.0], [2.0]), 2.5 + 0 * S),
    ],
    ids=["lag", "second_order", "notch", "lead_lag", "integrators", "static"],
)
def test_response_is_that_of_the_formula(model, formula):
    np.testing.assert_allclose(response(model), formula, rtol=1e-10)
    assert not np.allclose(1.001 * response(model), formula, rtol=1e-10)


def test_random_fractions_agree_with_scipy():
    rng = np.random.default_rng(1)
    for n in range(1, 7):
        bottom = np.poly(-rng.uniform(0.1, 50, n))
        top = rng.standard_normal(n + 1)
        expected = signal.freqs(top, bottom, FREQUENCIES)[1]
        np.testing.assert_allclose(response(from_fraction(top, bottom)), expected, rtol=1e-7)


@pytest.mark.parametrize("order", range(1, 9))
def test_delay_model_has_unit_gain_and_the_phase_of_the_delay(order):
    model = parts.delay(0.2, order)
    slow = 1j * np.linspace(0, order / 2 / 0.2, 20)
    np.testing.assert_allclose(np.abs(response(model, slow)), 1.0, rtol=1e-9)
    # The first wrong term of the phase: (N!)² (ωτ)^(2N+1) / ((2N)! (2N+1)!).
    late = np.angle(response(model, slow) * np.exp(0.2 * slow))
    factorial = [float(np.prod(np.arange(1, k + 1))) for k in range(2 * order + 2)]
    first = factorial[order] ** 2 * np.abs(0.2 * slow) ** (2 * order + 1)
    bound = first / (factorial[2 * order] * factorial[2 * order + 1])
    assert np.all(np.abs(late) <= 1.3 * bound + 1e-9)


def test_chain_follows_the_order_and_names_the_states():
    given = [
        parts.first_order(0.5).at("slow", input="a"),
        parts.second_order(9.0, 0.5).at("quick", input="*"),
        parts.delay(0.1, 2).at("late", input="a"),
        parts.first_order(1.0).at("sensor", signal="a"),
    ]
    path = chain(given, ["a", "b"], "input")
    assert path.states == (
        "slow.1", "quick a.1", "quick a.2", "late.1", "late.2", "quick b.1", "quick b.2",
    )  # fmt: skip
    np.testing.assert_allclose(path.delays, [0.1, 0.0])
    s = 3j
    whole = path.C @ np.linalg.solve(s * np.eye(7) - path.A, path.B) + path.D
    quick = 81 / (s**2 + 9 * s + 81)
    late = response(parts.delay(0.1, 2), [s])[0]
    np.testing.assert_allclose(np.diag(whole), [quick * late / (0.5 * s + 1), quick], rtol=1e-12)
    assert whole[0, 1] == whole[1, 0] == 0


@pytest.mark.parametrize(
    ("build", "message"),
    [
        (lambda: from_fraction([1.0, 0.0, 0.0], [1.0, 1.0]), "improper"),
        (lambda: from_fraction([1.0], [0.0, 0.0]), "denominator"),
        (lambda: parts.first_order(0.0), "not positive"),
        (lambda: parts.first_order(float("nan")), "not positive"),
        (lambda: parts.delay(-1.0, 2), "delay"),
        (lambda: parts.delay(1.0, 9), "pade"),
        (lambda: parts.notch(1.0, 0.5, -0.1), "depth"),
        (lambda: from_state_space([[1.0]], [1.0, 2.0], [1.0], 0.0), "do not fit"),
        (lambda: from_state_space([[np.inf]], [1.0], [1.0], 0.0), "not finite"),
        (lambda: parts.first_order(1.0).at("x"), "either input or signal"),
        (lambda: parts.first_order(1.0).at("x", input="a", signal="b"), "either input or signal"),
    ],
)
def test_what_is_no_part_is_refused(build, message):
    with pytest.raises(LoopError, match=message):
        build()
