"""Gains at the operating points: one constant matrix, or a schedule over the envelope."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ssaudit.errors import LoopError

MOST_VARIABLES = 4
Coordinates = Mapping[str, NDArray[np.float64]]


@dataclass(frozen=True, eq=False)
class GainsAtPoints:
    """The gains that are commanded at some points.

    Attributes
    ----------
    K : (points, inputs, signals) or (1, inputs, signals) float
        Gains; one matrix for all points when they do not vary.
    held : (points,) bool
        Where a point lies beyond the table and the edge value was held.
    refused : (points,) object
        Why no gain is commanded at a point, as str; "" where there is one.
    """

    K: NDArray[np.float64]
    held: NDArray[np.bool_]
    refused: NDArray[np.object_]


@dataclass(frozen=True, eq=False)
class ConstantGain:
    """One gain matrix for all points.

    Parameters
    ----------
    matrix : (inputs, signals) float
        Gains from each signal to each input.
    inputs, signals : sequence of str, optional
        Names of the rows and the columns. Without them the matrix must have a row for every input
        and a column for every signal of the bank, in the bank's order.
    unnamed : str
        Inputs and signals that are not named: "refuse" (an error) or "zero" (no feedback).

    Raises
    ------
    LoopError
        When the matrix holds NaN, or does not fit its names.

    Examples
    --------
    >>> ConstantGain([[2.0, 0.5]], inputs=["flap"], signals=["heave", "heave_rate"]).matrix.shape
    (1, 2)
    """

    matrix: NDArray[np.float64]
    inputs: tuple[str, ...] | None
    signals: tuple[str, ...] | None
    unnamed: str

    def __init__(
        self,
        matrix: ArrayLike,
        inputs: Sequence[str] | None = None,
        signals: Sequence[str] | None = None,
        unnamed: str = "refuse",
    ) -> None:
        values = np.array(matrix, dtype=np.float64)
        if values.ndim != 2:
            raise LoopError(f"the gain matrix has {values.ndim} dimensions, not inputs x signals")
        _check_finite(values[np.newaxis], "the gain matrix")
        object.__setattr__(self, "matrix", values)
        object.__setattr__(self, "inputs", _names(inputs, "inputs", values.shape[0]))
        object.__setattr__(self, "signals", _names(signals, "signals", values.shape[1]))
        object.__setattr__(self, "unnamed", _check_unnamed(unnamed))

    @property
    def variables(self) -> tuple[str, ...]:
        """Coordinates that the gain varies with: none."""
        return ()

    @property
    def largest(self) -> NDArray[np.float64]:
        """Largest size of each gain anywhere, (inputs, signals)."""
        return np.asarray(np.abs(self.matrix))

    def at(self, coordinates: Coordinates, count: int) -> GainsAtPoints:
        """Gains at ``count`` points: everywhere the same."""
        return GainsAtPoints(
            self.matrix[np.newaxis], np.zeros(count, bool), np.full(count, "", object)
        )

    @property
    def description(self) -> dict[str, object]:
        """Content for digests and provenance."""
        return {
            "inputs": self.inputs,
            "signals": self.signals,
            "matrix": self.matrix.tolist(),
            "unnamed": self.unnamed,
        }


@dataclass(frozen=True, eq=False)
class GainSchedule:
    """Gains given at breakpoints on a full grid, multilinear between them.

    Attributes
    ----------
    variables : tuple of str
        Coordinates that the schedule varies with, one to four.
    breakpoints : tuple of (b,) float
        Ascending breakpoints of each variable, in the unit of the bank's coordinate.
    gains : (b1, …, bv, inputs, signals) float
        Gains at the breakpoints.
    inputs, signals : tuple of str
        Names of the rows and the columns of the gains.
    outside : str
        Beyond the table: "refuse" (the point is void) or "hold" (the edge value).
    unnamed : str
        Inputs and signals that are not named: "refuse" (an error) or "zero" (no feedback).

    Examples
    --------
    >>> schedule = GainSchedule(("speed",), ([10.0, 20.0],), [[[1.0]], [[3.0]]], ("flap",),
    ...                         ("heave",), "hold")
    >>> there = schedule.at({"speed": np.array([12.5, 30.0])}, 2)
    >>> there.K.ravel(), there.held
    (array([1.5, 3. ]), array([False,  True]))
    """

    variables: tuple[str, ...]
    breakpoints: tuple[NDArray[np.float64], ...]
    gains: NDArray[np.float64]
    inputs: tuple[str, ...]
    signals: tuple[str, ...]
    outside: str
    unnamed: str = "refuse"

    def __post_init__(self) -> None:
        grid = tuple(np.asarray(b, dtype=np.float64) for b in self.breakpoints)
        gains = np.asarray(self.gains, dtype=np.float64)
        object.__setattr__(self, "breakpoints", grid)
        object.__setattr__(self, "gains", gains)
        if not 1 <= len(self.variables) <= MOST_VARIABLES:
            raise LoopError(f"a schedule has 1 to {MOST_VARIABLES} variables")
        _check_unnamed(self.unnamed)
        if self.outside not in ("refuse", "hold"):
            raise LoopError(f'outside is {self.outside!r}, not "refuse" or "hold"')
        expected = (*(len(b) for b in grid), len(self.inputs), len(self.signals))
        if gains.shape != expected:
            raise LoopError(f"the schedule's gains have shape {gains.shape}, expected {expected}")
        for kind, names in (("inputs", self.inputs), ("signals", self.signals)):
            _names(names, kind, len(names))
        for name, values in zip(self.variables, grid, strict=True):
            if not (np.all(np.isfinite(values)) and np.all(np.diff(values) > 0)):
                raise LoopError(f"the breakpoints of {name} do not ascend")
        _check_finite(gains.reshape(-1, *gains.shape[-2:]), "the gain schedule")

    @property
    def largest(self) -> NDArray[np.float64]:
        """Largest size of each gain anywhere, (inputs, signals)."""
        flat = np.abs(self.gains).reshape(-1, len(self.inputs), len(self.signals))
        return np.asarray(flat.max(axis=0))

    def at(self, coordinates: Coordinates, count: int) -> GainsAtPoints:
        """Gains at some points.

        Parameters
        ----------
        coordinates : dict of (points,) float
            Coordinates of the points by name; all variables of the schedule among them.
        count : int
            Number of points.

        Returns
        -------
        GainsAtPoints

        References
        ----------
        Multilinear interpolation: the weights of the 2^v corners of the cell around a point are
        products of its v linear weights.
        """
        held = np.zeros(count, dtype=bool)
        refused = np.full(count, "", dtype=object)
        lower, weights = [], []
        for name, grid in zip(self.variables, self.breakpoints, strict=True):
            values = coordinates[name]
            beyond = ~((values >= grid[0]) & (values <= grid[-1]))
            if self.outside == "refuse":
                for row in np.flatnonzero(beyond & (refused == "")):
                    refused[row] = _beyond(name, values[row], grid)
            held |= beyond
            # Beyond the table, infinity included, it is the edge that is looked up.
            index, weight = _cell(np.clip(np.nan_to_num(values), grid[0], grid[-1]), grid)
            lower.append(index)
            weights.append(weight)
        return GainsAtPoints(self._interpolate(lower, weights, count), held, refused)

    def _interpolate(
        self, lower: list[NDArray[np.int64]], weights: list[NDArray[np.float64]], count: int
    ) -> NDArray[np.float64]:
        total = np.zeros((count, len(self.inputs), len(self.signals)))
        for corner in np.ndindex(*(2,) * len(self.variables)):
            at_corner = [
                np.minimum(index + step, len(grid) - 1)
                for index, step, grid in zip(lower, corner, self.breakpoints, strict=True)
            ]
            weight = np.prod(
                [w if step else 1 - w for w, step in zip(weights, corner, strict=True)], axis=0
            )
            total += weight[:, np.newaxis, np.newaxis] * self.gains[tuple(at_corner)]
        return total

    @property
    def description(self) -> dict[str, object]:
        """Content for digests and provenance."""
        return {
            "variables": self.variables,
            "breakpoints": [grid.tolist() for grid in self.breakpoints],
            "inputs": self.inputs,
            "signals": self.signals,
            "gains": self.gains.tolist(),
            "outside": self.outside,
            "unnamed": self.unnamed,
        }


Gain = ConstantGain | GainSchedule


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


def _cell(
    values: NDArray[np.float64], grid: NDArray[np.float64]
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Index of the breakpoint below each value in the grid, and the weight of the one above it."""
    if len(grid) == 1:
        return np.zeros(len(values), dtype=np.int64), np.zeros(len(values))
    index = np.clip(np.searchsorted(grid, values, side="right") - 1, 0, len(grid) - 2)
    weight = (values - grid[index]) / (grid[index + 1] - grid[index])
    return index, weight


