import math
import pickle

import numpy as np
import pytest
import xarray as xr
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

from envflux.attitudes import (
    SPIN_PHASES,
    AnyAttitude,
    AttitudeLaw,
    InertialAttitude,
    NadirPointing,
    Orientation,
    Spinning,
    SunPointing,
    one_phase,
)
from envflux.constants import AU_KM, STEFAN_BOLTZMANN_W_M2_K4
from envflux.definitions import Definition
from envflux.errors import InputError

# Axes that swing fast are sampled here, not averaged.
pytestmark = pytest.mark.filterwarnings("ignore:the Sun passes so near")

# WGS 84, as printed in its defining report.
GM_KM3_S2 = 398600.4418

# A dozen products and square roots of unit quantities.
ROUNDING = 1e-14


def orbit_frame_track(
    beta_deg: float,
    *,
    radius_km: float = 7000.0,
    samples: int = 49,
    revolutions: float = 1.0,
    step_s: float | None = None,
) -> xr.Dataset:
    """Undated circular orbit: x to orbit noon, z along the orbit normal, Sun at 1 au."""
    period_s = 2.0 * math.pi * math.sqrt(radius_km**3 / GM_KM3_S2)
    elapsed = (
        np.arange(0.0, revolutions * period_s, step_s) if step_s else np.linspace(0, revolutions * period_s, samples)
    )
    angle = 2.0 * math.pi * elapsed / period_s
    zero = np.zeros_like(angle)
    position = radius_km * np.stack([np.cos(angle), np.sin(angle), zero], axis=-1)
    speed = math.sqrt(GM_KM3_S2 / radius_km)
    velocity = speed * np.stack([-np.sin(angle), np.cos(angle), zero], axis=-1)
    beta = math.radians(beta_deg)
    sun = np.broadcast_to([math.cos(beta), 0.0, math.sin(beta)], position.shape)
    return track_of(elapsed, position, velocity, sun, period_s, "orbit frame")


def kepler_track(
    *,
    eccentricity: float = 0.31,
    inclination_deg: float = 53.0,
    raan_deg: float = 212.0,
    arg_perigee_deg: float = 67.0,
    sun: tuple[float, float, float] = (0.48, -0.71, 0.52),
    samples: int = 41,
) -> xr.Dataset:
    """Elliptic orbit in an inclined plane, equal steps of eccentric anomaly; nothing is zero or at right angles."""
    a = 11_300.0
    period_s = 2.0 * math.pi * math.sqrt(a**3 / GM_KM3_S2)
    anomaly = np.linspace(0.1, 2.0 * math.pi + 0.1, samples)
    e = eccentricity
    minor = math.sqrt(1.0 - e * e)
    rate = math.sqrt(GM_KM3_S2 / a) / (1.0 - e * np.cos(anomaly))
    zero = np.zeros_like(anomaly)
    position = a * np.stack([np.cos(anomaly) - e, minor * np.sin(anomaly), zero], axis=-1)
    velocity = np.stack([-np.sin(anomaly) * rate, minor * np.cos(anomaly) * rate, zero], axis=-1)
    plane = Rotation.from_euler("ZXZ", [raan_deg, inclination_deg, arg_perigee_deg], degrees=True).as_matrix()
    elapsed = (anomaly - e * np.sin(anomaly)) * period_s / (2.0 * math.pi)
    centre_sun = np.broadcast_to(np.array(sun) / math.hypot(*sun), position.shape)
    return track_of(elapsed - elapsed[0], position @ plane.T, velocity @ plane.T, centre_sun, period_s, "GCRS")


def track_of(
    elapsed: np.ndarray, position: np.ndarray, velocity: np.ndarray, centre_sun: np.ndarray, period_s: float, frame: str
) -> xr.Dataset:
    to_sun = AU_KM * centre_sun - position
    to_sun /= np.linalg.norm(to_sun, axis=-1, keepdims=True)
    rows = ("time", "xyz")
    return xr.Dataset(
        {
            "position": (rows, position),
            "velocity": (rows, velocity),
            "sun_direction": (rows, centre_sun.copy()),
            "sun": (rows, to_sun),
        },
        coords={
            "time": (elapsed * 1e9).astype("timedelta64[ns]"),
            "xyz": ["x", "y", "z"],
            "elapsed": ("time", elapsed),
            "orbital_period": period_s,
        },
        attrs={"frame": frame, "period_s": period_s},
    )


