"""The bank: all the models of one revision, taken in and checked."""

import hashlib
import json
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Any, Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ssaudit.errors import BankError

MATRIX_NAMES = ("A", "B", "C", "D", "E")
# Stands in for the point's own reason when an id or a place in the envelope is claimed twice.
DUPLICATE_ID = "its id is used by {count} points of the export"
DUPLICATE_PLACE = "its coordinates are those of {count} points of the export"

Strings = NDArray[np.str_]
Matrices = Mapping[str, NDArray[np.float64]]


class Stack(Protocol):
    """Stacked matrices, in memory or in a file: a shape, and slices along the points."""

    @property
    def shape(self) -> tuple[int, ...]:
        """(points, rows, columns)."""
        ...

    def __getitem__(self, key: slice, /) -> Any:
        """Matrices of a range of points."""
        ...


@dataclass(frozen=True, eq=False)
class Points:
    """The operating points of a bank, column by column.

    Attributes
    ----------
    ids : (points,) str
        Name of each point.
    coordinates : dict of (points,) float
        Coordinates by name, each in its unit.
    units : dict of str
        Unit of each coordinate; "" when the export states none.
    tags : dict of (points,) str
        Tags by name.
    void : (points,) object
        Why a point could not be judged, as str; "" where its model is usable.
    """

    ids: Strings
    coordinates: Mapping[str, NDArray[np.float64]]
    units: Mapping[str, str]
    tags: Mapping[str, Strings]
    void: NDArray[np.object_]

    def __len__(self) -> int:
        return len(self.ids)

    def between(self, start: int, stop: int) -> "Points":
        """Return the points of a range."""
        return Points(
            self.ids[start:stop],
            {name: column[start:stop] for name, column in self.coordinates.items()},
            self.units,
            {name: column[start:stop] for name, column in self.tags.items()},
            self.void[start:stop],
        )


@dataclass(frozen=True, eq=False)
class Section:
    """Points of one bank that share names, shapes and sampling time: a stack.

    Attributes
    ----------
    states, inputs, outputs : tuple of str
        Names, in the order of the rows and columns of the matrices.
    dt : float
        Sampling time [s]; 0 for continuous models.
    digits : int or None
        Significant digits that the exporter wrote; None for full precision.
    matrices : dict of (points, rows, columns) stacks
        "A", and of "B", "C", "D", "E" those that the export holds; arrays, or datasets of an open
        file.
    """

    states: tuple[str, ...]
    inputs: tuple[str, ...]
    outputs: tuple[str, ...]
    dt: float
    digits: int | None
    matrices: Mapping[str, Stack]

    def __len__(self) -> int:
        return self.matrices["A"].shape[0]

    def read(self, start: int, stop: int) -> dict[str, NDArray[np.float64]]:
        """Return the matrices of a range of points as arrays, by name."""
        return {
            name: np.asarray(stack[start:stop], dtype=np.float64)
            for name, stack in self.matrices.items()
        }

    @property
    def description(self) -> dict[str, Any]:
        """Everything about the section but the numbers, for JSON and for digests."""
        return {
            "states": list(self.states),
            "inputs": list(self.inputs),
            "outputs": list(self.outputs),
            "dt": self.dt,
            "digits": self.digits,
            "matrices": sorted(self.matrices),
        }


@dataclass(frozen=True)
class Source:
    """One file that a bank was made from.

    Attributes
    ----------
    name : str
        File name, without the folder.
    sha256 : str
        Digest of the file's bytes.
    points : int
        Number of points it held.
    """

    name: str
    sha256: str
    points: int


