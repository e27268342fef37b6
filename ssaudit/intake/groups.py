"""One point a group: an HDF5 group, or array names with a common beginning in NPZ."""

from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import MATRIX_NAMES
from ssaudit.errors import SourceError
from ssaudit.intake.container import (
    Container,
    as_real,
    describe,
    digits_of,
    find,
    find_column,
    unflatten,
    unit_of,
)
from ssaudit.intake.layout import COLUMN_MAJOR, Layout
from ssaudit.intake.orientation import BY_SHAPES
from ssaudit.intake.pattern import Pattern
from ssaudit.intake.piece import OnePoint, Piece, gather


def grouped_pieces(
    container: Container, layout: Layout, fields: Mapping[str, str]
) -> Iterator[Piece]:
    """Read an export with one point a group.

    Parameters
    ----------
    container : Container
        The open file.
    layout : Layout
        Its ``groups`` is the pattern of the groups' names.
    fields : dict of str
        Fields of the file name.

    Yields
    ------
    Piece

    Raises
    ------
    SourceError
        When no group fits the pattern.
    """
    assert layout.groups is not None
    pattern: Pattern = layout.groups
    found = [(name, pattern.match(name)) for name in container.groups(pattern.depth)]
    groups = [(name, match) for name, match in found if match is not None]
    if not groups:
        raise SourceError(
            f"holds no group like {pattern.text!r}",
            where=container.where,
            do=f"correct groups in {layout.name}",
        )
    yield from gather(_one(container, layout, name, {**fields, **match}) for name, match in groups)


def _one(container: Container, layout: Layout, group: str, fields: Mapping[str, str]) -> OnePoint:
    names, dt, digits = describe(container, layout, group)
    columns, units, missing = {}, {}, ""
    for column in layout.columns:
        try:
            columns[column.name] = _single(find_column(container, column, fields, layout, group))
        except SourceError:
            columns[column.name] = "" if column.is_tag else np.nan
            missing = missing or f"{column.name} is missing"
        units[column.name] = unit_of(container, column, group)
    matrices, problem, types = _matrices(container, layout, group)
    digits_by = ""
    if digits is None:
        digits, digits_by = digits_of(types)
    return OnePoint(
        _id(container, layout, group, fields),
        matrices,
        columns,
        problem or missing,
        units,
        names,
        dt,
        digits,
        basis=BY_SHAPES,
        digits_by=digits_by,
    )


def _matrices(
    container: Container, layout: Layout, group: str
) -> tuple[dict[str, NDArray[np.float64]], str, list[np.dtype[Any]]]:
    """Matrices of a group, what is wrong with them, or "", and the types they are stored in."""
    found = {}
    types = []
    for name in MATRIX_NAMES:
        path = f"{group}/{layout.matrices.get(name, '')}"
        if name not in layout.matrices or path not in container:
            continue
        try:
            stored = container.array(path)
            found[name] = as_real(stored.whole(), name, container.where)[np.newaxis]
            types.append(stored.dtype)
        except SourceError as error:
            # One bad model never stops an intake: the group is a void point.
            return {}, f"{name}: {error.what}", []
    if "A" not in found:
        return {}, "A is missing", []
    if any(stack.ndim > 3 for stack in found.values()):
        return {}, "its matrices have more than two dimensions", []
    shaped = unflatten(found, layout.order == COLUMN_MAJOR)
    return {name: stack[0] for name, stack in shaped.items()}, "", types


def _single(value: Any) -> Any:
    """One number or word from whatever holds it."""
    flat = np.asarray(value).reshape(-1)
    if flat.size != 1:
        return np.nan
    item = flat.tolist()[0]
    if isinstance(item, bytes):
        return item.decode("utf-8", "replace")
    return item if isinstance(item, str) else float(item)


def _id(container: Container, layout: Layout, group: str, fields: Mapping[str, str]) -> str:
    if layout.ids is None:
        return fields.get("id", group.rpartition("/")[2])
    if layout.ids.field is not None:
        return fields[layout.ids.field]
    value = find(container, layout.ids, group)
    return group if value is None else str(_single(value))
