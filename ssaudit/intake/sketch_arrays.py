"""Guess the layout of HDF5 and NPZ exports."""

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from ssaudit.errors import SourceError
from ssaudit.intake.container import Container
from ssaudit.intake.guard import as_words, damage_reported
from ssaudit.intake.hdf5 import Hdf5Container
from ssaudit.intake.layout import (
    COLUMN_MAJOR,
    FILE,
    FIRST_AXIS,
    GROUP,
    KINDS,
    LAST_AXIS,
)
from ssaudit.intake.npz import UNITS
from ssaudit.intake.roles import (
    NamePattern,
    find_pattern,
    matrix_of,
    name_and_unit,
    role_of,
)
from ssaudit.intake.sketch import (
    Found,
    Sketch,
    add_coordinate,
    shape_text,
    sorted_matrices,
    value_text,
    with_fields,
)
from ssaudit.intake.sources import OPENERS

# Arrays and groups that are looked at; of groups with many members, the first ones.
MOST_ARRAYS = 5000
MOST_MEMBERS = 200
DEEPEST = 8
ROLES = (*KINDS, "ids", "dt", "digits", "revision")


@dataclass(eq=False)
class _Survey:
    """Arrays and attributes of a file by name."""

    arrays: dict[str, tuple[tuple[int, ...], np.dtype[Any], str]] = field(default_factory=dict)
    attributes: dict[str, Any] = field(default_factory=dict)
    groups: dict[str, int] = field(default_factory=dict)
    problems: list[str] = field(default_factory=list)


def sketch_arrays(format_: str, files: Sequence[Path], pattern: NamePattern | None) -> Sketch:
    """Sketch an export of arrays by its first file.

    Parameters
    ----------
    format_ : str
        "hdf5" or "npz".
    files : sequence of Path
        All files of the export.
    pattern : NamePattern or None
        How their names are built.

    Returns
    -------
    Sketch
    """
    with OPENERS[format_](files[0]) as container:
        survey = _walk_hdf5(container) if isinstance(container, Hdf5Container) else _walk(container)
        sketch = Sketch(contradictions=list(survey.problems), skeleton={"format": format_})
        base = _repeated(survey)
        if base is not None:
            _sketch_groups(format_, survey, base, sketch)
        else:
            _sketch_stacks(format_, files, pattern, survey, container, sketch)
    _list_items(survey, base, sketch)
    if len(files) > 1:
        sketch.findings.append(f"{len(files)} files; the first was looked into")
    return sketch


def _walk(container: Container) -> _Survey:
    survey = _Survey()
    for name in container.under("")[:MOST_ARRAYS]:
        try:
            stored = container.array(name)
            unit = "" if name.startswith(UNITS) else container.unit(name)
        except SourceError as error:
            survey.problems.append(str(error))
            continue
        if not name.startswith(UNITS):
            survey.arrays[name] = (stored.shape, stored.dtype, unit)
        for depth in range(1, name.count("/") + 1):
            survey.groups.setdefault("/".join(name.split("/")[:depth]), 0)
    return survey


def _walk_hdf5(container: Hdf5Container) -> _Survey:
    """List datasets, groups and attributes; links into other files are noted, not followed."""
    survey = _Survey()
    waiting = [""]
    with damage_reported(container.where):
        while waiting and len(survey.arrays) < MOST_ARRAYS:
            base = waiting.pop(0)
            _take_attributes(container, base, survey)
            names = container.under(f"{base}/" if base else "")
            survey.groups[base] = len(names)
            for path in names[:MOST_MEMBERS]:
                _take_member(container, path, survey, waiting)
    survey.groups.pop("", None)
    return survey


def _take_attributes(container: Hdf5Container, base: str, survey: _Survey) -> None:
    owner = container.file[base] if base else container.file
    for name in list(owner.attrs)[:MOST_MEMBERS]:
        try:
            survey.attributes[f"{base}/@{name}" if base else f"@{name}"] = owner.attrs[name]
        # Attributes of types that cannot be read are of no use here.
        except (OSError, TypeError, ValueError, KeyError):
            continue


