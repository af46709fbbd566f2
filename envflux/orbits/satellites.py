"""Orbits from orbital data messages: two-line element sets and CCSDS OMM, through SGP4."""

from __future__ import annotations

import math
from datetime import UTC, datetime, timedelta
from importlib.metadata import version
from pathlib import Path
from typing import Annotated, Literal

import numpy as np
from pydantic import Field, model_validator
from sgp4.api import SGP4_ERRORS, WGS72, Satrec

from envflux import almanac
from envflux.definitions import Instant
from envflux.errors import InputError, Told
from envflux.orbits.grids import Pace
from envflux.orbits.messages import read_message
from envflux.orbits.states import Microseconds, State, apparent_sun, to_gcrs
from envflux.orbits.tracks import Trackable, dated_start

_LINE_LENGTH = 69
_NUMBER_COLUMNS = {1: ((18, 20), (20, 32)), 2: ((8, 16), (17, 25), (26, 33), (34, 42), (43, 51), (52, 63))}
_SGP4_ZERO = datetime(1949, 12, 31, tzinfo=UTC)


class SatelliteStates:
    """SGP4 states, turned from TEME to GCRS."""

    dated = True

    def __init__(self, satellite: Satrec, epoch_us: int, field: str) -> None:
        self.satellite, self.epoch_us, self.field = satellite, epoch_us, field
        self.sources = f"motion: SGP4 with WGS 72 constants, sgp4 {version('sgp4')}; {almanac.sources()}"

    def at(self, times_us: Microseconds) -> State:
        """States at each moment, shape (n,), in GCRS.

        TEME is turned about the pole of date by GMST of 1982 less apparent sidereal angle, which is
        the way through the Earth-fixed frame of Vallado et al., *Revisiting Spacetrack Report #3*,
        AIAA 2006-6753, appendix C; precession-nutation takes it on to GCRS.

        Time since the epoch is counted in UTC days of 86 400 s, as element sets are made and used:
        a leap second in between does not count.

        Raises
        ------
        InputError
            If SGP4 cannot follow the elements that far.
        """
        days = (_label_us(times_us) - _label_us(np.array([self.epoch_us]))) * (1e-6 / 86_400.0)
        whole = np.full(days.size, self.satellite.jdsatepoch)
        codes, position, velocity = self.satellite.sgp4_array(whole, self.satellite.jdsatepochF + days)
        if codes.any():
            i = int(np.flatnonzero(codes)[0])
            reason = SGP4_ERRORS.get(int(codes[i]), f"code {int(codes[i])}")
            raise InputError(
                self.field,
                Told(f"not usable {days[i]:+.2f} days from its epoch"),
                f"part of elements that SGP4 can follow over the whole track; it says: {reason}",
            )
        frame = almanac.earth_frame(times_us)
        to_gcrs(frame.matrix, np.ascontiguousarray(frame.teme_rad), position, velocity)
        return State(position, velocity, *apparent_sun(times_us), frame)


class _Satellite(Trackable):
    """What TLE and OMM orbits share: a set of SGP4 elements."""

    def _record(self) -> Satrec:
        raise NotImplementedError

    def _epoch(self) -> datetime:
        raise NotImplementedError

    def _source_field(self) -> str:
        raise NotImplementedError

    def _states(self) -> SatelliteStates:
        return SatelliteStates(self._record(), almanac.tai_from_instant(self._epoch()), self._source_field())

    def _pace(self) -> Pace:
        record = self._record()
        return Pace(
            2.0 * math.pi / (record.mdot + record.argpdot) * 60.0,  # per minute in SGP4
            record.ecco,
            record.mo,
            record.mdot / 60.0,
            almanac.tai_from_instant(self._epoch()),
        )

    def _first_moment(self, start: object) -> tuple[int, datetime | None]:
        instant = dated_start(start, self._epoch())
        return almanac.tai_from_instant(instant), instant


class TleOrbit(_Satellite):
    """An orbit from a two-line element set, propagated by SGP4.

    Parameters
    ----------
    line1, line2 : str
        The two lines, 69 characters each, checksums included.

    Raises
    ------
    InputError
        One sentence that names the line, what came and what is accepted.

    Notes
    -----
    Two-line elements describe the weeks around their epoch. Kilometres of error within days are
    ordinary, and years away the place along the orbit means nothing.
    """

    kind: Literal["tle"] = "tle"
    line1: str
    line2: str

    @model_validator(mode="after")
    def _consistent(self) -> TleOrbit:
        for number in (1, 2):
            _check_line(number, self.line1 if number == 1 else self.line2)
        if self.line1[2:7] != self.line2[2:7]:
            raise InputError("line2", self.line2[2:7], f"about the same object as line1, {self.line1[2:7]!r}")
        almanac.check_date(self.epoch, "line1")
        error = self._record().error
        if error:
            raise InputError(
                "line2", self.line2, f"elements that SGP4 accepts (it says: {SGP4_ERRORS.get(error, error)})"
            )
        _check_motion(self._record(), "line2", self.line2)
        return self

    @property
    def epoch(self) -> datetime:
        """Moment of the elements, UTC."""
        record = _record_from_lines(self.line1.rstrip(), self.line2.rstrip())
        year = record.epochyr + (2000 if record.epochyr < 57 else 1900)
        # Eight decimals of a day: round to the microsecond through integers.
        return datetime(year, 1, 1, tzinfo=UTC) + timedelta(microseconds=round((record.epochdays - 1.0) * 86_400e6))

    def _epoch(self) -> datetime:
        return self.epoch

    def _record(self) -> Satrec:
        return _record_from_lines(self.line1.rstrip(), self.line2.rstrip())

    def _source_field(self) -> str:
        return "line2"


