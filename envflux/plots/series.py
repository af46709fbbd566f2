"""Quantities along the orbit."""

from __future__ import annotations

import itertools
import textwrap
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np
import xarray as xr

from envflux.errors import InputError, did_you_mean
from envflux.plots.drawing import (
    DASHED_REVOLUTIONS,
    DASHES,
    HUES,
    INK,
    NAMES_FROM,
    PANEL,
    SHADE,
    SINGLE_WIDTH,
    TEXT,
    XAxis,
    chosen_faces,
    dress,
    facts,
    figure_title,
    joined,
    left_out_note,
    line_style,
    long_name,
    minus,
    new_axes,
    place_panels,
    pretty_units,
    revolutions,
    shadow_spans,
    x_label,
    x_values,
)
from envflux.schema import FLUXES
from envflux.vectors import Array

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    Panels = np.ndarray[Any, np.dtype[np.object_]]

_LABEL_WIDTH, _LABEL_LINES = 18, 4  # characters, lines
_SAMPLE = (1.045, 1.097)  # where the piece of line beside a name starts and ends, in widths of the panel
_LEADER: dict[str, Any] = {"color": "#A3A9B2", "linewidth": 0.8, "zorder": 1}
_SAME_CURVE = 2e-3  # curves closer than this part of the panel's height are drawn and named as one


def flux_history(
    ds: xr.Dataset,
    faces: Sequence[str] | None = None,
    component: str | None = None,
    ax: Axes | Sequence[Axes] | None = None,
    *,
    against: XAxis = "time",
    title: str | None = None,
) -> Axes | Panels:
    """Draw the fluxes on each face along the orbit, with the eclipses shaded.

    Parameters
    ----------
    ds : xarray.Dataset
        What `flux` returns.
    faces : sequence of str, optional
        Names of the faces to draw; all of them by default, the twelve with the highest peaks of
        absorbed flux where there are more.
    component : str, optional
        One of ``solar_flux``, ``albedo_flux``, ``planetary_ir_flux``, ``absorbed_flux``. By
        default all four, one panel each.
    ax : matplotlib Axes, optional
        Where to draw: one Axes for one component, four for all. A new figure by default.
    against : {"time", "orbit angle"}
        What runs along the bottom. The orbit angle is counted from orbit noon, along the motion.
    title : str, optional
        Headline of a new figure.

    Returns
    -------
    matplotlib Axes, or array of four
        Flux per face area in W m-2.

    Raises
    ------
    InputError
        If a face or a component is unknown.
    """
    shown = chosen_faces(ds, faces)
    if component is not None:
        name = _component(component)
        if ax is not None and not hasattr(ax, "plot"):
            raise InputError("ax", type(ax).__name__, "one Axes when one component is drawn")
        single: Any = ax if ax is not None else new_axes(SINGLE_WIDTH, 5.0)
        _history_panel(single, ds, _styles(ds, shown, [name]), name, against, eclipse_label=True)
        single.set_xlabel(x_label(ds, against), fontsize=TEXT)
        if ax is None:
            single.set_title("", loc="left")
            words = long_name(ds, name)
            single.set_ylabel(f"{words[:1].lower()}{words[1:]}, {pretty_units(ds[name])}", fontsize=TEXT)
            figure_title(single, f"{words} on each face", title, ds, left_out_note(ds, shown))
        drawn: Axes = single
        return drawn
    panels: Panels
    if ax is None:
        panels = new_axes(13.33, 7.5, rows=2, columns=2, sharex=True)
        bottom = panels[1]
    else:
        panels = np.asarray(ax, dtype=object)
        if panels.size != len(FLUXES):
            raise InputError("ax", f"{panels.size} Axes", f"{len(FLUXES)} Axes, or one with a component named")
        bottom = panels.ravel()
    styles = _styles(ds, shown, FLUXES)
    for position, (panel, name) in enumerate(zip(panels.ravel(), FLUXES, strict=True)):
        _history_panel(panel, ds, styles, name, against, eclipse_label=position == 0)
    for panel in bottom:
        panel.set_xlabel(x_label(ds, against), fontsize=TEXT)
    if ax is None:
        headline = title or str(ds.attrs.get("title", "Flux on each face"))
        place_panels(panels, headline, facts(ds, left_out_note(ds, shown)))
    return panels


