"""Each conjugate pair once: nothing that is found may differ from what all modes give."""

import mpmath
import numpy as np
import pytest

from ssaudit.modes.pairs import (
    PairedModes,
    add_left_vectors,
    equally_paired,
    inverse_defect,
    pair_modes,
)
from ssaudit.modes.poles import find_modes, find_vectors
from ssaudit.modes.radii import paired_radii


def groups(A):
    """Modes of points with equally many pairs, and which points those are."""
    poles, right, _ = find_vectors(A)
    for rows, _ in equally_paired(poles):
        yield rows, add_left_vectors(poles[rows], right[rows])


def every_mode(poles, right, left):
    """The same without any pair: each mode stands for itself."""
    place = np.tile(np.arange(poles.shape[1]), (len(poles), 1))
    ones = np.ones_like(place)
    return PairedModes(poles, place, ones, place, right, left, inverse_defect(left, right))


@pytest.fixture
def models():
    """Random models of six states, with from none to three pairs."""
    models = np.random.default_rng(5).standard_normal((60, 6, 6))
    models[7] = np.triu(models[7])
    return models


def test_kept_vectors_are_those_of_the_complex_inverse(models):
    poles, right, left, _ = find_modes(models)
    seen = 0
    for rows, modes in groups(models):
        point = rows[:, None]
        np.testing.assert_array_equal(modes.kept, poles[point, modes.place])
        np.testing.assert_allclose(modes.left, left[point, modes.place], rtol=1e-9, atol=1e-12)
        np.testing.assert_array_equal(
            modes.right, np.swapaxes(np.swapaxes(right, 1, 2)[point, modes.place], 1, 2)
        )
        assert (modes.stands_for.sum(axis=1) == 6).all()
        assert (modes.kept.imag >= 0).all()
        again = modes.each(modes.kept)
        np.testing.assert_array_equal(again.real, poles[rows].real)
        np.testing.assert_array_equal(np.abs(again.imag), np.abs(poles[rows].imag))
        seen += len(rows)
    assert seen == 60


def test_points_with_equally_many_pairs_stand_together(models):
    poles, _, _ = find_vectors(models)
    found = list(equally_paired(poles))
    assert len(found) == 4
    for rows, kept in found:
        assert ((poles[rows].imag > 0).sum(axis=1) == 6 - kept).all()
    np.testing.assert_array_equal(np.sort(np.concatenate([rows for rows, _ in found])), range(60))


def test_radii_are_those_of_all_modes_one_by_one(models):
    """Also where disks overlap and share radii: one entry is uncertain by a tenth."""
    poles, right, left, _ = find_modes(models)
    for uncertain in (0.0, 1e-6, 1e-2, 0.1):
        error = uncertain * np.abs(models)
        for rows, modes in groups(models):
            whole = every_mode(poles[rows], right[rows], left[rows])
            by_pairs = paired_radii(models[rows], modes, error[rows])
            one_by_one = paired_radii(models[rows], whole, error[rows])
            # Rounding of vectors and of their inverse differs; all else is the same.
            rounding = 1e-11 if uncertain == 0.0 else 0.0
            np.testing.assert_allclose(by_pairs, one_by_one, rtol=1e-6, atol=rounding)


def test_a_pair_counted_as_one_mode_would_show(models):
    """Negative control: pairs that stand for one mode only have smaller radii."""
    error = 1e-2 * np.abs(models)
    smaller = 0
    for rows, modes in groups(models):
        if not (modes.stands_for == 2).any():
            continue
        wrong = PairedModes(
            modes.poles,
            modes.place,
            np.ones_like(modes.stands_for),
            modes.back,
            modes.right,
            modes.left,
            modes.defect,
        )
        right = paired_radii(models[rows], modes, error[rows])
        smaller += (paired_radii(models[rows], wrong, error[rows]) < 0.999 * right).sum()
    assert smaller > 20


def test_the_defect_bounds_the_exact_one():
    """In 60 digits, for vectors from well to ill conditioned."""
    rng = np.random.default_rng(7)
    A = np.triu(rng.standard_normal((12, 5, 5)), 1) * 10.0 ** np.arange(-2, 4, 0.5)[:, None, None]
    A[:, range(5), range(5)] = -np.arange(1.0, 6.0)
    A[:, 0, 1], A[:, 1, 0], A[:, 1, 1] = 3.0, -3.0, -1.0
    checked = 0
    for rows, modes in groups(A):
        for i in range(len(rows)):
            with mpmath.workdps(60):
                left, some = mpmath.matrix(modes.left[i].tolist()), modes.right[i]
                paired = modes.stands_for[i] == 2
                whole = mpmath.matrix(np.hstack([some, some[:, paired].conj()]).tolist())
                product = left * whole
                for k in range(product.rows):
                    product[k, k] -= 1
                    exact = sum(abs(product[k, j]) for j in range(product.cols))
                    assert exact <= modes.defect[i, k] * (1 + 1e-12)
                    checked += 1
    assert checked > 30


def test_poles_that_are_not_symmetric_are_kept_one_by_one():
    A = -np.eye(3)[None]
    _, right, left, _ = find_modes(A)
    odd = np.array([[-1 + 1j, -1 - 0.5j, -1 - 0.5j]])
    (found,) = equally_paired(odd)
    assert found[1] == 3
    modes = pair_modes(odd, right, left)
    assert modes.stands_for.tolist() == [[1, 1, 1]]
    np.testing.assert_array_equal(modes.each(modes.kept), odd)


def test_no_points_and_one_that_cannot_be_solved():
    A = np.full((2, 3, 3), np.nan)
    A[0] = np.diag([-1.0, -2.0, -3.0])
    poles, right, failed = find_vectors(A)
    assert failed.tolist() == [False, True]
    found = {int(rows[0]): add_left_vectors(poles[rows], right[rows]) for rows, _ in
             equally_paired(poles)}  # fmt: skip
    assert np.isfinite(found[0].left[0]).all()
    assert list(equally_paired(poles[:0])) == []
