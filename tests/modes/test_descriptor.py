"""Descriptor models against known modes of ladders, exact pencils and the explicit form."""

import mpmath
import numpy as np
import pytest
from scipy.optimize import linear_sum_assignment

from ssaudit.modes.descriptor import (
    HIGHER_INDEX,
    NOT_CONVERGED,
    REASONS,
    SINGULAR_PENCIL,
    descriptor_modes,
)
from ssaudit.modes.poles import find_modes

INDUCTANCE, CAPACITANCE, RESISTANCE = 2e-3, 5e-6, 0.4


def ladder(cells, *, shunts=None, resistors_apart=True):
    """Pencil of inductors with resistance in series, capacitors from the nodes to ground.

    Node voltages v, inductor currents i and, apart, resistor voltages u as algebraic variables:
    C v' = i_k - i_{k+1}, L i' = v_{k-1} - v_k - u, 0 = u - R i; both ends are grounded.
    """
    branches = cells + 1
    difference = np.eye(branches, cells) - np.eye(branches, cells, k=-1)
    C = np.full(cells, CAPACITANCE) if shunts is None else shunts
    n = cells + 2 * branches
    A, E = np.zeros((n, n)), np.zeros((n, n))
    v, i = slice(0, cells), slice(cells, cells + branches)
    u = slice(cells + branches, n)
    A[v, i], A[i, v], A[i, u] = difference.T, -difference, -np.eye(branches)
    A[u, u], A[u, i] = np.eye(branches), -RESISTANCE * np.eye(branches)
    E[v, v], E[i, i] = np.diag(C), INDUCTANCE * np.eye(branches)
    if resistors_apart:
        return A, E
    states = cells + branches
    reduced = A[:states, :states].copy()
    reduced[i, i] -= RESISTANCE * np.eye(branches)
    return reduced, E[:states, :states]


def known_modes(cells):
    """s(s + R/L) = -4/(LC) sin²(kπ/(2(n+1))), k = 1..n; and -R/L of the current all round."""
    k = np.arange(1, cells + 1)
    square = 4 / (INDUCTANCE * CAPACITANCE) * np.sin(k * np.pi / (2 * (cells + 1))) ** 2
    half = RESISTANCE / INDUCTANCE / 2
    upper = -half + 1j * np.sqrt(square - half**2)
    return np.r_[upper, upper.conj(), -2 * half]


def exact_pencil_poles(A, E):
    """Roots of det(sE - A) in rationals; mpmath has no generalised problem of its own."""
    flint = pytest.importorskip("flint")
    from ssaudit.modes.boxes import rational
    from ssaudit.modes.proof import _pencil_polynomial

    found = _pencil_polynomial(flint, rational(flint, A), rational(flint, E))
    assert found is not None
    return np.array(
        [
            complex(float(root.real.mid()), float(root.imag.mid()))
            for root, count in found.numer().complex_roots()
            for _ in range(count)
        ]
    )


def distances(found, expected):
    """Distance from each found pole to its partner in the best matching."""
    gap = np.abs(found[:, None] - expected)
    row, column = linear_sum_assignment(gap)
    return gap[row, column]


@pytest.mark.parametrize("cells", [1, 3, 8])
def test_ladder_has_its_known_modes(cells):
    A, E = ladder(cells)
    modes = descriptor_modes(A[None], E[None])
    assert modes.reason[0] == ""
    assert modes.infinite[0] == cells + 1
    finite = modes.poles[0][: 2 * cells + 1]
    assert np.isnan(modes.poles[0][2 * cells + 1 :]).all()
    expected = known_modes(cells)
    off = distances(finite, expected)
    assert (off <= modes.radii[0][: 2 * cells + 1] + 1e-14 * np.abs(expected).max()).all()
    assert (modes.radii[0][: 2 * cells + 1] <= 1e-9 * np.abs(finite)).all()


