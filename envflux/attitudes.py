"""Attitude laws: how the body axes sit in the track's frame at each time.

A law is any object with `orient`; the four here are also definitions that a mission file can hold. They look at
one sample at a time, so a piece of a track gives the same rotations as the whole.
"""

from __future__ import annotations

import math
import warnings
from typing import Annotated, Literal, NamedTuple, Protocol, Self, runtime_checkable

import numpy as np
import xarray as xr
from pydantic import Field, field_validator, model_validator

from envflux.craft import checked_direction, unit_direction
from envflux.definitions import Definition, Listed, Vector3
from envflux.errors import CoarseStepWarning, InputError
from envflux.kernels.frames import nadir_rotations
from envflux.vectors import Array, cross, dot, norm, perpendicular, rotation_about, rotation_from_axes, unit
from envflux.vectors import rotation_from_quaternion as _rotation_from_quaternion

# Below this angle (rad) two directions count as parallel. Rounding turns a direction that is known to 1e-16
# by 1e-10 here, and no spacecraft points this finely.
_PARALLEL_RAD = 1e-6

# A second axis that turns farther than this from one sample to the next is not resolved by the trapezoid of a mean.
_FAST_SWING_DEG = 40.0
_COS_FAST_SWING = math.cos(math.radians(_FAST_SWING_DEG))

# A spin faster than this part of a revolution is averaged: the environment changes little during a turn.
_AVERAGED_TURNS_PER_REVOLUTION = 60

# Steps per turn that a spin resolved in time needs at least; the same part of a turn as the coarsest time step
# that passes without a warning is of a revolution.
_STEPS_PER_TURN = 72

# Phases of an averaged spin. Measured on planetary infrared, all tilts and spin axes, against 7201 phases: 5e-5
# of the most a face can receive at 36 000 km, 3e-6 at 500 km. An odd number does better than the even one
# beside it: a face turns toward and away from a small planet half a turn apart, and the two errors cancel.
SPIN_PHASES = 37


class Orientation(NamedTuple):
    """What a law says about a track.

    Parameters
    ----------
    rotations : numpy.ndarray, shape (time, phase, 3, 3)
        Body components to frame components: the columns are the body axes seen from the track's frame.
    weights : numpy.ndarray, shape (phase,)
        Share of the time spent in each phase; they sum to 1. Ordinary laws have one phase.
    spin_axis : numpy.ndarray, shape (time, 3), optional
        For a spin averaged over phase: its axis in the track's frame, so that direct sunlight can be averaged
        in closed form.
    spin_axis_body : numpy.ndarray, shape (3,), optional
        The same axis in the body.
    """

    rotations: Array
    weights: Array
    spin_axis: Array | None = None
    spin_axis_body: Array | None = None


@runtime_checkable
class AttitudeLaw(Protocol):
    """What an attitude law must offer. A class of your own with this one method will do."""

    def orient(self, track: xr.Dataset) -> Orientation:
        """Give the body axes at each time of `track`; `one_phase` wraps an array of rotations."""
        ...


def one_phase(rotations: Array) -> Orientation:
    """Wrap one rotation per time (time, 3, 3) as the `Orientation` of an ordinary law."""
    return Orientation(np.ascontiguousarray(rotations[:, None, :, :]), np.ones(1))


def _vectors(track: xr.Dataset, name: str) -> Array:
    return np.ascontiguousarray(track[name].transpose("time", "xyz").values, float)


def _orbit_normal(track: xr.Dataset) -> Array:
    return unit(cross(_vectors(track, "position"), _vectors(track, "velocity")))


def _orbit_noon(track: xr.Dataset, normal: Array) -> Array:
    """Give the direction in the orbit plane nearest to the Sun, also where the Sun stands on the plane's normal.

    There it is undefined. x of the frame, turned into the plane, takes its place: in the orbit frame of an
    undated orbit that is orbit noon itself, and elsewhere at least a direction that stands still.
    """
    toward_sun = perpendicular(_vectors(track, "sun_direction"), normal)
    return _unit_or(toward_sun, _across(normal))


