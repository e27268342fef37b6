import mpmath
import numpy as np
import pytest

from ssaudit.errors import LoopError
from ssaudit.margins.state_space import (
    StateSpace,
    feed_back,
    read_loop,
    respond,
    respond_with_slope,
    response_noise,
    sensitivity_of,
    to_continuous,
    to_modes,
    typical_frequency,
    unwarp,
)


def test_closing_agrees_with_the_responses(tools):
    loop = read_loop(*tools.random(np.random.default_rng(1), 20, 5, 2, direct=0.2))
    owner, w = np.arange(20), np.geomspace(0.1, 100, 20)
    L, k = respond(loop, owner, w), np.linspace(-2, 2, 20)
    closed = np.linalg.solve((np.eye(2) + k[:, None, None] * L).swapaxes(1, 2), L.swapaxes(1, 2))
    T = respond(feed_back(loop, k), owner, w)
    np.testing.assert_allclose(T, closed.swapaxes(1, 2), rtol=1e-9)
    S = respond(sensitivity_of(loop), owner, w)
    np.testing.assert_allclose(S @ (np.eye(2) + L), np.broadcast_to(np.eye(2), S.shape), atol=1e-9)


def test_mapped_response_equals_the_sampled_one(tools):
    dt = 0.02
    A, B, C, D = loops = tools.random(np.random.default_rng(2), 15, 4, dt=dt, direct=1.0)
    mapped = to_continuous(read_loop(*loops), dt)
    w = np.geomspace(0.01, 1e3, 15)
    z = np.exp(1j * unwarp(w, dt) * dt)
    sampled = D + C @ np.linalg.solve(z[:, None, None] * np.eye(4) - A, B.astype(complex))
    np.testing.assert_allclose(respond(mapped, np.arange(15), w), sampled, rtol=1e-9)


def test_slope_agrees_with_differences(tools):
    loop = read_loop(*tools.random(np.random.default_rng(3), 10, 4))
    owner, w, h = np.arange(10), np.geomspace(0.1, 100, 10), 1e-6
    _, slope = respond_with_slope(loop, owner, w)
    change = (respond(loop, owner, w * (1 + h)) - respond(loop, owner, w * (1 - h))) / (
        2 * h * w[:, None, None]
    )
    np.testing.assert_allclose(slope, change, rtol=1e-5, atol=1e-9 * np.abs(slope).max())


def test_a_pole_on_the_axis_and_infinity():
    loop = read_loop([[[0.0]]], [[[1.0]]], [[[1.0]]], [[[0.25]]])
    response = respond(loop, np.zeros(3, dtype=int), np.array([0.0, 1.0, np.inf]))[:, 0, 0]
    assert np.isnan(response[0])
    np.testing.assert_allclose(response[1:], [0.25 - 1j, 0.25])


def test_noise_is_that_of_cancelling_terms():
    # 1/(s + 1) - 1/(s + 1): nothing but rounding is left.
    A, B, C = -np.eye(2)[None], np.ones((1, 2, 1)), np.array([[[1.0, -1.0]]])
    loop = read_loop(A, B, C, np.zeros((1, 1, 1)))
    owner, w = np.array([0]), np.array([0.3])
    assert np.abs(respond(loop, owner, w)).item() <= response_noise(loop, owner, w).item()


def test_typical_frequency_of_poles_at_zero():
    np.testing.assert_array_equal(typical_frequency(np.zeros((2, 3), dtype=complex)), 1.0)
    assert typical_frequency(np.zeros((2, 0), dtype=complex)).shape == (2,)


def test_shapes_are_named_in_the_error():
    with pytest.raises(LoopError, match=r"\(1, 2, 1\)"):
        read_loop(
            np.zeros((1, 3, 3)), np.zeros((1, 2, 1)), np.zeros((1, 1, 3)), np.zeros((1, 1, 1))
        )


def exact_response(system, s):
    """D + C (sI - A)⁻¹ B of the first point in 40 digits."""
    with mpmath.workdps(40):
        n = system.A.shape[-1]
        A, B, C = (mpmath.matrix(x[0].tolist()) for x in (system.A, system.B, system.C))
        x = mpmath.lu_solve(mpmath.mpc(s) * mpmath.eye(n) - A, B)
        return complex((C * x)[0]) + system.D[0, 0, 0]


def spread_chain(rng, n, decades):
    """Lags and resonances in a row, over many decades."""
    A = np.zeros((1, n, n))
    for i in range(0, n, 2):
        w, zeta = 10 ** rng.uniform(-decades / 2, decades / 2), 10 ** rng.uniform(-4, 0)
        A[0, i : i + 2, i : i + 2] = w * np.array([[0, 1], [-1, -2 * zeta]])
        if i:
            A[0, i + 1, :i] = w * rng.standard_normal(i) * 0.3
    return StateSpace(A, np.ones((1, n, 1)), np.ones((1, 1, n)), np.full((1, 1, 1), 0.5))


@pytest.mark.parametrize("steps", [0, 2])
def test_modal_form_errs_by_no_more_than_its_doubt(steps):
    rng = np.random.default_rng(11)
    sharper, worst = 0, 0.0
    for _ in range(12):
        system = spread_chain(rng, 8, 8)
        form, rough = to_modes(system, steps=steps), to_modes(system)
        sharper += form.doubt.sum() < 0.5 * rough.doubt.sum()
        p = form.poles[0]
        for w in np.concatenate([np.abs(p.imag), np.abs(p)]):
            apart = 1j * w - p
            found = form.D[0, 0, 0] + (form.left[0, 0] * form.right[0, :, 0] / apart).sum()
            error = abs(found - exact_response(system, 1j * w))
            doubt = form.floor[0] + (form.doubt[0] / np.abs(apart)).sum()
            assert error <= doubt + 1e-15
            worst = max(worst, error / doubt)
    assert worst > 1e-4  # negative control: the doubt is no mere large number
    assert (sharper > 3) == (steps > 0)


def test_modal_form_of_sampled_systems():
    rng = np.random.default_rng(12)
    A = rng.standard_normal((1, 5, 5))
    A /= 1.1 * np.abs(np.linalg.eigvals(A)).max()
    system = StateSpace(A, rng.standard_normal((1, 5, 1)), rng.standard_normal((1, 1, 5)),
                        np.full((1, 1, 1), 0.3))  # fmt: skip
    beside = StateSpace(system.A - np.eye(5), system.B, system.C, system.D)
    form = to_modes(beside, sampled=True)
    for w in (0.0, 0.1, 3.0, 50.0):
        terms = form.left[0, 0] * form.right[0, :, 0] / (1j * w - form.poles[0])
        exact = exact_response(system, (1 + 1j * w) / (1 - 1j * w))
        assert abs(form.D[0, 0, 0] + terms.sum() - exact) < 1e-12


def test_dependent_eigenvectors_leave_the_modal_form_in_doubt():
    jordan = StateSpace(np.array([[[-1.0, 1], [0, -1]]]), np.ones((1, 2, 1)), np.ones((1, 1, 2)),
                        np.zeros((1, 1, 1)))  # fmt: skip
    assert to_modes(jordan).doubt.max() > 1.0
    apart = StateSpace(jordan.A - np.diag([0.0, 1.0]), *list(vars(jordan).values())[1:])
    assert (to_modes(apart).doubt < 1e-12).all()  # negative control
