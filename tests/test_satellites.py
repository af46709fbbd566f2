"""TLE and OMM orbits against the SGP4 verification set, turned by pyerfa."""

import json
from pathlib import Path

import erfa
import numpy as np
import pytest
import sgp4

from envflux import almanac
from envflux.errors import InputError
from envflux.orbits import OmmOrbit, TleOrbit
from envflux.orbits.contacts import CHUNK
from envflux.orbits.satellites import SatelliteStates

# The set ships with the sgp4 package: Vallado, Crawford, Hujsak and Kelso, Revisiting Spacetrack
# Report #3, AIAA 2006-6753. Positions are TEME, printed to 1e-8 km.
VERIFICATION = Path(sgp4.__file__).parent
# Asked: within 1 m. The printed epoch of a set is a float, worth 1e-6 s or 8 mm.
POSITION_KM = 1e-3

LINE1 = "1 00005U 58002B   00179.78495062  .00000023  00000-0  28098-4 0  4753"
LINE2 = "2 00005  34.2682 348.7242 1859667 331.7664  19.3264 10.82419157413667"


def verification_sets():
    lines = [line for line in (VERIFICATION / "SGP4-VER.TLE").read_text().splitlines() if line[:2] in ("1 ", "2 ")]
    pairs = {
        first[2:7].strip().lstrip("0"): (first[:69], second[:69])
        for first, second in zip(lines[::2], lines[1::2], strict=True)
    }
    states: dict[str, list[list[float]]] = {}
    number = ""
    for line in (VERIFICATION / "tcppver.out").read_text().splitlines():
        words = line.split()
        if words[-1] == "xx":
            number = words[0]
            states[number] = []
        else:
            states[number].append([float(word) for word in words[:7]])
    return {number: (pairs[number], np.array(rows)) for number, rows in states.items() if number in pairs}


SETS = verification_sets()


def teme_to_gcrs(tai_us, vectors):
    """TEME to PEF by GMST of 1982, back to the true equator of date by GAST, to GCRS: all pyerfa."""
    jd, tt = 2440587.5, tai_us / 86_400e6 + 32.184 / 86_400.0
    # Both sidereal angles contain the same UT1, so a rough one does: TT - UT1 was 50 to 65 s from 1980 to 2006.
    ut1 = tt - 60.0 / 86_400.0
    turn = erfa.gmst82(jd, ut1) - erfa.gst06a(jd, ut1, jd, tt)
    out = []
    for angle, matrix, vector in zip(turn, erfa.pnm06a(jd, tt), vectors, strict=True):
        out.append(matrix.T @ erfa.rz(angle, np.eye(3)) @ vector)
    return np.array(out)


def test_the_whole_set_is_there():
    assert len(SETS) == 32
    assert sum(len(rows) for _, rows in SETS.values()) > 600


@pytest.mark.parametrize("number", [number for number in SETS if number != "33334"])
def test_verification_states_in_gcrs(number):
    lines, rows = SETS[number]
    # The made-up sets 33333 to 33335 carry wrong checksums.
    made_up = number in ("33333", "33334", "33335")
    orbit = TleOrbit(*(map(with_checksum, lines) if made_up else lines))
    # The set counts plain minutes from the epoch; 20413 runs past the leap seconds of 2005 and 2008.
    labels = np.datetime64(orbit.epoch.replace(tzinfo=None), "us") + np.round(rows[:, 0] * 60e6).astype("m8[us]")
    times = almanac.tai_from_utc(labels)
    position, velocity = teme_to_gcrs(times, rows[:, 1:4]), teme_to_gcrs(times, rows[:, 4:7])
    for label, expected, rate in zip(labels, position, velocity, strict=True):
        # A track short enough to stay on this side of the surface, where the set follows a decay to its end.
        track = orbit.track(start=label, duration_s=0.01)
        np.testing.assert_allclose(track.position.values[0], expected, rtol=0.0, atol=POSITION_KM)
        # Printed to 1e-9 km/s; 1 us of acceleration is 1e-8.
        np.testing.assert_allclose(track.velocity.values[0], rate, rtol=0.0, atol=1e-6)


