"""A pipeline: what the file may say, and that it does what the single commands do."""

import re
import shutil
from pathlib import Path

import pandas as pd
import pytest

import ssaudit
from ssaudit.errors import LedgerError, PipelineError, SsauditError
from ssaudit.pipeline import read_pipeline, run_pipeline
from ssaudit.stages import AuditReport, Comparison

ROOT = Path(__file__).parents[1]
HEAD = (
    'ledger = "out/ledger"\nbanks = "out/banks"\ncriteria = "criteria.toml"\nloop = "loop.toml"\n'
)


def revision(name, *more):
    lines = [f'name = "{name}"', f'sources = ["exports/{name}.h5"]', *more]
    return "\n[[revision]]\n" + "\n".join(lines) + "\n"


@pytest.fixture
def works(project, export):
    """Make the folder of a project with exports of three revisions."""
    (project.folder / "exports").mkdir()
    for name, damping in (("A", [0.5, 0.5, 0.1]), ("B", [0.5, -0.1, 0.1]), ("C", [0.5, 0.4, 0.3])):
        matrices = project.build(damping).sections[0].matrices
        export(
            f"project/exports/{name}.h5", matrices, ids=["a", "b", "c"],
            coordinates={"speed": ([10.0, 11.0, 12.0], "m/s")},
            states=["height", "rate"], inputs=["flap"],
        )  # fmt: skip
    return project


def pipe(works, text, name="pipe.toml"):
    path = works.folder / name
    path.write_text(text, encoding="utf-8")
    return path


def plain(text):
    """Text without the times at which runs were logged."""
    return re.sub(r"\d{8}T\d{6}(\.\d+)?Z|\d{4}-\d\d-\d\d \d\d:\d\d", "TIME", text)


THREE = HEAD + revision("A") + revision("B", 'compare = "A"') + revision("C", 'compare = "B"')


class TestReading:
    def test_paths_are_relative_to_the_file(self, works):
        text = HEAD.replace("out/", "../up/out/") + revision("A", 'layout = "l/x.toml"')
        read = read_pipeline(pipe(works, text))
        up = works.folder.parent / "up" / "out"
        assert read.ledger == up / "ledger"
        (a,) = read.revisions
        assert a.bank == up / "banks" / "A.h5"
        assert a.sources == (works.folder / "exports" / "A.h5",)
        assert (a.loop, a.criteria) == (
            works.folder / "loop.toml",
            works.folder / "criteria.toml",
        )
        assert a.layout == works.folder / "l" / "x.toml"
        assert (a.depth, a.compare) == ("modes", None)

    def test_absolute_paths_stay(self, works, tmp_path):
        text = HEAD.replace('"out/ledger"', f'"{tmp_path}/elsewhere"') + revision("A")
        assert read_pipeline(pipe(works, text)).ledger == tmp_path / "elsewhere"

    def test_a_revision_overrules_what_is_stated_once_for_all(self, works):
        text = 'depth = "poles"\n' + HEAD + revision("A") + revision(
            "B", 'depth = "modes"', 'loop = "other.toml"', 'criteria = "c.toml"'
        )  # fmt: skip
        a, b = read_pipeline(pipe(works, text)).revisions
        assert (a.depth, a.loop.name, a.criteria.name) == ("poles", "loop.toml", "criteria.toml")
        assert (b.depth, b.loop.name, b.criteria.name) == ("modes", "other.toml", "c.toml")

    @pytest.mark.parametrize(
        ("text", "message"),
        [
            ("", "no revision is given; add a"),
            (HEAD, "no revision is given; add a"),
            (HEAD + "revision = 3\n", "revision is 3, not a list"),
            (HEAD + "revision = [3]\n", "1: is not a table"),
            (HEAD + revision("A") + 'sauces = "x"\n', "1: unknown key 'sauces'.*mean sources"),
            ("leger = 1\n" + HEAD + revision("A"), "unknown key 'leger'; did you mean ledger"),
            (HEAD.replace("ledger =", "depth ="), "no revision is given"),
            (HEAD.replace('ledger = "out/ledger"', "") + revision("A"), "ledger is missing"),
            (HEAD.replace('banks = "out/banks"', "banks = 4") + revision("A"), "banks is 4, not t"),
            (HEAD.replace('loop = "loop.toml"', "") + revision("A"), "1: loop is missing"),
            (HEAD.replace('criteria = "criteria.toml"', "") + revision("A"), "criteria is missing"),
            (HEAD + revision("A", 'depth = "deep"'), "depth is 'deep'; valid: "),
            (HEAD + revision("A", "depth = 3"), "depth is 3, not text"),
            (HEAD + revision("A", "compare = 3"), "compare is 3, not text"),
            (HEAD + "[[revision]]\nname = 3\n", "1: name is 3, not text"),
            (HEAD + '[[revision]]\nname = "A"\n', "1: sources is missing"),
            (HEAD + '[[revision]]\nname = "A"\nsources = []\n', "1: sources is missing"),
            (HEAD + '[[revision]]\nname = "A"\nsources = "x"\n', "sources is 'x', not a list"),
            (HEAD + '[[revision]]\nname = "A"\nsources = [1]\n', "sources holds 1, not text"),
            (HEAD + revision("a/b"), "1: a revision cannot be named 'a/b'"),
            (HEAD + revision(".."), "1: a revision cannot be named '..'"),
            (HEAD + revision("A") + revision("A"), "2: a second revision is named 'A'"),
        ],
    )
    def test_slips_are_told_with_their_place(self, works, text, message):
        path = pipe(works, text)
        with pytest.raises(PipelineError, match=message) as caught:
            read_pipeline(path)
        assert str(caught.value).startswith(f"{path}")


