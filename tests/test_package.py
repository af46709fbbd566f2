"""The package as a whole: its public names, what importing it costs, where it runs, and what its outputs are called."""

from __future__ import annotations

import ast
import json
import os
import re
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

import envflux as ef
from envflux import schema

PACKAGE = Path(ef.__file__).parent
ROOT = PACKAGE.parent

# The target for `import envflux` is one second on an ordinary machine; the best of three runs leaves out what
# else the machine does.
IMPORT_S = 1.0

MODULES = sorted(
    ".".join(path.relative_to(ROOT).with_suffix("").parts).removesuffix(".__init__")
    for path in PACKAGE.rglob("*.py")
    if path.name != "__main__.py"
)


def run_python(code: str, **options: object) -> str:
    """What `code` prints in a fresh interpreter; its error output if it fails."""
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False, **options)  # type: ignore[call-overload]  # options of subprocess.run
    assert done.returncode == 0, done.stderr
    return str(done.stdout)


# -- public names ------------------------------------------------------------------------------------


def imported_for_type_checkers() -> dict[str, str]:
    """Name by name, the module that the TYPE_CHECKING block of the package takes it from."""
    tree = ast.parse((PACKAGE / "__init__.py").read_text(encoding="utf-8"))
    (block,) = (node for node in tree.body if isinstance(node, ast.If))
    return {
        alias.name: str(node.module)
        for node in block.body
        if isinstance(node, ast.ImportFrom)
        for alias in node.names
        if not isinstance(node, ast.Import)
    }


def test_the_three_lists_of_public_names_agree() -> None:
    homes = {name: f"envflux.{module}" for name, module in ef._PUBLIC.items()}
    modules = dict.fromkeys(ef._MODULES, "envflux")
    assert imported_for_type_checkers() == homes | modules
    assert sorted(ef.__all__) == sorted([*homes, *modules])
    assert len(set(ef.__all__)) == len(ef.__all__)


@pytest.mark.parametrize("name", ef.__all__)
def test_public_name_resolves_and_is_documented(name: str) -> None:
    value = getattr(ef, name)
    assert name in dir(ef)
    if callable(value) or name in ef._MODULES:
        assert (value.__doc__ or "").strip(), f"{name} has no docstring"


def test_an_unknown_name_is_an_attribute_error() -> None:
    with pytest.raises(AttributeError, match=r"envflux.*no attribute 'fluxx'"):
        _ = ef.fluxx  # type: ignore[attr-defined]  # the point of the test


def test_no_module_bears_the_name_of_a_public_function() -> None:
    shadowed = {module.split(".")[1] for module in MODULES if module.count(".") == 1} & set(ef.__all__)
    assert shadowed == set(ef._MODULES)


