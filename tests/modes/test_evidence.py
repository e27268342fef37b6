"""Cross-checks accept LAPACK's poles of nasty matrices and notice poles that were tampered with."""

import numpy as np
import pytest

from ssaudit.modes import evidence
from ssaudit.modes.evidence import (
    characteristic_coefficients,
    coefficients_disagree,
    conjugates_disagree,
    cross_check,
    exact_not_stable,
    trace_disagrees,
)

SWING = np.array([[0.0, -0.757 / 7], [377.0, 0.0]])
"""Kundur, Power System Stability and Control (1994), Example 12.2 with KD = 0 (from memory)."""


def test_no_false_alarm_on_any_family(families):
    rng = np.random.default_rng(0)
    for name, draw in families.items():
        for _ in range(40):
            A = draw(rng)[None]
            poles = np.linalg.eigvals(A).astype(complex)
            assert not trace_disagrees(A, poles).any(), name
            assert not conjugates_disagree(poles).any(), name


def test_signs_never_contradict_exact_poles(families, exact_poles, monkeypatch):
    monkeypatch.setattr(evidence, "COEFFICIENT_STATES", 6)
    rng = np.random.default_rng(1)
    judged = 0
    for name, draw in families.items():
        for _ in range(20):
            A = draw(rng)
            if len(A) > evidence.COEFFICIENT_STATES:
                continue
            largest = exact_poles(A).real.max()
            stable, unstable = np.array([largest < 0]), np.array([largest >= 0])
            assert not coefficients_disagree(A[None], stable, unstable).any(), name
            judged += 1
    assert judged > 50


def test_signs_never_contradict_exact_poles_of_sampled_models(exact_poles):
    rng = np.random.default_rng(2)
    for _ in range(200):
        n = int(rng.integers(1, 5))
        A = rng.standard_normal((n, n)) * 0.8
        largest = np.abs(exact_poles(A)).max()
        stable, unstable = np.array([largest < 1]), np.array([largest >= 1])
        assert not coefficients_disagree(A[None], stable, unstable, sampled=True).any()


@pytest.mark.parametrize("sampled", [False, True])
def test_wrong_claims_are_noticed(sampled):
    """Negative control, with two states, for which the signs decide everything."""
    rng = np.random.default_rng(3)
    A = rng.standard_normal((200, 2, 2))
    poles = np.linalg.eigvals(A)
    stable = (np.abs(poles) < 1).all(axis=1) if sampled else (poles.real < 0).all(axis=1)
    assert coefficients_disagree(A, ~stable, stable, sampled=sampled).all()
    assert not coefficients_disagree(A, stable, ~stable, sampled=sampled).any()


def test_tampered_poles_are_noticed():
    rng = np.random.default_rng(4)
    A = rng.standard_normal((50, 8, 8))
    poles = np.linalg.eigvals(A).astype(complex)
    moved = poles.copy()
    moved[:, 3] += 1e-9
    assert trace_disagrees(A, moved).all()
    lopsided = poles.copy()
    lopsided[:, 0] += 1e-9j
    assert conjugates_disagree(lopsided).all()
    claim = np.ones(50, dtype=bool)
    assert (cross_check(A, moved, claim, ~claim) == "trace").all()
    assert (cross_check(A, poles, claim, ~claim) == "").all()
    assert conjugates_disagree(poles[:, rng.permutation(8)]).sum() == 0


def test_trace_bound_does_not_grow_with_units():
    rng = np.random.default_rng(5)
    A = rng.standard_normal((50, 8, 8))
    scale = 2.0 ** rng.integers(-40, 40, (50, 8))
    moved = np.linalg.eigvals(A).astype(complex)
    moved[:, 3] += 1e-9
    assert trace_disagrees(A * scale[:, None, :] / scale[:, :, None], moved).all()


def test_coefficients_are_within_their_bound():
    rng = np.random.default_rng(6)
    for n in range(1, 7):
        A = rng.standard_normal((20, n, n)) * 10.0 ** rng.uniform(-3, 3, (20, n, 1))
        value, error = characteristic_coefficients(A)
        for i in range(20):
            exact = [float(c) for c in evidence._exact_coefficients(A[i])]
            assert (np.abs(value[i] - exact) <= error[i] + 1e-16 * np.abs(exact)).all()
            assert (error[i] <= 1e-9 * np.abs(A[i]).sum() ** np.arange(n + 1)).all()


def test_nan_poles_fail_nothing():
    A = np.zeros((1, 2, 2))
    assert cross_check(A, np.full((1, 2), np.nan + 0j), np.array([False]), np.array([False])) == ""
    empty = np.zeros((0, 2, 2))
    assert len(cross_check(empty, np.zeros((0, 2), complex), np.zeros(0, bool), np.zeros(0, bool)))\
        == 0  # fmt: skip


def test_swing_equation_without_damping_is_certainly_not_stable():
    assert evidence.TRACE in exact_not_stable(SWING[None])[0]
    # The zeros are exact even if the export is rounded.
    assert exact_not_stable(SWING[None], entry_error=1e-3 * abs(SWING)) == [("trace",)]
    damped = SWING + np.diag([-10 / 7, 0])
    assert exact_not_stable(damped[None]) == [()]


def test_trace_is_summed_exactly():
    """In plain floating point this sum is 0; exactly it is -2^-60 or 2^-60."""
    off = 2.0**-60
    A = np.array([np.diag([1.0, -off, -1.0]), np.diag([1.0, off, -1.0])])
    codes = [evidence.TRACE in found for found in exact_not_stable(A)]
    assert codes == [False, True]
    assert float(np.trace(np.diag([1.0, -off, -1.0]))) == 0.0
    assert evidence.TRACE not in exact_not_stable(A, entry_error=off)[1]


def test_zero_rows_and_columns():
    row = np.array([[0.0, 0, 0], [1, -1, 0], [0, 2, -3]])
    assert evidence.ZERO_ROW in exact_not_stable(row[None])[0]
    assert evidence.ZERO_COLUMN in exact_not_stable(row.T[None])[0]
    assert exact_not_stable(row[None], entry_error=1e-9) == [()]


def test_grounds_never_contradict_exact_poles(exact_poles):
    rng = np.random.default_rng(7)
    found = 0
    for sampled in (False, True):
        for _ in range(300):
            n = int(rng.integers(1, 5))
            A = rng.integers(-3, 3, (n, n)) / (2.0 if sampled else 1.0)
            poles = exact_poles(A)
            # Poles on the boundary come out within roundoff of it.
            stable = (np.abs(poles) < 1 - 1e-9).all() if sampled else (poles.real < -1e-9).all()
            if stable:
                assert exact_not_stable(A[None], sampled=sampled) == [()]
            else:
                found += bool(exact_not_stable(A[None], sampled=sampled)[0])
    assert found > 200


def test_sampled_grounds():
    integrator = np.array([[1.0, 0.01], [0.0, 0.9]])
    assert evidence.UNIT_COLUMN in exact_not_stable(integrator[None], sampled=True)[0]
    assert evidence.UNIT_ROW in exact_not_stable(integrator.T[None], sampled=True)[0]
    turn = np.array([[0.0, 1.0], [-1.0, 0.0]])
    assert evidence.DETERMINANT in exact_not_stable(turn[None], sampled=True)[0]
    assert evidence.TRACE in exact_not_stable(-np.eye(5)[None] * 1.0, sampled=True)[0]
    assert exact_not_stable(0.999 * turn[None], sampled=True) == [()]
