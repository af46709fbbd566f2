"""Slow, plain integration of what a plate receives: the yardstick for the compiled kernels.

Nothing here comes from envflux, and nothing follows its way of integrating. The kernels sort the
planet by nadir angle as the craft sees it and integrate around each ring in closed form. Here the
planet's surface is sorted by solar zenith angle instead (the pole of the grid is the sub-solar
point), so the terminator is a limit of the outer integral; around each circle of equal zenith angle
the visible arc and the arc in front of the plate are intersected and integrated by Gauss-Legendre.
The outer integral is cut wherever a limit of the inner one changes its kind.

All vectors are in one inertial frame; lengths in km. Factors are per unit exitance (infrared), per
unit albedo and irradiance (albedo), per unit irradiance (zenith increment, direct).
"""

from __future__ import annotations

import numpy as np
from scipy.spatial.transform import Rotation

# IAU 2012 Resolution B2 and IAU 2015 Resolution B3 (both exact).
AU_KM = 149_597_870.7
SUN_RADIUS_KM = 695_700.0
# WGS 84 (NGA.STND.0036).
EARTH_RADIUS_KM = 6378.137
EARTH_GM_KM3_S2 = 398_600.4418

NODES = 32
"""Gauss nodes per piece and direction; `planet_factors` at 32 and at 64 agree to 1e-6 of (R/r)**2 (tested)."""

_BATCH = 64


def unit(vectors):
    vectors = np.asarray(vectors, float)
    return vectors / np.linalg.norm(vectors, axis=-1, keepdims=True)


# ------------------------------------------------------------------------------------------ planet


def zenith_increment(theta_deg):
    """NASA/TM-2001-211221 (Anderson, Justus, Batts 2001); tabulated in tests/data/albedo_zenith_correction.csv."""
    t = np.asarray(theta_deg, float)
    return 1.3798e-3 * t - 2.1793e-5 * t**2 + 6.0372e-8 * t**3 + 4.9115e-9 * t**4


def planet_factors(position_km, sun_direction, normal, radius_km=EARTH_RADIUS_KM, nodes=NODES):
    """Albedo, zenith-weighted albedo and infrared factors of plates, each (n,), all inputs (n, 3)."""
    position, sun, normal = np.broadcast_arrays(
        np.atleast_2d(np.asarray(position_km, float)), unit(sun_direction), unit(normal)
    )
    out = np.empty((3, len(position)))
    for start in range(0, len(position), _BATCH):
        part = slice(start, start + _BATCH)
        args = position[part] / radius_km, sun[part], normal[part]
        out[:2, part] = _over_surface(*args, nodes, lit=True)
        out[2, part] = _over_surface(*args, nodes, lit=False)[0]
    return out


def _over_surface(p, sun, normal, nodes, lit):
    """Integrals over the seen surface of (sunlight, sunlight x increment) or, not `lit`, of 1."""
    H = np.linalg.norm(p, axis=1)
    up = p / H[:, None]
    cos_cap = 1.0 / H  # edge of the seen cap: cosine of its central angle, R / r
    offset = np.sum(normal * p, axis=1)  # the plate's plane meets the sphere where m . normal = offset
    # Axes of the grid: pole at the sub-solar point, azimuth zero through the sub-satellite point.
    side = up - np.sum(up * sun, axis=1)[:, None] * sun
    degenerate = np.linalg.norm(side, axis=1) < 1e-9
    other = np.cross(sun, np.where(np.abs(sun[:, :1]) < 0.8, [[1.0, 0.0, 0.0]], [[0.0, 1.0, 0.0]]))
    x = unit(np.where(degenerate[:, None], other, side))
    y = np.cross(sun, x)
    up_local = np.stack([np.sum(up * e, axis=1) for e in (x, y, sun)], axis=1)
    n_local = np.stack([np.sum(normal * e, axis=1) for e in (x, y, sun)], axis=1)

    edges = _breaks(up_local, n_local, cos_cap, offset, 0.5 * np.pi if lit else np.pi)
    t, w = np.polynomial.legendre.leggauss(nodes)
    # psi = middle - half cos(pi u): arcs that open like a square root become smooth in u.
    u, wu = 0.5 * (t + 1.0), 0.5 * w
    half = 0.5 * np.diff(edges, axis=1)
    psi = (edges[:, :-1] + half)[..., None] - half[..., None] * np.cos(np.pi * u)
    weight = half[..., None] * np.pi * np.sin(np.pi * u) * wu * np.sin(psi)
    case = np.broadcast_to(np.arange(len(p))[:, None, None], psi.shape)
    keep = np.broadcast_to(half[..., None] > 1e-13, psi.shape)
    psi, weight, case = psi[keep], weight[keep], case[keep]

    first, last, arc_of = _arcs(psi, case, up_local, n_local, cos_cap, offset)
    psi, weight, case = psi[arc_of], weight[arc_of], case[arc_of]
    reach = 0.5 * (last - first)
    azimuth = (first + reach)[:, None] + reach[:, None] * t
    sine, cosine = np.sin(psi)[:, None], np.cos(psi)[:, None]
    m = np.stack([sine * np.cos(azimuth), sine * np.sin(azimuth), np.broadcast_to(cosine, azimuth.shape)], axis=-1)
    ray = m - (up_local * H[:, None])[case][:, None, :]  # plate to element
    square = np.sum(ray * ray, axis=-1)
    seen = np.sum(ray * n_local[case][:, None, :], axis=-1)
    leaving = -np.sum(ray * m, axis=-1)
    kernel = np.maximum(seen, 0.0) * np.maximum(leaving, 0.0) / (np.pi * square * square)
    around = (kernel @ w) * reach * weight
    if not lit:
        return (np.bincount(case, around, len(p)),)
    around *= np.cos(psi)
    increment = zenith_increment(np.degrees(psi))
    return np.bincount(case, around, len(p)), np.bincount(case, around * increment, len(p))


