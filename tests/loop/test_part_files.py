"""Parts, compensators and sampling as loop files state them: what is read is what is used."""

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import ssaudit
from ssaudit.errors import LoopError
from ssaudit.loop.files import files_of_loop, read_loop
from ssaudit.loop.part_files import KINDS

HEAD = 'sign = "negative"\nfeed = "outputs"\n[gain]\nmatrix = [[2.0]]\n'
S = 0.7 + 2.3j


@pytest.fixture
def read(tmp_path: Path) -> Callable[[str], ssaudit.Loop]:
    def read_text(text: str) -> ssaudit.Loop:
        path = tmp_path / "loop.toml"
        path.write_text(text, encoding="utf-8")
        return read_loop(path)

    return read_text


@pytest.fixture
def failure(read: Callable[[str], ssaudit.Loop], tmp_path: Path) -> Callable[[str], str]:
    def message_of(text: str) -> str:
        with pytest.raises(LoopError) as caught:
            read(text)
        message = str(caught.value)
        assert "\n" not in message
        assert message.startswith(str(tmp_path / "loop.toml"))
        return message.removeprefix(f"{tmp_path / 'loop.toml'}")

    return message_of


def part(kind: str, more: str = 'input = "u1"') -> str:
    return f'{HEAD}[[part]]\nname = "p"\n{more}\n{kind}\n'


def value(model, s=S):
    n = len(model.A)
    return (model.C @ np.linalg.solve(s * np.eye(n) - model.A, model.B) + model.D)[0, 0]


FORMULAS = {
    "lag = 0.5": lambda s: 1 / (0.5 * s + 1),
    "second_order = { natural_frequency = 9, damping_ratio = 0.7 }": (
        lambda s: 81 / (s**2 + 12.6 * s + 81)
    ),
    "notch = { natural_frequency = 5.0, damping_ratio = 0.5, depth = 0.1 }": (
        lambda s: (s**2 + 0.5 * s + 25) / (s**2 + 5 * s + 25)
    ),
    "lead_lag = { lead = 0.4, lag = 0.1 }": lambda s: (0.4 * s + 1) / (0.1 * s + 1),
    "fraction = { numerator = [1, 3], denominator = [2, 0, 5] }": (
        lambda s: (s + 3) / (2 * s**2 + 5)
    ),
    "state_space = { A = [[-1, 2], [0, -3]], B = [0, 1], C = [1, 1], D = [0.5] }": (
        lambda s: (2 + s + 1) / ((s + 1) * (s + 3)) + 0.5
    ),
    "state_space = { A = [[-1.0]], B = [[2.0]], C = [[3.0]], D = [[0.0]] }": (
        lambda s: 6 / (s + 1)
    ),
    "delay = 0.2\npade = 2": lambda s: (
        (1 - 0.1 * s + 0.04 * s**2 / 12) / (1 + 0.1 * s + 0.04 * s**2 / 12)
    ),
    "delay = 0\npade = 3": lambda s: 1.0,
}


def test_a_formula_is_checked_for_each_kind():
    assert {text.split(" ")[0] for text in FORMULAS} == set(KINDS)


@pytest.mark.parametrize("kind", FORMULAS)
def test_each_kind_is_the_fraction_that_it_states(read, kind):
    loop = read(part(kind))
    (found,) = loop.parts
    assert value(found) == pytest.approx(FORMULAS[kind](S), rel=1e-12)
    if not kind.startswith("delay = 0\n"):  # which is 1 everywhere
        assert value(found, S + 0.01) != pytest.approx(FORMULAS[kind](S), rel=1e-5)
    assert (found.name, found.input, found.signal) == ("p", "u1", "")
    assert "1 part" in loop.formula
    assert ("Padé" in loop.formula) == (found.delay > 0)


