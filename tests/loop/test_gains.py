"""Gain schedules against scipy's interpolator, at breakpoints, and beyond the table."""

import warnings

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.interpolate import RegularGridInterpolator

from ssaudit.errors import LoopError
from ssaudit.loop.gains import ConstantGain, GainSchedule

Floats = NDArray[np.float64]
NAMES = ("speed", "mass", "immersion", "trim")
# Breakpoints of each variable: unevenly spaced, of different sizes and signs.
GRID = (
    np.array([10.0, 12.0, 17.5, 30.0]),
    np.array([-3.0, 0.0, 0.1]),
    np.array([1e-3, 2e-3, 5e-3, 6e-3, 9e-3]),
    np.array([-1e6, 1e6]),
)


def schedule(variables: int, outside: str = "refuse", seed: int = 0) -> GainSchedule:
    grid = GRID[:variables]
    gains = np.random.default_rng(seed).standard_normal((*map(len, grid), 2, 3))
    return GainSchedule(
        NAMES[:variables], grid, gains, ("flap", "rudder"), ("a", "b", "c"), outside
    )


def coordinates(variables: int, points: int, seed: int = 1) -> dict[str, Floats]:
    rng = np.random.default_rng(seed)
    return {
        name: rng.uniform(grid[0], grid[-1], points)
        for name, grid in zip(NAMES[:variables], GRID, strict=False)
    }


@pytest.mark.parametrize("variables", [1, 2, 3, 4])
def test_gains_between_breakpoints_are_multilinear(variables: int) -> None:
    table, at = schedule(variables), coordinates(variables, 300)
    found = table.at(at, 300)
    expected = RegularGridInterpolator(GRID[:variables], table.gains)(
        np.column_stack([at[name] for name in table.variables])
    )
    np.testing.assert_allclose(found.K, expected, rtol=1e-12, atol=1e-12)
    assert not found.held.any()
    assert (found.refused == "").all()


def test_the_comparison_would_show_a_nearest_breakpoint() -> None:
    """Negative control: scipy's nearest method is far outside the tolerance."""
    table, at = schedule(2), coordinates(2, 300)
    points = np.column_stack([at["speed"], at["mass"]])
    nearest = RegularGridInterpolator(GRID[:2], table.gains, method="nearest")(points)
    assert np.median(np.abs(table.at(at, 300).K - nearest).max(axis=(1, 2))) > 0.1


@pytest.mark.parametrize("variables", [1, 2, 3, 4])
@pytest.mark.parametrize("outside", ["refuse", "hold"])
def test_gains_at_breakpoints_are_those_of_the_table_to_the_last_bit(
    variables: int, outside: str
) -> None:
    table = schedule(variables, outside)
    mesh = np.meshgrid(*GRID[:variables], indexing="ij")
    at = {name: axis.ravel() for name, axis in zip(table.variables, mesh, strict=True)}
    found = table.at(at, mesh[0].size)
    np.testing.assert_array_equal(found.K, table.gains.reshape(-1, 2, 3))
    assert not found.held.any()
    assert (found.refused == "").all()


@pytest.mark.parametrize("variables", [1, 2, 3, 4])
def test_a_multilinear_gain_is_given_back_everywhere(variables: int) -> None:
    """Product of (1 + x/unit) over the variables: the table's own form, known everywhere."""
    unit = [20.0, 5.0, 4e-3, 3e6][:variables]
    mesh = np.meshgrid(*(1 + g / u for g, u in zip(GRID, unit, strict=False)), indexing="ij")
    gains = np.prod(mesh, axis=0)[..., None, None]
    table = GainSchedule(NAMES[:variables], GRID[:variables], gains, ("u",), ("x",), "refuse")
    at = coordinates(variables, 100)
    columns = [1 + at[name] / u for name, u in zip(table.variables, unit, strict=True)]
    np.testing.assert_allclose(table.at(at, 100).K.ravel(), np.prod(columns, axis=0), rtol=1e-12)


@pytest.mark.parametrize("variables", [1, 2, 3, 4])
def test_held_gains_are_those_at_the_nearest_edge(variables: int) -> None:
    table = schedule(variables, "hold")
    inside = coordinates(variables, 50)
    beyond = {name: column.copy() for name, column in inside.items()}
    edge = {name: column.copy() for name, column in inside.items()}
    low, high = GRID[0][0], GRID[0][-1]
    beyond["speed"][:20], edge["speed"][:20] = low - 5, low
    beyond["speed"][20:40], edge["speed"][20:40] = high + 1e9, high
    found = table.at(beyond, 50)
    np.testing.assert_array_equal(found.K, table.at(edge, 50).K)
    assert found.held.tolist() == [True] * 40 + [False] * 10
    assert (found.refused == "").all()


def test_refused_points_say_which_variable_lies_where() -> None:
    table = schedule(2, "refuse")
    at = {"speed": np.array([9.5, 30.0, 31.0, 15.0]), "mass": np.array([0.0, 0.0, 0.2, -4.0])}
    found = table.at(at, 4)
    assert found.refused.tolist() == [
        "outside the gain table: speed 9.5 is not in 10 to 30",
        "",
        "outside the gain table: speed 31 is not in 10 to 30",
        "outside the gain table: mass -4 is not in -3 to 0.1",
    ]


