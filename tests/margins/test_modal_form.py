import mpmath
import numpy as np
import pytest

from ssaudit.margins.modal_form import to_modes
from ssaudit.margins.state_space import StateSpace


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
