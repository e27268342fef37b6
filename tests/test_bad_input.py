"""Bad input: one line that names the file and the place, exit 2, no traceback, nothing left."""

import pickle
import random
import re
import zipfile

import h5py
import numpy as np
import pytest

import ssaudit
from ssaudit.errors import SsauditError
from ssaudit.loop.files import read_gain_table
from ssaudit.pipeline import read_pipeline
from ssaudit.stages import stream_audit

TABLE = (
    "speed,mass,K:flap:height,K:flap:rate\n"
    "10,80,1,1\n10,90,1,2\n20,80,2,1\n20,90,2,2\n30,80,3,1\n30,90,3,2\n"
)
SCHEDULE = 'sign = "negative"\n[gain]\ntable = "gains.csv"\nvariables = ["speed", "mass"]\noutside = "hold"\n'  # noqa: E501
MATRIX = 'sign = "negative"\nfeed = "states"\n[gain]\nmatrix = [[1.0, 1.0]]\n'
NEED = '[[require]]\nname = "ride"\nquantity = "damping_ratio"\nat_least = 0.2\n'
FULL = (
    'neutral = ["height"]\n'
    + NEED
    + "at_most = 0.95\nfrequency = [0.5, 12.0]\n"
    + 'where = { speed = [10.0, 20.0], config = "foilborne" }\n'
)
PIPELINE = (
    'ledger = "out/ledger"\nbanks = "out/banks"\nloop = "loop.toml"\ncriteria = "criteria.toml"\n'
    '[[revision]]\nname = "A"\nsources = ["good.h5"]\ndepth = "modes"\n'
    '[[revision]]\nname = "B"\nsources = ["good.h5"]\ncompare = "A"\n'
)


def content(folder):
    """Bytes of every file below a folder, hidden ones too."""
    return {
        str(path.relative_to(folder)): path.read_bytes() if path.is_file() else None
        for path in sorted(folder.rglob("*"))
    }


@pytest.fixture
def site(project, export):
    """Make a folder in which all is well: an export, a bank, a table, and a ledger of one run."""
    folder = project.folder
    at = {"speed": ([10.0, 15.0, 30.0], "m/s"), "mass": ([80.0, 85.0, 90.0], "t")}
    model = project.build([0.5, 0.6, 0.7])
    export("project/good.h5", model.sections[0].matrices, ids=["a", "b", "c"], coordinates=at,
           states=["height", "rate"], inputs=["flap"])  # fmt: skip
    project.bank("A", [0.5, 0.6, 0.7], ids=["a", "b", "c"], coordinates=at,
                 tags={"config": ["foilborne"] * 3})  # fmt: skip
    (folder / "gains.csv").write_text(TABLE)
    assert project.log(folder / "A.h5")[0].code == 0
    return project


def refused(site, *arguments):
    """Run a command that must be refused; return the line that says why."""
    before = content(site.folder)
    found = site.run(*arguments)
    assert (found.code, found.out) == (2, "")
    assert found.err.startswith("ssaudit: ")
    assert found.err.count("\n") == 1
    assert found.err.endswith("\n")
    assert content(site.folder) == before
    return found.err


def audit(site, *more, bank="A.h5", loop="loop.toml", criteria="criteria.toml"):
    folder = site.folder
    return ("audit", folder / bank, "--loop", folder / loop, "--criteria", folder / criteria,
            "--ledger", folder / "new" / "ledger", "--csv", folder / "points.csv",
            "--json", folder / "found.json", *more)  # fmt: skip


def test_where_all_is_well_nothing_is_refused(site):
    (site.folder / "loop.toml").write_text(SCHEDULE)
    (site.folder / "criteria.toml").write_text(FULL.replace('neutral = ["height"]\n', ""))
    assert site.run(*audit(site)).code == 0
    (site.folder / "pipe.toml").write_text(PIPELINE)
    (site.folder / "criteria.toml").write_text(NEED)
    assert site.run("run", site.folder / "pipe.toml").code == 0
    assert site.run("drift", site.ledger, "--from", "A", "--to", "A").code == 0


