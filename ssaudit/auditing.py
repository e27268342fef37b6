"""The audit: bank + loop + criteria → verdicts and modes of every point, chunk by chunk."""

import os
from collections import deque
from collections.abc import Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from itertools import islice
from typing import TYPE_CHECKING, Any

import numpy as np

from ssaudit.bank import Matrices, MatrixDigest, ModelBank, Points, Section, bank_digest, chunks_of
from ssaudit.chunk import DEPTHS, PROVE, Part, Settings, audit_chunk, named_rows
from ssaudit.columns import Columns, concatenated
from ssaudit.criteria import Criteria
from ssaudit.errors import BankError, SsauditError
from ssaudit.loop.model import Loop
from ssaudit.modes.proof import import_flint
from ssaudit.progress import Progress
from ssaudit.summary import Summary, Tally

if TYPE_CHECKING:
    import pandas as pd

# Bytes of state matrices in one chunk: small enough to bound memory, large enough that
# handing chunks over costs nothing.
CHUNK_BYTES = 4_000_000
# Margins take milliseconds a point, so that few points keep a worker busy.
MARGIN_POINTS = 128
# Chunks in flight beyond the one that each worker holds.
AHEAD = 2


@dataclass(frozen=True, eq=False)
class Audit:
    """What came of an audit.

    Attributes
    ----------
    points : DataFrame
        A row a point, columns as in the ledger.
    modes : DataFrame
        A row a mode, conjugate pairs once, columns as in the ledger.
    summary : Summary
        Counts, worst points and what they miss.
    loops : DataFrame
        A row a single loop of a point at depth margins; empty at other depths.
    ids_given : bool
        Whether the export named its points; otherwise they are numbered.
    """

    points: "pd.DataFrame"
    modes: "pd.DataFrame"
    summary: Summary
    loops: "pd.DataFrame"
    ids_given: bool = True


def audit(
    bank: ModelBank,
    loop: Loop,
    criteria: Criteria,
    *,
    depth: str = "modes",
    real_radius: bool = False,
    prove: str = "",
    workers: int | None = None,
    chunk: int | None = None,
    worst: int = 10,
) -> Audit:
    """Close all models of a bank, find their poles, and judge every point.

    Parameters
    ----------
    bank : ModelBank
        The models.
    loop : Loop
        How they are closed.
    criteria : Criteria
        What they are judged by.
    depth : str
        "poles", "modes" (adds eigenvectors, participation and how far each pole may be off), or
        "margins" (adds the distance to trouble).
    real_radius : bool
        At depth margins, whether to find the radii for real changes, which takes longer than all
        the rest. They are found anyway when the criteria ask for them.
    prove : str
        "doubt", "worst" or "all": settle these points by proof, which needs the extra ``prove``.
    workers : int, optional
        Worker threads; one a processor when absent.
    chunk : int, optional
        Points a chunk; chosen by size when absent. The result does not depend on it.
    worst : int
        How many of the worst points the summary lists.

    Returns
    -------
    Audit

    Raises
    ------
    SsauditError
        When loop or criteria do not fit the bank.

    Examples
    --------
    >>> from ssaudit.bank_arrays import build_bank
    >>> from ssaudit.loop.gains import ConstantGain
    >>> bank = build_bank([[[1.0]], [[4.0]]], [[[1.0]], [[1.0]]], revision="A")
    >>> found = audit(bank, Loop("negative", ConstantGain([[3.0]])), Criteria())
    >>> found.points[["point", "verdict", "max_real"]]
      point verdict  max_real
    0     1      ok      -2.0
    1     2    lost       1.0
    """
    import pandas as pd

    tally = Tally(bank.revision, criteria, worst)
    points, modes, loops = [], [], []
    for part in audit_parts(
        bank,
        loop,
        criteria,
        depth=depth,
        real_radius=real_radius,
        prove=prove,
        workers=workers,
        chunk=chunk,
        worst=worst,
    ):
        tally.add(part.points, part.values, part.shortfall, part.missed)
        tally.add_loops(part.points, part.loops)
        points.append(part.points)
        modes.append(named_rows(part, part.modes))
        if part.loops:
            loops.append(named_rows(part, part.loops))
    # Joined before pandas chooses types, which it would choose otherwise for a part without modes.
    return Audit(
        pd.DataFrame(_for_pandas(concatenated(points))),
        pd.DataFrame(concatenated(modes)),
        tally.result(),
        pd.DataFrame(concatenated(loops) if loops else {}),
        bank.ids_given,
    )


