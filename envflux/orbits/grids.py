"""Which moments a track holds: what was asked for, checked, and laid out in time."""

from __future__ import annotations

import math
import warnings
from datetime import datetime
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from envflux.errors import CoarseStepWarning, InputError
from envflux.orbits.elements import mean_from_true, true_from_mean

Array = NDArray[np.float64]
Microseconds = NDArray[np.int64]

DEFAULT_STEPS = 240  # per revolution
COARSEST_STEPS = 12  # below: a component between two samples can be missed altogether
WARNED_STEPS = 72  # below: orbit means leave the stated accuracy
MOST_SAMPLES = 50_000_000
EVEN_TIME_UP_TO = 0.05  # eccentricity above which samples are equal in true anomaly
MERGED_US = 1000  # samples closer than this become one

# Who stays when two samples merge, best first.
FIXED, CONTACT, INTERIOR, REGULAR = 0, 1, 2, 3


class Pace(NamedTuple):
    """How fast an orbit goes round: enough to lay samples out, not to place the spacecraft."""

    period_s: float
    eccentricity: float = 0.0
    mean_anomaly_rad: float = 0.0
    mean_rate_rad_s: float = 0.0
    epoch_us: int = 0

    def boundary_us(self, start_us: int, revolution: NDArray[np.int64] | range) -> Microseconds:
        """Moments at which revolutions, counted from the start, begin."""
        return start_us + np.round(np.asarray(revolution) * (self.period_s * 1e6)).astype(np.int64)

    def samples_us(self, start_us: int, first: int, last: int, per_revolution: int) -> Microseconds:
        """Moments that divide the revolutions `first` to before `last` evenly, in time or in true anomaly."""
        return self._divided(start_us, first, last, np.arange(per_revolution) / per_revolution)

    def _divided(self, start_us: int, first: int, last: int, parts: Array) -> Microseconds:
        edges = self.boundary_us(start_us, range(first, last + 1))
        if self.eccentricity <= EVEN_TIME_UP_TO:
            spans = np.diff(edges)[:, None]
            return (edges[:-1, None] + np.round(spans * parts).astype(np.int64)).reshape(-1)
        # The revolution is nodal, the anomaly is not: each revolution is divided between the anomalies
        # at its own two ends.
        anomaly = self._anomaly_rad(edges)
        divided = anomaly[:-1, None] + np.diff(anomaly)[:, None] * parts
        since_s = (mean_from_true(divided, self.eccentricity) - self.mean_anomaly_rad) / self.mean_rate_rad_s
        return (self.epoch_us + np.round(since_s * 1e6).astype(np.int64)).reshape(-1)

    def _anomaly_rad(self, times_us: Microseconds) -> Array:
        mean = self.mean_anomaly_rad + self.mean_rate_rad_s * ((times_us - self.epoch_us) * 1e-6)
        return true_from_mean(mean, self.eccentricity)

    def samples_within_us(self, start_us: int, end_us: int, per_revolution: int) -> Microseconds:
        """The same for a span that may end within a revolution; nothing is laid out beyond it.

        Raises
        ------
        InputError
            Where this makes too many samples: near perigee they are dense.
        """
        whole = int((end_us - start_us) / (self.period_s * 1e6))
        low, high = self._anomaly_rad(self.boundary_us(start_us, range(whole, whole + 2)))
        turned = float(self._anomaly_rad(np.array([end_us], np.int64))[0])
        rest = math.ceil(min(max((turned - low) / (high - low), 0.0), 1.0) * per_revolution)
        if whole * per_revolution + rest > MOST_SAMPLES:
            raise InputError(
                "step_s", self.period_s / per_revolution, f"such that a track holds {MOST_SAMPLES:,} samples"
            )
        partial = self._divided(start_us, whole, whole + 1, np.arange(rest) / per_revolution)
        return np.concatenate([self.samples_us(start_us, 0, whole, per_revolution), partial])


class Request(NamedTuple):
    """What the user asked of `track`, checked."""

    span_us: int
    step_s: float
    whole: bool  # the track ends on the end of a revolution
    record: dict[str, object]


