"""Which files are taken in, and how each of them is read."""

import glob
import hashlib
import os
from collections.abc import Callable, Iterator, Sequence
from contextlib import AbstractContextManager
from dataclasses import dataclass, field
from pathlib import Path

from ssaudit.errors import SourceError
from ssaudit.intake.container import Container
from ssaudit.intake.guard import check_regular
from ssaudit.intake.hdf5 import open_hdf5
from ssaudit.intake.layout import SUFFIXES, Layout, default_layout
from ssaudit.intake.npz import open_npz

HDF5_MAGIC = b"\x89HDF\r\n\x1a\n"
ZIP_MAGIC = b"PK\x03\x04"
EMPTY_ZIP_MAGIC = b"PK\x05\x06"
# An HDF5 file may begin with a block of another program's own, of one of these sizes.
USER_BLOCKS = (0, 512, 1024, 2048)
# Files that are listed at the most below one folder.
MOST_FILES = 1_000_000
# Files of a folder that are taken without a layout.
DEFAULT_SUFFIXES = (*SUFFIXES["hdf5"][:3], *SUFFIXES["npz"])
# Text that does not say by its beginning what it is.
TEXT_SUFFIXES = (*SUFFIXES["csv"], *SUFFIXES["json-lines"], ".json")
OPENERS: dict[str, Callable[[Path], AbstractContextManager[Container]]] = {
    "hdf5": open_hdf5,
    "npz": open_npz,
}


@dataclass(frozen=True)
class SourceFile:
    """One file to take in.

    Attributes
    ----------
    path : Path
        The file.
    name : str
        Its name below the folder that was named, parted by "/".
    fields : dict of str
        Fields of its name.
    """

    path: Path
    name: str
    fields: dict[str, str] = field(default_factory=dict)


def find_files(
    sources: Sequence[str | os.PathLike[str]], layout: Layout | None = None
) -> list[SourceFile]:
    """List the files that sources name, folders and patterns in alphabetical order.

    Parameters
    ----------
    sources : sequence of paths
        Files, folders or glob patterns.
    layout : Layout, optional
        Its pattern chooses among the files of a folder; without one, HDF5 and NPZ files are taken.

    Returns
    -------
    list of SourceFile
        Each file once.

    Raises
    ------
    SourceError
        When a source names no file, two name the same one, a file does not fit the layout's
        pattern, or is no regular file.
    """
    found: dict[Path, SourceFile] = {}
    named: dict[Path, Path] = {}
    for source in map(Path, sources):
        files = list(_files_of(source, layout))
        if not files:
            raise _no_files(source, layout)
        if len(sources) > 1:
            _refuse_twice(source, files, named)
        for file in files:
            found[file.path] = file
    if not found:
        raise SourceError("no source is named", do="name files or a folder")
    return list(found.values())


def _refuse_twice(source: Path, files: Sequence[SourceFile], named: dict[Path, Path]) -> None:
    """Refuse a file that another source named, in whatever spelling; note those of this one."""
    new = {}
    for file in files:
        real = file.path.resolve()
        if real in named:
            other = "" if named[real] == source else f", by {named[real]} and by {source}"
            raise SourceError(f"is named twice{other}", where=str(file.path), do="name it once")
        new[real] = source
    named |= new


def _files_of(source: Path, layout: Layout | None) -> Iterator[SourceFile]:
    try:
        if source.is_dir():
            yield from _files_below(source, layout)
            return
        if source.exists() or not any(c in str(source) for c in "*?["):
            paths = [source]
        else:
            paths = [Path(f) for f in sorted(glob.glob(str(source))) if Path(f).is_file()]
    except (OSError, ValueError) as error:
        raise SourceError("is no file name", where=str(source)[:200]) from error
    for path in paths:
        check_regular(path)
        yield _named_file(path, layout)


def _named_file(path: Path, layout: Layout | None) -> SourceFile:
    """Return a file that was named itself, with the fields of its name."""
    if layout is None or layout.files is None:
        return SourceFile(path, path.name)
    parts = path.absolute().parts[-1 - layout.files.depth :]
    name = "/".join(parts)
    fields = layout.files.match(name)
    if fields is None:
        raise SourceError(
            f"does not fit the pattern of {layout.name}", where=str(path), do="correct files"
        )
    return SourceFile(path, name, fields)


