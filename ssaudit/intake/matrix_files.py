"""One matrix a file: Matrix Market files, or plain numbers in rows; files of one point together."""

from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from ssaudit.errors import SourceError
from ssaudit.intake.guard import WHOLE_BYTES, damage_reported
from ssaudit.intake.layout import COLUMN_MAJOR, Layout
from ssaudit.intake.orientation import BY_SHAPES
from ssaudit.intake.piece import OnePoint, parse_number
from ssaudit.intake.sources import SourceFile
from ssaudit.intake.table import DigitCounter
from ssaudit.settings import nearest

# Rows or columns at the most.
LARGEST = 5000
MATRIX = "matrix"
BANNER = "%%matrixmarket"
FIELDS = ("real", "double", "integer")
SYMMETRIES = ("general", "symmetric", "skew-symmetric")


def parcels(files: Iterable[SourceFile], layout: Layout) -> list[list[SourceFile]]:
    """Put the files of each point together.

    Parameters
    ----------
    files : iterable of SourceFile
        All files.
    layout : Layout
        Its pattern has the field ``{matrix}``.

    Returns
    -------
    list of list of SourceFile
        Files whose other fields agree, by first appearance.
    """
    found: dict[tuple[str, tuple[tuple[str, str], ...]], list[SourceFile]] = {}
    for file in files:
        others = tuple((k, v) for k, v in sorted(file.fields.items()) if k != MATRIX)
        # Without other fields, files of one folder belong together.
        folder = "" if others else file.path.parent.as_posix()
        found.setdefault((folder, others), []).append(file)
    return list(found.values())


def read_point(files: Sequence[SourceFile], layout: Layout) -> OnePoint:
    """Read the matrices of one point; a file that cannot be read makes the point void.

    Parameters
    ----------
    files : sequence of SourceFile
        One file a matrix.
    layout : Layout
        Its ``matrices`` say what ``{matrix}`` stands for.

    Returns
    -------
    OnePoint

    Raises
    ------
    SourceError
        When ``{matrix}`` stands for something that the layout does not name.
    """
    assert layout.files is not None
    spelled = {text: name for name, text in layout.matrices.items()}
    fields = {k: v for k, v in files[0].fields.items() if k != MATRIX}
    counter = DigitCounter()
    matrices: dict[str, NDArray[np.float64]] = {}
    problem = ""
    for file in files:
        text = file.fields[MATRIX]
        if text not in spelled:
            raise SourceError(
                f"{text!r} is none of the matrices of {layout.name}",
                where=str(file.path),
                do=nearest(text, spelled),
            )
        name = spelled[text]
        if name in matrices:
            problem = problem or f"{name} is given twice"
        try:
            matrix = read_matrix_file(file.path, layout, counter)
        except SourceError as error:
            problem = problem or f"{name}: {error.what}"[:200]
            continue
        matrices[name] = matrix.T if layout.order == COLUMN_MAJOR else matrix
    if "A" not in matrices and not problem:
        problem = "A is missing"
    id_ = _id(files[0], layout, fields)
    columns = {c.name: fields[c.place.field] for c in layout.columns if c.place.field}
    digits = layout.digits if isinstance(layout.digits, int) else None
    dt = layout.dt if isinstance(layout.dt, float) else 0.0
    return OnePoint(
        id_, matrices if not problem else {}, columns, problem, {}, {}, dt, digits, counter.most,
        BY_SHAPES,
    )  # fmt: skip


def _id(file: SourceFile, layout: Layout, fields: Mapping[str, str]) -> str:
    if layout.ids is not None and layout.ids.field is not None:
        return fields[layout.ids.field]
    if "id" in fields:
        return fields["id"]
    assert layout.files is not None
    return layout.files.without(MATRIX, file.fields) or file.path.parent.name


def read_matrix_file(
    path: Path, layout: Layout, counter: DigitCounter | None = None
) -> NDArray[np.float64]:
    """Read one matrix.

    Parameters
    ----------
    path : Path
        A Matrix Market file, or plain numbers in rows, as the layout says.
    layout : Layout
        Its format, separator and decimal point.
    counter : DigitCounter, optional
        Told how every number was written.

    Returns
    -------
    (rows, columns) float

    Raises
    ------
    SourceError
    """
    with damage_reported(path):
        if path.stat().st_size > WHOLE_BYTES // 4:
            raise SourceError(f"holds {path.stat().st_size} bytes", where=str(path))
        text = path.read_bytes().decode("utf-8-sig")
    if layout.format == "matrix-market":
        return parse_matrix_market(text, str(path), counter)
    return parse_plain(text, layout, str(path), counter)


