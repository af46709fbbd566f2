"""Orbit means, extremes and minutes of Sun against fine integrations and closed forms."""

from __future__ import annotations

import csv
import math
from pathlib import Path

import numpy as np
import pytest
import reference_integration as reference
import xarray as xr
from scipy.interpolate import CubicSpline

import envflux as ef
from envflux import schema, tables

DATA = Path(__file__).parent / "data"

# The accuracy asked of an orbit mean at the default step: 0.03 % of the most the component can be, which
# is 1 for g_sun and the mean of (R/r)**2 over the revolution for the planet's factors. (On an eccentric
# orbit the most it can be at perigee is up to ten times that mean: this reading is the stricter one.)
MEAN = 3e-4
# Sunlit time: 1e-4 of the integral, design of the samples in penumbra.
SUNLIT = 1e-4
ROUNDING = 1e-12

EPOCH = "2031-03-20T06:00:00Z"
COATING = ef.Coating(absorptance=0.3, emittance=0.8)
ENVIRONMENT = ef.Environment(solar_constant_w_m2=1361.0, albedo=0.3, planetary_ir_w_m2=237.0)
BOX = ef.box_craft((1.0, 2.0, 3.0), COATING)


def rows(name):
    with (DATA / f"{name}.csv").open(newline="", encoding="utf-8") as file:
        return list(csv.DictReader(file))


def random_craft(seed, count):
    normals = reference.unit(np.random.default_rng(seed).normal(size=(count, 3)))
    return ef.Craft([ef.Face(f"face {i}", tuple(n), 1.0, COATING) for i, n in enumerate(normals)])


# At 600 km and beta 66 the eclipse is within 0.07 deg of its onset (tests/data/eclipse_circular.csv): no umbra.
ORBITS = {
    "200 km": ef.UndatedOrbit(200.0, 20.0),
    "600 km, penumbra only": ef.UndatedOrbit(600.0, 66.0),
    "36000 km, eclipse": ef.UndatedOrbit(36000.0, 5.0),
    "36000 km, penumbra only": ef.UndatedOrbit(36000.0, 8.8),
    "dated": ef.CircularOrbit(altitude_km=560.0, inclination_deg=53.0, raan_deg=40.0, epoch=EPOCH),
    "geostationary, equinox": ef.CircularOrbit(35786.0, 0.05, 0.0, epoch=EPOCH),
    "12 h, critical inclination": ef.KeplerOrbit(
        semi_major_axis_km=26561.76,
        eccentricity=0.74,
        inclination_deg=63.4349,
        raan_deg=200.0,
        arg_perigee_deg=270.0,
        epoch=EPOCH,
    ),
    "transfer": ef.KeplerOrbit(
        perigee_altitude_km=200.0,
        apogee_altitude_km=35786.0,
        inclination_deg=7.0,
        raan_deg=100.0,
        arg_perigee_deg=178.0,
        mean_anomaly_deg=50.0,
        epoch=EPOCH,
    ),
}
LAWS = {
    "nadir": ef.NadirPointing(),
    "nadir, turned": ef.NadirPointing(roll_deg=33.0, pitch_deg=-21.0, yaw_deg=130.0),
    "inertial": ef.InertialAttitude((0.3, -0.5, 0.7, 0.2)),
    "sun": ef.SunPointing(axis=(0.3, 0.2, 1.0)),
    "spin": ef.Spinning(axis=(0.2, 1.0, 0.6), about="orbit normal", rate_rpm=5.0, averaged=True),
    "spin about inertial": ef.Spinning(axis=(0.2, 1.0, 0.6), rate_rpm=5.0, averaged=True),
}


@pytest.fixture(scope="module")
def tracks():
    return {name: orbit.track() for name, orbit in ORBITS.items()}


@pytest.fixture(scope="module")
def fine_tracks():
    return {name: orbit.track(step_s=orbit.period_s / 4800) for name, orbit in ORBITS.items()}


