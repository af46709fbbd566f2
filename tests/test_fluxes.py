"""Factors and fluxes of whole tracks against the slow reference integration, and what must hold exactly.

The reference makes its own attitudes, its own visible share of the Sun and its own integrals from
positions and the Sun's direction alone (`reference_integration`).
"""

from __future__ import annotations

import csv
import math
import warnings
from pathlib import Path

import numpy as np
import pytest
import reference_integration as reference
import xarray as xr
from scipy.spatial.transform import Rotation

import envflux as ef
from envflux import schema

# Axes that swing fast are sampled here, not averaged; and levels are made up to tell terms apart.
pytestmark = [
    pytest.mark.filterwarnings("ignore:the Sun passes so near"),
    pytest.mark.filterwarnings("ignore:solar_constant_w_m2 is"),
]

DATA = Path(__file__).parent / "data"

# The accuracy asked: at each sample, 0.1 % of the most a component can be at that altitude, which is
# S for direct sunlight, a S (R/r)**2 for albedo and M (R/r)**2 for infrared.
SAMPLE = 1e-3
# What the pieces are built for (their own texts): rings 6e-5 and 37 phases 5e-5 of (R/r)**2; flat
# discs in place of round ones 4e-4 of S, within penumbra only.
BUILT_FOR = 6e-5
PHASES_BUILT_FOR = 5e-5
FLAT_DISCS = 4.1e-4
# Rounding of dot products.
ROUNDING = 1e-12

EPOCH = "2031-03-20T06:00:00Z"
COATING = ef.Coating(absorptance=0.3, emittance=0.8)
ENVIRONMENT = ef.Environment(solar_constant_w_m2=1361.0, albedo=0.3, planetary_ir_w_m2=237.0)


def rows(name):
    with (DATA / f"{name}.csv").open(newline="", encoding="utf-8") as file:
        return list(csv.DictReader(file))


def random_craft(seed, count):
    normals = reference.unit(np.random.default_rng(seed).normal(size=(count, 3)))
    return ef.Craft([ef.Face(f"face {i}", tuple(n), 1.0 + i, COATING) for i, n in enumerate(normals)])


def body_normals(craft):
    return np.array([surface.normal for surface in craft.surfaces()])


ORBITS = {
    "200 km, beta 0": ef.UndatedOrbit(200.0, 0.0),
    "400 km, beta 65": ef.UndatedOrbit(400.0, 65.0),
    "800 km, beta -40": ef.UndatedOrbit(800.0, -40.0, 1.0167),
    "1500 km, beta 90": ef.UndatedOrbit(1500.0, 90.0),
    "20200 km, beta -90": ef.UndatedOrbit(20200.0, -90.0),
    "36000 km, beta 5": ef.UndatedOrbit(36000.0, 5.0),
    "560 km, dated": ef.CircularOrbit(altitude_km=560.0, inclination_deg=53.0, raan_deg=40.0, epoch=EPOCH),
    "12 h, critical inclination": ef.KeplerOrbit(
        semi_major_axis_km=26561.76,
        eccentricity=0.74,
        inclination_deg=63.4349,
        raan_deg=200.0,
        arg_perigee_deg=270.0,
        epoch=EPOCH,
    ),
    "geostationary, equinox": ef.CircularOrbit(35786.0, 0.05, 0.0, epoch=EPOCH),
}

STEADY = {
    "nadir": ef.NadirPointing(),
    "nadir, turned": ef.NadirPointing(roll_deg=33.0, pitch_deg=-21.0, yaw_deg=130.0),
    "inertial": ef.InertialAttitude((0.3, -0.5, 0.7, 0.2)),
    "sun": ef.SunPointing(),
    "sun, clocked to zenith": ef.SunPointing(axis=(1.0, 2.0, -0.5), toward="zenith", clock_axis=(0.3, -1.0, 0.4)),
    "sun, clocked to velocity": ef.SunPointing(axis="-X", toward="-velocity", clock_axis="+Z"),
}
SPINS = {
    "about inertial": {"axis": (0.2, 1.0, 0.6), "about": "inertial"},
    "about a direction": {"axis": "+Z", "about": "inertial", "direction": (1.0, -0.4, 0.3)},
    "about the Sun": {"axis": "-Y", "about": "sun"},
    "about the orbit normal": {"axis": (1.0, 0.1, -0.3), "about": "orbit normal"},
}


