"""Verdicts: every quantity on both sides of its limits, and doubt where the numbers cannot tell."""

from collections.abc import Sequence
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

import ssaudit
from ssaudit.bank_arrays import build_bank
from ssaudit.criteria import MODE_QUANTITIES, Criteria, Requirement
from ssaudit.judging import VERDICTS, Judgement, judge, missed_names, quantity_range
from ssaudit.modes.stacked import Modes

Floats = NDArray[np.float64]
CLOSED = ssaudit.Loop("", None, "none")
# A pair at -3 ± 4j: natural frequency 5, damping ratio 0.6, time constant 1/3; a real pole at -8.
PAIR = -3 + 4j
VALUES = {"real": -3.0, "damping_ratio": 0.6, "natural_frequency": 5.0, "time_constant": 1 / 3}


def model(*poles: complex) -> Floats:
    """Matrix of blocks with given real poles and upper ones of conjugate pairs."""
    blocks = [
        [[p.real, p.imag], [-p.imag, p.real]] if p.imag else [[p.real]] for p in map(complex, poles)
    ]
    n = sum(map(len, blocks))
    A, place = np.zeros((n, n)), 0
    for block in blocks:
        A[place : place + len(block), place : place + len(block)] = block
        place += len(block)
    return A


def row(A: Any, *requirements: Requirement, **bank: Any) -> dict[str, Any]:
    """Row of the points table of one model."""
    neutral = bank.pop("neutral", ())
    built = build_bank([A], revision="A", **bank)
    found = ssaudit.audit(built, CLOSED, Criteria(requirements, neutral))
    return dict(found.points.iloc[0])


def verdict(A: Any, *requirements: Requirement, **bank: Any) -> str:
    return str(row(A, *requirements, **bank)["verdict"])


def required(quantity: str, **limits: Any) -> Requirement:
    return Requirement("asked", quantity, **limits)


def judged(
    s: Sequence[complex], radius: Sequence[float], *requirements: Requirement, **points: Any
) -> Judgement:
    """Judge one point by poles and radii given by hand."""
    bank = build_bank(-np.eye(1)[None], revision="A", **points)
    modes = Modes(np.array([s], dtype=complex), np.array([radius]))
    return judge(modes, bank.points, bank.points.void, Criteria(requirements))


@pytest.mark.parametrize("quantity", MODE_QUANTITIES)
@pytest.mark.parametrize("side", ["at_least", "at_most"])
def test_each_quantity_on_both_sides_of_each_limit(quantity: str, side: str) -> None:
    value = VALUES[quantity]
    # Well within the rounding of nothing, and far outside that of the poles.
    slack = 1e-9 * abs(value)
    inward = -slack if side == "at_least" else slack
    A = model(PAIR)
    assert verdict(A, required(quantity, **{side: value + inward})) == "ok"
    assert verdict(A, required(quantity, **{side: value - inward})) == "short"
    assert verdict(A, required(quantity, **{side: value})) in ("ok", "doubt", "short")


@pytest.mark.parametrize("quantity", MODE_QUANTITIES)
def test_value_on_the_limit_is_in_doubt_while_it_may_lie_on_either_side(quantity: str) -> None:
    value = VALUES[quantity]
    for limit in ({"at_least": value}, {"at_most": value}, {"at_least": value, "at_most": value}):
        found = judged([PAIR, PAIR.conjugate()], [1e-12] * 2, required(quantity, **limit))
        assert VERDICTS[found.verdict[0]] == "doubt"
        assert found.doubt[0] == "asked"
        assert not found.missed.any()


@pytest.mark.parametrize("quantity", MODE_QUANTITIES)
def test_both_limits_hold_at_once(quantity: str) -> None:
    value, A = VALUES[quantity], model(PAIR)
    low, high = sorted((0.9 * value, 1.1 * value))
    lower, higher = sorted((0.8 * value, 0.9 * value))
    upper, highest = sorted((1.1 * value, 1.2 * value))
    assert verdict(A, required(quantity, at_least=low, at_most=high)) == "ok"
    assert verdict(A, required(quantity, at_least=lower, at_most=higher)) == "short"
    assert verdict(A, required(quantity, at_least=upper, at_most=highest)) == "short"


