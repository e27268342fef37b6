"""Names across files: the same names in another order are put in order; unnamed ones are not."""

from dataclasses import dataclass, field, replace
from typing import Any

from ssaudit.bank_writer import Batch
from ssaudit.errors import SourceError
from ssaudit.intake.layout import KINDS
from ssaudit.intake.piece import permuted


@dataclass(eq=False)
class Aligner:
    """Brings batches of all files to one order of names.

    States, inputs and outputs whose names are the same but for their order are put in the order
    of the first file. Other names, or another number of them, make another section. A file that
    names nothing beside one that names as many is an error: which is which would be a guess.

    Attributes
    ----------
    reordered : int
        Points whose rows or columns were put in another order.
    """

    reordered: int = 0
    _orders: dict[tuple[str, frozenset[str]], tuple[str, ...]] = field(default_factory=dict)
    _named: dict[tuple[str, int], tuple[bool, str]] = field(default_factory=dict)
    _columns: dict[str, tuple[str | None, str]] = field(default_factory=dict)

    def align(self, batch: Batch, where: str) -> Batch:
        """Return a batch in the common order.

        Raises
        ------
        SourceError
            When names are stated in one file and not in another of the same size, or a coordinate
            has two units.
        """
        self._check_columns(batch, where)
        if not batch.section.states:
            return batch
        names = {kind: getattr(batch.section, kind) for kind in KINDS}
        self._check_named(batch, names, where)
        chosen: dict[str, list[int]] = {}
        ordered: dict[str, Any] = {}
        for kind, words in names.items():
            order = self._orders.setdefault((kind, frozenset(words)), words)
            ordered[kind] = order
            if order != words:
                chosen[kind] = [words.index(word) for word in order]
        if not chosen:
            return batch
        self.reordered += len(batch.points)
        matrices = permuted(batch.section.read(0, len(batch.points)), chosen)
        return replace(batch, section=replace(batch.section, **ordered, matrices=matrices))

    def _check_named(self, batch: Batch, names: dict[str, tuple[str, ...]], where: str) -> None:
        for kind, words in names.items():
            if not words:
                continue
            named = kind in batch.named
            known, first = self._named.setdefault((kind, len(words)), (named, where))
            if known != named:
                with_names, without = (first, where) if known else (where, first)
                raise SourceError(
                    f"does not name its {kind}, {with_names} does",
                    where=without,
                    do="name them in a layout, so that none is mistaken for another",
                )

    def _check_columns(self, batch: Batch, where: str) -> None:
        """Refuse a coordinate in two units, and a name that is a coordinate here, a tag there."""
        kinds: dict[str, str | None] = dict.fromkeys(batch.points.tags)
        kinds |= batch.points.units
        for name, unit in kinds.items():
            known, first = self._columns.setdefault(name, (unit, where))
            if known != unit:
                here, there = (_said(u) for u in (unit, known))
                raise SourceError(
                    f"{name} is {here}, in {first} {there}",
                    where=where,
                    do="make them alike in a layout",
                )


def _said(unit: str | None) -> str:
    return "a tag" if unit is None else f"a coordinate in {unit!r}"
