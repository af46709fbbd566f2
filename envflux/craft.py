"""Spacecraft as a set of flat faces: outward normals, areas and coatings in body axes."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Annotated, NamedTuple, Self, cast

import numpy as np
from numpy.typing import ArrayLike
from pydantic import Field, ValidationInfo, field_validator, model_validator

from envflux.coatings import Coating, catalogue_coating
from envflux.definitions import Definition, Listed, Vector3
from envflux.errors import InputError, did_you_mean
from envflux.markup import table
from envflux.vectors import AXES, Array, dot, unit

# Area-weighted normals of a closed surface cancel; what is left over is rounding of the normals and areas,
# far below a gap that matters.
_CLOSURE = 1e-9


def checked_direction(value: object, field: str) -> str | tuple[float, float, float]:
    """Check that `value` is the name of a body axis or three numbers with a direction.

    Parameters
    ----------
    value : object
        ``"+X"`` to ``"-Z"``, or three finite numbers that are not all zero.
    field : str
        What a complaint calls it.

    Returns
    -------
    str or tuple of float
        The name, or the numbers as they came; `unit_direction` scales them.

    Raises
    ------
    InputError
        If it is neither.
    """
    if isinstance(value, str):
        if value in AXES:
            return value
        raise InputError(field, value, f"one of {', '.join(AXES)}, or three numbers{did_you_mean(value, AXES)}")
    accepted = f"three finite numbers that are not all zero, or one of {', '.join(AXES)}"
    try:
        numbers = tuple(float(component) for component in value)  # type: ignore[attr-defined]  # the test itself
    except (TypeError, ValueError):
        raise InputError(field, value, accepted) from None
    if len(numbers) != 3 or not all(map(math.isfinite, numbers)) or not any(numbers):
        raise InputError(field, value, accepted)
    return numbers


def unit_direction(direction: str | tuple[float, float, float]) -> tuple[float, float, float]:
    """Scale a direction that `checked_direction` let pass to length 1, however long or short it was."""
    if isinstance(direction, str):
        return AXES[direction]
    largest = max(map(abs, direction))
    x, y, z = (component / largest for component in direction)
    length = math.hypot(x, y, z)
    return (x / length, y / length, z / length)


class Surface(NamedTuple):
    """One side of a face, which is what receives heat."""

    name: str
    normal: tuple[float, float, float]
    area_m2: float
    coating: Coating


class Face(Definition):
    """A flat part of the craft's outside.

    Parameters
    ----------
    name : str
        As it will stand in tables and plots.
    normal : str or sequence of float
        Outward normal in body axes: ``"+X"`` to ``"-Z"``, or three numbers of any length but zero.
    area_m2 : float
        Area of one side.
    coating : Coating or str
        Surface of the side that the normal leaves from; a text is an entry of the coating catalogue.
    back : Coating or str, optional
        Surface of the other side. A face with a back is two-sided and gives two results, ``NAME`` and
        ``NAME back``.

    Raises
    ------
    InputError
        If the normal has no direction or the area is not positive.
    """

    name: str
    normal: str | Vector3
    area_m2: Annotated[float, Field(gt=0.0)]
    coating: Coating
    back: Coating | None = None

    @field_validator("name")
    @classmethod
    def _name_can_be_printed(cls, value: str) -> str:
        if not value.strip() or value != value.strip() or not value.isprintable():
            raise InputError("name", value, "a text on one line, without spaces at its ends")
        return value

    @field_validator("normal", mode="before")
    @classmethod
    def _normal_has_a_direction(cls, value: object) -> str | tuple[float, float, float]:
        return checked_direction(value, "normal")

    @field_validator("coating", "back", mode="before")
    @classmethod
    def _coating_from_the_catalogue(cls, value: object, info: ValidationInfo) -> object:
        field = str(info.field_name)
        if isinstance(value, (Coating, dict)) or (value is None and field == "back"):
            return value
        if not isinstance(value, str):
            raise InputError(field, value, "a Coating, or the identifier of a catalogue entry such as 'C048'")
        try:
            return catalogue_coating(value)
        except InputError as error:
            raise InputError(field, value, error.accepted, verb=error.verb) from None

    @property
    def unit_normal(self) -> tuple[float, float, float]:
        """Outward unit normal in body axes."""
        return unit_direction(self.normal)

    def surfaces(self) -> tuple[Surface, ...]:
        """List the sides of the face: one, or two if it has a back."""
        normal = self.unit_normal
        front = Surface(self.name, normal, self.area_m2, self.coating)
        if self.back is None:
            return (front,)
        x, y, z = normal
        return (front, Surface(f"{self.name} back", (0.0 - x, 0.0 - y, 0.0 - z), self.area_m2, self.back))


class Craft(Definition):
    """A spacecraft made of faces.

    Parameters
    ----------
    faces : sequence of Face
        At least one, each with its own name.
    name : str
        What it is called.

    Raises
    ------
    InputError
        If there is no face, or two surfaces would bear one name.

    Notes
    -----
    Faces do not shade each other and reflect nothing onto each other: what a panel or an antenna keeps
    away from its neighbour is not in the results. Where that matters, results for the neighbour are an
    upper bound of the incident flux, which suits a hot case and misleads a cold one.
    """

    faces: Annotated[tuple[Face, ...], Listed, Field(min_length=1)]
    name: str = ""

    @model_validator(mode="after")
    def _names_are_unique(self) -> Self:
        taken: set[str] = set()
        for place, face in enumerate(self.faces, start=1):
            for surface in face.surfaces():
                if surface.name in taken:
                    accepted = "a name that no other face bears; a face with a back also takes 'NAME back'"
                    raise InputError(f"faces.{place}.name", surface.name, accepted)
                taken.add(surface.name)
        return self

    def surfaces(self) -> tuple[Surface, ...]:
        """List the one-sided surfaces in the order of the faces; a back follows its front."""
        return tuple(surface for face in self.faces for surface in face.surfaces())

    @property
    def closed(self) -> bool:
        """Whether the area-weighted normals cancel, as those of every closed surface do.

        The reverse holds for convex shapes: faces whose area-weighted normals cancel can always be put
        together to one closed convex body (Minkowski, 1897), unless they all lie in one plane.
        """
        surfaces = self.surfaces()
        left_over = [math.fsum(s.area_m2 * s.normal[axis] for s in surfaces) for axis in range(3)]
        return math.hypot(*left_over) <= _CLOSURE * math.fsum(s.area_m2 for s in surfaces)

    def projected_area_m2(self, direction: ArrayLike) -> Array:
        """Compute the area that the craft shows toward a direction.

        Parameters
        ----------
        direction : array_like, shape (..., 3)
            Toward the viewer, in body axes, of any length but zero.

        Returns
        -------
        numpy.ndarray, shape (...)
            Sum of area x cosine over the surfaces turned to the viewer. For a closed convex craft it is
            the area of its shadow; elsewhere surfaces that hide each other count twice.

        Raises
        ------
        InputError
            If a direction is zero.
        """
        toward = np.asarray(direction, float)
        if np.any(np.all(toward == 0.0, axis=-1)):
            raise InputError("direction", direction, "three numbers that are not all zero")
        surfaces = self.surfaces()
        normals = np.array([s.normal for s in surfaces])
        cosines = dot(unit(toward)[..., None, :], normals)
        areas = np.array([s.area_m2 for s in surfaces])
        return np.asarray(np.sum(areas * np.maximum(cosines, 0.0), axis=-1))

    def _repr_html_(self) -> str:
        heads = ("face", "normal", "area, m²", "absorptance", "emittance", "coating")
        rows = [
            (
                s.name,
                ", ".join(f"{component:.4g}" for component in s.normal),
                f"{s.area_m2:.6g}",
                str(s.coating.absorptance),
                str(s.coating.emittance),
                s.coating.name,
            )
            for s in self.surfaces()
        ]
        return table(rows, heads, title=self.name or type(self).__name__)


def box_craft(
    size_m: ArrayLike,
    coating: Coating | str,
    coatings: Mapping[str, Coating | str] | None = None,
    names: Mapping[str, str] | None = None,
    name: str = "box",
) -> Craft:
    """Make a box with its edges along the body axes.

    Parameters
    ----------
    size_m : array_like, shape (3,)
        Lengths along X, Y and Z in metres.
    coating : Coating or str
        Surface of every face; a text is an entry of the coating catalogue.
    coatings : mapping, optional
        Other surfaces for some faces, by their axis (``"+X"`` to ``"-Z"``) or by their name in `names`.
    names : mapping, optional
        Names for some faces by their axis, e.g. ``{"+Z": "nadir panel"}``.
    name : str
        What the craft is called.

    Returns
    -------
    Craft
        Six one-sided faces in the order +X -X +Y -Y +Z -Z.

    Raises
    ------
    InputError
        If a length is not positive, or a face is unknown.
    """
    lengths = _lengths(size_m)
    labels = {axis: axis for axis in AXES}
    for axis, label in (names or {}).items():
        if axis not in AXES:
            raise InputError("names", axis, f"one of {', '.join(AXES)}{_hint(axis, AXES)}")
        if label in AXES and label != axis:
            raise InputError(f"names.{axis}", label, "a name that is not that of another axis")
        labels[axis] = label
    by_label = {label: axis for axis, label in labels.items()}
    chosen: dict[str, Coating | str] = dict.fromkeys(AXES, coating)
    given: set[str] = set()
    for key, own in (coatings or {}).items():
        axis = key if key in AXES else by_label.get(key, "")
        if not axis:
            known = [*AXES, *(label for label in by_label if label not in AXES)]
            raise InputError("coatings", key, f"one of {', '.join(known)}{_hint(key, known)}")
        if axis in given:
            raise InputError("coatings", key, f"given once; the face {axis} has a coating already")
        given.add(axis)
        chosen[axis] = own
    areas = {"X": lengths[1] * lengths[2], "Y": lengths[0] * lengths[2], "Z": lengths[0] * lengths[1]}
    faces = tuple(
        Face(name=labels[axis], normal=axis, area_m2=areas[axis[1]], coating=cast(Coating, chosen[axis]))
        for axis in AXES
    )
    return Craft(faces=faces, name=name)


def _lengths(size_m: ArrayLike) -> tuple[float, ...]:
    accepted = "three lengths in metres, each above 0"
    try:
        lengths = tuple(float(length) for length in np.asarray(size_m, float))
    except (TypeError, ValueError):
        raise InputError("size_m", size_m, accepted) from None
    if len(lengths) != 3 or not all(math.isfinite(length) and length > 0.0 for length in lengths):
        raise InputError("size_m", size_m, accepted)
    return lengths


def _hint(word: object, known: Mapping[str, object] | list[str]) -> str:
    return did_you_mean(word, known) if isinstance(word, str) else ""
