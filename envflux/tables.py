"""Results as files and as text: netCDF, CSV with a description beside it, and a summary to read."""

from __future__ import annotations

import csv
import json
import os
import tempfile
import textwrap
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
import xarray as xr

from envflux.errors import InputError, Told
from envflux.orbits import SunSynchronousOrbit, eclipses
from envflux.reductions import orbit_mean
from envflux.schema import FLUXES, VARIABLES
from envflux.vectors import Array

CAUTIONS = (
    "Incident fluxes are per unit area of the face, before any surface property; absorbed_flux already holds "
    "absorptance and emittance: apply them once, never twice.",
    "Planetary infrared is absorbed with the emittance, direct solar and albedo with the solar absorptance.",
    "Only heat from the Sun and the planet is here: no dissipation, no heat radiated away, no shading by or "
    "reflection from other parts of the spacecraft.",
    "Rows are not evenly spaced in time: samples are added at the edges of eclipses, so a mean of rows is not "
    "an orbit mean.",
    "These numbers are inputs to an analysis that the responsible engineer reviews against the programme's own "
    "standards and margins; never set lamps, heaters or a chamber by them without the facility's procedures.",
)
"""What someone who receives a table must know; written into every description of one."""

SHORT_CAUTIONS = (
    "Solar, albedo and IR are incident, absorbed holds a and e already: hand over one kind, never both.",
    "Heat from the Sun and the planet alone: nothing dissipated or radiated away, no shading between parts.",
    "For an analysis that the responsible engineer reviews; never set lamps, heaters or a chamber by it.",
)
"""The same in brief, for whoever reads a summary."""

_SIGNIFICANT_DIGITS = 10  # of a number in a CSV: finer than any model here, short enough to read
_WIDTH = 110  # of a summary, in characters
_FORMULAS = {"absorbed_flux": "absorptance * (solar_flux + albedo_flux) + emittance * planetary_ir_flux"}


# -- netCDF ------------------------------------------------------------------------------------------


def save(ds: xr.Dataset, path: str | Path) -> Path:
    """Write a result as netCDF-4; `load` gives an identical dataset back.

    A file of that name is replaced, and only once the new one is whole.

    Parameters
    ----------
    ds : xarray.Dataset
        Any result of this package.
    path : str or Path
        Where to write, usually ending in ``.nc``.

    Returns
    -------
    Path
        The file written.

    Raises
    ------
    InputError
        If the folder does not exist, or the path is one.
    """
    path = _writable(path)
    # Whole nanoseconds are exact for dates and for times from orbit noon alike; seconds are not.
    ds = ds.drop_encoding()
    encoding: dict[Any, dict[str, Any]] = {}
    for name, variable in ds.variables.items():
        if np.issubdtype(variable.dtype, np.datetime64):
            encoding[name] = {"units": "nanoseconds since 1970-01-01", "dtype": "int64", "calendar": "standard"}
        elif np.issubdtype(variable.dtype, np.timedelta64):
            encoding[name] = {"units": "nanoseconds", "dtype": "int64"}
        elif np.issubdtype(variable.dtype, np.floating):
            encoding[name] = {"_FillValue": None}  # CF wants none on coordinates; NaN stays NaN without it
        if "flag_values" in variable.attrs:  # CF wants them in the type of the variable
            attrs = dict(variable.attrs, flag_values=np.asarray(variable.attrs["flag_values"], variable.dtype))
            ds[name] = ds[name].assign_attrs(attrs)

    def write(target: Path) -> None:
        ds.to_netcdf(target, engine="h5netcdf", encoding=encoding)

    return _whole(path, write)


def load(path: str | Path) -> xr.Dataset:
    """Read what `save` wrote.

    Parameters
    ----------
    path : str or Path
        A netCDF file written by `save`.

    Returns
    -------
    xarray.Dataset
        Held in memory; the file is closed.

    Raises
    ------
    InputError
        If there is no such file, or it is not netCDF-4.
    """
    if not Path(path).is_file():
        raise InputError("path", Path(path).name, "the name of a netCDF file that exists")
    try:
        with xr.open_dataset(path, engine="h5netcdf", decode_timedelta=True) as stored:
            return stored.load().drop_encoding()
    except OSError:
        raise InputError("path", Path(path).name, "the name of a netCDF-4 file") from None


# -- CSV ---------------------------------------------------------------------------------------------


class _Column(NamedTuple):
    header: str
    texts: list[str]
    field: dict[str, Any]


