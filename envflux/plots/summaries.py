"""Pictures of a whole orbit at once."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
import xarray as xr

from envflux.errors import InputError
from envflux.plots.drawing import (
    COMPONENT_HUES,
    HUES,
    INK,
    SHORT,
    SINGLE_WIDTH,
    TEXT,
    chosen_faces,
    dress,
    figure_title,
    minus,
    new_axes,
    number,
    pretty_units,
    shadow_spans,
)
from envflux.reductions import orbit_mean
from envflux.schema import INCIDENT
from envflux.vectors import AXES

if TYPE_CHECKING:
    from matplotlib.axes import Axes


_ROOM = 1.11  # the bars' axis in lengths of the longest bar: its number stands beyond its end
_BARS_WIDTH = 11.0  # inches: narrow segments hold their numbers
_SMALLEST = 10.0  # points, of a number in a segment that holds no larger one


def orbit_mean_bars(
    ds: xr.Dataset,
    ax: Axes | None = None,
    *,
    faces: Sequence[str] | None = None,
    absorbed: bool = False,
    title: str | None = None,
) -> Axes:
    """Draw orbit means on each face, stacked by where the heat comes from.

    Parameters
    ----------
    ds : xarray.Dataset
        What `flux` or `orbit_mean` returns; the mean of all its whole revolutions is drawn.
    ax : matplotlib Axes, optional
        Where to draw; a new figure by default.
    faces : sequence of str, optional
        Names of the faces to draw; all by default.
    absorbed : bool
        Draw what each face absorbs of each component instead of what falls on it.
    title : str, optional
        Headline of a new figure.

    Returns
    -------
    matplotlib Axes
        Flux per face area in W m-2.
    """
    means = orbit_mean(ds) if "time" in ds.dims else ds
    names = [str(name) for name in ds["face"].values] if faces is None else chosen_faces(ds, faces)
    means = means.sel(face=names).mean("rev", keep_attrs=True)
    parts = {name: np.asarray(means[name].values, float) for name in INCIDENT}
    if absorbed:
        weights = {"planetary_ir_flux": means["emittance"].values}
        parts = {name: values * weights.get(name, means["absorptance"].values) for name, values in parts.items()}
    own_figure = ax is None
    ax = ax if ax is not None else new_axes(_BARS_WIDTH, max(5.0, 2.0 + 0.36 * len(names)))
    rows = list(range(len(names)))
    left = np.zeros(len(names))
    reach = max(float(np.sum(list(parts.values()), axis=0).max()), 1e-9)
    across_in = float(ax.get_window_extent().width) / ax.figure.dpi
    if own_figure:  # it will be laid out anew around the names
        across_in = _BARS_WIDTH - 0.8 - 0.65 * TEXT / 72 * max(map(len, names))
    per_inch = _ROOM * reach / max(across_in, 1.0)
    for name, values in parts.items():
        ax.barh(rows, values, left=left, height=0.72, color=COMPONENT_HUES[name], label=SHORT[name])
        for row, value in zip(rows, values, strict=True):
            said = _number_inside(value, reach, per_inch)
            if said:
                ax.text(left[row] + value / 2, row, said[0], ha="center", va="center", fontsize=said[1], color="black")
        left = left + values
    for row, total in zip(rows, left, strict=True):
        ax.text(
            total + 0.012 * reach,
            row,
            number(total, reach),
            ha="left",
            va="center",
            fontsize=TEXT,
            weight="bold",
        )
    ax.set_yticks(rows, [minus(name) for name in names])
    ax.invert_yaxis()
    ax.set_xlim(0, _ROOM * reach)
    dress(ax, grid="x")
    kind = "absorbed flux" if absorbed else "incident flux"
    ax.set_xlabel(f"orbit mean of {kind}, {pretty_units(means['solar_flux'])}", fontsize=TEXT)
    ax.legend(
        loc="lower right", bbox_to_anchor=(1.0, 1.0), ncols=3, frameon=False, fontsize=TEXT, handlelength=1.1,
        columnspacing=1.2, borderaxespad=0.2,
    )  # fmt: skip
    if own_figure:
        figure_title(ax, f"Orbit mean of {kind}", title, ds)
    return ax


def _number_inside(value: float, reach: float, per_inch: float) -> tuple[str, float] | None:
    """Find what to write of `value` into its segment, and how large; nothing where nothing fits."""
    candidates = [(number(value, reach), float(TEXT))]
    if value >= 0.95:  # a smaller one would be rounded away
        candidates += [(f"{value:.0f}", float(TEXT)), (f"{value:.0f}", _SMALLEST)]
    for words, size in candidates:
        ems = sum(0.32 if sign == "." else 0.64 for sign in words)  # widths in DejaVu Sans
        if value / per_inch > ems * size / 72 + 0.015:
            return words, size
    return None


def eclipse_strip(track: xr.Dataset, ax: Axes | None = None, *, title: str | None = None) -> Axes:
    """Draw sunlight and eclipse, one strip for each revolution.

    Parameters
    ----------
    track : xarray.Dataset
        A track, or anything that carries its `sunlit`.
    ax : matplotlib Axes, optional
        Where to draw; a new figure by default.
    title : str, optional
        Headline of a new figure.

    Returns
    -------
    matplotlib Axes
        Minutes since the start of each revolution run along the bottom.
    """
    # Here and not at the top, so that reading the package does not load matplotlib.
    from matplotlib.ticker import MaxNLocator

    own_figure = ax is None
    rev = np.asarray(track["rev"].values, int)
    count = int(rev.max()) + 1
    ax = ax if ax is not None else new_axes(SINGLE_WIDTH, float(np.clip(2.2 + 0.3 * count, 3.0, 9.0)))
    minutes = np.asarray(track["elapsed"].values, float) / 60.0
    period = float(track["orbital_period"]) / 60.0
    for name, start, end in shadow_spans(track, minutes):
        # An eclipse may run across the boundary between two strips.
        for row in range(int(start // period), min(int(end // period), count - 1) + 1):
            a, b = max(start - row * period, 0.0), min(end - row * period, period)
            if b > a:
                ax.barh(row, b - a, left=a, height=0.8, color="#5B6270" if name == "umbra" else "#A9AFBA", zorder=2)
    for row in range(count):
        lasts = min(period, minutes[-1] - row * period)
        ax.barh(row, lasts, height=0.8, color="#F7D794", zorder=1)
    ax.set_ylim(count - 0.4, -0.6)
    ax.set_xlim(0, period)
    dress(ax, grid=None)
    ax.yaxis.set_major_locator(MaxNLocator(integer=True, min_n_ticks=1))
    ax.set_ylabel("revolution", fontsize=TEXT)
    ax.set_xlabel(
        "minutes since the start of the revolution; yellow: sunlight, grey: penumbra and umbra", fontsize=TEXT
    )
    if own_figure:
        figure_title(ax, "Sunlight and eclipse, one strip for each revolution", title, track)
    return ax


def sun_in_body(ds: xr.Dataset, ax: Axes | None = None, *, title: str | None = None) -> Axes:
    """Draw where the Sun stands, seen from the body axes; in grey where it is eclipsed.

    Parameters
    ----------
    ds : xarray.Dataset
        What `flux` returns; its `sun_azimuth` and `sun_elevation` in degrees are drawn.
    ax : matplotlib Axes, optional
        Where to draw; a new figure by default.
    title : str, optional
        Headline of a new figure.

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    InputError
        If the attitude is averaged over a spin: the Sun has no single place in the body then.
    """
    if "sun_azimuth" not in ds:
        raise InputError("ds", "without sun_azimuth", "what flux returns for an attitude not averaged over a spin")
    own_figure = ax is None
    ax = ax if ax is not None else new_axes(SINGLE_WIDTH, 5.0)
    azimuth = np.asarray(ds["sun_azimuth"].values, float)
    elevation = np.asarray(ds["sun_elevation"].values, float)
    azimuth = (azimuth + 180.0) % 360.0 - 180.0
    lit = np.asarray(ds["sunlit"].values, float) > 0
    wraps = np.flatnonzero(np.abs(np.diff(azimuth)) > 180.0) + 1
    # A line across the whole map where the azimuth jumps by a turn would be no part of the path.
    azimuth, elevation = np.insert(azimuth, wraps, np.nan), np.insert(elevation, wraps, np.nan)
    lit = np.insert(lit, wraps, False)
    for name, (x, y, z) in AXES.items():
        spot = (np.degrees(np.arctan2(y, x)), np.degrees(np.arcsin(z)))
        if name == "-X":
            spot = (180.0, 0.0)
        ax.plot(*(spot if z == 0 else (0.0, spot[1])), marker="+", color=INK, markersize=9, clip_on=False)
        side = "right" if name == "-X" else "left"
        place = (-7 if side == "right" else 7, -13 if z > 0 else 5)
        at = spot if z == 0 else (0.0, spot[1])
        ax.annotate(minus(name), at, place, textcoords="offset points", fontsize=TEXT, ha=side)
    ax.plot(azimuth, np.where(lit, elevation, np.nan), color=HUES[4], linewidth=3.0, label="sunlit")
    ax.plot(azimuth, np.where(lit, np.nan, elevation), color="#8A909C", linewidth=3.0, label="eclipsed")
    first = int(np.flatnonzero(np.isfinite(azimuth))[0])
    ax.plot(azimuth[first], elevation[first], marker="o", color=INK, markersize=7)
    ax.annotate("start", (azimuth[first], elevation[first]), (8, -14), textcoords="offset points", fontsize=TEXT)
    dress(ax)
    ax.set(xlim=(-180, 180), ylim=(-90, 90), xticks=range(-180, 181, 45), yticks=range(-90, 91, 30))
    ax.set_xlabel("azimuth of the Sun in body axes, from +X toward +Y, °", fontsize=TEXT)
    ax.set_ylabel("elevation toward +Z, °", fontsize=TEXT)
    ax.legend(loc="lower right", bbox_to_anchor=(1.0, 1.0), ncols=2, frameon=False, fontsize=TEXT)
    if own_figure:
        figure_title(ax, "The Sun in body axes", title, ds)
    return ax