def unit(vectors: np.ndarray) -> np.ndarray:
    return vectors / np.linalg.norm(vectors, axis=-1, keepdims=True)


def single(law: AttitudeLaw, track: xr.Dataset) -> np.ndarray:
    """The rotations of a law with one phase."""
    orientation = law.orient(track)
    assert orientation.rotations.shape == (track.sizes["time"], 1, 3, 3)
    assert orientation.weights.tolist() == [1.0]
    assert orientation.spin_axis is None
    assert orientation.spin_axis_body is None
    return orientation.rotations[:, 0]


def assert_close(found: np.ndarray, expected: np.ndarray, atol: float = ROUNDING) -> None:
    np.testing.assert_allclose(found, np.broadcast_to(expected, np.shape(found)), rtol=0, atol=atol)


def assert_proper_rotations(rotations: np.ndarray) -> None:
    assert rotations.flags["C_CONTIGUOUS"]
    assert_close(np.swapaxes(rotations, -1, -2) @ rotations, np.eye(3))
    assert_close(np.linalg.det(rotations), np.array(1.0))  # right-handed


components = st.floats(-1.0, 1.0)
vectors = st.tuples(components, components, components).filter(lambda v: math.hypot(*v) > 0.05)
angles = st.floats(-180.0, 180.0)
elements = st.fixed_dictionaries(
    {
        "eccentricity": st.floats(0.0, 0.7),
        "inclination_deg": st.floats(0.0, 180.0),
        "raan_deg": st.floats(0.0, 360.0),
        "arg_perigee_deg": st.floats(0.0, 360.0),
        "sun": vectors,
    }
)

LAWS = [
    NadirPointing(),
    NadirPointing(roll_deg=11.0, pitch_deg=-27.0, yaw_deg=143.0),
    InertialAttitude((0.31, -0.52, 0.77, 0.18)),
    SunPointing(),
    SunPointing(axis=(1.0, 2.0, 0.3), toward="nadir", clock_axis="-X"),
    SunPointing(axis="-X", toward="-velocity", clock_axis=(0.1, 0.2, 0.9)),
    Spinning(rate_rpm=0.003, phase_deg=25.0, averaged=False),
    Spinning(axis=(0.2, -0.9, 0.4), rate_rpm=0.002, direction=(0.5, 0.5, -0.2), averaged=False),
    Spinning(axis="+X", about="sun", rate_rpm=-0.002, averaged=False),
    Spinning(axis="-Y", about="orbit normal", rate_rpm=0.001, averaged=False),
    Spinning(axis="+Z", about="sun", rate_rpm=5.0),
    Spinning(axis=(0.2, -0.9, 0.4), about="orbit normal", rate_rpm=5.0, phase_deg=11.0),
]
FINE = kepler_track(samples=1501)


@pytest.mark.parametrize("law", LAWS, ids=lambda law: str(law)[:60])
def test_rotations_are_proper_and_weights_sum_to_one(law: AttitudeLaw) -> None:
    orientation = law.orient(FINE)
    assert_proper_rotations(orientation.rotations)
    assert orientation.rotations.shape == (1501, len(orientation.weights), 3, 3)
    assert math.fsum(orientation.weights) == pytest.approx(1.0, abs=ROUNDING)


@pytest.mark.parametrize("law", LAWS, ids=lambda law: str(law)[:60])
@pytest.mark.parametrize("piece", [slice(0, 1), slice(3, 4), slice(17, 1010), slice(900, None), slice(0, 0)])
def test_a_piece_of_a_track_gives_the_same_rotations(law: AttitudeLaw, piece: slice) -> None:
    whole, part = law.orient(FINE), law.orient(FINE.isel(time=piece))
    np.testing.assert_array_equal(part.rotations, whole.rotations[piece])
    np.testing.assert_array_equal(part.weights, whole.weights)
    assert (part.spin_axis is None) == (whole.spin_axis is None)
    if whole.spin_axis is not None:
        np.testing.assert_array_equal(part.spin_axis, whole.spin_axis[piece])


