"""Kepler's equation, J2 rates and Sun-synchronous orbits against published formulas and tables."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from envflux import almanac
from envflux.errors import InputError
from envflux.orbits import CircularOrbit, KeplerOrbit, SunSynchronousOrbit, UndatedOrbit
from envflux.orbits.elements import (
    mean_from_true,
    propagate,
    secular_rates,
    sun_synchronous_limit_km,
    true_from_mean,
)
from envflux.planets import EARTH

EPOCH = "2031-03-20T06:00:00Z"
PER_DAY = math.degrees(1.0) * 86_400.0

# First-order J2 rates, printed to 1e-7 deg/day, for GM 398600.4418, R 6378.137, J2 1.08262668e-3.
RATES = [  # a km, e, inclination deg, node deg/day, perigee deg/day
    (6778.137, 0.0, 51.6, -5.0023223, 3.7412770),
    (6878.137, 0.0, 28.5, -6.7237810, 10.9469623),
    (6978.137, 0.0, 97.79, 0.9859405, -3.3029194),
    (7178.137, 0.0, 98.6, 0.9852937, -2.9261771),
    (26561.760, 0.74, 63.4349, -0.1477184, 0.0000006),
    (42164.170, 0.0, 0.05, -0.0134141, 0.0268281),
]

SUN_SYNCHRONOUS = [  # a km, inclination deg, Keplerian period min: the same source, printed digits
    (6678.137, 96.67201, 90.5196),
    (6778.137, 97.03004, 92.5604),
    (6878.137, 97.40181, 94.6163),
    (6978.137, 97.78767, 96.6872),
    (7078.137, 98.18798, 98.7730),
    (7178.137, 98.60311, 100.8736),
    (7278.137, 99.03343, 102.9888),
    (7378.137, 99.47933, 105.1187),
    (7578.137, 100.41948, 109.4217),
]


@pytest.mark.parametrize(("a", "e", "inclination", "node", "perigee"), RATES)
def test_secular_rates(a, e, inclination, node, perigee):
    rates = secular_rates(a, e, math.radians(inclination))
    assert rates.raan_rad_s * PER_DAY == pytest.approx(node, abs=6e-8)
    assert rates.arg_perigee_rad_s * PER_DAY == pytest.approx(perigee, abs=6e-8)


@pytest.mark.parametrize(("a", "inclination", "minutes"), SUN_SYNCHRONOUS)
def test_sun_synchronous_table(a, inclination, minutes):
    orbit = SunSynchronousOrbit(altitude_km=a - EARTH.radius_km, ltan_hours=10.5, epoch=EPOCH)
    assert orbit.inclination_deg == pytest.approx(inclination, abs=6e-6)
    assert UndatedOrbit(a - EARTH.radius_km, 0).period_s / 60.0 == pytest.approx(minutes, abs=6e-5)


def test_published_sun_synchronous_example():
    """Published: a = 7083.1 km gives 98.208 degrees."""
    orbit = SunSynchronousOrbit(altitude_km=7083.1 - EARTH.radius_km, ltan_hours=12, epoch=EPOCH)
    assert orbit.inclination_deg == pytest.approx(98.208, abs=6e-4)


def test_published_sun_synchronous_limit():
    """Published: cos i = -(a / 12352 km)^3.5."""
    assert sun_synchronous_limit_km() == pytest.approx(12_352.0, abs=1.0)


def test_mean_anomaly_rate_at_known_inclination():
    """At sin^2 i = 2/3 the first-order rate is the Keplerian one (Kozai 1959)."""
    rates = secular_rates(7000.0, 0.01, math.asin(math.sqrt(2.0 / 3.0)))
    assert rates.mean_anomaly_rad_s == pytest.approx(math.sqrt(EARTH.gm_km3_s2 / 7000.0**3), rel=1e-15)


def test_nodal_period_is_the_time_between_nodes():
    orbit = CircularOrbit(altitude_km=560, inclination_deg=53, raan_deg=40, epoch=EPOCH)
    track = orbit.track(revolutions=5, step_s=20)
    turns = np.unwrap(track.argument_of_latitude.values, period=360.0)
    # Angles near 1800 degrees hold 2e-13; the times are rounded to the microsecond, 6e-8 degree.
    assert turns[-1] - turns[0] == pytest.approx(5 * 360.0, abs=2e-7)
    keplerian = 2.0 * math.pi / math.sqrt(EARTH.gm_km3_s2 / (EARTH.radius_km + 560.0) ** 3)
    assert abs(orbit.period_s - keplerian) > 1.0  # J2 shortens it by seconds
    still = CircularOrbit(altitude_km=560, inclination_deg=53, raan_deg=40, epoch=EPOCH, j2=False)
    assert still.period_s == pytest.approx(keplerian, rel=1e-15)


@given(st.floats(-20.0, 20.0), st.floats(0.0, 0.999))
@settings(max_examples=300)
def test_kepler_equation_both_ways(mean, e):
    true = float(true_from_mean(mean, e))
    # Near perigee at high eccentricity an angle of 1e-16 becomes 1e-16 (1 + e)^2 / (1 - e^2)^1.5.
    assert float(mean_from_true(true, e)) == pytest.approx(mean, abs=2e-12)
    assert abs(true - mean) <= math.pi + 1e-12


def test_kepler_equation_worst_corner():
    """e = 0.99 and small anomalies, where plain Newton runs away: residual of Kepler's equation itself."""
    mean = np.concatenate([np.logspace(-12, 0, 400), np.linspace(0.0, np.pi, 400)])
    true = true_from_mean(mean, 0.99)
    eccentric = 2.0 * np.arctan(np.sqrt(0.01 / 1.99) * np.tan(true / 2.0))
    np.testing.assert_allclose(eccentric - 0.99 * np.sin(eccentric), mean, rtol=1e-9, atol=1e-15)


