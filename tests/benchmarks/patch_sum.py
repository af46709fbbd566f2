"""The plain way to integrate over a planet: a sum over patches, written with array operations.

This is the yardstick for speed, not a check of correctness. It is given every fair advantage: its
patches cover only the cap that the spacecraft sees, and all faces share the geometry of a patch.
"""

import numpy as np


def patch_sum(position, sun_direction, normals, radius, rings, sectors):
    """Albedo factor and view factor of plates, by the midpoint rule on ``rings x sectors`` patches.

    Parameters
    ----------
    position : ndarray (time, 3)
        Planet-centred.
    sun_direction : ndarray (time, 3)
        Unit.
    normals : ndarray (time, face, 3)
        Unit, in the frame of the position.

    Returns
    -------
    g_albedo, g_ir : ndarray (time, face)
    """
    r = np.linalg.norm(position, axis=1)
    up = position / r[:, None]
    helper = np.where(np.abs(up[:, :1]) < 0.6, [1.0, 0.0, 0.0], [0.0, 1.0, 0.0])
    east = np.cross(helper, up)
    east /= np.linalg.norm(east, axis=1)[:, None]
    north = np.cross(up, east)
    cap = np.arccos(radius / r)
    central = cap[:, None] * (np.arange(rings) + 0.5) / rings
    azimuth = 2.0 * np.pi * (np.arange(sectors) + 0.5) / sectors
    across = np.cos(azimuth)[:, None] * east[:, None, :] + np.sin(azimuth)[:, None] * north[:, None, :]
    # Outward normal of each patch: (time, ring, sector, 3), then flattened.
    outward = np.cos(central)[:, :, None, None] * up[:, None, None, :]
    outward = outward + np.sin(central)[:, :, None, None] * across[:, None, :, :]
    outward = outward.reshape(len(r), -1, 3)
    area = radius**2 * np.sin(central) * (cap / rings)[:, None] * (2.0 * np.pi / sectors)
    area = np.repeat(area, sectors, axis=1)
    ray = radius * outward - position[:, None, :]
    distance2 = np.einsum("tpi,tpi->tp", ray, ray)
    emission = -np.einsum("tpi,tpi->tp", ray, outward)
    weight = np.maximum(emission, 0.0) * area / (np.pi * distance2 * distance2)
    incidence = np.maximum(np.einsum("tpi,tfi->tpf", ray, normals), 0.0)
    lit = np.maximum(np.einsum("tpi,ti->tp", outward, sun_direction), 0.0)
    g_ir = np.einsum("tp,tpf->tf", weight, incidence)
    g_albedo = np.einsum("tp,tpf->tf", weight * lit, incidence)
    return g_albedo, g_ir
