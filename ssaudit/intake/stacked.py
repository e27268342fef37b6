"""Points counted by an axis of stacked arrays, or one point a file of arrays."""

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import MATRIX_NAMES, Strings
from ssaudit.bank_writer import stored_rows
from ssaudit.errors import SourceError
from ssaudit.intake.container import (
    Container,
    Stored,
    as_real,
    describe,
    digits_of,
    find,
    find_column,
    unflatten,
    unit_of,
)
from ssaudit.intake.guard import BATCH_BYTES, MOST_POINTS, WHOLE_BYTES, as_words
from ssaudit.intake.layout import COLUMN_MAJOR, FILE, FIRST_AXIS, LAST_AXIS, Layout
from ssaudit.intake.orientation import BY_SHAPES
from ssaudit.intake.piece import Piece
from ssaudit.intake.unused import listed, unused_keys
from ssaudit.settings import nearest


@dataclass(frozen=True, eq=False)
class _Export:
    """An opened export: everything but the matrices is read."""

    where: str
    count: int
    ids: Strings | None
    columns: Mapping[str, NDArray[Any]]
    units: Mapping[str, str]
    names: Mapping[str, tuple[str, ...]]
    dt: float
    digits: int | None
    digits_by: str
    unused: tuple[str, ...]
    basis: str
    step: int
    read: Callable[[int, int], dict[str, NDArray[np.float64]]]


def stacked_pieces(
    container: Container, layout: Layout, fields: Mapping[str, str], stem: str
) -> Iterator[Piece]:
    """Read an export whose arrays hold all points, or one.

    Parameters
    ----------
    container : Container
        The open file.
    layout : Layout
        Where things lie; points are counted by the first or last axis, or by the file.
    fields : dict of str
        Fields of the file name.
    stem : str
        Id of a single point that has no other.

    Yields
    ------
    Piece

    Raises
    ------
    SourceError
        When the file does not say how many points it holds, or its columns differ in length.
    """
    export = _open(container, layout, fields, stem)
    for start in range(0, export.count, export.step):
        stop = min(start + export.step, export.count)
        yield Piece(
            None if export.ids is None else export.ids[start:stop],
            {name: column[start:stop] for name, column in export.columns.items()},
            export.read(start, stop),
            np.full(stop - start, "", dtype=object),
            export.units,
            export.names,
            export.dt,
            export.digits,
            basis=export.basis,
            digits_by=export.digits_by,
            unused=export.unused,
        )


def _open(container: Container, layout: Layout, fields: Mapping[str, str], stem: str) -> _Export:
    unused = unused_keys(container, layout) if layout.lenient else ()
    arrays = _arrays(container, layout)
    single = layout.points == FILE or (layout.lenient and _is_single(arrays))
    columns, units = _columns(container, layout, fields)
    ids = _ids(container, layout, fields)
    if single and ids is None:
        ids = np.array([fields.get("id", stem)], dtype=np.str_)
    axes = {
        name: -1 if single or name in layout.constant else _axis(stored, layout)
        for name, stored in arrays.items()
    }
    count = _count(container, arrays, axes, layout, single, {**columns, **_present("ids", ids)})
    names, dt, digits = describe(container, layout)
    digits_by = ""
    if digits is None:
        digits, digits_by = digits_of(stored.dtype for stored in arrays.values())
    return _Export(
        container.where,
        count,
        ids,
        {name: _full_length(column, count) for name, column in columns.items()},
        units,
        names,
        dt,
        digits,
        digits_by,
        unused,
        _basis(arrays, axes),
        _step(arrays, axes, count),
        _reader(container, arrays, axes, layout, single),
    )


def _arrays(container: Container, layout: Layout) -> dict[str, Stored]:
    arrays = {}
    for name in MATRIX_NAMES:
        path = layout.matrices.get(name)
        if path is None:
            continue
        if path in container:
            arrays[name] = container.array(path)
        elif (layout.stated or name == "A") and not layout.lenient and layout.points != FILE:
            raise SourceError(
                f"has no {path!r} for {name}",
                where=container.where,
                do=f"correct {layout.name}; {nearest(path, container.under('')[:200])}",
            )
    return arrays


def _is_single(arrays: Mapping[str, Stored]) -> bool:
    return "A" in arrays and len(arrays["A"].shape) == 2


def _axis(stored: Stored, layout: Layout) -> int:
    return max(0, len(stored.shape) - 1) if layout.points == LAST_AXIS else 0


def _columns(
    container: Container, layout: Layout, fields: Mapping[str, str]
) -> tuple[dict[str, NDArray[Any]], dict[str, str]]:
    columns, units = {}, {}
    for column in layout.columns:
        value = find_column(container, column, fields, layout)
        columns[column.name] = np.asarray(value).reshape(-1)
        units[column.name] = unit_of(container, column)
    if layout.columns_under is not None:
        for path in container.under(layout.columns_under):
            name = path.removeprefix(layout.columns_under)
            columns[name] = container.array(path).whole().reshape(-1)
            units[name] = container.unit(path)
    return columns, units