def _record_from_lines(line1: str, line2: str) -> Satrec:
    try:
        return Satrec.twoline2rv(line1, line2, WGS72)
    except ValueError:
        raise InputError("line1", line1, "a line of a two-line element set, each number in its columns") from None


def _check_line(number: int, line: str) -> None:
    field = f"line{number}"
    text = line.rstrip()
    if not text.startswith(f"{number} "):
        raise InputError(field, line, f"the line of the element set that starts with '{number} '")
    if len(text) != _LINE_LENGTH or not text.isascii():
        raise InputError(field, Told(f"{len(text)} characters long"), f"{_LINE_LENGTH} characters long")
    total = sum(int(c) if c.isdigit() else c == "-" for c in text[:-1]) % 10
    if text[-1] != str(total):
        raise InputError(
            field, Told(f"a line whose checksum is {text[-1]}"), f"one whose checksum is {total}: a digit is wrong"
        )
    for first, last in _NUMBER_COLUMNS[number]:
        try:
            float(text[first:last])
        except ValueError:
            raise InputError(field, text[first:last], f"a number in columns {first + 1} to {last}") from None


def _check_motion(record: Satrec, field: str, value: object) -> None:
    if not record.mdot + record.argpdot > 0.0:
        raise InputError(field, value, "elements with a mean motion above 0")


class OmmOrbit(_Satellite):
    """An orbit from a CCSDS Orbit Mean-elements Message, propagated by SGP4.

    Mostly read by `OmmOrbit.from_file`; the fields are those of the message.

    Parameters
    ----------
    epoch : str or datetime
        Moment of the elements, with its time zone.
    mean_motion_rev_day : float
        Mean motion (Kozai). [1/day]
    eccentricity : float
        0 to below 1.
    inclination_deg, raan_deg, arg_perigee_deg, mean_anomaly_deg : float
        Mean elements, TEME. [degrees]
    bstar : float
        Drag term. [1/Earth radii]
    mean_motion_dot, mean_motion_ddot : float
        Kept for the record; SGP4 does not use them. [1/day2, 1/day3]
    object_name, object_id : str
        Names given in the message.

    References
    ----------
    CCSDS 502.0-B-3, *Orbit Data Messages* (2023), section 4.
    """

    kind: Literal["omm"] = "omm"
    epoch: Instant
    mean_motion_rev_day: Annotated[float, Field(gt=0.0, le=18.0)]
    eccentricity: Annotated[float, Field(ge=0.0, lt=1.0)]
    inclination_deg: Annotated[float, Field(ge=0.0, le=180.0)]
    raan_deg: Annotated[float, Field(ge=-360.0, le=360.0)]
    arg_perigee_deg: Annotated[float, Field(ge=-360.0, le=360.0)]
    mean_anomaly_deg: Annotated[float, Field(ge=-360.0, le=360.0)]
    bstar: float = 0.0
    mean_motion_dot: float = 0.0
    mean_motion_ddot: float = 0.0
    object_name: str = ""
    object_id: str = ""

    @model_validator(mode="after")
    def _consistent(self) -> OmmOrbit:
        almanac.check_date(self.epoch, "epoch")
        error = self._record().error
        if error:
            raise InputError(
                "eccentricity",
                self.eccentricity,
                f"part of elements SGP4 accepts (it says: {SGP4_ERRORS.get(error, error)})",
            )
        _check_motion(self._record(), "mean_motion_rev_day", self.mean_motion_rev_day)
        return self

    @classmethod
    def from_file(cls, path: str | Path) -> OmmOrbit:
        """Read a message in XML, KVN (key = value) or JSON; the format is told by its content.

        Parameters
        ----------
        path : str or path
            File with one message.

        Raises
        ------
        InputError
            Naming the keyword of the message, what came and what is accepted.
        """
        orbit: OmmOrbit = cls.from_table(read_message(path))
        return orbit

    def _epoch(self) -> datetime:
        return self.epoch

    def _record(self) -> Satrec:
        return _record_from_elements(
            (self.epoch - _SGP4_ZERO) / timedelta(days=1),
            self.bstar,
            self.mean_motion_dot,
            self.mean_motion_ddot,
            self.eccentricity,
            math.radians(self.arg_perigee_deg),
            math.radians(self.inclination_deg),
            math.radians(self.mean_anomaly_deg),
            self.mean_motion_rev_day * 2.0 * math.pi / 1440.0,
            math.radians(self.raan_deg),
        )

    def _source_field(self) -> str:
        return "mean_motion_rev_day"


def _label_us(tai_us: Microseconds) -> Microseconds:
    return almanac.utc_from_tai(tai_us)[0].astype(np.int64) // 1000


def _record_from_elements(epoch_days: float, bstar: float, ndot: float, nddot: float, *elements: float) -> Satrec:
    record = Satrec()
    per_minute2 = 2.0 * math.pi / 1440.0**2
    record.sgp4init(WGS72, "i", 0, epoch_days, bstar, ndot * per_minute2, nddot * per_minute2 / 1440.0, *elements)
    return record
