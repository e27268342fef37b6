"""The ledger: what plain readers find in it, and that a run is there whole, once, or not at all."""

import json
import shutil
import threading

import h5py
import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest

import ssaudit
from ssaudit.auditing import audit_parts
from ssaudit.bank_arrays import build_bank
from ssaudit.bank_file import read_bank
from ssaudit.errors import BankError, LedgerError
from ssaudit.ledger import find_run, read_ledger
from ssaudit.loop.gains import ConstantGain, GainSchedule
from ssaudit.loop.model import Loop
from ssaudit.provenance import describe_run, run_digest
from ssaudit.run_writer import RunWriter
from ssaudit.stages import stream_audit
from ssaudit.summary import Tally

LOOP = Loop("negative", ConstantGain([[1.0, 1.0]]))
NONE = Loop("", None, "none")
CRITERIA = ssaudit.Criteria((ssaudit.Requirement("ride", "damping_ratio", at_least=0.2),))
NOTHING = ssaudit.Criteria()


def content(folder):
    """Bytes of every file below a folder, hidden ones too."""
    return {
        str(path.relative_to(folder)): path.read_bytes() if path.is_file() else None
        for path in sorted(folder.rglob("*"))
    }


def strict(path):
    """Read JSON as a strict reader does, which knows no NaN and no infinity."""

    def refuse(word):
        raise AssertionError(f"{word} is not JSON")

    return json.loads(path.read_text(encoding="utf-8"), parse_constant=refuse)


def log(ledger, bank, loop=LOOP, criteria=CRITERIA, **more):
    return stream_audit(bank, loop, criteria, ledger=ledger, **more)


@pytest.fixture
def bank(oscillators):
    return oscillators(
        [0.5, 0.1, -0.2, np.nan],
        [2.0, 3.0, 4.0, 5.0],
        ids=["a", "b", "c", "d"],
        coordinates={"speed": ([10.0, 11.0, 12.0, 13.0], "m/s")},
        tags={"config": ["foilborne", "foilborne", "hullborne", "hullborne"]},
    )


@pytest.fixture
def ledger(tmp_path):
    return tmp_path / "ledger"


