"""The plots: what they draw, that it can be read, and that no figure is left behind."""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from typing import Any

import matplotlib as mpl
import numpy as np
import pytest
import xarray as xr
from hypothesis import given
from hypothesis import strategies as st

from envflux import plots
from envflux.attitudes import NadirPointing
from envflux.coatings import Coating
from envflux.craft import Craft, Face, box_craft
from envflux.environments import Environment
from envflux.errors import InputError
from envflux.fluxes import flux
from envflux.orbits import CircularOrbit, UndatedOrbit
from envflux.plots.drawing import shadow_spans
from envflux.plots.series import _pushed_apart, _wrapped
from envflux.plots.summaries import _number_inside
from envflux.reductions import orbit_mean

mpl.use("Agg")

SMALLEST_TYPE_PT = 11  # common practice for slides, no source: smaller is not read from the back row
SMALLEST_IN_BAR_PT = 10  # a narrow segment rather has a small number than none; common practice, no source
COATING = Coating(absorptance=0.31, emittance=0.83)
ENVIRONMENT = Environment(albedo=0.29, planetary_ir_w_m2=241)


@pytest.fixture(scope="module")
def ds() -> xr.Dataset:
    orbit = CircularOrbit(altitude_km=560, inclination_deg=53, raan_deg=40, epoch="2031-03-20T06:00:00Z")
    craft = box_craft(size_m=(0.8, 0.9, 1.2), coating=COATING)
    return flux(orbit.track(revolutions=2), NadirPointing(), craft, ENVIRONMENT)


@pytest.fixture(scope="module")
def many_faces() -> xr.Dataset:
    rng = np.random.default_rng(7)
    faces = [Face(f"tile number {i}", tuple(rng.normal(size=3)), 0.1, COATING) for i in range(17)]
    track = UndatedOrbit(altitude_km=900, beta_deg=37).track()
    return flux(track, NadirPointing(), Craft(tuple(faces)), ENVIRONMENT)


@pytest.fixture(autouse=True)
def _no_figure_left() -> Iterator[None]:
    """pyplot holds one figure at most after a call, the one just returned; off screen it holds none."""
    import matplotlib.pyplot as plt

    plt.close("all")
    yield
    assert len(plt.get_fignums()) <= 1
    plt.close("all")


def every_plot(ds: xr.Dataset) -> Iterator[Any]:
    yield plots.flux_history(ds)[0, 0].figure
    yield plots.flux_history(ds, component="absorbed_flux").figure
    yield plots.flux_history(ds, component="solar", against="orbit angle").figure
    yield plots.orbit_mean_bars(ds).figure
    yield plots.orbit_mean_bars(ds, absorbed=True).figure
    yield plots.beta_history(ds).figure
    yield plots.eclipse_strip(ds).figure
    yield plots.sun_in_body(ds).figure


def test_every_plot_can_be_read(ds: xr.Dataset, many_faces: xr.Dataset) -> None:
    with plots.off_screen():
        for figure in itertools.chain(every_plot(ds), every_plot(many_faces)):
            figure.canvas.draw()
            renderer = figure.canvas.get_renderer()
            texts = [text for text in figure.findobj(mpl.text.Text) if text.get_text().strip()]
            texts = [text for text in texts if text.get_visible()]
            for text in texts:
                in_bar = text.get_text().replace(".", "").isdigit() and text.get_ha() == text.get_va() == "center"
                assert text.get_fontsize() >= (SMALLEST_IN_BAR_PT if in_bar else SMALLEST_TYPE_PT), text.get_text()
            width, height = figure.canvas.get_width_height()
            boxes = []
            for text in texts:
                # Ticks outside the limits exist but are not drawn, and stand elsewhere.
                box = mpl.text.Text.get_window_extent(text, renderer)
                if _is_tick_outside(text, figure):
                    continue
                assert box.x0 >= -1, text.get_text()
                assert box.x1 <= width + 1, text.get_text()
                assert box.y0 >= -1, text.get_text()
                assert box.y1 <= height + 1, text.get_text()
                # The headline keeps a blank line in which the facts stand: two texts in one box by design.
                if text is not figure._suptitle:
                    boxes.append((box.shrunk(0.98, 0.80), text.get_text()))
            for (one, said), (other, told) in itertools.combinations(boxes, 2):
                assert not one.overlaps(other), (said, told)


def _is_tick_outside(text: Any, figure: Any) -> bool:
    for ax in figure.axes:
        for axis, (low, high) in ((ax.xaxis, ax.get_xlim()), (ax.yaxis, ax.get_ylim())):
            low, high = min(low, high), max(low, high)
            for tick in axis.get_major_ticks():
                if text in (tick.label1, tick.label2):
                    margin = 1e-9 * (high - low)
                    return not (low - margin <= tick.get_loc() <= high + margin)
    return False


def curves(ax: Any) -> list[Any]:
    return [line for line in ax.lines if line.get_transform() is not ax.transAxes]