class TestRunning:
    def test_output_equals_that_of_the_single_commands(self, works, monkeypatch):
        monkeypatch.chdir(works.folder)
        pipe(works, THREE)
        run = works.run("run", "pipe.toml")
        shutil.rmtree("out")
        files = ("--loop", "loop.toml", "--criteria", "criteria.toml", "--ledger", "out/ledger")
        single, before = [], None
        for name in "ABC":
            bank = f"out/banks/{name}.h5"
            single.append(
                works.run("ingest", f"exports/{name}.h5", "--revision", name, "--bank", bank)
            )
            single.append(works.run("audit", bank, *files))
            if before:
                single.append(works.run("drift", "out/ledger", "--from", before, "--to", name))
            before = name
        single.append(works.run("trend", "out/ledger"))
        assert plain(run.out) == plain("".join(step.out for step in single))
        assert run.out.count("Audit of revision") == 3
        assert run.out.count("Drift from revision") == 2
        assert run.code == max(step.code for step in single) == 1
        assert run.err == ""

    def test_the_same_again_logs_nothing(self, works):
        path = pipe(works, THREE)
        first, second = works.run("run", path), works.run("run", path)
        assert second.out.count("logged before; the ledger is unchanged") == 3
        assert first.code == second.code == 1
        assert len(list((works.folder / "out" / "ledger").iterdir())) == 3

    def test_it_runs_from_any_folder(self, works, tmp_path, monkeypatch):
        path = pipe(works, HEAD + revision("C"))
        (tmp_path / "far").mkdir()
        monkeypatch.chdir(tmp_path / "far")
        found = works.run("run", path)
        assert (found.code, found.err) == (0, "")
        assert (works.folder / "out" / "banks" / "C.h5").is_file()
        assert list((tmp_path / "far").iterdir()) == []

    @pytest.mark.parametrize(
        ("text", "code"),
        [
            (HEAD + revision("C"), 0),
            (HEAD + revision("A"), 1),
            (HEAD + revision("C", 'depth = "poles"'), 0),
        ],
    )
    def test_the_exit_code_is_that_of_the_gravest_stage(self, works, text, code):
        assert works.run("run", pipe(works, text)).code == code

    def test_a_comparison_without_anything_worse_leaves_the_exit_code(self, works):
        text = HEAD + revision("A") + revision("C", 'compare = "A"')
        (works.folder / "criteria.toml").write_text("")
        found = works.run("run", pipe(works, text))
        assert (found.code, "Drift from revision A to C" in found.out) == (0, True)

    def test_as_many_of_the_worst_as_asked_for(self, works):
        path = pipe(works, HEAD + revision("B"))
        for worst, shown in (("0", 0), ("1", 1), ("9", 2)):
            text = works.run("run", path, "--worst", worst).out
            assert len(re.findall(r"^[abc] +(lost|short)", text, flags=re.MULTILINE)) == shown

    def test_it_yields_what_each_stage_came_to(self, works):
        told = []
        results = list(
            run_pipeline(pipe(works, THREE), worst=2, progress=lambda *s: told.append(s))
        )
        kinds = [type(result).__name__ for result in results]
        assert kinds == ["Intake", "AuditReport", "Intake", "AuditReport", "Comparison",
                         "Intake", "AuditReport", "Comparison"]  # fmt: skip
        reports = [r for r in results if isinstance(r, AuditReport)]
        assert [r.summary.counts["lost"] for r in reports] == [0, 1, 0]
        drifts = [r.drift for r in results if isinstance(r, Comparison)]
        assert [(d.changes["worse"], d.changes["better"]) for d in drifts] == [(1, 0), (0, 2)]
        assert {stage for stage, _, _ in told} >= {"ingest", "audit"}
        logged = pd.read_parquet(reports[1].run.path / "points.parquet")
        assert logged["verdict"].tolist() == ["ok", "lost", "short"]

    def test_it_compares_the_run_that_it_audited_not_a_newer_one(self, works):
        path = pipe(works, THREE)
        list(run_pipeline(path))
        # Another audit of B, by no criteria, is the newest run of B in the ledger.
        (works.folder / "none.toml").write_text("")
        other = works.run("audit", works.folder / "out" / "banks" / "B.h5", "--loop",
                          works.folder / "loop.toml", "--criteria", works.folder / "none.toml",
                          "--ledger", works.folder / "out" / "ledger")  # fmt: skip
        assert "logged before" not in other.out
        *_, audited_b, first, _, _, second = run_pipeline(path)
        assert first.after.run == audited_b.run.run
        assert second.before.run == audited_b.run.run
        assert ssaudit.find_run(works.folder / "out" / "ledger", "B").run != audited_b.run.run

    def test_it_compares_with_what_the_ledger_holds(self, works):
        list(run_pipeline(pipe(works, HEAD + revision("A"))))
        results = list(run_pipeline(pipe(works, HEAD + revision("B", 'compare = "A"'))))
        assert results[-1].before.revision == "A"