class TestTables:
    def test_points_are_read_by_pandas_alone(self, bank, ledger):
        report = log(ledger, bank)
        points = pd.read_parquet(report.run.path / "points.parquet")
        assert list(points)[:5] == ["point", "revision", "at_speed", "tag_config", "verdict"]
        assert points["point"].tolist() == ["a", "b", "c", "d"]
        assert set(points["revision"]) == {"A"}
        assert points["at_speed"].tolist() == [10.0, 11.0, 12.0, 13.0]
        assert points["tag_config"].tolist() == ["foilborne"] * 2 + ["hullborne"] * 2
        assert points["verdict"].tolist() == ["ok", "short", "lost", "void"]
        np.testing.assert_allclose(points["max_real"], [-1.0, -0.3, 0.8, np.nan], rtol=1e-12)
        np.testing.assert_allclose(points["min_damping"], [0.5, 0.1, -0.2, np.nan], rtol=1e-12)
        assert points["reason"][0] == ""
        assert points["reason"][3] == "A[2,2] is NaN"
        assert points["missed"].tolist() == ["", "ride", "stability; ride", ""]

    def test_modes_hold_a_pair_once_and_real_poles_by_themselves(self, ledger):
        A = np.zeros((2, 3, 3))
        A[0] = [[-1.0, 2.0, 0.0], [-2.0, -1.0, 0.0], [0.0, 0.0, -7.0]]
        A[1] = np.diag([-1.0, -2.0, -4.0])
        bank = build_bank(A, revision="A", ids=["pair", "real"])
        modes = pd.read_parquet(log(ledger, bank, NONE, NOTHING).run.path / "modes.parquet")
        assert (modes["imag"] >= 0).all()
        pair, real = (modes[modes["point"] == name] for name in ("pair", "real"))
        assert sorted(pair["imag"]) == pytest.approx([0.0, 2.0], rel=1e-15)
        assert sorted(pair["real"]) == pytest.approx([-7.0, -1.0], rel=1e-15)
        assert sorted(zip(real["real"], real["imag"], strict=True)) == [
            (-4.0, 0.0), (-2.0, 0.0), (-1.0, 0.0)
        ]  # fmt: skip
        row = pair[pair["imag"] > 0].iloc[0]
        assert row["natural_frequency"] == pytest.approx(5**0.5, rel=1e-15)
        assert row["damping_ratio"] == pytest.approx(5**-0.5, rel=1e-15)
        assert row["time_constant"] == pytest.approx(1.0, rel=1e-15)
        assert row["revision"] == "A"

    def test_pyarrow_finds_types_and_units(self, bank, ledger):
        path = log(ledger, bank).run.path
        points, modes = (pq.read_schema(path / f"{n}.parquet") for n in ("points", "modes"))
        for schema in (points, modes):
            for name in ("point", "revision", "top_states"):
                assert str(schema.field(name).type) == "string"
        units = {f.name: (f.metadata or {}).get(b"unit") for f in (*points, *modes)}
        assert units["at_speed"] == b"m/s"
        for name in ("max_real", "real", "imag", "radius"):
            assert units[name] == b"1/s"
        assert units["natural_frequency"] == b"rad/s"
        assert units["time_constant"] == b"s"
        assert units["damping_ratio"] is None
        for name in ("max_real", "min_damping", "at_speed", "real", "imag"):
            assert str(points.field(name).type) == "double"
        for name in ("real", "imag", "natural_frequency", "damping_ratio", "time_constant"):
            assert str(modes.field(name).type) == "double"
        assert str(points.field("held").type) == "bool"

    def test_nan_is_null_and_infinity_stays(self, ledger):
        # Sampled at 0.1 s: one pole is gone within a sample (z = 0), one on the circle (z = 1).
        bank = build_bank([np.diag([0.0, 0.5]), np.diag([1.0, 0.5]), np.full((2, 2), np.nan)],
                          revision="A", dt=0.1, ids=["dead", "still", "void"])  # fmt: skip
        path = log(ledger, bank, NONE, NOTHING).run.path
        modes, points = (pq.read_table(path / f"{n}.parquet") for n in ("modes", "points"))
        assert sorted(modes["real"].to_pylist()) == pytest.approx(
            [-np.inf, np.log(0.5) / 0.1, np.log(0.5) / 0.1, 0.0]
        )
        assert sorted(modes["modulus"].to_pylist()) == [0.0, 0.5, 0.5, 1.0]
        assert np.inf in modes["time_constant"].to_pylist()
        # s = 0 has no damping ratio, and a void point has nothing: null, not NaN.
        assert modes["damping_ratio"].null_count == 1
        assert points["max_real"].to_pylist()[2] is None
        assert points["min_damping"].null_count == 1
        for table in (modes, points):
            for column in table.columns:
                if str(column.type) == "double":
                    assert not np.isnan([v for v in column.to_pylist() if v is not None]).any()

    def test_continuous_models_have_no_modulus(self, bank, ledger):
        modes = pq.read_table(log(ledger, bank).run.path / "modes.parquet")
        assert modes["modulus"].null_count == len(modes)

    def test_the_fast_look_has_neither_radius_nor_participation(self, bank, ledger):
        path = log(ledger, bank, depth="poles").run.path
        for name in ("points", "modes"):
            names = set(pq.read_schema(path / f"{name}.parquet").names)
            assert not names & {"radius", "top_states", "participation_1"}

    def test_banks_with_sections_of_several_shapes_make_one_table(self, ledger, project):
        plain = project.build([0.5, 0.4], ids=["a", "b"])
        wide = build_bank(-np.eye(3)[np.newaxis], np.zeros((1, 3, 1)), revision="A", ids=["c"],
                          states=["height", "rate", "fuel"], inputs=["flap"])  # fmt: skip
        both = ssaudit.ModelBank(
            "A",
            type(plain.points)(np.array(["a", "b", "c"]), {}, {}, {}, np.full(3, "", dtype=object)),
            (*plain.sections, *wide.sections),
        )
        loop = Loop(
            "negative", ConstantGain([[1.0, 1.0]], ["flap"], ["height", "rate"], unnamed="zero")
        )
        run = log(ledger, both, loop).run
        assert run.points["verdict"].tolist() == ["ok", "ok", "ok"]
        assert run.modes["point"].tolist() == ["a", "b", "c", "c", "c"]

    def test_many_points_are_written_in_several_row_groups_in_order(self, oscillators, ledger,
                                                                    monkeypatch):  # fmt: skip
        monkeypatch.setattr("ssaudit.run_writer.GROUP_POINTS", 7)
        monkeypatch.setattr("ssaudit.auditing.CHUNK_BYTES", 32 * 3)
        bank = oscillators(np.linspace(0.3, 0.9, 50), ids=[f"p{i:02d}" for i in range(50)])
        run = log(ledger, bank).run
        assert pq.ParquetFile(run.path / "points.parquet").num_row_groups > 3
        assert run.points["point"].tolist() == [f"p{i:02d}" for i in range(50)]
        np.testing.assert_allclose(run.points["min_damping"], np.linspace(0.3, 0.9, 50), rtol=1e-12)
        assert run.modes["point"].tolist() == [f"p{i:02d}" for i in range(50)]

    def test_text_beyond_ascii_is_kept(self, oscillators, ledger):
        ids = ["ζ=0,5", "[red]é\x1b", "💥", "a;b\n"]
        run = log(ledger, oscillators([0.5, 0.4, 0.3, 0.6], ids=ids)).run
        assert run.points["point"].tolist() == ids
        assert run.modes["point"].tolist() == ids

    def test_the_tables_equal_those_of_the_library(self, bank, ledger):
        run, found = log(ledger, bank).run, ssaudit.audit(bank, LOOP, CRITERIA)
        for name in ("points", "modes"):
            ours, theirs = getattr(run, name), getattr(found, name)
            assert list(ours) == list(theirs)
            for column in ours:
                if ours[column].dtype == float:
                    np.testing.assert_array_equal(ours[column], theirs[column])


