"""Distance to trouble of the points of a chunk: every loop's margins, ranges, radii."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import Matrices, Section
from ssaudit.loop.assembly import OpenLoop
from ssaudit.loop.breaking import break_loop
from ssaudit.loop.closing import ClosedModels
from ssaudit.loop.model import SIGNS, Loop
from ssaudit.margins.confirmed import only_confirmed
from ssaudit.margins.disk import find_disk_margin
from ssaudit.margins.gain_range import GainRange, find_gain_range
from ssaudit.margins.loop_margins import LoopMargins, find_loop_margins
from ssaudit.margins.real_radius import find_real_radius
from ssaudit.margins.sensitivity import SensitivityPeaks, find_sensitivity_peaks
from ssaudit.margins.stability_radius import find_stability_radius
from ssaudit.margins.state_space import StateSpace
from ssaudit.modes.neutral import neutral_states
from ssaudit.modes.stacked import distinct_rows

Floats = NDArray[np.float64]
NO_LOOP = ""


@dataclass(frozen=True, eq=False)
class SingleLoop:
    """One loop, broken at one channel with the others closed, at some points.

    Attributes
    ----------
    side, channel : str
        "input" or "signal", and its name.
    margins : LoopMargins
        Gain, phase and delay margins.
    gains : GainRange
        Stable interval of the gain factor, below zero included.
    peaks : SensitivityPeaks
        Peaks of S and T.
    """

    side: str
    channel: str
    margins: LoopMargins
    gains: GainRange
    peaks: SensitivityPeaks

    @property
    def name(self) -> str:
        """Name of the loop."""
        return f"{self.side} {self.channel}"


@dataclass(frozen=True, eq=False)
class Distances:
    """Distance to trouble of some points.

    Attributes
    ----------
    quantities : dict of (points,) float
        By the names of the ledger's columns. Infinite where there is no limit; NaN where it is not
        defined, because the point is not stable or has no such loop.
    places : dict of (points,) arrays
        Where a quantity is worst: ``<quantity>_loop`` (str) and ``<quantity>_frequency`` [rad/s].
    unknown : dict of (points,) bool
        Where a quantity is not known to be met or missed: the numbers do not decide it, or it is
        not defined. No such loop is no such case.
    loops : tuple of SingleLoop
        Every single loop, at the points that have distances.
    rows : (k,) int
        Which points of the chunk these are.
    """

    quantities: dict[str, Floats]
    places: dict[str, NDArray[Any]]
    unknown: dict[str, NDArray[np.bool_]]
    loops: tuple[SingleLoop, ...]
    rows: NDArray[np.int64]

    def spread(self, rows: NDArray[np.int64], count: int) -> "Distances":
        """Spread these points over a chunk; elsewhere nothing is defined."""

        def over(values: NDArray[Any], rest: Any) -> NDArray[Any]:
            whole = np.full(count, rest, dtype=values.dtype)
            whole[rows] = values
            return whole

        return Distances(
            {name: over(values, np.nan) for name, values in self.quantities.items()},
            {
                name: over(values, NO_LOOP if values.dtype == object else np.nan)
                for name, values in self.places.items()
            },
            {name: over(values, True) for name, values in self.unknown.items()},
            self.loops,
            rows,
        )


def find_distances(
    loop: Loop,
    section: Section,
    matrices: Matrices,
    closed: ClosedModels,
    *,
    neutral: Sequence[int] = (),
    real_radius: bool = False,
) -> Distances:
    """Find how far the points of a chunk are from trouble.

    Parameters
    ----------
    loop : Loop
        How the models are closed.
    section : Section
        Names of the section.
    matrices : dict of (points, rows, columns) float
        The matrices.
    closed : ClosedModels
        The closed models; points must be usable.
    neutral : sequence of int
        States that are left out where nothing depends on them, whatever the gains.
    real_radius : bool
        Whether to find the radii for real changes too, which takes longer than all the rest.

    Returns
    -------
    Distances
        Of models that come closed the radii alone.
    """
    if not len(closed.A):
        return _collect((), _blank(0), 0)
    opened = None if closed.K is None else _opened(loop, section, matrices, closed)
    kinds, kind_of = distinct_rows(states_left_out(opened, closed, neutral))
    lots = [np.flatnonzero(kind_of == number) for number in range(len(kinds))]
    found = []
    for rows, kind in zip(lots, kinds, strict=True):
        some = {name: M[rows] for name, M in matrices.items()}
        out = np.flatnonzero(kind)
        # Extreme entries overflow on the way; what comes of them is not confirmed.
        with np.errstate(all="ignore"):
            found.append(_find_alike(loop, section, some, closed.at(rows), out, real_radius))
    return found[0] if len(found) == 1 else _joined(found, lots)


def _find_alike(
    loop: Loop,
    section: Section,
    matrices: Matrices,
    closed: ClosedModels,
    out: NDArray[np.int64],
    real_radius: bool,
) -> Distances:
    """Distances of points of which the same states are left out."""
    radii = _radii(_without(closed.A, out, 1, 2), closed.dt, real_radius)
    if closed.K is None:
        blank = {**_blank(len(closed.A)), **radii}
        return _collect((), blank, len(closed.A), unknown=True)
    opened = _opened(loop, section, matrices, closed)
    sign = SIGNS[loop.sign]
    inputs, signals = loop.channels(section)
    K = np.broadcast_to(closed.K, (len(closed.A), *closed.K.shape[1:]))
    loops = tuple(
        _single(loop, section, matrices, closed, out, side, channel, names[channel])
        for side, names, channels in (
            ("input", section.inputs, inputs),
            ("signal", loop.signals(section), signals),
        )
        for channel in channels
    )
    if not inputs:
        return _collect((), {**_blank(len(closed.A)), **radii}, len(closed.A))
    at_inputs = break_without(opened, K, sign, out, inputs=inputs)
    at_signals = break_without(opened, K, sign, out, signals=signals)
    both = break_without(opened, K, sign, out, inputs=inputs, signals=signals)
    found = dict(radii)
    factor = only_confirmed(find_gain_range(*_matrices(at_inputs), closed.dt))
    decided = factor.confirmed | ~factor.stable
    found["gain_factor_low"] = (factor.low, factor.low_frequency, decided)
    found["gain_factor_high"] = (factor.high, factor.high_frequency, decided)
    for name, broken in (("input", at_inputs), ("output", at_signals), ("both", both)):
        disk = only_confirmed(find_disk_margin(*_matrices(broken), closed.dt))
        decided = disk.confirmed | ~disk.stable
        found[f"disk_margin_{name}"] = (disk.alpha, disk.frequency, decided)
    disks = [found[f"disk_margin_{name}"] for name in ("input", "output", "both")]
    found["disk_margin"] = _least(disks)
    return _collect(loops, found, len(closed.A))


def _opened(loop: Loop, section: Section, matrices: Matrices, closed: ClosedModels) -> OpenLoop:
    return loop.open(section, matrices) if closed.open is None else closed.open


def states_left_out(
    opened: OpenLoop | None, closed: ClosedModels, neutral: Sequence[int]
) -> NDArray[np.bool_]:
    """Find neutral states on which nothing depends, neither the models nor the gains.

    Parameters
    ----------
    opened : OpenLoop or None
        What the gains close; None for models that come closed.
    closed : ClosedModels
        The closed models.
    neutral : sequence of int
        States that the criteria exempt.

    Returns
    -------
    (points, n) bool
        None of a point at which some are neutral only because the gains cancel what depends on
        them: another gain would not.
    """
    named, sampled = np.array(neutral, dtype=np.int64), closed.dt > 0
    found = neutral_states(closed.A, named, sampled)
    if opened is None or closed.K is None or not found.any():
        return found
    fed: NDArray[np.bool_] = (np.matmul(closed.K, opened.C) != 0).any(axis=1)
    cancelled = found & (fed | ~neutral_states(opened.A, named, sampled))
    return np.asarray(found & ~cancelled.any(axis=1, keepdims=True))


def break_without(
    opened: OpenLoop, K: Floats, sign: int, out: NDArray[np.int64], **broken: Sequence[int]
) -> StateSpace:
    """Break a loop as `ssaudit.loop.breaking.break_loop` does, and leave states out of it.

    Parameters
    ----------
    opened, K, sign
        As there.
    out : (k,) int
        States on which nothing depends.
    **broken : sequence of int
        ``inputs`` and ``signals``, as there.

    Returns
    -------
    StateSpace
    """
    L = break_loop(opened, K, sign, **broken)
    return StateSpace(_without(L.A, out, 1, 2), _without(L.B, out, 1), _without(L.C, out, 2), L.D)


def _without(M: Floats, out: NDArray[np.int64], *axes: int) -> Floats:
    for axis in axes if len(out) else ():
        M = np.delete(M, out, axis=axis)
    return M


def _joined(found: Sequence[Distances], lots: Sequence[NDArray[np.int64]]) -> Distances:
    """Join the distances of lots of points, in the order of the points."""
    order = np.argsort(np.concatenate(lots))

    def join(tables: Any) -> dict[str, NDArray[Any]]:
        tables = list(tables)
        return {name: np.concatenate([t[name] for t in tables])[order] for name in tables[0]}

    def record(records: Any) -> Any:
        records = list(records)
        return type(records[0])(**join(map(vars, records)))

    loops = tuple(
        SingleLoop(
            of_lots[0].side,
            of_lots[0].channel,
            record(loop.margins for loop in of_lots),
            record(loop.gains for loop in of_lots),
            record(loop.peaks for loop in of_lots),
        )
        for of_lots in zip(*(lot.loops for lot in found), strict=True)
    )
    return Distances(
        join(lot.quantities for lot in found),
        join(lot.places for lot in found),
        join(lot.unknown for lot in found),
        loops,
        np.arange(len(order)),
    )


def _least(
    disks: Sequence[tuple[Floats, Floats, NDArray[np.bool_]]],
) -> tuple[Floats, Floats, NDArray[np.bool_]]:
    """Return the least of several margins, with its frequency; decided where all are."""
    values = np.array([value for value, _, _ in disks])
    frequencies = np.array([frequency for _, frequency, _ in disks])
    least = np.argmin(np.where(np.isnan(values), np.inf, values), axis=0)
    rows = np.arange(values.shape[1])
    decided = np.asarray(np.all([decided for _, _, decided in disks], axis=0))
    return values[least, rows], frequencies[least, rows], decided


Found = dict[str, tuple[Floats, Floats, NDArray[np.bool_]]]


def _blank(count: int) -> Found:
    """Return nothing, under all the names of the whole loop."""
    nothing = np.full(count, np.nan)
    return dict.fromkeys(WHOLE, (nothing, nothing, np.ones(count, dtype=bool)))


def _matrices(system: StateSpace) -> tuple[Floats, Floats, Floats, Floats]:
    return system.A, system.B, system.C, system.D


def _radii(A: Floats, dt: float, real: bool) -> Found:
    found: Found = {}
    for end, scaled in (("", False), ("_scaled", True)):
        radius = only_confirmed(find_stability_radius(A, dt, scaled=scaled))
        decided = radius.confirmed | ~radius.stable
        found[f"stability_radius{end}"] = (radius.radius, radius.frequency, decided)
        name = f"real_stability_radius{end}"
        if real:
            radius = only_confirmed(find_real_radius(A, dt, scaled=scaled))
            decided = radius.confirmed | ~radius.stable
            found[name] = (radius.radius, radius.frequency, decided)
        else:
            nothing = np.full(len(A), np.nan)
            found[name] = (nothing, nothing, np.ones(len(A), dtype=bool))
    return found


def _single(
    loop: Loop,
    section: Section,
    matrices: Matrices,
    closed: ClosedModels,
    out: NDArray[np.int64],
    side: str,
    channel: int,
    name: str,
) -> SingleLoop:
    """Margins of the loop broken at one channel; its own delay is exact, those of others Padé."""
    opened, late = loop.open_without_delay(section, matrices, side, channel)
    chosen = {"inputs": [channel]} if side == "input" else {"signals": [channel]}
    K, sign = np.asarray(closed.K), SIGNS[loop.sign]
    broken = _matrices(break_without(opened, K, sign, out, **chosen))
    whole = broken
    if late:
        modelled = _opened(loop, section, matrices, closed)
        whole = _matrices(break_without(modelled, K, sign, out, **chosen))
    delay = np.full(len(closed.A), late) if late else None
    return SingleLoop(
        side,
        name,
        only_confirmed(find_loop_margins(*broken, closed.dt, delay=delay)),
        only_confirmed(find_gain_range(*whole, closed.dt)),
        only_confirmed(find_sensitivity_peaks(*whole, closed.dt)),
    )


def _collect(
    loops: Sequence[SingleLoop], found: Found, count: int, unknown: bool = False
) -> Distances:
    """Worst of all single loops, and everything under the names of the ledger's columns.

    Without single loops what they would have is unknown, or there is nothing to know.
    """
    quantities: dict[str, Floats] = {}
    places: dict[str, NDArray[Any]] = {}
    undecided: dict[str, NDArray[np.bool_]] = {}
    # In one order for all chunks: they are joined to one table.
    for name in WHOLE:
        value, frequency, decided = found[name]
        quantities[name] = value
        defined = bool(loops) or unknown or "radius" in name
        undecided[name] = ~decided | (np.isnan(value) & defined)
        places[f"{name}_frequency"] = frequency
    for name, sense in SINGLE.items():
        table = [_of_loop(name, loop) for loop in loops]
        nothing = np.full((1, count), np.nan)
        values = np.array([value for value, _, _ in table]) if table else nothing
        frequencies = np.array([frequency for _, frequency, _ in table]) if table else nothing
        names = np.array([loop.name for loop in loops] or [NO_LOOP], dtype=object)
        known = ~np.isnan(values)
        worst = np.argmin(np.where(known, sense * values, np.inf), axis=0)
        rows = np.arange(count)
        quantities[name] = values[worst, rows]
        places[f"{name}_loop"] = np.where(known.any(axis=0), names[worst], NO_LOOP)
        places[f"{name}_frequency"] = frequencies[worst, rows]
        undecided[name] = np.full(count, unknown)
        for value, _, decided in table:
            undecided[name] |= ~decided | np.isnan(value)
    return Distances(quantities, places, undecided, tuple(loops), np.arange(count))


# Quantities of the whole closed loop.
WHOLE = (
    "gain_factor_low",
    "gain_factor_high",
    "disk_margin_input",
    "disk_margin_output",
    "disk_margin_both",
    "disk_margin",
    "stability_radius",
    "real_stability_radius",
    "stability_radius_scaled",
    "real_stability_radius_scaled",
)
# Quantities of single loops: 1 where less is worse, -1 where more is.
SINGLE = {
    "gain_margin_db": 1,
    "phase_margin_deg": 1,
    "delay_margin_s": 1,
    "peak_sensitivity": -1,
    "peak_complementary": -1,
}


def _of_loop(name: str, loop: SingleLoop) -> tuple[Floats, Floats, NDArray[np.bool_]]:
    """Value, frequency and whether decided of one quantity of one loop."""
    margins = loop.margins
    decided = margins.confirmed | ~margins.stable
    if name == "phase_margin_deg":
        return margins.phase_deg, margins.phase_frequency, decided
    if name == "delay_margin_s":
        return margins.delay_s, margins.delay_frequency, decided
    if name.startswith("peak_"):
        peaks = loop.peaks
        decided = peaks.confirmed | ~peaks.stable
        kind = name.removeprefix("peak_")
        return getattr(peaks, kind), getattr(peaks, f"{kind}_frequency"), decided
    down, up = -margins.gain_low_db, margins.gain_high_db
    nearer = np.where(down < up, margins.gain_low_frequency, margins.gain_high_frequency)
    return np.minimum(down, up), nearer, decided