@given(elements)
def test_laws_are_proper_rotations_for_any_orbit_and_sun(orbit: dict[str, object]) -> None:
    track = kepler_track(**orbit)
    for law in LAWS[:6]:
        assert_proper_rotations(law.orient(track).rotations)


def test_order_of_track_dimensions_does_not_matter() -> None:
    np.testing.assert_array_equal(single(SunPointing(), FINE), single(SunPointing(), FINE.transpose("xyz", "time")))


# -- nadir ---------------------------------------------------------------------------------------------


def test_nadir_axes_on_a_circular_orbit() -> None:
    track = orbit_frame_track(20.0)
    x, y, z = np.moveaxis(single(NadirPointing(), track), -1, 0)
    assert_close(z, -unit(track.position.values))  # nadir
    assert_close(y, np.array([0.0, 0.0, -1.0]))  # against the orbit normal
    assert_close(x, unit(track.velocity.values))  # along the motion


@given(elements)
def test_nadir_axes_on_any_orbit(orbit: dict[str, object]) -> None:
    track = kepler_track(**orbit)
    position, velocity = track.position.values, track.velocity.values
    x, y, z = np.moveaxis(single(NadirPointing(), track), -1, 0)
    assert_close(z, -unit(position))
    # The orbit plane of these tests is known to the rounding of r x v, larger where both are nearly in line.
    assert_close(np.einsum("ti,ti->t", y, unit(velocity)), np.array(0.0))
    assert_close(np.einsum("ti,ti->t", y, unit(position)), np.array(0.0))
    assert np.all(np.einsum("ti,ti->t", y, np.cross(position, velocity)) < 0.0)
    assert np.all(np.einsum("ti,ti->t", x, velocity) > 0.0)


@given(angles, angles, angles)
def test_yaw_pitch_roll_are_three_two_one(roll: float, pitch: float, yaw: float) -> None:
    # General reference: scipy's intrinsic (upper-case) sequence, each turn about the axis as it stands by then.
    track = kepler_track(samples=5)
    level = single(NadirPointing(), track)
    turned = single(NadirPointing(roll_deg=roll, pitch_deg=pitch, yaw_deg=yaw), track)
    expected = level @ Rotation.from_euler("ZYX", [yaw, pitch, roll], degrees=True).as_matrix()
    assert_close(turned, expected)


def test_positive_turns_go_the_right_handed_way() -> None:
    track = kepler_track()
    x, y, z = np.moveaxis(single(NadirPointing(), track), -1, 0)
    assert_close(single(NadirPointing(yaw_deg=90), track)[..., 0], y)  # nose to +Y, away from the normal
    assert_close(single(NadirPointing(pitch_deg=90), track)[..., 0], -z)  # nose up
    assert_close(single(NadirPointing(roll_deg=90), track)[..., 2], -y)  # belly to the orbit normal
    assert_close(single(NadirPointing(roll_deg=90, yaw_deg=90), track)[..., 2], x)  # yaw first, then roll


# -- inertial ------------------------------------------------------------------------------------------


@given(st.tuples(components, components, components, components).filter(lambda q: math.hypot(*q) > 1e-3))
def test_quaternions_are_scalar_first_and_take_body_to_frame(quaternion: tuple[float, float, float, float]) -> None:
    track = kepler_track(samples=3)
    expected = Rotation.from_quat(quaternion, scalar_first=True).as_matrix()
    assert_close(single(InertialAttitude(quaternion), track), expected)


def test_a_quarter_turn_about_z_takes_body_x_to_frame_y() -> None:
    half = math.sqrt(0.5)
    rotations = single(InertialAttitude([half, 0, 0, half]), kepler_track(samples=3))
    assert_close(rotations @ [1.0, 0.0, 0.0], np.array([0.0, 1.0, 0.0]))


@pytest.mark.parametrize("scale", [1.0, -3.0, 1e-200, 1e200])
def test_quaternion_length_and_sign_do_not_matter(scale: float) -> None:
    quaternion = np.array([0.3, -0.5, 0.7, 0.1])
    track = kepler_track(samples=3)
    plain = single(InertialAttitude(tuple(quaternion)), track)
    assert_close(single(InertialAttitude(quaternion * scale), track), plain)


# -- at the Sun ----------------------------------------------------------------------------------------

