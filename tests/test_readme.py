"""README keeps its word: its commands, its code, its table of outputs, its picture."""

from __future__ import annotations

import re
import runpy
import shutil
import tomllib
from pathlib import Path
from typing import Any

import matplotlib as mpl
import matplotlib.pyplot as plt
import numpy as np
import pytest
from matplotlib.image import imread

from envflux.cli import OK, main
from envflux.missions import load_mission
from envflux.schema import VARIABLES

mpl.use("Agg")

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")

# Versions of the drawing library differ in hinting and in the place of a label by a few pixels; a curve that moves
# or a label that goes missing changes more.
SAME_PICTURE = 0.006


def fenced(language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```$", README, flags=re.DOTALL | re.MULTILINE)


def section(heading: str) -> str:
    found = re.search(rf"^## {heading}\n(.*?)(?=^## |\Z)", README, flags=re.DOTALL | re.MULTILINE)
    assert found, f"README has no section '{heading}'"
    return found[1]


def test_the_job_comes_first() -> None:
    title, blank, paragraph = README.split("\n", 2)
    assert (title, blank) == ("# envflux", "")
    for word in ("orbit", "solar", "albedo", "planetary infrared", "face"):
        assert word in paragraph.split("\n\n")[0]


@pytest.mark.parametrize(("heading", "does"), [("Run it", "envflux run"), ("Test it", "pytest")])
def test_each_command_is_one_line_that_does_its_own_set_up(heading: str, does: str) -> None:
    blocks = re.findall(r"^```sh\n(.*?)^```$", section(heading), flags=re.DOTALL | re.MULTILINE)
    assert len(blocks) == 1
    assert blocks[0].count("\n") == 1
    assert blocks[0].startswith("python3 -m venv .venv && ")
    assert does in blocks[0]
    # Both install in place, so that running one after the other never tests a stale copy.
    assert " -e " in blocks[0]
    # The first line of an installed script cannot hold a path with spaces everywhere.
    assert not re.search(r"\.venv/bin/(?!python\b)", blocks[0])


def test_there_are_just_two_commands() -> None:
    assert len(fenced("sh")) == 2
    assert README.index("## Run it") < README.index("## Test it")


def test_results_of_the_command_stay_out_of_git() -> None:
    out = re.search(r"--out (\S+)", section("Run it"))
    assert out
    assert f"/{out[1]}/" in (ROOT / ".gitignore").read_text(encoding="utf-8").split()
    assert "--replace" in section("Run it")


def test_python_runs_as_printed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    shutil.copytree(ROOT / "examples", tmp_path / "examples")
    monkeypatch.chdir(tmp_path)
    names: dict[str, Any] = {"__name__": "readme"}
    blocks = fenced("python")
    assert len(blocks) >= 5
    for block in blocks:
        exec(compile(block, "README.md", "exec"), names)
    plt.close("all")
    for written in ("mine.csv", "mine.json", "mine.nc", "mine.png"):
        assert (tmp_path / written).stat().st_size > 1000
    # What the words beside the last law say: with +Z at the zenith, the wing's back (+Z) sees no planet.
    assert list(names["ds"].face.values) == ["radiator", "lid", "wing", "wing back"]
    assert names["ds"].planetary_ir_flux.sel(face="wing back").max() == 0.0
    assert names["ds"].planetary_ir_flux.sel(face="wing").min() > 0.0


def test_the_mission_file_runs_as_printed(tmp_path: Path) -> None:
    (block,) = fenced("toml")
    path = tmp_path / "mine.toml"
    path.write_text(block, encoding="utf-8")
    mission = load_mission(path)
    assert mission.cases == (("nadir", "mean"), ("sun", "mean"))
    assert main(["run", str(path), "--out", str(tmp_path / "mine")]) == OK
    for ending in (".nc", ".csv", ".json", "-history.png"):
        assert (tmp_path / "mine" / f"nadir--mean{ending}").is_file()


def test_the_table_of_outputs_agrees_with_the_schema() -> None:
    pretty = {"degree": "°", "degrees_north": "°", "degrees_east": "°", None: "flag"}
    rows = re.findall(r"^\| (`.*?) \| (.*?) \| (.*?) \|", section("What comes out"), flags=re.MULTILINE)
    assert rows
    for names, dims, units in rows:
        listed = re.findall(r"`(\w+)`", names)
        stated = units.split(", ") if ", " in units else [units] * len(listed)
        assert len(stated) == len(listed), names
        for name, unit in zip(listed, stated, strict=True):
            assert VARIABLES[name].dims[:1] == (dims.split(", ")[0],), name
            raised = (VARIABLES[name].units or "").replace("-2", "⁻²").replace("-1", "⁻¹").replace("m2", "m²")
            assert unit == pretty.get(VARIABLES[name].units, raised), name


def test_links_lead_somewhere() -> None:
    anchors = {
        re.sub(r"[^\w -]", "", head.lower()).replace(" ", "-") for head in re.findall(r"^#+ (.*)$", README, re.M)
    }
    links = re.findall(r"\]\(([^)]+)\)", README)
    assert links
    for link in links:
        if link.startswith("#"):
            assert link[1:] in anchors
        else:
            assert (ROOT / link).exists(), link


def test_the_picture_is_what_the_script_draws(tmp_path: Path) -> None:
    script = runpy.run_path(str(ROOT / "examples" / "make_pictures.py"))
    for drawn in script["main"](tmp_path):
        shown = ROOT / "examples" / "pictures" / drawn.name
        assert f"(examples/pictures/{drawn.name})" in README
        new, committed = imread(drawn), imread(shown)
        assert new.shape == committed.shape
        assert np.abs(new - committed).mean() < SAME_PICTURE


def test_licence_is_stated_here_and_in_the_package() -> None:
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    assert project["license"] == "MIT"
    assert section("Licence").strip().startswith("MIT License")
    assert "WITHOUT WARRANTY OF ANY KIND" in section("Licence")


def test_cautions_name_what_can_hurt() -> None:
    cautions = section("Cautions")
    for danger in ("lamps", "chamber", "responsible engineer"):
        assert danger in cautions
