"""Thermo-optical surfaces: absorptance and emittance with their spread and ageing, and a starter catalogue.

The catalogue rows are starting points from published tables, with their source. Batches differ and
surfaces age with contamination, ultraviolet light and particles: measure the flight surfaces.
"""

from __future__ import annotations

import csv
import re
from dataclasses import dataclass
from functools import cache
from importlib.resources import files
from typing import Any, Literal, NamedTuple, Self, get_args

from pydantic import ValidationInfo, field_validator, model_validator

from envflux.definitions import Definition
from envflux.errors import InputError, did_you_mean
from envflux.markup import table

Age = Literal["BOL", "EOL"]
"""Beginning or end of life."""

Bound = Literal["minimum", "nominal", "maximum"]
"""Which value of a spread is taken."""

Cells = Literal["loaded", "unloaded"]
"""Whether solar cells deliver power; unloaded means open-circuit or shunted."""

_FRACTION = "a number from 0 to 1"


def _fraction(value: object, field: str, accepted: str = _FRACTION) -> float:
    """`value` as a float in [0, 1]; the whole range is stated whichever edge was crossed."""
    if isinstance(value, bool) or not isinstance(value, (int, float)) or not 0.0 <= value <= 1.0:
        raise InputError(field, value, accepted)
    return float(value)


class Spread(Definition):
    """The range in which a surface property lies.

    Parameters
    ----------
    minimum, nominal, maximum : float
        In rising order, each from 0 to 1.

    Raises
    ------
    InputError
        If one is outside [0, 1], or they are out of order.
    """

    minimum: float
    nominal: float
    maximum: float

    @field_validator("minimum", "nominal", "maximum", mode="before")
    @classmethod
    def _in_range(cls, value: object, info: ValidationInfo) -> float:
        return _fraction(value, str(info.field_name))

    @model_validator(mode="after")
    def _in_order(self) -> Self:
        if self.nominal < self.minimum:
            raise InputError("nominal", self.nominal, f"at least the minimum, {self.minimum:g}")
        if self.maximum < self.nominal:
            raise InputError("maximum", self.maximum, f"at least the nominal value, {self.nominal:g}")
        return self

    def __str__(self) -> str:
        return f"{self.nominal:g} ({self.minimum:g} to {self.maximum:g})"


class SurfaceValues(NamedTuple):
    """The two numbers that a flux is multiplied by."""

    absorptance: float
    emittance: float


