"""The base of everything a user declares: small, frozen, validated, and readable as JSON.

One class serves as the Python call, the table in a mission file, the validation and the record
kept with results. What pydantic reports is turned into one plain sentence here, in one place.
"""

from __future__ import annotations

import inspect
import types
from collections.abc import Iterator
from datetime import UTC, datetime
from typing import Annotated, Any, ClassVar, Literal, Self, Union, get_args, get_origin

import numpy as np
from pydantic import BaseModel, BeforeValidator, ConfigDict, ValidationError
from pydantic_core import ErrorDetails

from envflux.errors import MISSING, InputError, did_you_mean
from envflux.markup import table


class Definition(BaseModel):
    """A frozen declaration. Fields may be given by position, in their order, or by name."""

    model_config = ConfigDict(
        frozen=True,
        extra="forbid",
        strict=True,
        allow_inf_nan=False,
        validate_default=True,
    )

    # Fields left out of the compact picture shown in a notebook.
    _hidden: ClassVar[frozenset[str]] = frozenset({"kind"})

    def __init__(self, *args: Any, **data: Any) -> None:
        names = [name for name in type(self).model_fields if name != "kind"]
        if len(args) > len(names):
            raise TypeError(f"{type(self).__name__} takes at most {len(names)} values: {', '.join(names)}")
        for name, value in zip(names, args, strict=False):
            if name in data:
                raise TypeError(f"{type(self).__name__} got {name} twice, by position and by name")
            data[name] = value
        # numpy's own numbers, as loops over arrays give them, are as good as Python's; its dates stay.
        plain = {
            name: value.item() if isinstance(value, np.number | np.bool_) else value for name, value in data.items()
        }
        try:
            super().__init__(**plain)
        except ValidationError as error:
            raise explain(error, type(self)) from None

    @classmethod
    def __pydantic_init_subclass__(cls, **kwargs: Any) -> None:
        # Shift-Tab in a notebook shows this. Where a field that must be given follows one that need not, Python
        # can only write that with names, so names are shown; by position it works all the same.
        fields = {name: field for name, field in cls.model_fields.items() if name != "kind"}
        required = [field.is_required() for field in fields.values()]
        plain = required.index(False) if False in required else len(required)
        by_name = any(required[plain:])
        cls.__signature__ = inspect.Signature(
            [
                inspect.Parameter(
                    name,
                    inspect.Parameter.KEYWORD_ONLY
                    if by_name and i >= plain
                    else inspect.Parameter.POSITIONAL_OR_KEYWORD,
                    default=inspect.Parameter.empty
                    if field.is_required()
                    else field.get_default(call_default_factory=True),
                )
                for i, (name, field) in enumerate(fields.items())
            ]
        )

    @classmethod
    def from_table(cls, table: dict[str, Any]) -> Self:
        """Build from a table of a mission file or from parsed JSON.

        Raises
        ------
        InputError
            One sentence that names the key, the value and what is accepted.
        """
        try:
            return cls.model_validate(table)
        except ValidationError as error:
            raise explain(error, cls) from None

    def to_json(self) -> str:
        """The declaration as JSON; `from_json` gives an equal one back."""
        return self.model_dump_json(exclude_none=True)

    @classmethod
    def from_json(cls, text: str) -> Self:
        """The declaration that `to_json` wrote."""
        try:
            return cls.model_validate_json(text)
        except ValidationError as error:
            raise explain(error, cls) from None

    def _repr_html_(self) -> str:
        shown = [(name, str(value)) for name, value in self if name not in self._hidden and value is not None]
        return table(shown, title=type(self).__name__)