def test_order_and_places_are_kept(read):
    text = HEAD + "".join(
        f'[[part]]\nname = "{name}"\n{side} = "{place}"\nlag = {lag}\n'
        for name, side, place, lag in (
            ("b", "signal", "y1", 1.0), ("a", "input", "*", 2.0), ("c", "input", "u1", 3.0),
        )
    )  # fmt: skip
    loop = read(text)
    assert [p.name for p in loop.parts] == ["b", "a", "c"]
    assert [p.signal for p in loop.parts] == ["y1", "", ""]
    assert [p.input for p in loop.parts] == ["", "*", "u1"]
    bank = ssaudit.build_bank([[[-1.0]]], [[[1.0]]], [[[1.0]]], [[[0.0]]], revision="A")
    closed = loop.close(bank.sections[0], bank.points, bank.sections[0].read(0, 1))
    assert closed.states == ("x1", "a u1.1", "c.1", "b.1")


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (part(""), ", [[part]] 1: states no kind; state one of lag, second_order"),
        (part("lag = 1\ndelay = 1\npade = 1"), ", [[part]] 1: states lag and delay"),
        (part("lagg = 1"), ", [[part]] 1: unknown key 'lagg'; did you mean lag?"),
        (part("lag = -1"), ", [[part]] 1: a lag is -1, not positive"),
        (part("lag = true"), ", [[part]] 1: lag is True, not a finite number"),
        (part("lag = inf"), ", [[part]] 1: lag is inf, not a finite number"),
        (part("lag = 1\npade = 2"), ", [[part]] 1: pade belongs to a delay"),
        (part("delay = 0.1"), ", [[part]] 1: pade is missing"),
        (part("delay = 0.1\npade = 9"), ", [[part]] 1: pade is 9; choose an order from 1 to 8"),
        (part("delay = 0.1\npade = 2.0"), ", [[part]] 1: pade is 2.0, not a whole number"),
        (part("delay = -0.1\npade = 2"), ", [[part]] 1: a delay of -0.1 s"),
        (part("lag = 1", ""), ", [[part]] 1: part 'p' needs either input or signal"),
        (part("lag = 1", 'input = "u1"\nsignal = "y1"'), "needs either input or signal"),
        (part("second_order = { natural_frequency = 1 }"), "damping_ratio is missing"),
        (part("second_order = { natural_frequency = 1, damping = 1 }"), "unknown key 'damping'"),
        (part("second_order = 3"), "second_order is 3, not a table"),
        (part("fraction = { numerator = [1, 0], denominator = [1] }"), "improper"),
        (part("fraction = { numerator = [], denominator = [1] }"), "not a list of finite numbers"),
        (part("fraction = { numerator = [1], denominator = [0.0] }"), "denominator"),
        (part("state_space = { A = [[1]], B = [1, 2], C = [1], D = [0] }"), "do not fit"),
        (part("state_space = { A = [[1], [2, 3]], B = [1], C = [1], D = [0] }"), "differ"),
        (part("state_space = { A = [[nan]], B = [1], C = [1], D = [0] }"), "no finite number"),
        (HEAD + 'part = 3', "unknown key 'part'"),
        ('part = [3]\n' + HEAD, ", [[part]] 1: is not a table"),
        (part("lag = 1") + '[[part]]\nname = "p"\nsignal = "y1"\nlag = 1\n', "two parts are named"),
        (HEAD + "[sampling]\nlate = 1\n", ", [sampling]: dt is missing"),
        (HEAD + "[sampling]\ndt = 0.0\n", ", [sampling]: the sampling time is 0 s, not positive"),
        (HEAD + "[sampling]\ndt = 0.1\nlate = -1\n", "late is -1 samples, not 0 to 100"),
        (HEAD + "[sampling]\ndt = 0.1\nlate = 101\n", "late is 101 samples"),
        (HEAD + "[sampling]\ndt = 0.1\nlate = 0.5\n", "late is 0.5, not a whole number"),
        (HEAD + "[sampling]\ntime = 0.1\n", "unknown key 'time'"),
    ],
)  # fmt: skip
def test_mistakes_in_parts_and_sampling_are_named(failure, text, message):
    assert message in failure(text)


COMPENSATOR = """sign = "negative"
feed = "outputs"
[compensator]
states = ["slow", "fast"]
inputs = ["u1"]
signals = ["y1"]
A = [[-1.0, 0.5], [0.0, -4.0]]
B = [[1.0], [2.0]]
C = [[3.0, 1.0]]
D = [[0.25]]
"""


def plant(points=1):
    A = np.tile([[0.0, 1.0], [-2.0, -0.4]], (points, 1, 1))
    B, C = np.tile([[0.0], [1.0]], (points, 1, 1)), np.tile([[1.0, 0.0]], (points, 1, 1))
    return A, B, C, np.zeros((points, 1, 1))


def closed_by(loop, bank):
    section = bank.sections[0]
    return loop.close(section, bank.points, section.read(0, len(section)))


def test_constant_compensator_is_read_as_it_stands(read):
    bank = ssaudit.build_bank(*plant(), revision="A")
    found = closed_by(read(COMPENSATOR), bank)
    assert found.states == ("x1", "x2", "slow", "fast")
    expected = [[0, 1, 0, 0], [-2.25, -0.4, -3, -1], [1, 0, -1, 0.5], [2, 0, 0, -4]]
    np.testing.assert_allclose(found.A[0], expected, rtol=1e-14)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (("D = [[0.25]]\n", ""), ", [compensator]: D is missing"),
        (('states = ["slow", "fast"]\n', ""), "states must name each state"),
        (('"slow", "fast"', '"slow", "slow"'), "states must name each state"),
        (('inputs = ["u1"]\n', ""), "inputs and signals must be named"),
        (("[[3.0, 1.0]]", "[[3.0]]"), "do not fit each other"),
        (('"slow", "fast"', '"slow"'), "A is (2, 2) and D (1, 1) for 1 states, 1 inputs"),
        (("D = [[0.25]]", "D = [[0.25]]\nE = 1"), "unknown key 'E'"),
        (("[[3.0, 1.0]]", "[[3.0, inf]]"), "no finite number"),
        (("[[3.0, 1.0]]", "3.0"), "C is 3.0, not a list"),
    ],
)
def test_mistakes_in_compensators_are_named(failure, change, message):
    assert COMPENSATOR.count(change[0]) == 1
    assert message in failure(COMPENSATOR.replace(*change))