class TestBank:
    def harm(self, folder, how):
        path = folder / "A.h5"
        data = path.read_bytes()
        if how == "missing":
            path.unlink()
        elif how == "a folder":
            path.unlink()
            path.mkdir()
        elif how == "an export":
            path.write_bytes((folder / "good.h5").read_bytes())
        elif how == "npz":
            np.savez(folder / "x.npz", A=np.zeros((1, 1, 1)))
            (folder / "x.npz").rename(path)
        elif how == "other schema":
            with h5py.File(path, "r+") as file:
                file.attrs["schema"] = 99
        elif str(how).startswith("without "):
            with h5py.File(path, "r+") as file:
                name = how.removeprefix("without ")
                if name in file.attrs:
                    del file.attrs[name]
                else:
                    del file[name]
        elif how == "other length":
            with h5py.File(path, "r+") as file:
                file["sections/0/A"].resize(2, axis=0)
        else:
            cut = {"empty": 0, "text": None}.get(how, how)
            path.write_bytes(b"hello" if cut is None else data[: int(len(data) * cut)])

    @pytest.mark.parametrize(
        ("how", "message"),
        [
            ("missing", "there is no such bank; make it with ssaudit ingest"),
            ("a folder", "is a folder, not a bank"),
            ("text", "is not an HDF5 file, or is cut short"),
            ("empty", "is not an HDF5 file, or is cut short"),
            ("npz", "is not an HDF5 file, or is cut short"),
            (0.001, "cut short"), (0.5, "cut short"), (0.9, "cut short"), (0.999, "cut short"),
            ("an export", "is HDF5 but not a bank; take it in: ssaudit ingest"),
            ("other schema", "has bank schema 99, this version reads 1"),
            ("other length", "A.h5: "),
            ("without sections", "is a damaged bank"),
            ("without points", "is a damaged bank"),
            ("without points/id", "is a damaged bank"),
            ("without revision", "is a damaged bank"),
            ("without digest", "is a damaged bank"),
            ("without sources", "is a damaged bank"),
        ],
    )  # fmt: skip
    def test_a_bank_that_cannot_be_used(self, site, how, message):
        self.harm(site.folder, how)
        err = refused(site, *audit(site))
        assert f"{site.folder / 'A.h5'}: " in err
        assert message in err

    def test_an_edited_bank(self, site):
        with h5py.File(site.folder / "A.h5", "r+") as file:
            file["sections/0/B"][0, 0, 0] = 0.5
        assert "A.h5: was changed after it was ingested" in refused(site, *audit(site))

    def test_bytes_of_the_matrices_index_that_were_spoilt(self, site):
        # Where the chunks of A are listed: a part that is read only when the matrices are.
        data = bytearray((site.folder / "A.h5").read_bytes())
        places = [m.start() for m in re.finditer(rb"EAHD|EAIB|FAHD|FADB|BTHD|BTLF|OHDR", data)]
        told = set()
        for place in places:
            spoilt = bytearray(data)
            spoilt[place + 6] ^= 0xFF
            (site.folder / "A.h5").write_bytes(spoilt)
            found = site.run(*audit(site, "--worst", "0")[:-4])
            if found.code == 2:
                assert found.err.count("\n") == 1
                told.add(found.err.partition("A.h5: ")[2][:12])
            assert found.code in (0, 2)
        assert any(text.startswith("is damaged") for text in told)
        assert any(text.startswith("is a damaged") for text in told)


