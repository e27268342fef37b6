"""Which column, or which long row, is which matrix entry, and what that says of the names."""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

from ssaudit.errors import SourceError
from ssaudit.intake.pattern import in_order
from ssaudit.intake.piece import AXES

# Rows or columns of one matrix at the most; larger labels are damage.
LARGEST = 5000


@dataclass(frozen=True)
class Axes:
    """Labels of states, inputs and outputs in their order.

    Attributes
    ----------
    labels : dict of tuple of str
        By "states", "inputs", "outputs".
    named : bool
        Whether labels are names; otherwise they are numbers, and say nothing.
    """

    labels: Mapping[str, tuple[str, ...]]
    named: bool

    def shape(self, matrix: str) -> tuple[int, int]:
        """Rows and columns of a matrix."""
        rows, columns = AXES[matrix]
        return len(self.labels[rows]), len(self.labels[columns])

    @property
    def names(self) -> dict[str, tuple[str, ...]]:
        """Names that the labels give."""
        return {kind: words for kind, words in self.labels.items() if self.named and words}


def find_axes(entries: Mapping[str, Iterable[tuple[str, str]]], where: str) -> Axes:
    """Find labels of states, inputs and outputs from the labels of the matrix entries.

    Parameters
    ----------
    entries : dict of (row, column) labels
        By matrix.
    where : str
        The file, for messages.

    Returns
    -------
    Axes
        Numbers run without gaps from 0 where any label is 0, else from 1.

    Raises
    ------
    SourceError
        When names and numbers are mixed, or a number is beyond reason.

    Examples
    --------
    >>> axes = find_axes({"A": [("1", "1"), ("1", "2"), ("2", "1"), ("2", "2")]}, "a.csv")
    >>> axes.shape("A")
    (2, 2)
    """
    labels: dict[str, dict[str, None]] = {"states": {}, "inputs": {}, "outputs": {}}
    for matrix, pairs in entries.items():
        rows, columns = AXES[matrix]
        for row, column in pairs:
            labels[rows].setdefault(row)
            labels[columns].setdefault(column)
    every = [label for words in labels.values() for label in words]
    numbers = [label for label in every if label.isascii() and label.isdigit()]
    if not numbers:
        return Axes({kind: tuple(words) for kind, words in labels.items()}, bool(every))
    if len(numbers) < len(every):
        odd = next(label for label in every if label not in set(numbers))
        raise SourceError(
            f"rows and columns are called {odd!r} here and {numbers[0]!r} there",
            where=where,
            do="call them all by names, or all by numbers",
        )
    if max(len(label) for label in numbers) > 6 or max(map(int, numbers)) > LARGEST:
        raise SourceError(f"a matrix has a row or column {max(numbers, key=len)[:20]}", where=where)
    first = min(map(int, numbers)) and 1
    return Axes(
        {kind: _without_gaps(in_order(words), first) for kind, words in labels.items()}, False
    )


def _without_gaps(labels: tuple[str, ...], first: int) -> tuple[str, ...]:
    if not labels:
        return ()
    # Labels such as "01" stay as they are where nothing is missing.
    numbers = {int(label): label for label in labels}
    return tuple(numbers.get(k, str(k)) for k in range(first, max(numbers) + 1))
