"""What an audit comes down to: counts, the worst points, what they miss; in constant memory."""

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.criteria import CROSS_CHECK, POINT_QUANTITIES, STABILITY, Criteria
from ssaudit.judging import VERDICTS

Columns = Mapping[str, NDArray[Any]]
# Reasons for void points that are told apart; the rest is counted together.
MOST_REASONS = 1000
# Points in doubt, and of each outcome of a proof, that are named.
MOST_NAMED = 20
OUTCOMES = ("stable", "unstable", "open")


@dataclass(frozen=True)
class Missed:
    """How many points miss one requirement, and which by most.

    Attributes
    ----------
    name : str
        The requirement; "stability" for the one that is always there.
    limits : str
        What it asks for, with quantity and unit.
    points : int
        How many points miss it.
    judged : int
        How many points were judged by it: it may apply to none, or not be defined at any.
    worst_point : str
        The point that misses it by most, or meets it by least; "" when none was judged.
    worst_value : float
        The quantity there.
    at : dict of float
        Coordinates there.
    between : dict of (low, high)
        Ranges of the coordinates of all points that miss it; empty when none does.
    """

    name: str
    limits: str
    points: int
    judged: int
    worst_point: str
    worst_value: float
    at: Mapping[str, float]
    between: Mapping[str, tuple[float, float]]


@dataclass(frozen=True)
class Nearest:
    """Where one margin is worst of all points.

    Attributes
    ----------
    quantity : str
        Name of the margin, a column of the points table.
    value : float
        Its worst value; infinite where no point has a limit.
    point : str
        The point.
    loop : str
        The single loop, where it is of one; else "".
    frequency : float
        Where [rad/s]; NaN where there is none.
    at : dict of float
        Coordinates of the point.
    undefined : int
        Points at which it is not defined.
    """

    quantity: str
    value: float
    point: str
    loop: str
    frequency: float
    at: Mapping[str, float]
    undefined: int


@dataclass(frozen=True)
class CommonRange:
    """Range of one gain factor on a loop that is stable at every point at which it is defined.

    Attributes
    ----------
    loop : str
        The loop; "" for one factor on all gains.
    low, high : float
        Ends of the range.
    low_point, high_point : str
        The points that set them; "" where there is no end.
    unknown : int
        Stable points at which the numbers do not decide the range, and which it leaves out.
    """

    loop: str
    low: float
    high: float
    low_point: str
    high_point: str
    unknown: int = 0

    def narrowed(
        self, low: NDArray[np.float64], high: NDArray[np.float64], points: NDArray[Any]
    ) -> "CommonRange":
        """Return the range that also holds at some more points."""
        found = self
        if not np.isnan(low).all():
            row = int(np.nanargmax(low))
            if low[row] > found.low:
                found = replace(found, low=float(low[row]), low_point=str(points[row]))
        if not np.isnan(high).all():
            row = int(np.nanargmin(high))
            if high[row] < found.high:
                found = replace(found, high=float(high[row]), high_point=str(points[row]))
        return found


# Margins of which the greatest value is the worst; of the others the least.
GREATEST_IS_WORST = ("gain_factor_low", "peak_sensitivity", "peak_complementary")


@dataclass(frozen=True)
class Summary:
    """What an audit comes down to.

    Attributes
    ----------
    revision : str
        Name of the model revision.
    counts : dict of int
        Points by verdict: ok, short, lost, doubt, void.
    worst : tuple of dict
        The worst points that are not ok, worst first: columns of the points table.
    missed : tuple of Missed
        Stability, then each requirement of the criteria.
    void : dict of int
        Void points by reason, the most frequent first.
    held : int
        Points at which the gain table's edge value was held.
    between : dict of (low, high)
        Ranges of the coordinates of all judged points.
    tolerated : int
        Points in doubt about a requirement, where the criteria let that count as ok.
    proofs : dict of int
        Points by outcome of their proof: stable, unstable, open; empty when none was asked for.
    named : dict of tuple
        The first points in doubt ("doubt"), and with each outcome of a proof.
    nearest : tuple of Nearest
        The worst of each margin; empty unless depth was margins.
    ranges : tuple of CommonRange
        Common stable range of one factor on all gains, then on each loop; empty unless depth was
        margins.
    max_real, min_damping : float
        Worst of all judged points [1/s; no unit]; NaN when there is none.
    """

    revision: str
    counts: Mapping[str, int]
    worst: tuple[Mapping[str, Any], ...]
    missed: tuple[Missed, ...]
    void: Mapping[str, int]
    held: int
    between: Mapping[str, tuple[float, float]]
    tolerated: int
    proofs: Mapping[str, int]
    named: Mapping[str, tuple[str, ...]]
    nearest: tuple[Nearest, ...]
    ranges: tuple[CommonRange, ...]
    max_real: float
    min_damping: float

    @property
    def total(self) -> int:
        """Number of points."""
        return sum(self.counts.values())

    @property
    def all_ok(self) -> bool:
        """Whether every point is ok, or in doubt that the criteria let count as ok."""
        return self.counts["ok"] + self.tolerated == self.total


