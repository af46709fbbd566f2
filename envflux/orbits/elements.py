"""Keplerian elements with secular J2: anomalies, rates, and positions at many times."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from envflux.constants import SECONDS_PER_DAY, TROPICAL_YEAR_DAYS
from envflux.kernels.compiling import compiled
from envflux.planets import EARTH, Planet

Array = NDArray[np.float64]

SUN_SYNCHRONOUS_RATE_RAD_S = 2.0 * math.pi / (TROPICAL_YEAR_DAYS * SECONDS_PER_DAY)


class SecularRates(NamedTuple):
    """First-order secular rates under J2. [rad s-1]."""

    raan_rad_s: float
    arg_perigee_rad_s: float
    mean_anomaly_rad_s: float


class Elements(NamedTuple):
    """Mean Keplerian elements at an epoch, with their rates. Angles in radians."""

    semi_major_axis_km: float
    eccentricity: float
    inclination_rad: float
    raan_rad: float
    arg_perigee_rad: float
    mean_anomaly_rad: float
    rates: SecularRates

    @property
    def nodal_period_s(self) -> float:
        """Time between ascending nodes. [s]."""
        return 2.0 * math.pi / (self.rates.mean_anomaly_rad_s + self.rates.arg_perigee_rad_s)


def mean_motion_rad_s(semi_major_axis_km: float, planet: Planet = EARTH) -> float:
    """Keplerian mean motion. [rad s-1]."""
    return math.sqrt(planet.gm_km3_s2 / semi_major_axis_km**3)


def secular_rates(
    semi_major_axis_km: float, eccentricity: float, inclination_rad: float, *, j2: bool = True, planet: Planet = EARTH
) -> SecularRates:
    """Secular drift of node, perigee and mean anomaly to first order in J2.

    Parameters
    ----------
    semi_major_axis_km : float
        Semi-major axis. [km]
    eccentricity : float
        Eccentricity, 0 to below 1.
    inclination_rad : float
        Inclination. [rad]
    j2 : bool
        False leaves the Keplerian mean motion alone.
    planet : Planet
        Gravity and radius.

    Returns
    -------
    SecularRates
        Rates of RAAN, argument of perigee and mean anomaly. [rad s-1]

    References
    ----------
    Kozai, *Astronomical Journal* 64, 367 (1959); Vallado, *Fundamentals of Astrodynamics and
    Applications*, 4th ed. (2013), section 9.6.1. Both cited from memory.
    """
    n = mean_motion_rad_s(semi_major_axis_km, planet)
    if not j2:
        return SecularRates(0.0, 0.0, n)
    shape = 1.0 - eccentricity**2
    strength = 1.5 * planet.j2 * (planet.radius_km / (semi_major_axis_km * shape)) ** 2 * n
    sine2 = math.sin(inclination_rad) ** 2
    return SecularRates(
        -strength * math.cos(inclination_rad),
        strength * (2.0 - 2.5 * sine2),
        n + 0.5 * strength * math.sqrt(shape) * (2.0 - 3.0 * sine2),
    )


def sun_synchronous_cosine(semi_major_axis_km: float, planet: Planet = EARTH) -> float:
    """Cosine of the inclination at which the node of a circular orbit keeps pace with the mean Sun.

    Below -1 no such orbit exists.
    """
    n = mean_motion_rad_s(semi_major_axis_km, planet)
    return -SUN_SYNCHRONOUS_RATE_RAD_S / (1.5 * planet.j2 * (planet.radius_km / semi_major_axis_km) ** 2 * n)


def sun_synchronous_limit_km(planet: Planet = EARTH) -> float:
    """Semi-major axis above which no circular Sun-synchronous orbit exists. [km]."""
    rate = 1.5 * planet.j2 * planet.radius_km**2 * math.sqrt(planet.gm_km3_s2)
    return float((rate / SUN_SYNCHRONOUS_RATE_RAD_S) ** (2.0 / 7.0))


def mean_from_true(true_anomaly_rad: ArrayLike, eccentricity: float) -> Array:
    """Mean anomaly, in the same revolution as the true anomaly. [rad]."""
    nu = np.asarray(true_anomaly_rad, float)
    turns = np.round(nu / (2.0 * np.pi)) * 2.0 * np.pi
    half = 0.5 * (nu - turns)
    eccentric = 2.0 * np.arctan2(
        math.sqrt(1.0 - eccentricity) * np.sin(half), math.sqrt(1.0 + eccentricity) * np.cos(half)
    )
    return np.asarray(eccentric - eccentricity * np.sin(eccentric) + turns)


def true_from_mean(mean_anomaly_rad: ArrayLike, eccentricity: float) -> Array:
    """Solve Kepler's equation: true anomaly, in the same revolution as the mean anomaly. [rad]."""
    mean = np.asarray(mean_anomaly_rad, float)
    out = np.empty(mean.size)
    _true_anomalies(np.ascontiguousarray(mean).reshape(-1), eccentricity, out)
    return out.reshape(mean.shape)


