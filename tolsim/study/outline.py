"""A study as written, for checks that compare one table with another.

Such checks must work although some values could not be read, because every mistake of a
file is told at once.  So they look at this outline of raw tables, not at the records.
"""

from __future__ import annotations

from collections.abc import Collection, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from tolsim.errors import Problem, nearest_name
from tolsim.figure_names import RAIL
from tolsim.study.plain_words import written

Table = Mapping[str, Any]


@dataclass(frozen=True)
class Outline:
    """Raw tables of a study file, each known to be a table.

    Attributes
    ----------
    file : str
        File name for messages.
    driven : bool
        True if the study says kind = "driven".
    parts, rails, states, conditions : mapping of str to table
        By name.
    limits, rank : sequence
        Tables of limits, texts of rankings.
    kinds : mapping of str to str
        Kind of every part whose kind is known, "rail" for rails, "trim" for trims.
    tables : mapping of str to collection of str
        Kinds that each known spread table is for.
    trims : mapping of str to table
        By name.
    """

    file: str
    driven: bool
    parts: Mapping[str, Table]
    rails: Mapping[str, Table]
    states: Mapping[str, Table]
    conditions: Mapping[str, Table]
    limits: Sequence[Table]
    rank: Sequence[str]
    kinds: Mapping[str, str]
    tables: Mapping[str, Collection[str]]
    trims: Mapping[str, Table] = field(default_factory=dict)

    def problem(self, table: str, key: str, got: str, expected: str, cure: str = "") -> Problem:
        """A mistake of this file."""
        return Problem(self.file, table, key, got, expected, "", cure)

    def unknown(
        self, table: str, key: str, name: object, what: str, valid: Sequence[str], cure: str = ""
    ) -> Problem:
        """A name that is not among `valid`: tell the nearest, or all if none is near."""
        near = nearest_name(str(name), valid)
        if not (near or cure):
            cure = f"Known here: {', '.join(valid)}." if valid else "None is known here."
        return Problem(self.file, table, key, written(name), what, near, cure)


def kinds_of(
    parts: Mapping[str, Table], rails: Mapping[str, Table], known: Collection[str]
) -> dict[str, str]:
    """Kind of every part whose kind is known, and "rail" for rails."""
    written_kinds = {ref: part.get("kind") for ref, part in parts.items()}
    kinds = {ref: k for ref, k in written_kinds.items() if isinstance(k, str) and k in known}
    return kinds | dict.fromkeys(rails, RAIL)


def texts(table: Table, key: str) -> list[str]:
    """The texts in list `key` of a table; whatever else stands there is told elsewhere."""
    value = table.get(key, [])
    return [item for item in value if isinstance(item, str)] if isinstance(value, list) else []


def named_tables(raw: Table) -> set[str]:
    """Names of all spread tables a study names, right or wrong, at any place for one."""
    names: set[str] = set()

    def section(name: str) -> list[Table]:
        found = raw.get(name)
        tables = found.values() if isinstance(found, Mapping) else ()
        return [table for table in tables if isinstance(table, Mapping)]

    for owner in (*section("parts"), *section("rails")):
        names |= {owner["spread"]} if isinstance(owner.get("spread"), str) else set()
    for state in section("states"):
        spread = state.get("spread")
        given = spread.values() if isinstance(spread, Mapping) else ()
        names |= {name for name in given if isinstance(name, str)}
    return names


def every_text(value: object) -> set[str]:
    """Every text that stands as a value anywhere in a study, so whatever it could name."""
    if isinstance(value, str):
        return {value}
    inside = value.values() if isinstance(value, Mapping) else value
    if not isinstance(inside, Iterable):
        return set()
    return set().union(*(every_text(item) for item in inside))
