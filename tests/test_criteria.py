"""Criteria: what they ask for, where, and how mistakes in them are told."""

from pathlib import Path
from typing import Any

import numpy as np
import pytest

import ssaudit
from ssaudit.criteria import MODE_QUANTITIES, Criteria, Requirement, read_criteria
from ssaudit.errors import CriteriaError

CRITERIA = """neutral = ["heading"]

[[require]]
name = "ride"
quantity = "damping_ratio"
at_least = 0.2
at_most = 0.9
frequency = [0.5, 12]
where = { speed = [15.0, 24], config = "foilborne", fuel = ["full", "half"] }

[[require]]
name = "decay"
quantity = "real"
at_most = -1
"""


def some_bank() -> ssaudit.ModelBank:
    return ssaudit.build_bank(
        np.zeros((4, 1, 1)) - 1,
        revision="A",
        states=["heading"],
        coordinates={"speed": ([10.0, 15.0, 24.0, 30.0], "m/s")},
        tags={
            "config": ["foilborne", "hullborne", "foilborne", "foilborne"],
            "fuel": ["full", "full", "half", "empty"],
        },
    )


def read(tmp_path: Path, text: str) -> Criteria:
    path = tmp_path / "criteria.toml"
    path.write_text(text, encoding="utf-8")
    return read_criteria(path)


def test_criteria_file_is_read_as_it_stands(tmp_path: Path) -> None:
    criteria = read(tmp_path, CRITERIA)
    ride, decay = criteria.requirements
    assert ride == Requirement(
        "ride",
        "damping_ratio",
        at_least=0.2,
        at_most=0.9,
        frequency=(0.5, 12.0),
        where={"speed": (15.0, 24.0), "config": ("foilborne",), "fuel": ("full", "half")},
    )
    assert (decay.at_least, decay.at_most, decay.frequency) == (None, -1.0, None)
    assert criteria.neutral == ("heading",)
    assert (ride.limits, ride.unit) == ("≥ 0.2 and ≤ 0.9", "")
    assert (decay.limits, decay.unit) == ("≤ -1", "1/s")
    criteria.check(some_bank())


def test_empty_criteria_require_stability_alone(tmp_path: Path) -> None:
    criteria = read(tmp_path, "")
    assert criteria.requirements == ()
    assert criteria.neutral == ()


def test_where_holds_at_both_ends_of_a_range_and_for_every_listed_word() -> None:
    points = some_bank().points

    def applies(**where: Any) -> list[bool]:
        return list(Requirement("r", "real", at_most=0.0, where=where).applies(points))

    assert applies() == [True] * 4
    assert applies(speed=(15.0, 24.0)) == [False, True, True, False]
    assert applies(speed=(15.000001, 23.999999)) == [False] * 4
    assert applies(config=("foilborne",)) == [True, False, True, True]
    assert applies(fuel=("full", "empty")) == [True, True, False, True]
    both = applies(speed=(0.0, 24.0), config=("foilborne",), fuel=("half",))
    assert both == [False, False, True, False]


def test_open_ranges_are_allowed(tmp_path: Path) -> None:
    criteria = read(
        tmp_path,
        '[[require]]\nname = "r"\nquantity = "real"\nat_most = 0\n'
        "where = { speed = [20, inf] }\nfrequency = [-inf, 3]\n",
    )
    (requirement,) = criteria.requirements
    assert list(requirement.applies(some_bank().points)) == [False, False, True, True]
    assert requirement.frequency == (-np.inf, 3.0)


@pytest.mark.parametrize("quantity", MODE_QUANTITIES)
@pytest.mark.parametrize(
    "limits", [{"at_least": -1.0}, {"at_most": 1.0}, {"at_least": 0.0, "at_most": 0.0}]
)
def test_every_quantity_takes_limits_on_either_side(
    quantity: str, limits: dict[str, float]
) -> None:
    assert Requirement("r", quantity, **limits).limits != ""


REQUIRE = '[[require]]\nname = "r"\nquantity = "real"\nat_most = 0\n'


