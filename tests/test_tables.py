"""Files and texts: what goes out must come back, and must explain itself."""

from __future__ import annotations

import csv
import json
import re
from pathlib import Path
from typing import Any

import h5netcdf
import numpy as np
import pytest
import xarray as xr

from envflux import tables
from envflux.attitudes import NadirPointing
from envflux.coatings import Cells, Coating
from envflux.craft import Craft, Face
from envflux.environments import Environment
from envflux.errors import InputError
from envflux.fluxes import factors, flux
from envflux.orbits import CircularOrbit, SunSynchronousOrbit, UndatedOrbit, eclipses
from envflux.reductions import orbit_mean
from envflux.schema import FLUXES, INCIDENT, VARIABLES
from envflux.tables import load, orbit_lines, save, summary_table, write_table

TEN_DIGITS = 5e-10  # what ten significant digits in the table lose at most, relative

PAINT = Coating(absorptance=0.21, emittance=0.87, name="invented paint")
CRAFT = Craft((Face("wing, left", (0.3, -0.2, 0.9), 0.37, PAINT, back=Coating(0.93, 0.79, name="cells")),))
ENVIRONMENT = Environment(albedo=0.29, planetary_ir_w_m2=241)
ORBITS = {
    "dated": CircularOrbit(altitude_km=560, inclination_deg=53, raan_deg=40, epoch="2031-03-20T06:00:00.123456Z"),
    "undated": UndatedOrbit(altitude_km=700, beta_deg=11),
}


@pytest.fixture(scope="module", params=list(ORBITS))
def ds(request: pytest.FixtureRequest) -> xr.Dataset:
    return flux(ORBITS[request.param].track(revolutions=2, step_s=60), NadirPointing(), CRAFT, ENVIRONMENT)


def rows(path: Path) -> list[dict[str, str]]:
    with path.open(newline="", encoding="utf-8") as stream:
        return list(csv.DictReader(stream))


@pytest.mark.parametrize("of", ["flux", "track", "factors", "orbit mean", "eclipses"])
@pytest.mark.parametrize("kind", list(ORBITS))
def test_netcdf_round_trip_is_exact(tmp_path: Path, kind: str, of: str) -> None:
    track = ORBITS[kind].track(revolutions=2, step_s=60)
    whole = flux(track, NadirPointing(), CRAFT, ENVIRONMENT)
    made = {
        "flux": lambda: whole,
        "track": lambda: track,
        "factors": lambda: factors(track, NadirPointing(), CRAFT),
        "orbit mean": lambda: orbit_mean(whole),
        "eclipses": lambda: eclipses(track),
    }[of]()
    back = load(save(made, tmp_path / "a b.nc"))
    xr.testing.assert_identical(back, made)
    for name in made.variables:
        # Texts may come back as another kind of text; numbers and times keep their type.
        assert back[name].dtype == made[name].dtype or made[name].dtype.kind in "OUT", name
    assert [path.name for path in tmp_path.iterdir()] == ["a b.nc"]


def test_netcdf_says_what_it_holds_in_cf_words(tmp_path: Path, ds: xr.Dataset) -> None:
    # CF conventions 1.11, section 2.6.1 (Conventions), 3.1 (units), 7.3 (cell_methods), 3.5 (flags of the
    # variable's own type).
    with h5netcdf.File(save(ds, tmp_path / "x.nc")) as file:
        assert file.attrs["Conventions"] == "CF-1.11"
        assert file["solar_flux"].attrs["units"] == "W m-2"
        assert file["solar_flux"].attrs["cell_methods"] == "time: point"
        flags = file["contact"]
        assert flags.attrs["flag_values"].dtype == flags.dtype
        assert file["time"].attrs["units"].startswith("nanoseconds")


def test_a_failed_write_keeps_the_file_of_before(tmp_path: Path, ds: xr.Dataset) -> None:
    path = save(ds, tmp_path / "x.nc")
    before = path.read_bytes()
    with pytest.raises((TypeError, ValueError)):
        save(ds.assign_attrs(broken={"a": 1}), path)
    assert path.read_bytes() == before
    assert [entry.name for entry in tmp_path.iterdir()] == ["x.nc"]


