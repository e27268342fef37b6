"""One point on a screen: its verdict, what would be lost first, loops, modes, gains that help."""

import math

from rich.console import Group, RenderableType
from rich.text import Text

from ssaudit.point import CHANGE, PointReport
from ssaudit.report.words import (
    aligned,
    cautions,
    inward,
    number,
    one_line,
    place,
    pole,
    printable,
    verdict,
)

# Modes that are shown; the rest is in --json.
MOST_MODES = 12


def point_text(report: PointReport) -> RenderableType:
    """Lay out one point for the terminal.

    Parameters
    ----------
    report : PointReport
        The point, explained.

    Returns
    -------
    rich renderable
    """
    row = report.row
    where = [place(report.at, report.units)] if report.at else []
    where += [f"{k} {printable(v)}" for k, v in report.tags.items()]
    name = f"Point {report.point} of revision {row['revision']}"
    title = one_line(": ".join([name, ", ".join(where)] if where else [name]), "bold")
    judged = Text.assemble(verdict(row["verdict"]), printable(f"  {row['reason']}".rstrip()))
    if row["verdict"] == "ok" and not report.judged:
        judged = Text("stable, and judged by no requirement: --criteria")
    parts: list[RenderableType] = [title, judged]
    if any(report.apart.values()):
        apart = ", ".join(f"{name} {gap:+g}" for name, gap in report.apart.items())
        parts.append(one_line(f"nearest point there is; away from what was asked: {apart}"))
    if report.as_near > 1:
        parts.append(one_line(f"the first of {report.as_near} points that are as near"))
    parts += [*_first(report), Text(), *_modes(report)]
    if report.loops:
        parts += [Text(), *_loops(report), *_whole(report)]
    if report.effects:
        parts += [Text(), *_gains(report)]
    return Group(*parts, Text(), one_line(f"loop  {report.formula}"), Text(), cautions())


def _first(report: PointReport) -> list[Text]:
    """Say what would be lost first: the smallest of the gain and phase margins."""
    row = report.row
    gain, phase = row["gain_margin_db"], row["phase_margin_deg"]
    lines = []
    if not math.isnan(gain) and math.isfinite(gain):
        text = f"first lost by gain: {number(gain, 3)} dB at {row['gain_margin_db_loop']}"
        at = number(row["gain_margin_db_frequency"], 3)
        lines.append(Text(printable(f"{text}, {at} rad/s")))
    if not math.isnan(phase) and math.isfinite(phase):
        margins = f"{number(phase, 3)} deg or {number(row['delay_margin_s'], 3)} s of delay"
        text = f"first lost by phase: {margins} at {row['phase_margin_deg_loop']}"
        at = number(row["phase_margin_deg_frequency"], 3)
        lines.append(Text(printable(f"{text}, {at} rad/s")))
    return lines


def _modes(report: PointReport) -> list[Text]:
    rows = [
        [
            pole(mode["real"], mode["imag"]),
            number(mode["radius"], 2),
            number(mode["time_constant"], 3),
            number(mode["natural_frequency"], 3),
            number(mode["damping_ratio"], 3),
            str(mode["top_states"]),
        ]
        for mode in report.modes[:MOST_MODES]
    ]
    headings = ["modes 1/s", "off by", "τ s", "ω rad/s", "ζ", "mostly in"]
    rest = len(report.modes) - MOST_MODES
    lines = aligned(headings, "rrrrrl", rows)
    return [*lines, one_line(f"and {rest} more: --json", "dim")] if rest > 0 else lines


def _loops(report: PointReport) -> list[Text]:
    if not any(bool(loop.margins.stable[0]) for loop in report.loops):
        return [one_line("not stable: single loops have no margins here")]
    rows = []
    for loop in report.loops:
        margins = loop.margins
        rows.append(
            [
                loop.name,
                number(float(margins.gain_low_db[0]), 3),
                number(float(margins.gain_high_db[0]), 3),
                number(float(margins.phase_deg[0]), 3),
                number(float(margins.phase_frequency[0]), 3),
                number(float(margins.delay_s[0]), 3),
                number(float(loop.peaks.sensitivity[0]), 3),
                number(float(loop.peaks.sensitivity_frequency[0]), 3),
            ]
        )
    headings = ["loops", "down\ndB", "up\ndB", "phase\ndeg", "at\nrad/s", "delay\ns", "peak\nS"]
    headings.append("at\nrad/s")
    return aligned(headings, "lrrrrrrr", rows)


def _whole(report: PointReport) -> list[Text]:
    """Margins of everything at once."""
    row, gains = report.row, report.gains
    lines = []
    if gains is not None:
        spans = [
            f"{inward(float(low), True)} to {inward(float(high), False)}"
            for low, high in zip(gains.low[0], gains.high[0], strict=True)
            if not math.isnan(low)
        ]
        text = " and ".join(spans) or "no factor"
        if not gains.confirmed[0]:
            text = "factors that rounding leaves open"
        lines.append(one_line(f"all gains by one factor: stable for {text}"))
    if row["verdict"] == "lost":
        return lines
    disks = [f"{end} {number(row[f'disk_margin_{end}'], 3)}" for end in ("input", "output", "both")]
    lines.append(one_line(f"disk margins: {', '.join(disks)}"))
    for kind, words in (("_scaled", "states scaled"), ("", "states as exported")):
        radii = [number(row[f"{real}stability_radius{kind}"], 3) for real in ("", "real_")]
        text = f"stability radius 1/s, {words}: {radii[0]}, for real changes {radii[1]}"
        lines.append(one_line(text))
    return lines


def _gains(report: PointReport) -> list[Text]:
    rows = [
        [
            f"{effect.input} from {effect.signal}",
            number(effect.gain, 4),
            number(effect.derivative, 3),
            f"{effect.change:+.2g}",
        ]
        for effect in report.effects
    ]
    headings = ["gains that move the least damping", "gain", "dζ/dK", f"Δζ for {CHANGE:+.0%}"]
    return aligned(headings, "lrrr", rows)