def test_curves_are_the_data(ds: xr.Dataset) -> None:
    with plots.off_screen():
        ax = plots.flux_history(ds, faces=["-X", "+Z"], component="absorbed_flux")
    assert len(curves(ax)) == 2
    for line, face in zip(curves(ax), ["-X", "+Z"], strict=True):
        np.testing.assert_array_equal(line.get_ydata(), ds["absorbed_flux"].sel(face=face))
        np.testing.assert_array_equal(line.get_xdata(), ds["elapsed"] / 60)
    # Each name stands beside a piece of its own line.
    for name, line in zip(["−X", "+Z"], curves(ax), strict=True):
        height = next(text.get_position()[1] for text in ax.texts if text.get_text() == name)
        sample = next(piece for piece in ax.lines if piece.get_ydata()[0] == height)
        assert (sample.get_color(), sample.get_linestyle()) == (line.get_color(), line.get_linestyle())
    assert "W m⁻²" in ax.get_ylabel()
    assert "2031-03-20 06:00 UTC" in ax.get_xlabel()


def test_coinciding_curves_are_one_line_with_all_names(ds: xr.Dataset) -> None:
    # Under the nadir law on a circular orbit the four side faces see the planet alike.
    with plots.off_screen():
        ax = plots.flux_history(ds, component="planetary_ir")
    assert len(curves(ax)) == 3
    assert "+X, −X, +Y, −Y" in [text.get_text() for text in ax.texts]


def looks(ax: Any) -> dict[str, tuple[Any, ...]]:
    """Colour, dash and width of the piece of line beside each name."""
    at = {piece.get_ydata()[0]: piece for piece in ax.lines if len(piece.get_xdata()) == 2}
    beside = {text.get_text(): at.get(text.get_position()[1]) for text in ax.texts}
    return {
        name: (line.get_color(), line.get_linestyle(), line._unscaled_dash_pattern, line.get_linewidth())
        for name, line in beside.items()
        if line is not None
    }


def test_a_face_has_one_look_in_all_panels(ds: xr.Dataset) -> None:
    with plots.off_screen():
        panels = plots.flux_history(ds).ravel()
    first = looks(panels[0])
    assert sorted(first) == sorted(["+X", "−X", "+Y", "−Y", "+Z", "−Z"])
    assert len(set(map(str, first.values()))) == 6
    for panel in panels[1:]:
        assert looks(panel) == first
    # In the infrared the four side faces coincide: the curve looks like the first of them.
    assert (curves(panels[2])[0].get_color(), curves(panels[2])[0].get_linestyle()) == first["+X"][:2]
    assert len(curves(panels[2])) == 3


def test_leaders_run_from_where_the_curves_end(ds: xr.Dataset) -> None:
    with plots.off_screen():
        panel = plots.flux_history(ds)[1, 0]
    leader = next(line for line in panel.lines if np.isnan(line.get_ydata()).any())
    points = np.asarray(leader.get_xydata(), float).reshape(-1, 3, 2)
    low, high = panel.get_ylim()
    end = (float(ds["planetary_ir_flux"].sel(face="+X")[-1]) - low) / (high - low)
    ends = [height for height in points[:, 0, 1] if height == pytest.approx(end, abs=1e-12)]
    assert len(ends) == 4  # one for each of the coinciding side faces
    assert set(points[:, 1, 1]) <= {text.get_position()[1] for text in panel.texts}


def test_many_revolutions_are_thin_and_undashed(ds: xr.Dataset) -> None:
    orbit = CircularOrbit(altitude_km=560, inclination_deg=53, raan_deg=40, epoch="2031-03-20T06:00:00Z")
    many = flux(orbit.track(revolutions=6), NadirPointing(), box_craft((1, 1, 1), COATING), ENVIRONMENT)
    with plots.off_screen():
        ax = plots.flux_history(many, component="solar_flux", against="orbit angle")
        few = plots.flux_history(ds, component="solar_flux", against="orbit angle")
    assert {line.get_linestyle() for line in curves(ax)} == {"-"}
    assert max(line.get_linewidth() for line in curves(ax)) < min(line.get_linewidth() for line in curves(few))
    assert {label.get_text() for label in ax.get_xticklabels()} == {"noon"}
    assert {label.get_text() for label in few.get_xticklabels()} == {"0 (noon)", "180"}


def test_facts_tell_orbit_attitude_surfaces_and_environment(ds: xr.Dataset) -> None:
    with plots.off_screen():
        said = [text.get_text() for text in plots.flux_history(ds)[0, 0].figure.texts]
    (told,) = [text for text in said if "altitude 560 km" in text]
    assert told.count("\n") == 1
    for fact in ("nadir attitude", "BOL, nominal, cells loaded", "S 1361 at 1 au, albedo 0.29, IR 241 W m⁻²"):
        assert fact in told.splitlines()[1]


