"""The command, run as a user runs it: in a process of its own."""

from __future__ import annotations

import csv
import json
import os
import re
import subprocess
import sys
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import NamedTuple

import numpy as np
import pytest
import xarray as xr

from envflux import cli
from envflux.attitudes import AnyAttitude
from envflux.cli import keys
from envflux.cli.folders import MANIFEST, results_folder
from envflux.coatings import Coating
from envflux.craft import Face
from envflux.definitions import Definition, _members, _tag_of
from envflux.environments import Environment
from envflux.errors import InputError
from envflux.missions import Mode, Output, TrackRequest, load_mission
from envflux.orbits import Orbit
from envflux.tables import load

EXAMPLES = Path(__file__).parents[1] / "examples"

MISSION = """
[mission]
name = "Invented"
[orbit]
kind = "circular"
altitude_km = 560
inclination_deg = 53
raan_deg = 40
epoch = "2031-03-20T06:00:00Z"
[track]
step_s = 60
[craft]
box = {size_m = [0.8, 0.8, 1.2], coating = {absorptance = 0.25, emittance = 0.85}}
[modes.nadir]
attitude = {kind = "nadir"}
[environments.mean]
albedo = 0.3
planetary_ir_w_m2 = 237
[output]
plots = false
"""

ORBIT = MISSION[MISSION.index("[orbit]") : MISSION.index("[track]")]
KEPLER = '[orbit]\nkind = "kepler"\ninclination_deg = 63.4\nepoch = "2031-03-20T06:00:00Z"\n'
SYNCHRONOUS = '[orbit]\nkind = "sun-synchronous"\nltan_hours = 6\nepoch = "2031-03-20T06:00:00Z"\n'
FACE = '[craft]\n[[craft.faces]]\nname = "plate"\narea_m2 = 1\ncoating = {absorptance = 0.25, emittance = 0.85}\n'
CRAFT = MISSION[MISSION.index("[craft]") : MISSION.index("[modes.nadir]")]
# Made-up elements; the last digit of each line, the checksum, should be 3 and 7.
TLE = """[orbit]
kind = "tle"
line1 = "1 99999U 31999ZZ  31152.27083333  .00001234  00000-0  12345-3 0  9998"
line2 = "2 99999  51.2345 123.4567 0012345  67.8901 234.5678 15.12345678    19"
"""

# Every kind of bad input: what is changed in the mission, and words the one line must hold: the field,
# the value, and what is accepted.
BAD: dict[str, tuple[tuple[str, str], tuple[str, ...]]] = {
    "orbit below the surface": (("altitude_km = 560", "altitude_km = -20"), ("orbit.altitude_km is -20", "100")),
    "orbit out of all bounds": (("altitude_km = 560", "altitude_km = 9e6"), ("orbit.altitude_km is 9000000", "500000")),
    "eccentricity": (
        (ORBIT, KEPLER + "semi_major_axis_km = 9000\neccentricity = 1.0\n"),
        ("orbit.eccentricity is 1", "below 1"),
    ),
    "perigee under ground": (
        (ORBIT, KEPLER + "perigee_altitude_km = -50\napogee_altitude_km = 39000\n"),
        ("orbit.perigee_altitude_km is -50", "100"),
    ),
    "perigee under ground by eccentricity": (
        (ORBIT, KEPLER + "semi_major_axis_km = 9000\neccentricity = 0.5\n"),
        ("orbit.semi_major_axis_km is 9000", "perigee"),
    ),
    "no such Sun-synchronous orbit": (
        (ORBIT, SYNCHRONOUS + "altitude_km = 7000\n"),
        ("orbit.altitude_km is 7000", "at most 597"),
    ),
    "date outside the ephemeris": (("2031-03-20T06", "2131-03-20T06"), ("orbit.epoch is '2131-03-20", "2053")),
    "naive epoch": (("06:00:00Z", "06:00:00"), ("orbit.epoch is '2031-03-20T06:00:00'", "time zone")),
    "zero normal": (
        (CRAFT, FACE + "normal = [0, 0, 0]\n"),
        ("craft.faces.1 (plate).normal is [0, 0, 0]", "not all zero"),
    ),
    "normal not finite": ((CRAFT, FACE + "normal = [0, nan, 1]\n"), ("craft.faces.1 (plate).normal", "nan", "finite")),
    "absorptance": (
        ("absorptance = 0.25", "absorptance = 1.25"),
        ("craft.box.coating.absorptance is 1.25", "from 0 to 1"),
    ),
    "step of zero": (("step_s = 60", "step_s = 0"), ("track.step_s is 0", "above 0")),
    "step above 1/12 of a revolution": (("step_s = 60", "step_s = 500"), ("track.step_s is 500", "at most 47")),
    "broken TLE checksum": ((ORBIT, TLE), ("orbit.line1 is", "checksum")),
    "misspelt key": (("[track]\nstep_s", "[track]\nstep_sec"), ("track.step_sec is 60", "did you mean 'step_s'?")),
    "unknown table": (("[output]", "[outputs]"), ("outputs is", "did you mean 'output'?")),
    "broken TOML": (("albedo = 0.3", "albedo 0.3"), ("is broken at line 17", "valid TOML")),
}