def test_a_set_that_fails_at_its_own_epoch_is_refused():
    """33334 is in the set to provoke SGP4's error 3."""
    with pytest.raises(InputError, match=r"line2 is .*perturbed eccentricity is outside"):
        TleOrbit(*map(with_checksum, SETS["33334"][0]))


def test_start_is_the_epoch():
    orbit = TleOrbit(LINE1, LINE2)
    track = orbit.track()
    # Day 179.78495062 of 2000, as the verification set prints it: 2000-06-27 18:50:19.733571.
    offset = (track.time.values[0] - np.datetime64("2000-06-27T18:50:19.733571")) / np.timedelta64(1, "us")
    assert abs(offset) <= 4  # 1e-8 day is 864 us; the printed seconds went through a Julian date
    assert track.attrs["frame"] == "GCRS"
    assert track.elapsed.values[-1] == pytest.approx(orbit.period_s, abs=1e-6)


def test_period_is_nodal():
    """From one ascending node to the next, found on the track itself, of date."""
    orbit = TleOrbit(*SETS["28057"][0])  # near-circular: an eccentric one passes its node unevenly
    track = orbit.track(revolutions=6, step_s=20)
    turns = np.unwrap(track.argument_of_latitude.values, period=360.0)
    nodes = (np.floor(turns[0] / 360.0) + np.arange(1, 6)) * 360.0
    crossings = np.interp(nodes, turns, track.elapsed.values)
    # The anomalistic period differs by several seconds and would fail.
    assert np.diff(crossings).mean() == pytest.approx(orbit.period_s, abs=0.05)


def test_backward_start_and_argument_of_latitude():
    orbit = TleOrbit(LINE1, LINE2)
    track = orbit.track(start="2000-06-26T00:00:00Z", revolutions=2)
    # sin(latitude) = sin(inclination) sin(argument of latitude), inclination from the state itself
    normal = np.cross(track.position.values, track.velocity.values)
    normal /= np.linalg.norm(normal, axis=1)[:, None]
    pole = almanac.earth_frame(almanac.tai_from_utc(track.time.values)).matrix[:, 6:9]
    sine = np.sqrt(1.0 - np.einsum("ij,ij->i", normal, pole) ** 2)
    np.testing.assert_allclose(
        np.sin(np.radians(track.latitude.values)),
        sine * np.sin(np.radians(track.argument_of_latitude.values)),
        atol=1e-12,
    )


def test_eccentric_sets_are_sampled_by_true_anomaly():
    lines, _ = SETS["8195"]  # e = 0.69
    track = TleOrbit(*lines).track()
    regular = track.isel(time=slice(0, None))
    steps = np.diff(np.unwrap(regular.argument_of_latitude.values, period=360.0))
    assert steps.max() < 360.0 / 240.0 * 1.05
    assert np.diff(track.elapsed.values).max() > 3.0 * track.attrs["step_s"]


# -- bad lines --------------------------------------------------------------------------------------------


def with_checksum(line: str) -> str:
    body = line[:68]
    return body + str(sum(int(c) if c.isdigit() else c == "-" for c in body) % 10)


@pytest.mark.parametrize(
    ("line1", "line2", "message"),
    [
        (LINE1[:-1] + "4", LINE2, "line1 is a line whose checksum is 4, .* one whose checksum is 3"),
        (LINE1, LINE2[:20] + "9" + LINE2[21:], "line2 is a line whose checksum is 7"),
        (LINE1[:-3], LINE2, "line1 is 66 characters long, but it must be 69 characters long"),
        (LINE2, LINE1, "line1 is '2 00005.* that starts with '1 '"),
        (LINE1, with_checksum(LINE2[:8] + " 34.26x2" + LINE2[16:]), "line2 is .* 34.26x2., .* number in columns 9"),
        (LINE1, with_checksum(LINE2[:52] + " 0.00000000" + LINE2[63:]), "line2 .*must be"),
        (LINE1, 7, "line2 is 7, but it must be a text in quotes"),
    ],
)  # fmt: skip
def test_bad_lines(line1, line2, message):
    with pytest.raises(InputError, match=message) as caught:
        TleOrbit(line1, line2)
    assert "\n" not in str(caught.value)


