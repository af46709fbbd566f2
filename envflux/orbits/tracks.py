"""From an orbit to a track: one Dataset of where the spacecraft and the Sun are."""

from __future__ import annotations

import json
from datetime import datetime
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from envflux import almanac
from envflux.definitions import Definition, utc_instant
from envflux.errors import InputError
from envflux.orbits import grids
from envflux.orbits.contacts import (
    CHUNK,
    SCAN_STEPS,
    UMBRA_ENTRY,
    Contacts,
    find_contacts,
    interior_us,
)
from envflux.orbits.derived import fill_derived, settle_noon
from envflux.orbits.grids import Pace
from envflux.orbits.states import FIXED_POLE, States, refuse_underground
from envflux.schema import stamp
from envflux.shadows import Shadow, sunlit_fraction

Array = NDArray[np.float64]
Microseconds = NDArray[np.int64]

_VECTORS = ("position", "velocity", "sun_direction", "sun")
_SCALARS = ("altitude", "sun_distance", "sunlit", "beta")
_DATED = ("latitude", "longitude", "local_solar_time")
_X_AXIS = np.array([1.0, 0.0, 0.0])


class Trackable(Definition):
    """An orbit: a definition that can be followed in time."""

    @property
    def period_s(self) -> float:
        """Time of one revolution: from node to node where J2 acts. [s]."""
        return self._pace().period_s

    def _pace(self) -> Pace:
        raise NotImplementedError

    def _states(self) -> States:
        raise NotImplementedError

    def _first_moment(self, start: object) -> tuple[int, datetime | None]:
        """Moment of the first sample, in microseconds, and the start as the user meant it."""
        raise NotImplementedError

    def track(
        self,
        start: object = None,
        revolutions: float | None = None,
        duration_s: float | None = None,
        step_s: float | None = None,
        *,
        shadow: Shadow = Shadow(),  # noqa: B008  # frozen, so one for all calls is safe
    ) -> xr.Dataset:
        """Follow the orbit.

        Parameters
        ----------
        start : str or datetime or numpy.datetime64, optional
            First moment, with its time zone; the orbit's epoch if left out. Undated orbits take none
            and start at orbit noon.
        revolutions : float, optional
            Length in revolutions, above 0; 1 if neither this nor `duration_s` is given.
        duration_s : float, optional
            Length, instead of `revolutions`. [s]
        step_s : float, optional
            Distance of the regular samples, at most 1/12 of a revolution; 1/240 of one if left out.
            Above an eccentricity of 0.05 the samples are equal in true anomaly, as many a revolution
            as this step would give. [s]
        shadow : Shadow
            Model of the planet's shadow.

        Returns
        -------
        xarray.Dataset
            Positions and velocities [km, km s-1] and the Sun on GCRS axes (undated: on the orbit frame), the
            visible fraction of the Sun's disc, beta and more, along ``time``. Besides the regular
            samples it holds the ends of revolutions, the contacts of penumbra and umbra (flagged in
            ``contact``), and samples inside each partial phase.

        Raises
        ------
        InputError
            One sentence that names the field, what came and what is accepted.

        Warns
        -----
        CoarseStepWarning
            Where the step is above 1/72 of a revolution.

        Notes
        -----
        Secular J2 neither shifts the local time of a Sun-synchronous orbit nor tilts a geostationary
        one, which real perturbations do over years.
        """
        pace = self._pace()
        first_us, instant = self._first_moment(start)
        request = grids.check_request(
            pace, instant if start is not None else None, revolutions, duration_s, step_s, stacklevel=3
        )
        states = self._states()
        last_us = first_us + request.span_us
        if states.dated and not almanac.within_ephemeris(first_us, last_us):
            field, value = ("duration_s", duration_s) if duration_s is not None else ("revolutions", revolutions or 1)
            raise InputError(field, value, f"such that the track stays {almanac.accepted_dates()}")
        if shadow.oblate and not states.dated:
            raise InputError("shadow.oblate", True, "false: an undated orbit does not know where the pole is")
        contacts = _contacts(states, _scan_us(pace, first_us, last_us), shadow, first_us, last_us)
        times, flags = _samples(pace, request, contacts, first_us, last_us, shadow)
        kept, clock = _clock(times, first_us, dated=states.dated)
        times, flags = times[kept], flags[kept]
        return assemble(
            states,
            times,
            clock,
            flags,
            pace.period_s,
            shadow,
            whole=request.whole,
            orbit=self.to_json(),
            request={**request.record, "shadow": json.loads(shadow.to_json())},
            step_s=request.step_s,
        )


def dated_start(start: object, epoch: datetime) -> datetime:
    """Find the moment a dated track starts, checked.

    Raises
    ------
    InputError
        Naming ``start``.
    """
    if start is None:
        return epoch
    instant = utc_instant(start, "start")
    almanac.check_date(instant, "start")
    return instant


def _contacts(states: States, scan_us: Microseconds, shadow: Shadow, first_us: int, last_us: int) -> Contacts:
    try:
        return find_contacts(states, scan_us, shadow, first_us, last_us)
    except InputError:
        # The scan looks a little past both ends; elements may be unusable there and good within.
        inner = scan_us[(scan_us > first_us) & (scan_us < last_us)]
        return find_contacts(states, np.concatenate([[first_us], inner, [last_us]]), shadow, first_us, last_us)


