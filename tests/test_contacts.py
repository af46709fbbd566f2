"""Eclipses: the disc overlap, published figures, and contacts against independent root-finding."""

from itertools import pairwise

import erfa
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq, minimize_scalar

from envflux import almanac
from envflux.constants import AU_KM, SUN_RADIUS_KM
from envflux.errors import InputError
from envflux.orbits import CircularOrbit, KeplerOrbit, TleOrbit, UndatedOrbit, eclipses, track_from_arrays
from envflux.planets import EARTH
from envflux.schema import CONTACTS
from envflux.shadows import Shadow, visible_fraction

CYLINDER = Shadow(kind="cylinder")
# Contacts are promised to 0.01 s; a heating analysis needs 0.05 s.
CONTACT_S = 0.01
# The integral of sunlight over a revolution holds to this share of the revolution.
INTEGRAL_SHARE = 1e-4


# -- overlap of two discs -----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("sun_deg", "body_deg", "separation_deg", "fraction"),
    [  # Montenbruck and Gill 3.4.2 (planar overlap), computed with numeric chord integrals; eight decimals
        (0.26645, 70.2, 70.2, 0.50040272),
        (0.26645, 70.2, 70.3, 0.73351304),
        (0.26645, 70.2, 70.0, 0.07200656),
        (0.26645, 8.7, 8.7, 0.50324964),
        (0.26645, 8.7, 8.9, 0.92903142),
        (0.2666, 0.25, 0.1, 0.29348636),
    ],
)
def test_disc_overlap_table(sun_deg, body_deg, separation_deg, fraction):
    found = visible_fraction(*np.radians([separation_deg, sun_deg, body_deg]))
    assert float(found) == pytest.approx(fraction, abs=6e-9)


@given(
    st.floats(0.001, 0.02), st.floats(0.0005, 1.3), st.floats(0.0, 1.0)
)  # Sun as seen from 0.2 to 5 au, bodies from a speck to the horizon of a low orbit
@settings(max_examples=60, deadline=None)
def test_disc_overlap_against_chords(sun, body, share):
    """The same area by adding up chords: no arc functions of angles, no cancellation."""
    separation = max(body - sun, 0.0) + share * (body + sun - max(body - sun, 0.0))
    # Along the line of centres, from the body's: chords of the Sun up to where the rims cross, then of the body.
    crossing = (separation**2 + body**2 - sun**2) / (2.0 * separation) if separation > 0.0 else -body
    crossing = min(max(crossing, separation - sun, -body), body)
    covered = chords(max(separation - sun, -body), crossing, separation, sun) + chords(crossing, body, 0.0, body)
    # The cosine below makes the square-root ends smooth: what is left is rounding over a small Sun.
    assert float(visible_fraction(separation, sun, body)) == pytest.approx(1.0 - covered / (np.pi * sun**2), abs=1e-10)


def chords(start, end, centre, radius):
    """Area of a disc between two lines across it."""
    nodes, weights = np.polynomial.legendre.leggauss(400)
    angle = 0.5 * np.pi * (nodes + 1.0)
    at = 0.5 * (start + end) - 0.5 * (end - start) * np.cos(angle)
    height = np.sqrt(np.clip((radius - (at - centre)) * (radius + (at - centre)), 0.0, None))
    return float(np.sum(weights * 0.5 * np.pi * 2.0 * height * 0.5 * (end - start) * np.sin(angle)))


def test_disc_overlap_limits_and_nan():
    assert visible_fraction(0.5, 0.004, 0.4) == 1.0
    assert visible_fraction(0.3, 0.004, 0.4) == 0.0
    assert visible_fraction(0.0, 0.004, 0.002) == pytest.approx(0.75, abs=1e-15)  # annular
    found = visible_fraction([np.nan, 0.5], 0.004, 0.4)
    assert np.isnan(found[0])
    assert found[1] == 1.0
    assert visible_fraction(np.empty((0, 2)), 0.004, 0.4).shape == (0, 2)


def test_disc_overlap_is_smooth_and_falls_steadily():
    separation = np.linspace(1.22 - 0.0046, 1.22 + 0.0046, 20_001)
    assert (np.diff(visible_fraction(separation, 0.00465, 1.22)) > -1e-15).all()


