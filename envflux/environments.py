"""The heat a planet and the Sun send: solar constants, albedo, planetary infrared, and published sets of them."""

from __future__ import annotations

import csv
import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import cache
from importlib.resources import files
from types import MappingProxyType
from typing import Annotated, Any, Literal, Self, TypeVar

import numpy as np
from numpy.typing import ArrayLike
from pydantic import Field, model_validator

from envflux.constants import SOLAR_CONSTANT_W_M2
from envflux.definitions import Definition
from envflux.errors import InputError, did_you_mean
from envflux.markup import table
from envflux.vectors import Array

T = TypeVar("T")

ZenithCorrection = Literal["none", "element", "sub-point"]
"""Where the solar zenith angle of the albedo's correction is taken: nowhere, at each element of the
planet's surface, or once at the point below the craft."""

# NASA/TM-2001-211221 (Anderson, Justus and Batts, 2001): c = sum of k_n theta^n, theta in degrees, n = 1..4.
# Read as quoted in three public scripts; one thesis drops the minus sign, which would give c(90) = 0.67.
ALBEDO_ZENITH_COEFFICIENTS = (1.3798e-3, -2.1793e-5, 6.0372e-8, 4.9115e-9)

# The largest increment, at 90 degrees: a corrected albedo may not pass 1 there.
_LARGEST_INCREMENT = sum(k * 90.0**n for n, k in enumerate(ALBEDO_ZENITH_COEFFICIENTS, start=1))
_LARGEST_CORRECTABLE = math.floor(100.0 * (1.0 - _LARGEST_INCREMENT)) / 100.0


def albedo_zenith_increment(theta_deg: ArrayLike) -> Array:
    """Compute what is added to a zero-zenith albedo where the Sun stands `theta_deg` from the zenith.

    Parameters
    ----------
    theta_deg : array_like
        Local solar zenith angle in degrees, 0 or more, of any shape.

    Returns
    -------
    numpy.ndarray
        The increment c(theta) in the shape of the input; 0 beyond 90 degrees, where no sunlight falls.

    Raises
    ------
    InputError
        If an angle is negative.

    Notes
    -----
    The polynomial was fitted to angles up to 65 degrees (c = 0.10); from there to 90 degrees (c = 0.31)
    it is an extrapolation, on ground that is dimly lit. It belongs to the albedo pairs of the same
    memorandum, which are for the Sun in the zenith, and never to energy means such as satellite
    monthly means: those hold it already. Earth only.

    References
    ----------
    Anderson, Justus and Batts, Guidelines for the Selection of Near-Earth Thermal Environment
    Parameters for Spacecraft Design, NASA/TM-2001-211221, October 2001.

    Examples
    --------
    >>> print(f"{albedo_zenith_increment(60.0):.6f}")
    0.081027
    """
    theta = np.asarray(theta_deg, float)
    if np.any(theta < 0.0):
        raise InputError("theta_deg", float(np.nanmin(theta)), "0 or more")
    k1, k2, k3, k4 = ALBEDO_ZENITH_COEFFICIENTS
    increment = theta * (k1 + theta * (k2 + theta * (k3 + theta * k4)))
    return np.where(theta > 90.0, 0.0, increment)


@dataclass(frozen=True)
class SolarConstant:
    """A published total solar irradiance at 1 au.

    Parameters
    ----------
    name : str
        The standard or paper it comes from.
    value_w_m2 : float
        Irradiance at 1 au.
    uncertainty_w_m2 : float or None
        As published; None where none is stated.
    source, provenance : str
        The full source, and how it was read: ``"seen: ..."`` or ``"from memory"``.
    """

    name: str
    value_w_m2: float
    uncertainty_w_m2: float | None
    source: str
    provenance: str

    def __str__(self) -> str:
        spread = "" if self.uncertainty_w_m2 is None else f" ± {self.uncertainty_w_m2:g}"
        return f"{self.name}: {self.value_w_m2:g}{spread} W/m2, {self.source} [{self.provenance}]"


def _rows(name: str) -> Iterable[dict[str, str]]:
    return csv.DictReader(files("envflux").joinpath(f"data/{name}").read_text(encoding="utf-8").splitlines())


def _read_solar_constants() -> Mapping[str, SolarConstant]:
    entries = (
        SolarConstant(
            name=row["name"],
            value_w_m2=float(row["solar_constant_w_m2"]),
            uncertainty_w_m2=float(row["uncertainty_w_m2"]) if row["uncertainty_w_m2"] else None,
            source=row["source"],
            provenance=row["provenance"],
        )
        for row in _rows("solar_constants.csv")
    )
    return MappingProxyType({entry.name: entry for entry in entries})


