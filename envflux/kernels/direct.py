"""What a plate receives straight from the Sun."""

from __future__ import annotations

import math

from envflux.kernels.compiling import compiled
from envflux.vectors import Array

_DEGREES = 180.0 / math.pi

# A face counts as turned to the Sun from this cosine on: edge-on, rounding must not decide about minutes of Sun.
_TURNED = 1e-9


@compiled
def spin_average(along: float, across: float) -> tuple[float, float]:
    """Mean over a turn of ``max(along + across cos p, 0)``, and the share of the turn where it is positive.

    For a face at angle ``a`` from the spin axis and the Sun at angle ``s`` from it, ``along`` is
    cos a cos s and ``across`` sin a sin s. With the Sun normal to the axis and the face parallel
    to it the mean is 1/pi (Fortescue, Swinerd and Stark, *Spacecraft Systems Engineering*, ch. 11).
    """
    if along >= across:
        return along, 1.0 if along > _TURNED else 0.0
    if along <= -across:
        return 0.0, 0.0
    half = math.acos(-along / across)
    return (along * half + across * math.sin(half)) / math.pi, half / math.pi


@compiled
def sun_factors(
    sun: Array,
    sunlit: Array,
    rotations: Array,
    weights: Array,
    normals: Array,
    spin_axis: Array,
    spin_axis_body: Array,
    g_sun: Array,
    sun_incidence: Array,
    sun_exposure: Array,
) -> None:
    """Fill the direct solar factors for every time and face.

    Parameters
    ----------
    sun : ndarray (time, 3)
        Unit, spacecraft to Sun.
    sunlit : ndarray (time,)
        Visible fraction of the solar disc.
    rotations, weights, normals
        As in `envflux.kernels.planet.planet_factors`.
    spin_axis : ndarray (time, 3) or (0, 3)
        In the frame; without rows the average over phases is the weighted sum. With rows it is
        taken in closed form, since a sum over phases is poor at the corner where the Sun crosses
        the face's plane.
    spin_axis_body : ndarray (3,)
        The same axis in body axes.
    g_sun, sun_incidence, sun_exposure : ndarray (time, face)
        Results; incidence in degrees, of the mean cosine where phases are averaged.
    """
    spinning = spin_axis.shape[0] > 0
    for i in range(sun.shape[0]):
        s0, s1, s2 = sun[i, 0], sun[i, 1], sun[i, 2]
        axis_sun = 0.0
        if spinning:
            axis_sun = spin_axis[i, 0] * s0 + spin_axis[i, 1] * s1 + spin_axis[i, 2] * s2
        for f in range(normals.shape[0]):
            signed, lit, facing = 0.0, 0.0, 0.0
            if spinning:
                axis_face = (
                    spin_axis_body[0] * normals[f, 0]
                    + spin_axis_body[1] * normals[f, 1]
                    + spin_axis_body[2] * normals[f, 2]
                )
                signed = axis_face * axis_sun
                across = math.sqrt(max(0.0, 1.0 - axis_face * axis_face) * max(0.0, 1.0 - axis_sun * axis_sun))
                lit, facing = spin_average(signed, across)
            else:
                for p in range(rotations.shape[1]):
                    m = rotations[i, p]
                    cosine = (
                        (m[0, 0] * s0 + m[1, 0] * s1 + m[2, 0] * s2) * normals[f, 0]
                        + (m[0, 1] * s0 + m[1, 1] * s1 + m[2, 1] * s2) * normals[f, 1]
                        + (m[0, 2] * s0 + m[1, 2] * s1 + m[2, 2] * s2) * normals[f, 2]
                    )
                    signed += weights[p] * cosine
                    if cosine > 0.0:
                        lit += weights[p] * cosine
                    if cosine > _TURNED:
                        facing += weights[p]
            g_sun[i, f] = sunlit[i] * min(lit, 1.0)
            sun_incidence[i, f] = _DEGREES * math.acos(max(-1.0, min(1.0, signed)))
            sun_exposure[i, f] = sunlit[i] * facing