def test_small_segments_have_their_number_where_it_fits() -> None:
    per_inch = 1.11 * 455 / 8  # an axis 8 inches wide
    assert _number_inside(285.2, 455, per_inch) == ("285", 11)
    assert _number_inside(12.8, 455, per_inch) == ("13", 10)
    assert _number_inside(9.3, 455, per_inch) == ("9", 11)
    assert _number_inside(0.4, 455, per_inch) is None


def test_shade_spans_the_contacts(ds: xr.Dataset) -> None:
    minutes = ds["elapsed"].values / 60
    names = dict(zip(ds["contact"].attrs["flag_meanings"].split(), ds["contact"].attrs["flag_values"], strict=True))
    at = {name: minutes[ds["contact"].values == value] for name, value in names.items()}
    spans = shadow_spans(ds, minutes)
    umbra = [span for span in spans if span[0] == "umbra"]
    assert at["umbra_entry"].size == 2  # two revolutions, one night each
    # Sunlight is exactly zero only between the umbra's contacts, which are found to 0.01 s.
    for (_, start, end), entry, leave in zip(umbra, at["umbra_entry"], at["umbra_exit"], strict=True):
        assert start == pytest.approx(entry, abs=0.011 / 60)
        assert end == pytest.approx(leave, abs=0.011 / 60)


def test_bars_are_the_orbit_means(ds: xr.Dataset) -> None:
    means = orbit_mean(ds).mean("rev")
    with plots.off_screen():
        ax = plots.orbit_mean_bars(ds, absorbed=True)
    ends = np.array([bar.get_x() + bar.get_width() for bar in ax.patches[-ds.sizes["face"] :]])
    # Stacked by component they must reach the absorbed flux, which is formed elsewhere.
    np.testing.assert_allclose(ends, means["absorbed_flux"], rtol=1e-9)


def test_draws_on_the_axes_given(ds: xr.Dataset) -> None:
    from matplotlib.figure import Figure

    ax = Figure().subplots()
    assert plots.flux_history(ds, component="solar_flux", ax=ax) is ax
    for function in (plots.orbit_mean_bars, plots.beta_history, plots.eclipse_strip, plots.sun_in_body):
        ax = Figure().subplots()
        assert function(ds, ax=ax) is ax
        assert ax.figure._suptitle is None  # the caller's figure is the caller's
    four = Figure().subplots(4, 1)
    assert list(plots.flux_history(ds, ax=four)) == list(four)


def test_new_figures_are_shown_by_pyplot_and_off_screen_ones_are_not(ds: xr.Dataset) -> None:
    import matplotlib.pyplot as plt

    with plots.off_screen():
        plots.flux_history(ds)
    assert plt.get_fignums() == []
    panels = plots.flux_history(ds)
    assert [plt.figure(number) for number in plt.get_fignums()] == [panels[0, 0].figure]


def test_many_faces_are_cut_down_and_said_so(many_faces: xr.Dataset) -> None:
    with plots.off_screen():
        ax = plots.flux_history(many_faces, component="solar_flux")
    assert any("12 of 17 faces drawn" in text.get_text() for text in ax.texts)
    assert "orbit noon" in ax.get_xlabel()


@pytest.mark.parametrize(
    ("keywords", "message"),
    [
        ({"faces": ["+x"]}, r"faces is '\+x', but it must be one of: \+X, .*did you mean '\+X'"),
        ({"component": "abedo_flux"}, r"component is 'abedo_flux', but .*did you mean 'albedo_flux'"),
        ({"component": "solar_flux", "against": "latitude"}, r"against is 'latitude', but it must be 'time' or"),
    ],
)
def test_wrong_input(ds: xr.Dataset, keywords: dict[str, Any], message: str) -> None:
    with plots.off_screen(), pytest.raises(InputError, match=message):
        plots.flux_history(ds, **keywords)


def test_long_lists_of_names_say_how_many_are_left_out() -> None:
    assert _wrapped(["+X", "−X"]) == "+X, −X"
    told = _wrapped([f"drum {i}" for i in range(1, 15)]).replace("\u00a0", " ")
    assert told == "drum 1, drum 2,\ndrum 3, drum 4,\ndrum 5, drum 6,\nand 8 more"


@given(st.lists(st.tuples(st.floats(0, 1), st.floats(0.01, 0.08)), min_size=1, max_size=12))
def test_labels_are_pushed_apart_and_keep_their_order(labels: list[tuple[float, float]]) -> None:
    wanted, heights = sorted(want for want, _ in labels), [height for _, height in labels]
    placed = _pushed_apart(wanted, heights)
    assert min(placed) >= -1e-12
    assert max(placed) <= 1 + 1e-12
    for (low, one), (high, other) in itertools.pairwise(zip(placed, heights, strict=True)):
        assert high - low >= (one + other) / 2 - 1e-12
    if all(b - a >= 0.081 for a, b in itertools.pairwise(wanted)) and wanted[0] > 0.1 and wanted[-1] < 0.9:
        np.testing.assert_allclose(placed, wanted, atol=1e-12)  # nobody in the way: nobody moved
