"""Compiled kernels, and the slow reference integration, against published tables and against each other."""

from __future__ import annotations

import csv
import math
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import reference_integration as reference
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

from envflux.environments import albedo_zenith_increment
from envflux.kernels import planet
from envflux.kernels.direct import spin_average, sun_factors
from envflux.kernels.planet import planet_factors, plate_to_sphere, zenith_increment
from envflux.shadows import visible_fraction

DATA = Path(__file__).parent / "data"

# The accuracy asked of each component at each sample: 0.1 % of the most it can be, which for albedo and
# infrared factors is (R/r)**2 (a plate that looks straight down; Howell's catalogue).
SAMPLE = 1e-3
# What the kernels are built for, and their text says: 6e-5 of (R/r)**2.
BUILT_FOR = 6e-5
# To which the yardstick itself has to be converged for a check at 0.1 %.
CONVERGED = 1e-6
# Half a unit in the last printed digit of the tables.
PRINTED_7 = 5.1e-8
PRINTED_10 = 5.1e-11


def rows(name):
    with (DATA / f"{name}.csv").open(newline="", encoding="utf-8") as file:
        return list(csv.DictReader(file))


def kernel_factors(positions, suns, normals, radius_km=1.0):
    """(albedo, zenith-weighted, infrared) of plates at different places: one time and face each."""
    n = len(positions)
    out = np.empty((3, n))
    for i in range(n):
        albedo, infrared, zenith = (np.empty((1, 1)) for _ in range(3))
        planet_factors(
            np.ascontiguousarray(positions[i : i + 1]),
            np.ascontiguousarray(suns[i : i + 1]),
            np.eye(3)[None, None],
            np.ones(1),
            np.ascontiguousarray(normals[i : i + 1]),
            radius_km,
            albedo,
            infrared,
            zenith,
        )
        out[:, i] = albedo[0, 0], zenith[0, 0], infrared[0, 0]
    return out


def random_plates(seed, count):
    """Plates from 200 to 36 000 km, half of them where the integrals are hardest.

    Hard: the terminator within the seen cap, the planet's limb across the plate's plane, or both, or
    the Sun so near the zenith that its azimuth is ill-defined.
    """
    rng = np.random.default_rng(seed)
    H = 1.0 + 10.0 ** rng.uniform(math.log10(200.0 / 6378.137), math.log10(36000.0 / 6378.137), count)
    up, sun, normal = (reference.unit(rng.normal(size=(count, 3))) for _ in range(3))
    side, other = (reference.unit(np.cross(up, rng.normal(size=(count, 3)))) for _ in range(2))
    kind = rng.integers(0, 8, count)[:, None]
    cap, disc = np.arccos(1.0 / H)[:, None], np.arcsin(1.0 / H)[:, None]
    near = 0.5 * np.pi + rng.uniform(-1.0, 1.0, (count, 1)) * cap
    sun = np.where((kind == 1) | (kind == 3), np.cos(near) * up + np.sin(near) * side, sun)
    tilt = 0.5 * np.pi + rng.uniform(-1.0, 1.0, (count, 1)) * disc
    normal = np.where((kind == 2) | (kind == 3), -np.cos(tilt) * up + np.sin(tilt) * other, normal)
    sun = np.where(kind == 4, reference.unit(up + 10.0 ** rng.uniform(-14.0, -1.0, (count, 1)) * side), sun)
    return up * H[:, None], sun, normal, H


# -------------------------------------------------------------------------------- the yardstick itself


def test_reference_meets_the_view_factor_table():
    # Howell's catalogue; Chung and Sumitra 1972, Juul 1979 (tests/data/README.md).
    for row in rows("view_factor_plate_sphere"):
        H, tilt = float(row["H_r_over_R"]), math.radians(float(row["tilt_deg_normal_from_nadir"]))
        normal = [math.sin(tilt), 0.0, -math.cos(tilt)]
        found = reference.planet_factors([0.0, 0.0, H], [0.3, 0.5, 0.2], normal, 1.0)[2, 0]
        assert found == pytest.approx(float(row["F_closed_form"]), abs=CONVERGED / H**2), row


def albedo_table_plate(row):
    zenith = math.radians(float(row["solar_zenith_at_subsatellite_deg"]))
    tilt = math.radians(float(row["tilt_deg_normal_from_nadir"]))
    azimuth = math.radians(float(row["azimuth_of_normal_from_sun_side_deg"]))
    return (
        np.array([[0.0, 0.0, float(row["H_r_over_R"])]]),
        np.array([[math.sin(zenith), 0.0, math.cos(zenith)]]),
        np.array([[math.sin(tilt) * math.cos(azimuth), math.sin(tilt) * math.sin(azimuth), -math.cos(tilt)]]),
    )


