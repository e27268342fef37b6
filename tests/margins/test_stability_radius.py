import numpy as np
import pytest
from scipy.linalg import expm

from ssaudit.errors import BankError
from ssaudit.margins.resolvent import shifted
from ssaudit.margins.stability_radius import find_stability_radius


def stable_models(rng, points, n, dt=0.0):
    A = rng.standard_normal((points, n, n))
    poles = np.linalg.eigvals(A)
    margin = 10 ** rng.uniform(-4, 0, points)
    if dt:
        return A / (np.abs(poles).max(1) * (1 + margin))[:, None, None]
    return A - (poles.real.max(1) + margin * np.abs(poles).max(1))[:, None, None] * np.eye(n)


def attain_radius(A, found, dt=0.0):
    """Perturbations as large as the radius that put a pole on the boundary."""
    state = shifted(A, np.arange(len(A)), found.frequency * (dt or 1.0), dt)
    U, sigma, V = np.linalg.svd(state)
    return sigma[:, -1, None, None] * U[:, :, -1:] @ V[:, -1:, :]


@pytest.mark.parametrize("k", [0.0, 1.0, 4.0, 1e3])
def test_jordan_closed_form(k):
    A = np.array([[[-1.0, k], [0.0, -1.0]]])
    # (sqrt(k² + 4) - k)/2, written so that it does not cancel.
    assert find_stability_radius(A).radius[0] == pytest.approx(2 / (np.hypot(k, 2) + k), rel=1e-7)


@pytest.mark.parametrize("dt", [0.0, 0.1])
def test_normal_matrices_have_the_distance_of_their_poles(dt):
    rng = np.random.default_rng(1)
    Q = np.linalg.qr(rng.standard_normal((50, 4, 4)))[0]
    a, b = rng.uniform(0.05, 0.6, (2, 50))
    core = np.zeros((50, 4, 4))
    for i in (0, 2):
        core[:, i, i] = core[:, i + 1, i + 1] = (-a if dt == 0 else a) * (1 + i / 10)
        core[:, i, i + 1], core[:, i + 1, i] = b, -b
    A = Q @ core @ Q.swapaxes(1, 2)
    poles = np.linalg.eigvals(A)
    distance = (-poles.real if dt == 0 else 1 - np.abs(poles)).min(axis=1)
    np.testing.assert_allclose(find_stability_radius(A, dt).radius, distance, rtol=1e-7)


@pytest.mark.parametrize("dt", [0.0, 0.1])
@pytest.mark.parametrize("n", [2, 5, 12])
def test_exact_perturbation_reaches_the_boundary(n, dt):
    A = stable_models(np.random.default_rng(n), 60, n, dt)
    found = find_stability_radius(A, dt)
    assert found.confirmed.all()
    E = attain_radius(A, found, dt)
    np.testing.assert_allclose(np.linalg.norm(E, 2, axis=(1, 2)), found.radius, rtol=1e-9)
    poles = np.linalg.eigvals(A + E)
    edge = poles.real.max(1) if dt == 0 else np.abs(poles).max(1) - 1
    np.testing.assert_allclose(edge / np.abs(poles).max(1), 0, atol=1e-9)


@pytest.mark.parametrize("dt", [0.0, 0.1])
def test_smaller_perturbations_never_lose_stability(dt):
    rng = np.random.default_rng(7)
    A = stable_models(rng, 20, 4, dt)
    found = find_stability_radius(A, dt)
    attained = attain_radius(A, found, dt)
    for _ in range(5):
        E = rng.standard_normal((20, 100, 4, 4)) + 1j * rng.standard_normal((20, 100, 4, 4))
        # Half of the tries lie close to the worst direction, where a mistake would show.
        size = np.linalg.norm(attained, axis=(1, 2))[:, None, None, None]
        E[:, ::2] = attained[:, None] / size + 0.02 * E[:, ::2]
        E /= np.linalg.norm(E, 2, axis=(2, 3))[:, :, None, None]
        poles = np.linalg.eigvals(A[:, None] + 0.999 * found.radius[:, None, None, None] * E)
        assert (poles.real if dt == 0 else np.abs(poles) - 1).max() < 0
    larger = np.linalg.eigvals(A + 1.001 * attained)  # negative control
    assert ((larger.real if dt == 0 else np.abs(larger) - 1).max(axis=1) > 0).all()


@pytest.mark.parametrize("dt", [0.0, 0.1])
def test_no_frequency_of_a_sweep_is_worse(dt):
    A = stable_models(np.random.default_rng(3), 30, 6, dt)
    found = find_stability_radius(A, dt)
    w = np.linspace(0, np.pi, 4000) if dt else np.append(0, np.geomspace(1e-3, 1e2, 4000))
    s = np.exp(1j * w) if dt else 1j * w
    for model, radius in zip(A, found.radius, strict=True):
        sigma = np.linalg.svd(s[:, None, None] * np.eye(6) - model, compute_uv=False)[:, -1]
        assert radius <= sigma.min() * (1 + 1e-6)
        assert radius > 0.5 * sigma.min()


