"""The loop: sign, feed and gains, matched by name to the models that it closes."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import Matrices, ModelBank, Points, Section
from ssaudit.errors import LoopError
from ssaudit.loop.assembly import (
    OpenLoop,
    Sampling,
    insert_parts,
    sample,
    with_controller_states,
)
from ssaudit.loop.closing import ClosedModels, close_output_feedback, close_state_feedback
from ssaudit.loop.fitting import find_misfit
from ssaudit.loop.gains import Gain, arrange
from ssaudit.loop.parts import EVERY, Part, chain
from ssaudit.loop.uncertainty import Uncertain, stated_errors
from ssaudit.modes.entry_errors import rounding_error
from ssaudit.settings import nearest

Floats = NDArray[np.float64]
SIGNS = {"negative": -1, "positive": 1}
FEEDS = ("states", "outputs", "none")


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
    parts : tuple of Part
        Parts before the inputs and behind the signals, each side in the order of the signal flow.
    compensator : tuple of str
        Names of the states of a dynamic compensator. The gains then have a row more a state, for
        its derivative (its next value, when sampled), and a column more, for the state itself.
    sampling : Sampling, optional
        The computer that closes the loop of continuous models.

    Raises
    ------
    LoopError
        When these contradict each other.

    Examples
    --------
    >>> from ssaudit.bank_arrays import build_bank
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
    parts: tuple[Part, ...] = ()
    compensator: tuple[str, ...] = ()
    sampling: Sampling | None = None

    def __post_init__(self) -> None:
        if self.feed not in FEEDS:
            raise LoopError(f"feed is {self.feed!r}", where=self.name, do=nearest(self.feed, FEEDS))
        if self.feed == "none":
            if self.gain is not None or self.parts or self.compensator or self.sampling:
                raise LoopError('feed = "none" takes no gain and no parts', where=self.name)
            return
        if self.sign not in SIGNS:
            raise LoopError(
                f"sign is {self.sign!r}",
                where=self.name,
                do='say "negative" for u = -K y or "positive" for u = +K y',
            )
        if self.gain is None:
            raise LoopError("gain is missing", where=self.name)
        names = [part.name for part in self.parts]
        for name in names:
            if names.count(name) > 1:
                raise LoopError(f"two parts are named {name!r}", where=self.name)

    @property
    def description(self) -> dict[str, Any]:
        """Content for digests and provenance."""
        return {
            "sign": self.sign,
            "feed": self.feed,
            "gain": self.gain.description if self.gain else None,
            "uncertain": [statement.description for statement in self.uncertain],
            "parts": [part.description for part in self.parts],
            "compensator": list(self.compensator),
            "sampling": vars(self.sampling) if self.sampling else None,
        }

    @property
    def formula(self) -> str:
        """How the loop is closed, as an engineer writes it."""
        if self.feed == "none":
            return "models as exported (closed already)"
        text = f"u = {'-' if self.sign == 'negative' else '+'}K {self.feed}"
        if self.compensator:
            plural = "s" * (len(self.compensator) > 1)
            text += f", compensator of {len(self.compensator)} state{plural}"
        if self.parts:
            text += f", {len(self.parts)} part{'s' * (len(self.parts) > 1)}"
            text += " (delays as Padé models)" * any(part.delay for part in self.parts)
        if self.sampling:
            text += f", sampled every {self.sampling.dt:g} s, {self.sampling.late} late"
        return text

    @property
    def plain(self) -> bool:
        """Whether gains alone close the plant alone."""
        return not (self.parts or self.compensator or self.sampling)

    def signals(self, section: Section) -> tuple[str, ...]:
        """Names of what is fed back."""
        return section.states if self.feed == "states" else section.outputs

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
        reason = "" if not n else find_misfit(self, section)
        if reason:
            void[void == ""] = reason
        usable = void == ""
        if not usable.any() or self.gain is None:
            closed = np.where(usable[:, np.newaxis, np.newaxis], matrices["A"], 0.0)
            nothing = np.zeros(count, bool)
            return ClosedModels(closed, void, nothing, states=section.states, dt=section.dt)
        gains = self.gain.at(points.coordinates, count)
        void = np.where(usable, gains.refused, void)
        rows = (*section.inputs, *self.compensator)
        K = arrange(gains.K, self.gain, rows, (*self.signals(section), *self.compensator))
        # Void points may hold NaN or infinity, and finite ones may overflow; both are void.
        with np.errstate(all="ignore"):
            opened = None if self.plain else self.open(section, matrices)
            if self.compensator and SIGNS[self.sign] < 0:
                # The sign is that of the commands; the compensator's own states keep theirs.
                K = K.copy()
                K[:, len(section.inputs) :] *= -1
            closed, ill_posed = self._closed(matrices, K, opened)
        void[ill_posed & (void == "")] = "algebraic loop is ill-posed: I - sign K D is singular"
        overflowed = ~np.isfinite(closed).all(axis=(1, 2)) & (void == "")
        void[overflowed] = "the closed model is not finite: its entries overflow"
        closed[void != ""] = 0.0
        states = section.states if opened is None else opened.states
        dt = section.dt if opened is None else opened.dt
        return ClosedModels(closed, void, gains.held & (void == ""), K, opened, states, dt)

    def open(self, section: Section, matrices: Matrices) -> OpenLoop:
        """Assemble what the gains close: plant, parts, sampling, compensator.

        Parameters
        ----------
        section : Section
            Names of the section.
        matrices : dict of (points, rows, columns) float
            Matrices of some points.

        Returns
        -------
        OpenLoop
        """
        return self._assembled(self._plant(section, matrices), section, self.parts)

    def open_without_delay(
        self, section: Section, matrices: Matrices, side: str, channel: int
    ) -> tuple[OpenLoop, float]:
        """Assemble what the gains close, but for the delay of one channel.

        Parameters
        ----------
        section : Section
            Names of the section.
        matrices : dict of (points, rows, columns) float
            Matrices of some points.
        side : str
            "input" or "signal".
        channel : int
            Number of the channel.

        Returns
        -------
        opened : OpenLoop
            With Padé models for the delays of all other channels.
        delay : float
            The channel's own delay [s]; 0 for sampled loops, in which it stays a part.
        """
        plant = self._plant(section, matrices)
        names = section.inputs if side == "input" else self.signals(section)
        late = float(chain(self.parts, names, side).delays[channel])
        if not late or self.sampling is not None:
            return self._assembled(plant, section, self.parts), 0.0
        kept = []
        for part in self.parts:
            place = getattr(part, side)
            if not part.delay or place not in (names[channel], EVERY):
                kept.append(part)
            elif place == EVERY:
                others = [name for i, name in enumerate(names) if i != channel]
                kept += [part.moved(side, name) for name in others]
        return self._assembled(plant, section, kept), late

    def _plant(self, section: Section, matrices: Matrices) -> OpenLoop:
        """Models from inputs to signals, with what is known of their errors."""
        A, B = matrices["A"], matrices["B"]
        given = {"A": A, "B": B}
        if self.feed == "states":
            C = np.broadcast_to(np.eye(A.shape[1]), A.shape)
            D = np.zeros((len(A), A.shape[1], B.shape[2]))
        else:
            C, D = matrices["C"], matrices["D"]
            given |= {"C": C, "D": D}
        errors = self.errors(section, given, None)
        if section.digits is not None:
            for name, M in given.items():
                errors[name] = errors.get(name, 0.0) + rounding_error(M, section.digits)
        return OpenLoop(A, B, C, D, errors, section.states, section.dt)

    def _assembled(self, plant: OpenLoop, section: Section, parts: Sequence[Part]) -> OpenLoop:
        at_inputs = chain(parts, section.inputs, "input")
        at_signals = chain(parts, self.signals(section), "signal")
        opened = plant
        if not (at_inputs.trivial and at_signals.trivial):
            opened = insert_parts(opened, at_inputs, at_signals)
        if self.sampling is not None:
            opened = sample(opened, self.sampling.dt, self.sampling.late)
        return with_controller_states(opened, self.compensator)

    def _closed(
        self, matrices: Matrices, K: Floats, opened: OpenLoop | None
    ) -> tuple[Floats, NDArray[np.bool_]]:
        sign = SIGNS[self.sign]
        if opened is not None:
            A, B, C, D = opened.A, opened.B, opened.C, opened.D
        elif self.feed == "states":
            A = matrices["A"]
            return close_state_feedback(A, matrices["B"], K, sign), np.zeros(len(A), dtype=bool)
        else:
            A, B, C, D = (matrices[name] for name in "ABCD")
        finite = np.isfinite(D).all(axis=(1, 2), keepdims=True)
        return close_output_feedback(A, B, C, np.where(finite, D, 0.0), K, sign)

    def channels(self, section: Section) -> tuple[list[int], list[int]]:
        """Numbers of the inputs that some gain drives, and of the signals that some gain uses.

        A compensator's own states are not among them.

        Parameters
        ----------
        section : Section
            Names of the section.

        Returns
        -------
        inputs, signals : list of int
        """
        if self.gain is None:
            return [], []
        signals = self.signals(section)
        names = (*section.inputs, *self.compensator), (*signals, *self.compensator)
        largest = arrange(self.gain.largest[np.newaxis], self.gain, *names)[0]
        used = [np.flatnonzero(largest.max(axis=axis, initial=0.0) > 0) for axis in (1, 0)]
        return (
            [int(i) for i in used[0] if i < len(section.inputs)],
            [int(i) for i in used[1] if i < len(signals)],
        )

    def errors(self, section: Section, matrices: Matrices, K: Floats | None) -> dict[str, Floats]:
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
        with_gains: Mapping[str, Floats] = matrices if K is None else {**matrices, "K": K}
        return stated_errors(self.uncertain, section, self.signals(section), with_gains)

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
        misfits = [find_misfit(self, section) for section in bank.sections if section.states]
        if all(misfits):
            raise LoopError(misfits[0] if misfits else "no model to close", where=self.name)
