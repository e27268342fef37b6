"""Guess what names in an unknown export stand for."""

import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

# A matrix letter standing alone, or beside a word that says matrix or model.
_WORDS = r"(?:mat(?:rix)?|lin|sys|model|ss|values?)"
_MATRIX = re.compile(
    rf"(?:^|.*[/._\- ])(?:{_WORDS}[_ ]?)?([A-Ea-e])(?:[_ ]?{_WORDS})?", re.IGNORECASE
)
_ROLES = {
    "states": r"(states?|state[_ ]?names?|x[_ ]?names?|names?[_ ]?(of[_ ]?)?(x|states?))",
    "inputs": r"(inputs?|input[_ ]?names?|u[_ ]?names?|controls?|names?[_ ]?(of[_ ]?)?(u|inputs?))",
    "outputs": r"(outputs?|output[_ ]?names?|y[_ ]?names?|measurements?|names?[_ ]?(of[_ ]?)?"
    r"(y|outputs?))",
    "ids": r"(ids?|point|points?[_ ]?ids?|point[_ ]?names?|case|case[_ ]?(ids?|names?|no)|op|"
    r"op[_ ]?(ids?|points?)|operating[_ ]?point|labels?|names?|run|trim)",
    "dt": r"(dt|ts|t_?s|sampl(e|ing)[_ ]?time|sampl(e|ing)[_ ]?period|time[_ ]?step)",
    "digits": r"(digits|significant[_ ]?digits)",
    "revision": r"(revision|rev|version|model[_ ]?(revision|version))",
    "matrix": r"(matrix|mat|which|matrix[_ ]?name)",
    "row": r"(row|rows?|i|r|row[_ ]?(name|no|index))",
    "column": r"(column|col|cols?|j|c|col(umn)?[_ ]?(name|no|index))",
    "value": r"(value|val|entry|number|coefficient)",
}
_ROLE = {role: re.compile(pattern, re.IGNORECASE) for role, pattern in _ROLES.items()}
_UNIT = re.compile(r"\s*(?:\[(?P<square>[^\]]*)\]|\((?P<round>[^)]*)\))$")
_TOKEN = re.compile(r"(?<![\d.])-?\d+(?:\.\d+)?|[A-Za-z]+|.")
_NUMBER = re.compile(r"-?\d+(?:\.\d+)?")


def matrix_of(name: str) -> str | None:
    """Letter of the matrix that a name stands for, or None.

    Examples
    --------
    >>> [matrix_of(name) for name in ("A", "lin/Bmat", "sys_c", "matrix_D", "mass", "speed")]
    ['A', 'B', 'C', 'D', None, None]
    """
    match = _MATRIX.fullmatch(name)
    return match.group(1).upper() if match else None


def role_of(name: str, roles: Iterable[str]) -> str | None:
    """Which of some roles the last part of a name stands for, or None.

    Examples
    --------
    >>> role_of("trim/case_id", ["ids", "dt"]), role_of("speed", ["ids", "dt"])
    ('ids', None)
    """
    last = re.split(r"[/@]", name)[-1]
    return next((role for role in roles if _ROLE[role].fullmatch(last)), None)


def name_and_unit(name: str) -> tuple[str, str]:
    """Name of a coordinate, and the unit that may stand behind it in brackets.

    Examples
    --------
    >>> name_and_unit("trim/speed [m/s]"), name_and_unit("mass")
    (('speed', 'm/s'), ('mass', ''))
    """
    match = _UNIT.search(name)
    unit = (match.group("square") or match.group("round") or "") if match else ""
    bare = name[: match.start()] if match else name
    last = re.split(r"[/@]", bare)[-1].strip()
    return re.sub(r"^(at|coord|point)_", "", last) or name, unit


@dataclass(frozen=True)
class NamePattern:
    """How names that differ at some places are built.

    Attributes
    ----------
    text : str
        A pattern with fields.
    numbers : tuple of str
        Fields that hold numbers.
    words : tuple of str
        Fields that hold words.
    """

    text: str
    numbers: tuple[str, ...]
    words: tuple[str, ...]


def find_pattern(names: Sequence[str]) -> NamePattern | None:
    """Find how names are built: what stays, and which places hold numbers or words that vary.

    Parameters
    ----------
    names : sequence of str
        Names of files or groups, two or more.

    Returns
    -------
    NamePattern or None
        None when they are not built alike.

    Examples
    --------
    >>> find_pattern(["V10_M80.mtx", "V12.5_M80.mtx", "V10_M90.mtx"])
    NamePattern(text='V{V}_M{M}.mtx', numbers=('V', 'M'), words=())
    >>> find_pattern(["A_p1.mtx", "B_p1.mtx", "A_p2.mtx"]).text
    '{matrix}_p{id}.mtx'
    """
    stems, ending = _without_ending(names)
    rows = [_TOKEN.findall(stem) for stem in stems]
    if len(names) < 2 or len({tuple(map(_kind, row)) for row in rows}) != 1:
        return None
    columns = list(zip(*rows, strict=True))
    text = ""
    numbers: list[str] = []
    words: list[str] = []
    for place, values in enumerate(columns):
        distinct = set(values)
        if len(distinct) == 1:
            text += values[0]
            continue
        is_number = _kind(values[0]) == "number"
        field = _field_name(columns, place, is_number, {*numbers, *words})
        (numbers if is_number else words).append(field)
        text += "{" + field + "}"
    if re.search(r"\}\{", text) or not numbers + words:
        return None
    return _with_id(NamePattern(text + ending, tuple(numbers), tuple(words)), columns)


