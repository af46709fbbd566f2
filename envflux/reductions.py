"""What a time series comes down to: means per revolution, extremes, minutes of Sun, energy closure.

A mean is a time integral over a whole revolution, on a grid that has the edges of eclipses among
its samples; it is never the mean of samples. Where the Sun crosses a face's plane between two
samples the integrand has a corner, which the face's incidence angle locates.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import xarray as xr

from envflux import schema
from envflux.craft import Craft
from envflux.errors import InputError
from envflux.vectors import Array

# Samples closer to a revolution's edge than this count as being on it: contacts may displace it so far.
_ON_EDGE_S = 2e-3

# Angles that wrap and vectors that turn have no meaningful mean.
_WITHOUT_MEAN = frozenset(
    ("position", "velocity", "sun", "sun_direction", "longitude", "local_solar_time", "sun_azimuth", "sun_incidence")
)

# Cosines below this are rounding of zero.
_ON_PLANE = 2e-9

# The integrand drops to zero at the corner (a cosine), or jumps there (a yes or no).
_WITH_CORNER = {"g_sun": "bends", "solar_flux": "bends", "sun_exposure": "jumps"}

_SMOOTH = frozenset(("g_albedo", "g_ir", "g_zenith", "albedo_flux", "planetary_ir_flux"))


def orbit_mean(dataset: xr.Dataset) -> xr.Dataset:
    """Compute the mean over each whole revolution.

    Parameters
    ----------
    dataset : xarray.Dataset
        A track, factors or fluxes.

    Returns
    -------
    xarray.Dataset
        The same variables over ``rev`` (and ``face``); vectors and angles that wrap are left out, and
        so is a last revolution that is not complete.

    Raises
    ------
    InputError
        If the dataset spans no whole revolution.

    Notes
    -----
    Trapezoid rule in time between samples, with both end samples of each revolution. What comes
    from the planet bends smoothly, so the rule's leading error is taken off by the slopes at both ends
    of each interval (Euler and Maclaurin). Direct sunlight does not; there the cosine's zero is put
    where the Sun crosses a face's plane. The mean absorbed flux is made of the means of its parts.
    """
    revolutions = _revolutions(dataset)
    blocks = list(revolutions.blocks())
    reduced: dict[str, tuple[tuple[str, ...], Array]] = {}
    for key, variable in dataset.data_vars.items():
        name = str(key)
        if "time" not in variable.dims or name in _WITHOUT_MEAN or variable.dtype.kind != "f":
            continue
        values = variable.transpose("time", ...).values
        means = [
            block.mean(
                block.integrate(values[block.samples], smooth=name in _SMOOTH) + _corners(dataset, name, values, block)
            )
            for block in blocks
        ]
        reduced[name] = (("rev", *(str(dim) for dim in variable.dims if dim != "time")), np.concatenate(means))
    kept = [name for name, coordinate in dataset.coords.items() if "time" not in coordinate.dims]
    result = xr.Dataset(reduced, coords={name: dataset.coords[name] for name in kept}, attrs=dataset.attrs)
    if all(name in result for name in schema.FLUXES):
        sunlight = result.absorptance * (result.solar_flux + result.albedo_flux)
        result["absorbed_flux"] = (sunlight + result.emittance * result.planetary_ir_flux).transpose("rev", "face")
    result = result.assign_coords(rev=("rev", np.arange(revolutions.count)))
    result = schema.stamp(
        result,
        cell_methods="time: mean",
        history=schema.extend_history(dataset, "orbit_mean: time integrals over whole revolutions"),
    )
    result["rev"].attrs = {"long_name": schema.VARIABLES["rev"].long_name, "units": "1"}
    return result


def sun_exposure(dataset: xr.Dataset) -> xr.Dataset:
    """Compute how long the Sun shines on the craft and on each face, per revolution.

    Parameters
    ----------
    dataset : xarray.Dataset
        Factors or fluxes.

    Returns
    -------
    xarray.Dataset
        Over ``rev``: `sunlit_fraction`, the share of the revolution in sunlight, the penumbra counted
        by the visible part of the disc; over ``rev`` and ``face``: `sun_minutes`, the time a face is
        turned to the Sun while it shines, counted alike. Averaged attitudes count by the share of
        their phases.
    """
    means = orbit_mean(dataset[["sunlit", "sun_exposure", "sun_incidence"]])
    minutes = means.sun_exposure * (float(dataset.orbital_period) / 60.0)
    result = xr.Dataset({"sunlit_fraction": means.sunlit, "sun_minutes": minutes}, attrs=means.attrs)
    return schema.stamp(result, cell_methods=None)


def extremes(dataset: xr.Dataset) -> xr.Dataset:
    """Find the smallest and largest flux on each face, and when they occur.

    Parameters
    ----------
    dataset : xarray.Dataset
        Fluxes or factors.

    Returns
    -------
    xarray.Dataset
        Over ``extreme`` ("minimum", "maximum") and ``face``: each flux (or factor), and the time of its
        first occurrence among the samples as ``<name>_time``.
    """
    names = [name for name in (*schema.FLUXES, *schema.FACTORS) if name in dataset]
    if not names or not dataset.sizes["time"]:
        raise InputError("dataset", ", ".join(map(str, dataset.data_vars)) or "empty", "fluxes or factors over time")
    found: dict[str, tuple[tuple[str, str], Array]] = {}
    for name in names:
        values = dataset[name].transpose("time", "face").values
        at = np.stack([values.argmin(axis=0), values.argmax(axis=0)])
        found[name] = (("extreme", "face"), np.take_along_axis(values, at, axis=0))
        found[f"{name}_time"] = (("extreme", "face"), dataset.time.values[at])
    kept = [name for name, coordinate in dataset.coords.items() if "time" not in coordinate.dims]
    result = xr.Dataset(found, coords={name: dataset.coords[name] for name in kept}, attrs=dataset.attrs)
    result = result.assign_coords(extreme=("extreme", np.array(["minimum", "maximum"], dtype=object)))
    result = schema.stamp(result, cell_methods=None, history=schema.extend_history(dataset, "extremes over the track"))
    for name in names:
        result[f"{name}_time"].attrs = {"long_name": f"time of the extreme of: {schema.VARIABLES[name].long_name}"}
    return result


def energy_closure(dataset: xr.Dataset) -> xr.Dataset:
    """Check that the faces together receive just the sunlight that the craft intercepts.

    Parameters
    ----------
    dataset : xarray.Dataset
        Fluxes, of a law that is not averaged over phases.

    Returns
    -------
    xarray.Dataset
        Over ``time``, in W: `direct_power`, the direct flux of all faces times their areas, and
        `intercepted_power`, irradiance times sunlit fraction times projected area; and
        `closure_error`, the largest difference over the largest power.

    Raises
    ------
    InputError
        If the craft is not closed, so that no projected area is defined, or attitudes are averaged.

    Notes
    -----
    The projected area is half the sum of area times absolute cosine (Cauchy), which does not share
    the clipping of cosines with the fluxes it checks.
    """
    craft = Craft.from_json(dataset.attrs["craft"])
    if not craft.closed:
        raise InputError("craft", craft.name or "open", "closed: the area-weighted normals of its faces must cancel")
    if "sun_azimuth" not in dataset:
        raise InputError("attitude", "averaged over phases", "resolved in time, so that the Sun has a direction")
    azimuth, elevation = np.radians(dataset.sun_azimuth.values), np.radians(dataset.sun_elevation.values)
    sun = np.stack([np.cos(elevation) * np.cos(azimuth), np.cos(elevation) * np.sin(azimuth), np.sin(elevation)], -1)
    projected = 0.5 * np.abs(sun @ dataset.normal.values.T) @ dataset.area.values
    intercepted = dataset.irradiance.values * dataset.sunlit.values * projected
    direct = dataset.solar_flux.values @ dataset.area.values
    largest = float(intercepted.max(initial=0.0))
    error = float(np.abs(direct - intercepted).max(initial=0.0) / largest) if largest else 0.0
    result = xr.Dataset(
        {
            "direct_power": ("time", direct, {"units": "W", "long_name": "direct solar power on all faces"}),
            "intercepted_power": ("time", intercepted, {"units": "W", "long_name": "sunlight the craft intercepts"}),
            "closure_error": ((), error, {"units": "1", "long_name": "largest difference over the largest power"}),
        },
        coords={"time": dataset.time},
    )
    return schema.stamp(result)


# Samples worked on at once: arrays over a long track and all faces exist one at a time, and only once.
_BLOCK = 1 << 16


@dataclass(frozen=True)
class _Revolutions:
    """Where whole revolutions begin and end among samples.

    `samples` says which samples of the dataset these are, `step_s` the time between neighbours. `at`
    holds the index of the sample on each edge, or of the one before it; `beyond` the seconds from
    that sample to the edge, zero where a sample is on it (always so for an orbit's own track).
    """

    samples: slice
    step_s: Array
    at: np.ndarray
    beyond: Array
    span_s: Array

    @property
    def count(self) -> int:
        return len(self.span_s)

    def blocks(self) -> Iterator[_Revolutions]:
        """The same revolutions in runs of a bounded number of samples, at least one revolution each."""
        first = 0
        while first < self.count:
            last = max(first + 1, int(np.searchsorted(self.at, self.at[first] + _BLOCK, side="right")) - 1)
            last = min(last, self.count)
            start, stop = self.at[first], min(self.at[last] + 2, len(self.step_s) + 1)
            edges = slice(first, last + 1)
            yield _Revolutions(
                slice(start, stop),
                self.step_s[start : stop - 1],
                self.at[edges] - start,
                self.beyond[edges],
                self.span_s[first:last],
            )
            first = last

    def integrate(self, values: Array, *, smooth: bool = False) -> Array:
        """Areas between neighbouring samples, by the trapezoid rule, with its correction where it is `smooth`."""
        step = self.step_s.reshape(-1, *([1] * (values.ndim - 1)))
        areas: Array = 0.5 * step * (values[1:] + values[:-1])
        if smooth and len(values) > 2:
            slopes = np.gradient(values, np.concatenate([[0.0], np.cumsum(self.step_s)]), axis=0, edge_order=2)
            areas += step * step / 12.0 * (slopes[:-1] - slopes[1:])
        return areas

    def mean(self, areas: Array) -> Array:
        """Mean of each revolution from the areas between samples."""
        total = np.concatenate([np.zeros((1, *areas.shape[1:])), np.cumsum(areas, axis=0)])
        share = np.divide(self.beyond, self.step_s[np.minimum(self.at, len(self.step_s) - 1)])
        inside = np.concatenate([areas, np.zeros((1, *areas.shape[1:]))])[self.at]
        shape = (-1, *([1] * (areas.ndim - 1)))
        at_edges = total[self.at] + share.reshape(shape) * inside
        means: Array = np.diff(at_edges, axis=0) / self.span_s.reshape(shape)
        return means


def _revolutions(dataset: xr.Dataset) -> _Revolutions:
    elapsed = dataset.elapsed.values
    period = float(dataset.orbital_period)
    whole = int(np.floor((elapsed[-1] - elapsed[0] + _ON_EDGE_S) / period)) if elapsed.size > 1 else 0
    if whole < 1:
        span = elapsed[-1] - elapsed[0] if elapsed.size else 0.0
        raise InputError("dataset", f"{span:.3f} s long", f"at least one revolution long, {period:.3f} s")
    edges = elapsed[0] + period * np.arange(whole + 1)
    nearest = np.searchsorted(elapsed, edges - _ON_EDGE_S)
    on_sample = elapsed[np.minimum(nearest, elapsed.size - 1)] - edges <= _ON_EDGE_S
    at = np.where(on_sample, nearest, nearest - 1)
    beyond = np.where(on_sample, 0.0, edges - elapsed[at])
    return _Revolutions(slice(0, elapsed.size), np.diff(elapsed), at, beyond, np.diff(elapsed[at] + beyond))


def _corners(dataset: xr.Dataset, name: str, values: Array, block: _Revolutions) -> Array | float:
    """What the trapezoid rule gets wrong where the Sun crosses a face's plane between two samples."""
    kind = _WITH_CORNER.get(name)
    if kind is None or "sun_incidence" not in dataset:
        return 0.0
    cosine = np.cos(np.radians(dataset.sun_incidence.transpose("time", "face").values[block.samples]))
    turned = cosine > 0.0
    if "sun_exposure" in dataset:
        # A sample on the plane itself (orbit noon, often) is on the side that its exposure was counted for.
        exposed = dataset.sun_exposure.transpose("time", "face").values[block.samples] > 0.0
        turned = np.where(np.abs(cosine) < _ON_PLANE, exposed, turned)
    before, after = cosine[:-1], cosine[1:]
    crossing = turned[1:] != turned[:-1]
    if not crossing.any():
        return 0.0
    part = values[block.samples]
    rises = turned[1:]
    lit = np.where(rises, part[1:], part[:-1])
    dark = np.where(rises, part[:-1], part[1:])
    # An average over phases has no corner: it is not zero on the side turned away.
    crossing &= dark == 0.0
    share = np.where(rises, after, before) / np.maximum(np.abs(before) + np.abs(after), 1e-300)
    counted = 0.5 * block.step_s[:, None] * lit
    true = counted * share * (2.0 if kind == "jumps" else 1.0)
    return np.where(crossing, true - counted, 0.0)