PLATES = [row for row in rows("albedo_geometry_factor") if row["shape"] == "plate"]
# The table's own two quadratures differ by up to one unit in the last digit.
TABLE_OF_ALBEDO = 1.1e-7


@pytest.mark.parametrize("row", PLATES)
def test_reference_meets_the_albedo_table(row):
    found = reference.planet_factors(*albedo_table_plate(row), 1.0)[0, 0]
    assert found == pytest.approx(float(row["factor_surface_quadrature"]), abs=TABLE_OF_ALBEDO)


def test_reference_is_converged():
    position, sun, normal, H = random_plates(11, 150)
    once = reference.planet_factors(position, sun, normal, 1.0)
    twice = reference.planet_factors(position, sun, normal, 1.0, nodes=2 * reference.NODES)
    assert np.abs((once - twice) * H**2).max() < CONVERGED


def test_reference_discs_meet_the_table():
    # Montenbruck and Gill, Satellite Orbits (2000), 3.4.2.
    for row in rows("sun_disc_visible_fraction"):
        sun, body, apart = (
            math.radians(float(row[name])) for name in ("sun_ang_radius_deg", "body_ang_radius_deg", "separation_deg")
        )
        assert reference.visible_flat(sun, body, apart)[0] == pytest.approx(float(row["visible_fraction"]), abs=6e-9)


# --------------------------------------------------------------------------------- kernels: the planet


def test_plate_to_sphere_meets_the_table():
    # Howell's catalogue; Chung and Sumitra 1972, Juul 1979 (tests/data/README.md).
    for row in rows("view_factor_plate_sphere"):
        tilt = math.radians(float(row["tilt_deg_normal_from_nadir"]))
        found = plate_to_sphere(math.cos(tilt), float(row["H_r_over_R"]))
        assert found == pytest.approx(float(row["F_closed_form"]), abs=1e-11), row


@pytest.mark.parametrize("row", PLATES)
def test_albedo_meets_the_table(row):
    position, sun, normal = albedo_table_plate(row)
    H = float(row["H_r_over_R"])
    found = kernel_factors(position, sun, normal)[0, 0]
    assert found == pytest.approx(float(row["factor_surface_quadrature"]), abs=BUILT_FOR / H**2)


def test_every_component_meets_the_reference():
    position, sun, normal, H = random_plates(12, 1500)
    error = (kernel_factors(position, sun, normal) - reference.planet_factors(position, sun, normal, 1.0)) * H**2
    worst = np.abs(error).max(axis=1)
    assert worst[0] < BUILT_FOR, "albedo"
    assert worst[1] < BUILT_FOR, "zenith-weighted albedo"
    assert worst[2] < CONVERGED, "infrared"
    assert BUILT_FOR < SAMPLE


@pytest.mark.parametrize("gap", [1e-15, 1e-13, 1e-11, 1e-9, 1e-7, 1e-5, 1e-3])
@pytest.mark.parametrize("overhead", [1.0, -1.0])
def test_sun_in_line_with_the_planet_is_no_special_case(gap, overhead):
    # Azimuth of the Sun is undefined there, the flux is not: it may change only as the Sun moves.
    rng = np.random.default_rng(5)
    count = 20
    up, normal = reference.unit(rng.normal(size=(count, 3))), reference.unit(rng.normal(size=(count, 3)))
    side = reference.unit(np.cross(up, rng.normal(size=(count, 3))))
    position = 1.1 * up
    exact = kernel_factors(position, overhead * up, normal)
    near = kernel_factors(position, reference.unit(overhead * up + gap * side), normal)
    assert np.abs(exact - near).max() < gap + BUILT_FOR
    assert overhead > 0.0 or not near[:2].any()


def test_no_reflected_light_before_the_terminator_rises():
    # The cap that the craft sees reaches acos(R/r) from the sub-point: with the Sun further below the
    # horizon there than that, no lit ground is in view.
    for H in (1.03, 1.1, 2.0, 6.6):
        cap = math.acos(1.0 / H)
        for beyond, expected in ((1e-6, False), (-0.3 * cap, True)):
            zenith = 0.5 * math.pi + cap + beyond
            sun = np.array([[math.sin(zenith), 0.0, math.cos(zenith)]])
            down = np.array([[0.1, 0.0, -1.0]]) / math.sqrt(1.01)
            found = kernel_factors(np.array([[0.0, 0.0, H]]), sun, down)
            assert bool(found[0, 0] > 0.0) is expected
            assert bool(found[1, 0] > 0.0) is expected