def test_kepler_textbook():
    """Vallado, Fundamentals of Astrodynamics, example 2-1 (from memory): M = 235.4 deg, e = 0.4, E = 220.512 deg."""
    true = float(true_from_mean(math.radians(235.4), 0.4))
    eccentric = 2.0 * math.atan2(math.sqrt(0.6) * math.sin(true / 2), math.sqrt(1.4) * math.cos(true / 2))
    assert math.degrees(eccentric) % 360.0 == pytest.approx(220.512074, abs=2e-6)


@pytest.mark.parametrize("sun", ["mean", "apparent"])
@pytest.mark.parametrize("field", ["ltan_hours", "ltdn_hours"])
def test_local_time_of_the_node(sun, field):
    orbit = SunSynchronousOrbit(altitude_km=650, epoch="2031-11-03T09:17:00Z", sun=sun, **{field: 10.25})
    place = 0.0 if field == "ltan_hours" else 180.0
    start = orbit.model_copy(update={"argument_of_latitude_deg": place})
    found = float(start.track().local_solar_time[0])
    # On 3 November the true Sun is 16.4 minutes ahead of the mean one (Astronomical Almanac, from memory).
    expected = 10.25 if sun == "apparent" else 10.25 + 16.4 / 60.0
    assert found == pytest.approx(expected, abs=1e-6 if sun == "apparent" else 0.2 / 60.0)


def test_the_mean_local_time_stays():
    """A year on the node has turned once with the mean Sun: within 20 s of local time, second-order rates apart."""
    orbit = SunSynchronousOrbit(altitude_km=650, ltan_hours=10.25, epoch="2031-03-20T06:00:00Z")
    later = "2032-03-19T06:00:00Z"
    moment = np.datetime64("2032-03-19T06:00:00", "ns")
    states = orbit._states().at(almanac.tai_from_utc(np.array([moment])))
    frame = almanac.earth_frame(almanac.tai_from_utc(np.array([moment]))).matrix.reshape(3, 3)
    h = frame @ np.cross(states.position[0], states.velocity[0])
    node = math.degrees(math.atan2(h[0], -h[1]))
    mean_sun = almanac.sun_right_ascension_deg(CircularOrbit(500, 0, 0, later).epoch, "mean")
    assert ((node - mean_sun) / 15.0 + 12.0) % 24.0 == pytest.approx(10.25, abs=20.0 / 3600.0)


def test_state_from_textbook_elements():
    """Vallado, Fundamentals of Astrodynamics, example 2-6 (from memory).

    p = 11067.790 km, e = 0.83285, i = 87.87, RAAN 227.89, perigee 53.38, true anomaly 92.335 degrees.
    Printed elements hold the position to about 2 km.
    """
    # Its perigee lies 340 km underground, so no KeplerOrbit may have these elements.
    e = 0.83285
    elements = (
        11067.790 / (1.0 - e**2),
        e,
        *np.radians([87.87, 227.89, 53.38]),
        float(mean_from_true(np.radians(92.335), e)),
    )
    position, velocity, latitude = np.empty((1, 3)), np.empty((1, 3)), np.empty(1)
    propagate(np.zeros(1), elements, (0.0, 0.0, 0.0), EARTH.gm_km3_s2, position, velocity, latitude)
    np.testing.assert_allclose(position[0], [6525.344, 6861.535, 6449.125], rtol=0.0, atol=2.0)
    np.testing.assert_allclose(velocity[0], [4.902276, 5.533124, -1.975709], rtol=0.0, atol=2e-3)
    assert np.degrees(latitude[0]) == pytest.approx(53.38 + 92.335, abs=1e-9)


KEPLER = {"inclination_deg": 51.6, "epoch": EPOCH}