def ceiling(track):
    """Mean of (R/r)**2 over the track's time."""
    level = (reference.EARTH_RADIUS_KM / np.linalg.norm(track.position.values, axis=1)) ** 2
    return time_mean(level, track)


def time_mean(values, track):
    elapsed = track.elapsed.values
    return np.trapezoid(values, elapsed, axis=0) / (elapsed[-1] - elapsed[0])


# ------------------------------------------------------------------------- means against the reference


@pytest.mark.parametrize("law", ["nadir", "nadir, turned", "inertial"])
@pytest.mark.parametrize("orbit", ORBITS)
def test_mean_of_direct_sunlight_meets_the_reference(tracks, fine_tracks, orbit, law):
    fine = fine_tracks[orbit]  # for its positions: shadow, attitude and cosines are the reference's own
    craft = BOX if law == "nadir" else random_craft(len(orbit), 5)
    normals = np.einsum("tij,fj->tfi", reference.body_axes(LAWS[law], fine), [s.normal for s in craft.surfaces()])
    direct = reference.direct_factor(
        fine.position.values[:, None],
        fine.sun_direction.values[:, None],
        np.broadcast_to(fine.sun_distance.values[:, None], normals.shape[:2]),
        normals,
    )
    found = ef.orbit_mean(ef.factors(tracks[orbit], LAWS[law], craft))
    assert found.g_sun.values[0] == pytest.approx(time_mean(direct, fine), abs=MEAN)


@pytest.mark.parametrize("law", ["nadir, turned", "inertial"])
@pytest.mark.parametrize("orbit", ["200 km", "36000 km, eclipse", "12 h, critical inclination", "transfer"])
def test_mean_of_planet_factors_meets_the_reference(tracks, fine_tracks, orbit, law):
    # A cubic spline in time through the reference's samples, whose integral converges fast.
    fine = fine_tracks[orbit]
    fine = fine.isel(time=np.linspace(0, fine.sizes["time"] - 1, 401).round().astype(int))
    craft = random_craft(len(orbit) + len(law), 2)
    normals = np.einsum("tij,fj->tfi", reference.body_axes(LAWS[law], fine), [s.normal for s in craft.surfaces()])
    shape = normals.shape
    factors = reference.planet_factors(
        np.broadcast_to(fine.position.values[:, None], shape).reshape(-1, 3),
        np.broadcast_to(fine.sun_direction.values[:, None], shape).reshape(-1, 3),
        normals.reshape(-1, 3),
        nodes=12,
    ).reshape(3, *shape[:2])
    elapsed = fine.elapsed.values
    found = ef.orbit_mean(ef.factors(tracks[orbit], LAWS[law], craft))
    most = ceiling(fine_tracks[orbit])
    for name, values in zip(("g_albedo", "g_zenith", "g_ir"), factors, strict=True):
        expected = CubicSpline(elapsed, values).integrate(elapsed[0], elapsed[-1]) / (elapsed[-1] - elapsed[0])
        assert found[name].values[0] == pytest.approx(expected, abs=MEAN * most), name


@pytest.mark.parametrize("law", LAWS)
@pytest.mark.parametrize("orbit", ORBITS)
def test_default_step_is_fine_enough(tracks, fine_tracks, orbit, law):
    # Each sample is checked in test_fluxes.py; here what lies between samples, against 20 times as many.
    craft = random_craft(len(orbit) * len(law), 2)
    fine = fine_tracks[orbit]
    if law.startswith("spin"):
        fine = ORBITS[orbit].track(step_s=ORBITS[orbit].period_s / 960)
    few = ef.orbit_mean(ef.factors(tracks[orbit], LAWS[law], craft))
    many = ef.orbit_mean(ef.factors(fine, LAWS[law], craft))
    most = ceiling(fine_tracks[orbit])
    for name in schema.FACTORS:
        scale = 1.0 if name == "g_sun" else most
        assert few[name].values == pytest.approx(many[name].values, abs=MEAN * scale), name