def test_the_smallest_step_beyond_the_table_is_outside() -> None:
    table = schedule(1, "refuse")
    at = {"speed": np.array([np.nextafter(10.0, 0), 10.0, 30.0, np.nextafter(30.0, 99)])}
    first, *inside, last = table.at(at, 4).refused
    assert inside == ["", ""]
    assert first == "outside the gain table: speed 9.999999999999998 is not in 10 to 30"
    assert last == "outside the gain table: speed 30.000000000000004 is not in 10 to 30"


@pytest.mark.parametrize("outside", ["refuse", "hold"])
def test_coordinates_that_are_no_numbers_never_get_a_gain_in_silence(outside: str) -> None:
    table = schedule(1, outside)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        found = table.at({"speed": np.array([np.nan, np.inf, -np.inf, 12.0])}, 4)
    assert found.held.tolist() == [True, True, True, False]
    assert [bool(reason) for reason in found.refused] == [outside == "refuse"] * 3 + [False]


def test_infinite_coordinates_beside_close_breakpoints_do_not_overflow() -> None:
    """Such points are void already; looking up their gain must not warn or stop."""
    table = GainSchedule(("x",), ([0.1, 0.2],), [[[1.0]], [[2.0]]], ("u",), ("y",), "hold")
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        found = table.at({"x": np.array([np.inf, -np.inf, 0.15])}, 3)
    assert np.isfinite(found.K).all()
    assert found.K[2, 0, 0] == pytest.approx(1.5)


def test_table_of_a_single_breakpoint() -> None:
    gains = [[[2.0, 3.0]]]
    for outside, held in (("refuse", 0), ("hold", 2)):
        table = GainSchedule(("speed",), ([5.0],), gains, ("u",), ("a", "b"), outside)
        found = table.at({"speed": np.array([5.0, 4.0, 6.0])}, 3)
        np.testing.assert_array_equal(found.K[0], gains[0])
        assert found.refused[0] == ""
        assert found.held.sum() >= held
        assert sum(reason != "" for reason in found.refused) == (2 if outside == "refuse" else 0)
    held_everywhere = table.at({"speed": np.array([4.0, 6.0])}, 2).K
    np.testing.assert_array_equal(held_everywhere, [gains[0]] * 2)


def test_single_breakpoint_beside_several_of_another_variable() -> None:
    table = GainSchedule(
        ("speed", "mass"), ([1.0, 3.0], [7.0]), [[[[0.0]]], [[[4.0]]]], ("u",), ("x",), "refuse"
    )
    found = table.at({"speed": np.array([1.5, 1.5]), "mass": np.array([7.0, 7.1])}, 2)
    assert found.K[0, 0, 0] == 1.0
    assert found.refused[0] == ""
    assert found.refused[1] == "outside the gain table: mass 7.1 is not in 7 to 7"


def test_constant_gain_is_one_matrix_for_all_points() -> None:
    found = ConstantGain([[1.0, 2.0]]).at({}, 5)
    assert found.K.shape == (1, 1, 2)
    assert len(found.held) == len(found.refused) == 5
    assert not found.held.any()


def test_no_points_have_no_gains() -> None:
    found = schedule(2).at({"speed": np.zeros(0), "mass": np.zeros(0)}, 0)
    assert found.K.shape == (0, 2, 3)


@pytest.mark.parametrize(
    ("matrix", "names", "message"),
    [
        ([[1.0, np.nan]], {}, "nan for input 1, signal 2"),
        ([[1.0], [np.inf]], {}, "inf for input 2, signal 1"),
        ([1.0, 2.0], {}, "1 dimensions"),
        ([[1.0, 2.0]], {"inputs": ["a", "b"]}, "1 inputs, 2 are named"),
        ([[1.0, 2.0]], {"signals": ["a", "a"]}, "names one of its signals twice"),
        ([[1.0]], {"unnamed": "ignore"}, "unnamed is 'ignore'"),
    ],
)
def test_constant_gain_that_contradicts_itself(
    matrix: list[object], names: dict[str, object], message: str
) -> None:
    with pytest.raises(LoopError, match=message):
        ConstantGain(matrix, **names)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"variables": ()}, "1 to 4 variables"),
        ({"outside": "extrapolate"}, "outside is 'extrapolate'"),
        ({"gains": np.zeros((2, 1, 2))}, r"shape \(2, 1, 2\), expected \(2, 1, 1\)"),
        ({"breakpoints": (np.array([2.0, 1.0]),)}, "breakpoints of speed do not ascend"),
        ({"breakpoints": (np.array([1.0, 1.0]),)}, "breakpoints of speed do not ascend"),
        ({"breakpoints": (np.array([1.0, np.nan]),)}, "breakpoints of speed do not ascend"),
        ({"inputs": ("u", "u"), "gains": np.zeros((2, 2, 1))}, "names one of its inputs twice"),
        ({"gains": np.full((2, 1, 1), np.nan)}, "the gain schedule holds nan"),
    ],
)
def test_schedule_that_contradicts_itself(change: dict[str, object], message: str) -> None:
    right: dict[str, object] = {
        "variables": ("speed",),
        "breakpoints": (np.array([1.0, 2.0]),),
        "gains": np.zeros((2, 1, 1)),
        "inputs": ("u",),
        "signals": ("x",),
        "outside": "hold",
    }
    with pytest.raises(LoopError, match=message):
        GainSchedule(**{**right, **change})  # type: ignore[arg-type]