def write_table(ds: xr.Dataset, path: str | Path, *, title: str = "", cautions: tuple[str, ...] = ()) -> Path:
    """Write a CSV table, one row per sample or per revolution, and its description as JSON beside it.

    Each column's header names the quantity, the face and the unit, e.g. ``solar_flux +X [W m-2]``. The
    description has the same name and the ending ``.json``: a tabular data resource that gives for every
    column its type, unit, meaning and face, and for the whole table the definitions that made it and
    what to be careful about. Vectors in three components stay in the netCDF file. Files of these two names
    are replaced. Fewer columns come from fewer variables: ``write_table(ds[["absorbed_flux"]], ...)``.

    Parameters
    ----------
    ds : xarray.Dataset
        What `flux`, `factors`, `orbit_mean` or an orbit's `track` returns.
    path : str or Path
        Where to write, ending in ``.csv``.
    title : str
        One line on what the table holds, for the description.
    cautions : tuple of str
        More to be careful about, besides what is said in every description.

    Returns
    -------
    Path
        The CSV file written.

    Raises
    ------
    InputError
        If the dataset has neither samples nor revolutions, the path does not end in ``.csv``, or its
        folder does not exist.
    """
    path = _writable(path)
    if path.suffix.lower() != ".csv":
        raise InputError("path", path.name, "a name that ends in .csv")
    along = next((dim for dim in ("time", "rev") if dim in ds.dims), None)
    if along is None:
        raise InputError("ds", f"a dataset over {', '.join(map(str, ds.dims)) or 'nothing'}", "one over time or rev")
    columns = list(_columns(ds, along))

    def write_csv(target: Path) -> None:
        with target.open("w", newline="", encoding="utf-8") as stream:
            out = csv.writer(stream, lineterminator="\n")
            out.writerow([column.header for column in columns])
            out.writerows(zip(*(column.texts for column in columns), strict=True))

    description = _description(ds, path, columns, title, CAUTIONS + cautions)

    def write_json(target: Path) -> None:
        target.write_text(json.dumps(description, indent=2, ensure_ascii=False) + "\n", encoding="utf-8")

    _whole(path.with_suffix(".json"), write_json)
    return _whole(path, write_csv)


def _columns(ds: xr.Dataset, along: str) -> Iterator[_Column]:
    if along == "time":
        yield _time_column(ds)
    names = [name for name in [*ds.coords, *ds.data_vars] if name != "time" and along in ds[name].dims]
    # The order of the schema's own table: first where and when, then the Sun, then the faces.
    order = {name: position for position, name in enumerate(VARIABLES)}
    for name in sorted(map(str, names), key=lambda name: order.get(name, len(order))):
        array = ds[name]
        if array.dims == (along,):
            yield _value_column(array, name, name, {})
        elif set(array.dims) == {along, "face"}:
            for face in ds["face"].values:
                yield _value_column(array.sel(face=face), name, f"{name} {face}", _face_facts(ds, str(face)))


def _time_column(ds: xr.Dataset) -> _Column:
    time = ds["time"].values
    if np.issubdtype(time.dtype, np.datetime64):
        texts = [f"{text}Z" for text in np.datetime_as_string(time, unit="us")]
        return _Column("time [UTC]", texts, {"type": "datetime", "unit": "UTC", "description": "time, ISO 8601"})
    seconds = time.astype("timedelta64[ns]").astype(np.int64) / 1e9
    field = {"type": "number", "unit": "s", "description": "time from orbit noon"}
    return _Column("time from orbit noon [s]", _texts(seconds), field)


def _value_column(array: xr.DataArray, name: str, label: str, face: dict[str, Any]) -> _Column:
    known = VARIABLES.get(name)
    unit = str(array.attrs.get("units") or (known.units if known else None) or "1")
    whole = np.issubdtype(array.dtype, np.integer)
    meaning = str(array.attrs.get("long_name") or (known.long_name if known else name))
    field: dict[str, Any] = {"type": "integer" if whole else "number", "unit": unit, "description": meaning}
    if known and known.flags:
        field["unit"] = "flag"
        field["description"] += ": " + ", ".join(f"{value} = {word}" for word, value in known.flags.items())
        return _Column(f"{label} [flag]", [str(value) for value in array.values], field)
    if name in _FORMULAS:
        field["formula"] = _FORMULAS[name]
    texts = [str(value) for value in array.values] if whole else _texts(array.values)
    return _Column(f"{label} [{unit}]", texts, field | face)


def _texts(values: Array) -> list[str]:
    """Numbers as short as they can be; an empty cell where there is none."""
    return ["" if np.isnan(value) else f"{value:.{_SIGNIFICANT_DIGITS}g}" for value in values.tolist()]


