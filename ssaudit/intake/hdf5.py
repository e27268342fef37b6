"""Read HDF5 exports: arrays whose values all lie in the file itself."""

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank_file import FORMAT as BANK_FORMAT
from ssaudit.bank_file import text_of
from ssaudit.errors import SourceError
from ssaudit.intake.guard import MOST_POINTS, WHOLE_BYTES, damage_reported

# Bytes of blocks that stay decompressed while points are read across them.
CACHE_BYTES = 16_000_000
# Objects that stay open.
MOST_OPEN = 50
# Names that are listed at the most in one group.
MOST_NAMES = 5_000_000


@contextmanager
def open_hdf5(path: Path) -> Iterator["Hdf5Container"]:
    """Open an HDF5 export.

    Parameters
    ----------
    path : Path
        The file. External links, and datasets whose values lie in other files, are refused; so is
        a dataset that claims values which the file does not hold.

    Yields
    ------
    Hdf5Container

    Raises
    ------
    SourceError
        When the file is damaged, refused, or a bank.
    """
    import h5py

    with damage_reported(path, "is not HDF5, or is cut short"):
        file = h5py.File(path, "r", rdcc_nbytes=CACHE_BYTES)
    with file:
        with damage_reported(path):
            is_bank = text_of(file.attrs.get("format")) == BANK_FORMAT
        if is_bank:
            raise SourceError(
                "is a bank, not an export", where=str(path), do="name the exports alone"
            )
        yield Hdf5Container(file, str(path))


@dataclass(frozen=True, eq=False)
class Hdf5Container:
    """An open HDF5 file as a container of arrays."""

    file: Any
    where: str
    _safe: set[str] = field(default_factory=set)
    _opened: dict[str, Any] = field(default_factory=dict)

    def __contains__(self, name: str) -> bool:
        import h5py

        with damage_reported(self.where):
            return isinstance(self._open(name), h5py.Dataset)

    def array(self, name: str) -> "Hdf5Array":
        """Return a dataset, checked."""
        where = f"{self.where}, {name}"
        with damage_reported(where):
            return checked_dataset(self._open(name), where)

    def _open(self, name: str) -> Any:
        """Dataset or group of a name, or None; links out of the file are refused."""
        if name not in self._opened:
            # Open objects take memory; with a group a point there would be a few for each.
            if len(self._opened) >= MOST_OPEN:
                self._opened.clear()
                self._safe.clear()
            self._check(name)
            self._opened[name] = self.file.get(name)
        return self._opened[name]

    def _check(self, name: str) -> None:
        """Refuse a path that leads through a link into another file."""
        for path in _ancestors(name):
            if path not in self._safe:
                refuse_foreign_link(self.file, path, self.where)
                self._safe.add(path)

    def under(self, prefix: str) -> list[str]:
        """Names of the links in a group; "" lists the top."""
        group = prefix.rstrip("/")
        with damage_reported(self.where):
            if not group:
                return _members(self.file, self.where)[:MOST_NAMES]
            if self.file.get(group, getlink=True) is None:
                return []
            self._check(group)
            return [f"{prefix}{name}" for name in _members(self.file[group], self.where)]

    def groups(self, depth: int) -> list[str]:
        """Names of the groups that lie at a depth, 0 for those at the top."""
        import h5py

        names = [""]
        with damage_reported(self.where):
            for _ in range(depth + 1):
                below = []
                for base in names:
                    for name in _members(self.file[base] if base else self.file, self.where):
                        path = f"{base}/{name}" if base else name
                        refuse_foreign_link(self.file, path, self.where)
                        if self.file.get(path, getclass=True) is h5py.Group:
                            below.append(path)
                names = below
                if len(names) > MOST_POINTS:
                    raise SourceError(f"holds {len(names)} groups", where=self.where)
        return names

    def attribute(self, path: str, name: str) -> Any:
        """Value of an attribute of a group or dataset, or None."""
        with damage_reported(f"{self.where}, {path}@{name}"):
            owner = self._open(path) if path else self.file
            return None if owner is None else owner.attrs.get(name)

    def attributes(self, path: str) -> list[str]:
        """Names of the attributes of a group or dataset; "" is for the top."""
        with damage_reported(f"{self.where}, {path}" if path else self.where):
            owner = self._open(path) if path else self.file
            return [] if owner is None else [str(name) for name in owner.attrs]

    def unit(self, name: str) -> str:
        """Text of the attribute ``units`` (or ``unit``) of a dataset."""
        for key in ("units", "unit"):
            value = self.attribute(name, key)
            if value is not None:
                return _text(value)
        return ""