TOWARD = {
    "orbit normal": lambda t: unit(np.cross(t.position.values, t.velocity.values)),
    "-orbit normal": lambda t: -unit(np.cross(t.position.values, t.velocity.values)),
    "nadir": lambda t: -unit(t.position.values),
    "zenith": lambda t: unit(t.position.values),
    "velocity": lambda t: unit(t.velocity.values),
    "-velocity": lambda t: -unit(t.velocity.values),
}


@pytest.mark.parametrize("toward", list(TOWARD))
@given(orbit=elements, axis=vectors, clock=vectors, turn=st.floats(-math.pi, math.pi))
def test_sun_pointing_holds_the_sun_and_no_turn_about_it_is_nearer(
    toward: str, orbit: dict[str, object], axis: tuple[float, ...], clock: tuple[float, ...], turn: float
) -> None:
    assume(np.linalg.norm(np.cross(unit(np.array(axis)), unit(np.array(clock)))) > 0.05)
    track = kepler_track(**orbit)
    target, sun = TOWARD[toward](track), track.sun.values
    law = SunPointing(axis=axis, toward=toward, clock_axis=clock)
    rotations = single(law, track)
    assert_close(rotations @ unit(np.array(axis)), sun)
    clock_now = rotations @ unit(np.array(clock))
    other = np.einsum("tij,tj->ti", Rotation.from_rotvec(turn * sun).as_matrix(), clock_now)
    nearness = np.einsum("ti,ti->t", clock_now, target)
    # In line with the Sun a limit is kept instead (the next tests).
    reference = track.sun_direction.values if "normal" in toward else sun
    defined = np.linalg.norm(np.cross(reference, target), axis=-1) > 1e-5
    assert np.all((nearness >= np.einsum("ti,ti->t", other, target) - ROUNDING)[defined])


def test_axes_that_are_nearly_parallel_still_give_rotations() -> None:
    law = SunPointing(axis=(0.3, 0.5, 0.8), clock_axis=(0.3, 0.5, 0.8 + 3e-6))
    assert_proper_rotations(law.orient(FINE).rotations)


@pytest.mark.parametrize("sign", [1.0, -1.0])
@pytest.mark.parametrize(("toward", "to_noon"), [("-orbit normal", 1.0), ("orbit normal", -1.0)])
def test_sun_on_the_orbit_normal_keeps_the_limit(sign: float, toward: str, to_noon: float) -> None:
    # Exactly in line: orbit noon, x of the orbit frame, takes the place of the orbit normal; from the craft the
    # Sun's parallax tilts it by up to 7000 km / 1 au = 4.7e-5 rad.
    parallax = 7000.0 / AU_KM * 1.0001
    law = SunPointing(axis="+Z", toward=toward, clock_axis="+Y")
    at_limit = single(law, orbit_frame_track(sign * 90.0))
    assert np.all(np.isfinite(at_limit))
    assert_proper_rotations(at_limit)
    assert_close(at_limit[..., 1], np.array([sign * to_noon, 0.0, 0.0]), atol=parallax)
    # Approaching it, with a Sun so far away that its parallax plays no part.
    near = orbit_frame_track(sign * (90.0 - 1e-3))
    near["sun"] = near["sun_direction"]
    assert_close(single(law, near)[..., 1], np.array([sign * to_noon, 0.0, 0.0]), atol=1.8e-5)  # 1e-3 degrees


@pytest.mark.parametrize("toward", ["orbit normal", "-orbit normal"])
def test_sun_on_the_normal_of_an_inclined_orbit_gives_numbers(toward: str) -> None:
    track = kepler_track()
    normal = unit(np.cross(track.position.values, track.velocity.values))[:1]
    track["sun_direction"] = (("time", "xyz"), np.repeat(normal, track.sizes["time"], axis=0))
    track["sun"] = track["sun_direction"]
    rotations = single(SunPointing(toward=toward), track)
    assert_proper_rotations(rotations)
    assert_close(rotations, rotations[0], atol=1e-9)  # it stands still; the normals differ in their last digits
    for law in (
        Spinning(about="sun", rate_rpm=1.0, averaged=True),
        Spinning(about="orbit normal", rate_rpm=1.0, averaged=True),
    ):
        assert_proper_rotations(law.orient(track).rotations)


