"""Proofs against exact poles, and verdicts by radii against proofs."""

import os
import sys

import numpy as np
import pytest

from ssaudit.errors import SsauditError
from ssaudit.modes.boxes import critical_corners, expand_closing, reach
from ssaudit.modes.entry_errors import closed_loop_entry_error
from ssaudit.modes.poles import find_modes
from ssaudit.modes.proof import BOTH, BOX, EXACT, _close_exactly, prove_points, prove_stability
from ssaudit.modes.radii import pole_radii

pytest.importorskip("flint")

SYSTEMS = 20_000 if os.environ.get("SSAUDIT_LONG") else 2_000


def judge(A, shrink=1.0, **kwargs):
    """Whether poles with radii say ok (1), lost (-1) or doubt (0), and the worst condition."""
    poles, right, left, _ = find_modes(A[None])
    radii = shrink * pole_radii(A[None], poles, right, left, **kwargs)[0]
    real = poles[0].real
    with np.errstate(all="ignore"):
        condition = np.max(np.linalg.norm(right[0], axis=0) * np.linalg.norm(left[0], axis=1))
    if (real + radii < 0).all():
        return 1, condition
    return (-1 if (real - radii > 0).any() else 0), condition


def test_no_verdict_contradicts_a_proof_and_doubt_is_rare(families):
    rng = np.random.default_rng(0)
    draws = list(families.values())
    ordinary = doubted = decided = 0
    for k in range(SYSTEMS):
        A = draws[k % len(draws)](rng)
        verdict, condition = judge(A)
        proof = prove_stability(A)
        assert proof.how == EXACT
        if verdict:
            decided += 1
            assert proof.outcome == ("stable" if verdict > 0 else "unstable")
        if condition < 1e6:
            ordinary += 1
            doubted += verdict == 0
    assert decided > 0.5 * SYSTEMS
    assert ordinary > 0.3 * SYSTEMS
    assert doubted <= 0.02 * ordinary


def test_bare_poles_contradict_a_proof(nilpotent):
    """Negative control: without radii, the comparison above fails."""
    A = nilpotent - np.eye(5) / 128
    verdict, _ = judge(A, shrink=0.0)
    assert verdict == -1
    assert prove_stability(A).outcome == "stable"


def test_nilpotent_matrix_is_in_doubt_by_numbers_and_settled_by_proof(nilpotent):
    for shift, outcome in ((0.0, "unstable"), (1 / 128, "stable"), (-1 / 128, "unstable")):
        A = nilpotent - shift * np.eye(5)
        assert judge(A)[0] == 0
        assert prove_stability(A).outcome == outcome


def test_exact_proof_agrees_with_exact_poles(families, exact_poles):
    rng = np.random.default_rng(1)
    for name, draw in families.items():
        for _ in range(10):
            A = draw(rng)
            largest = exact_poles(A).real.max()
            if largest != 0:
                expected = "stable" if largest < 0 else "unstable"
                assert prove_stability(A).outcome == expected, name


@pytest.mark.parametrize(
    ("A", "outcome"),
    [
        ([[0.0, -0.757 / 7], [377.0, 0.0]], "unstable"),  # Kundur (1994), Ex. 12.2 (from memory)
        ([[-10 / 7, -0.757 / 7], [377.0, 0.0]], "stable"),
        ([[10 / 7, -0.757 / 7], [377.0, 0.0]], "unstable"),
        ([[0.0]], "unstable"),
        ([[-5e-324]], "stable"),
        ([[0.0, 1.0], [0.0, 0.0]], "unstable"),
        ([[-1.0, 0, 0], [0, 0, 2.0], [0, -2.0, 0]], "unstable"),
    ],
)
def test_models_on_and_near_the_axis(A, outcome):
    assert prove_stability(np.array(A)).outcome == outcome


@pytest.mark.parametrize(
    ("A", "outcome"),
    [
        ([[1.0]], "unstable"),
        ([[-1.0]], "unstable"),
        ([[-1.0 + 2.0**-53]], "stable"),
        ([[0.0]], "stable"),
        ([[0.0, 1.0], [-1.0, 0.0]], "unstable"),
        ([[0.0, 1.0], [-1.0 + 2.0**-53, 0.0]], "stable"),
        ([[0.0, 1.0], [0.0, 0.0]], "stable"),
        ([[-1.0, 0.0], [0.0, 0.5]], "unstable"),
    ],
)
def test_sampled_models_on_and_near_the_circle(A, outcome):
    assert prove_stability(np.array(A), dt=0.1).outcome == outcome


