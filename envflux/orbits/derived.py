"""What follows from a state: altitude, beta, angles along the orbit, sub-point. Filled in place."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from envflux.constants import AU_KM
from envflux.kernels.compiling import compiled
from envflux.orbits.states import State
from envflux.planets import EARTH
from envflux.vectors import dot, norm, perpendicular

Array = NDArray[np.float64]

# Below this sine of the angle between Sun and orbit normal, orbit noon has no direction of its own.
_NO_NOON = 1e-8
# Below this sine of the inclination, the ascending node has none.
_NO_NODE = 1e-12


@compiled
def _follow(
    position: Array,
    velocity: Array,
    sun_direction: Array,
    sun_distance: Array,
    radius_km: float,
    altitude: Array,
    beta: Array,
    orbit_angle: Array,
    sun: Array,
) -> None:
    degree = 180.0 / np.pi
    for i in range(altitude.size):
        rx, ry, rz = position[i, 0], position[i, 1], position[i, 2]
        vx, vy, vz = velocity[i, 0], velocity[i, 1], velocity[i, 2]
        sx, sy, sz = sun_direction[i, 0], sun_direction[i, 1], sun_direction[i, 2]
        altitude[i] = np.sqrt(rx * rx + ry * ry + rz * rz) - radius_km
        hx, hy, hz = ry * vz - rz * vy, rz * vx - rx * vz, rx * vy - ry * vx
        h = np.sqrt(hx * hx + hy * hy + hz * hz)
        hx, hy, hz = hx / h, hy / h, hz / h
        height = hx * sx + hy * sy + hz * sz
        px, py, pz = sx - height * hx, sy - height * hy, sz - height * hz  # toward orbit noon
        across = np.sqrt(px * px + py * py + pz * pz)
        beta[i] = np.arctan2(height, across) * degree
        if across > _NO_NOON:
            qx, qy, qz = hy * pz - hz * py, hz * px - hx * pz, hx * py - hy * px  # a quarter turn on
            angle = np.arctan2(rx * qx + ry * qy + rz * qz, rx * px + ry * py + rz * pz) * degree
            orbit_angle[i] = angle if angle >= 0.0 else angle + 360.0
            if orbit_angle[i] >= 360.0:
                orbit_angle[i] = 0.0
        else:
            orbit_angle[i] = np.nan
        distance = sun_distance[i] * AU_KM
        ux, uy, uz = sx * distance - rx, sy * distance - ry, sz * distance - rz
        length = np.sqrt(ux * ux + uy * uy + uz * uz)
        sun[i, 0], sun[i, 1], sun[i, 2] = ux / length, uy / length, uz / length


@compiled
def _under(
    position: Array,
    velocity: Array,
    sun_direction: Array,
    matrix: Array,
    gast_rad: Array,
    latitude: Array,
    longitude: Array,
    local_solar_time: Array,
    argument_of_latitude: Array,
) -> None:
    degree = 180.0 / np.pi
    for i in range(latitude.size):
        m = matrix[i]
        r, v, s = position[i], velocity[i], sun_direction[i]
        x = m[0] * r[0] + m[1] * r[1] + m[2] * r[2]
        y = m[3] * r[0] + m[4] * r[1] + m[5] * r[2]
        z = m[6] * r[0] + m[7] * r[1] + m[8] * r[2]
        right_ascension = np.arctan2(y, x)
        latitude[i] = np.arctan2(z, np.sqrt(x * x + y * y)) * degree
        longitude[i] = ((right_ascension - gast_rad[i]) * degree + 180.0) % 360.0 - 180.0
        sun_x = m[0] * s[0] + m[1] * s[1] + m[2] * s[2]
        sun_y = m[3] * s[0] + m[4] * s[1] + m[5] * s[2]
        hours = (right_ascension - np.arctan2(sun_y, sun_x)) * degree / 15.0 + 12.0
        local_solar_time[i] = hours % 24.0
        vx = m[0] * v[0] + m[1] * v[1] + m[2] * v[2]
        vy = m[3] * v[0] + m[4] * v[1] + m[5] * v[2]
        vz = m[6] * v[0] + m[7] * v[1] + m[8] * v[2]
        hx, hy, hz = y * vz - z * vy, z * vx - x * vz, x * vy - y * vx
        nx, ny = -hy, hx  # ascending node: pole x normal
        node = np.sqrt(nx * nx + ny * ny)
        h = np.sqrt(node * node + hz * hz)
        if node <= _NO_NODE * h:
            nx, ny, node = 1.0, 0.0, 1.0  # an equatorial orbit counts from the equinox
        nx, ny = nx / node, ny / node
        qx, qy, qz = -hz * ny / h, hz * nx / h, (hx * ny - hy * nx) / h
        angle = np.arctan2(x * qx + y * qy + z * qz, x * nx + y * ny) * degree
        argument_of_latitude[i] = angle % 360.0


def fill_derived(state: State, out: dict[str, Array], part: slice) -> None:
    """Fill the derived variables of a track for one stretch of its samples.

    Parameters
    ----------
    state : State
        The states of the stretch.
    out : dict
        Arrays of the whole track, by the name of the variable.
    part : slice
        The stretch.
    """
    _follow(
        state.position,
        state.velocity,
        state.sun_direction,
        state.sun_distance,
        EARTH.radius_km,
        out["altitude"][part],
        out["beta"][part],
        out["orbit_angle"][part],
        out["sun"][part],
    )
    if state.frame is None:
        return
    _under(
        state.position,
        state.velocity,
        state.sun_direction,
        state.frame.matrix,
        state.frame.gast_rad,
        out["latitude"][part],
        out["longitude"][part],
        out["local_solar_time"][part],
        out["argument_of_latitude"][part],
    )
    if state.argument_of_latitude is not None:
        out["argument_of_latitude"][part] = np.degrees(state.argument_of_latitude) % 360.0


def settle_noon(out: dict[str, Array], fallback: Array) -> None:
    """Give samples whose Sun stands on the orbit normal the noon of their neighbours.

    At a beta of exactly 90 degrees noon has no direction; its limit along the motion is that of the
    sample before (or the first one after). With none, `fallback`, shape (3,), stands for it.
    """
    angle = out["orbit_angle"]
    lost = np.flatnonzero(np.isnan(angle))
    if not lost.size:
        return
    good = np.flatnonzero(~np.isnan(angle))
    normal = np.cross(out["position"][lost], out["velocity"][lost])
    normal /= norm(normal)[:, None]
    if good.size:
        donor = good[np.maximum(np.searchsorted(good, lost) - 1, 0)]
        r, v = out["position"][donor], out["velocity"][donor]
        h = np.cross(r, v)
        noon = perpendicular(out["sun_direction"][donor], h / norm(h)[:, None])
    else:
        noon = np.tile(fallback, (lost.size, 1))
    noon = perpendicular(noon, normal)
    degenerate = norm(noon) < _NO_NOON
    noon[degenerate] = np.cross([0.0, 1.0, 0.0], normal[degenerate])
    position = out["position"][lost]
    quarter = np.cross(normal, noon)
    angle[lost] = np.degrees(np.arctan2(dot(position, quarter), dot(position, noon))) % 360.0
