"""Words for messages."""

from __future__ import annotations


class Told(str):
    """What came, in words rather than as a value: a message shows it without quotes."""

    __slots__ = ()

    def __repr__(self) -> str:
        return str(self)


MISSING = Told("missing")
