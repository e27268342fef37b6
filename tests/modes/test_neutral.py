"""Neutral states: exempt only where nothing depends on them."""

from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

import ssaudit
from ssaudit.modes.neutral import grows_at_rest, neutral_states

# Yaw rate, heading, cross-track position: r' = -r, heading' = r, position' = 5 heading.
SHIP = np.array([[-1.0, 0.0, 0.0], [1.0, 0.0, 0.0], [0.0, 5.0, 0.0]])
NAMES = ["yaw_rate", "heading", "position"]


def audited(A: Any, neutral: tuple[str, ...], dt: float) -> Any:
    bank = ssaudit.build_bank([A], revision="A", states=NAMES[: len(A)], dt=dt)
    loop, criteria = ssaudit.Loop("", None, "none"), ssaudit.Criteria((), neutral)
    return ssaudit.audit(bank, loop, criteria).points.iloc[0]


def verdict(A: Any, neutral: tuple[str, ...], dt: float = 0.0) -> str:
    return str(audited(A, neutral, dt)["verdict"])


def reason(A: Any, neutral: tuple[str, ...], dt: float = 0.0) -> str:
    return str(audited(A, neutral, dt)["reason"])


def found(A: NDArray[np.float64], named: list[int], sampled: bool = False) -> list[bool]:
    return [bool(x) for x in neutral_states(A[None], np.array(named, dtype=int), sampled)[0]]


def test_heading_that_nothing_depends_on_is_neutral() -> None:
    A = SHIP[:2, :2]
    assert found(A, [1]) == [False, True]
    assert verdict(A, ("heading",)) == "ok"
    assert verdict(A, ()) in ("lost", "doubt")


def test_heading_that_is_fed_back_is_not_neutral() -> None:
    A = SHIP[:2, :2].copy()
    A[0, 1] = -1e-30
    assert found(A, [1]) == [False, False]
    A[0, 1] = 0.5
    assert verdict(A, ("heading",)) == "lost"


def test_state_that_is_not_named_is_not_exempt() -> None:
    assert found(SHIP[:2, :2], []) == [False, False]
    assert found(SHIP[:2, :2], [0]) == [False, False]


def test_position_that_depends_on_a_neutral_heading_makes_the_heading_count() -> None:
    """An offset of heading makes the position grow as t: a repeated pole at 0, not a simple one."""
    assert found(SHIP, [1, 2]) == [False, False, True]
    assert verdict(SHIP, ("heading", "position")) == "lost"
    assert "grows as t" in reason(SHIP, ("heading", "position"))
    assert grows_at_rest(SHIP[np.newaxis], sampled=False).tolist() == [True]
    apart = SHIP.copy()
    apart[2, 1] = 0.0
    assert grows_at_rest(apart[np.newaxis], sampled=False).tolist() == [False]
    assert verdict(apart, ("heading", "position")) == "ok"


def test_heading_stays_when_only_it_is_named_and_a_position_depends_on_it() -> None:
    assert found(SHIP, [1]) == [False, False, False]
    assert found(SHIP, [2]) == [False, False, True]
    assert verdict(SHIP, ("position",)) in ("lost", "doubt")


def test_two_named_states_that_depend_on_each_other_stay() -> None:
    A = np.array([[-1.0, 0.0, 0.0], [0.0, 0.0, 1.0], [0.0, 1.0, 0.0]])
    assert found(A, [1, 2]) == [False, False, False]
    assert verdict(A, ("heading", "position")) == "lost"


def test_neutral_state_with_a_pole_of_its_own_is_no_exemption() -> None:
    """A growing state that nothing else depends on is not neutral: its column is not zero."""
    A = np.array([[-1.0, 0.0], [1.0, 0.1]])
    assert found(A, [1]) == [False, False]
    assert verdict(A, ("heading",)) == "lost"


def test_sampled_sum_is_neutral() -> None:
    A = np.array([[0.5, 0.0], [0.1, 1.0]])
    assert found(A, [1], sampled=True) == [False, True]
    assert found(A, [1], sampled=False) == [False, False]
    assert verdict(A, ("heading",), dt=0.1) == "ok"
    assert verdict(A, (), dt=0.1) in ("lost", "doubt")
    chain = np.array([[0.5, 0.0, 0.0], [0.1, 1.0, 0.0], [0.0, 0.5, 1.0]])
    assert found(chain, [1, 2], sampled=True) == [False, False, True]
    assert "at 1, which grows as t" in reason(chain, ("heading", "position"), dt=0.1)


def test_points_are_looked_at_one_by_one() -> None:
    stack = np.stack([SHIP[:2, :2], SHIP[:2, :2]])
    stack[1, 0, 1] = -2.0
    both = neutral_states(stack, np.array([1]), sampled=False)
    assert both.tolist() == [[False, True], [False, False]]


def test_other_poles_are_bit_for_bit_those_without_the_neutral_state() -> None:
    rng = np.random.default_rng(0)
    A = rng.standard_normal((5, 4, 4)) - 4 * np.eye(4)
    A[:, :, 2] = 0.0
    bank = ssaudit.build_bank(A, revision="A", states=["a", "b", "heading", "c"])
    criteria = ssaudit.Criteria((), ("heading",))
    found = ssaudit.audit(bank, ssaudit.Loop("", None, "none"), criteria)
    rest = ssaudit.build_bank(A[:, [0, 1, 3]][:, :, [0, 1, 3]], revision="A")
    alone = ssaudit.audit(rest, ssaudit.Loop("", None, "none"), ssaudit.Criteria())
    assert found.points["verdict"].tolist() == alone.points["verdict"].tolist()
    for name in ("real", "imag", "radius"):
        np.testing.assert_array_equal(found.modes[name], alone.modes[name])
    assert not found.modes["top_states"].str.contains("heading").any()


@pytest.mark.parametrize("depth", ["poles", "modes"])
def test_model_of_neutral_states_alone_is_ok_and_has_no_modes(depth: str) -> None:
    bank = ssaudit.build_bank([[[0.0]]], revision="A", states=["heading"])
    criteria = ssaudit.Criteria((), ("heading",))
    found = ssaudit.audit(bank, ssaudit.Loop("", None, "none"), criteria, depth=depth)
    assert found.points["verdict"].tolist() == ["ok"]
    assert np.isnan(found.points["max_real"][0])
    assert len(found.modes) == 0