# -- published figures ----------------------------------------------------------------------------------

ECLIPSES = [  # altitude km, beta deg, cylinder min, umbra min, first to last penumbra contact min; computed two
    # ways, by shadow cones and by apparent radii, for R = 6378.137 km, 1 au, Sun radius 695 700 km
    (400, 0, 36.10778, 35.97202, 36.24605),
    (500, 0, 35.75375, 35.61498, 35.89510),
    (600, 0, 35.48771, 35.34590, 35.63215),
    (800, 0, 35.13295, 34.98500, 35.28364),
    (1000, 0, 34.93537, 34.78119, 35.09240),
    (35786, 0, 69.41378, 67.30746, 71.55907),
    (400, 30, 34.45081, 34.29050, 34.61398),
    (400, 60, 24.37380, 24.02508, 24.72570),
    (500, 45, 30.50782, 30.29303, 30.72601),
    (600, 66, 2.22360, 0.00000, 4.99968),
    (800, 60, 13.12947, 12.45245, 13.78826),
    (35786, 8, 27.37694, 21.43904, 32.46393),
]


@pytest.mark.parametrize(("altitude_km", "beta_deg", "cylinder", "umbra", "penumbra"), ECLIPSES)
def test_circular_eclipse_table(altitude_km, beta_deg, cylinder, umbra, penumbra):
    orbit = UndatedOrbit(altitude_km, beta_deg)
    # Printed to 1e-5 min; both contacts are within 5e-5 s.
    row = eclipses(orbit.track()).isel(eclipse=0)
    assert float(row.umbra_duration_s) / 60.0 == pytest.approx(umbra, abs=1e-5)
    assert float(row.penumbra_duration_s) / 60.0 == pytest.approx(penumbra, abs=1e-5)
    # The closed form of the cylinder knows no distance of the Sun.
    row = eclipses(orbit.track(shadow=CYLINDER)).isel(eclipse=0)
    assert float(row.umbra_duration_s) / 60.0 == pytest.approx(cylinder, abs=1e-5)


@pytest.mark.parametrize(("altitude_km", "beta_star_deg"), [(400, 70.21793), (600, 66.06653), (35786, 8.70049)])
def test_cylinder_ends_at_the_published_beta(altitude_km, beta_star_deg):
    """asin(R / (R + h)), published to five decimals."""
    for offset, count in ((-1e-4, 1), (1e-4, 0)):
        track = UndatedOrbit(altitude_km, beta_star_deg + offset).track(shadow=CYLINDER)
        assert eclipses(track).sizes["eclipse"] == count


def test_class_example():
    """Published class notes: 10 000 km, equatorial at equinox, 44.27 min (R = 6378, mu = 3.986e5, angle rounded)."""
    row = eclipses(UndatedOrbit(10_000, 0).track(shadow=CYLINDER))
    assert float(row.umbra_duration_s[0]) / 60.0 == pytest.approx(44.27, abs=0.02)


# -- contacts against an independent search ---------------------------------------------------------------


def discs(position, sun_direction, sun_distance_au):
    """Separation and apparent radii the plain way."""
    to_sun = np.asarray(sun_direction) * sun_distance_au * AU_KM - position
    r, d = np.linalg.norm(position), np.linalg.norm(to_sun)
    separation = np.arccos(-np.dot(position, to_sun) / (r * d))
    return separation, np.arcsin(SUN_RADIUS_KM / d), np.arcsin(EARTH.radius_km / r)


