"""A bank's own HDF5 file: written whole or not at all, read in slices."""

import contextlib
import json
import os
import tempfile
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import (
    MatrixDigest,
    ModelBank,
    Points,
    Section,
    Source,
    bank_digest,
    check_shapes,
    mark_unusable,
)
from ssaudit.errors import BankError

FORMAT = "ssaudit bank"
SCHEMA = 1
# Bytes of one HDF5 chunk: just under the library's chunk cache of 1 MiB, so that a chunk that two
# reads share is fetched once.
CHUNK_BYTES = 900_000
# Bytes of small batches that wait to be written together.
BUFFER_BYTES = 4_000_000


@dataclass(frozen=True, eq=False)
class Batch:
    """Some points of one source file that share names and shapes.

    Attributes
    ----------
    points : Points
        The points; their ``void`` says which of them cannot be used, and why.
    section : Section
        Names, sampling time and the matrices of these points, as arrays.
    """

    points: Points
    section: Section


@dataclass(eq=False)
class _OpenSection:
    """A section that is being written: its datasets, and batches that wait."""

    number: int
    section: Section
    digest: MatrixDigest = field(default_factory=MatrixDigest)
    points: list[Points] = field(default_factory=list)
    waiting: list[Section] = field(default_factory=list)
    waiting_bytes: int = 0


class BankWriter:
    """Writes a bank batch by batch; the file appears under its name only when it is finished.

    Use it in a ``with`` statement: leaving it without `finish` removes the unfinished file.

    Parameters
    ----------
    path : Path
        Where the bank goes.
    revision : str
        Name of the model revision.

    Raises
    ------
    BankError
        When the folder cannot be written to.
    """

    def __init__(self, path: Path, revision: str) -> None:
        import h5py

        self.path = path
        self.revision = revision
        self._sections: dict[tuple[Any, ...], _OpenSection] = {}
        try:
            path.parent.mkdir(parents=True, exist_ok=True)
            handle, name = tempfile.mkstemp(prefix=f".{path.name}-", dir=path.parent)
            os.close(handle)
        except OSError as error:
            raise _unwritable(path, error) from error
        self._temporary = Path(name)
        self._file = h5py.File(self._temporary, "w", libver="latest")

    def __enter__(self) -> "BankWriter":
        return self

    def __exit__(self, *_: object) -> None:
        self._file.close()
        self._temporary.unlink(missing_ok=True)

    def append(self, batch: Batch) -> None:
        """Add points to the section that has their names and shapes."""
        section = batch.section
        shapes = [(name, stack.shape[1:]) for name, stack in sorted(section.matrices.items())]
        key = (*section.description.items(), *shapes)
        number = len(self._sections)
        target = self._sections.setdefault(_hashable(key), _OpenSection(number, section))
        target.points.append(batch.points)
        target.waiting.append(section)
        target.waiting_bytes += sum(int(np.prod(m.shape)) * 8 for m in section.matrices.values())
        if target.waiting_bytes > BUFFER_BYTES:
            self._flush(target)

    def finish(self, sources: Sequence[Source], *, ids_given: bool) -> str:
        """Write what remains, check points against each other, and put the file in its place.

        Parameters
        ----------
        sources : sequence of Source
            The files that the points came from.
        ids_given : bool
            Whether the export named its points.

        Returns
        -------
        str
            The bank's digest.

        Raises
        ------
        BankError
            When there is no usable point, or the file cannot be put in its place.
        """
        # Points without stackable matrices stand last, so that the first section is a real one.
        opened = sorted(self._sections.values(), key=lambda s: not s.section.states)
        for target in opened:
            self._flush(target)
        points = _join([part for target in opened for part in target.points])
        sections = [
            replace(target.section, matrices=dict(self._file[f"sections/{target.number}"]))
            for target in opened
        ]
        points = mark_unusable(points, sections)
        if not np.any(points.void == ""):
            raise BankError(_why_none(points), where=", ".join(s.name for s in sources[:3]))
        digests = [target.digest for target in opened]
        digest = bank_digest(self.revision, ids_given, points, sections, digests)
        self._write_points(points)
        self._file.attrs.update(
            {
                "format": FORMAT,
                "schema": SCHEMA,
                "revision": self.revision,
                "ids_given": ids_given,
                "digest": digest,
                "sources": json.dumps([vars(source) for source in sources]),
                "sections": json.dumps(
                    [{**t.section.description, "number": t.number} for t in opened]
                ),
            }
        )
        self._file.close()
        try:
            _put_in_place(self._temporary, self.path)
        except OSError as error:
            raise _unwritable(self.path, error) from error
        return digest

    def _flush(self, target: _OpenSection) -> None:
        if not target.waiting:
            return
        group = self._file.require_group(f"sections/{target.number}")
        for name in target.section.matrices:
            block = np.concatenate([part.matrices[name][:] for part in target.waiting])
            target.digest.update({name: block})
            if name not in group:
                _create(group, name, block.shape[1:])
            dataset = group[name]
            stored = dataset.shape[0]
            try:
                dataset.resize(stored + len(block), axis=0)
                dataset[stored:] = block
            except OSError as error:
                raise _unwritable(self.path, error) from error
        target.waiting.clear()
        target.waiting_bytes = 0

    def _write_points(self, points: Points) -> None:
        group = self._file.create_group("points")
        _write_words(group, "id", points.ids)
        for name, column in points.coordinates.items():
            dataset = group.create_dataset(f"at/{_escape(name)}", data=column)
            dataset.attrs["units"] = points.units.get(name, "")
        for name, words in points.tags.items():
            _write_words(group, f"tag/{_escape(name)}", words)
        rows = np.flatnonzero(points.void != "")
        group.create_dataset("void_rows", data=rows)
        _write_words(group, "void_reasons", points.void[rows].astype(np.str_))


