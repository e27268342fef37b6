"""The loop: sign, feed and gains, matched by name to the models that it closes."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import Matrices, ModelBank, Points, Section
from ssaudit.errors import LoopError
from ssaudit.loop.closing import close_output_feedback, close_state_feedback
from ssaudit.loop.gains import Gain
from ssaudit.loop.uncertainty import Uncertain, misfit_of, stated_errors
from ssaudit.settings import nearest

SIGNS = {"negative": -1, "positive": 1}
FEEDS = ("states", "outputs", "none")
NEEDED = {"states": ("A", "B"), "outputs": ("A", "B", "C", "D"), "none": ("A",)}


@dataclass(frozen=True, eq=False)
class ClosedModels:
    """Closed-loop models of some points.

    Attributes
    ----------
    A : (points, n, n) float
        Closed-loop state matrices; zero where a point is void.
    void : (points,) object
        Why a point could not be closed or used, as str; "" where it was.
    held : (points,) bool
        Where the gain table's edge value was held.
    K : (points or 1, inputs, signals) float or None
        Gains in the section's order; None for models that come closed.
    """

    A: NDArray[np.float64]
    void: NDArray[np.object_]
    held: NDArray[np.bool_]
    K: NDArray[np.float64] | None = None


@dataclass(frozen=True, eq=False)
class Loop:
    """How the models are closed.

    Parameters
    ----------
    sign : str
        "negative" for u = -K y, "positive" for u = +K y. Never guessed.
    gain : ConstantGain or GainSchedule, optional
        The gains; none when the export is closed already.
    feed : str
        What is fed back: "states", "outputs", or "none" for models that come closed.
    name : str
        File name, for messages.
    uncertain : tuple of Uncertain
        How far entries of the matrices or gains may be off.

    Raises
    ------
    LoopError
        When these contradict each other.

    Examples
    --------
    >>> from ssaudit.bank import build_bank
    >>> from ssaudit.loop.gains import ConstantGain
    >>> bank = build_bank([[[1.0]]], [[[2.0]]], revision="A")
    >>> Loop("negative", ConstantGain([[3.0]])).close(bank.sections[0], bank.points,
    ...                                               bank.sections[0].read(0, 1)).A
    array([[[-5.]]])
    """

    sign: str
    gain: Gain | None = None
    feed: str = "states"
    name: str = "loop"
    uncertain: tuple[Uncertain, ...] = ()

    def __post_init__(self) -> None:
        if self.feed not in FEEDS:
            raise LoopError(f"feed is {self.feed!r}", where=self.name, do=nearest(self.feed, FEEDS))
        if self.feed == "none":
            if self.gain is not None:
                raise LoopError('feed = "none" takes no gain', where=self.name)
            return
        if self.sign not in SIGNS:
            raise LoopError(
                f"sign is {self.sign!r}",
                where=self.name,
                do='say "negative" for u = -K y or "positive" for u = +K y',
            )
        if self.gain is None:
            raise LoopError("gain is missing", where=self.name)

    @property
    def description(self) -> dict[str, Any]:
        """Content for digests and provenance."""
        return {
            "sign": self.sign,
            "feed": self.feed,
            "gain": self.gain.description if self.gain else None,
            "uncertain": [statement.description for statement in self.uncertain],
        }

    @property
    def formula(self) -> str:
        """How the loop is closed, as an engineer writes it."""
        if self.feed == "none":
            return "models as exported (closed already)"
        return f"u = {'-' if self.sign == 'negative' else '+'}K {self.feed}"

    def close(self, section: Section, points: Points, matrices: Matrices) -> ClosedModels:
        """Close the models of some points of a section.

        Parameters
        ----------
        section : Section
            Names of the section.
        points : Points
            The points; void ones are left out.
        matrices : dict of (points, rows, columns) float
            Their matrices.

        Returns
        -------
        ClosedModels
        """
        count, n = len(points), len(section.states)
        void = points.void.copy()
        reason = "" if not n else self.misfit(section)
        if reason:
            void[void == ""] = reason
        usable = void == ""
        if not usable.any() or self.gain is None:
            closed = np.where(usable[:, np.newaxis, np.newaxis], matrices["A"], 0.0)
            return ClosedModels(closed, void, np.zeros(count, bool))
        gains = self.gain.at(points.coordinates, count)
        void = np.where(usable, gains.refused, void)
        K = arrange(gains.K, self.gain, section.inputs, self._signals(section))
        closed, ill_posed = self._closed(matrices, K)
        void[ill_posed & (void == "")] = "algebraic loop is ill-posed: I - sign K D is singular"
        overflowed = ~np.isfinite(closed).all(axis=(1, 2)) & (void == "")
        void[overflowed] = "the closed model is not finite: its entries overflow"
        closed[void != ""] = 0.0
        return ClosedModels(closed, void, gains.held & (void == ""), K)

    def _closed(
        self, matrices: Matrices, K: NDArray[np.float64]
    ) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
        A, B, sign = matrices["A"], matrices["B"], SIGNS[self.sign]
        # Void points may hold NaN or infinity, and finite ones may overflow; both are void.
        with np.errstate(all="ignore"):
            if self.feed == "states":
                return close_state_feedback(A, B, K, sign), np.zeros(len(A), dtype=bool)
            finite = np.isfinite(matrices["D"]).all(axis=(1, 2), keepdims=True)
            D = np.where(finite, matrices["D"], 0.0)
            return close_output_feedback(A, B, matrices["C"], D, K, sign)

    def _signals(self, section: Section) -> tuple[str, ...]:
        return section.states if self.feed == "states" else section.outputs

    def misfit(self, section: Section) -> str:
        """Why a section cannot be closed, "" when it can."""
        missing = [name for name in NEEDED[self.feed] if name not in section.matrices]
        if missing:
            return f"{missing[0]} is missing, and feed = {self.feed!r} needs it"
        for statement in self.uncertain:
            misfit = misfit_of(statement, section, self._signals(section))
            if misfit:
                return misfit
        if self.gain is None:
            return ""
        for kind, named, valid, size in (
            ("input", self.gain.inputs, section.inputs, 0),
            (self.feed.removesuffix("s"), self.gain.signals, self._signals(section), 1),
        ):
            if named is None:
                found = self.gain.matrix.shape[size]  # type: ignore[union-attr]
                if found != len(valid):
                    return (
                        f"the gain matrix is for {found} {kind}s, the models have {len(valid)}: "
                        f"{', '.join(valid)}"
                    )
                continue
            for name in named:
                if name not in valid:
                    return f"the gain names {name!r}, no {kind} here: {nearest(name, valid)}"
            missing = [name for name in valid if name not in named]
            if missing and self.gain.unnamed == "refuse":
                return (
                    f"the gain does not name the {kind} {missing[0]!r}; name all of "
                    f'{", ".join(valid)}, or set unnamed = "zero" in [gain]'
                )
        return ""

    def errors(
        self, section: Section, matrices: Matrices, K: NDArray[np.float64] | None
    ) -> dict[str, NDArray[np.float64]]:
        """How far the entries of matrices and gains may be off, as the user states it.

        Parameters
        ----------
        section : Section
            Names of the section.
        matrices : dict of (points, rows, columns) float
            The matrices.
        K : (points or 1, inputs, signals) float or None
            The gains in the section's order.

        Returns
        -------
        dict of (points, rows, columns) float
            By matrix; empty when nothing is stated.
        """
        with_gains = dict(matrices) if K is None else {**matrices, "K": K}
        return stated_errors(self.uncertain, section, self._signals(section), with_gains)

    def check(self, bank: ModelBank) -> None:
        """Check that the loop fits a bank as a whole.

        Parameters
        ----------
        bank : ModelBank
            The bank.

        Raises
        ------
        LoopError
            When no section can be closed, or a variable of the schedule is no coordinate.
        """
        for variable in self.gain.variables if self.gain else ():
            if variable not in bank.points.coordinates:
                raise LoopError(
                    f"the schedule varies with {variable!r}, which {bank.name} does not have",
                    where=self.name,
                    do=nearest(variable, bank.points.coordinates),
                )
        misfits = [self.misfit(section) for section in bank.sections if section.states]
        if all(misfits):
            raise LoopError(misfits[0] if misfits else "no model to close", where=self.name)


def arrange(
    K: NDArray[np.float64], gain: Gain, inputs: Sequence[str], signals: Sequence[str]
) -> NDArray[np.float64]:
    """Put named gains in the order of a section; what they do not name gets no feedback.

    Parameters
    ----------
    K : (points, rows, columns) float
        Gains as the loop states them.
    gain : ConstantGain or GainSchedule
        Names of their rows and columns; None where they are the section's own.
    inputs, signals : sequence of str
        Names of the section's inputs and fed-back signals.

    Returns
    -------
    (points, inputs, signals) float
    """
    rows, columns = tuple(gain.inputs or inputs), tuple(gain.signals or signals)
    if (rows, columns) == (tuple(inputs), tuple(signals)):
        return K
    arranged = np.zeros((len(K), len(inputs), len(signals)))
    row_of = np.array([list(inputs).index(name) for name in rows])
    column_of = np.array([list(signals).index(name) for name in columns])
    arranged[:, row_of[:, np.newaxis], column_of] = K
    return arranged