class Result(NamedTuple):
    code: int
    out: str
    err: str
    listing: list[str]


def envflux(*arguments: str | Path, cwd: Path | None = None) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-W", "error", "-m", "envflux", *map(str, arguments)]
    return subprocess.run(command, capture_output=True, text=True, cwd=cwd, check=False, timeout=300)


def listing(folder: Path) -> list[str]:
    return sorted(str(path.relative_to(folder)) for path in folder.rglob("*"))


@pytest.fixture(scope="module")
def refused(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Result]:
    """Every bad input in a process of its own, two at a time: most of each is Python starting up."""
    base = tmp_path_factory.mktemp("bad input")

    def attempt(name: str) -> tuple[str, Result]:
        folder = base / name.replace("/", "-")
        folder.mkdir()
        (old, new), _ = BAD[name]
        assert old in MISSION
        (folder / "mission.toml").write_text(MISSION.replace(old, new), encoding="utf-8")
        done = envflux("run", "mission.toml", "--out", "new/results", cwd=folder)
        return name, Result(done.returncode, done.stdout, done.stderr, listing(folder))

    with ThreadPoolExecutor(2) as pool:
        return dict(pool.map(attempt, BAD))


@pytest.mark.parametrize("name", list(BAD))
def test_bad_input_is_one_line_and_leaves_nothing(refused: dict[str, Result], name: str) -> None:
    result, words = refused[name], BAD[name][1]
    assert result.code == 2, result.err
    assert result.out == ""
    assert result.err.count("\n") == 1, result.err
    assert result.err.startswith("envflux: mission.toml"), result.err
    assert " but " in result.err
    for word in words:
        assert word in result.err, (word, result.err)
    assert result.listing == ["mission.toml"]


@pytest.fixture(scope="module")
def first_run(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, subprocess.CompletedProcess[str]]:
    folder = tmp_path_factory.mktemp("a folder with spaces")
    text = MISSION.replace("plots = false", "plots = true")
    (folder / "my mission.toml").write_text(text, encoding="utf-8")
    return folder, envflux("run", "my mission.toml", "--out", "my results/first", cwd=folder)


def test_run_writes_everything_and_prints_the_summary(
    first_run: tuple[Path, subprocess.CompletedProcess[str]],
) -> None:
    folder, done = first_run
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""  # quiet in a pipe
    results = folder / "my results" / "first"
    stem = "nadir--mean"
    expected = [f"{stem}{end}" for end in (".nc", ".csv", ".json", "-history.png", "-means.png")]
    assert listing(results) == sorted([*expected, MANIFEST, "summary.txt"])
    assert listing(folder / "my results")[0] == "first"  # and no working folder left beside it
    assert (results / "summary.txt").read_text(encoding="utf-8") in done.stdout + "\n"
    assert "+Z" in done.stdout
    assert "responsible engineer" in done.stdout
    for picture in results.glob("*.png"):
        assert picture.read_bytes()[:8] == b"\x89PNG\r\n\x1a\n"  # PNG specification, section 5.2


