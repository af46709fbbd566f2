"""What all plots share: colours, type sizes, axes, and the words taken from a dataset."""

from __future__ import annotations

import textwrap
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from contextvars import ContextVar
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
import xarray as xr

from envflux.errors import InputError, did_you_mean
from envflux.schema import VARIABLES
from envflux.vectors import Array

if TYPE_CHECKING:
    from matplotlib.axes import Axes

# Okabe and Ito (2008), "Color Universal Design": hues told apart with every common colour blindness.
# Their yellow is left out: it vanishes on white.
HUES = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9", "#000000")
DASHES = ("-", (0, (5, 1.6)))
COMPONENT_HUES = {"solar_flux": "#E69F00", "albedo_flux": "#56B4E9", "planetary_ir_flux": "#D55E00"}
SHORT = {"solar_flux": "direct solar", "albedo_flux": "albedo", "planetary_ir_flux": "planetary IR"}
SHADE = {"umbra": "#D4D7DC", "penumbra": "#E9EBEE"}
INK = "#333333"

TEXT, FACTS, PANEL, HEADLINE = 11, 12, 12.5, 15  # points; readable on a projected slide
NAMES_FROM = 1.09  # names start here, in widths of their panel
MOST_LINES = 12  # more lines than this cannot be told apart in one panel

DPI = 150
_BETWEEN = "  ·  "

XAxis = Literal["time", "orbit angle"]

_OFF_SCREEN: ContextVar[bool] = ContextVar("off_screen", default=False)


@contextmanager
def off_screen() -> Iterator[None]:
    """Make new figures that no window and no notebook shows, for writing to a file."""
    token = _OFF_SCREEN.set(True)
    try:
        yield
    finally:
        _OFF_SCREEN.reset(token)


def chosen_faces(ds: xr.Dataset, faces: Sequence[str] | None) -> list[str]:
    """Check the names of `faces`; where none are named, choose what one panel can hold."""
    known = [str(name) for name in ds["face"].values]
    if faces is not None:
        wanted = [faces] if isinstance(faces, str) else list(faces)
        for face in wanted:
            if face not in known:
                raise InputError("faces", face, f"one of: {', '.join(known)}{did_you_mean(face, known)}")
        return wanted
    if len(known) <= MOST_LINES:
        return known
    peaks = ds["absorbed_flux"].max("time").values
    chosen = sorted(np.argsort(-peaks, kind="stable")[:MOST_LINES])
    return [known[index] for index in chosen]


def left_out_note(ds: xr.Dataset, shown: list[str]) -> str:
    """Say how many faces are not drawn, or nothing."""
    count = ds.sizes["face"]
    return f"{len(shown)} of {count} faces drawn" if len(shown) < count else ""