def test_load_wants_a_netcdf_file(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"path is '.*none.nc', but it must be the name of a netCDF file that exists"):
        load(tmp_path / "none.nc")
    (tmp_path / "text.nc").write_text("not netCDF")
    with pytest.raises(InputError, match=r"path is '.*text.nc', but it must be the name of a netCDF-4 file"):
        load(tmp_path / "text.nc")


def test_table_holds_the_numbers(tmp_path: Path, ds: xr.Dataset) -> None:
    table = rows(write_table(ds, tmp_path / "x.csv"))
    assert len(table) == ds.sizes["time"]
    for name in ("solar_flux", "albedo_flux", "planetary_ir_flux", "absorbed_flux"):
        for face in ds["face"].values:
            column = np.array([float(row[f"{name} {face} [W m-2]"]) for row in table])
            np.testing.assert_allclose(column, ds[name].sel(face=face), rtol=TEN_DIGITS)
    elapsed = np.array([float(row["elapsed [s]"]) for row in table])
    np.testing.assert_allclose(elapsed, ds["elapsed"], rtol=TEN_DIGITS)


def test_times_are_iso_8601_or_seconds_from_noon(tmp_path: Path) -> None:
    for kind, orbit in ORBITS.items():
        track = orbit.track(step_s=60)
        table = rows(write_table(track, tmp_path / f"{kind}.csv"))
        if kind == "dated":
            # ISO 8601 with Z for UTC; the epoch has microseconds, so the first row shows them.
            assert table[0]["time [UTC]"] == "2031-03-20T06:00:00.123456Z"
            times = np.array([row["time [UTC]"].removesuffix("Z") for row in table], "datetime64[us]")
            assert np.abs(times - track["time"].values).max() <= np.timedelta64(1, "us")
        else:
            assert table[0]["time from orbit noon [s]"] == "0"


def test_description_describes_every_column(tmp_path: Path, ds: xr.Dataset) -> None:
    path = write_table(ds, tmp_path / "the table.csv", title="Invented", cautions=("mind the gap",))
    told: dict[str, Any] = json.loads(path.with_suffix(".json").read_text(encoding="utf-8"))
    with path.open(newline="", encoding="utf-8") as stream:
        header = next(csv.reader(stream))
    assert [field["name"] for field in told["schema"]["fields"]] == header
    assert all(field["unit"] and field["description"] and field["type"] for field in told["schema"]["fields"])
    assert told["path"] == "the table.csv"
    assert told["cautions"] == [*tables.CAUTIONS, "mind the gap"]
    fields = {field["name"]: field for field in told["schema"]["fields"]}
    front = fields["absorbed_flux wing, left [W m-2]"]
    assert front["face"] == "wing, left"
    assert front["area_m2"] == 0.37
    assert front["absorptance"] == 0.21
    assert front["coating"] == "invented paint"
    assert fields["absorbed_flux wing, left back [W m-2]"]["coating"] == "cells"
    assert told["definitions"]["craft"]["faces"][0]["name"] == "wing, left"
    assert told["definitions"]["environment"]["albedo"] == 0.29
    assert told["attributes"]["Conventions"] == "CF-1.11"


def test_orbit_means_make_a_table_by_revolution(tmp_path: Path, ds: xr.Dataset) -> None:
    means = orbit_mean(ds)
    table = rows(write_table(means, tmp_path / "m.csv"))
    assert [row["rev [1]"] for row in table] == ["0", "1"]
    assert float(table[1]["solar_flux wing, left [W m-2]"]) == pytest.approx(
        float(means["solar_flux"].sel(face="wing, left")[1]), rel=TEN_DIGITS
    )