def _across(axis: Array) -> Array:
    """Give x of the frame made perpendicular to each `axis`, or y where x is along it."""
    x, y = perpendicular([1.0, 0.0, 0.0], axis), perpendicular([0.0, 1.0, 0.0], axis)
    return unit(np.where((norm(x) > _PARALLEL_RAD)[:, None], x, y))


def _unit_or(vectors: Array, instead: Array) -> Array:
    """Scale `vectors` to length 1; where they vanish, `instead` (already unit) takes their place."""
    vanishes = norm(vectors) <= _PARALLEL_RAD
    return np.where(vanishes[:, None], instead, unit(vectors))


class NadirPointing(Definition):
    """One side always down.

    Before the turns below, +Z points at the planet's centre (geocentric nadir), +Y against the orbit normal, and
    +X completes the right-handed set: on a circular orbit it is the direction of motion. Yaw, pitch and roll then
    turn the body in this order, each about its own axis as it stands by then and right-handed: yaw about +Z,
    pitch about the new +Y, roll about the new +X (the 3-2-1 sequence).

    Parameters
    ----------
    roll_deg, pitch_deg, yaw_deg : float
        Angles of the turns, -360 to 360 degrees.
    """

    kind: Literal["nadir"] = "nadir"
    roll_deg: Annotated[float, Field(ge=-360.0, le=360.0)] = 0.0
    pitch_deg: Annotated[float, Field(ge=-360.0, le=360.0)] = 0.0
    yaw_deg: Annotated[float, Field(ge=-360.0, le=360.0)] = 0.0

    def orient(self, track: xr.Dataset) -> Orientation:
        """Give the body axes at each time of `track`."""
        yaw = rotation_about([0.0, 0.0, 1.0], math.radians(self.yaw_deg))
        pitch = rotation_about([0.0, 1.0, 0.0], math.radians(self.pitch_deg))
        roll = rotation_about([1.0, 0.0, 0.0], math.radians(self.roll_deg))
        rotations = np.empty((track.sizes["time"], 3, 3))
        nadir_rotations(_vectors(track, "position"), _vectors(track, "velocity"), yaw @ pitch @ roll, rotations)
        return one_phase(rotations)


class InertialAttitude(Definition):
    """The body axes stand still in the track's frame (GCRS, or the orbit frame of an undated orbit).

    Parameters
    ----------
    quaternion_wxyz : sequence of float
        Scalar first; it takes body vectors to the frame. Any length but zero: it is scaled to 1 when used.

    Raises
    ------
    InputError
        If the quaternion is zero or not finite.
    """

    kind: Literal["inertial"] = "inertial"
    quaternion_wxyz: Annotated[tuple[float, float, float, float], Listed]

    @field_validator("quaternion_wxyz", mode="before")
    @classmethod
    def _quaternion_has_a_length(cls, value: object) -> tuple[float, ...]:
        accepted = "four finite numbers that are not all zero, the scalar first"
        try:
            numbers = tuple(float(part) for part in value)  # type: ignore[attr-defined]  # the test itself
        except (TypeError, ValueError):
            raise InputError("quaternion_wxyz", value, accepted) from None
        if len(numbers) != 4 or not all(map(math.isfinite, numbers)) or not any(numbers):
            raise InputError("quaternion_wxyz", value, accepted)
        return numbers

    def orient(self, track: xr.Dataset) -> Orientation:
        """Give the body axes at each time of `track`."""
        largest = max(map(abs, self.quaternion_wxyz))
        rotation = _rotation_from_quaternion([part / largest for part in self.quaternion_wxyz])
        return one_phase(np.broadcast_to(rotation, (track.sizes["time"], 3, 3)))