def _ids(container: Container, layout: Layout, fields: Mapping[str, str]) -> Strings | None:
    if layout.ids is None:
        return None
    if layout.ids.field is not None:
        return np.array([fields[layout.ids.field]], dtype=np.str_)
    value = find(container, layout.ids)
    if value is None:
        if layout.lenient:
            return None
        raise SourceError(f"has no {layout.ids.text!r} for ids", where=container.where)
    return as_words(value, container.where, "ids")


def _present(name: str, value: Any) -> dict[str, Any]:
    return {} if value is None else {name: value}


def _count(
    container: Container,
    arrays: Mapping[str, Stored],
    axes: Mapping[str, int],
    layout: Layout,
    single: bool,
    columns: Mapping[str, Any],
) -> int:
    """Count the points: as many in every array that counts them."""
    lengths = {
        name: stored.shape[axes[name]]
        for name, stored in arrays.items()
        if stored.shape and axes[name] >= 0
    }
    if single:
        lengths = {"A": 1}
    # With a layout, one value (an attribute, a field of the file name) stands for all points.
    strict = layout.lenient or not lengths
    lengths |= {n: c.size for n, c in columns.items() if strict or n == "ids" or c.size != 1}
    if not lengths or not arrays:
        expected = "arrays A, B, C, D with the point axis first"
        held = listed(container.under("")) or "nothing"
        raise SourceError(
            f"holds no models: it holds {held} where {expected} are expected",
            where=container.where,
            do=f"describe it in a layout; ssaudit look {container.where} drafts one",
        )
    key, count = next(iter(lengths.items()))
    for name, length in lengths.items():
        if length != count:
            raise SourceError(
                f"{name} has {length} points, {key} has {count}",
                where=container.where,
                do=_advice(container, arrays, layout, columns),
            )
    if not 0 < count <= MOST_POINTS:
        raise SourceError(
            f"holds {count} points", where=container.where, do="export at least one point"
        )
    return int(count)


def _advice(
    container: Container,
    arrays: Mapping[str, Stored],
    layout: Layout,
    columns: Mapping[str, Any],
) -> str:
    """Say what to do about arrays that differ in length along the first axis."""
    last = {stored.shape[-1] for stored in arrays.values() if len(stored.shape) == 3}
    last |= {column.size for column in columns.values() if column.size != 1}
    if layout.points == FIRST_AXIS and len(last) == 1:
        return (
            f'the point axis seems to be last ({last.pop()} points): say points = "{LAST_AXIS}" '
            f"in a layout; ssaudit look {container.where} drafts one"
        )
    return "export the same points in every array"


def _basis(arrays: Mapping[str, Stored], axes: Mapping[str, int]) -> str:
    """Rows are told from columns by shapes, where these are those of matrices."""
    full = all(len(s.shape) >= (3 if axes[name] >= 0 else 2) for name, s in arrays.items())
    return BY_SHAPES if full else ""


def _full_length(column: NDArray[Any], count: int) -> NDArray[Any]:
    return column if len(column) == count else np.repeat(column, count)


def _step(arrays: Mapping[str, Stored], axes: Mapping[str, int], count: int) -> int:
    """Points to read at a time: about a batch, and whole stored blocks where there are such."""
    size = sum(
        8 * int(np.prod([int(s) for s in stored.shape], dtype=object)) // count
        for name, stored in arrays.items()
        if axes[name] >= 0
    )
    step = max(1, BATCH_BYTES // max(8, size))
    block = max((s.block(axes[n]) for n, s in arrays.items() if axes[n] >= 0), default=1)
    if block > step:
        return block if block * size <= WHOLE_BYTES else step
    if block > 1:
        return step // block * block
    largest = max(int(np.prod(s.shape, dtype=object)) for s in arrays.values()) // count
    stored = stored_rows(largest)
    return step // stored * stored or step


def _reader(
    container: Container,
    arrays: Mapping[str, Stored],
    axes: Mapping[str, int],
    layout: Layout,
    single: bool,
) -> Callable[[int, int], dict[str, NDArray[np.float64]]]:
    """Return what reads the matrices of a range of points, rows first."""
    column_major = layout.order == COLUMN_MAJOR

    def read(start: int, stop: int) -> dict[str, NDArray[np.float64]]:
        found = {}
        for name, stored in arrays.items():
            axis = axes[name]
            if axis >= 0 and stored.shape:
                block = np.moveaxis(stored.read(axis, start, stop), axis, 0)
            else:
                block = _squeezed(stored.whole()) if single else stored.whole()
                block = np.broadcast_to(block, (stop - start, *block.shape))
            found[name] = as_real(block, name, container.where)
        if layout.lenient:
            return found
        return unflatten(found, column_major)

    return read


def _squeezed(matrix: NDArray[Any]) -> NDArray[Any]:
    """Drop point axes of length 1 that a file of one point may have."""
    while matrix.ndim > 2 and (matrix.shape[0] == 1 or matrix.shape[-1] == 1):
        matrix = matrix[0] if matrix.shape[0] == 1 else matrix[..., 0]
    return matrix
