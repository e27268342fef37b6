"""Summaries: counts, the worst points in order, and what is missed where."""

from typing import Any

import numpy as np
import pytest

import ssaudit
from ssaudit.criteria import Criteria, Requirement
from ssaudit.summary import Summary, Tally

CLOSED = ssaudit.Loop("", None, "none")
REQUIREMENTS = (
    Requirement("decay", "real", at_most=-1.0),
    Requirement("slow", "time_constant", at_least=0.1),
)
# One real pole a point; by the requirements: ok, short of decay, short of slow, lost, void, lost.
POLES = [-2.0, -0.25, -20.0, 3.0, np.nan, 7.0]
SPEEDS = [10.0, 20.0, 30.0, 40.0, 50.0, 15.0]


def summarise(poles: list[float], speeds: list[float], **options: Any) -> Summary:
    bank = ssaudit.build_bank(
        np.array(poles)[:, None, None],
        revision="A",
        ids=[f"p{k}" for k in range(len(poles))],
        coordinates={"speed": (speeds, "m/s")},
    )
    return ssaudit.audit(bank, CLOSED, Criteria(REQUIREMENTS), **options).summary


def test_counts_add_up() -> None:
    summary = summarise(POLES, SPEEDS)
    assert summary.counts == {"ok": 1, "short": 2, "lost": 2, "doubt": 0, "void": 1}
    assert summary.total == 6
    assert not summary.all_ok
    assert summary.void == {"A[1,1] is NaN": 1}


def test_all_ok_needs_every_point() -> None:
    assert summarise([-2.0, -3.0], [1.0, 2.0]).all_ok
    assert not summarise([-2.0, np.nan], [1.0, 2.0]).all_ok


def test_worst_points_come_first_lost_then_short_then_void() -> None:
    worst = summarise(POLES, SPEEDS).worst
    # Lost by real part; short by the share of the limit that is missed: 1 - 0.05/0.1 and 0.75.
    assert [point["point"] for point in worst] == ["p5", "p3", "p1", "p2", "p4"]
    assert [point["verdict"] for point in worst] == ["lost", "lost", "short", "short", "void"]
    assert worst[0]["at_speed"] == 15.0
    assert worst[2]["shortfall"] == pytest.approx(0.75)
    assert worst[3]["shortfall"] == pytest.approx(0.5)


def test_only_as_many_worst_points_as_asked() -> None:
    assert [p["point"] for p in summarise(POLES, SPEEDS, worst=2).worst] == ["p5", "p3"]
    assert summarise(POLES, SPEEDS, worst=0).worst == ()


def test_doubt_stands_between_lost_and_short() -> None:
    bank = ssaudit.build_bank(
        [[[-0.5]], [[-0.0005]], [[2.0]], [[-3.0]]],
        [[[1.0]]] * 4,
        revision="A",
        digits=3,
        ids=["short", "doubt", "lost", "ok"],
    )
    loop = ssaudit.Loop("positive", ssaudit.ConstantGain([[0.0005]]))
    summary = ssaudit.audit(bank, loop, Criteria(REQUIREMENTS)).summary
    assert [point["point"] for point in summary.worst] == ["lost", "doubt", "short"]


def test_equally_bad_points_keep_the_order_of_the_bank() -> None:
    worst = summarise([2.0] * 5, [5.0, 4.0, 3.0, 2.0, 1.0]).worst
    assert [point["point"] for point in worst] == ["p0", "p1", "p2", "p3", "p4"]


def test_what_is_missed_by_how_many_and_worst_where() -> None:
    stability, decay, slow = summarise(POLES, SPEEDS).missed
    assert (stability.name, stability.points, stability.worst_point) == ("stability", 2, "p5")
    assert stability.worst_value == 7.0
    assert stability.at == {"speed": 15.0}
    assert stability.between == {"speed": (15.0, 40.0)}
    # Lost points miss requirements too.
    assert (decay.name, decay.limits, decay.points) == ("decay", "real ≤ -1 1/s", 3)
    assert (decay.worst_point, decay.worst_value) == ("p5", 7.0)
    assert decay.between == {"speed": (15.0, 40.0)}
    assert (slow.name, slow.limits, slow.points) == ("slow", "time_constant ≥ 0.1 s", 3)
    # What no point misses still says which comes nearest to it.
    met = summarise([-2.0], [1.0]).missed[1]
    assert (met.points, met.judged, met.worst_point, met.worst_value) == (0, 1, "p0", -2.0)


