"""Drift: points matched, verdicts compared, movement measured; and nothing invented."""

from dataclasses import dataclass, field
from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest

import ssaudit
from ssaudit.bank import ModelBank, Points
from ssaudit.bank_arrays import build_bank
from ssaudit.drifting import QUANTILES, drift
from ssaudit.errors import SsauditError
from ssaudit.ledger import newest_of_revisions

NONE = ssaudit.Loop("", None, "none")
CRITERIA = ssaudit.Criteria((ssaudit.Requirement("ride", "damping_ratio", at_least=0.2),))


@dataclass
class Table:
    """A run made of columns alone: what drift needs of one."""

    verdict: list[str]
    max_real: list[float]
    min_damping: list[float] | None = None
    ids: list[str] | None = None
    at: dict[str, list[float]] = field(default_factory=dict)
    tags: dict[str, list[str]] = field(default_factory=dict)

    @property
    def ids_given(self):
        return self.ids is not None

    @property
    def points(self):
        count = len(self.verdict)
        damping = self.min_damping or [0.5] * count
        return pd.DataFrame(
            {
                "point": self.ids or [str(k + 1) for k in range(count)],
                **{f"at_{name}": values for name, values in self.at.items()},
                **{f"tag_{name}": values for name, values in self.tags.items()},
                "verdict": self.verdict,
                "reason": [f"why {v}" if v != "ok" else "" for v in self.verdict],
                "max_real": np.array(self.max_real, dtype=float),
                "min_damping": np.array(damping, dtype=float),
            }
        )


def audited(bank):
    return ssaudit.audit(bank, NONE, CRITERIA)


def diagonal(values, **about):
    """Build a bank of models of one real pole each."""
    return build_bank(np.reshape(values, (-1, 1, 1)), revision="A", **about)


def by_point(found):
    return dict(zip(found.points["point"], found.points["change"], strict=True))