class TestRunJson:
    def test_it_says_what_was_audited_by_what(self, project):
        bank = project.bank("B", [0.5, 0.1, np.nan], ids=["a", "b", "c"])
        project.log(bank)
        (folder,) = project.ledger.iterdir()
        about = strict(folder / "run.json")
        assert about["schema"] == 1
        assert f"run={about['run']}" == folder.name
        assert about["revision"] == "B"
        assert about["counts"] == {
            "total": 3, "ok": 1, "short": 1, "lost": 0, "doubt": 0, "void": 1
        }  # fmt: skip
        assert set(about["digests"]) == {"bank", "loop", "criteria"}
        assert all(len(digest) == 64 for digest in about["digests"].values())
        assert about["versions"]["ssaudit"] == ssaudit.__version__
        assert {"python", "numpy", "pyarrow"} <= set(about["versions"])
        assert about["settings"]["depth"] == "modes"
        assert about["sources"] == [{"name": "export.h5", "sha256": "0" * 64, "points": 3}]
        assert about["loop"]["sign"] == "negative"
        assert about["loop"]["gain"]["matrix"] == [[1.0, 1.0]]
        assert about["criteria"]["require"][0]["at_least"] == 0.2
        assert about["max_real"] == pytest.approx(-0.2)
        assert sorted(path.name for path in folder.iterdir()) == [
            "modes.parquet", "points.parquet", "run.json"
        ]  # fmt: skip

    def test_open_ended_ranges_are_strict_json_and_count_in_the_digest(self, bank, ledger):
        def run(low, high):
            place = {"speed": (low, high)}
            wanted = ssaudit.Requirement("x", "real", at_most=0.0, where=place)
            return log(ledger, bank, criteria=ssaudit.Criteria((wanted,))).run

        first = run(11.0, np.inf)
        assert strict(first.path / "run.json")["criteria"]["require"][0]["where"] == {
            "speed": [11.0, "inf"]
        }
        assert run(-np.inf, 11.0).run != first.run
        assert run(-np.inf, np.inf).run != run(np.inf, np.inf).run

    def test_a_bank_of_void_points_alone_has_null_extremes(self, oscillators, ledger):
        run = log(ledger, oscillators([np.nan, np.nan])).run
        about = strict(run.path / "run.json")
        assert about["max_real"] is None
        assert about["min_damping"] is None
        assert about["counts"]["void"] == 2


