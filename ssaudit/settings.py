"""Reading the TOML files that users write: every mistake named with its place and the way out."""

import difflib
import math
import os
import tomllib
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

from ssaudit.errors import SsauditError

# Characters of a value that a message repeats.
LONGEST_SHOWN = 40


def read_toml(path: str | os.PathLike[str], error: type[SsauditError]) -> dict[str, Any]:
    """Read a TOML file.

    Parameters
    ----------
    path : path
        The file.
    error : type
        What to raise.

    Returns
    -------
    dict

    Raises
    ------
    SsauditError
        When the file is missing, not UTF-8, or not TOML.
    """
    where = str(path)
    try:
        text = Path(path).read_text(encoding="utf-8")
    except OSError as problem:
        raise error(
            f"cannot be read ({problem.strerror})", where=where, do="name a TOML file"
        ) from problem
    except UnicodeDecodeError as problem:
        raise error("is not UTF-8 text", where=where) from problem
    except ValueError as problem:
        raise error(f"cannot be read ({problem})", where=where) from problem
    try:
        return tomllib.loads(text)
    # Not only TOMLDecodeError: a number of thousands of digits is refused by int() itself.
    except ValueError as problem:
        raise error(f"is not TOML: {problem}", where=where) from problem
    except RecursionError as problem:
        raise error("is nested too deeply", where=where) from problem


def nearest(word: str, valid: Iterable[str]) -> str:
    """Advice that names the valid words, the most similar one first.

    Examples
    --------
    >>> nearest("sing", ["sign", "feed", "gain"])
    'did you mean sign? Valid: feed, gain, sign'
    """
    words = sorted(valid)
    close = difflib.get_close_matches(word, words, n=1)
    advice = f"valid: {', '.join(words)}" if words else "there are none"
    return f"did you mean {close[0]}? V{advice[1:]}" if close else advice


def check_keys(
    table: Mapping[str, Any],
    valid: Iterable[str],
    *,
    where: str,
    error: type[SsauditError],
) -> None:
    """Refuse keys that mean nothing, with the nearest valid one.

    Parameters
    ----------
    table : dict
        What the user wrote.
    valid : iterable of str
        Keys that mean something.
    where : str
        File and table, for the message.
    error : type
        What to raise.

    Raises
    ------
    SsauditError
    """
    valid = list(valid)
    for key in table:
        if key not in valid:
            raise error(f"unknown key {key!r}", where=where, do=nearest(key, valid))


# What a missing key should say.
ADVICE = {
    "sign": 'say "negative" for u = -K y or "positive" for u = +K y',
    "gain": "add [gain] with a matrix or a table",
    "name": "name it",
    "quantity": "say what is required, such as damping_ratio",
    "loop": "name a loop file",
    "criteria": "name a criteria file",
    "ledger": "name the ledger's folder",
    "banks": "name a folder for the banks",
}


def take(
    table: Mapping[str, Any],
    key: str,
    kind: type | tuple[type, ...],
    *,
    where: str,
    error: type[SsauditError],
    default: Any = None,
    required: bool = False,
) -> Any:
    """Value of a key, checked to be of a kind.

    Parameters
    ----------
    table : dict
        What the user wrote.
    key : str
        The key.
    kind : type or tuple of types
        What the value must be; ``float`` takes whole numbers too, and finite ones only.
    where : str
        File and table, for the message.
    error : type
        What to raise.
    default : optional
        Value when the key is absent.
    required : bool
        Whether absence is an error.

    Returns
    -------
    The value.

    Raises
    ------
    SsauditError
    """
    if key not in table:
        if required:
            raise error(f"{key} is missing", where=where, do=ADVICE.get(key, ""))
        return default
    value = table[key]
    if kind is float:
        if is_finite_number(value):
            return float(value)
        raise error(f"{key} is {shown(value)}, not a finite number", where=where)
    if not isinstance(value, kind) or (isinstance(value, bool) and kind is not bool):
        name = kind.__name__ if isinstance(kind, type) else " or ".join(k.__name__ for k in kind)
        raise error(f"{key} is {shown(value)}, not {WORDS.get(name, name)}", where=where)
    return value


def is_finite_number(value: Any) -> bool:
    """Whether a value is a number that fits a float: no truth value, infinity or NaN.

    Examples
    --------
    >>> is_finite_number(3), is_finite_number(True), is_finite_number(10**400)
    (True, False, False)
    """
    if isinstance(value, bool) or not isinstance(value, int | float):
        return False
    try:
        return math.isfinite(value)
    except OverflowError:
        return False


def shown(value: Any) -> str:
    """Write a value for a message, cut to what a line has room for.

    Examples
    --------
    >>> shown("x" * 100)
    "'xxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxx…"
    """
    try:
        text = repr(value)
    except ValueError:  # Python writes out no whole number of more than 4,300 digits
        text = "a very long number"
    return text if len(text) <= LONGEST_SHOWN else f"{text[: LONGEST_SHOWN - 1]}…"


WORDS = {"str": "text", "dict": "a table", "list": "a list", "int": "a whole number"}


def take_words(
    table: Mapping[str, Any], key: str, *, where: str, error: type[SsauditError]
) -> tuple[str, ...] | None:
    """List of words under a key, or None when it is absent."""
    words = take(table, key, list, where=where, error=error)
    if words is None:
        return None
    for word in words:
        if not isinstance(word, str):
            raise error(f"{key} holds {word!r}, not text", where=where)
    return tuple(words)