# Sun-pointing craft that turn a second axis to a direction the Sun nearly passes through swing by half a
# turn within about 2 beta of orbit angle: below 2 degrees of beta that is faster than the default step.
@pytest.mark.filterwarnings("ignore:the Sun passes so near")
@pytest.mark.parametrize(("toward", "beta_deg"), [("velocity", 5.0), ("velocity", 2.5), ("nadir", 0.5)])
def test_swing_about_the_sun_line_is_resolved(toward, beta_deg):
    law = ef.SunPointing(toward=toward)
    orbit = ef.UndatedOrbit(500.0, beta_deg)
    fine = orbit.track(step_s=orbit.period_s / 9600)
    few, many = (ef.orbit_mean(ef.factors(t, law, BOX)) for t in (orbit.track(), fine))
    assert few.g_ir.values == pytest.approx(many.g_ir.values, abs=MEAN * ceiling(fine))


def test_swing_too_fast_for_the_step_is_said():
    orbit, law = ef.UndatedOrbit(500.0, 0.05), ef.SunPointing(toward="velocity")
    with pytest.warns(ef.CoarseStepWarning, match="swings by more than"):
        few = ef.orbit_mean(ef.factors(orbit.track(), law, BOX))
    fine = orbit.track(step_s=orbit.period_s / 19_200)
    many = ef.orbit_mean(ef.factors(fine, law, BOX))  # no warning here, and the mean has moved
    assert np.abs(few.g_ir - many.g_ir).max() > MEAN * ceiling(fine)


def test_mean_is_steady_whatever_the_step():
    # Corners are found between samples: a step that meets them by luck and one that does not agree.
    orbit = ORBITS["200 km"]
    law = LAWS["nadir, turned"]
    many = ef.orbit_mean(ef.factors(orbit.track(step_s=orbit.period_s / 9600), law, BOX))
    for parts in (97.0, 120.3, 233.7, 240.0, 711.9):
        few = ef.orbit_mean(ef.factors(orbit.track(step_s=orbit.period_s / parts), law, BOX))
        # The trapezoid's error falls with the square of the step; 0.03 % is asked at 1/240.
        allowed = MEAN * max(1.0, (240.0 / parts) ** 2)
        assert few.g_sun.values == pytest.approx(many.g_sun.values, abs=allowed), parts
        assert few.sun_exposure.values == pytest.approx(many.sun_exposure.values, abs=allowed), parts


# ------------------------------------------------------------------------------ closed forms of means


def test_means_of_a_nadir_box_at_beta_zero():
    # Circular orbit, cylinder shadow of half-angle d = asin(R/r) about orbit midnight, beta 0.
    # Up: cos over the sunny half, 1/pi. Down: cos(u) from 90 deg to the shadow, (1 - sin d)/pi.
    # Ahead: sees the Sun from the shadow's exit to noon, (1 + cos d)/(2 pi); behind: likewise.
    orbit = ef.UndatedOrbit(400.0, 0.0, 50.0)  # far from the Sun its rays are parallel
    d = math.asin(6378.137 / 6778.137)
    track = orbit.track(shadow=ef.Shadow(kind="cylinder"))
    mean = ef.orbit_mean(ef.factors(track, ef.NadirPointing(), BOX)).g_sun.sel(rev=0)
    ahead = (1.0 + math.cos(d)) / (2.0 * math.pi)
    expected = [ahead, ahead, 0.0, 0.0, (1.0 - math.sin(d)) / math.pi, 1.0 / math.pi]
    assert mean.values == pytest.approx(expected, abs=MEAN / 3)


