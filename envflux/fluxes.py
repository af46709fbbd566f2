"""From a track, an attitude law and a craft to factors; with an environment, to fluxes.

Geometry first, environment second. `factors` holds all the expensive work and knows nothing of
watts; `combine` multiplies them by an environment and by surface properties, and costs next to
nothing. Keep the two apart: it is what lets one survey answer every what-if.
"""

from __future__ import annotations

import json
import os
import warnings
from concurrent.futures import ThreadPoolExecutor
from typing import TypedDict, Unpack

import numpy as np
import xarray as xr

from envflux import schema
from envflux.attitudes import AttitudeLaw, Orientation
from envflux.coatings import Age, Bound, Cells
from envflux.craft import Craft
from envflux.environments import Environment, albedo_zenith_increment, solar_irradiance_w_m2
from envflux.errors import EnvfluxWarning, InputError, OmittedTermWarning, Told
from envflux.kernels.direct import sun_factors
from envflux.kernels.planet import planet_factors
from envflux.planets import EARTH
from envflux.vectors import Array, dot

# Times handed to a kernel at once: long enough that Python's share vanishes, short enough that the
# rotation matrices of a long track (72 bytes a time and phase) never exist all together.
_CHUNK = 16384

_ORTHONORMAL = 1e-6


class SurfaceState(TypedDict, total=False):
    """Which values of each coating to use; see `Coating.values`."""

    age: Age
    bound: Bound
    bound_absorptance: Bound | None
    bound_emittance: Bound | None
    cells: Cells


def factors(
    track: xr.Dataset,
    law: AttitudeLaw,
    craft: Craft,
    *,
    radiating_radius_km: float = EARTH.radius_km,
    zenith: bool = True,
    threads: int | None = None,
) -> xr.Dataset:
    """Compute what geometry alone decides: how much of each source every face receives.

    Parameters
    ----------
    track : xarray.Dataset
        From an orbit's ``track``, or `track_from_arrays`.
    law : AttitudeLaw
        How the body sits along the track.
    craft : Craft
        The faces.
    radiating_radius_km : float
        Radius of the sphere that albedo and infrared leave; see `Environment`.
    zenith : bool
        Whether `g_zenith` is wanted; it costs as much as the rest together.
    threads : int, optional
        Threads to use; all cores by default. The result does not depend on it.

    Returns
    -------
    xarray.Dataset
        The track with, over ``time`` and ``face``: `g_sun` (visible fraction of the solar disc times
        the incidence cosine), `g_albedo` (per unit albedo and irradiance, Lambertian reflection),
        `g_zenith` (the same integral weighted by the zenith correction at each planet element),
        `g_ir` (view factor to the planet), `sun_incidence` and `sun_exposure`; over ``time`` the
        Sun's azimuth and elevation in body axes, unless attitudes are averaged.

    Raises
    ------
    InputError
        If the track dips below the radiating sphere, or the law returns no rotations.

    Notes
    -----
    Direct: two-disc shadow of the track times the clipped cosine. Planetary infrared: closed form of
    the view factor from a plate to a sphere. Albedo: ring quadrature, `envflux.kernels.planet`.
    Reflected light is never scaled by the craft's own shadow. On a sphere no lit ground is in view
    from within the shadow, so it has faded to nothing there; it outlasts the Sun where the shadow's
    radius is above the radiating one.
    """
    _check_kinds(track, law, craft)
    surfaces = craft.surfaces()
    normals = np.array([surface.normal for surface in surfaces])
    radii = np.sqrt(dot(track.position.values, track.position.values))
    if radii.size and radii.min() <= radiating_radius_km:
        accepted = f"below the lowest radius of the track, {radii.min():.3f} km"
        raise InputError("radiating_radius_km", radiating_radius_km, accepted)
    times, faces = track.sizes["time"], len(surfaces)
    g_sun, sun_incidence, sun_exposure = (np.empty((times, faces)) for _ in range(3))
    g_albedo, g_ir = np.empty((times, faces)), np.empty((times, faces))
    g_zenith = np.empty((times if zenith else 0, faces))
    body_sun = np.full((times, 3), np.nan)

    def compute(start: int) -> None:
        part = slice(start, min(start + _CHUNK, times))
        piece = track.isel(time=part)
        orientation = _checked(law.orient(piece), piece.sizes["time"], law)
        rotations = np.ascontiguousarray(orientation.rotations, float)
        weights = np.ascontiguousarray(orientation.weights, float)
        sun = np.ascontiguousarray(piece.sun.values)
        spinning = orientation.spin_axis is not None and orientation.spin_axis_body is not None
        sun_factors(
            sun,
            np.ascontiguousarray(piece.sunlit.values),
            rotations,
            weights,
            normals,
            np.ascontiguousarray(orientation.spin_axis, float) if spinning else np.empty((0, 3)),
            np.ascontiguousarray(orientation.spin_axis_body, float) if spinning else np.empty(3),
            g_sun[part],
            sun_incidence[part],
            sun_exposure[part],
        )
        planet_factors(
            np.ascontiguousarray(piece.position.values),
            np.ascontiguousarray(piece.sun_direction.values),
            rotations,
            weights,
            normals,
            radiating_radius_km,
            g_albedo[part],
            g_ir[part],
            g_zenith[part] if zenith else None,
        )
        if rotations.shape[1] == 1:
            body_sun[part] = np.einsum("tji,tj->ti", rotations[:, 0], sun)

    starts = range(0, times, _CHUNK)
    workers = min(threads or os.cpu_count() or 1, max(len(starts), 1))
    if workers == 1:
        for start in starts:
            compute(start)
    else:
        with ThreadPoolExecutor(workers) as pool:
            list(pool.map(compute, starts))

    over_faces = {
        "g_sun": g_sun,
        "g_albedo": g_albedo,
        "g_ir": g_ir,
        "sun_incidence": sun_incidence,
        "sun_exposure": sun_exposure,
    }
    if zenith:
        over_faces["g_zenith"] = g_zenith
    result = track.assign({name: (("time", "face"), values) for name, values in over_faces.items()})
    if times and not np.isnan(body_sun[0, 0]):
        result["sun_azimuth"] = ("time", np.degrees(np.arctan2(body_sun[:, 1], body_sun[:, 0])))
        horizontal = np.hypot(body_sun[:, 0], body_sun[:, 1])
        result["sun_elevation"] = ("time", np.degrees(np.arctan2(body_sun[:, 2], horizontal)))
    result = _with_faces(result, craft, {})
    return schema.stamp(
        result,
        attitude=_described(law),
        craft=craft.to_json(),
        radiating_radius_km=float(radiating_radius_km),
        history=schema.extend_history(result, "factors: direct, albedo and planetary infrared geometry"),
    )


