"""Guess the layout of tables, JSON lines and matrix files."""

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from ssaudit.bank import MATRIX_NAMES
from ssaudit.errors import SourceError
from ssaudit.intake.csv_table import open_csv
from ssaudit.intake.entries import find_axes
from ssaudit.intake.layout import COLUMN_MAJOR, FILE, KINDS, LONG_ROWS, ROW, Layout
from ssaudit.intake.matrix_files import read_matrix_file
from ssaudit.intake.parquet_table import open_parquet
from ssaudit.intake.records import parse_line
from ssaudit.intake.roles import (
    NamePattern,
    find_entry_patterns,
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
from ssaudit.intake.table import Cells, Table

ROLES = (*KINDS, "ids", "dt", "digits", "revision")
# Rows, columns and lines that are looked at.
ROWS = 200
MOST_COLUMNS = 200_000
LINES = 20


def sketch_table(format_: str, files: Sequence[Path], pattern: NamePattern | None) -> Sketch:
    """Sketch an export of tables by its first file.

    Parameters
    ----------
    format_ : str
        "csv" or "parquet".
    files : sequence of Path
        All files.
    pattern : NamePattern or None
        How their names are built.

    Returns
    -------
    Sketch
    """
    sketch = Sketch(skeleton={"format": format_})
    content: dict[str, Any] = {"format": format_}
    if format_ == "csv":
        layout, options = _csv_options(files[0])
        content |= options
        _sketch_columns(open_csv(files[0], layout), content, sketch)
    else:
        with open_parquet(files[0]) as table:
            _sketch_columns(table, content, sketch)
    if len(files) > 1:
        for draft in sketch.contents:
            with_fields(draft, pattern, "files", sketch.remarks)
    return sketch


def _csv_options(path: Path) -> tuple[Layout, dict[str, Any]]:
    """Find lines above the header, the separator and the decimal point of a CSV file."""
    with open(path, "rb") as stream:
        lines = [stream.readline(100_000).decode("utf-8", "replace") for _ in range(20)]
    skip = 0
    while skip < 10 and lines[skip].lstrip().startswith(("#", "%")):
        skip += 1
    plain = Layout("csv", ROW, skip_lines=skip)
    separator = open_csv(path, plain).separator
    rows = [line for line in lines[skip + 1 :] if line.strip()]
    commas = separator != "," and any("," in row for row in rows)
    decimal = "," if commas and not any("." in row for row in rows) else "."
    options: dict[str, Any] = {"separator": separator} if separator != "," else {}
    options |= {"decimal": decimal} if decimal == "," else {}
    options |= {"skip_lines": skip} if skip else {}
    return Layout("csv", ROW, separator=separator, decimal=decimal, skip_lines=skip), options


def _sketch_columns(table: Table, content: dict[str, Any], sketch: Sketch) -> None:
    columns = table.columns[:MOST_COLUMNS]
    block = next(iter(table.blocks(columns)), {})
    cells = {name: Cells(c.values.slice(0, ROWS), c.decimal) for name, c in block.items()}
    kinds = {name: _kind(cell) for name, cell in cells.items()}
    if _is_long(columns, cells, table.where):
        _sketch_long(columns, cells, kinds, content, sketch, table.where)
        return
    found = find_entry_patterns(columns)
    matrices: dict[str, str] = {}
    taken: set[str] = set()
    for letter, patterns in found.items():
        text, labels = max(patterns.items(), key=lambda item: len(item[1]))
        matrices[letter] = text
        taken |= _names_of(columns, text)
        _check_full(letter, labels, sketch)
    for name, kind in kinds.items():
        lettered = matrix_of(name)
        if kind == "list" and lettered and lettered not in matrices:
            matrices[lettered] = name
            taken.add(name)
    _list_columns(columns, taken, cells, kinds, sketch)
    if "A" not in matrices:
        return
    content = {**content, "points": ROW, "matrices": sorted_matrices(matrices)}
    sketch.findings.append("a point a row")
    _add_others([c for c in columns if c not in taken], cells, kinds, content, sketch, table.where)
    _set_roles(sketch, content)
    sketch.contents = [content]
    if any(kinds.get(text) == "list" for text in matrices.values()):
        sketch.contents.append({**content, "order": COLUMN_MAJOR})


def _names_of(columns: Sequence[str], text: str) -> set[str]:
    from ssaudit.intake.pattern import Pattern

    pattern = Pattern(text)
    return {name for name in columns if pattern.match(name) is not None}


def _check_full(letter: str, labels: set[tuple[str, str]], sketch: Sketch) -> None:
    rows, columns = {row for row, _ in labels}, {column for _, column in labels}
    sketch.findings.append(f"{letter}: {len(labels)} columns, {len(rows)}x{len(columns)}")
    if len(labels) < len(rows) * len(columns):
        sketch.contradictions.append(
            f"{letter} has {len(labels)} columns where {len(rows)}x{len(columns)} entries belong"
        )
    try:
        find_axes({letter: labels}, letter)
    except SourceError as error:
        sketch.contradictions.append(str(error))


def _kind(cells: Cells) -> str:
    """Whether a column holds numbers, words or lists."""
    if cells.is_list:
        return "list"
    try:
        values, wrong = cells.numbers()
    except SourceError:
        return "words"
    filled = len(values) - sum(reason == "is missing" for reason in wrong.values())
    bad = sum(reason != "is missing" for reason in wrong.values())
    return "numbers" if filled and bad <= filled / 2 else "words"


def _list_columns(
    columns: Sequence[str],
    taken: set[str],
    cells: Mapping[str, Cells],
    kinds: Mapping[str, str],
    sketch: Sketch,
) -> None:
    """List columns; those of matrix entries are counted in the findings."""
    for name in columns:
        if name not in taken or kinds[name] == "list":
            first = cells[name].values.slice(0, 1).to_pylist()
            text = value_text(first[0]) if first and kinds[name] != "list" else ""
            sketch.items.append(Found(name, "", f"{kinds[name]} {text}".strip()))


def _add_others(
    columns: Sequence[str],
    cells: Mapping[str, Cells],
    kinds: Mapping[str, str],
    content: dict[str, Any],
    sketch: Sketch,
    where: str,
) -> None:
    """Columns that are no matrix entries: ids, coordinates, tags."""
    for name in columns:
        role = role_of(name, ROLES)
        if role == "ids" and "ids" not in content and _all_differ(cells[name], where):
            content["ids"] = name
        elif role in ("dt", "digits") and kinds[name] == "numbers":
            content[role] = name
        elif role == "revision":
            continue
        else:
            bare, unit = name_and_unit(name)
            if kinds[name] == "numbers":
                add_coordinate(content, bare, name, unit, sketch.remarks)
            elif kinds[name] == "words":
                content.setdefault("tags", {})[bare] = {"from": name}


def _all_differ(cells: Cells, where: str) -> bool:
    words = cells.words(where, "ids")
    return len(np.unique(words)) == len(words)


def _set_roles(sketch: Sketch, content: Mapping[str, Any]) -> None:
    roles = {
        about["from"]: f"coordinate {n}" for n, about in content.get("coordinates", {}).items()
    }
    roles |= {about["from"]: f"tag {n}" for n, about in content.get("tags", {}).items()}
    roles |= {place: f"matrix {n}" for n, place in content.get("matrices", {}).items()}
    roles |= {place: f"names of {kind}" for kind, place in content.get("names", {}).items()}
    roles |= {content[key]: key for key in ("ids", "dt", "digits")
              if isinstance(content.get(key), str)}  # fmt: skip
    roles |= {place: key for key, place in content.get("long", {}).items()}
    sketch.items[:] = [
        Found(item.name, item.shape, item.holds, roles.get(item.name, item.role))
        for item in sketch.items
    ]


def _is_long(columns: Sequence[str], cells: Mapping[str, Cells], where: str) -> bool:
    """Whether a table has a row an entry: columns that say matrix, row, column and value."""
    if len(columns) > 50:
        return False
    named = {role_of(name, (role,)): name for role in ("matrix", "row", "column", "value")
             for name in columns if role_of(name, (role,))}  # fmt: skip
    if len(named) < 4:
        return False
    words = cells[named["matrix"]].words(where, "matrix")
    return all(matrix_of(word) for word in np.unique(words).tolist())


def _sketch_long(
    columns: Sequence[str],
    cells: Mapping[str, Cells],
    kinds: Mapping[str, str],
    content: dict[str, Any],
    sketch: Sketch,
    where: str,
) -> None:
    named = {role: next(n for n in columns if role_of(n, (role,)))
             for role in ("matrix", "row", "column", "value")}  # fmt: skip
    others = [name for name in columns if name not in named.values()]
    point = next((name for name in others if role_of(name, ("ids",))), None)
    content = {**content, "points": LONG_ROWS}
    spelled = {matrix_of(word): word for word in
               np.unique(cells[named["matrix"]].words(where, "matrix")).tolist()}  # fmt: skip
    names = {letter: word for letter, word in spelled.items() if letter and letter != word}
    if names:
        content["matrices"] = {n: names.get(n, n) for n in MATRIX_NAMES}
    for name in others:
        if name == point or role_of(name, ROLES):
            continue
        bare, unit = name_and_unit(name)
        if kinds[name] == "numbers":
            add_coordinate(content, bare, name, unit, sketch.remarks)
        else:
            content.setdefault("tags", {})[bare] = {"from": name}
    by = [about["from"] for key in ("coordinates", "tags")
          for about in content.get(key, {}).values()]  # fmt: skip
    content["long"] = {"point": point or by, **named}
    sketch.findings.append("an entry a row" + ("" if point else "; points told by coordinates"))
    _list_columns(columns, set(), cells, kinds, sketch)
    _set_roles(sketch, content)
    sketch.contents = [content]


def sketch_lines(files: Sequence[Path], pattern: NamePattern | None) -> Sketch:
    """Sketch an export of JSON lines by the first lines of its first file."""
    sketch = Sketch(skeleton={"format": "json-lines", "points": ROW})
    records = []
    with open(files[0], "rb") as stream:
        for number in range(LINES):
            line = stream.readline(8_000_000)
            if not line.strip():
                continue
            try:
                records.append(parse_line(line))
            except ValueError as error:
                sketch.contradictions.append(f"line {number + 1}: {error}")
    objects = [record for record in records if isinstance(record, dict)]
    if not objects:
        sketch.contradictions.append("no line holds a JSON object")
        return sketch
    content: dict[str, Any] = {"format": "json-lines", "points": ROW}
    matrices: dict[str, str] = {}
    for name, value in _flattened(objects[0]).items():
        _take_key(name, value, content, matrices, sketch)
    sketch.findings.append("a point a line")
    if "A" in matrices:
        content["matrices"] = sorted_matrices(matrices)
        if len(files) > 1:
            with_fields(content, pattern, "files", sketch.remarks)
        _set_roles(sketch, content)
        sketch.contents = [content, {**content, "order": COLUMN_MAJOR}]
    return sketch


def _flattened(record: Mapping[str, Any], prefix: str = "") -> dict[str, Any]:
    found: dict[str, Any] = {}
    for key, value in record.items():
        name = f"{prefix}{key}"
        if isinstance(value, dict) and name.count("/") < 6:
            found |= _flattened(value, f"{name}/")
        else:
            found[name] = value
    return found


def _take_key(
    name: str, value: Any, content: dict[str, Any], matrices: dict[str, str], sketch: Sketch
) -> None:
    letter, role = matrix_of(name), role_of(name, ROLES)
    is_number = isinstance(value, int | float) and not isinstance(value, bool)
    bare, unit = name_and_unit(name)
    shape = ""
    if isinstance(value, list):
        shape = _list_shape(value)
        words = value and all(isinstance(item, str) for item in value)
        if letter and not words:
            matrices.setdefault(letter, name)
        elif role in KINDS and words:
            content.setdefault("names", {})[role] = name
    elif letter == "D" and is_number:
        matrices.setdefault("D", name)
    elif role == "ids" and isinstance(value, str | int):
        content.setdefault("ids", name)
    elif role in ("dt", "digits") and is_number:
        content[role] = name
    elif is_number and role is None:
        add_coordinate(content, bare, name, unit, sketch.remarks)
    elif isinstance(value, str) and role is None:
        content.setdefault("tags", {})[bare] = {"from": name}
    holds = "list" if shape else value_text(value)
    sketch.items.append(Found(name, shape, holds))


def _list_shape(value: Sequence[Any]) -> str:
    sizes = [len(value)]
    if value and isinstance(value[0], list):
        sizes.append(len(value[0]))
    return shape_text(sizes)


def sketch_matrix_files(format_: str, files: Sequence[Path], pattern: NamePattern | None) -> Sketch:
    """Sketch an export of one matrix a file, by the files' names."""
    content: dict[str, Any] = {"format": format_, "points": FILE}
    sketch = Sketch(skeleton=content)
    plain = Layout(format_, FILE)
    for file in files[:8]:
        try:
            shape = shape_text(read_matrix_file(file, plain).shape)
        except SourceError as error:
            sketch.contradictions.append(str(error))
            continue
        sketch.items.append(Found(file.name, shape, "matrix", _role(file)))
    if pattern is None or "{matrix}" not in pattern.text:
        sketch.contradictions.append(
            "names of the files do not say which matrix they hold, or are not built alike"
        )
        return sketch
    content = dict(content)
    with_fields(content, pattern, "files", sketch.remarks)
    sketch.findings.append(f"a matrix a file, named {pattern.text}")
    sketch.contents = [content, {**content, "order": COLUMN_MAJOR}]
    return sketch


def _role(file: Path) -> str:
    letter = matrix_of(file.stem) or matrix_of(file.stem.split("_")[0])
    return f"matrix {letter}" if letter else ""
