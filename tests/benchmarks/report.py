"""Measure and print every figure that this project promises: ``python tests/benchmarks/report.py``.

Each row says what must hold and what was measured here and now. Speeds are single runs on whatever
else the machine is doing, so ratios within one run mean more than seconds. ``--quick`` thins the
samples; it is what the tests run, so that the script cannot rot.
"""

import os

# One thread, as the figures are defined: before numpy is imported, or it is too late.
for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[_name] = "1"

import argparse
import subprocess
import sys
import tempfile
import time
import warnings
from itertools import pairwise
from pathlib import Path

import numpy as np

HERE = Path(__file__).resolve().parent
ROOT = HERE.parents[1]
sys.path[:0] = [str(HERE), str(HERE.parent)]

from patch_sum import patch_sum

import envflux as ef
from envflux.attitudes import Orientation, one_phase
from envflux.kernels.planet import planet_factors
from envflux.vectors import rotation_from_quaternion

RADIUS_KM = 6378.137
FACES = np.array([[1, 0, 0], [-1, 0, 0], [0, 1, 0], [0, -1, 0], [0, 0, 1], [0, 0, -1]], float)
BOX = {"size_m": (0.8, 0.8, 1.2), "coating": {"absorptance": 0.25, "emittance": 0.85}}


def row(what: str, must: str, measured: str) -> None:
    """One line of the report, printed at once so that a long run shows where it is."""
    print(f"{what:<58} | {must:<34} | {measured}", flush=True)


def box() -> ef.Craft:
    return ef.box_craft(size_m=BOX["size_m"], coating=ef.Coating(**BOX["coating"]))


def environment() -> ef.Environment:
    return ef.Environment(solar_constant_w_m2=1361.0, albedo=0.3, planetary_ir_w_m2=237.0)


class RandomTilts:
    """A law that turns the craft at random at every sample: no face keeps an easy view."""

    def __init__(self, seed: int, elapsed: np.ndarray) -> None:
        quaternions = np.random.default_rng(seed).normal(size=(elapsed.size, 4))
        self.rotations = rotation_from_quaternion(quaternions)
        self.elapsed = elapsed

    def orient(self, track) -> Orientation:
        first = int(np.searchsorted(self.elapsed, track.elapsed.values[0]))
        return one_phase(self.rotations[first : first + track.sizes["time"]])


# -- accuracy ------------------------------------------------------------------------------------


