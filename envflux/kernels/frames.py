"""Rotation matrices along a track, one pass over the samples."""

from __future__ import annotations

import math

from envflux.kernels.compiling import compiled
from envflux.vectors import Array


@compiled
def nadir_rotations(position: Array, velocity: Array, offset: Array, rotations: Array) -> None:
    """Fill `rotations` (time, 3, 3), body to frame, of a body that keeps one side down.

    Parameters
    ----------
    position, velocity : ndarray (time, 3)
        Planet-centred; not parallel.
    offset : ndarray (3, 3)
        From the body to the level axes: +Z to the planet's centre, +Y against the orbit normal, +X
        completing the right-handed set.
    """
    for i in range(position.shape[0]):
        px, py, pz = position[i, 0], position[i, 1], position[i, 2]
        vx, vy, vz = velocity[i, 0], velocity[i, 1], velocity[i, 2]
        r = math.sqrt(px * px + py * py + pz * pz)
        px, py, pz = px / r, py / r, pz / r
        hx, hy, hz = py * vz - pz * vy, pz * vx - px * vz, px * vy - py * vx
        h = math.sqrt(hx * hx + hy * hy + hz * hz)
        hx, hy, hz = hx / h, hy / h, hz / h
        fx, fy, fz = hy * pz - hz * py, hz * px - hx * pz, hx * py - hy * px
        for j in range(3):
            rotations[i, 0, j] = fx * offset[0, j] - hx * offset[1, j] - px * offset[2, j]
            rotations[i, 1, j] = fy * offset[0, j] - hy * offset[1, j] - py * offset[2, j]
            rotations[i, 2, j] = fz * offset[0, j] - hz * offset[1, j] - pz * offset[2, j]