@pytest.mark.parametrize(
    ("toward", "aligned_deg", "after"),
    # Beta 0: the Sun is in the zenith at noon and in the nadir at midnight, ahead at 270 degrees, behind at 90.
    [
        ("zenith", 0.0, [0.0, 1.0, 0.0]),
        ("zenith", 180.0, [0.0, -1.0, 0.0]),
        ("nadir", 0.0, [0.0, -1.0, 0.0]),
        ("velocity", 270.0, [0.0, 1.0, 0.0]),
        ("velocity", 90.0, [0.0, -1.0, 0.0]),
        ("-velocity", 90.0, [0.0, 1.0, 0.0]),
    ],
)
def test_other_alignments_keep_the_value_just_after(toward: str, aligned_deg: float, after: list[float]) -> None:
    track = orbit_frame_track(0.0, samples=361)
    track["sun"] = track["sun_direction"]
    clock = single(SunPointing(toward=toward), track)[..., 1]
    at = int(aligned_deg)
    assert_close(clock[at], np.array(after), atol=1e-12)
    assert_close(clock[at + 1], np.array(after), atol=1e-12)
    assert_close(clock[(at - 1) % 360], -np.array(after), atol=1e-12)  # sample 360 is noon again


# -- spinning ------------------------------------------------------------------------------------------


@pytest.mark.parametrize("rate", [0.004, -0.004])
@pytest.mark.parametrize("axis", ["+X", "-Y", "+Z", "-Z", (0.3, 0.8, -0.5)])
def test_inertial_spin_turns_right_handed_about_its_axis(axis: object, rate: float) -> None:
    law = Spinning(axis=axis, rate_rpm=rate, phase_deg=33.0, averaged=False)
    body_axis = unit(
        np.array({"+X": (1, 0, 0), "-Y": (0, -1, 0), "+Z": (0, 0, 1), "-Z": (0, 0, -1)}.get(axis, axis), float)
    )
    turn = math.radians(33.0) + 2.0 * math.pi * rate / 60.0 * FINE.elapsed.values
    expected = Rotation.from_rotvec(turn[:, None] * body_axis).as_matrix()
    # The angle is known to the rounding of up to 5 turns.
    assert_close(single(law, FINE), expected, atol=1e-13)


def test_phase_zero_of_an_inertial_spin_is_the_frame() -> None:
    rotations = single(Spinning(rate_rpm=0.004, averaged=False), FINE)
    assert_close(rotations[0], np.eye(3))


@given(vectors, vectors)
def test_direction_brings_the_axis_there_by_the_smallest_turn(
    axis: tuple[float, ...], direction: tuple[float, ...]
) -> None:
    track = kepler_track(samples=2)
    law = Spinning(axis=axis, direction=direction, rate_rpm=1.0, averaged=True)
    rotations = law.orient(track).rotations[0, 0]
    start, end = unit(np.array(axis)), unit(np.array(direction))
    assert_close(rotations @ start, end, atol=1e-9)
    turned = Rotation.from_matrix(rotations).magnitude()
    apart = 2.0 * math.atan2(float(np.linalg.norm(start - end)), float(np.linalg.norm(start + end)))
    assert turned == pytest.approx(apart, abs=1e-7)  # scipy takes the angle from a matrix rounded to 1e-16


def test_direction_opposite_to_the_axis_is_half_a_turn() -> None:
    law = Spinning(axis="+Z", direction=(0, 0, -2), rate_rpm=1.0, averaged=True)
    orientation = law.orient(kepler_track(samples=2))
    assert_close(orientation.rotations[0, 0], np.diag([1.0, -1.0, -1.0]))  # about +X, the axis that follows Z
    assert_close(orientation.spin_axis, np.array([0.0, 0.0, -1.0]))


