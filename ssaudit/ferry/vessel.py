"""The ferry: geometry, actuators, sensor, and how the mass of each revision is spread."""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from ssaudit.ferry.foils import Foil

Array = NDArray[np.float64]

GRAVITY = 9.80665
"""Standard gravity [m/s²]."""

SEA_WATER = 1025.0
"""Density of sea water [kg/m³], a usual round value."""

FRESH_WATER = 1000.0
"""Density of fresh water [kg/m³], a usual round value."""


FORE_FOIL = Foil(span=6.5, chord=1.1, station=18.0, flap_chord_ratio=0.25, strut_chord=1.2)
"""The demo's fore foil, on one strut."""

AFT_FOIL = Foil(span=10.0, chord=1.3, station=0.0, flap_chord_ratio=0.25, strut_chord=2.0)
"""The demo's aft foil, on two struts."""


@dataclass(frozen=True)
class Load:
    """A part of the ferry's mass.

    Parameters
    ----------
    station : float
        Where its centre lies, forward of the aft foil [m]; negative: astern of it.
    height : float
        Height of its centre above the foils [m].
    gyradius : float
        Radius of gyration in pitch about its own centre [m].
    """

    station: float
    height: float
    gyradius: float


@dataclass(frozen=True)
class MassDistribution:
    """Light ship, payload and reserve fuel: they give centre of gravity and pitch inertia.

    Payload comes aboard first; whatever brings the ferry above `reserve_from` is reserve fuel.

    Parameters
    ----------
    light_mass, reserve_from : float
        Mass of the ferry without load, and mass above which fuel goes into the reserve tank [kg].
    light, payload, reserve : Load
        Where each part lies.

    Examples
    --------
    >>> level = Load(station=6.0, height=5.0, gyradius=2.0)
    >>> masses = MassDistribution(90e3, 105e3, level, level, level)
    >>> masses.centre(np.array([95e3])), masses.pitch_inertia(np.array([95e3]))
    ((array([6.]), array([5.])), array([380000.]))
    """

    light_mass: float
    reserve_from: float
    light: Load
    payload: Load
    reserve: Load

    def parts(self, mass: Array) -> tuple[tuple[Load, Array], ...]:
        """Each part and its mass [kg], shape (points,), at a total mass [kg]."""
        reserve = np.maximum(mass - self.reserve_from, 0.0)
        light = np.full_like(mass, self.light_mass)
        return (
            (self.light, light),
            (self.payload, mass - light - reserve),
            (self.reserve, reserve),
        )

    def centre(self, mass: Array) -> tuple[Array, Array]:
        """Station and height of the centre of gravity at a total mass.

        Parameters
        ----------
        mass : (points,) float
            Total mass [kg], not below that of the light ship.

        Returns
        -------
        station, height : (points,) float
            Forward of the aft foil, and above the foils [m].
        """
        parts = self.parts(mass)
        station = sum((share * part.station for part, share in parts), np.zeros_like(mass))
        height = sum((share * part.height for part, share in parts), np.zeros_like(mass))
        return station / mass, height / mass

    def pitch_inertia(self, mass: Array) -> Array:
        """Moment of inertia in pitch about the centre of gravity, by the parallel-axis theorem.

        Parameters
        ----------
        mass : (points,) float
            Total mass [kg], not below that of the light ship.

        Returns
        -------
        (points,) float
            Inertia [kg m²], without the added mass of the foils.
        """
        station, height = self.centre(mass)
        inertia = np.zeros_like(mass)
        for part, share in self.parts(mass):
            apart = (part.station - station) ** 2 + (part.height - height) ** 2
            inertia += share * (part.gyradius**2 + apart)
        return inertia


@dataclass(frozen=True)
class Ferry:
    """A ferry on two fully submerged foils.

    The defaults are the demo's own: an invented passenger ferry, whose dimensions come from no
    ship and no drawing.

    Parameters
    ----------
    masses : MassDistribution
        How its mass is spread.
    fore, aft : Foil
        The two foils, at the same depth.
    profile_drag, strut_drag : float
        Drag coefficients of a foil (on its plan area) and of its struts (on chord times wetted
        length) [-].
    thrust_height : float
        Height of the waterjet's line of thrust above the foils [m].
    flap_frequency, flap_damping : float
        Natural frequency [rad/s] and damping ratio [-] of a flap's hydraulic actuator.
    sensor_station : float
        Where the height sensor stands at the bow, forward of the aft foil [m].
    sensor_time : float
        Time constant [s] of the filter that takes the waves out of the measured height.
    density : float
        Of the water [kg/m³].
    """

    masses: MassDistribution
    fore: Foil = FORE_FOIL
    aft: Foil = AFT_FOIL
    profile_drag: float = 0.010
    strut_drag: float = 0.010
    thrust_height: float = 3.4
    flap_frequency: float = 10.0
    flap_damping: float = 0.7
    sensor_station: float = 22.0
    sensor_time: float = 0.2
    density: float = SEA_WATER

    @property
    def foils(self) -> tuple[Foil, Foil]:
        """Fore foil, aft foil."""
        return self.fore, self.aft


BOW_TANK = MassDistribution(
    light_mass=90e3,
    reserve_from=100e3,
    light=Load(station=6.3, height=5.0, gyradius=6.0),
    payload=Load(station=5.5, height=5.5, gyradius=5.0),
    reserve=Load(station=15.0, height=4.5, gyradius=1.5),
)
"""Revision A: the reserve fuel is carried in a tank forward."""

STERN_TANK = replace(BOW_TANK, reserve=Load(station=-6.0, height=4.5, gyradius=1.5))
"""Revisions B and C: the reserve fuel has moved into a tank in the stern, behind the aft foil."""
