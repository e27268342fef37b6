"""Radii against exact arithmetic: the true poles always lie within, and the radii are not huge."""

import os

import numpy as np
import pytest
from scipy.sparse import csr_matrix
from scipy.sparse.csgraph import maximum_bipartite_matching

from ssaudit.loop.closing import close_output_feedback
from ssaudit.modes.clusters import balance_scaling, cluster_radii
from ssaudit.modes.entry_errors import closed_loop_entry_error
from ssaudit.modes.poles import find_modes
from ssaudit.modes.radii import continuous_radius, damping_ratio_radius, pole_radii

DRAWS = 400 if os.environ.get("SSAUDIT_LONG") else 25


def within(poles, radii, true):
    """Whether the true poles can be matched one to one to the disks around the computed ones."""
    # The exact poles were rounded to double precision once.
    near = np.abs(poles[:, None] - true) <= radii[:, None] + 1e-15 * np.abs(true)
    return bool((maximum_bipartite_matching(csr_matrix(near)) >= 0).all())


def radii_of(A, **kwargs):
    poles, right, left, _ = find_modes(A)
    return poles, pole_radii(A, poles, right, left, **kwargs)


@pytest.mark.parametrize("seed", [1, 2])
def test_true_poles_lie_within_radii_of_every_family(families, exact_poles, seed):
    rng = np.random.default_rng(seed)
    for name, draw in families.items():
        for _ in range(DRAWS):
            A = draw(rng)
            poles, radii = radii_of(A[None])
            assert within(poles[0], radii[0], exact_poles(A)), name


def test_true_poles_lie_within_radii_for_uncertain_entries(families, exact_poles):
    rng = np.random.default_rng(3)
    for name, draw in families.items():
        for relative in (1e-9, 1e-6, 1e-3):
            A = draw(rng)
            E = relative * np.abs(A)
            poles, radii = radii_of(A[None], entry_error=E)
            for _ in range(4):
                # Corners of the uncertainty are the worst; shrunk so that rounding stays inside.
                other = A + E * rng.choice([-1, 1], A.shape) * (1 - 1e-6)
                if relative < 1e-8:
                    other = A + 0.999 * E * rng.choice([-1, 1], A.shape)
                assert within(poles[0], radii[0], exact_poles(other)), (name, relative)


def test_radii_too_small_are_noticed(families, exact_poles):
    """Negative control: the check above fails once the radii are divided by the slack they have."""
    rng = np.random.default_rng(3)
    caught = 0
    for _ in range(20):
        A = families["random"](rng)
        E = 1e-6 * np.abs(A)
        poles, radii = radii_of(A[None], entry_error=E)
        true = exact_poles(A + 0.999 * E * rng.choice([-1, 1], A.shape))
        caught += not within(poles[0], radii[0] / 30, true)
    assert caught > 5


@pytest.mark.parametrize("digits", [4, 6, 8])
def test_rounded_export_keeps_true_poles_within_radii(exact_poles, digits):
    rng = np.random.default_rng(digits)
    for _ in range(DRAWS):
        A = rng.standard_normal((1, 5, 5)) * 10.0 ** rng.uniform(-2, 2, (1, 5, 1)) - np.eye(5)
        B, C = rng.standard_normal((1, 5, 2)), rng.standard_normal((1, 3, 5))
        D, K = 0.1 * rng.standard_normal((1, 3, 2)), 0.3 * rng.standard_normal((1, 2, 3))
        written = [np.vectorize(lambda x: float(f"{x:.{digits - 1}e}"))(M) for M in (A, B, C, D)]
        closed, _ = close_output_feedback(*written, K, -1)
        error = closed_loop_entry_error(*written, K, sign=-1, digits=digits)
        poles, radii = radii_of(closed, entry_error=error)
        true, _ = close_output_feedback(A, B, C, D, K, -1)
        assert (np.abs(true - closed) <= error).all()
        assert within(poles[0], radii[0], exact_poles(true[0]))


def test_radii_are_tiny_for_condition_below_a_million(families):
    """A first-order bound is eps times a small multiple of n, condition and balanced norm."""
    rng = np.random.default_rng(8)
    seen = 0
    for name in ("random", "graded", "badly scaled", "grcar", "near the axis"):
        for _ in range(DRAWS):
            A = families[name](rng)[None]
            poles, right, left, _ = find_modes(A)
            d = balance_scaling(A)
            norm = np.linalg.norm(A * d[:, None, :] / d[:, :, None])
            balanced = np.linalg.norm(right / d[:, :, None], axis=1)
            condition = balanced * np.linalg.norm(left * d[:, None, :], axis=2)
            radii = pole_radii(A, poles, right, left)
            worst = condition.max()
            if worst < 1e6:
                seen += 1
                assert (radii <= 50 * len(A[0]) * 2.3e-16 * worst * norm).all(), name
    assert seen > 4 * DRAWS


