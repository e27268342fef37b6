"""A small export of revision B whose numbers were written to a few digits only."""

from itertools import product
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from ssaudit.ferry.models import INPUTS, OUTPUTS, STATES, Models, build_models
from ssaudit.ferry.vessel import STERN_TANK, Ferry

Array = NDArray[np.float64]

DIGITS = 4
"""Significant digits that are kept."""

SPEEDS = tuple(np.arange(18.0, 24.1, 0.5))
"""Speeds [m/s]: the fast part of the envelope, in half the steps of the full export."""

MASSES = tuple(np.arange(105.0, 126.0, 1.0))
"""Masses [t]: the heavy part, in a fifth of the steps of the full export."""

IMMERSION = 1.4
"""Immersion of all points [m]."""


def rounded_id(speed: float, mass: float) -> str:
    """Id of a point from speed [m/s] and mass [t].

    Examples
    --------
    >>> rounded_id(18.5, 125.0)
    'v18.5-m125-h1.4'
    """
    return f"v{speed:.1f}-m{mass:.0f}-h{IMMERSION:.1f}"


def round_to_digits(M: Array, digits: int) -> Array:
    """Every entry of a matrix as it reads back from a decimal of so many significant digits.

    Parameters
    ----------
    M : (...) float
        Entries in any unit.
    digits : int
        Significant decimal digits, at least 1.

    Returns
    -------
    (...) float

    Examples
    --------
    >>> round_to_digits(np.array([[0.0, -72.45239, 1234.567]]), 4)
    array([[   0.  ,  -72.45, 1235.  ]])
    """
    written = [float(f"{entry:.{digits - 1}e}") for entry in M.ravel().tolist()]
    return np.array(written, dtype=np.float64).reshape(M.shape)


def build_rounded() -> tuple[list[str], Models]:
    """Models of the rounded export with their ids.

    Returns
    -------
    ids : list of str
    models : Models
        Matrices to `DIGITS` digits; speed [m/s], mass [t] and immersion [m] in full.

    Examples
    --------
    >>> ids, models = build_rounded()
    >>> len(ids), ids[0], models.A.shape
    (273, 'v18.0-m105-h1.4', (273, 9, 9))
    """
    points = np.array(list(product(SPEEDS, MASSES, (IMMERSION,))))
    exact = build_models(Ferry(STERN_TANK), *points.T)
    A, B, C, D = (round_to_digits(M, DIGITS) for M in (exact.A, exact.B, exact.C, exact.D))
    ids = [rounded_id(speed, mass) for speed, mass, _ in points]
    return ids, Models(A, B, C, D, exact.speed, exact.mass, exact.immersion)


def write_rounded(path: Path) -> Path:
    """Write the rounded export in NPZ, with the number of its digits.

    Parameters
    ----------
    path : Path
        File to write.

    Returns
    -------
    Path
        The same.
    """
    ids, models = build_rounded()
    np.savez_compressed(
        path,
        A=models.A,
        B=models.B,
        C=models.C,
        D=models.D,
        ids=ids,
        at_speed=models.speed,
        units_speed="m/s",
        at_mass=models.mass,
        units_mass="t",
        at_immersion=models.immersion,
        units_immersion="m",
        states=STATES,
        inputs=INPUTS,
        outputs=OUTPUTS,
        dt=0.0,
        digits=DIGITS,
    )
    return path
