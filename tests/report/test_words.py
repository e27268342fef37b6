"""Words and numbers on a screen: the right digits, no harm, columns that line up."""

import math

import numpy as np
import pytest
from rich.console import Console, Group

from ssaudit.report.words import (
    CAUTIONS,
    ORDER,
    STYLES,
    aligned,
    cautions,
    counts,
    number,
    one_line,
    place,
    pole,
    printable,
    verdict,
)


def test_numbers_keep_the_digits_that_are_asked_for():
    rng = np.random.default_rng(8)
    values = rng.choice([-1, 1], 2000) * 10.0 ** rng.uniform(-12, 12, 2000)
    for digits in (3, 4):
        for value in values:
            assert float(number(value, digits)) == pytest.approx(
                value, rel=0.5001 * 10 ** (1 - digits)
            )
            assert len(number(value, digits)) <= digits + 8


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (None, "-"), (math.nan, "-"), (math.inf, "inf"), (-math.inf, "-inf"), (0.0, "0"),
        (-0.0, "0"), (9.9996, "10.00"), (0.099999, "0.1000"), (999999.6, "1.000e+06"),
        (0.00009999, "9.999e-05"), (0.000099999, "0.0001000"), (1234.56, "1235"),
        (-0.3719, "-0.3719"), (5e-324, "4.941e-324"), (1.7e308, "1.700e+308"),
    ],
)  # fmt: skip
def test_numbers_at_the_edges(value, text):
    assert number(value) == text


def test_poles_and_pairs():
    assert pole(0.5, 1.936491673103709) == "0.5000 ± 1.936i"
    assert pole(-2.0, 0.0) == "-2.000"
    assert pole(math.nan, math.nan) == "-"
    assert pole(-math.inf, 0.0) == "-inf"


def test_coordinates_in_words():
    at = {"speed": 20.0, "mass\x1b": 95.25}
    assert place(at, {"speed": "m/s"}) == "speed 20 m/s, mass\ufffd 95.25"


def test_nothing_that_steers_a_terminal_gets_through():
    text = "".join(map(chr, range(0x300))) + "‮\u2028\ud800é漢💥"
    shown = printable(text)
    assert shown.isprintable()
    assert shown.endswith("é漢💥")
    assert len(shown) == len(text)


def test_every_verdict_has_its_word_and_its_place():
    assert set(ORDER) == set(STYLES) == {"ok", "short", "lost", "doubt", "void"}
    assert verdict("lost").plain == "lost"
    text = counts({"ok": 4, "short": 0, "lost": 12, "doubt": 1, "void": 0}).plain
    assert text == "12 lost   1 doubt   0 short   0 void   4 ok"


def test_columns_line_up_by_what_letters_take_on_a_screen():
    rows = [["漢字", "1"], ["a", "22"], ["ζé\x1b", "333"]]
    lines = [line.plain for line in aligned(["na\x1bme", "n"], "lr", rows)]
    assert lines == ["na\ufffdme    n", "漢字     1", "a       22", "ζé\ufffd    333"]


def test_a_line_is_cut_and_not_wrapped():
    console = Console(width=20, file=None, force_terminal=False)
    for text in (one_line("x" * 50), *aligned(["h" * 50], "l", [["y" * 50]])):
        with console.capture() as shown:
            console.print(Group(text))
        assert shown.get().count("\n") == 1
        assert shown.get().rstrip("\n").endswith("…")
        assert len(shown.get().rstrip("\n")) == 20


def test_the_cautions_say_what_the_results_do_not():
    text = " ".join(CAUTIONS)
    assert cautions().plain == text
    for said in ("each point alone", "does not prove", "moves fast", "nonlinear", "not replace",
                 "simulation, test, the rules", "licensed or appointed"):  # fmt: skip
        assert said in text