def check_samples(track, law, craft, samples, angles_rad=None, *, built_for=BUILT_FOR, nodes=reference.NODES):
    """Compare all factors with the reference on some samples; direct also on every sample of a partial phase."""
    found = ef.factors(track, law, craft)
    partial = np.flatnonzero((track.sunlit.values > 0.0) & (track.sunlit.values < 1.0))
    chosen = np.unique(np.concatenate([samples, partial]))
    piece = track.isel(time=chosen)
    axes = reference.body_axes(law, piece, angles_rad)
    axes = axes[:, None] if angles_rad is None else axes
    normals = np.einsum("tpij,fj->tpfi", axes, body_normals(craft))

    direct = reference.direct_factor(
        piece.position.values[:, None, None],
        piece.sun_direction.values[:, None, None],
        np.broadcast_to(piece.sun_distance.values[:, None, None], normals.shape[:-1]),
        normals,
    ).mean(axis=1)
    assert FLAT_DISCS < SAMPLE
    if angles_rad is None:  # an average over phases needs more of them: it has tests of its own
        error = np.abs(found.g_sun.values[chosen] - direct)
        is_partial = np.isin(chosen, partial)
        assert error[is_partial].max(initial=0.0) < FLAT_DISCS
        assert error[~is_partial].max(initial=0.0) < ROUNDING

    few = np.isin(chosen, samples)
    shape = normals[few].shape
    expected = reference.planet_factors(
        np.broadcast_to(piece.position.values[few][:, None, None], shape).reshape(-1, 3),
        np.broadcast_to(piece.sun_direction.values[few][:, None, None], shape).reshape(-1, 3),
        normals[few].reshape(-1, 3),
        nodes=nodes,
    )
    expected = expected.reshape(3, *shape[:-1]).mean(axis=2)
    ceiling = (reference.EARTH_RADIUS_KM / np.linalg.norm(piece.position.values[few], axis=1)) ** 2
    for name, values in zip(("g_albedo", "g_zenith", "g_ir"), expected, strict=True):
        error = np.abs(found[name].values[chosen[few]] - values) / ceiling[:, None]
        assert error.max() < built_for < SAMPLE, name


@pytest.fixture(scope="module")
def tracks():
    return {name: orbit.track() for name, orbit in ORBITS.items()}


@pytest.mark.parametrize("law", STEADY)
@pytest.mark.parametrize("orbit", ORBITS)
def test_each_sample_of_a_steady_law_meets_the_reference(tracks, orbit, law):
    track = tracks[orbit]
    samples = np.random.default_rng(len(orbit) * 31 + len(law)).choice(track.sizes["time"], 5, replace=False)
    check_samples(track, STEADY[law], random_craft(len(orbit) + len(law), 3), samples)


@pytest.mark.parametrize("spin", SPINS)
@pytest.mark.parametrize("orbit", ["400 km, beta 65", "1500 km, beta 90", "12 h, critical inclination"])
def test_each_sample_of_a_spin_resolved_in_time_meets_the_reference(orbit, spin):
    law = ef.Spinning(**SPINS[spin], rate_rpm=-0.05, phase_deg=77.0, averaged=False)
    track = ORBITS[orbit].track(duration_s=4000.0, step_s=4.0)
    if float(np.diff(track.elapsed.values).max()) > law.turn_s / 72.0:
        pytest.fail("the track is too coarse for what this test wants to see")
    samples = np.random.default_rng(len(orbit) + len(spin)).choice(track.sizes["time"], 5, replace=False)
    check_samples(track, law, random_craft(len(spin), 3), samples)


@pytest.mark.parametrize("spin", SPINS)
@pytest.mark.parametrize("orbit", ["400 km, beta 65", "12 h, critical inclination", "geostationary, equinox"])
def test_each_sample_of_an_averaged_spin_meets_the_brute_average(tracks, orbit, spin):
    law = ef.Spinning(**SPINS[spin], rate_rpm=5.0, averaged=True)
    craft = random_craft(len(orbit) * len(spin), 2)
    track = tracks[orbit]
    samples = np.random.default_rng(len(orbit) + len(spin)).choice(track.sizes["time"], 2, replace=False)
    angles = (np.arange(72) + 0.41) * 2.0 * np.pi / 72
    check_samples(track, law, craft, samples, angles, built_for=BUILT_FOR + PHASES_BUILT_FOR, nodes=16)

    # Direct: the corner needs many phases, which cost nothing here. The midpoint rule misses up to
    # (2 pi / n)**2 / 24 of the corner's slope in each of the two, over 2 pi.
    many = (np.arange(7200) + 0.41) * 2.0 * np.pi / 7200
    piece = track.isel(time=samples)
    normals = np.einsum("tpij,fj->tpfi", reference.body_axes(law, piece, many), body_normals(craft))
    to_sun = reference.sun_and_discs(piece.position.values, piece.sun_direction.values, piece.sun_distance.values)[0]
    mean = np.maximum(np.einsum("tpfi,ti->tpf", normals, to_sun), 0.0).mean(axis=1)
    expected = piece.sunlit.values[:, None] * mean
    assert ef.factors(piece, law, craft).g_sun.values == pytest.approx(expected, abs=1e-6)


