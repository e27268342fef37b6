"""Loops matched to models by name, never by position alone."""

from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

import ssaudit
from ssaudit.bank import ModelBank
from ssaudit.errors import LoopError
from ssaudit.loop.closing import ClosedModels
from ssaudit.loop.model import Loop

Floats = NDArray[np.float64]
STATES, INPUTS, OUTPUTS = ("heave", "pitch", "rate"), ("flap", "rudder"), ("height", "angle")


def some_bank(points: int = 4, **change: Any) -> ModelBank:
    rng = np.random.default_rng(0)
    shapes = {"A": (3, 3), "B": (3, 2), "C": (2, 3), "D": (2, 2)}
    matrices = {name: rng.integers(-5, 6, (points, *shape)) / 8 for name, shape in shapes.items()}
    given: dict[str, Any] = {
        **matrices,
        "states": STATES,
        "inputs": INPUTS,
        "outputs": OUTPUTS,
        "coordinates": {"speed": (np.linspace(10.0, 20.0, points), "m/s")},
        "revision": "A",
        **change,
    }
    return ssaudit.build_bank(**given)


def close(loop: Loop, bank: ModelBank) -> ClosedModels:
    (section,) = bank.sections
    return loop.close(section, bank.points, section.read(0, len(bank)))


def gain(matrix: Any, **names: Any) -> ssaudit.ConstantGain:
    return ssaudit.ConstantGain(matrix, **names)


def refusal(loop: Loop, bank: ModelBank) -> str:
    with pytest.raises(LoopError) as caught:
        ssaudit.audit(bank, loop, ssaudit.Criteria())
    return str(caught.value)


@pytest.mark.parametrize("feed", ["states", "outputs"])
def test_named_gains_are_matched_by_name_in_any_order(feed: str) -> None:
    bank = some_bank()
    signals = STATES if feed == "states" else OUTPUTS
    K = np.arange(1.0, 1 + 2 * len(signals)).reshape(2, -1) / 16
    expected = close(Loop("negative", gain(K), feed), bank).A
    for rows in ([0, 1], [1, 0]):
        for shift in range(len(signals)):
            columns = np.roll(np.arange(len(signals)), shift)
            named = gain(
                K[rows][:, columns],
                inputs=[INPUTS[i] for i in rows],
                signals=[signals[i] for i in columns],
            )
            np.testing.assert_array_equal(close(Loop("negative", named, feed), bank).A, expected)


def test_schedule_is_matched_by_name_too() -> None:
    bank = some_bank()
    gains = np.random.default_rng(1).standard_normal((2, 2, 3))
    grid = ([10.0, 20.0],)
    plain = ssaudit.GainSchedule(("speed",), grid, gains, INPUTS, STATES, "refuse")
    turned = ssaudit.GainSchedule(
        ("speed",), grid, gains[:, ::-1, ::-1], INPUTS[::-1], STATES[::-1], "refuse"
    )
    np.testing.assert_array_equal(
        close(Loop("positive", plain), bank).A, close(Loop("positive", turned), bank).A
    )


def test_gains_vary_with_the_points() -> None:
    bank = some_bank(3)
    gains = np.array([np.zeros((2, 3)), np.ones((2, 3))])
    schedule = ssaudit.GainSchedule(("speed",), ([10.0, 20.0],), gains, INPUTS, STATES, "refuse")
    found = close(Loop("negative", schedule), bank)
    matrices = bank.sections[0].read(0, 3)
    for point, share in enumerate((0.0, 0.5, 1.0)):
        expected = matrices["A"][point] - matrices["B"][point] @ (share * np.ones((2, 3)))
        np.testing.assert_array_equal(found.A[point], expected)


def test_unnamed_signals_get_no_feedback_only_when_asked() -> None:
    bank = some_bank()
    partial = {"inputs": ["rudder"], "signals": ["pitch"]}
    loop = Loop("negative", gain([[2.0]], unnamed="zero", **partial))
    whole = np.array([[0, 0, 0], [0, 2.0, 0]])
    np.testing.assert_array_equal(close(loop, bank).A, close(Loop("negative", gain(whole)), bank).A)
    told = refusal(Loop("negative", gain([[2.0]], **partial)), bank)
    assert "does not name the input 'flap'; name all of flap, rudder" in told


@pytest.mark.parametrize(
    ("names", "told"),
    [
        (
            {"inputs": ["flap", "ruder"], "signals": STATES},
            "'ruder', no input here: did you mean rudder",
        ),
        (
            {"inputs": INPUTS, "signals": ["heave", "pitch", "roll"]},
            "'roll', no state here: valid: heave",
        ),
        ({"inputs": INPUTS, "signals": ["heave", "pitch", "angle"]}, "'angle', no state here"),
    ],
)
def test_unknown_names_are_refused_with_the_valid_ones(names: dict[str, Any], told: str) -> None:
    assert told in refusal(Loop("negative", gain(np.ones((2, 3)), **names)), some_bank())