class Coating(Definition):
    """How a surface takes up sunlight and infrared.

    Parameters
    ----------
    absorptance : float or Spread
        Solar absorptance at beginning of life; a plain number has no spread.
    emittance : float or Spread
        Hemispherical infrared emittance at beginning of life.
    absorptance_eol, emittance_eol : float or Spread, optional
        The same at end of life; left out, the beginning-of-life values hold for life.
    electrical_extraction : float
        Fraction of the *incident* sunlight that loaded solar cells take away as electricity (cell
        efficiency x packing factor). At most the smallest absorptance. It is held for life, so a
        cell that loses efficiency needs its own coating for the aged hot case.
    name, source : str
        What it is, and where the numbers come from.

    Raises
    ------
    InputError
        If a value lies outside [0, 1], or more electricity is taken out than light is absorbed.

    Notes
    -----
    Ageing alone is not the bound: a fresh surface at its worst tolerance may be hotter than an aged
    one at its nominal value, so ask for both (`values`). In the hot case cells are usually unloaded.
    """

    absorptance: float | Spread
    emittance: float | Spread
    absorptance_eol: float | Spread | None = None
    emittance_eol: float | Spread | None = None
    electrical_extraction: float = 0.0
    name: str = ""
    source: str = ""

    @field_validator("absorptance", "emittance", "absorptance_eol", "emittance_eol", mode="before")
    @classmethod
    def _number_or_spread(cls, value: object, info: ValidationInfo) -> object:
        field = str(info.field_name)
        if isinstance(value, Spread):
            return value
        if isinstance(value, dict):
            try:
                return Spread(**value)
            except InputError as error:
                raise error.inside(field) from None
        if value is None and field.endswith("_eol"):
            return None
        return _fraction(value, field, f"{_FRACTION}, or a Spread(minimum, nominal, maximum)")

    @field_validator("electrical_extraction", mode="before")
    @classmethod
    def _fraction_of_sunlight(cls, value: object) -> float:
        return _fraction(value, "electrical_extraction")

    @model_validator(mode="after")
    def _extraction_is_absorbed(self) -> Self:
        smallest = min(self.spread("absorptance", age).minimum for age in get_args(Age))
        if self.electrical_extraction > smallest:
            raise InputError(
                "electrical_extraction", self.electrical_extraction, f"at most the smallest absorptance, {smallest:g}"
            )
        return self

    @property
    def ages(self) -> bool:
        """Whether it has values of its own for end of life."""
        return self.absorptance_eol is not None or self.emittance_eol is not None

    def spread(self, quantity: Literal["absorptance", "emittance"], age: Age = "BOL") -> Spread:
        """Minimum, nominal and maximum of one quantity, before any electricity is taken away.

        Parameters
        ----------
        quantity : {"absorptance", "emittance"}
            Which of the two.
        age : {"BOL", "EOL"}
            Beginning or end of life.
        """
        aged = getattr(self, f"{quantity}_eol") if age == "EOL" else None
        value = getattr(self, quantity) if aged is None else aged
        return value if isinstance(value, Spread) else Spread(minimum=value, nominal=value, maximum=value)

    def values(
        self,
        *,
        age: Age = "BOL",
        bound: Bound = "nominal",
        bound_absorptance: Bound | None = None,
        bound_emittance: Bound | None = None,
        cells: Cells = "loaded",
    ) -> SurfaceValues:
        """Pick the absorptance and emittance to compute with.

        Parameters
        ----------
        age : {"BOL", "EOL"}
            Beginning or end of life.
        bound : {"minimum", "nominal", "maximum"}
            Which value of each spread; for both quantities unless one of the next two says otherwise.
        bound_absorptance, bound_emittance : {"minimum", "nominal", "maximum"}, optional
            The same for one quantity: the hot bound of a radiator, e.g., is the largest absorptance
            with the smallest emittance.
        cells : {"loaded", "unloaded"}
            Loaded cells turn `electrical_extraction` of the sunlight into electricity, which is then
            missing from the heat; unloaded (open-circuit or shunted) cells turn all into heat.

        Returns
        -------
        SurfaceValues
            Effective solar absorptance, and infrared emittance.

        Raises
        ------
        InputError
            If a choice is none of those listed.
        """
        for_absorptance = bound if bound_absorptance is None else bound_absorptance
        for_emittance = bound if bound_emittance is None else bound_emittance
        _check_choice("age", age, get_args(Age))
        _check_choice("bound" if bound_absorptance is None else "bound_absorptance", for_absorptance, get_args(Bound))
        _check_choice("bound" if bound_emittance is None else "bound_emittance", for_emittance, get_args(Bound))
        _check_choice("cells", cells, get_args(Cells))
        absorptance: float = getattr(self.spread("absorptance", age), for_absorptance)
        emittance: float = getattr(self.spread("emittance", age), for_emittance)
        extracted = self.electrical_extraction if cells == "loaded" else 0.0
        return SurfaceValues(absorptance - extracted, emittance)


def _check_choice(field: str, value: object, choices: tuple[str, ...]) -> None:
    if value not in choices:
        hint = did_you_mean(value, choices) if isinstance(value, str) else ""
        raise InputError(field, value, f"one of: {', '.join(choices)}{hint}")