def combine(factors: xr.Dataset, environment: Environment, **surface: Unpack[SurfaceState]) -> xr.Dataset:
    """Turn factors into fluxes: the cheap step, to be repeated for every what-if.

    Parameters
    ----------
    factors : xarray.Dataset
        From `factors`.
    environment : Environment
        Levels of sunlight, albedo and planetary infrared.
    **surface
        ``age``, ``bound``, ``bound_absorptance``, ``bound_emittance`` and ``cells``, as `Coating.values`
        takes them; beginning of life, nominal and loaded by default.

    Returns
    -------
    xarray.Dataset
        As `flux` returns.

    Raises
    ------
    InputError
        If the factors were made for another radiating radius, or lack `g_zenith` where the
        environment asks for it.
    """
    return _combine(factors, environment, surface, in_place=False)


def flux(
    track: xr.Dataset,
    law: AttitudeLaw,
    craft: Craft,
    environment: Environment,
    *,
    threads: int | None = None,
    **surface: Unpack[SurfaceState],
) -> xr.Dataset:
    """Compute the heat flux from the environment on every face along a track.

    Parameters
    ----------
    track : xarray.Dataset
        From an orbit's ``track``, or `track_from_arrays`.
    law : AttitudeLaw
        How the body sits along the track.
    craft : Craft
        The faces and their coatings.
    environment : Environment
        Levels of sunlight, albedo and planetary infrared.
    threads : int, optional
        Threads to use; all cores by default. The result does not depend on it.
    **surface
        ``age`` ("BOL" or "EOL"), ``bound`` ("minimum", "nominal" or "maximum"), ``bound_absorptance``,
        ``bound_emittance`` and ``cells`` ("loaded" or "unloaded"), as `Coating.values` takes them;
        beginning of life, nominal and loaded by default.

    Returns
    -------
    xarray.Dataset
        The track with, over ``time`` and ``face``, in W m-2 of face area: `solar_flux`, `albedo_flux`
        and `planetary_ir_flux` (incident), `absorbed_flux` (absorptance times sunlight direct and
        reflected, plus emittance times infrared), `sun_incidence` and `sun_exposure`; on ``face``
        its area, absorptance, emittance and normal.

    Raises
    ------
    InputError
        If the track dips below the radiating sphere, or the law returns no rotations.

    Warns
    -----
    OmittedTermWarning
        Below 350 km, where free-molecular heating, which is left out, is not small.
    """
    geometry = factors(
        track,
        law,
        craft,
        radiating_radius_km=environment.radiating_radius_km,
        zenith=environment.zenith_correction == "element",
        threads=threads,
    )
    # Nobody else holds these factors: turning them into fluxes where they lie halves the memory.
    return _combine(geometry, environment, surface, in_place=True)


