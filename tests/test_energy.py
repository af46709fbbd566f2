"""What a closed body receives, face by face, is what it takes out of the beam and out of the planet's disc.

Projected areas come from the outline of the body's corners (scipy's convex hull), which knows
nothing of faces and normals.
"""

from __future__ import annotations

import numpy as np
import pytest
import reference_integration as reference
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial import ConvexHull
from scipy.spatial.transform import Rotation

import envflux as ef

# Rounding of some tens of products, relative to the largest power.
ROUNDING = 1e-11
# 0.1 % of the most a component can be, as for a single face.
SAMPLE = 1e-3

COATING = ef.Coating(absorptance=0.3, emittance=0.8)
ENVIRONMENT = ef.Environment(solar_constant_w_m2=1361.0, albedo=0.3, planetary_ir_w_m2=237.0)
TRACK = ef.UndatedOrbit(500.0, 25.0).track()
LIT = TRACK.isel(time=[0, 11, 37, 61, 222])


def random_polyhedron(rng, corners):
    """Corners, and a craft with one face per triangle of their convex hull."""
    points = rng.normal(size=(corners, 3)) * rng.uniform(0.3, 2.0, 3)
    hull = ConvexHull(points)
    faces = []
    for i, (simplex, equation) in enumerate(zip(hull.simplices, hull.equations, strict=True)):
        a, b, c = points[simplex]
        area = 0.5 * float(np.linalg.norm(np.cross(b - a, c - a)))
        faces.append(ef.Face(f"triangle {i}", tuple(equation[:3]), area, COATING))
    return points[hull.vertices], ef.Craft(faces)


def outline_area(points, direction):
    """Area of the shadow of `points` along a unit `direction`."""
    across = reference.unit(np.cross(direction, np.eye(3)[int(np.argmin(np.abs(direction)))]))
    other = np.cross(direction, across)
    return float(ConvexHull(np.stack([points @ across, points @ other], axis=-1)).volume)


def axes_and_law(rng):
    x, y, z, w = Rotation.random(rng=rng).as_quat()
    law = ef.InertialAttitude((w, x, y, z))
    return reference.inertial_axes(1, law.quaternion_wxyz)[0], law


@given(seed=st.integers(0, 2**32 - 1), corners=st.integers(4, 30))
@settings(max_examples=40, deadline=None)
def test_direct_power_is_irradiance_times_projected_area(seed, corners):
    # Energy closure: area-weighted direct flux equals irradiance times projected area.
    rng = np.random.default_rng(seed)
    points, craft = random_polyhedron(rng, corners)
    axes, law = axes_and_law(rng)
    ds = ef.flux(LIT, law, craft, ENVIRONMENT)
    power = ds.solar_flux.values @ ds.area.values
    to_sun = reference.sun_and_discs(LIT.position.values, LIT.sun_direction.values, LIT.sun_distance.values)[0]
    expected = [1361.0 * outline_area(points, axes.T @ direction) for direction in to_sun]
    assert power == pytest.approx(expected, rel=ROUNDING)
    closure = ef.energy_closure(ds)
    assert closure.intercepted_power.values == pytest.approx(expected, rel=ROUNDING)
    assert closure.closure_error.item() < ROUNDING


@pytest.mark.parametrize(
    "law", [ef.NadirPointing(roll_deg=20.0), ef.SunPointing(), ef.Spinning(rate_rpm=0.02, averaged=False)]
)
def test_direct_power_closes_through_eclipse(law):
    rng = np.random.default_rng(5)
    points, craft = random_polyhedron(rng, 12)
    track = ef.UndatedOrbit(500.0, 25.0).track(step_s=20.0)
    ds = ef.flux(track, law, craft, ENVIRONMENT)
    partial = np.flatnonzero((track.sunlit.values > 0.0) & (track.sunlit.values < 1.0))
    chosen = np.concatenate([[0, 40, 80, 120], partial])
    piece = track.isel(time=chosen)
    to_sun, sun, body, apart = reference.sun_and_discs(
        piece.position.values, piece.sun_direction.values, piece.sun_distance.values
    )
    axes = reference.body_axes(law, piece)
    outline = np.array([outline_area(points, m.T @ s) for m, s in zip(axes, to_sun, strict=True)])
    expected = 1361.0 * reference.visible_flat(sun, body, apart) * outline
    power = ds.solar_flux.values[chosen] @ ds.area.values
    assert power == pytest.approx(expected, abs=1e-8 * expected.max())
    assert ef.energy_closure(ds).closure_error.item() < ROUNDING


