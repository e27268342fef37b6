"""Patterns of names: what they match, and that nothing makes them hang."""

import time

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ssaudit.errors import SourceError
from ssaudit.intake.pattern import Pattern, RegexPattern, find_entries
from ssaudit.intake.roles import find_entry_patterns, find_pattern

names = st.text(st.sampled_from("abV_-.0123456789/"), min_size=1, max_size=30)


@pytest.mark.parametrize(
    ("pattern", "name", "fields"),
    [
        ("V{v}_M{m}.csv", "V1_M2.csv", {"v": "1", "m": "2"}),
        ("V{v}_M{m}.csv", "V1_2_M3.csv", {"v": "1_2", "m": "3"}),
        ("{v}.h5", "10.5.h5", {"v": "10.5"}),
        ("{v}.h5", ".h5", None),
        ("a/{v}.h5", "a/1.h5", {"v": "1"}),
        ("{v}.h5", "a/1.h5", None),
        ("*_{v}.h5", "x_1.h5", {"v": "1"}),
        ("models.h5", "models.h5", {}),
        ("models.h5", "models.h5x", None),
        ("A{r:1}{c:1}", "A12", {"r": "1", "c": "2"}),
        ("A{r:1}{c:1}", "A123", None),
        ("A{r:2}x", "A12x", {"r": "12"}),
        ("A[{r},{c}]", "A[heave,pitch]", {"r": "heave", "c": "pitch"}),
    ],
)
def test_matches(pattern, name, fields):
    assert Pattern(pattern).match(name) == fields


@given(st.dictionaries(st.sampled_from(["v", "m"]), st.from_regex(r"[0-9]{1,5}", fullmatch=True),
                       min_size=2))  # fmt: skip
def test_what_is_written_is_read_back(fields):
    name = f"V{fields['v']}_M{fields['m']}.h5"
    assert Pattern("V{v}_M{m}.h5").match(name) == fields


@given(names, names)
def test_fields_hold_what_stands_between_the_literals(head, name):
    text = head.replace("/", "") + "{a}_{b}x"
    if text[0] in "/~" or ".." in text.split("/"):
        return
    found = Pattern(text).match(name)
    if found is not None:
        assert text.replace("{a}", found["a"]).replace("{b}", found["b"]) == name


def test_names_that_would_make_a_backtracking_matcher_hang():
    start = time.process_time()
    many = "".join(f"{{f{k}}}_" for k in range(60)) + "x"
    assert Pattern(many).match("_" * 20_000) is None
    evil = RegexPattern(r"(?P<a>(?:(?:a*)*)*)(?P<b>(?:a|aa)+)b")
    assert evil.match("a" * 5_000) is None
    # A backtracking engine would need longer than the universe has; this is no speed test.
    assert time.process_time() - start < 20


def test_an_expression_must_fit_the_whole_name():
    regex = RegexPattern(r"(?P<v>\d+)")
    assert regex.match("12") == {"v": "12"}
    assert regex.match("12x") is None
    assert regex.match("12\n") is None


def test_an_expression_of_unbounded_size_is_refused():
    with pytest.raises(SourceError, match="cannot be run"):
        RegexPattern(r"(?P<a>(?:(?:x{500}){500}){500})")


def test_entries_are_put_in_order():
    columns = [f"A_{i}_{j}" for i in (10, 2, 1) for j in (2, 10, 1)]
    found = find_entries(columns, Pattern("A_{row}_{column}"))
    assert found.rows == found.columns == ("1", "2", "10")
    assert found.numbered


@pytest.mark.parametrize(
    ("columns", "pattern"),
    [
        (["A[1,1]"], "A[{row},{column}]"),
        (["A(1,1)"], "A({row},{column})"),
        (["A_1_1"], "A_{row}_{column}"),
        (["A11"], "A{row:1}{column:1}"),
        (["A:heave:pitch"], "A:{row}:{column}"),
        (["Amat[1;1]"], "Amat[{row};{column}]"),
        (["a.1.1"], "a.{row}.{column}"),
    ],
)
def test_names_of_entries_are_recognised(columns, pattern):
    assert list(find_entry_patterns(columns)["A"]) == [pattern]


@pytest.mark.parametrize("column", ["speed_10_20", "T1", "x", "mass [t]", "date 2026-01-02"])
def test_other_names_are_no_entries(column):
    assert find_entry_patterns([column]) == {}


@pytest.mark.parametrize(
    ("files", "pattern"),
    [
        (["V10_M80.h5", "V20_M80.h5", "V20_M90.h5"], "V{V}_M{M}.h5"),
        (["p001.h5", "p002.h5"], "p{id}.h5"),
        (["case_1.h5", "case_2.h5"], "case_{id}.h5"),
        (["in_10.h5", "out_20.h5"], "{tag}_{value}.h5"),
        (["A_10.5.mtx", "B_10.5.mtx", "A_20.mtx"], "{matrix}_{value}.mtx"),
        (["10/A.txt", "10/B.txt", "35/A.txt"], "{value}/{matrix}.txt"),
        (["T-5.h5", "T10.h5"], "T{T}.h5"),
    ],
)
def test_how_names_are_built_is_found(files, pattern):
    found = find_pattern(files)
    assert found.text == pattern
    assert all(Pattern(pattern).match(name) is not None for name in files)


def test_names_that_are_not_built_alike():
    assert find_pattern(["a.h5", "b_1.h5"]) is None
    assert find_pattern(["a.h5"]) is None