def _take_member(container: Hdf5Container, path: str, survey: _Survey, waiting: list[str]) -> None:
    import h5py

    try:
        if path in container:
            stored = container.array(path)
            survey.arrays[path] = (stored.shape, stored.dtype, container.unit(path))
        elif container.file.get(path, getclass=True) is h5py.Group and path.count("/") < DEEPEST:
            waiting.append(path)
    except SourceError as error:
        survey.problems.append(str(error))


def _repeated(survey: _Survey) -> str | None:
    """Parent of the groups that repeat and hold a state matrix each, or None."""
    members: dict[str, list[frozenset[str]]] = {}
    for group in survey.groups:
        parent = group.rpartition("/")[0]
        inside = frozenset(
            name.removeprefix(f"{group}/") for name in survey.arrays if name.startswith(f"{group}/")
        )
        members.setdefault(parent, []).append(inside)
    for parent, kinds in members.items():
        usual, count = Counter(kinds).most_common(1)[0]
        has_model = any(matrix_of(name) == "A" for name in usual)
        if has_model and count >= max(2, len(kinds) / 2):
            return parent
    return None


def _sketch_groups(format_: str, survey: _Survey, parent: str, sketch: Sketch) -> None:
    prefix = f"{parent}/" if parent else ""
    groups = [g for g in survey.groups if g.rpartition("/")[0] == parent]
    models = [group for group in groups if _holds_model(group, survey)]
    first = models[0]
    count = max(survey.groups.get(parent, 0), len(groups))
    groups_found = f"{count} group{'' if count == 1 else 's'}"
    below = f"below {parent!r}" if parent else "at the top"
    sketch.findings.append(f"{groups_found} {below}: a point a group")
    content: dict[str, Any] = {"format": format_, "points": GROUP}
    names = [group.removeprefix(prefix) for group in models]
    pattern = find_pattern(names)
    inside = {n.removeprefix(f"{first}/"): v for n, v in survey.arrays.items()
              if n.startswith(f"{first}/")}  # fmt: skip
    about = {n.removeprefix(f"{first}/"): v for n, v in survey.attributes.items()
             if n.startswith(f"{first}/")}  # fmt: skip
    about |= {n: v for n, v in survey.attributes.items() if n.startswith("@")}
    _add_scalars(content, inside, about, sketch)
    if pattern is not None and pattern.numbers and not content.get("coordinates"):
        with_fields(content, NamePattern(prefix + pattern.text, pattern.numbers, pattern.words),
                    "groups", sketch.remarks)  # fmt: skip
    else:
        content["groups"] = prefix + "{id}"
    content["matrices"] = sorted_matrices(
        {letter: n for n, (shape, dtype, _) in inside.items()
         if (letter := matrix_of(n)) and dtype.kind in "fiuc" and _is_matrix(n, shape)}
    )  # fmt: skip
    _add_names(content, {n: survey.arrays[n] for n in survey.arrays if n not in inside}, about)
    _add_names(content, inside, about)
    sketch.contents = [content, {**content, "order": COLUMN_MAJOR}]


def _holds_model(group: str, survey: _Survey) -> bool:
    inside = [n.removeprefix(f"{group}/") for n in survey.arrays if n.startswith(f"{group}/")]
    return any(matrix_of(name) == "A" for name in inside)


def _is_matrix(name: str, shape: Sequence[int]) -> bool:
    letter = name.rpartition("/")[2]
    return len(shape) >= 1 or letter in ("A", "B", "C", "D")


def _add_scalars(
    content: dict[str, Any], arrays: dict[str, Any], attributes: dict[str, Any], sketch: Sketch
) -> None:
    """Single values as coordinates and tags."""
    for name, (shape, dtype, unit) in arrays.items():
        if int(np.prod(shape)) != 1 or role_of(name, ROLES) or matrix_of(name):
            continue
        _add_value(content, name, dtype.kind in "fiu", unit, sketch)
    for place, value in attributes.items():
        path, _, name = place.rpartition("@")
        if np.size(value) != 1 or role_of(name, ROLES) or not place.startswith("@"):
            continue
        if not path:
            kind = np.asarray(value).dtype.kind
            if kind in "fiuSUO":
                _add_value(content, place, kind in "fiu", "", sketch)


