"""The intake report: what was found in an export, for people and for the bank's file."""

import math
from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any


@dataclass(frozen=True)
class Coordinate:
    """What values one coordinate takes.

    Attributes
    ----------
    name, unit : str
        Its name and unit.
    least, greatest : float
        Range over the points that have it.
    distinct : int
        Number of values, those closer than a billionth of the range taken as one.
    least_step, greatest_step : float
        Between neighbouring values; equal for even spacing, 0 for a single value.
    """

    name: str
    unit: str
    least: float
    greatest: float
    distinct: int
    least_step: float
    greatest_step: float


@dataclass(frozen=True)
class Tag:
    """How many points have which word."""

    name: str
    counts: Mapping[str, int]


@dataclass(frozen=True)
class Grid:
    """The grid that the coordinates span.

    Attributes
    ----------
    places : int
        Number of places on it.
    holes : int
        Places without any point.
    examples : tuple of dict
        Coordinates of the first holes.
    """

    places: int
    holes: int
    examples: tuple[Mapping[str, float], ...]


@dataclass(frozen=True)
class Entries:
    """What the entries of one matrix do over all usable points.

    Attributes
    ----------
    matrix : str
        Its name.
    rows, columns : int
        Its size.
    zero, constant : int
        Entries that are zero, or another constant, at all points.
    """

    matrix: str
    rows: int
    columns: int
    zero: int
    constant: int


@dataclass(frozen=True)
class Orientation:
    """Whether the models stand as they were read, or look transposed.

    Attributes
    ----------
    says : str
        "as read", "transposed" or "cannot tell".
    why : str
        The evidence.
    """

    says: str
    why: str


@dataclass(frozen=True)
class SectionFound:
    """One section of the bank.

    Attributes
    ----------
    states, inputs, outputs : tuple of str
        Names.
    points, usable : int
        Points, and those not void.
    dt : float
        Sampling time [s]; 0 for continuous models.
    digits : int or None
        Significant digits; None for full precision.
    digits_by : str
        "stated", "inspection", or the type of the arrays ("float32"); "" for full precision.
    entries : tuple of Entries
        One a matrix.
    orientation : Orientation
        Evidence on it.
    """

    states: tuple[str, ...]
    inputs: tuple[str, ...]
    outputs: tuple[str, ...]
    points: int
    usable: int
    dt: float
    digits: int | None
    digits_by: str
    entries: tuple[Entries, ...]
    orientation: Orientation


@dataclass(frozen=True)
class Jump:
    """An entry that is far greater or smaller at one point than at its neighbours.

    Attributes
    ----------
    point : str
        Id of the point.
    entry : str
        For example ``A[heave_rate, pitch]``.
    value : float
        What it is there.
    factor : float
        Its size over that at the neighbours.
    """

    point: str
    entry: str
    value: float
    factor: float


@dataclass(frozen=True)
class Pair:
    """Two points that may be one."""

    first: str
    second: str


@dataclass(frozen=True)
class Suspects:
    """Points that are flagged, and not removed.

    Attributes
    ----------
    jumps : int
        Entries that jump.
    jump_examples : tuple of Jump
        The greatest of them.
    jumps_examined : bool
        Whether they were looked for.
    close : int
        Points that lie next to nowhere but another point: closer than a millionth of the range.
    close_examples : tuple of Pair
        The first of them.
    alike : int
        Points whose matrices are those of another point, to the bit.
    alike_examples : tuple of Pair
        The first of them.
    """

    jumps: int = 0
    jump_examples: tuple[Jump, ...] = ()
    jumps_examined: bool = False
    close: int = 0
    close_examples: tuple[Pair, ...] = ()
    alike: int = 0
    alike_examples: tuple[Pair, ...] = ()


@dataclass(frozen=True)
class IntakeReport:
    """What was found in an export.

    Attributes
    ----------
    files, bytes : int
        Read.
    layout : str
        Name of the layout.
    points, usable : int
        Points, and those not void.
    void : dict of int
        Void points by reason, entries of matrices taken together.
    coordinates : tuple of Coordinate
    tags : tuple of Tag
    grid : Grid or None
        None where the points lie on no grid.
    sections : tuple of SectionFound
    suspects : Suspects
    notes : tuple of str
        What else should be known.
    """

    files: int
    bytes: int
    layout: str
    points: int
    usable: int
    void: Mapping[str, int]
    coordinates: tuple[Coordinate, ...]
    tags: tuple[Tag, ...]
    grid: Grid | None
    sections: tuple[SectionFound, ...]
    suspects: Suspects
    notes: tuple[str, ...]

    def to_json(self) -> dict[str, Any]:
        """Return the report as JSON can hold it, as it is stored in the bank."""
        content: dict[str, Any] = _finite(asdict(self))
        return content


def _finite(value: Any) -> Any:
    """Put None for numbers that JSON cannot hold."""
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(item) for item in value]
    return None if isinstance(value, float) and not math.isfinite(value) else value
