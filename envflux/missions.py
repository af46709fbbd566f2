"""The mission file: orbit, craft, attitude modes and environments in one TOML text.

A mission file is read in two steps. First what it refers to is put in its place: coatings by name
or from the catalogue, environments from presets, orbits from TLE and OMM files, the faces of a box.
Then the same definitions that Python code uses check it.
"""

from __future__ import annotations

import re
import tomllib
from collections.abc import Iterable
from pathlib import Path
from typing import Any, Literal, TypeVar

import xarray as xr
from pydantic import field_validator

from envflux.attitudes import AnyAttitude
from envflux.coatings import Age, Bound, Cells, Coating, catalogue_coating
from envflux.craft import Craft, Face, box_craft
from envflux.definitions import Definition, Instant, Vector3
from envflux.environments import Environment, environment_preset
from envflux.errors import MISSING, InputError, Told, did_you_mean, shown
from envflux.fluxes import SurfaceState, flux
from envflux.orbits import OmmOrbit, Orbit

_T = TypeVar("_T")

# A mode's and an environment's names become names of files: one separator at a time, so that two
# dashes can join the two without doubt, and nothing that a file system reads in its own way.
_FILE_SAFE = re.compile(r"[A-Za-z0-9]+([-_][A-Za-z0-9]+)*")
_LONGEST_NAME = 60
_CATALOGUE_ID = re.compile(r"[Cc]\d+")


class About(Definition):
    """What the mission is called.

    Parameters
    ----------
    name : str
        Its name, for headings.
    description : str
        A sentence on it.
    """

    name: str
    description: str = ""


class TrackRequest(Definition):
    """Which stretch of the orbit to compute; see the orbit's `track`.

    Parameters
    ----------
    revolutions : float, optional
        How many revolutions; 1 where no duration is given either.
    duration_s : float, optional
        How long, in seconds, instead.
    start : datetime or str, optional
        When it starts; the orbit's epoch by default.
    step_s : float, optional
        Time step in seconds; 1/240 of a revolution by default.
    """

    revolutions: float | None = None
    duration_s: float | None = None
    start: Instant | None = None
    step_s: float | None = None


class Mode(Definition):
    """How the craft flies, and in which state its surfaces are.

    Parameters
    ----------
    attitude : attitude law
        One of the laws of `envflux.attitudes`.
    age : {"BOL", "EOL"}
        Surfaces at beginning or end of life.
    bound : {"minimum", "nominal", "maximum"}
        Which end of each coating's spread, for absorptance and emittance alike. Neither end alike is
        the hot one: see the next two.
    bound_absorptance, bound_emittance : {"minimum", "nominal", "maximum"}, optional
        The same for one of the two. Hot is the maximum of absorptance with the minimum of emittance,
        cold the other way round.
    cells : {"loaded", "unloaded"}
        Whether solar cells deliver power, or are open-circuit or shunted: the hot case is usually
        unloaded.
    """

    attitude: AnyAttitude
    age: Age = "BOL"
    bound: Bound = "nominal"
    bound_absorptance: Bound | None = None
    bound_emittance: Bound | None = None
    cells: Cells = "loaded"

    @property
    def surface(self) -> SurfaceState:
        """The state of the surfaces, as `flux` takes it."""
        return {
            "age": self.age,
            "bound": self.bound,
            "bound_absorptance": self.bound_absorptance,
            "bound_emittance": self.bound_emittance,
            "cells": self.cells,
        }


class Output(Definition):
    """What the command line writes besides the datasets and tables.

    Parameters
    ----------
    plots : bool
        Whether to draw pictures.
    against : {"time", "orbit angle"}
        What runs along the bottom of the flux histories.
    """

    plots: bool = True
    against: Literal["time", "orbit angle"] = "time"


