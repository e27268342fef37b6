"""The bank: all the models of one revision, taken in and checked."""

import hashlib
import json
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

MATRIX_NAMES = ("A", "B", "C", "D", "E")

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