def check_request(
    pace: Pace,
    start: datetime | None,
    revolutions: float | None,
    duration_s: float | None,
    step_s: float | None,
    *,
    stacklevel: int,
) -> Request:
    """Check the length and the step of a track.

    Raises
    ------
    InputError
        Naming ``revolutions``, ``duration_s`` or ``step_s``.

    Warns
    -----
    CoarseStepWarning
        Where the step is above 1/72 of a revolution.
    """
    period = pace.period_s
    if revolutions is not None and duration_s is not None:
        raise InputError("duration_s", duration_s, "left out where revolutions is given, or the other way round")
    if duration_s is None:
        revolutions = _positive("revolutions", 1 if revolutions is None else revolutions)
        span_s = revolutions * period
    else:
        span_s = _positive("duration_s", duration_s)
    span_us = max(round(span_s * 1e6), 1)
    given = step_s is not None
    step = _positive("step_s", step_s) if step_s is not None else period / DEFAULT_STEPS
    limits = f"above 0 and at most {_down(period / COARSEST_STEPS)} s, 1/{COARSEST_STEPS} of a revolution"
    if step > period / COARSEST_STEPS * (1.0 + 1e-12):
        raise InputError("step_s", step_s, limits)
    if step < 1e-3:
        raise InputError("step_s", step_s, "at least 0.001 s")
    if span_s / step > MOST_SAMPLES:
        raise InputError(
            "step_s" if given else "duration_s" if revolutions is None else "revolutions",
            step_s if given else duration_s if revolutions is None else revolutions,
            f"such that the track holds at most {MOST_SAMPLES:,} samples, not {span_s / step:,.0f}",
        )
    if step > period / WARNED_STEPS * (1.0 + 1e-12):
        warnings.warn(
            f"step_s is {step:g}; above {_down(period / WARNED_STEPS)} s (1/{WARNED_STEPS} of a revolution) "
            "orbit means lose accuracy",
            CoarseStepWarning,
            stacklevel=stacklevel,
        )
    turns = span_s / period
    whole = round(turns) >= 1 and abs(span_us - round(round(turns) * period * 1e6)) <= 1
    record: dict[str, object] = {
        "start": None if start is None else start.isoformat(),
        "revolutions": revolutions,
        "duration_s": duration_s,
        "step_s": step_s,
    }
    return Request(span_us, step, whole, record)


def _positive(field: str, value: object) -> float:
    number = isinstance(value, int | float | np.integer | np.floating) and not isinstance(value, bool)
    if not number or not math.isfinite(value) or value <= 0:  # type: ignore[arg-type,operator]  # a number by now
        raise InputError(field, value, "a number above 0")
    return float(value)  # type: ignore[arg-type]  # a number by now


def _down(seconds: float) -> str:
    """Limit in seconds, rounded so that the figure shown is itself accepted."""
    return f"{math.floor(seconds * 100) / 100:g}"


def regular_us(pace: Pace, start_us: int, request: Request) -> Microseconds:
    """Lay out the samples the step asks for: even in time, or in true anomaly on an eccentric orbit."""
    if pace.eccentricity <= EVEN_TIME_UP_TO:
        count = int(request.span_us / (request.step_s * 1e6)) + 1
        times = start_us + np.round(np.arange(count) * (request.step_s * 1e6)).astype(np.int64)
    else:
        per_revolution = max(round(pace.period_s / request.step_s), COARSEST_STEPS)
        times = pace.samples_within_us(start_us, start_us + request.span_us, per_revolution)
        # A tiny step is tinier still at perigee: one sample in each slot of the merging distance.
        slot = times // merging_us(request.step_s)
        times = times[np.concatenate([[True], slot[1:] != slot[:-1]])]
    return times[times < start_us + request.span_us]


def merging_us(step_s: float) -> int:
    """Distance below which samples merge: 1 ms, or a quarter of a very small step. [us]."""
    return min(MERGED_US, max(int(step_s * 1e6) // 4, 1))


def merge(
    groups: list[tuple[Microseconds, int]], contacts_us: Microseconds, kinds: NDArray[np.int8], gap_us: int = MERGED_US
) -> tuple[Microseconds, NDArray[np.int8]]:
    """All samples in order, those closer than `gap_us` made one.

    Parameters
    ----------
    groups : list of (times, rank)
        Times and how firmly they hold their place, `FIXED` first.
    contacts_us, kinds : numpy.ndarray
        Contacts and their flags; a contact that gives way to a fixed sample leaves its flag there.
    gap_us : int
        Distance below which two samples become one. [us]

    Returns
    -------
    tuple
        Times, strictly increasing, and their contact flags.
    """
    times = np.concatenate([part for part, _ in groups] + [contacts_us])
    ranks = np.concatenate(
        [np.full(part.size, rank, np.int8) for part, rank in groups] + [np.full(contacts_us.size, CONTACT, np.int8)]
    )
    flags = np.zeros(times.size, np.int8)
    flags[times.size - kinds.size :] = kinds
    order = np.lexsort((ranks, times))
    times, ranks, flags = times[order], ranks[order], flags[order]
    while True:
        close = np.flatnonzero(np.diff(times) < gap_us)
        # Of a run of close samples only every other pair is settled at a time, so each loser has one winner.
        close = close[np.concatenate([[True], np.diff(close) > 1])] if close.size else close
        if not close.size:
            return times, flags
        later_wins = ranks[close + 1] < ranks[close]
        losers, winners = np.where(later_wins, close, close + 1), np.where(later_wins, close + 1, close)
        flags[winners] = np.where(flags[winners] == 0, flags[losers], flags[winners])
        keep = np.ones(times.size, bool)
        keep[losers] = False
        times, ranks, flags = times[keep], ranks[keep], flags[keep]
