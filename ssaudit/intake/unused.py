"""What an export in the default layout holds that is not read: misspelt keys, and mere extras."""

import difflib
import re
from collections.abc import Iterator, Sequence

from ssaudit.bank import MATRIX_NAMES
from ssaudit.errors import SourceError
from ssaudit.intake.container import Container
from ssaudit.intake.layout import KINDS, Layout
from ssaudit.intake.npz import COORDINATE, UNITS

# A key this much like a known one (Ratcliff and Obershelp, 1 for equal) is taken for a slip of the
# keyboard: one letter left out of three, or changed of five. Common practice, no source.
ALIKE = 0.8
# Names that are listed in one line, and characters of each.
MOST_LISTED = 8
LONGEST_LISTED = 40
SETTINGS = (*KINDS, "dt", "digits")
_POINTS = "points/"
# What begins like a coordinate and is none: At_speed, at-speed.
_LIKE_COORDINATE = re.compile(r"at[_\-. ]+", re.IGNORECASE)


def unused_keys(container: Container, layout: Layout) -> tuple[str, ...]:
    """List what a file in the default layout holds and intake does not read.

    Parameters
    ----------
    container : Container
        The open file.
    layout : Layout
        The default layout of its format.

    Returns
    -------
    tuple of str
        Names of arrays, groups and attributes at the top of the file, in its order.

    Raises
    ------
    SourceError
        When one of them looks like a misspelt key: its data would be missing from every result.
    """
    arrays = container.under("")
    if layout.format == "npz":
        found = list(_unused_of_npz(arrays, container.where))
    else:
        found = list(_unused_of_hdf5(container, arrays))
    return tuple(found)


def listed(names: Sequence[str], most: int = MOST_LISTED) -> str:
    """List the first of some names, and how many others there are.

    Examples
    --------
    >>> listed(["F", "G", "H"], 2)
    'F, G and 1 more'
    """
    shown = ", ".join(name[:LONGEST_LISTED] for name in names[:most])
    rest = len(names) - most
    return shown + (f" and {rest} more" if rest > 0 else "")


def near_miss(key: str, known: Sequence[str]) -> str:
    """Known key that another one seems to be a misspelling of, or "".

    Single letters count by case alone: every letter is like every other.

    Examples
    --------
    >>> near_miss("Digits", ["dt", "digits"]), near_miss("ouputs", ["inputs", "outputs"])
    ('digits', 'outputs')
    >>> near_miss("a", ["A", "B"]), near_miss("F", ["A", "B"]), near_miss("comment", ["dt"])
    ('A', '', '')
    """
    best, likeness = "", ALIKE
    for word in known:
        if key.lower() == word.lower():
            return word
        compared = difflib.SequenceMatcher(None, key.lower(), word.lower())
        # The first is a bound by length alone: files may hold very many names, and very long ones.
        if len(word) > 1 and compared.real_quick_ratio() >= likeness:
            ratio = compared.ratio()
            if ratio >= likeness:
                best, likeness = word, ratio
    return best


def _unused_of_npz(names: Sequence[str], where: str) -> Iterator[str]:
    coordinates = [name for name in names if name.startswith(COORDINATE)]
    units = [UNITS + name.removeprefix(COORDINATE) for name in coordinates]
    known = [*MATRIX_NAMES, "ids", *SETTINGS]
    used = {*known, *coordinates, *units}
    for name in names:
        if name not in used:
            _refuse_like_coordinate(name, COORDINATE, where)
            _refuse_misspelt(name, [*known, *units], names, where)
            yield name


def _unused_of_hdf5(container: Container, arrays: Sequence[str]) -> Iterator[str]:
    where = container.where
    datasets, attributes = [*MATRIX_NAMES, "ids"], container.attributes("")
    held, coordinates = [*arrays, *attributes], container.under(_POINTS)
    for name in held:
        if name.startswith(UNITS) and _POINTS + name.removeprefix(UNITS) in coordinates:
            unit = f"the attribute units of {_POINTS}{name.removeprefix(UNITS)}"
            raise _misspelt(f"holds {name!r}", unit, where)
    for name in arrays:
        if name in SETTINGS:
            raise _misspelt(f"holds {name!r} as a dataset", f"the attribute {name}", where)
        if name not in (*datasets, "points"):
            _refuse_like_coordinate(name, _POINTS, where)
            _refuse_misspelt(name, [*datasets, "points", *SETTINGS], held, where)
            yield name
    for name in attributes:
        if name in datasets:
            raise _misspelt(f"holds {name!r} as an attribute", f"the dataset {name}", where)
        if name not in SETTINGS:
            _refuse_like_coordinate(name, _POINTS, where)
            _refuse_misspelt(name, [*SETTINGS, *datasets], held, where)
            yield f"@{name}"
    for path in coordinates:
        for name in container.attributes(path):
            if name not in ("unit", "units"):
                # Other attributes of a coordinate are a library's or a note, and too many to tell.
                _refuse_misspelt(name, ["units", "unit"], [], f"{where}, {path}")


def _refuse_like_coordinate(name: str, prefix: str, where: str) -> None:
    begin = _LIKE_COORDINATE.match(name)
    if begin and begin.end() < len(name):
        raise _misspelt(f"holds {name!r}", f"{prefix}{name[begin.end() :]}", where)


def _refuse_misspelt(key: str, known: Sequence[str], held: Sequence[str], where: str) -> None:
    """Raise when a key is like a known one, unless that one is there as well under its own name."""
    word = near_miss(key, known)
    other_case = len(word) > 1 and word.lower() == key.lower()
    if word and (other_case or word not in held):
        raise _misspelt(f"holds {key!r}", word, where)


def _misspelt(what: str, word: str, where: str) -> SourceError:
    return SourceError(
        f"{what}, which is not read",
        where=where,
        do=f"did you mean {word}? Rename it, or leave it out of the export",
    )