SOLAR_CONSTANTS: Mapping[str, SolarConstant] = _read_solar_constants()
"""Published solar constants by the name of their standard."""


def _named(field: str, name: object, known: Mapping[str, T]) -> T:
    """Look `name` up without regard to case, or say which names there are."""
    if isinstance(name, str):
        for candidate, value in known.items():
            if candidate.lower() == name.strip().lower():
                return value
    hint = did_you_mean(name, known) if isinstance(name, str) else ""
    raise InputError(field, name, f"one of: {', '.join(known)}{hint}")


def solar_constant(name: str) -> float:
    """Look up a published solar constant in W/m2 at 1 au.

    Parameters
    ----------
    name : str
        A key of `SOLAR_CONSTANTS`, e.g. ``"IAU 2015 B3"``.

    Raises
    ------
    InputError
        If no standard has that name.

    Examples
    --------
    >>> solar_constant("ASTM E490-00a")
    1366.1
    """
    return _named("name", name, SOLAR_CONSTANTS).value_w_m2


def solar_irradiance_w_m2(solar_constant_w_m2: float | str, distance_au: ArrayLike) -> Array:
    """Compute the solar irradiance at a distance from the Sun, by the inverse square.

    Parameters
    ----------
    solar_constant_w_m2 : float or str
        Irradiance at 1 au in W/m2, or the name of a published value.
    distance_au : array_like
        Distance from the Sun in astronomical units, of any shape.

    Returns
    -------
    numpy.ndarray
        Irradiance in W/m2, in the shape of the distance.

    Raises
    ------
    InputError
        If a distance is zero or negative, or the name is unknown.

    Examples
    --------
    >>> print(f"{solar_irradiance_w_m2(1361.0, 0.98325706):.2f}")
    1407.74
    """
    distance = np.asarray(distance_au, float)
    if np.any(distance <= 0.0):
        raise InputError("distance_au", float(np.nanmin(distance)), "above 0")
    at_1_au = solar_constant(solar_constant_w_m2) if isinstance(solar_constant_w_m2, str) else solar_constant_w_m2
    return np.asarray(at_1_au / (distance * distance))


class Environment(Definition):
    """The levels of sunlight, reflected light and planetary infrared.

    Parameters
    ----------
    solar_constant_w_m2 : float or str
        Solar irradiance **at 1 au**, or the name of a published value (`SOLAR_CONSTANTS`). Left out, it
        is 1361 (IAU 2015 Resolution B3). The season enters through the track's distance from the
        Sun: a perihelion figure such as 1414 given here would be counted twice.
    albedo : float
        Fraction of the sunlight that the planet reflects, diffusely.
    planetary_ir_w_m2 : float
        Infrared exitance of the planet; it does not change with the distance from the Sun.
    name, source : str
        What it is, and where the numbers come from.
    zenith_correction : {"none", "element", "sub-point"}
        Whether the albedo is for the Sun in the zenith and the published increment
        (`albedo_zenith_increment`) is to be added: at every element of the planet's surface, or once
        at the point below the craft. Never for energy-mean albedos.
    radiating_radius_km : float
        Radius of the sphere that reflected light and infrared leave from. It belongs to the albedo data:
        satellite data sets refer to 20 or 30 km above the surface. 6378.137 is the WGS 84 equator.

    Raises
    ------
    InputError
        If a value lies outside its range, or no solar constant has the given name.

    Notes
    -----
    Albedo and infrared belong together: pairing the extreme of one with the extreme of the other
    describes an Earth that does not occur, and means hide what a light part feels within minutes.
    Choose a pair by the time the part takes to follow, and check hot and cold cases both.
    """

    solar_constant_w_m2: Annotated[float, Field(ge=0.0, le=2000.0)] = SOLAR_CONSTANT_W_M2
    albedo: Annotated[float, Field(ge=0.0, le=1.0)]
    planetary_ir_w_m2: Annotated[float, Field(ge=0.0, le=2000.0)]
    name: str = ""
    source: str = ""
    zenith_correction: ZenithCorrection = "none"
    radiating_radius_km: Annotated[float, Field(ge=6300.0, le=6500.0)] = 6378.137

    @model_validator(mode="before")
    @classmethod
    def _solar_constant_by_name(cls, data: Any) -> Any:
        if not isinstance(data, dict) or not isinstance(data.get("solar_constant_w_m2"), str):
            return data
        given = data["solar_constant_w_m2"]
        known = _named("solar_constant_w_m2", given, SOLAR_CONSTANTS)
        # The number alone would lose its origin.
        source = data.get("source") or f"solar constant: {known.source} ({known.provenance})"
        return {**data, "solar_constant_w_m2": known.value_w_m2, "source": source}

    @model_validator(mode="after")
    def _corrected_albedo_stays_below_one(self) -> Self:
        if self.zenith_correction != "none" and self.albedo > _LARGEST_CORRECTABLE:
            limit = (
                f"at most {_LARGEST_CORRECTABLE:g} with a zenith correction, which adds up to {_LARGEST_INCREMENT:.2f}"
            )
            raise InputError("albedo", self.albedo, limit)
        return self