@pytest.mark.parametrize(
    ("axis", "reference"), [("+Z", 0), ("-Z", 0), ("+X", 1), ("-X", 1), ("+Y", 2), ("-Y", 2)], ids=str
)
def test_phase_zero_of_moving_spin_axes(axis: str, reference: int) -> None:
    track = kepler_track()
    normal = unit(np.cross(track.position.values, track.velocity.values))
    sun = track.sun.values
    sign, index = (1.0 if axis[0] == "+" else -1.0), "XYZ".index(axis[1])
    about_sun = Spinning(axis=axis, about="sun", rate_rpm=9.0).orient(track).rotations[:, 0]
    assert_close(sign * about_sun[..., index], sun)
    to_normal = normal - np.einsum("ti,ti->t", normal, sun)[:, None] * sun
    assert_close(about_sun[..., reference], unit(to_normal))
    about_normal = Spinning(axis=axis, about="orbit normal", rate_rpm=9.0).orient(track).rotations[:, 0]
    assert_close(sign * about_normal[..., index], normal)
    centre_sun = track.sun_direction.values
    to_noon = centre_sun - np.einsum("ti,ti->t", centre_sun, normal)[:, None] * normal
    assert_close(about_normal[..., reference], unit(to_noon))


@pytest.mark.parametrize("about", ["inertial", "sun", "orbit normal"])
def test_averaged_phases_share_their_spin_axis(about: str) -> None:
    axis = (0.3, -0.2, 0.9)
    track = kepler_track()
    orientation = Spinning(axis=axis, about=about, rate_rpm=2.0).orient(track)
    assert orientation.spin_axis is not None
    assert orientation.spin_axis_body is not None
    assert orientation.spin_axis.shape == (41, 3)
    assert_close(orientation.spin_axis_body, unit(np.array(axis)))
    # Every phase turns the body about that axis and leaves the axis where it is.
    assert_close(orientation.rotations @ orientation.spin_axis_body, orientation.spin_axis[:, None, :])
    targets = {"inertial": unit(np.array(axis)), "sun": track.sun.values, "orbit normal": TOWARD["orbit normal"](track)}
    assert_close(orientation.spin_axis, targets[about])
    step = orientation.rotations[:, 1:] @ np.swapaxes(orientation.rotations[:, :-1], -1, -2)
    turn = 2.0 * math.pi / SPIN_PHASES * orientation.spin_axis
    assert_close(step, Rotation.from_rotvec(turn).as_matrix()[:, None])


# Averages of the cosine over a turn. Side face of a fast spinning prism with its axis at psi from the Sun:
# sin(psi) / pi; end cap: max(cos(psi), 0) (closed forms; general-shape tables of spacecraft thermal texts).
# Sampling a turn at N points, N odd, errs by at most pi / (12 N^2) x sin(psi) (Euler-Maclaurin at the two
# corners, half a step out of line with each other); N even, by four times that.
@pytest.mark.parametrize("psi_deg", [3.0, 37.0, 71.0, 90.0, 128.0])
def test_averaged_spin_gives_the_closed_forms(psi_deg: float) -> None:
    psi = math.radians(psi_deg)
    sun = np.array([math.sin(psi) * math.cos(0.7), math.sin(psi) * math.sin(0.7), math.cos(psi)])
    track = kepler_track(samples=3)
    for phase_deg in (0.0, 1.7, 4.1):
        orientation = Spinning(rate_rpm=3.0, phase_deg=phase_deg).orient(track)
        cosines = np.einsum("tpij,i->tpj", orientation.rotations, sun)  # of the body axes, in each phase
        lit = np.einsum("tpj,p->tj", np.maximum(cosines, 0.0), orientation.weights)
        bound = math.pi / (12 * SPIN_PHASES**2) * math.sin(psi)
        assert_close(lit[:, :2], np.array(math.sin(psi) / math.pi), atol=bound + ROUNDING)
        assert_close(lit[:, 2], np.array(max(math.cos(psi), 0.0)))


def test_resolved_spin_gives_the_closed_form_over_whole_turns() -> None:
    psi = math.radians(52.0)
    sun = np.array([math.sin(psi), 0.0, math.cos(psi)])
    turn_s, per_turn = 600.0, 720
    track = orbit_frame_track(10.0, step_s=turn_s / per_turn, revolutions=0.5)
    rotations = single(Spinning(rate_rpm=0.1, phase_deg=13.0), track)
    lit = np.maximum(rotations[: 4 * per_turn, :, 1] @ sun, 0.0).mean()
    bound = 4 * math.pi / (12 * per_turn**2) * math.sin(psi)
    assert lit == pytest.approx(math.sin(psi) / math.pi, abs=1.0001 * bound)  # the bound is met at a corner


