"""The track: its samples, its variables, and what it refuses."""

import json
import warnings

import numpy as np
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import TypeAdapter

from envflux import almanac
from envflux.errors import CoarseStepWarning, InputError
from envflux.orbits import (
    CircularOrbit,
    KeplerOrbit,
    OmmOrbit,
    Orbit,
    SunSynchronousOrbit,
    TleOrbit,
    UndatedOrbit,
    track_from_arrays,
)
from envflux.planets import EARTH
from envflux.schema import VARIABLES

EPOCH = "2031-03-20T06:00:00Z"
LOW = CircularOrbit(560, 53, 40, EPOCH)
TRANSFER = KeplerOrbit(
    perigee_altitude_km=250,
    apogee_altitude_km=35700,
    inclination_deg=27.3,
    raan_deg=170,
    arg_perigee_deg=178,
    epoch=EPOCH,
)
TLE = TleOrbit(
    "1 00005U 58002B   00179.78495062  .00000023  00000-0  28098-4 0  4753",
    "2 00005  34.2682 348.7242 1859667 331.7664  19.3264 10.82419157413667",
)
OMM = OmmOrbit(EPOCH, 14.9, 0.0012, 51.3, 200.0, 45.0, 12.0, 1e-5)
DAWN = SunSynchronousOrbit(altitude_km=600, ltan_hours=6, epoch=EPOCH)
UNDATED = UndatedOrbit(600, 35)
ORBITS = {"low": LOW, "transfer": TRANSFER, "tle": TLE, "omm": OMM, "dawn": DAWN, "undated": UNDATED}


@pytest.mark.parametrize("name", ORBITS)
def test_contract(name):
    orbit = ORBITS[name]
    track = orbit.track(revolutions=2.5)
    assert (np.diff(track.time.values) > np.timedelta64(0, "ns")).all()
    assert track.time.dtype == ("timedelta64[ns]" if name == "undated" else "datetime64[ns]")
    assert track.attrs["frame"] == ("orbit frame" if name == "undated" else "GCRS")
    expected = {"position", "velocity", "altitude", "sun_direction", "sun_distance", "sun", "sunlit", "beta"}
    if name != "undated":
        expected |= {"latitude", "longitude", "local_solar_time"}
    assert set(track.data_vars) == expected
    coords = {"time", "xyz", "elapsed", "rev", "orbit_angle", "contact", "orbital_period"}
    assert set(track.coords) == coords | (set() if name == "undated" else {"argument_of_latitude"})
    for variable in track.variables:
        assert track[variable].attrs["long_name"] == VARIABLES[variable].long_name
        assert np.isfinite(track[variable].values).all() if track[variable].dtype.kind == "f" else True
    assert "units" not in track.time.attrs
    assert track.attrs["period_s"] == orbit.period_s == float(track.orbital_period)
    assert type(orbit).from_json(track.attrs["orbit"]) == orbit
    assert json.loads(track.attrs["request"])["revolutions"] == 2.5
    assert ("DE421" in track.attrs["data_sources"]) == (name != "undated")
    np.testing.assert_allclose(np.linalg.norm(track.sun.values, axis=1), 1.0, atol=1e-15)
    assert track.sunlit.min() >= 0.0
    assert track.sunlit.max() <= 1.0
    assert track.rev.values.tolist() == sorted(track.rev.values.tolist())
    assert track.rev.values[-1] == 2
    assert track.contact.dtype == np.int8


@pytest.mark.parametrize("name", ORBITS)
def test_orbits_go_through_json_and_the_union(name):
    orbit = ORBITS[name]
    assert TypeAdapter(Orbit).validate_json(orbit.to_json()) == orbit


@pytest.mark.parametrize("name", ORBITS)
def test_ends_of_revolutions_are_samples(name):
    orbit = ORBITS[name]
    track = orbit.track(revolutions=3, step_s=orbit.period_s / 77.3)
    elapsed = track.elapsed.values
    for k in range(4):
        assert np.abs(elapsed - k * orbit.period_s).min() <= 1e-6  # times are whole microseconds
    first = [elapsed[track.rev.values == k].min() for k in range(3)]
    np.testing.assert_allclose(first, np.arange(3) * orbit.period_s, atol=1e-6)
    assert track.rev.values[-1] == 2  # the end of the last revolution belongs to it
    assert elapsed[-1] == pytest.approx(3 * orbit.period_s, abs=1e-6)


