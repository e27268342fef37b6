"""Loops to test margins on, and an independent frequency sweep."""

import numpy as np
import pytest


def make_loop(num, den):
    """Controllable canonical form of one transfer function, as a stack of one."""
    den = np.asarray(den, dtype=float)
    num = np.asarray(num, dtype=float) / den[0]
    den = den / den[0]
    n = len(den) - 1
    num = np.concatenate([np.zeros(n + 1 - len(num)), num])
    A = np.zeros((1, n, n))
    A[0, :1] = -den[1:]
    A[0, 1:, :-1] = np.eye(n - 1)
    B = np.zeros((1, n, 1))
    B[0, 0] = 1
    return A, B, (num[1:] - num[0] * den[1:])[None, None], np.full((1, 1, 1), num[0])


def make_random(rng, points, n, m=1, dt=0.0, direct=0.0, damping=0.02):
    """Open loops of random stable or unstable models whose closed loop is stable mostly."""
    A = rng.standard_normal((points, n, n))
    poles = np.linalg.eigvals(A)
    if dt == 0:
        A -= (poles.real.max(1) + damping * np.abs(poles).max(1))[:, None, None] * np.eye(n)
        A *= 10 ** rng.uniform(-1, 2, points)[:, None, None]
    else:
        A /= (np.abs(poles).max(1) * (1 + damping))[:, None, None]
    B = rng.standard_normal((points, n, m))
    C = rng.standard_normal((points, m, n)) * 10 ** rng.uniform(-2, 0.3, (points, 1, 1))
    return A, B, C, direct * rng.standard_normal((points, m, m))


def sweep(A, B, C, D, s):
    """Response of one single loop by modal sums: no code in common with the package's."""
    poles, V = np.linalg.eig(A)
    gains = (C @ V)[0] * np.linalg.solve(V, B.astype(complex))[:, 0]
    total = np.full(len(s), complex(D[0, 0]))
    for pole, gain in zip(poles, gains, strict=True):
        total += gain / (s - pole)
    return total


@pytest.fixture
def tools():
    """The three helpers above."""

    class Tools:
        loop = staticmethod(make_loop)
        random = staticmethod(make_random)
        sweep = staticmethod(sweep)

    return Tools
