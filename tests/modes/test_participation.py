"""Participation factors against hand-made systems and their invariance under units."""

import numpy as np
import pytest

from ssaudit.modes.participation import participation, state_names, top_states
from ssaudit.modes.poles import find_modes


def test_states_that_only_one_mode_has_take_part_in_it_alone() -> None:
    A = np.diag([-1.0, -2.0, -3.0])[None]
    _, right, left, _ = find_modes(A)
    np.testing.assert_array_equal(participation(right, left)[0], np.eye(3))


def test_oscillator_shares_its_modes_equally() -> None:
    """Displacement and velocity take equal part, whatever the stiffness."""
    _, right, left, _ = find_modes(np.array([[[0.0, 1.0], [-400.0, 0.0]]]))
    np.testing.assert_allclose(participation(right, left), 0.5, rtol=1e-14)


def test_coupled_pair_by_hand() -> None:
    """A = [[-1, a], [b, -2]] with ab = 3/4 has poles -1/2 and -5/2; p = (s + 2)/(2 s + 3)."""
    poles, right, left, _ = find_modes(np.array([[[-1.0, 3.0], [0.25, -2.0]]]))
    factors = participation(right, left)[0]
    for pole, row in zip(poles[0].real, factors, strict=True):
        first = (pole + 2) / (2 * pole + 3)
        np.testing.assert_allclose(row, [first, 1 - first], rtol=1e-13)


def test_factors_are_positive_and_sum_to_one() -> None:
    _, right, left, _ = find_modes(np.random.default_rng(0).standard_normal((30, 7, 7)))
    factors = participation(right, left)
    assert (factors >= 0).all()
    np.testing.assert_allclose(factors.sum(axis=2), 1.0, rtol=1e-14)


def test_units_of_states_do_not_matter() -> None:
    A = np.random.default_rng(1).standard_normal((10, 5, 5))
    unit = 2.0 ** np.array([0, 7, -9, 3, 12])
    converted = A * unit[:, None] / unit
    poles, *vectors, _ = find_modes(A)
    other_poles, *other_vectors, _ = find_modes(converted)
    factors, other = participation(*vectors), participation(*other_vectors)
    for point in range(10):
        place = [np.argmin(np.abs(other_poles[point] - pole)) for pole in poles[point]]
        np.testing.assert_allclose(other[point][place], factors[point], atol=1e-11)


def test_factors_of_normalised_vectors_do_not_depend_on_their_scale() -> None:
    rng = np.random.default_rng(2)
    _, right, left, _ = find_modes(rng.standard_normal((3, 4, 4)))
    scale = rng.standard_normal((3, 4)) + 1j * rng.standard_normal((3, 4))
    factors = participation(right * scale[:, None, :], left / scale[:, :, None])
    np.testing.assert_allclose(factors, participation(right, left), rtol=1e-12)


def test_unknown_vectors_give_unknown_factors() -> None:
    right = np.full((1, 2, 2), np.nan + 0j)
    assert np.isnan(participation(right, right)).all()
    index, share = top_states(participation(right, right)[0])
    assert (index == -1).all()
    assert np.isnan(share).all()


def test_top_states_fall_and_end_with_the_states() -> None:
    index, share = top_states(np.array([[0.2, 0.5, 0.3, 0.0], [0.0, 1.0, 0.0, 0.0]]))
    assert index.tolist() == [[1, 2, 0], [1, -1, -1]]
    np.testing.assert_array_equal(share, [[0.5, 0.3, 0.2], [1.0, np.nan, np.nan]])
    index, share = top_states(np.array([[0.4, 0.6]]), 3)
    assert index.tolist() == [[1, 0, -1]]
    assert np.isnan(share[0, 2])


def test_equal_states_keep_the_order_of_the_model() -> None:
    assert top_states(np.array([[0.25, 0.25, 0.25, 0.25]]))[0].tolist() == [[0, 1, 2]]


@pytest.mark.parametrize("modes", [0, 3])
def test_names_of_top_states(modes: int) -> None:
    index = np.array([[1, 0, 2], [2, -1, -1], [-1, -1, -1]])[:modes]
    expected = ["pitch, heave, flap", "flap", ""][:modes]
    which, texts = state_names(index, ["heave", "pitch", "flap"])
    assert texts[which].tolist() == expected


def test_names_of_top_states_of_many_modes_equal_those_one_by_one() -> None:
    rng = np.random.default_rng(3)
    names = [f"state {k}" for k in range(40)]
    index = rng.permuted(np.tile(np.arange(40), (200, 1)), axis=1)[:, :3]
    expected = [", ".join(names[i] for i in row) for row in index]
    which, texts = state_names(index, names)
    assert texts[which].tolist() == expected
