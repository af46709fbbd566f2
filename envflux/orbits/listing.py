"""The eclipses of a track, one row each."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from envflux import almanac
from envflux.errors import InputError, Told
from envflux.orbits.contacts import (
    PENUMBRA_ENTRY,
    PENUMBRA_EXIT,
    SCAN_STEPS,
    UMBRA_ENTRY,
    UMBRA_EXIT,
    find_contacts,
)
from envflux.orbits.states import SampledStates
from envflux.schema import extend_history, stamp
from envflux.shadows import Shadow

Microseconds = NDArray[np.int64]

_NEEDED = ("position", "velocity", "sun_direction", "sun_distance", "sunlit")
_EDGES = {
    PENUMBRA_ENTRY: "penumbra_entry",
    UMBRA_ENTRY: "umbra_entry",
    UMBRA_EXIT: "umbra_exit",
    PENUMBRA_EXIT: "penumbra_exit",
}
_NOT_WITHIN = -1


def eclipses(track: xr.Dataset) -> xr.Dataset:
    """List the eclipses of a track.

    Where the track's contacts are flagged, they are listed; a track from arrays is searched between
    its samples, on a cubic through positions and velocities.

    Parameters
    ----------
    track : xarray.Dataset
        A track, or a Dataset that carries one along.

    Returns
    -------
    xarray.Dataset
        Along ``eclipse``: ``penumbra_entry``, ``umbra_entry``, ``umbra_exit``, ``penumbra_exit`` (as the
        track's ``time``; NaT where there is none or it lies outside the track); ``umbra_duration_s``
        and ``penumbra_duration_s``, the latter from first to last contact (NaN where the eclipse is
        cut off by an end of the track; umbra 0 where it has penumbra only); ``complete``, 1 where the
        whole eclipse lies in the track. Contacts of the cylindrical shadow count as umbra. [s]

    Raises
    ------
    InputError
        If it is no track.
    """
    missing = [name for name in _NEEDED if name not in track]
    if missing or "time" not in track.dims:
        raise InputError(
            "track", Told(f"a Dataset without {', '.join(missing) or 'time'}"), "a track, as orbit.track() makes it"
        )
    clock = track["time"].values
    dated = clock.dtype.kind == "M"
    times_us = almanac.tai_from_utc(clock) if dated else clock.astype("timedelta64[ns]").astype(np.int64) // 1000
    flags = track["contact"].values if "contact" in track.coords else np.zeros(times_us.size, np.int8)
    cylinder = _shadow(track).kind == "cylinder"
    marked = np.flatnonzero(flags)
    if marked.size:
        found_us, kinds = times_us[marked], flags[marked]
        dark_at_start = _darkness(float(track["sunlit"].values[0]))
        if marked[0] == 0:  # a track that begins on a contact: what matters is the time before it
            dark_at_start = {PENUMBRA_ENTRY: 0, UMBRA_ENTRY: 1, UMBRA_EXIT: 2, PENUMBRA_EXIT: 1}[int(kinds[0])]
    elif track["sunlit"].values.min() < 1.0 or _is_sampled(track):
        found_us, kinds, dark_at_start = _search(track, times_us, dated=dated)
    else:
        found_us, kinds, dark_at_start = times_us[:0], flags[:0], 0
    rows = _rows(found_us, kinds, dark_at_start)
    if cylinder:
        rows[:, 0], rows[:, 3] = rows[:, 1], rows[:, 2]
    return _table(track, rows, dated=dated, cylinder=cylinder)


def _darkness(sunlit: float) -> int:
    return 0 if sunlit >= 1.0 else 2 if sunlit <= 0.0 else 1


def _is_sampled(track: xr.Dataset) -> bool:
    return bool(json.loads(track.attrs.get("orbit", "{}")).get("kind") == "arrays")


def _shadow(track: xr.Dataset) -> Shadow:
    request = json.loads(track.attrs.get("request", "{}"))
    shadow: Shadow = Shadow.from_table(request.get("shadow", {}))
    return shadow


def _search(track: xr.Dataset, times_us: Microseconds, *, dated: bool) -> tuple[Microseconds, NDArray[np.int8], int]:
    position, velocity = (np.ascontiguousarray(track[name].transpose("time", "xyz").values) for name in _NEEDED[:2])
    sun = (track["sun_direction"] * track["sun_distance"]).transpose("time", "xyz").values
    states = SampledStates(times_us, position, velocity, np.ascontiguousarray(sun), dated=dated)
    period_us = float(track.attrs["period_s"]) * 1e6
    # Every sample is a node, and long gaps are divided.
    parts = np.ceil(np.diff(times_us) / (period_us / SCAN_STEPS)).astype(np.int64)
    parts = np.clip(parts, 1, SCAN_STEPS)
    which = np.repeat(np.arange(parts.size), parts)
    number = np.arange(which.size) - np.repeat(np.cumsum(parts) - parts, parts)
    inner = times_us[which] + np.diff(times_us)[which] * number // parts[which]
    scan = np.concatenate([inner, times_us[-1:]])
    found = find_contacts(states, scan, _shadow(track), int(times_us[0]), int(times_us[-1]))
    return found.times_us, found.kinds, found.dark_at_start


def _rows(times_us: Microseconds, kinds: NDArray[np.int8], dark_at_start: int) -> Microseconds:
    """Contacts sorted into eclipses, shape (n, 4), -1 where a contact lies outside the track."""
    rows: list[list[int]] = [[_NOT_WITHIN] * 4] if dark_at_start else []
    inside = bool(dark_at_start)
    for moment, kind in zip(times_us.tolist(), kinds.tolist(), strict=True):
        # A cylindrical shadow opens with umbra, a shadow of discs with penumbra.
        if kind == PENUMBRA_ENTRY or (kind == UMBRA_ENTRY and not inside):
            rows.append([_NOT_WITHIN] * 4)
            inside = True
        rows[-1][kind - 1] = moment
        if kind == PENUMBRA_EXIT:
            inside = False
        elif kind == UMBRA_EXIT:
            inside = rows[-1][0] != _NOT_WITHIN or rows[-1][1] == _NOT_WITHIN
    return np.array(rows, np.int64).reshape(-1, 4)


def _table(track: xr.Dataset, rows: Microseconds, *, dated: bool, cylinder: bool) -> xr.Dataset:
    absent = rows == _NOT_WITHIN
    complete = ~absent[:, 0] & ~absent[:, 3]
    penumbra_only = complete & absent[:, 1] & absent[:, 2]
    umbra = np.where(absent[:, 1] | absent[:, 2], np.nan, (rows[:, 2] - rows[:, 1]) * 1e-6)
    umbra[penumbra_only] = 0.0
    whole = np.where(complete, (rows[:, 3] - rows[:, 0]) * 1e-6, np.nan)
    umbra[~complete] = np.nan
    data: dict[str, Any] = {}
    for column, name in enumerate(_EDGES.values()):
        if dated:
            moments = almanac.utc_from_tai(rows[:, column])[0]
            moments[absent[:, column]] = np.datetime64("NaT")
        else:
            moments = (rows[:, column] * 1000).view("timedelta64[ns]")
            moments[absent[:, column]] = np.timedelta64("NaT")
        data[name] = ("eclipse", moments, {"long_name": name.replace("_", " ")})
    data["umbra_duration_s"] = ("eclipse", umbra, {"units": "s", "long_name": "time in umbra"})
    data["penumbra_duration_s"] = ("eclipse", whole, {"units": "s", "long_name": "time from first to last contact"})
    data["complete"] = (
        "eclipse",
        complete.astype(np.int8),
        {"long_name": "whether the whole eclipse lies in the track", "flag_values": [0, 1], "flag_meanings": "no yes"},
    )
    kept = {key: track.attrs[key] for key in ("frame", "orbit", "request", "period_s") if key in track.attrs}
    table = xr.Dataset(data, coords={"eclipse": np.arange(1, rows.shape[0] + 1)})
    table["eclipse"].attrs = {"long_name": "eclipse, counted from the start of the track"}
    return stamp(table, **kept, history=extend_history(track, "eclipses: contacts of penumbra and umbra"))