def test_unnamed_matrix_must_fit_and_is_told_the_names() -> None:
    told = refusal(Loop("negative", gain(np.ones((2, 2)))), some_bank())
    assert "the gain matrix is for 2 states, the models have 3: heave, pitch, rate" in told
    told = refusal(Loop("negative", gain(np.ones((3, 3)))), some_bank())
    assert "the gain matrix is for 3 inputs, the models have 2: flap, rudder" in told


@pytest.mark.parametrize(("feed", "absent"), [("states", "B"), ("outputs", "C"), ("outputs", "D")])
def test_missing_matrix_is_named(feed: str, absent: str) -> None:
    # The shapes that the other matrices give stay known.
    bank = some_bank(**{absent: None})
    signals = 3 if feed == "states" else 2
    told = refusal(Loop("negative", gain(np.ones((2, signals))), feed), bank)
    assert f"{absent} is missing" in told


def test_models_that_come_closed_stay_as_they_are() -> None:
    bank = some_bank()
    found = close(Loop("", None, "none"), bank)
    np.testing.assert_array_equal(found.A, bank.sections[0].read(0, 4)["A"])
    assert found.K is None


def test_variable_that_is_no_coordinate_is_refused() -> None:
    schedule = ssaudit.GainSchedule(
        ("sped",), ([0.0],), np.zeros((1, 2, 3)), INPUTS, STATES, "refuse"
    )
    told = refusal(Loop("negative", schedule), some_bank())
    assert "'sped'" in told
    assert "did you mean speed?" in told


@pytest.mark.parametrize("outside", ["refuse", "hold"])
def test_points_beyond_the_table(outside: str) -> None:
    bank = some_bank()
    gains = np.random.default_rng(2).standard_normal((2, 2, 3)) / 8
    schedule = ssaudit.GainSchedule(("speed",), ([12.0, 20.0],), gains, INPUTS, STATES, outside)
    found = ssaudit.audit(bank, Loop("negative", schedule), ssaudit.Criteria())
    first = found.points.iloc[0]
    if outside == "refuse":
        assert first["verdict"] == "void"
        assert first["reason"] == "outside the gain table: speed 10 is not in 12 to 20"
        assert not found.points["held"].any()
    else:
        assert first["verdict"] != "void"
        assert found.points["held"].tolist() == [True, False, False, False]
        assert found.summary.held == 1
        np.testing.assert_array_equal(
            close(Loop("negative", schedule), bank).A[0],
            close(Loop("negative", gain(gains[0])), bank).A[0],
        )


def test_void_points_keep_their_own_reason_and_are_not_counted_as_held() -> None:
    A = np.stack([-np.eye(3)] * 4)
    A[0, 1, 1] = np.nan
    bank = some_bank(A=A)
    gains = np.zeros((1, 2, 3))
    for outside in ("refuse", "hold"):
        schedule = ssaudit.GainSchedule(("speed",), ([90.0],), gains, INPUTS, STATES, outside)
        found = close(Loop("negative", schedule), bank)
        assert found.void[0] == "A[2,2] is NaN"
        assert not found.A[0].any()
        assert found.held.tolist() == [False] + [outside == "hold"] * 3


def test_ill_posed_points_are_void_and_the_others_are_judged() -> None:
    one = np.ones((3, 1, 1))
    bank = ssaudit.build_bank(-one, one, one, one * [[[1.0]], [[0.5]], [[0.0]]], revision="A")
    found = ssaudit.audit(bank, Loop("positive", gain([[1.0]]), "outputs"), ssaudit.Criteria())
    void, lost, on_axis = found.points["verdict"]
    assert (void, lost) == ("void", "lost")
    assert on_axis in ("lost", "doubt")
    assert found.points["reason"][0].startswith("algebraic loop is ill-posed")
    # Poles -1 + 1/(1 - 0.5) = 1, and -1 + 1 = 0: on the axis.
    assert found.points["max_real"].tolist()[1:] == [1.0, 0.0]


@pytest.mark.parametrize(("feed", "change"), [("states", "B"), ("outputs", "C"), ("outputs", "D")])
def test_closed_models_that_overflow_are_void(feed: str, change: str) -> None:
    one = np.ones((2, 1, 1))
    matrices = {"A": -one, "B": one, "C": one, "D": 0 * one}
    matrices[change] = one * [[[1e300]], [[0.5]]]
    bank = ssaudit.build_bank(**matrices, revision="A")
    found = ssaudit.audit(bank, Loop("negative", gain([[1e300]]), feed), ssaudit.Criteria())
    assert found.points["verdict"].tolist() == ["void", "ok"]


@pytest.mark.parametrize(
    ("arguments", "told"),
    [
        (("minus", gain([[1.0]])), "sign is 'minus'"),
        (("", gain([[1.0]])), "sign is ''"),
        (("negative", None), "gain is missing"),
        (("negative", gain([[1.0]]), "output"), "feed is 'output'"),
        (("negative", gain([[1.0]]), "none"), "takes no gain"),
    ],
)
def test_loop_that_contradicts_itself(arguments: tuple[Any, ...], told: str) -> None:
    with pytest.raises(LoopError, match=told):
        Loop(*arguments)