@compiled
def _eccentric(mean: float, e: float) -> float:
    """Kepler's equation for a mean anomaly in -pi..pi: Newton, held inside a shrinking bracket.

    E lies between M and M + e for M in 0..pi, so the search cannot leave it, at any e below 1.
    """
    sign = 1.0 if mean >= 0.0 else -1.0
    m = abs(mean)
    low, high = m, min(m + e, np.pi)
    x = min(m + 0.85 * e, high)
    for _ in range(60):
        error = x - e * np.sin(x) - m
        if error > 0.0:
            high = x
        else:
            low = x
        step = error / (1.0 - e * np.cos(x))
        following = x - step
        if not low <= following <= high:
            following = 0.5 * (low + high)
        if abs(following - x) <= 4e-16 * (1.0 + x):
            return float(sign * following)
        x = following
    return float(sign * x)


@compiled
def _true_anomalies(mean: Array, e: float, out: Array) -> None:
    for i in range(mean.size):
        turns = np.round(mean[i] / (2.0 * np.pi)) * 2.0 * np.pi
        half = 0.5 * _eccentric(mean[i] - turns, e)
        out[i] = turns + 2.0 * np.arctan2(np.sqrt(1.0 + e) * np.sin(half), np.sqrt(1.0 - e) * np.cos(half))


@compiled
def propagate(
    since_epoch_s: Array,
    elements: tuple[float, float, float, float, float, float],
    rates: tuple[float, float, float],
    gm_km3_s2: float,
    position: Array,
    velocity: Array,
    argument_of_latitude: Array,
) -> None:
    """Positions and velocities on secularly drifting Keplerian elements.

    Parameters
    ----------
    since_epoch_s : numpy.ndarray, shape (n,)
        Time since the epoch of the elements. [s]
    elements : tuple of float
        Semi-major axis [km], eccentricity, inclination, RAAN, argument of perigee, mean anomaly. [rad]
    rates : tuple of float
        Rates of RAAN, argument of perigee and mean anomaly. [rad s-1]
    gm_km3_s2 : float
        Gravitational parameter. [km3 s-2]
    position, velocity : numpy.ndarray, shape (n, 3)
        Filled, in the frame of the elements. The velocity is that of the osculating ellipse. [km, km s-1]
    argument_of_latitude : numpy.ndarray, shape (n,)
        Filled, unwrapped to one revolution about the mean anomaly's. [rad]
    """
    a, e, inclination, raan0, perigee0, mean0 = elements
    raan_rate, perigee_rate, mean_rate = rates
    ci, si = np.cos(inclination), np.sin(inclination)
    root = np.sqrt(1.0 - e * e)
    speed = np.sqrt(gm_km3_s2 / (a * (1.0 - e * e)))
    for i in range(since_epoch_s.size):
        t = since_epoch_s[i]
        mean = (mean0 + mean_rate * t) % (2.0 * np.pi)
        if mean > np.pi:
            mean -= 2.0 * np.pi
        perigee, raan = perigee0 + perigee_rate * t, raan0 + raan_rate * t
        if e > 0.0:
            anomaly = _eccentric(mean, e)
            ce, se = np.cos(anomaly), np.sin(anomaly)
            radius = a * (1.0 - e * ce)
            nu = np.arctan2(root * se, ce - e)
        else:
            radius, nu = a, mean
        u = perigee + nu
        cu, su = np.cos(u), np.sin(u)
        cw, sw = np.cos(perigee), np.sin(perigee)
        co, so = np.cos(raan), np.sin(raan)
        position[i, 0] = radius * (co * cu - so * su * ci)
        position[i, 1] = radius * (so * cu + co * su * ci)
        position[i, 2] = radius * su * si
        along_u, along_v = -speed * (su + e * sw), speed * (cu + e * cw)
        velocity[i, 0] = co * along_u - so * ci * along_v
        velocity[i, 1] = so * along_u + co * ci * along_v
        velocity[i, 2] = si * along_v
        argument_of_latitude[i] = u


def osculating_period_s(position_km: Array, velocity_km_s: Array, planet: Planet = EARTH) -> float:
    """Keplerian period of the ellipse through one state, by the vis-viva equation. [s].

    Returns NaN on an open orbit.
    """
    r, v2 = float(np.linalg.norm(position_km)), float(np.dot(velocity_km_s, velocity_km_s))
    inverse = 2.0 / r - v2 / planet.gm_km3_s2
    return 2.0 * math.pi * math.sqrt((1.0 / inverse) ** 3 / planet.gm_km3_s2) if inverse > 0.0 else math.nan