class Mission(Definition):
    """Everything a mission file declares.

    Parameters
    ----------
    mission : About
        Its name.
    orbit : orbit
        Any kind of orbit of `envflux.orbits`.
    craft : Craft
        The faces and their coatings.
    modes : dict of str to Mode
        Attitude modes by name: letters and digits, joined by single ``-`` or ``_``.
    environments : dict of str to Environment
        Environments by name, likewise.
    track : TrackRequest
        The stretch to compute: one revolution by default.
    output : Output
        What to draw.
    """

    mission: About
    orbit: Orbit
    craft: Craft
    modes: dict[str, Mode]
    environments: dict[str, Environment]
    track: TrackRequest = TrackRequest()
    output: Output = Output()

    @field_validator("modes", "environments", mode="after")
    @classmethod
    def _named_for_files(cls, value: dict[str, Any]) -> dict[str, Any]:
        if not value:
            raise InputError("names", Told("empty"), "given: at least one table")
        seen: dict[str, str] = {}
        for name in value:
            if not _FILE_SAFE.fullmatch(name) or len(name) > _LONGEST_NAME:
                accepted = f"letters and digits joined by single - or _, at most {_LONGEST_NAME}"
                raise InputError("names", name, accepted, verb="a name also names files and must be")
            if name.lower() in seen:
                accepted = f"different from '{seen[name.lower()]}' by more than capitals"
                raise InputError("names", name, accepted, verb="a name also names files and must be")
            seen[name.lower()] = name
        return value

    @property
    def cases(self) -> tuple[tuple[str, str], ...]:
        """Names of mode and environment of every case, in the order of the file."""
        return tuple((mode, environment) for mode in self.modes for environment in self.environments)

    def fly(self) -> xr.Dataset:
        """Compute the track.

        Returns
        -------
        xarray.Dataset
            What the orbit's `track` returns.

        Raises
        ------
        InputError
            Under the name of its key in the mission file.
        """
        asked = {name: value for name, value in self.track if value is not None}
        try:
            return self.orbit.track(**asked)
        except InputError as error:
            raise _placed(error, self.orbit) from None

    def flux(self, mode: str, environment: str, track: xr.Dataset | None = None) -> xr.Dataset:
        """Compute the fluxes of one case.

        Parameters
        ----------
        mode, environment : str
            Names as in the mission file.
        track : xarray.Dataset, optional
            What `fly` returned; computed anew by default.

        Returns
        -------
        xarray.Dataset
            What `envflux.fluxes.flux` returns.

        Raises
        ------
        InputError
            If a name is unknown, or the step is too coarse for a spin.
        """
        chosen = _chosen(self.modes, mode, "modes")
        around = _chosen(self.environments, environment, "environments")
        track = self.fly() if track is None else track
        try:
            return flux(track, chosen.attitude, self.craft, around, **chosen.surface)
        except InputError as error:
            raise _placed(error, chosen.attitude, f"modes.{mode}.attitude") from None


def load_mission(path: str | Path) -> Mission:
    """Read a mission file.

    Parameters
    ----------
    path : str or Path
        A TOML file. Files it names are looked for beside it.

    Returns
    -------
    Mission

    Raises
    ------
    InputError
        One sentence that names the file, the key, its value and what is accepted.
    """
    path = Path(path)
    try:
        table = _parsed(path)
        return _mission(table, path.parent)
    except InputError as error:
        if error.field == str(path):
            raise
        raise InputError(f"{path}: {error.field}", error.value, error.accepted, verb=error.verb) from None


def _parsed(path: Path) -> dict[str, Any]:
    try:
        # Editors on some systems put a byte-order mark first, which TOML does not allow.
        return tomllib.loads(path.read_bytes().decode("utf-8-sig"))
    except (FileNotFoundError, NotADirectoryError):
        raise InputError(str(path), MISSING, "a mission file that exists") from None
    except IsADirectoryError:
        raise InputError(str(path), Told("a folder"), "a mission file") from None
    except UnicodeDecodeError as error:
        raise InputError(str(path), Told(f"not UTF-8 at byte {error.start}"), "a text file in UTF-8") from None
    except tomllib.TOMLDecodeError as error:
        what, _, where = str(error).rpartition(" (at ")
        where = where.rstrip(")") or "the end of the file"
        raise InputError(str(path), Told(f"broken at {where}"), f"valid TOML ({what or error})") from None