def utc_instant(value: object, field: str = "epoch") -> datetime:
    """`value` as a UTC `datetime`, rounded to the microsecond.

    Accepts an ISO 8601 string with a time zone, a time-zone-aware `datetime`, or a
    `numpy.datetime64` (which this package always reads as UTC).

    Raises
    ------
    InputError
        If it is not a date and time, or carries no time zone.
    """
    accepted = "a date and time with its time zone, e.g. '2031-03-20T06:00:00Z'"
    instant: object = value
    if isinstance(value, np.datetime64):
        if np.isnat(value):
            raise InputError(field, value, accepted)
        microseconds = (value.astype("datetime64[ns]").astype(np.int64) + 500) // 1000
        return datetime.fromtimestamp(0, UTC) + np.timedelta64(int(microseconds), "us").item()
    if isinstance(value, str):
        try:
            instant = datetime.fromisoformat(value)
        except ValueError:
            raise InputError(field, value, accepted) from None
    if not isinstance(instant, datetime):
        raise InputError(field, value, accepted)
    if instant.tzinfo is None:
        raise InputError(field, value, accepted, verb="it has no time zone and must be")
    return instant.astimezone(UTC)


Instant = Annotated[datetime, BeforeValidator(utc_instant)]
"""A field that holds a moment in UTC."""


def _as_tuple(value: object) -> object:
    """Lists, as TOML and JSON give them, and arrays become the tuples that a frozen model keeps."""
    if isinstance(value, np.ndarray):
        return tuple(value.tolist())
    return tuple(value) if isinstance(value, list) else value


Listed = BeforeValidator(_as_tuple)
"""Marks a tuple field that also takes a list or an array: ``Annotated[tuple[Face, ...], Listed]``."""

Vector3 = Annotated[tuple[float, float, float], Listed]
"""A field that holds three components."""


def explain(error: ValidationError, model: type[BaseModel]) -> InputError:
    """The most useful of pydantic's complaints, as one sentence about the user's own field."""
    details = sorted(error.errors(include_url=False), key=_rank)
    return _sentence(details[0], model)


# A misspelt key also shows up as a missing one: the misspelling is the thing to mend.
_FIRST = {"extra_forbidden": 0, "union_tag_invalid": 1, "union_tag_not_found": 1, "missing": 3}


def _rank(detail: ErrorDetails) -> int:
    return _FIRST.get(detail["type"], 2)


def _sentence(detail: ErrorDetails, model: type[BaseModel]) -> InputError:
    kind, context = detail["type"], detail.get("ctx", {})
    cause = context.get("error")
    path = list(_readable(detail["loc"], model))
    field = ".".join(path) or "input"
    if isinstance(cause, InputError):
        if path and path[-1] != cause.field and not cause.field.startswith(path[-1] + "."):
            return cause.inside(field) if _contains(path, model) else _renamed(cause, path)
        return cause.inside(".".join(path[:-1])) if len(path) > 1 else cause
    value = detail["input"]
    if kind == "extra_forbidden":
        owner = _model_at(path[:-1], model)
        known = [name for name in owner.model_fields if name != "kind"] if owner else []
        hint = did_you_mean(path[-1], known)
        return InputError(field, value, f"one of: {', '.join(known)}{hint}", verb="the name is unknown; it must be")
    if kind == "missing":
        return InputError(field, MISSING, "given")
    if kind in ("union_tag_invalid", "union_tag_not_found"):
        tag = context.get("discriminator", "'kind'").strip("'")
        known = context.get("expected_tags", "")
        given = value.get(tag, MISSING) if isinstance(value, dict) else value
        names = [tag_name.strip(" '") for tag_name in known.split(",")] if known else _tags(path, model)
        return InputError(f"{field}.{tag}", given, f"one of: {', '.join(names)}{did_you_mean(str(given), names)}")
    if kind == "literal_error":
        hint = did_you_mean(
            str(value), [word.strip(" '") for word in str(context["expected"]).replace(" or ", ",").split(",")]
        )
        return InputError(field, value, f"{context['expected']}{hint}")
    if kind in _LIMITS:
        return InputError(field, value, _range(path, model) or _limit(kind, context))
    return InputError(field, value, _accepted(kind, context, detail["msg"]))


_LIMITS = {
    "greater_than": ("above", "gt"),
    "greater_than_equal": ("at least", "ge"),
    "less_than": ("below", "lt"),
    "less_than_equal": ("at most", "le"),
}


def _limit(kind: str, context: dict[str, Any]) -> str:
    word, key = _LIMITS[kind]
    return f"{word} {context[key]:g}"


