"""The command line: what is shown, how wide and how long, what programs get, and how it ends."""

import argparse
import csv
import json
import os
import re
import subprocess
import sys
import tomllib
from pathlib import Path

import numpy as np
import pytest

import ssaudit
from ssaudit import cli
from ssaudit.report.words import CAUTIONS, ORDER

ROOT = Path(__file__).parents[1]
AXES = ("speed", "mass", "immersion", "flap", "temperature", "wave")
EIGHT = "".join(
    f'[[require]]\nname = "need {k}"\nquantity = "damping_ratio"\nat_least = {0.15 + k / 50:.2f}\n'
    for k in range(8)
)
CAUTION_WORDS = " ".join(CAUTIONS).split()


def strict(text):
    """Read JSON as a strict reader does, which knows no NaN and no infinity."""

    def refuse(word):
        raise AssertionError(f"{word} is not JSON")

    return json.loads(text, parse_constant=refuse)


def damping(kind, count):
    """Damping ratios of all points, so that they are ok, lost, or of every kind."""
    if kind == "ok":
        return np.linspace(0.4, 0.9, count)
    if kind == "lost":
        return np.linspace(-0.9, -0.1, count)
    zeta = np.linspace(-0.5, 0.9, count)
    zeta[:: max(2, count // 4)] = np.nan
    if count > 5:
        zeta[-3] = 0.29  # on the last limit, to the last digit: in doubt
    return zeta


def envelope(count, axes):
    rng = np.random.default_rng(count)
    return {name: (rng.uniform(1, 1e5, count), "m/s") for name in AXES[:axes]}


def in_columns(text):
    """Widths of the lines, in columns of a terminal."""
    from rich.cells import cell_len

    return [cell_len(line) for line in text.splitlines()]


def usage(capsys, *arguments):
    """Run what the arguments alone end."""
    capsys.readouterr()
    with pytest.raises(SystemExit) as ended:
        cli.main([str(argument) for argument in arguments])
    written = capsys.readouterr()
    return ended.value.code, written.out, written.err


class TestExitCodes:
    def test_all_ok(self, project):
        assert project.audit(project.bank("A", [0.5])).code == 0

    @pytest.mark.parametrize("value", [0.1, -0.1])
    def test_some_point_is_not_ok(self, project, value):
        assert project.audit(project.bank("A", [0.5, value])).code == 1

    def test_a_void_point_is_not_ok(self, project):
        assert project.audit(project.bank("A", [0.5, np.nan])).code == 1

    def test_drift(self, project):
        project.log(
            project.bank("A", [0.5, 0.1, 0.5], ids=["a", "b", "c"]),
            project.bank("B", [0.5, -0.1, 0.5], ids=["a", "b", "c"]),
            project.bank("C", [0.5, 0.1, 0.5, -0.1], ids=["a", "b", "c", "d"]),
            project.bank("D", [0.5, 0.1, 0.5, 0.5], ids=["a", "b", "c", "d"]),
        )

        def code(a, b):
            return project.run("drift", project.ledger, "--from", a, "--to", b).code

        assert [code("A", r) for r in "ABCD"] == [0, 1, 1, 0]
        assert [code(r, "A") for r in "BCD"] == [0, 0, 0]

    def test_trend_says_how_it_is_and_judges_nothing(self, project):
        project.log(project.bank("A", [-0.5]))
        assert project.run("trend", project.ledger).code == 0

    @pytest.mark.parametrize(
        "arguments",
        [
            (), ("nonsense",), ("audit",), ("audit", "b.h5", "--loop", "l.toml"),
            ("audit", "b.h5", "--loop", "l", "--criteria", "c", "--depth", "deep"),
            ("audit", "b.h5", "--loop", "l", "--criteria", "c", "--worst", "-1"),
            ("audit", "b.h5", "--loop", "l", "--criteria", "c", "--worst", "1.5"),
            ("audit", "b.h5", "--loop", "l", "--criteria", "c", "--workers", "0"),
            ("audit", "b.h5", "--loop", "l", "--criteria", "c", "--nonsense"),
            ("drift", "ledger", "--from", "A"),
            ("drift", "ledger", "--from", "A", "--to", "B", "--tolerance", "nan"),
            ("drift", "ledger", "--from", "A", "--to", "B", "--tolerance", "1"),
            ("ingest", "x.h5", "--revision", "A"), ("ingest", "--revision", "A", "--bank", "b.h5"),
        ],
    )  # fmt: skip
    def test_wrong_arguments_are_told_in_one_line(self, capsys, arguments):
        code, out, err = usage(capsys, *arguments)
        assert (code, out) == (2, "")
        assert err.count("\n") == 1
        assert err.startswith("ssaudit")
        assert "--help" in err

    def test_interrupted(self, project, monkeypatch):
        def interrupt(*_, **__):
            raise KeyboardInterrupt

        bank = project.bank("A", [0.5])
        monkeypatch.setattr("ssaudit.chunk.find_usable_modes", interrupt)
        found = project.audit(bank, "--ledger", project.ledger, "--csv", project.folder / "x.csv")
        assert (found.code, found.out, found.err) == (130, "", "ssaudit: interrupted\n")
        assert sorted(path.name for path in project.folder.iterdir()) == [
            "A.h5", "criteria.toml", "loop.toml"
        ]  # fmt: skip


@pytest.fixture(
    scope="module",
    params=[("ok", 1), ("lost", 1), ("ok", 5), ("lost", 5), ("mixed", 5), ("ok", 5000),
            ("lost", 5000), ("mixed", 5000)],
    ids=lambda p: f"{p[0]}-{p[1]}",
)  # fmt: skip
def large_bank(request, tmp_path_factory, oscillators, save_bank):
    kind, count = request.param
    if kind == "mixed":
        # Long names, some of them of wide letters, six coordinates, tags, an endless reason.
        ids = [f"{'漢字' if k % 2 else 'ab'}-{'long' * 13}-{k:04d}" for k in range(count)]
        about = {"ids": ids, "tags": {"config": ["foilborne, heavy" * 5] * count}}
        about["coordinates"] = envelope(count, 6)
    else:
        about = {"coordinates": envelope(count, 2)}
    bank = oscillators(damping(kind, count), **about)
    if kind == "mixed":
        for k in range(0, count, max(2, count // 7)):
            bank.points.void[k] = f"reason {k}: " + "it is too long to be shown whole " * 5
    return save_bank(bank, tmp_path_factory.mktemp("banks") / "bank-of-a-rather-long-name.h5")


class TestWhatIsShown:
    @pytest.mark.parametrize("width", [80, 100, 120])
    def test_no_line_is_too_long_nor_are_there_too_many(
        self, project, large_bank, width, monkeypatch
    ):
        monkeypatch.setenv("COLUMNS", str(width))
        (project.folder / "criteria.toml").write_text('doubt = "ok"\n' + EIGHT)
        for _ in range(2):  # the second says that it was logged before
            found = project.audit(large_bank, "--ledger", project.ledger)
            assert found.err == ""
            assert max(in_columns(found.out)) <= width
            if width >= 100:
                assert len(found.out.splitlines()) <= 40
            let_pass = "1 in doubt about a requirement, let pass as ok" in found.out
            assert let_pass == ("5000 points" in found.out and " 1 doubt" in found.out)
        for word in ORDER:
            assert re.search(rf"\d+ {word}\b", found.out), word
        assert found.out.split()[-len(CAUTION_WORDS) :] == CAUTION_WORDS

    def test_the_fast_look_says_what_it_has_not_examined(self, project, large_bank):
        found = project.audit(large_bank, "--depth", "poles")
        assert "conditioning was not examined" in found.out
        assert "mostly" not in found.out

    def test_counts_worst_reason_and_provenance(self, project, monkeypatch):
        monkeypatch.setenv("COLUMNS", "120")
        bank = project.bank(
            "R7", [0.5, 0.1, -0.25, np.nan], ids=["calm", "slack", "wild", "broken"],
            coordinates={"speed": ([10.0, 11.0, 12.0, 13.0], "m/s"),
                         "mass": ([80.0, 85.0, 90.0, 95.0], "t")},
        )  # fmt: skip
        lines = project.audit(bank).out.splitlines()
        assert lines[0] == "Audit of revision R7: 4 points"
        assert lines[1].split() == ["1", "lost", "0", "doubt", "1", "short", "1", "void", "1", "ok"]
        head = lines[3]
        assert head.split() == [
            "worst",
            "points",
            "worst",
            "pole",
            "1/s",
            "ζ",
            "mass",
            "t",
            "speed",
            "m/s",
        ]
        # ω = 2, so the pole of ζ = -0.25 is 0.5 ± 2 sqrt(1 - 1/16) i.
        assert lines[4].split() == ["wild", "lost", "0.5000", "±", "1.936i", "-0.250", "90", "12"]
        assert lines[5].strip() == (
            "not stable: 2 poles right of the axis; mostly height 50%, rate 50%"
        )
        assert lines[6].split()[:2] == ["slack", "short"]
        assert lines[7].strip().startswith("ride: damping_ratio 0.1, 0.1 below 0.2; mostly ")
        assert lines[8].split()[:2] == ["broken", "void"]
        assert lines[9].strip() == "A[2,2] is NaN"
        text = "\n".join(lines)
        for said in ("R7.h5, content", "1 source file", "u = -K states", "criteria.toml",
                     "depth modes", "void at 1: A[2,2] is NaN"):  # fmt: skip
            assert said in text

    def test_points_are_grouped_by_requirement_with_where(self, project, monkeypatch):
        monkeypatch.setenv("COLUMNS", "120")
        bank = project.bank("A", [0.5, 0.1, 0.05, -0.1],
                            coordinates={"speed": ([10.0, 11.0, 12.0, 13.0], "m/s")})  # fmt: skip
        text = project.audit(bank).out
        assert re.search(
            r"\n +1 +of 4 +0\.200 +stability: all poles decay\n +worst at 4; within speed 13 m/s\n",
            text,
        )
        assert re.search(
            r"\n +3 +of 4 +-0\.100 +ride: damping_ratio ≥ 0\.2\n"
            r" +worst at 4; within speed 11 to 13 m/s\n",
            text,
        )

    def test_of_many_requirements_those_that_are_missed_most_are_shown(self, project):
        easy = EIGHT.replace("at_least = 0.", "at_least = 0.0")
        hard = '[[require]]\nname = "the hard one"\nquantity = "damping_ratio"\nat_least = 0.9\n'
        (project.folder / "criteria.toml").write_text(easy + hard)
        text = project.audit(project.bank("A", [0.5])).out
        assert "the hard one: damping_ratio ≥ 0.9" in text
        assert "stability: all poles decay" in text
        assert "and 2 more requirements" in text

    @pytest.mark.parametrize("worst", [0, 1, 50])
    def test_as_many_of_the_worst_as_asked_for(self, project, worst):
        bank = project.bank("A", np.linspace(-0.9, -0.1, 60), ids=[f"p{k}" for k in range(60)])
        found = project.audit(bank, "--worst", str(worst), "--json", project.folder / "x.json")
        shown = re.findall(r"^(p\d+) ", found.out, flags=re.MULTILINE)
        assert shown == [f"p{k}" for k in range(worst)]
        record = strict((project.folder / "x.json").read_text())
        assert [point["point"] for point in record["worst"]] == shown

    def test_hostile_names_are_shown_harmlessly(self, project):
        nasty = ["\x1b[2J\x1b[31mred", "[bold]x[/bold]", ":smile:", "a\rb", "‮rtl", "c\td", "[/]"]
        bank = project.bank(
            "[red]A\x07", [-0.5] * 7, ids=nasty, states=["he\x1b[0might", "[blink]rate"],
            coordinates={"sp\x1b[1meed": (np.arange(7.0), "m\x1b]0;x\x07/s")},
            tags={"con\x1bfig": ["\x1b[5m"] * 7},
        )  # fmt: skip
        for more in ((), ("--ledger", project.ledger)):
            text = project.audit(bank, "--worst", "7", *more).out
            assert not [c for c in text if not (c.isprintable() or c == "\n")]
            for said in ("[bold]x[/bold]", ":smile:", "[/]", "[blink]rate", "[red]A"):
                assert said in text
        name = "[red]A\x07"
        for found in (project.run("drift", project.ledger, "--from", name, "--to", name),
                      project.run("trend", project.ledger)):  # fmt: skip
            assert not [c for c in found.out if not (c.isprintable() or c == "\n")]

    def test_hostile_names_in_errors_are_harmless_too(self, project):
        bank = project.bank("A", [0.5], states=["he\x1b[2Jight", "rate"])
        (project.folder / "loop.toml").write_text(
            'sign = "negative"\n[gain]\nmatrix = [[1, 1]]\ninputs = ["flap"]\n'
            'signals = ["a\\u001b[2J", "rate"]\n'
        )
        found = project.audit(bank)
        assert found.code == 2
        assert "\x1b" not in found.err
        assert found.err.count("\n") == 1

    def test_names_of_states_that_hold_commas_are_not_taken_apart(self, project):
        bank = project.bank("A", [-0.5], states=["height, filtered", "rate, pitch, x"])
        record = strict(project.audit(bank, "--json", "-").out)
        top = record["worst"][0]["top_states"]
        assert sorted(top) == ["height,filtered", "rate,pitch,x"]
        assert sum(top.values()) == pytest.approx(1)

    @pytest.mark.parametrize("columns", ["1", "5", "0", "", "x", "100000"])
    def test_any_width_will_do(self, project, columns, monkeypatch):
        monkeypatch.setenv("COLUMNS", columns)
        found = project.audit(project.bank("A", [0.5, -0.5]))
        assert found.code == 1
        assert "lost" in found.out or columns in ("1", "5")

    def test_there_is_no_colour_in_a_file_and_none_on_request(self, project, monkeypatch):
        bank = project.bank("A", [0.5, -0.5])
        assert "\x1b" not in project.audit(bank).out
        monkeypatch.setattr(sys.stdout, "isatty", lambda: True)
        for name in ("NO_COLOR", "TERM", "COLORTERM"):
            monkeypatch.delenv(name, raising=False)
        monkeypatch.setenv("TERM", "xterm-256color")
        assert re.search(r"\x1b\[[\d;]*31m", project.audit(bank).out)
        monkeypatch.setenv("NO_COLOR", "1")
        assert not re.search(r"\x1b\[[\d;]*3\dm", project.audit(bank).out)

    def test_progress_is_quiet_where_nobody_watches(self, project):
        assert project.audit(project.bank("A", [0.5])).err == ""


class TestForPrograms:
    @pytest.fixture
    def bank(self, project):
        return project.bank(
            "B", [0.5, 0.1, -0.25, np.nan, -0.1], omega=[2.0, 2.0, 2.0, 2.0, 3.0],
            ids=["calm", "slack", "wild", "ζ", "-1+1"],
            coordinates={"speed": (np.arange(5.0), "m/s")}, tags={"config": list("xyxyx")},
        )  # fmt: skip

    def test_json_is_all_that_is_printed(self, project, bank):
        found = project.audit(bank, "--json", "-")
        record = strict(found.out)
        assert (found.code, found.err) == (1, "")
        assert found.out.isascii()
        assert record["schema"] == 1
        assert record["run"] is None
        assert record["revision"] == "B"
        assert record["points"] == {
            "total": 5, "ok": 1, "short": 1, "lost": 2, "doubt": 0, "void": 1
        }  # fmt: skip
        # Worst first: the furthest to the right, then the short one, then what nothing is known of.
        assert [p["point"] for p in record["worst"]] == ["wild", "-1+1", "slack", "ζ"]
        wild, void = record["worst"][0], record["worst"][-1]
        assert wild["at"] == {"speed": 2.0}
        assert wild["tags"] == {"config": "x"}
        assert (wild["verdict"], wild["missed"]) == ("lost", ["stability", "ride"])
        assert wild["real"] == pytest.approx(0.5, rel=1e-12)
        assert wild["imag"] == pytest.approx(2 * (1 - 1 / 16) ** 0.5, rel=1e-12)
        assert wild["damping_ratio"] == pytest.approx(-0.25, rel=1e-12)
        assert wild["natural_frequency"] == pytest.approx(2, rel=1e-12)
        assert wild["time_constant"] == pytest.approx(-2, rel=1e-12)
        assert sum(wild["top_states"].values()) == pytest.approx(1)
        assert (void["verdict"], void["reason"]) == ("void", "A[2,2] is NaN")
        assert void["real"] is void["damping_ratio"] is None
        ride = record["requirements"][1]
        assert (ride["name"], ride["missed"], ride["worst_point"]) == ("ride", 3, "wild")
        assert ride["between"] == {"speed": [1.0, 4.0]}
        assert record["units"] == {"speed": "m/s"}
        assert record["cautions"] == list(CAUTIONS)
        assert set(record["digests"]) == {"bank", "loop", "criteria"}
        assert record["max_real"] == pytest.approx(0.5)

    def test_json_goes_to_a_file_beside_the_report(self, project, bank):
        printed = project.audit(bank, "--json", "-").out
        found = project.audit(bank, "--json", project.folder / "x.json")
        assert found.out.startswith("Audit of revision B")
        assert (project.folder / "x.json").read_text() == printed

    def test_json_of_one_run_names_it(self, project, bank):
        for before in (False, True):
            record = strict(project.audit(bank, "--ledger", project.ledger, "--json", "-").out)
            assert [f"run={record['run']}"] == [p.name for p in project.ledger.iterdir()]
            assert record["already_logged"] is before

    def test_limits_that_are_missing_are_null(self, project):
        # One model without a mode that swings, one with a pole at 0: no damping there.
        loop, criteria = project.folder / "loop.toml", project.folder / "criteria.toml"
        loop.write_text('sign = "negative"\nfeed = "none"\n')
        criteria.write_text("")
        bank = project.save(
            ssaudit.build_bank([[[0.0]]], revision="A", ids=["still"]), project.folder / "A.h5"
        )
        point = strict(project.audit(bank, "--json", "-").out)["worst"][0]
        assert point["real"] == point["imag"] == 0
        assert point["damping_ratio"] is None
        assert point["time_constant"] is None  # no limit: infinite

    def test_drift_for_programs(self, project, bank):
        later = project.bank("C", [0.5, -0.1, 0.5], ids=["calm", "slack", "new"],
                             coordinates={"speed": (np.arange(3.0), "m/s")})  # fmt: skip
        project.log(bank, later)
        arguments = ("drift", project.ledger, "--from", "B", "--to", "C")
        found = project.run(*arguments, "--json", "-")
        record = strict(found.out)
        assert (found.code, found.err) == (1, "")
        assert record["matched_by"] == "ids"
        assert record["from"]["revision"] == "B"
        assert record["points"] == {
            "worse": 1, "better": 0, "same": 1, "appeared": 1, "vanished": 3
        }  # fmt: skip
        changed = {p["point"]: p for p in record["changed"]}
        assert set(changed) == {"slack", "new", "wild", "ζ", "-1+1"}
        slack = changed["slack"]
        assert (slack["change"], slack["verdict_from"], slack["verdict_to"]) == (
            "worse", "short", "lost"
        )  # fmt: skip
        assert slack["at"] == {"speed": 1.0}
        assert slack["max_real_change"] == pytest.approx(0.4)
        assert changed["new"]["max_real_from"] is None
        assert changed["new"]["verdict_from"] is None
        assert record["moved"]["max_real"]["points"] == 2
        assert record["moved"]["max_real"]["q100"] == pytest.approx(0.4)
        assert [p["point"] for p in record["movers"]] == ["slack"]
        assert record["cautions"] == list(CAUTIONS)
        project.run(*arguments, "--json", project.folder / "d.json")
        assert (project.folder / "d.json").read_text() == found.out

    def test_the_table_is_safe_in_a_spreadsheet(self, project):
        ids = ["=1+1", "+1", "-1", "@x", "plain"]
        bank = project.bank("A", [0.5, 0.1, -0.1, np.nan, 0.5], ids=ids, tags={"config": ids})
        found = project.audit(bank, "--csv", project.folder / "t.csv")
        assert found.out.startswith("Audit")
        with open(project.folder / "t.csv", newline="", encoding="utf-8") as file:
            rows = list(csv.DictReader(file))
        assert [row["point"] for row in rows] == ["'=1+1", "'+1", "'-1", "'@x", "plain"]
        assert [row["tag_config"] for row in rows] == ["'=1+1", "'+1", "'-1", "'@x", "plain"]
        assert [row["verdict"] for row in rows] == ["ok", "short", "lost", "void", "ok"]
        assert float(rows[2]["max_real"]) == pytest.approx(0.2)
        assert rows[3]["max_real"] == ""


class TestDriftAndTrend:
    def test_drift_shows_what_got_worse_first(self, project, monkeypatch):
        monkeypatch.setenv("COLUMNS", "120")
        at = {"coordinates": {"speed": (np.arange(5.0), "m/s")}}
        project.log(
            project.bank("A", [0.5, 0.5, 0.1, 0.5, 0.5], ids=list("abcde"), **at),
            project.bank("B", [0.5, -0.1, 0.3, 0.1, 0.5], ids=list("abcdf"), **at),
        )
        text = project.run("drift", project.ledger, "--from", "A", "--to", "B").out
        lines = text.splitlines()
        assert lines[0] == "Drift from revision A to B, points matched by ids"
        assert lines[1] == "2 worse   1 appeared   1 vanished   1 better   1 same verdict"
        worse, better = text.index("\nworse (2)"), text.index("\nbetter (1)")
        assert worse < better
        row = next(line for line in text[worse:].splitlines()[2:] if line.startswith("b"))
        assert row.split() == [
            "b",
            "ok",
            "→",
            "lost",
            "-1.00",
            "→",
            "0.200",
            "0.500",
            "→",
            "-0.100",
            "1",
        ]
        assert text.split()[-len(CAUTION_WORDS) :] == CAUTION_WORDS

    def test_matching_by_coordinates_states_its_tolerance(self, project):
        for revision in "AB":
            project.log(project.bank(revision, [0.5, 0.6], coordinates={"x": ([1.0, 2.0], "m")}))
        arguments = ("drift", project.ledger, "--from", "A", "--to", "B")
        assert "matched by coordinates (within 1e-09 of their range)" in project.run(*arguments).out
        text = project.run(*arguments, "--tolerance", "0.001").out
        assert "within 0.001 of their range" in text

    @pytest.mark.parametrize("width", [80, 100, 120])
    def test_no_line_is_too_long(self, project, width, monkeypatch):
        monkeypatch.setenv("COLUMNS", str(width))
        count = 60
        about = {"ids": [f"{'long' * 14}{k:04d}" for k in range(count)]}
        about["coordinates"] = envelope(count, 6)
        rng = np.random.default_rng(0)
        for revision in ("a-revision-of-a-very-long-name" * 3, "B"):
            project.log(project.bank(revision[:90], rng.uniform(-0.5, 0.9, count), **about))
        first = ("a-revision-of-a-very-long-name" * 3)[:90]
        found = project.run("drift", project.ledger, "--from", first, "--to", "B")
        trend = project.run("trend", project.ledger)
        for text in (found.out, trend.out):
            assert max(in_columns(text)) <= width

    def test_trend_has_a_line_a_revision_of_its_newest_run(self, project, monkeypatch):
        monkeypatch.setenv("COLUMNS", "120")
        a = project.bank("A", [0.5, 0.1, -0.25], ids=list("abc"))
        b = project.bank("B", [0.5, 0.1, np.nan], ids=list("abc"))
        project.log(a, b)
        (project.folder / "criteria.toml").write_text("")
        project.log(a)
        lines = project.run("trend", project.ledger).out.splitlines()
        assert lines[0].split() == [
            "revision",
            "points",
            "lost",
            "doubt",
            "short",
            "void",
            "ok",
            "max_real",
            "1/s",
            "min_damping",
            "logged",
            "(UTC)",
        ]
        assert lines[1].split()[:9] == ["A", "3", "1", ".", ".", ".", "2", "0.500", "-0.250"]
        assert lines[2].split()[:9] == ["B", "3", ".", ".", "1", "1", "1", "-0.200", "0.100"]
        assert re.fullmatch(r"\d{4}-\d\d-\d\d \d\d:\d\d", " ".join(lines[1].split()[9:]))
        assert " ".join(lines[4:]).split() == CAUTION_WORDS


class TestHelp:
    def test_version(self, capsys):
        code, out, _ = usage(capsys, "--version")
        assert (code, out) == (0, f"ssaudit {ssaudit.__version__}\n")
        declared = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]["version"]
        assert declared == ssaudit.__version__

    def commands(self):
        parser = cli._parser()
        (group,) = (a for a in parser._actions if isinstance(a, argparse._SubParsersAction))
        return group.choices, {choice.dest: choice.help for choice in group._choices_actions}

    def test_every_command_and_every_argument_is_documented(self, capsys):
        choices, told = self.commands()
        assert {"ingest", "audit", "drift", "trend", "run"} <= set(choices)
        for name, parser in choices.items():
            code, out, err = usage(capsys, name, "--help")
            assert (code, err) == (0, "")
            assert told[name]
            assert parser.description
            for action in parser._actions:
                assert action.help, f"{name} {action.dest}"
                for option in action.option_strings:
                    assert option in out

    def test_the_readme_names_every_command(self):
        text = (ROOT / "README.md").read_text(encoding="utf-8")
        for name in self.commands()[0]:
            assert f"ssaudit {name}" in text, name

    def test_help_lists_the_commands_and_the_exit_codes(self, capsys):
        code, out, _ = usage(capsys, "--help")
        assert code == 0
        for word in (*self.commands()[0], "0 all points ok", "2 could not run", "130"):
            assert word in " ".join(out.split())


PYTHON = [sys.executable, "-X", "importtime", "-m", "ssaudit"]


def run(*arguments, **more):
    environment = {**os.environ, "OPENBLAS_NUM_THREADS": "1", **more.pop("env", {})}
    return subprocess.run(
        [str(argument) for argument in arguments],
        capture_output=True, text=True, env=environment, timeout=120, **more,
    )  # fmt: skip


def imported(err):
    return {line.rpartition("|")[2].strip() for line in err.splitlines() if "import time:" in line}


class TestProcess:
    """What only a process of its own shows."""

    def test_help_needs_no_heavy_library(self):
        found = run(*PYTHON, "--help")
        assert found.returncode == 0
        modules = imported(found.stderr)
        assert "ssaudit.cli" in modules
        for heavy in ("numpy", "pandas", "scipy", "pyarrow", "h5py", "rich"):
            assert heavy not in modules

    def test_an_audit_needs_no_pandas(self, project):
        bank = project.bank("A", [0.5, -0.1], ids=["a", "b"])
        found = run(
            *PYTHON, "audit", bank, "--loop", project.folder / "loop.toml", "--criteria",
            project.folder / "criteria.toml", "--ledger", project.ledger, "--csv",
            project.folder / "t.csv", "--json", project.folder / "t.json",
        )  # fmt: skip
        assert found.returncode == 1
        assert found.stdout.startswith("Audit of revision A")
        modules = imported(found.stderr)
        assert {"numpy", "pyarrow", "h5py"} <= modules
        assert not {"pandas", "scipy"} & modules

    def test_a_reader_that_goes_away_is_no_fault(self, project):
        bank = project.bank("A", [-0.5], ids=["a"])
        files = ("--loop", project.folder / "loop.toml", "--criteria",
                 project.folder / "criteria.toml")  # fmt: skip
        for more in ((), ("--json", "-")):
            command = [sys.executable, "-m", "ssaudit", "audit", bank, *files, *more]
            process = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE)
            process.stdout.close()
            err = process.stderr.read()
            process.stderr.close()
            assert process.wait(timeout=60) == 2
            assert err == b""

    @pytest.mark.skipif(not Path("/dev/full").exists(), reason="there is no full device here")
    def test_a_full_disk_behind_the_output_is_told_in_one_line(self, project):
        bank = project.bank("A", [-0.5], ids=["a"])
        command = [sys.executable, "-m", "ssaudit", "audit", str(bank), "--loop",
                   str(project.folder / "loop.toml"), "--criteria",
                   str(project.folder / "criteria.toml")]  # fmt: skip
        with open("/dev/full", "w") as full:
            found = subprocess.run(command, stdout=full, stderr=subprocess.PIPE, check=False)
        assert found.returncode == 2
        assert found.stderr.count(b"\n") == 1
        assert b"standard output: cannot be written" in found.stderr

    def test_an_output_without_our_letters_gets_others(self, project):
        bank = project.bank("A", [-0.5], ids=["ζ"])
        files = ("--loop", project.folder / "loop.toml", "--criteria",
                 project.folder / "criteria.toml")  # fmt: skip
        plain = {"PYTHONIOENCODING": "ascii", "COLUMNS": "100"}
        text, record = (
            run(sys.executable, "-m", "ssaudit", "audit", bank, *files, *more, env=plain)
            for more in ((), ("--json", "-"))
        )
        assert (text.returncode, text.stderr) == (1, "")
        assert "1.000 ? 1.732i" in text.stdout
        assert strict(record.stdout)["worst"][0]["point"] == "ζ"