@pytest.mark.parametrize(
    ("text", "told"),
    [
        (
            REQUIRE.replace("real", "damping"),
            "unknown quantity 'damping'; did you mean damping_ratio?",
        ),
        (REQUIRE.replace("at_most = 0", ""), "neither at_least nor at_most is given"),
        (REQUIRE + "at_least = 1", "at_least 1 is above at_most 0"),
        (REQUIRE + "at_lest = 1", "unknown key 'at_lest'; did you mean at_least?"),
        (REQUIRE.replace("at_most = 0", "at_most = nan"), "at_most is nan, not a finite number"),
        (REQUIRE.replace("at_most = 0", "at_most = inf"), "at_most is inf, not a finite number"),
        (REQUIRE.replace("at_most = 0", 'at_most = "0"'), "at_most is '0', not a finite number"),
        (REQUIRE.replace("at_most = 0", "at_most = true"), "at_most is True, not a finite number"),
        (REQUIRE.replace('name = "r"', ""), "name is missing"),
        (REQUIRE.replace('name = "r"', 'name = ""'), "cannot be named ''"),
        (REQUIRE.replace('name = "r"', 'name = "stability"'), "cannot be named 'stability'"),
        (REQUIRE + REQUIRE, "two requirements are named 'r'"),
        (REQUIRE + "frequency = [2, 1]", "frequency runs from 2.0 down to 1.0"),
        (REQUIRE + "frequency = [1]", "frequency is [1], not a range [low, high]"),
        (REQUIRE + "frequency = [nan, 1]", "not a range [low, high]"),
        (REQUIRE + "where = { speed = [2, 1] }", "speed runs from 2.0 down to 1.0"),
        (REQUIRE + "where = { config = [] }", "config is [], not a range"),
        (REQUIRE + "where = { config = 3 }", "config is 3, not a range"),
        (REQUIRE + "where = 3", "where is 3, not a table"),
        ("[[requires]]\n", "unknown key 'requires'; did you mean require?"),
        ("[require]\n", "require is {}, not a list"),
        ("require = [1]\n", "[[require]] 1: is not a table"),
        ("neutral = [1]\n", "neutral holds 1, not text"),
        ('neutral = "heading"\n', "not a list"),
        ("[[require]\n", "is not TOML"),
    ],
)
def test_mistake_in_a_criteria_file_is_named(text: str, told: str, tmp_path: Path) -> None:
    with pytest.raises(CriteriaError) as caught:
        read(tmp_path, text)
    message = str(caught.value)
    assert message.startswith(str(tmp_path / "criteria.toml"))
    assert told in message
    assert "\n" not in message


@pytest.mark.parametrize(
    ("change", "told"),
    [
        (
            {"where": {"sped": (1.0, 2.0)}},
            "where names no coordinate or tag of bank in memory: 'sped'; did you mean speed?",
        ),
        ({"where": {"speed": ("fast",)}}, "speed takes a range [low, high]"),
        ({"where": {"config": (1.0, 2.0)}}, "config is a tag and takes a word"),
    ],
)
def test_criteria_that_do_not_fit_the_bank_are_refused(change: dict[str, Any], told: str) -> None:
    criteria = Criteria((Requirement("r", "real", at_most=0.0, **change),))
    with pytest.raises(CriteriaError) as caught:
        ssaudit.audit(some_bank(), ssaudit.Loop("", None, "none"), criteria)
    assert told in str(caught.value)
    assert "'r'" in str(caught.value)


def test_neutral_state_that_no_model_has_is_refused() -> None:
    with pytest.raises(CriteriaError, match="'headin'; did you mean heading"):
        ssaudit.audit(some_bank(), ssaudit.Loop("", None, "none"), Criteria((), ("headin",)))


def test_description_tells_criteria_apart() -> None:
    base = {"name": "r", "quantity": "real", "at_most": 0.0}
    changes: list[dict[str, Any]] = [
        {},
        {"name": "q"},
        {"quantity": "time_constant"},
        {"at_most": 1.0},
        {"at_least": 0.0},
        {"frequency": (0.0, 1.0)},
        {"where": {"speed": (0.0, 1.0)}},
        {"where": {"speed": (0.0, np.inf)}},
    ]
    described = [repr(Requirement(**{**base, **change}).description) for change in changes]
    assert len(set(described)) == len(changes)
    assert Criteria((), ("a", "b")).description == Criteria((), ("b", "a")).description