def _members(group: Any, where: str) -> list[str]:
    """Names of the links of a group; one that is no text names nothing that could be asked for."""
    names = list(group)
    if not all(isinstance(name, str) for name in names):
        raise SourceError("holds a name that is not UTF-8", where=where, do="rename it")
    return names


def _ancestors(name: str) -> list[str]:
    parts = [part for part in name.split("/") if part]
    return ["/".join(parts[: count + 1]) for count in range(len(parts))]


def _text(value: Any) -> str:
    if isinstance(value, np.ndarray):
        value = value.reshape(-1)[0] if value.size else ""
    text = value.decode("utf-8", "replace") if isinstance(value, bytes) else str(value)
    return text[:200].encode("utf-8", "replace").decode("utf-8")


@dataclass(frozen=True, eq=False)
class Hdf5Array:
    """A dataset that has been checked."""

    dataset: Any
    where: str

    @property
    def shape(self) -> tuple[int, ...]:
        """Its shape."""
        return tuple(self.dataset.shape)

    @property
    def dtype(self) -> np.dtype[Any]:
        """Its type."""
        dtype: np.dtype[Any] = self.dataset.dtype
        return dtype

    def block(self, axis: int) -> int:
        """How many points a stored block holds."""
        chunks = self.dataset.chunks
        return 1 if chunks is None else int(chunks[axis])

    def read(self, axis: int, start: int, stop: int) -> NDArray[Any]:
        """Read a range of an axis, and all of the others."""
        with damage_reported(self.where):
            found: NDArray[Any] = self.dataset[(slice(None),) * axis + (slice(start, stop),)]
            return found

    def whole(self) -> NDArray[Any]:
        """Read all of it."""
        if self.dataset.size * self.dataset.dtype.itemsize > 2 * WHOLE_BYTES:
            raise SourceError(f"holds {self.dataset.size} values", where=self.where)
        with damage_reported(self.where):
            return np.asarray(self.dataset[()])


def checked_dataset(dataset: Any, where: str) -> Hdf5Array:
    """Return a dataset whose values all lie in the file itself.

    Parameters
    ----------
    dataset : h5py.Dataset
        The dataset.
    where : str
        File and name, for messages.

    Returns
    -------
    Hdf5Array

    Raises
    ------
    SourceError
        When the values lie in another file, or fewer are stored than the shape claims.
    """
    import h5py

    if not isinstance(dataset, h5py.Dataset):
        raise SourceError("is a group where a dataset belongs", where=where)
    if dataset.is_virtual or dataset.external:
        raise SourceError("takes its values from other files", where=where, do="copy them in")
    if dataset.shape is None:
        raise SourceError("is empty", where=where)
    check_blocks(dataset, where)
    if not stored_whole(dataset):
        raise SourceError(
            f"claims {dataset.size} values of which the file holds only a part",
            where=where,
            do="write all values out, zeros too",
        )
    return Hdf5Array(dataset, where)


def check_blocks(dataset: Any, where: str) -> None:
    """Refuse a dataset whose compressed blocks are too large to unpack one by one."""
    chunks = dataset.chunks
    if chunks is None:
        return
    size = int(np.prod([int(c) for c in chunks], dtype=object)) * dataset.dtype.itemsize
    if size > WHOLE_BYTES:
        raise SourceError(
            f"is stored in blocks of {size} bytes", where=where, do="store it in smaller chunks"
        )


def stored_whole(dataset: Any) -> bool:
    """Whether the file holds as many values as the shape of a dataset claims."""
    if dataset.size == 0:
        return True
    if dataset.chunks is None:
        return bool(dataset.id.get_storage_size() >= dataset.size * dataset.dtype.itemsize)
    counts = (-(-size // chunk) for size, chunk in zip(dataset.shape, dataset.chunks, strict=True))
    return bool(dataset.id.get_num_chunks() >= int(np.prod([int(c) for c in counts], dtype=object)))


def refuse_foreign_link(group: Any, name: str, path: str) -> None:
    """Raise SourceError when a link leads out of the file."""
    import h5py

    if isinstance(group.get(name, getlink=True), h5py.ExternalLink):
        raise SourceError(
            "is a link into another file, which is not followed",
            where=f"{path}, {name}",
            do="copy the data in",
        )
