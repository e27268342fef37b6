"""The audit: bank + loop + criteria → verdicts and modes of every point, chunk by chunk."""

import os
from collections import deque
from collections.abc import Callable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from ssaudit.bank import Matrices, MatrixDigest, ModelBank, Points, Section, bank_digest, chunks_of
from ssaudit.columns import Columns, mode_columns, point_columns
from ssaudit.criteria import Criteria
from ssaudit.errors import BankError, SsauditError
from ssaudit.judging import judge
from ssaudit.loop.model import ClosedModels, Loop
from ssaudit.modes.radii import closed_loop_entry_error, rounding_error
from ssaudit.modes.stacked import find_usable_modes
from ssaudit.settling import settle
from ssaudit.summary import Summary, Tally

if TYPE_CHECKING:
    import pandas as pd

DEPTHS = ("poles", "modes")
# Bytes of state matrices in one chunk: small enough for the processor's cache, large enough that
# handing chunks over costs nothing.
CHUNK_BYTES = 2_000_000
# Chunks in flight beyond the one that each worker holds.
AHEAD = 2
Progress = Callable[[str, int, int], None]


@dataclass(frozen=True, eq=False)
class Part:
    """Audited points of one chunk, column by column.

    Attributes
    ----------
    points : dict of (points,) arrays
        A row a point; columns as in the ledger.
    modes : dict of (modes,) arrays
        A row a mode, conjugate pairs once; ``row`` is the point's row in ``points``.
    values, shortfall : (points, requirements) float
        Worst value of each requirement's quantity, and how far it is beyond the limit.
    missed : (points, requirements) bool
        Which requirements are missed.
    """

    points: Columns
    modes: Columns
    values: NDArray[np.float64]
    shortfall: NDArray[np.float64]
    missed: NDArray[np.bool_]


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
    ids_given : bool
        Whether the export named its points; otherwise they are numbered.
    """

    points: "pd.DataFrame"
    modes: "pd.DataFrame"
    summary: Summary
    ids_given: bool = True


def audit(
    bank: ModelBank,
    loop: Loop,
    criteria: Criteria,
    *,
    depth: str = "modes",
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
        "poles", or "modes" (adds eigenvectors, participation and how far each pole may be off).
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
    >>> from ssaudit.bank import build_bank
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
    points, modes = [], []
    for part in audit_parts(bank, loop, criteria, depth=depth, workers=workers, chunk=chunk):
        tally.add(part.points, part.values, part.shortfall, part.missed)
        points.append(pd.DataFrame(part.points))
        modes.append(pd.DataFrame(named_modes(part)))
    return Audit(
        pd.concat(points, ignore_index=True),
        pd.concat(modes, ignore_index=True),
        tally.result(),
        bank.ids_given,
    )


def named_modes(part: Part) -> Columns:
    """Columns of a part's modes with the points' names in place of row numbers."""
    modes = dict(part.modes)
    row = modes.pop("row")
    return {
        "point": part.points["point"][row],
        "revision": part.points["revision"][row],
        **modes,
    }


def audit_parts(
    bank: ModelBank,
    loop: Loop,
    criteria: Criteria,
    *,
    depth: str = "modes",
    workers: int | None = None,
    chunk: int | None = None,
    progress: Progress | None = None,
) -> Iterator[Part]:
    """Audit a bank chunk by chunk, in the order of its points, in bounded memory.

    Parameters
    ----------
    bank, loop, criteria, depth, workers, chunk
        As for `audit`.
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
    if depth not in DEPTHS:
        raise SsauditError(f"depth is {depth!r}", do=f"choose one of {', '.join(DEPTHS)}")
    loop.check(bank)
    criteria.check(bank)
    number = workers or os.cpu_count() or 1
    digests: list[MatrixDigest] = []
    waiting: deque[Future[Part]] = deque()
    done = 0
    with ThreadPoolExecutor(number) as pool:
        try:
            for section, points, matrices in _work(bank, chunk, digests):
                waiting.append(
                    pool.submit(
                        audit_chunk, bank.revision, section, points, matrices, loop, criteria, depth
                    )
                )
                while len(waiting) > number + AHEAD:
                    part = waiting.popleft().result()
                    done += len(part.values)
                    yield part
                    if progress:
                        progress("audit", done, len(bank))
            while waiting:
                part = waiting.popleft().result()
                done += len(part.values)
                yield part
                if progress:
                    progress("audit", done, len(bank))
        finally:
            for future in waiting:
                future.cancel()
    _verify(bank, digests)


