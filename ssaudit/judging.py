"""Judging stacked modes by criteria: one verdict a point, with the reason."""

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import Points
from ssaudit.criteria import STABILITY, Criteria, Requirement
from ssaudit.modes.quantities import damping_ratio, natural_frequency, time_constant
from ssaudit.modes.radii import damping_ratio_radius
from ssaudit.modes.stacked import Modes, distinct_rows

if TYPE_CHECKING:
    from ssaudit.distances import Distances

Floats = NDArray[np.float64]
# Peaks and radii are found to 1e-7 of themselves; a verdict nearer to its limit is in doubt.
DISTANCE_TOLERANCE = 1e-6
# From the best to the worst for sorting; a void point could not be judged.
VERDICTS = ("ok", "void", "short", "doubt", "lost")
OK, VOID, SHORT, DOUBT, LOST = range(5)
ON_AXIS, ON_CIRCLE = "not stable: a pole on the axis", "not stable: a pole on the unit circle"


@dataclass(frozen=True, eq=False)
class Judgement:
    """What came of judging some points.

    Attributes
    ----------
    verdict : (points,) int
        Index into `VERDICTS`.
    reason : (points,) object
        Why, as str; "" where the point is ok.
    worst : (points,) int
        The mode that decides the verdict: of a short point the one that misses its requirement by
        most, otherwise the one furthest to the right. -1 at void points.
    missed : (points, requirements) bool
        Which requirements a judged point surely misses.
    value : (points, requirements) float
        The worst value of each requirement's quantity; NaN where it does not apply.
    shortfall : (points, requirements) float
        How much of its limit each requirement is missed by; negative where it is met.
    doubt : (points,) object
        What a point in doubt is in doubt about: "stability" or a requirement's name; else "".
    by_requirements : tuple of (verdict, reason, worst, doubt)
        The same, were the point known to be stable: what a proof of stability leaves.
    """

    verdict: NDArray[np.int64]
    reason: NDArray[np.object_]
    worst: NDArray[np.int64]
    missed: NDArray[np.bool_]
    value: Floats
    shortfall: Floats
    doubt: NDArray[np.object_]
    by_requirements: tuple[
        NDArray[np.int64], NDArray[np.object_], NDArray[np.int64], NDArray[np.object_]
    ]


def quantity_range(quantity: str, modes: Modes) -> tuple[Floats, Floats, Floats]:
    """Value of a quantity at poles, and the range it has while they stay within their radii.

    Parameters
    ----------
    quantity : str
        One of `ssaudit.criteria.MODE_QUANTITIES`.
    modes : Modes
        The poles and their radii.

    Returns
    -------
    value, low, high : (points, n) float

    Examples
    --------
    >>> quantity_range("real", Modes(np.array([[-2 + 1j]]), np.array([[0.5]])))
    (array([[-2.]]), array([[-2.5]]), array([[-1.5]]))
    """
    s, radius = modes.s, modes.radius
    if quantity == "damping_ratio":
        least, most = damping_ratio_radius(s, radius)
        return damping_ratio(s), np.maximum(least, _sampled_damping(modes)), most
    if quantity == "natural_frequency":
        size = natural_frequency(s)
        with np.errstate(invalid="ignore"):
            return size, np.fmax(size - radius, _sampled_frequency(modes)), size + radius
    low, high = modes.real_range()
    if quantity == "real":
        return s.real, low, high
    # -1/x rises with x on either side of 0; a pole that may lie on both has any time constant.
    across = (low < 0) & (high >= 0)
    return (
        time_constant(s),
        np.where(across, -np.inf, time_constant(low.astype(np.complex128))),
        np.where(across, np.inf, time_constant(high.astype(np.complex128))),
    )


def _sampled_frequency(modes: Modes) -> Floats | float:
    """Least natural frequency by the distance from the axis, where z may be 0 and log(z) anything.

    0 for continuous models, whose radii say enough.
    """
    return np.maximum(-modes.real_range()[1], 0.0) if modes.dt else 0.0


