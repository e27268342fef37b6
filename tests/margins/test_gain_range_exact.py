"""Gain ranges against exact arithmetic: characteristic polynomials, Hurwitz determinants, roots."""

from itertools import pairwise

import numpy as np
import pytest
from sympy import ZZ, Poly, Rational, symbols
from sympy.polys.matrices import DomainMatrix

from ssaudit.margins.gain_range import find_gain_range
from ssaudit.margins.stable_gains import find_stable_gains

K = symbols("k")
RING = ZZ[K]
# Isolating intervals of the exact ends are at most this wide.
WIDTH = Rational(1, 10**30)
# Ends must agree to this, relative; double roots of the critical polynomial are left out.
AGREE = 1e-9
LOOPS = 200


def hurwitz_determinants(A, B, C):
    """Leading minors, in k, of the Hurwitz matrix of det(sI - A + k B C)."""
    n, factor = len(A), RING.gens[0]
    rows = [
        [RING(int(a)) - factor * int(p) for a, p in zip(row, product, strict=True)]
        for row, product in zip(A, B @ C, strict=True)
    ]
    coefficients = DomainMatrix(rows, (n, n), RING).charpoly()
    matrix = [
        [coefficients[2 * j - i + 1] if 0 <= 2 * j - i + 1 <= n else RING.zero for j in range(n)]
        for i in range(n)
    ]
    minors = [
        DomainMatrix([row[:size] for row in matrix[:size]], (size, size), RING).det()
        for size in range(1, n + 1)
    ]
    return [Poly(RING.to_sympy(minor), K, domain=ZZ) for minor in minors]


def is_stable(determinants, k):
    """Hurwitz's criterion in exact arithmetic; the leading coefficient is 1."""
    return all(determinant.eval(k) > 0 for determinant in determinants)


def exact_intervals(determinants):
    """All open intervals of k in which the loop is stable, to 30 digits, and those of the roots.

    The last minor vanishes wherever a pole is on the axis: it changes sign with the constant
    coefficient at s = 0, and with the last but one elsewhere (Orlando's formula).
    """
    critical = determinants[-1]
    if critical.is_zero:
        return []
    roots = [] if critical.degree() < 1 else critical.sqf_part().intervals(eps=WIDTH, sqf=True)
    ends = [-np.inf, *((low + high) / 2 for low, high in roots), np.inf]
    samples = [Rational(0)]
    if roots:
        inner = [(a[1] + b[0]) / 2 for a, b in pairwise(roots)]
        samples = [roots[0][0] - 1, *inner, roots[-1][1] + 1]
    assert all(critical.eval(k) != 0 for k in samples)
    found = []
    for (low, high), k in zip(pairwise(ends), samples, strict=True):
        if is_stable(determinants, k):
            found.append((float(low), float(high)))
    return found


def disagreements(loop, determinants):
    """What find_gain_range and find_stable_gains say otherwise than exact arithmetic."""
    stack = tuple(np.asarray(M, dtype=float)[None] for M in loop)
    stack = (*stack, np.zeros((1, loop[1].shape[1], loop[1].shape[1])))
    gains, around = find_stable_gains(*stack), find_gain_range(*stack)
    wanted, wrong = exact_intervals(determinants), []
    if determinants[-1].is_zero:
        # A pole on the axis that no gain moves: rounding may leave that open, never call it stable.
        stable = around.stable[0] or not np.isnan(gains.low).all()
        return ["stable with a pole on the axis"] if stable else []
    if not (gains.confirmed[0] and around.confirmed[0]):
        return ["not confirmed"]
    ours = [pair for pair in zip(gains.low[0], gains.high[0], strict=True) if not np.isnan(pair[0])]
    if len(ours) != len(wanted) or not np.allclose(ours, wanted, rtol=AGREE, atol=1e-12):
        wrong.append(f"intervals {ours}, exactly {wanted}")
    nominal = is_stable(determinants, 1)
    if nominal != around.stable[0]:
        wrong.append("stability at 1")
    if nominal:
        (exact,) = [pair for pair in wanted if pair[0] < 1 < pair[1]]
        if not np.allclose([around.low[0], around.high[0]], exact, rtol=AGREE, atol=1e-12):
            wrong.append(f"range {around.low[0]}, {around.high[0]}, exactly {exact}")
    return wrong


def integer_loops(count):
    """Random integer loops of 2 to 6 states, strictly proper, of one channel and of two."""
    rng = np.random.default_rng(21)
    for number in range(count):
        n, m = int(rng.integers(2, 7)), 2 if number % 4 == 3 else 1
        A = rng.integers(-4, 5, (n, n))
        if number % 2:  # light damping
            A = A - A.T + np.diag(rng.integers(-2, 1, n))
        A = A - int(rng.integers(0, 9 if number % 2 == 0 else 2)) * np.eye(n, dtype=int)
        yield A, rng.integers(-3, 4, (n, m)), rng.integers(-3, 4, (m, n))


def test_the_exact_arithmetic_itself():
    # 6/(s + 1)³: stable for -1/6 < k < 4/3, as a loop of integers.
    A = np.array([[-1, 1, 0], [0, -1, 1], [0, 0, -1]])
    determinants = hurwitz_determinants(A, np.array([[0], [0], [6]]), np.array([[1, 0, 0]]))
    np.testing.assert_allclose(exact_intervals(determinants), [(-1 / 6, 4 / 3)], rtol=1e-15)
    # s² + k - 2 has no damping at any k.
    A = np.array([[0, 1], [2, 0]])
    assert exact_intervals(hurwitz_determinants(A, np.array([[0], [1]]), np.array([[1, 0]]))) == []


@pytest.mark.filterwarnings("error")
def test_integer_loops():
    stable_at_one = stable_at_zero = several = none = 0
    for loop in integer_loops(LOOPS):
        determinants = hurwitz_determinants(*loop)
        assert disagreements(loop, determinants) == []
        intervals = exact_intervals(determinants)
        stable_at_one += is_stable(determinants, 1)
        stable_at_zero += is_stable(determinants, 0)
        several += len(intervals) > 1
        none += not intervals
    # Every case occurs often: lost at 1, lost without feedback, more than one interval, none.
    assert 60 < stable_at_one < 140
    assert 30 < LOOPS - stable_at_zero < 100
    assert several >= 5
    assert none > 20


def test_a_slightly_different_loop_disagrees():
    # Negative control: one entry changed by a millionth is told from the loop itself.
    told, asked = 0, 0
    for A, B, C in integer_loops(40):
        determinants = hurwitz_determinants(A, B, C)
        ends = np.array(exact_intervals(determinants)).ravel()
        if not np.isfinite(ends).any():
            continue
        changed = A.astype(float)
        changed[0, 0] += 1e-6
        asked += 1
        told += bool(disagreements((changed, B, C), determinants))
    assert asked > 15
    assert told > 0.8 * asked