@dataclass(frozen=True, eq=False)
class ModelBank:
    """All the models of one revision.

    Attributes
    ----------
    revision : str
        Name of the model revision.
    points : Points
        All points of the export, section by section; usable or void with a reason.
    sections : tuple of Section
        The stacks, in the order of ``points``. Points whose matrices could not be stacked at all
        are in a last section of no states.
    sources : tuple of Source
        The files it was made from; empty when built from arrays.
    ids_given : bool
        Whether the export named its points; otherwise they are numbered and ids say nothing
        across revisions.
    stored_digest : str
        Digest recorded when the bank was written; "" for a bank in memory.
    name : str
        File name, for messages.
    file
        The open file behind it, if there is one.
    intake : dict
        The intake report as it was stored; empty when built from arrays.
    """

    revision: str
    points: Points
    sections: tuple[Section, ...]
    sources: tuple[Source, ...] = ()
    ids_given: bool = True
    stored_digest: str = ""
    name: str = "bank in memory"
    file: Any = field(default=None, repr=False)
    intake: Mapping[str, Any] = field(default_factory=dict, repr=False)

    def __len__(self) -> int:
        return len(self.points)

    def __enter__(self) -> "ModelBank":
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Close the file behind the bank, if there is one."""
        if self.file is not None:
            self.file.close()

    @cached_property
    def digest(self) -> str:
        """SHA-256 of everything that the bank holds (the stored one, where it has one)."""
        return self.stored_digest or self.compute_digest()

    def compute_digest(self) -> str:
        """Read the whole bank and return the SHA-256 of its content."""
        digests = []
        for section in self.sections:
            digest = MatrixDigest()
            for _, matrices in chunks_of(section, points=4096):
                digest.update(matrices)
            digests.append(digest)
        return bank_digest(self.revision, self.ids_given, self.points, self.sections, digests)

    @property
    def usable(self) -> int:
        """Number of points that are not void."""
        return int(np.count_nonzero(self.points.void == ""))


class MatrixDigest:
    """SHA-256 of the matrices of a section, independent of how they are cut into chunks."""

    def __init__(self) -> None:
        self._hashes = {name: hashlib.sha256() for name in MATRIX_NAMES}

    def update(self, matrices: Matrices) -> None:
        """Take in the matrices of the next points."""
        for name, stack in matrices.items():
            self._hashes[name].update(np.ascontiguousarray(stack, dtype="<f8").data)

    def hexdigests(self) -> list[str]:
        """Digest of A, B, C, D and E."""
        return [hash_.hexdigest() for hash_ in self._hashes.values()]


def bank_digest(
    revision: str,
    ids_given: bool,
    points: Points,
    sections: Sequence[Section],
    digests: Sequence[MatrixDigest],
) -> str:
    """SHA-256 of the content of a bank: names, points and every matrix entry.

    Where the sources lay, what they were called and when they were read do not matter.
    """
    total = hashlib.sha256()
    layout = {
        "revision": revision,
        "ids_given": ids_given,
        "units": dict(sorted(points.units.items())),
        "tags": sorted(points.tags),
        "sections": [
            {**section.description, "points": len(section), "digests": digest.hexdigests()}
            for section, digest in zip(sections, digests, strict=True)
        ],
    }
    total.update(json.dumps(layout, sort_keys=True).encode())
    for name in sorted(points.coordinates):
        total.update(np.ascontiguousarray(points.coordinates[name], dtype="<f8").data)
    for column in [points.ids, *(points.tags[name] for name in sorted(points.tags)), points.void]:
        for part in _joined_words(column):
            total.update(part)
    return total.hexdigest()


def _joined_words(words: NDArray[Any], together: int = 50_000) -> Iterator[bytes]:
    """Bytes of a column of words, each ended by a zero byte, and the column by one more."""
    for start in range(0, len(words), together):
        part = "\0".join(words[start : start + together].tolist())
        yield part.encode("utf-8", "surrogatepass") + b"\0"
    yield b"\0" if len(words) else b"\0\0"


def chunks_of(
    section: Section, points: int
) -> Iterator[tuple[slice, dict[str, NDArray[np.float64]]]]:
    """Cut a section into chunks: the range within it, and the matrices by name."""
    for start in range(0, len(section), points):
        stop = min(start + points, len(section))
        yield slice(start, stop), section.read(start, stop)


def mark_unusable(points: Points, sections: Sequence[Section], *, ids_given: bool = True) -> Points:
    """Mark as void the points whose id or place in the envelope is claimed more than once.

    Which of the claimants is meant cannot be known, so none of them is judged. Points that are
    void already keep their reason.

    Parameters
    ----------
    points : Points
        All points, section by section.
    sections : sequence of Section
        The sections; the same coordinates in two sections are two models, not a duplicate.
    ids_given : bool
        Whether the export named its points; numbers that were given to them never recur.

    Returns
    -------
    Points
        The same points, more of them void.
    """
    void = points.void.copy()
    section_of = np.repeat(np.arange(len(sections)), [len(section) for section in sections])
    place = [section_of, *points.coordinates.values(), *points.tags.values()]
    claims: list[tuple[str, list[NDArray[Any]]]] = []
    if ids_given:
        claims.append((DUPLICATE_ID, [points.ids]))
    if points.coordinates:
        claims.append((DUPLICATE_PLACE, place))
    for reason, columns in claims:
        counts = _times_claimed(columns)
        for row in np.flatnonzero((counts > 1) & (void == "")):
            void[row] = reason.format(count=counts[row])
    return replace(points, void=void)


def _times_claimed(columns: Sequence[NDArray[Any]]) -> NDArray[np.int64]:
    """How many rows share the values of each row."""
    # Equal rows have equal hashes, so only rows whose hash recurs need an exact comparison.
    hashes = row_hashes(columns)
    ordered = np.sort(hashes)
    again = ordered[1:][ordered[1:] == ordered[:-1]]
    counts: NDArray[np.int64] = np.ones(len(columns[0]), dtype=np.int64)
    if again.size:
        recurring = np.flatnonzero(np.isin(hashes, again))
        counts[recurring] = _times_claimed_exactly([column[recurring] for column in columns])
    return counts


def _times_claimed_exactly(columns: Sequence[NDArray[Any]]) -> NDArray[np.int64]:
    code = np.zeros(len(columns[0]), dtype=np.int64)
    for column in columns:
        _, values = np.unique(column, return_inverse=True)
        # Renumbered after every column, so that the product cannot overflow.
        code = np.unique(code * (values.max(initial=0) + 1) + values, return_inverse=True)[1]
    counts: NDArray[np.int64] = np.bincount(code, minlength=1)[code]
    return counts


def row_hashes(columns: Sequence[NDArray[Any]]) -> NDArray[np.uint64]:
    """Hash of each row: equal for equal values, nearly always different for others."""
    hashes = np.zeros(len(columns[0]), dtype=np.uint64)
    for column in columns if len(hashes) else ():
        if column.dtype.kind == "f":
            # Zero and minus zero are one value, and so are all kinds of NaN.
            column = np.where(np.isnan(column), np.nan, column + 0.0)
        words = np.ascontiguousarray(column).view(np.uint32).reshape(len(column), -1)
        for word in words.T:
            # An odd multiplier (2^64 over the golden ratio) and a shift spread the bits; unsigned
            # products wrap around, which is meant.
            hashes = (hashes ^ word) * np.uint64(0x9E3779B97F4A7C15)
            hashes ^= hashes >> np.uint64(29)
    return hashes


def non_finite_reasons(matrices: Matrices, points: Points) -> NDArray[np.object_]:
    """Say which points hold an entry or coordinate that is not a finite number.

    Parameters
    ----------
    matrices : dict of (points, rows, columns) float
        Matrices by name.
    points : Points
        The same points.

    Returns
    -------
    (points,) object
        The points' own reasons, where they have one; else what is not finite, or "".
    """
    void = points.void.copy()
    for name, stack in matrices.items():
        finite = np.isfinite(stack)
        for row in np.flatnonzero(~finite.all(axis=(1, 2)) & (void == "")):
            i, j = np.argwhere(~finite[row])[0]
            kind = "NaN" if np.isnan(stack[row, i, j]) else "infinite"
            void[row] = f"{name}[{i + 1},{j + 1}] is {kind}"
    for name, column in points.coordinates.items():
        for row in np.flatnonzero(~np.isfinite(column) & (void == "")):
            void[row] = f"coordinate {name} is not a finite number"
    return void


def default_names(prefix: str, count: int) -> tuple[str, ...]:
    """Names for signals that the export does not name: x1, x2, … for states."""
    return tuple(f"{prefix}{number}" for number in range(1, count + 1))


def build_bank(
    A: ArrayLike,
    B: ArrayLike | None = None,
    C: ArrayLike | None = None,
    D: ArrayLike | None = None,
    *,
    revision: str,
    states: Sequence[str] | None = None,
    inputs: Sequence[str] | None = None,
    outputs: Sequence[str] | None = None,
    ids: Sequence[str] | None = None,
    coordinates: Mapping[str, tuple[ArrayLike, str]] | None = None,
    tags: Mapping[str, Sequence[str]] | None = None,
    dt: float = 0.0,
    digits: int | None = None,
) -> ModelBank:
    """Build a bank from arrays, with the same checks as an ingested one.

    Parameters
    ----------
    A : (points, n, n) float
        State matrices [1/s when continuous].
    B : (points, n, inputs) float, optional
        Input matrices.
    C : (points, outputs, n) float, optional
        Output matrices.
    D : (points, outputs, inputs) float, optional
        Feedthrough matrices.
    revision : str
        Name of the model revision.
    states, inputs, outputs : sequence of str, optional
        Names; x1, x2 …, u1 …, y1 … when absent.
    ids : sequence of str, optional
        Point ids; numbered from 1 when absent.
    coordinates : dict, optional
        ``{"speed": (values, "m/s")}``: values at each point, and their unit.
    tags : dict, optional
        ``{"config": values}``: a word at each point.
    dt : float
        Sampling time [s]; 0 for continuous models.
    digits : int, optional
        Significant digits to which the entries were rounded; None for full precision.

    Returns
    -------
    ModelBank

    Raises
    ------
    BankError
        When shapes or lengths disagree.

    Examples
    --------
    >>> bank = build_bank([[[-1.0]], [[float("nan")]]], revision="A",
    ...                   coordinates={"speed": ([10.0, 12.0], "m/s")})
    >>> bank.points.void.tolist()
    ['', 'A[1,1] is NaN']
    """
    given = {"A": A, "B": B, "C": C, "D": D}
    matrices = {n: np.array(m, dtype=np.float64) for n, m in given.items() if m is not None}
    names = check_shapes(matrices, states, inputs, outputs)
    count = len(matrices["A"])
    columns = {name: np.array(v, dtype=np.float64) for name, (v, _) in (coordinates or {}).items()}
    words = {name: np.array(v, dtype=np.str_) for name, v in (tags or {}).items()}
    point_ids = np.array(ids, dtype=np.str_) if ids is not None else number_points(1, count)
    for name, column in {"ids": point_ids, **columns, **words}.items():
        if column.shape != (count,):
            raise BankError(f"{name} has shape {column.shape}, A has {count} points")
    points = Points(
        point_ids,
        columns,
        {name: unit for name, (_, unit) in (coordinates or {}).items()},
        words,
        np.full(count, "", dtype=object),
    )
    points = replace(points, void=non_finite_reasons(matrices, points))
    section = Section(*names, float(dt), digits, matrices)
    marked = mark_unusable(points, [section])
    return ModelBank(str(revision), marked, (section,), ids_given=ids is not None)


def number_points(first: int, count: int) -> Strings:
    """Ids for points that the export does not name: their numbers."""
    return np.arange(first, first + count).astype(np.str_)


def check_shapes(
    matrices: Mapping[str, Stack],
    states: Sequence[str] | None,
    inputs: Sequence[str] | None,
    outputs: Sequence[str] | None,
) -> tuple[tuple[str, ...], tuple[str, ...], tuple[str, ...]]:
    """Check that stacked matrices and names agree in size, and complete the names.

    Parameters
    ----------
    matrices : dict of (points, rows, columns) stacks
        Matrices by name.
    states, inputs, outputs : sequence of str or None
        Names where the export states them.

    Returns
    -------
    states, inputs, outputs : tuple of str
        Names for every row and column.

    Raises
    ------
    BankError
        Saying which shapes disagree.
    """
    if "A" not in matrices:
        raise BankError("A is missing")
    for name, stack in matrices.items():
        if len(stack.shape) != 3:
            raise BankError(f"{name} has shape {stack.shape}, not (points, rows, columns)")
        if stack.shape[0] != matrices["A"].shape[0]:
            raise BankError(f"{name} has {stack.shape[0]} points, A has {matrices['A'].shape[0]}")
    n = matrices["A"].shape[1]
    width = next((matrices[m].shape[2] for m in ("B", "D") if m in matrices), len(inputs or ()))
    height = next((matrices[m].shape[1] for m in ("C", "D") if m in matrices), len(outputs or ()))
    expected = {
        "A": (n, n),
        "B": (n, width),
        "C": (height, n),
        "D": (height, width),
        "E": (n, n),
    }
    for name, stack in matrices.items():
        if tuple(stack.shape[1:]) != expected[name]:
            rows, columns = stack.shape[1:]
            raise BankError(
                f"{name} is {rows}x{columns} where {expected[name][0]}x{expected[name][1]} fits "
                f"{n} states, {width} inputs and {height} outputs"
            )
    return (
        _check_names("states", "x", n, states),
        _check_names("inputs", "u", width, inputs),
        _check_names("outputs", "y", height, outputs),
    )


def _check_names(
    kind: str, prefix: str, count: int, names: Sequence[str] | None
) -> tuple[str, ...]:
    if names is None:
        return default_names(prefix, count)
    if len(names) != count:
        raise BankError(f"{len(names)} names of {kind} for {count} {kind}")
    if len(set(names)) != count:
        twice = next(name for name in names if list(names).count(name) > 1)
        raise BankError(f"{kind} names {twice!r} twice")
    return tuple(str(name) for name in names)