class TestMatching:
    def test_a_run_with_itself_is_all_the_same(self):
        run = audited(diagonal([-1.0, 0.5, np.nan], ids=["a", "b", "c"]))
        found = drift(run, run)
        assert found.matched_by == "ids"
        assert found.changes == {
            "worse": 0, "better": 0, "same": 3, "appeared": 0, "vanished": 0
        }  # fmt: skip
        assert found.verdicts == {("ok", "ok"): 1, ("lost", "lost"): 1, ("void", "void"): 1}
        assert not found.got_worse
        assert found.relocated == 0
        assert len(found.movers(10)) == 0
        for moved in found.moved.values():
            assert (moved["points"], moved["worse"], moved["better"]) == (2, 0, 0)
            assert moved["q000"] == moved["q050"] == moved["q100"] == 0

    def test_by_ids_whatever_their_order(self):
        a = Table(["ok", "short", "lost", "ok"], [-1, -1, 1, -1], ids=["p", "q", "r", "s"])
        b = Table(["ok", "short", "ok", "lost"], [-1, -1, -1, 1], ids=["t", "r", "q", "p"])
        found = drift(a, b)
        assert by_point(found) == {
            "p": "worse", "q": "better", "r": "better", "s": "vanished", "t": "appeared"
        }  # fmt: skip
        assert found.changes == {
            "worse": 1, "better": 2, "same": 0, "appeared": 1, "vanished": 1
        }  # fmt: skip
        assert found.verdicts == {
            ("ok", "lost"): 1, ("short", "ok"): 1, ("lost", "short"): 1
        }  # fmt: skip

    def test_numbered_points_are_matched_by_coordinates(self):
        speed, mass = np.meshgrid([10.0, 12.0, 14.0], [80.0, 95.0])
        place = {"speed": speed.ravel(), "mass": mass.ravel()}
        values = -np.arange(1.0, 7.0)
        order = np.array([3, 0, 5, 1, 4, 2])
        a = audited(diagonal(values, coordinates={n: (v, "") for n, v in place.items()}))
        b = audited(diagonal(values[order], coordinates={n: (v[order], "") for n, v in
                                                         place.items()}))  # fmt: skip
        found = drift(a, b)
        assert found.matched_by == "coordinates"
        assert found.changes["same"] == 6
        assert found.moved["max_real"]["q000"] == found.moved["max_real"]["q100"] == 0
        # The point keeps the number that it has in the later run, and the earlier one beside it.
        assert [int(p) for p in found.points["point_from"]] == [
            order[int(p) - 1] + 1 for p in found.points["point"]
        ]

    def test_numbers_say_nothing_even_where_they_agree(self):
        a = Table(["ok", "lost"], [-1, 1], at={"speed": [1, 2]})
        b = Table(["lost", "ok"], [1, -1], at={"speed": [2, 1]})
        assert drift(a, b).changes["same"] == 2
        named = Table(["lost", "ok"], [1, -1], at={"speed": [2, 1]}, ids=["1", "2"])
        assert drift(a, named).matched_by == "coordinates"
        assert drift(a, named).changes["same"] == 2

    def test_ids_that_are_not_shared_give_way_to_coordinates(self):
        a = Table(["ok"], [-1], ids=["old-1"], at={"speed": [1.5]})
        b = Table(["lost"], [1], ids=["new-1"], at={"speed": [1.5]})
        found = drift(a, b)
        assert (found.matched_by, found.changes["worse"]) == ("coordinates", 1)

    def test_tags_part_points_of_one_place(self):
        at, tags = {"speed": [1, 1]}, {"config": ["foil", "hull"]}
        a = Table(["ok", "lost"], [-1, 1], at=at, tags=tags)
        b = Table(["lost", "ok"], [1, -1], at=at, tags={"config": ["hull", "foil"]})
        assert drift(a, b).changes["same"] == 2

    def test_a_coordinate_that_one_run_lacks_is_left_out(self):
        a = Table(["ok", "ok"], [-1, -1], at={"speed": [1, 2], "mass": [5, 6]})
        b = Table(["ok", "lost"], [-1, 1], at={"speed": [1, 2]})
        found = drift(a, b)
        assert found.changes["worse"] == 1
        assert "at_mass" not in found.points

    @pytest.mark.parametrize(("by", "same"), [(1e-12, 3), (5e-10, 3), (2e-9, 2), (1e-3, 2)])
    def test_coordinates_within_the_tolerance_are_the_same(self, by, same):
        # The range is 100, so the tolerance of 1e-9 is 1e-7.
        a = Table(["ok"] * 3, [-1] * 3, at={"speed": [0, 50, 100]})
        b = Table(["ok"] * 3, [-1] * 3, at={"speed": [0, 50 + 100 * by, 100]})
        found = drift(a, b)
        assert found.changes["same"] == same
        assert found.changes["appeared"] == found.changes["vanished"] == 3 - same
        assert drift(a, b, tolerance=0.01).changes["same"] == 3

    def test_equal_coordinates_match_at_any_size_and_without_tolerance(self):
        for scale in (1e-300, 1e-9, 1.0, 1e15):
            at = {"x": [scale, 2 * scale], "fixed": [3.0, 3.0]}
            for tolerance in (0.0, 1e-9):
                same = drift(Table(["ok"] * 2, [-1] * 2, at=at),
                             Table(["ok"] * 2, [-1] * 2, at=at), tolerance=tolerance)  # fmt: skip
                assert same.changes["same"] == 2

    def test_an_infinite_or_missing_coordinate_spoils_no_other(self):
        at = {"speed": [1.0, 2.0, np.inf, np.nan, -np.inf]}
        a = Table(["ok", "lost", "void", "void", "void"], [-1, 1, *[np.nan] * 3], at=at)
        b = Table(["lost", "ok", "void", "void", "void"], [1, -1, *[np.nan] * 3],
                  at={"speed": [2.0, 1.0, np.inf, np.nan, -np.inf]})  # fmt: skip
        found = drift(a, b)
        assert found.verdicts[("ok", "ok")] == found.verdicts[("lost", "lost")] == 1
        assert found.changes["worse"] == found.changes["better"] == 0
        # No number is its own equal: what has none stands as vanished and as appeared.
        assert found.changes["appeared"] == found.changes["vanished"] == 1

    def test_void_duplicates_are_matched_one_to_one(self):
        ids, claims = ["a", "a", "a", "b"], ["void"] * 3 + ["ok"]
        a = Table(claims, [np.nan] * 3 + [-1], ids=ids)
        b = Table(claims[1:], [np.nan] * 2 + [-1], ids=ids[1:])
        found = drift(a, b)
        assert len(found.points) == 4
        assert (found.changes["same"], found.changes["vanished"]) == (3, 1)
        at = {"speed": [7, 7, 7, 8]}
        a = Table(claims, [np.nan] * 3 + [-1], at=at)
        b = Table(claims[1:], [np.nan] * 2 + [-1], at={"speed": at["speed"][1:]})
        assert drift(a, b).changes == found.changes

    @pytest.mark.parametrize("at", [{}, {"mass": [1.0, 2.0]}])
    def test_runs_that_share_nothing_cannot_be_compared(self, at):
        a = Table(["ok", "ok"], [-1, -1], ids=["a", "b"], at={"speed": [1.0, 2.0]})
        b = Table(["ok", "ok"], [-1, -1], ids=["c", "d"], at=at)
        with pytest.raises(SsauditError, match="share neither point ids nor coordinates"):
            drift(a, b)

    def test_points_with_other_coordinates_are_counted(self):
        a = Table(["ok"] * 3, [-1] * 3, ids=["a", "b", "c"], at={"speed": [1, 2, 3]})
        b = Table(["ok"] * 3, [-1] * 3, ids=["c", "b", "a"], at={"speed": [3, 2.5, 1 + 1e-12]})
        assert drift(a, b).relocated == 1
        gone = Table(["ok"] * 2, [-1] * 2, ids=["a", "x"], at={"speed": [1, 9]})
        assert drift(a, gone).relocated == 0


