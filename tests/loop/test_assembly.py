"""Assembled loops against frequency responses, exact sampling, and loops built by hand."""

import mpmath
import numpy as np
import pytest
from scipy import linalg

import ssaudit
from ssaudit import ConstantGain, Criteria, Loop
from ssaudit.errors import LoopError
from ssaudit.loop import parts
from ssaudit.loop.assembly import OpenLoop, Sampling, insert_parts, sample, with_controller_states

RNG = np.random.default_rng(5)


def some_plant(points=3, n=4, inputs=2, outputs=3, errors=None):
    shapes = [(n, n), (n, inputs), (outputs, n), (outputs, inputs)]
    A, B, C, D = (RNG.standard_normal((points, *shape)) for shape in shapes)
    return OpenLoop(A, B, C, D, errors or {}, tuple("abcd"[:n]), 0.0)


def response(loop, s):
    n = loop.A.shape[1]
    return loop.C @ np.linalg.solve(s * np.eye(n) - loop.A, loop.B) + loop.D


def test_inserted_parts_multiply_the_response():
    plant = some_plant()
    given = [
        parts.first_order(0.2).at("lag", input="u1"),
        parts.lead_lag(0.3, 0.1).at("lead", input="u2"),
        parts.second_order(5.0, 0.4).at("sensor", signal="y2"),
    ]
    before = parts.chain(given, ["u1", "u2"], "input")
    behind = parts.chain(given, ["y1", "y2", "y3"], "signal")
    whole = insert_parts(plant, before, behind)
    assert whole.states == (*"abcd", "lag.1", "lead.1", "sensor.1", "sensor.2")
    for s in (0.3j, 2 + 5j):
        at_inputs = np.diag([1 / (0.2 * s + 1), (0.3 * s + 1) / (0.1 * s + 1)])
        at_signals = np.diag([1, 25 / (s**2 + 4 * s + 25), 1])
        expected = at_signals @ response(plant, s) @ at_inputs
        np.testing.assert_allclose(response(whole, s), expected, rtol=1e-10)
        assert not np.allclose(response(whole, s), at_signals @ response(plant, s), rtol=1e-3)


def test_errors_of_the_plant_reach_every_product():
    exact = some_plant(points=1)
    spread = {name: 0.01 * RNG.random(getattr(exact, name).shape) for name in "ABCD"}
    before = parts.chain([parts.first_order(0.2).at("lag", input="*")], ["u1", "u2"], "input")
    behind = parts.chain([parts.lead_lag(1, 2).at("f", signal="y1")], ["y1", "y2", "y3"], "signal")
    errors = insert_parts(OpenLoop(exact.A, exact.B, exact.C, exact.D, spread, exact.states, 0.0),
                          before, behind).errors  # fmt: skip
    reference = insert_parts(exact, before, behind)
    largest = 0.0
    for _ in range(200):
        moved = {n: getattr(exact, n) + spread[n] * RNG.choice([-1, 1], spread[n].shape)
                 for n in "ABCD"}  # fmt: skip
        other = insert_parts(OpenLoop(*moved.values(), {}, exact.states, 0.0), before, behind)
        for name in "ABCD":
            gap = np.abs(getattr(other, name) - getattr(reference, name))
            assert np.all(gap <= errors[name] + 1e-14)
            largest = max(largest, float((gap / (errors[name] + 1e-300)).max()))
    assert largest > 0.9  # the bound is reached, so a smaller one would fail


def test_sampled_models_agree_with_mpmath():
    plant = some_plant(points=2)
    dt = 0.13
    sampled = sample(plant, dt, 0)
    mpmath.mp.dps = 40
    for p in range(2):
        joined = np.zeros((6, 6))
        joined[:4, :4], joined[:4, 4:] = plant.A[p] * dt, plant.B[p] * dt
        expected = mpmath.expm(mpmath.matrix(joined.tolist()), method="taylor")
        expected = np.array(expected.tolist(), dtype=float)[:4]
        gap = np.abs(np.hstack([sampled.A[p], sampled.B[p]]) - expected)
        bound = np.hstack([sampled.errors["A"][p], sampled.errors["B"][p]])
        assert np.all(gap <= bound)
        assert bound.max() < 1e-12


def test_error_of_sampled_models_covers_changed_ones():
    exact = some_plant(points=1)
    spread = {"A": 0.01 * RNG.random(exact.A.shape), "B": 0.01 * RNG.random(exact.B.shape)}
    stated = OpenLoop(exact.A, exact.B, exact.C, exact.D, spread, exact.states, 0.0)
    bound = sample(stated, 0.2, 0).errors
    reference = sample(exact, 0.2, 0)
    largest = 0.0
    for _ in range(100):
        A, B = (getattr(exact, n) + spread[n] * RNG.choice([-1, 1], spread[n].shape) for n in "AB")
        other = sample(OpenLoop(A, B, exact.C, exact.D, {}, exact.states, 0.0), 0.2, 0)
        for name in "AB":
            gap = np.abs(getattr(other, name) - getattr(reference, name))
            assert np.all(gap <= bound[name])
            largest = max(largest, float((gap / bound[name]).max()))
    assert largest > 0.3