def _files_below(folder: Path, layout: Layout | None) -> Iterator[SourceFile]:
    matcher = layout.files if layout is not None else None
    suffixes = layout.suffixes if layout is not None else DEFAULT_SUFFIXES
    inside = folder.resolve()
    for path in list_below(folder, matcher.depth if matcher else 0):
        name = path.relative_to(folder).as_posix()
        fields = matcher.match(name) if matcher else {}
        if fields is None or (matcher is None and path.suffix.lower() not in suffixes):
            continue
        if layout is not None and not path.resolve().is_relative_to(inside):
            raise SourceError("leads out of its folder", where=str(path), do="copy the file in")
        check_regular(path)
        yield SourceFile(path, name, fields)


def list_below(folder: Path, depth: int) -> list[Path]:
    """Files at a depth below a folder, sorted; links to folders are not followed.

    Parameters
    ----------
    folder : Path
        The folder.
    depth : int
        0 for the files in the folder itself.

    Returns
    -------
    list of Path

    Raises
    ------
    SourceError
        When the folder cannot be listed or holds too much.
    """
    found: list[Path] = []
    try:
        for entry in sorted(os.scandir(folder), key=lambda entry: entry.name):
            if entry.name.startswith("."):
                continue
            if depth == 0 and not entry.is_dir():
                found.append(Path(entry.path))
            elif depth and entry.is_dir(follow_symlinks=False):
                found.extend(list_below(Path(entry.path), depth - 1))
            if len(found) > MOST_FILES:
                raise SourceError(f"holds more than {MOST_FILES} files", where=str(folder))
    except OSError as error:
        raise SourceError(f"cannot be listed ({error.strerror})", where=str(folder)) from error
    return found


def _no_files(source: Path, layout: Layout | None) -> SourceError:
    if not source.is_dir():
        return SourceError("there is no such file", where=str(source), do="name exports")
    if layout is None:
        return SourceError(
            "the folder holds no HDF5 or NPZ file",
            where=str(source),
            do=f"describe it in a layout; ssaudit look {source} drafts one",
        )
    return SourceError(
        f"no file of the folder fits {layout.name}", where=str(source), do="correct files"
    )


def format_of(path: Path) -> str | None:
    """Format of a file by how it begins, whatever it is called; None when it is none of ours.

    Raises
    ------
    SourceError
        When the file cannot be opened.
    """
    check_regular(path)
    try:
        with open(path, "rb") as stream:
            start = stream.read(USER_BLOCKS[-1] + 8)
    except OSError as error:
        raise SourceError(f"cannot be opened ({error.strerror})", where=str(path)) from error
    if any(start[block : block + 8] == HDF5_MAGIC for block in USER_BLOCKS):
        return "hdf5"
    if start.startswith((ZIP_MAGIC, EMPTY_ZIP_MAGIC)):
        return "npz"
    if start.startswith(b"PAR1"):
        return "parquet"
    if start.lower().startswith(b"%%matrixmarket"):
        return "matrix-market"
    return None


def layout_for(path: Path) -> Layout:
    """Layout of a file that comes without one.

    Raises
    ------
    SourceError
        When the format needs a layout.
    """
    found = format_of(path)
    if found in OPENERS:
        return default_layout(found)
    do = f"ssaudit look {path} drafts a layout"
    if found is not None:
        raise SourceError(f"is {found}, which needs a layout", where=str(path), do=do)
    if path.suffix.lower() in TEXT_SUFFIXES:
        raise SourceError("is neither HDF5 nor NPZ and needs a layout", where=str(path), do=do)
    raise SourceError(
        "is neither HDF5 nor NPZ",
        where=str(path),
        do=f"export one of the known formats: {', '.join(SUFFIXES)}",
    )


def check_format(path: Path, layout: Layout) -> None:
    """Refuse a file that is plainly of another format than the layout says.

    Raises
    ------
    SourceError
    """
    found = format_of(path)
    binary = ("hdf5", "npz", "parquet", "matrix-market")
    if found != layout.format and (found is not None or layout.format in binary):
        says = f"is {found}" if found else f"is not {layout.format}"
        raise SourceError(
            says, where=str(path), do=f'{layout.name} says format = "{layout.format}"'
        )


def file_digest(path: Path) -> str:
    """SHA-256 of a file's bytes."""
    with open(path, "rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def same_file(file: Path, target: Path) -> bool:
    """Whether two paths are the same file, by whatever name."""
    try:
        return file.resolve() == target.resolve() or (target.exists() and file.samefile(target))
    except (OSError, ValueError):
        return False
