"""Drift and trend on a screen: what got worse first, nothing left out unsaid."""

import numpy as np
import pytest
from rich.console import Console

import ssaudit
from ssaudit.report.drift_text import drift_text, trend_text
from ssaudit.report.words import CAUTIONS
from ssaudit.stages import compare_runs, stream_audit

LOOP = ssaudit.Loop("negative", ssaudit.ConstantGain([[1.0, 1.0]]))
CRITERIA = ssaudit.Criteria((ssaudit.Requirement("ride", "damping_ratio", at_least=0.2),))
CAUTION_WORDS = " ".join(CAUTIONS).split()


def lines(renderable, width=120):
    console = Console(width=width, force_terminal=False)
    with console.capture() as shown:
        console.print(renderable)
    return shown.get().splitlines()


@pytest.fixture
def compared(oscillators, tmp_path):
    """Compare two revisions of the dampings that are given."""

    def compare(old, new, **about):
        for revision, damping in (("A", old), ("B", new)):
            more = {"ids": [f"p{k}" for k in range(len(damping))], **about}
            more = {
                key: value[: len(damping)] if key == "ids" else value for key, value in more.items()
            }
            bank = oscillators(damping, revision=revision, **more)
            stream_audit(bank, LOOP, CRITERIA, ledger=tmp_path / "ledger")
        return compare_runs(tmp_path / "ledger", "A", "B")

    return compare


def section(shown, title):
    """Lines below a title, to the next empty line."""
    start = next(k for k, line in enumerate(shown) if line.startswith(title))
    stop = next(k for k in range(start, len(shown)) if not shown[k].strip())
    return shown[start + 1 : stop]


def test_nothing_changed(compared):
    shown = lines(drift_text(compared([0.5, 0.1], [0.5, 0.1])))
    assert shown[1] == "0 worse   0 appeared   0 vanished   0 better   2 same verdict"
    assert not [line for line in shown if line.startswith(("worse", "moved most"))]
    assert " ".join(shown).split()[-len(CAUTION_WORDS) :] == CAUTION_WORDS


def test_the_matrix_of_verdicts(compared):
    old, new = [0.5, 0.5, 0.1, 0.1, -0.1], [0.5, -0.1, -0.1, 0.5, np.nan]
    shown = lines(drift_text(compared(old, new)))
    start = next(k for k, line in enumerate(shown) if line.startswith("before, and after:"))
    table = [line.split() for line in shown[start : start + 5]]
    assert table[0][3:] == ["lost", "short", "void", "ok"]
    rows = {row[0]: row[1:] for row in table[1:]}
    assert rows == {
        "lost": [".", ".", "1", "."],
        "short": ["1", ".", ".", "1"],
        "void": [".", ".", ".", "."],
        "ok": ["1", ".", ".", "1"],
    }


def test_the_distribution_of_the_change(compared):
    # ω = 2, so max_real is -2 ζ.
    shown = lines(drift_text(compared([0.5, 0.5, 0.5], [0.4, 0.5, 0.7])))
    start = next(k for k, line in enumerate(shown) if line.startswith("change"))
    assert shown[start].split()[1:] == [
        "worse", "better", "least", "5", "%", "median", "95", "%", "greatest"
    ]  # fmt: skip
    assert shown[start + 1].split() == [
        "max_real", "1/s", "1", "1", "-0.400", "-0.360", "0", "0.180", "0.200"
    ]  # fmt: skip
    assert shown[start + 2].split()[:3] == ["min_damping", "1", "1"]


def test_lists_are_cut_and_say_so(compared):
    shown = lines(drift_text(compared([0.5] * 30, -np.linspace(0.1, 0.9, 30)), most=4))
    worse = section(shown, "worse (30)")
    assert [line.split()[0] for line in worse[:4]] == ["p29", "p28", "p27", "p26"]
    assert worse[4] == "and 26 more: --json"
    assert len(section(shown, "moved most")) == 4


def test_points_that_appear_and_vanish(compared):
    shown = lines(drift_text(compared([0.5, 0.5], [0.5, 0.5, -0.1])))
    (row,) = section(shown, "appeared (1)")
    assert row.split() == ["p2", "-", "→", "lost", "-", "→", "0.200", "-", "→", "-0.100"]
    assert shown[1].startswith("0 worse   1 appeared")


def test_the_runs_compared_are_named(compared):
    found = compared([0.5], [0.5])
    shown = lines(drift_text(found))
    assert f"from  {found.before.run}, revision A" in shown
    assert f"to    {found.after.run}, revision B" in shown


def test_relocated_points_are_told(compared, oscillators, tmp_path):
    for revision, speed in (("A", [1.0, 2.0]), ("B", [1.0, 5.0])):
        bank = oscillators(
            [0.5, 0.5], revision=revision, ids=["a", "b"], coordinates={"speed": (speed, "m/s")}
        )
        stream_audit(bank, LOOP, CRITERIA, ledger=tmp_path / "ledger")
    shown = lines(drift_text(compare_runs(tmp_path / "ledger", "A", "B")))
    assert "1 points have the same id, other coordinates" in shown


def test_the_trend_of_one_revision(oscillators, tmp_path):
    stream_audit(oscillators([0.5, np.nan]), LOOP, CRITERIA, ledger=tmp_path / "ledger")
    shown = lines(trend_text(ssaudit.read_ledger(tmp_path / "ledger")))
    assert shown[1].split()[:9] == ["A", "2", ".", ".", ".", "1", "1", "-1.00", "0.500"]
    assert " ".join(shown).split()[-len(CAUTION_WORDS) :] == CAUTION_WORDS


def test_the_trend_of_void_points_alone_has_no_numbers(oscillators, tmp_path):
    stream_audit(oscillators([np.nan]), LOOP, CRITERIA, ledger=tmp_path / "ledger")
    shown = lines(trend_text(ssaudit.read_ledger(tmp_path / "ledger")))
    assert shown[1].split()[:9] == ["A", "1", ".", ".", ".", "1", ".", "-", "-"]