def test_default_is_one_revolution_of_240_steps():
    track = UndatedOrbit(600, 80).track()  # without eclipses nothing is added
    assert track.sizes["time"] == 241
    assert track.attrs["step_s"] == pytest.approx(track.attrs["period_s"] / 240.0)
    assert set(track.rev.values.tolist()) == {0}


def test_undated_track_starts_at_orbit_noon():
    track = UNDATED.track()
    radius = EARTH.radius_km + 600
    np.testing.assert_allclose(track.position.values[0], [radius, 0, 0], atol=1e-9)
    assert float(track.orbit_angle[0]) == 0.0
    np.testing.assert_allclose(track.beta, 35.0, atol=1e-12)
    beta = np.radians(35)
    np.testing.assert_allclose(track.sun_direction.values, [[np.cos(beta), 0, np.sin(beta)]] * track.sizes["time"])
    normal = np.cross(track.position.values, track.velocity.values)
    np.testing.assert_allclose(normal[:, :2], 0.0, atol=1e-9)
    assert (normal[:, 2] > 0).all()


def test_transfer_orbit_is_even_in_true_anomaly():
    orbit = KeplerOrbit(**{**TRANSFER.model_dump(), "raan_deg": 60.0})
    track = orbit.track(step_s=orbit.period_s / 200)
    regular = track.isel(time=(track.contact.values == 0) & (track.sunlit.values == 1.0))
    turns = np.unwrap(regular.argument_of_latitude.values, period=360.0)
    anomaly = turns - np.degrees(orbit._elements().rates.arg_perigee_rad_s) * regular.elapsed.values
    steps = np.diff(anomaly)
    # A nodal revolution from perigee closes to a few degrees in true anomaly, and is divided evenly.
    assert np.median(steps) == pytest.approx(1.8, abs=0.02)
    # Times are whole microseconds: 1e-7 degree at perigee.
    within = steps < 1.9  # not across the eclipse, whose own samples are left out
    assert within.sum() > 130
    np.testing.assert_allclose(steps[within], np.median(steps), rtol=0.0, atol=3e-7)
    assert np.diff(regular.elapsed.values).max() > 5 * np.diff(regular.elapsed.values).min()


@pytest.mark.parametrize(
    ("inclination", "raan", "longitude", "obliquity", "beta"),
    [  # closed form, computed from the published formula; six decimals
        (0, 0, 0, 23.4393, 0.0),
        (0, 0, 90, 23.4393, 23.4393),
        (28.5, 90, 0, 23.4393, 28.5),
        (51.6, 90, 0, 23.4393, 51.6),
        (51.6, 0, 90, 23.4393, -28.1607),
        (51.6, 180, 90, 23.4393, 75.0393),
        (98.0, 90, 0, 23.4393, 82.0),
        (98.0, 270, 0, 23.4393, -82.0),
        (98.0, 0, 180, 23.4393, 0.0),
        (66.0, 45, 30, 23.4393, 20.120185),
    ],
)
def test_beta_table(inclination, raan, longitude, obliquity, beta):
    i, node, L, eps = np.radians([inclination, raan, longitude, obliquity])
    along = np.array([np.cos(node), np.sin(node), 0.0])
    across = np.array([-np.sin(node) * np.cos(i), np.cos(node) * np.cos(i), np.sin(i)])
    sun = [np.cos(L), np.sin(L) * np.cos(eps), np.sin(L) * np.sin(eps)]
    track = track_from_arrays(np.array([0], "timedelta64[s]"), [7000 * along], [7.5 * across], sun)
    assert float(track.beta[0]) == pytest.approx(beta, abs=6e-7)


def test_beta_from_dated_elements():
    """sin beta = cos d sin i sin(RAAN - ra) + sin d cos i, with the Sun of date from the almanac."""
    track = LOW.track(duration_s=1)
    moment = almanac.tai_from_utc(track.time.values[:1])
    x, y, z = almanac.earth_frame(moment).matrix.reshape(3, 3) @ track.sun_direction.values[0]
    ra, dec = np.arctan2(y, x), np.arcsin(z)
    i, node = np.radians([53, 40])
    sine = np.cos(dec) * np.sin(i) * np.sin(node - ra) + np.sin(dec) * np.cos(i)
    # The frame's interpolated matrix is orthogonal to 3e-10.
    assert float(track.beta[0]) == pytest.approx(np.degrees(np.arcsin(sine)), abs=1e-7)


