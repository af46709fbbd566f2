"""An attitude law of your own: any object with one method, `orient`.

The law here keeps the body's +X axis along the velocity and leans +Z away from nadir toward the orbit
normal by a fixed angle, as a side-looking instrument does.

    python examples/own_attitude_law.py
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr

from envflux.attitudes import Orientation
from envflux.coatings import Coating
from envflux.craft import box_craft
from envflux.environments import Environment
from envflux.fluxes import flux
from envflux.orbits import CircularOrbit
from envflux.tables import summary_table


@dataclass(frozen=True)
class SideLooking:
    """+X along the velocity, +Z leant from nadir toward the orbit normal by `lean_deg`."""

    lean_deg: float

    def orient(self, track: xr.Dataset) -> Orientation:
        """Say where the body axes point, for every sample of the track.

        Columns of each rotation are the body axes x, y, z in the track's frame: it takes body vectors
        to that frame. The second axis is the phase of a spin; a law without spin has one phase.
        """
        position, velocity = track["position"].values, track["velocity"].values
        x = velocity / np.linalg.norm(velocity, axis=-1, keepdims=True)
        normal = np.cross(position, velocity)
        normal /= np.linalg.norm(normal, axis=-1, keepdims=True)
        down = np.cross(normal, x)  # nadir, made square to the velocity
        lean = np.radians(self.lean_deg)
        z = np.cos(lean) * down + np.sin(lean) * normal
        y = np.cross(z, x)
        rotations = np.stack([x, y, z], axis=-1)[:, None, :, :]
        return Orientation(rotations, np.ones(1), None, None)


def main() -> None:
    """Print the fluxes of a small box that looks aside by 25 degrees."""
    orbit = CircularOrbit(altitude_km=620, inclination_deg=74, raan_deg=15, epoch="2030-09-12T00:00:00Z")
    craft = box_craft(size_m=(0.6, 0.6, 0.9), coating=Coating(absorptance=0.3, emittance=0.8))
    environment = Environment(albedo=0.3, planetary_ir_w_m2=237)
    print(summary_table(flux(orbit.track(), SideLooking(lean_deg=25), craft, environment)))


if __name__ == "__main__":
    main()
