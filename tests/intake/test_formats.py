"""What is particular to a format: tables, JSON lines, Matrix Market, groups."""

import json

import h5py
import intake_writers as writers
import numpy as np
import pandas as pd
import pytest
import scipy.io
import scipy.sparse

from ssaudit.bank_file import read_bank
from ssaudit.errors import SsauditError
from ssaudit.intake.ingest import ingest
from ssaudit.intake.layout import Layout
from ssaudit.intake.matrix_files import parse_matrix_market, parse_plain
from ssaudit.intake.table import significant_digits

RNG = np.random.default_rng(41)


@pytest.fixture
def take_in(tmp_path):
    def taker(source, layout, **options):
        (tmp_path / "layout.toml").write_text(layout)
        target = tmp_path / "bank.h5"
        options = {"revision": "R", **options}
        ingest([source], bank=target, layout=tmp_path / "layout.toml", **options)
        return read_bank(target)

    return taker


def message(action, *arguments, **options):
    with pytest.raises(SsauditError) as caught:
        action(*arguments, **options)
    assert "\n" not in str(caught.value)
    return str(caught.value)


def voids(bank):
    return {str(i): v for i, v in zip(bank.points.ids, bank.points.void, strict=True) if v}


# Tables

CSV = 'format = "csv"\npoints = "row"\nids = "op"\n[matrices]\nA = "A{row:1}{column:1}"\n'


def test_cells_that_are_no_numbers_make_their_point_void(tmp_path, take_in):
    (tmp_path / "a.csv").write_text(
        "op,A11,A12,A21,A22,V\n"
        "a,1,2,3,4,10\n"
        "b,1,,3,4,11\n"
        "c,1,2,abc,4,12\n"
        "d,1,2,3,NaN,13\n"
        "e,1,2,3,1e999,14\n"
        "f,1,2,3,4,fast\n"
        "g,1_0,2,3,4,16\n"
        "h, 1.5D+0 ,+2,3,4,17\n"
    )
    with take_in(tmp_path / "a.csv", CSV + '[coordinates.speed]\nfrom = "V"\n') as bank:
        assert voids(bank) == {
            "b": "A[1,2] is missing",
            "c": "A[2,1] is 'abc', not a number",
            "d": "A[2,2] is NaN",
            "e": "A[2,2] is infinite",
            "f": "coordinate speed is 'fast', not a number",
            "g": "A[1,1] is '1_0', not a number",
        }
        last = bank.sections[0].read(7, 8)["A"][0]
        np.testing.assert_array_equal(last, [[1.5, 2], [3, 4]])


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("op,A11,A12,A21\na,1,2,3\n", "A has 3 columns where 2x2 entries belong"),
        ("op,A11,A12,A21,A22\na,1,2,3\n", "Expected 5 columns, got 4"),
        ("op,A11,A11,A21,A22\na,1,2,3,4\n", "names 'A11' twice"),
        ("op,x\na,1\n", "has no column like 'A{row:1}{column:1}' for A"),
        ("case,A11\na,1\n", "has no column 'op' for ids"),
        ("op,A11\n", "holds no rows below its header"),
        ("op,A11", "holds no rows below its header"),
        ("\n", "has no header line"),
        ("op,A11,\na,1,2\n", "a column has no name"),
    ],
)
def test_tables_that_do_not_fit(tmp_path, take_in, text, words):
    (tmp_path / "a.csv").write_text(text)
    assert words in message(take_in, tmp_path / "a.csv", CSV)


def test_absent_columns_may_be_zero(tmp_path, take_in):
    (tmp_path / "a.csv").write_text("op,A11,A12,A22\na,1,2,3\n")
    with take_in(tmp_path / "a.csv", 'absent = "zero"\n' + CSV) as bank:
        np.testing.assert_array_equal(bank.sections[0].read(0, 1)["A"][0], [[1, 2], [0, 3]])


