"""A pipeline file: sources, loop, criteria and ledger of several revisions, stage by stage."""

import os
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from ssaudit.bank_file import read_bank
from ssaudit.chunk import DEPTHS, PROVE
from ssaudit.criteria import read_criteria
from ssaudit.errors import LedgerError, PipelineError
from ssaudit.intake.ingest import Intake, ingest
from ssaudit.intake.layout import read_layout
from ssaudit.intake.sources import find_files
from ssaudit.ledger import find_run
from ssaudit.loop.files import read_loop
from ssaudit.progress import Progress, no_progress
from ssaudit.settings import check_keys, nearest, read_toml, take, take_words
from ssaudit.stages import AuditReport, Comparison, compare_runs, stream_audit

# Keys that may stand once for all revisions, or in one of them.
SHARED = ("loop", "criteria", "layout", "depth", "prove")


@dataclass(frozen=True)
class Revision:
    """One revision of a pipeline.

    Attributes
    ----------
    revision : str
        Its name.
    sources : tuple of Path
        Files, folders or glob patterns.
    bank : Path
        Bank to write.
    loop, criteria : Path
        Loop and criteria files.
    layout : Path or None
        Layout file.
    depth : str
        Depth of the audit.
    prove : str
        Points to settle by proof; "" for none.
    compare : str or None
        Revision (or run) to compare with.
    """

    revision: str
    sources: tuple[Path, ...]
    bank: Path
    loop: Path
    criteria: Path
    layout: Path | None
    depth: str
    prove: str
    compare: str | None


@dataclass(frozen=True)
class Pipeline:
    """What a pipeline file says.

    Attributes
    ----------
    ledger : Path
        The ledger's folder.
    revisions : tuple of Revision
        In order.
    """

    ledger: Path
    revisions: tuple[Revision, ...]


def read_pipeline(path: str | os.PathLike[str]) -> Pipeline:
    """Read a pipeline file.

    Parameters
    ----------
    path : path
        A TOML file; paths in it are relative to it.

    Returns
    -------
    Pipeline

    Raises
    ------
    PipelineError
        Naming the file, the key and the way out.
    """
    where, folder = str(path), Path(path).parent
    about = read_toml(path, PipelineError)
    valid = ("ledger", "banks", "revision", *SHARED)
    check_keys(about, valid, where=where, error=PipelineError)
    tables = take(about, "revision", list, where=where, error=PipelineError, default=[])
    if not tables:
        raise PipelineError("no revision is given", where=where, do="add a [[revision]] table")
    ledger = _beside(folder, _text(about, "ledger", where))
    banks = _beside(folder, _text(about, "banks", where))
    shared = {key: about[key] for key in SHARED if key in about}
    revisions: list[Revision] = []
    for number, table in enumerate(tables, start=1):
        place = f"{where}, [[revision]] {number}"
        if not isinstance(table, dict):
            raise PipelineError("is not a table", where=place)
        revision = _read_revision(shared | table, folder, banks, place)
        if any(revision.bank == earlier.bank for earlier in revisions):
            raise PipelineError(f"a second revision is named {revision.revision!r}", where=place)
        revisions.append(revision)
    return Pipeline(ledger, tuple(revisions))


def _read_revision(table: dict[str, Any], folder: Path, banks: Path, where: str) -> Revision:
    valid = ("name", "sources", "compare", *SHARED)
    check_keys(table, valid, where=where, error=PipelineError)
    name = _text(table, "name", where)
    sources = take_words(table, "sources", where=where, error=PipelineError)
    if not sources:
        raise PipelineError("sources is missing", where=where, do="name the export's files")
    depth = take(table, "depth", str, where=where, error=PipelineError, default="modes")
    if depth not in DEPTHS:
        raise PipelineError(f"depth is {depth!r}", where=where, do=nearest(depth, DEPTHS))
    prove = take(table, "prove", str, where=where, error=PipelineError, default="")
    if prove not in ("", *PROVE):
        raise PipelineError(f"prove is {prove!r}", where=where, do=nearest(prove, PROVE))
    if "/" in name or "\\" in name or name in ("", ".", ".."):
        raise PipelineError(f"a revision cannot be named {name!r}", where=where)
    layout = take(table, "layout", str, where=where, error=PipelineError)
    return Revision(
        name,
        tuple(_beside(folder, source) for source in sources),
        banks / f"{name}.h5",
        _beside(folder, _text(table, "loop", where)),
        _beside(folder, _text(table, "criteria", where)),
        _beside(folder, layout) if layout else None,
        depth,
        prove,
        take(table, "compare", str, where=where, error=PipelineError),
    )


def _beside(folder: Path, path: str) -> Path:
    """Resolve a path against the pipeline's folder, as short as it can be written."""
    return Path(os.path.normpath(folder / path))


def _text(table: dict[str, Any], key: str, where: str) -> str:
    return str(take(table, key, str, where=where, error=PipelineError, required=True))


def run_pipeline(
    path: str | os.PathLike[str], *, worst: int | None = None, progress: Progress | None = None
) -> Iterator[Intake | AuditReport | Comparison]:
    """Run a pipeline stage by stage.

    Parameters
    ----------
    path : path
        The pipeline file.
    worst : int
        How many of the worst points each audit lists; as many as fit a screen when absent.
    progress : callable, optional
        Called as ``progress(stage, done, total)``.

    Yields
    ------
    Intake, AuditReport or Comparison
        What each stage came to, as the single commands would have.

    Raises
    ------
    SsauditError
        At the stage that cannot be run.
    """
    pipeline = read_pipeline(path)
    # All that is cheap to look at comes first: a slip in the last revision should not cost hours.
    stated = [(read_loop(r.loop), read_criteria(r.criteria)) for r in pipeline.revisions]
    for revision in pipeline.revisions:
        find_files(revision.sources, read_layout(revision.layout) if revision.layout else None)
    _check_comparisons(pipeline, str(path))
    audited: dict[str, str] = {}
    for revision, (loop, criteria) in zip(pipeline.revisions, stated, strict=True):
        yield ingest(
            revision.sources,
            revision=revision.revision,
            bank=revision.bank,
            layout=revision.layout,
            progress=progress or no_progress,
        )
        with read_bank(revision.bank) as bank:
            report = stream_audit(
                bank,
                loop,
                criteria,
                ledger=pipeline.ledger,
                depth=revision.depth,
                prove=revision.prove,
                worst=worst,
                progress=progress,
            )
        yield report
        # Not the newest run of the revision: that may be another one, if this was logged before.
        audited[revision.revision] = report.run.run if report.run else revision.revision
        if revision.compare is not None:
            before = audited.get(revision.compare, revision.compare)
            yield compare_runs(pipeline.ledger, before, audited[revision.revision])


def _check_comparisons(pipeline: Pipeline, file: str) -> None:
    """Check that what is compared with will be there: an earlier revision, or one in the ledger."""
    earlier: set[str] = set()
    for number, revision in enumerate(pipeline.revisions, start=1):
        if revision.compare is not None and revision.compare not in earlier:
            try:
                find_run(pipeline.ledger, revision.compare)
            except LedgerError as error:
                raise PipelineError(
                    f"compare = {revision.compare!r} is no revision before it, and in the ledger "
                    f"{error.what}",
                    where=f"{file}, [[revision]] {number}",
                    do=error.do,
                ) from error
        earlier.add(revision.revision)
