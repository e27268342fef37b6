"""What came of taking exports in, for the terminal."""

from collections.abc import Mapping, Sequence

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from ssaudit.intake.ingest import Intake
from ssaudit.intake.report import (
    Coordinate,
    Grid,
    SectionFound,
    Suspects,
    Tag,
)
from ssaudit.report.words import number, printable

# Lines of each part; together with what always shows they stay below 40.
MOST_REASONS = 5
MOST_COORDINATES = 4
MOST_TAGS = 2
MOST_SECTIONS = 3
MOST_NOTES = 4
# Signals of a section that are named before the rest is counted.
MOST_NAMES = 8


def intake_text(intake: Intake) -> RenderableType:
    """Lay out what came of an ingest in at most 40 lines.

    Parameters
    ----------
    intake : Intake
        From `ssaudit.intake.ingest.ingest`.

    Returns
    -------
    rich renderable
    """
    report = intake.report
    table = Table.grid(padding=(0, 2))
    table.add_column(style="dim", no_wrap=True, min_width=9, max_width=20)
    table.add_column(overflow="ellipsis", no_wrap=True)
    for label, line in [
        *_envelope_lines(report.coordinates, report.tags, report.grid),
        *_section_lines(report.sections),
        *_suspect_lines(report.suspects),
        *_note_lines(report.notes),
    ]:
        table.add_row(label, line)
    end = Text(f"bank {printable(intake.bank)}  digest {intake.digest[:12]}", overflow="fold")
    return Group(_head(intake), *_void_lines(report.void), table, end)


def _head(intake: Intake) -> Text:
    report = intake.report
    void = report.points - report.usable
    text = Text()
    text.append(f"revision {printable(intake.revision)}", style="bold")
    text.append(f"  {_count(report.points, 'point')}: {report.usable} usable, ")
    text.append(f"{void} void", style="cyan" if void else "")
    text.append(f"  from {_count(report.files, 'file')}, {_size(report.bytes)}")
    text.append(f", {printable(report.layout)}")
    return text


def _count(count: int, word: str) -> str:
    return f"{count} {word}{'' if count == 1 else 's'}"


def _size(count: int) -> str:
    for unit, size in (("GB", 1e9), ("MB", 1e6), ("kB", 1e3)):
        if count >= size:
            return f"{count / size:.3g} {unit}"
    return f"{count} bytes"


def _void_lines(void: Mapping[str, int]) -> list[Text]:
    lines = [
        Text(f"{count:>9}  {printable(reason)}", overflow="ellipsis", no_wrap=True)
        for reason, count in list(void.items())[:MOST_REASONS]
    ]
    rest = list(void.values())[MOST_REASONS:]
    if rest:
        lines.append(Text(f"{sum(rest):>9}  for {len(rest)} other reasons"))
    return lines


Lines = list[tuple[str, Text]]


def _envelope_lines(
    coordinates: Sequence[Coordinate], tags: Sequence[Tag], grid: Grid | None
) -> Lines:
    lines = [(printable(c.name), Text(_coordinate(c))) for c in coordinates[:MOST_COORDINATES]]
    if len(coordinates) > MOST_COORDINATES:
        lines.append(("", Text(f"and {len(coordinates) - MOST_COORDINATES} other coordinates")))
    for tag in tags[:MOST_TAGS]:
        words = ", ".join(f"{printable(w) or '-'} {n}" for w, n in list(tag.counts.items())[:6])
        more = ", …" if len(tag.counts) > 6 else ""
        lines.append((printable(tag.name), Text(words + more)))
    if coordinates:
        lines.append(("grid", Text(_grid(grid))))
    return lines


