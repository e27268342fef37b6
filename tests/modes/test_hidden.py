"""Hidden modes against models in which they are known by construction, in any units."""

import numpy as np
import pytest

from ssaudit.modes.hidden import hidden_modes, stable_from_outside
from ssaudit.modes.poles import find_modes


def ask(A, B, C, **kwargs):
    A, B, C = (np.asarray(M, dtype=float)[None] for M in (A, B, C))
    poles, right, left, _ = find_modes(A)
    return poles[0], hidden_modes(A, B, C, poles, right, left, **kwargs)


def at(poles, value):
    return int(np.argmin(np.abs(poles - value)))


def build(rng, poles, reached, shown, inputs=2, outputs=2):
    """A model in mixed states whose modes are reached and shown as told."""
    n = len(poles)
    B, C = rng.standard_normal((n, inputs)), rng.standard_normal((outputs, n))
    B[~np.asarray(reached)] = 0.0
    C[:, ~np.asarray(shown)] = 0.0
    turn = rng.standard_normal((n, n))
    back = np.linalg.inv(turn)
    return turn @ np.diag(poles) @ back, turn @ B, C @ back


@pytest.mark.parametrize("units", [False, True])
def test_known_hidden_modes_in_mixed_states(units):
    rng = np.random.default_rng(0)
    expected = np.array([-1.0, 2.0, -3.0, 5.0, -0.1])
    reached = [True, False, True, True, False]
    shown = [True, True, False, True, False]
    for _ in range(100):
        A, B, C = build(rng, expected, reached, shown)
        if units:
            d = 2.0 ** rng.integers(-40, 40, 5)
            A, B, C = A * d[:, None] / d, B * d[:, None] * 2.0**30, C / d * 2.0**-25
        poles, found = ask(A, B, C)
        order = [at(poles, value) for value in expected]
        assert found.reached[0][order].tolist() == [int(x) for x in reached]
        assert found.shown[0][order].tolist() == [int(x) for x in shown]
        assert found.visible[0][order].tolist() == [1, 0, 0, 1, 0]


def test_feedback_keeps_hidden_modes_hidden():
    rng = np.random.default_rng(1)
    for _ in range(50):
        A, B, C = build(rng, [-1.0, 2.0, -3.0, -4.0], [True, False, True, True], [True] * 4)
        K = 0.1 * rng.standard_normal((2, 2))
        poles, found = ask(A - B @ K @ C, B, C)
        k = at(poles, 2.0)
        assert poles[k] == pytest.approx(2.0, abs=1e-8)
        assert found.visible[0][k] == 0
        assert stable_from_outside(poles[None].real >= 0, found)[0] == (
            1 if (np.delete(poles.real, k) < 0).all() else 0
        )


def test_weak_coupling_is_coupling():
    """Negative control for the threshold: reached through a small entry, in odd units or not."""
    chain = [[-1.0, 1e-12, 0], [0, 2.0, 1e-9], [0, 0, -3.0]]
    poles, found = ask(chain, [[0], [0], [1.0]], [[1.0, 0, 0]])
    assert found.visible[0].tolist() == [1, 1, 1]
    one_way = [[2.0, 1e10], [0.0, -1.0]]
    poles, found = ask(one_way, [[1.0], [0.0]], [[1.0, 0.0]])
    assert found.visible[0][at(poles, 2.0)] == 1
    assert found.reached[0][at(poles, -1.0)] == 0


def test_cancelled_mode_is_found_by_cancellation():
    """Two coupled parts seen by their sum: their difference, which grows, is not shown."""
    A = [[0.5, -1.5], [-1.5, 0.5]]
    poles, found = ask(A, [[1.0], [0.3]], [[1.0, 1.0]])
    k = at(poles, 2.0)
    assert found.shown[0][k] == 0
    assert found.show[0][k] < 1e-14
    assert stable_from_outside(poles[None].real >= 0, found)[0] == 1
    off = ask(A, [[1.0], [0.3]], [[1.0, 1.0 + 1e-6]])[1]
    assert off.shown[0][k] == 1


def test_uncertain_zero_is_unknown():
    A = np.array([[0.5, -1.5], [-1.5, 0.5]])
    A[0, 0] += 1e-5
    B, C = [[1.0], [0.3]], [[1.0, 1.0]]
    poles, exact = ask(A, B, C)
    k = at(poles, 2.0)
    assert exact.shown[0][k] == 1
    _, rounded = ask(A, B, C, entry_error=1e-4 * abs(A)[None])
    assert rounded.shown[0][k] == -1
    assert rounded.visible[0][k] == -1
    assert stable_from_outside(poles[None].real >= 0, rounded)[0] == -1


def test_repeated_poles_by_rank():
    twice = np.diag([2.0, 2.0, -1.0])
    one_input = ask(twice, [[1.0], [1.0], [1.0]], np.eye(3))[1]
    assert one_input.reached[0].tolist() == [0, 0, 1]
    # One of the two is reached: whether the pole is visible is not settled by the rank.
    assert one_input.visible[0].tolist() == [-1, -1, 1]
    two_inputs = ask(twice, np.eye(3)[:, :2], np.eye(3))[1]
    assert two_inputs.reached[0].tolist() == [1, 1, 0]
    assert two_inputs.visible[0].tolist() == [1, 1, 0]


def test_double_integrator_is_reached_through_its_chain():
    A = [[0.0, 1.0], [0.0, 0.0]]
    seen = ask(A, [[0.0], [1.0]], [[1.0, 0.0]])[1]
    assert seen.visible[0].tolist() == [1, 1]
    cut = ask(A, [[1.0], [0.0]], [[1.0, 0.0]])[1]
    assert cut.reached[0].tolist() == [0, 0]


def test_only_chosen_poles_are_tested():
    A, B, C = np.diag([-1.0, 2.0]), np.eye(2), np.eye(2)
    chosen = np.array([[False, True]])
    found = ask(A, B, C, chosen=chosen)[1]
    assert found.visible.tolist() == [[-1, 1]]
    assert np.isnan(found.reach[0, 0])
    none = ask(A, B, C, chosen=np.zeros((1, 2), dtype=bool))[1]
    assert none.visible.tolist() == [[-1, -1]]


def test_points_do_not_touch_each_other_and_bad_ones_are_unknown():
    rng = np.random.default_rng(2)
    stacks = [build(rng, [-1.0, 2.0, -3.0], [True, False, True], [True] * 3) for _ in range(5)]
    A, B, C = (np.array(M) for M in zip(*stacks, strict=True))
    poles, right, left, _ = find_modes(A)
    together = hidden_modes(A, B, C, poles, right, left)
    poles[2], right[2], left[2] = np.nan, np.nan, np.nan
    broken = hidden_modes(A, B, C, poles, right, left)
    assert (broken.visible[2] == -1).all()
    keep = [0, 1, 3, 4]
    assert (broken.visible[keep] == together.visible[keep]).all()
    for k in keep:
        alone = hidden_modes(*(M[k : k + 1] for M in (A, B, C, poles, right, left)))
        assert (alone.visible[0] == together.visible[k]).all()
