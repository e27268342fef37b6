"""Write a draft layout as TOML."""

import json
import re
import textwrap
from collections.abc import Mapping
from typing import Any

from ssaudit.intake.layout import KEYS

_BARE = re.compile(r"[A-Za-z0-9_-]+")
HEAD = (
    "# Draft layout. Read it against the export.",
    "# configs/layouts/README.md explains the keys.",
)
# Characters of a line, so that no screen breaks it.
WIDTH = 79


def write_draft(content: Mapping[str, Any], remarks: Mapping[str, str]) -> str:
    """Write the content of a layout as TOML, in lines that fit a narrow screen.

    Comments stand above what they are about where they would make its line too long.

    Parameters
    ----------
    content : dict
        As `ssaudit.intake.layout.parse_layout` takes it.
    remarks : dict of str
        Comments by key, ``points`` or ``coordinates.speed``; "" is for the top.

    Returns
    -------
    str

    Examples
    --------
    >>> print(write_draft({"format": "npz", "matrices": {"A": "lin/A"}}, {"format": "sure"}))
    # Draft layout. Read it against the export.
    # configs/layouts/README.md explains the keys.
    format = "npz"  # sure
    <BLANKLINE>
    [matrices]
    A = "lin/A"
    <BLANKLINE>
    """
    lines = [*HEAD]
    for line in remarks.get("", "").splitlines():
        lines += _comment(line)
    tables = []
    for key in KEYS:
        if key not in content:
            continue
        value = content[key]
        if isinstance(value, Mapping):
            tables += _tables(key, value, remarks)
        else:
            lines += _entry(key, value, remarks.get(key, ""))
    return "\n".join([*lines, *tables]) + "\n"


def _tables(name: str, table: Mapping[str, Any], remarks: Mapping[str, str]) -> list[str]:
    plain = {key: value for key, value in table.items() if not isinstance(value, Mapping)}
    lines = ["", *_remarked(f"[{name}]", remarks.get(name, ""))] if plain else []
    for key, value in plain.items():
        lines += _entry(key, value, remarks.get(f"{name}.{key}", ""))
    for key, inner in table.items():
        if isinstance(inner, Mapping):
            head = f"[{name}.{_key(key)}]"
            lines += ["", *_remarked(head, remarks.get(f"{name}.{key}", ""))]
            for inner_key, value in inner.items():
                lines += _entry(inner_key, value, "")
    return lines


def _entry(key: str, value: Any, remark: str) -> list[str]:
    """Lines of one key; a list that is too long for one has an item a line."""
    line = f"{_key(key)} = {_value(value)}"
    if len(line) > WIDTH and isinstance(value, list | tuple):
        items = [f"    {_value(item)}," for item in value]
        return [*_comment(remark), f"{_key(key)} = [", *items, "]"]
    return _remarked(line, remark)


def _remarked(line: str, remark: str) -> list[str]:
    """Put a comment behind a line, or above it where there is no room."""
    if not remark:
        return [line]
    behind = f"{line}  # {_plain(remark)}"
    return [behind] if len(behind) <= WIDTH else [*_comment(remark), line]


def _comment(text: str) -> list[str]:
    return [f"# {line}" for line in textwrap.wrap(_plain(text), WIDTH - 2)]


def _plain(text: str) -> str:
    return "".join(c if c.isprintable() else "?" for c in text)


def _key(name: str) -> str:
    return name if _BARE.fullmatch(name) else _value(name)


def _value(value: Any) -> str:
    if isinstance(value, list | tuple):
        return "[" + ", ".join(_value(item) for item in value) + "]"
    # JSON's text, whole numbers and finite numbers are TOML's; DEL must be escaped besides.
    return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