def _range(path: list[str], model: type[BaseModel]) -> str:
    """All limits of a field together: the user wants the range, not the edge that was crossed."""
    owner = _model_at(path[:-1], model)
    info = owner.model_fields.get(path[-1]) if owner else None
    marks = info.metadata if info else ()
    found = [
        f"{word} {getattr(mark, key):g}"
        for word, key in _LIMITS.values()
        for mark in marks
        if getattr(mark, key, None) is not None
    ]
    return " and ".join(found)


_PHRASES = {
    "float_type": "a number",
    "int_type": "a whole number",
    "int_from_float": "a whole number",
    "string_type": "a text in quotes",
    "bool_type": "true or false",
    "finite_number": "a finite number",
    "tuple_type": "a list",
    "dict_type": "a table",
    "model_type": "a table of fields",
    "model_attributes_type": "a table of fields",
}


def _accepted(kind: str, context: dict[str, Any], message: str) -> str:
    if kind in _PHRASES:
        return _PHRASES[kind]
    if kind in ("too_short", "too_long"):
        count = context.get("min_length", context.get("max_length"))
        return f"a list of {'at least' if kind == 'too_short' else 'at most'} {count}"
    return message[0].lower() + message[1:]


def _readable(location: tuple[int | str, ...], model: type[BaseModel]) -> Iterator[str]:
    """Drop the union tags that pydantic puts into a path: the user never typed them."""
    current: Any = model
    for part in location:
        if isinstance(part, int):
            yield str(part + 1)  # people count faces from one
            current = _item_type(current)
            continue
        if isinstance(current, type) and issubclass(current, BaseModel):
            yield part
            info = current.model_fields.get(part)
            current = info.annotation if info else None
            continue
        chosen = _member(current, part)
        if chosen is not None:
            current = chosen
        elif get_origin(_bare(current)) is dict:
            yield part
            current = get_args(_bare(current))[1]
        # Anything else is a name pydantic made up for a branch, e.g. "function-before[...]".


def _bare(annotation: Any) -> Any:
    while get_origin(annotation) is Annotated:
        annotation = get_args(annotation)[0]
    return annotation


def _members(annotation: Any) -> tuple[Any, ...]:
    bare = _bare(annotation)
    if get_origin(bare) in (Union, types.UnionType):
        return tuple(leaf for arg in get_args(bare) for leaf in _members(arg))
    return (bare,)


def _member(annotation: Any, tag: str) -> Any:
    for leaf in _members(annotation):
        if isinstance(leaf, type) and issubclass(leaf, BaseModel) and tag in (_tag_of(leaf), leaf.__name__):
            return leaf
    return None


def _tag_of(model: type[BaseModel]) -> str | None:
    info = model.model_fields.get("kind")
    return get_args(info.annotation)[0] if info and get_origin(info.annotation) is Literal else None


def _item_type(annotation: Any) -> Any:
    args = [arg for leaf in _members(annotation) for arg in get_args(leaf)]
    return args[0] if args else None


def _resolve(path: list[str], model: type[BaseModel]) -> Any:
    current: Any = model
    for part in path:
        models = [leaf for leaf in _members(current) if isinstance(leaf, type) and issubclass(leaf, BaseModel)]
        owner = next((leaf for leaf in models if part in leaf.model_fields), None)
        if owner is not None:
            current = owner.model_fields[part].annotation
        elif part.isdigit():
            current = _item_type(current)
        else:
            args = get_args(_bare(current))
            current = args[1] if len(args) == 2 else None
    return current


def _model_at(path: list[str], model: type[BaseModel]) -> type[BaseModel] | None:
    leaves = _members(_resolve(path, model))
    models = [leaf for leaf in leaves if isinstance(leaf, type) and issubclass(leaf, BaseModel)]
    return models[0] if models else None


def _contains(path: list[str], model: type[BaseModel]) -> bool:
    return _model_at(path, model) is not None


def _renamed(cause: InputError, path: list[str]) -> InputError:
    return InputError(".".join(path), cause.value, cause.accepted, verb=cause.verb)


def _tags(path: list[str], model: type[BaseModel]) -> list[str]:
    leaves = _members(_resolve(path, model))
    tags = [_tag_of(leaf) for leaf in leaves if isinstance(leaf, type) and issubclass(leaf, BaseModel)]
    return [tag for tag in tags if tag]