Toward = Literal["orbit normal", "-orbit normal", "nadir", "zenith", "velocity", "-velocity"]
"""Directions that `SunPointing` can turn its second axis to."""


class SunPointing(Definition):
    """One axis at the Sun, a second one turned as near as possible to a direction of the orbit.

    Parameters
    ----------
    axis : str or sequence of float
        Body axis that points from the spacecraft to the Sun, in eclipse too: ``"+X"`` to ``"-Z"`` or three numbers.
    toward : {"orbit normal", "-orbit normal", "nadir", "zenith", "velocity", "-velocity"}
        What the second axis is turned to.
    clock_axis : str or sequence of float
        The second body axis; it may not be parallel to `axis`.

    Raises
    ------
    InputError
        If an axis has no direction, or both are parallel.

    Notes
    -----
    Where the Sun stands in line with `toward`, every turn about the Sun line is as near as any other, and the
    law keeps a limit. For the orbit normal (beta of 90 or -90 degrees, within 1e-6 rad) it is the limit of rising
    |beta|: ``"-orbit normal"`` becomes orbit noon x sign(beta), ``"orbit normal"`` the opposite. For nadir, zenith
    and velocity it is the value just after the alignment. Close to it, the axis swings round fast: where it does
    so between samples, a `CoarseStepWarning` says that orbit means want a shorter step.
    """

    kind: Literal["sun"] = "sun"
    axis: str | Vector3 = "+Z"
    toward: Toward = "-orbit normal"
    clock_axis: str | Vector3 = "+Y"

    @field_validator("axis", mode="before")
    @classmethod
    def _axis_has_a_direction(cls, value: object) -> str | tuple[float, float, float]:
        return checked_direction(value, "axis")

    @field_validator("clock_axis", mode="before")
    @classmethod
    def _clock_axis_has_a_direction(cls, value: object) -> str | tuple[float, float, float]:
        return checked_direction(value, "clock_axis")

    @field_validator("toward", mode="before")
    @classmethod
    def _plus_may_be_written(cls, value: object) -> object:
        return value[1:] if isinstance(value, str) and value.startswith("+") else value

    @model_validator(mode="after")
    def _axes_differ(self) -> Self:
        across = cross(unit_direction(self.axis), unit_direction(self.clock_axis))
        if norm(across) <= _PARALLEL_RAD:
            raise InputError("clock_axis", self.clock_axis, f"not parallel to axis, {self.axis}")
        return self

    def orient(self, track: xr.Dataset) -> Orientation:
        """Give the body axes at each time of `track`."""
        body = _axes_from(np.array(unit_direction(self.axis)), np.array(unit_direction(self.clock_axis)))
        sun = unit(_vectors(track, "sun"))
        clock = _turned_toward(self.toward, track, sun)
        if np.any(dot(clock[1:], clock[:-1]) < _COS_FAST_SWING):
            warnings.warn(
                f"the Sun passes so near to '{self.toward}' that clock_axis swings by more than "
                f"{_FAST_SWING_DEG:g} deg between samples: each sample is right, orbit means want a shorter step_s",
                CoarseStepWarning,
                stacklevel=2,
            )
        return one_phase(_axes_from(sun, clock) @ body.T)


def _axes_from(first: Array, second: Array) -> Array:
    """Rotation matrices whose columns are `first`, the part of `second` across it, and their cross product."""
    # Twice, since one pass leaves rounding over the sine of the angle between the two.
    across = unit(perpendicular(unit(perpendicular(second, first)), first))
    return rotation_from_axes(first, across, cross(first, across))


