"""Poles against 50-digit arithmetic, and one bad model beside good ones."""

from collections.abc import Sequence
from typing import Any

import mpmath
import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray
from scipy.optimize import linear_sum_assignment

import ssaudit
from ssaudit.modes.poles import find_modes, find_poles, isolate

Floats = NDArray[np.float64]
DIGITS = 50
# Error of a pole over the norm of the (balanced) matrix: the norm's roundoff times condition
# numbers up to some hundreds, as random matrices of twelve states have them.
MOST_ERROR = 1e-13


def random_matrices() -> list[Floats]:
    """Systems of 2 to 12 states in various units of time, small ones more often."""
    rng = np.random.default_rng(50)
    states = rng.choice(np.arange(2, 13), 210, p=np.array([4, 4, 4, 4, 4, 3, 2, 1, 1, 1, 1]) / 29)
    return [rng.standard_normal((n, n)) * 10.0 ** rng.uniform(-3, 3) for n in states]


def ill_scaled_matrices() -> list[Floats]:
    """States in units that differ by up to eight orders of magnitude."""
    rng = np.random.default_rng(51)
    found = []
    for n in [2, 3, 4, 5, 6, 7, 8, 9] * 3:
        scale = 10.0 ** rng.uniform(-4, 4, n)
        found.append(rng.standard_normal((n, n)) * scale[:, None] / scale)
    return found


def audited_modes(matrices: Sequence[Floats]) -> list[pd.DataFrame]:
    """Modes of each matrix at depth modes, as the library gives them."""
    found: dict[int, pd.DataFrame] = {}
    sizes = {len(A) for A in matrices}
    for n in sizes:
        places = [place for place, A in enumerate(matrices) if len(A) == n]
        bank = ssaudit.build_bank(
            np.stack([matrices[place] for place in places]),
            revision="random",
            ids=[str(place) for place in places],
        )
        audit = ssaudit.audit(bank, ssaudit.Loop("", None, "none"), ssaudit.Criteria())
        assert (audit.points["verdict"] != "void").all()
        found |= {int(point): modes for point, modes in audit.modes.groupby("point")}
    return [found[place] for place in range(len(matrices))]


def all_poles(modes: pd.DataFrame) -> tuple[NDArray[np.complex128], Floats]:
    """Poles and radii with both of each conjugate pair."""
    s = modes["real"].to_numpy() + 1j * modes["imag"].to_numpy()
    radius = modes["radius"].to_numpy()
    pair = s.imag > 0
    return np.r_[s, s[pair].conj()], np.r_[radius, radius[pair]]


def exact_poles(A: Floats) -> Any:
    """Eigenvalues in 50 digits; the entries are the floats themselves."""
    with mpmath.workdps(DIGITS):
        return mpmath.eig(mpmath.matrix(A.tolist()), left=False, right=False)


def distances(poles: NDArray[np.complex128], exact: Any) -> Floats:
    """(computed, exact) distances, subtracted in 50 digits."""
    with mpmath.workdps(DIGITS):
        return np.array([[float(abs(mpmath.mpc(p) - e)) for e in exact] for p in poles])


def matched(gap: Floats, radius: Floats) -> bool:
    """Whether computed and exact poles can be matched so that each is within its radius."""
    outside = gap > radius[:, None]
    return not outside[linear_sum_assignment(outside)].any()


def largest_error(gap: Floats) -> float:
    return float(gap[linear_sum_assignment(gap)].max())


@pytest.fixture(scope="module")
def random_gaps() -> list[tuple[Floats, Floats, Floats]]:
    """Of each random system its matrix, the distances to the exact poles, and the radii."""
    return gaps(random_matrices())


def gaps(matrices: list[Floats]) -> list[tuple[Floats, Floats, Floats]]:
    found = []
    for A, modes in zip(matrices, audited_modes(matrices), strict=True):
        poles, radius = all_poles(modes)
        assert len(poles) == len(A)
        found.append((A, distances(poles, exact_poles(A)), radius))
    return found


def test_poles_of_random_systems_are_within_their_radii(
    random_gaps: list[tuple[Floats, Floats, Floats]],
) -> None:
    assert len(random_gaps) >= 200
    for A, gap, radius in random_gaps:
        assert matched(gap, radius)
        size = np.linalg.norm(A, 2)
        assert largest_error(gap) <= MOST_ERROR * size
        # A radius that covers everything would prove nothing.
        assert radius.max() <= 100 * MOST_ERROR * size
    assert (
        np.median([radius.max() / np.linalg.norm(A, 2) for A, _, radius in random_gaps])
        < MOST_ERROR
    )


def test_poles_of_ill_scaled_systems_are_within_their_radii() -> None:
    matrices = ill_scaled_matrices()
    assert len(matrices) >= 20
    for _, gap, radius in gaps(matrices):
        assert matched(gap, radius)
        assert np.isfinite(radius).all()
        # Distances between different exact poles stand for the balanced matrix's size.
        assert largest_error(gap) <= MOST_ERROR * gap.max()