class TestLoop:
    @pytest.mark.parametrize(
        ("text", "message"),
        [
            (None, "cannot be read (No such file or directory)"),
            ("\x00", "is not TOML"), ("sign = ", "is not TOML"), (b"\xff\xfe", "is not UTF-8"),
            ("", "sign is missing"),
            (MATRIX.replace('sign = "negative"', ""), "sign is missing"),
            (MATRIX.replace('"negative"', "3"), "sign is 3, not text"),
            (MATRIX.replace('"negative"', "-1"), "sign is -1, not text"),
            (MATRIX.replace('"negative"', '"minus"'), "sign is 'minus'; say \"negative\" for u"),
            (MATRIX.replace('"negative"', '""'), "sign is ''; say \"negative\""),
            (MATRIX.replace("sign", "sing"), "unknown key 'sing'; did you mean sign?"),
            (MATRIX.replace("feed", "fed"), "unknown key 'fed'; did you mean feed?"),
            (MATRIX.replace('"states"', '"state"'), "feed is 'state'; did you mean states?"),
            (MATRIX.replace('"states"', "true"), "feed is True, not text"),
            (MATRIX.replace("[gain]", "[gains]"), "unknown key 'gains'; did you mean gain?"),
            (MATRIX.replace("matrix", "matrx"), "unknown key 'matrx'; did you mean matrix?"),
            (MATRIX + "inputz = 1", "unknown key 'inputz'; did you mean inputs?"),
            ('sign = "negative"\n', "gain is missing"),
            ('sign = "negative"\ngain = 3\n', "gain is 3, not a table"),
            ('sign = "negative"\n[gain]\n', "neither matrix nor table is given"),
            (MATRIX.replace('"states"', '"none"'), 'feed = "none" takes no gain'),
            *(
                (MATRIX.replace("[[1.0, 1.0]]", value), message)
                for value, message in [
                    ('"x"', "matrix is not a list of rows"), ("[]", "matrix is not a list of rows"),
                    ("[1.0, 1.0]", "matrix is not a list of rows"), ("3", "not a list of rows"),
                    ("[[1.0], [1.0, 2.0]]", "the rows of matrix differ in length"),
                    ('[[1.0, "x"]]', "matrix holds 'x', not a finite number"),
                    ("[[1.0, true]]", "matrix holds True, not a finite number"),
                    ("[[1.0, nan]]", "matrix holds nan, not a finite number"),
                    ("[[1.0, -inf]]", "matrix holds -inf, not a finite number"),
                    ("[[1.0, [2.0]]]", "matrix holds [2.0], not a finite number"),
                    ("[[1e999, 1.0]]", "matrix holds inf, not a finite number"),
                    (f"[[1{'0' * 400}, 1.0]]", "not a finite number"),
                    ("[[]]", "the gain matrix is for 0 states, the models have 2: height, rate"),
                    ("[[1.0]]", "the gain matrix is for 1 states, the models have 2: height, rate"),
                    ("[[1.0, 1.0], [0.0, 0.0]]", "for 2 inputs, the models have 1: flap"),
                ]
            ),
            (MATRIX + 'inputs = "flap"', "inputs is 'flap', not a list"),
            (MATRIX + "signals = [1, 2]", "signals holds 1, not text"),
            (MATRIX + 'inputs = ["flap", "fin"]', "the gain matrix has 1 inputs, 2 are named"),
            (MATRIX + 'signals = ["rate", "rate"]', "names one of its signals twice"),
            (MATRIX + 'inputs = ["flop"]', "the gain names 'flop', no input here: did you mean fl"),
            (MATRIX + 'signals = ["height", "heel"]', "the gain names 'heel', no state here: "),
            (MATRIX + 'unnamed = "skip"', "unnamed is 'skip', not \"refuse\" or \"zero\""),
            (MATRIX.replace('"states"', '"outputs"'), "C is missing, and feed = 'outputs' needs"),
        ],
    )  # fmt: skip
    def test_a_loop_that_cannot_be_used(self, site, text, message):
        path = site.folder / "loop.toml"
        if text is None:
            path.unlink()
        else:
            path.write_bytes(text if isinstance(text, bytes) else text.encode())
        err = refused(site, *audit(site))
        assert str(path) in err
        assert message in err

    def test_models_of_three_inputs_and_a_matrix_of_two(self, site, project):
        bank = ssaudit.build_bank(-np.eye(2)[np.newaxis], np.zeros((1, 2, 3)), revision="A")
        project.save(bank, site.folder / "A.h5")
        (site.folder / "loop.toml").write_text(MATRIX.replace("[[1.0", "[[0.0, 0.0], [1.0"))
        err = refused(site, *audit(site))
        assert "the gain matrix is for 2 inputs, the models have 3: u1, u2, u3" in err

    @pytest.mark.parametrize(
        ("text", "message"),
        [
            (SCHEDULE.replace('outside = "hold"', ""), "outside is missing; say \"refuse\""),
            (SCHEDULE.replace('"hold"', '"keep"'), "outside is 'keep'; say \"refuse\""),
            (SCHEDULE.replace('"hold"', "true"), "outside is True, not text"),
            (SCHEDULE.replace("outside", "outsdie"), "unknown key 'outsdie'; did you mean outside"),
            (SCHEDULE.replace('["speed", "mass"]', "[]"), "variables is missing"),
            (SCHEDULE.replace('["speed", "mass"]', '"speed"'), "variables is 'speed', not a list"),
            (SCHEDULE.replace('variables = ["speed", "mass"]', ""), "variables is missing"),
            (SCHEDULE.replace('"gains.csv"', "3"), "table is 3, not text"),
            (SCHEDULE.replace("gains.csv", "gain.csv"), "cannot be read (No such file"),
            (SCHEDULE.replace("gains.csv", "."), "cannot be read (Is a directory)"),
            (SCHEDULE.replace("gains.csv", "a\\u0000b"), "embedded null byte"),
            (SCHEDULE.replace('"mass"', '"wind"'), "column 'mass' is neither a variable nor K:"),
            (SCHEDULE + "matrix = [[1.0, 1.0]]", "unknown key "),
        ],
    )  # fmt: skip
    def test_a_schedule_that_cannot_be_used(self, site, text, message):
        (site.folder / "loop.toml").write_text(text)
        err = refused(site, *audit(site))
        assert str(site.folder) in err
        assert message in err

    @pytest.mark.parametrize(
        ("text", "message"),
        [
            ("", "holds no breakpoints"),
            ("speed,mass,K:flap:height,K:flap:rate\n", "holds no breakpoints"),
            ("\n\n\n", "holds no breakpoints"),
            (TABLE.replace("20,80,2,1", "20,80,x,1"),
             "breakpoint 3, column 'K:flap:height': 'x' is not a finite number"),
            (TABLE.replace("20,80,2,1", "20,80,,1"), "breakpoint 3, column 'K:flap:height': ''"),
            (TABLE.replace("20,80,2,1", "20,80,nan,1"), "'nan' is not a finite number"),
            (TABLE.replace("20,80,2,1", "inf,80,2,1"), "column 'speed': 'inf' is not a finite"),
            (TABLE.replace("20,80,2,1", "20,80,1e999,1"), "'1e999' is not a finite number"),
            (TABLE.replace("20,80,2,1", "20,80,2"), "breakpoint 3 has 3 cells, the header 4"),
            (TABLE.replace("20,80,2,1", "20,80,2,1,5"), "breakpoint 3 has 5 cells, the header 4"),
            (TABLE.replace("20,80,2,1\n", ""), "the breakpoint at speed=20, mass=80 is missing"),
            (TABLE + "20,80,2,1\n", "the breakpoint at speed=20, mass=80 stands twice"),
            (TABLE.replace("K:flap:rate", "K:flap:rat"),
             "the gain names 'rat', no state here: did you mean rate? Valid: height, rate"),
            (TABLE.replace("flap", "flop"),
             "the gain names 'flop', no input here: did you mean flap? Valid: flap"),
            (TABLE.replace("K:flap:height", "K:fin:height"), "column K:fin:rate is missing; give"),
            (TABLE.replace("K:flap:rate", "K:flap:height"), "column 'K:flap:height' stands twice"),
            (TABLE.replace("K:flap:rate", "speed"), "column 'speed' stands twice"),
            (TABLE.replace("K:flap:rate", "K:flap"), "column 'K:flap' is not K:<input>:<signal>"),
            (TABLE.replace("K:flap:rate", "notes"), "column 'notes' is neither a variable nor K:"),
            (TABLE.replace("mass", "mas"), "column 'mas' is neither a variable"),
            (re.sub(r",[^,\n]*$", "", TABLE, flags=re.MULTILINE),
             "the gain does not name the state 'rate'"),
            (re.sub(r",[^,\n]*,[^,\n]*$", "", TABLE, flags=re.MULTILINE), "no column K:<input>"),
            (TABLE.replace(",", ";"), "is separated by semicolons"),
            (b"\xff\xfe\x00", "is not a CSV table"),
            ("a" * 200_000 + "\n1\n", "is not a CSV table"),
        ],
    )  # fmt: skip
    def test_a_table_that_cannot_be_used(self, site, text, message):
        (site.folder / "loop.toml").write_text(SCHEDULE)
        path = site.folder / "gains.csv"
        path.write_bytes(text if isinstance(text, bytes) else text.encode())
        err = refused(site, *audit(site))
        assert message in err
        fits_the_models = "no state here" in err or "no input here" in err or "not name" in err
        assert str(site.folder / "loop.toml" if fits_the_models else path) in err

    def test_scattered_breakpoints_are_told_without_filling_their_grid(self, site):
        rows = [f"{k},{k * 7 % 5003},1,1" for k in range(5000)]
        (site.folder / "gains.csv").write_text("\n".join([TABLE.splitlines()[0], *rows]))
        (site.folder / "loop.toml").write_text(SCHEDULE)
        err = refused(site, *audit(site))
        assert "its 5000 breakpoints cannot fill the grid that they span, of 25000000" in err

    def test_a_schedule_over_what_the_bank_does_not_have(self, site):
        (site.folder / "loop.toml").write_text(SCHEDULE.replace('"speed"', '"sped"'))
        (site.folder / "gains.csv").write_text(TABLE.replace("speed", "sped"))
        err = refused(site, *audit(site))
        assert "varies with 'sped', which A.h5 does not have; did you mean speed?" in err