def beta_history(track: xr.Dataset, ax: Axes | None = None, *, title: str | None = None) -> Axes:
    """Draw the beta angle along a track, in degrees.

    Parameters
    ----------
    track : xarray.Dataset
        A track, or anything that carries its `beta`.
    ax : matplotlib Axes, optional
        Where to draw; a new figure by default.
    title : str, optional
        Headline of a new figure.

    Returns
    -------
    matplotlib Axes
    """
    own_figure = ax is None
    ax = ax if ax is not None else new_axes(SINGLE_WIDTH, 5.0)
    x, beta = x_values(track, "time"), np.asarray(track["beta"].values, float)
    ax.axhline(0.0, color=INK, linewidth=0.8)
    ax.plot(x, beta, color=HUES[0], linewidth=2.0)
    room = max(0.08 * float(np.ptp(beta)), 1.0)
    ax.set_ylim(max(beta.min() - room, -95), min(beta.max() + room, 95))
    dress(ax)
    ax.set_xlim(x[0], x[-1])
    ax.set_xlabel(x_label(track, "time"), fontsize=TEXT)
    ax.set_ylabel("beta angle, °", fontsize=TEXT)
    if own_figure:
        figure_title(ax, "Beta angle: elevation of the Sun over the orbit plane", title, track)
    return ax


class _Style(NamedTuple):
    """One look, and the faces that have it: those whose curves coincide in every panel."""

    names: list[str]
    look: dict[str, Any]


def _styles(ds: xr.Dataset, shown: list[str], components: Sequence[str]) -> list[_Style]:
    """Give each face one look for all panels of a figure, in the order of the faces."""
    known = [str(face) for face in ds["face"].values]
    shown = sorted(set(shown), key=known.index)
    # A face keeps its look from figure to figure, unless there are more faces than looks.
    order = known if len(known) <= len(HUES) * len(DASHES) else shown
    dashed = revolutions(ds) <= DASHED_REVOLUTIONS
    curves = {name: _values(ds, name, shown) for name in components}
    whole = {face: np.concatenate([curves[name][face] / _top(curves[name]) for name in components]) for face in shown}
    return [
        _Style(group, line_style(order.index(group[0]), dashed=dashed)) for group in _same_curves(whole, _SAME_CURVE)
    ]


def _values(ds: xr.Dataset, name: str, faces: Sequence[str]) -> dict[str, Array]:
    # Plain indexing: selecting face by face by label would take a tenth of the drawing's time.
    column = {str(face): index for index, face in enumerate(ds["face"].values)}
    values = np.asarray(ds[name].transpose("face", "time").values, float)
    return {face: values[column[face]] for face in faces}


def _top(values: dict[str, Array]) -> float:
    top = max((float(np.nanmax(v)) for v in values.values()), default=0.0)
    return top if top > 0 else 1.0