def _face_facts(ds: xr.Dataset, face: str) -> dict[str, Any]:
    facts: dict[str, Any] = {"face": face}
    for name, key in (("area", "area_m2"), ("absorptance", "absorptance"), ("emittance", "emittance")):
        if name in ds:
            facts[key] = round(float(ds[name].sel(face=face)), _SIGNIFICANT_DIGITS)
    extraction = _extraction(ds).get(face)
    if extraction and "absorptance" in facts:
        whole = round(facts["absorptance"] + extraction, _SIGNIFICANT_DIGITS)
        facts["absorptance_note"] = (
            f"solar absorptance {whole:g} less {extraction:g}, the part of incident sunlight that loaded cells "
            "take away as electricity"
        )
    if "normal" in ds:
        facts["normal_body"] = [float(value) for value in ds["normal"].sel(face=face).values]
    coating = _coating_names(ds).get(face)
    return facts | ({"coating": coating} if coating else {})


def _coatings(ds: xr.Dataset) -> Iterator[tuple[str, dict[str, Any]]]:
    """Face by face, the craft's own definition of its coating."""
    craft = _definitions(ds).get("craft")
    for face in craft.get("faces", []) if isinstance(craft, dict) else []:
        for side, label in (("coating", face.get("name", "")), ("back", f"{face.get('name', '')} back")):
            if isinstance(face.get(side), dict):
                yield label, face[side]


def _coating_names(ds: xr.Dataset) -> dict[str, str]:
    """Face by face, what the craft's own definition calls the coating."""
    return {label: str(coating.get("name", "")) for label, coating in _coatings(ds)}


def _extraction(ds: xr.Dataset) -> dict[str, float]:
    """Part of the sunlight that leaves as electricity, of the faces where any does."""
    if "cells unloaded" in str(ds.attrs.get("surface_state", "")):
        return {}
    found = {label: float(coating.get("electrical_extraction", 0.0)) for label, coating in _coatings(ds)}
    return {label: part for label, part in found.items() if part > 0.0}


def _definitions(ds: xr.Dataset) -> dict[str, Any]:
    """Read back the definitions kept with a result: they are attributes that hold JSON."""
    found = {}
    for key, value in ds.attrs.items():
        if isinstance(value, str) and value.startswith("{"):
            found[str(key)] = json.loads(value)
    return found


def _description(
    ds: xr.Dataset, path: Path, columns: list[_Column], title: str, cautions: tuple[str, ...]
) -> dict[str, Any]:
    others = {str(key): _plain(value) for key, value in ds.attrs.items() if str(key) not in _definitions(ds)}
    return {
        "profile": "tabular-data-resource",
        "name": "".join(letter if letter.isalnum() else "-" for letter in path.stem.lower()),
        "path": path.name,
        "title": title or path.stem,
        "format": "csv",
        "mediatype": "text/csv",
        "encoding": "utf-8",
        "dialect": {"delimiter": ",", "header": True, "lineTerminator": "\n"},
        "schema": {
            "fields": [{"name": column.header, **column.field} for column in columns],
            "missingValues": [""],
        },
        "cautions": list(cautions),
        "definitions": _definitions(ds),
        "attributes": others,
    }


def _plain(value: Any) -> Any:
    return value.item() if isinstance(value, np.generic) else value


def _writable(path: str | Path) -> Path:
    path = Path(path)
    if not path.parent.is_dir():
        raise InputError("path", path.name, f"in a folder that exists, and '{path.parent}' does not")
    if path.is_dir():
        raise InputError("path", Told(f"the folder {path.name}"), "a file's name")
    return path


def _whole(path: Path, write: Callable[[Path], None]) -> Path:
    """Let `write` fill a file beside `path`, then put it in place: a failure leaves nothing half-written."""
    handle, name = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.", suffix=".part")
    os.close(handle)
    part = Path(name)
    try:
        write(part)
        part.chmod(0o666 & ~_umask())  # mkstemp keeps everyone else out; a result is an ordinary file
        part.replace(path)
    finally:
        part.unlink(missing_ok=True)
    return path


def _umask() -> int:
    # The only way to read the mask is to set it.
    mask = os.umask(0o022)
    os.umask(mask)
    return mask


# -- text --------------------------------------------------------------------------------------------


def summary_table(ds: xr.Dataset) -> str:
    """Say in text what a result holds: the orbit, its night, and what each face receives and absorbs.

    Parameters
    ----------
    ds : xarray.Dataset
        What `flux` returns.

    Returns
    -------
    str
        Several lines, at most 110 wide where the names of faces are short. Means are over all whole
        revolutions; a track shorter than one has none. Lowest and highest are those of the samples.
    """
    return "\n".join([*orbit_lines(ds), *face_lines(ds)])


