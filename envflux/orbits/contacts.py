"""Edges of eclipses: found by search, never by looking at which samples happen to be dark.

The gap is the angle between Sun and planet less the planet's apparent radius. Penumbra begins where
it falls to the Sun's apparent radius, umbra where it falls to minus that. A scan of the orbit finds
where the gap crosses these levels and where it is least; each least gap is refined, so a grazing
eclipse between two nodes of the scan is not missed; each crossing is then closed in on from both sides.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from envflux.orbits.states import FIXED_POLE, States
from envflux.schema import CONTACTS
from envflux.shadows import Shadow, disc_gap

Array = NDArray[np.float64]
Microseconds = NDArray[np.int64]
Flags = NDArray[np.int8]

# Per revolution. On 700 random orbits, circular and up to e = 0.97, 24 already found every contact that 1440 did.
SCAN_STEPS = 48
CHUNK = 32_768

PENUMBRA_ENTRY, UMBRA_ENTRY = CONTACTS["penumbra_entry"], CONTACTS["umbra_entry"]
UMBRA_EXIT, PENUMBRA_EXIT = CONTACTS["umbra_exit"], CONTACTS["penumbra_exit"]

_CLOSE_ENOUGH_S = 2e-5  # of a root; 0.01 s is promised
_MINIMUM_WITHIN_S = 0.05  # the gap is flat there: this leaves 1e-9 rad
_CLEAR_RAD = 0.02  # a least gap that cannot come nearer than this is no eclipse
_SHORTEST_US = 2000
_INTEGRAL_SHARE = 1e-4


class Contacts(NamedTuple):
    """Contacts in order of time."""

    times_us: Microseconds
    kinds: Flags
    least_us: Microseconds
    """Moments of least sunlight within partial phases."""
    dark_at_start: int
    """0 sunlit, 1 partly, 2 not at all."""


def gap_at(states: States, times_us: Microseconds, shadow: Shadow) -> tuple[Array, Array]:
    """Gap and apparent radius of the Sun at each moment, shape (n,). [rad]."""
    gap, sun = np.empty(times_us.size), np.empty(times_us.size)
    for begin in range(0, times_us.size, CHUNK):
        part = slice(begin, begin + CHUNK)
        state = states.at(times_us[part])
        pole = state.pole if shadow.oblate else FIXED_POLE
        disc_gap(
            state.position,
            state.sun_direction,
            state.sun_distance,
            pole,
            shadow.radius_km,
            shadow.stretch,
            shadow.kind == "cylinder",
            gap[part],
            sun[part],
        )
    return gap, sun


def find_contacts(states: States, scan_us: Microseconds, shadow: Shadow, begin_us: int, end_us: int) -> Contacts:
    """Every contact between two moments.

    Parameters
    ----------
    states : States
        The orbit.
    scan_us : numpy.ndarray of int64
        Nodes of the scan, strictly increasing, best reaching past both ends so that a grazing
        eclipse right at an end is seen whole.
    shadow : Shadow
        Model of the shadow.
    begin_us, end_us : int
        Contacts outside are left out.

    References
    ----------
    Roots: Chandrupatla, *Advances in Engineering Software* 28, 145 (1997). Minima: golden section
    (Kiefer, *Proceedings of the American Mathematical Society* 4, 502 (1953)). Both cited from memory.
    """
    gap, sun = gap_at(states, scan_us, shadow)
    i = _grazing(gap, sun)
    least = _least(lambda t: gap_at(states, t, shadow)[0], scan_us[i - 1], scan_us[i + 1])
    least_gap, least_sun = gap_at(states, least, shadow)
    order = np.argsort(np.concatenate([scan_us, least]), kind="stable")
    times = np.concatenate([scan_us, least])[order]
    gap, sun = np.concatenate([gap, least_gap])[order], np.concatenate([sun, least_sun])[order]

    found_t, found_k = [], []
    # The cylinder has no penumbra: its two levels coincide, and its edges count as umbra.
    levels = ((-1, UMBRA_ENTRY, UMBRA_EXIT),) if shadow.kind == "cylinder" else (
        (1, PENUMBRA_ENTRY, PENUMBRA_EXIT),
        (-1, UMBRA_ENTRY, UMBRA_EXIT),
    )  # fmt: skip
    for level, entry, leave in levels:
        height = gap - level * sun
        inside = _inside(height, shadow)
        j = np.flatnonzero(inside[1:] != inside[:-1])

        def height_at(t: Microseconds, level: int = level) -> Array:
            g, a = gap_at(states, t, shadow)
            return g - level * a

        dark, lit = _roots(height_at, times[j], times[j + 1], height[j], height[j + 1], shadow)
        # The lit side of a penumbra contact has all of the Sun, the dark side of an umbra contact none.
        found_t.append(lit if level == 1 else dark)
        found_k.append(np.where(inside[j], leave, entry).astype(np.int8))
    contact_t, contact_k = np.concatenate(found_t), np.concatenate(found_k)
    order = np.lexsort((contact_k, contact_t))
    contact_t, contact_k = _without_specks(contact_t[order], contact_k[order])
    within = (contact_t >= begin_us) & (contact_t <= end_us)
    partly = (np.abs(least_gap) < least_sun) & (least > begin_us) & (least < end_us)
    first_gap, first_sun = gap_at(states, np.array([begin_us], np.int64), shadow)
    dark_at_start = int(_inside(first_gap - first_sun, shadow)[0]) + int(_inside(first_gap + first_sun, shadow)[0])
    return Contacts(contact_t[within], contact_k[within], least[partly], dark_at_start)


def _inside(height: Array, shadow: Shadow) -> NDArray[np.bool_]:
    return height <= 0.0 if shadow.kind == "cylinder" else height < 0.0


def _grazing(gap: Array, sun: Array) -> NDArray[np.intp]:
    """Nodes where the gap is least among its neighbours and may hide an edge between the nodes."""
    middle, before, after = gap[1:-1], gap[:-2], gap[2:]
    lowest = middle - 2.0 * np.maximum(before - middle, after - middle)  # where the slopes could lead, doubled
    hidden = (middle <= before) & (middle < after) & (middle > -sun[1:-1]) & (lowest < _CLEAR_RAD)
    return np.flatnonzero(hidden) + 1


def _least(gap: Callable[[Microseconds], Array], left_us: Microseconds, right_us: Microseconds) -> Microseconds:
    """Golden-section search for the least gap in each bracket."""
    if not left_us.size:
        return left_us
    ratio = (np.sqrt(5.0) - 1.0) / 2.0
    low, high = np.zeros(left_us.size), (right_us - left_us) * 1e-6

    def at(x: Array) -> Array:
        return gap(left_us + np.round(x * 1e6).astype(np.int64))

    x1, x2 = high - ratio * (high - low), low + ratio * (high - low)
    g1, g2 = at(x1), at(x2)
    while np.any(high - low > _MINIMUM_WITHIN_S):
        keep_left = g1 < g2
        high, low = np.where(keep_left, x2, high), np.where(keep_left, low, x1)
        fresh = np.where(keep_left, high - ratio * (high - low), low + ratio * (high - low))
        g = at(fresh)
        x1, x2 = np.where(keep_left, fresh, x2), np.where(keep_left, x1, fresh)
        g1, g2 = np.where(keep_left, g, g2), np.where(keep_left, g1, g)
    return left_us + np.round(0.5e6 * (low + high)).astype(np.int64)


def _roots(
    height: Callable[[Microseconds], Array],
    left_us: Microseconds,
    right_us: Microseconds,
    left: Array,
    right: Array,
    shadow: Shadow,
) -> tuple[Microseconds, Microseconds]:
    """Close in on the last dark and the first lit moment around each change of sign, closer than 1e-4 s."""
    a, fa = (right_us - left_us) * 1e-6, right.copy()
    b, fb = np.zeros(left.size), left.copy()
    c, fc = b.copy(), fb.copy()
    t = np.full(left.size, 0.5)
    active = np.flatnonzero(np.abs(a - b) > 2.0 * _CLOSE_ENOUGH_S)
    while active.size:
        x = np.round((a[active] + t[active] * (b[active] - a[active])) * 1e6).astype(np.int64)
        f = height(left_us[active] + x)
        same = _inside(f, shadow) == _inside(fa[active], shadow)
        c[active], fc[active] = np.where(same, a[active], b[active]), np.where(same, fa[active], fb[active])
        b[active], fb[active] = np.where(same, b[active], a[active]), np.where(same, fb[active], fa[active])
        a[active], fa[active] = x * 1e-6, f
        active = active[np.abs(a[active] - b[active]) > 2.0 * _CLOSE_ENOUGH_S]
        p, q, r, fp, fq, fr = (v[active] for v in (a, b, c, fa, fb, fc))
        with np.errstate(divide="ignore", invalid="ignore"):
            xi, phi = (p - q) / (r - q), (fp - fq) / (fr - fq)
            curved = fp / (fq - fp) * fr / (fq - fr) + (r - p) / (q - p) * fp / (fr - fp) * fq / (fr - fq)
            usable = (phi**2 < xi) & ((1.0 - phi) ** 2 < 1.0 - xi) & np.isfinite(curved)
        edge = _CLOSE_ENOUGH_S / np.abs(q - p)
        t[active] = np.clip(np.where(usable, curved, 0.5), edge, 1.0 - edge)
    a_us, b_us = (left_us + np.round(v * 1e6).astype(np.int64) for v in (a, b))
    dark_is_a = _inside(fa, shadow)
    return np.where(dark_is_a, a_us, b_us), np.where(dark_is_a, b_us, a_us)


def _without_specks(times: Microseconds, kinds: Flags) -> tuple[Microseconds, Flags]:
    """Leave out eclipses, and umbras, too short for two samples."""
    for entry, leave in ((UMBRA_ENTRY, UMBRA_EXIT), (PENUMBRA_ENTRY, PENUMBRA_EXIT)):
        i = np.flatnonzero((kinds[:-1] == entry) & (kinds[1:] == leave) & (np.diff(times) < _SHORTEST_US))
        keep = np.ones(times.size, bool)
        keep[i] = keep[i + 1] = False
        times, kinds = times[keep], kinds[keep]
    return times, kinds


def partial_phases(contacts: Contacts, begin_us: int, end_us: int) -> tuple[Microseconds, Microseconds]:
    """Begin and end of each stretch of partial sunlight, split at the moment of least sunlight."""
    first = (PENUMBRA_EXIT, PENUMBRA_ENTRY, UMBRA_ENTRY)[contacts.dark_at_start]
    kinds = np.concatenate([[first], contacts.kinds])
    edges = np.concatenate([[begin_us], contacts.times_us, [end_us]])
    partial = (kinds == PENUMBRA_ENTRY) | (kinds == UMBRA_EXIT)
    begins, ends = edges[:-1][partial], edges[1:][partial]
    if not begins.size or not contacts.least_us.size:
        return begins, ends
    phase = np.searchsorted(begins, contacts.least_us, side="right") - 1
    held = (phase >= 0) & (contacts.least_us < ends[np.maximum(phase, 0)])
    return np.sort(np.concatenate([begins, contacts.least_us[held]])), np.sort(
        np.concatenate([ends, contacts.least_us[held]])
    )


def interior_us(contacts: Contacts, begin_us: int, end_us: int, period_s: float) -> Microseconds:
    """Place samples inside partial phases, enough for the trapezoidal integral of sunlight.

    The trapezoid on n intervals misses about (length of the phase) / (10 n^2); n is chosen to keep
    that a tenth of 1e-4 of the revolution or less.
    """
    begins, ends = partial_phases(contacts, begin_us, end_us)
    if not begins.size:
        return contacts.least_us
    counts = np.ceil(np.sqrt((ends - begins) / (period_s * 1e6) / _INTEGRAL_SHARE)).astype(np.int64)
    counts = np.clip(counts, 6, 64)
    which = np.repeat(np.arange(begins.size), counts)
    number = np.arange(which.size) - np.repeat(np.cumsum(counts) - counts, counts) + 1
    inner = begins[which] + (ends - begins)[which] * number // (counts[which] + 1)
    return np.concatenate([inner, contacts.least_us])
