"""Writing a bank, batch by batch: whole or not at all."""

import contextlib
import json
import os
import tempfile
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import MatrixDigest, Points, Section, Source, Stack, bank_digest
from ssaudit.bank_checks import mark_unusable
from ssaudit.bank_file import FORMAT, SCHEMA, escape, fixed_text
from ssaudit.errors import BankError

# Bytes of one HDF5 chunk: just under the library's chunk cache of 1 MiB, so that a chunk that two
# reads share is fetched once.
CHUNK_BYTES = 900_000

# Numbers written with this many significant digits are as good as the 64-bit numbers themselves.
FULL_PRECISION = 16

# Bytes of small batches that wait to be written together.
BUFFER_BYTES = 4_000_000

Run = Callable[..., None]


def call_now(task: Callable[..., object], *arguments: object) -> None:
    """Do a task at once."""
    task(*arguments)


@dataclass(frozen=True, eq=False)
class Batch:
    """Some points of one source file that share names and shapes.

    Attributes
    ----------
    points : Points
        The points; their ``void`` says which of them cannot be used, and why.
    section : Section
        Names, sampling time and the matrices of these points, as arrays.
    digits_seen : int or None
        Most significant digits that an entry was written with, found by inspection; a section
        gets the most of all its batches.
    named : frozenset of str
        Those of "states", "inputs", "outputs" whose names the export states.
    basis : str
        How rows were told from columns: "labels", "shapes" or "".
    """

    points: Points
    section: Section
    digits_seen: int | None = None
    named: frozenset[str] = frozenset()
    basis: str = ""

    @property
    def size(self) -> int:
        """Bytes of its matrices."""
        return sum(8 * int(np.prod(stack.shape)) for stack in self.section.matrices.values())


