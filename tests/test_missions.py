"""The mission file: what it may say, and how it is told what it may not."""

from __future__ import annotations

import json
import re
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from envflux.attitudes import NadirPointing, Spinning
from envflux.coatings import Coating, Spread, catalogue_coating
from envflux.craft import box_craft
from envflux.environments import Environment, environment_preset
from envflux.errors import InputError
from envflux.fluxes import flux
from envflux.missions import About, Mission, Mode, TrackRequest, load_mission
from envflux.orbits import CircularOrbit, OmmOrbit, TleOrbit

EXAMPLES = Path(__file__).parents[1] / "examples"
MISSION_FILES = sorted(EXAMPLES.glob("*.toml"))

TEXT = """
[mission]
name = "Invented"

[orbit]
kind = "circular"
altitude_km = 560
inclination_deg = 53
raan_deg = 40
epoch = 2031-03-20T06:00:00Z

[track]
step_s = 40

[coatings.paint]
absorptance = {minimum = 0.2, nominal = 0.25, maximum = 0.3}
emittance = 0.85

[craft]
name = "box"
box = {size_m = [0.8, 0.8, 1.2], coating = "paint", coatings = {"+Z" = "C050"}}

[[craft.faces]]
name = "wing"
normal = [0, 0, 2]
area_m2 = 2
coating = "paint"
back = {absorptance = 0.9, emittance = 0.8}

[modes.nadir]
attitude = {kind = "nadir"}
bound = "maximum"

[environments.mean]
albedo = 0.3
planetary_ir_w_m2 = 237
"""


def written(folder: Path, *changes: tuple[str, str], text: str = TEXT) -> Path:
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new)
    path = folder / "mission.toml"
    path.write_text(text, encoding="utf-8")
    return path


def test_file_and_python_say_the_same(tmp_path: Path) -> None:
    paint = Coating(Spread(0.2, 0.25, 0.3), 0.85, name="paint")
    mission = load_mission(written(tmp_path))
    orbit = CircularOrbit(560, 53, 40, "2031-03-20T06:00:00Z")
    assert mission.orbit == orbit
    assert mission.modes["nadir"] == Mode(NadirPointing(), bound="maximum")
    assert mission.environments["mean"].albedo == 0.3
    box = box_craft((0.8, 0.8, 1.2), paint, {"+Z": catalogue_coating("C050")})
    assert mission.craft.faces[:6] == box.faces
    assert [surface.name for surface in mission.craft.surfaces()][-2:] == ["wing", "wing back"]
    ds = mission.flux("nadir", "mean")
    expected = flux(
        orbit.track(step_s=40),
        NadirPointing(),
        mission.craft,
        Environment(1361, 0.3, 237, name="mean"),
        bound="maximum",
    )
    xr.testing.assert_equal(ds, expected)
    assert ds["absorptance"].sel(face="+X") == 0.3  # the maximum was asked for


def test_mission_round_trips_through_json(tmp_path: Path) -> None:
    mission = load_mission(written(tmp_path))
    assert Mission.from_json(mission.to_json()) == mission
    assert json.loads(mission.to_json())["orbit"]["kind"] == "circular"


def test_mission_can_be_declared_in_python() -> None:
    mission = Mission(
        About("Invented"),
        CircularOrbit(560, 53, 40, "2031-03-20T06:00:00Z"),
        box_craft((1, 1, 1), Coating(0.2, 0.8)),
        {"slow-spin": Mode(Spinning("+Z", "sun", 30))},
        {"mean": Environment(albedo=0.3, planetary_ir_w_m2=237)},
        TrackRequest(revolutions=2, step_s=60),
    )
    assert mission.cases == (("slow-spin", "mean"),)
    assert float(mission.fly()["rev"].max()) == 1


@pytest.mark.parametrize("path", MISSION_FILES, ids=lambda path: path.stem)
def test_examples_can_be_computed(path: Path) -> None:
    mission = load_mission(path)
    track = mission.fly()
    for mode, environment in mission.cases:
        ds = mission.flux(mode, environment, track)
        assert np.isfinite(ds["absorbed_flux"]).all()
        assert float(ds["absorbed_flux"].max()) > 0


def test_there_are_the_four_examples() -> None:
    kinds = {load_mission(path).orbit.kind for path in MISSION_FILES}
    assert kinds == {"sun-synchronous", "kepler", "omm"}
    assert len(MISSION_FILES) == 4


def test_geostationary_example_has_the_long_night_of_equinox() -> None:
    # Equinox eclipse of a geostationary orbit: umbra 67.3 min, first to last contact 71.6 min, from the
    # geometry of two discs with the IAU 2015 solar radius; handbooks print 69.4 min for the cylinder and
    # "up to 72 min". A day off the equinox the night is shorter by seconds.
    from envflux.orbits import eclipses

    table = eclipses(load_mission(EXAMPLES / "geostationary.toml").fly())
    assert table.sizes["eclipse"] == 1
    assert float(table["penumbra_duration_s"][0]) / 60 == pytest.approx(71.6, abs=0.3)
    assert float(table["umbra_duration_s"][0]) / 60 == pytest.approx(67.3, abs=0.3)


