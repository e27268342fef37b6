"""Drift: what changed between two runs, point by point; and trend: over all of them."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np
from numpy.typing import NDArray

from ssaudit.errors import SsauditError

if TYPE_CHECKING:
    import pandas as pd

# From the best to the worst. A void point is as bad as one in doubt: nothing is known of it.
RANK = {"ok": 0, "short": 1, "doubt": 2, "void": 2, "lost": 3}
# Coordinates this close are the same, as a share of the coordinate's range over both runs.
TOLERANCE = 1e-9
# A pole or damping ratio that moves by less, as a share of its size, has not moved.
STILL = 1e-9
QUANTILES = (0.0, 0.05, 0.5, 0.95, 1.0)
MOVED = ("max_real", "min_damping")


class Run(Protocol):
    """What drift needs of a run: an audit in memory or one of a ledger."""

    @property
    def points(self) -> "pd.DataFrame":
        """The points table."""
        ...

    @property
    def ids_given(self) -> bool:
        """Whether the export named its points."""
        ...


@dataclass(frozen=True, eq=False)
class Drift:
    """What changed between two runs.

    Attributes
    ----------
    points : DataFrame
        A row a point of either run: ``point`` (and ``point_from`` when matched by coordinates),
        coordinates, ``change`` (worse, better, same, appeared, vanished), verdicts, ``max_real``
        and ``min_damping`` with ``_from``, ``_to`` and ``_change``.
    matched_by : str
        "ids" or "coordinates".
    tolerance : float
        Share of each coordinate's range within which coordinates are the same.
    changes : dict of int
        Points by change of their verdict.
    verdicts : dict of int
        Points of both runs by verdict before and after, such as ("ok", "lost").
    moved : dict of dict
        For ``max_real`` and ``min_damping``: how many points got worse and better in number, and
        the quantiles of the change at points of both runs.
    relocated : int
        Points whose id is shared but whose coordinates are not.
    """

    points: "pd.DataFrame"
    matched_by: str
    tolerance: float
    changes: Mapping[str, int]
    verdicts: Mapping[tuple[str, str], int]
    moved: Mapping[str, Mapping[str, float]]
    relocated: int

    @property
    def got_worse(self) -> bool:
        """Whether a verdict got worse, or a point appeared that is not ok."""
        appeared = self.points[self.points["change"] == "appeared"]
        return self.changes["worse"] > 0 or bool((appeared["verdict_to"] != "ok").any())

    def changed(self, change: str) -> "pd.DataFrame":
        """Return the points with a change of verdict, those that were or became worst first."""
        rows = self.points[self.points["change"] == change]
        end = "_from" if change in ("better", "vanished") else "_to"
        order = rows.assign(rank=rows[f"verdict{end}"].map(RANK)).sort_values(
            ["rank", f"max_real{end}"], ascending=False, kind="stable", na_position="last"
        )
        return order.drop(columns="rank")

    def movers(self, count: int) -> "pd.DataFrame":
        """Return the points whose furthest pole moved most, the most worsened first."""
        both = self.points.dropna(subset=["max_real_change"])
        order = both["max_real_change"].abs().sort_values(ascending=False, kind="stable").index
        moved = both.loc[order[:count]]
        return moved[moved["max_real_change"] != 0].sort_values(
            "max_real_change", ascending=False, kind="stable"
        )


def drift(a: Run, b: Run, *, tolerance: float = TOLERANCE) -> Drift:
    """Compare two runs point by point.

    Points are matched by id where ids are shared; else, and always when an export numbers its
    points instead of naming them, by coordinates and tags.

    Parameters
    ----------
    a, b : Audit or LoggedRun
        The earlier and the later run.
    tolerance : float
        Share of each coordinate's range within which coordinates are the same.

    Returns
    -------
    Drift

    Raises
    ------
    SsauditError
        When points share neither ids nor coordinates.

    Examples
    --------
    >>> from ssaudit import ConstantGain, Criteria, Loop, audit, build_bank
    >>> loop = Loop("negative", ConstantGain([[3.0]]))
    >>> runs = [audit(build_bank([[[a]]], [[[1.0]]], revision=str(a), ids=["cruise"]), loop,
    ...               Criteria()) for a in (1.0, 4.0)]
    >>> drift(*runs).changes["worse"]
    1
    """
    before, after = a.points, b.points
    by_id = (a.ids_given and b.ids_given) and bool(np.isin(before["point"], after["point"]).any())
    if by_id:
        keys = [_numbered(before["point"]), _numbered(after["point"])]
    else:
        keys = _places(before, after, tolerance)
    joined = _join(before.assign(key=keys[0]), after.assign(key=keys[1]))
    shared = [name for name in before if name.startswith("at_") and name in after]
    return Drift(
        _tidy(joined, shared, by_id),
        "ids" if by_id else "coordinates",
        tolerance,
        _count_changes(joined),
        _count_verdicts(joined),
        {name: _movement(joined, name) for name in MOVED},
        _count_relocated(joined, shared, tolerance) if by_id else 0,
    )


def _numbered(ids: "pd.Series[Any]") -> list[tuple[Any, int]]:
    """Ids with a count, so that an id which two void points claim matches one to one."""
    return list(zip(ids, ids.groupby(ids).cumcount(), strict=True))


def _places(
    before: "pd.DataFrame", after: "pd.DataFrame", tolerance: float
) -> list[list[tuple[Any, ...]]]:
    """Keys that are equal where two points have the same coordinates and tags."""
    names = [n for n in before if n.startswith(("at_", "tag_")) and n in after]
    if not any(name.startswith("at_") for name in names):
        raise SsauditError(
            "the runs share neither point ids nor coordinates",
            do="give the points ids or coordinates in the export",
        )
    columns = []
    for name in names:
        both = np.concatenate([before[name].to_numpy(), after[name].to_numpy()])
        columns.append(_clusters(both.astype(float), tolerance) if name[:3] == "at_" else both)
    keys = list(zip(*(column.tolist() for column in columns), strict=True))
    counted: dict[tuple[Any, ...], int] = {}
    result: list[list[tuple[Any, ...]]] = []
    for part in (keys[: len(before)], keys[len(before) :]):
        counted.clear()
        numbered = []
        for key in part:
            counted[key] = counted.get(key, -1) + 1
            numbered.append((*key, counted[key]))
        result.append(numbered)
    return result


def _clusters(values: NDArray[np.float64], tolerance: float) -> NDArray[np.int64]:
    """Give one number to values that lie within the tolerance of their neighbour."""
    order = np.argsort(values, kind="stable")
    ordered = values[order]
    with np.errstate(invalid="ignore"):
        apart = np.diff(ordered) > _nearness(values, tolerance)
    numbers = np.empty(len(values), dtype=np.int64)
    numbers[order] = np.concatenate([[0], np.cumsum(apart | np.isnan(ordered[1:]))])
    return numbers


def _nearness(values: NDArray[np.float64], tolerance: float) -> float:
    """Distance within which coordinates are the same; infinite ones have no part in their range."""
    finite = values[np.isfinite(values)]
    spread = float(np.ptp(finite)) if len(finite) else 0.0
    return tolerance * max(spread, float(np.finfo(float).tiny))


def _join(before: "pd.DataFrame", after: "pd.DataFrame") -> "pd.DataFrame":
    joined = before.merge(after, on="key", how="outer", suffixes=("_from", "_to"), sort=False)
    old, new = joined["verdict_from"].map(RANK), joined["verdict_to"].map(RANK)
    change = np.select(
        [old.isna(), new.isna(), new > old, new < old],
        ["appeared", "vanished", "worse", "better"],
        "same",
    )
    extra = {"change": change}
    for name in MOVED:
        with np.errstate(invalid="ignore"):
            extra[f"{name}_change"] = joined[f"{name}_to"] - joined[f"{name}_from"]
    return joined.assign(**extra)


def _count_changes(joined: "pd.DataFrame") -> dict[str, int]:
    counts = joined["change"].value_counts()
    return {
        name: int(counts.get(name, 0))
        for name in ("worse", "better", "same", "appeared", "vanished")
    }


def _count_verdicts(joined: "pd.DataFrame") -> dict[tuple[str, str], int]:
    pairs = joined.dropna(subset=["verdict_from", "verdict_to"])
    counts = pairs.groupby(["verdict_from", "verdict_to"], observed=True).size()
    return {(str(a), str(b)): int(n) for (a, b), n in counts.items()}


def _movement(joined: "pd.DataFrame", name: str) -> dict[str, float]:
    """How many points moved which way, and the quantiles of the movement."""
    old = joined[f"{name}_from"].to_numpy(dtype=float)
    change = joined[f"{name}_change"].to_numpy(dtype=float)
    known = np.isfinite(change)
    change, size = change[known], np.abs(old[known])
    moved = np.abs(change) > STILL * np.maximum(size, np.finfo(float).tiny)
    worse = change > 0 if name == "max_real" else change < 0
    quantiles = np.quantile(change, QUANTILES) if len(change) else np.full(len(QUANTILES), np.nan)
    return {
        "points": float(len(change)),
        "worse": float(np.count_nonzero(moved & worse)),
        "better": float(np.count_nonzero(moved & ~worse)),
        **{f"q{int(100 * q):03d}": float(v) for q, v in zip(QUANTILES, quantiles, strict=True)},
    }


def _count_relocated(joined: "pd.DataFrame", shared: Sequence[str], tolerance: float) -> int:
    apart = np.zeros(len(joined), dtype=bool)
    for name in shared:
        old, new = (joined[name + end].to_numpy(dtype=float) for end in ("_from", "_to"))
        near = _nearness(np.concatenate([old, new]), tolerance)
        with np.errstate(invalid="ignore"):
            apart |= np.abs(new - old) > near
    return int(np.count_nonzero(apart))


def _tidy(joined: "pd.DataFrame", shared: Sequence[str], by_id: bool) -> "pd.DataFrame":
    """Columns that say what changed, under the names that the ledger uses."""
    tidy = {"point": joined["point_to"].fillna(joined["point_from"])}
    if not by_id:
        tidy["point_from"] = joined["point_from"]
    for name in shared:
        tidy[name] = joined[f"{name}_to"].fillna(joined[f"{name}_from"])
    for name in ("change", "verdict_from", "verdict_to", "reason_to"):
        tidy[name] = joined[name]
    for name in MOVED:
        for end in ("_from", "_to", "_change"):
            tidy[name + end] = joined[name + end]
    return joined[[]].assign(**tidy)