def _sampled_damping(modes: Modes) -> Floats | float:
    """Least damping ratio where z may be 0: no imaginary part of log(z)/dt exceeds pi/dt.

    -1 for continuous models, whose radii say enough.
    """
    if not modes.dt:
        return -1.0
    decay = _sampled_frequency(modes)
    with np.errstate(invalid="ignore"):
        ratio = decay / np.hypot(decay, np.pi / modes.dt)
    return np.where(decay == 0, -1.0, np.where(np.isinf(decay), 1.0, ratio))


def judge(
    modes: Modes,
    points: Points,
    void: NDArray[np.object_],
    criteria: Criteria,
    distances: "Distances | None" = None,
) -> Judgement:
    """Judge some points by criteria.

    Parameters
    ----------
    modes : Modes
        Their modes.
    points : Points
        Their coordinates and tags.
    void : (points,) object
        Why a point could not be judged; "" where it can.
    criteria : Criteria
        What to judge by.
    distances : Distances, optional
        Their distance to trouble, where the criteria ask for it.

    Returns
    -------
    Judgement
    """
    count, size = modes.s.shape[0], len(criteria.requirements)
    verdict = np.full(count, OK)
    reason, about = np.full(count, "", dtype=object), np.full(count, "", dtype=object)
    worst = _furthest_right(modes.s.real)
    missed = np.zeros((count, size), dtype=bool)
    value, shortfall = np.full((count, size), np.nan), np.full((count, size), -np.inf)
    deepest = np.full(count, -np.inf)
    for column, requirement in enumerate(criteria.requirements):
        inside = requirement.applies(points)
        if requirement.of_modes:
            result = _judge_requirement(requirement, modes, inside)
        elif distances is not None:
            result = _judge_distance(requirement, distances, inside, worst)
        else:
            continue
        missed[:, column] = result.missed
        value[:, column], shortfall[:, column] = result.value, result.shortfall
        doubtful = result.doubt & (verdict != SHORT) & (verdict != DOUBT)
        verdict[doubtful], about[doubtful] = DOUBT, requirement.name
        reason[doubtful] = _doubt_reasons(requirement, result, doubtful)
        deeper = result.missed & (result.shortfall > deepest)
        verdict[deeper], about[deeper] = SHORT, ""
        reason[deeper] = _short_reasons(requirement, result.value[deeper])
        worst[deeper] = result.mode[deeper]
        deepest[deeper] = result.shortfall[deeper]
    by_requirements = verdict.copy(), reason.copy(), worst.copy(), about.copy()
    unsure = _judge_stability(modes, verdict, reason, worst)
    about[verdict == LOST], about[unsure] = "", STABILITY
    is_void = void != ""
    verdict[is_void], reason[is_void], worst[is_void] = VOID, void[is_void], -1
    missed[is_void], about[is_void] = False, ""
    return Judgement(verdict, reason, worst, missed, value, shortfall, about, by_requirements)


def _furthest_right(real: Floats) -> NDArray[np.int64]:
    if real.shape[1] == 0:
        return np.full(len(real), -1)
    return np.asarray(np.argmax(np.where(np.isnan(real), -np.inf, real), axis=1))


def _judge_stability(
    modes: Modes,
    verdict: NDArray[np.int64],
    reason: NDArray[np.object_],
    worst: NDArray[np.int64],
) -> NDArray[np.bool_]:
    """Overrule verdicts where a pole is not surely to the left of the axis; say where in doubt."""
    low, high = modes.real_range()
    surely, maybe = low >= 0, high >= 0
    lost = surely.any(axis=1)
    doubt = maybe.any(axis=1) & ~lost
    worst[lost] = _furthest_right(modes.s.real)[lost]
    # In doubt it is the pole that may be furthest to the right; of a pair, the first.
    worst[doubt] = _furthest_right(np.where(modes.s.imag < 0, -np.inf, high))[doubt]
    verdict[lost], verdict[doubt] = LOST, DOUBT
    beyond = surely[lost] & (modes.s.real[lost] > 0)
    reason[lost] = _lost_reasons(beyond.sum(axis=1), modes.z is not None)
    rows = np.flatnonzero(doubt)
    at = modes.s.real[rows, worst[rows]]
    off = modes.radius[rows, worst[rows]]
    reason[rows] = _join(
        "stability: real part ", "%.3g", at, " ± ", "%.2g", _up(off), " 1/s reaches 0"
    )
    return np.asarray(doubt)


