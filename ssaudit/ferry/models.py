"""Linear heave and pitch models of the ferry, one for every operating point, stacked."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ssaudit.ferry.foils import added_mass
from ssaudit.ferry.forces import find_trim, force_derivatives
from ssaudit.ferry.vessel import Ferry

Array = NDArray[np.float64]

STATES = (
    "heave",
    "heave_rate",
    "pitch",
    "pitch_rate",
    "flap_fore",
    "flap_fore_rate",
    "flap_aft",
    "flap_aft_rate",
    "height_filtered",
)
"""Heave [m], its rate [m/s], pitch [rad], its rate [rad/s], flap angles [rad] and their rates
[rad/s], the filtered height of the bow [m]; all as departures from trim."""

INPUTS = ("flap_fore_command", "flap_aft_command")
"""Commanded flap angles [rad], trailing edge down."""

OUTPUTS = ("height_measured", "pitch", "pitch_rate", "heave_acceleration")
"""Filtered height of the bow [m], pitch [rad] and its rate [rad/s] from the gyros, and the upward
acceleration of the centre of gravity [m/s²]."""


@dataclass(frozen=True)
class Models:
    """Stacked models and the points they belong to.

    Parameters
    ----------
    A, B, C, D : (points, ...) float
        State, input, output and feedthrough matrices in the order of `STATES`, `INPUTS`, `OUTPUTS`.
    speed, mass, immersion : (points,) float
        Speed [m/s], mass [t], immersion [m].
    """

    A: Array
    B: Array
    C: Array
    D: Array
    speed: Array
    mass: Array
    immersion: Array


def accelerations(ferry: Ferry, speed: Array, mass: Array, immersion: Array) -> Array:
    """Heave and pitch acceleration per unit of each motion.

    Parameters
    ----------
    ferry : Ferry
    speed, mass, immersion : (points,) float
        Speed [m/s], mass [kg], immersion [m].

    Returns
    -------
    (points, 2, 6) float
        Heave [m/s²] and pitch [rad/s²] acceleration per unit of each of `forces.MOTIONS`.

    Examples
    --------
    >>> from ssaudit.ferry.vessel import BOW_TANK
    >>> point = np.array([20.0]), np.array([110e3]), np.array([1.4])
    >>> accelerations(Ferry(BOW_TANK), *point).shape
    (1, 2, 6)
    """
    trim = find_trim(ferry, speed, mass, immersion)
    inertia = np.zeros((len(mass), 2, 2))
    inertia[:, 0, 0] = mass
    inertia[:, 1, 1] = ferry.masses.pitch_inertia(mass)
    for foil, arm in zip(ferry.foils, trim.arm, strict=True):
        lever = np.stack([np.ones_like(arm), arm], axis=-1)
        water = added_mass(foil.span, foil.chord, ferry.density)
        inertia += water * lever[:, :, None] * lever[:, None, :]
    return np.asarray(np.linalg.solve(inertia, force_derivatives(ferry, trim)), dtype=np.float64)


def build_models(ferry: Ferry, speed: Array, mass: Array, immersion: Array) -> Models:
    """Linearise the ferry at operating points.

    Parameters
    ----------
    ferry : Ferry
    speed, mass, immersion : (points,) float
        Speed [m/s], mass [t], immersion [m].

    Returns
    -------
    Models

    Examples
    --------
    >>> from ssaudit.ferry.vessel import BOW_TANK
    >>> point = np.array([20.0]), np.array([110.0]), np.array([1.4])
    >>> models = build_models(Ferry(BOW_TANK), *point)
    >>> models.A.shape, models.B.shape, models.C.shape
    ((1, 9, 9), (1, 9, 2), (1, 4, 9))
    """
    kilograms = 1000.0 * mass
    rows = accelerations(ferry, speed, kilograms, immersion)
    A = np.zeros((len(speed), len(STATES), len(STATES)))
    A[:, 0, 1] = A[:, 2, 3] = 1.0
    A[:, [[1], [3]], [0, 1, 2, 3, 4, 6]] = rows
    for angle in (4, 6):
        A[:, angle, angle + 1] = 1.0
        A[:, angle + 1, angle] = -(ferry.flap_frequency**2)
        A[:, angle + 1, angle + 1] = -2 * ferry.flap_damping * ferry.flap_frequency
    sensor_arm = ferry.sensor_station - ferry.masses.centre(kilograms)[0]
    A[:, 8, 0] = 1 / ferry.sensor_time
    A[:, 8, 2] = sensor_arm / ferry.sensor_time
    A[:, 8, 8] = -1 / ferry.sensor_time
    B = np.zeros((len(speed), len(STATES), len(INPUTS)))
    B[:, 5, 0] = B[:, 7, 1] = ferry.flap_frequency**2
    # The acceleration holds no command, since the flaps lag behind it: D is zero.
    C = np.zeros((len(speed), len(OUTPUTS), len(STATES)))
    C[:, 0, 8] = C[:, 1, 2] = C[:, 2, 3] = 1.0
    C[:, 3] = A[:, 1]
    D = np.zeros((len(speed), len(OUTPUTS), len(INPUTS)))
    return Models(A, B, C, D, speed, mass, immersion)
