"""CSV tables: what a spreadsheet would run is shown instead; the file is there whole or not."""

import csv

import numpy as np
import pytest

from ssaudit.csv_table import CsvWriter, harmless
from ssaudit.errors import SsauditError

NASTY = [
    "=1+1",
    "+1",
    "-1",
    "@SUM(A1)",
    "\t=1",
    "\r=1",
    '=HYPERLINK("x","y")',
    "=cmd|' /C calc'!A0",
]


def words(*values):
    return np.array(values, dtype=object)


def written(path, *chunks):
    with CsvWriter(path) as table:
        for columns in chunks:
            table.append(columns)
        table.finish()
        table.commit()
    with open(path, newline="", encoding="utf-8") as file:
        return list(csv.reader(file))


@pytest.mark.parametrize("text", NASTY)
def test_what_begins_like_a_formula_is_quoted(text):
    assert harmless(text) == f"'{text}"


@pytest.mark.parametrize("text", ["", "cruise", "a=b", "3", "'=1", " =1", "ζ"])
def test_other_text_stays(text):
    assert harmless(text) == text


def test_cells_and_headings_are_escaped_and_numbers_are_not(tmp_path):
    rows = written(tmp_path / "t.csv", {"point": words(*NASTY), "=real": np.arange(-8.0, 0.0)})
    assert rows[0] == ["point", "'=real"]
    assert [row[0] for row in rows[1:]] == [f"'{text}" for text in NASTY]
    assert [float(row[1]) for row in rows[1:]] == list(range(-8, 0))


def test_separators_quotes_and_lines_stay_in_their_cell(tmp_path):
    ids = ['a,"b"', "c\nd", "e;f", "g\r\nh", "ζ💥", ""]
    rows = written(tmp_path / "t.csv", {'he"ad,ing': words(*ids), "x": np.arange(6)})
    assert rows[0] == ['he"ad,ing', "x"]
    assert [row[0] for row in rows[1:]] == ids


def test_numbers_are_read_back_to_the_bit_and_nan_is_an_empty_cell(tmp_path):
    values = np.array([1 / 3, 1e-300, -1.7976931348623157e308, np.nan, np.inf, -np.inf, 5e-324])
    rows = written(tmp_path / "t.csv", {"x": values, "yes": values > 0})[1:]
    assert rows[3][0] == ""
    back = [float(row[0]) if row[0] else np.nan for row in rows]
    np.testing.assert_array_equal(back, values)
    assert [row[1] for row in rows] == ["true", "true", "false", "false", "true", "false", "true"]


def test_unknown_answers_are_empty_cells(tmp_path):
    rows = written(tmp_path / "t.csv", {"stable": np.array([1, 0, -1], dtype=np.int8)})
    assert [row[0] if row else "" for row in rows[1:]] == ["true", "false", ""]


def test_chunks_come_in_order_under_one_heading(tmp_path):
    rows = written(
        tmp_path / "t.csv",
        {"point": words("a", "b"), "x": np.array([1.0, np.nan])},
        {"point": words("c"), "x": np.array([3.0])},
    )
    assert rows == [["point", "x"], ["a", "1"], ["b", ""], ["c", "3"]]


def test_the_file_appears_only_when_it_is_committed(tmp_path):
    path = tmp_path / "t.csv"
    path.write_text("old")
    with CsvWriter(path) as table:
        table.append({"point": words("a")})
        table.finish()
        assert path.read_text() == "old"
    assert path.read_text() == "old"
    assert [p.name for p in tmp_path.iterdir()] == ["t.csv"]
    written(path, {"point": words("a")})
    assert path.read_text() == '"point"\n"a"\n'
    assert [p.name for p in tmp_path.iterdir()] == ["t.csv"]


def test_the_file_has_the_rights_of_any_new_file(tmp_path):
    written(tmp_path / "t.csv", {"point": words("a")})
    (tmp_path / "plain").touch()
    assert (tmp_path / "t.csv").stat().st_mode == (tmp_path / "plain").stat().st_mode


@pytest.mark.parametrize("where", ["missing/t.csv", "file/t.csv"])
def test_a_place_that_cannot_be_written_to_is_told(tmp_path, where):
    (tmp_path / "file").write_text("")
    with pytest.raises(SsauditError, match=r"t\.csv: cannot be written") as caught:
        CsvWriter(tmp_path / where)
    assert "\n" not in str(caught.value)


def test_a_folder_in_its_place_is_told_and_left(tmp_path):
    (tmp_path / "t.csv").mkdir()
    with CsvWriter(tmp_path / "t.csv") as table:
        table.finish()
        with pytest.raises(SsauditError, match="cannot be written"):
            table.commit()
    assert [p.name for p in tmp_path.iterdir()] == ["t.csv"]


def test_a_full_disk_is_told(tmp_path, monkeypatch):
    import pyarrow.csv

    class Full:
        def __init__(self, *_):
            pass

        def write_table(self, _):
            raise OSError(28, "No space left on device")

    monkeypatch.setattr(pyarrow.csv, "CSVWriter", Full)
    with pytest.raises(SsauditError, match="No space left"), CsvWriter(tmp_path / "t.csv") as table:
        table.append({"point": words("a")})
    assert list(tmp_path.iterdir()) == []
