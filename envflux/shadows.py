"""How much of the Sun's disc a spacecraft sees past the planet.

Seen from the spacecraft, Sun and planet are discs of apparent radius asin(R / d). Where they overlap
in part, the covered share is the lens of two flat circles; near the planet, whose disc may be 70
degrees in radius, flattening the sphere costs up to 4e-4 in the visible fraction and nothing in the
times of the contacts, which are those of the angles themselves.
"""

from __future__ import annotations

from typing import Annotated, ClassVar, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray
from pydantic import Field

from envflux.constants import AU_KM, SUN_RADIUS_KM
from envflux.definitions import Definition
from envflux.kernels.compiling import compiled
from envflux.planets import EARTH

Array = NDArray[np.float64]


class Shadow(Definition):
    """Model of the planet's shadow.

    Parameters
    ----------
    kind : {"discs", "cylinder"}
        ``"discs"``: overlap of the apparent discs, with penumbra. ``"cylinder"``: a shadow without
        penumbra and without end, as handbook formulas have it; for comparison with those only.
    atmosphere_km : float
        Height up to which the planet counts as opaque. [km]
    oblate : bool
        Flatten the planet along its pole. Dated tracks only.
    """

    kind: Literal["discs", "cylinder"] = "discs"
    atmosphere_km: Annotated[float, Field(ge=0.0, le=100.0)] = 0.0
    oblate: bool = False

    _hidden: ClassVar[frozenset[str]] = frozenset()  # here the kind is what the reader wants to see

    @property
    def radius_km(self) -> float:
        """Radius of the opaque planet at its equator. [km]."""
        return EARTH.radius_km + self.atmosphere_km

    @property
    def stretch(self) -> float:
        """Factor along the pole that turns the opaque planet into a sphere. [1]."""
        return 1.0 / (1.0 - EARTH.flattening) if self.oblate else 1.0


@compiled
def _visible(separation: float, sun: float, body: float) -> float:
    if separation >= sun + body:
        return 1.0
    if separation <= body - sun:
        return 0.0
    if separation <= sun - body:
        return 1.0 - (body / sun) ** 2
    # Half the common chord by Heron's formula in factors, and both half-angles by atan2: no
    # difference of nearly equal squares, and no arc cosine near 1, however unequal the discs.
    half_chord = np.sqrt((sun + body + separation) * (sun + body - separation))
    half_chord *= np.sqrt(separation + (sun - body)) * np.sqrt(separation + (body - sun)) / (2.0 * separation)
    from_sun = ((separation - body) * (separation + body) + sun * sun) / (2.0 * separation)
    from_body = ((separation - sun) * (separation + sun) + body * body) / (2.0 * separation)
    covered = sun * sun * _segment(np.arctan2(half_chord, from_sun))
    covered += body * body * _segment(np.arctan2(half_chord, from_body))
    return float(min(max(1.0 - covered / (np.pi * sun * sun), 0.0), 1.0))


@compiled
def _segment(half_angle: float) -> float:
    """Area of a segment of the unit circle, by its series where the closed form cancels."""
    if half_angle > 0.1:
        return float(half_angle - np.sin(half_angle) * np.cos(half_angle))
    q = half_angle * half_angle
    series = 2.0 / 3.0 - q * (2.0 / 15.0 - q * (4.0 / 315.0 - q * (2.0 / 2835.0 - q * 4.0 / 155925.0)))
    return half_angle * q * series


@compiled
def _visible_all(separation: Array, sun: Array, body: Array, out: Array) -> None:
    for i in range(out.size):
        if np.isnan(separation[i]) or np.isnan(sun[i]) or np.isnan(body[i]):
            out[i] = np.nan
        else:
            out[i] = _visible(separation[i], sun[i], body[i])


def visible_fraction(separation_rad: ArrayLike, sun_radius_rad: ArrayLike, body_radius_rad: ArrayLike) -> Array:
    """Share of the Sun's disc left uncovered by the disc of a body in front of it.

    Parameters
    ----------
    separation_rad : array_like
        Angle between the centres of the discs. [rad]
    sun_radius_rad : array_like
        Apparent radius of the Sun, above 0. [rad]
    body_radius_rad : array_like
        Apparent radius of the body, above 0. [rad]

    Returns
    -------
    numpy.ndarray
        Visible fraction, 0 to 1, in the broadcast shape of the inputs; NaN where an input is NaN. [1]

    References
    ----------
    Montenbruck and Gill, *Satellite Orbits* (2000), section 3.4.2; rearranged here for rounding.
    """
    given = (np.asarray(value, np.float64) for value in (separation_rad, sun_radius_rad, body_radius_rad))
    separation, sun, body = (np.array(value) for value in np.broadcast_arrays(*given))
    out = np.empty(separation.size)
    _visible_all(separation.reshape(-1), sun.reshape(-1), body.reshape(-1), out)
    return out.reshape(separation.shape)