def test_reflected_light_never_leaves_the_possible():
    position, sun, normal, H = random_plates(13, 3000)
    albedo, zenith, infrared = kernel_factors(position, sun, normal)
    assert (albedo >= 0.0).all()
    assert (zenith >= 0.0).all()
    # Reflected sunlight cannot exceed what a planet in full light would send; the zenith increment is
    # largest, 0.3139, at 90 degrees (NASA/TM-2001-211221).
    assert (albedo <= infrared + BUILT_FOR / H**2).all()
    assert (zenith <= 0.3139133 * albedo + BUILT_FOR / H**2).all()


def test_zenith_increment_meets_the_published_polynomial():
    # NASA/TM-2001-211221, printed to 1e-6; kept in two places, kernel and environment.
    for row in rows("albedo_zenith_correction"):
        theta, expected = float(row["solar_zenith_deg"]), float(row["albedo_increment"])
        assert zenith_increment(theta) == pytest.approx(expected, abs=5.1e-7)
        assert float(albedo_zenith_increment(theta)) == pytest.approx(zenith_increment(theta), abs=1e-15)


@given(seed=st.integers(0, 2**32 - 1))
@settings(max_examples=25, deadline=None)
def test_planet_factors_do_not_depend_on_the_frame(seed):
    position, sun, normal, H = random_plates(seed, 8)
    turn = Rotation.random(rng=np.random.default_rng(seed)).as_matrix()
    before = kernel_factors(position, sun, normal)
    after = kernel_factors(position @ turn.T, sun @ turn.T, normal @ turn.T)
    # Rounding moves the arcs' ends by 1e-8 where they open like a square root.
    assert np.abs((before - after) * H**2).max() < 1e-6


def test_phases_are_a_weighted_sum():
    position, sun, normal, _ = random_plates(14, 1)
    turns = Rotation.random(4, rng=np.random.default_rng(1)).as_matrix()
    weights = np.array([0.1, 0.2, 0.3, 0.4])
    averaged = [np.empty((1, 1)) for _ in range(3)]
    planet_factors(position, sun, turns[None], weights, normal, 1.0, *averaged)
    single = np.array([kernel_factors(position, sun, (m @ normal[0])[None])[:, 0] for m in turns])
    expected = weights @ single
    found = [averaged[0][0, 0], averaged[2][0, 0], averaged[1][0, 0]]
    assert found == pytest.approx(list(expected), abs=1e-14)


def test_small_sphere_and_cylinder_from_plates():
    # A sphere is plates in all directions, a cylinder's side plates about its axis; Howell's catalogue.
    nodes, weights = np.polynomial.legendre.leggauss(200)
    for row in rows("view_factor_simple_shapes"):
        H, expected = float(row["H_r_over_R"]), float(row["F"])
        if row["shape"] == "sphere":
            found = 0.5 * sum(w * plate_to_sphere(c, H) for c, w in zip(nodes, weights, strict=True))
            assert found == pytest.approx(expected, abs=2e-7), row
            continue
        angle = math.radians(float(row["axis_angle_from_nadir_deg"]))
        around = (np.arange(4000) + 0.5) * 2.0 * math.pi / 4000
        found = float(np.mean([plate_to_sphere(math.sin(angle) * math.cos(p), H) for p in around]))
        assert found == pytest.approx(expected, abs=3e-8), row  # the table is good to 2e-8


def test_albedo_on_a_small_sphere_meets_the_table():
    # Mean over all directions of a plate's factor, by product quadrature; tests/data/README.md.
    nodes, weights = np.polynomial.legendre.leggauss(48)
    around = (np.arange(48) + 0.5) * 2.0 * math.pi / 48
    cosine, azimuth = (a.ravel() for a in np.meshgrid(nodes, around, indexing="ij"))
    sine = np.sqrt(1.0 - cosine**2)
    normal = np.stack([sine * np.cos(azimuth), sine * np.sin(azimuth), cosine], axis=-1)
    share = np.repeat(weights, 48) / 96.0
    for row in (row for row in rows("albedo_geometry_factor") if row["shape"] == "sphere"):
        H, zenith = float(row["H_r_over_R"]), math.radians(float(row["solar_zenith_at_subsatellite_deg"]))
        sun = np.array([math.sin(zenith), 0.0, math.cos(zenith)])
        found = (
            kernel_factors(np.tile([0.0, 0.0, H], (len(normal), 1)), np.tile(sun, (len(normal), 1)), normal)[0] @ share
        )
        assert found == pytest.approx(float(row["factor_surface_quadrature"]), abs=BUILT_FOR / H**2), row


