"""Look at an unknown export: what is there, what it seems to mean, and a draft layout for it."""

import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from ssaudit.bank_writer import Batch
from ssaudit.errors import SourceError, SsauditError
from ssaudit.intake.draft import write_draft
from ssaudit.intake.guard import check_regular
from ssaudit.intake.ingest import batches_of, parcels_of
from ssaudit.intake.layout import SUFFIXES, Layout, parse_layout
from ssaudit.intake.orientation import AS_READ, BY_SHAPES, CANNOT_TELL, TRANSPOSED, weigh
from ssaudit.intake.report import Orientation
from ssaudit.intake.roles import NamePattern, find_pattern
from ssaudit.intake.sketch import Found, Sketch
from ssaudit.intake.sketch_arrays import sketch_arrays
from ssaudit.intake.sketch_tables import sketch_lines, sketch_matrix_files, sketch_table
from ssaudit.intake.sources import SourceFile, find_files, format_of, list_below

# Files that are listed, and points that are read to try a draft.
MOST_FILES = 200_000
TRIED = 200
DEPTH = 2
NOTHING = Orientation(CANNOT_TELL, "nothing could be read")
_RANK = {AS_READ: 1, CANNOT_TELL: 0, TRANSPOSED: -1}


@dataclass(frozen=True)
class FileKind:
    """Files of one format.

    Attributes
    ----------
    format : str
        Format, or the suffix of files of no known one.
    count, bytes : int
        How many there are, and how large together.
    example : str
        Name of the first.
    pattern : str
        How their names are built; "" where they are not built alike.
    """

    format: str
    count: int
    bytes: int
    example: str
    pattern: str


@dataclass(frozen=True)
class Look:
    """What a look at an export found.

    Attributes
    ----------
    path : str
        What was looked at.
    files : tuple of FileKind
        Its files, the format that was looked into first.
    items : tuple of Found
        Arrays, columns or keys of the first file.
    findings : tuple of str
        What they seem to mean.
    contradictions : tuple of str
        What does not fit together.
    points : int
        Points read to try the draft.
    usable : int
        Those of them that are usable.
    orientation : str
        What the orientation rests on.
    draft : str
        A draft layout, TOML; "" when no matrices were found.
    """

    path: str
    files: tuple[FileKind, ...]
    items: tuple[Found, ...]
    findings: tuple[str, ...]
    contradictions: tuple[str, ...]
    points: int
    usable: int
    orientation: str
    draft: str


@dataclass(eq=False)
class _Trial:
    """What reading the first points with a draft came to."""

    content: Mapping[str, Any]
    problem: str = ""
    points: int = 0
    usable: int = 0
    reasons: dict[str, int] = field(default_factory=dict)
    orientation: Orientation = NOTHING

    @property
    def rank(self) -> tuple[Any, ...]:
        share = self.usable / self.points if self.points else 0.0
        return (not self.problem, share > 0.5, _RANK[self.orientation.says], share)


def look(path: str | os.PathLike[str]) -> Look:
    """Look at a file or a folder.

    Parameters
    ----------
    path : path
        What a simulation group handed over.

    Returns
    -------
    Look

    Raises
    ------
    SourceError
        When there is nothing there, or nothing of a format that can be read.
    """
    path = Path(path)
    kinds = _census(path)
    format_, files = next(iter(kinds.items()))
    if format_ not in SUFFIXES:
        raise SourceError(
            f"holds no file of a known format ({', '.join(kinds)})",
            where=str(path),
            do=f"known are {', '.join(SUFFIXES)}: export one of these",
        )
    names = _names(path, files)
    pattern = find_pattern(names) if len(names) > 1 else None
    sketch = _sketch(format_, files, pattern)
    trials = [_try(content, path) for content in sketch.contents]
    best = max(trials, key=lambda trial: trial.rank) if trials else _Trial({})
    contradictions = list(sketch.contradictions)
    contradictions += [best.problem] if best.problem else []
    contradictions += [f"{reason} ({count} points)" for reason, count in best.reasons.items()]
    if not trials:
        contradictions.append("nothing looks like a state matrix A; name it in the draft")
    elif best.points and best.orientation.says == TRANSPOSED:
        contradictions.append(f"matrices look transposed: {best.orientation.why}")
    return Look(
        str(path),
        tuple(_kind(kind, found, path) for kind, found in kinds.items()),
        tuple(sketch.items),
        tuple(sketch.findings),
        tuple(dict.fromkeys(contradictions)),
        best.points,
        best.usable,
        f"{best.orientation.says}; {best.orientation.why}",
        write_draft(best.content or sketch.skeleton, _remarks(best, sketch)),
    )