@dataclass(frozen=True)
class CatalogueEntry:
    """One row of the starter catalogue, as it was published.

    Parameters
    ----------
    identifier : str
        Row number, e.g. ``"C025"``.
    category, name : str
        What the surface is. A letter tells rows apart; it is no grade.
    thickness_m : float or None
        Film thickness.
    absorptance, emittance : float or None
        Fresh values; None where the source has none.
    absorptance_aged, emittance_aged : float or None
        Values after `ageing_condition`. Nearly all are laboratory ultraviolet hours, not a mission.
    ageing_condition : str
        What the aged values were exposed to.
    source, source_status : str
        Published source, and how it was read: ``"seen: ..."`` or ``"from memory"``.
    note : str
        What to mind.
    """

    identifier: str
    category: str
    name: str
    thickness_m: float | None
    absorptance: float | None
    emittance: float | None
    absorptance_aged: float | None
    emittance_aged: float | None
    ageing_condition: str
    source: str
    source_status: str
    note: str

    @property
    def seen(self) -> bool:
        """Whether the numbers were read in a published text, and not recalled."""
        return self.source_status.startswith("seen")

    @property
    def label(self) -> str:
        """The name, with the thickness of a film."""
        return self.name if self.thickness_m is None else f"{self.name}, {self.thickness_m * 1e6:.3g} µm"

    def coating(self) -> Coating:
        """Make a `Coating` of the entry; aged values become its end-of-life values.

        Raises
        ------
        InputError
            If the source gives no fresh absorptance or emittance.
        """
        if self.absorptance is None or self.emittance is None:
            raise InputError(
                "identifier",
                self.identifier,
                f"an entry with a fresh absorptance and emittance; '{self.label}' has {self._known()}: "
                "write a Coating of your own with these",
            )
        trail = [self.source, self.source_status if self.source_status != self.source else "", self.note]
        if self.ageing_condition:
            trail.append(f"EOL values are after {self.ageing_condition}")
        return Coating(
            absorptance=self.absorptance,
            emittance=self.emittance,
            absorptance_eol=self.absorptance_aged,
            emittance_eol=self.emittance_aged,
            name=self.label,
            source="; ".join(part for part in (f"catalogue {self.identifier}", *trail) if part),
        )

    def _known(self) -> str:
        values = {
            "absorptance": self.absorptance,
            "emittance": self.emittance,
            "aged absorptance": self.absorptance_aged,
            "aged emittance": self.emittance_aged,
        }
        return "only " + ", ".join(f"{what} {value:g}" for what, value in values.items() if value is not None)

    def __str__(self) -> str:
        parts = [f"{self.identifier}  {self.label}: {_pair(self.absorptance, self.emittance)}"]
        if self.ageing_condition:
            parts.append(f"aged {_pair(self.absorptance_aged, self.emittance_aged)} ({self.ageing_condition})")
        parts.append(f"[{self.source_status}]")
        return "  ".join(parts)


class CoatingList(tuple[CatalogueEntry, ...]):
    """Catalogue entries, one a line; a table in a notebook."""

    def __repr__(self) -> str:
        return "\n".join(str(entry) for entry in self) or "no entries"

    def _repr_html_(self) -> str:
        heads = ("", "surface", "α / ε", "aged α / ε", "aged by", "source", "how read", "note")
        rows = [
            (
                entry.identifier,
                entry.label,
                _pair(entry.absorptance, entry.emittance),
                _pair(entry.absorptance_aged, entry.emittance_aged) if entry.ageing_condition else "",
                entry.ageing_condition,
                entry.source,
                entry.source_status,
                entry.note,
            )
            for entry in self
        ]
        return table(rows, heads)


def _pair(absorptance: float | None, emittance: float | None) -> str:
    return " / ".join("not given" if value is None else f"{value:g}" for value in (absorptance, emittance))


