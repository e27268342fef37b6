"""Points in JSON lines: one object a line, matrices as nested or flat lists."""

import json
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import MATRIX_NAMES
from ssaudit.errors import SourceError
from ssaudit.intake.container import unflatten
from ssaudit.intake.guard import LONGEST_NAME, as_digits, as_number, damage_reported, split_names
from ssaudit.intake.layout import COLUMN_MAJOR, KINDS, Column, Layout, Place
from ssaudit.intake.orientation import BY_SHAPES
from ssaudit.intake.piece import OnePoint, Piece, gather
from ssaudit.intake.table import DigitCounter

# Bytes of one line; a matrix of 500x500 entries of full precision needs less.
LONGEST_LINE = 8_000_000


def record_pieces(path: Path, layout: Layout, fields: Mapping[str, str]) -> Iterator[Piece]:
    """Read JSON lines; a line that cannot be read is a void point.

    Parameters
    ----------
    path : Path
        The file.
    layout : Layout
        Its places are keys; "/" leads into an object within.
    fields : dict of str
        Fields of the file name.

    Yields
    ------
    Piece
    """
    yield from gather(_points(path, layout, fields))


def _points(path: Path, layout: Layout, fields: Mapping[str, str]) -> Iterator[OnePoint]:
    counter = DigitCounter()
    number = 0
    with damage_reported(path), open(path, "rb") as stream:
        while line := stream.readline(LONGEST_LINE + 1):
            number += 1
            if len(line) > LONGEST_LINE:
                raise SourceError(
                    f"is longer than {LONGEST_LINE} bytes", where=f"{path}, line {number}"
                )
            if line.strip():
                yield _point(line, number, layout, fields, counter, str(path))
    if not number:
        raise SourceError("is empty", where=str(path))


def parse_line(line: bytes, counter: DigitCounter | None = None) -> Any:
    """Parse one line of JSON, strictly.

    Parameters
    ----------
    line : bytes
        UTF-8.
    counter : DigitCounter, optional
        Told how every number was written.

    Returns
    -------
    The value.

    Raises
    ------
    ValueError
        When it is no JSON, nested too deeply, or names a key twice.
    """
    texts: list[str] = []

    def parse_float(text: str) -> float:
        texts.append(text)
        return float(text)

    try:
        value = json.loads(
            line.decode("utf-8-sig"),
            object_pairs_hook=_unique,
            parse_float=parse_float if counter is not None else None,
        )
    except RecursionError as error:
        raise ValueError("it is nested too deeply") from error
    except UnicodeDecodeError as error:
        raise ValueError("it is not UTF-8") from error
    except json.JSONDecodeError as error:
        raise ValueError(f"it is not JSON: {error.msg} at character {error.pos + 1}") from error
    if counter is not None:
        counter.look_at_texts(texts)
    return value


