"""Timings for `pytest --benchmark-enable tests/benchmarks`; without that flag each runs once, so that none rots."""

import numpy as np
import pytest

import envflux as ef

CRAFT = ef.box_craft((0.8, 0.8, 1.2), ef.Coating(absorptance=0.25, emittance=0.85))
ENVIRONMENT = ef.Environment(albedo=0.3, planetary_ir_w_m2=237.0)
ORBIT = ef.CircularOrbit(560.0, 53.0, 40.0, "2031-03-20T06:00:00Z")


@pytest.fixture(scope="module")
def track():
    return ORBIT.track(revolutions=50)


def test_track(benchmark):
    assert benchmark(ORBIT.track, revolutions=50).sizes["time"] > 12_000


def test_flux_on_one_thread(benchmark, track):
    ds = benchmark(ef.flux, track, ef.NadirPointing(), CRAFT, ENVIRONMENT, threads=1)
    assert ds.solar_flux.shape == (track.sizes["time"], 6)


def test_recombination(benchmark, track):
    factors = ef.factors(track, ef.NadirPointing(), CRAFT)
    assert np.isfinite(benchmark(ef.combine, factors, ENVIRONMENT).absorbed_flux.values).all()


def test_means(benchmark, track):
    ds = ef.flux(track, ef.NadirPointing(), CRAFT, ENVIRONMENT)
    assert benchmark(ef.orbit_mean, ds).sizes["rev"] == 50
