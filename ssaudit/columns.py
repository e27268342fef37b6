"""Columns of the points and the modes table, as they stand in the ledger."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import Points
from ssaudit.criteria import Criteria
from ssaudit.judging import LOST, VERDICTS, VOID, Judgement, missed_names
from ssaudit.loop.closing import ClosedModels
from ssaudit.modes.participation import TOP, state_names
from ssaudit.modes.quantities import (
    damping_ratio,
    natural_frequency,
    sampled_notes,
    time_constant,
)
from ssaudit.modes.stacked import Modes

if TYPE_CHECKING:
    from ssaudit.distances import Distances


@dataclass(frozen=True, eq=False)
class Words:
    """A column of few different words.

    Attributes
    ----------
    which : (rows,) int
        Which of the words each row has.
    words : (words,) object
        The words, as str.
    """

    which: NDArray[np.int64]
    words: NDArray[np.object_]

    @property
    def column(self) -> NDArray[np.object_]:
        """A word a row."""
        return np.asarray(self.words[self.which], dtype=object)


Columns = dict[str, Any]
"""Table column by column: arrays, and `Words` where a table has very many rows."""


def concatenated(parts: Sequence[Columns]) -> Columns:
    """Join tables of the same columns, one below the other; there is at least one."""
    return {name: _joined([part[name] for part in parts]) for name in parts[0]}


def _joined(columns: Sequence[Any]) -> Any:
    if not isinstance(columns[0], Words):
        return np.concatenate(columns)
    starts = np.cumsum([0, *(len(column.words) for column in columns[:-1])])
    which = [column.which + start for column, start in zip(columns, starts, strict=True)]
    return Words(np.concatenate(which), np.concatenate([column.words for column in columns]))


def point_columns(
    revision: str,
    points: Points,
    closed: ClosedModels,
    modes: Modes,
    judgement: Judgement,
    criteria: Criteria,
) -> Columns:
    """Columns of the points table, in the ledger's order."""
    count = len(points)
    rows = np.arange(count)
    judged = judgement.worst >= 0
    s = np.full(count, np.nan + 0j)
    if modes.s.shape[1]:
        s[judged] = modes.s[rows, judgement.worst][judged]
    with np.errstate(invalid="ignore"):
        ratios = damping_ratio(modes.s)
    columns: Columns = {
        "point": points.ids.astype(object),
        "revision": np.full(count, revision, dtype=object),
        **{f"at_{name}": column for name, column in points.coordinates.items()},
        **{f"tag_{name}": column.astype(object) for name, column in points.tags.items()},
        "verdict": np.array(VERDICTS, dtype=object)[judgement.verdict],
        "reason": judgement.reason,
        "doubt": judgement.doubt,
        "missed": missed_names(judgement.missed, judgement.verdict == LOST, criteria),
        "max_real": _extreme(np.fmax, modes.s.real),
        "min_damping": _extreme(np.fmin, ratios),
        "real": s.real,
        "imag": np.abs(s.imag),
        "natural_frequency": natural_frequency(s),
        "damping_ratio": damping_ratio(s),
        "time_constant": time_constant(s),
        "shortfall": _deepest(judgement),
        "held": closed.held,
        "infinite_poles": np.zeros(count, dtype=np.int64)
        if modes.infinite is None
        else modes.infinite,
    }
    if modes.index is not None and modes.share is not None:
        top, share = np.full((count, TOP), -1), np.full((count, TOP), np.nan)
        if modes.s.shape[1]:
            top[judged] = modes.index[rows, judgement.worst][judged]
            share[judged] = modes.share[rows, judgement.worst][judged]
            columns["radius"] = np.where(judged, modes.radius[rows, judgement.worst], np.nan)
        else:
            columns["radius"] = np.full(count, np.nan)
        columns["top_states"] = Words(*state_names(top, closed.states)).column
        columns |= {f"participation_{i + 1}": share[:, i] for i in range(TOP)}
    return columns


def _extreme(pick: Any, values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Largest or smallest value of each point; NaN where there is none."""
    if values.shape[1] == 0:
        return np.full(len(values), np.nan)
    return np.asarray(pick.reduce(values, axis=1))


def _deepest(judgement: Judgement) -> NDArray[np.float64]:
    """By what share of its limit each point misses the requirement that it misses by most."""
    if judgement.shortfall.shape[1] == 0:
        return np.full(len(judgement.verdict), np.nan)
    deepest = judgement.shortfall.max(axis=1)
    known = np.isfinite(deepest) & (judgement.verdict != VOID)
    return np.asarray(np.where(known, deepest, np.nan))


def mode_columns(closed: ClosedModels, modes: Modes) -> Columns:
    """Columns of the modes table, in the ledger's order; conjugate pairs once."""
    # Neutral states have no pole: their places are NaN.
    keep = (modes.s.imag >= 0) & ~np.isnan(modes.s.real) & (closed.void == "")[:, np.newaxis]
    row, _ = np.nonzero(keep)
    s = modes.s[keep]
    columns: Columns = {
        "row": row,
        "real": s.real,
        "imag": s.imag + 0.0,
        "natural_frequency": natural_frequency(s),
        "damping_ratio": damping_ratio(s),
        "time_constant": time_constant(s),
        "modulus": np.full(len(s), np.nan) if modes.z is None else np.abs(modes.z[keep]),
        "note": Words(np.zeros(len(s), dtype=np.int64), np.array([""], dtype=object))
        if modes.z is None
        else Words(np.arange(len(s)), sampled_notes(modes.z[keep])),
    }
    if modes.index is not None:
        columns["radius"] = modes.radius[keep]
        columns["top_states"] = Words(*state_names(modes.index[keep], closed.states))
    return columns


def loop_columns(distances: "Distances | None") -> Columns:
    """Columns of the loops table: a row a single loop of a point, ``row`` the point's row.

    Parameters
    ----------
    distances : Distances or None
        Distances to trouble of the points; None at other depths than margins.

    Returns
    -------
    dict of (loops,) arrays
        Empty when there are none.
    """
    if distances is None or not distances.loops:
        return {}
    parts = []
    for loop in distances.loops:
        margins, gains, peaks = loop.margins, loop.gains, loop.peaks
        parts.append(
            {
                "row": distances.rows,
                "loop": np.full(len(distances.rows), loop.name, dtype=object),
                "gain_margin_low_db": margins.gain_low_db,
                "gain_margin_high_db": margins.gain_high_db,
                "phase_margin_deg": margins.phase_deg,
                "phase_margin_frequency": margins.phase_frequency,
                "delay_margin_s": margins.delay_s,
                "gain_factor_low": gains.low,
                "gain_factor_high": gains.high,
                "gain_factor_low_frequency": gains.low_frequency,
                "gain_factor_high_frequency": gains.high_frequency,
                "peak_sensitivity": peaks.sensitivity,
                "peak_complementary": peaks.complementary,
            }
        )
    joined = concatenated(parts)
    order = np.argsort(joined["row"], kind="stable")
    return {name: column[order] for name, column in joined.items()}