def test_minutes_of_sun_at_beta_zero():
    # As above: up, half the orbit; down, the other half less the shadow; ahead, from exit to noon.
    orbit = ef.UndatedOrbit(400.0, 0.0, 50.0)
    shadow = 2.0 * math.asin(6378.137 / 6778.137) / (2.0 * math.pi)
    track = orbit.track(shadow=ef.Shadow(kind="cylinder"))
    found = ef.sun_exposure(ef.flux(track, ef.NadirPointing(), BOX, ENVIRONMENT))
    minutes = orbit.period_s / 60.0
    ahead = 0.5 * (1.0 - shadow)
    expected = np.array([ahead, ahead, 0.0, 0.0, 0.5 - shadow, 0.5]) * minutes
    assert found.sun_minutes.values[0] == pytest.approx(expected, abs=2e-5 * minutes)
    assert found.sunlit_fraction.values[0] == pytest.approx(1.0 - shadow, abs=1e-5)
    assert found.sun_minutes.attrs["units"] == "min"


@pytest.mark.parametrize("row", rows("eclipse_circular"), ids=lambda row: f"{row['alt_km']} km, beta {row['beta_deg']}")
def test_sunlit_fraction_meets_the_closed_form(row):
    # Cylinder: common practice, closed form. Discs: between what umbra and penumbra contacts allow,
    # and equal to the reference's integral of the visible share.
    altitude, beta = float(row["alt_km"]), float(row["beta_deg"])
    orbit = ef.UndatedOrbit(altitude, beta)
    cylinder = orbit.track(shadow=ef.Shadow(kind="cylinder"))
    found = ef.sun_exposure(ef.factors(cylinder, ef.NadirPointing(), BOX)).sunlit_fraction.item()
    assert found == pytest.approx(1.0 - float(row["cyl_eclipse_fraction"]), abs=1e-5)

    found = ef.sun_exposure(ef.factors(orbit.track(), ef.NadirPointing(), BOX)).sunlit_fraction.item()
    period = float(row["period_min"])
    assert found < 1.0 - float(row["conical_umbra_min"]) / period + 1e-6
    assert found > 1.0 - float(row["conical_penumbra_outer_contact_min"]) / period - 1e-6
    # Around midnight, where all shadow lies, finely.
    angle = np.linspace(0.5 * np.pi, 1.5 * np.pi, 400_001)
    position, _, sun = reference.undated_states(altitude, beta, angle)
    _, radius, body, apart = reference.sun_and_discs(position, sun, np.ones(angle.size))
    hidden = np.trapezoid(1.0 - reference.visible_round(radius, body, apart, nodes=16), angle) / (2.0 * np.pi)
    assert found == pytest.approx(1.0 - hidden, abs=SUNLIT)


def test_absorbing_sphere_in_full_sun_takes_a_quarter():
    # tests/data/shape_mean_solar.csv: sphere 1/4; cube with one face to the Sun 1/6.
    expected = {row["shape"]: float(row["absorbing_over_radiating_area"]) for row in rows("shape_mean_solar")}
    track = ef.UndatedOrbit(20000.0, 90.0, 50.0).track()
    cube = ef.box_craft((1.0, 1.0, 1.0), COATING)
    mean = ef.orbit_mean(ef.factors(track, ef.SunPointing(), cube))
    share = float((mean.g_sun * mean.area).sum() / mean.area.sum())
    assert share == pytest.approx(expected["cube, one face to Sun"], abs=6e-9)
    spread = reference.unit(np.random.default_rng(1).normal(size=(2000, 3)))
    spread = np.concatenate([spread, -spread])
    sphere = ef.Craft([ef.Face(str(i), tuple(n), 1.0, COATING) for i, n in enumerate(spread)])
    mean = ef.factors(track.isel(time=[0, 60]), ef.SunPointing(), sphere, zenith=False).g_sun.mean("face")
    # 4000 random plates in opposite pairs: |cos|/2 has a spread of 0.144, over sqrt(2000).
    assert mean.values == pytest.approx(expected["sphere"], abs=4.0 * 0.144 / math.sqrt(2000))


# -------------------------------------------------------------------------------- what a mean is over


def synthetic(elapsed, values, period):
    elapsed = np.asarray(elapsed, float)
    return xr.Dataset(
        {"level": ("time", np.asarray(values, float))},
        coords={
            "time": (elapsed * 1e9).astype("timedelta64[ns]"),
            "elapsed": ("time", elapsed),
            "orbital_period": ((), float(period)),
        },
    )


