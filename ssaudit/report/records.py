"""Findings as records for JSON, under the names that the ledger uses."""

import json
from collections.abc import Mapping
from dataclasses import fields
from typing import Any

from ssaudit.criteria import POINT_QUANTITIES
from ssaudit.distances import SingleLoop
from ssaudit.drifting import Drift
from ssaudit.ledger import LoggedRun
from ssaudit.point import PointReport
from ssaudit.provenance import finite
from ssaudit.report.audit_text import participating
from ssaudit.report.words import CAUTIONS
from ssaudit.stages import WORST, AuditReport

SCHEMA = 1
NUMBERS = (
    "real",
    "imag",
    "natural_frequency",
    "damping_ratio",
    "time_constant",
    "max_real",
    "min_damping",
    "radius",
)


def as_json(record: Mapping[str, Any]) -> str:
    """Write a record as JSON: no NaN, no infinity, and ASCII alone, which any encoding can hold."""
    return json.dumps(record, indent=1, allow_nan=False)


def audit_record(report: AuditReport) -> dict[str, Any]:
    """Record an audit for ``--json``.

    Parameters
    ----------
    report : AuditReport
        What was found.

    Returns
    -------
    dict
        Schema 1 of ``audit --json``.
    """
    summary = report.summary
    return {
        "schema": SCHEMA,
        "run": report.run.run if report.run else None,
        "already_logged": report.already_logged,
        "revision": summary.revision,
        "points": {"total": summary.total, **summary.counts},
        "worst": [_point(point) for point in summary.worst],
        "requirements": [
            {
                "name": missed.name,
                "required": missed.limits,
                "missed": missed.points,
                "judged": missed.judged,
                "worst_point": missed.worst_point or None,
                "worst_value": finite(missed.worst_value),
                "at": missed.at,
                "between": missed.between,
            }
            for missed in summary.missed
        ],
        "void": summary.void,
        "margins": [
            {
                "quantity": nearest.quantity,
                "value": finite(nearest.value),
                "point": nearest.point or None,
                "loop": nearest.loop or None,
                "frequency": finite(nearest.frequency),
                "at": nearest.at,
                "undefined": nearest.undefined,
            }
            for nearest in summary.nearest
        ],
        "stable_gain_factors": [
            {
                "loop": common.loop or "all gains",
                "from": finite(common.low),
                "to": finite(common.high),
                "from_point": common.low_point or None,
                "to_point": common.high_point or None,
                "unknown": common.unknown,
            }
            for common in summary.ranges
        ],
        "held": summary.held,
        "tolerated": summary.tolerated,
        "proofs": summary.proofs,
        "named": summary.named,
        "max_real": finite(summary.max_real),
        "min_damping": finite(summary.min_damping),
        "units": report.about["units"],
        "digests": report.about["digests"],
        "versions": report.about["versions"],
        "settings": report.about["settings"],
        "loop": report.formula,
        "cautions": CAUTIONS,
    }


def _point(point: Mapping[str, Any]) -> dict[str, Any]:
    return {
        "point": point["point"],
        "at": {n.removeprefix("at_"): finite(v) for n, v in point.items() if n[:3] == "at_"},
        "tags": {n.removeprefix("tag_"): v for n, v in point.items() if n[:4] == "tag_"},
        "verdict": point["verdict"],
        "reason": point["reason"],
        "doubt": point["doubt"] or None,
        "proof": point.get("proof") or None,
        "stable_inside": _answer(point["stable_inside"]),
        "stable_outside": _answer(point["stable_outside"]),
        "missed": [name for name in point["missed"].split("; ") if name],
        **{name: finite(point[name]) for name in (*NUMBERS, *POINT_QUANTITIES) if name in point},
        "top_states": participating(point),
    }


def point_record(report: PointReport) -> dict[str, Any]:
    """Record one point for ``--json``.

    Parameters
    ----------
    report : PointReport
        The point, explained.

    Returns
    -------
    dict
    """
    row, gains = report.row, report.gains
    return {
        "schema": SCHEMA,
        **_point(row),
        "units": report.units,
        "apart": report.apart,
        "loop": report.formula,
        "modes": [
            {name: _plain(value) for name, value in mode.items() if name not in SHARED}
            for mode in report.modes
        ],
        "loops": [_loop(loop) for loop in report.loops],
        "stable_gain_factors": None
        if gains is None
        else [
            {"from": finite(low), "to": finite(high)}
            for low, high in zip(gains.low[0], gains.high[0], strict=True)
            if low == low
        ],
        "gains": [
            {
                "input": effect.input,
                "signal": effect.signal,
                "gain": finite(effect.gain),
                "derivative": finite(effect.derivative),
            }
            for effect in report.effects
        ],
        "cautions": CAUTIONS,
    }


SHARED = ("point", "revision")


def _loop(loop: SingleLoop) -> dict[str, Any]:
    margins, peaks = loop.margins, loop.peaks
    skipped = ("stable", "confirmed")
    numbers = {f.name: getattr(margins, f.name)[0] for f in fields(margins)}
    record = {name: finite(value) for name, value in numbers.items() if name not in skipped}
    return {
        "loop": loop.name,
        "stable": bool(margins.stable[0]),
        "confirmed": bool(margins.confirmed[0] and loop.gains.confirmed[0]),
        **record,
        "gain_factor_low": finite(loop.gains.low[0]),
        "gain_factor_high": finite(loop.gains.high[0]),
        "peak_sensitivity": finite(peaks.sensitivity[0]),
        "peak_complementary": finite(peaks.complementary[0]),
    }


def _answer(value: int) -> bool | None:
    return None if value < 0 else bool(value)


def drift_record(
    before: LoggedRun, after: LoggedRun, drift: Drift, movers: int | None = None
) -> dict[str, Any]:
    """Record a drift for ``--json``.

    Parameters
    ----------
    before, after : LoggedRun
        The runs compared.
    drift : Drift
        What changed.
    movers : int, optional
        How many of the largest movers to list; `WORST` when absent.

    Returns
    -------
    dict
    """
    points = drift.points
    return {
        "schema": SCHEMA,
        "from": {"run": before.run, "revision": before.revision},
        "to": {"run": after.run, "revision": after.revision},
        "matched_by": drift.matched_by,
        "tolerance": drift.tolerance,
        "points": dict(drift.changes),
        "relocated": drift.relocated,
        "verdicts": [
            {"from": old, "to": new, "points": count}
            for (old, new), count in drift.verdicts.items()
        ],
        "moved": {
            name: {key: finite(value) for key, value in moved.items()}
            for name, moved in drift.moved.items()
        },
        "changed": _rows(points[points["change"] != "same"]),
        "movers": _rows(drift.movers(WORST if movers is None else movers)),
        "cautions": CAUTIONS,
    }


def _rows(frame: Any) -> list[dict[str, Any]]:
    rows = []
    for row in frame.to_dict("records"):
        at = {n.removeprefix("at_"): finite(v) for n, v in row.items() if n[:3] == "at_"}
        rest = {n: _plain(v) for n, v in row.items() if n[:3] != "at_"}
        rows.append({"point": rest.pop("point"), "at": at, **rest})
    return rows


def _plain(value: Any) -> Any:
    return value if isinstance(value, str) else finite(value)
