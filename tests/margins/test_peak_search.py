import numpy as np

from ssaudit.margins.peak_search import find_peak, near_axis


class Bumps:
    """Two bumps, 1/(1 + 40 (w - 1)²) and a narrow higher one at 5, with their level crossings."""

    tunable = False

    def __init__(self, blind=False, broken=False):
        self.blind, self.broken = blind, broken

    def guess(self, owner, w):
        return np.zeros((len(owner), 0))

    def hold(self, owner, w, multiplier):
        with np.errstate(over="ignore"):
            value = 1 / (1 + 40 * (w - 1) ** 2) + 2 / (1 + 1e8 * (w - 5) ** 2)
        return np.full(len(w), np.nan) if self.broken else value

    def tune(self, owner, w, floor):
        return self.hold(owner, w, None), self.guess(owner, w)

    def cross(self, owner, multiplier, level):
        grid = np.sort(np.append(np.linspace(0, 10, 1001), 5 + np.linspace(-1e-3, 1e-3, 2001)))
        above = self.hold(None, grid, None)[None] > level[:, None] if not self.broken else None
        if self.blind or self.broken:
            return np.full((len(owner), 1), np.nan), np.zeros(len(owner), dtype=bool)
        found = np.where(above[:, 1:] != above[:, :-1], (grid[1:] + grid[:-1]) / 2, np.nan)
        return found, np.zeros(len(owner), dtype=bool)


def search(curve):
    return find_peak(curve, np.array([[1.0]]), np.array([10.0]), np.ones(1), 1e-7)


def test_the_narrow_bump_is_found_from_the_wide_one():
    peak = search(Bumps())
    assert peak.confirmed[0]
    np.testing.assert_allclose(peak.frequency, 5.0, atol=1e-5)
    np.testing.assert_allclose(peak.value, 2.0 + 1 / 641, rtol=1e-2)


def test_without_crossings_it_would_be_missed():
    peak = search(Bumps(blind=True))  # negative control: the eigenproblem is what finds it
    assert peak.value[0] < 1.1


def test_failed_evaluations_are_not_confirmed():
    peak = search(Bumps(broken=True))
    assert not peak.confirmed[0]
    assert np.isnan(peak.value[0])


def test_failed_eigenvalues_are_told():
    found, failed = near_axis(np.array([[1j, np.nan], [2j, -1.0]]))
    np.testing.assert_array_equal(failed, [True, False])
    assert found[1, 0] == 2
