"""Reading TOML: every slip is named with its place, whatever the user wrote."""

import math

import pytest

from ssaudit.errors import CriteriaError, LoopError, SsauditError
from ssaudit.settings import (
    check_keys,
    is_finite_number,
    nearest,
    read_toml,
    shown,
    take,
    take_words,
)


def read(tmp_path, text):
    path = tmp_path / "file.toml"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return read_toml(path, LoopError)


def test_a_file_is_read_as_toml(tmp_path):
    assert read(tmp_path, 'sign = "negative"\n[gain]\nmatrix = [[1, 2.5]]\n') == {
        "sign": "negative",
        "gain": {"matrix": [[1, 2.5]]},
    }


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("sign = ", "is not TOML"),
        ("a = 1\na = 2", "is not TOML"),
        (b"sign = '\xff'", "is not UTF-8 text"),
        ("a = " + "[" * 5000 + "]" * 5000, "is nested too deeply"),
        ("a = " + "9" * 5000, "is not TOML"),
        ("a = 2020-02-31", "is not TOML"),
        ("a = '\0'", "is not TOML"),
    ],
)
def test_what_is_not_toml_is_told_in_one_line(tmp_path, text, message):
    with pytest.raises(LoopError, match=message) as caught:
        read(tmp_path, text)
    assert str(caught.value).startswith(str(tmp_path / "file.toml"))
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize("name", ["missing.toml", "", "a\0b.toml", "n" * 300])
def test_a_file_that_cannot_be_opened_is_told(tmp_path, name):
    path = f"{tmp_path}/{name}"
    with pytest.raises(CriteriaError, match="cannot be read") as caught:
        read_toml(path, CriteriaError)
    assert "\n" not in str(caught.value)


def test_the_most_similar_word_is_suggested():
    assert nearest("at_lest", ["name", "at_least", "at_most"]) == (
        "did you mean at_least? Valid: at_least, at_most, name"
    )
    assert nearest("zzz", ["b", "a"]) == "valid: a, b"
    assert nearest("zzz", []) == "there are none"


def test_unknown_keys_are_refused_and_known_ones_are_not():
    check_keys({"sign": 1, "feed": 2}, ("sign", "feed"), where="f", error=LoopError)
    with pytest.raises(LoopError, match=r"f: unknown key 'sing'; did you mean sign\? Valid: feed"):
        check_keys({"sing": 1}, ("sign", "feed"), where="f", error=LoopError)


def value_of(value, kind, **more):
    return take({"key": value}, "key", kind, where="f", error=SsauditError, **more)


@pytest.mark.parametrize(("value", "number"), [(3, 3.0), (-0.5, -0.5), (10**300, 1e300)])
def test_numbers_are_floats_whole_or_not(value, number):
    taken = value_of(value, float)
    assert isinstance(taken, float)
    assert taken == number


@pytest.mark.parametrize("value", [True, "3", math.nan, math.inf, -math.inf, 10**400, [1], {}])
def test_what_is_no_finite_number_is_refused(value):
    assert not is_finite_number(value)
    with pytest.raises(SsauditError, match=r"f: key is .*, not a finite number"):
        value_of(value, float)


@pytest.mark.parametrize(
    ("value", "kind", "word"),
    [
        (3, str, "text"),
        (True, str, "text"),
        ("x", dict, "a table"),
        ("x", list, "a list"),
        (True, int, "a whole number"),
        (1.5, int, "a whole number"),
        (None, (str, list), "str or list"),
        ([10**5000], str, "text"),
    ],
)
def test_other_kinds_are_refused_by_their_name(value, kind, word):
    with pytest.raises(SsauditError, match=rf"f: key is .*, not {word}$"):
        value_of(value, kind)


def test_absent_keys_give_the_default_unless_they_are_required():
    assert take({}, "key", str, where="f", error=SsauditError) is None
    assert take({}, "key", str, where="f", error=SsauditError, default="x") == "x"
    with pytest.raises(SsauditError, match="f: key is missing"):
        take({}, "key", str, where="f", error=SsauditError, required=True)


def test_a_truth_value_is_taken_where_one_is_asked_for():
    assert value_of(True, bool) is True


def test_lists_of_words():
    assert take_words({"key": ["a", "b"]}, "key", where="f", error=SsauditError) == ("a", "b")
    assert take_words({}, "key", where="f", error=SsauditError) is None
    assert take_words({"key": []}, "key", where="f", error=SsauditError) == ()
    for bad, message in (("a", "not a list"), (["a", 1], "key holds 1, not text")):
        with pytest.raises(SsauditError, match=message):
            take_words({"key": bad}, "key", where="f", error=SsauditError)


def test_long_values_are_cut_in_messages():
    assert shown(1.5) == "1.5"
    assert len(shown(list(range(1000)))) == 40
    assert shown(10**5000) == "a very long number"


def test_an_error_is_one_line_that_steers_no_terminal():
    error = SsauditError("name is 'a\nb\x1b[2J'", where="a\tb.toml", do="rename\r\nit")
    assert str(error) == "a b.toml: name is 'a b\ufffd[2J'; rename it"
    assert (error.what, error.where, error.do) == (
        "name is 'a\nb\x1b[2J'",
        "a\tb.toml",
        "rename\r\nit",
    )
