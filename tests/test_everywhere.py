"""Every law on every kind of orbit, at the edges of what is accepted: finite, ordered, never less than nothing."""

import warnings

import numpy as np
import pytest

import envflux as ef
from envflux import schema

EPOCH = "2026-03-20T14:46:00Z"  # an equinox, to the minute

ORBITS = {
    "lowest": ef.UndatedOrbit(100.0, 0.0),
    "highest": ef.UndatedOrbit(500_000.0, 30.0),
    "Sun on the orbit normal": ef.UndatedOrbit(560.0, 90.0, 0.9833),
    "Sun against the orbit normal": ef.UndatedOrbit(35_786.0, -90.0),
    "penumbra only": ef.UndatedOrbit(560.0, 66.9),
    "equatorial": ef.CircularOrbit(560.0, 0.0, 77.0, EPOCH),
    "polar": ef.CircularOrbit(1336.0, 90.0, 10.0, EPOCH),
    "backwards over the equator": ef.CircularOrbit(20_200.0, 180.0, 0.0, EPOCH),
    "almost round": ef.KeplerOrbit(semi_major_axis_km=7000.0, eccentricity=1e-9, inclination_deg=30.0, epoch=EPOCH),
    "just even in true anomaly": ef.KeplerOrbit(
        semi_major_axis_km=7500.0, eccentricity=0.0501, inclination_deg=120.0, arg_perigee_deg=200.0, epoch=EPOCH
    ),
    "almost open": ef.KeplerOrbit(
        perigee_altitude_km=300.0,
        apogee_altitude_km=440_000.0,
        inclination_deg=28.0,
        mean_anomaly_deg=-3.0,
        epoch=EPOCH,
    ),
    "first year of the ephemeris": ef.SunSynchronousOrbit(600.0, 6.0, epoch="1900-03-01T00:00:00Z", sun="apparent"),
    "last year of the ephemeris": ef.SunSynchronousOrbit(600.0, ltdn_hours=23.9, epoch="2053-09-01T00:00:00Z"),
}

LAWS = {
    "nadir": ef.NadirPointing(10.0, 20.0, 30.0),
    "inertial": ef.InertialAttitude((1.0, 2.0, 3.0, 4.0)),
    "sun": ef.SunPointing(),
    "sun, nadir": ef.SunPointing("-X", "nadir", "+Z"),
    "sun, velocity": ef.SunPointing((1.0, 1.0, 0.0), "velocity", "+Z"),
    "spin in space": ef.Spinning("+Z", "inertial", 500.0),
    "spin about the Sun": ef.Spinning((1.0, 1.0, 1.0), "sun", -300.0),
    "spin about the normal": ef.Spinning("-Y", "orbit normal", 200.0, phase_deg=30.0),
}

CELLS = ef.Coating(0.9, 0.8, electrical_extraction=0.2)
CRAFT = ef.Craft(
    [
        *(ef.Face(f"face {i}", n, 1.0, ef.Coating(0.3, 0.8)) for i, n in enumerate(np.eye(3) - 0.3)),
        ef.Face("wing", (0.0, 0.0, -2.0), 1.0, CELLS, back=ef.Coating(0.3, 0.9)),
    ]
)

ENVIRONMENT = ef.Environment(albedo=0.2, planetary_ir_w_m2=237.0, zenith_correction="element")


@pytest.mark.parametrize("name", ORBITS)
def test_nothing_is_missing_or_negative(name):
    orbit = ORBITS[name]
    for request in (
        {},
        {"revolutions": 0.3},
        {"duration_s": 1.0},
        {"revolutions": 2.5, "step_s": orbit.period_s / 100},
    ):
        track = orbit.track(**request)
        assert (np.diff(track.time.values).astype(np.int64) > 0).all()
        assert np.abs(np.linalg.norm(track.sun_direction, axis=1) - 1.0).max() < 1e-12
        for variable in track.variables.values():
            assert variable.dtype.kind != "f" or np.isfinite(variable.values).all(), variable
        ef.eclipses(track)
        for law in LAWS.values():
            with warnings.catch_warnings():
                warnings.simplefilter("ignore", ef.EnvfluxWarning)
                ds = ef.flux(track, law, CRAFT, ENVIRONMENT)
            for flux in (*schema.FLUXES, "sun_incidence", "sun_exposure"):
                values = ds[flux].values
                assert np.isfinite(values).all(), (flux, law)
                assert (values >= 0.0).all(), (flux, law)
            if track.elapsed[-1] >= orbit.period_s:
                means = ef.orbit_mean(ds)
                assert np.isfinite(means.absorbed_flux.values).all()
                assert (means.sunlit.values <= 1.0).all()