def test_times_that_differ_part_the_points(tmp_path, take_in):
    (tmp_path / "a.csv").write_text("op,A11,T\na,1,0.1\nb,2,0.2\nc,3,0.1\nd,4,-1\ne,5,\n")
    with take_in(tmp_path / "a.csv", 'dt = "T"\n' + CSV) as bank:
        assert {s.dt: len(s) for s in bank.sections} == {0.0: 2, 0.1: 2, 0.2: 1}
        assert voids(bank) == {"d": "dt is no time", "e": "dt is missing"}


def test_units_scales_and_offsets(tmp_path, take_in):
    (tmp_path / "a.csv").write_text("op,A11,T,V\na,1,20,10\nb,1,-5.5,20\n")
    layout = CSV + (
        '[coordinates.temperature]\nfrom = "T"\nunit = "K"\noffset = 273.15\n'
        '[coordinates.speed]\nfrom = "V"\nunit = "m/s"\nscale = 0.514444\n'
    )
    with take_in(tmp_path / "a.csv", layout) as bank:
        assert bank.points.units == {"temperature": "K", "speed": "m/s"}
        np.testing.assert_array_equal(bank.points.coordinates["temperature"],
                                      [20 + 273.15, -5.5 + 273.15])  # fmt: skip
        np.testing.assert_array_equal(bank.points.coordinates["speed"], [5.14444, 20 * 0.514444])


def test_another_unit_without_a_scale_is_an_error(tmp_path, take_in):
    np.savez(tmp_path / "a.npz", A=np.ones((1, 1, 1)), V=np.ones(1), units_V="kt")
    layout = 'format = "npz"\npoints = "first axis"\n[coordinates.speed]\nfrom = "V"\n'
    assert "speed is in 'kt', the layout says 'm/s'" in message(
        take_in, tmp_path / "a.npz", layout + 'unit = "m/s"'
    )
    with take_in(tmp_path / "a.npz", layout) as bank:
        assert bank.points.units == {"speed": "kt"}


def test_a_subset_of_signals_in_another_order(tmp_path, take_in):
    models = writers.Models(12)
    layout = writers.npz_axis(tmp_path, models)
    layout += '[take]\nstates = ["pitch_rate", "heave"]\noutputs = ["bow"]\n'
    with take_in(tmp_path / "a.npz", layout) as bank:
        section = bank.sections[0]
        assert section.states == ("pitch_rate", "heave")
        matrices = section.read(0, 12)
        np.testing.assert_array_equal(matrices["A"], models.matrices["A"][:, [3, 0]][:, :, [3, 0]])
        np.testing.assert_array_equal(matrices["B"], models.matrices["B"][:, [3, 0]])
        np.testing.assert_array_equal(matrices["C"], models.matrices["C"][:, 2:][:, :, [3, 0]])
        np.testing.assert_array_equal(matrices["D"], models.matrices["D"][:, 2:])
        assert "2 states are taken" in " ".join(bank.intake["notes"])
    wrong = layout.replace('"pitch_rate", "heave"]', '"pitch_rte"]')
    assert "takes 'pitch_rte', which is none of the states; did you mean pitch_rate?" in message(
        take_in, tmp_path / "a.npz", wrong
    )


def test_the_revision_may_come_from_the_layout(tmp_path, take_in):
    (tmp_path / "a.csv").write_text("op,A11\na,1\n")
    with take_in(tmp_path / "a.csv", 'revision = "R7"\n' + CSV, revision=None) as bank:
        assert bank.revision == "R7"
    with take_in(tmp_path / "a.csv", 'revision = "R7"\n' + CSV, revision="R8") as bank:
        assert bank.revision == "R8"
    assert "the revision has no name" in message(take_in, tmp_path / "a.csv", CSV, revision=None)


@pytest.mark.parametrize(
    ("text", "digits"),
    [("0.5", 1), ("-1.250", 4), ("1.5e-7", 2), ("1e5", 1), ("100", None), ("0.000", None),
     ("00.01", 1), ("1,5", None), ("nan", None), ("", None)],
)  # fmt: skip
def test_significant_digits(text, digits):
    assert significant_digits(text) == digits


