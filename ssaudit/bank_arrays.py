"""A bank from arrays in memory, checked like one from files."""

from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import ArrayLike

from ssaudit.bank import ModelBank, Points, Section
from ssaudit.bank_checks import check_shapes, mark_unusable, non_finite_reasons, number_points
from ssaudit.errors import BankError


def build_bank(
    A: ArrayLike,
    B: ArrayLike | None = None,
    C: ArrayLike | None = None,
    D: ArrayLike | None = None,
    *,
    revision: str,
    states: Sequence[str] | None = None,
    inputs: Sequence[str] | None = None,
    outputs: Sequence[str] | None = None,
    ids: Sequence[str] | None = None,
    coordinates: Mapping[str, tuple[ArrayLike, str]] | None = None,
    tags: Mapping[str, Sequence[str]] | None = None,
    dt: float = 0.0,
    digits: int | None = None,
) -> ModelBank:
    """Build a bank from arrays, with the same checks as an ingested one.

    Parameters
    ----------
    A : (points, n, n) float
        State matrices [1/s when continuous].
    B : (points, n, inputs) float, optional
        Input matrices.
    C : (points, outputs, n) float, optional
        Output matrices.
    D : (points, outputs, inputs) float, optional
        Feedthrough matrices.
    revision : str
        Name of the model revision.
    states, inputs, outputs : sequence of str, optional
        Names; x1, x2 …, u1 …, y1 … when absent.
    ids : sequence of str, optional
        Point ids; numbered from 1 when absent.
    coordinates : dict, optional
        ``{"speed": (values, "m/s")}``: values at each point, and their unit.
    tags : dict, optional
        ``{"config": values}``: a word at each point.
    dt : float
        Sampling time [s]; 0 for continuous models.
    digits : int, optional
        Significant digits to which the entries were rounded; None for full precision.

    Returns
    -------
    ModelBank

    Raises
    ------
    BankError
        When shapes or lengths disagree.

    Examples
    --------
    >>> bank = build_bank([[[-1.0]], [[float("nan")]]], revision="A",
    ...                   coordinates={"speed": ([10.0, 12.0], "m/s")})
    >>> bank.points.void.tolist()
    ['', 'A[1,1] is NaN']
    """
    given = {"A": A, "B": B, "C": C, "D": D}
    matrices = {n: np.array(m, dtype=np.float64) for n, m in given.items() if m is not None}
    names = check_shapes(matrices, states, inputs, outputs)
    count = len(matrices["A"])
    columns = {name: np.array(v, dtype=np.float64) for name, (v, _) in (coordinates or {}).items()}
    words = {name: np.array(v, dtype=np.str_) for name, v in (tags or {}).items()}
    point_ids = np.array(ids, dtype=np.str_) if ids is not None else number_points(1, count)
    for name, column in {"ids": point_ids, **columns, **words}.items():
        if column.shape != (count,):
            raise BankError(f"{name} has shape {column.shape}, A has {count} points")
    points = Points(
        point_ids,
        columns,
        {name: unit for name, (_, unit) in (coordinates or {}).items()},
        words,
        np.full(count, "", dtype=object),
    )
    points = replace(points, void=non_finite_reasons(matrices, points))
    section = Section(*names, float(dt), digits, matrices)
    marked = mark_unusable(points, [section])
    return ModelBank(str(revision), marked, (section,), ids_given=ids is not None)