def _breaks(up, n, cos_cap, offset, end):
    """Zenith angles, sorted (n, k), at which an arc begins, ends, closes, or two arcs' ends meet."""
    found = [np.zeros(len(up)), np.full(len(up), end), np.arccos(np.clip(up[:, 2], -1, 1))]
    for centre, cosine in ((up, cos_cap), (n, offset)):
        angle = np.arccos(np.clip(cosine, -1.0, 1.0))
        from_pole = np.arctan2(np.hypot(centre[:, 0], centre[:, 1]), centre[:, 2])
        for psi in (from_pole - angle, from_pole + angle):
            psi = np.abs(psi)
            found.append(np.where(psi > np.pi, 2.0 * np.pi - psi, psi))
    # Where the two circles m.up = cos_cap and m.n = offset cross.
    c = np.sum(up * n, axis=1)
    s2 = np.maximum(1.0 - c * c, 1e-30)
    a, b = (cos_cap - c * offset) / s2, (offset - c * cos_cap) / s2
    rest = 1.0 - (a * cos_cap + b * offset)
    for sign in (-1.0, 1.0):
        m = a[:, None] * up + b[:, None] * n
        m = m + (sign * np.sqrt(np.maximum(rest, 0.0) / s2))[:, None] * np.cross(up, n)
        psi = np.arccos(np.clip(m[:, 2], -1.0, 1.0))
        found.append(np.where(rest > 0.0, psi, 0.0))
    return np.sort(np.clip(np.stack(found, axis=1), 0.0, end), axis=1)


def _arcs(psi, case, up, n, cos_cap, offset):
    """Azimuth intervals that are both in the seen cap and in front of the plate, cut at azimuth zero."""
    seen, cap_centre = _half_arc(psi, up[case], cos_cap[case])
    front, centre = _half_arc(psi, n[case], offset[case])
    first, last, arc_of = [], [], []
    which = np.arange(psi.size)
    for turn in (-2.0 * np.pi, 0.0, 2.0 * np.pi):
        lo = np.maximum(-seen, centre - cap_centre - front + turn)
        hi = np.minimum(seen, centre - cap_centre + front + turn)
        for low, high in ((lo, np.minimum(hi, 0.0)), (np.maximum(lo, 0.0), hi)):
            real = high > low
            first.append((low + cap_centre)[real])
            last.append((high + cap_centre)[real])
            arc_of.append(which[real])
    return np.concatenate(first), np.concatenate(last), np.concatenate(arc_of)


def _half_arc(psi, centre, cosine):
    """Half-width and middle of the arc of the circle `psi` on which m . centre > cosine."""
    swing = np.sin(psi) * np.hypot(centre[:, 0], centre[:, 1])
    rest = cosine - np.cos(psi) * centre[:, 2]
    inside = np.where(rest < 0.0, np.pi, 0.0)
    clear = np.abs(rest) < swing
    half = np.where(clear, np.arccos(np.clip(rest / np.where(clear, swing, 1.0), -1.0, 1.0)), inside)
    return half, np.arctan2(centre[:, 1], centre[:, 0])


# ------------------------------------------------------------------------------------------- direct


