"""Whether a loop fits the models of a section, name by name; and if not, why."""

from typing import TYPE_CHECKING

from ssaudit.bank import Section
from ssaudit.loop.gains import Gain
from ssaudit.loop.parts import EVERY
from ssaudit.loop.uncertainty import misfit_of
from ssaudit.settings import nearest

if TYPE_CHECKING:
    from ssaudit.loop.model import Loop

NEEDED = {"states": ("A", "B"), "outputs": ("A", "B", "C", "D"), "none": ("A",)}


def find_misfit(loop: "Loop", section: Section) -> str:
    """Find why a section cannot be closed.

    Parameters
    ----------
    loop : Loop
        How the models are to be closed.
    section : Section
        Names and matrices of the section.

    Returns
    -------
    str
        "" when it can be closed.
    """
    missing = [name for name in NEEDED[loop.feed] if name not in section.matrices]
    if missing:
        zeros = " (export zeros if there is no feedthrough)" if missing[0] == "D" else ""
        return f"{missing[0]} is missing, and feed = {loop.feed!r} needs it{zeros}"
    signals, extra = loop.signals(section), loop.compensator
    reasons = [misfit_of(statement, section, signals) for statement in loop.uncertain]
    if loop.gain is not None:
        reasons += ["" if loop.plain else _misfit_of_path(loop, section)]
        kind, fed = loop.feed.removesuffix("s"), (*signals, *extra)
        reasons += [
            _misfit_of_names(loop.gain, "input", loop.gain.inputs, (*section.inputs, *extra), 0),
            _misfit_of_names(loop.gain, kind, loop.gain.signals, fed, 1),
        ]
    return next((reason for reason in reasons if reason), "")


def _misfit_of_path(loop: "Loop", section: Section) -> str:
    """Why parts, sampling or compensator do not fit a section."""
    if section.dt > 0 and (loop.sampling or loop.parts):
        return "parts and sampling are for continuous models; these are sampled"
    if "E" in section.matrices and loop.sampling:
        return "descriptor models cannot be sampled"
    inputs, signals = section.inputs, loop.signals(section)
    for part in loop.parts:
        side, valid = ("input", inputs) if part.input else ("signal", signals)
        place = part.input or part.signal
        if place != EVERY and place not in valid:
            return f"part {part.name!r} names no {side}: {place!r}; {nearest(place, valid)}"
    for name in loop.compensator:
        if name in inputs or name in signals:
            return f"the compensator's state {name!r} has the name of an input or a signal"
    return ""


def _misfit_of_names(
    gain: Gain, kind: str, named: tuple[str, ...] | None, valid: tuple[str, ...], axis: int
) -> str:
    """Why the names of a gain's rows or columns do not fit those of the models."""
    if named is None:
        found = gain.matrix.shape[axis]  # type: ignore[union-attr]
        if found == len(valid):
            return ""
        names = ", ".join(valid)
        return f"the gain matrix is for {found} {kind}s, the models have {len(valid)}: {names}"
    for name in named:
        if name not in valid:
            return f"the gain names {name!r}, no {kind} here: {nearest(name, valid)}"
    missing = [name for name in valid if name not in named]
    if missing and gain.unnamed == "refuse":
        return (
            f"the gain does not name the {kind} {missing[0]!r}; name all of "
            f'{", ".join(valid)}, or set unnamed = "zero" in [gain]'
        )
    return ""
