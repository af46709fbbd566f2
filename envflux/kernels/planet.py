"""What a plate receives from a spherical planet: emitted and reflected.

Geometry of every integral here. Seen from the spacecraft at distance ``H`` planet radii, directions
to the planet are sorted into *rings* of equal nadir angle. A ring meets the surface at one emission
angle ``e``; with ``X = cos(e)**2`` the solid angle of a ring, weighted by its distance from the
limb, is ``dX / (2 H**2 cos(nadir angle))``, and everything that varies from ring to ring is smooth
in ``X`` up to the corners where the face's plane or the terminator cuts in. Gauss-Legendre nodes in
``X`` are therefore the fewest rings for a given error. Around a ring the integrand is a product of
two cosines, each clipped at zero (sunlit arc and face-visible arc), and is integrated in closed
form; no sine or arccosine of the standard library stands in the loop over rings, so it runs in
vector registers.

Local axes: ``z`` to the planet, ``x`` to the side of the Sun, ``y`` completing (its sign does not
matter: the Sun's side is a plane of symmetry).
"""

from __future__ import annotations

import math

import numpy as np

from envflux.kernels.compiling import compiled, compiled_vectorised
from envflux.vectors import Array

RINGS = 16
"""Rings per integral: worst error 6e-5 of (R/r)**2 between 1.02 and 7 planet radii."""

_nodes, _weights = np.polynomial.legendre.leggauss(RINGS)
_X = 0.5 * (_nodes + 1.0)
_W = 0.5 * _weights

DEGREE = 5
"""Degree (odd) of the polynomial that stands for the zenith-weighted sunlight along a ring."""

_CHEBYSHEV = np.cos(math.pi * (np.arange(DEGREE + 1) + 0.5) / (DEGREE + 1))
_TO_POWERS = np.linalg.inv(np.vander(_CHEBYSHEV, increasing=True))

# Rows of the table that holds what the rings of one instant have in common.
_COS_NADIR, _SIN_NADIR, _SUN_MEAN, _SUN_SWING, _LIT, _COS_LIT, _SIN_LIT, _WEIGHT = range(8)
RING_ROWS = 8

_TWO_PI = 2.0 * math.pi
_DEGREES = 180.0 / math.pi


@compiled
def plate_to_sphere(cos_tilt: float, H: float) -> float:
    """View factor from a plate element to a sphere.

    Parameters
    ----------
    cos_tilt : float
        Cosine of the angle between the plate's normal and the direction to the sphere's centre.
    H : float
        Distance of the plate from the sphere's centre, in sphere radii; above 1.

    Returns
    -------
    float
        Fraction of the plate's diffuse emission that meets the sphere: whole disc in view, cut by
        the plate's own plane, or hidden.

    References
    ----------
    Chung and Sumitra, J. Heat Transfer 94 (1972) 328; Juul, J. Heat Transfer 101 (1979) 558; listed
    in Howell, *A Catalog of Radiation Heat Transfer Configuration Factors*, section B.
    """
    inverse = 1.0 / (H * H)
    sin_tilt = math.sqrt(max(0.0, 1.0 - cos_tilt * cos_tilt))
    s = math.sqrt(H * H - 1.0)
    if cos_tilt * s >= sin_tilt:
        return cos_tilt * inverse
    if cos_tilt * s <= -sin_tilt:
        return 0.0
    x = -s * cos_tilt / sin_tilt
    y = sin_tilt * math.sqrt(1.0 - x * x)
    # Just before the sphere sets behind the plate the terms cancel, and rounding could leave less than nothing.
    return max(0.0, (cos_tilt * inverse * math.acos(x) - s * inverse * y + math.atan(y / s)) / math.pi)


@compiled_vectorised
def _arccos(x: float) -> float:
    """Arccosine to 2.2e-8 rad.

    Abramowitz and Stegun, *Handbook of Mathematical Functions*, 4.4.46 (from memory; the error is measured in a test).
    """
    y = abs(x)
    p = -0.0012624911 * y + 0.0066700901
    p = p * y - 0.0170881256
    p = p * y + 0.0308918810
    p = p * y - 0.0501743046
    p = p * y + 0.0889789874
    p = p * y - 0.2145988016
    p = p * y + 1.5707963050
    p = p * math.sqrt(1.0 - y)
    return p if x >= 0.0 else math.pi - p


