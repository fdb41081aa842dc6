"""Limits and rankings must speak of figures, parts, states and ratings that exist."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any

from tolsim.errors import Mistake, Problem
from tolsim.figure_names import FIGURES, NAMES, FigureInfo, figures_of, targets
from tolsim.quantity import read
from tolsim.study.outline import Outline, Table, texts
from tolsim.study.plain_words import written

_BOUNDS = ("at_most", "at_least")


def unit_of(figure: object) -> str | None:
    """Unit of measure of a figure name; None if there is no such figure."""
    return next((info.unit_of_measure for info in FIGURES.values() if info.name == figure), None)


def with_numbers(
    limit: Table, outline: Outline, place: str
) -> tuple[dict[str, Any], list[Problem]]:
    """The table of a limit with its bounds as numbers, and what is wrong with the bounds."""
    read_limit, problems = dict(limit), []
    unit = unit_of(limit.get("figure"))
    for key in _BOUNDS:
        if key not in limit:
            continue
        try:
            read_limit[key] = bound(limit[key], unit)
        except Mistake as mistake:
            del read_limit[key]
            got = written(limit[key])
            problems.append(outline.problem(place, key, got, mistake.expected, mistake.cure))
    return read_limit, problems


def bound(value: object, unit: str | None) -> float:
    """Number of a bound: text with the figure's unit of measure, bare for pure numbers.

    Raises
    ------
    Mistake
        If it has no unit, or the unit of something else.  Of an unknown figure (`unit` is
        None) nothing can be said, and the bound is taken as 0.
    """
    if unit is None:
        return 0.0
    if isinstance(value, str):
        return read(value, unit)
    phrase = "a number" if unit == "1" else f"text with a unit of measure like {unit}"
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise Mistake(phrase)
    if unit != "1":
        raise Mistake(phrase, f'Write "{value} {unit}" if it is that.')
    return float(value)


def limit_problems(outline: Outline) -> Iterator[Problem]:
    """Every mistake in limits and in the list of rankings."""
    for number, limit in enumerate(outline.limits, 1):
        place = limit_place(number)
        yield from _bounds(outline, limit, place)
        yield from _names(outline, limit, place)
        figure = limit.get("figure")
        if not isinstance(figure, str):
            continue
        yield from _figure(outline, place, "figure", figure, texts(limit, "parts"))
        if "share_of_rating" in limit:
            yield from _ratings(outline, place, figure, texts(limit, "parts"))
    for item in outline.rank:
        ref, _, figure = item.rpartition(".")
        if ref and ref not in outline.kinds:
            yield _unknown_part(outline, "run", "rank", ref)
        elif not ref and unit_of(figure) is not None and not _stage_has(figure):
            example = next((ref for ref, _ in targets(figure, (), outline.kinds)), "REF")
            yield outline.problem(
                "run", "rank", f'"{item}"', "a part and its figure", f'Write "{example}.{figure}".'
            )
        else:
            yield from _figure(outline, "run", "rank", figure, [ref] if ref else [])


def limit_place(number: int) -> str:
    """How the table of a limit is called in messages, counted from 1."""
    return f"limits #{number}"


def _stage_has(figure: str) -> bool:
    return figure in FIGURES


def _bounds(outline: Outline, limit: Table, place: str) -> Iterator[Problem]:
    given = [key for key in (*_BOUNDS, "share_of_rating") if key in limit]
    if not given:
        expected = "at_most, at_least or share_of_rating"
        yield outline.problem(place, "at_most", "none of them", expected, "Give the bound.")
    elif len(given) > 1 and "share_of_rating" in given:
        got = " and ".join(given)
        yield outline.problem(place, given[0], got, "either a number or a share", "Drop one.")
    elif len(given) > 1:
        unit = unit_of(limit.get("figure"))
        try:
            low, high = bound(limit["at_least"], unit), bound(limit["at_most"], unit)
        except Mistake:
            return
        if unit is not None and low >= high:
            got = written(limit["at_least"])
            yield outline.problem(place, "at_least", got, "less than at_most", "Swap them.")


def _names(outline: Outline, limit: Table, place: str) -> Iterator[Problem]:
    """States, conditions and parts a limit names."""
    for key, word, valid in (
        ("states", "a state of this study", [*outline.states]),
        ("conditions", "a condition of this study", [*outline.conditions]),
    ):
        for name in texts(limit, key):
            if name not in valid:
                yield outline.unknown(place, key, name, word, valid)
    for ref in texts(limit, "parts"):
        if not any(ref in tables for tables in (outline.parts, outline.rails, outline.trims)):
            yield _unknown_part(outline, place, "parts", ref)


def _unknown_part(outline: Outline, place: str, key: str, ref: str) -> Problem:
    valid = [*outline.parts, *outline.rails, *outline.trims]
    return outline.unknown(place, key, ref, "a part or rail of this study", valid)


def _figure(
    outline: Outline, place: str, key: str, figure: str, refs: Sequence[str]
) -> Iterator[Problem]:
    """The figure exists, and the parts named have it."""
    if figure not in NAMES:
        cure = ""
        if "." in figure:
            cure = 'Name the part in parts = ["..."].'
        yield outline.unknown(place, key, figure, "a figure", NAMES, cure)
        return
    known = [ref for ref in refs if ref in outline.kinds]
    for ref in known:
        if not targets(figure, [ref], outline.kinds):
            kind = outline.kinds[ref]
            valid = [info.name for info in figures_of(kind)]
            yield outline.unknown(place, key, figure, f"a figure that {kind} {ref} has", valid)
    if not refs and not targets(figure, (), outline.kinds):
        yield outline.problem(place, key, f'"{figure}"', "a figure some part of this study has")


def _ratings(outline: Outline, place: str, figure: str, refs: Sequence[str]) -> Iterator[Problem]:
    """A share of a rating needs the rating, in every part the limit is meant for."""
    found: tuple[tuple[str, FigureInfo], ...] = targets(figure, refs, outline.kinds)
    if found and all(info.rating is None for _, info in found):
        yield outline.problem(
            place,
            "share_of_rating",
            f"a share for {figure}",
            "at_most or at_least, for no rating belongs to this figure",
        )
    for ref, info in found:
        rating = outline.parts.get(ref, {}).get("rating", {})
        if info.rating is not None and isinstance(rating, dict) and info.rating not in rating:
            yield outline.problem(
                f"parts.{ref}.rating",
                info.rating,
                "nothing",
                f"the rating that {place} compares {figure} with",
                "Add it, or name in the limit the parts it is meant for.",
            )
