"""Orbits declared by their elements: Keplerian, circular, Sun-synchronous, and undated."""

from __future__ import annotations

import math
from datetime import datetime
from functools import lru_cache
from typing import Annotated, Literal

from pydantic import Field, model_validator

from envflux import almanac
from envflux.definitions import Instant
from envflux.errors import MISSING, InputError
from envflux.orbits.elements import (
    Elements,
    mean_from_true,
    mean_motion_rad_s,
    secular_rates,
    sun_synchronous_cosine,
    sun_synchronous_limit_km,
)
from envflux.orbits.grids import Pace
from envflux.orbits.states import ElementStates, NoonStates
from envflux.orbits.tracks import Trackable, dated_start
from envflux.planets import EARTH

# Limits of optional fields stand outside the "or None": that is where messages look for the whole range.
LOWEST_KM = 100.0  # below, no orbit lasts a revolution
HIGHEST_KM = 500_000.0  # above, the Earth no longer rules the motion

Altitude = Annotated[float, Field(ge=LOWEST_KM, le=HIGHEST_KM)]
Inclination = Annotated[float, Field(ge=0.0, le=180.0)]
Angle = Annotated[float, Field(ge=-360.0, le=360.0)]


class _ElementOrbit(Trackable):
    """What the dated orbits share: elements at an epoch."""

    def _elements(self) -> Elements:
        raise NotImplementedError

    def _epoch(self) -> datetime:
        raise NotImplementedError

    def _states(self) -> ElementStates:
        return ElementStates(self._elements(), almanac.tai_from_instant(self._epoch()))

    def _pace(self) -> Pace:
        elements = self._elements()
        return Pace(
            elements.nodal_period_s,
            elements.eccentricity,
            elements.mean_anomaly_rad,
            elements.rates.mean_anomaly_rad_s,
            almanac.tai_from_instant(self._epoch()),
        )

    def _first_moment(self, start: object) -> tuple[int, datetime | None]:
        instant = dated_start(start, self._epoch())
        return almanac.tai_from_instant(instant), instant