class TestOnce:
    def test_the_same_inputs_again_change_not_a_byte(self, project):
        bank = project.bank("A", [0.5, 0.6])
        (first,) = project.log(bank)
        assert "logged before" not in first.out
        before = content(project.ledger)
        (second,) = project.log(bank)
        assert "logged before; the ledger is unchanged" in second.out
        assert content(project.ledger) == before
        record = json.loads(project.audit(bank, "--ledger", project.ledger, "--json", "-").out)
        assert record["already_logged"] is True
        assert record["run"] in next(iter(before))

    def test_where_the_files_lie_and_what_they_are_called_does_not_matter(self, project):
        bank = project.bank("A", [0.5, 0.6])
        project.log(bank)
        moved = project.folder / "elsewhere"
        moved.mkdir()
        for name in ("A.h5", "loop.toml", "criteria.toml"):
            shutil.copy(project.folder / name, moved / f"other-{name}")
        loop, criteria = moved / "other-loop.toml", moved / "other-criteria.toml"
        again = project.run("audit", moved / "other-A.h5", "--loop", loop, "--criteria", criteria,
                            "--ledger", project.ledger, "--workers", "1")  # fmt: skip
        assert "logged before" in again.out
        assert len(list(project.ledger.iterdir())) == 1

    def test_workers_and_chunks_do_not_make_another_run(self, bank):
        digest = run_digest(bank, LOOP, CRITERIA, {"depth": "modes", "prove": ""})
        assert digest == run_digest(bank, LOOP, CRITERIA, {"prove": "", "depth": "modes"})

    def test_anything_that_the_numbers_follow_from_makes_another_run(self, bank, oscillators,
                                                                     ledger):  # fmt: skip
        def requirement(**more):
            asked = {"at_least": 0.2, **more}
            return ssaudit.Criteria((ssaudit.Requirement("ride", "damping_ratio", **asked),))

        named = {"inputs": ["flap"], "signals": ["height", "rate"]}
        table = ([[[1.0, 1.0]], [[1.0, 2.0]]], ("flap",), ("height", "rate"))
        loops = [
            LOOP,
            Loop("positive", ConstantGain([[1.0, 1.0]])),
            Loop("negative", ConstantGain([[1.0, np.nextafter(1.0, 2.0)]])),
            Loop("negative", ConstantGain([[1.0, 1.0]], **named)),
            Loop("negative", ConstantGain([[1.0, 1.0]], **named, unnamed="zero")),
            Loop("negative", GainSchedule(("speed",), ([0.0, 50.0],), *table, "hold")),
            Loop("negative", GainSchedule(("speed",), ([0.0, 50.0],), *table, "refuse")),
            Loop("negative", GainSchedule(("speed",), ([0.0, 50.0],), *table, "hold", "zero")),
            Loop("negative", GainSchedule(("speed",), ([0.0, 51.0],), *table, "hold")),
        ]
        demands = [
            requirement(at_least=0.3),
            requirement(at_most=0.9),
            requirement(frequency=(0.0, 5.0)),
            requirement(where={"speed": (10.0, 11.0)}),
            requirement(where={"config": ("foilborne",)}),
            ssaudit.Criteria(CRITERIA.requirements, neutral=("height",)),
            ssaudit.Criteria(CRITERIA.requirements, doubt="ok"),
            NOTHING,
        ]
        banks = [
            oscillators([0.5, 0.1, -0.2, np.nan], [2.0, 3.0, 4.0, 5.0], ids=["a", "b", "c", "e"]),
            oscillators([0.5, 0.1, -0.2, np.nan], [2.0, 3.0, 4.0, 5.0], revision="B"),
        ]
        runs = [
            *(log(ledger, bank, loop) for loop in loops),
            *(log(ledger, bank, criteria=criteria) for criteria in demands),
            *(log(ledger, other) for other in banks),
            log(ledger, bank, depth="poles"),
        ]
        assert not any(report.already_logged for report in runs)
        assert len({report.run.about["digest"] for report in runs}) == len(runs)
        assert len(read_ledger(ledger)) == len(runs)
        assert log(ledger, bank, loops[4]).already_logged

    def test_another_version_makes_another_run(self, bank, ledger, monkeypatch):
        log(ledger, bank)
        monkeypatch.setattr("ssaudit.provenance.__version__", "99.0")
        assert not log(ledger, bank).already_logged


