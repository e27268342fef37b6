"""What a look at an unknown export found, for the terminal."""

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from ssaudit.intake.look import FileKind, Look
from ssaudit.report.words import printable

MOST_FILES = 4
MOST_ITEMS = 16
MOST_FINDINGS = 5
MOST_CONTRADICTIONS = 5


def look_text(look: Look, draft: bool = True) -> RenderableType:
    """Lay out what a look found, and the draft layout below it.

    Parameters
    ----------
    look : Look
        From `ssaudit.intake.look.look`.
    draft : bool
        Whether the draft is shown; not when it went to a file.

    Returns
    -------
    rich renderable
    """
    parts: list[RenderableType] = [Text(printable(look.path), style="bold")]
    parts += [_file_line(kind) for kind in look.files[:MOST_FILES]]
    parts += [Text(f"  {printable(line)}") for line in look.findings[:MOST_FINDINGS]]
    parts.append(_items(look))
    if len(look.items) > MOST_ITEMS:
        parts.append(Text(f"  and {len(look.items) - MOST_ITEMS} others", style="dim"))
    parts += [
        Text(f"does not fit: {printable(line)}", style="yellow")
        for line in look.contradictions[:MOST_CONTRADICTIONS]
    ]
    if look.points:
        parts.append(
            Text(
                f"tried: {look.usable} of the first {look.points} points are usable with this "
                f"draft; orientation: {printable(look.orientation)}"
            )
        )
    if draft:
        # A line that is broken or cut is no TOML; one too long for the screen runs over its edge.
        parts += [Text(), Text(_printable_lines(look.draft), no_wrap=True, overflow="ignore")]
    return Group(*parts)


def _file_line(kind: FileKind) -> Text:
    names = f", named {printable(kind.pattern)}" if kind.pattern else f", {printable(kind.example)}"
    files = "1 file" if kind.count == 1 else f"{kind.count} files"
    return Text(f"  {printable(kind.format)}: {files}, {kind.bytes} bytes{names}")


def _items(look: Look) -> Table:
    table = Table.grid(padding=(0, 2))
    for _ in range(4):
        table.add_column(overflow="ellipsis", no_wrap=True)
    for item in look.items[:MOST_ITEMS]:
        table.add_row(
            f"  {printable(item.name)}",
            item.shape,
            printable(item.holds),
            Text(printable(item.role), style="green"),
        )
    return table


def _printable_lines(text: str) -> str:
    return "\n".join(printable(line) for line in text.splitlines())