@cache
def coating_catalogue() -> CoatingList:
    """Read the starter catalogue of generic surfaces, each with its published source.

    Returns
    -------
    CoatingList
        A tuple of `CatalogueEntry`, in the order of their identifiers.

    Notes
    -----
    Most rows come from NASA RP-1121 (Henninger, 1984). Its emittance is near-normal at room
    temperature (from memory); hemispherical emittance is a few percent lower for dielectrics and
    higher for metals. Aged values are orders of magnitude. Use the rows for early sizing, and the
    measured values of the flight surfaces after that.
    """
    text = files("envflux").joinpath("data/coatings.csv").read_text(encoding="utf-8")
    return CoatingList(_entry(row) for row in csv.DictReader(text.splitlines()))


def _entry(row: dict[str, Any]) -> CatalogueEntry:
    def number(column: str) -> float | None:
        return float(row[column]) if row[column] else None

    return CatalogueEntry(
        identifier=row["id"],
        category=row["category"],
        name=row["name"],
        thickness_m=number("thickness_m"),
        absorptance=number("alpha_solar_bol"),
        emittance=number("emittance_ir_bol"),
        absorptance_aged=number("alpha_solar_aged"),
        emittance_aged=number("emittance_ir_aged"),
        ageing_condition=row["ageing_condition"],
        source=row["source"],
        source_status=row["source_status"],
        note=row["note"],
    )


# American spellings lead to the same rows.
_SPELLINGS = (
    ("aluminum", "aluminium"),
    ("aluminized", "aluminised"),
    ("anodized", "anodised"),
    ("fiber", "fibre"),
    ("sulfate", "sulphate"),
    ("sulfuric", "sulphuric"),
    ("vapor ", "vapour "),
)


def find_coatings(words: str) -> CoatingList:
    """Catalogue entries whose name or category holds all the words, in any order or case.

    Parameters
    ----------
    words : str
        E.g. ``"white paint"`` or ``"silvered FEP"``; an empty text finds all.

    Returns
    -------
    CoatingList
        The entries found, perhaps none.
    """
    wanted = f"{words.lower()} "
    for american, british in _SPELLINGS:
        wanted = wanted.replace(american, british)
    return CoatingList(
        entry
        for entry in coating_catalogue()
        if all(word in f"{entry.identifier} {entry.label} {entry.category}".lower() for word in wanted.split())
    )


def catalogue_coating(identifier: str) -> Coating:
    """Make the coating of one catalogue entry, its name and source filled in.

    Parameters
    ----------
    identifier : str
        Such as ``"C025"``; `find_coatings` lists them.

    Returns
    -------
    Coating
        Aged values of the entry, where it has any, are the end-of-life values.

    Raises
    ------
    InputError
        If there is no such entry, or it gives no fresh absorptance or emittance.
    """
    by_identifier = {entry.identifier: entry for entry in coating_catalogue()}
    found = by_identifier.get(identifier.strip().upper()) if isinstance(identifier, str) else None
    if found is None:
        last = max(by_identifier)
        hint = _similar(identifier, by_identifier) if isinstance(identifier, str) else ""
        raise InputError("identifier", identifier, f"a catalogue entry, {min(by_identifier)} to {last}{hint}")
    return found.coating()


def _similar(word: str, known: dict[str, CatalogueEntry]) -> str:
    # Identifiers are all alike, so a wrong one is read as a number first and as a name second.
    digits = re.fullmatch(r"[Cc]?\s*0*(\d+)", word.strip())
    if digits:
        return did_you_mean(f"C{int(digits[1]):03d}", known) if int(digits[1]) <= len(known) else ""
    names = {entry.name: entry.identifier for entry in known.values()}
    hits = find_coatings(word)
    if word.strip() and hits:
        return f" (did you mean '{hits[0].identifier}', {hits[0].label}?)"
    hint = did_you_mean(word, names)
    name = next((name for name in names if f"'{name}'" in hint), None)
    return f" (did you mean '{names[name]}', {name}?)" if name else ""