def _mission(table: dict[str, Any], folder: Path) -> Mission:
    _check_keys(table, [*Mission.model_fields, "coatings"], "")
    coatings = {
        name: _coating(entry, f"coatings.{name}")
        for name, entry in _table(table.get("coatings", {}), "coatings").items()
    }
    ready = {key: value for key, value in table.items() if key != "coatings"}
    if "orbit" in ready:
        ready["orbit"] = _orbit(_table(ready["orbit"], "orbit"), folder)
    if "craft" in ready:
        ready["craft"] = _craft(_table(ready["craft"], "craft"), coatings)
    if "environments" in ready:
        ready["environments"] = {
            name: _environment(_table(entry, f"environments.{name}"), f"environments.{name}")
            for name, entry in _table(ready["environments"], "environments").items()
        }
    mission: Mission = Mission.from_table(ready)
    return mission


# -- putting in place what a table refers to ---------------------------------------------------------


def _coating(entry: Any, field: str) -> Coating:
    table = dict(_table(entry, field))
    _check_keys(table, ["catalogue", *Coating.model_fields], field)
    identifier = table.pop("catalogue", None)
    try:
        if identifier is None:
            table.setdefault("name", field.rpartition(".")[2])
            return Coating.from_table(table)
        if not isinstance(identifier, str):
            raise InputError("catalogue", identifier, "an identifier in quotes, e.g. 'C025'")
        known = catalogue_coating(identifier)
        return Coating.from_table({**dict(known), **table})
    except InputError as error:
        raise error.inside(field) from None


def _craft(table: dict[str, Any], coatings: dict[str, Coating]) -> Craft:
    _check_keys(table, ["name", "box", "faces"], "craft")
    faces: list[Face] = []
    if "box" in table:
        faces += _box_faces(_table(table["box"], "craft.box"), coatings)
    listed = table.get("faces", [])
    if not isinstance(listed, list):
        raise InputError("craft.faces", listed, "a list of tables, each headed [[craft.faces]]")
    for number, entry in enumerate(listed, start=1):
        face = dict(_table(entry, f"craft.faces.{number}"))
        name = face.get("name")  # easier to find in a long file than its number
        field = f"craft.faces.{number}" + (f" ({shown(Told(name), 40)})" if isinstance(name, str) else "")
        for side in ("coating", "back"):
            if side in face:
                face[side] = _named_coating(face[side], coatings, f"{field}.{side}")
        faces.append(_within(field, Face, face))
    if not faces:
        raise InputError("craft", table, "given a box or at least one [[craft.faces]]")
    rest = {key: value for key, value in table.items() if key == "name"}
    craft: Craft = _within("craft", Craft, {"faces": tuple(faces), **rest})
    return craft


class _Box(Definition):
    """The table of a box: what `box_craft` takes."""

    size_m: Vector3
    coating: Coating
    coatings: dict[str, Coating] | None = None
    names: dict[str, str] | None = None


def _box_faces(table: dict[str, Any], coatings: dict[str, Coating]) -> tuple[Face, ...]:
    table = dict(table)
    if "coating" in table:
        table["coating"] = _named_coating(table["coating"], coatings, "craft.box.coating")
    if "coatings" in table:
        table["coatings"] = {
            face: _named_coating(value, coatings, f"craft.box.coatings.{face}")
            for face, value in _table(table["coatings"], "craft.box.coatings").items()
        }
    box = _within("craft.box", _Box, table)
    try:
        return tuple(box_craft(**{name: value for name, value in box if value is not None}).faces)
    except InputError as error:
        raise error.inside("craft.box") from None


