"""A look at an unknown export gives a draft that takes it in as it is."""

import io
import tomllib

import h5py
import intake_writers as writers
import numpy as np
import pytest
from rich.console import Console
from test_same_bank import EXACT

from ssaudit.bank_file import read_bank
from ssaudit.errors import SourceError
from ssaudit.intake.draft import write_draft
from ssaudit.intake.ingest import ingest
from ssaudit.intake.look import look
from ssaudit.report.look_text import look_text


@pytest.fixture(scope="module")
def models():
    return writers.Models(60)


def take_in(found, folder, tmp_path):
    (tmp_path / "draft.toml").write_text(found.draft, encoding="utf-8")
    ingest([folder], revision="R", bank=tmp_path / "bank.h5", layout=tmp_path / "draft.toml")
    return read_bank(tmp_path / "bank.h5")


@pytest.mark.parametrize("name", EXACT)
def test_the_draft_takes_a_clean_export_in(name, models, tmp_path):
    folder = tmp_path / "export"
    folder.mkdir()
    EXACT[name](folder, models)
    found = look(folder)
    with take_in(found, folder, tmp_path) as bank:
        assert bank.usable == len(bank) == 60
        (section,) = bank.sections
        order = np.argsort(bank.points.ids)
        if not np.all(np.char.startswith(bank.points.ids.astype(str), "p")):
            order = np.arange(60)
        for matrix, stack in models.matrices.items():
            np.testing.assert_array_equal(section.read(0, 60)[matrix][order], stack)
        held = [c[order] for c in bank.points.coordinates.values()]
        for values in (models.speed, models.mass):
            assert any(np.array_equal(values, column) for column in held)
        assert any(np.array_equal(models.gear, words[order]) for words in bank.points.tags.values())


@pytest.mark.parametrize("name", EXACT)
def test_the_screen_is_short_and_names_the_matrices(name, models, tmp_path):
    folder = tmp_path / "export"
    folder.mkdir()
    EXACT[name](folder, models)
    console = Console(width=100, record=True, file=open("/dev/null", "w"))  # noqa: SIM115
    with console.file:
        console.print(look_text(look(folder), draft=False))
        text = console.export_text()
    assert len(text.splitlines()) <= 40
    assert "60 of the first 60 points are usable" in text
    assert "orientation: as read" in text


def test_names_units_and_times_that_are_there_are_in_the_draft(tmp_path):
    rng = np.random.default_rng(0)
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["lin/Amat"] = rng.standard_normal((20, 3, 3))
        file["lin/Bmat"] = rng.standard_normal((20, 3, 1))
        file["trim/speed"] = np.linspace(5, 9, 20)
        file["trim/speed"].attrs["units"] = "m/s"
        file["trim/case"] = np.array([f"case {k}" for k in range(20)], dtype="S8")
        file["lin/state_names"] = np.array([b"x", b"y", b"z"])
        file.attrs["dt"] = 0.01
        file.attrs["digits"] = 7
        file.attrs["inputs"] = "flap"
    draft = tomllib.loads(look(tmp_path / "a.h5").draft)
    assert draft["matrices"] == {"A": "lin/Amat", "B": "lin/Bmat"}
    assert draft["coordinates"] == {"speed": {"from": "trim/speed", "unit": "m/s"}}
    assert draft["ids"] == "trim/case"
    assert draft["names"] == {"states": "lin/state_names", "inputs": "@inputs"}
    assert (draft["dt"], draft["digits"]) == ("@dt", "@digits")
    with take_in(look(tmp_path / "a.h5"), tmp_path / "a.h5", tmp_path) as bank:
        section = bank.sections[0]
        assert (section.states, section.inputs) == (("x", "y", "z"), ("flap",))
        assert (section.dt, section.digits) == (0.01, 7)
        assert bank.points.ids[3] == "case 3"


def test_what_contradicts_is_said_with_shapes(tmp_path):
    np.savez(tmp_path / "a.npz", A=np.ones((9, 12, 12)), B=np.ones((9, 12, 2)),
             C=np.ones((9, 4, 11)))  # fmt: skip
    found = look(tmp_path / "a.npz")
    assert found.usable == 0
    assert found.contradictions == (
        "C is 4x11 where 4x12 fits 12 states, 2 inputs and 4 outputs (9 points)",
    )


def test_constant_matrices_beside_stacks(tmp_path):
    rng = np.random.default_rng(0)
    C = rng.standard_normal((2, 4))
    np.savez(tmp_path / "a.npz", A=rng.standard_normal((9, 4, 4)), C=C, speed=np.arange(9.0))
    found = look(tmp_path / "a.npz")
    assert tomllib.loads(found.draft)["constant"] == ["C"]
    with take_in(found, tmp_path / "a.npz", tmp_path) as bank:
        np.testing.assert_array_equal(bank.sections[0].read(0, 9)["C"], np.tile(C, (9, 1, 1)))


def test_matrices_of_unknown_names_are_told_by_shape(tmp_path):
    rng = np.random.default_rng(0)
    np.savez(tmp_path / "a.npz", Fx=rng.standard_normal((9, 4, 4)),
             Gu=rng.standard_normal((9, 4, 2)), Hx=rng.standard_normal((9, 3, 4)))  # fmt: skip
    draft = tomllib.loads(look(tmp_path / "a.npz").draft)
    assert draft["matrices"] == {"A": "Fx", "B": "Gu", "C": "Hx"}