@pytest.mark.parametrize(
    ("build", "message"),
    [
        (lambda: CircularOrbit(99.0, 53, 40, EPOCH), "altitude_km is 99.0, but it must be at least 100 and at most 5"),
        (lambda: CircularOrbit(-5.0, 53, 40, EPOCH), "altitude_km is -5.0, but it must be at least 100"),
        (lambda: CircularOrbit(5e5 + 1, 53, 40, EPOCH), "altitude_km is 500001.0, but it must be at least 100"),
        (lambda: CircularOrbit(float("nan"), 53, 40, EPOCH), "altitude_km is nan, but it must be a finite number"),
        (lambda: CircularOrbit("high", 53, 40, EPOCH), "altitude_km is 'high', but it must be a number"),
        (lambda: CircularOrbit(500, 181, 40, EPOCH), "inclination_deg is 181.* at least 0 and at most 180"),
        (lambda: CircularOrbit(500, 53, 40, "2031-03-20T06:00:00"), "epoch is .*it has no time zone"),
        (lambda: CircularOrbit(500, 53, 40, "yesterday"), "epoch is 'yesterday', but it must be a date and time"),
        (lambda: CircularOrbit(500, 53, 40, "2053-12-01T00:00:00Z"), "epoch is .*between 1900-01-01 and 2053-10-01"),
        (lambda: CircularOrbit(500, 53, 40), "epoch is missing"),
        (lambda: CircularOrbit(altitud_km=500), "altitud_km is 500, .*did you mean 'altitude_km'"),
        (lambda: KeplerOrbit(**KEPLER), "semi_major_axis_km is missing, but it must be given, or both perigee"),
        (lambda: KeplerOrbit(**KEPLER, perigee_altitude_km=500), "apogee_altitude_km is missing, but it must be given"),
        (lambda: KeplerOrbit(**KEPLER, apogee_altitude_km=500), "perigee_altitude_km is missing, but it must be given"),
        (
            lambda: KeplerOrbit(**KEPLER, semi_major_axis_km=7000, apogee_altitude_km=500),
            "semi_major_axis_km is 7000.0, but it must be left out where altitudes are given",
        ),
        (
            lambda: KeplerOrbit(**KEPLER, perigee_altitude_km=600, apogee_altitude_km=500),
            "perigee_altitude_km is 600.0, but it must be at most apogee_altitude_km, 500",
        ),
        (
            lambda: KeplerOrbit(**KEPLER, perigee_altitude_km=600, apogee_altitude_km=700, eccentricity=0.1),
            "eccentricity is 0.1, but it must be left out, or 0.0071",
        ),
        (lambda: KeplerOrbit(**KEPLER, semi_major_axis_km=7000, eccentricity=1.0), "eccentricity is 1.0.*below 1"),
        (lambda: KeplerOrbit(**KEPLER, semi_major_axis_km=7000, eccentricity=-0.1), "eccentricity is -0.1.*at least 0"),
        (
            lambda: KeplerOrbit(**KEPLER, semi_major_axis_km=7000, eccentricity=0.2),
            "semi_major_axis_km is 7000.0, .*at least 8097.671 at this eccentricity: perigee is -778.1",
        ),
        (lambda: KeplerOrbit(**KEPLER, semi_major_axis_km=6400), "semi_major_axis_km is 6400.0.*at least 6478.14"),
        (lambda: KeplerOrbit(**KEPLER, semi_major_axis_km=6e5), "semi_major_axis_km is 600000.0.*at most 506378.137"),
        (
            lambda: KeplerOrbit(**KEPLER, semi_major_axis_km=7000, true_anomaly_deg=1, mean_anomaly_deg=1),
            "mean_anomaly_deg is 1.0, but it must be left out where true_anomaly_deg is given",
        ),
        (lambda: SunSynchronousOrbit(600, epoch=EPOCH), "ltan_hours is missing, but it must be given, or ltdn_hours"),
        (
            lambda: SunSynchronousOrbit(600, ltan_hours=10, ltdn_hours=22, epoch=EPOCH),
            "ltdn_hours is 22.0, but it must be left out where ltan_hours is given",
        ),
        (lambda: SunSynchronousOrbit(600, ltan_hours=24, epoch=EPOCH), "ltan_hours is 24.* at least 0 and below 24"),
        (
            lambda: SunSynchronousOrbit(5975, ltan_hours=10, epoch=EPOCH),
            "altitude_km is 5975.0, but it must be at most 597[34], above which no Sun-synchronous inclination exists",
        ),
        (lambda: UndatedOrbit(600, 90.1), "beta_deg is 90.1.* at least -90 and at most 90"),
        (lambda: UndatedOrbit(600, 0, 0.0), "sun_distance_au is 0.0.* at least 0.1 and at most 50"),
    ],
)
def test_bad_orbits(build, message):
    with pytest.raises(InputError, match=message) as caught:
        build()
    assert "\n" not in str(caught.value)