def test_elements_that_decay_say_so():
    lines, _ = SETS["28872"]  # decays within the hour
    with pytest.raises(InputError, match=r"line2 is not usable .* days from its epoch, but .* decayed"):
        TleOrbit(*lines).track(revolutions=3)


def test_tle_outside_the_ephemeris():
    with pytest.raises(InputError, match=r"start is .*between 1900-01-01 and 2053-10-01"):
        TleOrbit(LINE1, LINE2).track(start="2060-01-01T00:00:00Z")


# -- OMM --------------------------------------------------------------------------------------------------

FIELDS = {  # the elements of the set above, as a message states them
    "OBJECT_NAME": "TEST OBJECT",
    "OBJECT_ID": "1958-002B",
    "CENTER_NAME": "EARTH",
    "REF_FRAME": "TEME",
    "TIME_SYSTEM": "UTC",
    "MEAN_ELEMENT_THEORY": "SGP4",
    "EPOCH": "2000-06-27T18:50:19.733568",
    "MEAN_MOTION": "10.82419157",
    "ECCENTRICITY": "0.1859667",
    "INCLINATION": "34.2682",
    "RA_OF_ASC_NODE": "348.7242",
    "ARG_OF_PERICENTER": "331.7664",
    "MEAN_ANOMALY": "19.3264",
    "EPHEMERIS_TYPE": "0",
    "CLASSIFICATION_TYPE": "U",
    "NORAD_CAT_ID": "5",
    "ELEMENT_SET_NO": "475",
    "REV_AT_EPOCH": "41366",
    "BSTAR": "0.000028098",
    "MEAN_MOTION_DOT": "0.00000023",
    "MEAN_MOTION_DDOT": "0.0",
}
METADATA = ("OBJECT_NAME", "OBJECT_ID", "CENTER_NAME", "REF_FRAME", "TIME_SYSTEM", "MEAN_ELEMENT_THEORY")
ELEMENTS = (
    "EPOCH",
    "MEAN_MOTION",
    "ECCENTRICITY",
    "INCLINATION",
    "RA_OF_ASC_NODE",
    "ARG_OF_PERICENTER",
    "MEAN_ANOMALY",
)


def kvn(fields):
    lines = [
        "CCSDS_OMM_VERS = 3.0",
        "COMMENT a = b is a comment",
        "CREATION_DATE = 2000-06-28T00:00:00",
        "ORIGINATOR = TEST",
    ]
    units = {"INCLINATION": " [deg]", "MEAN_MOTION": " [rev/day]"}
    return "\n".join(lines + [f"{key:<20} = {value}{units.get(key, '')}" for key, value in fields.items()])


def xml(fields, namespace=""):
    def tags(names):
        return "".join(f"<{name}>{fields[name]}</{name}>" for name in names if name in fields)

    rest = [name for name in fields if name not in METADATA + ELEMENTS]
    return (
        f'<?xml version="1.0" encoding="UTF-8"?><ndm {namespace}><omm id="CCSDS_OMM_VERS" version="3.0"><header/><body>'
        f"<segment><metadata>{tags(METADATA)}</metadata><data><meanElements>{tags(ELEMENTS)}</meanElements>"
        f"<tleParameters>{tags(rest)}</tleParameters></data></segment></body></omm></ndm>"
    )


WRITERS = {
    "kvn": kvn,
    "xml": xml,
    "xml with namespace": lambda fields: xml(fields, 'xmlns="urn:ccsds:schema:ndmxml"'),
    "json": json.dumps,
    "json numbers": lambda f: json.dumps([{k: float(v) if k in ("MEAN_MOTION", "BSTAR") else v for k, v in f.items()}]),
    "json nested": lambda f: json.dumps({"header": {}, "body": {"segment": {"data": {"meanElements": f}}}}),
}