class KeplerOrbit(_ElementOrbit):
    """A Keplerian orbit with secular J2, in the true equator and equinox of date.

    Parameters
    ----------
    semi_major_axis_km : float, optional
        Semi-major axis, instead of the two altitudes. [km]
    perigee_altitude_km, apogee_altitude_km : float, optional
        Altitudes above the equatorial radius, both or neither, 100 to 500 000. [km]
    eccentricity : float, optional
        0 to below 1; 0 if left out, or what the altitudes make it.
    inclination_deg : float
        Inclination, 0 to 180. [degrees]
    raan_deg : float
        Right ascension of the ascending node. [degrees]
    arg_perigee_deg : float
        Argument of perigee. [degrees]
    true_anomaly_deg, mean_anomaly_deg : float, optional
        Place at the epoch, by one or the other; at perigee if neither is given. [degrees]
    epoch : str or datetime
        Moment the elements hold at, with its time zone.
    j2 : bool
        Secular drift of node, perigee and mean anomaly.

    Raises
    ------
    InputError
        One sentence that names the field, what came and what is accepted.
    """

    kind: Literal["kepler"] = "kepler"
    semi_major_axis_km: Annotated[float | None, Field(gt=0.0)] = None
    perigee_altitude_km: Annotated[float | None, Field(ge=LOWEST_KM, le=HIGHEST_KM)] = None
    apogee_altitude_km: Annotated[float | None, Field(ge=LOWEST_KM, le=HIGHEST_KM)] = None
    eccentricity: Annotated[float | None, Field(ge=0.0, lt=1.0)] = None
    inclination_deg: Inclination
    raan_deg: Angle = 0.0
    arg_perigee_deg: Angle = 0.0
    true_anomaly_deg: Annotated[float | None, Field(ge=-360.0, le=360.0)] = None
    mean_anomaly_deg: Annotated[float | None, Field(ge=-360.0, le=360.0)] = None
    epoch: Instant
    j2: bool = True

    @model_validator(mode="after")
    def _consistent(self) -> KeplerOrbit:
        almanac.check_date(self.epoch, "epoch")
        low, high = self.perigee_altitude_km, self.apogee_altitude_km
        if self.semi_major_axis_km is not None and (low is not None or high is not None):
            raise InputError("semi_major_axis_km", self.semi_major_axis_km, "left out where altitudes are given")
        if self.semi_major_axis_km is None and low is None and high is None:
            raise InputError("semi_major_axis_km", MISSING, "given, or both perigee_altitude_km and apogee_altitude_km")
        if self.semi_major_axis_km is None and (low is None or high is None):
            absent = "perigee_altitude_km" if low is None else "apogee_altitude_km"
            raise InputError(absent, MISSING, "given together with the other altitude")
        if low is not None and high is not None and low > high:
            raise InputError("perigee_altitude_km", low, f"at most apogee_altitude_km, {high:g}")
        if low is not None and self.eccentricity is not None:
            meant = self._shape()[1]
            if abs(self.eccentricity - meant) > 1e-6:
                raise InputError(
                    "eccentricity", self.eccentricity, f"left out, or {meant:.7g} as the altitudes make it"
                )
        if self.true_anomaly_deg is not None and self.mean_anomaly_deg is not None:
            raise InputError("mean_anomaly_deg", self.mean_anomaly_deg, "left out where true_anomaly_deg is given")
        if self.semi_major_axis_km is not None:
            self._check_heights()
        return self

    def _check_heights(self) -> None:
        a, e = self._shape()
        low, high = a * (1.0 - e) - EARTH.radius_km, a * (1.0 + e) - EARTH.radius_km
        if low < LOWEST_KM:
            if e > 0.0:
                least = (LOWEST_KM + EARTH.radius_km) / (1.0 - e)
                raise InputError(
                    "semi_major_axis_km", a, f"at least {least:.3f} at this eccentricity: perigee is {low:.1f} km up"
                )
            raise InputError("semi_major_axis_km", a, f"at least {EARTH.radius_km + LOWEST_KM:g}, {LOWEST_KM:g} km up")
        if high > HIGHEST_KM:
            most = (HIGHEST_KM + EARTH.radius_km) / (1.0 + e)
            raise InputError("semi_major_axis_km", a, f"at most {most:.3f} at this eccentricity")

    def _shape(self) -> tuple[float, float]:
        if self.semi_major_axis_km is not None:
            return self.semi_major_axis_km, self.eccentricity or 0.0
        low = EARTH.radius_km + (self.perigee_altitude_km or 0.0)
        high = EARTH.radius_km + (self.apogee_altitude_km or 0.0)
        return 0.5 * (low + high), (high - low) / (high + low)

    def _epoch(self) -> datetime:
        return self.epoch

    def _elements(self) -> Elements:
        a, e = self._shape()
        inclination = math.radians(self.inclination_deg)
        mean = math.radians(self.mean_anomaly_deg or 0.0)
        if self.true_anomaly_deg is not None:
            mean = float(mean_from_true(math.radians(self.true_anomaly_deg), e))
        rates = secular_rates(a, e, inclination, j2=self.j2)
        return Elements(a, e, inclination, math.radians(self.raan_deg), math.radians(self.arg_perigee_deg), mean, rates)


class CircularOrbit(_ElementOrbit):
    """A circular orbit with secular J2, in the true equator and equinox of date.

    Parameters
    ----------
    altitude_km : float
        Altitude above the equatorial radius, 100 to 500 000. [km]
    inclination_deg : float
        Inclination, 0 to 180. [degrees]
    raan_deg : float
        Right ascension of the ascending node. [degrees]
    epoch : str or datetime
        Moment the elements hold at, with its time zone.
    argument_of_latitude_deg : float
        Place at the epoch, from the ascending node. [degrees]
    j2 : bool
        Secular drift of the node and of the place along the orbit.

    Raises
    ------
    InputError
        One sentence that names the field, what came and what is accepted.
    """

    kind: Literal["circular"] = "circular"
    altitude_km: Altitude
    inclination_deg: Inclination
    raan_deg: Angle
    epoch: Instant
    argument_of_latitude_deg: Angle = 0.0
    j2: bool = True

    @model_validator(mode="after")
    def _consistent(self) -> CircularOrbit:
        almanac.check_date(self.epoch, "epoch")
        return self

    def _epoch(self) -> datetime:
        return self.epoch

    def _elements(self) -> Elements:
        return _circle(
            self.altitude_km, math.radians(self.inclination_deg), self.raan_deg, self.argument_of_latitude_deg, self.j2
        )