@compiled
def _gap_and_radii(
    position: Array,
    sun_direction: Array,
    sun_distance_au: float,
    pole: Array,
    radius_km: float,
    stretch: float,
    cylinder: bool,
) -> tuple[float, float, float]:
    """Separation of the disc centres, and the apparent radii of Sun and planet, in radians."""
    rx, ry, rz = position[0], position[1], position[2]
    distance_km = sun_distance_au * AU_KM
    far = 1.0 if cylinder else 0.0  # a cylinder is the shadow of a point infinitely far away
    sx = sun_direction[0] * distance_km - (1.0 - far) * rx
    sy = sun_direction[1] * distance_km - (1.0 - far) * ry
    sz = sun_direction[2] * distance_km - (1.0 - far) * rz
    sun_radius = 0.0
    if not cylinder:
        sun_radius = np.arcsin(min(1.0, SUN_RADIUS_KM / np.sqrt(sx * sx + sy * sy + sz * sz)))
    if stretch != 1.0:
        along = (stretch - 1.0) * (rx * pole[0] + ry * pole[1] + rz * pole[2])
        rx, ry, rz = rx + along * pole[0], ry + along * pole[1], rz + along * pole[2]
        along = (stretch - 1.0) * (sx * pole[0] + sy * pole[1] + sz * pole[2])
        sx, sy, sz = sx + along * pole[0], sy + along * pole[1], sz + along * pole[2]
    body_radius = np.arcsin(min(1.0, radius_km / np.sqrt(rx * rx + ry * ry + rz * rz)))
    cx, cy, cz = ry * sz - rz * sy, rz * sx - rx * sz, rx * sy - ry * sx
    separation = np.arctan2(np.sqrt(cx * cx + cy * cy + cz * cz), -(rx * sx + ry * sy + rz * sz))
    return separation, sun_radius, body_radius


@compiled
def disc_gap(
    position: Array,
    sun_direction: Array,
    sun_distance_au: Array,
    pole: Array,
    radius_km: float,
    stretch: float,
    cylinder: bool,
    gap: Array,
    sun_radius: Array,
) -> None:
    """How far the planet's edge is from the centre of the Sun, in apparent angle.

    Parameters
    ----------
    position : numpy.ndarray, shape (n, 3)
        Spacecraft from the planet's centre. [km]
    sun_direction : numpy.ndarray, shape (n, 3)
        Unit vectors from the planet's centre to the Sun.
    sun_distance_au : numpy.ndarray, shape (n,)
        Distance of the Sun from the planet's centre. [au]
    pole : numpy.ndarray, shape (n, 3) or (1, 3)
        Unit vectors along the planet's pole; one row where `stretch` is 1.
    radius_km : float
        Radius of the opaque planet. [km]
    stretch : float
        Factor along the pole that makes the planet a sphere.
    cylinder : bool
        Shadow of a point infinitely far away.
    gap : numpy.ndarray, shape (n,)
        Filled with the separation of the centres less the planet's radius: penumbra begins where it
        falls to the Sun's radius, umbra where it falls to minus the Sun's radius. [rad]
    sun_radius : numpy.ndarray, shape (n,)
        Filled with the Sun's apparent radius, 0 for the cylinder. [rad]
    """
    for i in range(gap.size):
        row = i if pole.shape[0] == gap.size else 0
        c, a, b = _gap_and_radii(
            position[i], sun_direction[i], sun_distance_au[i], pole[row], radius_km, stretch, cylinder
        )
        gap[i] = c - b
        sun_radius[i] = a


@compiled
def sunlit_fraction(
    position: Array,
    sun_direction: Array,
    sun_distance_au: Array,
    pole: Array,
    radius_km: float,
    stretch: float,
    cylinder: bool,
    out: Array,
) -> None:
    """Fill `out`, shape (n,), with the visible fraction of the solar disc; the rest as in `disc_gap`."""
    for i in range(out.size):
        row = i if pole.shape[0] == out.size else 0
        c, a, b = _gap_and_radii(
            position[i], sun_direction[i], sun_distance_au[i], pole[row], radius_km, stretch, cylinder
        )
        if cylinder:
            out[i] = 1.0 if c > b else 0.0
        else:
            out[i] = _visible(c, a, b)