def line_style(index: int) -> dict[str, Any]:
    """Give neighbours in the list, as +X and -X are, one hue and different dashes."""
    return {"color": HUES[index // 2 % len(HUES)], "linestyle": DASHES[index % 2]}


def shadow_spans(ds: xr.Dataset, x: Array) -> list[tuple[str, float, float]]:
    """Spans of `x` in penumbra and in umbra, contact to contact."""
    sunlit = np.asarray(ds["sunlit"].values, float)
    # An interval is as dark as the darker of its ends is light: contacts themselves are still lit.
    state = np.where(np.maximum(sunlit[:-1], sunlit[1:]) <= 0, 2, np.where(sunlit[:-1] + sunlit[1:] < 2, 1, 0))
    edges = np.flatnonzero(np.diff(state)) + 1
    starts, ends = np.r_[0, edges], np.r_[edges, state.size]
    return [
        ("umbra" if state[a] == 2 else "penumbra", float(x[a]), float(x[b]))
        for a, b in zip(starts, ends, strict=True)
        if state[a] > 0
    ]


def joined(shadows: Iterable[tuple[str, float, float]]) -> list[tuple[str, float, float]]:
    """Join touching penumbra and umbra to whole eclipses."""
    whole: list[tuple[str, float, float]] = []
    for _, start, end in shadows:
        if whole and whole[-1][2] == start:
            whole[-1] = ("eclipse", whole[-1][1], end)
        else:
            whole.append(("eclipse", start, end))
    return whole


def _time_unit(ds: xr.Dataset) -> tuple[float, str]:
    span = float(ds["elapsed"].values[-1] - ds["elapsed"].values[0])
    if span <= 6 * 3600:
        return 60.0, "minutes"
    return (3600.0, "hours") if span <= 4 * 86400 else (86400.0, "days")


def x_values(ds: xr.Dataset, against: XAxis) -> Array:
    """Values along the bottom: time in a handy unit, or orbit angle in degrees without wraps."""
    if against == "time":
        return np.asarray(ds["elapsed"].values, float) / _time_unit(ds)[0]
    if against == "orbit angle":
        return np.asarray(np.unwrap(ds["orbit_angle"].values, period=360.0), float)
    raise InputError("against", against, "'time' or 'orbit angle'")


def x_label(ds: xr.Dataset, against: XAxis) -> str:
    """Say what runs along the bottom, and from when."""
    if against == "orbit angle":
        return "orbit angle from orbit noon, °"
    start = ds["time"].values[0]
    unit = _time_unit(ds)[1]
    if np.issubdtype(start.dtype, np.datetime64):
        return f"{unit} since {np.datetime_as_string(start, unit='m').replace('T', ' ')} UTC"
    return f"{unit} since orbit noon"


def facts_line(ds: xr.Dataset, left_out: str = "", *, with_title: bool = True) -> str:
    """Answer what a reviewer asks first: how high, how the Sun stands, how long the night is."""
    words = [str(ds.attrs["title"])] if with_title and "title" in ds.attrs else []
    if "altitude" in ds:
        low, high = float(ds["altitude"].min()), float(ds["altitude"].max())
        middle = (low + high) / 2
        words.append(
            f"altitude {middle:.0f} km" if high - low < 0.01 * middle else f"altitude {low:.0f} to {high:.0f} km"
        )
    if "orbital_period" in ds.coords:
        words.append(f"period {_duration(float(ds['orbital_period']))}")
    if "beta" in ds:
        low, high = float(ds["beta"].min()), float(ds["beta"].max())
        span = f"{low:+.1f}°" if high - low < 0.1 else f"{low:+.1f}° to {high:+.1f}°"
        words.append(minus(f"beta {span}"))
    if "sunlit" in ds and "time" in ds.dims:
        elapsed = np.asarray(ds["elapsed"].values, float)
        lit = float(np.trapezoid(ds["sunlit"].values, elapsed)) / (elapsed[-1] - elapsed[0])
        words.append(f"sunlit {100 * lit:.1f} %")
        nights = joined(shadow_spans(ds, elapsed))
        # One that the track cuts off says nothing about its length.
        whole = [end - start for _, start, end in nights if start > elapsed[0] and end < elapsed[-1]]
        if whole:
            words.append(f"longest eclipse {max(whole) / 60:.1f} min")
    if left_out:
        words.append(left_out)
    return _BETWEEN.join(words)


def long_name(ds: xr.Dataset, name: str) -> str:
    """Name a variable in words, with a capital."""
    words = str(ds[name].attrs.get("long_name", VARIABLES[name].long_name))
    return words[:1].upper() + words[1:]


def _duration(seconds: float) -> str:
    return f"{seconds / 60:.1f} min" if seconds < 3 * 3600 else f"{seconds / 3600:.2f} h"


def pretty_units(array: xr.DataArray) -> str:
    """Units with raised exponents."""
    return str(array.attrs.get("units", "")).replace("-2", "⁻²").replace("-1", "⁻¹")


def number(value: float, reach: float) -> str:
    """As many decimals as the figure's scale deserves."""
    return f"{value:.0f}" if reach >= 100 and value >= 9.95 else f"{value:.1f}"


def minus(text: str) -> str:
    """Put a real minus sign: a hyphen is lost on a slide."""
    return text.replace("-", "−") if text.startswith("-") and len(text) <= 3 else text.replace(" -", " −")


def dress(ax: Axes, grid: Literal["x", "y"] | None = "y") -> None:
    """Type size, spines and grid of every panel."""
    ax.tick_params(labelsize=TEXT, color=INK)
    for side in ("top", "right"):
        ax.spines[side].set_visible(False)
    if grid:
        ax.grid(axis=grid, color="#C9CDD3", linewidth=0.7)
    ax.set_axisbelow(True)


def new_axes(width: float, height: float, rows: int = 1, columns: int = 1, *, sharex: bool = False) -> Any:
    """Open a new figure of `width` by `height` inches: one Axes, or an array of them."""
    if _OFF_SCREEN.get():
        from matplotlib.backends.backend_agg import FigureCanvasAgg
        from matplotlib.figure import Figure

        figure = Figure(figsize=(width, height), dpi=DPI, layout="constrained", facecolor="white")
        FigureCanvasAgg(figure)
        return figure.subplots(rows, columns, sharex=sharex)
    # pyplot makes a notebook show the figure; it is imported here because it is slow to load.
    import matplotlib.pyplot as plt

    _, axes = plt.subplots(
        rows, columns, figsize=(width, height), dpi=DPI, sharex=sharex, layout="constrained", facecolor="white"
    )
    return axes


def place_panels(panels: Any, headline: str, facts: str) -> None:
    """Give two by two panels their places, with room for the names right of each column, and a headline.

    What matplotlib's own layout finds by measuring every tick twice is known here beforehand, apart
    from the width of those names; it would take as long as the drawing itself.
    """
    figure = panels[0, 0].figure
    figure.set_layout_engine("none")
    width, height = figure.get_size_inches()
    names = [max(_name_width(text) for ax in column for text in ax.texts) for column in panels.T]
    left, right, top, gap, bottom = 0.85, 0.12, 1.08, 0.48, 0.62  # inches
    across = max((width - 2 * left - sum(names) - right) / (2 * NAMES_FROM), 1.0)
    down = (height - top - gap - bottom) / 2
    for i, line in enumerate(panels):
        x, y = left, bottom + (1 - i) * (down + gap)
        for ax, name in zip(line, names, strict=True):
            ax.set_position([x / width, y / height, across / width, down / height])
            x += across * NAMES_FROM + name + left
    edge = {"x": 0.012, "ha": "left", "va": "top"}
    figure.text(
        y=1 - 0.12 / height, s=_shortened(headline, width), fontsize=HEADLINE, weight="bold", color="black", **edge
    )
    figure.text(y=1 - 0.43 / height, s=facts, fontsize=FACTS, color=INK, **edge)


def _name_width(text: Any) -> float:
    """Width in inches, if it stands right of its panel."""
    beside = text.get_position()[0] == NAMES_FROM
    return float(text.get_window_extent().width) / float(text.figure.dpi) if beside else 0.0


def figure_title(ax: Axes, headline: str, facts: str) -> None:
    """Write the headline of the figure of `ax`, and the line of facts under it."""
    figure: Any = ax.figure
    figure.get_layout_engine().set(w_pad=0.14, h_pad=0.10, hspace=0.03, wspace=0.03)
    lines = _fitted(facts, figure.get_size_inches()[0])
    # The blank lines keep the room in which the facts are then written, smaller.
    room = _shortened(headline, figure.get_size_inches()[0]) + "\n " * len(lines)
    heading = figure.suptitle(room, fontsize=HEADLINE, x=0.012, ha="left", weight="bold", color="black")
    place: dict[str, Any] = {"ha": "left", "va": "bottom", "annotation_clip": False}
    note = ax.annotate("\n".join(lines), (0.0, 0.0), xycoords=heading, fontsize=FACTS, color=INK, **place)
    note.set_in_layout(False)


def _fitted(facts: str, width_in: float) -> list[str]:
    """Split facts over as many lines as the width asks for, none of them broken."""
    lines: list[str] = []
    for fact in facts.split(_BETWEEN):
        if lines and len(lines[-1]) + len(_BETWEEN) + len(fact) <= 11 * width_in:
            lines[-1] += _BETWEEN + fact
        else:
            lines.append(fact)
    return lines


def _shortened(headline: str, width_in: float) -> str:
    return textwrap.shorten(headline, int(6.8 * width_in), placeholder=" …")
