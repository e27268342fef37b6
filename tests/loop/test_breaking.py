"""Broken loops: closing them again gives the closed loop, and det(I + L) is what it should be."""

import numpy as np
import pytest

from ssaudit.loop.assembly import OpenLoop
from ssaudit.loop.breaking import break_loop
from ssaudit.loop.closing import close_output_feedback

RNG = np.random.default_rng(11)


def some_loop(points=4):
    shapes = [(5, 5), (5, 2), (3, 5), (3, 2)]
    A, B, C, D = (RNG.standard_normal((points, *shape)) for shape in shapes)
    K = RNG.standard_normal((points, 2, 3))
    return OpenLoop(A, B, C, 0.2 * D, {}, tuple("abcde"), 0.0), K


@pytest.mark.parametrize("sign", [-1, 1])
@pytest.mark.parametrize(
    ("inputs", "signals"), [([0], []), ([1], []), ([], [2]), ([0, 1], []), ([], [0, 1, 2]),
                            ([0, 1], [0, 1, 2]), ([1], [0])],
)  # fmt: skip
def test_closing_what_was_broken_gives_the_closed_loop(sign, inputs, signals):
    opened, K = some_loop()
    L = break_loop(opened, K, sign, inputs=inputs, signals=signals)
    closed, _ = close_output_feedback(opened.A, opened.B, opened.C, opened.D, K, sign)
    size = len(inputs) + len(signals)
    again = L.A - L.B @ np.linalg.solve(np.eye(size) + L.D, L.C)
    np.testing.assert_allclose(again, closed, rtol=1e-9, atol=1e-9)
    if len(inputs) == 2 and len(signals) == 3:
        return  # broken at both ends, the loop passes through L twice: its sign does not show
    wrong = L.A + L.B @ np.linalg.solve(np.eye(size) - L.D, L.C)
    assert not np.allclose(wrong, closed, rtol=1e-3, atol=1e-3)


def test_all_inputs_broken_is_gain_times_plant():
    opened, K = some_loop(points=1)
    L = break_loop(opened, K, -1, inputs=[0, 1])
    s = 0.3 + 2j
    P = opened.C @ np.linalg.solve(s * np.eye(5) - opened.A, opened.B) + opened.D
    found = L.C @ np.linalg.solve(s * np.eye(5) - L.A, L.B) + L.D
    np.testing.assert_allclose(found, K @ P, rtol=1e-10)


def test_single_loop_is_the_schur_complement_of_the_others():
    opened, K = some_loop(points=1)
    s = 1.7j
    P = (opened.C @ np.linalg.solve(s * np.eye(5) - opened.A, opened.B) + opened.D)[0]
    whole = K[0] @ P
    expected = whole[0, 0] - whole[0, 1] * whole[1, 0] / (1 + whole[1, 1])
    L = break_loop(opened, K, -1, inputs=[0])
    found = (L.C @ np.linalg.solve(s * np.eye(5) - L.A, L.B) + L.D)[0, 0, 0]
    np.testing.assert_allclose(found, expected, rtol=1e-10)


def test_what_cannot_be_closed_is_nan_for_that_point_alone():
    opened, K = some_loop(points=2)
    opened.D[0, :, 1], K[0, 1] = [1.0, 0.0, 0.0], [-1.0, 0.0, 0.0]
    L = break_loop(opened, K, -1, inputs=[0])
    assert np.isnan(L.A[0]).any() or np.abs(L.A[0]).max() > 1e12
    assert np.isfinite(L.A[1]).all()