def contacts_by_search(state, span_s, count=4000):
    """Edges of penumbra and umbra by a dense scan and Brent's method on t -> (position, direction, distance)."""

    def height(t, level):
        c, a, b = discs(*state(t))
        return c - b - level * a

    grid = np.linspace(0.0, span_s, count)
    separation, sun, body = np.array([discs(*state(t)) for t in grid]).T
    found = []
    for level, entry, leave in ((1, 1, 4), (-1, 2, 3)):
        values = separation - body - level * sun
        extra = []
        for i in np.flatnonzero((values[1:-1] <= values[:-2]) & (values[1:-1] < values[2:]) & (values[1:-1] > 0)) + 1:
            best = minimize_scalar(height, bounds=(grid[i - 1], grid[i + 1]), args=(level,), method="bounded",
                                   options={"xatol": 1e-4})  # fmt: skip
            if best.fun < 0.0:
                extra.append((best.x, best.fun))
        nodes = sorted([*zip(grid, values, strict=True), *extra])
        for (t0, v0), (t1, v1) in pairwise(nodes):
            if (v0 < 0.0) != (v1 < 0.0):
                found.append((brentq(height, t0, t1, args=(level,), xtol=1e-7), leave if v0 < 0.0 else entry))
    return sorted(found)


def assert_same_contacts(track, expected):
    marked = track["contact"].values > 0
    assert track["contact"].values[marked].tolist() == [kind for _, kind in expected]
    np.testing.assert_allclose(track["elapsed"].values[marked], [t for t, _ in expected], rtol=0.0, atol=CONTACT_S)


def undated_state(altitude_km, beta_deg):
    radius = EARTH.radius_km + altitude_km
    rate = np.sqrt(EARTH.gm_km3_s2 / radius**3)
    beta = np.radians(beta_deg)
    sun = np.array([np.cos(beta), 0.0, np.sin(beta)])
    return lambda t: (radius * np.array([np.cos(rate * t), np.sin(rate * t), 0.0]), sun, 1.0)


# Around the onset: at 600 km penumbra begins below about 66.33 deg, umbra below about 65.80 deg.
@pytest.mark.parametrize(
    ("altitude_km", "beta_deg"),
    [(600, 66.3), (600, 66.332), (600, 65.8), (600, -65.79), (600, 12.3), (35786, 8.9), (35786, 8.41), (400, -70.4)],
)
def test_contacts_near_the_onset_beta(altitude_km, beta_deg):
    orbit = UndatedOrbit(altitude_km, beta_deg)
    expected = contacts_by_search(undated_state(altitude_km, beta_deg), orbit.period_s)
    assert_same_contacts(orbit.track(), expected)


def test_penumbra_only_eclipses_of_any_length_are_found():
    """Down to a graze of seconds: the onset beta is where the gap equals the Sun's radius at midnight."""
    radius = EARTH.radius_km + 600.0

    def least(beta):
        c, a, b = discs(np.array([-radius, 0.0, 0.0]), [np.cos(beta), 0.0, np.sin(beta)], 1.0)
        return c - a - b

    onset = np.degrees(brentq(least, 1.0, 1.3, xtol=1e-14))
    lengths = []
    for below in (1e-2, 1e-4, 1e-6, 1e-7):
        track = UndatedOrbit(600, onset - below).track()
        table = eclipses(track)
        assert table.sizes["eclipse"] == 1
        assert float(table.umbra_duration_s[0]) == 0.0
        assert bool(np.isnat(table.umbra_entry.values[0]))
        lengths.append(float(table.penumbra_duration_s[0]))
        assert track.sunlit.values.min() < 1.0
    assert lengths == sorted(lengths, reverse=True)
    assert lengths[-1] < 2.0
    assert eclipses(UndatedOrbit(600, onset + 1e-7).track()).sizes["eclipse"] == 0