class Tally:
    """Sums up an audit as its chunks come in.

    Parameters
    ----------
    revision : str
        Name of the model revision.
    criteria : Criteria
        What is judged by.
    worst : int
        How many of the worst points to keep.
    """

    def __init__(self, revision: str, criteria: Criteria, worst: int) -> None:
        self._revision = revision
        self._criteria = criteria
        self._keep = worst
        self._counts: Counter[str] = Counter()
        self._void: Counter[str] = Counter()
        self._worst: list[tuple[tuple[float, float, int], dict[str, Any]]] = []
        size = 1 + len(criteria.requirements)
        self._missed = np.zeros(size, dtype=np.int64)
        self._judged = np.zeros(size, dtype=np.int64)
        self._missed_by = np.full(size, -np.inf)
        self._missed_at: list[tuple[str, float, dict[str, float]]] = [("", np.nan, {})] * size
        self._between: list[dict[str, tuple[float, float]]] = [{} for _ in range(size)]
        self._all_between: dict[str, tuple[float, float]] = {}
        self._held = self._tolerated = 0
        self._ranges: dict[str, CommonRange] = {}
        self._nearest: dict[str, Nearest] = {}
        self._named: dict[str, list[str]] = {}
        self._proofs: Counter[str] = Counter()
        self._extremes = (np.nan, np.nan)
        self._seen = 0

    def add_loops(self, points: Columns, loops: Columns) -> None:
        """Take in the single loops of a chunk.

        Parameters
        ----------
        points, loops : dict of arrays
            Columns of the points table and of the loops table.
        """
        if "gain_factor_low" not in points:
            return
        names = points["point"]
        stable = points["stable_inside"] == 1
        self._narrow("", points["gain_factor_low"], points["gain_factor_high"], names, stable)
        for loop in dict.fromkeys(loops["loop"]) if loops else ():
            rows = loops["loop"] == loop
            ends = (loops["gain_factor_low"][rows], loops["gain_factor_high"][rows])
            of = loops["row"][rows]
            self._narrow(loop, *ends, names[of], stable[of])

    def _narrow(
        self,
        loop: str,
        low: NDArray[np.float64],
        high: NDArray[np.float64],
        names: NDArray[Any],
        stable: NDArray[np.bool_],
    ) -> None:
        before = self._ranges.get(loop) or CommonRange(loop, -np.inf, np.inf, "", "")
        unknown = int(np.count_nonzero(stable & (np.isnan(low) | np.isnan(high))))
        found = before.narrowed(low, high, names)
        self._ranges[loop] = replace(found, unknown=before.unknown + unknown)

    def add(
        self,
        points: Columns,
        values: NDArray[np.float64],
        shortfall: NDArray[np.float64],
        missed: NDArray[np.bool_],
    ) -> None:
        """Take in the points of a chunk.

        Parameters
        ----------
        points : dict of (points,) arrays
            Columns of the points table.
        values, shortfall, missed : (points, requirements) arrays
            As in `ssaudit.auditing.Part`.
        """
        verdicts = points["verdict"]
        for name in VERDICTS:
            self._counts[name] += int(np.count_nonzero(verdicts == name))
        self._held += int(np.count_nonzero(points["held"]))
        if self._criteria.doubt == "ok":
            grave = np.isin(points["doubt"], ["", STABILITY, CROSS_CHECK])
            self._tolerated += int(np.count_nonzero((verdicts == "doubt") & ~grave))
        self._name("doubt", points["point"][verdicts == "doubt"])
        if "proof" in points:
            self._proofs.update(outcome for outcome in points["proof"] if outcome)
            for outcome in OUTCOMES:
                self._name(outcome, points["point"][points["proof"] == outcome])
        for name in POINT_QUANTITIES:
            if name in points:
                self._add_nearest(name, points)
        self._add_void(points["reason"][verdicts == "void"])
        self._add_worst(points)
        _widen(self._all_between, points, np.flatnonzero(verdicts != "void"))
        lost = verdicts == "lost"
        self._add_missed(0, points, lost, points["max_real"], points["max_real"])
        for column in range(missed.shape[1]):
            self._add_missed(
                column + 1, points, missed[:, column], shortfall[:, column], values[:, column]
            )
        judged = verdicts != "void"
        self._extremes = (
            float(np.fmax.reduce(points["max_real"][judged], initial=self._extremes[0])),
            float(np.fmin.reduce(points["min_damping"][judged], initial=self._extremes[1])),
        )
        self._seen += len(verdicts)

    def _name(self, what: str, points: NDArray[Any]) -> None:
        room = MOST_NAMED - len(self._named.setdefault(what, []))
        self._named[what] += [str(point) for point in points[:room]]

    def _add_void(self, reasons: NDArray[Any]) -> None:
        for reason, count in Counter(reasons.tolist()).items():
            known = reason in self._void or len(self._void) < MOST_REASONS
            self._void[reason if known else "other reasons"] += count

    def _add_worst(self, points: Columns) -> None:
        # VERDICTS run from the best to the worst.
        severity = np.zeros(len(points["verdict"]), dtype=np.int64)
        for rank, name in enumerate(VERDICTS):
            severity[points["verdict"] == name] = rank
        depth = np.where(points["verdict"] == "short", points["shortfall"], points["max_real"])
        depth = np.nan_to_num(depth, nan=-np.inf)
        order = np.lexsort((-depth, -severity))[: self._keep]
        for row in order[severity[order] > 0]:
            record = {name: column[row] for name, column in points.items()}
            key = (-float(severity[row]), -float(depth[row]), self._seen + int(row))
            self._worst.append((key, record))
        self._worst = sorted(self._worst, key=lambda item: item[0])[: self._keep]

    def _add_missed(
        self,
        place: int,
        points: Columns,
        missed: NDArray[np.bool_],
        by: NDArray[np.float64],
        value: NDArray[np.float64],
    ) -> None:
        rows = np.flatnonzero(missed)
        self._missed[place] += len(rows)
        _widen(self._between[place], points, rows)
        judged = np.flatnonzero(~np.isnan(value) & (points["verdict"] != "void"))
        self._judged[place] += len(judged)
        # Of those that miss it the worst, else the one that is nearest to missing it.
        among = rows if len(rows) else judged
        if not len(among):
            return
        row = among[np.argmax(by[among])]
        if by[row] > self._missed_by[place]:
            self._missed_by[place] = by[row]
            at = {n[3:]: float(points[n][row]) for n in points if n.startswith("at_")}
            self._missed_at[place] = (str(points["point"][row]), float(value[row]), at)

    def _add_nearest(self, name: str, points: Columns) -> None:
        values = points[name]
        known = np.flatnonzero(~np.isnan(values))
        undefined = len(values) - len(known)
        before = self._nearest.get(name)
        if before is not None:
            undefined += before.undefined
        sense = -1 if name in GREATEST_IS_WORST else 1
        found = before or Nearest(name, np.nan, "", "", np.nan, {}, 0)
        if len(known):
            row = known[np.argmin(sense * values[known])]
            if np.isnan(found.value) or sense * values[row] < sense * found.value:
                loop = points.get(f"{name}_loop")
                found = Nearest(
                    name,
                    float(values[row]),
                    str(points["point"][row]),
                    "" if loop is None else str(loop[row]),
                    float(points[f"{name}_frequency"][row]),
                    {n[3:]: float(points[n][row]) for n in points if n.startswith("at_")},
                    0,
                )
        self._nearest[name] = replace(found, undefined=undefined)

    @property
    def worst_places(self) -> frozenset[int]:
        """Places in the bank of the worst points so far."""
        return frozenset(place for (_, _, place), _ in self._worst)

    def result(self) -> Summary:
        """Return what was summed up so far."""
        names = [(STABILITY, "all poles decay")]
        for requirement in self._criteria.requirements:
            asked = f"{requirement.quantity} {requirement.limits} {requirement.unit}".rstrip()
            names.append((requirement.name, asked))
        missed = tuple(
            Missed(name, limits, int(count), int(judged), point, value, at, between)
            for (name, limits), count, judged, (point, value, at), between in zip(
                names, self._missed, self._judged, self._missed_at, self._between, strict=True
            )
        )
        return Summary(
            self._revision,
            {name: self._counts[name] for name in ("ok", "short", "lost", "doubt", "void")},
            tuple(record for _, record in self._worst),
            missed,
            dict(self._void.most_common()),
            self._held,
            self._all_between,
            self._tolerated,
            dict(self._proofs),
            {what: tuple(points) for what, points in self._named.items()},
            tuple(self._nearest.values()),
            tuple(self._ranges.values()),
            *self._extremes,
        )


def _widen(
    between: dict[str, tuple[float, float]], points: Columns, rows: NDArray[np.int64]
) -> None:
    """Widen ranges of coordinates to take in some points."""
    if not len(rows):
        return
    for name, column in points.items():
        if name.startswith("at_"):
            here = column[rows]
            low, high = between.get(name[3:], (np.inf, -np.inf))
            between[name[3:]] = min(low, float(here.min())), max(high, float(here.max()))
