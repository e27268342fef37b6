"""Look at all models while they pass, so that the intake report needs no second reading."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import MATRIX_NAMES, Section
from ssaudit.bank_writer import Batch, Settled
from ssaudit.intake.orientation import looks_turned, weigh
from ssaudit.intake.report import Entries, SectionFound

# Bytes of entry sizes that are kept, one an entry; beyond, jumps are not looked for.
SIZES_BYTES = 130_000_000
# Sizes are kept as binary exponents around this one: 2^-63 to 2^63, and the sign.
MIDDLE = 64


@dataclass(eq=False)
class SectionSurvey:
    """What is learnt of one section while its batches pass.

    Attributes
    ----------
    first : dict of (rows, columns) float
        Entries of the first usable point.
    constant : dict of (rows, columns) bool
        Whether an entry is the same at all usable points so far.
    sizes : list of (points, entries) int8
        Coded size and sign of every entry, batch by batch; see `code_sizes`.
    prints : list of (points,) uint64
        A checksum of each model.
    basis : set of str
        How the readers knew rows from columns.
    digits_by : str
        Where digits come from: "stated", the type of the arrays, or "inspection".
    turned : dict of int
        Points whose A looks transposed against those before, by file.
    """

    first: dict[str, NDArray[np.float64]] = field(default_factory=dict)
    constant: dict[str, NDArray[np.bool_]] = field(default_factory=dict)
    sizes: list[NDArray[np.int8]] = field(default_factory=list)
    prints: list[NDArray[np.uint64]] = field(default_factory=list)
    basis: set[str] = field(default_factory=set)
    digits_by: str = "inspection"
    turned: dict[str, int] = field(default_factory=dict)
    pattern: NDArray[np.bool_] | None = None
    file: str = ""


class Survey:
    """Takes note of batches as they go to the bank."""

    def __init__(self) -> None:
        self.sections: dict[int, SectionSurvey] = {}
        self.bytes = 0
        self.sizes_kept = True

    def add(self, number: int, batch: Batch, where: str, digits_by: str = "") -> None:
        """Take note of a batch of the section of a number.

        ``digits_by`` is the type that its digits are those of, "" where they were stated.
        """
        section = self.sections.setdefault(number, SectionSurvey())
        matrices = {n: np.asarray(m[:]) for n, m in batch.section.matrices.items()}
        if not batch.section.states:
            return
        section.basis.add(batch.basis)
        if batch.section.digits is not None:
            section.digits_by = digits_by or "stated"
        section.prints.append(checksums(matrices))
        self._keep_sizes(section, matrices)
        usable = batch.points.void == ""
        if not usable.all():
            matrices = {n: m[usable] for n, m in matrices.items()}
        if usable.any():
            _narrow(section, matrices)
            _compare_pattern(section, matrices["A"], where)

    def _keep_sizes(
        self, section: SectionSurvey, matrices: Mapping[str, NDArray[np.float64]]
    ) -> None:
        if not self.sizes_kept:
            return
        codes = [code_sizes(m).reshape(len(m), -1) for m in matrices.values()]
        section.sizes.append(np.concatenate(codes, axis=1))
        self.bytes += section.sizes[-1].nbytes
        if self.bytes > SIZES_BYTES:
            self.sizes_kept = False
            for other in self.sections.values():
                other.sizes.clear()

    def describe(self, settled: Settled) -> tuple[SectionFound, ...]:
        """Describe the sections of the finished bank."""
        found = []
        first = 0
        for number, section in zip(settled.numbers, settled.sections, strict=True):
            void = settled.points.void[first : first + len(section)]
            first += len(section)
            if section.states:
                usable = int(np.count_nonzero(void == ""))
                found.append(_described(section, self.sections[number], usable))
        return tuple(found)


def _narrow(section: SectionSurvey, matrices: Mapping[str, NDArray[np.float64]]) -> None:
    """Strike entries that vary off those taken for constant."""
    for name, stack in matrices.items():
        if name not in section.first:
            section.first[name] = stack[0].copy()
            section.constant[name] = np.ones(stack.shape[1:], dtype=bool)
        constant = section.constant[name].reshape(-1)
        left = np.flatnonzero(constant)
        # Most entries show within a few points that they vary.
        for start, stop in ((0, 8), (8, len(stack))):
            if left.size and start < len(stack):
                part = stack[start:stop].reshape(-1, constant.size)[:, left]
                same = (part == section.first[name].reshape(-1)[left]).all(axis=0)
                constant[left] = same
                left = left[same]


def _compare_pattern(section: SectionSurvey, A: NDArray[np.float64], where: str) -> None:
    """Compare where A of another file is not zero with the files before."""
    if where == section.file:
        return
    section.file = where
    pattern = (A != 0).any(axis=0)
    if section.pattern is None:
        section.pattern = pattern
    elif looks_turned(pattern, section.pattern):
        section.turned[where] = section.turned.get(where, 0) + len(A)
    else:
        section.pattern = section.pattern | pattern


def checksums(matrices: Mapping[str, NDArray[np.float64]]) -> NDArray[np.uint64]:
    """Checksum of every model: the same for the same entries to the bit.

    Parameters
    ----------
    matrices : dict of (points, rows, columns) float
        Matrices by name.

    Returns
    -------
    (points,) uint64
        Sums of the entries' bits times fixed odd numbers, modulo 2^64.
    """
    total: NDArray[np.uint64] = np.zeros(len(matrices["A"]), dtype=np.uint64)
    for number, stack in enumerate(matrices.values()):
        bits = np.ascontiguousarray(stack).reshape(len(stack), -1).view(np.uint64)
        # Low bits of doubles are often zero, and so would be those of the products.
        total += (bits ^ (bits >> np.uint64(32))) @ _weights(number, bits.shape[1])
    return total


@lru_cache(maxsize=64)
def _weights(number: int, count: int) -> NDArray[np.uint64]:
    random = np.random.default_rng(number)
    drawn = random.integers(0, 2**63, count, dtype=np.uint64)
    return drawn * np.uint64(2) + np.uint64(1)


def code_sizes(stack: NDArray[np.float64]) -> NDArray[np.int8]:
    """Code the size of entries in a byte: binary exponent plus `MIDDLE`, with the entry's sign.

    Parameters
    ----------
    stack : (points, rows, columns) float
        Matrices.

    Returns
    -------
    (points, rows, columns) int8
        0 for zero, and for what is smaller than 2^-63.

    Examples
    --------
    >>> code_sizes(np.array([[[1.0, -2.0, 0.0, 0.75]]])).tolist()
    [[[64, -65, 0, 63]]]
    """
    if not stack.size:
        return np.zeros(stack.shape, dtype=np.int8)
    # The uppermost 16 bits of a 64-bit number: its sign, its exponent, and 4 bits more.
    upper = np.ascontiguousarray(stack, dtype="<f8").view("<i2")[..., 3::4]
    size = ((upper >> 4) & 0x7FF) - np.int16(1023 - MIDDLE)
    np.clip(size, 0, 127, out=size)
    size *= (upper >> 15) | 1
    return size.astype(np.int8)


def _described(section: Section, survey: SectionSurvey, usable: int) -> SectionFound:
    names = [name for name in MATRIX_NAMES if name in section.matrices]
    entries = tuple(_entries(name, section, survey) for name in names)
    n = len(section.states)
    basis = survey.basis.pop() if len(survey.basis) == 1 else ""
    shape = section.matrices["A"].shape[1:]
    return SectionFound(
        section.states,
        section.inputs,
        section.outputs,
        len(section),
        usable,
        section.dt,
        section.digits,
        "" if section.digits is None else survey.digits_by,
        entries,
        weigh(
            section.states,
            survey.first.get("A", np.zeros(shape)),
            survey.constant.get("A", np.zeros(shape, dtype=bool)),
            basis,
            _odd_shapes(section, n),
        ),
    )


def _entries(name: str, section: Section, survey: SectionSurvey) -> Entries:
    _, rows, columns = section.matrices[name].shape
    if name not in survey.first:
        return Entries(name, rows, columns, 0, 0)
    constant = survey.constant[name]
    zero = constant & (survey.first[name] == 0)
    return Entries(
        name, rows, columns, int(np.count_nonzero(zero)), int(np.count_nonzero(constant & ~zero))
    )


def _odd_shapes(section: Section, n: int) -> str:
    """Matrices that are not square, in words."""
    found = []
    for name, size in (("B", len(section.inputs)), ("C", len(section.outputs))):
        if name in section.matrices and size != n:
            _, rows, columns = section.matrices[name].shape
            found.append(f"{name} ({rows}x{columns})")
    return " and ".join(found)


def dead_signals(section: Section, survey: SectionSurvey) -> list[str]:
    """List inputs that drive nothing and outputs that show nothing, at any point."""
    found = []
    for name, names, axis, what in (
        ("B", section.inputs, 0, "input {} drives no state"),
        ("C", section.outputs, 1, "output {} shows no state"),
    ):
        if name not in survey.first:
            continue
        zero = survey.constant[name] & (survey.first[name] == 0)
        dead = [names[k] for k in np.flatnonzero(zero.all(axis=axis))]
        # An output may show inputs alone.
        if name == "C" and "D" in survey.first:
            through = ~(survey.constant["D"] & (survey.first["D"] == 0))
            dead = [d for d in dead if not through[names.index(d)].any()]
        found += [what.format(signal) + " at any point" for signal in dead]
    return found


def entry_labels(section: Section, names: Sequence[str]) -> list[str]:
    """Name of every entry, in the order of `SectionSurvey.sizes`."""
    axes: dict[str, tuple[tuple[str, ...], tuple[str, ...]]] = {
        "A": (section.states, section.states),
        "B": (section.states, section.inputs),
        "C": (section.outputs, section.states),
        "D": (section.outputs, section.inputs),
        "E": (section.states, section.states),
    }
    return [
        f"{name}[{row}, {column}]" for name in names for row in axes[name][0]
        for column in axes[name][1]
    ]  # fmt: skip


def entry_values(section: Section, point: int, names: Sequence[str]) -> NDArray[Any]:
    """Values of all entries of one point, in the same order."""
    matrices = section.read(point, point + 1)
    return np.concatenate([matrices[name].reshape(-1) for name in names])