def test_every_mode_must_meet_a_requirement() -> None:
    requirement = required("damping_ratio", at_least=0.5)
    assert verdict(model(PAIR, -2 + 1j), requirement) == "ok"
    found = row(model(PAIR, -1 + 4j, -2 + 1j), requirement)
    assert found["verdict"] == "short"
    assert (found["real"], found["imag"]) == (pytest.approx(-1), pytest.approx(4))


def test_frequency_window_takes_modes_by_their_natural_frequency() -> None:
    def window(low: float, high: float) -> str:
        return verdict(
            model(PAIR, -8), required("damping_ratio", at_least=0.7, frequency=(low, high))
        )

    # The pair, at 5 rad/s, misses; the real pole, at 8 rad/s, does not.
    assert window(0.0, 100.0) == "short"
    assert window(4.9, 5.1) == "short"
    assert window(0.0, 4.9) == "ok"
    assert window(5.1, 100.0) == "ok"
    # At the very edge the rounding of the pole decides whether the requirement applies.
    assert window(5.0, 6.0) == "doubt"
    assert window(4.0, 5.0) == "doubt"


def test_mode_at_the_edge_of_a_window_that_meets_the_requirement_is_no_doubt() -> None:
    requirement = required("damping_ratio", at_least=0.5, frequency=(5.0, 6.0))
    assert verdict(model(PAIR), requirement) == "ok"


def test_requirement_applies_where_it_says() -> None:
    bank = build_bank(
        [model(PAIR)] * 4,
        revision="A",
        coordinates={"speed": ([10.0, 20.0, 30.0, 20.0], "m/s")},
        tags={"config": ["wet", "wet", "wet", "dry"]},
    )
    where = {"speed": (20.0, 30.0), "config": ("wet",)}
    requirement = required("damping_ratio", at_least=0.7, where=where)
    found = ssaudit.audit(bank, CLOSED, Criteria((requirement,)))
    assert found.points["verdict"].tolist() == ["ok", "short", "short", "ok"]
    assert found.points["missed"].tolist() == ["", "asked", "asked", ""]
    assert np.isnan(found.points["shortfall"][0])


@pytest.mark.parametrize(
    ("requirement", "reason"),
    [
        (required("damping_ratio", at_least=0.75), "asked: damping_ratio 0.6, 0.15 below 0.75"),
        (required("damping_ratio", at_most=0.5), "asked: damping_ratio 0.6, 0.1 above 0.5"),
        (required("real", at_most=-5.0), "asked: real -3 1/s, 2 above -5"),
        (required("real", at_least=-1.0), "asked: real -3 1/s, 2 below -1"),
        (
            required("natural_frequency", at_least=7.0),
            "asked: natural_frequency 5 rad/s, 2 below 7",
        ),
        (
            required("natural_frequency", at_least=1.0, at_most=4.0),
            "asked: natural_frequency 5 rad/s, 1 above 4",
        ),
        (required("time_constant", at_most=0.25), "asked: time_constant 0.333 s, 0.083 above 0.25"),
    ],
)
def test_reason_of_a_short_point(requirement: Requirement, reason: str) -> None:
    found = row(model(PAIR), requirement)
    assert found["verdict"] == "short"
    assert found["reason"] == reason
    assert found["missed"] == "asked"


def test_reasons_of_lost_points() -> None:
    assert row(model(1))["reason"] == "not stable: 1 pole right of the axis"
    assert row(model(1 + 2j, -1))["reason"] == "not stable: 2 poles right of the axis"
    sampled = row(model(1.5, 2, 0.5), dt=0.1)
    assert sampled["reason"] == "not stable: 2 poles outside the unit circle"
    assert row(model(1))["missed"] == "stability"


def test_reasons_of_doubt() -> None:
    found = judged([-1e-9 + 2j, -1e-9 - 2j], [1e-6] * 2)
    assert found.reason[0] == "stability: real part -1e-09 ± 1e-06 1/s reaches 0"
    assert found.doubt[0] == "stability"
    found = judged([PAIR, PAIR.conjugate()], [0.5] * 2, required("real", at_most=-3.2))
    assert found.reason[0] == "asked: real -3 ± 0.5 1/s against ≤ -3.2"
    found = judged([PAIR, PAIR.conjugate()], [0.5] * 2, required("damping_ratio", at_least=0.6))
    # The cosines of acos(0.6) ± asin(0.5/5): 0.517 to 0.677.
    assert found.reason[0] == "asked: damping_ratio 0.6 ± 0.084 against ≥ 0.6"


