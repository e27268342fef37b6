"""Criteria: the requirements to judge by, each with where and to what it applies."""

import os
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import ModelBank, Points
from ssaudit.errors import CriteriaError
from ssaudit.settings import (
    check_keys,
    is_finite_number,
    nearest,
    read_toml,
    shown,
    take,
    take_words,
)

# What can be required of a mode: its unit, for messages.
MODE_QUANTITIES = {
    "real": "1/s",
    "damping_ratio": "",
    "natural_frequency": "rad/s",
    "time_constant": "s",
}
# What can be required of a point, at depth margins: the worst of its loops, or of the whole.
POINT_QUANTITIES = {
    "gain_margin_db": "dB",
    "phase_margin_deg": "deg",
    "delay_margin_s": "s",
    "peak_sensitivity": "",
    "peak_complementary": "",
    "disk_margin": "",
    "disk_margin_input": "",
    "disk_margin_output": "",
    "disk_margin_both": "",
    "gain_factor_low": "",
    "gain_factor_high": "",
    "stability_radius": "1/s",
    "stability_radius_scaled": "1/s",
    "real_stability_radius": "1/s",
    "real_stability_radius_scaled": "1/s",
}
QUANTITIES = {**MODE_QUANTITIES, **POINT_QUANTITIES}
STABILITY = "stability"
# What a point may be in doubt about, besides requirements.
CROSS_CHECK = "cross-check"
DOUBT_COUNTS_AS = ("not ok", "ok")
Place = tuple[Any, ...]


@dataclass(frozen=True)
class Requirement:
    """One requirement on every mode, or on every mode in a range of frequencies.

    Parameters
    ----------
    name : str
        What the engineer calls it.
    quantity : str
        One of `QUANTITIES`.
    at_least, at_most : float, optional
        Limits that still pass, in the quantity's unit; at least one of them.
    frequency : (low, high), optional
        Natural frequencies [rad/s] of the modes that it applies to; all when absent.
    where : dict, optional
        Coordinates within (low, high), tags that equal one of some words; everywhere when absent.

    Raises
    ------
    CriteriaError
        When these contradict each other.

    Examples
    --------
    >>> Requirement("ride damping", "damping_ratio", at_least=0.2, frequency=(0.5, 12.0)).limits
    '≥ 0.2'
    """

    name: str
    quantity: str
    at_least: float | None = None
    at_most: float | None = None
    frequency: tuple[float, float] | None = None
    where: Mapping[str, Place] = field(default_factory=dict)

    def __post_init__(self) -> None:
        # The ledger joins names by "; ".
        if not self.name or self.name in (STABILITY, CROSS_CHECK) or "; " in self.name:
            raise CriteriaError(f"a requirement cannot be named {self.name!r}")
        if self.quantity not in QUANTITIES:
            raise CriteriaError(
                f"unknown quantity {self.quantity!r}", do=nearest(self.quantity, QUANTITIES)
            )
        if self.frequency is not None and not self.of_modes:
            raise CriteriaError(f"frequency is for modes, and {self.quantity} is of a whole point")
        if self.at_least is None and self.at_most is None:
            raise CriteriaError("neither at_least nor at_most is given")
        if self.at_least is not None and self.at_most is not None and self.at_least > self.at_most:
            raise CriteriaError(f"at_least {self.at_least:g} is above at_most {self.at_most:g}")
        spans = [("frequency", self.frequency), *self.where.items()]
        for key, span in spans:
            if span and not isinstance(span[0], str) and span[0] > span[1]:
                raise CriteriaError(f"{key} runs from {span[0]} down to {span[1]}")

    @property
    def unit(self) -> str:
        """Unit of the limits."""
        return QUANTITIES[self.quantity]

    @property
    def of_modes(self) -> bool:
        """Whether it is about every mode, and not about the point as a whole."""
        return self.quantity in MODE_QUANTITIES

    @property
    def limits(self) -> str:
        """The limits as they are written."""
        parts = [
            f"{word} {limit:g}"
            for word, limit in (("≥", self.at_least), ("≤", self.at_most))
            if limit is not None
        ]
        return " and ".join(parts)

    @property
    def description(self) -> dict[str, Any]:
        """Content for digests and provenance."""
        return {
            "name": self.name,
            "quantity": self.quantity,
            "at_least": self.at_least,
            "at_most": self.at_most,
            "frequency": _plain(self.frequency) if self.frequency else None,
            "where": {key: _plain(place) for key, place in sorted(self.where.items())},
        }

    def applies(self, points: Points) -> NDArray[np.bool_]:
        """At which points the requirement applies.

        Parameters
        ----------
        points : Points
            The points.

        Returns
        -------
        (points,) bool
        """
        inside = np.ones(len(points), dtype=bool)
        for key, place in self.where.items():
            if key in points.coordinates:
                low, high = place
                column = points.coordinates[key]
                inside &= (column >= low) & (column <= high)
            else:
                inside &= np.isin(points.tags[key], list(place))
        return inside