# Every public name in use, once. Run before and after all submodules are imported: an import of a submodule sets
# an attribute of the package, and must never take the place of a function.
USE_EVERY_NAME = """
import numpy as np
import envflux as ef

def use_all():
    used = {}
    orbit = used["UndatedOrbit"] = ef.UndatedOrbit(560, 30)
    when = {"epoch": "2031-03-20T06:00:00Z"}
    used["CircularOrbit"] = ef.CircularOrbit(560, 53, 40, **when)
    used["KeplerOrbit"] = ef.KeplerOrbit(semi_major_axis_km=7000, inclination_deg=53, **when)
    used["SunSynchronousOrbit"] = ef.SunSynchronousOrbit(560, ltan_hours=10.5, **when)
    used["OmmOrbit"] = ef.OmmOrbit("2031-03-20T06:00:00Z", 15.1, 0.001, 53, 40, 10, 20)
    used["TleOrbit"] = ef.TleOrbit(
        "1 99999U 31999ZZ  31152.27083333  .00001234  00000-0  12345-3 0  9995",
        "2 99999  51.2345 123.4567 0012345  67.8901 234.5678 15.12345678    19",
    )
    used["Shadow"] = ef.Shadow()
    track = orbit.track(step_s=orbit.period_s / 72)
    used["eclipses"] = ef.eclipses(track)
    used["track_from_arrays"] = ef.track_from_arrays(
        track.time.values, track.position.values, track.velocity.values, track.sun_direction.values
    )
    coating = used["Coating"] = ef.Coating(0.3, ef.Spread(0.7, 0.8, 0.9))
    used["Spread"] = ef.Spread(0.1, 0.2, 0.3)
    used["catalogue_coating"] = ef.catalogue_coating("C156")
    used["coating_catalogue"] = ef.coating_catalogue()
    used["find_coatings"] = ef.find_coatings("white paint")
    face = used["Face"] = ef.Face("lid", "+Z", 1.0, coating)
    used["Craft"] = ef.Craft([face])
    craft = used["box_craft"] = ef.box_craft((1, 2, 3), coating)
    law = used["NadirPointing"] = ef.NadirPointing()
    used["AttitudeLaw"] = isinstance(law, ef.AttitudeLaw)
    used["InertialAttitude"] = ef.InertialAttitude((1, 0, 0, 0))
    used["SunPointing"] = ef.SunPointing()
    used["Spinning"] = ef.Spinning(rate_rpm=1)
    used["Orientation"] = ef.Orientation(np.eye(3)[None, None], np.ones(1))
    earth = used["Environment"] = ef.Environment(1361, 0.3, 237)
    used["environment_preset"] = ef.environment_preset("ECSS-E-ST-10-04C Rev.1")
    used["environment_presets"] = ef.environment_presets()
    used["solar_constant"] = ef.solar_constant("IAU 2015 B3")
    used["SOLAR_CONSTANTS"] = ef.SOLAR_CONSTANTS["IAU 2015 B3"]
    factors = used["factors"] = ef.factors(track, law, craft)
    used["combine"] = ef.combine(factors, earth)
    ds = used["flux"] = ef.flux(track, law, craft, earth)
    for name in ("orbit_mean", "extremes", "sun_exposure", "energy_closure"):
        used[name] = getattr(ef, name)(ds)
    used["EARTH"] = ef.EARTH.radius_km
    used["Planet"] = ef.Planet("Invented", 1000.0, 500.0)
    used["tables"] = ef.tables.summary_table(ds)
    used["plots"] = ef.plots.flux_history
    used["load_mission"] = mission = ef.load_mission(EXAMPLE)
    used["Mission"] = ef.Mission.from_json(mission.to_json())
    for kind in (ef.EnvfluxWarning, ef.CoarseStepWarning, ef.OmittedTermWarning):
        used[kind.__name__] = kind("words")
    used["InputError"] = ef.InputError("field", 1, "2")
    assert sorted(used) == sorted(ef.__all__), set(used) ^ set(ef.__all__)
"""


@pytest.mark.parametrize("order", ["names first", "modules first"])
def test_every_public_name_works_before_and_after_all_modules_are_imported(order: str) -> None:
    imports = f"import importlib\nfor name in {MODULES!r}:\n    importlib.import_module(name)\n"
    use = "use_all()\n"
    example = f"EXAMPLE = {str(ROOT / 'examples' / 'imager.toml')!r}\n"
    steps = use + imports + use if order == "names first" else imports + use
    run_python("import matplotlib; matplotlib.use('Agg')\n" + example + USE_EVERY_NAME + steps)


# -- what importing costs ------------------------------------------------------------------------------


def test_import_is_light() -> None:
    heavy = ("matplotlib", "numba", "skyfield", "ipywidgets", "xarray", "pandas", "scipy", "sgp4", "h5netcdf", "numpy")
    code = f"import sys, envflux; print([name for name in {heavy!r} if name in sys.modules])"
    assert run_python(code).strip() == "[]"


def test_fluxes_need_no_drawing() -> None:
    code = (
        "import sys, envflux as ef\n"
        "track = ef.CircularOrbit(560, 53, 40, epoch='2031-03-20T06:00:00Z').track()\n"
        "craft = ef.box_craft((1, 1, 1), ef.Coating(0.3, 0.8))\n"
        "ef.orbit_mean(ef.flux(track, ef.NadirPointing(), craft, ef.Environment(1361, 0.3, 237)))\n"
        "print([name for name in ('matplotlib', 'ipywidgets', 'tqdm', 'pvlib', 'erfa') if name in sys.modules])"
    )
    assert run_python(code).strip() == "[]"


def test_import_is_quick() -> None:
    code = "import time; start = time.perf_counter(); import envflux; print(time.perf_counter() - start)"
    assert min(float(run_python(code)) for _ in range(3)) < IMPORT_S