def _lost_reasons(counts: NDArray[np.int64], sampled: bool) -> NDArray[np.object_]:
    place = "outside the unit circle" if sampled else "right of the axis"
    kinds = [
        f"not stable: {k} pole{'s' * (k > 1)} {place}" for k in range(counts.max(initial=0) + 1)
    ]
    kinds[0] = ON_CIRCLE if sampled else ON_AXIS
    return np.asarray(np.array(kinds, dtype=object)[counts])


@dataclass(frozen=True, eq=False)
class _Result:
    """One requirement at some points: (points,) arrays."""

    missed: NDArray[np.bool_]
    doubt: NDArray[np.bool_]
    value: Floats
    spread: Floats
    shortfall: Floats
    mode: NDArray[np.int64]


def _judge_requirement(
    requirement: Requirement, modes: Modes, inside: NDArray[np.bool_]
) -> _Result:
    value, low, high = quantity_range(requirement.quantity, modes)
    known = ~np.isnan(modes.s.real) & ~np.isnan(value) & inside[:, np.newaxis]
    surely, maybe = _within(requirement, modes)
    shortfall = _shortfall(requirement, value, value)
    missed = known & surely & (_shortfall(requirement, high, low) > 0)
    doubt = known & maybe & (_shortfall(requirement, low, high) > 0) & ~missed
    shortfall = np.where(known & maybe, shortfall, -np.inf)
    # A mode that surely misses outranks all, and one in doubt those that pass, by however little.
    deciding = np.where(missed.any(axis=1, keepdims=True), missed, doubt)
    passes_over = deciding.any(axis=1, keepdims=True) & ~deciding
    order = np.where(passes_over, -np.inf, np.fmax(shortfall, np.finfo(float).min))
    if not order.shape[1]:
        nothing = np.full(len(inside), np.nan)
        no = np.zeros(len(inside), dtype=bool)
        return _Result(no, no, nothing, nothing, nothing, np.full(len(inside), -1))
    mode = np.argmax(order, axis=1)
    rows = np.arange(len(inside))
    applied = (known & maybe).any(axis=1)
    with np.errstate(invalid="ignore"):
        spread = np.fmax(high - value, value - low)
    any_missed, any_doubt = np.any(missed, axis=1), np.any(doubt, axis=1)
    return _Result(
        np.asarray(any_missed),
        np.asarray(any_doubt & ~any_missed),
        np.where(applied, value[rows, mode], np.nan),
        spread[rows, mode],
        shortfall[rows, mode],
        mode,
    )


def _judge_distance(
    requirement: Requirement,
    distances: "Distances",
    inside: NDArray[np.bool_],
    mode: NDArray[np.int64],
) -> _Result:
    """Judge a quantity of whole points: not defined where they are not stable anyway."""
    value = distances.quantities[requirement.quantity]
    known = ~np.isnan(value) & inside
    spread = np.where(np.isfinite(value), DISTANCE_TOLERANCE * np.abs(value), 0.0)
    missed = known & (_shortfall(requirement, value + spread, value - spread) > 0)
    doubt = known & ~missed & (_shortfall(requirement, value - spread, value + spread) > 0)
    doubt |= distances.unknown[requirement.quantity] & inside
    shortfall = np.where(known, _shortfall(requirement, value, value), -np.inf)
    return _Result(missed, doubt, np.where(inside, value, np.nan), spread, shortfall, mode)