def orbit_lines(ds: xr.Dataset) -> list[str]:
    """Period, altitude, beta angle, derived elements, sunlit fraction and eclipse of a track."""
    elapsed = np.asarray(ds["elapsed"].values, float)
    lit = float(np.trapezoid(ds["sunlit"].values, elapsed) / (elapsed[-1] - elapsed[0]))
    period = float(ds["orbital_period"]) / 60
    where = [f"altitude {_span(ds['altitude'].values, '.0f')} km", f"beta {_span(ds['beta'].values, '+.2f')} deg"]
    night = f"eclipse {(1 - lit) * period:.2f} min per revolution, penumbra counted by the covered part of the disc"
    return [
        "  ".join([f"period {period:.2f} min", *where]),
        *_derived(ds),
        f"sunlit {lit:.4f}  {night if lit < 1.0 else 'no eclipse'}",
        *_longest(ds),
    ]


def face_lines(ds: xr.Dataset) -> list[str]:
    """One line per face under a heading: orbit means of each flux, range and power of what is absorbed."""
    faces = [str(face) for face in ds["face"].values]
    means = _mean_fluxes(ds)
    absorbed = ds["absorbed_flux"].transpose("time", "face").values
    minutes = ds["elapsed"].values[absorbed.argmax(axis=0)] / 60.0
    total = "all faces"
    width = max(len(total), *(len(face) for face in faces))
    lines = [
        f"{'':{width}} {'area':>8} {'surface':>11}  {'orbit mean, W m-2':<24}   {'absorbed, W m-2':<26}{'absorbed':>9} "
        f"{'highest':>9}",
        f"{'face':{width}} {'m2':>8} {'a':>5} {'e':>5} {'solar':>8} {'albedo':>8} {'IR':>8}  {'mean':>8} {'lowest':>8} "
        f"{'highest':>8} {'mean, W':>8} {'at minute':>9}",
    ]
    powers = np.asarray(ds["area"].values, float) * means["absorbed_flux"] if means else None
    for index, face in enumerate(faces):
        values = [f"{means[name][index]:.2f}" if means else "-" for name in FLUXES]
        power = "-" if powers is None else f"{powers[index]:.2f}"
        surface = f"{float(ds['absorptance'][index]):5.3f} {float(ds['emittance'][index]):5.3f}"
        lines.append(
            f"{face:{width}} {float(ds['area'][index]):8.4g} {surface} {values[0]:>8} {values[1]:>8} {values[2]:>8}  "
            f"{values[3]:>8} {absorbed[:, index].min():8.2f} {absorbed[:, index].max():8.2f} {power:>8} "
            f"{minutes[index]:9.2f}"
        )
    if powers is None:
        lines.append("less than one revolution: no orbit means")
    else:
        lines.append(f"{total:{width + 76}} {powers.sum():8.2f}")
    return [*lines, "minutes from the start of the track; power is area times mean absorbed flux", *_cells_note(ds)]


def _cells_note(ds: xr.Dataset) -> list[str]:
    """Say of which faces the absorptance shown is less than that of the surface."""
    alike: dict[tuple[float, float], list[str]] = {}
    for face, part in _extraction(ds).items():
        whole = round(float(ds["absorptance"].sel(face=face)) + part, _SIGNIFICANT_DIGITS)
        alike.setdefault((whole, part), []).append(face)
    lines = []
    for (whole, part), faces in alike.items():
        text = (
            f"a of {', '.join(faces)}: {whole:g} less the {part:g} of the sunlight that loaded cells make electricity"
        )
        lines += textwrap.wrap(text, _WIDTH, subsequent_indent="  ")
    return lines


def _mean_fluxes(ds: xr.Dataset) -> dict[str, Array]:
    """Mean over all whole revolutions, or nothing where there is none."""
    elapsed = ds["elapsed"].values
    if elapsed[-1] - elapsed[0] < float(ds["orbital_period"]) * (1 - 1e-9):
        return {}
    means = orbit_mean(ds)
    return {name: np.asarray(means[name].mean("rev").values, float) for name in FLUXES}


def _derived(ds: xr.Dataset) -> list[str]:
    """Elements that the user did not give but another tool may ask for."""
    orbit = _definitions(ds).get("orbit", {})
    if orbit.get("kind") != "sun-synchronous":
        return []
    made = SunSynchronousOrbit.from_table(orbit)
    return [f"inclination {made.inclination_deg:.4f} deg and, at the epoch, RAAN {made.raan_deg:.4f} deg"]


def _longest(ds: xr.Dataset) -> list[str]:
    """Say how long the longest eclipse is from first to last contact, if one is whole."""
    table = eclipses(ds)
    whole = np.asarray(table["penumbra_duration_s"].values, float)
    if np.isnan(whole).all():
        return []
    longest = int(np.nanargmax(whole))
    umbra = float(table["umbra_duration_s"][longest]) / 60
    return [f"longest eclipse: {whole[longest] / 60:.2f} min from first to last contact, {umbra:.2f} of them in umbra"]


def _span(values: Array, form: str) -> str:
    low, high = format(float(np.min(values)), form), format(float(np.max(values)), form)
    return low if low == high else f"{low} to {high}"
