"""What the stages of a pipeline found, each as the single command shows it."""

from rich.console import RenderableType

from ssaudit.intake.ingest import Intake
from ssaudit.report.audit_text import audit_text
from ssaudit.report.drift_text import drift_text
from ssaudit.report.intake_text import intake_text
from ssaudit.stages import AuditReport, Comparison

Result = Intake | AuditReport | Comparison


def stage_text(result: Result, worst: int | None = None) -> RenderableType:
    """Lay out what a stage came to.

    Parameters
    ----------
    result : Intake, AuditReport or Comparison
        From `ssaudit.pipeline.run_pipeline`.
    worst : int, optional
        How many points a comparison lists of each kind.

    Returns
    -------
    rich renderable
    """
    if isinstance(result, Intake):
        return intake_text(result)
    if isinstance(result, AuditReport):
        return audit_text(result)
    return drift_text(result, worst)


def all_ok(result: Result) -> bool:
    """Whether a stage found nothing that makes the exit code 1."""
    if isinstance(result, Intake):
        return True  # its void points count when they are audited
    if isinstance(result, AuditReport):
        return result.summary.all_ok
    return not result.drift.got_worse
