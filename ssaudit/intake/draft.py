"""Write a draft layout as TOML."""

import json
import re
from collections.abc import Mapping
from typing import Any

from ssaudit.intake.layout import KEYS

_BARE = re.compile(r"[A-Za-z0-9_-]+")
HEAD = "# Draft layout. Read it against the export; configs/layouts/README.md explains the keys."


def write_draft(content: Mapping[str, Any], remarks: Mapping[str, str]) -> str:
    """Write the content of a layout as TOML.

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
    # Draft layout. Read it against the export; configs/layouts/README.md explains the keys.
    format = "npz"  # sure
    <BLANKLINE>
    [matrices]
    A = "lin/A"
    <BLANKLINE>
    """
    lines = [HEAD, *(f"# {_plain(line)}" for line in remarks.get("", "").splitlines())]
    tables = []
    for key in KEYS:
        if key not in content:
            continue
        value = content[key]
        if isinstance(value, Mapping):
            tables += _tables(key, value, remarks)
        else:
            lines.append(f"{key} = {_value(value)}{_remark(remarks, key)}")
    return "\n".join([*lines, *tables]) + "\n"


def _tables(name: str, table: Mapping[str, Any], remarks: Mapping[str, str]) -> list[str]:
    plain = {key: value for key, value in table.items() if not isinstance(value, Mapping)}
    lines = ["", f"[{name}]{_remark(remarks, name)}"] if plain else []
    lines += [
        f"{_key(key)} = {_value(value)}{_remark(remarks, f'{name}.{key}')}"
        for key, value in plain.items()
    ]
    for key, inner in table.items():
        if isinstance(inner, Mapping):
            lines += ["", f"[{name}.{_key(key)}]{_remark(remarks, f'{name}.{key}')}"]
            lines += [f"{_key(k)} = {_value(v)}" for k, v in inner.items()]
    return lines


def _remark(remarks: Mapping[str, str], key: str) -> str:
    return f"  # {_plain(remarks[key])}" if key in remarks else ""


def _plain(text: str) -> str:
    return "".join(c if c.isprintable() else "?" for c in text)


def _key(name: str) -> str:
    return name if _BARE.fullmatch(name) else _value(name)


def _value(value: Any) -> str:
    if isinstance(value, list | tuple):
        return "[" + ", ".join(_value(item) for item in value) + "]"
    # JSON's text, whole numbers and finite numbers are TOML's; DEL must be escaped besides.
    return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