class TestCriteria:
    @pytest.mark.parametrize(
        ("text", "message"),
        [
            (None, "cannot be read (No such file or directory)"),
            ("[[require]", "is not TOML"), (b"\xff", "is not UTF-8 text"),
            ("requires = 1", "unknown key 'requires'; did you mean require?"),
            ("neutral = 3", "neutral is 3, not a list"),
            ("neutral = [3]", "neutral holds 3, not text"),
            ('neutral = ["heigth"]', "neutral names no state of A.h5: 'heigth'; did you mean heig"),
            ("require = 3", "require is 3, not a list"),
            ("require = [3]", "[[require]] 1: is not a table"),
            ("[require]\n", "require is {}, not a list"),
            ("doubt = 3", "doubt is 3, not text"),
            ('doubt = "maybe"', "doubt is 'maybe'; say whether"),
            ("[[require]]\n", "[[require]] 1: name is missing"),
            (NEED.replace('"ride"', "3"), "[[require]] 1: name is 3, not text"),
            (NEED.replace('"ride"', '""'), "a requirement cannot be named ''"),
            (NEED.replace('"ride"', '"stability"'), "a requirement cannot be named 'stability'"),
            (NEED.replace('"ride"', '"a; b"'), "a requirement cannot be named 'a; b'"),
            (NEED + NEED, "two requirements are named 'ride'"),
            (NEED.replace("quantity", "quantitiy"), "unknown key 'quantitiy'; did you mean quanti"),
            (NEED.replace("at_least", "at_lest"), "unknown key 'at_lest'; did you mean at_least?"),
            (NEED.replace('"damping_ratio"', '"damping"'), "unknown quantity 'damping'; did you m"),
            (NEED.replace('"damping_ratio"', "1"), "quantity is 1, not text"),
            (NEED.replace("at_least = 0.2", ""), "neither at_least nor at_most is given"),
            (NEED.replace("0.2", "true"), "at_least is True, not a finite number"),
            (NEED.replace("0.2", "nan"), "at_least is nan, not a finite number"),
            (NEED.replace("0.2", "inf"), "at_least is inf, not a finite number"),
            (NEED.replace("0.2", '"0.2"'), "at_least is '0.2', not a finite number"),
            (NEED.replace("0.2", "[0.2]"), "at_least is [0.2], not a finite number"),
            (NEED.replace("0.2", "1" + "0" * 400), "not a finite number"),
            (NEED.replace("0.2", "0x" + "f" * 5000), "at_least is a very long number, not a fin"),
            (NEED + "at_most = 0.1", "at_least 0.2 is above at_most 0.1"),
            (NEED + "frequency = [1]", "frequency is [1], not a range [low, high]"),
            (NEED + "frequency = 1", "frequency is 1, not a range [low, high]"),
            (NEED + "frequency = [1, 2, 3]", "frequency is [1, 2, 3], not a range"),
            (NEED + 'frequency = ["a", "b"]', "frequency is ['a', 'b'], not a range"),
            (NEED + "frequency = [true, 2]", "frequency is [True, 2], not a range"),
            (NEED + "frequency = [nan, 2]", "frequency is [nan, 2], not a range"),
            (NEED + "frequency = [2, 1]", "frequency runs from 2.0 down to 1.0"),
            (NEED + "frequency = []", "frequency is [], not a range"),
            (NEED + "where = 5", "where is 5, not a table"),
            (NEED + "where = { speed = 5 }", "speed is 5, not a range [low, high]"),
            (NEED + "where = { speed = [5] }", "speed is [5], not a range [low, high]"),
            (NEED + "where = { speed = [nan, 5] }", "speed is [nan, 5], not a range"),
            (NEED + "where = { speed = [9, 5] }", "speed runs from 9.0 down to 5.0"),
            (NEED + "where = { speed = [] }", "speed is [], not a range"),
            (NEED + 'where = { speed = "fast" }', "speed takes a range [low, high]"),
            (NEED + "where = { config = [1, 2] }", "config is a tag and takes a word, or a list"),
            (NEED + 'where = { config = ["a", 1] }', "config is ['a', 1], not a range"),
            (NEED + "where = { sped = [1, 2] }",
             "where names no coordinate or tag of A.h5: 'sped'; did you mean speed? Valid: config"),
        ],
    )  # fmt: skip
    def test_criteria_that_cannot_be_used(self, site, text, message):
        path = site.folder / "criteria.toml"
        if text is None:
            path.unlink()
        else:
            path.write_bytes(text if isinstance(text, bytes) else text.encode())
        err = refused(site, *audit(site))
        assert str(path) in err
        assert message in err