def _census(path: Path) -> dict[str, list[Path]]:
    """Files by format, known formats first and of these the one with most files."""
    if not path.is_dir():
        check_regular(path)
        return {_format(path): [path]}
    found: dict[str, list[Path]] = {}
    for depth in range(DEPTH + 1):
        files = list_below(path, depth)
        for file in files[:MOST_FILES]:
            if file.is_file():
                found.setdefault(_format(file), []).append(file)
        if any(kind in SUFFIXES for kind in found):
            break
    if not found:
        raise SourceError("the folder holds no files", where=str(path))
    order = sorted(found, key=lambda kind: (kind not in SUFFIXES, -len(found[kind])))
    return {kind: found[kind] for kind in order}


def _format(path: Path) -> str:
    """Format of a file by its beginning, or else by its suffix."""
    by_suffix = next((f for f, ends in SUFFIXES.items() if path.suffix.lower() in ends), "")
    if by_suffix in ("csv", "json-lines"):
        return by_suffix
    try:
        found = format_of(path)
    except SourceError:
        found = None
    if found is None and path.suffix.lower() == ".json":
        return "json-lines"
    if found is None and path.suffix.lower() == ".mat":
        # The suffix stands for formats of which HDF5 is one.
        by_suffix = ""
    return found or by_suffix or path.suffix.lower() or "no suffix"


def _names(path: Path, files: Sequence[Path]) -> list[str]:
    if path.is_dir():
        return [file.relative_to(path).as_posix() for file in files]
    return [path.name]


def _kind(format_: str, files: Sequence[Path], path: Path) -> FileKind:
    names = _names(path, files)
    pattern = find_pattern(names) if len(names) > 1 else None
    return FileKind(
        format_,
        len(files),
        sum(file.stat().st_size for file in files),
        names[0],
        pattern.text if pattern else "",
    )


def _sketch(format_: str, files: Sequence[Path], pattern: NamePattern | None) -> Sketch:
    if format_ in ("hdf5", "npz"):
        return sketch_arrays(format_, files, pattern)
    if format_ == "json-lines":
        return sketch_lines(files, pattern)
    if format_ == "matrix-market":
        return sketch_matrix_files(format_, files, pattern)
    if format_ == "csv" and pattern is not None and "{matrix}" in pattern.text:
        return sketch_matrix_files(format_, files, pattern)
    return sketch_table(format_, files, pattern)


def _try(content: Mapping[str, Any], path: Path) -> _Trial:
    """Read the first points with a draft."""
    trial = _Trial(content)
    try:
        layout = parse_layout(content, "draft")
        batches = _first_batches(find_files([path], layout), layout)
    except SsauditError as error:
        trial.problem = str(error)
        return trial
    trial.points = sum(len(batch.points) for batch in batches)
    for batch in batches:
        trial.usable += int(np.count_nonzero(batch.points.void == ""))
        for reason in batch.points.void[batch.points.void != ""]:
            trial.reasons[reason] = trial.reasons.get(reason, 0) + 1
    largest = max(batches, key=lambda batch: np.count_nonzero(batch.points.void == ""))
    trial.orientation = _orientation(largest)
    return trial


def _first_batches(files: Sequence[SourceFile], layout: Layout) -> list[Batch]:
    found: list[Batch] = []
    for parcel in parcels_of(files, layout)[:TRIED]:
        for batch, _ in batches_of(parcel, layout, 1):
            found.append(batch)
            if sum(len(b.points) for b in found) >= TRIED:
                return found
    return found


def _orientation(batch: Batch) -> Orientation:
    section, usable = batch.section, batch.points.void == ""
    if not section.states or not usable.any():
        return Orientation(CANNOT_TELL, "no point is usable")
    A = section.read(0, len(batch.points))["A"][usable]
    n = len(section.states)
    odd = [name for name, signals in (("B", section.inputs), ("C", section.outputs))
           if name in section.matrices and len(signals) != n]  # fmt: skip
    shapes = " and ".join(odd) if batch.basis == BY_SHAPES else ""
    return weigh(section.states, A[0], (A[0] == A).all(axis=0), batch.basis, shapes)


def _remarks(best: _Trial, sketch: Sketch) -> dict[str, str]:
    remarks = dict(sketch.remarks)
    if best.points and best.orientation.says != AS_READ:
        remarks["points"] = f'orientation: {best.orientation.says}; check order = "column-major"'
    if not best.content:
        remarks[""] = "No state matrix was recognised: put in where A lies."
    return remarks