# ------------------------------------------------------------------------------ from factors to fluxes


@pytest.mark.parametrize("correction", ["none", "element", "sub-point"])
@pytest.mark.filterwarnings("ignore:the zenith correction was fitted:envflux.EnvfluxWarning")
def test_fluxes_meet_the_reference_in_watts(tracks, correction):
    # A radiating sphere 30 km above the ground, as satellite data sets have it, and a Sun at 1.0167 au.
    environment = ef.Environment(
        solar_constant_w_m2=1366.1,
        albedo=0.25,
        planetary_ir_w_m2=230.0,
        zenith_correction=correction,
        radiating_radius_km=6408.137,
    )
    track, law, craft = tracks["800 km, beta -40"], STEADY["nadir, turned"], random_craft(4, 3)
    found = ef.flux(track, law, craft, environment)
    samples = np.arange(3, track.sizes["time"], 25)
    piece = track.isel(time=samples)
    normals = np.einsum("tij,fj->tfi", reference.body_axes(law, piece), body_normals(craft))
    shape = normals.shape
    position = np.broadcast_to(piece.position.values[:, None], shape).reshape(-1, 3)
    sun = np.broadcast_to(piece.sun_direction.values[:, None], shape).reshape(-1, 3)
    albedo, zenith, infrared = (
        g.reshape(shape[:2]) for g in reference.planet_factors(position, sun, normals.reshape(-1, 3), 6408.137)
    )
    S = 1366.1 / 1.0167**2
    level = (6408.137 / np.linalg.norm(piece.position.values, axis=1)[:, None]) ** 2
    above = np.sum(reference.unit(piece.position.values) * piece.sun_direction.values, axis=1)
    theta = np.degrees(np.arccos(above))
    # Beyond 90 degrees, at the sub-point, nothing is added: no sunlight falls there.
    at_sub_point = np.where(theta > 90.0, 0.0, reference.zenith_increment(theta))[:, None]
    expected = {
        "none": S * 0.25 * albedo,
        "element": S * (0.25 * albedo + zenith),
        "sub-point": S * (0.25 + at_sub_point) * albedo,
    }[correction]
    assert np.abs(found.albedo_flux.values[samples] - expected).max() < SAMPLE * 0.25 * S * level.min()
    assert np.abs(found.planetary_ir_flux.values[samples] - 230.0 * infrared).max() < SAMPLE * 230.0 * level.min()
    assert found.irradiance.values == pytest.approx(S, rel=ROUNDING)


@pytest.mark.filterwarnings("ignore:age is EOL")
@pytest.mark.filterwarnings("ignore:the zenith correction was fitted:envflux.EnvfluxWarning")
@pytest.mark.parametrize("correction", ["none", "element", "sub-point"])
def test_combining_factors_is_what_flux_does_bit_for_bit(tracks, correction):
    environment = ef.Environment(1361.0, 0.3, 237.0, zenith_correction=correction)
    track, craft = tracks["560 km, dated"], random_craft(7, 4)
    for law in (STEADY["nadir"], ef.Spinning(**SPINS["about the Sun"], rate_rpm=5.0)):
        at_once = ef.flux(track, law, craft, environment, age="EOL", bound="maximum", cells="unloaded")
        by_steps = ef.combine(ef.factors(track, law, craft), environment, age="EOL", bound="maximum", cells="unloaded")
        xr.testing.assert_identical(at_once, by_steps)


def test_combine_leaves_the_factors_alone(tracks):
    geometry = ef.factors(tracks["400 km, beta 65"], STEADY["nadir"], random_craft(7, 4))
    before = geometry.copy(deep=True)
    ef.combine(geometry, ENVIRONMENT)
    xr.testing.assert_identical(geometry, before)