class TestOutputs:
    @pytest.mark.parametrize("name", ["A.h5", "loop.toml", "criteria.toml", "gains.csv"])
    @pytest.mark.parametrize("option", ["--json", "--csv"])
    def test_an_output_that_is_an_input(self, site, option, name):
        (site.folder / "loop.toml").write_text(SCHEDULE)
        (site.folder / "sub").mkdir()
        for path in (site.folder / name, site.folder / "sub" / ".." / name):
            err = refused(site, *audit(site)[:6], option, path)
            assert f"{path}: is an input and an output; choose another output" in err

    @pytest.mark.parametrize("name", ["A.h5", "loop.toml", "criteria.toml", "gains.csv"])
    def test_an_explanation_in_the_place_of_an_input(self, site, name):
        (site.folder / "loop.toml").write_text(SCHEDULE)
        path = site.folder / name
        err = refused(site, "point", *audit(site)[1:6], "--id", "a", "--json", path)
        assert f"{path}: is an input and an output" in err

    def test_an_output_that_is_a_link_to_an_input(self, site):
        (site.folder / "link.json").symlink_to(site.folder / "A.h5")
        err = refused(site, *audit(site)[:6], "--json", site.folder / "link.json")
        assert "is an input and an output" in err

    def test_two_outputs_that_are_one(self, site):
        path = site.folder / "both"
        err = refused(site, *audit(site)[:6], "--csv", path, "--json", path)
        assert f"{path}: is to hold two outputs" in err

    @pytest.mark.parametrize("option", ["--json", "--csv"])
    @pytest.mark.parametrize(
        ("place", "what"),
        [("ledger", "is a folder"), ("none/x", "lies in no"), ("A.h5/x", "lies in no")],
    )
    def test_an_output_that_cannot_be_there(self, site, option, place, what):
        path = site.folder / place
        err = refused(site, *audit(site)[:8], option, path)
        assert f"{path}: {what}" in err

    @pytest.mark.parametrize(
        "place", ["good.h5", "good.h5/ledger", "good.h5/deep/ledger", "n" * 300]
    )
    def test_a_ledger_that_cannot_be_written(self, site, place):
        path = site.folder / place
        err = refused(site, *audit(site)[:6], "--ledger", path)
        assert f"{path}: cannot be written to (" in err
        assert "choose another folder" in err

    @pytest.mark.parametrize("place", ["good.h5/a.h5", "good.h5/deep/a.h5", "n" * 300])
    def test_a_bank_that_cannot_be_written(self, site, place):
        path = site.folder / place
        err = refused(site, "ingest", site.folder / "good.h5", "--revision", "A", "--bank", path)
        assert str(path) in err
        assert "cannot be written" in err

    def test_a_bank_in_the_place_of_a_source_or_a_folder(self, site):
        good = site.folder / "good.h5"
        err = refused(site, "ingest", good, "--revision", "A", "--bank", good)
        assert f"{good}: is a source and the bank to write" in err
        layout = site.folder / "layout.toml"
        layout.write_text('format = "hdf5"\npoints = "first axis"\n')
        err = refused(site, "ingest", good, "--revision", "A", "--layout", layout, "--bank", layout)
        assert f"{layout}: is a layout and the bank to write" in err
        err = refused(site, "ingest", good, "--revision", "A", "--bank", site.folder)
        assert str(site.folder) in err


