"""One point, explained: its modes, its loops, what would help and what would be lost first."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import ModelBank, Section
from ssaudit.chunk import Part, Settings, audit_chunk, named_rows
from ssaudit.criteria import Criteria
from ssaudit.distances import SingleLoop, break_without, find_distances, states_left_out
from ssaudit.errors import SsauditError
from ssaudit.loop.closing import ClosedModels
from ssaudit.loop.model import SIGNS, Loop
from ssaudit.margins.confirmed import only_confirmed
from ssaudit.margins.stable_gains import StableGains, find_stable_gains
from ssaudit.modes.gain_derivatives import damping_derivatives, pole_derivatives
from ssaudit.modes.poles import find_modes
from ssaudit.settings import nearest

Floats = NDArray[np.float64]
# Derivatives are shown for a change of the gain by this share of itself.
CHANGE = 0.1
# Gain entries that are told.
MOST_GAINS = 5


@dataclass(frozen=True)
class GainEffect:
    """How one gain moves the worst damping ratio.

    Attributes
    ----------
    input, signal : str
        Row and column of the gain.
    gain : float
        Its value.
    derivative : float
        dζ/dK of the least damped mode, in the inverse of the gain's unit.
    """

    input: str
    signal: str
    gain: float
    derivative: float

    @property
    def change(self) -> float:
        """Change of ζ to first order when the gain grows by `CHANGE` of itself."""
        return CHANGE * self.gain * self.derivative


@dataclass(frozen=True, eq=False)
class PointReport:
    """Everything about one point.

    Attributes
    ----------
    point : str
        Its name.
    at, units, tags : dict
        Coordinates, their units, tags.
    row : dict
        Its row of the points table at depth margins.
    modes : list of dict
        Its rows of the modes table, the least damped first.
    loops : tuple of SingleLoop
        Every single loop, with one point.
    gains : StableGains or None
        All stable intervals of one factor on all gains; None for models that come closed.
    effects : tuple of GainEffect
        The gains that move the worst damping ratio most, for their size.
    formula : str
        How the loop is closed.
    apart : dict of float
        How far the coordinates are from those asked for, where they were asked for.
    as_near : int
        How many points are as near to what was asked for.
    judged : bool
        Whether there were requirements to judge by.
    """

    point: str
    at: Mapping[str, float]
    units: Mapping[str, str]
    tags: Mapping[str, str]
    row: Mapping[str, Any]
    modes: list[dict[str, Any]]
    loops: tuple[SingleLoop, ...]
    gains: StableGains | None
    effects: tuple[GainEffect, ...]
    formula: str
    apart: Mapping[str, float]
    as_near: int = 1
    judged: bool = True


def explain_point(
    bank: ModelBank,
    loop: Loop,
    *,
    id: str | None = None,
    near: Mapping[str, float] | None = None,
    criteria: Criteria | None = None,
) -> PointReport:
    """Explain one point of a bank.

    Parameters
    ----------
    bank : ModelBank
        The bank.
    loop : Loop
        How its models are closed.
    id : str, optional
        Name of the point.
    near : dict of float, optional
        Or coordinates: the nearest point, distances taken as shares of each coordinate's range.
    criteria : Criteria, optional
        What to judge by besides stability.

    Returns
    -------
    PointReport

    Raises
    ------
    SsauditError
        When there is no such point, or loop or criteria do not fit the bank.

    Examples
    --------
    >>> from ssaudit import ConstantGain, build_bank
    >>> bank = build_bank([[[0.0, 1.0], [-1.0, 0.0]]], [[[0.0], [1.0]]], revision="A", ids=["x"])
    >>> found = explain_point(bank, Loop("negative", ConstantGain([[0.0, 0.4]])), id="x")
    >>> found.row["verdict"], f"{found.row['min_damping']:.3f}", found.effects[0].signal
    ('ok', '0.200', 'x2')
    """
    judged = criteria is not None
    criteria = criteria or Criteria()
    loop.check(bank)
    criteria.check(bank)
    place = find_point(bank, id=id, near=near)
    section, start = section_of(bank, place)
    points = bank.points.between(place, place + 1)
    matrices = section.read(start, start + 1)
    settings = Settings(loop, criteria, "margins", real_radius=True)
    part = audit_chunk(bank.revision, section, points, matrices, settings)
    closed = loop.close(section, points, matrices)
    usable = closed.void[0] == "" and "E" not in matrices
    neutral = [i for i, name in enumerate(closed.states) if name in criteria.neutral]
    distances = None
    if usable:
        distances = find_distances(loop, section, matrices, closed, neutral=neutral)
    at = {name: float(column[0]) for name, column in points.coordinates.items()}
    return PointReport(
        str(points.ids[0]),
        at,
        points.units,
        {name: str(column[0]) for name, column in points.tags.items()},
        {name: column[0] for name, column in part.points.items()},
        _modes(part),
        distances.loops if distances else (),
        _stable_gains(loop, section, closed, matrices, neutral) if usable else None,
        _effects(loop, section, closed, matrices) if usable and closed.K is not None else (),
        loop.formula,
        {name: at[name] - value for name, value in (near or {}).items()},
        _as_near(bank, place, near),
        judged,
    )


def find_point(
    bank: ModelBank, *, id: str | None = None, near: Mapping[str, float] | None = None
) -> int:
    """Find a point by name, or the one nearest to some coordinates.

    Parameters
    ----------
    bank : ModelBank
        The bank.
    id : str, optional
        Name of the point.
    near : dict of float, optional
        Coordinates; distances are taken as shares of each coordinate's range.

    Returns
    -------
    int
        Its place in the bank.

    Raises
    ------
    SsauditError
        When there is none, several have the name, or a coordinate is unknown.
    """
    if id is not None:
        found = np.flatnonzero(bank.points.ids == id)
        if not len(found):
            known = bank.points.ids[:2000].tolist()
            advice = nearest(id, known) if len(known) <= 12 else _similar(id, known)
            raise SsauditError(f"no point is named {id!r}", where=bank.name, do=advice)
        if len(found) > 1:
            raise SsauditError(f"{len(found)} points are named {id!r}", where=bank.name,
                               do="name one by its coordinates: --near")  # fmt: skip
        return int(found[0])
    if not near:
        raise SsauditError("no point is named", do="give its id, or coordinates near it")
    # Of equally near points a usable one is wanted first.
    return int(np.lexsort((bank.points.void != "", _distances(bank, near)))[0])


def _distances(bank: ModelBank, near: Mapping[str, float]) -> Floats:
    """Squared distance of every point from coordinates, as shares of each one's range."""
    distance = np.zeros(len(bank))
    for name, value in near.items():
        if name not in bank.points.coordinates:
            valid = nearest(name, bank.points.coordinates)
            raise SsauditError(f"unknown coordinate {name!r}", where=bank.name, do=valid)
        column = bank.points.coordinates[name]
        known = column[np.isfinite(column)]
        spread = np.ptp(known) if len(known) else 0.0
        distance += ((column - value) / (spread or 1.0)) ** 2
    return np.where(np.isfinite(distance), distance, np.inf)