def test_correction_warns_where_it_extrapolates(tracks):
    environment = ef.Environment(1361.0, 0.3, 237.0, zenith_correction="element")
    with pytest.warns(ef.EnvfluxWarning, match="65 deg"):
        ef.flux(tracks["400 km, beta 65"], STEADY["nadir"], random_craft(7, 1), environment)


def test_combine_refuses_factors_that_do_not_fit(tracks):
    track, law, craft = tracks["400 km, beta 65"], STEADY["nadir"], random_craft(7, 1)
    raised = ef.Environment(1361.0, 0.3, 237.0, radiating_radius_km=6408.137)
    with pytest.raises(ef.InputError, match=r"radiating_radius_km is 6408\.137"):
        ef.combine(ef.factors(track, law, craft), raised)
    ef.combine(ef.factors(track, law, craft, radiating_radius_km=6408.137), raised)
    corrected = ef.Environment(1361.0, 0.3, 237.0, zenith_correction="element")
    with pytest.raises(ef.InputError, match="zenith_correction"):
        ef.combine(ef.factors(track, law, craft, zenith=False), corrected)


def test_absorbed_is_weighted_sum_of_the_three(tracks):
    # absorbed = absorptance (solar + albedo) + emittance infrared: common practice, no source.
    craft = ef.Craft(
        [
            ef.Face("radiator", (1.0, 0.2, 0.0), 1.0, ef.Coating(absorptance=0.1, emittance=0.85)),
            ef.Face("array", (0.0, 0.4, 1.0), 2.0, ef.Coating(0.9, 0.8, electrical_extraction=0.25), back=COATING),
        ]
    )
    track = tracks["560 km, dated"]
    for cells, effective in (("loaded", 0.65), ("unloaded", 0.9)):
        ds = ef.flux(track, ef.NadirPointing(), craft, ENVIRONMENT, cells=cells)
        assert list(ds.face.values) == ["radiator", "array", "array back"]
        assert ds.absorptance.values == pytest.approx([0.1, effective, 0.3], abs=1e-15)
        assert list(ds.emittance.values) == [0.85, 0.8, 0.8]
        assert list(ds.area.values) == [1.0, 2.0, 2.0]
        sunlight = ds.solar_flux + ds.albedo_flux
        expected = np.array([0.1, effective, 0.3]) * sunlight + np.array([0.85, 0.8, 0.8]) * ds.planetary_ir_flux
        assert ds.absorbed_flux.values == pytest.approx(expected.values, rel=1e-14)


def test_fluxes_scale_with_their_levels(tracks):
    track, law, craft = tracks["560 km, dated"], STEADY["nadir, turned"], random_craft(8, 3)
    one = ef.flux(track, law, craft, ENVIRONMENT)
    two = ef.flux(track, law, craft, ef.Environment(2.0 * 700.0, 0.3, 237.0))
    half = ef.flux(track, law, craft, ef.Environment(700.0, 0.15, 474.0))
    assert two.solar_flux.values == pytest.approx(2.0 * half.solar_flux.values, rel=ROUNDING)
    assert two.albedo_flux.values == pytest.approx(4.0 * half.albedo_flux.values, rel=ROUNDING)
    assert half.planetary_ir_flux.values == pytest.approx(2.0 * one.planetary_ir_flux.values, rel=ROUNDING)
    nothing = ef.flux(track, law, craft, ef.Environment(0.0, 0.0, 0.0))
    assert not any(nothing[name].values.any() for name in schema.FLUXES)


def test_environments_superpose(tracks):
    track, law, craft = tracks["800 km, beta -40"], STEADY["inertial"], random_craft(9, 3)
    both = ef.flux(track, law, craft, ef.Environment(1361.0, 0.3, 237.0))
    sun = ef.flux(track, law, craft, ef.Environment(1361.0, 0.3, 0.0))
    earth = ef.flux(track, law, craft, ef.Environment(0.0, 0.3, 237.0))
    total = sun.absorbed_flux.values + earth.absorbed_flux.values
    assert both.absorbed_flux.values == pytest.approx(total, rel=ROUNDING)


@pytest.mark.parametrize("row", rows("earth_sun_distance_extremes"), ids=lambda row: row["utc"])
def test_irradiance_at_perihelion_and_aphelion_is_the_published_one(row):
    # Published almanac pages and the inverse square; the issue asks for 1e-5 au.
    orbit = ef.CircularOrbit(500.0, 30.0, 0.0, epoch=row["utc"])
    ds = ef.flux(orbit.track(duration_s=600.0), ef.NadirPointing(), random_craft(1, 1), ENVIRONMENT)
    distance = float(row["distance_au"])
    assert ds.sun_distance.values == pytest.approx(distance, abs=1e-5)
    expected = float(row["S_for_1361"])
    assert ds.irradiance.values == pytest.approx(expected, abs=2e-5 * expected / distance + 5e-4)