def converged(position, sun, normals, radius=RADIUS_KM, nodes=400):
    """Factors of plates by product Gauss quadrature on the visible cap, split at every corner.

    Surface coordinates and numerical azimuth quadrature: it shares neither variables nor closed
    forms with the kernel. Doubling `nodes` moves the results by less than 1e-6 (printed).
    """
    x, w = np.polynomial.legendre.leggauss(12)
    r = np.linalg.norm(position)
    up = position / r
    H = r / radius
    cap = np.arccos(1.0 / H)
    cos_zenith = up @ sun
    side = sun - cos_zenith * up
    side = side / np.linalg.norm(side) if np.linalg.norm(side) > 1e-9 else _any_across(up)
    other = np.cross(up, side)
    panels = max(nodes // 12, 1)
    results = np.zeros((2, len(normals)))
    zenith = np.arccos(np.clip(cos_zenith, -1, 1))
    for f, n in enumerate(normals):
        ahead, aside, above = n @ side, n @ other, n @ up
        # Central angles at which a ring starts to be cut by the terminator or by the face's plane.
        corners = [0.0, cap, abs(np.pi / 2 - zenith), *_plane_corners(np.hypot(ahead, aside), above, H)]
        corners = np.unique(np.clip(corners, 0.0, cap))
        for lo, hi in pairwise(corners):
            if hi - lo < 1e-12:
                continue
            # Square-root endings at both corners: a cosine substitution makes them smooth.
            t = (np.arange(panels)[:, None] + (x + 1) / 2) / panels
            wt = np.broadcast_to(w / 2 / panels, t.shape)
            central = (lo + (hi - lo) * (1 - np.cos(np.pi * t)) / 2).ravel()
            measure = ((hi - lo) * np.pi * np.sin(np.pi * t) / 2 * wt).ravel()
            for psi, dpsi in zip(central, measure, strict=True):
                results[:, f] += dpsi * _ring(psi, H, cos_zenith, np.sin(zenith), ahead, aside, above, x, w)
    return results[0], results[1]


def _any_across(up):
    across = np.cross(up, [1.0, 0.0, 0.0] if abs(up[0]) < 0.6 else [0.0, 1.0, 0.0])
    return across / np.linalg.norm(across)


def _plane_corners(horizontal, above, H):
    """Central angles of the surface points in the face's plane at the face's own azimuth or opposite to it."""
    if horizontal < 1e-12:
        return []
    # n . (P - r) = +-horizontal sin(psi) + above (cos(psi) - H) = 0 with R = 1
    found = []
    for sign in (1.0, -1.0):
        amplitude = np.hypot(horizontal, above)
        phase = np.arctan2(sign * horizontal, above)
        ratio = above * H / amplitude
        if abs(ratio) <= 1.0:
            found += [phase + np.arccos(ratio), phase - np.arccos(ratio)]
    return [psi for psi in found if psi > 0.0]


def _ring(psi, H, cos_zenith, sin_zenith, ahead, aside, above, x, w):
    """Integrals over azimuth at one central angle: reflected and emitted."""
    sin_psi, cos_psi = np.sin(psi), np.cos(psi)
    edges = [0.0, 2 * np.pi]
    mean, swing = cos_zenith * cos_psi, sin_zenith * sin_psi
    if swing > abs(mean):
        half = np.arccos(-mean / swing)
        edges += [half, 2 * np.pi - half]
    flat, tilt = above * (cos_psi - H), np.hypot(ahead, aside) * sin_psi
    if tilt > abs(flat):
        half, centre = np.arccos(-flat / tilt), np.arctan2(aside, ahead)
        edges += [(centre + half) % (2 * np.pi), (centre - half) % (2 * np.pi)]
    edges = np.sort(edges)
    widths = np.diff(edges)[:, None]
    phi = edges[:-1, None] + widths * (x + 1) / 2
    weight = widths * w / 2
    distance2 = H * H + 1 - 2 * H * cos_psi
    facing = np.maximum(flat + sin_psi * (ahead * np.cos(phi) + aside * np.sin(phi)), 0.0)
    kernel = weight * facing * (H * cos_psi - 1) * sin_psi / (np.pi * distance2 * distance2)
    lit = np.maximum(mean + swing * np.cos(phi), 0.0)
    return np.array([(kernel * lit).sum(), kernel.sum()])


def random_cases(count: int, altitude_km: float, seed: int):
    """Positions, Suns (half of them with the terminator in view) and attitudes without symmetry."""
    rng = np.random.default_rng(seed)
    position = _unit(rng.normal(size=(count, 3))) * (RADIUS_KM + altitude_km)
    cap = np.arccos(RADIUS_KM / (RADIUS_KM + altitude_km))
    height = np.sin(
        np.where(np.arange(count) % 2, rng.uniform(-cap, cap, count), rng.uniform(-0.5, 0.5, count) * np.pi)
    )
    up = _unit(position)
    across = _unit(np.cross(up, rng.normal(size=(count, 3))))
    sun = height[:, None] * up + np.sqrt(1 - height**2)[:, None] * across
    rotations = rotation_from_quaternion(rng.normal(size=(count, 1, 4)))
    return position, sun, np.ascontiguousarray(rotations)


def _unit(v):
    return v / np.linalg.norm(v, axis=-1, keepdims=True)


def kernel_factors(position, sun, rotations):
    g_albedo, g_ir = np.empty((2, len(position), len(FACES)))
    planet_factors(position, sun, rotations, np.ones(1), FACES, RADIUS_KM, g_albedo, g_ir, None)
    return g_albedo, g_ir


def references(position, sun, rotations, nodes=400):
    normals = np.einsum("tij,fj->tfi", rotations[:, 0], FACES)
    both = [converged(p, s, n, nodes=nodes) for p, s, n in zip(position, sun, normals, strict=True)]
    return np.array([b[0] for b in both]), np.array([b[1] for b in both]), normals


def flux_accuracy(count: int) -> None:
    worst_albedo = worst_ir = moved = 0.0
    for k, altitude in enumerate((200.0, 560.0, 1500.0, 8000.0, 36000.0)):
        cases = random_cases(count, altitude, seed=k)
        scale = ((RADIUS_KM + altitude) / RADIUS_KM) ** 2
        albedo, ir = kernel_factors(*cases)
        true_albedo, true_ir, _ = references(*cases)
        few = tuple(part[:3] for part in cases)
        moved = max(moved, scale * np.abs(references(*few, nodes=800)[0] - true_albedo[:3]).max())
        worst_albedo = max(worst_albedo, scale * np.abs(albedo - true_albedo).max())
        worst_ir = max(worst_ir, scale * np.abs(ir - true_ir).max())
    row("albedo, worst error of the most it can be", "< 0.1 %", f"{100 * worst_albedo:.4f} %")
    row("planetary IR, worst error of the most it can be", "< 0.1 %", f"{100 * worst_ir:.2e} %")
    row("   (200 to 36 000 km, random tilts; reference moves by", "1e-6", f"{moved:.0e} when refined)")


def orbit_mean_accuracy() -> None:
    """Default step against one 32 times finer, per law; both with the same samples at eclipse edges."""
    laws = {
        "nadir": ef.NadirPointing(roll_deg=11.0, pitch_deg=-7.0, yaw_deg=23.0),
        "inertial": ef.InertialAttitude((0.4, -0.3, 0.7, 0.5)),
        "sun": ef.SunPointing(),
        "spin averaged": ef.Spinning("+Z", "inertial", 5.0, direction=(0.3, -0.5, 0.8)),
    }
    orbits = [
        ef.UndatedOrbit(560.0, 37.0),
        ef.UndatedOrbit(35786.0, 3.0),
        ef.KeplerOrbit(
            semi_major_axis_km=26_560.0,
            eccentricity=0.74,
            inclination_deg=63.435,
            raan_deg=40.0,
            arg_perigee_deg=270.0,
            epoch="2031-03-20T06:00:00Z",
        ),
    ]
    worst = 0.0
    for orbit in orbits:
        fine = orbit.track(step_s=orbit.period_s / 7680)
        for law in laws.values():
            coarse = ef.orbit_mean(ef.factors(orbit.track(), law, box()))
            true = ef.orbit_mean(ef.factors(fine, law, box()))
            nearest = float(np.linalg.norm(fine.position.values, axis=1).min())
            for name, most in (
                ("g_sun", 1.0),
                ("g_albedo", (RADIUS_KM / nearest) ** 2),
                ("g_ir", (RADIUS_KM / nearest) ** 2),
            ):
                worst = max(worst, float(np.abs(coarse[name] - true[name]).max()) / most)
    row("orbit means at the default step", "< 0.03 %", f"{100 * worst:.4f} %")


def contact_accuracy() -> None:
    """Contacts of an undated orbit against the closed two-disc condition, solved by itself to 1e-10 s."""
    from scipy.optimize import brentq

    sun_km, au_km = 695_700.0, 149_597_870.7
    worst, rows = 0.0, 0
    for altitude in (250.0, 560.0, 1200.0, 20_200.0, 35_786.0):
        r = RADIUS_KM + altitude
        onset = np.degrees(np.arcsin(RADIUS_KM / r))
        for beta in (0.0, 0.4 * onset, 0.95 * onset, onset + 0.02):
            orbit = ef.UndatedOrbit(altitude, beta)
            table = ef.eclipses(orbit.track())
            sun = au_km * np.array([np.cos(np.radians(beta)), 0.0, np.sin(np.radians(beta))])

            def gap(t, sign, orbit=orbit, r=r, sun=sun):
                angle = 2.0 * np.pi * t / orbit.period_s
                position = r * np.array([np.cos(angle), np.sin(angle), 0.0])
                ray = sun - position
                d = np.linalg.norm(ray)
                apart = np.arccos(np.clip(-(ray @ position) / (d * r), -1.0, 1.0))
                return apart - np.arcsin(RADIUS_KM / r) - sign * np.arcsin(sun_km / d)

            half = orbit.period_s / 2.0
            for sign, entry, leave in ((1, "penumbra_entry", "penumbra_exit"), (-1, "umbra_entry", "umbra_exit")):
                if gap(half, sign) >= 0.0:
                    continue
                true = brentq(gap, 0.1 * half, half, args=(sign,), xtol=1e-10)
                found = table[entry].values[0] / np.timedelta64(1, "ns") * 1e-9
                left = table[leave].values[0] / np.timedelta64(1, "ns") * 1e-9
                worst = max(worst, abs(found - true), abs(left - (orbit.period_s - true)))
                rows += 2
    row(f"eclipse contacts ({rows}, penumbra-only included)", "< 0.05 s", f"{worst:.4f} s")


def sun_accuracy() -> None:
    import erfa

    from envflux.almanac import sun_vector_au, tai_from_utc

    days = np.arange(
        np.datetime64("2000-01-01T00:00", "ns"), np.datetime64("2050-01-01", "ns"), np.timedelta64(171, "h")
    )
    ours = sun_vector_au(tai_from_utc(days))
    utc = _days_from_j2000(days)
    # TT from UTC by ERFA's own leap seconds.
    tai1, tai2 = erfa.utctai(np.full(utc.shape, 2451545.0), utc)
    tt1, tt2 = erfa.taitt(tai1, tai2)
    heliocentric, barycentric = erfa.epv00(tt1, tt2)
    geometric = -heliocentric["p"]
    distance = np.linalg.norm(geometric, axis=1)
    velocity = barycentric["v"] / 173.1446326847  # au/d to units of c
    apparent = erfa.ab(geometric / distance[:, None], velocity, distance, np.sqrt(1 - (velocity**2).sum(1)))
    apart = np.degrees(np.arccos(np.clip((_unit(ours) * apparent).sum(1), -1, 1)))
    row("Sun direction 2000-2050 against pyerfa", "< 0.01 deg", f"{apart.max():.2e} deg")
    row(
        "Sun distance 2000-2050 against pyerfa",
        "< 1e-5 au",
        f"{np.abs(np.linalg.norm(ours, axis=1) - distance).max():.1e} au",
    )


def _days_from_j2000(times):
    return (times - np.datetime64("2000-01-01T12:00:00", "ns")) / np.timedelta64(1, "ns") / 86400e9


def satellite_accuracy() -> None:
    """States of the SGP4 verification set, rotated to GCRS by pyerfa, against `TleOrbit.track`."""
    import erfa
    import sgp4

    folder = Path(sgp4.__file__).parent
    lines = [
        line.rstrip("\n") for line in (folder / "SGP4-VER.TLE").read_text().splitlines() if not line.startswith("#")
    ]
    pairs = {a[2:7]: (a[:69], b[:69]) for a, b in zip(lines[::2], lines[1::2], strict=True)}
    published: dict[str, list[list[float]]] = {}
    for line in (folder / "tcppver.out").read_text().splitlines():
        fields = line.split()
        if len(fields) == 2 and fields[1] == "xx":
            current = published.setdefault(fields[0].zfill(5), [])
        elif len(fields) >= 7:
            current.append([float(v) for v in fields[:7]])
    worst, used, states = 0.0, 0, 0
    for number, (one, two) in pairs.items():
        try:
            orbit = ef.TleOrbit(one, two)
        except ef.InputError:
            continue  # the set holds broken elements on purpose
        for minutes, x, y, z, *_ in published.get(number.zfill(5), [])[:40]:
            try:
                start = np.datetime64(orbit.epoch.replace(tzinfo=None), "us") + np.timedelta64(
                    round(minutes * 6e7), "us"
                )
                track = orbit.track(start=start, duration_s=1.0)
            except ef.InputError:
                continue
            utc = (
                (track.time.values[:1] - np.datetime64("2000-01-01T12:00:00", "ns")) / np.timedelta64(1, "ns") / 86400e9
            )
            tai1, tai2 = erfa.utctai(np.array([2451545.0]), utc)
            tt1, tt2 = erfa.taitt(tai1, tai2)
            ut1, ut2 = np.array([2451545.0]), utc  # both sidereal times below shift alike with UT1
            turn = erfa.gmst82(ut1, ut2) - erfa.gst06a(ut1, ut2, tt1, tt2)
            of_date = erfa.rz(turn, np.eye(3)[None])[0] @ np.array([x, y, z])
            expected = erfa.pnm06a(tt1, tt2)[0].T @ of_date
            worst = max(worst, float(np.linalg.norm(track.position.values[0] - expected)) * 1000.0)
            states += 1
        used += 1
    row(f"TLE states in GCRS, {states} of {used} verification satellites", "< 1 m", f"{worst:.3f} m")


def j2_accuracy() -> None:
    published = {400: 97.03004, 600: 97.78767, 800: 98.60311}  # first-order J2, tables
    worst = max(
        abs(ef.SunSynchronousOrbit(h, ltan_hours=10.5, epoch="2031-03-20T06:00:00Z").inclination_deg - i)
        for h, i in published.items()
    )
    row("Sun-synchronous inclination against tables", "5 decimals", f"{worst:.1e} deg")


# -- speed ---------------------------------------------------------------------------------------


def best_of(function, times: int = 3) -> float:
    return min(_timed(function) for _ in range(times))


def _timed(function) -> float:
    start = time.perf_counter()
    function()
    return time.perf_counter() - start


def speed(samples: int, sum_cases: int) -> None:
    orbit = ef.CircularOrbit(560.0, 53.0, 40.0, "2031-03-20T06:00:00Z")
    track = orbit.track(revolutions=samples / 240)
    law, craft = RandomTilts(7, track.elapsed.values), box()
    ef.flux(track, law, craft, environment(), threads=1)
    seconds = best_of(lambda: ef.flux(track, law, craft, environment(), threads=1))
    ours = track.sizes["time"] * len(FACES) / seconds
    row("flux, 6 faces, random tilts, one thread", ">= 1.5 M face-steps/s", f"{ours / 1e6:.2f} M face-steps/s")
    both = best_of(lambda: ef.flux(track, law, craft, environment(), threads=2))
    row("   the same on two threads", "-", f"{track.sizes['time'] * len(FACES) / both / 1e6:.2f} M face-steps/s")

    cases = random_cases(sum_cases, 560.0, seed=99)
    scale = ((RADIUS_KM + 560.0) / RADIUS_KM) ** 2
    true_albedo, true_ir, normals = references(*cases)
    albedo, ir = kernel_factors(*cases)
    target = scale * max(np.abs(albedo - true_albedo).max(), np.abs(ir - true_ir).max())

    def sum_error(rings: int, sectors: int) -> float:
        worst = 0.0
        for i in range(sum_cases):
            piece = slice(i, i + 1)
            a, e = patch_sum(cases[0][piece], cases[1][piece], normals[piece], RADIUS_KM, rings, sectors)
            worst = max(worst, scale * np.abs(a - true_albedo[i]).max(), scale * np.abs(e - true_ir[i]).max())
            if worst > target:
                break
        return worst

    rings, sectors, error = fewest_patches(sum_error, target)
    timed = slice(0, min(20, sum_cases))

    def sum_all() -> None:
        for i in range(timed.start, timed.stop):
            piece = slice(i, i + 1)
            patch_sum(cases[0][piece], cases[1][piece], normals[piece], RADIUS_KM, rings, sectors)

    theirs = (timed.stop * len(FACES)) / best_of(sum_all)
    row("   worst error here and in the patch sum below", "-", f"{target:.2e} and {error:.2e}")
    row(f"   plain patch sum, {rings} x {sectors} = {rings * sectors} patches", "-", f"{theirs:.0f} face-steps/s")
    row("   ratio", ">= 500", f"{ours / theirs:.0f}")

    million = 1_000_000 / 240
    seconds = best_of(lambda: orbit.track(revolutions=million), 2)
    row("a million dated samples propagated", "< 3 s", f"{seconds:.2f} s")


def fewest_patches(error, target: float) -> tuple[int, int, float]:
    """The cheapest grid that is as accurate: rings first, at many sectors, then as few sectors as will do."""
    rings = 40
    while error(rings, 4 * rings) > target:
        rings = int(rings * 1.2)
    best = (rings, 4 * rings)
    for trial in (rings, int(rings * 1.25), int(rings * 1.6)):
        low, high = 4, 4 * trial
        while high - low > max(4, low // 20):
            middle = (low + high) // 2
            low, high = (low, middle) if error(trial, middle) <= target else (middle, high)
        if trial * high < best[0] * best[1] and error(trial, high) <= target:
            best = (trial, high)
    return (*best, error(*best))


_FIRST = """
import envflux as ef
orbit = ef.CircularOrbit(altitude_km=560, inclination_deg=53, raan_deg=40, epoch="2031-03-20T06:00:00Z")
craft = ef.box_craft(size_m=(0.8, 0.8, 1.2), coating=ef.Coating(absorptance=0.25, emittance=0.85))
env = ef.Environment(solar_constant_w_m2=1361, albedo=0.3, planetary_ir_w_m2=237)
ds = ef.flux(orbit.track(revolutions=2, step_s=30), ef.NadirPointing(), craft, env)
ef.orbit_mean(ds)
"""

_MEMORY = """
import resource, numpy as np, envflux as ef
orbit = ef.CircularOrbit(altitude_km=560, inclination_deg=53, raan_deg=40, epoch="2031-03-20T06:00:00Z")
craft = ef.box_craft(size_m=(0.8, 0.8, 1.2), coating=ef.Coating(absorptance=0.25, emittance=0.85))
env = ef.Environment(solar_constant_w_m2=1361, albedo=0.3, planetary_ir_w_m2=237)
track = orbit.track(revolutions={steps} / 6 / 255.2)
ds = ef.flux(track, ef.NadirPointing(), craft, env)
ef.orbit_mean(ds)
print(ds.solar_flux.size, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20)
"""


def start_up() -> None:
    def run(code: str, **environment: str) -> float:
        started = time.perf_counter()
        subprocess.run([sys.executable, "-W", "ignore", "-c", code], check=True, env={**os.environ, **environment})
        return time.perf_counter() - started

    bare = min(run("pass") for _ in range(3))
    row("import envflux", "< 1 s", f"{min(run('import envflux') for _ in range(3)) - bare:.2f} s")
    with tempfile.TemporaryDirectory() as cache:
        first = run(_FIRST, NUMBA_CACHE_DIR=cache)
        later = min(run(_FIRST, NUMBA_CACHE_DIR=cache) for _ in range(2))
    row("first result after install (kernels compiled), Python", "< 15 s", f"{first:.1f} s")
    row("later results, Python, start to orbit means", "< 3 s", f"{later:.1f} s")
    mission = ROOT / "examples" / "imager.toml"  # the one that README runs
    with tempfile.TemporaryDirectory() as folder:
        command = [sys.executable, "-m", "envflux", "run", str(mission), "--out", folder + "/out", "--replace"]
        with tempfile.TemporaryDirectory() as cache:
            environment = {**os.environ, "NUMBA_CACHE_DIR": cache}
            spent = [
                _timed(lambda: subprocess.run(command, check=True, capture_output=True, env=environment))
                for _ in range(3)
            ]
    row(f"envflux run {mission.name}, first and later", "< 15 s, < 3 s", f"{spent[0]:.1f} s, {min(spent[1:]):.1f} s")


def memory(steps: float) -> None:
    code = _MEMORY.format(steps=steps)
    result = subprocess.run([sys.executable, "-c", code], check=True, capture_output=True, text=True)
    size, peak = result.stdout.split()
    row(
        f"peak memory, {int(size) / 1e6:.1f} million face-steps and means",
        "< 1.5 GB",
        f"{float(peak) * 1.073741824:.2f} GB",
    )


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument(
        "--quick", action="store_true", help="fewer samples: shows that the script runs, not the figures"
    )
    quick = parser.parse_args().quick
    warnings.simplefilter("ignore")
    row("what", "must show", "measured")
    row("-" * 58, "-" * 34, "-" * 24)
    flux_accuracy(4 if quick else 60)
    orbit_mean_accuracy()
    contact_accuracy()
    sun_accuracy()
    satellite_accuracy()
    j2_accuracy()
    speed(20_000 if quick else 200_000, 2 if quick else 60)
    start_up()
    memory(1e5 if quick else 1e7)


if __name__ == "__main__":
    main()