def test_spinning_plate_settles_at_the_published_temperature() -> None:
    # Black two-sided plate, axis in its plane and at right angles to the Sun, S = 1361 W/m2: the absorbing area
    # is 1/pi of the radiating area and the plate 295.6474 K warm (closed form).
    orientation = Spinning(axis="+Z", rate_rpm=3.0).orient(kepler_track(samples=1))
    cosines = orientation.rotations[0, :, 0, 0]  # plate normal is +X, Sun along x
    ratio = float(orientation.weights @ (np.maximum(cosines, 0.0) + np.maximum(-cosines, 0.0))) / 2.0
    temperature = (ratio * 1361.0 / STEFAN_BOLTZMANN_W_M2_K4) ** 0.25
    # 1.9e-4 of 1/pi x pi, see above, moves a fourth root by a quarter of its relative size: 0.05 K.
    assert temperature == pytest.approx(295.6474, abs=0.05)


def test_fast_spins_are_averaged_and_slow_ones_resolved() -> None:
    track = orbit_frame_track(10.0, samples=20_001)
    period_s = float(track.orbital_period)
    just_fast, just_slow = 60.0 * 60.0 / period_s * (1 + 1e-9), 60.0 * 60.0 / period_s * (1 - 1e-9)
    assert len(Spinning(rate_rpm=just_fast).orient(track).weights) == SPIN_PHASES
    assert len(Spinning(rate_rpm=-just_slow).orient(track).weights) == 1
    assert len(Spinning(rate_rpm=just_slow, averaged=True).orient(track).weights) == SPIN_PHASES
    assert len(Spinning(rate_rpm=just_fast, averaged=False).orient(track).weights) == 1


def test_too_coarse_a_step_is_refused_with_the_step_needed() -> None:
    law = Spinning(rate_rpm=0.37, averaged=False)  # turn 162.162 s, 1/72 of it 2.25225 s
    with pytest.raises(InputError) as caught:
        law.orient(orbit_frame_track(10.0, step_s=30.0))
    assert str(caught.value) == (
        "step_s is 30.0, but it must be at most 2.252 s for a turn of 162.2 s resolved in time, "
        "or averaged must be True"
    )
    assert len(law.orient(orbit_frame_track(10.0, step_s=2.252)).weights) == 1
    assert len(law.orient(orbit_frame_track(10.0, step_s=60.0 / 0.37 / 72)).weights) == 1  # the exact fraction
    with pytest.raises(InputError, match=r"^step_s is 2\.26"):
        law.orient(orbit_frame_track(10.0, step_s=2.26))
    assert len(Spinning(rate_rpm=0.37, averaged=True).orient(orbit_frame_track(10.0, step_s=30.0)).weights) > 1


@given(st.floats(-4, 4))
def test_the_step_stated_is_accepted(power: float) -> None:
    law = Spinning(rate_rpm=10.0**power, averaged=False)
    coarse = orbit_frame_track(10.0, samples=3)
    coarse["elapsed"] = ("time", np.arange(3) * law.turn_s)
    with pytest.raises(InputError) as caught:
        law.orient(coarse)
    stated = float(caught.value.accepted.split()[2])
    assert 0.998 * law.turn_s / 72 < stated <= law.turn_s / 72
    coarse["elapsed"] = ("time", np.arange(3) * stated)
    law.orient(coarse)


# -- input ---------------------------------------------------------------------------------------------

AXIS = "it must be three finite numbers that are not all zero, or one of +X, -X, +Y, -Y, +Z, -Z"