class TestVerdicts:
    @pytest.mark.parametrize(
        ("old", "new", "change"),
        [
            ("ok", "short", "worse"), ("ok", "doubt", "worse"), ("ok", "void", "worse"),
            ("ok", "lost", "worse"), ("short", "doubt", "worse"), ("short", "void", "worse"),
            ("short", "lost", "worse"), ("doubt", "lost", "worse"), ("void", "lost", "worse"),
            ("short", "ok", "better"), ("void", "ok", "better"), ("void", "short", "better"),
            ("lost", "void", "better"), ("lost", "doubt", "better"), ("doubt", "void", "same"),
            ("void", "doubt", "same"), ("lost", "lost", "same"),
        ],
    )  # fmt: skip
    def test_worse_and_better(self, old, new, change):
        values = {"void": np.nan, "lost": 1.0}
        runs = [Table([v], [values.get(v, -1.0)], ids=["p"]) for v in (old, new)]
        found = drift(*runs)
        assert by_point(found) == {"p": change}
        assert found.verdicts == {(old, new): 1}
        assert found.got_worse == (change == "worse")

    @pytest.mark.parametrize("verdict", ["ok", "short", "doubt", "void", "lost"])
    def test_a_point_that_appears_must_be_ok(self, verdict):
        a = Table(["ok"], [-1], ids=["a"])
        b = Table(["ok", verdict], [-1, -1], ids=["a", "b"])
        assert drift(a, b).got_worse == (verdict != "ok")
        assert not drift(b, a).got_worse

    def test_the_matrix_counts_every_shared_point_once(self):
        rng = np.random.default_rng(3)
        words = np.array(["ok", "short", "doubt", "void", "lost"])
        old, new = words[rng.integers(5, size=(2, 400))]
        ids = [f"p{k}" for k in range(400)]
        found = drift(*(Table(list(v), [-1.0] * 400, ids=ids) for v in (old, new)))
        assert sum(found.verdicts.values()) == 400
        for pair, count in found.verdicts.items():
            assert count == np.count_nonzero((old == pair[0]) & (new == pair[1]))
        assert found.changes["worse"] + found.changes["better"] + found.changes["same"] == 400

    def test_a_point_that_becomes_void_says_why_and_has_not_moved(self):
        a = audited(diagonal([-1.0, -2.0], ids=["a", "b"]))
        b = audited(diagonal([-1.0, np.nan], ids=["a", "b"]))
        found = drift(a, b)
        row = found.points.set_index("point").loc["b"]
        assert (row["verdict_from"], row["verdict_to"], row["change"]) == ("ok", "void", "worse")
        assert row["reason_to"] == "A[1,1] is NaN"
        assert np.isnan(row["max_real_change"])
        assert found.moved["max_real"]["points"] == 1