def dated_state(orbit, start, j2_rates=True):
    """Positions and Sun by another road: pyerfa's frame and Earth theory, Kepler by plain fixed-point Newton."""
    a = orbit._elements()
    epoch_jd = 2440587.5 + almanac.tai_from_instant(orbit.epoch) / 86_400e6 + 32.184 / 86_400.0
    start_jd = 2440587.5 + almanac.tai_from_instant(start) / 86_400e6 + 32.184 / 86_400.0
    # A day turns the frame by 0.15 arcsec, 30 m at GEO or 0.01 s; it turns evenly to 1e-3 arcsec.
    first, second = erfa.pnm06a(start_jd, 0.0), erfa.pnm06a(start_jd + 1.0, 0.0)

    def state(t):
        since = (start_jd - epoch_jd) * 86_400.0 + t
        mean = a.mean_anomaly_rad + a.rates.mean_anomaly_rad_s * since
        anomaly = mean
        for _ in range(200):
            step = (anomaly - a.eccentricity * np.sin(anomaly) - mean) / (1 - a.eccentricity * np.cos(anomaly))
            anomaly -= np.clip(step, -0.5, 0.5)
        w = a.arg_perigee_rad + a.rates.arg_perigee_rad_s * since
        node = a.raan_rad + a.rates.raan_rad_s * since
        flat = a.semi_major_axis_km * np.array(
            [np.cos(anomaly) - a.eccentricity, np.sqrt(1 - a.eccentricity**2) * np.sin(anomaly), 0.0]
        )
        turn = lambda x: np.array([[np.cos(x), -np.sin(x), 0], [np.sin(x), np.cos(x), 0], [0, 0, 1]])  # noqa: E731 # short
        ci, si = np.cos(a.inclination_rad), np.sin(a.inclination_rad)
        tilt = np.array([[1, 0, 0], [0, ci, -si], [0, si, ci]])
        matrix = first + (second - first) * t / 86_400.0
        position = matrix.T @ turn(node) @ tilt @ turn(w) @ flat
        helio, bary = erfa.epv00(start_jd, t / 86_400.0)
        distance = np.linalg.norm(helio["p"])
        velocity = bary["v"] * (AU_KM / 299_792.458 / 86_400.0)
        direction = erfa.ab(-helio["p"] / distance, velocity, distance, np.sqrt(1 - velocity @ velocity))
        return position, direction, distance

    return state


ORBITS = {
    "low": CircularOrbit(560, 53, 40, "2031-03-20T06:00:00Z"),
    "eccentric": KeplerOrbit(
        perigee_altitude_km=250,
        apogee_altitude_km=35700,
        inclination_deg=27.3,
        raan_deg=170,
        arg_perigee_deg=178,
        true_anomaly_deg=31,
        epoch="2030-10-05T03:00:00Z",
    ),
    "critical": KeplerOrbit(
        semi_major_axis_km=26561.76,
        eccentricity=0.74,
        inclination_deg=63.4349,
        raan_deg=60,
        arg_perigee_deg=270,
        mean_anomaly_deg=11,
        epoch="2029-12-11T15:00:00Z",
    ),
    "geostationary": CircularOrbit(35786, 0.03, 77, "2031-03-18T02:00:00Z"),
}


@pytest.mark.parametrize("name", ORBITS)
def test_contacts_of_dated_orbits_by_another_road(name):
    orbit = ORBITS[name]
    track = orbit.track(revolutions=1.3)
    expected = contacts_by_search(dated_state(orbit, orbit.epoch), 1.3 * orbit.period_s, 800)
    assert expected  # an orbit without an eclipse would show nothing
    assert_same_contacts(track, expected)


def test_the_list_of_a_track_from_arrays_is_that_of_the_orbit():
    """A cubic through samples a minute apart leaves 1e-3 km on a low orbit (h^4/384 of the fourth derivative)."""
    track = ORBITS["low"].track(revolutions=3)
    regular = track.isel(time=np.arange(0, track.sizes["time"], 2))
    again = eclipses(track_from_arrays(regular.time, regular.position, regular.velocity))
    told = eclipses(track)
    for name in ("penumbra_entry", "umbra_entry", "umbra_exit", "penumbra_exit"):
        difference = (again[name] - told[name]).values / np.timedelta64(1, "s")
        np.testing.assert_allclose(difference, 0.0, atol=CONTACT_S)
    np.testing.assert_array_equal(again.complete, told.complete)


def test_contacts_do_not_depend_on_the_step():
    orbit = ORBITS["eccentric"]
    coarse, fine = (eclipses(orbit.track(step_s=orbit.period_s / n)) for n in (72, 1000))
    np.testing.assert_array_equal(coarse.penumbra_entry, fine.penumbra_entry)
    np.testing.assert_array_equal(coarse.umbra_exit, fine.umbra_exit)