def test_both_end_samples_count_and_the_last_part_revolution_does_not():
    # Trapezoid by hand: revolution of 10 s, samples 0 5 10 | 15 20 | 24.
    ds = synthetic([0, 5, 10, 15, 20, 24], [1.0, 0.0, 4.0, 2.0, 6.0, 1e9], 10.0)
    mean = ef.orbit_mean(ds)
    assert mean.sizes["rev"] == 2
    assert mean.level.values == pytest.approx([(0.5 * 5 * 1 + 0.5 * 5 * 4) / 10, (5 * 3 + 5 * 4) / 10], abs=ROUNDING)


def test_uneven_samples_are_weighted_by_time():
    # Never the mean of samples: a crowd of them on one side does not count for more.
    elapsed = np.concatenate([np.linspace(0.0, 1.0, 1001), [100.0]])
    ds = synthetic(elapsed, elapsed, 100.0)
    assert ef.orbit_mean(ds).level.item() == pytest.approx(50.0, abs=1e-9)


def test_edges_between_samples_are_cut_where_they_lie():
    # A straight line has its mean in the middle of each revolution, wherever samples stand.
    elapsed = np.arange(0.0, 2200.0, 7.3)
    ds = synthetic(elapsed, elapsed, 1000.0)
    mean = ef.orbit_mean(ds).level.values
    # An interval is shared in proportion, which for a line is off by at most step**2 / 8 / period.
    assert mean == pytest.approx([500.0, 1500.0], abs=2.0 * 7.3**2 / 8.0 / 1000.0)


def test_a_track_that_starts_anywhere_has_its_own_revolutions(tracks):
    orbit = ORBITS["dated"]
    ds = ef.factors(orbit.track(revolutions=3), ef.NadirPointing(), BOX)
    whole = ef.orbit_mean(ds)
    assert list(whole.rev.values) == [0, 1, 2]
    one = ef.orbit_mean(ef.factors(orbit.track(), ef.NadirPointing(), BOX))
    assert one.g_ir.values[0] == pytest.approx(whole.g_ir.values[0], abs=1e-9)
    part = ef.orbit_mean(ds.isel(time=slice(100, None)))
    assert part.sizes["rev"] == 2
    # A revolution from elsewhere on a circular orbit: the season moves it by less than this.
    assert part.g_sun.values == pytest.approx(whole.g_sun.values[:2], abs=1e-3)


def test_partial_last_revolution_is_left_out():
    orbit = ORBITS["dated"]
    long = ef.orbit_mean(ef.factors(orbit.track(revolutions=2.7), ef.NadirPointing(), BOX))
    short = ef.orbit_mean(ef.factors(orbit.track(revolutions=2), ef.NadirPointing(), BOX))
    assert long.sizes["rev"] == 2
    for name in schema.FACTORS:
        assert long[name].values == pytest.approx(short[name].values, abs=1e-9), name


def test_step_that_does_not_divide_the_revolution():
    orbit = ORBITS["dated"]
    odd = ef.orbit_mean(ef.factors(orbit.track(revolutions=2, step_s=23.7), ef.NadirPointing(), BOX))
    even = ef.orbit_mean(ef.factors(orbit.track(revolutions=2, step_s=orbit.period_s / 240), ef.NadirPointing(), BOX))
    assert odd.sizes["rev"] == 2
    for name in schema.FACTORS:
        assert odd[name].values == pytest.approx(even[name].values, abs=MEAN), name


