"""Misspelt keys of the default layout are refused, extras are told, and neither is silent."""

import io

import h5py
import numpy as np
import pyarrow
import pyarrow.parquet
import pytest
from rich.console import Console
from test_default_layout import export, write_hdf5, write_npz

from ssaudit.bank_file import read_bank
from ssaudit.errors import SourceError
from ssaudit.intake.ingest import ingest
from ssaudit.report.intake_text import intake_text


def refusal(path, tmp_path):
    with pytest.raises(SourceError) as caught:
        ingest([path], revision="R", bank=tmp_path / "bank.h5")
    assert not (tmp_path / "bank.h5").exists()
    return str(caught.value)


def notes_of(path, tmp_path):
    intake = ingest([path], revision="R", bank=tmp_path / "bank.h5")
    screen = io.StringIO()
    Console(file=screen, width=100).print(intake_text(intake))
    with read_bank(tmp_path / "bank.h5") as bank:
        assert tuple(bank.intake["notes"]) == intake.report.notes
    told = [note for note in intake.report.notes if note.startswith("not used")]
    shown = " ".join(screen.getvalue().split())
    assert all(f"note {note}" in shown for note in told)
    return told


MISSPELT = [
    ("Digits", "digits", "digits"),
    ("digit", "digits", "digits"),
    ("ouputs", "outputs", "outputs"),
    ("state", "states", "states"),
    ("Inputs", "inputs", "inputs"),
    ("DT", "dt", "dt"),
    ("id", "ids", "ids"),
    ("b", "B", "B"),
]


@pytest.mark.parametrize(("key", "replaced", "meant"), MISSPELT)
def test_a_misspelt_key_is_refused_in_npz(tmp_path, key, replaced, meant):
    content = export()
    content[key] = content.pop(replaced)
    text = refusal(write_npz(tmp_path / "a.npz", content), tmp_path)
    expected = f"a.npz: holds '{key}', which is not read; did you mean {meant}? "
    assert expected in text


@pytest.mark.parametrize(("key", "replaced", "meant"), MISSPELT)
def test_a_misspelt_key_is_refused_in_hdf5(tmp_path, key, replaced, meant):
    path = write_hdf5(tmp_path / "a.h5", export())
    with h5py.File(path, "a") as file:
        if replaced in file:
            file.move(replaced, key)
        else:
            file.attrs[key] = file.attrs[replaced]
            del file.attrs[replaced]
    expected = f"a.h5: holds '{key}', which is not read; did you mean {meant}? "
    assert expected in refusal(path, tmp_path)


@pytest.mark.parametrize(
    ("key", "meant"),
    [("At_mass", "at_mass"), ("at-mass", "at_mass"), ("unit_speed", "units_speed"),
     ("units_sped", "units_speed")],
)  # fmt: skip
def test_a_misspelt_coordinate_or_unit_is_refused(tmp_path, key, meant):
    content = export(units_speed=None)
    content[key] = np.arange(12.0) if "mass" in key else "m/s"
    text = refusal(write_npz(tmp_path / "a.npz", content), tmp_path)
    assert f"holds '{key}', which is not read; did you mean {meant}?" in text


def test_what_lies_elsewhere_in_hdf5_is_refused(tmp_path):
    for change, words in (
        (lambda f: f.create_dataset("dt", data=0.1), "'dt' as a dataset, which is not read; did "
                                                     "you mean the attribute dt?"),
        (lambda f: f.attrs.__setitem__("ids", "x"), "did you mean the dataset ids?"),
        (lambda f: f.move("points", "Points"), "did you mean points?"),
        (lambda f: f.create_dataset("at_mass", data=np.arange(12.0)), "you mean points/mass?"),
        (lambda f: f.attrs.__setitem__("units_speed", "m/s"), "attribute units of points/speed?"),
        (lambda f: f["points/speed"].attrs.__setitem__("Units", "m/s"), "did you mean units?"),
    ):  # fmt: skip
        path = write_hdf5(tmp_path / "a.h5", export())
        with h5py.File(path, "a") as file:
            change(file)
        assert words in refusal(path, tmp_path)


