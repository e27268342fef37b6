"""The screen of one point: what stands on it, how wide it is, and what names may do to it."""

import io

import numpy as np
import pytest
from rich.cells import cell_len
from rich.console import Console

import ssaudit
from ssaudit.loop import parts
from ssaudit.loop.assembly import Sampling
from ssaudit.loop.uncertainty import Uncertain
from ssaudit.point import explain_point
from ssaudit.report.point_text import MOST_MODES, point_text

WIDTHS = (80, 100, 120)
STATES, INPUTS, OUTPUTS = ("heave", "heave_rate"), ("flap",), ("height",)
A, B, C = [[0.0, 1.0], [-4.0, -0.8]], [[0.0], [1.0]], [[1.0, 0.0]]


def screen(report, width=100, colour=False):
    file = io.StringIO()
    console = Console(file=file, width=width, force_terminal=colour, color_system="standard" if
                      colour else None, highlight=False, markup=False, emoji=False)  # fmt: skip
    console.print(point_text(report))
    return file.getvalue()


def explained(
    matrix=A, gain=1.0, *, loop=None, criteria=None, id="cruise", near=None, ids=("cruise",), **bank
):
    names = {"states": STATES, "inputs": INPUTS, "outputs": OUTPUTS} | bank
    count = len(ids)
    built = ssaudit.build_bank(
        [matrix] * count, [B] * count, [C] * count, np.zeros((count, 1, 1)), revision="A",
        ids=list(ids), **names,
    )  # fmt: skip
    if loop is None:
        loop = ssaudit.Loop("negative", ssaudit.ConstantGain([[gain]]), "outputs")
    about = {"near": near} if near else {"id": id}
    return explain_point(built, loop, criteria=criteria, **about)


def squeezed(text):
    return " ".join(text.split())