def test_mean_of_a_track_made_from_arrays():
    # Samples of one's own: no contacts among them, and the revolution ends between two.
    orbit = ef.UndatedOrbit(700.0, 60.0)
    elapsed = np.arange(0.0, 2.1 * orbit.period_s, 20.0)
    position, velocity, sun = reference.undated_states(700.0, 60.0, elapsed * 2.0 * np.pi / orbit.period_s)
    track = ef.track_from_arrays((elapsed * 1e9).astype("timedelta64[ns]"), position, velocity, sun)
    found = ef.orbit_mean(ef.factors(track, LAWS["nadir, turned"], BOX))
    expected = ef.orbit_mean(ef.factors(orbit.track(revolutions=2), LAWS["nadir, turned"], BOX))
    assert found.sizes["rev"] == 2
    assert found.g_ir.values == pytest.approx(expected.g_ir.values, abs=MEAN)
    assert found.g_albedo.values == pytest.approx(expected.g_albedo.values, abs=MEAN)
    # Where edges of eclipses fall between samples, up to half a step at each is uncertain.
    assert found.g_sun.values == pytest.approx(expected.g_sun.values, abs=20.0 / orbit.period_s)


def test_less_than_a_revolution_is_refused():
    orbit = ORBITS["dated"]
    ds = ef.factors(orbit.track(revolutions=0.9), ef.NadirPointing(), BOX)
    for reduce in (ef.orbit_mean, ef.sun_exposure):
        with pytest.raises(ef.InputError, match="at least one revolution long"):
            reduce(ds)
    for short in (ds.isel(time=slice(0, 1)), ds.isel(time=slice(0, 0))):
        with pytest.raises(ef.InputError, match="at least one revolution long"):
            ef.orbit_mean(short)


# ---------------------------------------------------------------------------------- means of fluxes


def test_mean_absorbed_is_the_sum_of_mean_parts(tracks):
    craft = ef.Craft(
        [
            ef.Face("radiator", (1.0, 0.2, 0.0), 1.0, ef.Coating(absorptance=0.1, emittance=0.85)),
            ef.Face("array", (0.0, 0.4, 1.0), 2.0, ef.Coating(0.9, 0.8, electrical_extraction=0.25), back=COATING),
        ]
    )
    for law in ("nadir", "spin"):
        mean = ef.orbit_mean(ef.flux(tracks["dated"], LAWS[law], craft, ENVIRONMENT))
        sunlight = mean.solar_flux + mean.albedo_flux
        expected = sunlight * mean.absorptance + mean.planetary_ir_flux * mean.emittance
        assert mean.absorbed_flux.dims == expected.dims
        assert mean.absorbed_flux.values == pytest.approx(expected.values, abs=1e-9)


def test_mean_says_what_it_is(tracks):
    ds = ef.flux(tracks["dated"], ef.NadirPointing(), BOX, ENVIRONMENT)
    mean = ef.orbit_mean(ds)
    for name in schema.FLUXES:
        assert mean[name].dims == ("rev", "face")
        assert mean[name].attrs["cell_methods"] == "time: mean"
        assert mean[name].attrs["units"] == "W m-2"
    assert list(mean.face.values) == list(ds.face.values)
    assert mean.area.values == pytest.approx(ds.area.values)
    assert "time" not in mean.variables
    assert not {"position", "sun", "longitude", "sun_incidence", "sun_azimuth"} & set(mean.data_vars)
    assert mean.attrs["history"].startswith(ds.attrs["history"])
    assert ds[schema.FLUXES[0]].attrs["cell_methods"] == "time: point", "the input keeps its own"


def test_mean_does_not_depend_on_the_order_of_dimensions(tracks):
    ds = ef.factors(tracks["dated"], ef.NadirPointing(), BOX)
    turned = ds.transpose("face", "xyz", "time")
    for name in schema.FACTORS:
        assert np.array_equal(ef.orbit_mean(turned)[name].values, ef.orbit_mean(ds)[name].values), name


# ------------------------------------------------------------------------------------------ extremes