def _without_ending(names: Sequence[str]) -> tuple[list[str], str]:
    """Names without the suffix, if it is the same for all."""
    endings = {re.search(r"(\.[A-Za-z][A-Za-z0-9]*)?$", name) for name in names}
    texts = {match.group(0) for match in endings if match}
    ending = texts.pop() if len(texts) == 1 else ""
    return [name[: len(name) - len(ending)] for name in names], ending


def _kind(token: str) -> str:
    if _NUMBER.fullmatch(token):
        return "number"
    return "word" if token.isalpha() else token


def _field_name(
    columns: Sequence[Sequence[str]], place: int, is_number: bool, taken: set[str]
) -> str:
    values = set(columns[place])
    if not is_number:
        name = "matrix" if values <= set("ABCDEabcde") else "tag"
    else:
        before = columns[place - 1] if place else ("",)
        same = len(set(before)) == 1 and before[0].isalpha()
        name = before[0] if same else "value"
    if name not in taken:
        return name
    return next(f"{name}{k}" for k in range(2, 100) if f"{name}{k}" not in taken)


def _with_id(pattern: NamePattern, columns: Sequence[Sequence[str]]) -> NamePattern:
    """Call the number that just counts the points their id."""
    varying = [values for values in columns if len(set(values)) > 1]
    numbers = [values for values in varying if _kind(values[0]) == "number"]
    alone = len(numbers) == 1 and "tag" not in pattern.words
    for field, values in zip(pattern.numbers, numbers, strict=True):
        counts = alone and _counting(values)
        if not (counts or _padded(values) or role_of(field, ("ids",)) or field.lower() == "p"):
            continue
        others = tuple(name for name in pattern.numbers if name != field)
        text = pattern.text.replace("{" + field + "}", "{id}")
        return NamePattern(text, others, pattern.words)
    return pattern


def _padded(values: Sequence[str]) -> bool:
    """Whether numbers are whole, of one length, and filled up with zeros."""
    same = len(set(map(len, values))) == 1 and len(values[0]) > 1
    return same and all(v.isdigit() for v in values) and any(v[0] == "0" for v in values)


def _counting(values: Sequence[str]) -> bool:
    """Whether numbers run from one to the next without gaps."""
    if not all(value.isdigit() and len(value) < 10 for value in values):
        return False
    numbers = sorted({int(value) for value in values})
    return numbers == list(range(numbers[0], numbers[0] + len(numbers)))


_NUMBERED = re.compile(r"(?P<head>.*?)(?P<row>\d+)(?P<mid>\D+)(?P<column>\d+)(?P<close>\D*)")
_NAMED = re.compile(
    r"(?P<head>.*?[\[(:])(?P<row>.+?)(?P<mid>[,:;|])(?P<column>.+?)(?P<close>[\])]?)"
)
_DIGITS = re.compile(r"(?P<head>.*?)(?P<row>\d)(?P<mid>)(?P<column>\d)(?P<close>)")


def find_entry_patterns(names: Sequence[str]) -> dict[str, dict[str, set[tuple[str, str]]]]:
    """Find names of matrix entries, such as ``A[1,2]``, and how they are built.

    Returns
    -------
    dict
        By letter of the matrix: pattern to the (row, column) labels found.

    Examples
    --------
    >>> found = find_entry_patterns(["A_1_1", "A_1_2", "A_2_1", "A_2_2", "speed", "mass"])
    >>> {letter: list(patterns) for letter, patterns in found.items()}
    {'A': ['A_{row}_{column}']}
    """
    found: dict[str, dict[str, set[tuple[str, str]]]] = {}
    for name in names:
        for expression in (_NUMBERED, _DIGITS, _NAMED):
            match = expression.fullmatch(name)
            if match is None or re.search(r"[{}*]", name):
                continue
            head = match.group("head")
            letter = matrix_of(head.rstrip("[(:_., ") or "-")
            if letter is None:
                continue
            fields = ("{row:1}", "{column:1}") if expression is _DIGITS else ("{row}", "{column}")
            text = head + fields[0] + match.group("mid") + fields[1] + match.group("close")
            labels = found.setdefault(letter, {}).setdefault(text, set())
            labels.add((match.group("row"), match.group("column")))
            break
    return found
