"""Reading loops and gain tables from the files that engineers keep them in."""

import csv
import math
import os
from pathlib import Path
from typing import Any

import numpy as np

from ssaudit.errors import LoopError, SsauditError
from ssaudit.loop.gains import ConstantGain, Gain, GainSchedule
from ssaudit.loop.model import FEEDS, Loop
from ssaudit.loop.part_files import read_compensator, read_parts, read_sampling
from ssaudit.loop.uncertainty import read_uncertain
from ssaudit.settings import (
    check_keys,
    is_finite_number,
    nearest,
    read_toml,
    shown,
    take,
    take_words,
)

KEYS = ("sign", "feed", "gain", "uncertain", "part", "compensator", "sampling")
COLUMN = "K:"
# Grids of so many cells are looked at for missing breakpoints, however few rows a table has.
MOST_CELLS = 1_000_000


def read_loop(path: str | os.PathLike[str]) -> Loop:
    """Read a loop file.

    Parameters
    ----------
    path : path
        A TOML file: ``sign``, ``feed`` and ``[gain]`` with a ``matrix``, or with a ``table`` (a CSV
        file, its path relative to the loop file), its ``variables``, and what happens ``outside``;
        ``[[uncertain]]`` tables say how far entries may be off, ``[[part]]`` what else is in the
        path, ``[compensator]`` and ``[sampling]`` what the controller is besides gains.

    Returns
    -------
    Loop

    Raises
    ------
    LoopError
        Naming the file, the key and the way out.
    """
    where = str(path)
    about = read_toml(path, LoopError)
    check_keys(about, KEYS, where=where, error=LoopError)
    feed = take(about, "feed", str, where=where, error=LoopError, default="states")
    if feed not in FEEDS:
        raise LoopError(f"feed is {feed!r}", where=where, do=nearest(feed, FEEDS))
    needs_sign = feed != "none"
    sign = take(about, "sign", str, where=where, error=LoopError, required=needs_sign, default="")
    states, gain = _read_controller(about, Path(path), feed)
    lists = {
        key: take(about, key, list, where=where, error=LoopError, default=[])
        for key in ("uncertain", "part")
    }
    sampling = take(about, "sampling", dict, where=where, error=LoopError)
    return Loop(
        sign,
        gain,
        feed,
        where,
        read_uncertain(lists["uncertain"], where),
        read_parts(lists["part"], where),
        states,
        None if sampling is None else read_sampling(sampling, where),
    )


def _read_controller(
    about: dict[str, Any], path: Path, feed: str
) -> tuple[tuple[str, ...], Gain | None]:
    """Read gains, and the names of the states of a dynamic compensator."""
    where = str(path)
    compensator = take(about, "compensator", dict, where=where, error=LoopError)
    states, whole = ((), None) if compensator is None else read_compensator(compensator, where)
    table = take(
        about, "gain", dict, where=where, error=LoopError, required=feed != "none" and not whole
    )
    if table is None:
        return states, whole
    if whole is not None:
        raise LoopError("[gain] and the matrices of [compensator] state the same", where=where)
    return states, _read_gain(table, path)


def files_of_loop(path: str | os.PathLike[str]) -> tuple[Path, ...]:
    """Files that a loop is read from: the loop file, and the gain table that it names.

    Parameters
    ----------
    path : path
        A loop file that `read_loop` accepts.

    Returns
    -------
    tuple of Path

    Raises
    ------
    LoopError
        When the file cannot be read.
    """
    table = read_toml(path, LoopError).get("gain", {}).get("table")
    return (Path(path),) if table is None else (Path(path), Path(path).parent / table)


def _read_gain(about: dict[str, Any], path: Path) -> Gain:
    where = f"{path}, [gain]"
    unnamed = take(about, "unnamed", str, where=where, error=LoopError, default="refuse")
    if "matrix" in about:
        valid: tuple[str, ...] = ("matrix", "inputs", "signals", "unnamed")
        check_keys(about, valid, where=where, error=LoopError)
        inputs = take_words(about, "inputs", where=where, error=LoopError)
        signals = take_words(about, "signals", where=where, error=LoopError)
        try:
            return ConstantGain(_as_matrix(about["matrix"]), inputs, signals, unnamed)
        except LoopError as error:
            raise LoopError(error.what, where=where, do=error.do) from error
    valid = ("table", "variables", "outside", "unnamed", "matrix")
    check_keys(about, valid, where=where, error=LoopError)
    if "table" not in about:
        raise LoopError("neither matrix nor table is given", where=where)
    table = take(about, "table", str, where=where, error=LoopError)
    variables = take_words(about, "variables", where=where, error=LoopError) or ()
    outside = take(about, "outside", str, where=where, error=LoopError, default="")
    if not variables:
        raise LoopError("variables is missing", where=where, do="name the table's coordinates")
    if outside not in ("refuse", "hold"):
        raise LoopError(
            f"outside is {outside!r}" if outside else "outside is missing",
            where=where,
            do='say "refuse" (such points are void) or "hold" (the edge value)',
        )
    return read_gain_table(path.parent / table, variables, outside, unnamed)


def _as_matrix(rows: Any) -> Any:
    if not isinstance(rows, list) or not rows or not all(isinstance(row, list) for row in rows):
        raise LoopError("matrix is not a list of rows")
    if len({len(row) for row in rows}) != 1:
        raise LoopError("the rows of matrix differ in length")
    for row in rows:
        for value in row:
            if not is_finite_number(value):
                raise LoopError(f"matrix holds {shown(value)}, not a finite number")
    return rows