def _history_panel(
    ax: Axes, ds: xr.Dataset, styles: list[_Style], name: str, against: XAxis, *, eclipse_label: bool
) -> None:
    x = x_values(ds, against)
    values = _values(ds, name, [style.names[0] for style in styles])
    top = _top(values)
    shadows = shadow_spans(ds, x)
    for kind, shade in SHADE.items():  # all of a kind at once: many revolutions have many
        spans = [(start, end - start) for what, start, end in shadows if what == kind]
        if spans:
            ax.broken_barh(spans, (0, 1), transform=ax.get_xaxis_transform(), color=shade, linewidth=0, zorder=0)
    by_first = {style.names[0]: style for style in styles}
    ends = []
    for group in _same_curves(values, _SAME_CURVE * top):
        curve = values[group[0]]
        # Where faces with looks of their own coincide, the first of them is seen.
        ax.plot(x, curve, solid_capstyle="round", zorder=3, **by_first[group[0]].look)
        ends.append(_End([by_first[first] for first in group], float(curve[-1]), float(curve.max())))
    ax.set_xlim(x[0], x[-1])
    ax.set_ylim(-0.03 * top, 1.12 * top)
    dress(ax)
    if against == "orbit angle":
        _angle_ticks(ax, x)
    ax.set_ylabel(pretty_units(ds[name]), fontsize=TEXT)
    ax.set_title(long_name(ds, name), fontsize=PANEL, loc="left", color=INK, weight="bold")
    _label_ends(ax, ends)
    if eclipse_label:
        _label_eclipse(ax, shadows, x)


class _End(NamedTuple):
    styles: list[_Style]
    value: float
    peak: float


class _Label(NamedTuple):
    text: str
    look: dict[str, Any]
    end: float  # where the curve ends, in heights of the panel
    shared: bool  # that curve has several labels


def _label_ends(ax: Axes, ends: list[_End]) -> None:
    """Name each line beside its right end, with a piece of the line; push names apart to be read.

    A thin line leads from where a curve ends to each of its names that had to move away from there.
    """
    from matplotlib.lines import Line2D

    low, high = ax.get_ylim()
    height_in = ax.get_window_extent().height / ax.figure.dpi
    gap = 1.28 * TEXT / 72.0 / (0.93 * height_in)
    # Lines that end alike, as all do in eclipse, are ordered by how high they reach.
    ends = sorted(ends, key=lambda end: (round((end.value - low) / (high - low) / (0.3 * gap)), end.peak))
    heights = [(end.value - low) / (high - low) for end in ends]
    labels = [
        _Label(_wrapped(style.names), style.look, height, len(end.styles) > 1)
        for end, height in zip(ends, heights, strict=True)
        for style in reversed(end.styles)
    ]
    if sum(_lines(label) for label in labels) * gap > 1.0 + gap:
        # No room for each look: coinciding faces share the one that is drawn.
        labels = [
            _Label(_wrapped([name for style in end.styles for name in style.names]), end.styles[0].look, height, False)
            for end, height in zip(ends, heights, strict=True)
        ]
    wanted = [float(height) for height in np.maximum.accumulate([label.end for label in labels])]
    leaders: list[tuple[float, float]] = []
    for label, placed in zip(labels, _pushed_apart(wanted, [gap * _lines(one) for one in labels]), strict=True):
        ax.add_artist(Line2D(_SAMPLE, [placed] * 2, transform=ax.transAxes, clip_on=False, **label.look))
        ax.text(
            NAMES_FROM, placed, label.text, transform=ax.transAxes, fontsize=TEXT, va="center", color=INK,
            linespacing=1.12,
        )  # fmt: skip
        if label.shared or abs(placed - label.end) > 0.5 * TEXT / 72.0 / height_in:
            leaders += [(1.004, label.end), (_SAMPLE[0] - 0.006, placed), (np.nan, np.nan)]
    if leaders:
        ax.add_artist(Line2D(*zip(*leaders, strict=True), transform=ax.transAxes, clip_on=False, **_LEADER))


def _lines(label: _Label) -> int:
    return 1 + label.text.count("\n")


def _wrapped(names: list[str]) -> str:
    """Join names over several short lines: a long one would take the panel's width."""
    names = [minus(name) for name in names]
    lines = textwrap.wrap(", ".join(name.replace(" ", "\u00a0") for name in names), _LABEL_WIDTH)
    if len(lines) > _LABEL_LINES:
        told = sum(line.count(", ") + 1 for line in (line.rstrip(",") for line in lines[: _LABEL_LINES - 1]))
        lines = [*lines[: _LABEL_LINES - 1], f"and {len(names) - told} more"]
    return "\n".join(lines)