@pytest.mark.parametrize("seed", range(4))
def test_planet_power_is_radiance_times_projected_area_over_the_disc(seed):
    # Power on a convex body = integral over the planet's disc of radiance times projected area. Rays
    # are laid over the disc; where each meets the ground, the Sun's height there gives the radiance.
    rng = np.random.default_rng(seed)
    points, craft = random_polyhedron(rng, 10)
    axes, law = axes_and_law(rng)
    at = LIT.isel(time=[int(rng.integers(LIT.sizes["time"]))])
    ds = ef.flux(at, law, craft, ENVIRONMENT)
    p = at.position.values[0] / reference.EARTH_RADIUS_KM
    sun = at.sun_direction.values[0]
    H = float(np.linalg.norm(p))
    t, w = np.polynomial.legendre.leggauss(16)
    count = 48
    square = 0.5 * (t + 1.0) / H**2  # sin**2 of the nadir angle: equal steps are equal projected disc
    around = (np.arange(count) + 0.5) * 2.0 * np.pi / count
    down = -p / H
    across = reference.unit(np.cross(down, [0.2, -0.5, 0.8]))
    other = np.cross(down, across)
    infrared = albedo = 0.0
    for s2, weight in zip(square, 0.5 * w / H**2, strict=True):
        cosine, sine = np.sqrt(1.0 - s2), np.sqrt(s2)
        for phi in around:
            ray = cosine * down + sine * (np.cos(phi) * across + np.sin(phi) * other)
            ground = p + ray * (H * cosine - np.sqrt(1.0 - H * H * s2))
            solid_angle = np.pi / count * weight / cosine  # d(sin**2) dphi / (2 cos)
            share = outline_area(points, axes.T @ ray) * solid_angle / np.pi
            infrared += 237.0 * share
            albedo += 0.3 * 1361.0 * max(float(ground @ sun), 0.0) * share
    area = float(ds.area.values.sum())
    assert ds.planetary_ir_flux.values[0] @ ds.area.values == pytest.approx(infrared, abs=SAMPLE * 237.0 * area / H**2)
    assert ds.albedo_flux.values[0] @ ds.area.values == pytest.approx(albedo, abs=SAMPLE * 0.3 * 1361.0 * area / H**2)


def test_mean_over_all_attitudes_is_a_quarter_of_the_area():
    # Cauchy's theorem: the mean projected area of a convex body is a quarter of its surface.
    rng = np.random.default_rng(9)
    _, craft = random_polyhedron(rng, 8)
    noon = TRACK.isel(time=[0])
    # Attitudes spread evenly: a spin about each of many axes, averaged in closed form.
    nodes, weights = np.polynomial.legendre.leggauss(80)
    sun = noon.sun.values[0]
    across = reference.unit(np.cross(sun, [0.3, 0.1, -0.8]))
    total = 0.0
    for cosine, weight in zip(nodes, weights, strict=True):
        axis = cosine * sun + np.sqrt(1.0 - cosine**2) * across
        law = ef.Spinning(axis=(0.2, -0.4, 0.7), about="inertial", direction=tuple(axis), rate_rpm=10.0)
        ds = ef.factors(noon, law, craft, zenith=False)
        total += 0.5 * weight * float(ds.g_sun.values[0] @ ds.area.values)
    # Gauss-Legendre over the corner where the Sun leaves the spin's cone: 1e-4.
    assert total == pytest.approx(0.25 * float(ds.area.sum()), rel=1e-4)


def test_closure_sees_a_face_that_receives_too_much():
    craft = ef.box_craft((1.0, 2.0, 3.0), COATING)
    ds = ef.flux(LIT, ef.NadirPointing(), craft, ENVIRONMENT)
    assert ef.energy_closure(ds).closure_error.item() < ROUNDING
    wrong = ds.copy(deep=True)
    wrong.solar_flux.values[2, 3] += 10.0
    found = ef.energy_closure(wrong)
    largest = float(found.intercepted_power.max())
    assert found.closure_error.item() == pytest.approx(10.0 * 3.0 / largest, rel=1e-9)


def test_closure_in_full_shadow_is_no_division_by_zero():
    dark = TRACK.isel(time=TRACK.sunlit.values == 0.0)
    ds = ef.flux(dark, ef.NadirPointing(), ef.box_craft((1.0, 2.0, 3.0), COATING), ENVIRONMENT)
    assert ef.energy_closure(ds).closure_error.item() == 0.0


def test_closure_is_refused_where_it_means_nothing():
    plate = ef.Craft([ef.Face("plate", "+Z", 1.0, COATING)])
    with pytest.raises(ef.InputError, match="craft is 'open', but it must be closed"):
        ef.energy_closure(ef.flux(LIT, ef.NadirPointing(), plate, ENVIRONMENT))
    box = ef.box_craft((1.0, 1.0, 1.0), COATING)
    averaged = ef.Spinning(rate_rpm=5.0, averaged=True)
    with pytest.raises(ef.InputError, match="attitude is 'averaged over phases'"):
        ef.energy_closure(ef.flux(LIT, averaged, box, ENVIRONMENT))
