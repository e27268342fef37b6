import numpy as np
import pytest

from ssaudit.margins.gain_curve import find_gain_peak, hamiltonian_of, scale_channels
from ssaudit.margins.responses import respond
from ssaudit.margins.state_space import StateSpace


def stable_systems(points=12, n=6, m=2):
    rng = np.random.default_rng(3)
    A = rng.standard_normal((points, n, n)) - 4 * np.eye(n)
    return StateSpace(A, rng.standard_normal((points, n, m)), rng.standard_normal((points, m, n)),
                      0.1 * rng.standard_normal((points, m, m)))  # fmt: skip


def test_levels_that_are_singular_values_put_eigenvalues_on_the_axis():
    G, w = stable_systems(), np.linspace(0.3, 5, 12)
    sizes = np.linalg.svd(respond(G, np.arange(12), w), compute_uv=False)
    for level in sizes.T:
        eigenvalues = np.linalg.eigvals(hamiltonian_of(G, level))
        assert np.abs(eigenvalues - 1j * w[:, None]).min(axis=1).max() < 1e-8
    # Negative control: above the peak none is near the axis.
    poles = np.linalg.eigvals(G.A)
    peak = find_gain_peak(G, poles, structured=False)
    above = np.linalg.eigvals(hamiltonian_of(G, 1.1 * peak.value))
    assert (np.abs(above.real) > 1e-3).all()


def test_levels_at_the_limit_have_no_matrix():
    one = np.ones((1, 1, 1))
    assert np.isnan(hamiltonian_of(StateSpace(-one, one, one, 2 * one), np.array([2.0]))).any()


@pytest.mark.parametrize("structured", [False, True])
def test_peaks_against_a_sweep(structured):
    G = stable_systems()
    peak = find_gain_peak(G, np.linalg.eigvals(G.A), structured=structured)
    assert peak.confirmed.all()
    w = np.append(0, np.geomspace(1e-2, 1e3, 2000))
    swept = np.array([
        np.linalg.norm(respond(G, np.full(len(w), i), w), 2, axis=(1, 2)).max() for i in range(12)
    ])  # fmt: skip
    assert (peak.value <= swept * (1 + 1e-4)).all()
    if structured:  # negative control: scalings bring it down
        assert (peak.value < 0.99 * swept).any()
    else:
        assert (peak.value >= swept * (1 - 1e-7)).all()


def test_scaled_channels_scale_the_response():
    G, x = stable_systems(1), np.log([[2.0, 5.0]])
    plain, scaled = (respond(S, np.array([0]), np.ones(1)) for S in (G, scale_channels(G, x)))
    np.testing.assert_allclose(scaled, np.diag([2, 5]) @ plain @ np.diag([0.5, 0.2]), rtol=1e-12)