def test_files_hold_what_python_computes(first_run: tuple[Path, subprocess.CompletedProcess[str]]) -> None:
    folder, _ = first_run
    mission = load_mission(folder / "my mission.toml")
    ds = mission.flux("nadir", "mean")
    stored = load(folder / "my results" / "first" / "nadir--mean.nc")
    xr.testing.assert_equal(stored, ds)
    with (folder / "my results" / "first" / "nadir--mean.csv").open(newline="", encoding="utf-8") as stream:
        rows = list(csv.DictReader(stream))
    column = np.array([float(row["absorbed_flux +Z [W m-2]"]) for row in rows])
    np.testing.assert_allclose(column, ds["absorbed_flux"].sel(face="+Z"), rtol=5e-10)  # ten digits are written
    told = json.loads((folder / "my results" / "first" / "nadir--mean.json").read_text(encoding="utf-8"))
    assert any("responsible engineer" in caution for caution in told["cautions"])
    assert told["definitions"]["environment"]["albedo"] == 0.3


def test_a_second_run_is_refused_unless_told_to_replace(
    first_run: tuple[Path, subprocess.CompletedProcess[str]],
) -> None:
    folder, _ = first_run
    results = folder / "my results" / "first"
    (results / "my notes.txt").write_text("mine")
    before = {path: path.read_bytes() for path in results.iterdir()}
    refused = envflux("run", "my mission.toml", "--out", results, cwd=folder)
    assert refused.returncode == 2
    assert refused.stderr.count("\n") == 1
    assert "--out is" in refused.stderr
    assert "--replace" in refused.stderr
    assert {path: path.read_bytes() for path in results.iterdir()} == before
    # Another mode's name: the files of the run before go, the user's own stays.
    text = MISSION.replace("[modes.nadir]", "[modes.other]")
    (folder / "other.toml").write_text(text, encoding="utf-8")
    replaced = envflux("run", "other.toml", "--out", results, "--replace", cwd=folder)
    assert replaced.returncode == 0, replaced.stderr
    names = ["other--mean.csv", "other--mean.json", "other--mean.nc", "summary.txt"]
    assert listing(results) == sorted([*names, MANIFEST, "my notes.txt"])
    assert (results / "my notes.txt").read_text() == "mine"


def test_same_in_same_out(tmp_path: Path) -> None:
    (tmp_path / "m.toml").write_text(MISSION, encoding="utf-8")
    for name in ("a", "b"):
        assert cli.main(["run", str(tmp_path / "m.toml"), "--out", str(tmp_path / name)]) == 0
    assert listing(tmp_path / "a") == listing(tmp_path / "b")
    for path in (tmp_path / "a").iterdir():
        if path.suffix != ".nc":  # HDF5 stamps its objects; what they hold is compared
            assert path.read_bytes() == (tmp_path / "b" / path.name).read_bytes()
    xr.testing.assert_identical(load(tmp_path / "a" / "nadir--mean.nc"), load(tmp_path / "b" / "nadir--mean.nc"))


def test_a_users_file_in_the_way_stops_the_run(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "m.toml").write_text(MISSION, encoding="utf-8")
    out = tmp_path / "out"
    out.mkdir()
    (out / "nadir--mean.csv").write_text("mine")
    assert cli.main(["run", str(tmp_path / "m.toml"), "--out", str(out), "--replace"]) == 2
    error = capsys.readouterr().err
    assert "it holds 'nadir--mean.csv'" in error
    assert error.count("\n") == 1
    assert listing(out) == ["nadir--mean.csv"]
    assert (out / "nadir--mean.csv").read_text() == "mine"