# Long rows

LONG = """format = "{format}"
points = "long rows"
[long]
point = "op"
matrix = "m"
row = "r"
column = "c"
value = "x"
[coordinates]
speed = "V"
"""


def long_frame(*rows):
    return pd.DataFrame(rows, columns=["op", "V", "m", "r", "c", "x"])


def test_long_rows_with_every_kind_of_damage(tmp_path, take_in):
    full = [("A", r, c) for r in "ab" for c in "ab"]
    rows = []
    for k, op in enumerate(["good", "lacks", "twice", "moves", "words"]):
        for m, r, c in full:
            rows.append((op, float(k), m, r, c, "1.5"))
    frame = long_frame(*rows)
    frame = frame.drop(index=frame[(frame.op == "lacks") & (frame.r == "b")
                                   & (frame.c == "a")].index)  # fmt: skip
    frame = pd.concat([frame, frame[(frame.op == "twice")].head(1)])
    frame.loc[frame.index[-2], "x"] = "one"
    frame.loc[(frame.op == "moves") & (frame.r == "b"), "V"] = 9.0
    frame.to_csv(tmp_path / "a.csv", index=False)
    with take_in(tmp_path / "a.csv", LONG.format(format="csv")) as bank:
        assert voids(bank) == {
            "lacks": "A[2,1] is missing",
            "twice": "A[1,1] is given 2 times",
            "moves": "speed differs between its rows",
            "words": "A[2,2] is 'one', not a number",
        }


def test_long_rows_of_points_of_different_size(tmp_path, take_in):
    rows = [("in", 1.0, "A", r, c, 1.0) for r in "ab" for c in "ab"]
    rows += [("out", 2.0, "A", r, c, 2.0) for r in "abg" for c in "abg"]
    rows += [("out", 2.0, "B", r, "u", 3.0) for r in "abg"]
    long_frame(*rows).to_parquet(tmp_path / "a.parquet")
    with take_in(tmp_path / "a.parquet", LONG.format(format="parquet")) as bank:
        assert [s.states for s in bank.sections] == [("a", "b"), ("a", "b", "g")]
        assert [sorted(s.matrices) for s in bank.sections] == [["A"], ["A", "B"]]
        assert bank.usable == 2


def test_a_number_that_is_missing_is_a_gap_and_no_smaller_model(tmp_path, take_in):
    rows = [("whole", 1.0, "A", r, c, 1.0) for r in (1, 2, 3) for c in (1, 2, 3)]
    rows += [("gap", 2.0, "A", r, c, 1.0) for r in (1, 3) for c in (1, 3)]
    long_frame(*rows).to_parquet(tmp_path / "a.parquet")
    with take_in(tmp_path / "a.parquet", LONG.format(format="parquet")) as bank:
        assert voids(bank) == {"gap": "A[1,2] is missing"}
    zero = 'absent = "zero"\n' + LONG.format(format="parquet")
    with take_in(tmp_path / "a.parquet", zero) as bank:
        model = bank.sections[0].read(1, 2)["A"][0]
        np.testing.assert_array_equal(model, [[1, 0, 1], [0, 0, 0], [1, 0, 1]])


def test_windows_of_long_rows_give_one_bank(tmp_path, take_in, monkeypatch):
    models = writers.Models(50)
    layout = writers.parquet_long(tmp_path, models, shuffled=True)
    digests = set()
    for size in (2_000, 10_000, 64_000_000):
        monkeypatch.setattr("ssaudit.intake.long_rows.WINDOW_BYTES", size)
        with take_in(tmp_path / "a.parquet", layout) as bank:
            digests.add(bank.digest)
    assert len(digests) == 1


