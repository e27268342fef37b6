"""Bulk stability audit of gain-scheduled state-space models.

The words are those of the command line: take an export in (`ingest`) or build a bank from arrays
(`build_bank`), state a `Loop` and `Criteria`, then `audit`, log, and compare runs with `drift`.
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

__version__ = "0.1.0"

if TYPE_CHECKING:
    from ssaudit.auditing import Audit, audit
    from ssaudit.bank import ModelBank
    from ssaudit.bank_arrays import build_bank
    from ssaudit.bank_file import read_bank
    from ssaudit.criteria import Criteria, Requirement, read_criteria
    from ssaudit.drifting import Drift, drift
    from ssaudit.errors import SsauditError
    from ssaudit.intake.ingest import ingest
    from ssaudit.ledger import LoggedRun, find_run, read_ledger
    from ssaudit.loop.files import read_gain_table, read_loop
    from ssaudit.loop.gains import ConstantGain, GainSchedule
    from ssaudit.loop.model import Loop
    from ssaudit.pipeline import run_pipeline
    from ssaudit.stages import stream_audit

# Where each public name lives: imported when it is first used, so that starting stays light.
_HOMES = {
    "Audit": "auditing",
    "ConstantGain": "loop.gains",
    "Criteria": "criteria",
    "Drift": "drifting",
    "GainSchedule": "loop.gains",
    "LoggedRun": "ledger",
    "Loop": "loop.model",
    "ModelBank": "bank",
    "Requirement": "criteria",
    "SsauditError": "errors",
    "audit": "auditing",
    "build_bank": "bank_arrays",
    "drift": "drifting",
    "find_run": "ledger",
    "ingest": "intake.ingest",
    "stream_audit": "stages",
    "read_bank": "bank_file",
    "read_criteria": "criteria",
    "read_gain_table": "loop.files",
    "read_ledger": "ledger",
    "read_loop": "loop.files",
    "run_pipeline": "pipeline",
}

__all__ = [
    "Audit",
    "ConstantGain",
    "Criteria",
    "Drift",
    "GainSchedule",
    "LoggedRun",
    "Loop",
    "ModelBank",
    "Requirement",
    "SsauditError",
    "audit",
    "build_bank",
    "drift",
    "find_run",
    "ingest",
    "read_bank",
    "read_criteria",
    "read_gain_table",
    "read_ledger",
    "read_loop",
    "run_pipeline",
    "stream_audit",
]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(f"{__name__}.{_HOMES[name]}"), name)


def __dir__() -> list[str]:
    return sorted([*globals(), *_HOMES])
