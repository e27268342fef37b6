"""Numbers that are not confirmed are left empty, whatever kind of margin they are."""

import numpy as np

from ssaudit.margins.confirmed import only_confirmed
from ssaudit.margins.real_radius import find_real_radius
from ssaudit.margins.stable_gains import find_stable_gains


def test_a_radius_that_rounding_hides_is_empty_and_others_stay():
    A = np.zeros((2, 4, 4))
    for point, (slow, damping) in enumerate(((1e-5, 1e-5), (1.0, 0.1))):
        for i, (w, zeta) in enumerate(((slow, damping), (1e5, 0.5))):
            block = [[-zeta * w, w], [-w, -zeta * w]]
            A[point, 2 * i : 2 * i + 2, 2 * i : 2 * i + 2] = block
    found = find_real_radius(A)
    shown = only_confirmed(found)
    assert found.confirmed.tolist() == [False, True]
    assert np.isfinite(found.radius).all()  # the number that must not be shown
    assert np.isnan(shown.radius[0])
    assert shown.radius[1] == found.radius[1]
    np.testing.assert_allclose(shown.radius[1], 0.1, rtol=1e-6)
    assert shown.stable.tolist() == found.stable.tolist()


def test_intervals_of_several_columns_are_emptied_by_point():
    A = np.array([[[0.0, 1.0], [-1.0, -1.0]]] * 2)
    A[1, 0, 0] = np.nan
    found = find_stable_gains(A, *(np.ones((2, 2, 1)), np.ones((2, 1, 2)), np.zeros((2, 1, 1))))
    shown = only_confirmed(found)
    assert not found.confirmed[1]
    assert np.isnan(shown.low[1]).all()
    np.testing.assert_array_equal(shown.low[0], found.low[0])
