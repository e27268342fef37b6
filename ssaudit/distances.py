"""Distance to trouble of the points of a chunk: every loop's margins, ranges, radii."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import Matrices, Section
from ssaudit.loop.breaking import break_loop
from ssaudit.loop.model import SIGNS, ClosedModels, Loop
from ssaudit.margins.disk import find_disk_margin
from ssaudit.margins.gain_range import GainRange, find_gain_range
from ssaudit.margins.loop_margins import LoopMargins, find_loop_margins
from ssaudit.margins.real_radius import find_real_radius
from ssaudit.margins.sensitivity import SensitivityPeaks, find_sensitivity_peaks
from ssaudit.margins.stability_radius import find_stability_radius
from ssaudit.margins.state_space import StateSpace

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
        Where the numbers do not decide a quantity.
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
            {name: over(values, False) for name, values in self.unknown.items()},
            self.loops,
            rows,
        )


def find_distances(
    loop: Loop,
    section: Section,
    matrices: Matrices,
    closed: ClosedModels,
    *,
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
    real_radius : bool
        Whether to find the radii for real changes too, which takes longer than all the rest.

    Returns
    -------
    Distances
        Of models that come closed the radii alone.
    """
    if not len(closed.A):
        return _collect((), _blank(0), 0)
    radii = _radii(closed.A, closed.dt, real_radius)
    if closed.K is None:
        return _collect((), {**_blank(len(closed.A)), **radii}, len(closed.A))
    opened = loop.open(section, matrices) if closed.open is None else closed.open
    sign = SIGNS[loop.sign]
    inputs, signals = loop.channels(section)
    K = np.broadcast_to(closed.K, (len(closed.A), *closed.K.shape[1:]))
    loops = tuple(
        _single(loop, section, matrices, closed, K, sign, side, channel, names[channel])
        for side, names, channels in (
            ("input", section.inputs, inputs),
            ("signal", loop.signals(section), signals),
        )
        for channel in channels
    )
    if not inputs:
        return _collect((), {**_blank(len(closed.A)), **radii}, len(closed.A))
    at_inputs = break_loop(opened, K, sign, inputs=inputs)
    at_signals = break_loop(opened, K, sign, signals=signals)
    both = break_loop(opened, K, sign, inputs=inputs, signals=signals)
    found = dict(radii)
    factor = find_gain_range(*_matrices(at_inputs), closed.dt)
    decided = factor.confirmed | ~factor.stable
    found["gain_factor_low"] = (factor.low, factor.low_frequency, decided)
    found["gain_factor_high"] = (factor.high, factor.high_frequency, decided)
    for name, broken in (("input", at_inputs), ("output", at_signals), ("both", both)):
        disk = find_disk_margin(*_matrices(broken), closed.dt)
        decided = disk.confirmed | ~disk.stable
        found[f"disk_margin_{name}"] = (disk.alpha, disk.frequency, decided)
    disks = [found[f"disk_margin_{name}"] for name in ("input", "output", "both")]
    found["disk_margin"] = _least(disks)
    return _collect(loops, found, len(closed.A))


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
        radius = find_stability_radius(A, dt, scaled=scaled)
        decided = radius.confirmed | ~radius.stable
        found[f"stability_radius{end}"] = (radius.radius, radius.frequency, decided)
        name = f"real_stability_radius{end}"
        if real:
            radius = find_real_radius(A, dt, scaled=scaled)
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
    K: Floats,
    sign: int,
    side: str,
    channel: int,
    name: str,
) -> SingleLoop:
    """Margins of the loop broken at one channel; its own delay is exact, those of others Padé."""
    opened, late = loop.open_without_delay(section, matrices, side, channel)
    chosen = {"inputs": [channel]} if side == "input" else {"signals": [channel]}
    broken = _matrices(break_loop(opened, K, sign, **chosen))
    whole = broken
    if late:
        modelled = loop.open(section, matrices) if closed.open is None else closed.open
        whole = _matrices(break_loop(modelled, K, sign, **chosen))
    delay = np.full(len(K), late) if late else None
    return SingleLoop(
        side,
        name,
        find_loop_margins(*broken, closed.dt, delay=delay),
        find_gain_range(*whole, closed.dt),
        find_sensitivity_peaks(*whole, closed.dt),
    )


def _collect(loops: Sequence[SingleLoop], found: Found, count: int) -> Distances:
    """Worst of all single loops, and everything under the names of the ledger's columns."""
    quantities: dict[str, Floats] = {}
    places: dict[str, NDArray[Any]] = {}
    unknown: dict[str, NDArray[np.bool_]] = {}
    for name, (value, frequency, decided) in found.items():
        quantities[name], unknown[name] = value, ~decided
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
        undecided = [~decided for _, _, decided in table]
        unknown[name] = np.any(undecided, axis=0) if table else np.zeros(count, dtype=bool)
    return Distances(quantities, places, unknown, tuple(loops), np.arange(count))


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