# ------------------------------------------------------------------------------------- known shapes


def test_sides_of_a_nadir_box(tracks):
    # Howell's catalogue, tests/data/view_factor_plate_sphere.csv at H = 1.0627: side 0.2887482156, down 1/H**2.
    track = ef.UndatedOrbit(altitude_km=(1.0627 - 1.0) * 6378.137, beta_deg=30.0).track()
    craft = ef.box_craft((1.0, 1.0, 1.0), COATING)
    infrared = ef.factors(track, ef.NadirPointing(), craft).g_ir
    for face in ("+X", "-X", "+Y", "-Y"):
        assert infrared.sel(face=face).values == pytest.approx(0.2887482156, abs=2e-10)
    assert infrared.sel(face="+Z").values == pytest.approx(1.0 / 1.0627**2, abs=1e-13)
    assert not infrared.sel(face="-Z").values.any()
    yawed = ef.factors(track, ef.NadirPointing(yaw_deg=45.0), craft).g_ir
    assert yawed.values == pytest.approx(infrared.values, abs=ROUNDING)


def test_faces_in_all_directions_receive_what_a_sphere_does(tracks):
    # Small sphere: F = (1 - sqrt(1 - 1/H**2))/2 (Howell's catalogue); direct sunlight S/4 (Cauchy).
    nodes, weights = np.polynomial.legendre.leggauss(60)
    around = (np.arange(60) + 0.5) * 2.0 * np.pi / 60
    cosine, azimuth = (a.ravel() for a in np.meshgrid(nodes, around, indexing="ij"))
    sine = np.sqrt(1.0 - cosine**2)
    normals = np.stack([sine * np.cos(azimuth), sine * np.sin(azimuth), cosine], axis=-1)
    craft = ef.Craft([ef.Face(str(i), tuple(n), 1.0, COATING) for i, n in enumerate(normals)])
    share = np.repeat(weights, 60) / 120.0
    for name in ("400 km, beta 65", "36000 km, beta 5"):
        track = tracks[name].isel(time=slice(None, None, 40))
        found = ef.factors(track, STEADY["inertial"], craft)
        H = np.linalg.norm(track.position.values, axis=1) / 6378.137
        sphere = 0.5 * (1.0 - np.sqrt(1.0 - 1.0 / H**2))
        # The product rule itself is good to 1e-4 across the plates' corners.
        assert found.g_ir.values @ share == pytest.approx(sphere, abs=1e-4 / H.min() ** 2)
        assert found.g_sun.values @ share == pytest.approx(0.25 * track.sunlit.values, abs=2e-4)


def test_spin_averages_have_their_closed_forms(tracks):
    # tests/data/shape_mean_solar.csv: one face of a fast-spinning prism, axis normal to the Sun: 1/pi;
    # axis at psi from the Sun: sin(psi)/pi, and max(cos psi, 0) on the end. Fortescue et al., ch. 11.
    row = next(r for r in rows("shape_mean_solar") if "prism" in r["shape"])
    craft = ef.box_craft((1.0, 1.0, 1.0), COATING)
    track = tracks["36000 km, beta 5"]
    noon = track.isel(time=[0])
    about_normal = ef.factors(
        ef.UndatedOrbit(36000.0, 0.0).track().isel(time=[0]),
        ef.Spinning(axis="+Z", about="orbit normal", rate_rpm=5.0),
        craft,
    )
    assert about_normal.g_sun.values[0, :4] == pytest.approx(float(row["absorbing_over_radiating_area"]), abs=6e-9)
    for psi_deg in (0.0, 20.0, 70.0, 110.0, 180.0):
        sun = noon.sun.values[0]
        across = reference.unit(np.cross(sun, [0.1, 0.2, 0.9]))
        axis = Rotation.from_rotvec(across * math.radians(psi_deg)).apply(sun)
        law = ef.Spinning(axis="+Z", about="inertial", rate_rpm=5.0, direction=tuple(axis))
        found = ef.factors(noon, law, craft).g_sun.values[0]
        psi = math.radians(psi_deg)
        assert found[:4] == pytest.approx(
            math.sin(psi) / math.pi, abs=1e-8
        )  # square root of rounding where axis and Sun are in line
        assert found[4] == pytest.approx(max(math.cos(psi), 0.0), abs=ROUNDING)
        assert found[5] == pytest.approx(max(-math.cos(psi), 0.0), abs=ROUNDING)
    facing = ef.factors(noon, ef.Spinning(axis="+Z", about="sun", rate_rpm=5.0), craft).g_sun.values[0]
    assert facing == pytest.approx([0.0, 0.0, 0.0, 0.0, 1.0, 0.0], abs=1e-7)