class TestMovement:
    def test_quantiles_and_counts_against_numpy(self):
        rng = np.random.default_rng(4)
        real = rng.normal(-1, 0.3, (2, 301))
        damping = rng.uniform(0.1, 0.9, (2, 301))
        real[1, :20] = real[0, :20]
        damping[1, :30] = damping[0, :30]
        ids = [f"p{k}" for k in range(301)]
        order = rng.permutation(301)
        a = Table(["ok"] * 301, real[0], list(damping[0]), ids)
        b = Table(["ok"] * 301, real[1][order], list(damping[1][order]), [ids[k] for k in order])
        found = drift(a, b)
        for name, values in (("max_real", real), ("min_damping", damping)):
            change, moved = values[1] - values[0], found.moved[name]
            for q in QUANTILES:
                assert moved[f"q{int(100 * q):03d}"] == pytest.approx(np.quantile(change, q))
            up, down = np.count_nonzero(change > 0), np.count_nonzero(change < 0)
            assert (moved["worse"], moved["better"]) == (
                (up, down) if name == "max_real" else (down, up)
            )
            assert moved["points"] == 301

    def test_what_moves_by_rounding_has_not_moved(self):
        a = Table(["ok"] * 3, [-1.0, -1.0, 0.0], ids=["a", "b", "c"])
        b = Table(["ok"] * 3, [-1.0 + 1e-12, -1.0 + 1e-6, 0.0], ids=["a", "b", "c"])
        moved = drift(a, b).moved["max_real"]
        assert (moved["worse"], moved["better"]) == (1, 0)

    def test_no_shared_point_has_numbers(self):
        a = Table(["void"], [np.nan], [np.nan], ids=["a"])
        found = drift(a, a)
        assert found.moved["max_real"]["points"] == 0
        assert np.isnan(found.moved["max_real"]["q050"])
        assert len(found.movers(3)) == 0

    def test_infinite_poles_do_not_spoil_the_quantiles(self):
        # A sampled model with z = 0 has its pole at minus infinity.
        a = audited(diagonal([0.0, 0.5, 0.5], ids=["a", "b", "c"], dt=0.1))
        b = audited(diagonal([0.0, 0.0, 0.6], ids=["a", "b", "c"], dt=0.1))
        moved = drift(a, b).moved["max_real"]
        assert moved["points"] == 1
        assert moved["q050"] == pytest.approx(np.log(0.6 / 0.5) / 0.1)

    def test_the_largest_movers_come_most_worsened_first(self):
        change = [0.0, 0.5, -2.0, 1.0, -0.1, 3.0]
        ids = list("abcdef")
        a = Table(["ok"] * 6, [-5.0] * 6, ids=ids, at={"speed": [1, 2, 3, 4, 5, 6]})
        b = Table(["ok"] * 6, [-5.0 + c for c in change], ids=ids, at={"speed": [1, 2, 3, 4, 5, 6]})
        found = drift(a, b)
        assert found.movers(3)["point"].tolist() == ["f", "d", "c"]
        assert found.movers(100)["point"].tolist() == ["f", "d", "b", "e", "c"]
        assert found.movers(3)["at_speed"].tolist() == [6, 4, 3]
        assert len(found.movers(0)) == 0

    def test_columns_of_both_runs(self):
        a = Table(["ok", "ok"], [-1.0, -2.0], [0.5, 0.6], ["a", "b"], {"speed": [1, 2]})
        b = Table(["lost", "ok"], [0.5, -2.0], [-0.5, 0.6], ["a", "c"], {"speed": [1, 3]})
        points = drift(a, b).points.set_index("point")
        row = points.loc["a"]
        assert (row["max_real_from"], row["max_real_to"], row["max_real_change"]) == (-1, 0.5, 1.5)
        assert (row["min_damping_from"], row["min_damping_to"]) == (0.5, -0.5)
        assert row["reason_to"] == "why lost"
        assert points["at_speed"].to_dict() == {"a": 1, "b": 2, "c": 3}
        assert points["change"].to_dict() == {"a": "worse", "b": "vanished", "c": "appeared"}


def test_sampled_models_and_other_shapes_are_compared_alike():
    def sections(pole, ids):
        first = build_bank([[[pole]]], revision="A", ids=[ids[0]], dt=0.1)
        second = build_bank([np.diag([0.5, pole])], revision="A", ids=[ids[1]], dt=0.2)
        third = build_bank([-np.eye(3)], revision="A", ids=[ids[2]])
        void = np.full(3, "", dtype=object)
        points = Points(np.array(ids), {}, {}, {}, void)
        return ModelBank("A", points, (*first.sections, *second.sections, *third.sections))

    a, b = audited(sections(0.9, ["a", "b", "c"])), audited(sections(1.1, ["a", "b", "c"]))
    found = drift(a, b)
    assert found.verdicts == {("ok", "lost"): 2, ("ok", "ok"): 1}
    change = found.points.set_index("point")["max_real_change"]
    assert change["a"] == pytest.approx(np.log(1.1 / 0.9) / 0.1)
    assert change["b"] == pytest.approx(np.log(1.1 / 0.9) / 0.2)
    assert change["c"] == 0


def test_the_trend_keeps_the_newest_run_of_each_revision_in_order():
    runs = [SimpleNamespace(revision=r, run=k) for k, r in enumerate(["A", "B", "A", "C", "B"])]
    kept = newest_of_revisions(runs)
    assert [(run.revision, run.run) for run in kept] == [("A", 2), ("B", 4), ("C", 3)]
