"""What came of taking exports in, for the terminal."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from rich.cells import cell_len
from rich.console import Console, ConsoleOptions, Group, RenderableType, RenderResult
from rich.text import Text

from ssaudit.bank_checks import DUPLICATE_PLACE
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
# Lines of all parts together; what is longer than a line goes on below while some are left.
MOST_LINES = 36
MOST_MORE = 2
# Characters of the labels, and what stands between them and what they label.
LEAST_LABEL, MOST_LABEL = 9, 20
GAP = "  "
# How the reason of points begins that are void for the coordinates they share.
SAME_PLACE = DUPLICATE_PLACE.partition("{")[0]
# Values of a coordinate that are no set of chosen ones: so many in uneven steps, or more than a few
# in steps that differ by such a factor. Ours; no source.
MANY_VALUES = 1000
FEW_VALUES = 20
UNEVEN = 100.0
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
    lines = [
        *_void_lines(report.void),
        *_envelope_lines(report.coordinates, report.tags, report.grid),
        *_section_lines(report.sections),
        *_suspect_lines(report.suspects, report.void),
        *_note_lines(report.notes),
    ]
    end = Text(f"bank {printable(intake.bank)}  digest {intake.digest[:12]}")
    return Group(_Wrapped(_head(intake)), _Labelled(lines), _Wrapped(end))


@dataclass(frozen=True)
class _Wrapped:
    """A text in as many lines as it takes, without trailing blanks."""

    text: Text

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        """Render at the width there is."""
        yield from _wrapped(self.text, console, options.max_width, MOST_LINES)


@dataclass(frozen=True)
class _Labelled:
    """Labels and what they label; what is too long goes on below, in its own column."""

    lines: "Lines"

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        """Render at the width there is, without trailing blanks."""
        widest = max((cell_len(label) for label, _ in self.lines), default=0)
        labels = min(MOST_LABEL, max(LEAST_LABEL, widest))
        width = max(LEAST_LABEL, options.max_width - labels - len(GAP))
        spare = MOST_LINES - len(self.lines)
        for label, text in self.lines:
            wrapped = _wrapped(text, console, width, 1 + max(0, min(spare, MOST_MORE)))
            spare -= len(wrapped) - 1
            for number_, part in enumerate(wrapped):
                head = Text(label if number_ == 0 else "", style="dim")
                head.truncate(labels, overflow="ellipsis", pad=True)
                line = Text.assemble(head, GAP, part, no_wrap=True, overflow="ellipsis")
                line.rstrip()
                yield line


def _wrapped(text: Text, console: Console, width: int, most: int) -> list[Text]:
    """Break a text between words into at most so many lines; an ellipsis tells of what is left."""
    parts = list(text.wrap(console, width, overflow="fold"))
    for part in parts:
        part.rstrip()
    if len(parts) <= most:
        return parts
    last = parts[most - 1]
    # The ellipsis takes the place of a word that leaves no room for it.
    while last.cell_len > width - 2 and " " in last.plain:
        last.right_crop(len(last.plain) - last.plain.rstrip().rindex(" "))
        last.rstrip()
    if last.cell_len > width - 2:
        last.truncate(width - 2)
    last.append(" …")
    return parts[:most]


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


Lines = list[tuple[str, Text]]


def _void_lines(void: Mapping[str, int]) -> Lines:
    lines = [
        (f"{count:>9}", Text(printable(reason)))
        for reason, count in list(void.items())[:MOST_REASONS]
    ]
    rest = list(void.values())[MOST_REASONS:]
    if rest:
        lines.append((f"{sum(rest):>9}", Text(f"for {_count(len(rest), 'other reason')}")))
    return lines


def _envelope_lines(
    coordinates: Sequence[Coordinate], tags: Sequence[Tag], grid: Grid | None
) -> Lines:
    lines = [(printable(c.name), Text(_coordinate(c))) for c in coordinates[:MOST_COORDINATES]]
    if len(coordinates) > MOST_COORDINATES:
        lines.append(
            ("", Text(f"and {_count(len(coordinates) - MOST_COORDINATES, 'other coordinate')}"))
        )
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
    span = f"{number(coordinate.least)} to {number(coordinate.greatest)}{unit}"
    values = f"{span}, {coordinate.distinct} values"
    if greatest - least <= 1e-6 * greatest:
        return f"{values} in steps of {number(greatest)}"
    uneven = coordinate.distinct > FEW_VALUES and greatest > UNEVEN * least
    if coordinate.distinct > MANY_VALUES or uneven:
        return f"{values}, scattered"
    return f"{values} in steps of {number(least)} to {number(greatest)}"


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
        lines.append(("", Text(f"and {_count(len(sections) - MOST_SECTIONS, 'other section')}")))
    return lines


def _section(section: SectionFound) -> str:
    sizes = (
        f"{_count(len(section.states), 'state')}, {_count(len(section.inputs), 'input')}, "
        f"{_count(len(section.outputs), 'output')}"
    )
    time = f"sampled every {number(section.dt)} s" if section.dt else "continuous"
    digits = (
        f"{_count(section.digits, 'digit')} ({section.digits_by})"
        if section.digits
        else "full precision"
    )
    return f"{_count(section.points, 'point')}: {sizes}; {time}; {digits}"


def _names(kind: str, names: Sequence[str]) -> str:
    shown = ", ".join(printable(name) for name in names[:MOST_NAMES])
    return f"{kind} {shown}" + (", …" if len(names) > MOST_NAMES else "")


def _entries(section: SectionFound) -> str:
    zero = ", ".join(f"{e.matrix} {e.zero} of {e.rows * e.columns}" for e in section.entries)
    constant = sum(e.constant for e in section.entries)
    return f"zero entries {zero}; {_count(constant, 'other')} constant"


def _jumps(count: int) -> str:
    return (
        "1 entry jumps at a single point"
        if count == 1
        else f"{count} entries jump at single points"
    )


def _suspect_lines(suspects: Suspects, void: Mapping[str, int]) -> Lines:
    lines: Lines = []
    if suspects.jumps:
        lines.append(("suspect", Text(f"{_jumps(suspects.jumps)}; greatest:")))
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
        further = "further " if any(reason.startswith(SAME_PLACE) for reason in void) else ""
        lines.append(("suspect", Text(f"none: no entry jumps, no {further}points coincide")))
    return lines


def _note_lines(notes: Sequence[str]) -> Lines:
    lines: Lines = [("note", Text(printable(note))) for note in notes[:MOST_NOTES]]
    if len(notes) > MOST_NOTES:
        lines.append(("", Text(f"and {_count(len(notes) - MOST_NOTES, 'other note')}")))
    return lines
