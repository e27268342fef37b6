"""Forces on the foilborne ferry: trim, the nonlinear force and moment, and their derivatives."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ssaudit.ferry.foils import (
    Foil,
    added_mass,
    flap_effectiveness,
    free_surface_factor,
    free_surface_slope,
    lift_slope,
)
from ssaudit.ferry.vessel import GRAVITY, Ferry

Array = NDArray[np.float64]

MOTIONS = ("heave", "heave_rate", "pitch", "pitch_rate", "flap_fore", "flap_aft")
"""What the forces depend on: heave [m] and its rate [m/s], both upwards; pitch [rad] and its rate
[rad/s], bow up; the flap angles [rad], trailing edge down."""


@dataclass(frozen=True)
class Trim:
    """Equilibrium at given speed, mass and immersion; arrays of shape (points,) or (2, points).

    Parameters
    ----------
    speed, mass, immersion : (points,) float
        Speed [m/s], mass [kg], depth of both foils below the calm surface [m].
    arm : (2, points) float
        Station of the fore and aft foil, forward of the centre of gravity [m].
    depth : (points,) float
        Of the foils below the centre of gravity [m].
    lift, drag : (2, points) float
        Of the fore and aft foil [N]; drag includes the struts'.
    thrust : (points,) float
        Of the waterjet [N].
    """

    speed: Array
    mass: Array
    immersion: Array
    arm: Array
    depth: Array
    lift: Array
    drag: Array
    thrust: Array


def pressure(ferry: Ferry, speed: Array) -> Array:
    """Dynamic pressure of the water [Pa] at a speed [m/s]."""
    return 0.5 * ferry.density * speed**2


def induced_factor(foil: Foil) -> float:
    """Induced drag coefficient over the square of the lift coefficient, elliptic loading [-]."""
    return float(1 / (np.pi * foil.aspect_ratio))


def drag_area(ferry: Ferry, foil: Foil, immersion: Array) -> Array:
    """Drag of a foil and its struts without the lift's share, over dynamic pressure [m²]."""
    return ferry.profile_drag * foil.area + ferry.strut_drag * foil.strut_chord * immersion


def find_trim(ferry: Ferry, speed: Array, mass: Array, immersion: Array) -> Trim:
    """Share of lift between the foils and the thrust that hold the ferry level and steady.

    The lifts carry the weight, the thrust equals the drag, and the moments of lift, drag and thrust
    about the centre of gravity cancel. With the induced drag quadratic in lift this is one
    quadratic equation for the fore lift, of which the root near the lever rule is taken.

    Parameters
    ----------
    ferry : Ferry
    speed, mass, immersion : (points,) float
        Speed [m/s], mass [kg], depth of both foils below the calm surface [m].

    Returns
    -------
    Trim

    Examples
    --------
    >>> from ssaudit.ferry.vessel import BOW_TANK
    >>> point = np.array([20.0]), np.array([110e3]), np.array([1.4])
    >>> trim = find_trim(Ferry(BOW_TANK), *point)
    >>> np.allclose(trim.lift.sum(axis=0), 110e3 * GRAVITY)
    True
    """
    station, depth = ferry.masses.centre(mass)
    arm = np.stack([foil.station - station for foil in ferry.foils])
    q, weight = pressure(ferry, speed), mass * GRAVITY
    steady = np.stack([q * drag_area(ferry, foil, immersion) for foil in ferry.foils])
    induced = np.stack([induced_factor(foil) / (q * foil.area) for foil in ferry.foils])
    # Drag at the foils and thrust above them form a couple, bow down.
    couple = ferry.thrust_height
    square = -couple * (induced[0] + induced[1])
    linear = arm[0] - arm[1] + 2 * couple * induced[1] * weight
    constant = arm[1] * weight - couple * (steady.sum(axis=0) + induced[1] * weight**2)
    # This form of the root does not cancel when the quadratic term is small.
    fore = -2 * constant / (linear + np.sqrt(linear**2 - 4 * square * constant))
    lift = np.stack([fore, weight - fore])
    drag = steady + induced * lift**2
    return Trim(speed, mass, immersion, arm, depth, lift, drag, drag.sum(axis=0))


def force_and_moment(ferry: Ferry, trim: Trim, motions: Array) -> Array:
    """Heave force and pitch moment about the centre of gravity, nonlinear, at constant speed.

    Each foil sees the water come at the velocity of its own place: heave, pitch and their rates
    turn it, and pitch rate also changes its magnitude. Lift stands at right angles to it, drag
    along it. Lift is quasi-steady (no lag of the wake, no downwash of the fore foil on the aft
    one), proportional to angle of attack plus effective flap angle, and grows with immersion
    through the free-surface factor; induced drag is that of the deep foil. Pitching at speed
    carries the added mass round, which adds ``added mass * speed * pitch rate`` at each foil.
    The surface is calm, the speed constant, the hull clear of the water.

    Parameters
    ----------
    ferry : Ferry
    trim : Trim
        Of `points` points.
    motions : (points, 6) float
        Departure from trim, in the order of `MOTIONS`.

    Returns
    -------
    (points, 2) float
        Force upwards [N] less the weight, moment bow up [N m]; zero in trim.

    Examples
    --------
    A higher ferry is pulled down, for its foils lose lift near the surface:

    >>> from ssaudit.ferry.vessel import BOW_TANK
    >>> ferry = Ferry(BOW_TANK)
    >>> trim = find_trim(ferry, np.array([20.0]), np.array([110e3]), np.array([1.4]))
    >>> raised = np.array([[0.1, 0.0, 0.0, 0.0, 0.0, 0.0]])
    >>> (force_and_moment(ferry, trim, raised)[:, 0] < 0).tolist()
    [True]
    """
    pitch, pitch_rate = motions[:, 2], motions[:, 3]
    sine, cosine = np.sin(pitch), np.cos(pitch)
    force = trim.thrust * sine - trim.mass * GRAVITY
    moment = trim.thrust * (trim.depth - ferry.thrust_height)
    for index, foil in enumerate(ferry.foils):
        forward = trim.arm[index] * cosine + trim.depth * sine
        upward = trim.arm[index] * sine - trim.depth * cosine
        ahead, rise = trim.speed - pitch_rate * upward, motions[:, 1] + pitch_rate * forward
        sink = -motions[:, 0] - upward - trim.depth
        lift, drag = _lift_and_drag(ferry, trim, index, motions, (ahead, rise, sink))
        angle = np.arctan2(rise, ahead)
        vertical = lift * np.cos(angle) - drag * np.sin(angle)
        horizontal = -lift * np.sin(angle) - drag * np.cos(angle)
        turning = added_mass(foil.span, foil.chord, ferry.density) * trim.speed * pitch_rate
        force = force + vertical + turning
        moment = moment + forward * vertical - upward * horizontal + trim.arm[index] * turning
    return np.stack([force, moment], axis=-1)