@pytest.mark.skipif(not hasattr(os, "fork"), reason="one interpreter for each module would take a minute without fork")
def test_each_module_can_be_imported_alone() -> None:
    # The libraries are loaded once; a forked child then imports one module of ours and nothing else.
    code = (
        "import os, sys, traceback\n"
        "import h5netcdf, numba, numpy, pandas, pydantic, sgp4.api, skyfield.api, tqdm, xarray\n"
        "assert not any(name.startswith('envflux') for name in sys.modules)\n"
        f"for module in {MODULES!r}:\n"
        "    child = os.fork()\n"
        "    if not child:\n"
        "        try:\n"
        "            __import__(module)\n"
        "        except BaseException:\n"
        "            traceback.print_exc()\n"
        "            os._exit(1)\n"
        "        os._exit(0)\n"
        "    if os.waitpid(child, 0)[1]:\n"
        "        print(module)\n"
    )
    assert run_python(code) == ""


# -- where it runs -------------------------------------------------------------------------------------

# Root writes where it likes. This gives up that right for good, in the process that calls it (Linux).
OBEY_PERMISSIONS = """
import ctypes, os, sys
if os.geteuid() == 0:
    drop_from_bounding_set, override_permissions = 24, 1
    if ctypes.CDLL(None).prctl(drop_from_bounding_set, override_permissions, 0, 0, 0) != 0:
        sys.exit("cannot give up root's right to write anywhere")
os.execv(sys.executable, [sys.executable, *sys.argv[1:]])
"""


@pytest.mark.skipif(sys.platform == "win32", reason="needs the permissions of a Unix file system")
def test_runs_where_neither_the_package_nor_the_home_folder_can_be_written(tmp_path: Path) -> None:
    site, home, temporary = tmp_path / "site", tmp_path / "home", tmp_path / "temporary"
    shutil.copytree(PACKAGE, site / "envflux", ignore=shutil.ignore_patterns("__pycache__"))
    home.mkdir()
    temporary.mkdir()
    locked = [home, *(path for path in (site, *site.rglob("*")) if path.is_dir())]
    for folder in locked:
        folder.chmod(0o555)
    code = (
        f"import sys; sys.path.insert(0, {str(site)!r})\n"
        "import os, pathlib, envflux as ef\n"
        f"assert pathlib.Path(ef.__file__).is_relative_to({str(site)!r})\n"
        f"for folder in {[str(home), str(site / 'envflux')]!r}:\n"
        "    assert not os.access(folder, os.W_OK), 'the test would prove nothing: ' + folder\n"
        "track = ef.CircularOrbit(560, 53, 40, epoch='2031-03-20T06:00:00Z').track()\n"
        "craft = ef.box_craft((1, 1, 1), ef.Coating(0.3, 0.8))\n"
        "ds = ef.flux(track, ef.NadirPointing(), craft, ef.Environment(1361, 0.3, 237))\n"
        "print(ef.orbit_mean(ds).planetary_ir_flux.sel(face='+Z').item())\n"
    )
    variables = {key: value for key, value in os.environ.items() if key not in ("XDG_CACHE_HOME", "NUMBA_CACHE_DIR")}
    variables |= {"HOME": str(home), "TMPDIR": str(temporary), "PYTHONDONTWRITEBYTECODE": "1"}
    try:
        command = [sys.executable, "-c", OBEY_PERMISSIONS, "-c", code]
        done = subprocess.run(command, capture_output=True, text=True, check=False, env=variables, cwd=temporary)
    finally:
        for folder in locked:
            folder.chmod(0o755)
    assert done.returncode == 0, done.stderr
    # View factor of a plate that faces nadir, (R/r)**2: closed form, common practice.
    assert float(done.stdout) == pytest.approx(237 * (6378.137 / 6938.137) ** 2, rel=1e-9)
    assert list(temporary.rglob("*.nbi")), "compiled code was not kept anywhere"


def test_runs_as_a_module_from_any_folder(tmp_path: Path) -> None:
    folder = tmp_path / "a folder with spaces"
    folder.mkdir()
    command = [sys.executable, "-m", "envflux", "--version"]
    done = subprocess.run(command, capture_output=True, text=True, check=True, cwd=folder)
    assert done.stdout.strip() == f"envflux {ef.__version__}"