def parse_matrix_market(
    text: str, where: str, counter: DigitCounter | None = None
) -> NDArray[np.float64]:
    """Read a Matrix Market file, of an array or of coordinates.

    Read here and not by a library, because claims are checked against what the file holds before
    memory is set aside, the digits that were written are seen, and ten thousand small files
    are read in less time.

    Parameters
    ----------
    text : str
        The file.
    where : str
        Its name, for messages.
    counter : DigitCounter, optional
        Told how every number was written.

    Returns
    -------
    (rows, columns) float

    Raises
    ------
    SourceError

    References
    ----------
    Boisvert, Pozo and Remington, The Matrix Market Exchange Formats: Initial Design, NISTIR 5935
    (1996); from memory.

    Examples
    --------
    >>> lines = ["%%MatrixMarket matrix coordinate real general", "2 2 1", "1 2 0.5"]
    >>> parse_matrix_market(chr(10).join(lines), "a.mtx")
    array([[0. , 0.5],
           [0. , 0. ]])
    """
    head, _, rest = text.partition("\n")
    words = head.lower().split()
    if len(words) != 5 or words[0] != BANNER or words[1] != "matrix":
        raise SourceError("is no Matrix Market file of a matrix", where=where)
    layout, field, symmetry = words[2:]
    if layout not in ("array", "coordinate") or field not in FIELDS or symmetry not in SYMMETRIES:
        raise SourceError(f"holds a {' '.join(words[2:])[:60]} matrix, not a real one", where=where)
    lines = [line for line in rest.splitlines() if line.strip() and not line.startswith("%")]
    sizes = [_whole(word, where) for word in (lines[0].split() if lines else [])]
    if len(sizes) != (2 if layout == "array" else 3):
        raise SourceError("has no line of sizes", where=where)
    if max(sizes[:2]) > LARGEST or (symmetry != "general" and sizes[0] != sizes[1]):
        raise SourceError(f"claims {sizes[0]}x{sizes[1]} entries", where=where)
    tokens = " ".join(lines[1:]).split()
    if layout == "array":
        found = _array(tokens, sizes[0], sizes[1], symmetry, where, counter)
    else:
        found = _coordinates(tokens, sizes, symmetry, where, counter)
    return found


def _whole(word: str, where: str) -> int:
    if not (word.isascii() and word.isdigit() and len(word) < 10):
        raise SourceError(f"{word[:20]!r} is no size or place of an entry", where=where)
    return int(word)


def _numbers(
    tokens: Sequence[str], where: str, counter: DigitCounter | None
) -> NDArray[np.float64]:
    if counter is not None:
        counter.look_at_texts(tokens)
    values = np.array([parse_number(token) for token in tokens], dtype=np.float64)
    for k in np.flatnonzero(np.isnan(values)).tolist():
        if tokens[k].lower().lstrip("+-") != "nan":
            raise SourceError(f"{tokens[k][:40]!r} is not a number", where=where)
    return values


def _array(
    tokens: Sequence[str],
    rows: int,
    columns: int,
    symmetry: str,
    where: str,
    counter: DigitCounter | None,
) -> NDArray[np.float64]:
    expected = rows * columns
    if symmetry != "general":
        expected = rows * (rows + 1) // 2 - (rows if symmetry == "skew-symmetric" else 0)
    if len(tokens) != expected:
        raise SourceError(f"claims {expected} entries and holds {len(tokens)}", where=where)
    values = _numbers(tokens, where, counter)
    if symmetry == "general":
        return values.reshape(columns, rows).T
    matrix = np.zeros((rows, rows))
    # Columns of the lower triangle one after the other are rows of the upper one.
    i, j = np.triu_indices(rows, 1 if symmetry == "skew-symmetric" else 0)
    matrix[j, i] = values
    return _mirrored(matrix, symmetry)


def _coordinates(
    tokens: Sequence[str],
    sizes: Sequence[int],
    symmetry: str,
    where: str,
    counter: DigitCounter | None,
) -> NDArray[np.float64]:
    rows, columns, count = sizes
    if len(tokens) != 3 * count:
        raise SourceError(f"claims {count} entries and holds {len(tokens) / 3:g}", where=where)
    values = _numbers(tokens[2::3], where, counter)
    i = np.array([_whole(token, where) for token in tokens[0::3]], dtype=np.int64) - 1
    j = np.array([_whole(token, where) for token in tokens[1::3]], dtype=np.int64) - 1
    inside = (i >= 0) & (i < rows) & (j >= 0) & (j < columns)
    if not inside.all():
        k = int(np.argmin(inside))
        raise SourceError(f"has an entry at {i[k] + 1},{j[k] + 1}", where=where)
    if len(np.unique(i * columns + j)) < count:
        raise SourceError("gives an entry twice", where=where)
    matrix = np.zeros((rows, columns))
    matrix[i, j] = values
    if symmetry != "general" and (i < j).any():
        raise SourceError("has an entry above the diagonal of a symmetric matrix", where=where)
    return matrix if symmetry == "general" else _mirrored(matrix, symmetry)


def _mirrored(lower: NDArray[np.float64], symmetry: str) -> NDArray[np.float64]:
    strict = np.tril(lower, -1)
    mirrored: NDArray[np.float64] = lower + (strict.T if symmetry == "symmetric" else -strict.T)
    return mirrored


def parse_plain(
    text: str, layout: Layout, where: str, counter: DigitCounter | None = None
) -> NDArray[np.float64]:
    """Read rows of numbers without a header, parted by blanks or by one of the separators.

    Examples
    --------
    >>> from ssaudit.intake.layout import Layout
    >>> parse_plain("1.0, 2.0" + chr(10) + "3.0, 4.0", Layout("csv", "file"), "a.csv")
    array([[1., 2.],
           [3., 4.]])
    """
    lines = [line for line in text.splitlines()[layout.skip_lines :] if line.strip()]
    lines = [line for line in lines if line[0] not in "#%"]
    if not lines:
        raise SourceError("holds no numbers", where=where)
    separator = layout.separator or next((s for s in ";,\t" if s in lines[0] and
                                          s != layout.decimal), None)  # fmt: skip
    rows = [line.split(separator) for line in lines]
    if len({len(row) for row in rows}) > 1:
        raise SourceError("has rows of different length", where=where)
    if max(len(rows), len(rows[0])) > LARGEST:
        raise SourceError(f"holds {len(rows)}x{len(rows[0])} entries", where=where)
    tokens = [cell.strip().replace(layout.decimal, ".") for row in rows for cell in row]
    return _numbers(tokens, where, counter).reshape(len(rows), len(rows[0]))