def test_units_of_the_states_do_not_matter():
    rng = np.random.default_rng(9)
    A = rng.standard_normal((20, 6, 6))
    scale = 2.0 ** rng.integers(-30, 30, (20, 6))
    scaled = A * scale[:, None, :] / scale[:, :, None]
    for error in (None, 1e-5):
        E, scaled_E = (None, None) if error is None else (error * abs(A), error * abs(scaled))
        plain, changed = radii_of(A, entry_error=E)[1], radii_of(scaled, entry_error=scaled_E)[1]
        assert np.sort(changed, axis=1) == pytest.approx(np.sort(plain, axis=1), rel=0.5)


def test_order_and_slicing_of_points_do_not_matter(monkeypatch, families):
    rng = np.random.default_rng(10)
    A = np.array([families["jordan"](rng) for _ in range(12)])
    poles, right, left, _ = find_modes(A)
    plain = pole_radii(A, poles, right, left, entry_error=1e-4 * abs(A))
    turned = np.arange(12)[::-1]
    monkeypatch.setattr("ssaudit.modes.radii.SLICE_ENTRIES", 36 * 5)
    other = pole_radii(A[turned], poles[turned], right[turned], left[turned],
                       entry_error=1e-4 * abs(A[turned]))  # fmt: skip
    assert other[turned] == pytest.approx(plain, rel=1e-9)


def test_nilpotent_radius_reaches_over_the_axis_and_no_further_than_sensible(nilpotent):
    """Poles 0 or -1/128; the scatter of the computed ones is about 0.04."""
    A = np.stack([nilpotent, nilpotent - np.eye(5) / 128])
    poles, radii = radii_of(A)
    assert (radii > np.abs(poles.real)).all()
    assert (np.abs(poles - np.array([[0], [-1 / 128]])) <= radii).all()
    assert (radii < 1.0).all()


def test_equal_lags_in_series_are_decided():
    """A defective model whose left vectors do not exist; the cluster bound is about sqrt(eps)."""
    A = np.array([[[-10.0, 10, 0], [0, -10, 0], [1, 0, -2]]])
    poles, radii = radii_of(A)
    assert (radii < 1e-4).all()
    assert (np.abs(np.sort(poles.real) - [[-10, -10, -2]]) <= 1e-4).all()


def test_cluster_bound_alone_holds(families, exact_poles):
    rng = np.random.default_rng(11)
    for name, draw in families.items():
        for error in (0.0, 1e-7):
            A = draw(rng)
            E = error * np.abs(A)
            poles = np.linalg.eigvals(A).astype(complex)
            radii = cluster_radii(A, poles, E)
            assert np.isfinite(radii).all(), name
            other = A + 0.9 * E * rng.choice([-1, 1], A.shape)
            assert within(poles, radii, exact_poles(other)), name


def test_a_failed_point_gets_no_radius_and_spoils_no_other():
    A = np.array([np.diag([-1.0, -2.0])] * 2)
    poles, right, left, _ = find_modes(A)
    poles[0], right[0], left[0] = np.nan, np.nan, np.nan
    radii = pole_radii(A, poles, right, left)
    assert np.isinf(radii[0]).all()
    assert (radii[1] < 1e-14).all()
    empty = np.zeros((0, 3, 3))
    assert pole_radii(empty, empty[:, 0].astype(complex), empty + 0j, empty + 0j).shape == (0, 3)


@pytest.mark.parametrize("seed", range(4))
def test_damping_ratio_range_is_that_of_the_disk(seed):
    rng = np.random.default_rng(seed)
    s = rng.standard_normal(50) + 1j * rng.standard_normal(50)
    radius = np.abs(s) * rng.uniform(0, 0.99, 50)
    low, high = damping_ratio_radius(s, radius)
    edge = s[:, None] + radius[:, None] * np.exp(2j * np.pi * np.arange(20000) / 20000)
    zeta = -edge.real / np.abs(edge)
    assert low == pytest.approx(zeta.min(axis=1), abs=1e-6)
    assert high == pytest.approx(zeta.max(axis=1), abs=1e-6)


def test_damping_ratio_range_at_the_origin_is_everything():
    low, high = damping_ratio_radius(np.array([-1 + 0j, 0, -1]), np.array([1.0, 0.0, np.inf]))
    assert low.tolist() == [-1, -1, -1]
    assert high.tolist() == [1, 1, 1]


def test_continuous_radius_covers_the_image_of_the_disk():
    rng = np.random.default_rng(1)
    z = rng.standard_normal(50) + 1j * rng.standard_normal(50)
    radius = np.abs(z) * rng.uniform(0, 0.9, 50)
    edge = 1 + (radius / np.abs(z))[:, None] * np.exp(2j * np.pi * np.arange(4000) / 4000)
    reach = np.abs(np.log(edge)).max(axis=1) / 0.02
    assert continuous_radius(z, radius, 0.02) == pytest.approx(reach, rel=1e-6)
    assert np.isinf(continuous_radius(np.array([0j, 0.1]), np.array([0.0, 0.1]), 0.1)).all()
