"""Take exports in: files → readers → checks → one bank of one revision."""

import os
from collections.abc import Callable, Generator, Iterator, Sequence
from contextlib import closing
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from ssaudit.bank import ModelBank, Source, Strings, number_points
from ssaudit.bank_file import BankWriter, Batch, read_bank
from ssaudit.errors import SourceError
from ssaudit.intake.align import Aligner
from ssaudit.intake.csv_table import open_csv
from ssaudit.intake.groups import grouped_pieces
from ssaudit.intake.layout import FILE, GROUP, ROW, Layout, read_layout
from ssaudit.intake.long_rows import long_pieces
from ssaudit.intake.matrix_files import MATRIX, parcels, read_point
from ssaudit.intake.parquet_table import open_parquet
from ssaudit.intake.piece import OnePoint, Piece, complete, gather
from ssaudit.intake.records import record_pieces
from ssaudit.intake.rows import row_pieces
from ssaudit.intake.sources import (
    OPENERS,
    SourceFile,
    check_format,
    file_digest,
    find_files,
    layout_for,
    same_file,
)
from ssaudit.intake.stacked import stacked_pieces
from ssaudit.intake.table import Table

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
    revision: str | None = None,
    bank: str | os.PathLike[str],
    layout: str | os.PathLike[str] | None = None,
    progress: Progress = no_progress,
) -> Intake:
    """Take exports of one revision in and write them as one bank.

    Parameters
    ----------
    sources : sequence of paths
        Files, folders or glob patterns.
    revision : str, optional
        Name of the model revision; the layout's when absent.
    bank : path
        The bank to write; it appears whole or not at all.
    layout : path, optional
        A layout file; without one, HDF5 and NPZ files in the default layout are taken.
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
    described = None if layout is None else read_layout(layout)
    revision = revision or (described.revision if described else None)
    if not revision:
        raise SourceError("the revision has no name", do="name it: --revision R")
    files = find_files(sources, described)
    if any(same_file(file.path, target) for file in files):
        raise SourceError(
            "is a source and the bank to write", where=str(target), do="choose another bank"
        )
    total = sum(file.path.stat().st_size for file in files)
    taken: list[Source] = []
    done, found, named, aligner = 0, 0, True, Aligner()
    with BankWriter(target, revision) as writer:
        for parcel in parcels_of(files, described):
            count = 0
            with closing(batches_of(parcel, described, found + 1)) as batches:
                for batch, has_ids in batches:
                    writer.append(aligner.align(batch, str(parcel[0].path)))
                    count += len(batch.points)
                    named = named and has_ids
            found += count
            for number, file in enumerate(parcel):
                # Where each matrix has its file, the first of a point stands for it.
                held = 0 if number else count
                taken.append(Source(file.name, file_digest(file.path), held))
                done += file.path.stat().st_size
                progress("ingest", done, total)
        digest = writer.finish(taken, ids_given=named)
    with read_bank(target) as written:
        void = count_reasons(written)
        return Intake(target, revision, digest, len(written), void, tuple(taken))


def parcels_of(files: Sequence[SourceFile], layout: Layout | None) -> list[list[SourceFile]]:
    """Files that are read together: those of one point, where each holds one matrix."""
    if layout is not None and layout.files is not None and MATRIX in layout.files.fields:
        return parcels(files, layout)
    return [[file] for file in files]


def batches_of(
    files: Sequence[SourceFile], layout: Layout | None, first: int
) -> Generator[tuple[Batch, bool], None, None]:
    """Read a parcel of files.

    Parameters
    ----------
    files : sequence of SourceFile
        One file, or the files of one point.
    layout : Layout or None
        Where things lie in it; None for the default layout of its format.
    first : int
        Number of its first point, should the file not name its points.

    Yields
    ------
    batch : Batch
        Checked points.
    has_ids : bool
        Whether the file names them.
    """
    where = str(files[0].path)
    layout = layout_for(files[0].path) if layout is None else layout
    for piece in pieces_of(files, layout):
        ids = _ids(piece, first)
        first += len(piece)
        yield complete(piece, layout, where, ids), piece.ids is not None


def pieces_of(files: Sequence[SourceFile], layout: Layout) -> Iterator[Piece]:
    """Read the points of a parcel of files, as they lie there."""
    file = files[0]
    if layout.files is not None and MATRIX in layout.files.fields:
        yield from gather([read_point(files, layout)])
    elif layout.points == FILE:
        yield from _one_point(file, layout)
    else:
        check_format(file.path, layout)
        yield from _many_points(file, layout)


def _one_point(file: SourceFile, layout: Layout) -> Iterator[Piece]:
    """Read a file that holds one point; one that cannot be read is a void point."""
    try:
        check_format(file.path, layout)
        pieces = list(_many_points(file, layout))
    except SourceError as error:
        fields = file.fields
        missing = {c.name: "" if c.is_tag else np.nan for c in layout.columns}
        known = {c.name: fields[c.place.field] for c in layout.columns if c.place.field}
        name = fields.get("id", file.path.stem)
        pieces = list(gather([OnePoint(name, {}, missing | known, error.what[:200])]))
    yield from pieces


def _many_points(file: SourceFile, layout: Layout) -> Iterator[Piece]:
    path, fields = file.path, file.fields
    if layout.format in ("hdf5", "npz"):
        with OPENERS[layout.format](path) as container:
            if layout.points == GROUP:
                yield from grouped_pieces(container, layout, fields)
            else:
                yield from stacked_pieces(container, layout, fields, path.stem)
    elif layout.format == "json-lines":
        yield from record_pieces(path, layout, fields)
    elif layout.format == "parquet":
        with open_parquet(path) as table:
            yield from _table_pieces(table, layout, fields, path.stem)
    else:
        yield from _table_pieces(open_csv(path, layout), layout, fields, path.stem)


def _table_pieces(
    table: Table, layout: Layout, fields: dict[str, str], stem: str
) -> Iterator[Piece]:
    if layout.points == ROW:
        return row_pieces(table, layout, fields)
    return long_pieces(table, layout, fields, stem)


def _ids(piece: Piece, first: int) -> Strings:
    return number_points(first, len(piece)) if piece.ids is None else piece.ids


def count_reasons(bank: ModelBank) -> dict[str, int]:
    """Count the void points of a bank by reason, the most frequent first."""
    void = bank.points.void[bank.points.void != ""]
    reasons, counts = np.unique(void.astype(np.str_), return_counts=True)
    return {str(reasons[i]): int(counts[i]) for i in np.argsort(-counts, kind="stable")}