def test_extremes_have_their_values_and_first_times():
    orbit = ef.UndatedOrbit(500.0, 30.0)
    ds = ef.flux(orbit.track(revolutions=2), ef.NadirPointing(), BOX, ENVIRONMENT)
    found = ef.extremes(ds)
    assert list(found.extreme.values) == ["minimum", "maximum"]
    # The upper face sees the most Sun at orbit noon, S cos(beta), the start of this track.
    largest = found.solar_flux.sel(face="-Z", extreme="maximum").item()
    to_sun = reference.sun_and_discs(*(ds[n].values[:1] for n in ("position", "sun_direction", "sun_distance")))[0]
    assert largest == pytest.approx(1361.0 * to_sun[0, 0], rel=ROUNDING)
    assert found.solar_flux_time.sel(face="-Z", extreme="maximum").item() == 0
    for name in schema.FLUXES:
        for face in ds.face.values:
            series = ds[name].sel(face=face).values
            for which, value in (("minimum", min(series)), ("maximum", max(series))):
                assert found[name].sel(face=face, extreme=which).item() == value
                first = ds.time.values[list(series).index(value)]
                assert found[f"{name}_time"].sel(face=face, extreme=which).values == first
    assert found.solar_flux.attrs.get("cell_methods") is None
    assert found.solar_flux.attrs["units"] == "W m-2"


def test_extremes_of_factors_and_of_dated_tracks(tracks):
    ds = ef.factors(tracks["dated"], ef.NadirPointing(), BOX)
    found = ef.extremes(ds)
    assert found.g_ir.sel(face="+Z", extreme="maximum").item() == pytest.approx((6378.137 / 6938.137) ** 2, abs=1e-12)
    assert found.g_sun_time.dtype.kind == "M"


def test_extremes_of_a_track_are_refused(tracks):
    with pytest.raises(ef.InputError, match="fluxes or factors over time"):
        ef.extremes(tracks["dated"])
    ds = ef.factors(tracks["dated"], ef.NadirPointing(), BOX)
    with pytest.raises(ef.InputError, match="fluxes or factors over time"):
        ef.extremes(ds.isel(time=slice(0, 0)))


# ------------------------------------------------------------------------------------------ eclipses


def test_geostationary_equinox_eclipse():
    # tests/data/eclipse_circular.csv, beta 0: cylinder 69.41 min, umbra 67.31, first to last contact 71.56.
    row = next(r for r in rows("eclipse_circular") if r["alt_km"] == "35786" and r["beta_deg"] == "0")
    orbit = ef.UndatedOrbit(35786.0, 0.0)
    found = ef.eclipses(orbit.track())
    assert float(found.umbra_duration_s.values[0]) / 60.0 == pytest.approx(float(row["conical_umbra_min"]), abs=1e-3)
    outer = float(row["conical_penumbra_outer_contact_min"])
    assert float(found.penumbra_duration_s.values[0]) / 60.0 == pytest.approx(outer, abs=1e-3)


# ------------------------------------------------------------------------------------------ round trips


@pytest.mark.parametrize("orbit", ["600 km, penumbra only", "dated"])
def test_fluxes_and_means_survive_files_exactly(tmp_path, tracks, orbit):
    ds = ef.flux(tracks[orbit], LAWS["inertial"], BOX, ef.Environment(1361.0, 0.3, 237.0, name="plain"))
    for name, each in (("fluxes", ds), ("means", ef.orbit_mean(ds)), ("extremes", ef.extremes(ds))):
        back = tables.load(tables.save(each, tmp_path / f"{name}.nc"))
        xr.testing.assert_identical(back, each)
        assert back.attrs == dict(each.attrs)
        stored = tmp_path / f"{name}.zarr"
        each.to_zarr(stored, zarr_format=3, consolidated=False)
        with xr.open_zarr(stored, consolidated=False, decode_timedelta=True) as opened:
            xr.testing.assert_identical(opened.load(), each)


def test_fluxes_read_back_can_go_on(tmp_path, tracks):
    ds = ef.flux(tracks["dated"], LAWS["nadir"], BOX, ENVIRONMENT)
    back = tables.load(tables.save(ds, tmp_path / "fluxes.nc"))
    xr.testing.assert_identical(ef.orbit_mean(back), ef.orbit_mean(ds))
    assert ef.energy_closure(back).closure_error.item() < 1e-11