class TestLedger:
    def drift(self, site, before, after, *more):
        return refused(site, "drift", site.ledger, "--from", before, "--to", after, *more)

    def test_a_revision_that_is_not_there(self, site):
        for pair in (("A", "Z"), ("Z", "A")):
            err = self.drift(site, *pair)
            assert f"{site.ledger}: no run and no revision is named 'Z'; valid: A" in err

    @pytest.mark.parametrize("name", ["nothing", "good.h5", "A.h5/x", "x" * 300])
    def test_a_ledger_that_is_none(self, site, name):
        path = site.folder / name
        for command in (("trend", path), ("drift", path, "--from", "A", "--to", "A")):
            assert f"{path}: there is no such ledger" in refused(site, *command)

    def test_an_empty_ledger(self, site):
        path = site.folder / "empty"
        path.mkdir()
        assert f"{path}: holds no run" in refused(site, "trend", path)
        err = refused(site, "drift", path, "--from", "A", "--to", "A")
        assert "no run and no revision is named 'A'; there are none" in err

    def test_runs_that_share_no_points(self, site):
        bank = site.bank("B", [0.5], ids=["other"])
        site.log(bank)
        assert "share neither point ids nor coordinates" in self.drift(site, "A", "B")

    def test_output_of_a_drift_that_cannot_be_there(self, site):
        (run,) = site.ledger.iterdir()
        for place in (site.folder, site.folder / "none" / "x.json", run / "run.json"):
            assert str(place) in self.drift(site, "A", "A", "--json", place)