@compiled_vectorised
def prepare_rings(H: float, cos_zenith: float, rings: Array) -> None:
    """Fill `rings` (RING_ROWS, RINGS) for a distance and a solar zenith angle at the sub-point."""
    sin_zenith = math.sqrt(max(0.0, 1.0 - cos_zenith * cos_zenith))
    inverse = 1.0 / (H * H)
    for k in range(RINGS):
        cos_emission = math.sqrt(_X[k])
        sin_emission = math.sqrt(1.0 - _X[k])
        cos_nadir = math.sqrt(1.0 - (1.0 - _X[k]) * inverse)
        # Angle at the planet's centre between the sub-point and the ring: emission less nadir angle.
        cos_central = cos_emission * cos_nadir + (1.0 - _X[k]) / H
        sin_central = sin_emission * (cos_nadir - cos_emission / H)
        mean = cos_zenith * cos_central
        swing = sin_zenith * sin_central
        cos_lit = -mean / max(swing, 1e-300)
        cos_lit = -1.0 if cos_lit < -1.0 else cos_lit
        cos_lit = 1.0 if cos_lit > 1.0 else cos_lit
        rings[_COS_NADIR, k] = cos_nadir
        rings[_SIN_NADIR, k] = sin_emission / H
        rings[_SUN_MEAN, k] = mean
        rings[_SUN_SWING, k] = swing
        rings[_LIT, k] = _arccos(cos_lit)
        rings[_COS_LIT, k] = cos_lit
        rings[_SIN_LIT, k] = math.sqrt(1.0 - cos_lit * cos_lit)
        rings[_WEIGHT, k] = _W[k] * 0.5 * inverse / (cos_nadir * math.pi)


@compiled_vectorised
def _antiderivative(
    p: float, c: float, s: float, mean: float, swing: float, up: float, ahead: float, aside: float
) -> float:
    """Integral over p of (mean + swing cos p)(up + ahead cos p + aside sin p), with c, s = cos p, sin p."""
    half = 0.5 * swing * ahead
    return (mean * up + half) * p + (mean * ahead + swing * up + half * c) * s - aside * c * (mean + 0.5 * swing * c)


@compiled_vectorised
def _antiderivative_by_zenith(
    p: float, c: float, s: float, sunlight: Array, k: int, up: float, ahead: float, aside: float
) -> float:
    """As `_antiderivative`, with the weighted sunlight given as a polynomial in cos p, column k of `sunlight`."""
    even, odd, power = p, s, 1.0
    total = 0.0
    for j in range(0, DEGREE + 1, 2):
        # even, odd: integrals of cos**j and cos**(j + 1), each from the one two steps before.
        q0 = sunlight[j, k]
        q1 = sunlight[j + 1, k]
        total += q0 * (up * even + ahead * odd - aside * power * c / (j + 1))
        power = power * c
        even = (power * s + (j + 1) * even) / (j + 2)
        total += q1 * (up * odd + ahead * even - aside * power * c / (j + 2))
        power = power * c
        odd = (power * s + (j + 2) * odd) / (j + 3)
    return total