def test_doubt_names_the_mode_that_is_in_doubt() -> None:
    """Not one nearer to the limit that surely keeps it, nor one further to the right."""
    found = judged([-1.001, -4.0], [1e-15, 3.5], required("real", at_most=-1.0))
    assert found.reason[0] == "asked: real -4 ± 3.5 1/s against ≤ -1"
    found = judged([-0.5, -4.0], [1e-15, 5.0])
    assert found.reason[0] == "stability: real part -4 ± 5 1/s reaches 0"
    assert found.worst[0] == 1


def test_what_is_worse_decides_the_verdict() -> None:
    miss, unsure = required("real", at_most=-4.0), Requirement("other", "real", at_most=-3.0)
    s, sure, wide = [PAIR, PAIR.conjugate()], [1e-14] * 2, [3.5] * 2

    def verdict_of(*arguments: Any) -> str:
        return VERDICTS[judged(*arguments).verdict[0]]

    assert verdict_of(s, sure) == "ok"
    assert verdict_of(s, sure, unsure) == "doubt"
    # A requirement that is surely missed outranks doubt about another; doubt about stability both.
    assert verdict_of(s, sure, unsure, miss) == "short"
    assert verdict_of(s, sure, miss, unsure) == "short"
    assert verdict_of(s, wide, miss) == "doubt"
    assert verdict_of([PAIR, PAIR.conjugate(), 1], [*wide, 1e-14], miss) == "lost"


def test_requirement_missed_by_the_largest_share_of_its_limit_is_told() -> None:
    first = Requirement("first", "damping_ratio", at_least=0.8)
    second = Requirement("second", "real", at_most=-6.0)
    third = Requirement("third", "natural_frequency", at_least=5.5)
    found = row(model(PAIR), first, second, third)
    # 0.25, 0.5 and 0.09 of the limits.
    assert found["reason"].startswith("second: ")
    assert found["shortfall"] == pytest.approx(0.5)
    assert found["missed"] == "first; second; third"


def test_shortfall_against_a_limit_of_zero_is_the_value_itself() -> None:
    found = row(model(PAIR), required("damping_ratio", at_most=0.0))
    assert found["shortfall"] == pytest.approx(0.6)


def test_lost_point_tells_what_else_it_misses() -> None:
    found = row(model(1, -2), required("real", at_most=-3.0))
    assert (found["verdict"], found["missed"]) == ("lost", "stability; asked")
    assert found["real"] == 1


def test_void_point_has_neither_modes_nor_missed_requirements() -> None:
    found = row(model(np.nan), required("real", at_most=-3.0))
    assert (found["verdict"], found["reason"]) == ("void", "A[1,1] is NaN")
    assert found["missed"] == ""
    assert np.isnan(
        [found[name] for name in ("max_real", "min_damping", "real", "shortfall")]
    ).all()


def test_names_of_what_is_missed() -> None:
    criteria = Criteria(
        (Requirement("a", "real", at_most=0.0), Requirement("b", "real", at_most=0.0))
    )
    missed = np.array([[True, False], [True, True], [False, False], [False, True]])
    lost = np.array([False, True, False, False])
    assert missed_names(missed, lost, criteria).tolist() == ["a", "stability; a; b", "", "b"]
    assert missed_names(missed[:0], lost[:0], criteria).tolist() == []


# Significant digits that the exporter wrote.


def test_rounding_of_the_export_that_reaches_over_a_limit_is_doubt() -> None:
    """-1.00, written to three digits, stands for anything from -1.005 to -0.995."""
    A = model(-1.00, -4)
    for limit, expected in (
        (-0.994, "ok"),
        (-0.996, "doubt"),
        (-1.004, "doubt"),
        (-1.006, "short"),
    ):
        requirement = required("real", at_most=limit)
        assert verdict(A, requirement, digits=3) == expected
        exact = "ok" if limit > -1 else "short"
        assert verdict(A, requirement) == exact
        assert verdict(A, requirement, digits=9) == exact


def test_rounding_of_the_export_that_reaches_the_axis_is_doubt() -> None:
    """(s + 1)(s + 1.001) = s^2 + 2.001 s + 1.001 with B = 1 and a gain that takes 1.001 away."""
    A, B = [[0.0, 1.0], [-1.001, -2.001]], [[0.0], [1.0]]
    for digits, gain, expected in (
        (None, 1.0, "ok"),
        (4, 1.0, "doubt"),
        (7, 1.0, "ok"),
        (4, 0.9, "ok"),
        (4, 1.1, "lost"),
    ):
        bank = build_bank([A], [B], revision="A", digits=digits)
        loop = ssaudit.Loop("positive", ssaudit.ConstantGain([[gain, 0.0]]))
        found = ssaudit.audit(bank, loop, Criteria())
        assert found.points["verdict"].tolist() == [expected]