def _turned_toward(toward: Toward, track: xr.Dataset, sun: Array) -> Array:
    """Give the unit vectors across `sun` that are nearest to the direction `toward`, or their limit."""
    if toward in ("orbit normal", "-orbit normal"):
        sign = 1.0 if toward == "orbit normal" else -1.0
        normal = _orbit_normal(track)
        # Seen from the planet's centre: beta is measured there, and from the craft the Sun never stands quite
        # still on the normal.
        centre_sun = _vectors(track, "sun_direction")
        aligned = norm(perpendicular(centre_sun, normal)) <= _PARALLEL_RAD
        side = np.sign(dot(centre_sun, normal))[:, None]
        limit = perpendicular(-sign * side * _orbit_noon(track, normal), sun)
        exact = perpendicular(sign * normal, sun)
        return unit(np.where(aligned[:, None], limit, exact))
    zenith = unit(_vectors(track, "position"))
    velocity = unit(_vectors(track, "velocity"))
    # Each direction, and the one that it moves to, which is what remains just after the alignment.
    wanted, then = {
        "zenith": (zenith, velocity),
        "nadir": (-zenith, -velocity),
        "velocity": (velocity, -zenith),
        "-velocity": (-velocity, zenith),
    }[toward]
    return _unit_or(perpendicular(wanted, sun), unit(perpendicular(then, sun)))