def test_averaged_side_faces_receive_what_a_cylinder_does():
    # Lateral surface of a small cylinder, tests/data/view_factor_simple_shapes.csv.
    for row in rows("view_factor_simple_shapes"):
        if row["shape"] != "cylinder_lateral":
            continue
        H, angle = float(row["H_r_over_R"]), math.radians(float(row["axis_angle_from_nadir_deg"]))
        track = ef.UndatedOrbit((H - 1.0) * 6378.137, 0.0).track().isel(time=[0])  # nadir is -x
        law = ef.Spinning(axis="+Z", about="inertial", rate_rpm=5.0, direction=(-math.cos(angle), math.sin(angle), 0.0))
        found = ef.factors(track, law, ef.box_craft((1.0, 1.0, 1.0), COATING)).g_ir.values[0, :4]
        assert found == pytest.approx(float(row["F"]), abs=PHASES_BUILT_FOR / H**2), row


def test_no_lit_ground_is_in_view_from_the_shadow(tracks):
    # A point m of the unit sphere is in view of p if m.p > 1, and lit if m.s > 0. In the shadow p.s < 0
    # and p is less than 1 from its axis, so for lit m: m.p < 1. Albedo therefore fades to nothing as the
    # craft enters eclipse, and not before.
    craft = random_craft(10, 4)
    for name in ("200 km, beta 0", "400 km, beta 65", "560 km, dated", "12 h, critical inclination"):
        track = tracks[name]
        found = ef.factors(track, ef.NadirPointing(), craft)
        dark = track.sunlit.values == 0.0
        assert dark.any()
        for factor in ("g_sun", "g_albedo", "g_zenith"):
            assert not found[factor].values[dark].any(), (name, factor)
        up = reference.unit(track.position.values)
        zenith = np.arccos(np.clip(np.sum(up * track.sun_direction.values, axis=1), -1.0, 1.0))
        cap = np.arccos(6378.137 / np.linalg.norm(track.position.values, axis=1))
        lit = zenith < 0.5 * np.pi + 0.5 * cap
        beyond = lit & (zenith > 0.5 * np.pi)
        assert beyond.any(), "ground in view is lit where the sub-point is not"
        assert (found.g_albedo.values[lit].max(axis=1) > 0.0).all()


def test_reflected_light_is_not_scaled_by_the_crafts_own_shadow(tracks):
    track, craft = tracks["560 km, dated"], random_craft(10, 4)
    shaded = track.assign(sunlit=0.0 * track.sunlit)
    one, two = (ef.factors(each, ef.NadirPointing(), craft) for each in (track, shaded))
    assert one.g_albedo.values.any()
    for factor in ("g_albedo", "g_zenith", "g_ir"):
        assert np.array_equal(one[factor].values, two[factor].values)
    assert not two.g_sun.values.any()
    one, two = (ef.combine(each, ENVIRONMENT) for each in (one, two))
    assert np.array_equal(one.albedo_flux.values, two.albedo_flux.values)


def test_mirrored_beta_mirrors_the_faces():
    craft = ef.box_craft((1.0, 1.0, 1.0), COATING)
    north = ef.factors(ef.UndatedOrbit(600.0, 37.0).track(), ef.NadirPointing(), craft)
    south = ef.factors(ef.UndatedOrbit(600.0, -37.0).track(), ef.NadirPointing(), craft)
    mirror = ["+X", "-X", "-Y", "+Y", "+Z", "-Z"]
    for name in schema.FACTORS:
        expected = north[name].sel(face=mirror).values
        assert south[name].values == pytest.approx(expected, abs=1e-9), name


