"""Take exports in: files → readers → checks → one bank of one revision."""

import glob
import hashlib
import os
from collections.abc import Callable, Sequence
from contextlib import AbstractContextManager
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from ssaudit.bank import ModelBank, Source
from ssaudit.bank_file import BankWriter, read_bank
from ssaudit.errors import SourceError
from ssaudit.intake.hdf5 import open_hdf5
from ssaudit.intake.npz import open_npz
from ssaudit.intake.plain import PlainExport, batches_of

# A reader a format: how its files begin, and what opens them.
READERS: tuple[tuple[bytes, Callable[[Path], AbstractContextManager[PlainExport]]], ...] = (
    (b"\x89HDF\r\n\x1a\n", open_hdf5),
    (b"PK\x03\x04", open_npz),
)
# Files of a folder that are taken for exports.
SUFFIXES = (".h5", ".hdf5", ".he5", ".npz")
Progress = Callable[[str, int, int], None]


def no_progress(stage: str, done: int, total: int) -> None:
    """Report nothing: what is used where nobody watches."""


@dataclass(frozen=True, eq=False)
class Intake:
    """What came of taking exports in.

    Attributes
    ----------
    bank : Path
        The bank that was written.
    revision : str
        Its revision.
    digest : str
        Digest of its content.
    points : int
        Points found in the sources: usable and void ones.
    void : dict of int
        How many points are void, by reason.
    sources : tuple of Source
        The files read.
    """

    bank: Path
    revision: str
    digest: str
    points: int
    void: dict[str, int]
    sources: tuple[Source, ...]


def ingest(
    sources: Sequence[str | os.PathLike[str]],
    *,
    revision: str,
    bank: str | os.PathLike[str],
    progress: Progress = no_progress,
) -> Intake:
    """Take exports of one revision in and write them as one bank.

    Parameters
    ----------
    sources : sequence of paths
        Files, folders or glob patterns, in the default layout.
    revision : str
        Name of the model revision.
    bank : path
        The bank to write; it appears whole or not at all.
    progress : callable, optional
        Called as ``progress(stage, done, total)``, in bytes.

    Returns
    -------
    Intake

    Raises
    ------
    SourceError, BankError
        When a source cannot be read, none holds a usable point, or the bank cannot be written.
    """
    target = Path(bank)
    files = find_files(sources)
    if not revision:
        raise SourceError("the revision has no name", do="name it: --revision R")
    if any(_same_file(file, target) for file in files):
        raise SourceError(
            "is a source and the bank to write", where=str(target), do="choose another bank"
        )
    total = sum(file.stat().st_size for file in files)
    taken: list[Source] = []
    done, named = 0, True
    with BankWriter(target, revision) as writer:
        for file in files:
            count, ids_given = _take_in(file, writer, 1 + sum(s.points for s in taken))
            taken.append(Source(file.name, file_digest(file), count))
            named = named and ids_given
            done += file.stat().st_size
            progress("ingest", done, total)
        digest = writer.finish(taken, ids_given=named)
    with read_bank(target) as written:
        void = count_reasons(written)
        return Intake(target, revision, digest, len(written), void, tuple(taken))


def _take_in(file: Path, writer: BankWriter, first: int) -> tuple[int, bool]:
    """Hand the batches of one file to the writer; return its points, and whether it names them."""
    count = 0
    with reader_for(file)(file) as export:
        for batch in batches_of(export, first):
            writer.append(batch)
            count += len(batch.points)
        return count, "ids" in export.about or len(export.shapes.get("A", ())) == 2


def count_reasons(bank: ModelBank) -> dict[str, int]:
    """Count the void points of a bank by reason, the most frequent first."""
    void = bank.points.void[bank.points.void != ""]
    reasons, counts = np.unique(void.astype(np.str_), return_counts=True)
    return {str(reasons[i]): int(counts[i]) for i in np.argsort(-counts, kind="stable")}


def find_files(sources: Sequence[str | os.PathLike[str]]) -> list[Path]:
    """List the files that sources name, folders and patterns in alphabetical order.

    Parameters
    ----------
    sources : sequence of paths
        Files, folders or glob patterns.

    Returns
    -------
    list of Path
        Each file once.

    Raises
    ------
    SourceError
        When a source names no file.
    """
    found: dict[Path, None] = {}
    for source in map(Path, sources):
        if source.is_dir():
            files = [f for f in sorted(source.iterdir()) if f.suffix.lower() in SUFFIXES]
        elif source.exists():
            files = [source]
        else:
            files = [Path(f) for f in sorted(glob.glob(str(source))) if Path(f).is_file()]
        if not files:
            kind = "the folder holds no export" if source.is_dir() else "there is no such file"
            raise SourceError(kind, where=str(source), do="name HDF5 or NPZ files")
        found.update(dict.fromkeys(files))
    if not found:
        raise SourceError("no source is named", do="name HDF5 or NPZ files")
    return list(found)


def reader_for(file: Path) -> Callable[[Path], AbstractContextManager[PlainExport]]:
    """Choose the reader by how a file begins, whatever it is called."""
    try:
        with open(file, "rb") as stream:
            start = stream.read(8)
    except OSError as error:
        raise SourceError(f"cannot be opened ({error.strerror})", where=str(file)) from error
    for magic, reader in READERS:
        if start.startswith(magic):
            return reader
    raise SourceError("is neither HDF5 nor NPZ", where=str(file), do="export in one of these")


def file_digest(path: Path) -> str:
    """SHA-256 of a file's bytes."""
    with open(path, "rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def _same_file(file: Path, target: Path) -> bool:
    return file.resolve() == target.resolve() or (target.exists() and file.samefile(target))