def test_points_told_by_two_columns(tmp_path, take_in):
    rows = [("p", v, m, "1", "1", v) for v in (1.0, 2.0) for m in ("A",)]
    long_frame(*rows).to_parquet(tmp_path / "a.parquet")
    layout = LONG.format(format="parquet").replace('point = "op"', 'point = ["op", "V"]')
    with take_in(tmp_path / "a.parquet", layout) as bank:
        assert bank.points.ids.tolist() == ["p,1.0", "p,2.0"] or bank.points.ids.tolist() == [
            "p,1", "p,2"]  # fmt: skip


# JSON lines

JSON = 'format = "json-lines"\npoints = "row"\nids = "id"\n[coordinates]\nspeed = "v"\n'


@pytest.mark.parametrize(
    ("line", "reason"),
    [
        ('{"id": "x", "v": 1, "A": [[NaN]]}', "A[1,1] is NaN"),
        ('{"id": "x", "v": 1, "A": [[-Infinity]]}', "A[1,1] is infinite"),
        ('{"id": "x", "v": 1, "A": [[1e999]]}', "A[1,1] is infinite"),
        ('{"id": "x", "v": 1, "A": [[null]]}', "A: an entry is missing"),
        ('{"id": "x", "v": 1, "A": [["1"]]}', "A holds something that is no number"),
        ('{"id": "x", "v": 1, "A": [[true]]}', "A holds something that is no number"),
        ('{"id": "x", "v": 1, "A": [[true, 1.0], [1.0, 2.0]]}', "A holds something that is no"),
        ('{"id": "x", "v": 1, "A": [[1, 2], [3]]}', "A has rows of different length"),
        ('{"id": "x", "v": 1, "A": [[[1]]]}', "A has 3 dimensions"),
        ('{"id": "x", "v": 1, "A": {"a": 1}}', "A: no matrix"),
        ('{"id": "x", "v": 1}', "A is missing"),
        ('{"id": "x", "A": [[1.0]]}', "coordinate speed is missing"),
        ('{"id": "x", "v": NaN, "A": [[1.0]]}', "coordinate speed is not a finite number"),
        ('{"id": "x", "v": [1], "A": [[1.0]]}', "coordinate speed is no number"),
        ('{"id": "x", "v": "fast", "A": [[1.0]]}', "coordinate speed is 'fast', not a number"),
        ('{"id": "x", "v": 1, "v": 2, "A": [[1.0]]}', "line 2: it names 'v' twice"),
        ('{"id": "x", "v": 1, "A": [[1.0]]', "line 2: it is not JSON"),
        ("[1, 2]", "line 2: it is no object"),
        ("[" * 100_000, "line 2: it is nested too deeply"),
        ('{"id": "x", "v": 1, "A": [[' + "9" * 5000 + "]]}", "line 2:"),
        ('{"id": "x", "v": 1' + "0" * 400 + ', "A": [[1.0]]}', "coordinate speed is no number"),
        ('{"id": "\ud800", "v": 1'.encode("utf-8", "surrogatepass"), "line 2: it is not UTF-8"),
    ],
)
def test_lines_that_cannot_be_used_are_void_points(tmp_path, take_in, line, reason):
    good = b'{"id": "good", "v": 0, "A": [[-1.5]]}\n'
    line = line if isinstance(line, bytes) else line.encode()
    (tmp_path / "a.jsonl").write_bytes(good + line + b"\n")
    with take_in(tmp_path / "a.jsonl", JSON) as bank:
        assert len(bank) == 2
        (void,) = voids(bank).values()
        assert reason in void
        assert len(void) <= 200


def test_a_line_beyond_reason(tmp_path, take_in, monkeypatch):
    monkeypatch.setattr("ssaudit.intake.records.LONGEST_LINE", 1000)
    (tmp_path / "a.jsonl").write_text('{"id": "' + "x" * 2000 + '"}\n')
    assert "line 1: is longer than 1000 bytes" in message(take_in, tmp_path / "a.jsonl", JSON)


