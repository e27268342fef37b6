"""Read NPZ exports, without unpickling and without trusting their claims."""

import zipfile
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np
from numpy.typing import NDArray

from ssaudit.errors import SourceError
from ssaudit.intake.guard import WHOLE_BYTES, damage_reported

UNITS = "units_"
COORDINATE = "at_"


@contextmanager
def open_npz(path: Path) -> Iterator["NpzContainer"]:
    """Open an NPZ export.

    Parameters
    ----------
    path : Path
        The file. Arrays of objects would need unpickling and are refused; so is an array that
        claims more than its member holds.

    Yields
    ------
    NpzContainer

    Raises
    ------
    SourceError
        When the file is damaged or refused.
    """
    with damage_reported(path, "is not NPZ, or is damaged"):
        archive = zipfile.ZipFile(path)
    with archive:
        members = {}
        for info in archive.infolist():
            name = info.filename.removesuffix(".npy")
            if name in members:
                raise SourceError(f"holds {name!r} twice", where=str(path))
            if name != info.filename:
                members[name] = info
        container = NpzContainer(archive, members, str(path))
        try:
            yield container
        finally:
            container.close()


@dataclass(frozen=True, eq=False)
class NpzContainer:
    """An open NPZ file as a container of arrays."""

    archive: zipfile.ZipFile
    members: dict[str, zipfile.ZipInfo]
    where: str
    _opened: dict[str, "NpzArray"] = field(default_factory=dict)

    def __contains__(self, name: str) -> bool:
        return name in self.members

    def array(self, name: str) -> "NpzArray":
        """Return an array, checked."""
        if name not in self._opened:
            where = f"{self.where}, {name}.npy"
            with damage_reported(where):
                self._opened[name] = NpzArray.open(self.archive, self.members[name], where)
        return self._opened[name]

    def close(self) -> None:
        """Close what was left open for reading on."""
        for array in self._opened.values():
            array.close()

    def under(self, prefix: str) -> list[str]:
        """Names of the arrays that begin with a prefix."""
        return [name for name in self.members if name.startswith(prefix)]

    def groups(self, depth: int) -> list[str]:
        """Beginnings of array names up to a "/"."""
        parts = [name.split("/") for name in self.members]
        return list(dict.fromkeys("/".join(p[: depth + 1]) for p in parts if len(p) > depth + 1))

    def attribute(self, path: str, name: str) -> Any:
        """Return None: the format has no attributes."""
        return None

    def attributes(self, path: str) -> list[str]:
        """Return nothing: the format has no attributes."""
        return []

    def unit(self, name: str) -> str:
        """Text of the array ``units_<coordinate>``."""
        member = UNITS + name.removeprefix(COORDINATE)
        if member not in self:
            return ""
        values = self.array(member).whole().reshape(-1)
        return str(values[0])[:200] if values.size else ""


