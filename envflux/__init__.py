"""envflux: the orbital heating environment of spacecraft.

Orbit, attitude law and faces in; per-face time series of direct solar, albedo and planetary
infrared flux out, as xarray Datasets. Everything below is loaded when it is first used, so that
importing the package costs next to nothing.
"""

from __future__ import annotations

import importlib
from importlib.metadata import version as _version
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from envflux import plots, tables
    from envflux.attitudes import AttitudeLaw, InertialAttitude, NadirPointing, Orientation, Spinning, SunPointing
    from envflux.coatings import Coating, Spread, catalogue_coating, coating_catalogue, find_coatings
    from envflux.craft import Craft, Face, box_craft
    from envflux.environments import (
        SOLAR_CONSTANTS,
        Environment,
        environment_preset,
        environment_presets,
        solar_constant,
    )
    from envflux.errors import CoarseStepWarning, EnvfluxWarning, InputError, OmittedTermWarning
    from envflux.fluxes import combine, factors, flux
    from envflux.missions import Mission, load_mission
    from envflux.orbits import (
        CircularOrbit,
        KeplerOrbit,
        OmmOrbit,
        Shadow,
        SunSynchronousOrbit,
        TleOrbit,
        UndatedOrbit,
        eclipses,
        track_from_arrays,
    )
    from envflux.planets import EARTH, Planet
    from envflux.reductions import energy_closure, extremes, orbit_mean, sun_exposure

__version__ = _version("envflux")

# Where each public name lives. The same names stand above for type checkers; a test holds the two together.
_HOMES = {
    "attitudes": ("AttitudeLaw", "InertialAttitude", "NadirPointing", "Orientation", "Spinning", "SunPointing"),
    "coatings": ("Coating", "Spread", "catalogue_coating", "coating_catalogue", "find_coatings"),
    "craft": ("Craft", "Face", "box_craft"),
    "environments": ("SOLAR_CONSTANTS", "Environment", "environment_preset", "environment_presets", "solar_constant"),
    "errors": ("CoarseStepWarning", "EnvfluxWarning", "InputError", "OmittedTermWarning"),
    "fluxes": ("combine", "factors", "flux"),
    "missions": ("Mission", "load_mission"),
    "orbits": (
        "CircularOrbit",
        "KeplerOrbit",
        "OmmOrbit",
        "Shadow",
        "SunSynchronousOrbit",
        "TleOrbit",
        "UndatedOrbit",
        "eclipses",
        "track_from_arrays",
    ),
    "planets": ("EARTH", "Planet"),
    "reductions": ("energy_closure", "extremes", "orbit_mean", "sun_exposure"),
}
_MODULES = ("plots", "tables")
_PUBLIC = {name: module for module, names in _HOMES.items() for name in names}

__all__ = [
    "EARTH",
    "SOLAR_CONSTANTS",
    "AttitudeLaw",
    "CircularOrbit",
    "CoarseStepWarning",
    "Coating",
    "Craft",
    "EnvfluxWarning",
    "Environment",
    "Face",
    "InertialAttitude",
    "InputError",
    "KeplerOrbit",
    "Mission",
    "NadirPointing",
    "OmittedTermWarning",
    "OmmOrbit",
    "Orientation",
    "Planet",
    "Shadow",
    "Spinning",
    "Spread",
    "SunPointing",
    "SunSynchronousOrbit",
    "TleOrbit",
    "UndatedOrbit",
    "box_craft",
    "catalogue_coating",
    "coating_catalogue",
    "combine",
    "eclipses",
    "energy_closure",
    "environment_preset",
    "environment_presets",
    "extremes",
    "factors",
    "find_coatings",
    "flux",
    "load_mission",
    "orbit_mean",
    "plots",
    "solar_constant",
    "sun_exposure",
    "tables",
    "track_from_arrays",
]


def __getattr__(name: str) -> Any:
    if name in _MODULES:
        return importlib.import_module(f"envflux.{name}")
    if name not in _PUBLIC:
        raise AttributeError(f"module 'envflux' has no attribute {name!r}")
    value = getattr(importlib.import_module(f"envflux.{_PUBLIC[name]}"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *_PUBLIC, *_MODULES})