def test_ladder_with_uneven_capacitors_against_mpmath():
    shunts = CAPACITANCE * np.array([1.0, 1e-3, 30.0, 0.2])
    A, E = ladder(4, shunts=shunts)
    reduced, mass = ladder(4, shunts=shunts, resistors_apart=False)
    with mpmath.workdps(40):
        explicit = mpmath.matrix(mass.tolist()) ** -1 * mpmath.matrix(reduced.tolist())
        expected = np.array([complex(x) for x in mpmath.eig(explicit, right=False)])
    for pencil in ((A, E), (reduced, mass)):
        modes = descriptor_modes(pencil[0][None], pencil[1][None])
        finite = np.isfinite(modes.poles[0])
        off = distances(modes.poles[0][finite], expected)
        # 0.4/2e-3 and the like are not exact in binary, hence the small allowance.
        assert (off <= modes.radii[0][finite] + 1e-13 * np.abs(expected).max()).all()
        assert (modes.radii[0][finite] <= 1e-8 * np.abs(modes.poles[0][finite])).all()


def test_equals_the_explicit_form_where_e_is_benign():
    rng = np.random.default_rng(0)
    A = rng.standard_normal((40, 6, 6))
    E = np.eye(6) + 0.2 * rng.standard_normal((40, 6, 6))
    modes = descriptor_modes(A, E)
    explicit = find_modes(np.linalg.solve(E, A))[0]
    assert (modes.infinite == 0).all()
    for k in range(40):
        assert distances(modes.poles[k], explicit[k]).max() <= 1e-11 * np.abs(explicit[k]).max()


def test_shifted_way_equals_the_explicit_way(monkeypatch):
    rng = np.random.default_rng(1)
    A, E = rng.standard_normal((20, 6, 6)), np.eye(6) + 0.2 * rng.standard_normal((20, 6, 6))
    plain = descriptor_modes(A, E)
    monkeypatch.setattr("ssaudit.modes.descriptor.BENIGN_CONDITION", 0.0)
    shifted = descriptor_modes(A, E)
    for k in range(20):
        room = np.abs(plain.poles[k]).max()
        assert distances(plain.poles[k], shifted.poles[k]).max() <= 1e-10 * room


def test_radii_cover_exact_poles_of_ill_conditioned_pencils():
    rng = np.random.default_rng(2)
    useful = 0
    for trial in range(60):
        n = int(rng.integers(2, 6))
        A = rng.standard_normal((n, n)) - 2 * np.eye(n)
        U, V = (np.linalg.qr(rng.standard_normal((n, n)))[0] for _ in range(2))
        E = U @ np.diag(10.0 ** -rng.uniform(0, 10, n)) @ V
        if trial % 2:
            E = np.diag(10.0 ** rng.uniform(-12, 12, n)) @ (np.eye(n) + 0.1 * U)
        modes = descriptor_modes(A[None], E[None])
        assert modes.reason[0] == ""
        assert modes.infinite[0] == 0
        expected = exact_pencil_poles(A, E)
        off = distances(modes.poles[0], expected)
        finite = np.isfinite(modes.radii[0])
        assert (off[finite] <= modes.radii[0][finite] + 1e-15 * np.abs(expected).max()).all()
        useful += (modes.radii[0] < 1e-2 * np.abs(modes.poles[0])).mean() > 0.5
    assert useful > 50


def test_uncertain_entries_are_covered():
    rng = np.random.default_rng(3)
    for _ in range(30):
        A = rng.standard_normal((4, 4)) - 3 * np.eye(4)
        E = np.diag([1.0, 2.0, 0.5, 0.0]) + np.triu(0.1 * rng.standard_normal((4, 4)), 1)
        E[3], E[:, 3] = 0.0, 0.0
        dA, dE = 1e-6 * np.abs(A), 1e-6 * np.abs(E)
        modes = descriptor_modes(A[None], E[None], entry_error=dA, mass_error=dE)
        assert modes.infinite[0] == 1
        other = exact_pencil_poles(
            A + 0.99 * dA * rng.choice([-1, 1], A.shape),
            E + 0.99 * dE * rng.choice([-1, 1], E.shape),
        )
        off = distances(modes.poles[0][:3], other)
        assert (off <= modes.radii[0][:3]).all()
        # Negative control: the change is of the radii's order, so that smaller ones would fail.
        assert off.max() > 1e-3 * modes.radii[0][:3].max()