@compiled_vectorised
def reflected(nx: float, ny: float, nz: float, rings: Array, sunlight: Array | None) -> float:
    """Albedo factor of a plate: flux per unit albedo and irradiance, Lambertian planet.

    Parameters
    ----------
    nx, ny, nz : float
        The plate's normal in local axes (see the module's text).
    rings : ndarray (RING_ROWS, RINGS)
        From `prepare_rings`.
    sunlight : ndarray (DEGREE + 1, RINGS), optional
        From `prepare_zenith`: each planet element is weighted with `zenith_increment`.
    """
    horizontal = math.sqrt(nx * nx + ny * ny)
    level = horizontal < 1e-14
    cos_d = 1.0 if level else nx / horizontal
    sin_d = 0.0 if level else abs(ny) / horizontal
    d = math.atan2(sin_d, cos_d)
    slope = -nz / max(horizontal, 1e-30)
    total = 0.0
    for k in range(RINGS):
        cos_nadir = rings[_COS_NADIR, k]
        sin_nadir = rings[_SIN_NADIR, k]
        lit = rings[_LIT, k]
        cos_lit = rings[_COS_LIT, k]
        sin_lit = rings[_SIN_LIT, k]
        # Half the arc on which the plate sees the ring, centred on the plate's azimuth d.
        cos_seen = slope * cos_nadir / sin_nadir
        cos_seen = -1.0 if cos_seen < -1.0 else cos_seen
        cos_seen = 1.0 if cos_seen > 1.0 else cos_seen
        seen = _arccos(cos_seen)
        sin_seen = math.sqrt(1.0 - cos_seen * cos_seen)
        first, last = d - seen, d + seen
        cos_first, sin_first = cos_d * cos_seen + sin_d * sin_seen, sin_d * cos_seen - cos_d * sin_seen
        cos_last, sin_last = cos_d * cos_seen - sin_d * sin_seen, sin_d * cos_seen + cos_d * sin_seen
        # Sunlit arc is -lit..lit. The two arcs meet once here, and once more across the far side.
        by_sun = -lit > first
        lo = -lit if by_sun else first
        cos_lo = cos_lit if by_sun else cos_first
        sin_lo = -sin_lit if by_sun else sin_first
        by_sun = lit < last
        hi = lit if by_sun else last
        cos_hi = cos_lit if by_sun else cos_last
        sin_hi = sin_lit if by_sun else sin_last
        near = 1.0 if hi > lo else 0.0
        far = 1.0 if last > _TWO_PI - lit else 0.0
        # On the ring the plate's cosine is up + ahead cos p + aside sin p.
        up = nz * cos_nadir
        ahead = sin_nadir * horizontal * cos_d
        aside = sin_nadir * horizontal * sin_d
        if sunlight is not None:
            value = near * (
                _antiderivative_by_zenith(hi, cos_hi, sin_hi, sunlight, k, up, ahead, aside)
                - _antiderivative_by_zenith(lo, cos_lo, sin_lo, sunlight, k, up, ahead, aside)
            ) + far * (
                _antiderivative_by_zenith(last, cos_last, sin_last, sunlight, k, up, ahead, aside)
                - _antiderivative_by_zenith(_TWO_PI - lit, cos_lit, -sin_lit, sunlight, k, up, ahead, aside)
            )
        else:
            mean = rings[_SUN_MEAN, k]
            swing = rings[_SUN_SWING, k]
            value = near * (
                _antiderivative(hi, cos_hi, sin_hi, mean, swing, up, ahead, aside)
                - _antiderivative(lo, cos_lo, sin_lo, mean, swing, up, ahead, aside)
            ) + far * (
                _antiderivative(last, cos_last, sin_last, mean, swing, up, ahead, aside)
                - _antiderivative(_TWO_PI - lit, cos_lit, -sin_lit, mean, swing, up, ahead, aside)
            )
        total += rings[_WEIGHT, k] * value
    return total


@compiled_vectorised
def reflected_to_whole(rings: Array, sunlight: Array | None) -> tuple[float, float]:
    """Albedo factors, along local x and z, of plates that see the whole disc.

    They are linear in the normal: nx times the first plus nz times the second. Arguments as in `reflected`.
    """
    along, up = 0.0, 0.0
    for k in range(RINGS):
        lit = rings[_LIT, k]
        cos_lit = rings[_COS_LIT, k]
        sin_lit = rings[_SIN_LIT, k]
        cos_nadir = rings[_COS_NADIR, k]
        sin_nadir = rings[_SIN_NADIR, k]
        weight = 2.0 * rings[_WEIGHT, k]  # both halves of the sunlit arc are alike
        if sunlight is not None:
            along += weight * _antiderivative_by_zenith(lit, cos_lit, sin_lit, sunlight, k, 0.0, sin_nadir, 0.0)
            up += weight * _antiderivative_by_zenith(lit, cos_lit, sin_lit, sunlight, k, cos_nadir, 0.0, 0.0)
        else:
            mean = rings[_SUN_MEAN, k]
            swing = rings[_SUN_SWING, k]
            along += weight * _antiderivative(lit, cos_lit, sin_lit, mean, swing, 0.0, sin_nadir, 0.0)
            up += weight * _antiderivative(lit, cos_lit, sin_lit, mean, swing, cos_nadir, 0.0, 0.0)
    return along, up