def test_missing_numbers_are_empty_cells(tmp_path: Path, ds: xr.Dataset) -> None:
    holed = ds.copy(deep=True)
    holed["sunlit"][0] = np.nan
    table = rows(write_table(holed, tmp_path / "x.csv"))
    assert table[0]["sunlit [1]"] == ""
    assert table[1]["sunlit [1]"] != ""


def test_table_needs_rows(tmp_path: Path, ds: xr.Dataset) -> None:
    with pytest.raises(InputError, match=r"ds is 'a dataset over face.*', but it must be one over time or rev"):
        write_table(
            ds[["area"]].drop_dims("time", errors="ignore").drop_vars("time", errors="ignore"), tmp_path / "x.csv"
        )


@pytest.mark.parametrize("of", ["flux", "orbit mean"])
def test_a_slim_table_has_just_what_was_chosen(tmp_path: Path, ds: xr.Dataset, of: str) -> None:
    whole = ds if of == "flux" else orbit_mean(ds)
    path = write_table(whole[["absorbed_flux"]], tmp_path / "x.csv")
    header = list(rows(path)[0])
    assert [name for name in header if name.split()[0] in VARIABLES and len(VARIABLES[name.split()[0]].dims) > 1] == [
        "absorbed_flux wing, left [W m-2]",
        "absorbed_flux wing, left back [W m-2]",
    ]
    np.testing.assert_allclose(
        [float(row["absorbed_flux wing, left back [W m-2]"]) for row in rows(path)],
        whole["absorbed_flux"].sel(face="wing, left back"),
        rtol=TEN_DIGITS,
    )


def test_table_says_where_it_cannot_go(tmp_path: Path, ds: xr.Dataset) -> None:
    with pytest.raises(InputError, match=r"^path is 'x.txt', but it must be a name that ends in .csv$"):
        write_table(ds, tmp_path / "x.txt")
    (tmp_path / "folder.csv").mkdir()
    for write in (write_table, save):
        with pytest.raises(
            InputError, match=r"^path is 'x.csv', but it must be in a folder that exists, and '.*none' does"
        ):
            write(ds, tmp_path / "none" / "x.csv")
        with pytest.raises(InputError, match=r"^path is the folder folder.csv, but it must be a file's name$"):
            write(ds, tmp_path / "folder.csv")
    assert [entry.name for entry in tmp_path.iterdir()] == ["folder.csv"]


def test_table_replaces_both_files_of_before(tmp_path: Path, ds: xr.Dataset) -> None:
    for name in ("x.csv", "x.json"):
        (tmp_path / name).write_text("before")
    write_table(ds, tmp_path / "x.csv")
    assert all((tmp_path / name).read_text(encoding="utf-8") != "before" for name in ("x.csv", "x.json"))


def with_cells(cells: Cells) -> xr.Dataset:
    solar = Coating(0.9, 0.82, electrical_extraction=0.24, name="cells")
    craft = Craft((Face("panel", "-Z", 2.5, solar, back=PAINT), Face("other", "+X", 1.0, solar)))
    return flux(ORBITS["undated"].track(step_s=60), NadirPointing(), craft, ENVIRONMENT, cells=cells)


def test_electricity_is_said_where_it_is_taken_away(tmp_path: Path) -> None:
    loaded, unloaded = with_cells("loaded"), with_cells("unloaded")
    note = "a of panel, other: 0.9 less the 0.24 of the sunlight that loaded cells make electricity"
    assert note in summary_table(loaded).splitlines()
    assert "electricity" not in summary_table(unloaded)
    for ds, absorptance in ((loaded, 0.66), (unloaded, 0.9)):
        path = write_table(ds, tmp_path / "x.csv").with_suffix(".json")
        fields = {field["name"]: field for field in json.loads(path.read_text(encoding="utf-8"))["schema"]["fields"]}
        panel = fields["absorbed_flux panel [W m-2]"]
        assert panel["absorptance"] == absorptance
        said = panel.get("absorptance_note", "")
        assert ("solar absorptance 0.9 less 0.24" in said) == (ds is loaded)
        assert "absorptance_note" not in fields["absorbed_flux panel back [W m-2]"]