def test_a_transposed_export_is_noticed_by_its_kinematic_rows(tmp_path):
    A = np.random.default_rng(0).standard_normal((9, 2, 2))
    A[:, 0] = [0, 1]
    np.savez(tmp_path / "a.npz", A=A.transpose(0, 2, 1), states=np.array(["heave", "heave_rate"]))
    draft = tomllib.loads(look(tmp_path / "a.npz").draft)
    assert draft["order"] == "column-major"
    # Without any evidence it says that it cannot tell.
    np.savez(tmp_path / "a.npz", A=np.random.default_rng(0).standard_normal((9, 2, 2)))
    found = look(tmp_path / "a.npz")
    assert found.orientation.startswith("cannot tell")
    assert "orientation: cannot tell" in found.draft


def test_links_into_other_files_are_named_and_not_followed(tmp_path):
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["A"] = np.ones((4, 2, 2))
        file["B"] = h5py.ExternalLink("other.h5", "B")
    found = look(tmp_path / "a.h5")
    assert any("is a link into another file" in line for line in found.contradictions)


@pytest.mark.parametrize(
    ("name", "content", "words"),
    [
        ("a.bin", b"\x00\x01", "holds no file of a known format (.bin)"),
        ("a.csv", b"", "has no header line"),
        ("a.csv", b"speed,speed\n1,2\n", "names 'speed' twice"),
        ("a.h5", b"no", "is not HDF5"),
        ("a.npz", b"PK\x03\x04", "is not NPZ"),
        ("a.parquet", b"PAR1", "is not Parquet"),
    ],
)
def test_what_cannot_be_looked_at(tmp_path, name, content, words):
    (tmp_path / name).write_bytes(content)
    with pytest.raises(SourceError) as caught:
        look(tmp_path / name)
    assert words in str(caught.value)
    assert "\n" not in str(caught.value)


def test_nothing_there(tmp_path):
    (tmp_path / "empty").mkdir()
    with pytest.raises(SourceError, match="holds no files"):
        look(tmp_path / "empty")
    with pytest.raises(SourceError, match="there is no such file"):
        look(tmp_path / "nothing")


@pytest.mark.parametrize(
    ("name", "content"),
    [
        ("a.csv", b"speed,mass\n1,2\n"),
        ("a.jsonl", b'{"speed": 1}\n'),
        ("a.jsonl", b"[1, 2]\n"),
        ("a.mtx", b"%%MatrixMarket matrix array real general\n1 1\n1.0\n"),
    ],
)
def test_an_export_without_models_gives_a_draft_to_fill_in(tmp_path, name, content):
    (tmp_path / name).write_bytes(content)
    found = look(tmp_path / name)
    assert found.contradictions
    assert "No state matrix was recognised" in found.draft
    tomllib.loads(found.draft)


@pytest.mark.parametrize("width", [40, 80, 100])
def test_the_draft_on_the_screen_is_the_draft(tmp_path, width):
    names = np.array([f"a_rather_long_name_of_a_state_{k}" for k in range(6)])
    np.savez(tmp_path / "a.npz", A=np.random.default_rng(1).standard_normal((6, 6, 9)),
             states=names, at_v=np.arange(9.0), a_very_long_name_of_a_coordinate_or_not=np.arange(9.0))  # fmt: skip # noqa: E501
    found = look(tmp_path / "a.npz")
    screen = io.StringIO()
    Console(file=screen, width=width, highlight=False).print(look_text(found), crop=False)
    shown = screen.getvalue()
    assert shown.endswith(found.draft)
    assert tomllib.loads(shown[shown.index("# Draft layout") :]) == tomllib.loads(found.draft)
    assert all(len(line) < 80 for line in found.draft.splitlines())


def test_long_lists_and_remarks_of_a_draft_keep_to_the_width():
    content = {
        "format": "csv",
        "points": "row",
        "names": {"states": [f"state_{k}" for k in range(40)]},
        "coordinates": {"speed": {"from": "v" * 50, "unit": "m/s"}},
    }
    remark = "what is to be read, and read again, " * 5
    remarks = dict.fromkeys(["", "points", "names.states", "coordinates.speed"], remark)
    draft = write_draft(content, remarks)
    assert tomllib.loads(draft) == content
    assert max(map(len, draft.splitlines())) < 80
    told = " ".join(" ".join(draft.replace("#", " ").split()).split())
    assert told.count("read again") == 4 * 5


def test_a_suffix_that_holds_another_format_names_those_known(tmp_path):
    (tmp_path / "m.mat").write_bytes(b"\x00\x01" * 200)
    with pytest.raises(SourceError, match=r"known format \(\.mat\); known are hdf5, npz, parquet"):
        look(tmp_path / "m.mat")


def test_groups_at_the_top_are_told_in_plain_words(tmp_path):
    with h5py.File(tmp_path / "g.h5", "w") as file:
        for k in range(28):
            file[f"p{k}/A"] = np.random.default_rng(k).standard_normal((2, 2))
    assert "28 groups at the top: a point a group" in look(tmp_path / "g.h5").findings