class Spinning(Definition):
    """A steady spin about a body axis that stands still, follows the Sun, or follows the orbit normal.

    Parameters
    ----------
    axis : str or sequence of float
        Spin axis in the body: ``"+X"`` to ``"-Z"`` or three numbers.
    about : {"inertial", "sun", "orbit normal"}
        What the axis points to: `direction`, the Sun as seen from the spacecraft, or the orbit normal.
    rate_rpm : float
        Turns per minute, right-handed about the axis; negative is the other sense, zero is refused.
    phase_deg : float
        Spin angle at the start of the track (``elapsed`` = 0), -360 to 360 degrees.
    averaged : bool, optional
        True: fluxes are averaged over a turn at each time. False: the spin is resolved in time, for which the
        track needs at least 72 samples a turn. Left out: averaged if there are more than 60 turns in a revolution.
    direction : sequence of float, optional
        For ``"inertial"`` alone: where the axis points in the track's frame. Left out, the axis has the same
        components in the frame as in the body.

    Raises
    ------
    InputError
        If the axis or direction is zero, or the rate is; on use, if a spin resolved in time finds steps that are
        too long for it.

    Notes
    -----
    Phase zero looks at the body axis that follows the one nearest to the spin axis in the order X, Y, Z, X
    (for a spin about +Z or -Z it is +X), or at its part across the spin axis:

    - ``"sun"``: it is turned toward the orbit normal (at beta of 90 degrees, the limit given with `SunPointing`),
    - ``"orbit normal"``: it is turned toward orbit noon,
    - ``"inertial"``: the body has come from the frame's axes by the smallest turn that brings the spin axis to
      `direction`; without one, the body axes are the frame's. Opposite to it, by half a turn about that axis.

    A craft that spins about the Sun or the orbit normal keeps turning about an axis that itself drifts slowly.
    """

    kind: Literal["spinning"] = "spinning"
    axis: str | Vector3 = "+Z"
    about: Literal["inertial", "sun", "orbit normal"] = "inertial"
    rate_rpm: float
    phase_deg: Annotated[float, Field(ge=-360.0, le=360.0)] = 0.0
    averaged: bool | None = None
    direction: Vector3 | None = None

    @field_validator("axis", mode="before")
    @classmethod
    def _axis_has_a_direction(cls, value: object) -> str | tuple[float, float, float]:
        return checked_direction(value, "axis")

    @field_validator("rate_rpm")
    @classmethod
    def _it_spins(cls, value: float) -> float:
        if value == 0.0:
            raise InputError("rate_rpm", value, "above or below 0; InertialAttitude stands still")
        return value

    @field_validator("direction", mode="before")
    @classmethod
    def _direction_is_one(cls, value: object) -> object:
        if value is None:
            return None
        if isinstance(value, str):
            raise InputError("direction", value, "three finite numbers that are not all zero")
        return checked_direction(value, "direction")

    @model_validator(mode="after")
    def _direction_has_a_use(self) -> Self:
        if self.direction is not None and self.about != "inertial":
            raise InputError("direction", self.direction, "left out unless about is 'inertial'")
        return self

    @property
    def turn_s(self) -> float:
        """Duration of one turn in seconds."""
        return 60.0 / abs(self.rate_rpm)

    def orient(self, track: xr.Dataset) -> Orientation:
        """Give the body axes at each time of `track`, or at phases of a turn that stand for all.

        Raises
        ------
        InputError
            If the spin is resolved in time and a step of the track is longer than 1/72 of a turn.
        """
        axis = np.array(unit_direction(self.axis))
        start = self._phase_zero(track, axis)
        if self._is_averaged(track):
            angles = math.radians(self.phase_deg) + np.arange(SPIN_PHASES) * (2.0 * math.pi / SPIN_PHASES)
            rotations = start[:, None] @ rotation_about(axis, angles)
            return Orientation(rotations, np.full(SPIN_PHASES, 1.0 / SPIN_PHASES), start @ axis, axis)
        elapsed_s = np.asarray(track["elapsed"].values, float)
        self._check_step(elapsed_s)
        turns = elapsed_s * (self.rate_rpm / 60.0)
        angles = math.radians(self.phase_deg) + 2.0 * math.pi * (turns - np.floor(turns))
        return one_phase(start @ rotation_about(axis, angles))

    def _phase_zero(self, track: xr.Dataset, axis: Array) -> Array:
        following = np.eye(3)[(int(np.argmax(np.abs(axis))) + 1) % 3]
        if self.about == "inertial":
            target = axis if self.direction is None else np.array(unit_direction(self.direction))
            return np.broadcast_to(_smallest_turn(axis, target, following), (track.sizes["time"], 3, 3))
        body = _axes_from(axis, following)
        if self.about == "sun":
            sun = unit(_vectors(track, "sun"))
            return _axes_from(sun, _turned_toward("orbit normal", track, sun)) @ body.T
        normal = _orbit_normal(track)
        return _axes_from(normal, _orbit_noon(track, normal)) @ body.T

    def _is_averaged(self, track: xr.Dataset) -> bool:
        if self.averaged is not None:
            return self.averaged
        return self.turn_s * _AVERAGED_TURNS_PER_REVOLUTION < float(track["orbital_period"])

    def _check_step(self, elapsed_s: Array) -> None:
        longest_s = float(np.max(np.diff(elapsed_s), initial=0.0))
        allowed_s = self.turn_s / _STEPS_PER_TURN
        # A step given as the exact fraction passes in spite of times rounded to the nanosecond.
        if longest_s > allowed_s + 2e-9:
            accepted = (
                f"at most {_rounded_down(allowed_s)} s for a turn of {self.turn_s:.4g} s resolved in time, "
                "or averaged must be True"
            )
            raise InputError("step_s", float(f"{longest_s:.6g}"), accepted)


def _smallest_turn(start: Array, end: Array, half_turn_axis: Array) -> Array:
    """Rotation by the smallest angle from the unit vector `start` to `end`; half a turn where they are opposite."""
    across = cross(start, end)
    sine, cosine = float(norm(across)), float(dot(start, end))
    if sine <= 1e-9 and cosine < 0.0:
        across = perpendicular(half_turn_axis, start)
    elif sine == 0.0:
        return np.eye(3)
    return rotation_about(across, np.asarray(math.atan2(sine, cosine)))


def _rounded_down(seconds: float) -> str:
    """Print `seconds` to four figures so that what is printed does not exceed it."""
    scale = 10.0 ** (3 - math.floor(math.log10(seconds)))
    return f"{math.floor(seconds * scale) / scale:.4g}"


AnyAttitude = Annotated[NadirPointing | InertialAttitude | SunPointing | Spinning, Field(discriminator="kind")]
"""A field that holds one of the four laws; a mission file tells them apart by ``kind``."""