@pytest.mark.parametrize("beta_deg", [90.0, -90.0])
def test_orbit_angle_runs_on_where_noon_has_no_direction(beta_deg):
    track = UndatedOrbit(600, beta_deg).track()
    np.testing.assert_allclose(track.beta, beta_deg, atol=1e-6)
    np.testing.assert_allclose(track.orbit_angle.values[:-1], np.arange(240) * 1.5, atol=1e-6)


def test_orbit_angle_keeps_its_noon_through_the_pole():
    """The Sun passes over the normal for one sample: the angle goes on from the sample before."""
    angle = np.radians(np.arange(5) * 10.0)
    position = 7000 * np.stack([np.cos(angle), np.sin(angle), 0 * angle], axis=1)
    velocity = 7.5 * np.stack([-np.sin(angle), np.cos(angle), 0 * angle], axis=1)
    sun = np.tile([0.0, 1e-4, 1.0], (5, 1))
    sun[2] = [0, 0, 1]
    track = track_from_arrays(np.arange(5).astype("timedelta64[m]"), position, velocity, sun)
    np.testing.assert_allclose(track.orbit_angle, [270, 280, 290, 300, 310], atol=1e-9)


def test_same_moment_same_bits_from_any_start():
    whole = LOW.track(revolutions=3, step_s=60)
    part = LOW.track(start="2031-03-20T07:00:00Z", duration_s=1800, step_s=60)
    shared = np.intersect1d(whole.time.values, part.time.values)
    assert shared.size >= 30
    for name in ("position", "velocity", "sun", "sunlit", "beta", "longitude"):
        np.testing.assert_array_equal(whole[name].sel(time=shared), part[name].sel(time=shared))
    again = LOW.track(revolutions=3, step_s=60)
    assert whole.identical(again)


def test_times_before_the_epoch():
    early = LOW.track(start="2031-03-19T06:00:00Z", revolutions=1)
    assert early.time.values[0] == np.datetime64("2031-03-19T06:00:00")


def test_a_start_in_another_zone_is_the_same_moment():
    a, b = (LOW.track(start=s, duration_s=60) for s in ("2031-03-20T08:00:00+02:00", np.datetime64("2031-03-20T06:00")))
    assert a.time.values[0] == b.time.values[0] == np.datetime64("2031-03-20T06:00:00")


def test_a_leap_second_inside_a_track():
    """2016-12-31 had 86401 s: the orbit goes on through the second without a label."""
    orbit = CircularOrbit(560, 53, 40, "2016-12-31T23:59:50Z")
    track = orbit.track(duration_s=30, step_s=0.5)
    assert (np.diff(track.time.values) > np.timedelta64(0, "ns")).all()
    assert float(track.elapsed.sel(time="2017-01-01T00:00:05", method="nearest")) == 16.0
    assert float(track.elapsed.sel(time="2016-12-31T23:59:55", method="nearest")) == 5.0
    moved = np.linalg.norm(np.diff(track.position.values, axis=0), axis=1) / np.diff(track.elapsed.values)
    # A second lost or counted twice would show as a step of twice the speed, or of none.
    # The chord over 1.5 s is 1e-7 shorter than the arc.
    np.testing.assert_allclose(moved, moved[0], rtol=2e-7)


def test_geostationary_longitude_stays():
    """A node at the rate of the Earth: with J2 off, at the Keplerian radius of one sidereal day."""
    a = (EARTH.gm_km3_s2 / EARTH.rotation_rad_s**2) ** (1 / 3)
    orbit = KeplerOrbit(semi_major_axis_km=a, inclination_deg=0.0, raan_deg=33, epoch=EPOCH, j2=False)
    track = orbit.track(revolutions=2)
    drift = track.longitude.values - track.longitude.values[0]
    # WGS 84's rate is inertial; the equinox moves 0.137 arcsec a day, 8e-5 degree over two.
    np.testing.assert_allclose(drift, 0.0, atol=1e-4)
    np.testing.assert_allclose(track.latitude, 0.0, atol=1e-7)


def test_local_solar_time_is_noon_under_the_sun():
    track = LOW.track(revolutions=2)
    lon = np.radians(track.longitude.values)
    hours = track.local_solar_time.values
    assert ((hours >= 0) & (hours < 24)).all()
    # Subsolar longitude from UTC and the equation of time: -7.4 min on 20 March (from memory), 0.3 min.
    utc_hours = (track.time.values - np.datetime64("2031-03-20")) / np.timedelta64(3600, "s")
    expected = (utc_hours + np.degrees(lon) / 15.0 - 7.4 / 60.0) % 24.0
    np.testing.assert_allclose((hours - expected + 12.0) % 24.0 - 12.0, 0.0, atol=0.4 / 60.0)