def _add_value(
    content: dict[str, Any], place: str, is_number: bool, unit: str, sketch: Sketch
) -> None:
    name, stated = name_and_unit(place)
    if is_number:
        add_coordinate(content, name, place, unit or stated, sketch.remarks)
    elif name not in content.get("coordinates", {}):
        content.setdefault("tags", {}).setdefault(name, {"from": place})


def _add_names(content: dict[str, Any], arrays: dict[str, Any], attributes: dict[str, Any]) -> None:
    """Names of signals, ids, time step and digits, by what they are called."""
    for name, (_, dtype, _) in arrays.items():
        role = role_of(name, ROLES)
        text = dtype.kind in "SUO"
        if role in KINDS and text:
            content.setdefault("names", {}).setdefault(role, name)
        elif role == "ids" or (role in ("dt", "digits") and not text):
            content.setdefault(role, name)
    for place, value in attributes.items():
        role = role_of(place, ROLES)
        if role in KINDS:
            content.setdefault("names", {}).setdefault(role, place)
        elif role in ("dt", "digits"):
            content.setdefault(role, place)
        elif role == "revision" and np.size(value) == 1:
            content.setdefault("revision", value_text(np.asarray(value).reshape(-1)[0]))


def _sketch_stacks(
    format_: str,
    files: Sequence[Path],
    pattern: NamePattern | None,
    survey: _Survey,
    container: Container,
    sketch: Sketch,
) -> None:
    matrices = _matrices(survey)
    if "A" not in matrices:
        return
    shape = survey.arrays[matrices["A"]][0]
    lengths = Counter(s[0] for n, (s, _, _) in survey.arrays.items() if len(s) == 1)
    single = len(shape) == 2 and shape[0] == shape[1] and lengths.get(shape[0], 0) == 0
    content: dict[str, Any] = {"format": format_, "points": FILE if single else FIRST_AXIS}
    content["matrices"] = sorted_matrices(matrices)
    if len(files) > 1:
        with_fields(content, pattern, "files", sketch.remarks)
    _add_names(content, survey.arrays, survey.attributes)
    if single:
        sketch.findings.append("one model a file")
        _add_scalars(content, survey.arrays, survey.attributes, sketch)
        content.pop("ids", None)
        sketch.contents = [content, {**content, "order": COLUMN_MAJOR}]
        return
    for points, count in ((FIRST_AXIS, shape[0]), (LAST_AXIS, shape[-1])):
        draft = {**content, "points": points}
        draft = {key: dict(v) if isinstance(v, dict) else v for key, v in draft.items()}
        if "ids" in draft and survey.arrays.get(draft["ids"], ((),))[0] != (count,):
            draft.pop("ids")
        _add_columns(draft, survey, container, count, sketch)
        constant = [n for n, path in matrices.items()
                    if n != "A" and _is_constant(survey.arrays[path][0], shape, count)]  # fmt: skip
        if constant:
            draft["constant"] = constant
        sketch.contents += [draft, {**draft, "order": COLUMN_MAJOR}]
    # Where the first axis counts as well as the last, one-dimensional arrays tell.
    if lengths.get(shape[-1], 0) > lengths.get(shape[0], 0):
        sketch.contents = sketch.contents[2:] + sketch.contents[:2]
    sketch.findings.append(f"models are stacked; A is {shape_text(shape)}")


def _matrices(survey: _Survey) -> dict[str, str]:
    """Arrays that look like matrices, by name; else by shape."""
    found: dict[str, str] = {}
    for name, (shape, dtype, _) in survey.arrays.items():
        letter = matrix_of(name)
        if letter is None or dtype.kind not in "fiuc":
            continue
        shorter = letter not in found or len(name) < len(found[letter])
        if shorter and len(shape) >= (2 if letter in "AE" else 1):
            found[letter] = name
    return found if "A" in found else _matrices_by_shape(survey)