def test_the_comparison_would_show_poles_that_are_off(
    random_gaps: list[tuple[Floats, Floats, Floats]],
) -> None:
    """Negative control: poles of a matrix with one entry off in the ninth digit."""
    noticed = 0
    for A, _, radius in random_gaps[:40]:
        wrong = A.copy()
        wrong[0, -1] *= 1 + 1e-9
        gap = distances(np.linalg.eigvals(wrong), exact_poles(A))
        noticed += not matched(gap, np.full(len(A), np.median(radius)))
        assert largest_error(gap) > 1e-15 * np.linalg.norm(A, 2)
    assert noticed >= 38


def test_radii_a_million_times_smaller_would_not_hold(
    random_gaps: list[tuple[Floats, Floats, Floats]],
) -> None:
    """Negative control: radii a million times too small are not taken for right."""
    assert not any(matched(gap, 1e-6 * radius) for _, gap, radius in random_gaps if len(gap) > 4)


def test_isolate_sets_apart_each_culprit_and_leaves_the_others_bit_for_bit() -> None:
    rng = np.random.default_rng(3)
    stack = rng.standard_normal((11, 3, 3))
    stack[[2, 3, 9]] = 0.0
    (inverse,), failed = isolate(lambda a: (np.linalg.inv(a),), stack)
    assert np.flatnonzero(failed).tolist() == [2, 3, 9]
    assert np.isnan(inverse[failed]).all()
    for place in np.flatnonzero(~failed):
        np.testing.assert_array_equal(inverse[place], np.linalg.inv(stack[place]))


def test_isolate_takes_several_stacks_and_gives_several_results() -> None:
    matrices = np.array([[[2.0]], [[0.0]], [[4.0]]])
    sides = np.array([[[1.0, 2.0]], [[1.0, 2.0]], [[1.0, 2.0]]])
    (solved, doubled), failed = isolate(
        lambda a, b: (np.linalg.solve(a, b), 2 * b[:, :, 0]), matrices, sides
    )
    np.testing.assert_array_equal(solved, [[[0.5, 1.0]], [[np.nan] * 2], [[0.25, 0.5]]])
    np.testing.assert_array_equal(doubled, [[2.0], [np.nan], [2.0]])
    assert failed.tolist() == [False, True, False]


def test_isolate_of_culprits_only() -> None:
    (inverse,), failed = isolate(lambda a: (np.linalg.inv(a),), np.zeros((4, 2, 2)))
    assert inverse.shape == (4, 2, 2)
    assert np.isnan(inverse).all()
    assert failed.all()


def test_a_model_that_cannot_be_solved_spoils_no_other() -> None:
    stack = np.stack([np.diag([-1.0, -2.0]), np.full((2, 2), np.nan), np.diag([-3.0, -4.0])])
    poles, failed = find_poles(stack)
    assert failed.tolist() == [False, True, False]
    assert np.isnan(poles[1]).all()
    np.testing.assert_array_equal(poles[[0, 2]], [[-1, -2], [-3, -4]])
    found = find_modes(stack)
    assert found[3].tolist() == [False, True, False]
    np.testing.assert_array_equal(found[0][[0, 2]], poles[[0, 2]])
    np.testing.assert_array_equal(found[1][2], np.eye(2))
    np.testing.assert_array_equal(found[2][2], np.eye(2))


def test_vectors_belong_to_the_poles() -> None:
    A = np.random.default_rng(4).standard_normal((20, 6, 6))
    poles, right, left, failed = find_modes(A)
    assert not failed.any()
    np.testing.assert_allclose(A @ right, right * poles[:, None, :], atol=1e-12)
    np.testing.assert_allclose(left @ A, poles[:, :, None] * left, atol=1e-11)
    np.testing.assert_allclose(left @ right, np.broadcast_to(np.eye(6), A.shape), atol=1e-11)
    np.testing.assert_allclose(np.linalg.norm(right, axis=1), 1.0, rtol=1e-13)
    np.testing.assert_array_equal(poles, find_modes(A[:, :, :])[0])


@pytest.mark.parametrize("shape", [(0, 3, 3), (5, 0, 0)])
def test_no_points_or_no_states_have_no_poles(shape: tuple[int, int, int]) -> None:
    A = np.zeros(shape)
    poles, failed = find_poles(A)
    assert poles.shape == shape[:2]
    assert failed.shape == shape[:1]
    assert find_modes(A)[1].shape == shape


def test_conjugate_pairs_stand_together_and_are_exact() -> None:
    poles, _ = find_poles(np.random.default_rng(5).standard_normal((50, 7, 7)))
    for row in poles:
        upper = np.flatnonzero(row.imag > 0)
        np.testing.assert_array_equal(row[upper + 1], row[upper].conj())
