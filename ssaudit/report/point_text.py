"""One point on a screen: its verdict, what would be lost first, loops, modes, gains that help."""

import math

from rich.console import Group, RenderableType
from rich.text import Text

from ssaudit.point import CHANGE, PointReport
from ssaudit.report.words import (
    aligned,
    cautions,
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
    judged.no_wrap, judged.overflow = True, "ellipsis"
    parts: list[RenderableType] = [title, judged]
    if any(report.apart.values()):
        apart = ", ".join(f"{name} {gap:+g}" for name, gap in report.apart.items())
        parts.append(one_line(f"nearest point there is; away from what was asked: {apart}"))
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
        lines.append(one_line(f"{text}, {number(row['gain_margin_db_frequency'], 3)} rad/s"))
    if not math.isnan(phase) and math.isfinite(phase):
        text = f"first lost by phase: {number(phase, 3)} deg at {row['phase_margin_deg_loop']}"
        text += f", {number(row['phase_margin_deg_frequency'], 3)} rad/s"
        lines.append(one_line(f"{text}; by delay: {number(row['delay_margin_s'], 3)} s"))
    return lines


def _modes(report: PointReport) -> list[Text]:
    rows = [
        [
            pole(mode["real"], mode["imag"]),
            number(mode["radius"], 2),
            number(mode["damping_ratio"], 3),
            number(mode["natural_frequency"], 3),
            number(mode["time_constant"], 3),
            str(mode["top_states"]),
        ]
        for mode in report.modes[:MOST_MODES]
    ]
    headings = ["modes, least damped first 1/s", "off by", "ζ", "ω rad/s", "τ s", "mostly in"]
    rest = len(report.modes) - MOST_MODES
    lines = aligned(headings, "rrrrrl", rows)
    return [*lines, one_line(f"and {rest} more: --json", "dim")] if rest > 0 else lines


def _loops(report: PointReport) -> list[Text]:
    rows = []
    for loop in report.loops:
        margins = loop.margins
        rows.append(
            [
                loop.name,
                number(float(margins.gain_low_db[0]), 3),
                number(float(margins.gain_high_db[0]), 3),
                number(float(margins.phase_deg[0]), 3),
                number(float(margins.delay_s[0]), 3),
                number(float(loop.peaks.sensitivity[0]), 3),
                number(float(margins.phase_frequency[0]), 3),
            ]
        )
    headings = ["loops", "gain down dB", "up dB", "phase deg", "delay s", "peak S", "at rad/s"]
    return aligned(headings, "lrrrrrr", rows)


def _whole(report: PointReport) -> list[Text]:
    """Margins of everything at once."""
    row, gains = report.row, report.gains
    lines = []
    if gains is not None:
        spans = [
            f"{number(float(low), 3)} to {number(float(high), 3)}"
            for low, high in zip(gains.low[0], gains.high[0], strict=True)
            if not math.isnan(low)
        ]
        text = " and ".join(spans) or "no factor"
        lines.append(one_line(f"all gains by one factor: stable for {text}"))
    disks = [f"{end} {number(row[f'disk_margin_{end}'], 3)}" for end in ("input", "output", "both")]
    lines.append(one_line(f"disk margins: {', '.join(disks)}"))
    radii = [
        f"{words} {number(row[name], 3)}"
        for words, name in (
            ("as scaled", "stability_radius_scaled"),
            ("real as scaled", "real_stability_radius_scaled"),
            ("in the states' units", "stability_radius"),
            ("real", "real_stability_radius"),
        )
    ]
    lines.append(one_line(f"stability radii 1/s: {', '.join(radii)}"))
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