def _for_pandas(columns: Columns) -> dict[str, Any]:
    """Columns with yes, no and unknown as pandas writes them."""
    import pandas as pd

    return {
        name: pd.arrays.BooleanArray(column == 1, column < 0) if column.dtype == np.int8 else column
        for name, column in columns.items()
    }


def audit_parts(
    bank: ModelBank,
    loop: Loop,
    criteria: Criteria,
    *,
    depth: str = "modes",
    real_radius: bool = False,
    prove: str = "",
    workers: int | None = None,
    chunk: int | None = None,
    worst: int = 10,
    progress: Progress | None = None,
) -> Iterator[Part]:
    """Audit a bank chunk by chunk, in the order of its points, in bounded memory.

    Parameters
    ----------
    bank, loop, criteria, depth, real_radius, prove, workers, chunk
        As for `audit`.
    worst : int
        How many points count as the worst, where these are to be proved; they are found by an
        audit of their own.
    progress : callable, optional
        Called as ``progress(stage, done, total)`` in points.

    Yields
    ------
    Part

    Raises
    ------
    SsauditError
        When loop or criteria do not fit the bank, or the bank's matrices are not those that its
        digest was made of.
    """
    for name, value, valid in (("depth", depth, DEPTHS), ("prove", prove, ("", *PROVE))):
        if value not in valid:
            raise SsauditError(f"{name} is {value!r}", do=f"choose one of {', '.join(valid)}")
    if not len(bank):
        raise BankError("holds no points", where=bank.name)
    loop.check(bank)
    criteria.check(bank, depth)
    if prove:
        import_flint()
    chosen: str | frozenset[int] = prove
    if prove == "worst":
        tally = Tally(bank.revision, criteria, worst)
        for part in _parts(bank, Settings(loop, criteria, depth), workers, chunk, progress):
            tally.add(part.points, part.values, part.shortfall, part.missed)
        chosen = tally.worst_places
    settings = Settings(loop, criteria, depth, chosen, real_radius)
    yield from _parts(bank, settings, workers, chunk, progress)


def _parts(
    bank: ModelBank,
    settings: Settings,
    workers: int | None,
    chunk: int | None,
    progress: Progress | None,
) -> Iterator[Part]:
    """Audit chunks on worker threads, and yield them in order."""
    number = workers or os.cpu_count() or 1
    digests: list[MatrixDigest] = []
    waiting: deque[Future[Part]] = deque()
    done = 0
    work = _readable(bank, _work(bank, settings, chunk, digests))
    with ThreadPoolExecutor(number) as pool:
        try:
            while True:
                for section, points, matrices, offset in islice(
                    work, number + AHEAD - len(waiting)
                ):
                    arguments = bank.revision, section, points, matrices, settings, offset
                    waiting.append(pool.submit(audit_chunk, *arguments))
                if not waiting:
                    break
                part = waiting.popleft().result()
                done += len(part.values)
                yield part
                if progress:
                    progress("audit", done, len(bank))
        finally:
            for future in waiting:
                future.cancel()
    _verify(bank, digests)


def _readable(
    bank: ModelBank, work: Iterator[tuple[Section, Points, Matrices, int]]
) -> Iterator[tuple[Section, Points, Matrices, int]]:
    """Pass work on; what the library raises where a file is damaged is told in our words."""
    try:
        yield from work
    except (OSError, RuntimeError) as error:
        raise BankError(
            f"is damaged: a part of it cannot be read ({error})",
            where=bank.name,
            do="ingest the export again",
        ) from error


def _work(
    bank: ModelBank, settings: Settings, chunk: int | None, digests: list[MatrixDigest]
) -> Iterator[tuple[Section, Points, Matrices, int]]:
    """Chunks of all sections, with their places; digests are taken on the way."""
    offset = 0
    for section in bank.sections:
        digests.append(MatrixDigest())
        fitting = max(1, CHUNK_BYTES // max(8, 8 * len(section.states) ** 2))
        if settings.depth == "margins":
            fitting = min(fitting, MARGIN_POINTS)
        size = chunk or fitting
        for within, matrices in chunks_of(section, size):
            if bank.stored_digest:
                digests[-1].update(matrices)
            start, stop = offset + within.start, offset + within.stop
            yield section, bank.points.between(start, stop), matrices, start
        offset += len(section)


def _verify(bank: ModelBank, digests: list[MatrixDigest]) -> None:
    if not bank.stored_digest:
        return
    found = bank_digest(bank.revision, bank.ids_given, bank.points, bank.sections, digests)
    if found != bank.stored_digest:
        raise BankError(
            "was changed after it was ingested: its content does not match its digest",
            where=bank.name,
            do="ingest the export again",
        )
