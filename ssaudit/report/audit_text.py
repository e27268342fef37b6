"""The audit on a screen: is anything lost, where, how badly, why; then what it was made of."""

from collections.abc import Mapping
from typing import Any

from rich.console import Group, RenderableType
from rich.text import Text

from ssaudit.criteria import QUANTITIES
from ssaudit.report.words import (
    STYLES,
    aligned,
    cautions,
    counts,
    inward,
    number,
    one_line,
    pole,
    printable,
    verdict,
)
from ssaudit.stages import AuditReport
from ssaudit.summary import Summary

# Lines of requirements, and reasons for void points; fewer where margins need the room.
REQUIREMENT_LINES, MOST_REASONS = 8, 2
MARGIN_LINES, LEAST_LINES = 2, 4
# Points in doubt or proved that are named.
MOST_NAMED = 4
LONGEST_ID = 24
# Of each kind of margin one, so that the screen stays short; the others are in the ledger.
SHOWN_MARGINS = (
    "gain_margin_db",
    "phase_margin_deg",
    "delay_margin_s",
    "peak_sensitivity",
    "disk_margin",
    "stability_radius_scaled",
)


def audit_text(report: AuditReport) -> RenderableType:
    """Lay out an audit for the terminal.

    Parameters
    ----------
    report : AuditReport
        What was found.

    Returns
    -------
    rich renderable
        With the default number of worst points at most 40 lines at 100 columns.
    """
    summary, units = report.summary, report.about["units"]
    title = f"Audit of revision {summary.revision}: {summary.total} points"
    parts: list[RenderableType] = [one_line(title, "bold"), counts(summary.counts)]
    parts += [*_named(summary), Text()]
    if summary.worst:
        parts += [*_worst(summary, units), Text()]
    parts += [*_missed(summary, units), *_margins(summary), *_void(summary), Text()]
    parts += [*_provenance(report), Text(), cautions()]
    return Group(*parts)


def _named(summary: Summary) -> list[Text]:
    """Name the points in doubt, and those that a proof was about."""
    lines = []
    proofs = {"stable": "proved stable", "unstable": "proved unstable", "open": "proof open"}
    counted = {"doubt": ("in doubt", summary.counts["doubt"])}
    counted |= {key: (words, summary.proofs.get(key, 0)) for key, words in proofs.items()}
    for key, (words, count) in counted.items():
        if count:
            points = summary.named.get(key, ())[:MOST_NAMED]
            more = f" and {count - len(points)} more" if count > len(points) else ""
            lines.append(one_line(f"{count} {words}: {', '.join(map(shortened, points))}{more}"))
    if summary.tolerated:
        lines.append(one_line(f"{summary.tolerated} in doubt about a requirement, let pass as ok"))
    return lines


def _worst(summary: Summary, units: Mapping[str, str]) -> list[Text]:
    """Two lines a point: the numbers; then what is wrong and which states take part most."""
    # Coordinates stand last, so that the screen's edge cuts off the last of many of them.
    names = [n[3:] for n in summary.worst[0] if n.startswith("at_")]
    headings = [f"{name} {units.get(name, '')}".rstrip() for name in names]
    headings = ["worst points", "", "worst pole 1/s", "ζ", *headings]
    rows: list[list[str | Text]] = [
        [
            shortened(point["point"]),
            verdict(point["verdict"]),
            pole(point["real"], point["imag"]),
            number(point["damping_ratio"], 3),
            *(f"{point['at_' + name]:g}" for name in names),
        ]
        for point in summary.worst
    ]
    lines = aligned(headings, "ll" + "r" * (len(names) + 2), rows)
    details = [one_line(f"    {_why(point)}") for point in summary.worst]
    return [lines[0], *(line for pair in zip(lines[1:], details, strict=True) for line in pair)]


def shortened(point: str) -> str:
    """Name of a point, what a table has no room for left out of its middle."""
    if len(point) <= LONGEST_ID:
        return point
    kept = (LONGEST_ID - 1) // 2
    return f"{point[: LONGEST_ID - 1 - kept]}…{point[-kept:]}"


def _why(point: Mapping[str, Any]) -> str:
    states = ", ".join(f"{name} {share:.0%}" for name, share in participating(point).items())
    return f"{point['reason']}; mostly {states}" if states else str(point["reason"])


def participating(point: Mapping[str, Any]) -> dict[str, float]:
    """States that take part most in a point's worst mode, with their participation.

    Parameters
    ----------
    point : dict
        A row of the points table.

    Returns
    -------
    dict of float
        Empty at a depth at which participation is not computed.
    """
    text = str(point.get("top_states", ""))
    names = text.split(", ") if text else []
    return {name: float(point[f"participation_{i}"]) for i, name in enumerate(names, 1)}


