"""The only door to Skyfield: time scales, the apparent Sun, and the orientation of the Earth.

Inside, a moment is a whole number of microseconds of International Atomic Time (TAI) since
1970-01-01 00:00:00 TAI: uniform, so leap seconds neither stretch an orbit nor kink an
interpolation, and exact, so the same date gives the same bits. Skyfield is asked at nodes on
absolute epochs only (the Sun every 6 h, the Earth's frame every 24 h); everything between comes
from six-point interpolation. Largest differences from asking Skyfield directly, over 2000-2050:
Sun 1e-8 arcsec, frame 6e-5 arcsec (2 mm on a low orbit).

Accuracy of the sources: JPL ephemeris DE421 (1900-2053), IAU 2000A nutation and IAU 2006 precession.
UT1 comes from Skyfield's own table and, beyond it, its extrapolation: a second or two by mid-century,
which moves sub-point longitudes by 0.01 degree and nothing else.
"""

from __future__ import annotations

import threading
import warnings
from datetime import UTC, datetime, timedelta
from functools import lru_cache
from importlib.metadata import version
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from envflux.errors import InputError
from envflux.kernels.interpolation import interpolate_six

Array = NDArray[np.float64]
Microseconds = NDArray[np.int64]

FIRST_DATE = datetime(1900, 1, 1, tzinfo=UTC)
LAST_DATE = datetime(2053, 10, 1, tzinfo=UTC)

_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
_SECOND_US = 1_000_000
_DAY_US = 86_400 * _SECOND_US
_SUN_STEP_US = _DAY_US // 4
_FRAME_STEP_US = _DAY_US
_BLOCK_US = 64 * _DAY_US  # nodes are computed and kept in whole blocks
_JD_1970 = 2_440_587.5
_J2000_US = 10_957 * _DAY_US + _DAY_US // 2  # 2000-01-01 12:00, in days since 1970
_EDGE_DAYS = 60  # DE421 reaches from 1899-07-29 to 2053-10-09

# Rate and phase of the Earth rotation angle (IERS Conventions 2010, equation 5.15).
_ERA_AT_J2000_TURNS = 0.7790572732640
_ERA_EXTRA_TURNS_PER_DAY = 0.00273781191135448


class Frame(NamedTuple):
    """Orientation of the Earth at n times."""

    matrix: Array
    """Shape (n, 9), rows first: takes GCRS components to the true equator and equinox of date."""
    gast_rad: Array
    """Shape (n,): Greenwich apparent sidereal angle."""
    teme_rad: Array
    """Shape (n,): GMST of 1982 minus apparent sidereal angle; turns TEME into true of date."""


class _Block(NamedTuple):
    sun: Array  # (256, 3) apparent Sun, au, GCRS
    frame: Array  # (64, 12) matrix, gast - uniform angle, gmst82 - gast, ut1 - tai in seconds


# -- time ---------------------------------------------------------------------------------------------


@lru_cache(maxsize=1)
def _timescale() -> Any:
    from skyfield.api import load

    return load.timescale(builtin=True)


@lru_cache(maxsize=1)
def _leap_table() -> tuple[Microseconds, Microseconds]:
    """UTC moments at which TAI - UTC changes, and the differences, one more than the moments.

    Before 1972 UTC kept no whole seconds; as Skyfield does, 10 s is used there.
    """
    timescale = _timescale()
    moments = np.round((np.asarray(timescale.leap_dates, float) - _JD_1970) * 86_400.0).astype(np.int64)
    offsets = np.concatenate([[10], np.asarray(timescale.leap_offsets, float)]).astype(np.int64)
    return moments * _SECOND_US, offsets * _SECOND_US


def tai_from_utc(utc: NDArray[np.datetime64]) -> Microseconds:
    """TAI microseconds of UTC ``datetime64`` times, each rounded to 1 us first."""
    stamps = np.asarray(utc).astype("datetime64[ns]").astype(np.int64)
    microseconds = (stamps + 500) // 1000
    moments, offsets = _leap_table()
    return np.asarray(microseconds + offsets[np.searchsorted(moments, microseconds, side="right")], np.int64)


def utc_from_tai(tai_us: Microseconds) -> tuple[NDArray[np.datetime64], NDArray[np.bool_]]:
    """UTC labels of TAI microseconds, and which of them lie within a leap second.

    ``datetime64`` has no label for 23:59:60; such times come back as the midnight that follows.
    """
    moments, offsets = _leap_table()
    starts = moments + offsets[:-1]  # where each leap second begins
    index = np.searchsorted(starts, tai_us, side="right")
    utc = tai_us - offsets[index]
    before = moments[np.maximum(index - 1, 0)]
    within = (index > 0) & (utc < before) if moments.size else np.zeros(np.shape(tai_us), bool)
    return (np.where(within, before, utc) * 1000).view("datetime64[ns]"), within


