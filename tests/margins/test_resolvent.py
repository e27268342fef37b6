import numpy as np
import pytest

from ssaudit.margins.cover import cover_left
from ssaudit.margins.modal_form import CORRECTIONS, to_modes
from ssaudit.margins.norms import PlainNorm
from ssaudit.margins.peak_search import Peak
from ssaudit.margins.resolvent import Resolvent, cover_resolvent
from ssaudit.margins.stability_radius import find_stability_radius
from ssaudit.margins.state_space import StateSpace


def chain(n, k, dt):
    """One Jordan block with k beside the diagonal: all its eigenvectors are one."""
    pole = 0.5 if dt else -1.0
    return (pole * np.eye(n) + k * np.eye(n, k=1))[None]


@pytest.mark.parametrize(("n", "k", "dt"), [(2, 4.0, 0.0), (3, 50.0, 0.0), (3, 5.0, 0.1)])
def test_cover_agrees_with_a_sweep_where_eigenvectors_are_one(n, k, dt):
    A = chain(n, k, dt)
    poles = np.full((1, n), 0.5 if dt else -1.0) + 0j
    peak = cover_resolvent(Resolvent(A, poles, dt), np.array([np.pi if dt else 2 * (k + 1)]))
    w = np.linspace(0, np.pi, 20_001) if dt else np.append(0, np.geomspace(1e-4, 4 * k, 20_000))
    s = np.exp(1j * w) if dt else 1j * w
    swept = np.linalg.svd(s[:, None, None] * np.eye(n) - A, compute_uv=False)[:, -1].min()
    assert peak.confirmed[0]
    assert 1 / peak.value[0] == pytest.approx(swept, rel=1e-5)
    found = find_stability_radius(A, dt)
    assert found.confirmed[0]
    assert found.radius[0] == pytest.approx(swept, rel=1e-5)


def test_the_sum_over_poles_says_nothing_there():
    # Negative control: why this last way is needed.
    A, one = chain(3, 50.0, 0.0), np.eye(3)[None]
    form = to_modes(StateSpace(A, one, one, np.zeros((1, 3, 3))), steps=CORRECTIONS)
    peak = Peak(*np.full((2, 1), np.nan), np.zeros(1, dtype=bool))
    cover_left(peak, np.array([0]), form, PlainNorm(), 1e-7)
    assert not peak.confirmed[0]


def test_a_value_that_rounding_hides_is_not_confirmed():
    A = chain(6, 1e4, 0.0)
    peak = cover_resolvent(Resolvent(A, np.full((1, 6), -1.0 + 0j), 0.0), np.array([2e4]))
    assert not peak.confirmed[0]
    assert np.isnan(peak.value[0])