def test_extras_are_told_and_not_refused(tmp_path):
    extras = {"F": np.ones(3), "comment": "x", "trim": np.zeros(12)}
    assert notes_of(write_npz(tmp_path / "a.npz", export(**extras)), tmp_path) == [
        "not used: F, comment, trim"
    ]
    path = write_hdf5(tmp_path / "a.h5", export(**extras))
    with h5py.File(path, "a") as file:
        file.attrs["author"] = "x"
        file.attrs["a"] = 340.0
    assert notes_of(path, tmp_path) == ["not used: F, comment, trim, @a, @author"]
    # The trim of the states is no misspelling of their names, where these are there as well.
    assert notes_of(write_npz(tmp_path / "a.npz", export(state=np.ones(3))), tmp_path) == [
        "not used: state"
    ]
    assert notes_of(write_npz(tmp_path / "a.npz", export()), tmp_path) == []
    many = {f"extra_{k}": 0 for k in range(25)}
    (note,) = notes_of(write_npz(tmp_path / "a.npz", export(**many)), tmp_path)
    assert note.endswith("extra_19 and 5 more")


@pytest.mark.parametrize("writer", [write_npz, write_hdf5])
@pytest.mark.parametrize(
    ("types", "digits", "by", "words"),
    [
        ({"A": "f4"}, 7, "float32", "7 digits (float32)"),
        ({"A": "f8", "B": ">f4"}, 7, "float32", "7 digits (float32)"),
        ({"A": "f4", "B": "f2"}, 3, "float16", "3 digits (float16)"),
        ({"A": "f8", "B": "i2"}, None, "", "full precision"),
        ({"A": "i4", "B": "i4", "C": "i4", "D": "i4"}, None, "", "full precision"),
    ],
)
def test_digits_by_type(tmp_path, writer, types, digits, by, words):
    content = export(digits=None)
    for name, kind in types.items():
        content[name] = (content[name] * 9).astype(kind)
    path = writer(tmp_path / ("a.npz" if writer is write_npz else "a.h5"), content)
    intake = ingest([path], revision="R", bank=tmp_path / "bank.h5")
    (section,) = intake.report.sections
    assert (section.digits, section.digits_by) == (digits, by)
    with read_bank(tmp_path / "bank.h5") as bank:
        assert bank.sections[0].digits == digits
    screen = io.StringIO()
    Console(file=screen, width=100).print(intake_text(intake))
    assert f"continuous; {words}\n" in screen.getvalue()


def test_stated_digits_outrank_those_of_the_type(tmp_path):
    content = export(digits=5, A=np.ones((12, 3, 3), "f4"))
    path = write_npz(tmp_path / "a.npz", content)
    (section,) = ingest([path], revision="R", bank=tmp_path / "bank.h5").report.sections
    assert (section.digits, section.digits_by) == (5, "stated")


def test_digits_by_type_of_groups_and_of_parquet(tmp_path):
    A = np.random.default_rng(1).standard_normal((4, 2, 2)).astype("f4")
    with h5py.File(tmp_path / "g.h5", "w") as file:
        for k in range(4):
            file[f"p{k}/A"] = A[k]
    (tmp_path / "g.toml").write_text('format = "hdf5"\npoints = "group"\ngroups = "p{id}"\n')
    lists = pyarrow.array(A.reshape(4, 4).tolist(), pyarrow.list_(pyarrow.float32()))
    pyarrow.parquet.write_table(pyarrow.table({"A": lists}), tmp_path / "l.parquet")
    columns = {f"A[{i},{j}]": A[:, i, j] for i in range(2) for j in range(2)}
    pyarrow.parquet.write_table(pyarrow.table(columns), tmp_path / "c.parquet")
    (tmp_path / "l.toml").write_text('format = "parquet"\npoints = "row"\n')
    (tmp_path / "c.toml").write_text(
        'format = "parquet"\npoints = "row"\n[matrices]\nA = "A[{row},{column}]"\n'
    )
    for file, layout in (("g.h5", "g"), ("l.parquet", "l"), ("c.parquet", "c")):
        intake = ingest([tmp_path / file], revision="R", bank=tmp_path / "bank.h5",
                        layout=tmp_path / f"{layout}.toml")  # fmt: skip
        assert [section.digits for section in intake.report.sections] == [7], file
    pyarrow.parquet.write_table(
        pyarrow.table({name: values.astype("f8") for name, values in columns.items()}),
        tmp_path / "c.parquet",
    )
    intake = ingest([tmp_path / "c.parquet"], revision="R", bank=tmp_path / "bank.h5",
                    layout=tmp_path / "c.toml")  # fmt: skip
    assert intake.report.sections[0].digits is None