def test_unevenly_scaled_diagonal_e_is_neither_singular_nor_inaccurate():
    A = np.array([[-1.0, 2.0], [0.0, -3.0]])
    for small in (1e-12, 1e-30, 1e-200):
        modes = descriptor_modes(A[None], np.diag([small, 1.0])[None])
        assert modes.infinite[0] == 0
        assert np.sort(modes.poles[0].real) == pytest.approx([-1 / small, -3.0], rel=1e-12)


def test_index_above_one_and_singular_pencils_are_named():
    across_source = np.array([[0.0, 1.0], [1.0, 0.0]])  # a capacitor across a voltage source
    nilpotent = np.eye(3, k=1)  # index 3
    A = np.array([across_source, np.diag([1.0, 0.0]), np.diag([-2.0, 3.0])])
    E = np.array([np.diag([1.0, 0.0])] * 3)
    modes = descriptor_modes(A, E)
    assert modes.reason.tolist() == [HIGHER_INDEX, SINGULAR_PENCIL, ""]
    assert np.isnan(modes.poles[:2]).all()
    assert modes.poles[2][0] == pytest.approx(-2.0)
    assert descriptor_modes(np.eye(3)[None], nilpotent[None]).reason[0] == HIGHER_INDEX
    hidden = descriptor_modes(A[1:2] * 1e-9, E[1:2] * 1e6)
    assert hidden.reason[0] == SINGULAR_PENCIL
    assert set(modes.reason) - {""} <= set(REASONS)
    assert NOT_CONVERGED in REASONS


def test_index_is_found_in_mixed_coordinates():
    rng = np.random.default_rng(4)
    for _ in range(40):
        P, Q = rng.standard_normal((2, 5, 5))
        slow = np.diag(rng.uniform(-3, -1, 3))
        for coupling, reason in ((np.eye(2, k=1), HIGHER_INDEX), (np.zeros((2, 2)), "")):
            E = P @ np.block([[np.eye(3), np.zeros((3, 2))], [np.zeros((2, 3)), coupling]]) @ Q
            A = P @ np.block([[slow, np.zeros((3, 2))], [np.zeros((2, 3)), np.eye(2)]]) @ Q
            modes = descriptor_modes(A[None], E[None])
            assert modes.reason[0] == reason
            if reason == "":
                assert modes.infinite[0] == 2
                assert distances(modes.poles[0][:3], np.diag(slow)).max() < 1e-7


def test_vectors_solve_the_pencil():
    A, E = ladder(3)
    modes = descriptor_modes(A[None], E[None])
    for k in range(7):
        s, x = modes.poles[0][k], modes.right[0][:, k]
        residual = s * (E @ x) - A @ x
        assert np.abs(residual).max() <= 1e-10 * (np.abs(A) @ np.abs(x)).max()
    finite = slice(0, 7)
    assert modes.left[0][finite] @ modes.right[0][:, finite] == pytest.approx(np.eye(7), abs=1e-8)


def test_order_units_and_mixture_of_points():
    rng = np.random.default_rng(5)
    A = rng.standard_normal((6, 4, 4))
    E = np.stack([np.diag(d) for d in ([1, 1, 1, 0], [1, 1, 1, 1], [1, 0, 0, 1])] * 2).astype(float)
    modes = descriptor_modes(A, E)
    assert modes.infinite.tolist() == [1, 0, 2, 1, 0, 2]
    turned = descriptor_modes(A[::-1], E[::-1])
    assert np.allclose(turned.poles[::-1], modes.poles, equal_nan=True)
    rows, columns = 2.0 ** rng.integers(-20, 20, (2, 6, 4))
    scaled = descriptor_modes(*(M * rows[:, :, None] * columns[:, None, :] for M in (A, E)))
    for k in range(6):
        n = 4 - modes.infinite[k]
        room = np.abs(modes.poles[k][:n]).max()
        assert distances(modes.poles[k][:n], scaled.poles[k][:n]).max() <= 1e-9 * room
    none = descriptor_modes(np.zeros((0, 2, 2)), np.zeros((0, 2, 2)))
    assert none.poles.shape == (0, 2)
    assert descriptor_modes(np.eye(2)[None], np.zeros((1, 2, 2))).infinite[0] == 2
