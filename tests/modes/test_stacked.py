"""Modes of a chunk: points set apart, radii where asked, sampled models."""

import numpy as np
import pytest

from ssaudit.modes.stacked import find_usable_modes


def stable(points: int, n: int, seed: int = 0) -> np.ndarray:
    A = np.random.default_rng(seed).standard_normal((points, n, n))
    return np.asarray(A - 3 * np.sqrt(n) * np.eye(n))


@pytest.mark.parametrize("vectors", [True, False])
def test_points_that_are_not_usable_are_left_out(vectors: bool) -> None:
    A = stable(6, 4)
    usable = np.array([True, False, True, True, False, True])
    modes, failed = find_usable_modes(A, usable, vectors=vectors)
    whole, _ = find_usable_modes(A, np.ones(6, dtype=bool), vectors=vectors)
    assert not failed.any()
    assert np.isnan(modes.s[~usable]).all()
    assert np.isnan(modes.radius[~usable]).all()
    np.testing.assert_array_equal(modes.s[usable], whole.s[usable])
    np.testing.assert_array_equal(modes.radius[usable], whole.radius[usable])
    if modes.index is not None and whole.index is not None:
        assert (modes.index[~usable] == -1).all()
        np.testing.assert_array_equal(modes.index[usable], whole.index[usable])


def test_modes_of_a_stack_are_those_of_each_point_alone() -> None:
    A = stable(9, 5)
    every = np.ones(9, dtype=bool)
    error = np.full(A.shape, 1e-6)
    whole, _ = find_usable_modes(A, every, lambda rows: error[rows])
    for point in range(9):
        alone, _ = find_usable_modes(A[point : point + 1], every[:1], lambda rows: error[:1])
        np.testing.assert_array_equal(alone.s[0], whole.s[point])
        np.testing.assert_array_equal(alone.radius[0], whole.radius[point])
        np.testing.assert_array_equal(alone.share, whole.share[point : point + 1])


def test_a_model_that_cannot_be_solved_is_reported_for_itself() -> None:
    A = stable(3, 3)
    A[1, 0, 0] = np.nan
    modes, failed = find_usable_modes(A, np.ones(3, dtype=bool))
    assert failed.tolist() == [False, True, False]
    assert np.isnan(modes.s[1]).all()
    assert np.isfinite(modes.s[[0, 2]]).all()


def test_uncertain_entries_widen_the_radii_at_least_in_proportion_to_first_order() -> None:
    """A diagonal model: each pole is off by exactly as much as its entry may be."""
    A = np.diag([-1.0, -2.0, -5.0])[None]
    error = np.diag([1e-3, 2e-3, 0.0])[None]
    modes, _ = find_usable_modes(A, np.array([True]), lambda rows: error[rows])
    off = np.sort(modes.radius[0])
    assert off[0] < 1e-13
    np.testing.assert_allclose(off[1:], [1e-3, 2e-3], rtol=1e-9)


def test_sampled_modes_hold_both_poles_and_their_logarithms() -> None:
    dt = 0.05
    A = np.array([[[0.9, 0.2], [-0.2, 0.9]]])
    modes, _ = find_usable_modes(A, np.array([True]), dt=dt)
    assert modes.z is not None
    np.testing.assert_allclose(np.abs(modes.z), np.sqrt(0.85), rtol=1e-14)
    np.testing.assert_allclose(modes.s, np.log(modes.z) / dt, rtol=1e-14)
    # ds = dz / (z dt), to first order.
    assert (modes.radius < 1e-13).all()
    error = np.full(A.shape, 1e-6)
    wider, _ = find_usable_modes(A, np.array([True]), lambda rows: error[rows], dt=dt)
    assert (wider.radius >= 1e-6 / (np.sqrt(0.85) * dt)).all()
    assert (wider.radius <= 4e-6 / (np.sqrt(0.85) * dt)).all()


@pytest.mark.parametrize("vectors", [True, False])
def test_no_points_and_no_states(vectors: bool) -> None:
    for shape in ((0, 3, 3), (2, 0, 0)):
        modes, failed = find_usable_modes(
            np.zeros(shape), np.ones(shape[0], dtype=bool), vectors=vectors
        )
        assert modes.s.shape == shape[:2]
        assert failed.shape == shape[:1]


def test_shares_are_the_largest_participation_factors() -> None:
    A = stable(4, 6)
    modes, _ = find_usable_modes(A, np.ones(4, dtype=bool))
    assert modes.index is not None
    assert modes.share is not None
    first = modes.s.imag >= 0
    assert (np.diff(modes.share[first], axis=1) <= 0).all()
    # The second of a pair has the same shares, which are not said twice.
    assert np.isnan(modes.share[~first]).all()
    assert (modes.index[~first] == -1).all()
    for point in range(4):
        poles, right = np.linalg.eig(A[point])
        factors = np.abs(right.T * np.linalg.inv(right))
        factors /= factors.sum(axis=1, keepdims=True)
        place = [np.argmin(np.abs(poles - pole)) for pole in modes.s[point, first[point]]]
        expected = -np.sort(-factors[place], axis=1)[:, :3]
        np.testing.assert_allclose(modes.share[point, first[point]], expected, rtol=1e-9)


@pytest.mark.parametrize(("order", "pole"), [(3, 0.999), (4, 0.99), (6, 0.95)])
def test_repeated_sampled_poles_near_the_circle_get_the_radii_that_decide(
    order: int, pole: float
) -> None:
    """The dearer bound on the radii is used where the unit circle, not the axis, is in reach."""
    companion = np.eye(order, k=-1)
    companion[0] = -np.poly([pole] * order)[1:]
    modes, _ = find_usable_modes(companion[None], np.array([True]), dt=0.1)
    assert modes.z is not None
    assert modes.z_radius is not None
    assert (np.abs(modes.z) + modes.z_radius < 1).all()
    assert (np.abs(modes.z - pole) <= modes.z_radius).all()
