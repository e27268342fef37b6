"""Parts in the path between controller and plant: actuators, sensors, filters, delays."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from math import factorial
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ssaudit.errors import LoopError

Floats = NDArray[np.float64]
# Beyond this order the coefficients of a Padé model no longer fit double precision well.
MOST_PADE = 8
EVERY = "*"


@dataclass(frozen=True, eq=False)
class Part:
    """One continuous part in series with an input or a fed-back signal of the plant.

    Parameters
    ----------
    name : str
        Its name; its states are called ``<name>.1``, ``<name>.2`` …
    A, B, C, D : (n, n), (n, 1), (1, n), (1, 1) float
        State-space model, one input and one output [A in 1/s].
    input, signal : str
        The plant's input that it drives, or the signal that it passes on; "*" for every one.
    delay : float
        Delay [s] that the model stands for; 0 when it is no delay.

    Raises
    ------
    LoopError
        When the shapes disagree, or neither or both of input and signal are named.

    Examples
    --------
    >>> first_order(0.5).at("flap", input="flap_command").states
    ('flap.1',)
    """

    name: str
    A: Floats
    B: Floats
    C: Floats
    D: Floats
    input: str = ""
    signal: str = ""
    delay: float = 0.0

    def __post_init__(self) -> None:
        if not self.name:
            raise LoopError("a part has no name")
        if bool(self.input) == bool(self.signal):
            raise LoopError(f"part {self.name!r} needs either input or signal")

    @property
    def states(self) -> tuple[str, ...]:
        """Names of its states."""
        return tuple(f"{self.name}.{i + 1}" for i in range(len(self.A)))

    def moved(self, side: str, channel: str) -> "Part":
        """Return the copy of a part for every channel that one of them gets."""
        name = f"{self.name} {channel}"
        if side == "input":
            return replace(self, name=name, input=channel)
        return replace(self, name=name, signal=channel)

    @property
    def description(self) -> dict[str, Any]:
        """Content for digests and provenance."""
        matrices = {name: getattr(self, name).tolist() for name in "ABCD"}
        about = {"name": self.name, "input": self.input, "signal": self.signal}
        return {**about, "delay": self.delay, **matrices}


@dataclass(frozen=True, eq=False)
class Model:
    """State-space model of a part that has no place yet.

    Parameters
    ----------
    A, B, C, D : (n, n), (n, 1), (1, n), (1, 1) float
        One input and one output [A in 1/s].
    delay : float
        Delay [s] that it stands for.
    """

    A: Floats
    B: Floats
    C: Floats
    D: Floats
    delay: float = 0.0

    def at(self, name: str, *, input: str = "", signal: str = "") -> Part:
        """Put the model at an input or a signal of the plant, under a name."""
        return Part(name, self.A, self.B, self.C, self.D, input, signal, self.delay)


def from_state_space(A: ArrayLike, B: ArrayLike, C: ArrayLike, D: ArrayLike) -> Model:
    """Part given as a state-space model with one input and one output.

    Parameters
    ----------
    A, B, C, D : (n, n), (n, 1), (1, n), (1, 1) float
        Matrices; B and C may be given flat, D as a number.

    Returns
    -------
    Model

    Raises
    ------
    LoopError
        When shapes disagree or an entry is not finite.
    """
    state = np.atleast_2d(np.array(A, dtype=float))
    n = len(state)
    try:
        model = Model(
            state.reshape(n, n),
            np.array(B, dtype=float).reshape(n, 1),
            np.array(C, dtype=float).reshape(1, n),
            np.array(D, dtype=float).reshape(1, 1),
        )
    except ValueError as error:
        raise LoopError("A, B, C and D of a part do not fit one input and one output") from error
    if not all(np.isfinite(M).all() for M in (model.A, model.B, model.C, model.D)):
        raise LoopError("a part holds an entry that is not finite")
    return model


def from_fraction(numerator: Sequence[float], denominator: Sequence[float]) -> Model:
    """Part given as a fraction of polynomials in s.

    Parameters
    ----------
    numerator, denominator : sequence of float
        Coefficients, the highest power first.

    Returns
    -------
    Model
        In controllable form, time scaled so that its entries are of like size.

    Raises
    ------
    LoopError
        When the fraction is improper, or the denominator zero.

    References
    ----------
    Controllable canonical form: Kailath, Linear Systems (1980), ch. 2 (from memory).

    Examples
    --------
    >>> model = from_fraction([2.0], [0.5, 1.0])
    >>> model.A, model.C @ model.B
    (array([[-2.]]), array([[4.]]))
    """
    top, bottom = (np.trim_zeros(np.array(c, dtype=float), "f") for c in (numerator, denominator))
    if not len(bottom) or not (np.isfinite(bottom).all() and np.isfinite(top).all()):
        raise LoopError("the denominator of a part is zero, or a coefficient not finite")
    if len(top) > len(bottom):
        raise LoopError(
            "a part is improper: its numerator has a higher degree than its denominator"
        )
    n = len(bottom) - 1
    padded = np.concatenate([np.zeros(n + 1 - len(top)), top]) / bottom[0]
    monic = bottom / bottom[0]
    nonzero = np.flatnonzero(monic)[-1]
    scale = float(np.abs(monic[nonzero]) ** (1 / nonzero)) if nonzero else 1.0
    powers = scale ** np.arange(n + 1)
    D, rest = padded[0], (padded - padded[0] * monic)[1:]
    A = np.diag(np.ones(max(n - 1, 0)), -1)[:n, :n]
    if n:
        A[0] = -(monic / powers)[1:]
    # C b picks the coefficients; one factor of the scale belongs to the integration.
    C = (rest / powers[1:]) if n else rest
    B = np.eye(n, 1) * scale
    return from_state_space(scale * A, B, C, D) if n else _static(D)


def _static(gain: float) -> Model:
    return Model(np.zeros((0, 0)), np.zeros((0, 1)), np.zeros((1, 0)), np.full((1, 1), gain))


def first_order(time_constant: float) -> Model:
    """Lag 1/(T s + 1).

    Parameters
    ----------
    time_constant : float
        T [s], positive.

    Returns
    -------
    Model
    """
    _positive("a lag", time_constant)
    return from_fraction([1.0], [time_constant, 1.0])


def second_order(natural_frequency: float, damping_ratio: float) -> Model:
    """Lag ω²/(s² + 2 ζ ω s + ω²).

    Parameters
    ----------
    natural_frequency : float
        ω [rad/s], positive.
    damping_ratio : float
        ζ, positive.

    Returns
    -------
    Model
    """
    _positive("natural_frequency", natural_frequency)
    _positive("damping_ratio", damping_ratio)
    w, z = natural_frequency, damping_ratio
    return from_fraction([w * w], [1.0, 2 * z * w, w * w])


def notch(natural_frequency: float, damping_ratio: float, depth: float) -> Model:
    """Notch (s² + 2 d ζ ω s + ω²)/(s² + 2 ζ ω s + ω²), whose gain at ω is d.

    Parameters
    ----------
    natural_frequency : float
        ω [rad/s], positive.
    damping_ratio : float
        ζ of the denominator, positive: the width.
    depth : float
        d: gain at ω, 0 or more.

    Returns
    -------
    Model
    """
    _positive("natural_frequency", natural_frequency)
    _positive("damping_ratio", damping_ratio)
    if not 0 <= depth < np.inf:
        raise LoopError(f"depth is {depth:g}, not 0 or more")
    w, z = natural_frequency, damping_ratio
    return from_fraction([1.0, 2 * depth * z * w, w * w], [1.0, 2 * z * w, w * w])


def lead_lag(lead: float, lag: float) -> Model:
    """Section (T₁ s + 1)/(T₂ s + 1).

    Parameters
    ----------
    lead, lag : float
        T₁ and T₂ [s], T₂ positive.

    Returns
    -------
    Model
    """
    _positive("lag", lag)
    return from_fraction([lead, 1.0], [lag, 1.0])


def delay(seconds: float, pade: int) -> Model:
    """Transport delay, modelled by a Padé fraction for poles.

    Parameters
    ----------
    seconds : float
        The delay [s], 0 or more.
    pade : int
        Order of the model, 1 to 8. It is good up to frequencies of about pade/seconds [rad/s].

    Returns
    -------
    Model

    References
    ----------
    Diagonal Padé fractions of the exponential function: Golub & Van Loan, Matrix Computations,
    4th ed. (2013), §9.3 (from memory).

    Examples
    --------
    >>> model = delay(0.2, 1)
    >>> model.A, model.D
    (array([[-10.]]), array([[-1.]]))
    """
    if not 0 <= seconds < np.inf:
        raise LoopError(f"a delay of {seconds:g} s")
    if not 1 <= pade <= MOST_PADE:
        raise LoopError(f"pade is {pade}", do=f"choose an order from 1 to {MOST_PADE}")
    if seconds == 0:
        return _static(1.0)
    N = pade
    terms = [
        factorial(2 * N - k) * factorial(N) / (factorial(2 * N) * factorial(k) * factorial(N - k))
        for k in range(N, -1, -1)
    ]
    powers = [seconds**k for k in range(N, -1, -1)]
    bottom = [c * p for c, p in zip(terms, powers, strict=True)]
    top = [(-1) ** k * b for k, b in zip(range(N, -1, -1), bottom, strict=True)]
    model = from_fraction(top, bottom)
    return Model(model.A, model.B, model.C, model.D, float(seconds))


def _positive(what: str, value: float) -> None:
    if not 0 < value < np.inf:
        raise LoopError(f"{what} is {value:g}, not positive")


@dataclass(frozen=True, eq=False)
class Path:
    """All parts on one side of the plant, one channel a name: a block-diagonal model.

    Attributes
    ----------
    A, B, C, D : (n, n), (n, channels), (channels, n), (channels, channels) float
        From each channel to the same one.
    states : tuple of str
        Names of its states.
    delays : (channels,) float
        Total delay [s] of each channel, which A to D carry as Padé models.
    """

    A: Floats
    B: Floats
    C: Floats
    D: Floats
    states: tuple[str, ...]
    delays: Floats

    @property
    def trivial(self) -> bool:
        """Whether it passes everything on unchanged."""
        return not len(self.A) and bool((np.eye(len(self.D)) == self.D).all())


def chain(parts: Sequence[Part], channels: Sequence[str], side: str) -> Path:
    """Chain the parts of each channel, in the order stated.

    Parameters
    ----------
    parts : sequence of Part
        All parts.
    channels : sequence of str
        Names of the inputs or the signals.
    side : str
        "input" or "signal".

    Returns
    -------
    Path

    Examples
    --------
    >>> parts = [first_order(0.5).at("flap", input="a"), first_order(0.1).at("amp", input="a")]
    >>> path = chain(parts, ["a", "b"], "input")
    >>> path.states, path.D
    (('flap.1', 'amp.1'), array([[0., 0.],
           [0., 1.]]))
    """
    blocks, states, delays = [], [], []
    for channel in channels:
        block: Mapping[str, Floats] = dict(zip("ABCD", _matrices(_static(1.0)), strict=True))
        late = 0.0
        for part in parts:
            place = getattr(part, side)
            if place not in (channel, EVERY):
                continue
            block = _series(block, dict(zip("ABCD", _matrices(part), strict=True)))
            own = part.name if place == channel else f"{part.name} {channel}"
            states += [f"{own}.{i + 1}" for i in range(len(part.A))]
            late += part.delay
        blocks.append(block)
        delays.append(late)
    A, B, C, D = (_block_diagonal([block[name] for block in blocks]) for name in "ABCD")
    return Path(A, B, C, D, tuple(states), np.array(delays))


def _matrices(model: Model | Part) -> tuple[Floats, Floats, Floats, Floats]:
    return model.A, model.B, model.C, model.D


def _series(first: Mapping[str, Floats], then: Mapping[str, Floats]) -> dict[str, Floats]:
    n, k = len(first["A"]), len(then["A"])
    A = np.block([[first["A"], np.zeros((n, k))], [then["B"] @ first["C"], then["A"]]])
    return {
        "A": A,
        "B": np.vstack([first["B"], then["B"] @ first["D"]]),
        "C": np.hstack([then["D"] @ first["C"], then["C"]]),
        "D": then["D"] @ first["D"],
    }


def _block_diagonal(blocks: Sequence[Floats]) -> Floats:
    rows, columns = (sum(block.shape[i] for block in blocks) for i in (0, 1))
    joined = np.zeros((rows, columns))
    row = column = 0
    for block in blocks:
        joined[row : row + block.shape[0], column : column + block.shape[1]] = block
        row, column = row + block.shape[0], column + block.shape[1]
    return joined
