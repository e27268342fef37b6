"""Take exports in: files → readers → checks → one bank of one revision."""

import os
from collections.abc import Callable, Generator, Iterator, Sequence
from contextlib import closing
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from ssaudit.bank import Points, Source, Strings
from ssaudit.bank_checks import number_points
from ssaudit.bank_writer import BankWriter, Batch, Settled
from ssaudit.errors import BankError, SourceError
from ssaudit.intake.align import Aligner
from ssaudit.intake.background import SMALL_BYTES, Background
from ssaudit.intake.compose import compose
from ssaudit.intake.csv_table import open_csv
from ssaudit.intake.groups import grouped_pieces
from ssaudit.intake.layout import FILE, GROUP, ROW, Layout, read_layout
from ssaudit.intake.long_rows import long_pieces
from ssaudit.intake.matrix_files import MATRIX, parcels, read_point
from ssaudit.intake.parquet_table import open_parquet
from ssaudit.intake.piece import OnePoint, Piece, complete, gather
from ssaudit.intake.records import record_pieces
from ssaudit.intake.report import IntakeReport
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
from ssaudit.intake.survey import Survey
from ssaudit.intake.table import Table
from ssaudit.intake.unused import listed
from ssaudit.progress import Progress, no_progress


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
    report : IntakeReport
        What was found in them.
    """

    bank: Path
    revision: str
    digest: str
    points: int
    void: dict[str, int]
    sources: tuple[Source, ...]
    report: IntakeReport


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
    inputs = {file.path: "source" for file in files}
    if layout is not None:
        inputs[Path(layout)] = "layout"
    for path, kind in inputs.items():
        if same_file(path, target):
            raise SourceError(
                f"is a {kind} and the bank to write", where=str(target), do="choose another bank"
            )
    total = sum(file.path.stat().st_size for file in files)
    survey, aligner, taken = Survey(), Aligner(), _Taken()
    with Background() as background, BankWriter(target, revision, background.run) as writer:
        for parcel in parcels_of(files, described):
            name = parcel[0].name
            for batch, digits_by in _batches_told(parcel, described, taken, total, progress):
                batch = aligner.align(batch, str(parcel[0].path))
                number = writer.append(batch)
                background.run_sized(batch.size, survey.add, number, batch, name, digits_by)
            taken.add_sources(parcel, background)
            progress("ingest", taken.bytes, total)
        settled = _settle(writer, files, taken)
        background.wait()
        read = taken.sources
        report = compose(
            settled, survey, read, total, described, aligner.reordered, tuple(taken.unused)
        )
        void = count_reasons(settled.points)
        digest = writer.finish(read, ids_given=False not in taken.named, intake=report.to_json())
    return Intake(target, revision, digest, len(settled.points), void, read, report)


@dataclass(eq=False)
class _Taken:
    """What has been taken in so far.

    Attributes
    ----------
    points, held : int
        Points of all files, and of the file that is being read.
    bytes : int
        Size of the files that are done.
    named : set of bool
        Whether files named their points.
    unused : dict
        Names of what the files hold and is not read, in order.
    """

    points: int = 0
    held: int = 0
    bytes: int = 0
    named: set[bool] = field(default_factory=set)
    unused: dict[str, None] = field(default_factory=dict)
    _sources: list[tuple[str, Callable[[], str], int]] = field(default_factory=list)

    def add_sources(self, parcel: Sequence[SourceFile], background: Background) -> None:
        """Note the files of a parcel that has been read."""
        if not self.held:
            raise SourceError("holds no points", where=str(parcel[0].path))
        for number, file in enumerate(parcel):
            # Where each matrix has its file, the first of a point stands for it.
            held = 0 if number else self.held
            size = file.path.stat().st_size
            self._sources.append((file.name, _digest(file.path, size, background), held))
            self.bytes += size
        self.points += self.held
        self.held = 0

    @property
    def sources(self) -> tuple[Source, ...]:
        """All files, with their digests."""
        return tuple(Source(name, digest(), held) for name, digest, held in self._sources)


def _batches_told(
    parcel: Sequence[SourceFile],
    layout: Layout | None,
    taken: _Taken,
    total: int,
    progress: Progress,
) -> Iterator[tuple[Batch, str]]:
    """Read a parcel of files, and tell how far it has come; yield what digits go by as well."""
    size, read = sum(file.path.stat().st_size for file in parcel), 0
    with closing(batches_of(parcel, layout, taken.points + 1)) as batches:
        for batch, facts in batches:
            taken.held += len(batch.points)
            taken.named.add(facts.has_ids)
            taken.unused.update(dict.fromkeys(facts.unused))
            yield batch, facts.digits_by
            # How far text has been read is not known; its models are at most as large.
            read = min(read + batch.size, size)
            progress("ingest", taken.bytes + read, total)


def _settle(writer: BankWriter, files: Sequence[SourceFile], taken: _Taken) -> Settled:
    try:
        return writer.settle(ids_given=True in taken.named)
    except BankError as error:
        more = f" and {len(files) - 1} more files" if len(files) > 1 else ""
        do = error.do
        if "A is missing" in error.what and taken.unused:
            do = (
                f"held and not used: {listed(list(taken.unused))}; say which is A in a layout; "
                f"ssaudit look {files[0].path} drafts one"
            )
        raise BankError(error.what, where=f"{files[0].path}{more}", do=do) from error


def _digest(path: Path, size: int, background: Background) -> Callable[[], str]:
    """Start on the digest of a file; what is returned gives it."""
    if size < SMALL_BYTES:
        found = file_digest(path)
        return lambda: found
    return background.start(file_digest, path).result


def parcels_of(files: Sequence[SourceFile], layout: Layout | None) -> list[list[SourceFile]]:
    """Files that are read together: those of one point, where each holds one matrix."""
    if layout is not None and layout.files is not None and MATRIX in layout.files.fields:
        return parcels(files, layout)
    return [[file] for file in files]


@dataclass(frozen=True)
class Facts:
    """What a file says that the bank does not keep.

    Attributes
    ----------
    has_ids : bool
        Whether it names its points.
    digits_by : str
        Type that the digits are those of, "" where they were stated.
    unused : tuple of str
        What it holds and is not read.
    """

    has_ids: bool
    digits_by: str
    unused: tuple[str, ...]


def batches_of(
    files: Sequence[SourceFile], layout: Layout | None, first: int
) -> Generator[tuple[Batch, Facts], None, None]:
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
    facts : Facts
        What else the file says of them.
    """
    where = str(files[0].path)
    layout = layout_for(files[0].path) if layout is None else layout
    for piece in pieces_of(files, layout):
        ids = _ids(piece, first)
        first += len(piece)
        by = "" if isinstance(layout.digits, int) else piece.digits_by
        facts = Facts(piece.ids is not None, by, piece.unused)
        yield complete(piece, layout, where, ids), facts


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


def count_reasons(points: Points) -> dict[str, int]:
    """Count the void points by reason, the most frequent first."""
    void = points.void[points.void != ""]
    reasons, counts = np.unique(void.astype(np.str_), return_counts=True)
    return {str(reasons[i]): int(counts[i]) for i in np.argsort(-counts, kind="stable")}
