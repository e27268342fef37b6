"""Read NPZ exports in the default layout, without unpickling and without trusting their claims."""

import zipfile
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from ssaudit.errors import SourceError
from ssaudit.intake.plain import PlainExport, damage_reported, matrices_among

DESCRIPTIONS = ("ids", "states", "inputs", "outputs", "dt", "digits")
COORDINATE = "at_"
UNITS = "units_"


@contextmanager
def open_npz(path: Path) -> Iterator[PlainExport]:
    """Open an NPZ export in the default layout.

    Coordinates are the arrays ``at_<name>``; the optional ``units_<name>`` holds a unit.

    Parameters
    ----------
    path : Path
        The file. Arrays of objects would need unpickling and are refused; so is an array that
        claims more than its member holds.

    Yields
    ------
    PlainExport

    Raises
    ------
    SourceError
        When the file is damaged or refused.
    """
    with damage_reported(path, "is not NPZ, or is damaged"):
        archive = zipfile.ZipFile(path)
    with archive:
        with damage_reported(path):
            export = _opened(archive, path)
        yield export


def _opened(archive: zipfile.ZipFile, path: Path) -> PlainExport:
    members = {
        info.filename.removesuffix(".npy"): _Member(archive, info, path)
        for info in archive.infolist()
        if info.filename.endswith(".npy")
    }
    matrices = {name: members[name] for name in matrices_among(members)}
    about = {name: members[name].whole() for name in DESCRIPTIONS if name in members}
    names = [name.removeprefix(COORDINATE) for name in members if name.startswith(COORDINATE)]
    units = {
        name: str(members[UNITS + name].whole().reshape(-1)[0])
        for name in names
        if UNITS + name in members
    }
    columns = {name: members[COORDINATE + name].whole() for name in names}
    shapes = {name: member.shape for name, member in matrices.items()}
    return PlainExport(
        path,
        shapes,
        lambda name, start, stop: matrices[name].rows(start, stop),
        columns,
        units,
        about,
    )


@dataclass(eq=False)
class _Member:
    """One array of the archive, read forwards as its points are asked for."""

    archive: zipfile.ZipFile
    info: zipfile.ZipInfo
    path: Path
    shape: tuple[int, ...] = ()
    _stream: Any = None
    _at: int = 0
    _whole: Any = field(default=None)

    def __post_init__(self) -> None:
        with self.archive.open(self.info) as stream:
            self.shape, self._fortran, self._dtype = self._header(stream)
            held = self.info.file_size - stream.tell()
        where = f"{self.path}, {self.info.filename}"
        if self._dtype.hasobject:
            raise SourceError(
                "holds pickled objects, which are never unpickled",
                where=where,
                do="save plain arrays of numbers and text",
            )
        claimed = self._dtype.itemsize * int(np.prod(self.shape, dtype=object))
        if claimed != held:
            raise SourceError(f"claims {claimed} bytes and holds {held}", where=where)

    @staticmethod
    def _header(stream: Any) -> tuple[tuple[int, ...], bool, np.dtype[Any]]:
        version = np.lib.format.read_magic(stream)
        if version == (1, 0):
            return np.lib.format.read_array_header_1_0(stream)
        return np.lib.format.read_array_header_2_0(stream)

    def whole(self) -> Any:
        """Return the whole array."""
        if self._whole is None:
            with self.archive.open(self.info) as stream:
                self._whole = np.lib.format.read_array(stream, allow_pickle=False)
        return self._whole

    def rows(self, start: int, stop: int) -> Any:
        """Return a range of points."""
        with damage_reported(self.path):
            return self._rows(start, stop)

    def _rows(self, start: int, stop: int) -> Any:
        # In a column-major array the entries of a point do not stand together: read it whole.
        if self._fortran or len(self.shape) != 3:
            return self.whole() if len(self.shape) == 2 else self.whole()[start:stop]
        if self._stream is None or start != self._at:
            self._stream = self.archive.open(self.info)
            self._header(self._stream)
            self._at = 0
        size = self._dtype.itemsize * int(np.prod(self.shape[1:]))
        self._stream.read((start - self._at) * size)
        block = self._stream.read((stop - start) * size)
        if len(block) != (stop - start) * size:
            raise SourceError("is cut short", where=f"{self.path}, {self.info.filename}")
        self._at = stop
        return np.frombuffer(block, self._dtype).reshape(stop - start, *self.shape[1:])