def test_gain_beside_the_matrices_of_a_compensator_is_refused(failure):
    assert "state the same" in failure(COMPENSATOR + "[gain]\nmatrix = [[1.0]]\n")


def test_compensator_without_matrices_needs_gains(failure):
    head = 'sign = "negative"\nfeed = "outputs"\n[compensator]\nstates = ["c"]\n'
    assert "gain is missing" in failure(head)


SCHEDULED = """sign = "negative"
feed = "outputs"
[compensator]
states = ["filter"]
[gain]
table = "gains.csv"
variables = ["speed"]
outside = "hold"
"""
# u = -(D y + C xc), xc' = B y + A xc, at speeds 10 and 20.
TABLE = """speed,K:u1:y1,K:u1:filter,K:filter:y1,K:filter:filter
10,1.0,2.0,3.0,-4.0
20,2.0,6.0,1.0,-8.0
"""


def test_scheduled_compensator_is_interpolated_entry_by_entry(read, tmp_path):
    (tmp_path / "gains.csv").write_text(TABLE)
    loop = read(SCHEDULED)
    assert files_of_loop(tmp_path / "loop.toml")[1] == tmp_path / "gains.csv"
    speed = np.array([10.0, 12.5, 20.0])
    bank = ssaudit.build_bank(*plant(3), revision="A", coordinates={"speed": (speed, "m/s")})
    found = closed_by(loop, bank)
    assert found.states == ("x1", "x2", "filter")
    for p, (d, c, b, a) in enumerate([(1, 2, 3, -4), (1.25, 3, 2.5, -5), (2, 6, 1, -8)]):
        expected = [[0, 1, 0], [-2 - d, -0.4, -c], [b, 0, a]]
        np.testing.assert_allclose(found.A[p], expected, rtol=1e-14)


def test_scheduled_compensator_equals_a_constant_one_at_its_breakpoints(read, tmp_path):
    (tmp_path / "gains.csv").write_text(TABLE)
    bank = ssaudit.build_bank(*plant(), revision="A", coordinates={"speed": ([20.0], "m/s")})
    scheduled = ssaudit.audit(bank, read(SCHEDULED), ssaudit.Criteria(), depth="margins")
    constant = read(
        'sign = "negative"\nfeed = "outputs"\n[compensator]\nstates = ["filter"]\n'
        'inputs = ["u1"]\nsignals = ["y1"]\nA = [[-8]]\nB = [[1]]\nC = [[6]]\nD = [[2]]\n'
    )
    other = ssaudit.audit(bank, constant, ssaudit.Criteria(), depth="margins")
    pd.testing.assert_frame_equal(scheduled.points, other.points, check_exact=True)
    pd.testing.assert_frame_equal(scheduled.modes, other.modes, check_exact=True)
    assert "filter" in set(", ".join(scheduled.modes["top_states"]).split(", "))


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (("20,2.0,6.0,1.0,-8.0\n", ""), ""),
        (("K:filter:filter", "K:filter:other"), "is missing"),
        ((",K:filter:y1,K:filter:filter", ""), "cells"),
        (("20,", "10,"), "stands twice"),
    ],
)
def test_table_that_lacks_an_entry_or_a_breakpoint(read, tmp_path, change, message):
    assert TABLE.count(change[0]) == 1
    (tmp_path / "gains.csv").write_text(TABLE.replace(*change))
    if not message:  # one breakpoint is a table of constants, held beyond
        assert read(SCHEDULED).gain is not None
        return
    with pytest.raises(LoopError, match=message):
        read(SCHEDULED)


def test_grid_of_a_scheduled_compensator_must_be_full(read, tmp_path):
    rows = ["speed,mass,K:u1:y1,K:u1:filter,K:filter:y1,K:filter:filter"]
    rows += [f"{s},{m},1,2,3,-4" for s in (10, 20) for m in (1, 2)][:3]
    (tmp_path / "gains.csv").write_text("\n".join(rows))
    with pytest.raises(LoopError, match="breakpoint at speed=20, mass=2 is missing"):
        read(SCHEDULED.replace('["speed"]', '["speed", "mass"]'))


def test_table_without_the_compensator_s_rows_does_not_fit(read, tmp_path):
    (tmp_path / "gains.csv").write_text("speed,K:u1:y1\n10,1.0\n20,2.0\n")
    bank = ssaudit.build_bank(*plant(), revision="A", coordinates={"speed": ([15.0], "m/s")})
    with pytest.raises(LoopError, match="does not name the input 'filter'"):
        ssaudit.audit(bank, read(SCHEDULED), ssaudit.Criteria())


def test_parts_count_in_the_digest_of_the_loop(read):
    texts = [HEAD, part("lag = 0.5"), part("lag = 0.50001"), part("delay = 0.2\npade = 2"),
             part("delay = 0.2\npade = 3"), part("lag = 0.5", 'signal = "y1"'),
             *(f"{HEAD}[sampling]\ndt = 0.1\nlate = {late}\n" for late in (0, 1))]  # fmt: skip
    described = [str(read(text).description) for text in texts]
    assert len(set(described)) == len(texts)
    assert described[1] == str(read(part("lag = 0.5")).description)
