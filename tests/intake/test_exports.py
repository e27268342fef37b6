"""The six exports: their commands work, their scripts write them again, their banks are right."""

import importlib.util
import re
import shutil
import tomllib
from pathlib import Path

import h5py
import numpy as np
import pytest

from ssaudit import cli
from ssaudit.bank_file import read_bank
from ssaudit.intake.ingest import ingest
from ssaudit.intake.look import look

TOP = Path(__file__).parents[2]
EXPORTS = TOP / "data" / "exports"
FILES = {
    "bearing": "bearing.h5",
    "converter": "converter.jsonl",
    "crane": "crane.csv",
    "suspension": "suspension.npz",
    "tanks": "files",
    "turbine": "turbine.parquet",
}
COMMANDS = re.findall(r"^    (ssaudit .*)$", (EXPORTS / "README.md").read_text(), re.MULTILINE)


def test_the_readme_has_three_commands_for_each_export():
    assert len(COMMANDS) == 3 * len(FILES)
    assert {command.split()[1] for command in COMMANDS} == {"look", "ingest", "audit"}


@pytest.mark.parametrize("name", FILES)
def test_the_commands_of_the_readme(name, tmp_path, monkeypatch, capsys):
    (tmp_path / "data").symlink_to(TOP / "data")
    (tmp_path / "out").mkdir()
    monkeypatch.chdir(tmp_path)
    mine = [command.split()[1:] for command in COMMANDS if f"/{name}/" in command]
    assert [command[0] for command in mine] == ["look", "ingest", "audit"]
    codes = [cli.main(command) for command in mine]
    assert codes[:2] == [0, 0]
    assert codes[2] in (0, 1)
    text = capsys.readouterr().out
    assert "Audit of revision A" in text
    assert sorted(p.name for p in (tmp_path / "out").iterdir()) == [f"{name}.h5", f"{name}.toml"]


def draft_bank(name, tmp_path):
    (tmp_path / "draft.toml").write_text(look(EXPORTS / name / FILES[name]).draft)
    intake = ingest([EXPORTS / name / FILES[name]], revision="A", bank=tmp_path / "bank.h5",
                    layout=tmp_path / "draft.toml")  # fmt: skip
    return intake, read_bank(tmp_path / "bank.h5")


@pytest.mark.parametrize(
    ("name", "points", "void", "states"),
    [
        ("bearing", 45, 0, [("position", "position_rate", "current")]),
        ("converter", 60, 0, [("current", "voltage")]),
        ("crane", 66, 1, [("x1", "x2", "x3", "x4")]),
        ("suspension", 65, 0, [("body", "body_rate", "wheel", "wheel_rate")]),
        ("tanks", 20, 0, [("x1", "x2", "x3")]),
        ("turbine", 45, 0, [("rotor", "twist", "generator", "pitch"),
                            ("rotor", "twist", "generator", "pitch", "drive")]),
    ],
)  # fmt: skip
def test_the_draft_takes_all_points_in(name, points, void, states, tmp_path):
    intake, bank = draft_bank(name, tmp_path)
    with bank:
        assert (intake.points, sum(intake.void.values())) == (points, void)
        assert [section.states for section in bank.sections] == states
        assert all(s.orientation.says == "as read" for s in intake.report.sections)


def test_the_bearing_stands_the_right_way_round(tmp_path):
    _, bank = draft_bank("bearing", tmp_path)
    with bank:
        A = bank.sections[0].read(0, 1)["A"][0]
        # 4 k i0^2 / g^3 / m and 4 k i0 / g^2 / m at 1 A and 0.3 mm.
        np.testing.assert_allclose(A[1, 0], 4 * 6e-6 / 0.3e-3**3 / 2.4, rtol=1e-12)
        np.testing.assert_allclose(A[1, 2], 4 * 6e-6 / 0.3e-3**2 / 2.4, rtol=1e-12)
        assert A[0].tolist() == [0, 1, 0]


def test_the_crane_says_which_entry_is_missing(tmp_path):
    intake, bank = draft_bank("crane", tmp_path)
    bank.close()
    assert intake.void == {"A[2,3] is missing": 1}
    assert intake.report.sections[0].digits == 6
    assert intake.report.sections[0].digits_by == "inspection"


@pytest.mark.parametrize("name", FILES)
def test_the_script_writes_the_export_again(name, tmp_path):
    folder = tmp_path / name
    folder.mkdir()
    shutil.copy(EXPORTS / name / "make.py", folder / "make.py")
    spec = importlib.util.spec_from_file_location(f"make_{name}", folder / "make.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    module.main()
    made, kept = folder / FILES[name], EXPORTS / name / FILES[name]
    if made.suffix in (".h5", ".parquet", ".npz"):
        _same_numbers(made, kept)
    elif made.is_dir():
        assert sorted(p.name for p in made.iterdir()) == sorted(p.name for p in kept.iterdir())
        for path in made.iterdir():
            assert path.read_text() == (kept / path.name).read_text()
    else:
        assert made.read_text() == kept.read_text()


def _same_numbers(made, kept):
    if made.suffix == ".h5":
        with h5py.File(made) as one, h5py.File(kept) as other:
            names = []
            one.visititems(lambda n, item: names.append(n) if hasattr(item, "shape") else None)
            assert len(names) == 180
            for name in names:
                np.testing.assert_array_equal(one[name], other[name])
    elif made.suffix == ".npz":
        with np.load(made) as one, np.load(kept) as other:
            assert one.files == other.files
            for name in one.files:
                np.testing.assert_array_equal(one[name], other[name])
    else:
        import pandas as pd

        pd.testing.assert_frame_equal(pd.read_parquet(made), pd.read_parquet(kept))


def test_a_draft_is_toml_that_names_its_format():
    for name, file in FILES.items():
        draft = tomllib.loads(look(EXPORTS / name / file).draft)
        assert draft["format"] in ("hdf5", "npz", "csv", "json-lines", "parquet", "matrix-market")
