"""Every output variable in one table: name, dimensions, units, meaning.

Code, tests, files and documentation read this table, so a name or a unit is changed in one place.
xarray lets attributes survive arithmetic that makes them wrong; `stamp` therefore sets them anew
on everything that leaves a public function.
"""

from __future__ import annotations

from dataclasses import dataclass
from importlib.metadata import version
from typing import Any

import xarray as xr

CONVENTIONS = "CF-1.11"


@dataclass(frozen=True)
class Variable:
    """What one output variable is. `dims` is the shape it has when it is first computed."""

    dims: tuple[str, ...]
    units: str | None
    long_name: str
    standard_name: str | None = None
    flags: dict[str, int] | None = None
    comment: str | None = None

    def attributes(self, cell_methods: str | None) -> dict[str, Any]:
        """The CF attributes of this variable."""
        found: dict[str, Any] = {"long_name": self.long_name}
        if self.units is not None:
            found["units"] = self.units
        if self.standard_name:
            found["standard_name"] = self.standard_name
        if self.comment:
            found["comment"] = self.comment
        if self.flags:
            found["flag_values"] = list(self.flags.values())
            found["flag_meanings"] = " ".join(self.flags)
        if cell_methods and "time" in self.dims and not self.flags and self.units is not None:
            found["cell_methods"] = cell_methods
        return found


_TIME = ("time",)
_TIME_XYZ = ("time", "xyz")
_TIME_FACE = ("time", "face")
_FACE = ("face",)

CONTACTS = {"none": 0, "penumbra_entry": 1, "umbra_entry": 2, "umbra_exit": 3, "penumbra_exit": 4}
"""Values of the `contact` coordinate: which samples of a track are the edges of an eclipse."""

VARIABLES: dict[str, Variable] = {
    # -- track -----------------------------------------------------------------------------------
    "time": Variable(_TIME, None, "time (UTC)", "time"),
    "xyz": Variable(("xyz",), None, "axis of the frame or of the body"),
    "elapsed": Variable(_TIME, "s", "time since the start of the track"),
    "rev": Variable(_TIME, "1", "revolution, counted from the start of the track"),
    "orbit_angle": Variable(_TIME, "degree", "angle from orbit noon, along the motion"),
    "argument_of_latitude": Variable(_TIME, "degree", "argument of latitude"),
    "contact": Variable(_TIME, None, "edge of an eclipse at this sample", flags=CONTACTS),
    "orbital_period": Variable((), "s", "period of one revolution"),
    "position": Variable(_TIME_XYZ, "km", "position, planet-centred"),
    "velocity": Variable(_TIME_XYZ, "km s-1", "velocity, planet-centred"),
    "altitude": Variable(_TIME, "km", "altitude above the equatorial radius"),
    "sun_direction": Variable(_TIME_XYZ, "1", "unit vector from the planet's centre to the Sun"),
    "sun_distance": Variable(_TIME, "au", "distance of the Sun from the planet's centre"),
    "sun": Variable(_TIME_XYZ, "1", "unit vector from the spacecraft to the Sun"),
    "sunlit": Variable(_TIME, "1", "visible fraction of the solar disc"),
    "beta": Variable(_TIME, "degree", "beta angle: elevation of the Sun over the orbit plane"),
    "latitude": Variable(_TIME, "degrees_north", "geocentric latitude of the sub-point", "latitude"),
    "longitude": Variable(_TIME, "degrees_east", "longitude of the sub-point", "longitude"),
    "local_solar_time": Variable(_TIME, "h", "apparent local solar time at the sub-point"),
    # -- faces -----------------------------------------------------------------------------------
    "face": Variable(_FACE, None, "face of the spacecraft"),
    "area": Variable(_FACE, "m2", "area of the face"),
    "absorptance": Variable(
        _FACE, "1", "solar absorptance", comment="less what loaded solar cells take away as electricity"
    ),
    "emittance": Variable(_FACE, "1", "hemispherical infrared emittance"),
    "normal": Variable(("face", "xyz"), "1", "outward unit normal in body axes"),
    # -- factors: geometry alone -----------------------------------------------------------------
    "g_sun": Variable(_TIME_FACE, "1", "direct solar factor, per unit irradiance"),
    "g_albedo": Variable(_TIME_FACE, "1", "albedo factor, per unit albedo and irradiance"),
    "g_zenith": Variable(_TIME_FACE, "1", "albedo factor weighted by the zenith correction, per unit irradiance"),
    "g_ir": Variable(_TIME_FACE, "1", "planetary infrared factor, per unit exitance"),
    "sun_incidence": Variable(_TIME_FACE, "degree", "angle between the face's normal and the Sun"),
    "sun_exposure": Variable(
        _TIME_FACE, "1", "visible fraction of the solar disc while the face is turned to it, else 0"
    ),
    "sun_azimuth": Variable(_TIME, "degree", "azimuth of the Sun in body axes, from +X toward +Y"),
    "sun_elevation": Variable(_TIME, "degree", "elevation of the Sun in body axes, toward +Z"),
    # -- fluxes ----------------------------------------------------------------------------------
    "irradiance": Variable(_TIME, "W m-2", "solar irradiance at the planet's distance"),
    "solar_flux": Variable(_TIME_FACE, "W m-2", "incident direct solar flux"),
    "albedo_flux": Variable(_TIME_FACE, "W m-2", "incident albedo flux"),
    "planetary_ir_flux": Variable(_TIME_FACE, "W m-2", "incident planetary infrared flux"),
    "absorbed_flux": Variable(
        _TIME_FACE,
        "W m-2",
        "absorbed flux",
        comment="absorptance times (direct solar + albedo) plus emittance times planetary infrared",
    ),
    # -- reductions ------------------------------------------------------------------------------
    "sunlit_fraction": Variable(("rev",), "1", "fraction of the revolution in sunlight"),
    "sun_minutes": Variable(("rev", "face"), "min", "minutes of Sun on the face per revolution"),
}

FLUXES = ("solar_flux", "albedo_flux", "planetary_ir_flux", "absorbed_flux")
INCIDENT = FLUXES[:3]
FACTORS = ("g_sun", "g_albedo", "g_zenith", "g_ir")


def stamp(dataset: xr.Dataset, *, cell_methods: str | None = "time: point", **attributes: str | float) -> xr.Dataset:
    """`dataset` with the attributes of this table and none left over from earlier steps.

    Parameters
    ----------
    dataset : xarray.Dataset
        Any result of this package; variables unknown to the table keep their own attributes.
    cell_methods : str or None
        How values stand for the time around them, in CF words; goes on variables along ``time``.
    **attributes : str or float
        Dataset attributes to add. netCDF takes no None, bool or dict, so none may come in here.
    """
    dataset = dataset.copy(deep=False)
    kept = {key: value for key, value in dataset.attrs.items() if key not in ("Conventions", "envflux_version")}
    dataset.attrs = {"Conventions": CONVENTIONS, "envflux_version": version("envflux"), **kept, **attributes}
    for name in dataset.variables:
        known = VARIABLES.get(str(name))
        if known is not None:
            dataset[name].attrs = known.attributes(cell_methods)
    return dataset


def extend_history(dataset: xr.Dataset, step: str) -> str:
    """The ``history`` of `dataset` with one more step, newest last.

    It holds no clock time: the same input must give the same file.
    """
    past = str(dataset.attrs.get("history", ""))
    return f"{past}\n{step}" if past else step
