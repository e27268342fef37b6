"""What came of taking exports in, for the terminal."""

from rich.console import RenderableType
from rich.text import Text

from ssaudit.intake.ingest import Intake
from ssaudit.report.words import printable

MOST_REASONS = 8


def intake_text(intake: Intake) -> RenderableType:
    """Lay out what came of an ingest.

    Parameters
    ----------
    intake : Intake
        From `ssaudit.intake.ingest.ingest`.

    Returns
    -------
    rich renderable
    """
    void = sum(intake.void.values())
    text = Text()
    text.append(f"revision {printable(intake.revision)}", style="bold")
    text.append(f"  {intake.points} points: {intake.points - void} usable, {void} void\n")
    for reason, count in list(intake.void.items())[:MOST_REASONS]:
        text.append(f"  {count:>7}  {printable(reason)}\n")
    text.append(f"bank {printable(intake.bank)}  digest {intake.digest[:12]}")
    return text
