import numpy as np

from ssaudit.margins.pieces import cut_pieces, middle_of


def test_cuts_outside_do_nothing():
    owner, low, high = cut_pieces(
        np.array([2, 3]), np.array([0.0, 1.0]), np.array([1.0, np.inf]),
        np.array([[np.nan, 5.0], [0.5, 3.0]]),
    )  # fmt: skip
    np.testing.assert_array_equal(owner, [2, 3, 3])
    np.testing.assert_array_equal(low, [0, 1, 3])
    np.testing.assert_array_equal(high, [1, 3, np.inf])


def test_middles_over_decades_and_far_out():
    low, high = np.array([1e-4, 1.0, 0.0, 1e6]), np.array([1e4, 2.0, 1e4, np.inf])
    found = middle_of(low, high, np.full(4, 7.0))
    np.testing.assert_allclose(found, [1.0, 1.5, 7.0, np.inf], rtol=1e-12)