def _pushed_apart(wanted: list[float], heights: list[float]) -> list[float]:
    """Find middles nearest to `wanted` (in rising order) at which labels of `heights` do not touch.

    All stay within 0 to 1 if they fit; if not, they share what there is.
    """
    steps = [(one + other) / 2 for one, other in itertools.pairwise(heights)]
    squeeze = min(1.0, 1.0 / sum(steps)) if steps else 1.0
    offsets = [0.0, *itertools.accumulate(step * squeeze for step in steps)]
    # Blocks of touching labels, each where its members on average want it (pool adjacent violators).
    blocks: list[list[float]] = []  # [sum of what is wanted of the first, members]
    for want, offset in zip(wanted, offsets, strict=True):
        blocks.append([want - offset, 1.0])
        while len(blocks) > 1 and blocks[-2][0] / blocks[-2][1] > blocks[-1][0] / blocks[-1][1]:
            total, count = blocks.pop()
            blocks[-1][0] += total
            blocks[-1][1] += count
    # Names of several lines would hang out at the ends.
    lowest, highest = (heights[0] - min(heights)) / 2, 1.0 - offsets[-1] - (heights[-1] - min(heights)) / 2
    starts = [
        min(max(total / count, min(lowest, highest)), max(highest, 0.0))
        for total, count in blocks
        for _ in range(int(count))
    ]
    return [start + offset for start, offset in zip(starts, offsets, strict=True)]


def _label_eclipse(ax: Axes, shadows: list[tuple[str, float, float]], x: Array) -> None:
    spans = [(start, end) for _, start, end in joined(shadows)]
    if not spans:
        return
    place: dict[str, Any] = {"transform": ax.get_xaxis_transform(), "va": "top", "fontsize": TEXT, "color": INK}
    if len(spans) > DASHED_REVOLUTIONS:  # none of them is wide enough to be named alone
        ax.text(0.01, 0.985, "shaded: eclipse", ha="left", **(place | {"transform": ax.transAxes}))
        return
    word = 0.14 * (x[-1] - x[0])  # room for the word
    start, end = max(spans, key=lambda span: span[1] - span[0])
    if end - start > word:
        ax.text((start + end) / 2, 0.985, "eclipse", ha="center", **place)
    elif end + word < x[-1]:
        ax.text(end + 0.05 * word, 0.985, "eclipse", ha="left", **place)
    else:
        ax.text(start - 0.05 * word, 0.985, "eclipse", ha="right", **place)


def _angle_ticks(ax: Axes, x: Array) -> None:
    """Mark angles within a revolution, as they are spoken of; over many revolutions each noon, or each few."""
    span = x[-1] - x[0]
    step = 90.0 if span <= 400 else 180.0 if span <= 800 else 360.0 * np.ceil(span / 360.0 / 9.0)
    ticks = np.arange(np.ceil(x[0] / step - 1e-9) * step, x[-1] + 1e-6, step)
    noon = "noon" if step >= 360 else "0 (noon)"
    ax.set_xticks(ticks, [f"{tick % 360:.0f}" if round(tick) % 360 else noon for tick in ticks])


def _component(name: str) -> str:
    for known in FLUXES:
        if name in (known, known.removesuffix("_flux")):
            return known
    raise InputError("component", name, f"one of: {', '.join(FLUXES)}{did_you_mean(name, FLUXES)}")


def _same_curves(values: dict[str, Array], tolerance: float) -> list[list[str]]:
    groups: list[list[str]] = []
    for face, curve in values.items():
        for group in groups:
            if float(np.nanmax(np.abs(values[group[0]] - curve))) <= tolerance:
                group.append(face)
                break
        else:
            groups.append([face])
    return groups
