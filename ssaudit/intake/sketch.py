"""What is guessed of an export before a draft of its layout is tried."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from ssaudit.intake.roles import NamePattern


@dataclass(frozen=True)
class Found:
    """One array, column, attribute or key of an export.

    Attributes
    ----------
    name : str
        Where it lies.
    shape : str
        For example ``300x4x4``; "" for a single value.
    holds : str
        Type of its values, or a single value itself.
    role : str
        What it seems to be; "" when nothing.
    """

    name: str
    shape: str
    holds: str
    role: str = ""


@dataclass(eq=False)
class Sketch:
    """Guesses about an export.

    Attributes
    ----------
    items : list of Found
        What is there.
    findings : list of str
        What it seems to mean.
    contradictions : list of str
        What does not fit together.
    contents : list of dict
        Layouts to try, the likelier ones first.
    skeleton : dict
        What is known of the layout where there is none to try.
    remarks : dict of str
        Comments for the draft, by key.
    """

    items: list[Found] = field(default_factory=list)
    findings: list[str] = field(default_factory=list)
    contradictions: list[str] = field(default_factory=list)
    contents: list[dict[str, Any]] = field(default_factory=list)
    skeleton: dict[str, Any] = field(default_factory=dict)
    remarks: dict[str, str] = field(default_factory=dict)


def with_fields(
    content: dict[str, Any], pattern: NamePattern | None, key: str, remarks: dict[str, str]
) -> None:
    """Put a name pattern into a layout, its fields as coordinates and tags.

    Parameters
    ----------
    content : dict
        The layout; changed.
    pattern : NamePattern or None
        How names of files or groups are built.
    key : str
        "files" or "groups".
    remarks : dict of str
        Comments for the draft; changed.
    """
    if pattern is None:
        return
    content[key] = pattern.text
    for name in pattern.numbers:
        add_coordinate(content, name, "{" + name + "}", "", remarks)
    for name in pattern.words:
        if name != "matrix":
            content.setdefault("tags", {}).setdefault(name, {"from": "{" + name + "}"})


def add_coordinate(
    content: dict[str, Any], name: str, place: str, unit: str, remarks: dict[str, str]
) -> None:
    """Put a coordinate into a layout, unless one of the name is there."""
    coordinates = content.setdefault("coordinates", {})
    if name in coordinates or name in content.get("tags", {}):
        return
    coordinates[name] = {"from": place, "unit": unit}
    if not unit:
        remarks.setdefault(f"coordinates.{name}", "its unit is not stated: put it in")


def shape_text(shape: Sequence[int]) -> str:
    """Write a shape.

    Examples
    --------
    >>> shape_text((300, 4, 4))
    '300x4x4'
    """
    return "x".join(map(str, shape))


def value_text(value: Any) -> str:
    """Write a single value, short."""
    text = value.decode("utf-8", "replace") if isinstance(value, bytes) else str(value)
    return text if len(text) <= 40 else text[:39] + "…"


def sorted_matrices(matrices: Mapping[str, str]) -> dict[str, str]:
    """Matrices in the order of their letters."""
    return {name: matrices[name] for name in sorted(matrices)}