def test_preset_with_a_change_says_so(tmp_path: Path) -> None:
    preset = 'preset = "common practice nominal"'
    known = environment_preset("common practice nominal")
    plain = load_mission(written(tmp_path, ("albedo = 0.3\nplanetary_ir_w_m2 = 237", preset)))
    assert plain.environments["mean"] == known
    changed = load_mission(written(tmp_path, ("albedo = 0.3\nplanetary_ir_w_m2 = 237", preset + "\nalbedo = 0.31")))
    assert changed.environments["mean"].albedo == 0.31
    assert changed.environments["mean"].planetary_ir_w_m2 == known.planetary_ir_w_m2
    assert changed.environments["mean"].source.endswith("changed here: albedo")


def test_catalogue_coating_with_an_addition(tmp_path: Path) -> None:
    old = "absorptance = {minimum = 0.2, nominal = 0.25, maximum = 0.3}\nemittance = 0.85"
    mission = load_mission(written(tmp_path, (old, 'catalogue = "C156"\nabsorptance_eol = 0.2')))
    coating = mission.craft.faces[0].coating
    known = catalogue_coating("C156")
    assert (coating.absorptance, coating.emittance, coating.source) == (
        known.absorptance,
        known.emittance,
        known.source,
    )
    assert coating.absorptance_eol == 0.2


# Made-up elements: object number, designator and epoch belong to nothing that flies. The last digit of
# each line is the sum of its digits modulo 10, a minus counting 1.
LINE1 = "1 99999U 31999ZZ  31152.27083333  .00001234  00000-0  12345-3 0  999"
LINE2 = "2 99999  51.2345 123.4567 0012345  67.8901 234.5678 15.12345678    1"


def with_checksum(line: str) -> str:
    return f"{line}{sum(int(c) if c.isdigit() else c == '-' for c in line) % 10}"


ORBIT = TEXT[TEXT.index("[orbit]") : TEXT.index("[track]")]


def test_tle_by_lines_and_by_file(tmp_path: Path) -> None:
    one, two = with_checksum(LINE1), with_checksum(LINE2)
    expected = TleOrbit(one, two)
    by_lines = written(tmp_path, (ORBIT, f'[orbit]\nkind = "tle"\nline1 = "{one}"\nline2 = "{two}"\n'))
    assert load_mission(by_lines).orbit == expected
    (tmp_path / "elements.tle").write_text(f"INVENTED\n{one}\r\n{two}\r\n")
    by_file = written(tmp_path, (ORBIT, '[orbit]\nkind = "tle"\nfile = "elements.tle"\n'))
    assert load_mission(by_file).orbit == expected


def test_omm_file_is_looked_for_beside_the_mission_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    mission = load_mission(EXAMPLES / "from-omm.toml")
    assert mission.orbit == OmmOrbit.from_file(EXAMPLES / "invented-elements.xml")


ONE_SENTENCE = re.compile(r"[^\n]+ is [^\n]+, but [^\n]+")

