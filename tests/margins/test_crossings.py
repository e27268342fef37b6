import mpmath
import numpy as np
import pytest

from ssaudit.margins.crossings import drop_doubles, find_crossings
from ssaudit.margins.responses import respond
from ssaudit.margins.state_space import read_loop
from ssaudit.modes.poles import find_poles


def exact_value(A, B, C, D, w):
    """T(jw) to 40 digits."""
    with mpmath.workdps(40):
        n = len(A)
        state = mpmath.mpc(0, w) * mpmath.eye(n) - mpmath.matrix(A.tolist())
        x = mpmath.lu_solve(state, mpmath.matrix(B.tolist()))
        return complex((mpmath.matrix(C.tolist()) * x)[0] + D.item())


@pytest.mark.parametrize("target", [None, 0.5])
def test_found_frequencies_against_high_precision(tools, target):
    A, B, C, D = tools.random(np.random.default_rng(1), 12, 6, direct=0.3)
    T = read_loop(A, B, C, D)
    wanted = None if target is None else np.full(12, target)
    found = find_crossings(T, find_poles(A)[0], wanted)
    assert not found.failed.any()
    assert len(found.w) > 5
    for p, frequency in zip(found.owner, found.w, strict=True):
        value = exact_value(A[p], B[p], C[p], D[p], frequency)
        error = value.imag if target is None else value.real - target
        assert abs(error) < 1e-11 * max(1, abs(value))


def test_narrow_pair_of_crossings():
    # A resonance of damping 1e-5 crosses the line twice within 1e-5 of its frequency.
    wn, zeta = 17.0, 1e-5
    A = np.array([[[0, wn, 0], [-wn, -2 * zeta * wn, 0], [0, 0, -1.0]]])
    B, C = np.array([[[0.0], [1.0], [1.0]]]), np.array([[[0.0, 4 * zeta * wn, 0.1]]])
    T = read_loop(A, B, C, np.zeros((1, 1, 1)))
    w = find_crossings(T, find_poles(A)[0], np.array([1.0])).w
    assert len(w) == 2
    np.testing.assert_allclose(w, wn, rtol=2e-5)
    np.testing.assert_allclose(respond(T, np.zeros(2, dtype=int), w).real, 1.0, rtol=1e-9)


def test_slow_crossing_beside_fast_poles_is_not_lost(tools):
    # Eight decades apart the squared model cannot tell the slow crossing; it is found all the same.
    A, B, C, _ = tools.loop([6e-9], np.poly([-1e-3, -2e-3, -3e-3]))
    large = np.zeros((1, 5, 5))
    large[0, :3, :3], large[0, 3, 3], large[0, 4, 4] = A[0], -1e5, -2e5
    large[0, 3, :3], large[0, 4, 3] = C[0, 0], 1e5
    full_B = np.concatenate([B, np.zeros((1, 2, 1))], axis=1)
    full_C = np.array([[[0.0, 0.0, 0.0, 0.0, 2e5]]])
    T = read_loop(large, full_B, full_C, np.zeros((1, 1, 1)))
    w = find_crossings(T, find_poles(large)[0], None).w
    assert np.any(np.abs(w - np.sqrt(11) * 1e-3) < 1e-6 * w)


def test_doubles():
    owner, w = drop_doubles(np.array([1, 0, 0]), np.array([3.0, 2.0, 2.0 + 1e-13]))
    np.testing.assert_array_equal(owner, [0, 1])
    assert len(w) == 2