@dataclass(eq=False)
class NpzArray:
    """One array of the archive, read forwards as its points are asked for.

    Attributes
    ----------
    shape : tuple of int
        Shape that it claims, and that its member can back.
    dtype : dtype
        Its type.
    """

    archive: zipfile.ZipFile
    info: zipfile.ZipInfo
    where: str
    shape: tuple[int, ...]
    dtype: np.dtype[Any]
    fortran: bool
    _start: int
    _stream: Any = None
    _at: int = 0
    _whole: Any = None

    @classmethod
    def open(cls, archive: zipfile.ZipFile, info: zipfile.ZipInfo, where: str) -> "NpzArray":
        """Read the header and check that the member can hold what it claims."""
        with archive.open(info) as stream:
            shape, fortran, dtype = _header(stream)
            start = stream.tell()
        if dtype.hasobject:
            raise SourceError(
                "holds pickled objects, which are never unpickled",
                where=where,
                do="save plain arrays of numbers and text",
            )
        claimed = dtype.itemsize * int(np.prod(shape, dtype=object))
        if claimed != info.file_size - start:
            raise SourceError(
                f"claims {claimed} bytes and holds {info.file_size - start}", where=where
            )
        return cls(archive, info, where, shape, dtype, fortran, start)

    def close(self) -> None:
        """Close the stream that points are read from."""
        if self._stream is not None:
            self._stream.close()
            self._stream = None

    def block(self, axis: int) -> int:
        """Return 1: values are stored one by one."""
        return 1

    def whole(self) -> NDArray[Any]:
        """Return the whole array."""
        if self._whole is None:
            if self.info.file_size > 4 * WHOLE_BYTES:
                raise SourceError(
                    f"holds {self.info.file_size} bytes that cannot be read in parts",
                    where=self.where,
                    do="put the point axis first and save row-major",
                )
            with damage_reported(self.where), self.archive.open(self.info) as stream:
                _header(stream)
                block = stream.read()
                flat = np.frombuffer(block, self.dtype)
                self._whole = flat.reshape(self.shape, order="F" if self.fortran else "C")
        whole: NDArray[Any] = self._whole
        return whole

    def read(self, axis: int, start: int, stop: int) -> NDArray[Any]:
        """Return a range of an axis, and all of the others."""
        outermost = (len(self.shape) - 1 if self.fortran else 0) == axis
        with damage_reported(self.where):
            if self._whole is None and outermost:
                return self._forwards(start, stop)
            # Small arrays are read at once; large uncompressed ones run by run.
            large = self.info.file_size > WHOLE_BYTES // 4 and self._whole is None
            stored = self.info.compress_type == zipfile.ZIP_STORED
            if large and stored and axis in (0, len(self.shape) - 1):
                return self._runs(start, stop)
        return self.whole()[(slice(None),) * axis + (slice(start, stop),)]

    def _forwards(self, start: int, stop: int) -> NDArray[Any]:
        """Read points that stand one after the other."""
        if self._stream is None or start != self._at:
            self.close()
            self._stream = self.archive.open(self.info)
            _header(self._stream)
            self._at = 0
        others = self.shape[:-1] if self.fortran else self.shape[1:]
        size = self.dtype.itemsize * int(np.prod(others))
        while self._at < start:
            skipped = min(start - self._at, max(1, WHOLE_BYTES // 8 // max(1, size)))
            self._stream.read(skipped * size)
            self._at += skipped
        block = self._stream.read((stop - start) * size)
        if len(block) != (stop - start) * size:
            raise SourceError("is cut short", where=self.where)
        self._at = stop
        flat = np.frombuffer(block, self.dtype)
        if self.fortran:
            return flat.reshape((*others, stop - start), order="F")
        return flat.reshape(stop - start, *others)

    def _runs(self, start: int, stop: int) -> NDArray[Any]:
        """Read a range of the innermost axis of an uncompressed array, one run an entry."""
        count = self.shape[0] if self.fortran else self.shape[-1]
        others = self.shape[1:] if self.fortran else self.shape[:-1]
        runs = int(np.prod(others))
        found = np.empty((runs, stop - start), self.dtype)
        size = self.dtype.itemsize
        with open(str(self.archive.filename), "rb") as file:
            first = _data_offset(file, self.info) + self._start
            for run in range(runs):
                file.seek(first + (run * count + start) * size)
                block = file.read((stop - start) * size)
                found[run] = np.frombuffer(block, self.dtype)
        if self.fortran:
            return found.T.reshape((stop - start, *others), order="F")
        return found.reshape(*others, stop - start)


def _data_offset(file: BinaryIO, info: zipfile.ZipInfo) -> int:
    """Where the bytes of a member begin: after its local header."""
    file.seek(info.header_offset + 26)
    lengths = np.frombuffer(file.read(4), "<u2")
    return info.header_offset + 30 + int(lengths.sum())


def _header(stream: Any) -> tuple[tuple[int, ...], bool, np.dtype[Any]]:
    version = np.lib.format.read_magic(stream)
    if version == (1, 0):
        return np.lib.format.read_array_header_1_0(stream)
    return np.lib.format.read_array_header_2_0(stream)