@given(st.floats(200, 36_000), st.floats(0, 180), st.floats(0, 359), st.floats(0.05, 3.0))
@settings(max_examples=25, deadline=None)
def test_invariants(altitude_km, inclination_deg, raan_deg, revolutions):
    orbit = CircularOrbit(altitude_km, inclination_deg, raan_deg, EPOCH)
    track = orbit.track(revolutions=revolutions)
    np.testing.assert_allclose(track.altitude, altitude_km, atol=1e-5)  # 3e-10 of the radius
    v2 = np.einsum("ij,ij->i", track.velocity.values, track.velocity.values)
    np.testing.assert_allclose(v2, EARTH.gm_km3_s2 / (EARTH.radius_km + altitude_km), rtol=1e-9)
    assert (np.abs(track.latitude) <= min(inclination_deg, 180 - inclination_deg) + 1e-6).all()
    assert ((track.orbit_angle >= 0) & (track.orbit_angle < 360)).all()
    assert ((track.longitude >= -180) & (track.longitude < 180)).all()
    day = np.cos(np.radians(track.orbit_angle.values)) > 0.0
    assert (track.sunlit.values[day] == 1.0).all()  # the near half of the orbit is never in shadow


def test_beta_changes_sign_with_the_orbit_reversed():
    forward, back = CircularOrbit(560, 53, 40, EPOCH), CircularOrbit(560, 127, 220, EPOCH)
    a, b = forward.track(duration_s=1), back.track(duration_s=1)
    assert float(a.beta[0]) == pytest.approx(-float(b.beta[0]), abs=1e-9)


@pytest.mark.parametrize("target", ["netcdf", "zarr"])
@pytest.mark.parametrize("name", ["low", "undated"])
def test_round_trip(target, name, tmp_path):
    track = ORBITS[name].track()
    path = tmp_path / "track"
    with warnings.catch_warnings():
        # xarray asks how a variable-length string will be stored; the answer is what we want.
        warnings.filterwarnings("ignore", message=".*no Zarr V3 specification|.*not.*stable.*")
        if target == "netcdf":
            track.to_netcdf(path, engine="h5netcdf")
            with xr.open_dataset(path, engine="h5netcdf", decode_timedelta=True) as back:
                back.load()
        else:
            track.to_zarr(path, consolidated=False)
            back = xr.open_zarr(path, consolidated=False, decode_timedelta=True).load()
    np.testing.assert_array_equal(back.time, track.time)
    for variable in track.data_vars:
        np.testing.assert_array_equal(back[variable], track[variable])
    assert back.attrs["orbit"] == track.attrs["orbit"]


# -- tracks from arrays ---------------------------------------------------------------------------------


def test_arrays_come_back_as_they_were():
    track = LOW.track(revolutions=2)
    again = track_from_arrays(track.time, track.position, track.velocity)
    for name in ("position", "velocity", "sun_direction", "sun_distance", "sun", "sunlit", "beta", "longitude"):
        np.testing.assert_array_equal(again[name], track[name])
    assert (again.contact == 0).all()
    assert again.attrs["frame"] == "GCRS"
    # Of the first state's ellipse: the velocity is that of the Keplerian ellipse.
    assert again.attrs["period_s"] == pytest.approx(CircularOrbit(560, 53, 40, EPOCH, j2=False).period_s, rel=1e-9)


def test_undated_arrays_with_their_sun():
    track = UNDATED.track()
    again = track_from_arrays(track.time, track.position, track.velocity, track.sun_direction, track.sun_distance)
    assert again.attrs["frame"] == "orbit frame"
    np.testing.assert_allclose(again.sunlit, track.sunlit, atol=1e-9)
    assert "latitude" not in again


def test_own_period():
    track = LOW.track()
    again = track_from_arrays(track.time, track.position, track.velocity, period_s=LOW.period_s)
    assert again.attrs["period_s"] == LOW.period_s