class TestWhole:
    @pytest.mark.parametrize(
        "broken",
        [
            "ssaudit.run_writer.RunWriter._write",
            "ssaudit.stages.describe_run",
            "ssaudit.run_writer._sync",
            "ssaudit.run_writer.find_logged",
            "ssaudit.summary.Tally.result",
            "ssaudit.auditing._verify",
        ],
    )
    @pytest.mark.parametrize("error", [OSError(28, "No space left on device"), KeyboardInterrupt()])
    def test_a_failure_midway_leaves_nothing(self, bank, tmp_path, monkeypatch, broken, error):
        def fail(*_, **__):
            raise error

        log(tmp_path / "kept", bank)
        before = content(tmp_path)
        monkeypatch.setattr(broken, fail)
        for ledger in (tmp_path / "new" / "deep", tmp_path / "kept"):
            with pytest.raises((OSError, KeyboardInterrupt, LedgerError)):
                log(ledger, bank, depth="poles", csv=tmp_path / "points.csv")
        monkeypatch.undo()
        assert content(tmp_path) == before

    def test_a_full_disk_is_told_in_one_line(self, bank, ledger, monkeypatch):
        import pyarrow.parquet

        def full(*_, **__):
            raise OSError(28, "No space left on device")

        for method in ("write_table", "close"):
            with monkeypatch.context() as patched:
                patched.setattr(pyarrow.parquet.ParquetWriter, method, full)
                with pytest.raises(LedgerError, match=r"cannot be written to .*No space left") as e:
                    log(ledger, bank)
            assert str(e.value).startswith(str(ledger))
            assert not ledger.exists()

    def test_a_bank_that_was_edited_is_refused_and_not_logged(self, project):
        bank = project.bank("A", [0.5, 0.6], ids=["a", "b"])
        with h5py.File(bank, "r+") as file:
            name = next(n for n in file["sections/0"] if n == "A")
            file[f"sections/0/{name}"][1, 0, 1] += 1e-9
        found = project.audit(bank, "--ledger", project.ledger, "--csv", project.folder / "x.csv")
        assert found.code == 2
        assert found.err.count("\n") == 1
        assert "A.h5: was changed after it was ingested" in found.err
        assert not project.ledger.exists()
        assert not (project.folder / "x.csv").exists()

    @pytest.mark.parametrize("edited", ["points/id", "points/at/speed"])
    def test_edited_points_are_refused_too(self, project, edited):
        bank = project.bank("A", [0.5, 0.6], ids=["a", "b"],
                            coordinates={"speed": ([1.0, 2.0], "m/s")})  # fmt: skip
        with h5py.File(bank, "r+") as file:
            file[edited][0] = b"z" if edited == "points/id" else 7.0
        with read_bank(bank) as opened, pytest.raises(BankError, match="was changed after"):
            log(project.ledger, opened)

    def test_a_run_appears_only_when_it_is_committed(self, bank, ledger):
        with RunWriter(ledger, "d" * 12, bank.points.units) as writer:
            for part in audit_parts(bank, LOOP, CRITERIA):
                writer.append(part)
            assert read_ledger(ledger) == []
        assert not ledger.exists()

    def test_read_ledger_overlooks_what_is_no_run(self, bank, ledger):
        log(ledger, bank)
        (ledger / ".writing-abc").mkdir()
        (ledger / "notes.txt").write_text("mine")
        (ledger / "run=no-folder").write_text("mine")
        assert len(read_ledger(ledger)) == 1


def written(ledger, bank):
    """Open a writer and give it the whole audit, and what is needed to commit it."""
    tally = Tally(bank.revision, CRITERIA, 5)
    writer = RunWriter(ledger, "d" * 12, bank.points.units)
    for part in audit_parts(bank, LOOP, CRITERIA):
        tally.add(part.points, part.values, part.shortfall, part.missed)
        writer.append(part)
    return writer, describe_run(bank, LOOP, CRITERIA, {"depth": "modes"}, tally.result())


class TestTwoWriters:
    def test_the_later_of_two_finds_the_run_of_the_first(self, bank, ledger):
        (first, about), (second, _) = written(ledger, bank), written(ledger, bank)
        with first, second:
            run = second.commit(about)
            assert first.commit(about).run == run.run
        assert [path.name for path in ledger.iterdir()] == [f"run={run.run}"]

    def test_many_at_once_log_one_run(self, bank, ledger):
        writers = [written(ledger, bank) for _ in range(8)]
        start, runs, errors = threading.Barrier(8), [], []

        def commit(writer, about):
            with writer:
                start.wait()
                try:
                    runs.append(writer.commit(about).run)
                except Exception as error:
                    errors.append(error)

        threads = [threading.Thread(target=commit, args=pair) for pair in writers]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
        assert errors == []
        assert len(runs) == 8
        assert len(set(runs)) == 1
        assert [path.name for path in ledger.iterdir()] == [f"run={runs[0]}"]

    def test_a_writer_that_fails_leaves_the_ledger_that_another_uses(self, bank, ledger):
        (first, about), (second, _) = written(ledger, bank), written(ledger, bank)
        with second:
            first.__exit__()
            second.commit(about)
        assert len(read_ledger(ledger)) == 1