def test_ranges_are_those_of_all_judged_points() -> None:
    summary = summarise(POLES, SPEEDS)
    assert summary.between == {"speed": (10.0, 40.0)}
    assert (summary.max_real, summary.min_damping) == (7.0, -1.0)
    nothing = summarise([np.nan], [1.0])
    assert np.isnan([nothing.max_real, nothing.min_damping]).all()
    assert nothing.between == {}


@pytest.mark.parametrize("chunk", [1, 2, 5, 7, 50, 1000])
def test_summary_does_not_depend_on_how_points_come_in(chunk: int) -> None:
    rng = np.random.default_rng(0)
    poles = rng.choice([-3.0, -0.5, -0.25, -40.0, 1.0, 2.0, np.nan], 100).tolist()
    speeds = rng.permutation(100).astype(float).tolist()
    whole, parts = summarise(poles, speeds), summarise(poles, speeds, chunk=chunk)
    for name in (
        "revision",
        "counts",
        "missed",
        "void",
        "held",
        "between",
        "max_real",
        "min_damping",
    ):
        assert getattr(parts, name) == getattr(whole, name)
    for one, other in zip(whole.worst, parts.worst, strict=True):
        assert list(one) == list(other)
        np.testing.assert_equal(dict(one), dict(other))


def test_counts_are_right_for_the_poles_that_were_drawn() -> None:
    rng = np.random.default_rng(1)
    poles = rng.choice([-3.0, -0.5, -40.0, 1.0, np.nan], 200)
    counts = summarise(poles.tolist(), np.arange(200.0).tolist(), chunk=9).counts
    assert counts["ok"] == np.sum(poles == -3.0)
    assert counts["short"] == np.sum((poles == -0.5) | (poles == -40.0))
    assert counts["lost"] == np.sum(poles == 1.0)
    assert counts["void"] == np.isnan(poles).sum()


def test_void_reasons_are_counted_the_most_frequent_first() -> None:
    A = np.full((6, 2, 2), -1.0)
    A[[0, 3], 0, 1] = np.nan
    A[[1, 2, 5], 1, 1] = np.inf
    bank = ssaudit.build_bank(A, revision="A")
    void = ssaudit.audit(bank, CLOSED, Criteria()).summary.void
    assert list(void.items()) == [("A[2,2] is infinite", 3), ("A[1,2] is NaN", 2)]


def test_many_different_void_reasons_are_told_apart_up_to_a_limit() -> None:
    tally = Tally("A", Criteria(), 5)
    n = 1005
    columns: dict[str, Any] = {
        "point": np.arange(n).astype(str).astype(object),
        "verdict": np.full(n, "void", dtype=object),
        "reason": np.array([f"reason {k}" for k in range(n)], dtype=object),
        "held": np.zeros(n, dtype=bool),
        **{name: np.full(n, np.nan) for name in ("max_real", "min_damping", "shortfall")},
    }
    tally.add(columns, np.zeros((n, 0)), np.zeros((n, 0)), np.zeros((n, 0), dtype=bool))
    summary = tally.result()
    assert len(summary.void) == 1001
    assert summary.void["other reasons"] == 5
    assert sum(summary.void.values()) == summary.counts["void"] == n


def test_common_range_of_a_factor_and_the_points_that_set_it() -> None:
    """L = c/(s + a) is stable for factors above -a/c, or below it where c is negative."""
    A = np.array([-1.0, -2.0, -0.5, 9.0])[:, None, None]
    B = np.array([1.0, -1.0, 1.0, 1.0])[:, None, None]
    bank = ssaudit.build_bank(A, B, revision="A", ids=["a", "b", "c", "lost"])
    loop = ssaudit.Loop("negative", ssaudit.ConstantGain([[1.0]]))
    for chunk in (1, 4):
        found = ssaudit.audit(bank, loop, ssaudit.Criteria(), depth="margins", chunk=chunk)
        for common in found.summary.ranges:
            assert (common.low, common.high) == (pytest.approx(-0.5), pytest.approx(2.0))
            assert (common.low_point, common.high_point) == ("c", "b")
            assert common.unknown == 0
        assert [common.loop for common in found.summary.ranges] == ["", "input u1", "signal x1"]


def test_a_range_that_the_numbers_do_not_decide_is_counted() -> None:
    points = {
        "point": np.array(["a", "b", "c"], dtype=object),
        "stable_inside": np.array([1, 1, 0], dtype=np.int8),
        "gain_factor_low": np.array([0.5, np.nan, np.nan]),
        "gain_factor_high": np.array([2.0, np.nan, np.nan]),
    }
    tally = Tally("A", ssaudit.Criteria(), 1)
    tally.add_loops(points, {})
    (common,) = tally._ranges.values()
    assert (common.low, common.high, common.unknown) == (0.5, 2.0, 1)
