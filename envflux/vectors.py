"""Vectors, rotations and quaternions on plain arrays; the vector axis is always the last one.

Quaternions are scalar-first and unit. A rotation matrix takes body components to frame components:
its columns are the body axes seen from the frame.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]

AXES: dict[str, tuple[float, float, float]] = {
    "+X": (1.0, 0.0, 0.0),
    "-X": (-1.0, 0.0, 0.0),
    "+Y": (0.0, 1.0, 0.0),
    "-Y": (0.0, -1.0, 0.0),
    "+Z": (0.0, 0.0, 1.0),
    "-Z": (0.0, 0.0, -1.0),
}


def dot(a: ArrayLike, b: ArrayLike) -> Array:
    """Scalar product along the last axis."""
    product: Array = np.einsum("...i,...i->...", np.asarray(a, float), np.asarray(b, float))
    return product


def cross(a: ArrayLike, b: ArrayLike) -> Array:
    """Vector product along the last axis; several times faster than numpy's for long arrays."""
    a, b = np.asarray(a, float), np.asarray(b, float)
    product = np.empty(np.broadcast_shapes(a.shape, b.shape))
    for i, j, k in ((0, 1, 2), (1, 2, 0), (2, 0, 1)):
        product[..., i] = a[..., j] * b[..., k] - a[..., k] * b[..., j]
    return product


def norm(a: ArrayLike) -> Array:
    """Length along the last axis."""
    return np.sqrt(dot(a, a))


def unit(a: ArrayLike) -> Array:
    """`a` scaled to length 1. A zero vector comes back as NaN: callers refuse it beforehand."""
    a = np.asarray(a, float)
    with np.errstate(invalid="ignore", divide="ignore"):
        scaled: Array = a / norm(a)[..., None]
    return scaled


def angle_between(a: ArrayLike, b: ArrayLike) -> Array:
    """Angle in radians, accurate also near 0 and pi.

    Uses ``2 atan2(|u - v|, |u + v|)`` on the unit vectors (Kahan, *How Futile are Mindless
    Assessments of Roundoff in Floating-Point Computation?*, 2006, section 12; cited from
    memory).
    """
    u, v = unit(a), unit(b)
    return 2.0 * np.arctan2(norm(u - v), norm(u + v))


def perpendicular(a: ArrayLike, axis: ArrayLike) -> Array:
    """The part of `a` at right angles to the unit vector `axis` (not normalised)."""
    a, axis = np.asarray(a, float), np.asarray(axis, float)
    rest: Array = a - dot(a, axis)[..., None] * axis
    return rest


def rotation_about(axis: ArrayLike, angle_rad: ArrayLike) -> Array:
    """Right-handed rotation matrices about `axis` (..., 3) by `angle_rad` (...); Rodrigues' formula."""
    u = unit(axis)
    angle = np.asarray(angle_rad, float)
    u = np.broadcast_to(u, (*angle.shape, 3)) if u.ndim == 1 else u
    c, s = np.cos(angle), np.sin(angle)
    cross = np.zeros((*u.shape[:-1], 3, 3))
    cross[..., 0, 1], cross[..., 0, 2] = -u[..., 2], u[..., 1]
    cross[..., 1, 0], cross[..., 1, 2] = u[..., 2], -u[..., 0]
    cross[..., 2, 0], cross[..., 2, 1] = -u[..., 1], u[..., 0]
    outer = u[..., :, None] * u[..., None, :]
    matrix: Array = c[..., None, None] * np.eye(3) + s[..., None, None] * cross + (1.0 - c)[..., None, None] * outer
    return matrix


def rotation_from_quaternion(quaternion_wxyz: ArrayLike) -> Array:
    """Rotation matrix of a scalar-first unit quaternion (..., 4) -> (..., 3, 3)."""
    w, x, y, z = np.moveaxis(unit(quaternion_wxyz), -1, 0)
    rows = [
        [1 - 2 * (y * y + z * z), 2 * (x * y - w * z), 2 * (x * z + w * y)],
        [2 * (x * y + w * z), 1 - 2 * (x * x + z * z), 2 * (y * z - w * x)],
        [2 * (x * z - w * y), 2 * (y * z + w * x), 1 - 2 * (x * x + y * y)],
    ]
    return np.stack([np.stack(row, axis=-1) for row in rows], axis=-2)


def rotation_from_axes(x: ArrayLike, y: ArrayLike, z: ArrayLike) -> Array:
    """Rotation matrix whose columns are the given unit vectors (..., 3)."""
    return np.stack([np.asarray(x, float), np.asarray(y, float), np.asarray(z, float)], axis=-1)