def read_gain_table(
    path: str | os.PathLike[str],
    variables: tuple[str, ...],
    outside: str,
    unnamed: str = "refuse",
) -> GainSchedule:
    """Read a gain schedule from a CSV table.

    Parameters
    ----------
    path : path
        One row a breakpoint, in any order: a column for each variable, and columns
        ``K:<input>:<signal>`` for the gain from each signal to each input.
    variables : tuple of str
        The columns that span the grid.
    outside : str
        "refuse" or "hold", for points beyond the table.
    unnamed : str
        "refuse" or "zero", for inputs and signals that the table does not name.

    Returns
    -------
    GainSchedule

    Raises
    ------
    LoopError
        When a column or a breakpoint is missing, repeated, or no number.
    """
    where = str(path)
    header, rows = _read_csv(path)
    gains = [name for name in header if name.startswith(COLUMN)]
    for name in header:
        if header.count(name) > 1:
            raise LoopError(f"column {name!r} stands twice", where=where)
        if name not in gains and name not in variables:
            raise LoopError(
                f"column {name!r} is neither a variable nor K:<input>:<signal>",
                where=where,
                do=nearest(name, (*variables, *gains)),
            )
    for name in variables:
        if name not in header:
            raise LoopError(f"column {name!r} is missing", where=where, do=nearest(name, header))
    inputs, signals = _gain_names(gains, where)
    values = np.array(rows, dtype=np.float64).reshape(len(rows), len(header))
    at = values[:, [header.index(name) for name in variables]]
    grid, position = [], []
    for column in at.T:
        breakpoints, place = np.unique(column, return_inverse=True)
        grid.append(breakpoints)
        position.append(place)
    shape = tuple(len(breakpoints) for breakpoints in grid)
    _check_full_grid(position, grid, shape, variables, where)
    order = [header.index(f"{COLUMN}{i}:{s}") for i in inputs for s in signals]
    stacked = np.empty((*shape, len(inputs), len(signals)))
    stacked[tuple(position)] = values[:, order].reshape(-1, len(inputs), len(signals))
    try:
        return GainSchedule(variables, tuple(grid), stacked, inputs, signals, outside, unnamed)
    except SsauditError as error:
        raise LoopError(error.what, where=where, do=error.do) from error


def _read_csv(path: str | os.PathLike[str]) -> tuple[list[str], list[list[float]]]:
    where = str(path)
    try:
        with open(path, newline="", encoding="utf-8-sig") as file:
            lines = [line for line in csv.reader(file) if any(cell.strip() for cell in line)]
    except OSError as error:
        raise LoopError(
            f"cannot be read ({error.strerror})", where=where, do="name a CSV file"
        ) from error
    except (ValueError, csv.Error) as error:
        raise LoopError(f"is not a CSV table ({error})", where=where) from error
    if len(lines) < 2:
        raise LoopError("holds no breakpoints", where=where)
    header = [cell.strip() for cell in lines[0]]
    rows = []
    for number, line in enumerate(lines[1:], start=1):
        if len(line) != len(header):
            raise LoopError(
                f"breakpoint {number} has {len(line)} cells, the header {len(header)}", where=where
            )
        rows.append([_as_number(cell, number, header[i], where) for i, cell in enumerate(line)])
    return header, rows


def _as_number(cell: str, number: int, column: str, where: str) -> float:
    try:
        value = float(cell)
    except ValueError:
        value = np.nan
    if not np.isfinite(value):
        if ";" in cell:
            raise LoopError("is separated by semicolons", where=where, do="separate by commas")
        raise LoopError(
            f"breakpoint {number}, column {column!r}: {cell.strip()!r} is not a finite number",
            where=where,
        )
    return value


def _gain_names(columns: list[str], where: str) -> tuple[tuple[str, ...], tuple[str, ...]]:
    pairs = []
    for column in columns:
        parts = column.removeprefix(COLUMN).split(":")
        if len(parts) != 2 or not all(parts):
            raise LoopError(f"column {column!r} is not K:<input>:<signal>", where=where)
        pairs.append((parts[0], parts[1]))
    if not pairs:
        raise LoopError("no column K:<input>:<signal>", where=where)
    inputs = tuple(dict.fromkeys(pair[0] for pair in pairs))
    signals = tuple(dict.fromkeys(pair[1] for pair in pairs))
    for i in inputs:
        for s in signals:
            if (i, s) not in pairs:
                raise LoopError(f"column {COLUMN}{i}:{s} is missing", where=where,
                                do="give a zero where there is no gain")  # fmt: skip
    return inputs, signals


def _check_full_grid(
    position: list[Any],
    grid: list[Any],
    shape: tuple[int, ...],
    variables: tuple[str, ...],
    where: str,
) -> None:
    size, rows = math.prod(shape), len(position[0])
    if size > max(MOST_CELLS, rows):
        raise LoopError(
            f"its {rows} breakpoints cannot fill the grid that they span, of {size}",
            where=where,
            do="give every combination of the variables once",
        )
    times = np.zeros(shape, dtype=int)
    np.add.at(times, tuple(position), 1)
    for count, problem in ((0, "is missing"), (2, "stands twice")):
        cells = np.argwhere(times == 0 if count == 0 else times >= 2)
        if len(cells):
            place = ", ".join(
                f"{name}={points[i]:g}"
                for name, points, i in zip(variables, grid, cells[0], strict=True)
            )
            raise LoopError(f"the breakpoint at {place} {problem}", where=where,
                            do="give every combination of the variables once")  # fmt: skip