class TestWhatStandsOnIt:
    def test_an_ok_point(self):
        report = explained(coordinates={"speed": ([20.0], "m/s")}, tags={"config": ["foil"]})
        lines = screen(report).splitlines()
        assert lines[0] == "Point cruise of revision A: speed 20 m/s, config foil"
        # Stability alone was judged, and that is no "ok".
        assert lines[1] == "stable, and judged by no requirement: --criteria"
        text = squeezed(screen(report))
        # s² + 0.8 s + 4 + k: damping 0.8/(2 √5), frequency √5, time constant 2.5 s.
        assert "-0.4000 ± 2.200i" in text
        assert "2.50 2.24 0.179" in text
        assert "all gains by one factor: stable for -4.000 to inf" in text
        # |L| = 1/|4 - w² + 0.8 jw| stays below 1: neither gain nor phase is ever lost.
        assert "first lost by" not in text
        assert "flap from height" in text
        assert "loop u = -K outputs" in text
        assert "stable at every point does not prove" in text

    def test_title_without_coordinates_or_tags(self):
        assert screen(explained()).splitlines()[0] == "Point cruise of revision A"
        tagged = explained(tags={"config": ["foil"], "flaps": ["up"]})
        first = screen(tagged).splitlines()[0]
        assert first == "Point cruise of revision A: config foil, flaps up"

    def test_numbers_are_those_of_the_report(self):
        report = explained(gain=3.0)
        text = squeezed(screen(report))
        row = report.row
        place = row["phase_margin_deg_loop"]
        lost = f"{row['phase_margin_deg']:.1f} deg or {row['delay_margin_s']:.3f} s of delay"
        assert f"first lost by phase: {lost} at {place}, " in text
        assert "first lost by gain" not in text  # no gain does
        for loop in report.loops:
            assert loop.name in text
            assert f"{loop.margins.phase_deg[0]:.3g}" in text
            assert f"{loop.peaks.sensitivity[0]:.3g}" in text
        for end in ("input", "output", "both"):
            assert f"{end} {report.row[f'disk_margin_{end}']:.3f}" in text
        assert f"states scaled: {report.row['stability_radius_scaled']:.3f}, for real" in text
        (effect,) = report.effects
        assert f"flap from height 3.000 {effect.derivative:.4f} {effect.change:+.2g}" in text

    def test_a_short_point_says_by_how_much(self):
        criteria = ssaudit.Criteria((ssaudit.Requirement("ride", "damping_ratio", at_least=0.5),))
        lines = screen(explained(criteria=criteria)).splitlines()
        assert lines[1] == "short  ride: damping_ratio 0.179, 0.32 below 0.5"

    def test_a_lost_point_has_no_margins_but_its_stable_factors(self):
        report = explained(gain=-5.0)
        text = screen(report)
        assert text.splitlines()[1] == "lost  not stable: 1 pole right of the axis"
        assert "first lost by" not in text
        assert "all gains by one factor: stable for -inf to 0.8000" in text
        assert "not stable: single loops have no margins here" in text
        assert "disk margins" not in text
        assert "stability radius" not in text

    def test_a_point_that_no_factor_makes_stable(self):
        unreached = [[2.0, 0.0], [0.0, -1.0]]
        report = explained(unreached)
        assert "all gains by one factor: stable for no factor" in screen(report)

    def test_a_range_that_starts_above_zero(self):
        n = np.array([[0.0, 1.0, 0.0], [0.0, 0.0, 1.0], [-10.0, 0.0, -1.0]])
        bank = ssaudit.build_bank(
            [n], [[[0.0], [0.0], [1.0]]], [[[0.0, 15.0, 1.0]]], [[[0.0]]], revision="A", ids=["p"]
        )
        # s³ + (1 + k) s² + 15 k s + 10: stable where 15 k (1 + k) > 10
        report = explain_point(
            bank, ssaudit.Loop("negative", ssaudit.ConstantGain([[1.0]]), "outputs"), id="p"
        )
        low = (-1 + np.sqrt(1 + 8 / 3)) / 2
        # Rounded into the range: upwards at its lower end.
        assert f"stable for {np.ceil(low * 1e4) / 1e4:.4f} to inf" in screen(report)
        assert report.row["gain_factor_low"] == pytest.approx(low)

    def test_several_ranges(self):
        """s³ + (1 + k) s² + (3 + k) s + 1 + 10 k: stable where k² - 6 k + 2 > 0 and k > -0.1."""
        A = [[0.0, 1.0, 0.0], [0.0, 0.0, 1.0], [-1.0, -3.0, -1.0]]
        bank = ssaudit.build_bank(
            [A], [[[0.0], [0.0], [1.0]]], [[[10.0, 1.0, 1.0]]], [[[0.0]]], revision="A", ids=["p"]
        )
        loop = ssaudit.Loop("negative", ssaudit.ConstantGain([[1.0]]), "outputs")
        report = explain_point(bank, loop, id="p")
        assert report.row["verdict"] == "lost"
        ends = 3 - np.sqrt(7), 3 + np.sqrt(7)
        inner = np.floor(ends[0] * 1e4) / 1e4, np.ceil(ends[1] * 1e3) / 1e3
        expected = f"stable for -0.1000 to {inner[0]:.4f} and {inner[1]:.3f} to inf"
        assert expected in screen(report)

    def test_a_void_point(self):
        report = explained([[np.nan, 1.0], [0.0, 1.0]])
        lines = screen(report).splitlines()
        assert lines[1] == "void  A[1,1] is NaN"
        assert not any(line.startswith(("input", "signal", "all gains")) for line in lines)

    def test_a_point_in_doubt(self):
        loop = ssaudit.Loop("negative", ssaudit.ConstantGain([[1.0]]), "outputs",
                            uncertain=(Uncertain("A", absolute=2.0),))  # fmt: skip
        line = screen(explained(loop=loop)).splitlines()[1]
        assert line.startswith("doubt  stability: real part -0.4 ± ")

    def test_nearest_point_says_how_far_it_is(self):
        report = explained(
            ids=("a", "b"), near={"speed": 18.5}, coordinates={"speed": ([10.0, 20.0], "m/s")}
        )
        lines = screen(report).splitlines()
        assert lines[0].startswith("Point b of revision A: speed 20 m/s")
        assert lines[2] == "nearest point there is; away from what was asked: speed +1.5"
        exactly = explained(
            ids=("a", "b"), near={"speed": 20.0}, coordinates={"speed": ([10.0, 20.0], "m/s")}
        )
        assert "nearest" not in screen(exactly)

    def test_a_delay_is_said_to_be_modelled(self):
        loop = ssaudit.Loop("negative", ssaudit.ConstantGain([[0.5]]), "outputs",
                            parts=(parts.delay(0.1, 2).at("computer", input="*"),))  # fmt: skip
        text = screen(explained(loop=loop))
        assert "loop  u = -K outputs, 1 part (delays as Padé models)" in text
        assert "computer flap.1" in text

    def test_sampling_is_said(self):
        loop = ssaudit.Loop("negative", ssaudit.ConstantGain([[0.5]]), "outputs",
                            sampling=Sampling(0.05, 1))  # fmt: skip
        text = screen(explained(loop=loop))
        assert "sampled every 0.05 s, 1 late" in text
        assert "late 1.1" in text

    def test_many_modes_are_cut_short_and_counted(self):
        n = MOST_MODES + 5
        bank = ssaudit.build_bank([np.diag(-np.arange(1.0, n + 1))], revision="A", ids=["p"])
        report = explain_point(bank, ssaudit.Loop("", None, "none"), id="p")
        text = screen(report)
        assert "and 5 more: --json" in text
        assert text.count("x") < n + 20