def test_names_in_every_line_and_in_another_order(tmp_path, take_in):
    lines = [
        {"id": "a", "v": 1, "A": [[1.0, 2], [3, 4]], "x": ["p", "q"]},
        {"id": "b", "v": 2, "A": [[4.0, 3], [2, 1]], "x": ["q", "p"]},
    ]
    (tmp_path / "a.jsonl").write_text("\n".join(json.dumps(line) for line in lines))
    with take_in(tmp_path / "a.jsonl", JSON + '[names]\nstates = "x"\n') as bank:
        (section,) = bank.sections
        np.testing.assert_array_equal(section.read(0, 2)["A"][0], section.read(0, 2)["A"][1])
        assert "put in the order of the first file" in " ".join(bank.intake["notes"])


# Matrix Market


@pytest.mark.parametrize("symmetry", ["general", "symmetric", "skew-symmetric"])
@pytest.mark.parametrize("sparse", [False, True])
@pytest.mark.parametrize("field", ["real", "integer"])
def test_matrix_market_against_scipy(tmp_path, symmetry, sparse, field):
    matrix = np.round(RNG.standard_normal((5, 5)) * 10)
    if field == "real":
        matrix = matrix / 7
    if symmetry == "symmetric":
        matrix = matrix + matrix.T
    if symmetry == "skew-symmetric":
        matrix = matrix - matrix.T
    content = matrix if field == "real" else matrix.astype(int)
    path = tmp_path / "a.mtx"
    scipy.io.mmwrite(path, scipy.sparse.coo_array(content) if sparse else content,
                     symmetry=symmetry, precision=17, comment="made here")  # fmt: skip
    np.testing.assert_array_equal(parse_matrix_market(path.read_text(), "a.mtx"), matrix)
    again = scipy.io.mmread(path)
    again = again.toarray() if scipy.sparse.issparse(again) else again
    np.testing.assert_array_equal(parse_matrix_market(path.read_text(), "a.mtx"), again)


def test_a_matrix_that_is_not_square(tmp_path):
    matrix = RNG.standard_normal((3, 2))
    scipy.io.mmwrite(tmp_path / "a.mtx", matrix, precision=17)
    text = (tmp_path / "a.mtx").read_text()
    np.testing.assert_array_equal(parse_matrix_market(text, "a.mtx"), matrix)


HEAD = "%%MatrixMarket matrix "


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("1 2\n", "is no Matrix Market file"),
        (HEAD + "array complex general\n1 1\n1 0\n", "holds a array complex general matrix"),
        (HEAD + "coordinate pattern general\n1 1 1\n1 1\n", "not a real one"),
        (HEAD + "array real general\n", "has no line of sizes"),
        (HEAD + "array real general\n2 x\n1\n", "'x' is no size"),
        (HEAD + "array real general\n999999999 999999999\n1\n", "claims 999999999x999999999"),
        (HEAD + "array real general\n4000 4000\n1\n", "claims 16000000 entries and holds 1"),
        (HEAD + "array real general\n1 1\nabc\n", "'abc' is not a number"),
        (HEAD + "array real symmetric\n2 3\n1\n", "claims 2x3 entries"),
        (HEAD + "coordinate real general\n2 2 1\n3 1 5\n", "has an entry at 3,1"),
        (HEAD + "coordinate real general\n2 2 1\n-1 1 5\n", "'-1' is no size or place"),
        (HEAD + "coordinate real general\n2 2 2\n1 1 5\n1 1 6\n", "gives an entry twice"),
        (HEAD + "coordinate real symmetric\n2 2 1\n1 2 5\n", "above the diagonal"),
    ],
)
def test_matrix_market_that_is_none(text, words):
    assert words in message(parse_matrix_market, text, "a.mtx")