def test_a_coarse_step_is_a_caution_not_an_error(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    # 1/72 of a revolution at 560 km is 80 s.
    (tmp_path / "m.toml").write_text(MISSION.replace("step_s = 60", "step_s = 120"), encoding="utf-8")
    assert cli.main(["run", str(tmp_path / "m.toml"), "--out", str(tmp_path / "out")]) == 0
    said = capsys.readouterr()
    assert said.err.startswith("envflux: caution: ")
    assert "step_s" in said.err
    told = json.loads((tmp_path / "out" / "nadir--mean.json").read_text(encoding="utf-8"))
    assert any("step_s" in caution for caution in told["cautions"])


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (
            ["run", "none.toml", "--out", "x"],
            "envflux: none.toml is missing, but it must be a mission file that exists",
        ),
        # The missing file comes before whatever is wrong with the folder.
        (
            ["run", "none.toml", "--out", "."],
            "envflux: none.toml is missing, but it must be a mission file that exists",
        ),
        (["run", ".", "--out", "x"], "envflux: . is a folder, but it must be a mission file that exists"),
        (
            ["run", "m.toml", "--out", "m.toml/deep/x"],
            "envflux: --out is 'm.toml/deep/x', but it must be a folder that can be written to (Not a directory)",
        ),
        (["run", "m.toml", "--out", "m.toml"], "envflux: --out is 'm.toml', but it must be a folder"),
        (["run", "m.toml"], "envflux run: the following arguments are required: --out"),
        (["rum"], "envflux: argument COMMAND: invalid choice: 'rum'"),
        ([], "envflux: the following arguments are required: COMMAND"),
    ],
)
def test_wrong_calls_are_one_line(
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
    arguments: list[str],
    message: str,
) -> None:
    monkeypatch.chdir(tmp_path)
    (tmp_path / "m.toml").write_text(MISSION, encoding="utf-8")
    try:
        code = cli.main(arguments)
    except SystemExit as leave:  # argparse's own way out
        code = int(leave.code or 0)
    assert code == 2
    error = capsys.readouterr().err
    assert error.startswith(message)
    assert error.count("\n") == 1
    assert listing(tmp_path) == ["m.toml"]