@dataclass(frozen=True)
class Criteria:
    """All that the points are judged by; stability is always required.

    Parameters
    ----------
    requirements : tuple of Requirement
        In the order in which they are reported.
    neutral : tuple of str
        States that may be neutral (a heading, a position): where nothing depends on such a state,
        its pole at the origin is exempt.
    name : str
        File name, for messages.
    doubt : str
        Whether doubt about a requirement counts as "ok" or as "not ok" for the exit code. Doubt
        about stability never counts as ok.

    Raises
    ------
    CriteriaError
        When two requirements have one name.
    """

    requirements: tuple[Requirement, ...] = ()
    neutral: tuple[str, ...] = ()
    name: str = "criteria"
    doubt: str = "not ok"

    def __post_init__(self) -> None:
        if self.doubt not in DOUBT_COUNTS_AS:
            raise CriteriaError(
                f"doubt is {self.doubt!r}",
                where=self.name,
                do='say whether doubt about a requirement counts as "ok" or as "not ok"',
            )
        names = [requirement.name for requirement in self.requirements]
        for name in names:
            if names.count(name) > 1:
                raise CriteriaError(f"two requirements are named {name!r}", where=self.name)

    @property
    def description(self) -> dict[str, Any]:
        """Content for digests and provenance."""
        return {
            "require": [requirement.description for requirement in self.requirements],
            "neutral": sorted(self.neutral),
            "doubt": self.doubt,
        }

    def check(self, bank: ModelBank, depth: str = "margins") -> None:
        """Check that what the criteria name exists in a bank, and is found at a depth.

        Parameters
        ----------
        bank : ModelBank
            The bank.
        depth : str
            Depth of the audit.

        Raises
        ------
        CriteriaError
            Naming the nearest word that would do.
        """
        states = dict.fromkeys(name for section in bank.sections for name in section.states)
        for name in self.neutral:
            if name not in states:
                raise CriteriaError(
                    f"neutral names no state of {bank.name}: {name!r}",
                    where=self.name,
                    do=nearest(name, states),
                )
        columns = {**dict.fromkeys(bank.points.coordinates, "range"),
                   **dict.fromkeys(bank.points.tags, "words")}  # fmt: skip
        for requirement in self.requirements:
            where = f"{self.name}, {requirement.name!r}"
            if not requirement.of_modes and depth != "margins":
                raise CriteriaError(
                    f"{requirement.quantity} is not found at depth {depth}",
                    where=where,
                    do="audit with --depth margins",
                )
            for key, place in requirement.where.items():
                if key not in columns:
                    raise CriteriaError(
                        f"where names no coordinate or tag of {bank.name}: {key!r}",
                        where=where,
                        do=nearest(key, columns),
                    )
                if (columns[key] == "words") != isinstance(place[0], str):
                    raise CriteriaError(
                        f"{key} takes a range [low, high]"
                        if columns[key] == "range"
                        else f"{key} is a tag and takes a word, or a list of words",
                        where=where,
                    )


def _plain(place: Place) -> list[Any]:
    """Ranges and words for JSON, which knows no infinity: its name in its place."""
    return [v if isinstance(v, str) or np.isfinite(v) else str(v) for v in place]


def read_criteria(path: str | os.PathLike[str]) -> Criteria:
    """Read a criteria file.

    Parameters
    ----------
    path : path
        A TOML file of ``[[require]]`` tables, and ``neutral = [...]`` where needed.

    Returns
    -------
    Criteria

    Raises
    ------
    CriteriaError
        Naming the file, the requirement and the way out.
    """
    where = str(path)
    about = read_toml(path, CriteriaError)
    check_keys(about, ("require", "neutral", "doubt"), where=where, error=CriteriaError)
    neutral = take_words(about, "neutral", where=where, error=CriteriaError) or ()
    tables = take(about, "require", list, where=where, error=CriteriaError, default=[])
    requirements = tuple(_read_requirement(table, i, where) for i, table in enumerate(tables, 1))
    doubt = take(about, "doubt", str, where=where, error=CriteriaError, default="not ok")
    return Criteria(requirements, neutral, where, doubt)


def _read_requirement(table: Any, number: int, file: str) -> Requirement:
    where = f"{file}, [[require]] {number}"
    if not isinstance(table, dict):
        raise CriteriaError("is not a table", where=where)
    valid = ("name", "quantity", "at_least", "at_most", "frequency", "where")
    check_keys(table, valid, where=where, error=CriteriaError)

    def number_at(key: str) -> float | None:
        value: float | None = take(table, key, float, where=where, error=CriteriaError)
        return value

    def text_at(key: str) -> str:
        return str(take(table, key, str, where=where, error=CriteriaError, required=True))

    places = take(table, "where", dict, where=where, error=CriteriaError, default={})
    frequency = None
    if "frequency" in table:
        frequency = _read_range(table["frequency"], "frequency", where)
    try:
        return Requirement(
            text_at("name"),
            text_at("quantity"),
            number_at("at_least"),
            number_at("at_most"),
            frequency,
            {key: _read_place(place, key, where) for key, place in places.items()},
        )
    except CriteriaError as error:
        raise CriteriaError(error.what, where=error.where or where, do=error.do) from error


def _read_place(place: Any, key: str, where: str) -> Place:
    words = [place] if isinstance(place, str) else place
    if isinstance(words, list) and words and all(isinstance(word, str) for word in words):
        return tuple(words)
    return _read_range(place, key, where)


def _read_range(value: Any, key: str, where: str) -> tuple[float, float]:
    # An open end is infinite; NaN is no end.
    ends = isinstance(value, list) and len(value) == 2
    if not ends or not all(is_finite_number(v) or v in (np.inf, -np.inf) for v in value):
        raise CriteriaError(f"{key} is {shown(value)}, not a range [low, high]", where=where)
    return float(value[0]), float(value[1])