@pytest.mark.parametrize("writer", WRITERS)
def test_a_message_is_the_orbit_of_its_lines(writer, tmp_path):
    path = tmp_path / "message with spaces.txt"
    path.write_text(WRITERS[writer](FIELDS))
    orbit = OmmOrbit.from_file(path)
    tle = TleOrbit(LINE1, LINE2)
    assert orbit.epoch == tle.epoch
    assert orbit.period_s == pytest.approx(tle.period_s, rel=1e-12)
    ours, theirs = orbit.track(revolutions=1.5), tle.track(revolutions=1.5)
    # The epoch of a TLE goes through a float of days: 1e-6 s or 8 mm.
    np.testing.assert_allclose(ours.position, theirs.position, rtol=0.0, atol=2e-5)
    assert OmmOrbit.from_json(orbit.to_json()) == orbit


def test_day_of_year_epochs(tmp_path):
    path = tmp_path / "omm"
    path.write_text(kvn({**FIELDS, "EPOCH": "2000-179T18:50:19.733568Z"}))
    assert OmmOrbit.from_file(path).epoch == TleOrbit(LINE1, LINE2).epoch


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"REF_FRAME": "GCRF"}, "REF_FRAME is 'GCRF', but it must be TEME"),
        ({"TIME_SYSTEM": "TAI"}, "TIME_SYSTEM is 'TAI', but it must be UTC"),
        ({"MEAN_ELEMENT_THEORY": "DSST"}, "MEAN_ELEMENT_THEORY is 'DSST', but it must be SGP4"),
        ({"MEAN_MOTION": None}, "MEAN_MOTION is missing, but it must be in the message"),
        ({"EPOCH": None}, "EPOCH is missing, but it must be a time such as"),
        ({"EPOCH": "27 June 2000"}, "EPOCH is '27 June 2000', but it must be a time such as"),
        ({"EPOCH": "2000-13-01T00:00:00"}, "EPOCH is '2000-13-01T00:00:00', but it must be a time such as"),
        ({"INCLINATION": "steep"}, "INCLINATION is 'steep', but it must be a number"),
        ({"ECCENTRICITY": "1.2"}, "eccentricity is 1.2, but it must be at least 0 and below 1"),
        ({"BSTAR": "inf"}, "bstar is inf, but it must be a finite number"),
    ],
)
def test_bad_messages(change, message, tmp_path):
    fields = {key: value for key, value in {**FIELDS, **change}.items() if value is not None}
    path = tmp_path / "omm.kvn"
    path.write_text(kvn(fields))
    with pytest.raises(InputError, match=message):
        OmmOrbit.from_file(path)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "path is .*must be an orbit mean-elements message"),
        ("<a><b></a>", "path is .*must be well-formed XML"),
        ("<a/>", "path is .*must be a file with one message, not 0"),
        ("{", "path is .*must be valid JSON"),
        ("[]", "path is .*must be a file with one message, not 0"),
        ('<!DOCTYPE a [<!ENTITY b "c">]><a/>', "path is .*must be XML without a document type"),
        (kvn(FIELDS) + "\n" + kvn(FIELDS), "path is .*must be a file with one message, not 2"),
    ],
)
def test_files_that_are_no_message(text, message, tmp_path):
    path = tmp_path / "omm"
    path.write_text(text)
    with pytest.raises(InputError, match=message):
        OmmOrbit.from_file(path)


def test_a_file_that_is_not_there(tmp_path):
    with pytest.raises(InputError, match=r"path is .*must be a readable text file"):
        OmmOrbit.from_file(tmp_path / "none")


def test_states_come_in_any_chunk_with_the_same_bits():
    orbit = TleOrbit(LINE1, LINE2)
    states = orbit._states()
    assert isinstance(states, SatelliteStates)
    times = states.epoch_us + np.arange(0, 3 * CHUNK, 7, dtype=np.int64) * 1_000_000
    whole, part = states.at(times), states.at(times[1000:1100])
    np.testing.assert_array_equal(whole.position[1000:1100], part.position)
    np.testing.assert_array_equal(whole.sun_direction[1000:1100], part.sun_direction)