def test_units_of_states_do_not_move_the_scaled_radius():
    rng = np.random.default_rng(5)
    A = stable_models(rng, 40, 6)
    units = 10.0 ** rng.uniform(-4, 4, (40, 6))
    odd = A * units[:, None, :] / units[:, :, None]
    even, scaled = (find_stability_radius(x, scaled=True).radius for x in (A, odd))
    np.testing.assert_allclose(scaled, even, rtol=1e-6)
    plain = find_stability_radius(odd).radius  # negative control: without scaling it moves a lot
    assert np.median(plain / even) < 0.1


def test_order_of_states_and_points_does_not_matter():
    rng = np.random.default_rng(6)
    A = stable_models(rng, 20, 7)
    swapped = A[:, rng.permutation(7)]
    order = rng.permutation(7)
    swapped = A[:, order][:, :, order]
    for scaled in (False, True):
        expected = find_stability_radius(A, scaled=scaled).radius
        np.testing.assert_allclose(
            find_stability_radius(swapped, scaled=scaled).radius, expected, rtol=1e-7
        )
        backwards = find_stability_radius(A[::-1], scaled=scaled).radius
        np.testing.assert_array_equal(backwards[::-1], expected)
        alone = [find_stability_radius(A[i : i + 1], scaled=scaled).radius[0] for i in range(20)]
        np.testing.assert_array_equal(alone, expected)


def test_fast_sampling_tends_to_the_continuous_radius():
    A = stable_models(np.random.default_rng(8), 30, 5)
    continuous = find_stability_radius(A).radius
    h = 1e-6
    sampled = find_stability_radius(expm(h * A), h)
    np.testing.assert_allclose(sampled.radius / h, continuous, rtol=1e-3)


def test_lost_broken_and_nearly_defective_points_have_no_radius():
    A = np.array([[[-1.0, 0], [0, -2.0]], [[1.0, 0], [0, -2.0]], [[0, 1.0], [0, -1.0]]])
    A = np.concatenate([A, [[[np.nan, 0], [0, -1.0]]], [[[np.inf, 0], [0, -1.0]]]])
    found = find_stability_radius(A)
    np.testing.assert_array_equal(found.radius, [found.radius[0], *[np.nan] * 4])
    assert found.radius[0] == pytest.approx(1.0)
    np.testing.assert_array_equal(found.stable, [True, False, False, False, False])
    np.testing.assert_array_equal(found.confirmed, [True, True, True, False, False])


def test_deadbeat_samples():
    A = np.array([[[0.0, 1.0], [0.0, 0.0]], [[0.0, 0.0], [0.0, 0.0]]])
    found = find_stability_radius(A, 1.0)
    # σ_min of [[z, -1], [0, z]] with abs z = 1: the golden ratio's inverse.
    np.testing.assert_allclose(found.radius, [(np.sqrt(5) - 1) / 2, 1.0], rtol=1e-7)


def test_shapes_are_checked():
    with pytest.raises(BankError, match=r"\(2, 3\)"):
        find_stability_radius(np.zeros((2, 3)))
    assert find_stability_radius(np.zeros((0, 3, 3))).radius.shape == (0,)


def test_odd_units_do_not_spoil_the_plain_radius():
    # (sI - A)⁻¹ of A in odd units is that of an even one times units: found in balanced states,
    # where no entry is rounded away.
    rng = np.random.default_rng(10)
    even = stable_models(rng, 20, 5)
    units = 2.0 ** rng.integers(-30, 31, (20, 5))
    A = even * units[:, None, :] / units[:, :, None]
    found = find_stability_radius(A)
    assert found.confirmed.mean() > 0.9
    w = np.append(0, np.geomspace(1e-4, 1e2, 1000))
    spoilt = 0
    for p in np.nonzero(found.confirmed)[0]:
        s = np.append(w, found.frequency[p])[:, None, None] * 1j * np.eye(5)
        R = np.linalg.inv(s - even[p]) * units[p][None, None, :] / units[p][None, :, None]
        size = np.linalg.norm(R, 2, axis=(1, 2))
        assert found.radius[p] <= (1 + 1e-6) / size.max()
        assert found.radius[p] == pytest.approx(1 / size[-1], rel=1e-6)
        naive = np.linalg.svd(s[-1] - A[p], compute_uv=False)[-1]  # negative control
        spoilt += abs(naive / found.radius[p] - 1) > 1e-3
    assert spoilt > 5
