"""What all plots share: colours, type sizes, axes, and the words taken from a dataset."""

from __future__ import annotations

import json
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
NAMES_FROM = 1.11  # names start here, in widths of their panel
SINGLE_WIDTH = 10.0  # inches, of a figure of one panel
MOST_LINES = 12  # more lines than this cannot be told apart in one panel

DASHED_REVOLUTIONS = 4.0  # beyond these, dashes are shorter than what they are to show
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


def line_style(index: int, *, dashed: bool = True) -> dict[str, Any]:
    """Give neighbours in the list, as +X and -X are, one hue and different dashes, or else different tints."""
    hue = HUES[index // 2 % len(HUES)]
    if dashed:
        return {"color": hue, "linestyle": DASHES[index % 2], "linewidth": 2.0}
    return {"color": _paler(hue) if index % 2 else hue, "linestyle": "-", "linewidth": 1.0}


def _paler(hue: str) -> str:
    mixed = [(int(hue[i : i + 2], 16) + 255) // 2 for i in (1, 3, 5)]
    return "#" + "".join(f"{part:02X}" for part in mixed)


def revolutions(ds: xr.Dataset) -> float:
    """How many revolutions the dataset spans; 0 where it knows no period."""
    if "orbital_period" not in ds.coords:
        return 0.0
    return float(ds["elapsed"].values[-1] - ds["elapsed"].values[0]) / float(ds["orbital_period"])


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
        return "orbit angle, ° from orbit noon"
    start = ds["time"].values[0]
    unit = _time_unit(ds)[1]
    if np.issubdtype(start.dtype, np.datetime64):
        return f"{unit} since {np.datetime_as_string(start, unit='m').replace('T', ' ')} UTC"
    return f"{unit} since orbit noon"


def facts(ds: xr.Dataset, left_out: str = "") -> list[list[str]]:
    """Answer what a reviewer asks first: in which orbit, and then for which case, one list each."""
    case = _case_facts(ds) + ([left_out] if left_out else [])
    return [words for words in (_orbit_facts(ds), case) if words]


def _orbit_facts(ds: xr.Dataset) -> list[str]:
    """How high, how the Sun stands, how long the night is."""
    words = []
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
    return words


def _case_facts(ds: xr.Dataset) -> list[str]:
    """How the craft is turned, how old its surfaces are, what shines on it: as far as the dataset knows."""
    words = []
    if "attitude" in ds.attrs:
        words.append(_attitude_words(json.loads(ds.attrs["attitude"])))
    if "surface_state" in ds.attrs:
        words.append(_surface_words(str(ds.attrs["surface_state"])))
    if "environment" in ds.attrs:
        around = json.loads(ds.attrs["environment"])
        albedo = around["albedo"]
        share = f"{albedo:.2f}" if round(albedo, 2) == albedo else f"{albedo:g}"
        words.append(
            f"S {around['solar_constant_w_m2']:g} at 1 au, albedo {share}, IR {around['planetary_ir_w_m2']:g} W m⁻²"
        )
        if around.get("zenith_correction", "none") != "none":
            words.append(f"zenith correction: {around['zenith_correction']}")
    return words


def _attitude_words(law: dict[str, Any]) -> str:
    kind = str(law["kind"])
    if kind == "spinning":
        about = {"sun": "the Sun line", "inertial": "an inertial axis"}.get(law["about"], f"the {law['about']}")
        return f"spinning at {law['rate_rpm']:g} rpm about {about}"
    # A law of the user's own is known by the full name of its class.
    words = textwrap.shorten(kind.rpartition(".")[2], 30, placeholder=" …") + " attitude"
    if kind == "sun" and isinstance(law.get("axis"), str):
        words += f", {minus(law['axis'])} to the Sun"
    turns = {turn: float(law.get(f"{turn}_deg", 0.0)) for turn in ("roll", "pitch", "yaw")}
    return words + "".join(minus(f", {turn} {angle:g}°") for turn, angle in turns.items() if angle)


def _surface_words(surface_state: str) -> str:
    """Shorten "age EOL, bound nominal, cells loaded" and what may follow to what differs from case to case."""
    state = dict(entry.split(" ", 1) for entry in surface_state.split(", "))
    bound = state["bound"]
    if "bound_absorptance" in state or "bound_emittance" in state:
        bound = f"a {state.get('bound_absorptance', bound)}, e {state.get('bound_emittance', bound)}"
    return f"{state['age']}, {bound}, cells {state['cells']}"


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


def place_panels(panels: Any, headline: str, told: list[list[str]]) -> None:
    """Give two by two panels their places, with room for the names right of each column, and a headline.

    What matplotlib's own layout finds by measuring every tick twice is known here beforehand, apart
    from the width of those names; it would take as long as the drawing itself.
    """
    figure = panels[0, 0].figure
    figure.set_layout_engine("none")
    width, height = figure.get_size_inches()
    # Most names stand beside both panels of a column: each is measured once.
    different = [{text.get_text(): text for ax in column for text in ax.texts}.values() for column in panels.T]
    names = [max(map(_name_width, texts)) for texts in different]
    lines, size = _fitted(told, width)
    left, right, gap, bottom = 0.85, 0.12, 0.48, 0.62  # inches
    top = 0.86 + 0.22 * max(len(lines), 1)
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
    figure.text(y=1 - 0.43 / height, s="\n".join(lines), fontsize=size, color=INK, linespacing=1.25, **edge)


def _name_width(text: Any) -> float:
    """Width in inches, if it stands right of its panel."""
    if text.get_position()[0] != NAMES_FROM:
        return 0.0
    return float(text.get_window_extent().width) / float(text.figure.dpi)


def figure_title(ax: Axes, what: str, title: str | None, ds: xr.Dataset, left_out: str = "") -> None:
    """Write the headline of the figure of `ax`, and the facts under it.

    The headline is `title`, or else the case and what is drawn; the axes say the latter, too, and where
    there is no room for both the case is left.
    """
    figure: Any = ax.figure
    width = figure.get_size_inches()[0]
    figure.get_layout_engine().set(w_pad=0.14, h_pad=0.10, hspace=0.03, wspace=0.03)
    lines, size = _fitted(facts(ds, left_out), width)
    # The blank lines keep the room in which the facts are then written, smaller.
    room = _headline(what, title, ds, width) + "\n " * len(lines)
    heading = figure.suptitle(room, fontsize=HEADLINE, x=0.012, ha="left", weight="bold", color="black")
    place: dict[str, Any] = {"ha": "left", "va": "bottom", "annotation_clip": False}
    note = ax.annotate("\n".join(lines), (0.0, 0.0), xycoords=heading, fontsize=size, color=INK, **place)
    note.set_in_layout(False)


def _headline(what: str, title: str | None, ds: xr.Dataset, width_in: float) -> str:
    case = str(ds.attrs.get("title", ""))
    if title is not None or not case:
        return _shortened(title or what, width_in)
    both = f"{case}: {what[:1].lower()}{what[1:]}"
    return both if _shortened(both, width_in) == both else _shortened(case, width_in)


def _fitted(told: list[list[str]], width_in: float) -> tuple[list[str], float]:
    """Lay facts out, none of them broken: a line for each list, or smaller and run on, so that two lines do."""
    for size in (FACTS, TEXT):
        room = 11 * width_in * FACTS / size  # characters
        lines = [_BETWEEN.join(words) for words in told]
        if all(len(line) <= room for line in lines):
            return lines, size
    lines = []
    for fact in [fact for words in told for fact in words]:
        if lines and len(lines[-1]) + len(_BETWEEN) + len(fact) <= room:
            lines[-1] += _BETWEEN + fact
        else:
            lines.append(fact)
    return lines, TEXT


def _shortened(headline: str, width_in: float) -> str:
    return textwrap.shorten(headline, int(6.8 * width_in), placeholder=" …")