class SunSynchronousOrbit(_ElementOrbit):
    """A circular orbit whose plane keeps pace with the mean Sun under J2.

    Parameters
    ----------
    altitude_km : float
        Altitude above the equatorial radius, 100 to about 5974. [km]
    ltan_hours, ltdn_hours : float, optional
        Local time of the ascending, or of the descending, node: one of the two. [h]
    epoch : str or datetime
        Moment the local time holds at, with its time zone.
    sun : {"mean", "apparent"}
        Which Sun the local time follows. They differ by up to 16 minutes over the year.
    argument_of_latitude_deg : float
        Place at the epoch, from the ascending node. [degrees]

    Raises
    ------
    InputError
        One sentence that names the field, what came and what is accepted.

    Notes
    -----
    Inclination from the first-order J2 rate of 360 degrees in a tropical year. Under secular J2 the
    local time stays for ever; under lunisolar gravity and drag it drifts, by minutes to hours over years.
    """

    kind: Literal["sun-synchronous"] = "sun-synchronous"
    altitude_km: Altitude
    ltan_hours: Annotated[float | None, Field(ge=0.0, lt=24.0)] = None
    ltdn_hours: Annotated[float | None, Field(ge=0.0, lt=24.0)] = None
    epoch: Instant
    sun: Literal["mean", "apparent"] = "mean"
    argument_of_latitude_deg: Angle = 0.0

    @model_validator(mode="after")
    def _consistent(self) -> SunSynchronousOrbit:
        almanac.check_date(self.epoch, "epoch")
        if (self.ltan_hours is None) == (self.ltdn_hours is None):
            if self.ltan_hours is None:
                raise InputError("ltan_hours", MISSING, "given, or ltdn_hours in its place")
            raise InputError("ltdn_hours", self.ltdn_hours, "left out where ltan_hours is given")
        if sun_synchronous_cosine(EARTH.radius_km + self.altitude_km) < -1.0:
            limit = math.floor(sun_synchronous_limit_km() - EARTH.radius_km)
            raise InputError(
                "altitude_km", self.altitude_km, f"at most {limit:g}, above which no Sun-synchronous inclination exists"
            )
        return self

    @property
    def inclination_deg(self) -> float:
        """Inclination that makes the node keep pace with the mean Sun. [degrees]."""
        return math.degrees(math.acos(sun_synchronous_cosine(EARTH.radius_km + self.altitude_km)))

    @property
    def raan_deg(self) -> float:
        """Right ascension of the ascending node at the epoch. [degrees]."""
        hours = self.ltan_hours if self.ltan_hours is not None else (self.ltdn_hours or 0.0) + 12.0
        return (_sun_right_ascension_deg(self.epoch, self.sun) + 15.0 * (hours - 12.0)) % 360.0

    def _epoch(self) -> datetime:
        return self.epoch

    def _elements(self) -> Elements:
        return _circle(
            self.altitude_km, math.radians(self.inclination_deg), self.raan_deg, self.argument_of_latitude_deg, True
        )


class UndatedOrbit(Trackable):
    """A circular orbit without a calendar: altitude, beta and the distance of the Sun.

    Its track starts at orbit noon and lives in the orbit frame: x to orbit noon, z along the orbit
    normal. Sun and plane stand still.

    Parameters
    ----------
    altitude_km : float
        Altitude above the equatorial radius, 100 to 500 000. [km]
    beta_deg : float
        Elevation of the Sun over the orbit plane, -90 to 90. [degrees]
    sun_distance_au : float
        Distance of the Sun, 0.1 to 50. [au]

    Raises
    ------
    InputError
        One sentence that names the field, what came and what is accepted.
    """

    kind: Literal["undated"] = "undated"
    altitude_km: Altitude
    beta_deg: Annotated[float, Field(ge=-90.0, le=90.0)]
    sun_distance_au: Annotated[float, Field(ge=0.1, le=50.0)] = 1.0

    def _states(self) -> NoonStates:
        return NoonStates(EARTH.radius_km + self.altitude_km, math.radians(self.beta_deg), self.sun_distance_au)

    def _pace(self) -> Pace:
        return Pace(2.0 * math.pi / mean_motion_rad_s(EARTH.radius_km + self.altitude_km))

    def _first_moment(self, start: object) -> tuple[int, datetime | None]:
        if start is not None:
            raise InputError("start", start, "left out: an undated orbit has no calendar and starts at orbit noon")
        return 0, None


def _circle(
    altitude_km: float, inclination_rad: float, raan_deg: float, argument_of_latitude_deg: float, j2: bool
) -> Elements:
    a = EARTH.radius_km + altitude_km
    rates = secular_rates(a, 0.0, inclination_rad, j2=j2)
    return Elements(a, 0.0, inclination_rad, math.radians(raan_deg), 0.0, math.radians(argument_of_latitude_deg), rates)


@lru_cache(maxsize=1024)
def _sun_right_ascension_deg(epoch: datetime, sun: str) -> float:
    return almanac.sun_right_ascension_deg(epoch, sun)