REPORTS = {
    "ok": lambda: explained(coordinates={"speed": ([20.0], "m/s"), "mass": ([95.0], "t")}),
    "lost": lambda: explained(gain=-5.0),
    "void": lambda: explained([[np.nan, 1.0], [0.0, 1.0]]),
    "long names": lambda: explained(
        id="p" * 300, ids=("p" * 300,), states=("heave" * 30, "rate" * 30), inputs=("flap" * 30,),
        outputs=("height" * 30,), coordinates={"speed" * 20: ([20.0], "m/s" * 20)},
        tags={"config" * 20: ["foil" * 40]},
        criteria=ssaudit.Criteria(
            (ssaudit.Requirement("ride" * 40, "damping_ratio", at_least=0.5),)
        ),
    ),
    "wide letters": lambda: explained(
        id="巡航" * 60, ids=("巡航" * 60,), states=("高度" * 20, "速度" * 20), inputs=("翼" * 40,)
    ),
    "extreme numbers": lambda: explained([[0.0, 1e150], [-4e-150, -0.8]], gain=1e-150),
}  # fmt: skip


@pytest.mark.parametrize("name", REPORTS)
@pytest.mark.parametrize("width", WIDTHS)
def test_no_line_is_wider_than_the_screen(name, width):
    report = REPORTS[name]()
    lines = screen(report, width).splitlines()
    assert max(map(cell_len, lines)) <= width
    assert len(lines) <= 40
    # And the narrow screen is the reason: a wider one holds more of the long ones.
    if name == "long names":
        assert max(map(cell_len, screen(report, 2 * width).splitlines())) > width


@pytest.mark.parametrize("name", ["ok", "lost", "void"])
def test_colour_changes_no_word(name):
    import re

    report = REPORTS[name]()
    coloured = screen(report, colour=True)
    assert "\x1b[" in coloured
    assert re.sub(r"\x1b\[[0-9;]*m", "", coloured) == screen(report)


EVIL = "cr\x1b[2Jui\rse\n\x07\u202e[red]x[/red]"


def test_names_cannot_steer_the_terminal():
    report = explained(
        id=EVIL, ids=(EVIL,), states=(EVIL + "1", EVIL + "2"), inputs=(EVIL,), outputs=(EVIL,),
        coordinates={EVIL: ([20.0], EVIL)}, tags={EVIL + "t": [EVIL]},
    )  # fmt: skip
    for width in WIDTHS:
        text = screen(report, width)
        assert not {"\x1b", "\r", "\x07", "\u202e"} & set(text)
        assert all(c.isprintable() or c == "\n" for c in text)
        assert text.splitlines()[0].startswith("Point cr\ufffd[2Jui\ufffdse")
    assert "[red]x[/red]" in screen(report, 200)  # no markup either


def test_errors_about_such_names_are_harmless(project):
    bank = project.bank("A", [0.5, 0.5], ids=[EVIL, "other"])
    loop = project.folder / "loop.toml"
    ran = project.run("point", bank, "--loop", loop, "--id", EVIL[:-1])
    assert (ran.code, ran.out) == (2, "")
    assert ran.err.count("\n") == 1
    assert all(c.isprintable() or c == "\n" for c in ran.err)


@pytest.mark.parametrize("width", WIDTHS)
def test_the_command_fits_the_terminal(project, monkeypatch, width):
    monkeypatch.setenv("COLUMNS", str(width))
    bank = project.bank("A", [0.5, -0.5, np.nan], ids=["good", "lost", "v" * 200])
    for name in ("good", "lost", "v" * 200):
        ran = project.run("point", bank, "--loop", project.folder / "loop.toml", "--id", name)
        assert ran.err == ""
        assert max(map(cell_len, ran.out.splitlines())) <= width
