"""Where the spacecraft and the Sun are, at any time asked: the one view contacts and tracks have of an orbit.

A moment is a whole number of microseconds: of TAI since 1970 for dated orbits, from orbit noon or
from the user's own zero for undated ones. The same moment always gives the same bits.
"""

from __future__ import annotations

from typing import NamedTuple, Protocol

import numpy as np
from numpy.typing import NDArray

from envflux import almanac
from envflux.errors import InputError, Told
from envflux.kernels.compiling import compiled
from envflux.orbits.elements import Elements, propagate
from envflux.planets import EARTH

Array = NDArray[np.float64]
Microseconds = NDArray[np.int64]

FIXED_POLE = np.array([[0.0, 0.0, 1.0]])


class State(NamedTuple):
    """Positions of spacecraft and Sun at n times, in one frame."""

    position: Array  # (n, 3) km
    velocity: Array  # (n, 3) km/s
    sun_direction: Array  # (n, 3) from the planet's centre
    sun_distance: Array  # (n,) au
    frame: almanac.Frame | None = None  # None where there is no calendar
    argument_of_latitude: Array | None = None  # (n,) rad, where the orbit itself knows it

    @property
    def pole(self) -> Array:
        """The planet's pole, (n, 3), or one row where it does not move."""
        return FIXED_POLE if self.frame is None else np.ascontiguousarray(self.frame.matrix[:, 6:9])


class States(Protocol):
    """Anything that knows the state at given moments."""

    dated: bool

    @property
    def sources(self) -> str:
        """Where what is not declared comes from, with versions."""
        ...

    def at(self, times_us: Microseconds) -> State:
        """States at each moment, shape (n,)."""
        ...


class ElementStates:
    """Secular elements in the true equator and equinox of date."""

    dated = True

    def __init__(self, elements: Elements, epoch_us: int) -> None:
        self.elements = elements
        self.epoch_us = epoch_us
        self.sources = almanac.sources()

    def at(self, times_us: Microseconds) -> State:
        """States at each moment, shape (n,), in GCRS."""
        n = times_us.size
        position, velocity, latitude = np.empty((n, 3)), np.empty((n, 3)), np.empty(n)
        since = np.asarray((times_us - self.epoch_us) * 1e-6, np.float64)
        propagate(since, self.elements[:6], self.elements.rates[:3], EARTH.gm_km3_s2, position, velocity, latitude)
        frame = almanac.earth_frame(times_us)
        to_gcrs(frame.matrix, np.zeros(1), position, velocity)
        return State(position, velocity, *apparent_sun(times_us), frame, latitude)


class NoonStates:
    """A circular orbit in the orbit frame: x to orbit noon, z along the normal, the Sun at rest."""

    dated = False
    sources = "none: plane and Sun are as declared"

    def __init__(self, radius_km: float, beta_rad: float, sun_distance_au: float) -> None:
        self.radius_km = radius_km
        self.rate = float(np.sqrt(EARTH.gm_km3_s2 / radius_km**3))
        self.sun = np.array([np.cos(beta_rad), 0.0, np.sin(beta_rad)])
        self.sun_distance_au = sun_distance_au

    def at(self, times_us: Microseconds) -> State:
        """States at each moment, shape (n,), in the orbit frame."""
        n = times_us.size
        position, velocity, latitude = np.empty((n, 3)), np.empty((n, 3)), np.empty(n)
        circle = (self.radius_km, 0.0, 0.0, 0.0, 0.0, 0.0)
        since = np.asarray(times_us * 1e-6, np.float64)
        propagate(since, circle, (0.0, 0.0, self.rate), EARTH.gm_km3_s2, position, velocity, latitude)
        return State(position, velocity, np.tile(self.sun, (n, 1)), np.full(n, self.sun_distance_au))