def tai_from_instant(instant: datetime) -> int:
    """TAI microseconds of a time-zone-aware ``datetime``."""
    microseconds = (instant - _EPOCH) // timedelta(microseconds=1)
    return int(tai_from_utc(np.array([microseconds * 1000]).view("datetime64[ns]"))[0])


def check_date(instant: datetime, field: str) -> None:
    """Refuse a date outside the ephemeris.

    Raises
    ------
    InputError
        Naming `field` and the range of dates.
    """
    if not FIRST_DATE <= instant <= LAST_DATE:
        raise InputError(field, instant.isoformat(), accepted_dates())


def check_year(utc: NDArray[np.datetime64], field: str) -> None:
    """Refuse dates outside the ephemeris, to the year, for ``datetime64`` times of any unit.

    Raises
    ------
    InputError
        Naming `field` and the range of dates.
    """
    years = utc.astype("datetime64[Y]").astype(np.int64) + 1970
    outside = (years < FIRST_DATE.year) | (years > LAST_DATE.year)
    if outside.any():
        raise InputError(field, str(utc[int(np.argmax(outside))]), accepted_dates())


def within_ephemeris(first_us: int, last_us: int) -> bool:
    """Whether a span of TAI microseconds stays inside the ephemeris."""
    return tai_from_instant(FIRST_DATE) <= first_us and last_us <= tai_from_instant(LAST_DATE)


def accepted_dates() -> str:
    """Say which dates the ephemeris covers, to follow "must be"."""
    return f"between {FIRST_DATE:%Y-%m-%d} and {LAST_DATE:%Y-%m-%d}, the span of the ephemeris"


# -- nodes --------------------------------------------------------------------------------------------

_blocks: dict[int, _Block] = {}
_lock = threading.Lock()


@lru_cache(maxsize=1)
def sources() -> str:
    """What dates, frames and the Sun come from, with versions, for the record kept with results."""
    return (
        f"Sun: JPL ephemeris DE421 (skyfield-data {version('skyfield-data')}); "
        f"precession IAU 2006, nutation IAU 2000A, time scales: Skyfield {version('skyfield')}"
    )


def _ephemeris_path() -> Path:
    from skyfield_data import get_skyfield_data_path

    with warnings.catch_warnings():
        # The package warns that its Earth-orientation file has aged; that file is not used here.
        warnings.filterwarnings("ignore", message=r"The file finals2000A\.all", category=RuntimeWarning)
        return Path(get_skyfield_data_path()) / "de421.bsp"


def _compute_blocks(indices: list[int]) -> None:
    from skyfield.jpllib import SpiceKernel

    kernel = SpiceKernel(str(_ephemeris_path()))
    try:
        for index in indices:
            _blocks[index] = _compute_block(index, kernel)
    finally:
        kernel.close()


