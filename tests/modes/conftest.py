"""Test matrices from benign to nasty, and their poles in exact arithmetic."""

from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray

Floats = NDArray[np.float64]

NILPOTENT = np.array(
    [
        [-9, 11, -21, 63, -252],
        [70, -69, 141, -421, 1684],
        [-575, 575, -1149, 3451, -13801],
        [3891, -3891, 7782, -23345, 93365],
        [1024, -1024, 2048, -6144, 24572],
    ],
    dtype=float,
)
"""Well-known integer test matrix (from memory); its fifth power is exactly zero."""


def tridiagonal(n: int, below: float, centre: float, above: float) -> Floats:
    return below * np.eye(n, k=-1) + centre * np.eye(n) + above * np.eye(n, k=1)


def frank(n: int) -> Floats:
    """Frank's matrix, Computing eigenvalues of complex matrices..., J. SIAM 6 (1958)."""
    row, column = np.indices((n, n))
    return np.where(column >= row - 1, n - np.maximum(row, column), 0).astype(float)


def grcar(n: int) -> Floats:
    """Grcar's Toeplitz matrix: -1 below, 1 on and on three diagonals above the main one."""
    return -np.eye(n, k=-1) + sum(np.eye(n, k=k) for k in range(4))


def companion(roots: Floats) -> Floats:
    coefficients = np.poly(roots).real
    n = len(roots)
    matrix = np.eye(n, k=-1)
    matrix[0] = -coefficients[1:]
    return matrix


def _jordan(rng: np.random.Generator) -> Floats:
    form = np.diag([-1.0, -1, -3, -3, -3, -10]) + np.diag([1.0, 0, 5, 5, 0], 1)
    turn = rng.standard_normal((6, 6))
    return turn @ form @ np.linalg.inv(turn)


def _lags(rng: np.random.Generator) -> Floats:
    """Equal first-order lags in series that drive a random rest."""
    n = int(rng.integers(2, 5))
    lags = tridiagonal(n, 0.0, -10.0, 10.0)
    rest = rng.standard_normal((3, 3)) - np.eye(3)
    return np.block([[lags, np.zeros((n, 3))], [rng.standard_normal((3, n)), rest]])


def _near_axis(rng: np.random.Generator) -> Floats:
    frequencies = 1.0 + 0.1 * np.arange(3) + 0.01 * rng.standard_normal(3)
    damping = 10.0 ** rng.uniform(-8, -1) * rng.choice([1, -1], p=[0.8, 0.2])
    upper = -damping * frequencies + 1j * frequencies
    return companion(np.r_[upper, upper.conj()])


def _random(rng: np.random.Generator) -> Floats:
    n = int(rng.integers(1, 9))
    A = rng.standard_normal((n, n))
    return A - rng.uniform(0.5, 2.0) * np.sqrt(n) * np.eye(n)


def _graded(rng: np.random.Generator) -> Floats:
    scale = 10.0 ** rng.uniform(-6, 6, 6)
    return (rng.standard_normal((6, 6)) - 3 * np.eye(6)) * scale[:, None] / scale[None, :]


def _badly_scaled(rng: np.random.Generator) -> Floats:
    return (rng.standard_normal((6, 6)) - 3 * np.eye(6)) * 10.0 ** rng.uniform(-5, 5, 6)[:, None]


def _repeated(rng: np.random.Generator) -> Floats:
    """Two equal, unconnected plants, seen in mixed states."""
    turn = rng.standard_normal((6, 6))
    twice = np.kron(np.eye(2), rng.standard_normal((3, 3)) - np.eye(3))
    return turn @ twice @ np.linalg.inv(turn)


def _shifted_grcar(rng: np.random.Generator) -> Floats:
    n = int(rng.integers(4, 13))
    return grcar(n) - rng.uniform(0, 3) * np.eye(n)


FAMILIES: dict[str, Callable[[np.random.Generator], Floats]] = {
    "random": _random,
    "graded": _graded,
    "badly scaled": _badly_scaled,
    "jordan": _jordan,
    "lags": _lags,
    "near the axis": _near_axis,
    "repeated": _repeated,
    "toeplitz": lambda rng: tridiagonal(
        int(rng.integers(4, 13)), 10.0 ** rng.uniform(-8, 0), -1.0, rng.uniform(0.2, 1.0)
    ),
    "frank": lambda rng: frank(int(rng.integers(4, 11))) * rng.choice([1.0, -1.0]),
    "grcar": _shifted_grcar,
    "nilpotent": lambda rng: NILPOTENT - rng.choice([0.0, 1 / 128, 0.5, -0.5, 2.0]) * np.eye(5),
}


def poles_exactly(A: Floats) -> NDArray[np.complex128]:
    """All poles of a matrix of binary floats, correct to about 15 digits.

    Characteristic polynomial in rationals, its roots isolated in balls: nothing is rounded before
    the final conversion, however ill-conditioned the matrix.
    """
    flint = pytest.importorskip("flint")
    ratios = [[flint.fmpq(*float(x).as_integer_ratio()) for x in row] for row in A]
    roots = flint.fmpq_mat(ratios).charpoly().numer().complex_roots()
    return np.array(
        [
            complex(float(root.real.mid()), float(root.imag.mid()))
            for root, multiplicity in roots
            for _ in range(multiplicity)
        ]
    )


@pytest.fixture(scope="session")
def exact_poles() -> Callable[[Floats], NDArray[np.complex128]]:
    return poles_exactly


@pytest.fixture(scope="session")
def families() -> dict[str, Callable[[np.random.Generator], Floats]]:
    return FAMILIES


@pytest.fixture(scope="session")
def nilpotent() -> Floats:
    return NILPOTENT
