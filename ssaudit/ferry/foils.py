"""Lift of one fully submerged foil: lift slope, free surface, flap, added mass."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Foil:
    """Geometry of one foil and of the struts that carry it.

    Parameters
    ----------
    span, chord : float
        Of the foil [m], rectangular in plan.
    station : float
        Where it stands, forward of the aft foil [m].
    flap_chord_ratio : float
        Chord of the trailing-edge flap over the foil's chord [-]; the flap spans the whole foil.
    strut_chord : float
        Chords of all its surface-piercing struts added up [m].

    Examples
    --------
    >>> foil = Foil(span=6.0, chord=1.2, station=18.0, flap_chord_ratio=0.25, strut_chord=1.0)
    >>> round(foil.area, 12), foil.aspect_ratio
    (7.2, 5.0)
    """

    span: float
    chord: float
    station: float
    flap_chord_ratio: float
    strut_chord: float

    @property
    def area(self) -> float:
        """Plan area [m²]."""
        return self.span * self.chord

    @property
    def aspect_ratio(self) -> float:
        """Span over chord [-]."""
        return self.span / self.chord


def lift_slope(aspect_ratio: float) -> float:
    """Slope of the lift coefficient of a deep foil of finite span over the angle of attack.

    Parameters
    ----------
    aspect_ratio : float
        Span over chord [-]; infinity gives the slope 2π of the thin section.

    Returns
    -------
    float
        2π / (1 + 2/AR) [1/rad].

    References
    ----------
    Prandtl's lifting-line theory with elliptic loading, in Glauert, The Elements of Aerofoil and
    Airscrew Theory (1926), ch. XI (from memory).

    Examples
    --------
    >>> lift_slope(2.0) == np.pi
    True
    """
    return 2 * np.pi / (1 + 2 / aspect_ratio)


def free_surface_factor(immersion: Array, chord: float) -> Array:
    """Lift of a foil under the free surface over that of the deep foil, at high Froude number.

    Parameters
    ----------
    immersion : (...) float
        Depth of the foil below the calm surface [m].
    chord : float
        Chord of the foil [m].

    Returns
    -------
    (...) float
        (1 + 16 (h/c)²) / (2 + 16 (h/c)²) [-]: 1/2 at the surface, 1 when deep.

    References
    ----------
    Hough and Moran, Froude Number Effects on Two-Dimensional Hydrofoils, J. Ship Research 13
    (1969); this high-speed limit from memory.

    Examples
    --------
    >>> free_surface_factor(np.array([0.0, 1.0]), 1.0).round(4)
    array([0.5   , 0.9444])
    """
    square = 16 * (immersion / chord) ** 2
    return (1 + square) / (2 + square)


def free_surface_slope(immersion: Array, chord: float) -> Array:
    """Change of `free_surface_factor` with immersion.

    Parameters
    ----------
    immersion : (...) float
        Depth of the foil below the calm surface [m].
    chord : float
        Chord of the foil [m].

    Returns
    -------
    (...) float
        Derivative [1/m], positive: a foil that rises loses lift, which holds its height.

    Examples
    --------
    >>> free_surface_slope(np.array([1.0]), 1.0).round(4)
    array([0.0988])
    """
    ratio = immersion / chord
    return 32 * ratio / (2 + 16 * ratio**2) ** 2 / chord


def flap_effectiveness(flap_chord_ratio: float) -> float:
    """Angle of attack that gives the same lift as one radian of flap, by thin-aerofoil theory.

    Parameters
    ----------
    flap_chord_ratio : float
        Flap chord over foil chord [-], 0 to 1.

    Returns
    -------
    float
        1 - (φ - sin φ)/π [rad/rad], where cos φ = 2 E - 1 and E is the flap chord ratio, φ the
        hinge in Glauert's angle measured from the leading edge.

    References
    ----------
    Glauert, Theoretical Relationships for an Aerofoil with Hinged Flap, ARC R&M 1095 (1927)
    (from memory).

    Examples
    --------
    >>> round(flap_effectiveness(0.25), 4), flap_effectiveness(1.0)
    (0.609, 1.0)
    """
    hinge = np.arccos(2 * flap_chord_ratio - 1)
    return float(1 - (hinge - np.sin(hinge)) / np.pi)


def added_mass(span: float, chord: float, density: float) -> float:
    """Mass of water that a foil moves with it when it heaves, section by section.

    Parameters
    ----------
    span, chord : float
        Of the foil [m].
    density : float
        Of the water [kg/m³].

    Returns
    -------
    float
        π/4 ρ c² b [kg]: that of a flat plate of width c in unbounded water, over the span b.
        Ends and surface lower it; here they are left out, which is common practice (no source).

    References
    ----------
    Lamb, Hydrodynamics, 6th ed. (1932), art. 71 (from memory).

    Examples
    --------
    >>> round(added_mass(1.0, 2.0, 1.0) / np.pi, 12)
    1.0
    """
    return float(np.pi / 4 * density * chord**2 * span)
