"""Layout files: every mistake is named with its place, every key is documented and works."""

import re
from pathlib import Path

import pytest

from ssaudit.errors import SourceError
from ssaudit.intake import layout as layouts
from ssaudit.intake.layout import FORMATS, default_layout, parse_layout, read_layout

FOLDER = Path(__file__).parents[2] / "configs" / "layouts"
PLAIN = {"format": "npz", "points": "first axis"}


def test_the_examples_are_valid_and_cover_every_format_and_way_to_count():
    kinds = set()
    for path in FOLDER.glob("*.toml"):
        layout = read_layout(path)
        kinds.add((layout.format, layout.points))
    assert {format_ for format_, _ in kinds} == set(FORMATS)
    assert {points for _, points in kinds} == {p for ways in FORMATS.values() for p in ways}


def test_every_key_and_value_is_documented():
    text = (FOLDER / "README.md").read_text()
    keys = (*layouts.KEYS, *layouts.COORDINATE_KEYS, *layouts.TAG_KEYS, *layouts.LONG_KEYS)
    for word in keys:
        assert re.search(rf"`\[?{word}(\.NAME)?\]?`", text), word
    for word in (*FORMATS, *(p for ways in FORMATS.values() for p in ways), layouts.COLUMN_MAJOR):
        assert f'"{word}"' in text, word


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"formt": "npz"}, "l.toml: unknown key 'formt'; did you mean format?"),
        ({"format": "xls"}, "format is 'xls'"),
        ({"format": "csv"}, "points is 'first axis'; valid: file, long rows, row"),
        ({"points": "last axs"}, "points is 'last axs'; did you mean last axis?"),
        ({"order": "fortran"}, "order is 'fortran'"),
        ({"dt": -1.0}, "dt is -1.0"),
        ({"dt": float("nan")}, "dt is nan, not a finite number"),
        ({"digits": 0}, "digits is 0"),
        ({"digits": 2.5}, "digits is 2.5, not a whole number"),
        ({"skip_lines": -1}, "skip_lines is -1"),
        ({"separator": ",,"}, "separator is ',,'"),
        ({"files": "../{speed}.npz"}, "leads out of its folder"),
        ({"files": "/etc/{speed}"}, "leads out of its folder"),
        ({"files": "a\\{speed}"}, "leads out of its folder"),
        ({"files": "{a}{b}.npz"}, "two fields of '{a}{b}.npz' touch"),
        ({"files": "{a}_{a}.npz"}, "the field 'a' occurs twice"),
        ({"files": "{a.npz"}, "a brace of '{a.npz' is no field"),
        ({"files_regex": "(?P<a>.*)", "files": "{a}"}, "exclude each other"),
        ({"files_regex": "(a+)+"}, "has no named group"),
        ({"files_regex": "(?P<a>x)(y)"}, "cannot be run"),
        ({"files_regex": r"(?P<a>x)\1"}, "cannot be run"),
        ({"files_regex": "(?P<a>x)(?=y)"}, "cannot be run"),
        ({"groups": "{id}"}, 'groups needs points = "group"'),
        ({"points": "group"}, "groups is missing"),
        ({"matrices": {"A": "a", "K": "k"}}, "[matrices]: unknown key 'K'"),
        ({"matrices": {"B": "b"}}, "[matrices]: A is missing"),
        ({"matrices": {"A": "../a"}}, "'../a' is no place in a file"),
        ({"names": {"states": ["a", "a"]}}, "states names 'a' twice"),
        ({"names": {"states": [1]}}, "states holds 1, not text"),
        ({"take": {"states": "x"}}, "states is no list of names"),
        ({"coordinates": {"v": {"from": "v", "units": "m"}}}, "unknown key 'units'; did you mean"),
        ({"coordinates": {"v": {"unit": "m"}}}, "[coordinates.v]: from is missing"),
        ({"coordinates": {"v": {"from": "v", "scale": 0}}}, "scale is 0"),
        ({"coordinates": {"v": 3}}, "v is 3, not a table"),
        ({"coordinates": {"v": "v"}, "tags": {"v": "v"}}, "v is a coordinate and a tag"),
        ({"coordinates": {"v": "{speed}"}}, "{speed} is no field of files or groups"),
        ({"constant": ["A"]}, "'A' cannot be constant"),
        ({"long": {}}, '[long] needs points = "long rows"'),
        ({"format": "csv", "points": "long rows"}, "long is missing"),
        ({"format": "csv", "points": "long rows", "long": {"matrix": "m"}}, "row is missing"),
        ({"format": "matrix-market", "points": "file"}, "files must have the field {matrix}"),
    ],
)
def test_mistakes(changes, words):
    with pytest.raises(SourceError) as caught:
        parse_layout({**PLAIN, **changes}, "l.toml")
    text = str(caught.value)
    assert words in text
    assert text.startswith("l.toml")
    assert "\n" not in text


def test_a_file_that_is_no_toml(tmp_path):
    (tmp_path / "l.toml").write_text("format = ")
    with pytest.raises(SourceError, match="is not TOML"):
        read_layout(tmp_path / "l.toml")
    with pytest.raises(SourceError, match="cannot be read"):
        read_layout(tmp_path / "no.toml")


def test_the_default_layout_is_that_of_the_documentation():
    layout = default_layout("hdf5")
    assert (layout.points, layout.columns_under) == ("first axis", "points/")
    assert layout.lenient