def test_help_teaches_without_loading_the_rest() -> None:
    code = (
        "import sys, envflux.cli\n"
        "try: envflux.cli.main(['run', '--help'])\n"
        "except SystemExit: pass\n"
        "print(sorted({'numpy', 'xarray', 'matplotlib', 'numba', 'skyfield', 'pydantic'} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.endswith("[]\n")
    for word in ("--out", "--replace", "[modes.NAME]", "catalogue", "MODE--ENVIRONMENT.csv"):
        assert word in done.stdout


def all_keys() -> dict[str, tuple[type[Definition], tuple[str, str]]]:
    kinds = {**keys.ORBITS, **keys.ATTITUDES}
    models = {_tag_of(model): model for union in (Orbit, AnyAttitude) for model in _members(union)}
    assert set(models) == set(kinds)
    tables = {
        "[track]": TrackRequest, "[coatings.NAME]": Coating, "[[craft.faces]]": Face, "[modes.NAME]": Mode,
        "[environments.NAME]": Environment, "[output]": Output,
    }  # fmt: skip
    assert set(tables) == set(keys.TABLES)
    return {str(name): (model, {**kinds, **keys.TABLES}[str(name)]) for name, model in {**models, **tables}.items()}


@pytest.mark.parametrize("name", [*keys.ORBITS, *keys.ATTITUDES, *keys.TABLES])
def test_help_lists_the_keys_there_are(name: str) -> None:
    model, (needed, optional) = all_keys()[name]
    fields = {field: info.is_required() for field, info in model.model_fields.items() if field != "kind"}
    assert sorted(needed.split()) == sorted(field for field, required in fields.items() if required)
    assert sorted(optional.split()) == sorted(field for field, required in fields.items() if not required)
    for key in fields:
        assert re.search(rf"\b{key}\b", cli._RUN_EPILOG), key


def test_help_is_no_wider_than_a_terminal_may_be() -> None:
    assert max(map(len, cli._RUN_EPILOG.splitlines())) <= 102


TWO_CASES = """
[modes.turned]
attitude = {kind = "nadir", roll_deg = 12.5}
age = "EOL"
[modes.turning]
attitude = {kind = "spinning", axis = [0, 1, 1], about = "sun", rate_rpm = 10}
"""


def test_summary_says_how_each_case_flies_and_what_to_mind_first(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    text = MISSION.replace("step_s = 60", "step_s = 120") + TWO_CASES
    (tmp_path / "m.toml").write_text(text, encoding="utf-8")
    assert cli.main(["run", str(tmp_path / "m.toml"), "--out", str(tmp_path / "out")]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert "[nadir / mean]  nadir attitude" in lines
    assert "[turned / mean]  nadir attitude: roll 12.5 deg" in lines
    turning = "spinning attitude: axis [0, 1, 1], about sun, rate 10 rpm, averaged over the turn"
    assert f"[turning / mean]  {turning}" in lines
    starts = [line.split(":")[0] for line in lines]
    assert max(i for i, start in enumerate(starts) if start == "caution") < starts.index("note")
    assert starts.count("note") <= 3
    # The step is everybody's; the age is said of the one case that asked for it, in its own files alone.
    step, age = (line for line in lines if line.startswith("caution"))
    assert "step_s" in step
    assert age.startswith("caution: [turned / mean] age is EOL")
    for mode in ("nadir", "turned"):
        told = json.loads((tmp_path / "out" / f"{mode}--mean.json").read_text(encoding="utf-8"))
        assert any("age is EOL" in caution for caution in told["cautions"]) == (mode == "turned")
        assert any("step_s" in caution for caution in told["cautions"])
    assert max(map(len, lines[: starts.index("caution")])) <= 110


def test_undated_is_said_once(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    undated = '[orbit]\nkind = "undated"\naltitude_km = 560\nbeta_deg = 10\n'
    (tmp_path / "m.toml").write_text(MISSION.replace(ORBIT, undated), encoding="utf-8")
    assert cli.main(["run", str(tmp_path / "m.toml"), "--out", str(tmp_path / "out")]) == 0
    assert "undated orbit, 1 revolution from orbit noon" in capsys.readouterr().out.splitlines()


@pytest.mark.skipif(os.name != "posix", reason="pseudo-terminals are a Unix thing")
def test_progress_is_shown_on_a_terminal_only(tmp_path: Path) -> None:
    import pty
    import select

    (tmp_path / "m.toml").write_text(MISSION, encoding="utf-8")
    command = [sys.executable, "-m", "envflux", "run", "m.toml", "--out", "out"]
    ours, theirs = pty.openpty()
    with subprocess.Popen(command, cwd=tmp_path, stdout=subprocess.PIPE, stderr=theirs, text=True) as run:
        out, _ = run.communicate(timeout=300)
    ready, _, _ = select.select([ours], [], [], 1.0)
    assert ready, "nothing was shown"
    shown = os.read(ours, 100_000).decode()
    os.close(ours)
    os.close(theirs)
    assert run.returncode == 0
    assert "track" in shown
    assert "nadir--mean" in shown
    assert "3/3" in shown or "2/3" in shown
    assert "|" not in out


def test_version(capsys: pytest.CaptureFixture[str]) -> None:
    from importlib.metadata import version

    with pytest.raises(SystemExit) as leave:
        cli.main(["--version"])
    assert leave.value.code == 0
    assert capsys.readouterr().out == f"envflux {version('envflux')}\n"


@pytest.mark.parametrize(
    ("failure", "code", "message"),
    [
        (KeyboardInterrupt(), 130, "envflux: interrupted; nothing was written"),
        (OSError(28, "No space left on device"), 1, "envflux: [Errno 28] No space left on device"),
        (RuntimeError("odd"), 1, "envflux: unexpected RuntimeError: odd; --debug shows where"),
    ],
)
def test_failures_midway_leave_nothing(
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
    failure: BaseException,
    code: int,
    message: str,
) -> None:
    from envflux import tables

    (tmp_path / "m.toml").write_text(MISSION, encoding="utf-8")

    def fail(*_: object, **__: object) -> None:
        raise failure

    monkeypatch.setattr(tables, "write_table", fail)  # after the netCDF file is written
    assert cli.main(["run", str(tmp_path / "m.toml"), "--out", str(tmp_path / "deep" / "out")]) == code
    assert capsys.readouterr().err == message + "\n"
    assert listing(tmp_path) == ["m.toml"]


def test_trouble_in_the_drawing_process_reaches_the_first_one(tmp_path: Path) -> None:
    from envflux.cli.drawing import Painter

    with Painter() as artist:
        artist.order(xr.Dataset(attrs={"title": "no fluxes"}), tmp_path, "stem", "time")
        with pytest.raises(KeyError, match="face"):
            artist.finish(lambda: None)
        artist.order(xr.Dataset(), tmp_path, "stem", "time")
        artist._process.kill()
        with pytest.raises(OSError, match="draws the pictures was stopped"):
            artist.finish(lambda: None)


def test_a_failed_exchange_brings_the_earlier_results_back(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    out = tmp_path / "out"
    with results_folder(out, replace=False) as fresh:
        (fresh / "a.csv").write_text("first a")
        (fresh / "b.csv").write_text("first b")
    (out / "mine.txt").write_text("mine")
    before = {name: (out / name).read_text() for name in listing(out)}
    replace = Path.replace

    def fails_at_b(self: Path, target: Path) -> Path:
        if self.name == "b.csv" and self.parent.name == "new":
            raise OSError("disk full")
        return replace(self, target)

    monkeypatch.setattr(Path, "replace", fails_at_b)

    def again() -> None:
        with results_folder(out, replace=True) as fresh:
            for name in ("a.csv", "b.csv", "c.csv"):
                (fresh / name).write_text(f"second {name}")

    with pytest.raises(OSError, match="disk full"):
        again()
    assert {name: (out / name).read_text() for name in listing(out)} == before


def test_trouble_with_the_disk_names_no_file_of_ours(tmp_path: Path) -> None:
    out = tmp_path / "deep" / "out"

    def run() -> None:
        with results_folder(out, replace=False) as fresh:
            raise OSError(28, "No space left on device", str(fresh / "a.nc"))

    with pytest.raises(OSError, match=r"No space left on device: '[^']*deep.out'$"):
        run()
    assert listing(tmp_path) == []


def test_someone_who_came_first_is_not_overwritten(tmp_path: Path) -> None:
    out = tmp_path / "out"

    def second() -> None:
        with results_folder(out, replace=False) as fresh:
            (fresh / "a.csv").write_text("ours")
            out.mkdir()
            (out / "a.csv").write_text("theirs")

    with pytest.raises(InputError, match=r"--out is .*, but it holds files"):
        second()
    assert listing(out) == ["a.csv"]
    assert (out / "a.csv").read_text() == "theirs"


@pytest.mark.skipif(os.name != "posix", reason="links to folders need rights elsewhere")
def test_a_link_to_a_folder_stays_a_link(tmp_path: Path) -> None:
    (tmp_path / "real").mkdir()
    (tmp_path / "link").symlink_to(tmp_path / "real")
    with results_folder(tmp_path / "link", replace=False) as fresh:
        (fresh / "a.csv").write_text("a")
    assert (tmp_path / "link").is_symlink()
    assert listing(tmp_path / "real") == ["a.csv", MANIFEST]


def test_own_attitude_law_example_runs() -> None:
    command = [sys.executable, "-W", "error", str(EXAMPLES / "own_attitude_law.py")]
    done = subprocess.run(command, capture_output=True, text=True, check=False, timeout=300)
    assert done.returncode == 0, done.stderr
    assert "+Z" in done.stdout
