"""Orbits, and the tracks they leave: where the spacecraft and the Sun are, and how much Sun is seen."""

from __future__ import annotations

from typing import Annotated

from pydantic import Field

from envflux.orbits.kinds import CircularOrbit, KeplerOrbit, SunSynchronousOrbit, UndatedOrbit
from envflux.orbits.listing import eclipses
from envflux.orbits.sampled import track_from_arrays
from envflux.orbits.satellites import OmmOrbit, TleOrbit
from envflux.shadows import Shadow

Orbit = Annotated[
    KeplerOrbit | CircularOrbit | SunSynchronousOrbit | UndatedOrbit | TleOrbit | OmmOrbit,
    Field(discriminator="kind"),
]
"""Any orbit, told apart by its ``kind``: the field of a mission file."""

__all__ = [
    "CircularOrbit",
    "KeplerOrbit",
    "OmmOrbit",
    "Orbit",
    "Shadow",
    "SunSynchronousOrbit",
    "TleOrbit",
    "UndatedOrbit",
    "eclipses",
    "track_from_arrays",
]