def read_bank(path: str | os.PathLike[str]) -> ModelBank:
    """Open a bank; its matrices are read in slices when they are needed.

    Parameters
    ----------
    path : path
        A file that ``ssaudit ingest`` has written.

    Returns
    -------
    ModelBank
        Close it, or use it in a ``with`` statement.

    Raises
    ------
    BankError
        When the file is missing, no bank, damaged, or of another schema.
    """
    import h5py

    path = Path(path)
    if not path.is_file():
        raise BankError("there is no such bank", where=str(path), do="make it with ssaudit ingest")
    try:
        file = h5py.File(path, "r")
    except OSError as error:
        raise BankError(
            "is not an HDF5 file, or is cut short", where=str(path), do="ingest the export again"
        ) from error
    try:
        return _read(file, path)
    except BankError:
        file.close()
        raise
    except (KeyError, ValueError, TypeError, OSError, AttributeError, RuntimeError) as error:
        file.close()
        raise BankError(
            f"is a damaged bank ({error})", where=str(path), do="ingest the export again"
        ) from error


def _read(file: Any, path: Path) -> ModelBank:
    if file.attrs.get("format") != FORMAT:
        raise BankError("is HDF5 but not a bank", where=str(path), do="take it in: ssaudit ingest")
    if file.attrs["schema"] != SCHEMA:
        raise BankError(
            f"has bank schema {file.attrs['schema']}, this version reads {SCHEMA}",
            where=str(path),
            do="ingest the export again",
        )
    sections = []
    for about in json.loads(file.attrs["sections"]):
        group = file[f"sections/{about['number']}"]
        matrices = {name: group[name] for name in about["matrices"]}
        names = check_shapes(matrices, about["states"], about["inputs"], about["outputs"])
        sections.append(Section(*names, about["dt"], about["digits"], matrices))
    group = file["points"]
    ids = _read_words(group["id"])
    void = np.full(len(ids), "", dtype=object)
    void[group["void_rows"][:]] = _read_words(group["void_reasons"]).astype(object)
    at, tag = group.get("at", {}), group.get("tag", {})
    points = Points(
        ids,
        {_unescape(name): at[name][:] for name in at},
        {_unescape(name): str(at[name].attrs["units"]) for name in at},
        {_unescape(name): _read_words(tag[name]) for name in tag},
        void,
    )
    if sum(len(section) for section in sections) != len(points):
        raise BankError("is a damaged bank: its sections and its points differ", where=str(path))
    sources = tuple(Source(**source) for source in json.loads(file.attrs["sources"]))
    return ModelBank(
        str(file.attrs["revision"]),
        points,
        tuple(sections),
        sources,
        bool(file.attrs["ids_given"]),
        str(file.attrs["digest"]),
        path.name,
        file,
    )


