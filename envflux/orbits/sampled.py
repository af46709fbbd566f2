"""Tracks from positions the user already has."""

from __future__ import annotations

import json
import math
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike, NDArray

from envflux import almanac
from envflux.errors import MISSING, InputError, Told
from envflux.orbits.elements import osculating_period_s
from envflux.orbits.states import SampledStates
from envflux.orbits.tracks import assemble
from envflux.shadows import Shadow

Array = NDArray[np.float64]


def track_from_arrays(
    time: ArrayLike,
    position_km: ArrayLike,
    velocity_km_s: ArrayLike,
    sun_direction: ArrayLike | None = None,
    sun_distance_au: ArrayLike | None = None,
    *,
    period_s: float | None = None,
    shadow: Shadow = Shadow(),  # noqa: B008  # frozen, so one for all calls is safe
) -> xr.Dataset:
    """Make a track on exactly the samples given: nothing is added, moved or interpolated.

    Parameters
    ----------
    time : array_like of datetime64 or timedelta64, shape (n,)
        Strictly increasing times: UTC, or elapsed time where there is no calendar. Dated times are
        rounded to the microsecond.
    position_km : array_like, shape (n, 3)
        Positions: GCRS where dated, else in any inertial frame of yours. [km]
    velocity_km_s : array_like, shape (n, 3)
        Velocities in the same frame. [km s-1]
    sun_direction : array_like, shape (n, 3) or (3,), optional
        Directions from the planet's centre to the Sun, of any length above 0. Computed where the
        times are dated.
    sun_distance_au : array_like, shape (n,) or one number, optional
        Distance of the Sun; 1 if only `sun_direction` is given. [au]
    period_s : float, optional
        Time of one revolution; that of the first state's ellipse if left out. [s]
    shadow : Shadow
        Model of the planet's shadow.

    Returns
    -------
    xarray.Dataset
        As from an orbit's `track`, with no contacts flagged; `eclipses` finds them between samples.

    Raises
    ------
    InputError
        One sentence that names the field, what came and what is accepted.

    Notes
    -----
    Orbit means on samples that miss the edges of eclipses are as coarse as the samples.
    """
    clock, times_us, dated = _clock(time)
    n = times_us.size
    position = _table("position_km", position_km, n)
    velocity = _table("velocity_km_s", velocity_km_s, n)
    sun = _sun(sun_direction, sun_distance_au, n, dated=dated)
    if shadow.oblate and not dated:
        raise InputError("shadow.oblate", True, "false: undated times do not say where the pole is")
    if np.any(np.einsum("ij,ij->i", np.cross(position, velocity), np.cross(position, velocity)) == 0.0):
        raise InputError(
            "velocity_km_s", Told("along the position at a sample"), "across it: the orbit plane is undefined"
        )
    if period_s is None:
        period_s = osculating_period_s(position[0], velocity[0])
        if math.isnan(period_s):
            raise InputError("period_s", MISSING, "given: the first state is on an open path without a period")
    elif isinstance(period_s, bool) or not math.isfinite(period_s) or period_s <= 0.0:
        raise InputError("period_s", period_s, "a number above 0")
    span_s = (times_us[-1] - times_us[0]) * 1e-6
    turns = span_s / period_s
    return assemble(
        SampledStates(times_us, position, velocity, sun, dated=dated),
        times_us,
        clock,
        np.zeros(n, np.int8),
        float(period_s),
        shadow,
        whole=round(turns) >= 1 and abs(turns - round(turns)) * period_s < 1e-3,
        orbit=json.dumps({"kind": "arrays"}),
        request={"samples": n, "shadow": json.loads(shadow.to_json())},
        step_s=float(np.median(np.diff(times_us))) * 1e-6 if n > 1 else 0.0,
        field="position_km",
    )


def _clock(time: ArrayLike) -> tuple[Any, NDArray[np.int64], bool]:
    accepted = "an array of datetime64 (UTC) or timedelta64, strictly increasing"
    values = np.asarray(time)
    if values.dtype.kind not in "Mm":
        raise InputError("time", Told(f"of type {values.dtype}"), accepted)
    if values.ndim != 1 or values.size == 0:
        raise InputError("time", Told(f"of shape {values.shape}"), f"{accepted}, of shape (n,)")
    if np.isnat(values).any():
        raise InputError("time", Told("not a time at a sample"), accepted)
    dated = values.dtype.kind == "M"
    if dated:
        # Checked before the conversion to nanoseconds, which cannot hold far dates.
        almanac.check_year(values, "time")
        times_us = almanac.tai_from_utc(values)
        if not almanac.within_ephemeris(int(times_us.min()), int(times_us.max())):
            raise InputError("time", Told("partly outside"), almanac.accepted_dates())
        clock = almanac.utc_from_tai(times_us)[0]
    else:
        times_us = (values.astype("timedelta64[ns]").astype(np.int64) + 500) // 1000
        clock = (times_us * 1000).view("timedelta64[ns]")
    if np.any(np.diff(times_us) <= 0):
        i = int(np.flatnonzero(np.diff(times_us) <= 0)[0])
        raise InputError("time", Told(f"not later at sample {i + 2} than at sample {i + 1}"), "strictly increasing")
    return clock, times_us, dated


def _table(field: str, value: ArrayLike, n: int) -> Array:
    try:
        table = np.array(value, dtype=float, ndmin=1)
    except (TypeError, ValueError):
        raise InputError(field, Told("not an array of numbers"), f"an array of shape ({n}, 3)") from None
    if table.shape != (n, 3):
        raise InputError(field, Told(f"of shape {table.shape}"), f"of shape ({n}, 3), one row for each time")
    if not np.isfinite(table).all():
        row = int(np.flatnonzero(~np.isfinite(table).all(axis=1))[0])
        raise InputError(field, Told(f"not finite at sample {row + 1}"), "finite throughout")
    return np.ascontiguousarray(table)


def _sun(direction: ArrayLike | None, distance: ArrayLike | None, n: int, *, dated: bool) -> Array | None:
    if direction is None:
        if not dated:
            raise InputError("sun_direction", MISSING, "given: times without a calendar do not say where the Sun is")
        if distance is not None:
            raise InputError("sun_distance_au", Told("given"), "left out where sun_direction is")
        return None
    alone = np.shape(direction) == (3,)
    vectors = _table("sun_direction", np.tile(np.asarray(direction, float), (n, 1)) if alone else direction, n)
    length = np.sqrt(np.einsum("ij,ij->i", vectors, vectors))
    if not (length > 0.0).all():
        raise InputError("sun_direction", Told("zero at a sample"), "a vector of any length above 0")
    au = np.asarray(1.0 if distance is None else distance, dtype=float)
    if au.shape not in ((), (n,)):
        raise InputError("sun_distance_au", Told(f"of shape {au.shape}"), f"one number, or of shape ({n},)")
    if not (np.isfinite(au).all() and (au > 0.0).all()):
        raise InputError("sun_distance_au", Told("not above 0 at a sample"), "a finite number above 0 throughout")
    return np.asarray(vectors / length[:, None] * np.broadcast_to(au, (n,))[:, None])