@pytest.mark.parametrize("late", [0, 1, 3])
def test_late_computer_delays_by_whole_samples(late):
    plant = some_plant(points=1)
    prompt, sampled = sample(plant, 0.1, 0), sample(plant, 0.1, late)
    z = np.exp(0.4j)
    np.testing.assert_allclose(response(sampled, z), response(prompt, z) * z**-late, rtol=1e-10)
    assert len(sampled.states) == 4 + 2 * late == sampled.A.shape[1]


def test_compensator_closes_like_the_feedback_connection():
    plant = some_plant(points=2)
    Ac, Bc, Cc, Dc = (RNG.standard_normal(s) for s in ((2, 2), (2, 3), (2, 2), (2, 3)))
    bank = ssaudit.build_bank(plant.A, plant.B, plant.C, plant.D, revision="A")
    whole = np.block([[Dc, Cc], [Bc, Ac]])
    names = ("u1", "u2", "c1", "c2"), ("y1", "y2", "y3", "c1", "c2")
    for sign in (-1, 1):
        loop = Loop("negative" if sign < 0 else "positive", ConstantGain(whole, *names), "outputs",
                    compensator=("c1", "c2"))  # fmt: skip
        closed = loop.close(bank.sections[0], bank.points, bank.sections[0].read(0, 2))
        assert closed.states[-2:] == ("c1", "c2")
        for p in range(2):
            A, B, C, D = (getattr(plant, name)[p] for name in "ABCD")
            # u = σ(Cc xc + Dc y), y = C x + D u
            gain = np.linalg.inv(np.eye(2) - sign * Dc @ D)
            ux, uc = gain @ (sign * Dc @ C), gain @ (sign * Cc)
            yx, yc = C + D @ ux, D @ uc
            expected = np.block([[A + B @ ux, B @ uc], [Bc @ yx, Ac + Bc @ yc]])
            np.testing.assert_allclose(closed.A[p], expected, rtol=1e-11, atol=1e-11)


def test_compensator_states_are_part_of_the_model():
    grown = with_controller_states(some_plant(), ("c",))
    assert grown.A.shape == (3, 5, 5)
    assert grown.B[0, 4].tolist() == [0, 0, 1]
    assert grown.C[0, 3].tolist() == [0, 0, 0, 0, 1]


def test_quickly_sampled_loop_tends_to_the_continuous_one():
    plant = some_plant(points=1)
    bank = ssaudit.build_bank(plant.A, plant.B, plant.C, plant.D, revision="A")
    K = 0.1 * RNG.standard_normal((2, 3))
    continuous = ssaudit.audit(bank, Loop("negative", ConstantGain(K), "outputs"), Criteria())
    gaps = []
    for dt in (1e-2, 1e-3, 1e-4):
        loop = Loop("negative", ConstantGain(K), "outputs", sampling=Sampling(dt))
        sampled = ssaudit.audit(bank, loop, Criteria())
        gaps.append(abs(sampled.points["max_real"][0] - continuous.points["max_real"][0]))
    assert gaps[0] / gaps[1] == pytest.approx(10, rel=0.3)
    assert gaps[1] / gaps[2] == pytest.approx(10, rel=0.3)


def test_sampled_poles_agree_with_scipy():
    plant = some_plant(points=1)
    bank = ssaudit.build_bank(plant.A, plant.B, plant.C, plant.D, revision="A")
    K = RNG.standard_normal((2, 3))
    loop = Loop("positive", ConstantGain(K), "outputs", sampling=Sampling(0.05))
    found = ssaudit.audit(bank, loop, Criteria())
    E = linalg.expm(np.block([[plant.A[0], plant.B[0]], [np.zeros((2, 6))]]) * 0.05)[:4]
    L = np.linalg.solve(np.eye(2) - K @ plant.D[0], K @ plant.C[0])
    expected = np.linalg.eigvals(E[:, :4] + E[:, 4:] @ L)
    np.testing.assert_allclose(
        np.sort(found.modes["modulus"]), np.sort(np.abs(expected[expected.imag >= 0])), rtol=1e-10
    )


@pytest.mark.parametrize(
    ("loop", "message"),
    [
        ({"parts": (parts.first_order(1.0).at("p", input="rudder"),)}, "names no input: 'rudder'"),
        ({"parts": (parts.first_order(1.0).at("p", signal="u1"),)}, "names no signal: 'u1'"),
        ({"compensator": ("u1",)}, "name of an input"),
    ],
)
def test_path_that_does_not_fit_the_models_is_named(loop, message):
    plant = some_plant()
    bank = ssaudit.build_bank(plant.A, plant.B, plant.C, plant.D, revision="A")
    with pytest.raises(LoopError, match=message):
        ssaudit.audit(bank, Loop("negative", ConstantGain(np.ones((2, 3))), "outputs", **loop),
                      Criteria())  # fmt: skip