def test_a_point_whose_file_is_damaged_or_missing_is_void(tmp_path, take_in):
    folder = tmp_path / "x"
    folder.mkdir()
    layout = writers.matrix_market(folder, writers.Models(4))
    files = sorted(folder.iterdir())
    next(f for f in files if f.name.startswith("A_p001")).unlink()
    next(f for f in files if f.name.startswith("B_p002")).write_text("nothing")
    next(f for f in files if f.name.startswith("C_p003")).unlink()
    with take_in(folder, layout) as bank:
        assert voids(bank) == {
            "p001": "A is missing",
            "p002": "B: is no Matrix Market file of a matrix",
        }
        assert len(bank) == 4
        # A point without C is a section of its own: whether C is needed, the loop decides.
        assert [sorted(s.matrices) for s in bank.sections if s.states] == [
            list("ABCD"),
            list("ABD"),
        ]
    (folder / "X_p009_V1_M1_in.mtx").write_text("x")
    assert "'X' is none of the matrices" in message(take_in, folder, layout)


@pytest.mark.parametrize(
    ("text", "words"),
    [("", "holds no numbers"), ("1 2\n3\n", "rows of different length"), ("1 x\n", "'x' is not")],
)
def test_plain_matrices_that_are_none(text, words):
    assert words in message(parse_plain, text, Layout("csv", "file"), "a.txt")


# Groups and files


def test_groups_of_which_some_are_damaged(tmp_path, take_in):
    layout = writers.hdf5_group(tmp_path, writers.Models(6))
    with h5py.File(tmp_path / "a.h5", "r+") as file:
        del file["cases/p001/model/A"]
        del file["cases/p002"].attrs["V"]
        file["cases/p003/model/A"][0, 0] = np.nan
        del file["cases/p004/model/B"]
        file["cases/p004/model/B"] = np.ones((3, 3))
        file["cases/p005/model/D"].attrs["note"] = "fine"
        file["cases/other"] = np.ones(3)
    with take_in(tmp_path / "a.h5", layout) as bank:
        assert voids(bank) == {
            "p001": "A is missing",
            "p002": "speed is missing",
            "p003": "A[1,1] is NaN",
            "p004": "B is 3x3 where 4x3 fits 4 states, 3 inputs and 3 outputs",
        }
        assert len(bank) == 6


def test_a_file_of_one_point_that_cannot_be_read_is_a_void_point(tmp_path, take_in):
    folder = tmp_path / "x"
    folder.mkdir()
    layout = writers.hdf5_file(folder, writers.Models(4))
    path = sorted(folder.iterdir())[1]
    path.write_bytes(path.read_bytes()[:500])
    with take_in(folder, layout) as bank:
        (reason,) = voids(bank).values()
        assert list(voids(bank)) == ["p001"]
        assert "is not HDF5, or is cut short" in reason
        assert bank.points.coordinates["speed"][-1] == 5.0


def test_a_layout_cannot_leave_the_folder(tmp_path, take_in):
    outside, folder = tmp_path / "outside", tmp_path / "x"
    outside.mkdir()
    folder.mkdir()
    layout = writers.npz_file(folder, writers.Models(3))
    secret = outside / "p009_V9_M9_in.npz"
    np.savez(secret, A=np.ones((4, 4)))
    (folder / "down").symlink_to(outside)
    with take_in(folder, layout) as bank:
        assert len(bank) == 3
    deeper = layout.replace("files_regex = '", "files_regex = 'down/")
    assert "no file of the folder fits" in message(take_in, folder, deeper)
    (folder / secret.name).symlink_to(secret)
    assert "leads out of its folder" in message(take_in, folder, layout)


def test_a_file_of_another_format_than_the_layout_says(tmp_path, take_in):
    with open(tmp_path / "a.h5", "wb") as file:
        np.savez(file, A=np.ones((1, 1)))
    layout = 'format = "hdf5"\npoints = "file"\n'
    assert "is npz" in message(take_in, tmp_path / "a.h5", layout)


def test_hdf5_places_that_lead_through_a_foreign_link(tmp_path, take_in):
    layout = writers.hdf5_group(tmp_path, writers.Models(3))
    (tmp_path / "a.h5").rename(tmp_path / "b.h5")
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["cases"] = h5py.ExternalLink(str(tmp_path / "b.h5"), "cases")
    assert "is a link into another file" in message(take_in, tmp_path / "a.h5", layout)