def _coordinate(coordinate: Coordinate) -> str:
    unit = f" {printable(coordinate.unit)}" if coordinate.unit else ""
    if coordinate.distinct == 1:
        return f"{number(coordinate.least)}{unit} at all points"
    least, greatest = coordinate.least_step, coordinate.greatest_step
    if greatest - least <= 1e-6 * greatest:
        steps = f"steps of {number(greatest)}"
    else:
        steps = f"steps of {number(least)} to {number(greatest)}"
    span = f"{number(coordinate.least)} to {number(coordinate.greatest)}{unit}"
    return f"{span}, {coordinate.distinct} values in {steps}"


def _grid(grid: Grid | None) -> str:
    if grid is None:
        return "none: the points lie scattered"
    if not grid.holes:
        return f"{_count(grid.places, 'place')}, none without a point"
    first = ", ".join(
        " ".join(f"{printable(name)} {number(value)}" for name, value in hole.items())
        for hole in grid.examples[:2]
    )
    return f"{_count(grid.places, 'place')}, {grid.holes} without a point: {first}" + (
        ", …" if grid.holes > 2 else ""
    )


def _section_lines(sections: Sequence[SectionFound]) -> Lines:
    lines: Lines = []
    for place, section in enumerate(sections[:MOST_SECTIONS], start=1):
        label = "models" if len(sections) == 1 else f"section {place}"
        lines.append((label, Text(_section(section))))
        lines.append(("", Text(_names("states", section.states))))
        lines.append(("", Text(_entries(section))))
        says = section.orientation
        style = "" if says.says == "as read" else "yellow"
        lines.append(("", Text(f"orientation: {says.says}; {printable(says.why)}", style=style)))
    if len(sections) > MOST_SECTIONS:
        lines.append(("", Text(f"and {len(sections) - MOST_SECTIONS} other sections")))
    return lines


def _section(section: SectionFound) -> str:
    sizes = (
        f"{len(section.states)} states, {len(section.inputs)} inputs, "
        f"{len(section.outputs)} outputs"
    )
    time = f"sampled every {number(section.dt)} s" if section.dt else "continuous"
    digits = (
        f"{section.digits} digits ({section.digits_by})" if section.digits else "full precision"
    )
    return f"{_count(section.points, 'point')}: {sizes}; {time}; {digits}"


def _names(kind: str, names: Sequence[str]) -> str:
    shown = ", ".join(printable(name) for name in names[:MOST_NAMES])
    return f"{kind} {shown}" + (", …" if len(names) > MOST_NAMES else "")


def _entries(section: SectionFound) -> str:
    zero = ", ".join(f"{e.matrix} {e.zero} of {e.rows * e.columns}" for e in section.entries)
    constant = sum(e.constant for e in section.entries)
    return f"zero entries {zero}; {constant} others constant"


def _suspect_lines(suspects: Suspects) -> Lines:
    lines: Lines = []
    if suspects.jumps:
        lines.append(
            ("suspect", Text(f"{suspects.jumps} entries jump at single points; greatest:"))
        )
        for jump in suspects.jump_examples[:3]:
            times = max(jump.factor, 1 / jump.factor)
            which = "greater" if jump.factor > 1 else "smaller"
            change = f"{number(times, 2)} times {which} than at its neighbours"
            place = f"{printable(jump.entry)} at {printable(jump.point)}"
            lines.append(("", Text(f"  {place} is {number(jump.value)}, {change}")))
    for count, pairs, what in (
        (suspects.close, suspects.close_examples, "points nearly coincide"),
        (suspects.alike, suspects.alike_examples, "points share their models with another"),
    ):
        if count:
            first = f"{printable(pairs[0].first)} and {printable(pairs[0].second)}"
            lines.append(("suspect", Text(f"{count} {what}, for example {first}")))
    if not lines and suspects.jumps_examined:
        lines.append(("suspect", Text("none: no entry jumps, no points coincide")))
    return lines


def _note_lines(notes: Sequence[str]) -> Lines:
    lines: Lines = [("note", Text(printable(note))) for note in notes[:MOST_NOTES]]
    if len(notes) > MOST_NOTES:
        lines.append(("", Text(f"and {len(notes) - MOST_NOTES} other notes")))
    return lines
