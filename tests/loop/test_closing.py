"""Closed loops against the direct formula in exact rational arithmetic."""

from fractions import Fraction
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

import ssaudit
from ssaudit.loop.closing import close_output_feedback, close_state_feedback

Floats = NDArray[np.float64]
Exact = list[list[Fraction]]
# Of each size: the systems are small integers, so that the exact answer has few digits.
SYSTEMS = 60
ROUNDOFF = 2.0**-52


def exact(M: Floats) -> Exact:
    return [[Fraction(float(x)) for x in row] for row in M]


def times(P: Exact, Q: Exact) -> Exact:
    return [
        [
            sum((a * b for a, b in zip(row, column, strict=True)), Fraction(0))
            for column in zip(*Q, strict=True)
        ]
        for row in P
    ]


def plus(P: Exact, Q: Exact, factor: int = 1) -> Exact:
    return [[a + factor * b for a, b in zip(p, q, strict=True)] for p, q in zip(P, Q, strict=True)]


def solve(P: Exact, Q: Exact) -> Exact | None:
    """P⁻¹ Q by Gauss-Jordan elimination; None when P is singular."""
    n = len(P)
    rows = [[*p, *q] for p, q in zip(P, Q, strict=True)]
    for k in range(n):
        pivot = next((i for i in range(k, n) if rows[i][k] != 0), None)
        if pivot is None:
            return None
        rows[k], rows[pivot] = rows[pivot], rows[k]
        rows[k] = [x / rows[k][k] for x in rows[k]]
        for i in range(n):
            if i != k:
                rows[i] = [x - rows[i][k] * y for x, y in zip(rows[i], rows[k], strict=True)]
    return [row[n:] for row in rows]


def closed_exactly(
    A: Floats, B: Floats, C: Floats, D: Floats, K: Floats, sign: int
) -> Exact | None:
    """A + σ B L C with L from u = σ K (C x + D u), so that (I - σ K D) u = σ K C x."""
    eye = exact(np.eye(B.shape[1]))
    loop = plus(eye, times(exact(K), exact(D)), -sign)
    u = solve(loop, times(exact(K), exact(C)))
    return None if u is None else plus(exact(A), times(exact(B), u), sign)


def integers(rng: np.random.Generator, *shape: int) -> Floats:
    return rng.integers(-4, 5, shape).astype(float)


def systems(n: int, inputs: int, outputs: int) -> list[Floats]:
    """Stacked A, B, C, D and K of some systems of one size."""
    rng = np.random.default_rng([n, inputs, outputs])
    shapes = ((n, n), (n, inputs), (outputs, n), (outputs, inputs), (inputs, outputs))
    return [integers(rng, SYSTEMS, *shape) for shape in shapes]


SIZES = [(1, 1, 1), (2, 1, 2), (3, 2, 1), (4, 2, 2), (5, 3, 2), (3, 3, 4)]


@pytest.mark.parametrize("sign", [-1, 1])
@pytest.mark.parametrize(("n", "inputs", "outputs"), SIZES)
def test_output_feedback_is_the_exact_closed_loop(
    n: int, inputs: int, outputs: int, sign: int
) -> None:
    A, B, C, D, K = systems(n, inputs, outputs)
    closed, ill_posed = close_output_feedback(A, B, C, D, K, sign)
    for point in range(SYSTEMS):
        expected = closed_exactly(*(M[point] for M in (A, B, C, D, K)), sign)
        assert ill_posed[point] == (expected is None)
        if expected is None:
            assert np.isnan(closed[point]).all()
            continue
        size = np.linalg.norm(np.array(expected, dtype=float)) + 1
        condition = np.linalg.cond(np.eye(inputs) - sign * K[point] @ D[point])
        for row, exact_row in zip(closed[point], expected, strict=True):
            for value, truth in zip(row, exact_row, strict=True):
                error = abs(Fraction(float(value)) - truth)
                assert float(error) <= 16 * ROUNDOFF * condition * size
    # Small integers make many singular loops: both kinds are there.
    if (n, inputs, outputs) == (1, 1, 1):
        assert ill_posed.any()
    assert (~ill_posed).sum() > SYSTEMS // 2


@pytest.mark.parametrize("sign", [-1, 1])
@pytest.mark.parametrize(("n", "inputs", "outputs"), SIZES)
def test_state_feedback_and_output_feedback_without_feedthrough_are_exact_to_the_last_bit(
    n: int, inputs: int, outputs: int, sign: int
) -> None:
    A, B, C, D, K = systems(n, inputs, outputs)
    nothing = np.zeros_like(D)
    closed, ill_posed = close_output_feedback(A, B, C, nothing, K, sign)
    assert not ill_posed.any()
    gains = integers(np.random.default_rng(7), SYSTEMS, inputs, n)
    by_states = close_state_feedback(A, B, gains, sign)
    for point in range(SYSTEMS):
        expected = closed_exactly(A[point], B[point], C[point], nothing[point], K[point], sign)
        assert exact(closed[point]) == expected
        product = times(exact(B[point]), exact(gains[point]))
        assert exact(by_states[point]) == plus(exact(A[point]), product, sign)