def test_rounding_never_turns_a_verdict_around() -> None:
    """Every model that rounds to the export: its verdict is that of the export, or it is doubt."""
    rng = np.random.default_rng(0)
    requirement = required("damping_ratio", at_least=0.3)
    true = rng.standard_normal((3000, 3, 3)) - 1.5 * np.eye(3)
    with np.errstate(divide="ignore"):
        unit = 10.0 ** (np.floor(np.log10(np.abs(true))) - 1)
    written = np.round(true / unit) * unit
    banks = [
        build_bank(A, revision="A", digits=digits)
        for A, digits in ((true, None), (written, 2), (written, None))
    ]
    truth, told, believed = (
        ssaudit.audit(bank, CLOSED, Criteria((requirement,))).points["verdict"].to_numpy()
        for bank in banks
    )
    sure = told != "doubt"
    assert sure.mean() > 0.5
    np.testing.assert_array_equal(told[sure], truth[sure])
    # Negative control: without the digits, some verdicts are turned around by the rounding.
    assert (believed != truth).any()


# Sampled models.


def sampled(*poles: complex, dt: float) -> Floats:
    """Sampled model of the same poles: exp(s dt)."""
    return model(*(np.exp(complex(p) * dt) if complex(p).imag else np.exp(p * dt) for p in poles))


@pytest.mark.parametrize("quantity", MODE_QUANTITIES)
@pytest.mark.parametrize("dt", [0.01, 0.3])
def test_sampled_models_are_judged_by_their_continuous_equivalents(
    quantity: str, dt: float
) -> None:
    A, value = sampled(PAIR, dt=dt), VALUES[quantity]
    slack = 1e-9 * abs(value)
    assert verdict(A, required(quantity, at_least=value - slack), dt=dt) == "ok"
    assert verdict(A, required(quantity, at_least=value + slack), dt=dt) == "short"
    assert verdict(A, required(quantity, at_most=value + slack), dt=dt) == "ok"
    assert verdict(A, required(quantity, at_most=value - slack), dt=dt) == "short"
    found = row(A, dt=dt)
    assert found["real"] == pytest.approx(PAIR.real, rel=1e-12)
    assert found["imag"] == pytest.approx(PAIR.imag, rel=1e-12)


@pytest.mark.parametrize(
    ("z", "expected"),
    [
        (0.999, "ok"),
        (1.001, "lost"),
        (1.0, "lost"),
        (-1.0, "lost"),
        (-0.999, "ok"),
        (-1.001, "lost"),
        (0.0, "ok"),
        (1e-300, "ok"),
        (1 - 2**-53, "doubt"),
        (1 + 2**-52, "lost"),
    ],
)
def test_side_of_the_unit_circle_decides_over_a_sampled_model(z: float, expected: str) -> None:
    found = verdict(model(z), dt=0.1)
    if abs(abs(z) - 1) < 1e-12:
        # A pole that is a float on the circle, or beside it, may be told exactly or be in doubt.
        assert found in (expected, "doubt")
    else:
        assert found == expected


def test_the_same_matrix_is_judged_by_its_sampling_time() -> None:
    assert verdict(model(0.5), dt=0.1) == "ok"
    assert verdict(model(0.5)) == "lost"
    assert verdict(model(-1.5), dt=0.1) == "lost"
    assert verdict(model(-1.5)) == "ok"


def test_negative_real_pole_of_a_sampled_model_rings_at_half_the_sampling_rate() -> None:
    found = row(model(-0.5), required("damping_ratio", at_least=0.3), dt=0.1)
    assert found["imag"] == pytest.approx(np.pi / 0.1)
    assert found["damping_ratio"] == pytest.approx(np.log(2) / np.hypot(np.log(2), np.pi))
    assert found["verdict"] == "short"