def _as_near(bank: ModelBank, place: int, near: Mapping[str, float] | None) -> int:
    """Count the usable points that are as near to some coordinates as one is."""
    if not near:
        return 1
    distance = _distances(bank, near)
    usable = (bank.points.void == "") | (np.arange(len(bank)) == place)
    return int(np.count_nonzero((distance <= distance[place] * (1 + 1e-9)) & usable))


def _similar(word: str, known: list[str]) -> str:
    import difflib

    close = difflib.get_close_matches(word, known, n=3)
    return f"similar: {', '.join(close)}" if close else "see the ledger's points for the names"


def section_of(bank: ModelBank, place: int) -> tuple[Section, int]:
    """Section of a point, and its place in it."""
    for section in bank.sections:
        if place < len(section):
            return section, place
        place -= len(section)
    raise SsauditError("no such place in the bank", where=bank.name)


def _modes(part: Part) -> list[dict[str, Any]]:
    columns = named_rows(part, part.modes)
    order = np.argsort(columns["damping_ratio"], kind="stable")
    return [{name: column[i] for name, column in columns.items()} for i in order]


def _stable_gains(
    loop: Loop,
    section: Section,
    closed: ClosedModels,
    matrices: Mapping[str, Floats],
    neutral: Sequence[int],
) -> StableGains | None:
    """All stable intervals of one factor on all gains."""
    if closed.K is None:
        return None
    opened = loop.open(section, matrices) if closed.open is None else closed.open
    out = np.flatnonzero(states_left_out(opened, closed, neutral)[0])
    inputs = range(len(section.inputs))
    broken = break_without(opened, closed.K, SIGNS[loop.sign], out, inputs=inputs)
    with np.errstate(all="ignore"):  # as for the distances
        return only_confirmed(find_stable_gains(broken.A, broken.B, broken.C, broken.D, closed.dt))


def _effects(
    loop: Loop, section: Section, closed: ClosedModels, matrices: Mapping[str, Floats]
) -> tuple[GainEffect, ...]:
    """Gains that raise or lower the worst damping ratio most, for their size."""
    opened = loop.open(section, matrices) if closed.open is None else closed.open
    K = np.asarray(closed.K)
    poles, right, left, _ = find_modes(closed.A)
    moves = pole_derivatives(opened.B, opened.C, opened.D, K, SIGNS[loop.sign], right, left)
    derivatives = damping_derivatives(poles, moves, closed.dt)[0]
    with np.errstate(invalid="ignore", divide="ignore"):
        s = np.log(poles[0]) / closed.dt if closed.dt > 0 else poles[0]
        ratio = -s.real / np.abs(s)
    if np.isnan(ratio).all():
        return ()
    worst = derivatives[int(np.nanargmin(ratio))]
    rows, columns = len(section.inputs), len(loop.signals(section))
    effect = np.abs(worst * K[0])[:rows, :columns]
    order = np.argsort(-np.nan_to_num(effect), axis=None)[:MOST_GAINS]
    found = []
    for i, j in zip(*np.unravel_index(order, effect.shape), strict=True):
        if effect[i, j] > 0:
            names = section.inputs[i], loop.signals(section)[j]
            found.append(GainEffect(*names, float(K[0, i, j]), float(worst[i, j])))
    return tuple(found)
