"""Errors of entries against rationals: rounding of the export carried through closing."""

from fractions import Fraction

import numpy as np
import pytest

from ssaudit.loop.closing import close_output_feedback
from ssaudit.modes.entry_errors import closed_loop_entry_error, rounding_error


def test_rounding_error_covers_what_printing_drops():
    rng = np.random.default_rng(0)
    x = np.r_[rng.standard_normal(500) * 10.0 ** rng.uniform(-12, 12, 500), 1.0, 1000.0, 0.001, 0]
    for digits in (1, 3, 7, 15):
        written = np.array([float(f"{value:.{digits - 1}e}") for value in x])
        bound = rounding_error(written, digits)
        off = [abs(Fraction(a) - Fraction(b)) for a, b in zip(x, written, strict=True)]
        assert all(a <= Fraction(b) for a, b in zip(off, bound, strict=True))
        # Never more than half a unit of the last digit of the smallest mantissa, and its parse.
        assert (bound <= 0.501 * np.abs(written) * 10.0 ** (1 - digits) + 1e-15 * abs(x)).all()
    assert rounding_error(np.array([0.0]), 3) == 0.0
    with pytest.raises(ValueError, match="digits is 0"):
        rounding_error(x, 0)


def _closed_exactly(A, B, C, D, K, sign):
    """Closed matrix of one input and one output in rationals."""
    a, b, c, d, k = (np.vectorize(Fraction)(M) for M in (A, B, C, D, K))
    return a + sign * b @ (k / (1 - sign * k[0, 0] * d[0, 0])) @ c


@pytest.mark.parametrize("sign", [-1, 1])
def test_entry_error_covers_exact_closing_of_changed_matrices(sign):
    rng = np.random.default_rng(5)
    tightest = 0.0
    for _ in range(60):
        size = 10.0 ** rng.uniform(-8, -2)
        A, B = rng.standard_normal((3, 3)), rng.standard_normal((3, 1))
        C, D, K = rng.standard_normal((1, 3)), rng.uniform(-0.5, 0.5, (1, 1)), np.array([[1.2]])
        parts = dict(zip("ABCDK", (A, B, C, D, K), strict=True))
        errors = {name: size * np.abs(M) for name, M in parts.items()}
        bound = closed_loop_entry_error(A[None], B[None], C[None], D[None], K, sign=sign,
                                        errors=errors)[0]  # fmt: skip
        nominal, _ = close_output_feedback(A[None], B[None], C[None], D[None], K[None], sign)
        changed = [M + errors[name] * rng.choice([-1, 1], M.shape) for name, M in parts.items()]
        off = np.abs((_closed_exactly(*changed, sign) - nominal[0]).astype(float))
        assert (off <= bound).all()
        tightest = max(tightest, (off / bound).max())
    assert tightest > 0.5


def test_entry_error_of_rounding_alone_covers_exact_closing():
    rng = np.random.default_rng(6)
    for _ in range(60):
        A, B, C = rng.standard_normal((3, 3)), rng.standard_normal((3, 1)), np.ones((1, 3))
        D, K = rng.uniform(0.9, 1.0, (1, 1)), np.array([[1.0]])
        bound = closed_loop_entry_error(A[None], B[None], C[None], D[None], K, sign=1)[0]
        closed, _ = close_output_feedback(A[None], B[None], C[None], D[None], K[None], 1)
        off = np.abs((_closed_exactly(A, B, C, D, K, 1) - closed[0]).astype(float))
        assert (off <= bound).all()
        assert (bound < 1e-8 * np.abs(closed).max()).all()


def test_entry_error_is_infinite_where_the_loop_may_be_ill_posed():
    one = np.ones((2, 1, 1))
    D = np.array([[[0.5]], [[0.999]]])
    error = closed_loop_entry_error(-one, one, one, D, one, sign=1, digits=2)
    assert np.isfinite(error[0]).all()
    assert np.isinf(error[1]).all()


def test_state_feedback_needs_no_output_matrix():
    A, B, K = np.full((1, 1, 1), -1.0), np.full((1, 1, 1), 2.0), np.full((1, 1), 3.0)
    error = closed_loop_entry_error(A, B, None, None, K, sign=-1, feed="states", digits=2)
    assert error == pytest.approx(0.05 + 0.05 * 3.0, rel=1e-12)