def sun_and_discs(position_km, sun_direction, sun_distance_au):
    """Unit vector craft to Sun, and the apparent radii of Sun and Earth and their separation, in radians."""
    position = np.asarray(position_km, float)
    to_sun = np.asarray(sun_direction) * (np.asarray(sun_distance_au)[..., None] * AU_KM) - position
    distance = np.linalg.norm(to_sun, axis=-1)
    r = np.linalg.norm(position, axis=-1)
    to_sun, down = to_sun / distance[..., None], -position / r[..., None]
    separation = np.arctan2(np.linalg.norm(np.cross(to_sun, down), axis=-1), np.sum(to_sun * down, axis=-1))
    return to_sun, np.arcsin(SUN_RADIUS_KM / distance), np.arcsin(EARTH_RADIUS_KM / r), separation


def visible_flat(sun, body, separation, nodes=200):
    """Visible fraction of one flat disc behind another, by strips across the line of centres (arrays)."""
    sun, body, separation = (np.atleast_1d(np.asarray(v, float)) for v in (sun, body, separation))
    t, w = np.polynomial.legendre.leggauss(nodes)
    u, wu = 0.5 * (t + 1.0), 0.5 * w
    # The strips are cut where the rims cross, if they do, and where the body's disc begins and ends.
    with np.errstate(divide="ignore", invalid="ignore"):
        rims = (separation**2 + sun**2 - body**2) / (2.0 * separation)
    cuts = [-sun, sun, np.nan_to_num(rims, nan=0.0), separation - body, separation + body]
    cuts = np.sort(np.clip(np.stack(cuts, axis=-1), -sun[..., None], sun[..., None]), axis=-1)
    half = 0.5 * np.diff(cuts, axis=-1)[..., None]
    x = cuts[..., :-1, None] + half - half * np.cos(np.pi * u)
    wide = half * np.pi * np.sin(np.pi * u) * wu
    own = np.sqrt(np.maximum(sun[..., None, None] ** 2 - x**2, 0.0))
    hidden = np.sqrt(np.maximum(body[..., None, None] ** 2 - (x - separation[..., None, None]) ** 2, 0.0))
    covered = np.sum(2.0 * np.minimum(own, hidden) * wide, axis=(-1, -2))
    return 1.0 - covered / (np.pi * sun**2)


def visible_round(sun, body, separation, nodes=64):
    """As `visible_flat`, with both discs as circles on the sky, whatever their size: the exact share.

    Circles on the sky about the body's middle: beyond its rim, each holds an arc of the Sun.
    """
    sun, body, separation = np.broadcast_arrays(*(np.asarray(v, float) for v in (sun, body, separation)))
    t, w = np.polynomial.legendre.leggauss(nodes)
    u, wu = 0.5 * (t + 1.0), 0.5 * w
    visible = np.where(separation >= sun + body, 1.0, 0.0)
    partial = (separation < sun + body) & (separation + sun > body)
    a, b, c = sun[partial], body[partial], separation[partial]
    if np.any(c < a):  # the circles then close around the body's middle; no case here needs it
        raise ValueError("the body's middle lies on the Sun's disc")
    low, high = np.maximum(b, c - a), c + a
    half = 0.5 * (high - low)[:, None]
    omega = low[:, None] + half - half * np.cos(np.pi * u)
    # Half-angle formula: no arccosine near 1.
    s = 0.5 * (omega + c[:, None] + a[:, None])
    ratio = np.sin(s - omega) * np.sin(s - c[:, None]) / (np.sin(omega) * np.sin(c[:, None]))
    arc = 4.0 * np.arcsin(np.sqrt(np.clip(ratio, 0.0, 1.0)))
    share = np.sum(arc * np.sin(omega) * half * np.pi * np.sin(np.pi * u) * wu, axis=-1)
    visible[partial] = share / (4.0 * np.pi * np.sin(0.5 * a) ** 2)
    return visible


def direct_factor(position_km, sun_direction, sun_distance_au, normal):
    """Visible fraction of the Sun's disc times the clipped cosine toward its middle."""
    to_sun, sun, body, separation = sun_and_discs(position_km, sun_direction, sun_distance_au)
    return visible_round(sun, body, separation) * np.maximum(np.sum(to_sun * normal, axis=-1), 0.0)


# ------------------------------------------------------------------------------- orbits and attitudes


def undated_states(altitude_km, beta_deg, angle_rad):
    """Position, velocity (angle, 3) and Sun of a circular orbit: x to orbit noon, z along its normal."""
    r = EARTH_RADIUS_KM + altitude_km
    angle = np.asarray(angle_rad, float)
    zero = np.zeros_like(angle)
    position = r * np.stack([np.cos(angle), np.sin(angle), zero], axis=-1)
    velocity = np.sqrt(EARTH_GM_KM3_S2 / r) * np.stack([-np.sin(angle), np.cos(angle), zero], axis=-1)
    beta = np.radians(beta_deg)
    return position, velocity, np.array([np.cos(beta), 0.0, np.sin(beta)])


