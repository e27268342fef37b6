"""The stages that commands and pipelines share: one pass, several outputs, bounded memory."""

import csv

import numpy as np
import pytest

import ssaudit
from ssaudit.errors import LoopError, SsauditError
from ssaudit.ledger import read_ledger
from ssaudit.stages import compare_runs, stream_audit

LOOP = ssaudit.Loop("negative", ssaudit.ConstantGain([[1.0, 1.0]]))
CRITERIA = ssaudit.Criteria((ssaudit.Requirement("ride", "damping_ratio", at_least=0.2),))
# Eleven of them grow.
DAMPING = (np.arange(29.0) - 10.5) / 25


@pytest.fixture
def bank(oscillators):
    return oscillators(DAMPING, coordinates={"speed": (np.arange(29.0), "m/s")})


def test_the_stream_finds_what_the_audit_in_memory_finds(bank, tmp_path, monkeypatch):
    whole = ssaudit.audit(bank, LOOP, CRITERIA, worst=4)
    monkeypatch.setattr("ssaudit.auditing.CHUNK_BYTES", 5 * 32)
    report = stream_audit(bank, LOOP, CRITERIA, ledger=tmp_path / "ledger", worst=4)
    assert report.summary.counts == whole.summary.counts
    assert report.summary.missed == whole.summary.missed
    assert [p["point"] for p in report.summary.worst] == [p["point"] for p in whole.summary.worst]
    assert report.summary.counts["lost"] == 11
    assert report.run.points["verdict"].tolist() == whole.points["verdict"].tolist()


def test_without_a_ledger_nothing_is_written(bank, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    report = stream_audit(bank, LOOP, CRITERIA)
    assert report.run is None
    assert not report.already_logged
    assert list(tmp_path.iterdir()) == []


def test_the_csv_table_holds_every_point_in_order(bank, tmp_path):
    report = stream_audit(bank, LOOP, CRITERIA, csv=tmp_path / "t.csv", ledger=tmp_path / "ledger")
    with open(tmp_path / "t.csv", newline="", encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    logged = report.run.points
    assert list(rows[0]) == list(logged)
    assert [row["point"] for row in rows] == logged["point"].tolist()
    assert [row["verdict"] for row in rows] == logged["verdict"].tolist()
    assert [float(row["max_real"]) for row in rows] == logged["max_real"].tolist()


def test_the_csv_table_is_written_where_the_run_was_logged_before(bank, tmp_path):
    ledger = tmp_path / "ledger"
    stream_audit(bank, LOOP, CRITERIA, ledger=ledger)
    again = stream_audit(bank, LOOP, CRITERIA, ledger=ledger, csv=tmp_path / "t.csv")
    assert again.already_logged
    assert len((tmp_path / "t.csv").read_text().splitlines()) == 30
    assert again.about["counts"] == dict(again.run.about["counts"])


def test_progress_ends_with_all_points(bank, monkeypatch):
    monkeypatch.setattr("ssaudit.auditing.CHUNK_BYTES", 5 * 32)
    seen = []
    stream_audit(bank, LOOP, CRITERIA, progress=lambda *told: seen.append(told))
    assert [stage for stage, _, _ in seen] == ["audit"] * len(seen)
    assert [done for _, done, _ in seen] == [5, 10, 15, 20, 25, 29]
    assert {total for _, _, total in seen} == {29}


@pytest.mark.parametrize(
    ("loop", "more", "message"),
    [
        (ssaudit.Loop("negative", ssaudit.ConstantGain([[1.0]])), {}, "gain matrix is for 1 state"),
        (LOOP, {"depth": "deep"}, "depth is 'deep'; choose one of"),
    ],
)
def test_what_does_not_fit_leaves_no_output(bank, tmp_path, loop, more, message):
    with pytest.raises(SsauditError, match=message):
        stream_audit(
            bank, loop, CRITERIA, ledger=tmp_path / "ledger", csv=tmp_path / "t.csv", **more
        )
    assert list(tmp_path.iterdir()) == []


def test_the_worst_are_as_many_as_asked_for(bank):
    for worst in (0, 1, 3, 100):
        found = stream_audit(bank, LOOP, CRITERIA, worst=worst).summary.worst
        assert len(found) == min(worst, np.count_nonzero(DAMPING < 0.2))
        real = [point["max_real"] for point in found if point["verdict"] == "lost"]
        assert real == sorted(real, reverse=True)


def test_runs_of_a_ledger_are_compared_by_revision_or_run(oscillators, tmp_path):
    ledger = tmp_path / "ledger"
    for revision, damping in (("A", [0.5, 0.5]), ("B", [0.5, -0.5])):
        bank = oscillators(damping, ids=["a", "b"], revision=revision)
        stream_audit(bank, LOOP, CRITERIA, ledger=ledger)
    old, new = read_ledger(ledger)
    found = compare_runs(ledger, "A", f"run={new.run}")
    assert (found.before.run, found.after.run) == (old.run, new.run)
    assert found.drift.changes["worse"] == 1
    assert found.drift.tolerance == 1e-9
    assert compare_runs(ledger, "B", "A", tolerance=0.5).drift.changes["better"] == 1


def test_a_loop_that_fits_no_section_names_the_loop(bank):
    named = ssaudit.Loop(
        "negative", ssaudit.ConstantGain([[1.0, 1.0]], ["flop"], ["height", "rate"]), name="x.toml"
    )
    with pytest.raises(LoopError, match=r"x\.toml: the gain names 'flop'.*did you mean flap"):
        stream_audit(bank, named, CRITERIA)