class TestPipeline:
    @pytest.mark.parametrize(
        ("old", "new", "message"),
        [
            ("ledger", "leger", "unknown key 'leger'; did you mean ledger?"),
            ("sources", "sauces", "[[revision]] 1: unknown key 'sauces'; did you mean sources?"),
            ('"loop.toml"', "3", "loop is 3, not text"),
            ('"loop.toml"', '"none.toml"', "none.toml: cannot be read"),
            ('"criteria.toml"', '"none.toml"', "none.toml: cannot be read"),
            ('"criteria.toml"', '"loop.toml"', "loop.toml: unknown key 'sign'"),
            ('"modes"', '"deep"', "depth is 'deep'; valid: "),
            ('"good.h5"', '"gone.h5"', "gone.h5: there is no such file"),
            ('"good.h5"', '"A.h5"', "A.h5: is a bank, not an export"),
            ('"good.h5"', '"gains.csv"', "gains.csv"),
            ('"out/banks"', '"good.h5/x"', "good.h5/x/A.h5: cannot be written"),
            ('"out/ledger"', '"good.h5/x"', "cannot be written to"),
            ('compare = "A"', 'compare = "Z"', "compare = 'Z' is no revision before it"),
            ('name = "B"', 'name = "A"', "[[revision]] 2: a second revision is named 'A'"),
            ("[[revision]]", "[[revisions]]", "unknown key 'revisions'; did you mean revision?"),
        ],
    )
    def test_a_pipeline_that_cannot_be_run(self, site, old, new, message):
        path = site.folder / "pipe.toml"
        path.write_text(PIPELINE.replace(old, new))
        before = content(site.folder)
        found = site.run("run", path)
        assert found.code == 2
        assert found.err.count("\n") == 1
        assert message in found.err
        after = content(site.folder)
        # A bank that was taken in whole may stay when the audit of it cannot be logged.
        left = {name for name in after if name not in before}
        assert left <= ({"out", "out/banks", "out/banks/A.h5"} if "ledger" in old else set())

    def test_no_pipeline_at_all(self, site):
        path = site.folder / "none.toml"
        assert f"{path}: cannot be read (No such file" in refused(site, "run", path)
        assert "is not UTF-8 text" in refused(site, "run", site.folder / "good.h5")


class TestExports:
    def ingest(self, site, *sources):
        bank = site.folder / "new" / "bank.h5"
        return refused(site, "ingest", *sources, "--revision", "N", "--bank", bank)

    @pytest.mark.parametrize("name", ["gone.h5", "*.none", "x" * 300, "gone/*.h5"])
    def test_no_file(self, site, name):
        path = site.folder / name
        assert str(path)[:200] in self.ingest(site, path)

    def test_a_folder_without_exports(self, site):
        assert str(site.ledger) in self.ingest(site, site.ledger)

    @pytest.mark.parametrize(
        "data", [b"", b"hello\n", b"\x89HDF\r\n\x1a\n", b"PK\x03\x04", b"\0" * 99]
    )
    def test_neither_hdf5_nor_npz(self, site, data):
        path = site.folder / "bad.h5"
        path.write_bytes(data)
        assert str(path) in self.ingest(site, path)

    @pytest.mark.parametrize("part", [0.1, 0.5, 0.9])
    def test_cut_short(self, site, part):
        data = (site.folder / "good.h5").read_bytes()
        path = site.folder / "bad.h5"
        path.write_bytes(data[: int(part * len(data))])
        assert str(path) in self.ingest(site, path)

    def test_a_bank_is_no_export(self, site):
        err = self.ingest(site, site.folder / "A.h5")
        assert "A.h5: is a bank, not an export" in err

    def test_pickles_are_not_opened(self, site):
        class Trap:
            def __reduce__(self):
                return (site.folder.joinpath("trapped").touch, ())

        array = np.empty(1, dtype=object)
        array[0] = Trap()
        path = site.folder / "bad.npz"
        np.savez(path, A=array)
        assert str(path) in self.ingest(site, path)
        with zipfile.ZipFile(path, "w") as archive:
            archive.writestr("A.npy", pickle.dumps(Trap()))
        assert str(path) in self.ingest(site, path)
        assert not (site.folder / "trapped").exists()

    def test_no_point_and_no_usable_point(self, site, export):
        empty = export("project/empty.h5", {"A": np.zeros((0, 2, 2))})
        assert str(empty) in self.ingest(site, empty)
        nothing = export("project/nothing.h5", {"A": np.full((3, 2, 2), np.nan)})
        err = self.ingest(site, nothing)
        assert "nothing.h5" in err
        assert "A[1,1] is NaN" in err

    def test_shapes_that_disagree(self, site, export):
        for name, matrices in {
            "points": {"A": np.zeros((3, 2, 2)), "B": np.zeros((2, 2, 1))},
            "rows": {"A": np.zeros((3, 2, 2)), "B": np.zeros((3, 5, 1))},
            "wide": {"A": np.zeros((3, 2, 4))},
        }.items():
            path = export(f"project/{name}.h5", matrices)
            assert f"{name}.h5" in self.ingest(site, path)

    def test_no_name_for_the_revision(self, site):
        err = refused(site, "ingest", site.folder / "good.h5", "--revision", "", "--bank",
                      site.folder / "x.h5")  # fmt: skip
        assert "the revision has no name" in err


