"""Local polynomial interpolation on nodes that sit at absolute epochs.

A cubic spline couples all its nodes, so the value at a date would depend on the span asked for.
Six nodes around the date, and nothing else, give the same bits whatever the chunk.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from envflux.kernels.compiling import compiled


@compiled
def interpolate_six(
    times_us: NDArray[np.int64], step_us: int, first_node: int, nodes: NDArray[np.float64], out: NDArray[np.float64]
) -> None:
    """Lagrange interpolation on six equidistant nodes, three on each side.

    Parameters
    ----------
    times_us : numpy.ndarray of int64, shape (n,)
        Times. [microseconds from the origin of the nodes]
    step_us : int
        Distance of the nodes, which lie at whole multiples of it. [microseconds]
    first_node : int
        Index of the first row of `nodes`, counted in steps from the origin.
    nodes : numpy.ndarray, shape (m, c)
        Values at the nodes.
    out : numpy.ndarray, shape (n, c)
        Filled with the values at `times_us`.

    References
    ----------
    Abramowitz and Stegun, *Handbook of Mathematical Functions* (1964), 25.2.21 (six-point formula; cited from memory).
    """
    for i in range(times_us.size):
        node = times_us[i] // step_us
        p = (times_us[i] - node * step_us) / step_us
        base = node - first_node - 2
        w0 = -p * (p * p - 1.0) * (p - 2.0) * (p - 3.0) / 120.0
        w1 = p * (p - 1.0) * (p * p - 4.0) * (p - 3.0) / 24.0
        w2 = -(p * p - 1.0) * (p * p - 4.0) * (p - 3.0) / 12.0
        w3 = p * (p + 1.0) * (p * p - 4.0) * (p - 3.0) / 12.0
        w4 = -p * (p * p - 1.0) * (p + 2.0) * (p - 3.0) / 24.0
        w5 = p * (p * p - 1.0) * (p * p - 4.0) / 120.0
        for c in range(out.shape[1]):
            out[i, c] = (
                w0 * nodes[base, c]
                + w1 * nodes[base + 1, c]
                + w2 * nodes[base + 2, c]
                + w3 * nodes[base + 3, c]
                + w4 * nodes[base + 4, c]
                + w5 * nodes[base + 5, c]
            )