# -- what the outputs are called -------------------------------------------------------------------------


def results() -> dict[str, xr.Dataset]:
    craft = ef.box_craft((1.0, 2.0, 3.0), ef.Coating(0.3, 0.8))
    earth = ef.Environment(1361, 0.3, 237)
    dated = ef.CircularOrbit(560, 53, 40, epoch="2031-03-20T06:00:00Z").track()
    fluxes = ef.flux(dated, ef.NadirPointing(), craft, earth)
    undated = ef.UndatedOrbit(560, 30).track()
    return {
        "track": dated,
        "undated track": undated,
        "factors": ef.factors(dated, ef.NadirPointing(), craft),
        "flux": fluxes,
        "undated flux": ef.flux(undated, ef.Spinning(rate_rpm=20), craft, earth),
        "orbit mean": ef.orbit_mean(fluxes),
        "sun exposure": ef.sun_exposure(fluxes),
    }


RESULTS = results()

# What UDUNITS reads of the units in use: unit names with whole exponents, and 1. (Checked against the udunits2
# database with a general units library; `au` is its astronomical unit.)
UNIT = re.compile(r"1|(W|m|m2|km|s|h|min|degree|degrees_north|degrees_east|au)( ?(m|s)-[12])*")

# Names used here that stand in the CF standard name table, from memory.
STANDARD_NAMES = {"time", "latitude", "longitude"}


@pytest.mark.parametrize("result", RESULTS)
def test_every_variable_is_in_the_table_and_says_what_it_is(result: str) -> None:
    ds = RESULTS[result]
    for key, variable in ds.variables.items():
        name = str(key)
        assert name in schema.VARIABLES, name
        known = schema.VARIABLES[name]
        assert variable.attrs["long_name"] == known.long_name, name
        assert variable.attrs.get("units") == known.units, name
        assert set(variable.dims) <= {"time", "face", "xyz", "rev"}
        if "time" in ds.dims and "time" in known.dims:
            assert variable.dims == known.dims, name


def test_the_table_has_no_row_that_nothing_makes() -> None:
    made = {str(name) for ds in RESULTS.values() for name in ds.variables}
    assert set(schema.VARIABLES) - made == set()


@pytest.mark.parametrize("result", RESULTS)
def test_attributes_follow_cf(result: str) -> None:
    ds = RESULTS[result]
    assert ds.attrs["Conventions"] == "CF-1.11"
    assert ds.attrs["history"]
    for value in ds.attrs.values():
        assert isinstance(value, (str, int, float)), "netCDF takes no None, bool or dict"
        assert not isinstance(value, bool)
    for key, variable in ds.variables.items():
        attributes = variable.attrs
        if variable.dtype.kind in "fi" and "flag_values" not in attributes:
            assert UNIT.fullmatch(attributes["units"]), (key, attributes["units"])
        if "standard_name" in attributes:
            assert attributes["standard_name"] in STANDARD_NAMES
        if "flag_values" in attributes:
            assert len(attributes["flag_values"]) == len(attributes["flag_meanings"].split())
            assert set(np.unique(variable.values)) <= set(attributes["flag_values"])
        if "cell_methods" in attributes:
            assert attributes["cell_methods"] == ("time: mean" if "rev" in ds.dims else "time: point")


def test_values_on_samples_are_points_and_means_are_means() -> None:
    assert RESULTS["flux"].solar_flux.attrs["cell_methods"] == "time: point"
    assert RESULTS["orbit mean"].solar_flux.attrs["cell_methods"] == "time: mean"


def test_the_record_makes_the_result_again() -> None:
    ds = RESULTS["flux"]
    orbit = ef.CircularOrbit.from_json(ds.attrs["orbit"])
    asked = {key: value for key, value in json.loads(ds.attrs["request"]).items() if value is not None}
    asked["shadow"] = ef.Shadow(**asked["shadow"])
    law = ef.NadirPointing.from_json(ds.attrs["attitude"])
    craft, earth = ef.Craft.from_json(ds.attrs["craft"]), ef.Environment.from_json(ds.attrs["environment"])
    again = ef.flux(orbit.track(**asked), law, craft, earth)
    xr.testing.assert_identical(again, ds)