def _work(
    bank: ModelBank, chunk: int | None, digests: list[MatrixDigest]
) -> Iterator[tuple[Section, Points, Matrices]]:
    """Chunks of all sections, their digests taken on the way."""
    offset = 0
    for section in bank.sections:
        digests.append(MatrixDigest())
        size = chunk or max(1, CHUNK_BYTES // max(8, 8 * len(section.states) ** 2))
        for within, matrices in chunks_of(section, size):
            if bank.stored_digest:
                digests[-1].update(matrices)
            yield (
                section,
                bank.points.between(offset + within.start, offset + within.stop),
                matrices,
            )
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


def audit_chunk(
    revision: str,
    section: Section,
    points: Points,
    matrices: Matrices,
    loop: Loop,
    criteria: Criteria,
    depth: str,
) -> Part:
    """Close, find the poles of, and judge some points of one section.

    Parameters
    ----------
    revision : str
        Name of the model revision.
    section : Section
        Names and sampling time.
    points : Points
        The points.
    matrices : dict of (points, rows, columns) float
        Their matrices.
    loop, criteria, depth
        As for `audit`.

    Returns
    -------
    Part
    """
    closed = loop.close(section, points, matrices)
    if "E" in section.matrices:
        closed.void[closed.void == ""] = "descriptor models (E) are not judged by this version"
    neutral = [i for i, name in enumerate(section.states) if name in criteria.neutral]

    def entry_error(rows: NDArray[np.int64]) -> NDArray[np.float64] | None:
        return find_entry_error(section, closed, matrices, loop, rows)

    deep = depth != "poles"
    everywhere = np.arange(len(points))
    modes, failed = find_usable_modes(
        closed.A,
        closed.void == "",
        entry_error(everywhere) if deep else None,
        dt=section.dt,
        neutral=neutral,
        vectors=deep,
    )
    closed.void[failed & (closed.void == "")] = "the eigenvalue iteration did not converge"
    judgement = judge(modes, points, closed.void, criteria)
    judgement = settle(judgement, modes, closed.A, entry_error, neutral=neutral)
    return Part(
        point_columns(revision, section, points, closed, modes, judgement, criteria),
        mode_columns(section, closed, modes),
        judgement.value,
        judgement.shortfall,
        judgement.missed,
    )


def find_entry_error(
    section: Section,
    closed: ClosedModels,
    matrices: Matrices,
    loop: Loop,
    rows: NDArray[np.int64],
) -> NDArray[np.float64] | None:
    """How far the entries of closed matrices may be off, by rounding of export and of closing.

    Parameters
    ----------
    section : Section
        Says how many digits the exporter wrote.
    closed : ClosedModels
        The closed models.
    matrices : dict of (points, rows, columns) float
        What they were closed from.
    loop : Loop
        How.
    rows : (k,) int
        The points wanted.

    Returns
    -------
    (k, n, n) float or None
        None: not at all.
    """
    if closed.K is None:
        if section.digits is None:
            return None
        return rounding_error(closed.A[rows], section.digits)
    # Void points may hold NaN or infinity; what comes of them is not used.
    with np.errstate(all="ignore"):
        return closed_loop_entry_error(
            matrices["A"][rows],
            matrices["B"][rows],
            matrices["C"][rows] if "C" in matrices else None,
            matrices["D"][rows] if "D" in matrices else None,
            closed.K[rows] if len(closed.K) > 1 else closed.K,
            sign=-1 if loop.sign == "negative" else 1,
            feed="states" if loop.feed == "states" else "outputs",
            digits=section.digits,
        )