@compiled_vectorised
def zenith_increment(theta_deg: float) -> float:
    """Rise of the albedo with the local solar zenith angle, NASA/TM-2001-211221, fitted to 65 deg."""
    return theta_deg * (1.3798e-3 + theta_deg * (-2.1793e-5 + theta_deg * (6.0372e-8 + theta_deg * 4.9115e-9)))


@compiled_vectorised
def prepare_zenith(rings: Array, sunlight: Array) -> None:
    """Fill `sunlight`: for each ring, sunlight times `zenith_increment` as a polynomial in the azimuth's cosine.

    It interpolates at Chebyshev nodes of the sunlit part. Where that part is short it is continued
    past the terminator, on which the product is smooth, since a short interval makes the
    coefficients large and their sum inexact.
    """
    for k in range(RINGS):
        mean = rings[_SUN_MEAN, k]
        swing = rings[_SUN_SWING, k]
        start = min(rings[_COS_LIT, k], 0.5)
        middle = 0.5 * (1.0 + start)
        half = 0.5 * (1.0 - start)
        for j in range(DEGREE + 1):
            sunlight[j, k] = 0.0
        for i in range(DEGREE + 1):
            cos_sun = mean + swing * (middle + half * _CHEBYSHEV[i])
            cos_sun = 1.0 if cos_sun > 1.0 else cos_sun
            cos_sun = -1.0 if cos_sun < -1.0 else cos_sun
            value = cos_sun * zenith_increment(_DEGREES * _arccos(cos_sun))
            for j in range(DEGREE + 1):
                sunlight[j, k] += _TO_POWERS[j, i] * value
        # From powers of (cos p - middle) / half to powers of cos p.
        scale = 1.0
        for j in range(1, DEGREE + 1):
            scale = scale / half
            sunlight[j, k] *= scale
        for j in range(DEGREE):
            for i in range(DEGREE - 1, j - 1, -1):
                sunlight[i, k] -= middle * sunlight[i + 1, k]