def test_the_formula_told_gives_the_column(tmp_path: Path, ds: xr.Dataset) -> None:
    path = write_table(ds, tmp_path / "x.csv")
    told = json.loads(path.with_suffix(".json").read_text(encoding="utf-8"))["schema"]["fields"]
    field = next(field for field in told if field["name"] == "absorbed_flux wing, left [W m-2]")
    for row in rows(path)[::20]:
        parts = {name: float(row[f"{name} wing, left [W m-2]"]) for name in INCIDENT}
        value = eval(field["formula"], {name: field[name] for name in ("absorptance", "emittance")} | parts)
        # Four numbers of ten digits each.
        assert float(row[field["name"]]) == pytest.approx(value, rel=4 * TEN_DIGITS)


def test_summary_shows_means_range_and_power(ds: xr.Dataset) -> None:
    text = summary_table(ds)
    means = orbit_mean(ds).mean("rev")
    power = 0.0
    for face, absorptance, emittance in (("wing, left", 0.21, 0.87), ("wing, left back", 0.93, 0.79)):
        line = next(line for line in text.splitlines() if line.startswith(f"{face:15} "))
        shown = [float(word) for word in line.removeprefix(face).split()]
        mean = {name: float(means[name].sel(face=face)) for name in FLUXES}
        absorbed = ds["absorbed_flux"].sel(face=face)
        minute = float(ds["elapsed"][int(absorbed.argmax("time"))]) / 60
        expected = [0.37, absorptance, emittance, *mean.values()]
        expected += [float(absorbed.min()), float(absorbed.max()), 0.37 * mean["absorbed_flux"], minute]
        assert shown == [round(value, 2) if i > 2 else value for i, value in enumerate(expected)]
        power += 0.37 * mean["absorbed_flux"]
    total = next(line for line in text.splitlines() if line.startswith("all faces "))
    assert total.split() == ["all", "faces", f"{power:.2f}"]
    assert len(total) == line.index(f" {shown[-2]:.2f}") + len(f" {shown[-2]:.2f}")  # it stands under the powers
    assert "min per revolution" in text
    assert max(len(line) for line in text.splitlines()) <= 110


def test_summary_of_less_than_a_revolution_has_no_means() -> None:
    part = flux(ORBITS["undated"].track(duration_s=1800, step_s=60), NadirPointing(), CRAFT, ENVIRONMENT)
    text = summary_table(part)
    assert "less than one revolution: no orbit means" in text
    assert "all faces" not in text


def test_summary_gives_the_derived_elements() -> None:
    orbit = SunSynchronousOrbit(altitude_km=560, ltdn_hours=10.5, epoch="2031-03-20T06:00:00Z")
    (line,) = [line for line in orbit_lines(orbit.track()) if "inclination" in line]
    inclination, raan = (float(word) for word in re.findall(r"[0-9]+\.[0-9]+", line))
    # By hand: cos i = -rate / (1.5 J2 (R/a)^2 n), the textbook's first-order drift of the node, at 360 deg a tropical
    # year of 365.24219 d, with a = 6938.137 km (formula and figures from memory).
    rate = 2 * np.pi / (365.24219 * 86400)
    n = np.sqrt(398600.4418 / 6938.137**3)
    by_hand = np.degrees(np.arccos(-rate / (1.5 * 1.08262668e-3 * (6378.137 / 6938.137) ** 2 * n)))
    assert inclination == pytest.approx(by_hand, abs=1e-4)  # four decimals are printed
    assert raan == pytest.approx(orbit.raan_deg, abs=1e-4)
    assert not any("inclination" in line for line in orbit_lines(ORBITS["undated"].track()))


def test_summary_without_an_eclipse_says_so() -> None:
    lines = orbit_lines(UndatedOrbit(altitude_km=700, beta_deg=90).track())
    assert lines[-1] == "sunlit 1.0000  no eclipse"