def _matrices_by_shape(survey: _Survey) -> dict[str, str]:
    """Take the stack of square matrices for A; for B and C what shares a side with it."""
    stacks = {n: s for n, (s, dtype, _) in survey.arrays.items()
              if len(s) == 3 and dtype.kind in "fiu"}  # fmt: skip
    for name, shape in stacks.items():
        for axis, n in ((0, shape[1]), (2, shape[0])):
            if n != (shape[2] if axis == 0 else shape[1]):
                continue
            found = {"A": name}
            for other, size in stacks.items():
                if other == name or size[axis] != shape[axis]:
                    continue
                rows, columns = size[1:] if axis == 0 else size[:2]
                letter = "B" if rows == n else "C" if columns == n else "D"
                found.setdefault(letter, other)
            return found
    return {}


def _is_constant(shape: Sequence[int], of_A: Sequence[int], count: int) -> bool:
    """Whether a matrix is given once for all points."""
    return len(of_A) == 3 and len(shape) == 2 and count not in (shape[0], shape[-1])


def _add_columns(
    draft: dict[str, Any], survey: _Survey, container: Container, count: int, sketch: Sketch
) -> None:
    """Arrays of one value a point: ids, coordinates, tags."""
    taken = set(draft["matrices"].values())
    for name, (shape, dtype, unit) in survey.arrays.items():
        if tuple(shape) != (count,) or name in taken or name == draft.get("ids"):
            continue
        if role_of(name, KINDS):
            continue
        if dtype.kind in "SUO" and "ids" not in draft and role_of(name, ("ids",)):
            draft["ids"] = name
        elif dtype.kind in "fiuSUO":
            _add_value(draft, name, dtype.kind in "fiu", unit, sketch)
    if "ids" not in draft:
        _ids_from_tags(draft, container, count)


def _ids_from_tags(draft: dict[str, Any], container: Container, count: int) -> None:
    """Take the words that differ at every point for ids."""
    tags = draft.get("tags", {})
    for name, about in list(tags.items()):
        place = about["from"]
        if place not in container:
            continue
        words = as_words(container.array(place).whole(), container.where, name)
        if count > 1 and len(np.unique(words)) == count:
            draft["ids"] = place
            tags.pop(name)
            return


def _list_items(survey: _Survey, parent: str | None, sketch: Sketch) -> None:
    """List what is there; of groups that repeat, the first."""
    content = sketch.contents[0] if sketch.contents else {}
    roles = {place: f"matrix {n}" for n, place in content.get("matrices", {}).items()}
    roles |= {
        about["from"]: f"coordinate {n}" for n, about in content.get("coordinates", {}).items()
    }
    roles |= {about["from"]: f"tag {n}" for n, about in content.get("tags", {}).items()}
    roles |= {place: f"names of {kind}" for kind, place in content.get("names", {}).items()}
    roles |= {content[key]: key for key in ("ids", "dt", "digits")
              if isinstance(content.get(key), str)}  # fmt: skip
    seen: set[str] = set()
    for name, (shape, dtype, unit) in survey.arrays.items():
        shown = name
        if parent is not None and name.startswith(f"{parent}/" if parent else ""):
            rest = name.removeprefix(f"{parent}/" if parent else "")
            head, slash, shown = rest.partition("/")
            shown = shown if slash else head
        if shown in seen:
            continue
        seen.add(shown)
        holds = "text" if dtype.kind in "SUO" else str(dtype)
        sketch.items.append(
            Found(
                shown,
                shape_text(shape),
                holds + (f" [{unit}]" if unit else ""),
                roles.get(shown, ""),
            )
        )
    for place, value in survey.attributes.items():
        shown = "@" + place.rpartition("@")[2] if parent is not None else place
        if shown not in seen:
            seen.add(shown)
            flat = np.asarray(value).reshape(-1)
            holds = value_text(flat[0]) if flat.size == 1 else "text or numbers"
            size = "" if flat.size == 1 else shape_text(np.shape(value))
            sketch.items.append(Found(shown, size, holds, roles.get(shown, "")))