def test_body_turned_against_its_faces_changes_nothing(tracks):
    track = tracks["560 km, dated"]
    turn = Rotation.from_quat([0.1, -0.5, 0.3, 0.7])
    x, y, z, w = turn.as_quat()
    normals = body_normals(random_craft(5, 4))
    plain = ef.Craft([ef.Face(str(i), tuple(turn.apply(n)), 1.0, COATING) for i, n in enumerate(normals)])
    turned = ef.Craft([ef.Face(str(i), tuple(n), 1.0, COATING) for i, n in enumerate(normals)])
    one = ef.factors(track, ef.InertialAttitude((1.0, 0.0, 0.0, 0.0)), plain)
    two = ef.factors(track, ef.InertialAttitude((w, x, y, z)), turned)
    for name in schema.FACTORS:
        assert two[name].values == pytest.approx(one[name].values, abs=1e-6), name


def test_suns_place_in_body_axes(tracks):
    track, law = tracks["560 km, dated"], STEADY["nadir, turned"]
    craft = random_craft(3, 3)
    found = ef.factors(track, law, craft)
    to_sun = reference.sun_and_discs(track.position.values, track.sun_direction.values, track.sun_distance.values)[0]
    body = np.einsum("tji,tj->ti", reference.body_axes(law, track), to_sun)
    azimuth, elevation = np.radians(found.sun_azimuth.values), np.radians(found.sun_elevation.values)
    back = np.stack(
        [np.cos(elevation) * np.cos(azimuth), np.cos(elevation) * np.sin(azimuth), np.sin(elevation)], axis=-1
    )
    assert back == pytest.approx(body, abs=ROUNDING)
    cosine = body @ body_normals(craft).T
    assert np.cos(np.radians(found.sun_incidence.values)) == pytest.approx(cosine, abs=ROUNDING)
    exposure = track.sunlit.values[:, None] * (cosine > 0.0)
    assert found.sun_exposure.values == pytest.approx(exposure, abs=ROUNDING)
    assert "sun_azimuth" not in ef.factors(track, ef.Spinning(rate_rpm=5.0, averaged=True), craft)


# ------------------------------------------------------------------------------- same in, same out


LONG = ef.CircularOrbit(altitude_km=700.0, inclination_deg=98.0, raan_deg=10.0, epoch=EPOCH)


@pytest.mark.parametrize("law", ["nadir, turned", "sun, clocked to zenith", "spin", "averaged spin"])
def test_threads_and_pieces_give_the_same_bits(law):
    track = LONG.track(revolutions=12, step_s=6.0)  # more than one chunk of 8192
    assert track.sizes["time"] > 8192
    laws = {
        **STEADY,
        "spin": ef.Spinning(axis=(0.1, 0.2, 1.0), rate_rpm=0.1, averaged=False),
        "averaged spin": ef.Spinning(axis=(0.1, 0.2, 1.0), rate_rpm=5.0, averaged=True),
    }
    craft = random_craft(6, 2)
    whole = ef.flux(track, laws[law], craft, ENVIRONMENT, threads=1)
    xr.testing.assert_identical(ef.flux(track, laws[law], craft, ENVIRONMENT, threads=2), whole)
    for start, end in ((0, 777), (777, 778), (5000, 5123), (8191, 8193)):
        piece = ef.flux(track.isel(time=slice(start, end)), laws[law], craft, ENVIRONMENT)
        for name in (*schema.FLUXES, "sun_incidence", "sun_exposure"):
            assert np.array_equal(piece[name].values, whole[name].values[start:end]), name


def test_results_say_what_they_are(tracks):
    ds = ef.flux(tracks["560 km, dated"], ef.NadirPointing(), random_craft(1, 2), ENVIRONMENT)
    for name in (*schema.FLUXES, "irradiance", "sun_incidence", "position", "sunlit"):
        known = schema.VARIABLES[name]
        assert ds[name].dims == known.dims
        assert ds[name].attrs["units"] == known.units
        assert ds[name].attrs["cell_methods"] == "time: point"
    assert "units" not in ds.time.attrs
    assert not [name for name in schema.FACTORS if name in ds]
    assert all(isinstance(value, (str, int, float)) and not isinstance(value, bool) for value in ds.attrs.values())
    assert ef.Environment.from_json(ds.attrs["environment"]) == ENVIRONMENT


def test_below_350_km_the_missing_term_is_named_with_its_size():
    track = ef.UndatedOrbit(250.0, 0.0).track()
    with pytest.warns(ef.OmittedTermWarning, match="free-molecular heating, about 14 W/m2"):
        ds = ef.flux(track, ef.NadirPointing(), random_craft(1, 1), ENVIRONMENT)
    assert "free-molecular" in ds.attrs["omitted_terms"]


