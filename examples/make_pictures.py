"""Draw the pictures that README shows, from the mission files beside this script.

python examples/make_pictures.py
"""

from __future__ import annotations

from pathlib import Path

from envflux import plots
from envflux.missions import load_mission

HERE = Path(__file__).parent


def main(folder: Path = HERE / "pictures") -> list[Path]:
    """Write every picture into `folder` and return their paths."""
    folder.mkdir(exist_ok=True)
    mission = load_mission(HERE / "imager.toml")
    mode, environment = mission.cases[0]
    ds = mission.flux(mode, environment)
    path = folder / "imager.png"
    with plots.off_screen():
        axes = plots.flux_history(ds, title=f"{mission.mission.name}: an invented Earth imager over one revolution")
        # No clock, no version of the drawing library: the same numbers give the same file.
        axes[0, 0].figure.savefig(path, dpi=110, metadata={"Software": None})
    return [path]


if __name__ == "__main__":
    for written in main():
        print(written)
