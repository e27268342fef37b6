"""Records for programs: strict JSON under the names of the ledger, nothing lost on the way."""

import json

import numpy as np
import pytest

import ssaudit
from ssaudit.report.records import as_json, audit_record, drift_record
from ssaudit.report.words import CAUTIONS
from ssaudit.stages import compare_runs, stream_audit

LOOP = ssaudit.Loop("negative", ssaudit.ConstantGain([[1.0, 1.0]]))
NONE = ssaudit.Loop("", None, "none")
CRITERIA = ssaudit.Criteria((ssaudit.Requirement("ride", "damping_ratio", at_least=0.2),))


def strict(record):
    def refuse(word):
        raise AssertionError(f"{word} is not JSON")

    return json.loads(as_json(record), parse_constant=refuse)


def test_json_is_ascii_and_refuses_what_is_no_number():
    assert as_json({"ζ": "→"}).isascii()
    assert json.loads(as_json({"ζ": "→"})) == {"ζ": "→"}
    with pytest.raises(ValueError, match="not JSON compliant"):
        as_json({"x": float("nan")})


def test_the_record_says_what_the_tables_say(oscillators, tmp_path):
    bank = oscillators(
        [0.5, 0.1, -0.3, np.nan], ids=["a", "b", "c", "d"],
        coordinates={"speed": ([1.0, 2.0, 3.0, 4.0], "m/s")}, tags={"config": list("xyxy")},
    )  # fmt: skip
    report = stream_audit(bank, LOOP, CRITERIA, ledger=tmp_path / "ledger")
    record, points = strict(audit_record(report)), report.run.points.set_index("point")
    assert record["run"] == report.run.run
    assert record["points"]["total"] == 4
    for point in record["worst"]:
        row = points.loc[point["point"]]
        assert point["at"] == {"speed": row["at_speed"]}
        assert point["tags"] == {"config": row["tag_config"]}
        assert (point["verdict"], point["reason"]) == (row["verdict"], row["reason"])
        for name in ("real", "imag", "natural_frequency", "damping_ratio", "time_constant",
                     "max_real", "min_damping", "radius"):  # fmt: skip
            assert point[name] == (None if np.isnan(row[name]) else row[name])
    assert [p["point"] for p in record["worst"]] == ["c", "b", "d"]
    ride = record["requirements"][1]
    assert ride["required"] == "damping_ratio ≥ 0.2"
    assert ride["worst_value"] == pytest.approx(-0.3)
    assert ride["at"] == {"speed": 3.0}
    assert record["void"] == {"A[2,2] is NaN": 1}
    assert record["loop"] == "u = -K states"
    assert record["settings"]["depth"] == "modes"
    assert record["cautions"] == list(CAUTIONS)


def test_at_the_fast_look_what_was_not_computed_is_not_there(oscillators):
    record = strict(audit_record(stream_audit(oscillators([-0.5]), LOOP, CRITERIA, depth="poles")))
    (point,) = record["worst"]
    assert point["top_states"] == {}
    assert "radius" not in point


def test_nothing_is_missed_and_nothing_judged(oscillators):
    record = strict(audit_record(stream_audit(oscillators([0.5]), LOOP, CRITERIA)))
    assert record["worst"] == []
    assert record["requirements"][1]["missed"] == 0
    assert record["requirements"][1]["judged"] == 1
    assert record["requirements"][1]["worst_point"] == "1"
    assert record["requirements"][1]["worst_value"] == pytest.approx(0.5)
    record = strict(audit_record(stream_audit(oscillators([np.nan]), LOOP, CRITERIA)))
    assert record["max_real"] is None
    assert record["min_damping"] is None


def test_infinite_poles_are_null(tmp_path):
    bank = ssaudit.build_bank([[[0.0]]], revision="A", ids=["dead"], dt=0.1)
    need = ssaudit.Requirement("slow", "time_constant", at_least=1.0)
    report = stream_audit(bank, NONE, ssaudit.Criteria((need,)), ledger=tmp_path / "ledger")
    (point,) = strict(audit_record(report))["worst"]
    assert point["real"] is None
    assert report.run.points["real"][0] == -np.inf


def test_a_drift_names_all_that_changed(oscillators, tmp_path):
    for revision, damping in (("A", [0.5] * 40), ("B", [0.5, *[-0.1] * 38, np.nan])):
        bank = oscillators(
            damping, revision=revision, ids=[f"p{k}" for k in range(40)],
            coordinates={"speed": (np.arange(40.0), "m/s")},
        )  # fmt: skip
        stream_audit(bank, LOOP, CRITERIA, ledger=tmp_path / "ledger")
    found = compare_runs(tmp_path / "ledger", "A", "B")
    record = strict(drift_record(found.before, found.after, found.drift, 3))
    assert record["points"] == {
        "worse": 39, "better": 0, "same": 1, "appeared": 0, "vanished": 0
    }  # fmt: skip
    assert len(record["changed"]) == 39
    assert len(record["movers"]) == 3
    assert {(v["from"], v["to"]): v["points"] for v in record["verdicts"]} == {
        ("ok", "lost"): 38, ("ok", "ok"): 1, ("ok", "void"): 1
    }  # fmt: skip
    void = next(p for p in record["changed"] if p["verdict_to"] == "void")
    assert (void["point"], void["reason_to"]) == ("p39", "A[2,2] is NaN")
    assert void["max_real_to"] is void["max_real_change"] is None
    assert void["at"] == {"speed": 39.0}
    assert record["from"]["run"] == found.before.run
    assert record["cautions"] == list(CAUTIONS)


def test_a_drift_without_a_shared_number_is_strict_too(oscillators, tmp_path):
    for revision in "AB":
        bank = oscillators([np.nan], revision=revision, ids=["a"])
        stream_audit(bank, LOOP, CRITERIA, ledger=tmp_path / "ledger")
    found = compare_runs(tmp_path / "ledger", "A", "B")
    record = strict(drift_record(found.before, found.after, found.drift, 3))
    assert record["moved"]["max_real"]["q050"] is None
    assert record["moved"]["max_real"]["points"] == 0
    assert record["changed"] == record["movers"] == []