def test_sampled_proof_agrees_with_exact_poles(exact_poles):
    rng = np.random.default_rng(2)
    for _ in range(60):
        n = int(rng.integers(1, 7))
        A = rng.standard_normal((n, n)) / np.sqrt(n) * rng.uniform(0.7, 1.2)
        largest = np.abs(exact_poles(A)).max()
        expected = "stable" if largest < 1 else "unstable"
        assert prove_stability(A, dt=0.1).outcome == expected


@pytest.mark.parametrize("gain", [1385.0, 1387.0])
def test_gain_range_of_three_lags(gain):
    """Nise, Control Systems Engineering, K/(s(s+7)(s+11)): stable for 0 < K < 1386 (memory)."""
    A = np.array([[-18.0, -77, 0], [1, 0, 0], [0, 1, 0]])
    B, C = np.array([[1.0], [0], [0]]), np.array([[0.0, 0, 1]])
    expected = "stable" if gain < 1386 else "unstable"
    assert prove_stability(A, B, C, None, np.array([[gain]])).outcome == expected
    assert prove_stability(A, B, C, None, np.array([[1386.0]])).outcome == "unstable"


def draw_loop(rng, n=6, inputs=2, outputs=3):
    """A loop whose rightmost pole is within a thousandth of the axis or so."""
    A = rng.standard_normal((n, n))
    B, C = rng.standard_normal((n, inputs)), rng.standard_normal((outputs, n))
    D, K = (
        0.1 * rng.standard_normal((outputs, inputs)),
        0.3 * rng.standard_normal((inputs, outputs)),
    )
    closing = B @ np.linalg.solve(np.eye(inputs) + K @ D, K) @ C
    A -= (np.linalg.eigvals(A - closing).real.max() + rng.uniform(-3e-3, 3e-3)) * np.eye(n)
    return A, B, C, D, K


@pytest.mark.parametrize("dt", [0.0, 0.1])
def test_no_model_of_a_box_contradicts_its_proof(dt):
    rng = np.random.default_rng(3)
    outcomes = {}
    for _ in range(60):
        A, B, C, D, K = draw_loop(rng)
        if dt:
            A = np.eye(6) + dt * A
            poles = np.linalg.eigvals(A - B @ np.linalg.solve(np.eye(2) + K @ D, K) @ C)
            A, B = A / np.abs(poles).max(), B / np.abs(poles).max()
            A *= 1 + rng.uniform(-1e-3, 1e-3)
        size = 10.0 ** rng.uniform(-6, -3)
        parts = {"A": A, "B": B, "C": C, "D": D, "K": K}
        errors = {name: size * np.abs(M) for name, M in parts.items()}
        proof = prove_stability(A, B, C, D, K, dt=dt, errors=errors)
        outcomes[proof.outcome] = outcomes.get(proof.outcome, 0) + 1
        if proof.outcome == "open":
            continue
        assert proof.how == BOX
        for _ in range(20):
            a, b, c, d, k = (
                M + 0.999 * errors[name] * rng.choice([-1, 1], M.shape) for name, M in parts.items()
            )
            poles = np.linalg.eigvals(a - b @ np.linalg.solve(np.eye(2) + k @ d, k) @ c)
            margin = 1 - np.abs(poles).max() if dt else -poles.real.max()
            assert (margin > 0) == (proof.outcome == "stable")
    assert outcomes["stable"] > 5
    assert outcomes["unstable"] > 5


def test_worst_corners_do_not_contradict_a_proof():
    """The corners to which the critical poles move furthest, where the box is nearly too large."""
    import flint

    rng = np.random.default_rng(5)
    close = 0
    for _ in range(60):
        A, B, C, D, K = draw_loop(rng)
        parts = {"A": A, "B": B, "C": C, "D": D, "K": K}
        closed = _close_exactly(flint, parts, -1)
        unit = {name: np.abs(M) for name, M in parts.items()}
        size = 1e-3
        while True:
            errors = {name: size * M for name, M in unit.items()}
            expansion = expand_closing(flint, parts, errors, -1)
            found = reach(flint, closed, expansion, errors, sampled=False)
            if found.high.max() < 0 or found.low.max() > 0:
                break
            size *= 0.8
        outcome = prove_stability(A, B, C, D, K, errors=errors).outcome
        for corner in critical_corners(parts, errors, found, outwards=outcome == "stable"):
            assert prove_stability(**corner).outcome == outcome
        # Half as much again is too much for most: the bound is nearly attained.
        wider = {name: 1.5 * M for name, M in errors.items()}
        for corner in critical_corners(parts, wider, found, outwards=outcome == "stable")[:1]:
            close += prove_stability(**corner).outcome != outcome
    assert close > 30