@compiled
def planet_factors(
    position: Array,
    sun_direction: Array,
    rotations: Array,
    weights: Array,
    normals: Array,
    radius_km: float,
    g_albedo: Array,
    g_ir: Array,
    g_zenith: Array | None,
) -> None:
    """Fill the planet's factors for every time and face.

    Parameters
    ----------
    position : ndarray (time, 3)
        Planet-centred, km.
    sun_direction : ndarray (time, 3)
        Unit, planet to Sun, in the frame of `position`.
    rotations : ndarray (time, phase, 3, 3)
        Body to frame; factors are averaged over ``phase`` with `weights` (phase,).
    normals : ndarray (face, 3)
        Unit, body axes.
    radius_km : float
        Radius of the sphere that albedo and infrared leave.
    g_albedo, g_ir, g_zenith : ndarray (time, face)
        Results. Without a `g_zenith` its part is not even compiled.
    """
    rings = np.empty((RING_ROWS, RINGS))
    sunlight = np.empty((DEGREE + 1, RINGS))
    whole = np.zeros((2, 2))
    x = np.empty(3)
    for i in range(position.shape[0]):
        r = math.sqrt(position[i, 0] ** 2 + position[i, 1] ** 2 + position[i, 2] ** 2)
        H = r / radius_km
        z0, z1, z2 = -position[i, 0] / r, -position[i, 1] / r, -position[i, 2] / r
        s0, s1, s2 = sun_direction[i, 0], sun_direction[i, 1], sun_direction[i, 2]
        cos_zenith = -(s0 * z0 + s1 * z1 + s2 * z2)
        _toward_sun(s0, s1, s2, z0, z1, z2, x)
        y0, y1, y2 = z1 * x[2] - z2 * x[1], z2 * x[0] - z0 * x[2], z0 * x[1] - z1 * x[0]
        sin_disc = 1.0 / H
        cos_disc = math.sqrt(1.0 - sin_disc * sin_disc)
        lit = cos_zenith > -cos_disc
        whole_known = False
        if lit:
            prepare_rings(H, cos_zenith, rings)
            if g_zenith is not None:
                prepare_zenith(rings, sunlight)
        for f in range(normals.shape[0]):
            infrared, albedo, zenith = 0.0, 0.0, 0.0
            for p in range(rotations.shape[1]):
                m = rotations[i, p]
                n0 = m[0, 0] * normals[f, 0] + m[0, 1] * normals[f, 1] + m[0, 2] * normals[f, 2]
                n1 = m[1, 0] * normals[f, 0] + m[1, 1] * normals[f, 1] + m[1, 2] * normals[f, 2]
                n2 = m[2, 0] * normals[f, 0] + m[2, 1] * normals[f, 1] + m[2, 2] * normals[f, 2]
                nx = n0 * x[0] + n1 * x[1] + n2 * x[2]
                ny = n0 * y0 + n1 * y1 + n2 * y2
                nz = n0 * z0 + n1 * z1 + n2 * z2
                horizontal = math.sqrt(nx * nx + ny * ny)
                if nz * cos_disc <= -horizontal * sin_disc:
                    continue  # the planet is behind the face
                infrared += weights[p] * plate_to_sphere(max(-1.0, min(1.0, nz)), H)
                if not lit:
                    continue
                if nz * cos_disc < horizontal * sin_disc:
                    albedo += weights[p] * reflected(nx, ny, nz, rings, None)
                    if g_zenith is not None:
                        zenith += weights[p] * reflected(nx, ny, nz, rings, sunlight)
                    continue
                # The whole disc is in view: the factor is linear in the normal, and one vector
                # integral (no part of it along y) serves every such face of this instant.
                if not whole_known:
                    whole[0, 0], whole[0, 1] = reflected_to_whole(rings, None)
                    if g_zenith is not None:
                        whole[1, 0], whole[1, 1] = reflected_to_whole(rings, sunlight)
                    whole_known = True
                albedo += weights[p] * (nx * whole[0, 0] + nz * whole[0, 1])
                zenith += weights[p] * (nx * whole[1, 0] + nz * whole[1, 1])
            g_albedo[i, f] = max(albedo, 0.0)
            g_ir[i, f] = infrared
            if g_zenith is not None:
                g_zenith[i, f] = max(zenith, 0.0)


@compiled
def _toward_sun(s0: float, s1: float, s2: float, z0: float, z1: float, z2: float, x: Array) -> None:
    """The unit horizontal direction to the Sun's side; any horizontal one where the Sun is overhead."""
    x[0], x[1], x[2] = s0, s1, s2
    # Twice: with the Sun all but overhead, what the first pass leaves is mostly rounding, and not level.
    if _make_level(z0, z1, z2, x) < 1e-12 or _make_level(z0, z1, z2, x) < 0.5:
        steep = abs(z0) < 0.6
        x[0], x[1], x[2] = 1.0 if steep else 0.0, 0.0 if steep else 1.0, 0.0
        _make_level(z0, z1, z2, x)


@compiled
def _make_level(z0: float, z1: float, z2: float, x: Array) -> float:
    """Take from `x` its part along the unit vector z, and scale the rest to length 1; the length it had."""
    height = x[0] * z0 + x[1] * z1 + x[2] * z2
    x[0] -= height * z0
    x[1] -= height * z1
    x[2] -= height * z2
    length = math.sqrt(x[0] ** 2 + x[1] ** 2 + x[2] ** 2)
    if length > 0.0:
        x[0] /= length
        x[1] /= length
        x[2] /= length
    return length