WRONG: dict[str, tuple[tuple[str, str], str]] = {
    "top level": (("[environments", "[enviroments"), r"enviroments is .*did you mean 'environments'"),
    "coatings table": (("[coatings.", "[coating."), r"coating is .*did you mean 'coatings'"),
    "orbit key": (("altitude_km", "altitud_km"), r"orbit.altitud_km is 560, .*did you mean 'altitude_km'"),
    "orbit kind": (('"circular"', '"circlar"'), r"orbit.kind is 'circlar', .*did you mean 'circular'"),
    "mission key": (('name = "Invented"', 'nam = "x"'), r"mission.nam is 'x', .*did you mean 'name'"),
    "track key": (("step_s", "steps_s"), r"track.steps_s is 40, .*did you mean 'step_s'"),
    "box key": (("size_m", "sizes_m"), r"craft.box.sizes_m is .*did you mean 'size_m'"),
    "face key": (("area_m2", "aera_m2"), r"craft.faces.1 \(wing\).aera_m2 is 2, .*did you mean 'area_m2'"),
    "nameless face": (('name = "wing"\n', ""), r"craft.faces.1.name is missing"),
    "name no text": (('name = "wing"', "name = 7"), r"craft.faces.1.name is 7, "),
    "craft key": (('name = "box"\nbox', 'name = "box"\nboxx'), r"craft.boxx is .*did you mean 'box'"),
    "coating key": (("emittance = 0.85", "emitance = 0.85"), r"coatings.paint.emitance is 0.85, .*mean 'emittance'"),
    "inline coating": (("emittance = 0.8}", "emittance = 8}"), r"craft.faces.1 \(wing\).back.emittance is 8, "),
    "mode key": (('bound = "max', 'bounds = "max'), r"modes.nadir.bounds is 'maximum', .*did you mean 'bound'"),
    "attitude kind": (('"nadir"}', '"nadri"}'), r"modes.nadir.attitude.kind is 'nadri', .*did you mean 'nadir'"),
    "attitude key": (('"nadir"}', '"nadir", rol_deg = 1}'), r"modes.nadir.attitude.rol_deg is 1, .*mean 'roll_deg'"),
    "environment key": (("albedo =", "albdo ="), r"environments.mean.albdo is 0.3, .*did you mean 'albedo'"),
    "unknown coating": (
        ('coating = "paint"\nback', 'coating = "pant"\nback'),
        r"craft.faces.1 \(wing\).coating is 'pant', .*'paint'",
    ),
    "unknown entry": (('"C050"', '"C950"'), r"craft.box.coatings.\+Z is 'C950', "),
    "unknown preset": (
        ("albedo = 0.3\nplanetary_ir_w_m2 = 237", 'preset = "common practice hott"'),
        r"environments.mean.preset is 'common practice hott', .*did you mean 'common practice hot'",
    ),
    "number as text": (
        ("altitude_km = 560", 'altitude_km = "560"'),
        r"orbit.altitude_km is '560', but it must be a number",
    ),
    "number as table": (("[orbit]", "[orbi]"), r"orbi is .*did you mean 'orbit'"),
    "missing file": ((ORBIT, '[orbit]\nkind = "omm"\nfile = "no.xml"\n'), r"orbit.file is 'no.xml', .* that exists"),
    "name for files": (
        ("[modes.nadir]", '[modes."../up"]'),
        r"modes is '../up', but a name also names files and must be letters and digits",
    ),
    "table expected": (("[track]\nstep_s = 40", ""), r"track is 3, but it must be a table"),
    "faces expected": (("[[craft.faces]]", "[craft.faces]"), r"craft.faces is .*, but it must be a list of tables"),
}
WRONG["table expected"] = (("[mission]", "track = 3\n[mission]"), WRONG["table expected"][1])


@pytest.mark.parametrize("name", list(WRONG))
def test_wrong_entries_are_named_in_one_sentence(tmp_path: Path, name: str) -> None:
    change, message = WRONG[name]
    changes = [change] if name != "table expected" else [("[track]\nstep_s = 40", ""), change]
    path = written(tmp_path, *changes)
    with pytest.raises(InputError) as caught:
        load_mission(path)
    text = str(caught.value)
    assert text.startswith(f"{path}: ")
    assert re.search(message, text), text
    assert ONE_SENTENCE.fullmatch(text), text
    assert len(text) < 600


def test_broken_toml_names_the_line(tmp_path: Path) -> None:
    path = written(tmp_path, ("inclination_deg = 53", "inclination_deg 53"))
    with pytest.raises(InputError, match=r"mission.toml is broken at line 8, column 17, but it must be valid TOML"):
        load_mission(path)


def test_missing_folder_and_binary_files(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"none.toml is missing, but it must be a mission file that exists"):
        load_mission(tmp_path / "none.toml")
    with pytest.raises(InputError, match=r" is a folder, but it must be a mission file"):
        load_mission(tmp_path)
    (tmp_path / "x.toml").write_bytes(b"name = '\xff'")
    with pytest.raises(InputError, match=r"x.toml is not UTF-8 at byte 8, but it must be a text file in UTF-8"):
        load_mission(tmp_path / "x.toml")


def test_a_byte_order_mark_is_no_error(tmp_path: Path) -> None:
    path = tmp_path / "mission.toml"
    path.write_text(TEXT, encoding="utf-8-sig")
    assert load_mission(path).mission.name == "Invented"


def test_late_complaints_carry_their_key(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"^track.step_s is 0"):
        load_mission(written(tmp_path, ("step_s = 40", "step_s = 0"))).fly()
    slow = 'attitude = {kind = "spinning", rate_rpm = 1, averaged = false}'
    mission = load_mission(written(tmp_path, ('attitude = {kind = "nadir"}', slow)))
    with pytest.raises(InputError, match=r"^track.step_s is "):  # one turn a minute against a step of 40 s
        mission.flux("nadir", "mean")
    with pytest.raises(InputError, match=r"^modes is 'nadri', but it must be one of: nadir \(did you mean 'nadir'\?\)"):
        mission.flux("nadri", "mean")


def test_names_that_a_file_system_may_confuse_are_refused(tmp_path: Path) -> None:
    twin = '[modes.Nadir]\nattitude = {kind = "nadir"}\n[environments.mean]'
    with pytest.raises(InputError, match=r"modes is 'Nadir', but a name .* must be different from 'nadir'"):
        load_mission(written(tmp_path, ("[environments.mean]", twin)))