def _lift_and_drag(
    ferry: Ferry, trim: Trim, index: int, motions: Array, place: tuple[Array, Array, Array]
) -> tuple[Array, Array]:
    """Lift and drag [N] of one foil from its velocity ahead, its rise [m/s] and its sinkage [m]."""
    foil, (ahead, rise, sink) = ferry.foils[index], place

    def slope(immersion: Array) -> Array:
        return lift_slope(foil.aspect_ratio) * free_surface_factor(immersion, foil.chord)

    trim_load = pressure(ferry, trim.speed) * foil.area * slope(trim.immersion)
    incidence = trim.lift[index] / trim_load
    flap = flap_effectiveness(foil.flap_chord_ratio) * motions[:, 4 + index]
    immersion = trim.immersion + sink
    angle = incidence + motions[:, 2] - np.arctan2(rise, ahead) + flap
    coefficient = slope(immersion) * angle
    q = pressure(ferry, np.hypot(ahead, rise))
    induced = foil.area * induced_factor(foil) * coefficient**2
    return q * foil.area * coefficient, q * (drag_area(ferry, foil, immersion) + induced)


def force_derivatives(ferry: Ferry, trim: Trim) -> Array:
    """Differentiate `force_and_moment` in trim, by formulas worked out by hand.

    Parameters
    ----------
    ferry : Ferry
    trim : Trim
        Of `points` points.

    Returns
    -------
    (points, 2, 6) float
        Of the force [N] and the moment [N m] per unit of each of `MOTIONS`.

    Examples
    --------
    >>> from ssaudit.ferry.vessel import BOW_TANK
    >>> point = np.array([20.0]), np.array([110e3]), np.array([1.4])
    >>> trim = find_trim(Ferry(BOW_TANK), *point)
    >>> force_derivatives(Ferry(BOW_TANK), trim).shape
    (1, 2, 6)
    """
    thrust = np.zeros((len(trim.speed), 2, len(MOTIONS)))
    thrust[:, 0, 2] = trim.thrust
    return thrust + _foil_derivatives(ferry, trim, 0) + _foil_derivatives(ferry, trim, 1)


def _foil_derivatives(ferry: Ferry, trim: Trim, index: int) -> Array:
    """One foil's share of `force_derivatives`, shape (points, 2, 6)."""
    foil, arm, depth = ferry.foils[index], trim.arm[index], trim.depth
    lift, drag, speed = trim.lift[index], trim.drag[index], trim.speed
    zero, one = np.zeros_like(speed), np.ones_like(speed)
    rise = np.stack([zero, one, zero, arm, zero, zero], axis=-1)
    sink = -np.stack([one, zero, arm, zero, zero, zero], axis=-1)
    ahead = np.stack([zero, zero, zero, depth, zero, zero], axis=-1)
    turn = np.stack([zero, zero, one, zero, zero, zero], axis=-1)
    flap = np.zeros((len(speed), len(MOTIONS)))
    flap[:, 4 + index] = flap_effectiveness(foil.flap_chord_ratio)

    def times(factor: Array, rows: Array) -> Array:
        return factor[:, None] * rows

    factor = free_surface_factor(trim.immersion, foil.chord)
    surface = free_surface_slope(trim.immersion, foil.chord) / factor
    q_area = pressure(ferry, speed) * foil.area
    angle = times(1 / speed, rise)
    # Change of q S C_L at constant q, and of q itself.
    loading = times(lift * surface, sink) + times(
        q_area * lift_slope(foil.aspect_ratio) * factor, turn - angle + flap
    )
    d_lift = loading + times(2 * lift / speed, ahead)
    strut = pressure(ferry, speed) * ferry.strut_drag * foil.strut_chord
    d_drag = (
        times(2 * induced_factor(foil) * lift / q_area, loading)
        + times(strut, sink)
        + times(2 * drag / speed, ahead)
    )
    vertical = d_lift - times(drag, angle)
    horizontal = -d_drag - times(lift, angle)
    turning = np.zeros_like(vertical)
    turning[:, 3] = added_mass(foil.span, foil.chord, ferry.density) * speed
    moment = (
        times(arm, vertical + turning)
        + times(depth, horizontal)
        # The foils swing forward under a high centre of gravity as the bow rises.
        + times(lift * depth + drag * arm, turn)
    )
    return np.stack([vertical + turning, moment], axis=1)