def _unique(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    found = dict(pairs)
    if len(found) < len(pairs):
        names = [name for name, _ in pairs]
        twice = next(name for name in found if names.count(name) > 1)
        raise ValueError(f"it names {twice[:40]!r} twice")
    return found


def _point(
    line: bytes,
    number: int,
    layout: Layout,
    fields: Mapping[str, str],
    counter: DigitCounter,
    where: str,
) -> OnePoint:
    try:
        record = parse_line(line, counter)
        if not isinstance(record, dict):
            raise ValueError("it is no object")
    except ValueError as error:
        return OnePoint(f"line {number}", {}, _empty(layout), f"line {number}: {error}"[:200])
    where = f"{where}, line {number}"
    columns, missing = _columns(record, layout, fields)
    try:
        names, dt, digits, id_ = _about(record, layout, number)
    except SourceError as error:
        return OnePoint(f"line {number}", {}, columns, error.what)
    matrices, problem = _matrices(record, layout)
    if (b"true" in line or b"false" in line) and not problem:
        # NumPy would take truth values for 1 and 0.
        problem = _truth_values(record, layout)
    basis = "" if _is_flat(record, layout) else BY_SHAPES
    return OnePoint(
        id_, matrices, columns, problem or missing, {}, names, dt, digits, counter.most, basis
    )


def _empty(layout: Layout) -> dict[str, Any]:
    return {column.name: "" if column.is_tag else np.nan for column in layout.columns}


def look_up(record: Mapping[str, Any], path: str) -> Any:
    """Value under a key, or under keys parted by "/"; None where there is none.

    Examples
    --------
    >>> look_up({"at": {"speed": 12}}, "at/speed")
    12
    """
    if path in record:
        return record[path]
    value: Any = record
    for key in path.split("/"):
        if not isinstance(value, dict) or key not in value:
            return None
        value = value[key]
    return value


def _columns(
    record: Mapping[str, Any], layout: Layout, fields: Mapping[str, str]
) -> tuple[dict[str, Any], str]:
    found, missing = {}, ""
    for column in layout.columns:
        field = column.place.field
        value = fields[field] if field is not None else look_up(record, column.place.text)
        found[column.name], problem = _single(value, column)
        missing = missing or problem
    return found, missing


def _single(value: Any, column: Column) -> tuple[Any, str]:
    """Return a coordinate or tag, and what is wrong with it, or ""."""
    if column.is_tag:
        if value is None or isinstance(value, dict | list):
            return "", f"{column.name} is missing" if value is None else f"{column.name} is no word"
        return str(value)[:LONGEST_NAME], ""
    if value is None:
        return np.nan, f"coordinate {column.name} is missing"
    if isinstance(value, str):
        # Numbers of file names come as text; `complete` reads them.
        return value, ""
    try:
        return (np.nan if isinstance(value, bool) else float(value)), ""
    except (TypeError, ValueError, OverflowError):
        return np.nan, f"coordinate {column.name} is no number"


def _about(
    record: Mapping[str, Any], layout: Layout, number: int
) -> tuple[dict[str, tuple[str, ...]], float, int | None, str]:
    names = {}
    for kind in KINDS:
        place = layout.names.get(kind)
        if isinstance(place, Place):
            value = look_up(record, place.text)
            if value is None:
                raise SourceError(f"{kind} is missing")
            words = value if isinstance(value, list) else [value]
            names[kind] = split_names(np.array([str(w) for w in words], dtype=object), "", kind)
    dt, digits = layout.dt, layout.digits
    if isinstance(dt, Place):
        value = look_up(record, dt.text)
        dt = as_number(np.nan if value is None else value, "", "dt")
    if isinstance(digits, Place):
        digits = as_digits(look_up(record, digits.text), "")
    id_ = f"line {number}"
    if layout.ids is not None and layout.ids.field is None:
        value = look_up(record, layout.ids.text)
        if isinstance(value, str | int | float):
            id_ = str(value)[:LONGEST_NAME].replace("\0", "\ufffd")
            id_ = id_.encode("utf-8", "replace").decode("utf-8")
    return names, dt, digits, id_


def _matrices(
    record: Mapping[str, Any], layout: Layout
) -> tuple[dict[str, NDArray[np.float64]], str]:
    found = {}
    for name in MATRIX_NAMES:
        value = look_up(record, layout.matrices[name]) if name in layout.matrices else None
        if value is None:
            continue
        matrix, problem = read_matrix(value, name)
        if matrix is None:
            return {}, problem
        found[name] = matrix[np.newaxis]
    if "A" not in found:
        return {}, "A is missing"
    shaped = unflatten(found, layout.order == COLUMN_MAJOR)
    return {name: stack[0] for name, stack in shaped.items()}, ""


def _is_flat(record: Mapping[str, Any], layout: Layout) -> bool:
    """Whether A is one row of entries."""
    value = look_up(record, layout.matrices["A"])
    return not (isinstance(value, list) and value and isinstance(value[0], list))


def _truth_values(record: Mapping[str, Any], layout: Layout) -> str:
    for name, path in layout.matrices.items():
        waiting = [look_up(record, path)]
        while waiting:
            value = waiting.pop()
            if isinstance(value, bool):
                return f"{name} holds something that is no number"
            waiting.extend(value if isinstance(value, list) else ())
    return ""


def read_matrix(value: Any, name: str) -> tuple[NDArray[np.float64] | None, str]:
    """Make a matrix of nested lists, or of a flat one.

    Parameters
    ----------
    value : list, number or None
        What the file holds.
    name : str
        Name of the matrix, for the reason.

    Returns
    -------
    matrix : (rows, columns) or (entries,) float, or None
        None where it cannot be one.
    reason : str
        Why not, or "".
    """
    try:
        array = np.array(value)
    except (ValueError, TypeError, OverflowError, RecursionError):
        return None, f"{name} has rows of different length"
    if array.dtype.kind == "O":
        kind = "an entry is missing" if value is None or _holds_none(array) else "no matrix"
        return None, f"{name}: {kind}"
    if array.dtype.kind not in "fiu":
        return None, f"{name} holds something that is no number"
    if array.ndim > 2:
        return None, f"{name} has {array.ndim} dimensions"
    return array.astype(np.float64), ""


def _holds_none(array: NDArray[Any]) -> bool:
    return any(item is None for item in array.reshape(-1))
