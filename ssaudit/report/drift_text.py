"""Drift and trend on a screen: what got worse first."""

from collections.abc import Sequence
from typing import Any

from rich.console import Group, RenderableType
from rich.text import Text

from ssaudit.ledger import LoggedRun
from ssaudit.report.audit_text import shortened
from ssaudit.report.words import ORDER, aligned, cautions, number, one_line, verdict
from ssaudit.stages import WORST, Comparison

NAMES = {"max_real": "max_real 1/s", "min_damping": "min_damping"}
CHANGES = ("worse", "appeared", "vanished", "better")


def drift_text(comparison: Comparison, most: int | None = None) -> RenderableType:
    """Lay out a comparison of two runs for the terminal.

    Parameters
    ----------
    comparison : Comparison
        What changed.
    most : int, optional
        How many points to list of each kind; `WORST` when absent.

    Returns
    -------
    rich renderable
    """
    most = WORST if most is None else most
    before, after, found = comparison.before, comparison.after, comparison.drift
    title = f"Drift from revision {before.revision} to {after.revision}"
    matched = f"points matched by {found.matched_by}"
    if found.matched_by == "coordinates":
        matched += f" (within {found.tolerance:g} of their range)"
    counts = "   ".join(f"{found.changes[name]} {name}" for name in CHANGES)
    counts += f"   {found.changes['same']} same verdict"
    parts: list[RenderableType] = [one_line(f"{title}, {matched}", "bold"), one_line(counts)]
    parts.append(one_line(_inputs(comparison)))
    if found.relocated:
        parts.append(one_line(f"{found.relocated} points have the same id, other coordinates"))
    parts += [Text(), *_verdicts(comparison), Text(), *_movement(comparison)]
    units = after.about["units"]
    for change in CHANGES:
        rows = found.changed(change)
        if len(rows):
            parts += [Text(), *_points(f"{change} ({len(rows)})", rows, units, most)]
    movers = found.movers(most)
    if len(movers):
        parts += [Text(), *_points("moved most", movers, units, most)]
    runs = [
        [name, f"{run.run}, revision {run.revision}"]
        for name, run in (("from", before), ("to", after))
    ]
    return Group(*parts, Text(), *aligned(["", ""], "ll", runs)[1:], Text(), cautions())


def _inputs(comparison: Comparison) -> str:
    """Say what the runs were made of that differs, and what does not."""
    differ = [name for name, other in comparison.inputs.items() if other]
    same = [name for name, other in comparison.inputs.items() if not other]
    if not differ:
        return "made of the same: nothing differs"
    return f"other {', '.join(differ)}" + (f"; the same {', '.join(same)}" if same else "")


def _verdicts(comparison: Comparison) -> list[Text]:
    """Count the verdicts before (down) and after (across)."""
    counts = comparison.drift.verdicts
    names = [name for name in ORDER if any(name in pair for pair in counts)]
    rows: list[list[str | Text]] = []
    for old in names:
        numbers = [counts.get((old, new), 0) for new in names]
        rows.append([verdict(old), *(str(n) if n else "." for n in numbers)])
    return aligned(["before, and after:", *names], "l" + "r" * len(names), rows)


def _movement(comparison: Comparison) -> list[Text]:
    headings = ["change", "worse", "better", "least", "5 %", "median", "95 %", "greatest"]
    rows = []
    for name, moved in comparison.drift.moved.items():
        quantiles = [number(moved[key], 3) for key in ("q000", "q005", "q050", "q095", "q100")]
        rows.append([NAMES[name], f"{moved['worse']:.0f}", f"{moved['better']:.0f}", *quantiles])
    return aligned(headings, "lrrrrrrr", rows)


def _points(title: str, rows: Any, units: Any, most: int) -> list[Text]:
    names = [name[3:] for name in rows if name.startswith("at_")]
    places = [f"{name}\n{units.get(name, '')}".rstrip() for name in names]
    headings = [title, "verdict", "max_real 1/s", "min_damping", *places]
    cells = [
        [
            shortened(row["point"]),
            _arrow(_word(row["verdict_from"]), _word(row["verdict_to"])),
            _arrow(number(row["max_real_from"], 3), number(row["max_real_to"], 3)),
            _arrow(number(row["min_damping_from"], 3), number(row["min_damping_to"], 3)),
            *(f"{row['at_' + name]:g}" for name in names),
        ]
        for row in rows.head(most).to_dict("records")
    ]
    lines = aligned(headings, "llrr" + "r" * len(names), cells)
    rest = len(rows) - most
    return [*lines, one_line(f"and {rest} more: --json", "dim")] if rest > 0 else lines


def _word(value: Any) -> str:
    return value if isinstance(value, str) else "-"


def _arrow(old: str, new: str) -> str:
    return old if old == new else f"{old} → {new}"


def trend_text(runs: Sequence[LoggedRun]) -> RenderableType:
    """Lay out the revisions of a ledger, one a line.

    Parameters
    ----------
    runs : sequence of LoggedRun
        The newest run of each revision.

    Returns
    -------
    rich renderable
    """
    headings = ["revision", "points", *ORDER, "max_real 1/s", "min_damping", "logged (UTC)"]
    rows = []
    for run in runs:
        counts = run.about["counts"]
        when = run.run.partition("-")[0]
        rows.append(
            [
                run.revision,
                str(counts["total"]),
                *(str(counts[name]) if counts[name] else "." for name in ORDER),
                number(run.about["max_real"], 3),
                number(run.about["min_damping"], 3),
                f"{when[:4]}-{when[4:6]}-{when[6:8]} {when[9:11]}:{when[11:13]}",
            ]
        )
    sides = "l" + "r" * (len(ORDER) + 3) + "l"
    return Group(*aligned(headings, sides, rows), Text(), cautions())
