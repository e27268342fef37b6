"""Read HDF5 exports in the default layout."""

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np

from ssaudit.bank_file import FORMAT as BANK_FORMAT
from ssaudit.errors import SourceError
from ssaudit.intake.plain import PlainExport, damage_reported, matrices_among

DESCRIPTIONS = ("states", "inputs", "outputs", "dt", "digits")


@contextmanager
def open_hdf5(path: Path) -> Iterator[PlainExport]:
    """Open an HDF5 export in the default layout.

    Parameters
    ----------
    path : Path
        The file. External links, and datasets whose values lie in other files, are refused; so is
        a dataset that claims values which the file does not hold.

    Yields
    ------
    PlainExport

    Raises
    ------
    SourceError
        When the file is damaged, refused, or a bank.
    """
    import h5py

    with damage_reported(path, "is not HDF5, or is cut short"):
        file = h5py.File(path, "r")
    with file:
        with damage_reported(path):
            export = _opened(file, path)
        yield export


def _opened(file: Any, path: Path) -> PlainExport:
    if file.attrs.get("format") == BANK_FORMAT:
        raise SourceError("is a bank, not an export", where=str(path), do="name the exports alone")
    about = {name: file.attrs[name] for name in DESCRIPTIONS if name in file.attrs}
    datasets = {name: checked_dataset(file, name, path) for name in matrices_among(file)}
    if "ids" in file:
        about["ids"] = checked_dataset(file, "ids", path)[()]
    columns, units = {}, {}
    if "points" in file:
        refuse_foreign_link(file, "points", path)
        group = file["points"]
        for name in group:
            dataset = checked_dataset(group, name, path)
            columns[name] = dataset[()]
            units[name] = _text(dataset.attrs.get("units", ""))
    shapes = {name: dataset.shape for name, dataset in datasets.items()}

    def read(name: str, start: int, stop: int) -> Any:
        dataset = datasets[name]
        with damage_reported(path):
            return dataset[()] if dataset.ndim == 2 else dataset[start:stop]

    return PlainExport(path, shapes, read, columns, units, about)


def _text(value: Any) -> str:
    if isinstance(value, np.ndarray):
        value = value.reshape(-1)[0] if value.size else ""
    return value.decode("utf-8", "replace") if isinstance(value, bytes) else str(value)


def checked_dataset(group: Any, name: str, path: Path) -> Any:
    """Return a dataset of a group whose values all lie in the file itself.

    Parameters
    ----------
    group : h5py.Group
        Where to look.
    name : str
        Name of the link in the group.
    path : Path
        The file, for messages.

    Returns
    -------
    h5py.Dataset

    Raises
    ------
    SourceError
        When the values lie in another file, or fewer are stored than the shape claims.
    """
    import h5py

    refuse_foreign_link(group, name, path)
    where = f"{path}, {name}"
    dataset = group[name]
    if not isinstance(dataset, h5py.Dataset):
        raise SourceError("is a group where a dataset belongs", where=where)
    if dataset.is_virtual or dataset.external:
        raise SourceError("takes its values from other files", where=where, do="copy them in")
    if dataset.shape is None:
        raise SourceError("is empty", where=where)
    if _stored_whole(dataset):
        return dataset
    raise SourceError(
        f"claims {dataset.size} values of which the file holds only a part",
        where=where,
        do="write all values out, zeros too",
    )


def _stored_whole(dataset: Any) -> bool:
    if dataset.size == 0:
        return True
    if dataset.chunks is None:
        return bool(dataset.id.get_storage_size() >= dataset.size * dataset.dtype.itemsize)
    counts = (-(-size // chunk) for size, chunk in zip(dataset.shape, dataset.chunks, strict=True))
    return bool(dataset.id.get_num_chunks() >= int(np.prod([int(c) for c in counts], dtype=object)))


def refuse_foreign_link(group: Any, name: str, path: Path) -> None:
    """Raise SourceError when a link leads out of the file."""
    import h5py

    if isinstance(group.get(name, getlink=True), h5py.ExternalLink):
        raise SourceError(
            "is a link into another file, which is not followed",
            where=f"{path}, {name}",
            do="copy the data in",
        )
