"""Reading parts, compensators and sampling from a loop file."""

from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.errors import LoopError
from ssaudit.loop import parts as kinds
from ssaudit.loop.assembly import Sampling
from ssaudit.loop.gains import ConstantGain
from ssaudit.settings import check_keys, is_finite_number, take, take_words

Table = dict[str, Any]
Reader = Callable[[Table, str], kinds.Model]


def read_parts(tables: Sequence[Any], where: str) -> tuple[kinds.Part, ...]:
    """Read the ``[[part]]`` tables of a loop file.

    Parameters
    ----------
    tables : sequence of dict
        What the user wrote: ``name``, ``input`` or ``signal``, and one of `KINDS`.
    where : str
        The file, for messages.

    Returns
    -------
    tuple of Part

    Raises
    ------
    LoopError
        Naming the part and the key.
    """
    return tuple(_read_part(table, f"{where}, [[part]] {i}") for i, table in enumerate(tables, 1))


def _read_part(table: Any, where: str) -> kinds.Part:
    if not isinstance(table, dict):
        raise LoopError("is not a table", where=where)
    check_keys(table, ("name", "input", "signal", "pade", *KINDS), where=where, error=LoopError)
    stated = [kind for kind in KINDS if kind in table]
    if len(stated) != 1:
        what = f"states {' and '.join(stated)}" if stated else "states no kind"
        raise LoopError(what, where=where, do=f"state one of {', '.join(KINDS)}")
    if "pade" in table and stated != ["delay"]:
        raise LoopError("pade belongs to a delay", where=where)
    words = {
        key: take(table, key, str, where=where, error=LoopError, default="")
        for key in ("name", "input", "signal")
    }
    try:
        model = KINDS[stated[0]](table, where)
        return model.at(words["name"], input=words["input"], signal=words["signal"])
    except LoopError as error:
        raise LoopError(error.what, where=error.where or where, do=error.do) from error


def _number(table: Table, key: str, where: str) -> float:
    return float(take(table, key, float, where=where, error=LoopError, required=True))


def _inner(table: Table, key: str, valid: Sequence[str], where: str) -> tuple[Table, str]:
    inner = take(table, key, dict, where=where, error=LoopError)
    place = f"{where}, {key}"
    check_keys(inner, valid, where=place, error=LoopError)
    return inner, place


def _numbers(table: Table, key: str, where: str) -> list[float]:
    values = take(table, key, list, where=where, error=LoopError, required=True)
    if not values or not all(is_finite_number(value) for value in values):
        raise LoopError(f"{key} is not a list of finite numbers", where=where)
    return [float(value) for value in values]


def _of_numbers(key: str, names: Sequence[str], build: Callable[..., kinds.Model]) -> Reader:
    """Reader of a kind that an inner table of numbers states."""

    def read(table: Table, where: str) -> kinds.Model:
        inner, place = _inner(table, key, names, where)
        return build(*(_number(inner, name, place) for name in names))

    return read


def _read_lag(table: Table, where: str) -> kinds.Model:
    return kinds.first_order(_number(table, "lag", where))


def _read_fraction(table: Table, where: str) -> kinds.Model:
    names = ("numerator", "denominator")
    inner, place = _inner(table, "fraction", names, where)
    return kinds.from_fraction(*(_numbers(inner, name, place) for name in names))


def _read_state_space(table: Table, where: str) -> kinds.Model:
    inner, place = _inner(table, "state_space", tuple("ABCD"), where)
    return kinds.from_state_space(*(_matrix(inner, name, place) for name in "ABCD"))


def _read_delay(table: Table, where: str) -> kinds.Model:
    pade = take(table, "pade", int, where=where, error=LoopError, required=True)
    return kinds.delay(_number(table, "delay", where), pade)


KINDS: dict[str, Reader] = {
    "lag": _read_lag,
    "second_order": _of_numbers(
        "second_order", ("natural_frequency", "damping_ratio"), kinds.second_order
    ),
    "notch": _of_numbers("notch", ("natural_frequency", "damping_ratio", "depth"), kinds.notch),
    "lead_lag": _of_numbers("lead_lag", ("lead", "lag"), kinds.lead_lag),
    "fraction": _read_fraction,
    "state_space": _read_state_space,
    "delay": _read_delay,
}
"""What a part may be, by the key that states it."""


def _matrix(table: Table, key: str, where: str) -> NDArray[np.float64]:
    rows = take(table, key, list, where=where, error=LoopError, required=True)
    entries = [value for row in rows for value in (row if isinstance(row, list) else [row])]
    if not all(is_finite_number(value) for value in entries):
        raise LoopError(f"{key} holds an entry that is no finite number", where=where)
    try:
        return np.atleast_2d(np.array(rows, dtype=float))
    except ValueError as error:
        raise LoopError(f"the rows of {key} differ in length", where=where) from error


def read_compensator(table: Table, where: str) -> tuple[tuple[str, ...], ConstantGain | None]:
    """Read the ``[compensator]`` table of a loop file.

    Parameters
    ----------
    table : dict
        ``states``; and, unless the gain table has a row and a column for each of them, the constant
        matrices ``A``, ``B``, ``C``, ``D`` with the names of their ``inputs`` and ``signals``.
    where : str
        The file, for messages.

    Returns
    -------
    states : tuple of str
    gain : ConstantGain or None
        From signals and states to inputs and the states' derivatives (next values, when sampled).

    Raises
    ------
    LoopError
    """
    place = f"{where}, [compensator]"
    valid = ("states", "inputs", "signals", *"ABCD")
    check_keys(table, valid, where=place, error=LoopError)
    states = take_words(table, "states", where=place, error=LoopError)
    if not states or len(set(states)) != len(states):
        raise LoopError("states must name each state of the compensator once", where=place)
    if not any(name in table for name in "ABCD"):
        return states, None
    inputs, signals = (
        take_words(table, key, where=place, error=LoopError) for key in ("inputs", "signals")
    )
    if not inputs or not signals:
        raise LoopError("inputs and signals must be named", where=place)
    A, B, C, D = (_matrix(table, name, place) for name in "ABCD")
    try:
        whole = np.block([[D, C], [B, A]])
    except ValueError as error:
        raise LoopError("A, B, C and D do not fit each other", where=place) from error
    if A.shape != (len(states), len(states)) or D.shape != (len(inputs), len(signals)):
        what = f"A is {A.shape} and D {D.shape} for {len(states)} states"
        raise LoopError(f"{what}, {len(inputs)} inputs and {len(signals)} signals", where=place)
    return states, ConstantGain(whole, (*inputs, *states), (*signals, *states))


def read_sampling(table: Table, where: str) -> Sampling:
    """Read the ``[sampling]`` table of a loop file.

    Parameters
    ----------
    table : dict
        ``dt`` [s], and ``late``: samples that the computer takes (0 when absent).
    where : str
        The file, for messages.

    Returns
    -------
    Sampling

    Raises
    ------
    LoopError
    """
    place = f"{where}, [sampling]"
    check_keys(table, ("dt", "late"), where=place, error=LoopError)
    late = take(table, "late", int, where=place, error=LoopError, default=0)
    try:
        return Sampling(_number(table, "dt", place), late)
    except LoopError as error:
        raise LoopError(error.what, where=place, do=error.do) from error