def _within(requirement: Requirement, modes: Modes) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Modes that surely, and that perhaps, lie in the requirement's range of frequencies."""
    if requirement.frequency is None:
        everywhere = np.ones(modes.s.shape, dtype=bool)
        return everywhere, everywhere
    bottom, top = requirement.frequency
    _, low, high = quantity_range("natural_frequency", modes)
    with np.errstate(invalid="ignore"):
        return (low >= bottom) & (high <= top), (high >= bottom) & (low <= top)


def _shortfall(requirement: Requirement, for_least: Floats, for_most: Floats) -> Floats:
    """How far beyond its limits a value lies, as a share of the limit (of 1, for a limit of 0)."""
    worst = np.full(for_least.shape, -np.inf)
    with np.errstate(invalid="ignore"):
        if requirement.at_least is not None:
            gap = requirement.at_least - for_least
            worst = np.maximum(worst, gap / (abs(requirement.at_least) or 1.0))
        if requirement.at_most is not None:
            gap = for_most - requirement.at_most
            worst = np.maximum(worst, gap / (abs(requirement.at_most) or 1.0))
    return worst


def _short_reasons(requirement: Requirement, value: Floats) -> NDArray[np.object_]:
    """Say by how much a requirement is missed, such as "damping_ratio 0.21, 0.03 below 0.24"."""
    head = f"{requirement.name}: {requirement.quantity} "
    unit = f" {requirement.unit}".rstrip()
    least = -np.inf if requirement.at_least is None else requirement.at_least
    most = np.inf if requirement.at_most is None else requirement.at_most
    short = value < least
    texts = np.empty(len(value), dtype=object)
    for rows, gap, word, limit in (
        (short, least - value, "below", least),
        (~short, value - most, "above", most),
    ):
        tail = f" {word} {limit:g}"
        texts[rows] = _join(head, "%.3g", value[rows], f"{unit}, ", "%.2g", gap[rows], tail)
    return texts


def _doubt_reasons(
    requirement: Requirement, result: _Result, rows: NDArray[np.bool_]
) -> NDArray[np.object_]:
    head = f"{requirement.name}: {requirement.quantity} "
    tail = f" {requirement.unit}".rstrip() + f" against {requirement.limits}"
    texts = _join(head, "%.4g", result.value[rows], " ± ", "%.2g", _up(result.spread[rows]), tail)
    texts[np.isnan(result.value[rows])] = f"{head}is not decided by the numbers"
    return texts


def _up(spread: Floats) -> Floats:
    """Round up to two significant digits, so that what is shown still reaches the limit."""
    with np.errstate(all="ignore"):
        unit = 10.0 ** (np.floor(np.log10(spread)) - 1)
        rounded = np.ceil(spread / unit * (1 - 1e-12)) * unit
    return np.asarray(np.where(np.isfinite(rounded) & (spread > 0), rounded, spread))


def _join(*parts: str | Floats) -> NDArray[np.object_]:
    """Join texts and formatted numbers to one text a point; a format stands before its numbers."""
    text: Any = ""
    pattern = ""
    for part in parts:
        if isinstance(part, str):
            if part.startswith("%"):
                pattern = part
            else:
                text = text + part
        else:
            text = text + np.char.mod(pattern, part).astype(object)
    return np.asarray(text, dtype=object)


def missed_names(
    missed: NDArray[np.bool_], lost: NDArray[np.bool_], criteria: Criteria
) -> NDArray[np.object_]:
    """Names of what each point misses, joined by "; ".

    Parameters
    ----------
    missed : (points, requirements) bool
        Which requirements are missed.
    lost : (points,) bool
        Where stability is.
    criteria : Criteria
        Their names.

    Returns
    -------
    (points,) object
    """
    every = np.column_stack([lost, missed])
    names = [STABILITY, *(requirement.name for requirement in criteria.requirements)]
    kinds, inverse = distinct_rows(every)
    texts = np.empty(len(kinds), dtype=object)
    texts[:] = ["; ".join(n for n, yes in zip(names, kind, strict=True) if yes) for kind in kinds]
    return np.asarray(texts[inverse], dtype=object)