@pytest.mark.parametrize(
    ("law", "fields", "message"),
    [
        (NadirPointing, {"yaw_deg": math.nan}, "yaw_deg is nan, but it must be a finite number"),
        (NadirPointing, {"roll_deg": 400}, "roll_deg is 400, but it must be at least -360 and at most 360"),
        *(
            (
                InertialAttitude,
                {"quaternion_wxyz": bad},
                f"quaternion_wxyz is {bad}, but it must be four finite numbers that are not all zero, the scalar first",
            )
            for bad in ([0, 0, 0, 0], [1, 0, 0], [1, 0, 0, math.nan], [math.inf, 0, 0, 0], 7)
        ),
        (InertialAttitude, {}, "quaternion_wxyz is missing, but it must be given"),
        (SunPointing, {"axis": [0, 0, 0]}, f"axis is [0, 0, 0], but {AXIS}"),
        (SunPointing, {"clock_axis": "+Z"}, "clock_axis is '+Z', but it must be not parallel to axis, +Z"),
        (
            SunPointing,
            {"axis": [0, 1, 1], "clock_axis": [0, -2, -2]},
            "clock_axis is (0.0, -2.0, -2.0), but it must be not parallel to axis, (0.0, 1.0, 1.0)",
        ),
        (
            SunPointing,
            {"toward": "orbit-normal"},
            "toward is 'orbit-normal', but it must be 'orbit normal', '-orbit normal', 'nadir', 'zenith', 'velocity' "
            "or '-velocity' (did you mean 'orbit normal'?)",
        ),
        (
            Spinning,
            {"rate_rpm": 0},
            "rate_rpm is 0.0, but it must be above or below 0; InertialAttitude stands still",
        ),
        (Spinning, {"rate_rpm": math.inf}, "rate_rpm is inf, but it must be a finite number"),
        (Spinning, {}, "rate_rpm is missing, but it must be given"),
        (
            Spinning,
            {"rate_rpm": 1, "axis": "Z"},
            "axis is 'Z', but it must be one of +X, -X, +Y, -Y, +Z, -Z, or three numbers",
        ),
        (
            Spinning,
            {"rate_rpm": 1, "about": "sun", "direction": [1, 0, 0]},
            "direction is (1.0, 0.0, 0.0), but it must be left out unless about is 'inertial'",
        ),
        (
            Spinning,
            {"rate_rpm": 1, "direction": "+X"},
            "direction is '+X', but it must be three finite numbers that are not all zero",
        ),
        (Spinning, {"rate_rpm": 1, "averaged": "yes"}, "averaged is 'yes', but it must be true or false"),
    ],
)
def test_bad_laws_are_one_sentence(law: type[Definition], fields: dict[str, object], message: str) -> None:
    for build in (lambda: law(**fields), lambda: law.from_table(fields)):
        with pytest.raises(InputError) as caught:
            build()
        assert str(caught.value).startswith(message)


class Holder(Definition):
    attitude: AnyAttitude


@pytest.mark.parametrize("law", LAWS, ids=lambda law: str(law)[:60])
def test_laws_survive_json_and_processes_by_their_kind(law: Definition) -> None:
    held = Holder(attitude=law)
    assert Holder.from_json(held.to_json()) == held
    assert type(Holder.from_json(held.to_json()).attitude) is type(law)
    assert pickle.loads(pickle.dumps(law)) == law
    assert len({law, type(law).from_json(law.to_json())}) == 1


def test_a_mission_table_names_its_law_by_kind() -> None:
    held = Holder.from_table({"attitude": {"kind": "spinning", "rate_rpm": 2, "about": "orbit normal"}})
    assert held.attitude == Spinning(about="orbit normal", rate_rpm=2.0)
    assert SunPointing(toward="+orbit normal") == SunPointing(toward="orbit normal")
    with pytest.raises(InputError, match=r"^attitude\.kind is 'spining', .* \(did you mean 'spinning'\?\)$"):
        Holder.from_table({"attitude": {"kind": "spining", "rate_rpm": 2}})
    with pytest.raises(InputError, match=r"^attitude\.rate is 2, .*rate_rpm"):
        Holder.from_table({"attitude": {"kind": "spinning", "rate": 2}})
    with pytest.raises(InputError, match=r"^attitude\.axis is \[0, 0, 0\], but it must be three finite numbers"):
        Holder.from_table({"attitude": {"kind": "sun", "axis": [0, 0, 0]}})


def test_a_law_of_ones_own_needs_one_method() -> None:
    class Flipped:
        def orient(self, track: xr.Dataset) -> Orientation:
            return one_phase(NadirPointing().orient(track).rotations[:, 0] @ np.diag([1.0, -1.0, -1.0]))

    law = Flipped()
    assert isinstance(law, AttitudeLaw)
    assert not isinstance(object(), AttitudeLaw)
    track = kepler_track()
    assert_close(single(law, track)[..., 2], unit(track.position.values))