def _beyond(name: str, value: float, grid: NDArray[np.float64]) -> str:
    text = f"{value:g}"
    if grid[0] <= float(text) <= grid[-1]:
        # Six digits would make it look as if it were inside.
        text = repr(float(value))
    return f"outside the gain table: {name} {text} is not in {grid[0]:g} to {grid[-1]:g}"


def _names(names: Sequence[str] | None, kind: str, count: int) -> tuple[str, ...] | None:
    if names is None:
        return None
    if len(names) != count:
        raise LoopError(f"the gain matrix has {count} {kind}, {len(names)} are named")
    if len(set(names)) != len(names):
        raise LoopError(f"the gain matrix names one of its {kind} twice")
    return tuple(names)


def _check_unnamed(unnamed: str) -> str:
    if unnamed not in ("refuse", "zero"):
        raise LoopError(f'unnamed is {unnamed!r}, not "refuse" or "zero"')
    return unnamed


def _check_finite(stack: NDArray[np.float64], what: str) -> None:
    bad = np.argwhere(~np.isfinite(stack))
    if len(bad):
        _, row, column = bad[0]
        raise LoopError(
            f"{what} holds {stack[tuple(bad[0])]} for input {row + 1}, signal {column + 1}",
            do="give every gain as a finite number",
        )