def stored_rows(entries: int) -> int:
    """Points that a bank stores as a block; batches of a multiple of it are written at once.

    Parameters
    ----------
    entries : int
        Entries of the largest matrix.

    Returns
    -------
    int
    """
    return max(1, CHUNK_BYTES // max(8, 8 * entries))


@dataclass(frozen=True, eq=False)
class Settled:
    """What a bank holds, once points have been checked against each other.

    Attributes
    ----------
    points : Points
        All points, section by section.
    sections : tuple of Section
        The sections in their order.
    numbers : tuple of int
        The number that `BankWriter.append` gave for each section.
    digests : tuple of MatrixDigest
        Digests of their matrices.
    """

    points: Points
    sections: tuple[Section, ...]
    numbers: tuple[int, ...]
    digests: tuple[MatrixDigest, ...]


@dataclass(eq=False)
class _OpenSection:
    """A section that is being written: its datasets, and batches that wait."""

    number: int
    section: Section
    digest: MatrixDigest = field(default_factory=MatrixDigest)
    points: list[Points] = field(default_factory=list)
    waiting: list[Section] = field(default_factory=list)
    waiting_bytes: int = 0
    digits_seen: int | None = None

    @property
    def rows(self) -> int:
        """Points of a stored block, the same for all matrices."""
        sizes = [int(np.prod(stack.shape[1:])) for stack in self.section.matrices.values()]
        return stored_rows(max(sizes))


class BankWriter:
    """Writes a bank batch by batch; the file appears under its name only when it is finished.

    Use it in a ``with`` statement: leaving it without `finish` removes the unfinished file.

    Parameters
    ----------
    path : Path
        Where the bank goes.
    revision : str
        Name of the model revision.
    run : callable, optional
        ``run(task, *arguments)`` does what need not be waited for, in the order given; by default
        at once. Digests are complete only when all of it is done.

    Raises
    ------
    BankError
        When the folder cannot be written to.
    """

    def __init__(self, path: Path, revision: str, run: Run = call_now) -> None:
        import h5py

        self.path = path
        self.revision = revision
        self._run = run
        self._sections: dict[tuple[Any, ...], _OpenSection] = {}
        self._settled: Settled | None = None
        self._new_folders: list[Path] = []
        try:
            if path.is_dir():
                raise BankError("is a folder", where=str(path), do="name the bank's file")
            path.exists()
            self._new_folders = _make_folders(path.parent)
            handle, name = tempfile.mkstemp(prefix=f".{path.name[:100]}-", dir=path.parent)
            os.close(handle)
        except (OSError, ValueError) as error:
            self._remove_folders()
            raise _unwritable(path, error) from error
        self._temporary = Path(name)
        self._file = h5py.File(self._temporary, "w", libver="latest")

    def __enter__(self) -> "BankWriter":
        return self

    def __exit__(self, *_: object) -> None:
        # After a write failed for want of space, closing fails as well; the file goes anyway.
        with contextlib.suppress(OSError, RuntimeError):
            self._file.close()
        self._temporary.unlink(missing_ok=True)
        self._remove_folders()

    def _remove_folders(self) -> None:
        """Remove the folders that were made for a bank that did not come about."""
        with contextlib.suppress(OSError):
            for folder in reversed(self._new_folders):
                folder.rmdir()

    def append(self, batch: Batch) -> int:
        """Add points to the section that has their names and shapes.

        Parameters
        ----------
        batch : Batch
            The points.

        Returns
        -------
        int
            Number of the section, by first appearance.
        """
        section = batch.section
        shapes = [(name, stack.shape[1:]) for name, stack in sorted(section.matrices.items())]
        key = _hashable((*section.description.items(), *shapes))
        target = self._sections.get(key)
        if target is None:
            target = self._sections[key] = _OpenSection(len(self._sections), section)
        target.points.append(batch.points)
        target.waiting.append(section)
        target.waiting_bytes += sum(int(np.prod(m.shape)) * 8 for m in section.matrices.values())
        if batch.digits_seen is not None:
            target.digits_seen = max(target.digits_seen or 0, batch.digits_seen)
        if target.waiting_bytes > BUFFER_BYTES:
            self._flush(target)
        return target.number

    def settle(self, *, ids_given: bool = True) -> Settled:
        """Write what remains and check points against each other; no more can be added then.

        Parameters
        ----------
        ids_given : bool
            Whether the export named any points; numbers that were given to them never recur.

        Returns
        -------
        Settled

        Raises
        ------
        BankError
            When there is no usable point.
        """
        if self._settled is not None:
            return self._settled
        # Points without stackable matrices stand last, so that the first section is a real one.
        opened = sorted(self._sections.values(), key=lambda s: not s.section.states)
        for target in opened:
            self._flush(target, last=True)
        points = _join([part for target in opened for part in target.points])
        for target in opened:
            target.points.clear()
        sections = tuple(_finished(target, self._file) for target in opened)
        points = mark_unusable(points, sections, ids_given=ids_given)
        if not np.any(points.void == ""):
            raise BankError(_why_none(points), where=self.path.name, do="mend the export")
        numbers = tuple(target.number for target in opened)
        digests = tuple(target.digest for target in opened)
        self._settled = Settled(points, sections, numbers, digests)
        return self._settled

    def finish(
        self,
        sources: Sequence[Source],
        *,
        ids_given: bool,
        intake: Mapping[str, Any] | None = None,
    ) -> str:
        """Write what remains, and put the file in its place.

        Parameters
        ----------
        sources : sequence of Source
            The files that the points came from.
        ids_given : bool
            Whether the export named its points.
        intake : dict, optional
            The intake report, as JSON can hold it. It is no part of the digest.

        Returns
        -------
        str
            The bank's digest.

        Raises
        ------
        BankError
            When there is no usable point, or the file cannot be put in its place.
        """
        settled = self.settle(ids_given=ids_given)
        digest = bank_digest(
            self.revision, ids_given, settled.points, settled.sections, settled.digests
        )
        about = [
            {**section.description, "number": number}
            for section, number in zip(settled.sections, settled.numbers, strict=True)
        ]
        try:
            self._write_points(settled.points)
            _write_json(self._file, "sources", [vars(source) for source in sources])
            _write_json(self._file, "sections_about", about)
            _write_json(self._file, "intake", dict(intake or {}))
            self._file.attrs.update(
                {
                    "format": fixed_text(FORMAT),
                    "schema": SCHEMA,
                    "revision": fixed_text(self.revision),
                    "ids_given": ids_given,
                    "digest": fixed_text(digest),
                }
            )
            self._file.close()
            _put_in_place(self._temporary, self.path)
        except (OSError, RuntimeError) as error:
            raise _unwritable(self.path, error) from error
        self._new_folders = []
        return digest

    def _flush(self, target: _OpenSection, *, last: bool = False) -> None:
        """Write what waits, as far as it fills stored blocks, and keep the rest waiting."""
        if not target.waiting:
            return
        count = sum(len(section) for section in target.waiting)
        written = count if last else count // target.rows * target.rows
        group = self._file.require_group(f"sections/{target.number}")
        rest: dict[str, Stack] = {}
        for name in target.section.matrices:
            parts = [part.matrices[name][:] for part in target.waiting]
            block = parts[0] if len(parts) == 1 else np.concatenate(parts)
            self._run(target.digest.update, {name: block[:written]})
            rest[name] = block[written:].copy()
            try:
                _extend(group, name, block[:written], target.rows)
            except (OSError, RuntimeError) as error:
                raise _unwritable(self.path, error) from error
        target.waiting = [replace(target.section, matrices=rest)] if written < count else []
        target.waiting_bytes = sum(8 * int(np.prod(stack.shape)) for stack in rest.values())

    def _write_points(self, points: Points) -> None:
        group = self._file.create_group("points")
        _write_words(group, "id", points.ids)
        for name, column in points.coordinates.items():
            dataset = group.create_dataset(f"at/{escape(name)}", data=column)
            dataset.attrs["units"] = fixed_text(points.units.get(name, ""))
        for name, words in points.tags.items():
            _write_words(group, f"tag/{escape(name)}", words)
        rows = np.flatnonzero(points.void != "")
        group.create_dataset("void_rows", data=rows)
        _write_words(group, "void_reasons", points.void[rows].astype(np.str_))


def _extend(group: Any, name: str, block: NDArray[np.float64], rows: int) -> None:
    """Write matrices of more points behind those that are there."""
    stored = group[name].shape[0] if name in group else 0
    if block[:1].size == 0:
        # Blocks of no size cannot be stored in parts; the number of points is all there is.
        if name in group:
            del group[name]
        group.create_dataset(name, shape=(stored + len(block), *block.shape[1:]), dtype="<f8")
        return
    dataset = group[name] if name in group else _create(group, name, block.shape[1:], rows)
    dataset.resize(stored + len(block), axis=0)
    whole = len(block) // rows * rows if stored % rows == 0 else 0
    flat = np.ascontiguousarray(block, dtype="<f8")
    for start in range(0, whole, rows):
        # Whole blocks go straight to the file, past the library's cache.
        dataset.id.write_direct_chunk((stored + start, 0, 0), flat[start : start + rows])
    if whole < len(block):
        dataset[stored + whole :] = flat[whole:]


def _create(group: Any, name: str, shape: tuple[int, ...], rows: int) -> Any:
    return group.create_dataset(
        name,
        shape=(0, *shape),
        maxshape=(None, *shape),
        chunks=(rows, *shape),
        dtype="<f8",
        fillvalue=None,
    )


def _write_json(file: Any, name: str, content: Any) -> None:
    """Store structured content as UTF-8 bytes; attributes could not hold that of many files."""
    encoded = json.dumps(content, allow_nan=False).encode()
    file.create_dataset(name, data=np.frombuffer(encoded, dtype=np.uint8))


def _finished(target: _OpenSection, file: Any) -> Section:
    """Return a section with its datasets, and the digits that inspection found."""
    section, digits = target.section, target.digits_seen
    if section.digits is None and digits is not None and digits < FULL_PRECISION:
        section = replace(section, digits=digits)
    return replace(section, matrices=dict(file[f"sections/{target.number}"]))


def _make_folders(folder: Path) -> list[Path]:
    """Make a folder and those above it; return the ones that are new, the topmost first."""
    new = [parent for parent in (folder, *folder.parents) if not parent.exists()]
    made: list[Path] = []
    for parent in reversed(new):
        parent.mkdir(exist_ok=True)
        made.append(parent)
    return made


def _write_words(group: Any, name: str, words: Any) -> None:
    """Store strings as UTF-8 of fixed width, which reads at once."""
    encoded = _encoded(words) if len(words) else np.zeros(0, "S1")
    group.create_dataset(name, data=encoded.astype(f"S{max(1, encoded.dtype.itemsize)}"))


def _encoded(words: Any) -> Any:
    """Strings as UTF-8; those of ASCII alone, as most are, without going through each."""
    letters = np.ascontiguousarray(words).view(np.uint32).reshape(len(words), -1)
    if letters.max() < 128:
        return letters.astype(np.uint8).view(f"S{letters.shape[1]}").reshape(-1)
    return np.strings.encode(words, "utf-8")


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


def _unwritable(path: Path, error: Exception) -> BankError:
    reason = getattr(error, "strerror", None) or " ".join(str(error).split())[:160]
    return BankError(f"cannot be written ({reason})", where=str(path), do="choose another place")