class TestDamage:
    @pytest.mark.parametrize(
        "text",
        [
            "", "{", "[]", "null", '"text"', "3", "{}", '{"schema": 1}', '{"schema": 2}',
            '{"schema": null}', "\xff", "[" * 100_000,
        ],
    )  # fmt: skip
    def test_a_damaged_run_json_is_told_in_one_line(self, project, text):
        project.log(project.bank("A", [0.5]))
        (folder,) = project.ledger.iterdir()
        (folder / "run.json").write_bytes(text.encode("latin-1"))
        commands = [
            ("trend", project.ledger),
            ("drift", project.ledger, "--from", "A", "--to", "A"),
        ]
        for found in [*(project.run(*c) for c in commands), *project.log(project.folder / "A.h5")]:
            assert found.code == 2
            assert found.out == ""
            assert found.err.count("\n") == 1
            assert f"{folder / 'run.json'}: " in found.err

    @pytest.mark.parametrize(
        "entry", ["run", "revision", "counts", "digest", "ids_given", "units", "max_real",
                  "min_damping", "schema"]
    )  # fmt: skip
    def test_a_run_json_that_lacks_an_entry_is_damaged(self, bank, ledger, entry):
        path = log(ledger, bank).run.path / "run.json"
        about = strict(path)
        del about[entry]
        path.write_text(json.dumps(about))
        with pytest.raises(LedgerError, match=r"run\.json: is damaged: entries are missing"):
            read_ledger(ledger)

    def test_counts_that_lack_a_verdict_are_damage(self, bank, ledger):
        path = log(ledger, bank).run.path / "run.json"
        about = strict(path)
        del about["counts"]["doubt"]
        path.write_text(json.dumps(about))
        with pytest.raises(LedgerError, match="entries are missing"):
            read_ledger(ledger)

    def test_a_run_of_another_schema_is_refused(self, bank, ledger):
        path = log(ledger, bank).run.path / "run.json"
        path.write_text(json.dumps({**strict(path), "schema": 2}))
        with pytest.raises(LedgerError, match="has schema 2, this version reads 1"):
            read_ledger(ledger)

    @pytest.mark.parametrize("harm", ["missing", "empty", "cut short", "text", "other table"])
    def test_a_damaged_table_is_told_in_one_line(self, project, harm):
        project.log(project.bank("A", [0.5]), project.bank("B", [0.4]))
        folder = next(f for f in sorted(project.ledger.iterdir()))
        path = folder / "points.parquet"
        if harm == "missing":
            path.unlink()
        elif harm == "other table":
            pd.DataFrame({"x": [1.0]}).to_parquet(path)
        else:
            data = path.read_bytes()
            path.write_bytes({"empty": b"", "cut short": data[:-10], "text": b"hello"}[harm])
        found = project.run("drift", project.ledger, "--from", "A", "--to", "B")
        assert found.code == 2
        assert found.err.count("\n") == 1
        assert f"{path}: " in found.err


class TestFinding:
    def test_runs_are_found_by_name_folder_or_revision_and_the_newest_first(self, bank, ledger):
        older = log(ledger, bank, depth="poles").run
        newer = log(ledger, bank).run
        assert [run.run for run in read_ledger(ledger)] == [older.run, newer.run]
        assert find_run(ledger, "A").run == newer.run
        assert find_run(ledger, older.run).run == older.run
        assert find_run(ledger, f"run={older.run}").run == older.run

    def test_the_newest_is_the_newest_within_a_second_too(self, bank, ledger):
        # In one second; digests fall as they like.
        gains = [Loop("negative", ConstantGain([[1.0, 1.0 + k / 8]])) for k in range(12)]
        runs = [log(ledger, bank, loop).run.run for loop in gains]
        assert [run.run for run in read_ledger(ledger)] == runs
        assert find_run(ledger, "A").run == runs[-1]

    def test_what_is_not_there_is_told_with_what_is(self, bank, ledger):
        log(ledger, bank)
        with pytest.raises(LedgerError, match="no run and no revision is named 'Z'; valid: A"):
            find_run(ledger, "Z")
        with pytest.raises(LedgerError, match="there is no such ledger"):
            find_run(ledger.parent / "none", "A")