class TestFailing:
    @pytest.mark.parametrize(
        ("broken", "message"),
        [
            (lambda f: (f / "loop.toml").unlink(), "loop.toml: cannot be read"),
            (lambda f: (f / "criteria.toml").write_text("x = 1"), "unknown key 'x'"),
            (lambda f: (f / "last.toml").write_text("sign = 1"), "last.toml: sign is 1"),
            (lambda f: (f / "exports" / "A.h5").write_text("text"), "A.h5"),
            (lambda f: (f / "exports" / "B.h5").unlink(), "B.h5: there is no such file"),
        ],
    )
    def test_a_slip_costs_no_work_and_leaves_nothing(self, works, broken, message):
        loop = works.folder / "last.toml"
        loop.write_text((works.folder / "loop.toml").read_text())
        broken(works.folder)
        text = HEAD + revision("A") + revision("B", 'loop = "last.toml"')
        path = pipe(works, text)
        found = works.run("run", path)
        assert found.code == 2
        assert found.err.count("\n") == 1
        assert message in found.err
        assert not (works.folder / "out").exists()

    def test_a_comparison_with_nothing_is_told_before_there_is_work(self, works):
        path = pipe(works, HEAD + revision("A") + revision("B", 'compare = "Z"'))
        with pytest.raises(PipelineError, match=r"2: compare = 'Z' is no revision before it"):
            next(iter(run_pipeline(path)))
        assert not (works.folder / "out").exists()
        list(run_pipeline(pipe(works, HEAD + revision("A"), "first.toml")))
        with pytest.raises(PipelineError, match=r"named 'Z'; valid: A"):
            next(iter(run_pipeline(path)))

    def test_a_revision_cannot_be_compared_with_a_later_one(self, works):
        path = pipe(works, HEAD + revision("A", 'compare = "B"') + revision("B"))
        with pytest.raises(PipelineError, match=r"1: compare = 'B' is no revision before it"):
            next(iter(run_pipeline(path)))

    def test_a_ledger_that_is_a_file_is_told(self, works):
        (works.folder / "out").write_text("mine")
        with pytest.raises(SsauditError):
            list(run_pipeline(pipe(works, HEAD + revision("A"))))
        assert (works.folder / "out").read_text() == "mine"

    def test_a_damaged_ledger_stops_it(self, works):
        path = pipe(works, HEAD + revision("A"))
        list(run_pipeline(path))
        (run,) = (works.folder / "out" / "ledger").iterdir()
        (run / "run.json").write_text("{")
        with pytest.raises(LedgerError, match=r"run\.json: cannot be read"):
            list(run_pipeline(path))


@pytest.mark.parametrize("path", sorted((ROOT / "pipelines").glob("*.toml")), ids=lambda p: p.name)
def test_the_pipelines_at_hand_name_files_that_are_there(path):
    read = read_pipeline(path)
    for one in read.revisions:
        assert one.loop.is_file()
        assert one.criteria.is_file()
        assert all(source.exists() for source in one.sources)