def _scan_us(pace: Pace, first_us: int, last_us: int) -> Microseconds:
    """Nodes of the search for contacts: whole revolutions around the track, one node past each end."""
    revolutions = int(np.ceil((last_us - first_us) / (pace.period_s * 1e6)))
    scan = pace.samples_us(first_us, -1, revolutions + 1, SCAN_STEPS)
    inside = np.flatnonzero((scan > first_us) & (scan < last_us))
    after = np.searchsorted(scan, last_us)
    before = np.searchsorted(scan, first_us, side="right") - 1
    low = max((inside[0] if inside.size else after) - 2, 0)
    return scan[min(low, max(before - 1, 0)) : min(after + 2, scan.size)]


def _samples(
    pace: Pace, request: grids.Request, contacts: Contacts, first_us: int, last_us: int, shadow: Shadow
) -> tuple[Microseconds, NDArray[np.int8]]:
    boundaries = pace.boundary_us(first_us, range(1, int(request.span_us / (pace.period_s * 1e6)) + 1))
    fixed = np.concatenate([[first_us], boundaries[boundaries < last_us - 1], [last_us]])
    groups = [(fixed, grids.FIXED), (grids.regular_us(pace, first_us, request), grids.REGULAR)]
    if shadow.kind == "cylinder":
        # Sunlight falls in one step: a lit sample beside each edge keeps time integrals exact.
        lit = contacts.times_us + np.where(contacts.kinds == UMBRA_ENTRY, -grids.MERGED_US, grids.MERGED_US)
        groups.append((lit[(lit > first_us) & (lit < last_us)], grids.CONTACT))
    else:
        inner = interior_us(contacts, first_us, last_us, pace.period_s)
        groups.append((inner, grids.INTERIOR))
    return grids.merge(groups, contacts.times_us, contacts.kinds, grids.merging_us(request.step_s))


def _clock(times_us: Microseconds, first_us: int, *, dated: bool) -> tuple[NDArray[np.bool_], Any]:
    """Which samples have a label, and the labels: UTC, or time since the start.

    A leap second has no label of its own: samples within one are left out, but the last, which
    takes the midnight that follows.
    """
    if not dated:
        return np.ones(times_us.size, bool), (times_us * 1000).view("timedelta64[ns]")
    clock, leap = almanac.utc_from_tai(times_us)
    kept = ~leap
    kept[-1] = True
    clock = clock[kept]
    if clock.size > 1 and clock[-1] <= clock[-2]:
        kept[np.flatnonzero(kept)[-2]] = False
        clock = np.delete(clock, -2)
    return kept, clock


def assemble(
    states: States,
    times_us: Microseconds,
    clock: Any,
    flags: NDArray[np.int8],
    period_s: float,
    shadow: Shadow,
    *,
    whole: bool,
    orbit: str,
    request: dict[str, object],
    step_s: float,
    lowest_km: float = 0.0,
    field: str = "start",
) -> xr.Dataset:
    """Compute all variables of a track on the given samples, a stretch at a time to spare memory.

    Raises
    ------
    InputError
        If the spacecraft is below `lowest_km` at a sample.
    """
    n = times_us.size
    out: dict[str, Array] = {name: np.empty((n, 3)) for name in _VECTORS}
    names = (*_SCALARS, "orbit_angle", *((*_DATED, "argument_of_latitude") if states.dated else ()))
    out.update({name: np.empty(n) for name in names})
    for begin in range(0, n, CHUNK):
        part = slice(begin, begin + CHUNK)
        state = states.at(times_us[part])
        refuse_underground(state, field, lowest_km)
        out["position"][part], out["velocity"][part] = state.position, state.velocity
        out["sun_direction"][part], out["sun_distance"][part] = state.sun_direction, state.sun_distance
        fill_derived(state, out, part)
        sunlit_fraction(
            state.position,
            state.sun_direction,
            state.sun_distance,
            state.pole if shadow.oblate else FIXED_POLE,
            shadow.radius_km,
            shadow.stretch,
            shadow.kind == "cylinder",
            out["sunlit"][part],
        )
    settle_noon(out, _X_AXIS)
    since_us = times_us - times_us[0]
    count = int(since_us[-1] / (period_s * 1e6)) + 1
    edges = np.round(np.arange(1, count + 1) * (period_s * 1e6)).astype(np.int64)
    rev = np.searchsorted(edges, since_us, side="right").astype(np.int32)
    if whole and n > 1:
        rev[-1] = rev[-2]  # the last sample closes a revolution, it does not open one
    coords: dict[str, Any] = {
        "time": ("time", clock),
        "xyz": ("xyz", np.array(["x", "y", "z"], dtype=object)),  # fixed-width strings have no Zarr v3 type
        "elapsed": ("time", since_us * 1e-6),
        "rev": ("time", rev),
        "orbit_angle": ("time", out["orbit_angle"]),
        "contact": ("time", flags),
        "orbital_period": ((), period_s),
    }
    if states.dated:
        coords["argument_of_latitude"] = ("time", out["argument_of_latitude"])
    variables: dict[str, Any] = {name: (("time", "xyz"), out[name]) for name in _VECTORS}
    variables.update({name: ("time", out[name]) for name in (*_SCALARS, *(_DATED if states.dated else ()))})
    return stamp(
        xr.Dataset(variables, coords=coords),
        frame="GCRS" if states.dated else "orbit frame",
        orbit=orbit,
        request=json.dumps(request),
        period_s=period_s,
        step_s=step_s,
        data_sources=states.sources,
        history="track: positions, Sun and shadow along the orbit",
    )
