"""A bank's own HDF5 file, read in slices."""

import json
import os
from pathlib import Path
from typing import Any

import numpy as np

from ssaudit.bank import ModelBank, Points, Section, Source
from ssaudit.bank_checks import check_shapes
from ssaudit.errors import BankError

FORMAT = "ssaudit bank"

SCHEMA = 1


def read_bank(path: str | os.PathLike[str]) -> ModelBank:
    """Open a bank; its matrices are read in slices when they are needed.

    Parameters
    ----------
    path : path
        A file that ``ssaudit ingest`` has written.

    Returns
    -------
    ModelBank
        Close it, or use it in a ``with`` statement.

    Raises
    ------
    BankError
        When the file is missing, no bank, damaged, or of another schema.
    """
    import h5py

    path = Path(path)
    try:
        there = path.is_file()
    except (OSError, ValueError):
        there = False
    if not there:
        what = "is a folder, not a bank" if path.is_dir() else "there is no such bank"
        raise BankError(what, where=str(path), do="make it with ssaudit ingest")
    try:
        file = h5py.File(path, "r")
    except OSError as error:
        raise BankError(
            "is not an HDF5 file, or is cut short, and so no bank",
            where=str(path),
            do="take the export in with ssaudit ingest",
        ) from error
    try:
        return _read(file, path)
    except BankError as error:
        file.close()
        raise BankError(error.what, where=error.where or str(path), do=error.do) from error
    # What a changed byte makes the library or numpy raise is of nearly any kind.
    except Exception as error:
        file.close()
        raise BankError(
            f"is a damaged bank ({error})", where=str(path), do="ingest the export again"
        ) from error


def _read(file: Any, path: Path) -> ModelBank:
    if text_of(file.attrs.get("format")) != FORMAT:
        raise BankError("is HDF5 but not a bank", where=str(path), do="take it in: ssaudit ingest")
    if file.attrs["schema"] != SCHEMA:
        raise BankError(
            f"has bank schema {file.attrs['schema']}, this version reads {SCHEMA}",
            where=str(path),
            do="ingest the export again",
        )
    sections = []
    for about in _read_json(file, "sections_about"):
        group = file[f"sections/{about['number']}"]
        matrices = {name: group[name] for name in about["matrices"]}
        names = check_shapes(matrices, about["states"], about["inputs"], about["outputs"])
        sections.append(Section(*names, about["dt"], about["digits"], matrices))
    group = file["points"]
    ids = _read_words(group["id"])
    void = np.full(len(ids), "", dtype=object)
    void[group["void_rows"][:]] = _read_words(group["void_reasons"]).astype(object)
    at, tag = group.get("at", {}), group.get("tag", {})
    points = Points(
        ids,
        {_unescape(name): at[name][:] for name in at},
        {_unescape(name): text_of(at[name].attrs["units"]) for name in at},
        {_unescape(name): _read_words(tag[name]) for name in tag},
        void,
    )
    if sum(len(section) for section in sections) != len(points):
        raise BankError("is a damaged bank: its sections and its points differ", where=str(path))
    sources = tuple(Source(**source) for source in _read_json(file, "sources"))
    return ModelBank(
        text_of(file.attrs["revision"]),
        points,
        tuple(sections),
        sources,
        bool(file.attrs["ids_given"]),
        text_of(file.attrs["digest"]),
        path.name,
        file,
        _read_json(file, "intake"),
    )


def _read_json(file: Any, name: str) -> Any:
    return json.loads(file[name][:].tobytes())


def _read_words(dataset: Any) -> Any:
    encoded = dataset[:]
    letters = encoded.view(np.uint8).reshape(len(encoded), -1) if len(encoded) else encoded
    if len(encoded) and letters.max() < 128:
        return letters.astype(np.uint32).view(f"U{letters.shape[1]}").reshape(-1)
    return np.strings.decode(encoded, "utf-8")


def fixed_text(text: str) -> Any:
    """Text as an attribute of fixed length.

    HDF5 keeps text of variable length on a heap of its own, and a damaged byte there can make the
    library search it for ever.
    """
    encoded = text.encode("utf-8")
    return np.array(encoded, dtype=f"S{max(1, len(encoded))}")


def text_of(value: Any) -> str:
    """Text of an attribute, of whatever length it was stored with."""
    return value.decode("utf-8") if isinstance(value, bytes) else str(value)


def escape(name: str) -> str:
    """Make a name safe as an HDF5 link, in which "/" parts groups and "." stands for the group."""
    return name.replace("%", "%25").replace("/", "%2F").replace(".", "%2E")


def _unescape(name: str) -> str:
    return name.replace("%2E", ".").replace("%2F", "/").replace("%25", "%")