T = np.array([0, 60, 120], "timedelta64[s]")
R = np.tile([7000.0, 0, 0], (3, 1))
V = np.tile([0.0, 7.5, 0], (3, 1))
S = [1.0, 0, 0]


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (([0.0, 1.0, 2.0], R, V, S), "time is of type float64, but it must be an array of datetime64"),
        ((T[::-1], R, V, S), "time is not later at sample 2 than at sample 1, but it must be strictly increasing"),
        ((T[[0, 0, 1]], R, V, S), "time is not later at sample 2"),
        ((T[:0], R[:0], V[:0], S), r"time is of shape \(0,\)"),
        ((np.array(["NaT", "NaT", "NaT"], "datetime64[s]"), R, V), "time is not a time at a sample"),
        ((np.array(["2060-01-01"], "datetime64[s]"), R[:1], V[:1]), "time is .*between 1900-01-01 and 2053-10-01"),
        ((T, R[:2], V, S), r"position_km is of shape \(2, 3\), but it must be of shape \(3, 3\)"),
        ((T, R, V[:, :2], S), r"velocity_km_s is of shape \(3, 2\)"),
        ((T, R * [[1], [np.nan], [1]], V, S), "position_km is not finite at sample 2"),
        ((T, R * 0.9, V, S), "position_km is an altitude of -78.1 km, but it must be above the surface"),
        ((T, R, R, S), "velocity_km_s is along the position at a sample"),
        ((T, "here", V, S), "position_km is not an array of numbers"),
        ((T, R, V), "sun_direction is missing, but it must be given: times without a calendar"),
        ((T, R, V, [0, 0, 0]), "sun_direction is zero at a sample"),
        ((T, R, V, S, [1.0, 1.0]), r"sun_distance_au is of shape \(2,\)"),
        ((T, R, V, S, -1.0), "sun_distance_au is not above 0 at a sample"),
        ((T + np.datetime64("2031-01-01"), R, V, None, 1.0), "sun_distance_au is given, but it must be left out"),
    ],
)
def test_bad_arrays(arguments, message):
    with pytest.raises(InputError, match=message) as caught:
        track_from_arrays(*arguments)
    assert "\n" not in str(caught.value)


def test_an_open_path_needs_a_period():
    with pytest.raises(InputError, match="period_s is missing, but it must be given"):
        track_from_arrays(T, R, V * 2, S)
    with pytest.raises(InputError, match="period_s is -1, but it must be a number above 0"):
        track_from_arrays(T, R, V, S, period_s=-1)


# -- what track refuses ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"step_s": 0}, "step_s is 0, but it must be a number above 0"),
        ({"step_s": -5.0}, "step_s is -5.0, but"),
        ({"step_s": float("nan")}, "step_s is nan, but"),
        ({"step_s": "fine"}, "step_s is 'fine', but it must be a number above 0"),
        ({"step_s": True}, "step_s is True, but"),
        ({"step_s": 500.0}, "step_s is 500.0, but it must be above 0 and at most 478.99 s, 1/12 of a revolution"),
        ({"step_s": 0.0001}, "step_s is 0.0001, but it must be at least 0.001 s"),
        ({"step_s": 0.001, "revolutions": 20}, "step_s is 0.001, .*at most 50,000,000 samples"),
        ({"revolutions": 0}, "revolutions is 0, but it must be a number above 0"),
        ({"revolutions": -1}, "revolutions is -1, but"),
        ({"duration_s": 0.0}, "duration_s is 0.0, but it must be a number above 0"),
        ({"duration_s": float("inf")}, "duration_s is inf, but it must be a number above 0"),
        ({"duration_s": 60, "revolutions": 1}, "duration_s is 60, but it must be left out where revolutions is given"),
        ({"revolutions": 1e6}, "revolutions is 1000000.0, .*at most 50,000,000 samples"),
        (
            {"revolutions": 1.5e5},
            "revolutions is 150000.0, .*such that the track stays between 1900-01-01 and 2053-10-01",
        ),
        ({"start": "2031-03-20T06:00:00"}, "start is '2031-03-20T06:00:00', but it has no time zone and must be"),
        ({"start": "soon"}, "start is 'soon', but it must be a date and time"),
        ({"start": "1850-01-01T00:00:00Z"}, "start is .*between 1900-01-01 and 2053-10-01"),
        ({"start": 7}, "start is 7, but it must be a date and time"),
    ],
)
def test_bad_requests(arguments, message):
    with pytest.raises(InputError, match=message) as caught:
        LOW.track(**arguments)
    assert "\n" not in str(caught.value)


def test_an_undated_orbit_takes_no_start():
    with pytest.raises(InputError, match=r"start is .*left out: an undated orbit has no calendar"):
        UNDATED.track(start=EPOCH)


def test_coarse_steps_are_warned_of():
    with pytest.warns(CoarseStepWarning, match=r"step_s is 100; above 79\.\d+ s \(1/72 of a revolution\)") as caught:
        LOW.track(step_s=100)
    assert caught[0].filename == __file__
    LOW.track(step_s=LOW.period_s / 72)  # no warning at the limit itself