def test_proof_settles_doubt_from_rounding_and_is_open_only_for_cause():
    rng = np.random.default_rng(4)
    doubted = settled = both = 0
    for _ in range(80):
        A, B, C, D, K = draw_loop(rng)
        A, B, C, D = (np.vectorize(lambda x: float(f"{x:.4e}"))(M) for M in (A, B, C, D))
        error = closed_loop_entry_error(A[None], B[None], C[None], D[None], K, sign=-1, digits=5)
        closed = A - B @ np.linalg.solve(np.eye(2) + K @ D, K) @ C
        if judge(closed, entry_error=error)[0]:
            continue
        doubted += 1
        proof = prove_stability(A, B, C, D, K, digits=5)
        settled += proof.outcome != "open"
        both += proof.how == BOTH
    assert doubted > 5
    assert settled > 0
    assert settled + both >= 0.8 * doubted


def test_box_of_both_kinds_says_so():
    A = np.array([[0.0, 1.0], [-4.0, -1e-3]])
    errors = {"A": np.array([[0, 0], [0, 2e-3]])}
    assert prove_stability(A, errors=errors).how == BOTH
    inside = {"A": np.array([[0, 0], [0, 0.99e-3]])}
    assert prove_stability(A, errors=inside).outcome == "stable"
    growing = A + np.array([[0, 0], [0, 2e-3]])
    assert prove_stability(growing, errors=inside).outcome == "unstable"
    assert prove_stability(growing, errors=errors).how == BOTH


def test_descriptor_models_exactly():
    A = np.array([[-1.0, 2], [0, 1]])
    regular = np.array([[1e-12, 0], [0, -1e12]])
    assert prove_stability(A, E=regular).outcome == "stable"
    assert prove_stability(A, E=-regular).outcome == "unstable"
    algebraic = np.diag([1.0, 0.0])
    assert prove_stability(A, E=algebraic).outcome == "stable"
    assert prove_stability(-A, E=algebraic).outcome == "unstable"
    singular = prove_stability(np.diag([1.0, 0.0]), E=algebraic)
    assert singular.outcome == "open"
    assert "singular" in singular.how
    # The same with a shift: A is singular, so that m = 0 will not do.
    assert prove_stability(np.array([[0.0, 1], [0, 1]]), E=algebraic).outcome == "unstable"


def test_what_cannot_be_proved_is_open():
    one = np.ones((1, 1))
    assert prove_stability(-one, one, one, one, one, sign=1).outcome == "open"
    assert prove_stability(one * np.nan).outcome == "open"
    almost = prove_stability(-one, one, one, 0.99 * one, one, sign=1, digits=1)
    assert almost.outcome == "open"


def test_chosen_points_with_their_own_sampling_time():
    A = np.array([[[-1.5]], [[-1.5]], [[0.5]]])
    proofs = prove_points([0, 1], A, dt=np.array([0.0, 0.1, 0.1]))
    assert {i: p.outcome for i, p in proofs.items()} == {0: "stable", 1: "unstable"}
    B = np.ones((3, 1, 1))
    shared = prove_points([2], A, B, None, None, np.array([[[1.0]]]), feed="states")
    assert shared[2].outcome == "stable"
    spread = {"A": np.array([[[0.1]], [[2.0]], [[0.6]]])}
    assert prove_points([0, 1, 2], A, errors=spread)[1].how == BOTH


def test_missing_extra_names_the_install_command(monkeypatch):
    monkeypatch.setitem(sys.modules, "flint", None)
    with pytest.raises(SsauditError, match=r'pip install "ssaudit\[prove\]"'):
        prove_stability(np.zeros((1, 1)))


def test_generous_radii_leave_too_much_in_doubt(families):
    """Negative control for the share of doubt: it fails with radii a billion times as large."""
    rng = np.random.default_rng(0)
    draws = list(families.values())
    judged = [judge(draws[k % len(draws)](rng), shrink=1e9) for k in range(220)]
    ordinary = [verdict for verdict, condition in judged if condition < 1e6]
    assert ordinary.count(0) > 0.02 * len(ordinary)