@pytest.mark.parametrize(("word", "sign"), [("negative", -1), ("positive", 1)])
def test_signs_by_their_words_through_the_library(word: str, sign: int) -> None:
    A, B, C, D, K = (M[:20] for M in systems(3, 2, 2))
    K = K[0]
    bank = ssaudit.build_bank(A, B, C, D, revision="A")
    loop = ssaudit.Loop(word, ssaudit.ConstantGain(K), "outputs")
    (section,) = bank.sections
    closed = loop.close(section, bank.points, section.read(0, 20))
    compared = 0
    for point in range(20):
        expected = closed_exactly(A[point], B[point], C[point], D[point], K, sign)
        if expected is None:
            assert closed.void[point].startswith("algebraic loop is ill-posed")
            continue
        assert closed.void[point] == ""
        np.testing.assert_allclose(closed.A[point], np.array(expected, dtype=float), atol=1e-12)
        compared += 1
    assert compared >= 15


def test_the_comparison_would_show_a_wrong_sign_and_a_forgotten_feedthrough() -> None:
    """Negative control: each of the two usual mistakes is far outside the tolerance."""
    A, B, C, D, K = systems(3, 2, 2)
    right, ill_posed = close_output_feedback(A, B, C, D, K, -1)
    rows = ~ill_posed & np.any(D, axis=(1, 2)) & np.any(B @ K @ C, axis=(1, 2))
    wrong_sign, other_ill_posed = close_output_feedback(A, B, C, D, K, 1)
    forgotten, _ = close_output_feedback(A, B, C, np.zeros_like(D), K, -1)
    rows &= ~other_ill_posed
    assert (np.abs(wrong_sign - right)[rows].max(axis=(1, 2)) > 1e-6).mean() > 0.95
    assert (np.abs(forgotten - right)[rows].max(axis=(1, 2)) > 1e-6).mean() > 0.9


def test_one_gain_serves_all_points_as_if_it_were_repeated() -> None:
    A, B, C, D, K = systems(4, 2, 2)
    one = K[:1]
    many = np.repeat(one, SYSTEMS, axis=0)
    np.testing.assert_array_equal(
        close_output_feedback(A, B, C, D, one, -1)[0],
        close_output_feedback(A, B, C, D, many, -1)[0],
    )
    gains = integers(np.random.default_rng(8), 1, 2, 4)
    np.testing.assert_array_equal(
        close_state_feedback(A, B, gains, -1),
        close_state_feedback(A, B, np.repeat(gains, SYSTEMS, axis=0), -1),
    )


def test_one_ill_posed_point_spoils_no_other() -> None:
    A, B, C, D, K = (np.ones((5, 1, 1)) for _ in range(5))
    D[:, 0, 0] = [0.5, 1.0, -3.0, 1.0 + 2.0**-52, 0.0]
    closed, ill_posed = close_output_feedback(A, B, C, D, K, 1)
    # 1 - K D is 0, and one unit of roundoff, at the second and fourth.
    assert ill_posed.tolist() == [False, True, False, True, False]
    np.testing.assert_array_equal(closed[~ill_posed].ravel(), [3.0, 1.25, 2.0])


def test_units_of_inputs_and_outputs_do_not_matter() -> None:
    """Powers of two change no digit of I - K D, which is similar to itself in other units."""
    A, B, C, D, K = systems(3, 2, 2)
    force, length = 2.0 ** np.array([0, 40]), 2.0 ** np.array([9, -12])
    closed, ill_posed = close_output_feedback(A, B, C, D, K, -1)
    same, same_ill_posed = close_output_feedback(
        A,
        B / force,
        length[:, None] * C,
        length[:, None] * D / force,
        force[:, None] * K / length,
        -1,
    )
    np.testing.assert_array_equal(ill_posed, same_ill_posed)
    assert ill_posed.any()
    np.testing.assert_allclose(same, closed, rtol=1e-10, atol=1e-10)


def test_nearly_singular_loops_are_closed_while_digits_remain() -> None:
    def one(value: float) -> Any:
        return np.full((1, 1, 1), value)

    closed, ill_posed = close_output_feedback(
        one(0.0), one(1.0), one(1.0), one(1 - 2.0**-40), one(1.0), 1
    )
    assert not ill_posed[0]
    assert closed[0, 0, 0] == 2.0**40
