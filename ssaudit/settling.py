"""Settling verdicts by evidence beside the poles: cross-checks, and exact grounds for "lost"."""

from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from ssaudit.judging import DOUBT, LOST, VOID, Judgement
from ssaudit.modes.evidence import DISAGREEMENTS, GROUNDS, cross_check, exact_not_stable
from ssaudit.modes.neutral import neutral_states
from ssaudit.modes.stacked import Modes

Floats = NDArray[np.float64]


def settle(
    judgement: Judgement,
    modes: Modes,
    A: Floats,
    entry_error: Callable[[NDArray[np.int64]], Floats | None],
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
        Closed-loop state matrices.
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
    judged = (verdict != VOID) & (A.shape[1] > 0)
    unstable = judged & (verdict == LOST)
    stable = judged & ~unstable & ~judgement.unsure
    for row in np.flatnonzero(judgement.unsure & judged):
        kept = ~neutral_states(A[[row]], np.array(neutral, dtype=np.int64), sampled)[0]
        error = entry_error(np.array([row]))
        grounds = exact_not_stable(
            A[[row]][:, kept][:, :, kept],
            entry_error=None if error is None else error[:, kept][:, :, kept],
            sampled=sampled,
        )[0]
        if grounds:
            verdict[row], reason[row] = LOST, f"not stable: {GROUNDS[grounds[0]]}"
    failed = cross_check(A, poles, stable, unstable, sampled=sampled)
    for row in np.flatnonzero(judged & (failed != "")):
        verdict[row], reason[row] = DOUBT, f"cross-check: {DISAGREEMENTS[str(failed[row])]}"
    return replace(judgement, verdict=verdict, reason=reason)