@dataclass(frozen=True)
class EnvironmentPreset:
    """A published or customary set of values, each with its source and how that was read.

    Parameters
    ----------
    name : str
        The standard it comes from.
    solar_constant_w_m2, albedo, planetary_ir_w_m2 : float
        The values; the solar constant at 1 au.
    solar_source, solar_provenance, albedo_source, albedo_provenance : str
        Where a value comes from, and ``"seen..."`` or ``"from memory"``.
    planetary_ir_source, planetary_ir_provenance : str
        The same for the infrared.
    zenith_correction : {"none", "element", "sub-point"}
        Whether the albedo is for the Sun in the zenith.
    note : str
        What to mind.
    """

    name: str
    solar_constant_w_m2: float
    solar_source: str
    solar_provenance: str
    albedo: float
    albedo_source: str
    albedo_provenance: str
    planetary_ir_w_m2: float
    planetary_ir_source: str
    planetary_ir_provenance: str
    zenith_correction: ZenithCorrection
    note: str

    @property
    def seen(self) -> bool:
        """Whether all three numbers were read in a text, and none recalled."""
        trail = (self.solar_provenance, self.albedo_provenance, self.planetary_ir_provenance)
        return all(how.startswith("seen") for how in trail)

    def environment(self) -> Environment:
        """Make an `Environment` whose source names the origin of each value."""
        return Environment(
            solar_constant_w_m2=self.solar_constant_w_m2,
            albedo=self.albedo,
            planetary_ir_w_m2=self.planetary_ir_w_m2,
            name=self.name,
            source=(
                f"solar constant: {self.solar_source} ({self.solar_provenance}); "
                f"albedo: {self.albedo_source} ({self.albedo_provenance}); "
                f"planetary IR: {self.planetary_ir_source} ({self.planetary_ir_provenance}); "
                f"note: {self.note}"
            ),
            zenith_correction=self.zenith_correction,
        )

    def __str__(self) -> str:
        correction = "" if self.zenith_correction == "none" else " + zenith correction"
        return (
            f"{self.name}: {self.solar_constant_w_m2:g} W/m2 at 1 au, albedo {self.albedo:g}{correction}, "
            f"IR {self.planetary_ir_w_m2:g} W/m2  [{'seen' if self.seen else 'in part from memory'}]"
        )


class EnvironmentList(tuple[EnvironmentPreset, ...]):
    """Presets, one a line; a table in a notebook."""

    def __repr__(self) -> str:
        return "\n".join(str(preset) for preset in self)

    def _repr_html_(self) -> str:
        heads = ("", "solar constant, W/m2 at 1 au", "albedo", "planetary IR, W/m2", "note")
        rows = [
            (
                preset.name,
                f"{preset.solar_constant_w_m2:g}: {preset.solar_source} [{preset.solar_provenance}]",
                f"{preset.albedo:g}: {preset.albedo_source} [{preset.albedo_provenance}], "
                f"zenith correction: {preset.zenith_correction}",
                f"{preset.planetary_ir_w_m2:g}: {preset.planetary_ir_source} [{preset.planetary_ir_provenance}]",
                preset.note,
            )
            for preset in self
        ]
        return table(rows, heads)


@cache
def environment_presets() -> EnvironmentList:
    """List the published and customary environments, each value with its source.

    Notes
    -----
    Solar constants are at 1 au. A set published with an irradiance at perihelion or aphelion has been
    brought to 1 au, so that a dated track, or an undated one with that distance, returns the published
    figure. Values marked ``"from memory"`` are to be checked before they carry a design.
    """
    return EnvironmentList(_preset(row) for row in _rows("environments.csv"))


def _preset(row: dict[str, str]) -> EnvironmentPreset:
    numbers = ("solar_constant_w_m2", "albedo", "planetary_ir_w_m2")
    fields: dict[str, Any] = {column: float(text) if column in numbers else text for column, text in row.items()}
    return EnvironmentPreset(**fields)


def environment_preset(name: str) -> Environment:
    """Make the environment of a published or customary set.

    Parameters
    ----------
    name : str
        As listed by `environment_presets`, e.g. ``"ECSS-E-ST-10-04C Rev.1"``.

    Raises
    ------
    InputError
        If no set has that name.
    """
    return _named("name", name, {preset.name: preset for preset in environment_presets()}).environment()
