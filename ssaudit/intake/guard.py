"""What every reader does about damaged files, odd text and sizes beyond reason."""

import stat
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np

from ssaudit.bank import Strings
from ssaudit.errors import SourceError, SsauditError

# Bytes of matrices that are read at a time: large enough to be quick, small enough to bound memory.
BATCH_BYTES = 8_000_000
# Longer names are damage, not names; and every name is stored at the width of the longest.
LONGEST_NAME = 200
# What one file may hold at the most.
MOST_POINTS = 50_000_000
# Bytes that may be read as one piece where a file leaves no choice: a compressed block, an array
# in which the entries of a point do not stand together, a line.
WHOLE_BYTES = 128_000_000


@contextmanager
def damage_reported(path: Path | str, what: str = "cannot be read") -> Iterator[None]:
    """Turn whatever a reading library raises on a damaged file into one SourceError.

    Parameters
    ----------
    path : Path or str
        The file that is read, and the place in it.
    what : str
        What to say of it.

    Raises
    ------
    SourceError
    """
    try:
        yield
    except SsauditError:
        raise
    except OSError as error:
        reason = error.strerror or _first_sentence(error)
        raise SourceError(f"{what} ({reason})", where=str(path), do="export it again") from error
    # Libraries that parse files raise nearly any kind of error when bytes were changed at will.
    except Exception as error:
        reason = _first_sentence(error)
        raise SourceError(f"{what} ({reason})", where=str(path), do="export it again") from error


def _first_sentence(error: Exception) -> str:
    """Shorten what an error says, to characters that a terminal shows as they are."""
    text = " ".join(str(error).split()) or type(error).__name__
    return "".join(c if c.isprintable() else "?" for c in text[:160])


def check_regular(path: Path) -> None:
    """Refuse what is no regular file: a pipe or a device can block for ever or never end.

    Raises
    ------
    SourceError
        When the path is missing or no regular file.
    """
    try:
        mode = path.stat().st_mode
    except (FileNotFoundError, ValueError) as error:
        what = "there is no such file"
        raise SourceError(what, where=str(path), do="name exports or a folder") from error
    except OSError as error:
        raise SourceError(f"cannot be opened ({error.strerror})", where=str(path)) from error
    if not stat.S_ISREG(mode):
        raise SourceError("is no regular file", where=str(path), do="name HDF5, NPZ or text files")


def as_words(values: Any, where: str, what: str) -> Strings:
    """Names as text, whatever they were stored as.

    Parameters
    ----------
    values : array
        Bytes (UTF-8), text, numbers or objects of these.
    where, what : str
        File and array, for messages.

    Returns
    -------
    (n,) str

    Raises
    ------
    SourceError
        When a name is no UTF-8, or longer than any name.

    Examples
    --------
    >>> as_words(np.array([b"heave", b"pitch"]), "a.h5", "states").tolist()
    ['heave', 'pitch']
    """
    flat = np.asarray(values).reshape(-1)
    try:
        if flat.dtype.kind == "S" and flat.dtype.itemsize <= LONGEST_NAME:
            words: Strings = np.strings.decode(flat, "utf-8") if flat.size else flat.astype(np.str_)
        else:
            words = np.array([_word(value) for value in flat.tolist()], dtype=np.str_)
    except UnicodeDecodeError as error:
        raise SourceError(f"{what} holds text that is not UTF-8", where=where) from error
    if words.dtype.itemsize > 4 * LONGEST_NAME:
        longest = words.dtype.itemsize // 4
        raise SourceError(f"{what} holds a name of {longest} characters", where=where)
    return words


def _word(value: Any) -> str:
    if isinstance(value, bytes):
        text = value.decode("utf-8")
    elif isinstance(value, float) and value.is_integer() and abs(value) < 1e15:
        # Ids that went through a column of floats come back as 17.0.
        text = str(int(value))
    else:
        text = str(value)
    # A lone surrogate cannot be written as UTF-8, and an array of text drops a closing NUL.
    return text.encode("utf-8", "replace").decode("utf-8").replace("\0", "\ufffd")[:100_000]


def split_names(values: Any, where: str, what: str) -> tuple[str, ...]:
    """Names from an array of them, or from one text that parts them by commas or blanks.

    Examples
    --------
    >>> split_names("heave, pitch", "a.h5", "states")
    ('heave', 'pitch')
    """
    flat = np.asarray(values).reshape(-1)
    if flat.size == 1 and flat.dtype.kind in "SUO":
        text = _word(flat.tolist()[0])
        parts = text.split(",") if "," in text else text.split()
        flat = np.array([part.strip() for part in parts], dtype=np.str_)
    return tuple(as_words(flat, where, what).tolist())


def as_number(value: Any, where: str, what: str) -> float:
    """One finite number that is zero or more.

    Raises
    ------
    SourceError
    """
    try:
        number = float(np.asarray(value).reshape(()).item())
    except (TypeError, ValueError) as error:
        raise SourceError(f"{what} is not a number", where=where) from error
    if not (np.isfinite(number) and number >= 0):
        raise SourceError(f"{what} is {number}", where=where, do="give a number, zero or more")
    return number


def as_digits(value: Any, where: str) -> int | None:
    """Significant digits as a whole number from 1; None where the full precision was written.

    Raises
    ------
    SourceError
    """
    number = as_number(value, where, "digits")
    if not 1 <= number <= 1000 or number != int(number):
        raise SourceError(f"digits is {number:g}", where=where, do="give a whole number from 1")
    return int(number)