def _named_coating(value: Any, coatings: dict[str, Coating], field: str) -> Coating:
    if isinstance(value, dict):
        return _coating(value, field)
    if isinstance(value, str):
        if value in coatings:
            return coatings[value]
        try:
            return catalogue_coating(value)
        except InputError as error:
            if _CATALOGUE_ID.fullmatch(value):
                raise InputError(field, value, error.accepted, verb=error.verb) from None
            hint = did_you_mean(value, coatings)
    else:
        hint = ""
    known = ", ".join(coatings) or "none here yet"
    accepted = f"the name of a table under [coatings] ({known}) or an identifier of the catalogue, e.g. 'C025'{hint}"
    raise InputError(field, value, accepted)


def _environment(table: dict[str, Any], field: str) -> Any:
    _check_keys(table, ["preset", *Environment.model_fields], field)
    if "preset" not in table:
        return {"name": field.rpartition(".")[2], **table}
    preset = table["preset"]
    if not isinstance(preset, str):
        raise InputError(f"{field}.preset", preset, "the name of a preset in quotes")
    try:
        known = environment_preset(preset)
    except InputError as error:
        raise InputError(f"{field}.preset", preset, error.accepted, verb=error.verb) from None
    own = {key: value for key, value in table.items() if key != "preset"}
    if not own:
        return known
    changed = {"source": f"{known.source}; changed here: {', '.join(own)}"} if known.source else {}
    return {**dict(known), **changed, **own}


def _orbit(table: dict[str, Any], folder: Path) -> Any:
    kind = table.get("kind")
    if kind not in ("omm", "tle") or "file" not in table:
        return table
    _check_keys(table, ["kind", "file"], "orbit")
    if not isinstance(table["file"], str):
        raise InputError("orbit.file", table["file"], "the name of a file in quotes")
    file = folder / table["file"]
    if not file.is_file():
        raise InputError("orbit.file", table["file"], "the name of a file that exists, seen from the mission file")
    if kind == "omm":
        try:
            return OmmOrbit.from_file(file)
        except InputError as error:
            raise InputError("orbit.file", table["file"], f"a readable OMM: {error}", verb="it must hold") from None
    lines = [line.rstrip() for line in file.read_text(encoding="utf-8").splitlines() if line.strip()]
    elements = [line for line in lines if line.startswith(("1 ", "2 "))]
    if len(elements) != 2 or len(lines) > 3:
        raise InputError(
            "orbit.file", table["file"], "one TLE: two lines, or three with a name first", verb="it must hold"
        )
    return {"kind": "tle", "line1": elements[0], "line2": elements[1]}


# -- checks ------------------------------------------------------------------------------------------


def _table(value: Any, field: str) -> dict[str, Any]:
    if not isinstance(value, dict):
        raise InputError(field, value, "a table of fields")
    return value


def _check_keys(table: dict[str, Any], known: Iterable[str], field: str) -> None:
    known = list(known)
    for key, value in table.items():
        if key not in known:
            accepted = f"one of: {', '.join(known)}{did_you_mean(key, known)}"
            place = f"{field}.{key}" if field else key
            raise InputError(place, value, accepted, verb="the name is unknown; it must be")


def _within(field: str, definition: type[Definition], table: dict[str, Any]) -> Any:
    try:
        return definition.from_table(table)
    except InputError as error:
        raise error.inside(field) from None


def _chosen(known: dict[str, _T], name: str, field: str) -> _T:
    if name not in known:
        raise InputError(field, name, f"one of: {', '.join(known)}{did_you_mean(name, known)}")
    return known[name]


def _placed(error: InputError, definition: Any, prefix: str = "orbit") -> InputError:
    """Put the complaint of a later step under the key that the user wrote."""
    if error.field in TrackRequest.model_fields:
        return error.inside("track")
    return error.inside(prefix) if error.field in type(definition).model_fields else error