def _node_times(index: int, step_us: int) -> tuple[Microseconds, Any]:
    """Epochs of the nodes of a block, kept inside the ephemeris.

    Nodes beyond its ends repeat the last one within: no admitted date reaches them.
    """
    count = _BLOCK_US // step_us
    times = index * _BLOCK_US + step_us * np.arange(count, dtype=np.int64)
    low, high = tai_from_instant(FIRST_DATE) - _EDGE_DAYS * _DAY_US, tai_from_instant(LAST_DATE) + 7 * _DAY_US
    times = np.clip(times, low // step_us * step_us, high // step_us * step_us)
    days = times // _DAY_US
    return times, _timescale().tai_jd(_JD_1970 + days, (times - days * _DAY_US) / _DAY_US)


def _compute_block(index: int, kernel: Any) -> _Block:
    _, t = _node_times(index, _SUN_STEP_US)
    sun = kernel["earth"].at(t).observe(kernel["sun"]).apparent().position.au
    times, t = _node_times(index, _FRAME_STEP_US)
    gast = np.asarray(t.gast) * (np.pi / 12.0)
    ut1_minus_tai_s = 32.184 - np.asarray(t.delta_t)
    frame = np.empty((times.size, 12))
    frame[:, :9] = np.moveaxis(t.M, -1, 0).reshape(-1, 9)
    frame[:, 9] = _wrapped(gast - _uniform_angle(times))
    frame[:, 10] = _wrapped(_gmst_1982(times, ut1_minus_tai_s) - gast)
    frame[:, 11] = ut1_minus_tai_s
    return _Block(np.ascontiguousarray(sun.T), frame)


def _wrapped(angle: Array) -> Array:
    return np.asarray((angle + np.pi) % (2.0 * np.pi) - np.pi)


def _uniform_angle(tai_us: Microseconds) -> Array:
    """Earth rotation angle if UT1 were TAI, in radians: what is left over varies slowly."""
    since = tai_us - _J2000_US
    turns = (since % _DAY_US) / _DAY_US + _ERA_EXTRA_TURNS_PER_DAY * (since / _DAY_US) + _ERA_AT_J2000_TURNS
    return np.asarray(2.0 * np.pi * (turns % 1.0))


def _gmst_1982(tai_us: Microseconds, ut1_minus_tai_s: Array) -> Array:
    """Greenwich mean sidereal angle of 1982, the one SGP4's frame is built on, in radians.

    Aoki et al., *Astronomy and Astrophysics* 105, 359 (1982), equation 14 (cited from memory).
    """
    seconds = (tai_us - _J2000_US) / _SECOND_US + ut1_minus_tai_s
    T = seconds / (86_400.0 * 36_525.0)
    day_s = ((tai_us % _DAY_US) / _SECOND_US + ut1_minus_tai_s) % 86_400.0
    angle_s = 24_110.54841 + day_s + ((-6.2e-6 * T + 0.093104) * T + 8_640_184.812866) * T
    return np.asarray((angle_s % 86_400.0) * (2.0 * np.pi / 86_400.0))


def _interpolated(tai_us: Microseconds, step_us: int, columns: int, *, sun: bool) -> Array:
    """Values of the Sun's or the frame's nodes at the given times, shape (n, columns)."""
    out = np.empty((tai_us.size, columns))
    if not tai_us.size:
        return out
    first_node, last_node = int(tai_us.min()) // step_us - 2, int(tai_us.max()) // step_us + 3
    per_block = _BLOCK_US // step_us
    wanted = range(first_node // per_block, last_node // per_block + 1)
    if len(wanted) > 8:
        # A few dates scattered over decades must not cost all the nodes between them.
        block = tai_us // _BLOCK_US
        held = np.unique(block)
        if 3 * held.size < len(wanted):
            for index in held:
                rows = block == index
                out[rows] = _interpolated(tai_us[rows], step_us, columns, sun=sun)
            return out
    with _lock:
        missing = [index for index in wanted if index not in _blocks]
        if missing:
            _compute_blocks(missing)
        found = [_blocks[index] for index in wanted]
    parts = [block.sun if sun else block.frame for block in found]
    nodes = parts[0] if len(parts) == 1 else np.concatenate(parts)
    interpolate_six(tai_us, step_us, wanted[0] * per_block, nodes, out)
    return out


# -- what the rest of the house asks --------------------------------------------------------------------


def sun_vector_au(tai_us: Microseconds) -> Array:
    """Apparent geocentric Sun (light time and aberration) in GCRS.

    Parameters
    ----------
    tai_us : numpy.ndarray of int64, shape (n,)
        TAI microseconds since 1970. [us]

    Returns
    -------
    numpy.ndarray, shape (n, 3)
        Position of the Sun. [au]

    References
    ----------
    Folkner, Williams and Boggs, *The Planetary and Lunar Ephemeris DE 421*, IPN Progress Report 42-178 (2009).
    """
    return _interpolated(np.asarray(tai_us, np.int64), _SUN_STEP_US, 3, sun=True)


def earth_frame(tai_us: Microseconds) -> Frame:
    """Orientation of the Earth: precession-nutation, and the sidereal angles.

    Parameters
    ----------
    tai_us : numpy.ndarray of int64, shape (n,)
        TAI microseconds since 1970. [us]
    """
    tai_us = np.asarray(tai_us, np.int64)
    out = _interpolated(tai_us, _FRAME_STEP_US, 12, sun=False)
    gast = (out[:, 9] + _uniform_angle(tai_us)) % (2.0 * np.pi)
    return Frame(out[:, :9], gast, out[:, 10])


def sun_right_ascension_deg(instant: datetime, sun: str) -> float:
    """Right ascension of the Sun, on the true equator and equinox of date.

    Parameters
    ----------
    instant : datetime
        A moment in UTC.
    sun : str
        ``"mean"`` for the fictitious Sun that moves evenly along the equator, the one clocks follow:
        sidereal angle minus UT1 plus 12 h. ``"apparent"`` for the true one.

    Returns
    -------
    float
        Right ascension, 0 to 360. [degrees]
    """
    tai = np.array([tai_from_instant(instant)], np.int64)
    frame = earth_frame(tai)
    if sun == "apparent":
        x, y, _ = frame.matrix[0].reshape(3, 3) @ sun_vector_au(tai)[0]
        return float(np.degrees(np.arctan2(y, x)) % 360.0)
    ut1_minus_tai_s = _interpolated(tai, _FRAME_STEP_US, 12, sun=False)[0, 11]
    ut1_turns = ((int(tai[0]) % _DAY_US) / _SECOND_US + ut1_minus_tai_s) / 86_400.0
    return float((np.degrees(frame.gast_rad[0]) - 360.0 * ut1_turns + 180.0) % 360.0)
