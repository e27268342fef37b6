"""How the gain schedule is designed, and the table it is handed over in."""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from ssaudit.ferry.models import INPUTS, STATES, accelerations
from ssaudit.ferry.vessel import Ferry

Array = NDArray[np.float64]

SPEEDS = (15.0, 18.0, 21.0, 24.0)
"""Breakpoints of the schedule in speed [m/s]."""

MASSES = (95.0, 100.0, 110.0, 125.0)
"""Breakpoints of the schedule in mass [t]; the reserve tank begins to fill at one of them."""

IMMERSION = 1.4
"""Immersion that the gains are designed at [m]: the middle of the envelope."""

DIGITS = 6
"""Significant digits of the gains in the table."""


@dataclass(frozen=True)
class Weights:
    """Departures that the quadratic cost counts as equally bad.

    Parameters
    ----------
    heave, heave_rate, pitch, pitch_rate : float
        Departures [m, m/s, rad, rad/s].
    flap_fore, flap_aft : float
        Angles of the flaps [rad]; larger ones make the loop quicker, and the flap with the larger
        one does more of the work.
    """

    heave: float
    heave_rate: float
    pitch: float
    pitch_rate: float
    flap_fore: float
    flap_aft: float


WEIGHTS_A = Weights(
    heave=0.2, heave_rate=2.0, pitch=0.15, pitch_rate=0.15, flap_fore=0.01, flap_aft=0.10
)
"""Of revision A, kept in B: the aft flap does most of the work."""

WEIGHTS_C = Weights(
    heave=0.2, heave_rate=2.0, pitch=0.15, pitch_rate=0.15, flap_fore=0.02, flap_aft=0.09
)
"""Of revision C: the fore flap takes over a part."""


def design_gain(ferry: Ferry, speed: float, mass: float, weights: Weights) -> Array:
    """Gain of one breakpoint: quadratic optimal for the bare hull, then fitted to the sensors.

    The optimum is that of heave and pitch with ideal flaps and a true height; what actuators,
    filter and computer then cost in damping is left to the audit. The height of the centre of
    gravity is not measured: the filtered height of the bow less lever times pitch stands for it, so
    the gain on heave moves to ``height_filtered`` and ``pitch``, and that on ``heave`` itself is
    zero.

    Parameters
    ----------
    ferry : Ferry
        The ferry the gains are designed for.
    speed, mass : float
        Speed [m/s], mass [t].
    weights : Weights
        Of the quadratic cost.

    Returns
    -------
    (2, 9) float
        K of u = -K x, for `models.INPUTS` and `models.STATES`.

    References
    ----------
    Kalman, Contributions to the theory of optimal control, Bol. Soc. Mat. Mexicana 5 (1960)
    (from memory).

    Examples
    --------
    >>> from ssaudit.ferry.vessel import BOW_TANK
    >>> K = design_gain(Ferry(BOW_TANK), 20.0, 110.0, WEIGHTS_A)
    >>> K.shape, K[:, STATES.index("heave")]
    ((2, 9), array([0., 0.]))
    """
    from scipy.linalg import solve_continuous_are

    kilograms = np.array([1000.0 * mass])
    rows = accelerations(ferry, np.array([speed]), kilograms, np.array([IMMERSION]))[0]
    A, B = np.zeros((4, 4)), np.zeros((4, 2))
    A[0, 1] = A[2, 3] = 1.0
    A[[1, 3]], B[[1, 3]] = rows[:, :4], rows[:, 4:]
    departures = (weights.heave, weights.heave_rate, weights.pitch, weights.pitch_rate)
    flaps = np.square((weights.flap_fore, weights.flap_aft))
    cost = solve_continuous_are(A, B, np.diag(1 / np.square(departures)), np.diag(1 / flaps))
    heave, heave_rate, pitch, pitch_rate = (flaps[:, None] * B.T @ cost).T
    lever = ferry.sensor_station - ferry.masses.centre(kilograms)[0]
    K = np.zeros((len(INPUTS), len(STATES)))
    K[:, STATES.index("heave_rate")] = heave_rate
    K[:, STATES.index("pitch")] = pitch - lever * heave
    K[:, STATES.index("pitch_rate")] = pitch_rate
    K[:, STATES.index("height_filtered")] = heave
    return K


def write_gains(path: Path, ferry: Ferry, weights: Weights) -> None:
    """Design the schedule at all breakpoints and write its table.

    Parameters
    ----------
    path : Path
        CSV file to write: ``speed`` [m/s], ``mass`` [t], then a column ``K:<input>:<state>`` for
        each gain, to `DIGITS` significant digits.
    ferry : Ferry
        The ferry the gains are designed for.
    weights : Weights
        Of the quadratic cost.
    """
    header = ["speed", "mass", *(f"K:{i}:{s}" for i in INPUTS for s in STATES)]
    lines = [",".join(header)]
    for speed in SPEEDS:
        for mass in MASSES:
            gains = design_gain(ferry, speed, mass, weights).ravel()
            row = [f"{speed:g}", f"{mass:g}", *(f"{gain:.{DIGITS}g}" for gain in gains)]
            lines.append(",".join(row))
    path.write_text("\n".join(lines) + "\n", encoding="utf-8", newline="\n")