# ---------------------------------------------------------------------------------------- bad input


def test_a_track_inside_the_radiating_sphere_is_refused():
    track = ef.UndatedOrbit(110.0, 0.0).track()
    with pytest.raises(ef.InputError, match=r"radiating_radius_km is 6500\.0"):
        ef.factors(track, ef.NadirPointing(), random_craft(1, 1), radiating_radius_km=6500.0)


class Broken:
    def __init__(self, rotations, weights):
        self.given = ef.Orientation(rotations, weights)

    def orient(self, track):
        return self.given


@pytest.mark.parametrize(
    ("rotations", "weights", "field"),
    [
        (np.zeros((241, 3, 3)), np.ones(1), "rotations.shape"),
        (np.zeros((1, 1, 3, 3)), np.ones(1), "rotations.shape"),
        (np.broadcast_to(2.0 * np.eye(3), (2, 1, 3, 3)), np.ones(1), "rotations"),
        (np.full((2, 1, 3, 3), np.nan), np.ones(1), "rotations"),
        (np.broadcast_to(np.eye(3), (2, 2, 3, 3)), np.ones(2), "weights"),
        (np.broadcast_to(np.diag([1.0, 1.0, -1.0]), (2, 1, 3, 3)), np.ones(1), "rotations"),
    ],
    ids=["no phase", "too short", "stretched", "not a number", "weights", "mirrored"],
)
def test_what_a_law_of_ones_own_gets_wrong_is_refused(tracks, rotations, weights, field):
    track = tracks["400 km, beta 65"].isel(time=slice(0, 2))
    with pytest.raises(ef.InputError, match=f"Broken.{field}"):
        ef.factors(track, Broken(rotations, weights), random_craft(1, 1))


# ------------------------------------------------------------------------ what a user is told


def test_arguments_of_the_wrong_kind_are_told_by_their_name():
    orbit = ef.UndatedOrbit(500.0, 20.0)
    track, law, craft = orbit.track(), ef.NadirPointing(), ef.box_craft((1.0, 1.0, 1.0), COATING)
    for arguments, message in (
        ((orbit, law, craft), r"track is of type UndatedOrbit, but it must be a track"),
        ((track, craft, law), r"law is of type Craft, but it must be an attitude law"),
        ((track, "nadir", craft), r"law is of type str"),
        ((track, law, [1]), r"craft is of type list, but it must be a Craft"),
    ):
        with pytest.raises(ef.InputError, match=message):
            ef.flux(*arguments, ENVIRONMENT)


def test_end_of_life_without_such_values_is_said():
    aged = ef.Coating(absorptance=0.1, emittance=0.8, absorptance_eol=0.2)
    craft = ef.box_craft((1.0, 1.0, 1.0), aged, coatings={"+X": COATING})
    track = ef.UndatedOrbit(500.0, 20.0).track()
    with pytest.warns(ef.EnvfluxWarning, match=r"no end-of-life values and keep those of BOL: \+X$"):
        ds = ef.flux(track, ef.NadirPointing(), craft, ENVIRONMENT, age="EOL")
    assert ds.absorptance.values.tolist() == [0.3, 0.2, 0.2, 0.2, 0.2, 0.2]


def test_an_irradiance_in_place_of_the_solar_constant_is_said():
    craft, law = ef.box_craft((1.0, 1.0, 1.0), COATING), ef.NadirPointing()
    # Thermal-handbook figure at perihelion (published-values: 1322 to 1414 W/m2, from memory).
    given = ef.Environment(solar_constant_w_m2=1414.0, albedo=0.3, planetary_ir_w_m2=237.0)
    with pytest.warns(ef.EnvfluxWarning, match="would count the season twice"):
        ef.flux(ef.UndatedOrbit(500.0, 20.0, 0.9833).track(), law, craft, given)
    with warnings.catch_warnings():
        warnings.simplefilter("error")  # without a season there is nothing to count twice
        ef.flux(ef.UndatedOrbit(500.0, 20.0).track(), law, craft, given)


def test_a_law_of_the_users_own_is_named_alike_in_every_run():
    class Own:
        def orient(self, track):
            return ef.NadirPointing().orient(track)

    ds = ef.flux(ef.UndatedOrbit(500.0, 20.0).track(), Own(), ef.box_craft((1, 1, 1), COATING), ENVIRONMENT)
    assert "Own" in ds.attrs["attitude"]
    assert "0x" not in ds.attrs["attitude"]
