"""What a run was made of: digests of its inputs, versions, and the record of both."""

import hashlib
import json
from collections.abc import Mapping
from typing import Any

import numpy as np

from ssaudit import __version__
from ssaudit.bank import ModelBank
from ssaudit.criteria import Criteria
from ssaudit.loop.model import Loop
from ssaudit.summary import Summary

DIGEST_LENGTH = 12


def run_digest(bank: ModelBank, loop: Loop, criteria: Criteria, settings: Mapping[str, str]) -> str:
    """Digest of everything that a run's numbers follow from.

    Parameters
    ----------
    bank, loop, criteria
        As audited.
    settings : dict of str
        Depth, and which points are proved.

    Returns
    -------
    str
        The same for the same content, wherever the files lie; other with another version.
    """
    inputs: dict[str, Any] = {**input_digests(bank, loop, criteria), "settings": dict(settings)}
    inputs["version"] = __version__
    return _digest(inputs)[:DIGEST_LENGTH]


def input_digests(bank: ModelBank, loop: Loop, criteria: Criteria) -> dict[str, str]:
    """Digests of bank, loop and criteria."""
    return {
        "bank": bank.digest,
        "loop": _digest(loop.description),
        "criteria": _digest(criteria.description),
    }


def _digest(content: Any) -> str:
    return hashlib.sha256(json.dumps(content, sort_keys=True).encode()).hexdigest()


def describe_run(
    bank: ModelBank,
    loop: Loop,
    criteria: Criteria,
    settings: Mapping[str, str],
    summary: Summary,
) -> dict[str, Any]:
    """Content of a run's ``run.json``: what was audited by what, and what came of it.

    Parameters
    ----------
    bank, loop, criteria, settings
        As for `run_digest`.
    summary : Summary
        What came of it.

    Returns
    -------
    dict
        Ready for JSON.
    """
    return {
        "revision": bank.revision,
        "counts": {"total": summary.total, **summary.counts},
        "missed": {missed.name: missed.points for missed in summary.missed},
        "void": dict(summary.void),
        "held": summary.held,
        "max_real": finite(summary.max_real),
        "min_damping": finite(summary.min_damping),
        "digests": input_digests(bank, loop, criteria),
        "versions": _versions(),
        "settings": dict(settings),
        "proofs": dict(summary.proofs),
        "ids_given": bank.ids_given,
        "units": dict(bank.points.units),
        "sources": [vars(source) for source in bank.sources],
        "sections": [{**section.description, "points": len(section)} for section in bank.sections],
        "loop": loop.description,
        "criteria": criteria.description,
    }


def _versions() -> dict[str, str]:
    import platform

    import pyarrow

    return {
        "ssaudit": __version__,
        "python": platform.python_version(),
        "numpy": np.__version__,
        "pyarrow": pyarrow.__version__,
    }


def finite(value: Any) -> Any:
    """Return a number for JSON, which has neither infinity nor NaN: null in their place."""
    number = float(value)
    return number if np.isfinite(number) else None