@pytest.mark.parametrize("beta_deg", [0.0, 40.0, 65.7, 65.9, 66.2, 66.33])
def test_sunlight_integral(beta_deg):
    """Trapezoid on the track's own samples against 100 000 even ones."""
    orbit = UndatedOrbit(600, beta_deg)
    track = orbit.track()
    found = np.trapezoid(track.sunlit, track.elapsed) / orbit.period_s
    state = undated_state(600, beta_deg)
    times = (np.arange(100_000) + 0.5) / 100_000 * orbit.period_s
    angles = np.array([discs(*state(t)) for t in times[45_000:55_000]]) if beta_deg > 65 else np.array(
        [discs(*state(t)) for t in times[30_000:70_000:4]]
    )  # fmt: skip
    share = 10_000 / 100_000 if beta_deg > 65 else 40_000 / 100_000
    expected = 1.0 - share + share * np.mean(visible_fraction(angles[:, 0], angles[:, 1], angles[:, 2]))
    assert found == pytest.approx(expected, abs=INTEGRAL_SHARE)


def test_sunlit_is_full_and_nil_at_the_contacts():
    track = ORBITS["low"].track(revolutions=2)
    for name, value in (("penumbra_entry", 1.0), ("umbra_entry", 0.0), ("umbra_exit", 0.0), ("penumbra_exit", 1.0)):
        assert (track.sunlit.values[track.contact.values == CONTACTS[name]] == value).all()


def test_cylinder_integral_is_exact():
    track = UndatedOrbit(600, 0).track(shadow=CYLINDER)
    dark = 1.0 - np.trapezoid(track.sunlit, track.elapsed) / float(track.orbital_period)
    # Published closed form 0.36703630; half a millisecond is lost at each edge.
    assert dark == pytest.approx(0.36703630, abs=3e-7)


# -- tracks that begin or end in shadow -------------------------------------------------------------------


def test_an_eclipse_cut_by_the_ends_is_marked():
    orbit = UndatedOrbit(600, 0)
    track = orbit.track(duration_s=orbit.period_s * 0.5)
    row = eclipses(track).isel(eclipse=0)
    assert row.complete == 0
    assert np.isnat(row.umbra_exit.values)
    assert np.isnat(row.penumbra_exit.values)
    assert not np.isnat(row.umbra_entry.values)
    assert np.isnan(row.umbra_duration_s)
    assert np.isnan(row.penumbra_duration_s)


def test_a_track_that_begins_in_umbra():
    orbit = ORBITS["low"]
    first = eclipses(orbit.track())
    middle = first.umbra_entry.values[0] + (first.umbra_exit.values[0] - first.umbra_entry.values[0]) // 2
    track = orbit.track(start=middle, revolutions=1)
    table = eclipses(track)
    assert table.sizes["eclipse"] == 2
    assert np.isnat(table.umbra_entry.values[0])
    # The same contact found from another start: positions have the same bits, the search its own brackets.
    assert abs(table.umbra_exit.values[0] - first.umbra_exit.values[0]) < np.timedelta64(100, "us")
    assert table.complete.values.tolist() == [0, 0]


def test_a_track_wholly_in_umbra_is_one_open_eclipse():
    orbit = ORBITS["low"]
    first = eclipses(orbit.track())
    track = orbit.track(start=first.umbra_entry.values[0] + np.timedelta64(60, "s"), duration_s=300)
    table = eclipses(track)
    assert (track.sunlit == 0.0).all()
    assert table.sizes["eclipse"] == 1
    assert table.complete.values.tolist() == [0]


def test_a_sunlit_track_has_no_eclipse():
    assert eclipses(UndatedOrbit(600, 80).track()).sizes["eclipse"] == 0


def test_eclipses_of_a_cylinder_repeat():
    table = eclipses(ORBITS["low"].track(revolutions=3, shadow=CYLINDER))
    assert table.complete.values.tolist() == [1, 1, 1]
    assert (table.umbra_duration_s == table.penumbra_duration_s).all()


def test_eclipses_refuses_what_is_no_track():
    with pytest.raises(InputError, match="track is a Dataset without position"):
        eclipses(UndatedOrbit(600, 0).track().drop_vars("position"))


# -- the planet's shape and air ---------------------------------------------------------------------------


