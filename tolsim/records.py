"""What all checked records share: they are frozen, and some keys belong together."""

from __future__ import annotations

from collections.abc import Collection, Iterator

from pydantic import BaseModel, ConfigDict

from tolsim.errors import Mistake


class Frozen(BaseModel):
    """Base of all checked records: immutable, no unknown keys."""

    model_config = ConfigDict(frozen=True, extra="forbid")


def exactly_one(given: Collection[str], one: str, other: str) -> Iterator[Mistake]:
    """Two ways of giving the same thing, of which one is needed."""
    yield from at_most_one(given, one, other)
    if one not in given and other not in given:
        yield Mistake(f"either {one} or {other}", "Give one of them.", key=one, got="neither")


def at_most_one(given: Collection[str], one: str, other: str) -> Iterator[Mistake]:
    """Two ways of giving the same thing, of which one may be used."""
    if one in given and other in given:
        yield Mistake(f"only one of {one} and {other}", "Drop one of them.", key=one, got="both")


def both_or_neither(given: Collection[str], one: str, other: str) -> Iterator[Mistake]:
    """Two keys that mean nothing without each other."""
    for key, missing in ((one, other), (other, one)):
        if key in given and missing not in given:
            yield Mistake(f"{missing} beside {key}", f"Give {missing} too.", key=missing)
