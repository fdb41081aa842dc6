"""Levels that units must reach for a change of load: each unit's own, or the study's number."""

from __future__ import annotations

from collections.abc import Iterator

from tolsim.design import Study
from tolsim.laws import Law
from tolsim.laws.reading import read_law
from tolsim.spread.table import Aspect
from tolsim.transition import Transition

KEYS = ("needs", "stays_while")


def need_factor(transition: Transition, key: str) -> str:
    """Name of the factor of a level: "dark to glow: needs"."""
    return f"{transition.title}: {key.replace('_', ' ')}"


def need_law(transition: Transition, key: str) -> Law | None:
    """Law of the relative deviation of a level; None if it has none."""
    need = getattr(transition, key)
    if need is None or need.spread is None:
        return None
    mistakes: list[Exception] = []
    law = read_law(need.spread, "1", mistakes.append, relative=True)
    if law is None:
        raise mistakes[0]
    return law


def need_factors(study: Study) -> Iterator[tuple[str, Law, str, str, Aspect, str]]:
    """Name, law, part, quantity, aspect and table of every level that is left to chance."""
    for transition in study.transitions:
        for key in KEYS:
            law = need_law(transition, key)
            if law is not None:
                part = getattr(transition, key).part
                yield need_factor(transition, key), law, part, key, "tolerance", ""