# --------------------------------------------------------------------------------- kernels: the Sun


@given(along=st.floats(-1.0, 1.0), across=st.floats(0.0, 1.0))
@settings(max_examples=200, deadline=None)
def test_spin_average_is_the_average(along, across):
    mean, share = spin_average(along, across)
    # Exact integral over the lit arc by Gauss-Legendre; the arc from bisection, not from an arccosine.
    low, high = 0.0, math.pi
    for _ in range(80):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if along + across * math.cos(middle) > 0.0 else (low, middle)
    t, w = np.polynomial.legendre.leggauss(40)
    p = 0.5 * low * (t + 1.0)
    assert mean == pytest.approx(0.5 * low * float(w @ (along + across * np.cos(p))) / math.pi, abs=1e-12)
    if across > 1e-9:
        assert share == pytest.approx(low / math.pi, abs=1e-6)


@pytest.mark.parametrize("psi_deg", [0.0, 10.0, 45.0, 80.0, 90.0, 135.0, 180.0])
def test_side_of_a_spinning_prism_receives_sin_psi_over_pi(psi_deg):
    # Fortescue, Swinerd and Stark, Spacecraft Systems Engineering, ch. 11; tests/data/shape_mean_solar.csv.
    psi = math.radians(psi_deg)
    sun = np.array([[math.sin(psi), 0.0, math.cos(psi)]])
    side, cap = np.array([1.0, 0.0, 0.0]), np.array([0.0, 0.0, 1.0])
    out = [np.empty((1, 2)) for _ in range(3)]
    turns = Rotation.from_rotvec(np.outer(np.arange(37) * 2.0 * np.pi / 37, cap)).as_matrix()[None]
    sun_factors(sun, np.ones(1), turns, np.full(37, 1.0 / 37), np.array([side, cap]), cap[None], cap, *out)
    assert out[0][0, 0] == pytest.approx(math.sin(psi) / math.pi, abs=1e-15)
    assert out[0][0, 1] == pytest.approx(max(math.cos(psi), 0.0), abs=1e-15)


def test_visible_fraction_meets_strips_of_the_flat_discs():
    rng = np.random.default_rng(3)
    sun = np.radians(rng.uniform(0.26, 0.272, 400))
    body = np.arcsin(1.0 / (1.0 + 10.0 ** rng.uniform(-2.0, 0.76, 400)))
    apart = body + rng.uniform(-1.1, 1.1, 400) * sun
    expected = reference.visible_flat(sun, body, apart)
    assert visible_fraction(apart, sun, body) == pytest.approx(expected, abs=1e-8)


def test_flat_discs_stay_within_the_accuracy_asked_of_the_exact_share():
    rng = np.random.default_rng(4)
    sun = np.radians(rng.uniform(0.26, 0.272, 2000))
    body = np.arcsin(1.0 / (1.0 + 10.0 ** rng.uniform(math.log10(200.0 / 6378.137), 0.76, 2000)))
    apart = body + rng.uniform(-1.0, 1.0, 2000) * sun
    error = visible_fraction(apart, sun, body) - reference.visible_round(sun, body, apart)
    assert np.abs(error).max() < SAMPLE


# ------------------------------------------------------------------------------- kernels: compilation


def test_kernels_compile_where_nothing_can_be_written(tmp_path):
    # Site-packages and the home folder may both be read-only: the cache then goes to a temporary folder.
    program = (
        "import numba, os\n"
        "os.access = lambda path, mode, **k: False\n"
        "from envflux.kernels.planet import plate_to_sphere\n"
        "assert numba.config.CACHE_DIR, 'no cache folder chosen'\n"
        "assert abs(plate_to_sphere(1.0, 2.0) - 0.25) < 1e-15\n"
    )
    environment = {**os.environ, "TMPDIR": str(tmp_path)}
    environment.pop("NUMBA_CACHE_DIR", None)
    done = subprocess.run([sys.executable, "-c", program], env=environment, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr


def test_polynomial_arccosine_is_as_good_as_published():
    # Abramowitz and Stegun 4.4.46 states 2e-8, to one digit (from memory); 2.18e-8 is found.
    x = np.concatenate([np.linspace(-1.0, 1.0, 20_001), 1.0 - np.logspace(-16, -2, 200)])
    error = np.array([planet._arccos(value) for value in x]) - np.arccos(x)
    assert np.abs(error).max() < 2.3e-8
