"""The one error type for wrong input, and the one warning family.

Every message is one sentence: which field, what value came, what is accepted.
"""

from __future__ import annotations

from collections.abc import Iterable
from difflib import get_close_matches


class Told(str):
    """What came, in words rather than as a value: a message shows it without quotes."""

    __slots__ = ()

    def __repr__(self) -> str:
        return str(self)


MISSING = Told("missing")


class InputError(ValueError):
    """A value the user gave cannot be used.

    Parameters
    ----------
    field : str
        Name of the field as the user typed it, e.g. ``"altitude_km"``; a dotted path inside a
        mission file, e.g. ``"orbit.altitude_km"``.
    value : object
        What came.
    accepted : str
        What would be accepted, phrased to follow "must be", e.g. ``"above 0 and at most 1"``.
    verb : str
        The words before `accepted`.
    """

    def __init__(self, field: str, value: object, accepted: str, *, verb: str = "it must be") -> None:
        self.field = field
        self.value = value
        self.accepted = accepted
        self.verb = verb
        super().__init__(f"{field} is {shown(value)}, but {verb} {accepted}")

    def __reduce__(self) -> tuple[object, ...]:
        # Exceptions with extra arguments do not survive the trip between processes by themselves.
        return (_rebuild, (self.field, self.value, self.accepted, self.verb))

    def inside(self, prefix: str) -> InputError:
        """The same complaint, seen from the definition that contains this one."""
        return InputError(f"{prefix}.{self.field}", self.value, self.accepted, verb=self.verb)


class EnvfluxWarning(UserWarning):
    """The result stands, but the user should know something about it."""


class CoarseStepWarning(EnvfluxWarning):
    """The time step is so long that orbit means lose accuracy."""


class OmittedTermWarning(EnvfluxWarning):
    """A heat source outside the model is not small here."""


def shown(value: object, limit: int = 60) -> str:
    """`value` as it is quoted in a message: on one line, and short."""
    text = " ".join((repr(value) if isinstance(value, str) else str(value)).split())
    return text if len(text) <= limit else text[: limit - 1] + "…"


def did_you_mean(word: str, known: Iterable[str]) -> str:
    """A hint such as ``" (did you mean 'albedo'?)"``, or an empty string."""
    close = get_close_matches(word.lower(), {name.lower(): name for name in known}, n=1, cutoff=0.6)
    by_lower = {name.lower(): name for name in known}
    return f" (did you mean '{by_lower[close[0]]}'?)" if close else ""


def _rebuild(field: str, value: object, accepted: str, verb: str) -> InputError:
    return InputError(field, value, accepted, verb=verb)