@pytest.mark.parametrize(
    "requirement",
    [
        required("real", at_most=-100.0),
        required("damping_ratio", at_least=0.9),
        required("time_constant", at_most=0.01),
        required("natural_frequency", at_least=100.0),
    ],
)
def test_pole_that_is_gone_within_a_sample_meets_what_asks_for_speed(
    requirement: Requirement,
) -> None:
    """A dead-beat loop: both poles at z = 0 to within rounding, so at least 36/dt to the left."""
    found = row([[0.0, 1.0], [0.0, 0.0]], requirement, dt=0.1)
    assert found["verdict"] == "ok"
    assert found["max_real"] == -np.inf


def test_pole_that_is_gone_within_a_sample_misses_what_asks_for_slowness() -> None:
    dead_beat = [[0.0, 1.0], [0.0, 0.0]]
    assert verdict(dead_beat, required("real", at_least=-50.0), dt=0.1) == "short"
    assert verdict(dead_beat, required("natural_frequency", at_most=50.0), dt=0.1) == "short"
    assert verdict(dead_beat, required("time_constant", at_least=0.02), dt=0.1) == "short"


def test_pole_near_zero_is_in_doubt_only_about_what_its_radius_leaves_open() -> None:
    """z within 0.03 of 0 is stable and at least 35/s to the left, whatever log(z) may be."""
    z = np.array([[0j]])
    dt = 0.1
    modes = Modes(
        np.full((1, 1), -np.inf + 0j),
        np.full((1, 1), np.inf),
        z,
        z_radius=np.array([[0.03]]),
        dt=dt,
    )
    bank = build_bank(np.zeros((1, 1, 1)), revision="A", dt=dt)

    def told(*requirements: Requirement) -> str:
        found = judge(modes, bank.points, bank.points.void, Criteria(requirements))
        return VERDICTS[found.verdict[0]]

    edge = -np.log(0.03) / dt
    assert told() == "ok"
    assert told(required("real", at_most=-edge + 1)) == "ok"
    assert told(required("real", at_most=-edge - 1)) == "doubt"
    assert told(required("time_constant", at_most=0.9 / edge)) == "doubt"
    assert told(required("natural_frequency", at_least=edge - 1)) == "ok"
    assert told(required("natural_frequency", at_least=edge + 1)) == "doubt"
    slowest = edge / np.hypot(edge, np.pi / dt)
    assert told(required("damping_ratio", at_least=slowest - 0.01)) == "ok"
    assert told(required("damping_ratio", at_least=slowest + 0.01)) == "doubt"


def test_sampled_ranges_hold_every_pole_within_the_radius() -> None:
    rng = np.random.default_rng(1)
    dt = 0.2
    z = rng.uniform(0, 1.2, 60) * np.exp(1j * rng.uniform(0, np.pi, 60))
    off = rng.uniform(0, 0.9, 60) * np.maximum(np.abs(z), 0.1)
    disk = off * np.exp(2j * np.pi * rng.uniform(size=(400, 60)))
    with np.errstate(divide="ignore"):
        radius = np.where(off < np.abs(z), -np.log1p(-np.minimum(off / np.abs(z), 1)) / dt, np.inf)
    modes = Modes((np.log(z) / dt)[None], radius[None], z[None], z_radius=off[None], dt=dt)
    s = np.log(z + disk) / dt
    inside = Modes(s, np.zeros(s.shape))
    for quantity in MODE_QUANTITIES:
        _, low, high = quantity_range(quantity, modes)
        values, _, _ = quantity_range(quantity, inside)
        assert (values >= low - 1e-9).all()
        assert (values <= high + 1e-9).all()


@pytest.mark.parametrize("quantity", MODE_QUANTITIES)
def test_ranges_hold_every_pole_within_the_radius(quantity: str) -> None:
    rng = np.random.default_rng(2)
    s = rng.uniform(-3, 1, (1, 50)) + 1j * rng.uniform(-2, 2, (1, 50))
    off = rng.uniform(0, 2, (1, 50))
    _, low, high = quantity_range(quantity, Modes(s, off))
    around = s + off * np.exp(2j * np.pi * rng.uniform(size=(500, 50)))
    values, _, _ = quantity_range(quantity, Modes(around, np.zeros(around.shape)))
    assert (values >= low - 1e-9).all()
    assert (values <= high + 1e-9).all()
    # And they are no wider than need be, where they are ends at all.
    ends = np.isfinite(low) & np.isfinite(high) & (np.abs(s) > off)
    reach = np.where(ends, (values.max(axis=0) - values.min(axis=0)) / (high - low), 1.0)
    assert np.median(reach) > 0.9