def _missed(summary: Summary, units: Mapping[str, str]) -> list[Text]:
    """Give each requirement a line, and another that says where, if it is missed anywhere."""
    # Of too many, those that are missed at most points; in the order of the file.
    room = REQUIREMENT_LINES - MARGIN_LINES * bool(summary.nearest) - len(_named(summary))
    room = max(room, LEAST_LINES)
    most = sorted(summary.missed, key=lambda missed: -missed.points)[:room]
    shown = [missed for missed in summary.missed if missed in most]
    rows: list[list[str | Text]] = [
        [
            Text(str(missed.points), style="" if missed.points else "dim"),
            f"of {missed.judged}",
            number(missed.worst_value, 3),
            f"{missed.name}: {missed.limits}" + ("" if missed.judged else "  (judged at no point)"),
        ]
        for missed in shown
    ]
    lines = aligned(["missed", "at", "worst", "requirement"], "rlrl", rows)
    table = [lines[0]]
    for missed, line in zip(shown, lines[1:], strict=True):
        table.append(line)
        # Where, as long as there is room for every requirement.
        if missed.points and len(shown) < room:
            room -= 1
            where = _within(missed.between, summary.between, units)
            worst = shortened(missed.worst_point)
            table.append(one_line(f"    worst at {worst}; {where}", "dim"))
    more = len(summary.missed) - len(shown)
    plural = "s" * (more > 1)
    return [*table, one_line(f"and {more} more requirement{plural}: --json")] if more else table


def _margins(summary: Summary) -> list[Text]:
    """Show the worst of each margin, and the range that one factor may have everywhere."""
    found = {nearest.quantity: nearest for nearest in summary.nearest if nearest.point}
    if not found:
        return []
    rows = []
    for name in SHOWN_MARGINS:
        nearest = found.get(name)
        if nearest is not None:
            unit = "" if name.endswith(("_db", "_deg", "_s")) else QUANTITIES[name]
            rows.append(
                [
                    f"{name} {unit}".rstrip(),
                    number(nearest.value, 3),
                    shortened(nearest.point),
                    number(nearest.frequency, 3),
                    nearest.loop,
                ]
            )
    lines = [Text(), *aligned(["worst margins", "", "at point", "rad/s", "loop"], "lrlrl", rows)]
    for common in summary.ranges[:1]:
        ends = [
            inward(value, up) + (f" ({shortened(point)})" if point else "")
            for value, up, point in (
                (common.low, True, common.low_point),
                (common.high, False, common.high_point),
            )
        ]
        text = f"all gains by one factor, at every stable point: {ends[0]} to {ends[1]}"
        if common.unknown:
            text = f"at {common.unknown} stable points not decided; {text}"
        lines.append(one_line(text))
    return lines


def _within(
    between: Mapping[str, tuple[float, float]],
    all_points: Mapping[str, tuple[float, float]],
    units: Mapping[str, str],
) -> str:
    """Ranges of coordinates in words; those that all points span tell nothing and are left out."""
    parts = []
    for name, (low, high) in between.items():
        if (low, high) != all_points[name]:
            span = f"{low:g}" if low == high else f"{low:g} to {high:g}"
            parts.append(f"{name} {span} {units.get(name, '')}".rstrip())
    return f"within {', '.join(parts)}" if parts else "all over the envelope"


def _void(summary: Summary) -> list[Text]:
    reasons = list(summary.void.items())
    room = MOST_REASONS - bool(summary.nearest)
    lines = [
        Text.assemble(("void", STYLES["void"]), f" at {count}: {printable(reason)}")
        for reason, count in reasons[:room]
    ]
    rest = sum(count for _, count in reasons[room:])
    if rest:
        lines.append(one_line(f"void at {rest}, for other reasons: see the ledger or --csv"))
    for line in lines:
        line.no_wrap, line.overflow = True, "ellipsis"
    return lines


def _provenance(report: AuditReport) -> list[Text]:
    about, held = report.about, report.summary.held
    sources = len(about["sources"])
    depth = about["settings"]["depth"]
    # Paths stand last: they may be long, and the edge of the screen cuts off what does not fit.
    rows = [
        [
            "bank",
            f"{report.bank}, content {about['digests']['bank'][:12]}, "
            f"{sources} source file{'s' * (sources != 1)}",
        ],
        [
            "loop",
            report.formula
            + (f", edge gains held at {held} points beyond the table" if held else "")
            + f", {report.loop}",
        ],
        [
            "criteria",
            f"depth {depth}"
            + (" (conditioning was not examined)" if depth == "poles" else "")
            + f", {report.criteria}",
        ],
    ]
    if report.run is not None:
        known = " (logged before; the ledger is unchanged)" if report.already_logged else ""
        rows.append(["run", f"{report.run.run}{known}"])
    return aligned(["", ""], "ll", rows)[1:]
