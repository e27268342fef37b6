"""The audit on a screen, piece by piece; its size and exit codes are in ``test_cli``."""

from dataclasses import replace

import numpy as np
import pytest
from rich.console import Console

import ssaudit
from ssaudit.report.audit_text import audit_text, participating, shortened
from ssaudit.stages import stream_audit

LOOP = ssaudit.Loop("negative", ssaudit.ConstantGain([[1.0, 1.0]]), name="loop.toml")
CRITERIA = ssaudit.Criteria(
    (ssaudit.Requirement("ride", "damping_ratio", at_least=0.2),), name="criteria.toml"
)


def lines(report, width=100):
    console = Console(width=width, force_terminal=False)
    with console.capture() as shown:
        console.print(audit_text(report))
    return shown.get().splitlines()


def audited(bank, loop=LOOP, criteria=CRITERIA, **more):
    return stream_audit(bank, loop, criteria, worst=more.pop("worst", 5), **more)


@pytest.mark.parametrize("length", [1, 23, 24])
def test_a_name_that_fits_is_shown_whole(length):
    assert shortened("x" * length) == "x" * length


def test_of_a_long_name_both_ends_are_shown():
    names = {f"configuration-foilborne-heavy-{k:04d}" for k in range(1000)}
    shown = {shortened(name) for name in names}
    assert len(shown) == 1000
    assert {len(name) for name in shown} == {24}
    assert shortened("a" * 12 + "-" * 60 + "b" * 11) == "a" * 12 + "…" + "b" * 11


def test_states_that_take_part():
    point = {"top_states": "rate, height", "participation_1": 0.75, "participation_2": 0.25}
    assert participating(point) == {"rate": 0.75, "height": 0.25}
    assert participating({"top_states": ""}) == {}
    assert participating({}) == {}


def test_all_is_well(oscillators):
    shown = lines(audited(oscillators([0.5, 0.6])))
    assert shown[:2] == [
        "Audit of revision A: 2 points",
        "0 lost   0 doubt   0 short   0 void   2 ok",
    ]
    assert not [line for line in shown if "worst points" in line]
    assert not [line for line in shown if line.startswith("void at")]
    assert [line.split() for line in shown if "all poles decay" in line] == [
        ["0", "of", "2", "-1.00", "stability:", "all", "poles", "decay"]
    ]


def test_where_a_requirement_is_missed_by_the_coordinates_that_tell(oscillators):
    speed, mass = [10.0, 20.0, 30.0, 10.0, 20.0, 30.0], [1.0, 1.0, 1.0, 2.0, 2.0, 2.0]
    at = {"speed": (speed, "m/s"), "mass": (mass, "t")}

    def within(damping):
        (line,) = (
            line.strip().partition("; ")[2]
            for line in lines(audited(oscillators(damping, coordinates=at)))
            if "within" in line or "all over" in line
        )
        return line

    assert within([0.5, 0.1, 0.1, 0.5, 0.1, 0.1]) == "within speed 20 to 30 m/s"
    assert within([0.5, 0.5, 0.1, 0.5, 0.5, 0.5]) == "within speed 30 m/s, mass 1 t"
    assert within([0.1, 0.5, 0.5, 0.5, 0.5, 0.1]) == "all over the envelope"


def test_void_points_by_reason_the_most_frequent_first(oscillators):
    bank = oscillators([0.5] * 10)
    for row, reason in enumerate(["rare", "often", "often", "often", "some", "some", "last"]):
        bank.points.void[row] = reason
    shown = lines(audited(bank))
    assert [line for line in shown if line.startswith("void at")] == [
        "void at 3: often",
        "void at 2: some",
        "void at 2, for other reasons: see the ledger or --csv",
    ]


def test_held_edges_are_counted(oscillators):
    table = ssaudit.GainSchedule(
        ("speed",), ([0.0, 10.0],), [[[1.0, 1.0]]] * 2, ("flap",), ("height", "rate"), "hold"
    )
    bank = oscillators([0.5] * 3, coordinates={"speed": ([5.0, 11.0, 99.0], "m/s")})
    long = ssaudit.Loop("negative", table, name="/a/path/" + "of/many/folders/" * 9 + "loop.toml")
    for width in (80, 100):
        text = "\n".join(lines(audited(bank, long), width))
        assert "u = -K states, edge gains held at 2 points beyond the table" in text


def test_the_depth_is_told_however_long_the_path_is(oscillators):
    criteria = replace(CRITERIA, name="/a/path/" + "of/many/folders/" * 9 + "criteria.toml")
    text = "\n".join(lines(audited(oscillators([0.5]), criteria=criteria, depth="poles"), 80))
    assert "depth poles (conditioning was not examined)" in text
    text = "\n".join(lines(audited(oscillators([0.5]), criteria=criteria), 80))
    assert "depth modes" in text
    assert "not examined" not in text


def test_the_damping_is_shown_on_a_narrow_screen_with_many_coordinates(oscillators):
    at = {f"coordinate {k}": (np.array([12345.678]), "kg m/s") for k in range(6)}
    shown = lines(audited(oscillators([-0.25], ids=["x" * 60], coordinates=at)), 80)
    row = next(line for line in shown if " lost " in line and "±" in line)
    assert "0.5000 ± 1.936i  -0.250" in row


def test_a_doubt_that_is_let_pass_is_told(oscillators):
    lenient = replace(CRITERIA, doubt="ok")
    bank = oscillators([0.5, 0.2])
    shown = lines(audited(bank, criteria=lenient))
    assert shown[1] == "0 lost   1 doubt   0 short   0 void   1 ok"
    assert shown[2:4] == ["1 in doubt: 2", "1 in doubt about a requirement, let pass as ok"]
    assert audited(bank, criteria=lenient).summary.all_ok
    assert not audited(bank).summary.all_ok
    assert "let pass" not in "\n".join(lines(audited(bank)))