def _combine(factors: xr.Dataset, environment: Environment, surface: SurfaceState, *, in_place: bool) -> xr.Dataset:
    if factors.attrs.get("radiating_radius_km") != environment.radiating_radius_km:
        accepted = f"that of the factors, {factors.attrs.get('radiating_radius_km')} km, which depend on it"
        raise InputError("radiating_radius_km", environment.radiating_radius_km, accepted)
    craft = Craft.from_json(factors.attrs["craft"])
    _warn_of_surfaces(craft, surface)
    _warn_of_season(factors, environment)
    correction = environment.zenith_correction
    if correction == "element" and "g_zenith" not in factors:
        raise InputError("zenith_correction", correction, "'none' or 'sub-point' for factors made with zenith=False")
    if correction != "none":
        warnings.warn(
            EnvfluxWarning(
                "the zenith correction was fitted to solar zenith angles up to 65 deg and is extrapolated beyond, "
                "near the terminator"
            ),
            stacklevel=3,
        )
    irradiance = solar_irradiance_w_m2(environment.solar_constant_w_m2, factors.sun_distance.values)
    per_time = irradiance[:, None]

    def scaled(name: str, level: Array | float) -> Array:
        values: Array = factors[name].values
        return np.multiply(values, level, out=values if in_place else None)

    solar = scaled("g_sun", per_time)
    albedo_level = environment.albedo * per_time
    if correction == "sub-point":
        albedo_level = (environment.albedo + _sub_point_increment(factors))[:, None] * per_time
    albedo = scaled("g_albedo", albedo_level)
    if correction == "element":
        albedo += scaled("g_zenith", per_time)
    infrared = scaled("g_ir", environment.planetary_ir_w_m2)

    result = factors.drop_vars([name for name in schema.FACTORS if name in factors])
    result = _with_faces(result, craft, surface)
    absorbed = solar + albedo
    absorbed *= result.absorptance.values
    absorbed += result.emittance.values * infrared
    fluxes = dict(zip(schema.FLUXES, (solar, albedo, infrared, absorbed), strict=True))
    result = result.assign({name: (("time", "face"), values) for name, values in fluxes.items()})
    result["irradiance"] = ("time", irradiance)
    state = {"age": "BOL", "bound": "nominal", "cells": "loaded", **{k: v for k, v in surface.items() if v is not None}}
    return schema.stamp(
        result,
        environment=environment.to_json(),
        surface_state=", ".join(f"{key} {value}" for key, value in state.items()),
        omitted_terms=_omitted_terms(factors),
        history=schema.extend_history(factors, "fluxes: factors times environment and surface properties"),
    )


def _check_kinds(track: object, law: object, craft: object) -> None:
    """Tell swapped or unfinished arguments by what they are, before they fail somewhere inside."""
    if not isinstance(track, xr.Dataset) or "position" not in track or "sunlit" not in track:
        raise InputError("track", Told(_kind(track)), "a track, as orbit.track() or track_from_arrays() makes it")
    if not callable(getattr(law, "orient", None)):
        raise InputError("law", Told(_kind(law)), "an attitude law, e.g. NadirPointing(), or your own with orient()")
    if not isinstance(craft, Craft):
        raise InputError("craft", Told(_kind(craft)), "a Craft, e.g. from box_craft(...) or Craft([face, ...])")


def _kind(value: object) -> str:
    return f"of type {type(value).__name__}"


def _warn_of_surfaces(craft: Craft, surface: SurfaceState) -> None:
    if surface.get("age") != "EOL":
        return
    fresh = [one.name for one in craft.surfaces() if not one.coating.ages]
    if fresh:
        warnings.warn(
            EnvfluxWarning(
                f"age is EOL, but these faces have no end-of-life values and keep those of BOL: {', '.join(fresh)}"
            ),
            stacklevel=4,
        )


# Published solar constants lie within; an irradiance at perihelion or aphelion does not.
_SOLAR_CONSTANTS_W_M2 = (1340.0, 1385.0)


def _warn_of_season(factors: xr.Dataset, environment: Environment) -> None:
    low, high = _SOLAR_CONSTANTS_W_M2
    given = environment.solar_constant_w_m2
    if low <= given <= high or np.all(factors.sun_distance.values == 1.0):
        return
    warnings.warn(
        EnvfluxWarning(
            f"solar_constant_w_m2 is {given:g}, which no standard gives at 1 au: the distance of the Sun is counted "
            "by itself, so an irradiance at perihelion or aphelion would count the season twice"
        ),
        stacklevel=4,
    )