def test_oblate_cylinder_touches_the_ellipsoid():
    """At each edge the line to the Sun is tangent to the flattened Earth: its discriminant is zero."""
    orbit = CircularOrbit(700, 98, 100, "2031-06-20T00:00:00Z")
    track = orbit.track(shadow=Shadow(kind="cylinder", oblate=True))
    edges = track.isel(time=track.contact.values > 0)
    assert edges.sizes["time"] == 2
    times = almanac.tai_from_utc(edges.time.values)
    rotation = almanac.earth_frame(times).matrix.reshape(-1, 3, 3)
    scale = np.array([1.0, 1.0, 1.0 / (1.0 - EARTH.flattening)]) / EARTH.radius_km
    r = np.einsum("nij,nj->ni", rotation, edges.position.values) * scale
    s = np.einsum("nij,nj->ni", rotation, edges.sun_direction.values) * scale
    rs, ss, rr = (np.einsum("ni,ni->n", *pair) for pair in ((r, s), (s, s), (r, r)))
    # Closest approach to the unit sphere; 1e-4 s of motion is 1e-7 of a radius.
    np.testing.assert_allclose(np.sqrt(rr - rs**2 / ss), 1.0, rtol=0.0, atol=2e-7)
    round_edges = orbit.track(shadow=CYLINDER)
    shift = edges.elapsed.values - round_edges.elapsed.values[round_edges.contact.values > 0]
    assert np.abs(shift).max() > 0.5  # 21 km of flattening are seconds of motion


def test_atmosphere_is_a_larger_planet():
    thick = eclipses(UndatedOrbit(600, 0).track(shadow=Shadow(atmosphere_km=50.0, kind="cylinder")))
    half = np.arcsin((EARTH.radius_km + 50.0) / (EARTH.radius_km + 600.0))
    assert float(thick.umbra_duration_s[0]) == pytest.approx(half / np.pi * UndatedOrbit(600, 0).period_s, abs=1e-3)


def test_oblate_needs_a_date():
    with pytest.raises(InputError, match=r"shadow\.oblate is True, but it must be false"):
        UndatedOrbit(600, 0).track(shadow=Shadow(oblate=True))


@pytest.mark.parametrize(
    ("bad", "message"),
    [
        ({"kind": "cone"}, "kind is 'cone', but it must be 'discs' or 'cylinder'"),
        ({"atmosphere_km": -1.0}, "atmosphere_km is -1.0, but it must be at least 0 and at most 100"),
    ],
)
def test_bad_shadows(bad, message):
    with pytest.raises(InputError, match=message):
        Shadow(**bad)


@given(st.floats(200.0, 40_000.0), st.floats(-90.0, 90.0))
@settings(max_examples=40, deadline=None)
def test_contacts_come_in_order_and_sunlight_agrees(altitude_km, beta_deg):
    track = UndatedOrbit(altitude_km, beta_deg).track()
    kinds = track.contact.values[track.contact.values > 0].tolist()
    assert kinds in ([], [1, 4], [1, 2, 3, 4])
    assert (np.diff(track.elapsed) > 0).all()
    # The second half mirrors the first: what is seen at t after noon is seen at t before it. Contacts are
    # 5e-5 s off at most, of a penumbra of 7 s or more.
    mirrored = np.interp(track.elapsed.values[-1] - track.elapsed.values, track.elapsed.values, track.sunlit.values)
    np.testing.assert_allclose(track.sunlit.values, mirrored, rtol=0.0, atol=1e-3)


def test_tle_contacts_are_flagged():
    line1 = "1 00005U 58002B   00179.78495062  .00000023  00000-0  28098-4 0  4753"
    line2 = "2 00005  34.2682 348.7242 1859667 331.7664  19.3264 10.82419157413667"
    track = TleOrbit(line1, line2).track(revolutions=2)
    for kind in (1, 2, 3, 4):
        rows = track.isel(time=track.contact.values == kind)
        assert rows.sizes["time"] == 2
        for i in range(2):
            one = rows.isel(time=i)
            c, a, b = discs(one.position.values, one.sun_direction.values, float(one.sun_distance))
            # 0.01 s of motion at 1e-3 rad/s
            assert c - b - (a if kind in (1, 4) else -a) == pytest.approx(0.0, abs=1e-5)
