"""Settling verdicts by evidence beside the poles: cross-checks, exact grounds, proofs."""

from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from ssaudit.criteria import CROSS_CHECK, STABILITY
from ssaudit.judging import DOUBT, LOST, ON_AXIS, ON_CIRCLE, VOID, Judgement
from ssaudit.modes.evidence import DISAGREEMENTS, GROUNDS, cross_check, exact_not_stable
from ssaudit.modes.neutral import grows_at_rest, neutral_states
from ssaudit.modes.stacked import ErrorsOf, Modes

Floats = NDArray[np.float64]


def settle(
    judgement: Judgement,
    modes: Modes,
    A: Floats,
    entry_error: ErrorsOf,
    *,
    neutral: Sequence[int] = (),
) -> Judgement:
    """Overrule verdicts that evidence beside the poles contradicts, or can decide.

    A cross-check that fails turns a verdict into doubt. Where poles leave the stability in doubt,
    exact evidence that the model is not stable (its trace is not negative, say) makes it lost.

    Parameters
    ----------
    judgement : Judgement
        Verdicts from the poles.
    modes : Modes
        The modes they were judged by.
    A : (points, n, n) float
        Closed-loop state matrices of ordinary models.
    entry_error : callable
        Gives for rows of A how far their entries may be off; None: not at all.
    neutral : sequence of int
        States that the criteria exempt.

    Returns
    -------
    Judgement
    """
    sampled = modes.z is not None
    poles = modes.s if modes.z is None else modes.z
    verdict, reason = judgement.verdict.copy(), judgement.reason.copy()
    about = judgement.doubt.copy()
    judged = (verdict != VOID) & (A.shape[1] > 0)
    unsure = judged & (about == STABILITY)
    lost = judged & (verdict == LOST)
    for row in np.flatnonzero(unsure):
        grounds = _grounds(A, np.array([row]), entry_error, neutral, sampled)
        if grounds:
            verdict[row], about[row] = LOST, ""
            reason[row] = f"not stable: {GROUNDS[grounds[0]]}"
    at_rest = np.flatnonzero(np.isin(reason, (ON_AXIS, ON_CIRCLE)) | (unsure & (verdict == LOST)))
    growing = at_rest[grows_at_rest(A[at_rest], sampled)]
    reason[growing] = f"not stable: a repeated pole at {int(sampled)}, which grows as t"
    failed = cross_check(A, poles, judged & ~lost & ~unsure, lost, sampled=sampled)
    for row in np.flatnonzero(judged & (failed != "")):
        verdict[row], about[row] = DOUBT, CROSS_CHECK
        reason[row] = f"cross-check: {DISAGREEMENTS[str(failed[row])]}"
    return replace(judgement, verdict=verdict, reason=reason, doubt=about)


def _grounds(
    A: Floats,
    row: NDArray[np.int64],
    entry_error: ErrorsOf,
    neutral: Sequence[int],
    sampled: bool,
) -> tuple[str, ...]:
    """Exact grounds why one model is not stable, its neutral states left out."""
    kept = ~neutral_states(A[row], np.array(neutral, dtype=np.int64), sampled)[0]
    error = entry_error(row)
    return exact_not_stable(
        A[row][:, kept][:, :, kept],
        entry_error=None if error is None else error[:, kept][:, :, kept],
        sampled=sampled,
    )[0]


def apply_proofs(judgement: Judgement, outcomes: Mapping[int, tuple[str, str]]) -> Judgement:
    """Let proofs overrule the verdicts of the points that they are about.

    Parameters
    ----------
    judgement : Judgement
        Verdicts so far.
    outcomes : dict of (outcome, how)
        "stable", "unstable" or "open", and by what, by row.

    Returns
    -------
    Judgement
        Proved unstable: lost. Proved stable: what the requirements alone say. Open: as it was.
    """
    verdict, reason = judgement.verdict.copy(), judgement.reason.copy()
    about, worst = judgement.doubt.copy(), judgement.worst.copy()
    by_verdict, by_reason, by_worst, by_about = judgement.by_requirements
    for row, (outcome, how) in outcomes.items():
        if outcome == "unstable":
            known = f"{reason[row]}; " if verdict[row] == LOST else "not stable: "
            verdict[row], about[row] = LOST, ""
            reason[row] = f"{known}proved, {how}"
        elif outcome == "stable":
            verdict[row], reason[row] = by_verdict[row], by_reason[row]
            about[row], worst[row] = by_about[row], by_worst[row]
        elif verdict[row] == DOUBT:
            reason[row] += f"; proof open, {how}"
    return replace(judgement, verdict=verdict, reason=reason, doubt=about, worst=worst)