def _sub_point_increment(factors: xr.Dataset) -> Array:
    position = factors.position.values
    cosine = dot(position, factors.sun_direction.values) / np.sqrt(dot(position, position))
    return albedo_zenith_increment(np.degrees(np.arccos(np.clip(cosine, -1.0, 1.0))))


def _with_faces(dataset: xr.Dataset, craft: Craft, surface: SurfaceState) -> xr.Dataset:
    surfaces = craft.surfaces()
    values = [one.coating.values(**surface) for one in surfaces]
    return dataset.assign_coords(
        face=("face", np.array([one.name for one in surfaces], dtype=object)),
        area=("face", np.array([one.area_m2 for one in surfaces])),
        absorptance=("face", np.array([value.absorptance for value in values])),
        emittance=("face", np.array([value.emittance for value in values])),
        normal=(("face", "xyz"), np.array([one.normal for one in surfaces])),
    )


def _checked(orientation: Orientation, times: int, law: AttitudeLaw) -> Orientation:
    """Refuse what a user's own law got wrong before it becomes a wrong number."""
    name = type(law).__name__
    rotations = np.asarray(orientation.rotations)
    weights = np.asarray(orientation.weights)
    if rotations.ndim != 4 or rotations.shape != (times, weights.size, 3, 3):
        accepted = f"(time, phase, 3, 3), here ({times}, {weights.size}, 3, 3)"
        raise InputError(f"{name}.rotations.shape", rotations.shape, accepted)
    if not abs(weights.sum() - 1.0) < _ORTHONORMAL:
        raise InputError(f"{name}.weights", weights, "numbers that add up to 1")
    for i in range(3):
        for j in range(i, 3):
            product = np.einsum("tpk,tpk->tp", rotations[..., i], rotations[..., j])
            # Written so that a NaN fails.
            if not np.all(np.abs(product - (i == j)) < _ORTHONORMAL):
                worst = np.unravel_index(np.argmax(np.abs(product - (i == j))), product.shape)
                accepted = "a rotation from body to frame: finite, with columns of length 1 at right angles"
                raise InputError(f"{name}.rotations", rotations[worst].tolist(), accepted)
    handed = np.cross(rotations[..., 0], rotations[..., 1])
    if np.any(np.einsum("tpk,tpk->tp", handed, rotations[..., 2]) < 0.0):
        raise InputError(
            f"{name}.rotations", "left-handed", "right-handed: the third column is the first cross the second"
        )
    return orientation


def _described(law: AttitudeLaw) -> str:
    # A law of the user's own is named, not printed: the address in its repr would differ from run to run.
    own = f"{type(law).__module__}.{type(law).__qualname__}"
    return str(law.to_json()) if hasattr(law, "to_json") else json.dumps({"kind": own})


# Free-molecular heating of a ram face at full accommodation, mean solar activity: km, W/m2.
# From the rounded densities of the U.S. Standard Atmosphere 1976 and orbital speed (from memory).
_FREE_MOLECULAR_KM = np.array([200.0, 250.0, 300.0])
_FREE_MOLECULAR_W_M2 = np.array([60.0, 14.0, 4.0])
_FREE_MOLECULAR_BELOW_KM = 350.0


def free_molecular_estimate_w_m2(altitude_km: float) -> float:
    """Order of magnitude of the free-molecular heating that is left out, on a ram face.

    Log-linear in altitude through 60, 14 and 4 W/m2 at 200, 250 and 300 km, continued beyond.
    """
    logs = np.log(_FREE_MOLECULAR_W_M2)
    i = int(np.clip(np.searchsorted(_FREE_MOLECULAR_KM, altitude_km) - 1, 0, len(logs) - 2))
    share = (altitude_km - _FREE_MOLECULAR_KM[i]) / (_FREE_MOLECULAR_KM[i + 1] - _FREE_MOLECULAR_KM[i])
    return float(np.exp(logs[i] + share * (logs[i + 1] - logs[i])))


def _omitted_terms(factors: xr.Dataset) -> str:
    always = "reflection and shading between faces, infrared and light from other bodies"
    if not factors.sizes["time"]:
        return always
    lowest = float(factors.altitude.min())
    if lowest >= _FREE_MOLECULAR_BELOW_KM:
        return always
    size = free_molecular_estimate_w_m2(lowest)
    text = (
        f"free-molecular heating, about {size:.2g} W/m2 on a ram face at the lowest altitude of "
        f"{lowest:.0f} km (mean solar activity, order of magnitude)"
    )
    warnings.warn(OmittedTermWarning(f"not included: {text}"), stacklevel=4)
    return f"{text}; {always}"
