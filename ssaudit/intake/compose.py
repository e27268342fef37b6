"""Put the intake report together from what the stages of an intake noted."""

import re
from collections.abc import Sequence

import numpy as np

from ssaudit.bank import Points, Source
from ssaudit.bank_writer import Settled
from ssaudit.intake.envelope import describe_coordinates, describe_tags, find_grid
from ssaudit.intake.layout import Layout
from ssaudit.intake.orientation import TRANSPOSED
from ssaudit.intake.report import IntakeReport, SectionFound
from ssaudit.intake.survey import Survey, dead_signals
from ssaudit.intake.suspects import find_suspects
from ssaudit.intake.unused import listed

MOST_REASONS = 100
# Unused arrays and attributes that are named.
MOST_UNUSED = 20


def compose(
    settled: Settled,
    survey: Survey,
    sources: Sequence[Source],
    size: int,
    layout: Layout | None,
    reordered: int,
    unused: Sequence[str] = (),
) -> IntakeReport:
    """Write the intake report of a finished bank.

    Parameters
    ----------
    settled : Settled
        Its points and sections.
    survey : Survey
        What was noted of its models.
    sources : sequence of Source
        The files read.
    size : int
        Their bytes.
    layout : Layout or None
        None for the default layout.
    reordered : int
        Points whose signals were put in another order.
    unused : sequence of str
        What the files hold and was not read.

    Returns
    -------
    IntakeReport
    """
    points = settled.points
    sections = survey.describe(settled)
    return IntakeReport(
        files=len(sources),
        bytes=size,
        layout=layout.name if layout else "default layout",
        points=len(points),
        usable=int(np.count_nonzero(points.void == "")),
        void=count_alike(points),
        coordinates=describe_coordinates(points),
        tags=describe_tags(points),
        grid=find_grid(points),
        sections=sections,
        suspects=find_suspects(settled, survey),
        notes=(
            *_unused(unused),
            *_notes(settled, sections, survey, layout, reordered),
        ),
    )


def count_alike(points: Points) -> dict[str, int]:
    """Count void points by reason, those that differ by the entry alone taken together.

    Examples
    --------
    >>> from ssaudit.bank_arrays import build_bank
    >>> A = np.full((2, 2, 2), 1.0)
    >>> A[0, 0, 1] = A[1, 1, 1] = np.nan
    >>> count_alike(build_bank(A, revision="R").points)
    {'an entry of A is NaN': 2}
    """
    reasons, counts = np.unique(points.void[points.void != ""].astype(np.str_), return_counts=True)
    found: dict[str, int] = {}
    for reason, count in zip(reasons.tolist(), counts.tolist(), strict=True):
        alike = re.sub(r"^([A-E])\[\d+,\d+\]", r"an entry of \1", reason)
        alike = re.sub(r"^line \d+:", "a line:", alike)
        found[alike] = found.get(alike, 0) + count
    order = sorted(found, key=lambda reason: -found[reason])
    return {reason: found[reason] for reason in order[:MOST_REASONS]}


def _notes(
    settled: Settled,
    sections: Sequence[SectionFound],
    survey: Survey,
    layout: Layout | None,
    reordered: int,
) -> list[str]:
    notes = []
    turned: dict[str, int] = {}
    for noted in survey.sections.values():
        for file, count in noted.turned.items():
            turned[file] = turned.get(file, 0) + count
    if any(section.orientation.says == TRANSPOSED for section in sections):
        notes.append(
            'matrices look transposed; if they are, say order = "column-major" in a layout'
        )
    if turned:
        notes.append(
            f"A of {_points(sum(turned.values()))} looks transposed against the others, "
            f"first in {next(iter(turned))}"
        )
    if reordered:
        notes.append(f"signals of {_points(reordered)} were put in the order of the first file")
    for number, section in zip(settled.numbers, settled.sections, strict=True):
        if section.states:
            notes += dead_signals(section, survey.sections[number])
    if layout is not None:
        notes += _left_out(layout)
    if not survey.sizes_kept:
        notes.append("the bank is too large to look for entries that jump")
    return list(dict.fromkeys(notes))


def _points(count: int) -> str:
    return f"{count} point{'' if count == 1 else 's'}"


def _unused(names: Sequence[str]) -> list[str]:
    """Say what was not read: it may be what somebody took for a part of the export."""
    return [f"not used: {listed(names, MOST_UNUSED)}"] if names else []


def _left_out(layout: Layout) -> list[str]:
    """Say what it means that a layout takes some of the states alone."""
    if "states" not in layout.take:
        return []
    named = layout.names.get("states")
    if isinstance(named, tuple) and set(named) == set(layout.take["states"]):
        return []
    taken = len(layout.take["states"])
    return [
        f"{taken} state{' is' if taken == 1 else 's are'} taken; what others do to "
        f"{'it' if taken == 1 else 'these'} is left out of the models"
    ]