def _create(group: Any, name: str, shape: tuple[int, ...]) -> None:
    rows = max(1, CHUNK_BYTES // max(8, 8 * int(np.prod(shape))))
    group.create_dataset(
        name,
        shape=(0, *shape),
        maxshape=(None, *shape),
        chunks=(rows, *(max(1, size) for size in shape)),
        dtype="<f8",
    )


def _write_words(group: Any, name: str, words: Any) -> None:
    """Store strings as UTF-8 of fixed width, which reads at once."""
    encoded = np.char.encode(words, "utf-8") if len(words) else np.zeros(0, "S1")
    group.create_dataset(name, data=encoded.astype(f"S{max(1, encoded.dtype.itemsize)}"))


def _read_words(dataset: Any) -> Any:
    return np.char.decode(dataset[:], "utf-8")


def _escape(name: str) -> str:
    """Make a name safe as an HDF5 link, in which "/" parts groups and "." stands for the group."""
    return name.replace("%", "%25").replace("/", "%2F").replace(".", "%2E")


def _unescape(name: str) -> str:
    return name.replace("%2E", ".").replace("%2F", "/").replace("%25", "%")


def _hashable(value: Any) -> Any:
    if isinstance(value, list | tuple):
        return tuple(_hashable(item) for item in value)
    return value


def _join(parts: Sequence[Points]) -> Points:
    """One table of points; a coordinate that a part lacks is NaN there, a tag empty."""
    names = dict.fromkeys(name for part in parts for name in part.coordinates)
    tags = dict.fromkeys(name for part in parts for name in part.tags)
    units: dict[str, str] = {}
    for part in parts:
        for name, unit in part.units.items():
            if units.setdefault(name, unit) != unit:
                raise BankError(f"coordinate {name} is in {units[name]!r} and in {unit!r}")
    return Points(
        np.concatenate([part.ids for part in parts]),
        {
            name: np.concatenate(
                [part.coordinates.get(name, np.full(len(part), np.nan)) for part in parts]
            )
            for name in names
        },
        units,
        {
            name: np.concatenate([part.tags.get(name, np.full(len(part), "")) for part in parts])
            for name in tags
        },
        np.concatenate([_missing_coordinates(part, names) for part in parts]),
    )


def _missing_coordinates(part: Points, names: Iterable[str]) -> NDArray[np.object_]:
    """Reasons of a part of the points, those that lack a coordinate which others have included."""
    missing = next((name for name in names if name not in part.coordinates), None)
    if missing is None:
        return part.void
    return np.where(part.void == "", f"coordinate {missing} is missing", part.void)


def _why_none(points: Points) -> str:
    reasons, counts = np.unique(points.void.astype(np.str_), return_counts=True)
    most = int(np.argmax(counts))
    return f"no usable point among {len(points)}: {reasons[most]} ({counts[most]} points)"


def _put_in_place(temporary: Path, path: Path) -> None:
    with open(temporary, "rb") as file:
        os.fsync(file.fileno())
    # mkstemp makes files private; a bank has the rights that any new file of the user gets.
    mask = os.umask(0)
    os.umask(mask)
    os.chmod(temporary, 0o666 & ~mask)
    os.replace(temporary, path)
    with contextlib.suppress(OSError):
        folder = os.open(path.parent, os.O_RDONLY)
        os.fsync(folder)
        os.close(folder)


def _unwritable(path: Path, error: OSError) -> BankError:
    return BankError(
        f"cannot be written ({error.strerror or error})", where=str(path), do="choose another place"
    )
