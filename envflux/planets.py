"""Planets: shape, gravity and rotation, each number with its source."""

from __future__ import annotations

from typing import Annotated

from pydantic import Field

from envflux.definitions import Definition


class Planet(Definition):
    """A planet as far as orbits and shadows need to know it.

    Parameters
    ----------
    name : str
        What it is called.
    radius_km : float
        Equatorial radius: altitudes, shadow and J2 refer to it. [km]
    gm_km3_s2 : float
        Gravitational parameter. [km3 s-2]
    j2 : float
        Second zonal harmonic, unnormalised, positive for a flattened planet. [1]
    flattening : float
        (equatorial - polar radius) / equatorial radius. [1]
    rotation_rad_s : float
        Inertial rate of rotation. [rad s-1]
    source : str
        Where the numbers come from.
    """

    name: str
    radius_km: Annotated[float, Field(gt=0.0)]
    gm_km3_s2: Annotated[float, Field(gt=0.0)]
    j2: Annotated[float, Field(ge=0.0, lt=0.1)] = 0.0
    flattening: Annotated[float, Field(ge=0.0, lt=0.5)] = 0.0
    rotation_rad_s: float = 0.0
    source: str = ""


EARTH = Planet(
    name="Earth",
    # WGS 84 (NGA.STND.0036, 2014): defining semi-major axis, GM, flattening and nominal rotation.
    radius_km=6378.137,
    gm_km3_s2=398600.4418,
    flattening=1.0 / 298.257223563,
    rotation_rad_s=7.292115e-5,
    # EGM96 (Lemoine et al., NASA/TP-1998-206861): from C20 = -484.165372e-6, tide-free, normalised.
    j2=1.08262668e-3,
    source="WGS 84 (NGA.STND.0036, 2014); J2 of EGM96 (NASA/TP-1998-206861), from memory",
)