class SampledStates:
    """Cubic Hermite interpolation of states the user gave, and of the Sun if that came with them."""

    def __init__(
        self, times_us: Microseconds, position: Array, velocity: Array, sun_au: Array | None, *, dated: bool
    ) -> None:
        if times_us.size == 1:  # a lone sample is given a neighbour a second on, so that it has a span
            times_us = np.concatenate([times_us, times_us + 1_000_000])
            position, velocity = np.concatenate([position, position + velocity]), np.tile(velocity, (2, 1))
            sun_au = None if sun_au is None else np.tile(sun_au, (2, 1))
        self.times_us, self.position, self.velocity = times_us, position, velocity
        self.sun_au = sun_au
        self.dated = dated
        where = "positions as given; "
        self.sources = where + (almanac.sources() if dated else "Sun as given")
        if dated and sun_au is not None:
            self.sources = f"{where}Sun as given; otherwise {almanac.sources()}"

    def at(self, times_us: Microseconds) -> State:
        """States at each moment, shape (n,), within the span of the samples."""
        right = np.clip(np.searchsorted(self.times_us, times_us, side="right"), 1, self.times_us.size - 1)
        left = right - 1
        span = ((self.times_us[right] - self.times_us[left]) * 1e-6)[:, None]
        s = ((times_us - self.times_us[left]) * 1e-6)[:, None] / span
        p0, p1, v0, v1 = (
            self.position[left],
            self.position[right],
            self.velocity[left] * span,
            self.velocity[right] * span,
        )
        position = (
            (1 + 2 * s) * (1 - s) ** 2 * p0 + s * (1 - s) ** 2 * v0 + s * s * (3 - 2 * s) * p1 - s * s * (1 - s) * v1
        )
        rate = 6 * s * (1 - s) * (p1 - p0) + (1 - s) * (1 - 3 * s) * v0 - s * (2 - 3 * s) * v1
        # At a sample itself the numbers given come back to the last bit.
        moving = np.where(s == 0.0, self.velocity[left], np.where(s == 1.0, self.velocity[right], rate / span))
        frame = almanac.earth_frame(times_us) if self.dated else None
        if self.sun_au is None:
            return State(position, moving, *apparent_sun(times_us), frame)
        sun = (1 - s) * self.sun_au[left] + s * self.sun_au[right]
        distance = np.sqrt(np.einsum("ij,ij->i", sun, sun))
        return State(position, moving, sun / distance[:, None], distance, frame)


def apparent_sun(times_us: Microseconds) -> tuple[Array, Array]:
    """Direction (n, 3) and distance (n,) of the apparent Sun, in GCRS and au."""
    sun = almanac.sun_vector_au(times_us)
    distance = np.empty(times_us.size)
    normalise(sun, distance)
    return sun, distance


@compiled
def normalise(vectors: Array, lengths: Array) -> None:
    """Scale each row of `vectors` (n, 3) to 1 in place; its length goes into `lengths` (n,)."""
    for i in range(lengths.size):
        x, y, z = vectors[i, 0], vectors[i, 1], vectors[i, 2]
        lengths[i] = np.sqrt(x * x + y * y + z * z)
        vectors[i, 0], vectors[i, 1], vectors[i, 2] = x / lengths[i], y / lengths[i], z / lengths[i]


@compiled
def to_gcrs(matrix: Array, about_pole_rad: Array, position: Array, velocity: Array) -> None:
    """Turn states from the equator of date to GCRS, in place.

    Parameters
    ----------
    matrix : numpy.ndarray, shape (n, 9)
        GCRS to true equator and equinox of date, rows first.
    about_pole_rad : numpy.ndarray, shape (n,) or (1,)
        Turn of the axes about the pole of date that comes first: zero from the true equinox, GMST of
        1982 minus apparent sidereal angle from TEME.
    position, velocity : numpy.ndarray, shape (n, 3)
        Overwritten.
    """
    for i in range(position.shape[0]):
        angle = about_pole_rad[i] if about_pole_rad.size == position.shape[0] else about_pole_rad[0]
        c, s = np.cos(angle), np.sin(angle)
        for vectors in (position, velocity):
            x = c * vectors[i, 0] + s * vectors[i, 1]
            y = c * vectors[i, 1] - s * vectors[i, 0]
            z = vectors[i, 2]
            for k in range(3):
                vectors[i, k] = matrix[i, k] * x + matrix[i, 3 + k] * y + matrix[i, 6 + k] * z


def refuse_underground(state: State, field: str, lowest_km: float) -> None:
    """Refuse positions below a height.

    Raises
    ------
    InputError
        Naming `field` and the lowest altitude met.
    """
    altitude = np.sqrt(np.einsum("ij,ij->i", state.position, state.position)) - EARTH.radius_km
    lowest = float(np.min(altitude))
    if not lowest >= lowest_km:
        where = "above the surface" if lowest_km == 0.0 else f"at least {lowest_km:g} km up"
        raise InputError(field, Told(f"an altitude of {lowest:.1f} km"), f"{where} throughout the track")