WORDS = [
    "nan", "inf", "-inf", "-1", "0", "1e999", "true", '""', '"x"', "[]", "[[]]", "{}", "[1]",
    "[nan, 1]", '"\\u0000"', '"a\\nb"', "0x" + "f" * 600, "9" * 5000, "1979-05-27", "'''\n'''",
    '["a", 1]', "{ a = 1 }", "[[1.0], [1.0, 2.0]]", "=", ",", "\n", "[", "]", "#", '"', "speed",
    "K:flap:height", "K:::", "é", "\x00", "\ufeff", "1_0", "+5", "1e-400", '"\\ud800"', "../..",
]  # fmt: skip


def mutants(text, count, seed):
    """Yield texts with one to three slips each: parts changed, lost, repeated, exchanged."""
    rng = random.Random(seed)
    for _ in range(count):
        parts = re.findall(r"\w[\w.]*|\s+|.", text)
        for _ in range(rng.choice([1, 1, 2, 3])):
            place = rng.randrange(len(parts))
            kind = rng.randrange(5)
            if kind == 0:
                parts[place] = rng.choice(WORDS)
            elif kind == 1:
                del parts[place]
            elif kind == 2:
                parts.insert(place, rng.choice(parts))
            elif kind == 3:
                parts[place] = "".join(rng.sample(parts[place], len(parts[place])))
            else:
                other = rng.randrange(len(parts))
                parts[place], parts[other] = parts[other], parts[place]
        yield "".join(parts)


class TestMutants:
    """Whatever a text turns into, it works or is refused in our words."""

    @pytest.fixture
    def bank(self, oscillators):
        at = {"speed": ([10.0, 15.0, 30.0], "m/s"), "mass": ([80.0, 85.0, 90.0], "t")}
        return oscillators(
            [0.5, 0.6, 0.7], coordinates=at, tags={"config": ["foilborne", "hullborne", "x"]}
        )

    def outcome(self, use):
        """Use a mutant, and say whether it was taken; any error but ours is a fault."""
        told = ""
        try:
            use()
        except SsauditError as error:
            told = str(error)
        assert told.isprintable()
        return not told

    def write(self, path, text):
        path.write_bytes(text.encode("utf-8", "surrogatepass"))
        return path

    @pytest.mark.parametrize("text", [MATRIX + 'inputs = ["flap"]\n', SCHEDULE])
    def test_loops(self, tmp_path, bank, text):
        (tmp_path / "gains.csv").write_text(TABLE)
        criteria = ssaudit.read_criteria(self.write(tmp_path / "c.toml", NEED))

        def use(path):
            stream_audit(bank, ssaudit.read_loop(path), criteria, workers=1)

        taken = [
            self.outcome(lambda m=m: use(self.write(tmp_path / "loop.toml", m)))
            for m in mutants(text, 300, 1)
        ]
        assert 0 < sum(taken) < 300

    def test_criteria(self, tmp_path, bank):
        loop = ssaudit.read_loop(self.write(tmp_path / "loop.toml", MATRIX))

        def use(path, number):
            criteria = ssaudit.read_criteria(path)
            ledger = tmp_path / "ledger" if number % 10 == 0 else None
            stream_audit(bank, loop, criteria, workers=1, ledger=ledger)

        taken = [
            self.outcome(lambda m=m, k=k: use(self.write(tmp_path / "c.toml", m), k))
            for k, m in enumerate(mutants(FULL, 300, 2))
        ]
        assert 0 < sum(taken) < 300

    def test_pipelines(self, tmp_path):
        taken = [
            self.outcome(lambda m=m: read_pipeline(self.write(tmp_path / "p.toml", m)))
            for m in mutants(PIPELINE, 400, 3)
        ]
        assert 0 < sum(taken) < 400

    def test_pipelines_are_run(self, site):
        path = site.folder / "pipe.toml"
        for text in mutants(PIPELINE, 60, 4):
            self.write(path, text)
            found = site.run("run", path)
            assert found.code in (0, 1, 2)
            assert found.err.count("\n") == (found.code == 2)

    def test_gain_tables(self, tmp_path, bank):
        criteria = ssaudit.Criteria()

        def use(path):
            schedule = read_gain_table(path, ("speed", "mass"), "hold")
            stream_audit(bank, ssaudit.Loop("negative", schedule), criteria, workers=1)

        taken = [
            self.outcome(lambda m=m: use(self.write(tmp_path / "gains.csv", m)))
            for m in mutants(TABLE, 400, 5)
        ]
        assert 0 < sum(taken) < 400

    def test_the_check_can_fail(self):
        def fault():
            raise KeyError("sign")

        with pytest.raises(KeyError):
            self.outcome(fault)