def nadir_axes(position, velocity, roll_deg=0.0, pitch_deg=0.0, yaw_deg=0.0):
    """Body to frame, (n, 3, 3): +Z down, +Y against the normal; yaw about Z, then pitch about Y, then roll about X."""
    down = -unit(position)
    y = -unit(np.cross(position, velocity))
    level = np.stack([np.cross(y, down), y, down], axis=-1)
    return level @ Rotation.from_euler("ZYX", [yaw_deg, pitch_deg, roll_deg], degrees=True).as_matrix()


def inertial_axes(count, quaternion_wxyz):
    w, x, y, z = quaternion_wxyz
    return np.broadcast_to(Rotation.from_quat([x, y, z, w]).as_matrix(), (count, 3, 3))


def two_axes(first_frame, second_frame, first_body, second_body):
    """Body to frame with `first` met exactly and `second` as nearly as can be (scipy's constrained Wahba fit)."""
    found = [
        Rotation.align_vectors([a, b], [first_body, second_body], weights=[np.inf, 1.0])[0].as_matrix()
        for a, b in zip(first_frame, second_frame, strict=True)
    ]
    return np.array(found)


def spun(start, axis_body, angle_rad):
    """Turn bodies `start` (n, 3, 3) about a body axis by angles (n,) or (phases,) -> (n[, phases], 3, 3)."""
    return start @ Rotation.from_rotvec(np.outer(np.atleast_1d(angle_rad), unit(axis_body))).as_matrix()


BODY_AXES = {
    sign + name: factor * np.eye(3)[i] for i, name in enumerate("XYZ") for sign, factor in (("+", 1.0), ("-", -1.0))
}


def body_axes(law, track, angles_rad=None):
    """Body to frame for a law's plain parameters along a track's states, (time, 3, 3).

    `angles_rad` (phases,) instead of the spin angle in time: (time, phase, 3, 3) for a spin averaged over phase.
    """
    position, velocity = track.position.values, track.velocity.values
    if law.kind == "nadir":
        return nadir_axes(position, velocity, law.roll_deg, law.pitch_deg, law.yaw_deg)
    if law.kind == "inertial":
        return inertial_axes(len(position), law.quaternion_wxyz)
    to_sun = sun_and_discs(position, track.sun_direction.values, track.sun_distance.values)[0]
    normal = unit(np.cross(position, velocity))
    centre_sun = track.sun_direction.values
    height = np.sum(centre_sun * normal, axis=1)[:, None]
    noon = centre_sun - height * normal
    toward_normal = normal
    if np.linalg.norm(noon, axis=1).max() < 1e-9:
        # Beta of 90 degrees on an undated orbit: its x axis is orbit noon; the law documents the limit.
        noon = np.broadcast_to([1.0, 0.0, 0.0], normal.shape)
        toward_normal = -np.sign(height) * noon
    if law.kind == "sun":
        toward = {
            "orbit normal": toward_normal,
            "-orbit normal": -toward_normal,
            "nadir": -position,
            "zenith": position,
            "velocity": velocity,
            "-velocity": -velocity,
        }[law.toward]
        return two_axes(to_sun, toward, _body_vector(law.axis), _body_vector(law.clock_axis))
    axis = _body_vector(law.axis)
    following = np.eye(3)[(int(np.argmax(np.abs(axis))) + 1) % 3]
    if law.about == "sun":
        start = two_axes(to_sun, toward_normal, axis, following)
    elif law.about == "orbit normal":
        start = two_axes(normal, noon, axis, following)
    else:
        start = inertial_axes(len(position), (1.0, 0.0, 0.0, 0.0))
        if law.direction is not None:
            goal = unit(law.direction)
            across = np.cross(axis, goal)
            angle = np.arctan2(np.linalg.norm(across), axis @ goal)
            start = np.broadcast_to(Rotation.from_rotvec(unit(across) * angle).as_matrix(), start.shape)
    if angles_rad is not None:
        return spun(start[:, None], axis, angles_rad)
    turned = np.radians(law.phase_deg) + 2.0 * np.pi * law.rate_rpm / 60.0 * track.elapsed.values
    return spun(start, axis, turned)


def _body_vector(axis):
    return BODY_AXES[axis] if isinstance(axis, str) else unit(axis)
