"""Words and numbers as reports show them: units, digits, verdicts, cautions."""

import math
from collections.abc import Mapping, Sequence

from rich.text import Text

CAUTIONS = (
    "Linear models, each point alone and at rest: stable at every point does not prove the "
    "scheduled system stable while the operating point moves fast, nor in the nonlinear plant.",
    "This supports, and does not replace, simulation, test, the rules that apply to the machine, "
    "and the judgement of the engineers licensed or appointed to release it.",
)
# The word stands beside every colour.
STYLES = {"ok": "green", "short": "yellow", "lost": "bold red", "doubt": "magenta", "void": "cyan"}
ORDER = ("lost", "doubt", "short", "void", "ok")


def printable(text: object) -> str:
    r"""Text without characters that would steer a terminal.

    Examples
    --------
    >>> printable("cruise\x1b[2J")
    'cruise�[2J'
    """
    return "".join(c if c.isprintable() else "\ufffd" for c in str(text))


def number(value: float | None, digits: int = 4) -> str:
    """Give a number three or four significant digits; a dash where there is none.

    Examples
    --------
    >>> number(0.0123456), number(float("nan")), number(12345.6), number(float("inf"))
    ('0.01235', '-', '12350', 'inf')
    """
    if value is None or math.isnan(value):
        return "-"
    if math.isinf(value) or value == 0:
        return f"{value + 0.0:g}"  # which turns -0 into 0
    rounded = float(f"{value:.{digits}g}")
    if 1e-4 <= abs(rounded) < 1e6:
        places = max(0, digits - 1 - math.floor(math.log10(abs(rounded))))
        return f"{rounded:.{places}f}"
    return f"{rounded:.{digits - 1}e}"


def inward(value: float, up: bool) -> str:
    """Give an end of a range four digits, rounded into the range: ``up`` for its lower end.

    Examples
    --------
    >>> inward(1.00789, False), inward(0.05612, True), inward(float("inf"), False)
    ('1.007', '0.05612', 'inf')
    """
    if not math.isfinite(value) or value == 0:
        return number(value)
    unit = 10.0 ** (math.floor(math.log10(abs(value))) - 3)
    steps = math.ceil(value / unit - 1e-9) if up else math.floor(value / unit + 1e-9)
    return number(steps * unit)


def pole(real: float, imag: float) -> str:
    """Write a pole or a conjugate pair.

    Examples
    --------
    >>> pole(-0.3719, 0.8875), pole(-2.0, 0.0)
    ('-0.3719 ± 0.8875i', '-2.000')
    """
    if math.isnan(real):
        return "-"
    return number(real) + (f" ± {number(imag)}i" if imag else "")


def place(at: Mapping[str, float], units: Mapping[str, str]) -> str:
    """Coordinates in words.

    Examples
    --------
    >>> place({"speed": 20.0, "mass": 95.0}, {"speed": "m/s", "mass": "t"})
    'speed 20 m/s, mass 95 t'
    """
    return ", ".join(
        printable(f"{name} {value:g} {units.get(name, '')}".rstrip()) for name, value in at.items()
    )


def verdict(name: str) -> Text:
    """Write a verdict in its colour."""
    return Text(name, style=STYLES.get(name, ""))


def counts(points: Mapping[str, int]) -> Text:
    """Write counts of verdicts, the gravest first; all of them, so that a nought can be seen."""
    parts = []
    for name in ORDER:
        style = STYLES[name] if points[name] else "dim"
        parts.append(Text(f"{points[name]} {name}", style=style))
    return Text("   ").join(parts)


def aligned(
    headings: Sequence[str], sides: str, rows: Sequence[Sequence[str | Text]], indent: str = ""
) -> list[Text]:
    r"""Lay out a table as lines: a dim heading, then a line a row, columns aligned.

    Parameters
    ----------
    headings : sequence of str
        One a column; "name\nunit" stands in two lines.
    sides : str
        "l" or "r" for each column; what does not fit the screen is cut off at the right.
    rows : sequence of rows
        Cells as text; text from files is made printable.
    indent : str
        Put before each line.

    Returns
    -------
    list of Text

    Examples
    --------
    >>> [line.plain for line in aligned(["state", "share"], "lr", [["pitch", "0.61"]])]
    ['state  share', 'pitch   0.61']
    >>> [line.plain for line in aligned(["loop", "up\ndB"], "lr", [["pitch", "6.88"]])]
    ['         up', 'loop     dB', 'pitch  6.88']
    """
    heads = [heading.split("\n") for heading in headings]
    depth = max(len(head) for head in heads)
    heads = [[""] * (depth - len(head)) + head for head in heads]
    head = [[Text(printable(lines[i]), style="dim") for lines in heads] for i in range(depth)]
    cells = [[c if isinstance(c, Text) else Text(printable(c)) for c in row] for row in rows]
    table = [*head, *cells]
    widths = [max(row[i].cell_len for row in table) for i in range(len(headings))]
    return [_line(row, widths, sides, indent) for row in table]


def _line(row: Sequence[Text], widths: Sequence[int], sides: str, indent: str) -> Text:
    line = Text(indent, no_wrap=True, overflow="ellipsis")
    for i, (cell, width, side) in enumerate(zip(row, widths, sides, strict=True)):
        gap = " " * (width - cell.cell_len)
        line.append("  " if i else "")
        line.append(gap if side == "r" else "")
        line.append_text(cell)
        line.append(gap if side == "l" and i + 1 < len(row) else "")
    return line


def one_line(text: str, style: str = "") -> Text:
    """Text that is cut off at the right edge rather than wrapped."""
    return Text(printable(text), style=style, no_wrap=True, overflow="ellipsis")


def cautions() -> Text:
    """Write the cautions that stand under every report."""
    return Text(" ".join(CAUTIONS), style="dim")
