"""How far the matrices may be off, as the user states it: absolute or relative, by name."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import Section
from ssaudit.errors import LoopError
from ssaudit.settings import check_keys, nearest, take

Floats = NDArray[np.float64]
MATRICES = ("A", "B", "C", "D", "E", "K")
# Which names the rows and the columns of each matrix have.
ROWS = {"A": "states", "B": "states", "C": "outputs", "D": "outputs", "E": "states", "K": "inputs"}
COLUMNS = {"A": "states", "B": "inputs", "C": "states", "D": "inputs", "E": "states", "K": ""}


@dataclass(frozen=True)
class Uncertain:
    """One statement of how far entries of a matrix may be off.

    Parameters
    ----------
    matrix : str
        "A", "B", "C", "D", "E", or "K" for the gains.
    row, column : str, optional
        Names of the row and the column of one entry; of a whole row or column when one is absent,
        of the whole matrix when both are.
    absolute : float
        In the unit of the entry.
    relative : float
        Share of the size of the entry.

    Examples
    --------
    >>> Uncertain("A", "pitch_rate", "pitch", relative=0.05).matrix
    'A'
    """

    matrix: str
    row: str = ""
    column: str = ""
    absolute: float = 0.0
    relative: float = 0.0

    def __post_init__(self) -> None:
        if self.matrix not in MATRICES:
            raise LoopError(f"unknown matrix {self.matrix!r}", do=nearest(self.matrix, MATRICES))
        if self.absolute < 0 or self.relative < 0 or self.absolute + self.relative == 0:
            raise LoopError("an uncertainty needs absolute or relative, above 0")

    @property
    def description(self) -> dict[str, Any]:
        """Content for digests and provenance."""
        return dict(vars(self))


def read_uncertain(tables: Sequence[Any], where: str) -> tuple[Uncertain, ...]:
    """Read the ``[[uncertain]]`` tables of a loop file.

    Parameters
    ----------
    tables : sequence of dict
        What the user wrote.
    where : str
        The file, for messages.

    Returns
    -------
    tuple of Uncertain

    Raises
    ------
    LoopError
    """
    found = []
    for number, table in enumerate(tables, start=1):
        place = f"{where}, [[uncertain]] {number}"
        if not isinstance(table, dict):
            raise LoopError("is not a table", where=place)
        valid = ("matrix", "row", "column", "absolute", "relative")
        check_keys(table, valid, where=place, error=LoopError)
        words = {
            key: take(table, key, str, where=place, error=LoopError, default="")
            for key in ("row", "column")
        }
        sizes = {
            key: take(table, key, float, where=place, error=LoopError, default=0.0)
            for key in ("absolute", "relative")
        }
        matrix = take(table, "matrix", str, where=place, error=LoopError, required=True)
        try:
            found.append(Uncertain(matrix, **words, **sizes))
        except LoopError as error:
            raise LoopError(error.what, where=place, do=error.do) from error
    return tuple(found)


def misfit_of(uncertain: Uncertain, section: Section, signals: Sequence[str]) -> str:
    """Why a statement fits no entry of a section; "" when it does.

    Parameters
    ----------
    uncertain : Uncertain
        The statement.
    section : Section
        Its names.
    signals : sequence of str
        Names of the signals that are fed back, the columns of the gains.

    Returns
    -------
    str
    """
    for name, kind in (
        (uncertain.row, ROWS[uncertain.matrix]),
        (uncertain.column, COLUMNS[uncertain.matrix]),
    ):
        valid = getattr(section, kind) if kind else tuple(signals)
        if name and name not in valid:
            return (
                f"[[uncertain]] names {name!r}, not in {uncertain.matrix}: {nearest(name, valid)}"
            )
    return ""


def stated_errors(
    statements: Sequence[Uncertain],
    section: Section,
    signals: Sequence[str],
    matrices: Mapping[str, Floats],
) -> dict[str, Floats]:
    """How far every entry may be off, by matrix; what several statements say adds up.

    Parameters
    ----------
    statements : sequence of Uncertain
        What the user states.
    section : Section
        Names of rows and columns.
    signals : sequence of str
        Names of the columns of the gains.
    matrices : dict of (points, rows, columns) float
        The matrices; the gains as "K".

    Returns
    -------
    dict of (points, rows, columns) float
        Only of the matrices that a statement is about.

    Examples
    --------
    >>> from ssaudit.bank_arrays import build_bank
    >>> section = build_bank([[[-2.0, 1.0], [0.0, -4.0]]], revision="A").sections[0]
    >>> stated_errors([Uncertain("A", row="x2", relative=0.1)], section, (), section.read(0, 1))
    {'A': array([[[0. , 0. ],
            [0. , 0.4]]])}
    """
    errors: dict[str, Floats] = {}
    for statement in statements:
        M = matrices.get(statement.matrix)
        if M is None:
            continue
        names = [
            getattr(section, kind) if kind else tuple(signals)
            for kind in (ROWS[statement.matrix], COLUMNS[statement.matrix])
        ]
        chosen = [
            slice(None) if not name else [names[i].index(name)]
            for i, name in enumerate((statement.row, statement.column))
        ]
        part = np.zeros(M.shape)
        part[:, chosen[0], chosen[1]] = statement.absolute + statement.relative * np.abs(
            M[:, chosen[0], chosen[1]]
        )
        errors[statement.matrix] = errors.get(statement.matrix, 0.0) + part
    return errors
