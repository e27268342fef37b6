"""The stages that the command line and pipelines share: audit to a ledger, compare, look back."""

import os
from collections.abc import Mapping
from contextlib import ExitStack
from dataclasses import dataclass
from typing import Any

from ssaudit.auditing import audit_parts
from ssaudit.bank import ModelBank
from ssaudit.criteria import Criteria
from ssaudit.csv_table import CsvWriter
from ssaudit.drifting import TOLERANCE, Drift, drift
from ssaudit.ledger import LoggedRun, find_logged, find_run
from ssaudit.loop.model import Loop
from ssaudit.progress import Progress
from ssaudit.provenance import describe_run, run_digest
from ssaudit.run_writer import RunWriter
from ssaudit.summary import Summary, Tally

Path = str | os.PathLike[str]
# Worst points that leave a screen of 40 lines room for the rest.
WORST, WORST_WITH_MARGINS = 5, 3


@dataclass(frozen=True, eq=False)
class AuditReport:
    """What an audit found, and what it was made of.

    Attributes
    ----------
    summary : Summary
        Counts, worst points and what they miss.
    about : dict
        Content of the run's ``run.json``: inputs, digests, versions, settings.
    bank, loop, criteria : str
        Names of the files, for the reader.
    formula : str
        How the loop was closed.
    run : LoggedRun or None
        The run in the ledger; None when no ledger was named.
    already_logged : bool
        Whether the ledger held the same run before.
    """

    summary: Summary
    about: Mapping[str, Any]
    bank: str
    loop: str
    criteria: str
    formula: str
    run: LoggedRun | None = None
    already_logged: bool = False


def stream_audit(
    bank: ModelBank,
    loop: Loop,
    criteria: Criteria,
    *,
    ledger: Path | None = None,
    csv: Path | None = None,
    depth: str = "modes",
    real_radius: bool = False,
    prove: str = "",
    worst: int | None = None,
    workers: int | None = None,
    progress: Progress | None = None,
) -> AuditReport:
    """Audit a bank of any size in bounded memory, logging it on the way.

    Parameters
    ----------
    bank, loop, criteria
        As for `ssaudit.audit`.
    ledger : path, optional
        Ledger to log the run in. The same bank, loop, criteria, depth and version are logged once.
    csv : path, optional
        CSV file for the points table.
    depth : str
        "poles", "modes" or "margins".
    real_radius : bool
        At depth margins, whether to find the radii for real changes too.
    prove : str
        "doubt", "worst" or "all": settle these points by proof.
    worst : int
        How many of the worst points the summary lists; as many as fit a screen when absent.
    workers : int, optional
        Worker threads; one a processor when absent.
    progress : callable, optional
        Called as ``progress(stage, done, total)``.

    Returns
    -------
    AuditReport

    Raises
    ------
    SsauditError
        When the inputs do not fit each other, or an output cannot be written; then nothing is.
    """
    if worst is None:
        worst = WORST_WITH_MARGINS if depth == "margins" else WORST
    tally = Tally(bank.revision, criteria, worst)
    logged, writer = None, None
    settings = {"depth": depth, "prove": prove}
    if prove == "worst":
        settings["worst"] = str(worst)
    if real_radius:
        settings["real_radius"] = "yes"
    with ExitStack() as outputs:
        if ledger is not None:
            digest = run_digest(bank, loop, criteria, settings)
            logged = find_logged(ledger, digest)
            if logged is None:
                writer = outputs.enter_context(RunWriter(ledger, digest, bank.points.units))
        table = outputs.enter_context(CsvWriter(csv)) if csv is not None else None
        for part in audit_parts(
            bank,
            loop,
            criteria,
            depth=depth,
            real_radius=real_radius,
            prove=prove,
            workers=workers,
            worst=worst,
            progress=progress,
        ):
            tally.add(part.points, part.values, part.shortfall, part.missed)
            tally.add_loops(part.points, part.loops)
            if writer is not None:
                writer.append(part)
            if table is not None:
                table.append(part.points)
        summary = tally.result()
        about = describe_run(bank, loop, criteria, settings, summary)
        if table is not None:
            table.finish()
        run = writer.commit(about) if writer is not None else logged
        if table is not None:
            table.commit()
    return AuditReport(
        summary,
        about,
        bank.name,
        loop.name,
        criteria.name,
        loop.formula,
        run,
        already_logged=logged is not None,
    )


@dataclass(frozen=True, eq=False)
class Comparison:
    """Two runs of a ledger, and what changed between them.

    Attributes
    ----------
    before, after : LoggedRun
        The runs.
    drift : Drift
        What changed.
    """

    before: LoggedRun
    after: LoggedRun
    drift: Drift

    @property
    def inputs(self) -> dict[str, bool]:
        """Whether models, loop, criteria, depth and version differ between the runs."""
        a, b = self.before.about, self.after.about
        digests = [run.get("digests", {}) for run in (a, b)]
        differ = {
            words: digests[0].get(key) != digests[1].get(key)
            for words, key in (("models", "bank"), ("loop", "loop"), ("criteria", "criteria"))
        }
        # The digest of a bank counts its revision; the files that it was made of do not.
        files = [sorted(s.get("sha256", "") for s in run.get("sources", ())) for run in (a, b)]
        if all(files):
            differ["models"] = files[0] != files[1]
        differ["settings"] = a.get("settings") != b.get("settings")
        versions = [run.get("versions", {}).get("ssaudit") for run in (a, b)]
        return {**differ, "version": versions[0] != versions[1]}


def compare_runs(
    ledger: Path, before: str, after: str, *, tolerance: float = TOLERANCE
) -> Comparison:
    """Compare two runs of a ledger.

    Parameters
    ----------
    ledger : path
        The ledger's folder.
    before, after : str
        Revisions (their newest run) or runs.
    tolerance : float
        Share of each coordinate's range within which coordinates are the same.

    Returns
    -------
    Comparison

    Raises
    ------
    SsauditError
        When there are no such runs, or they share no points.
    """
    runs = find_run(ledger, before), find_run(ledger, after)
    return Comparison(*runs, drift(*runs, tolerance=tolerance))
