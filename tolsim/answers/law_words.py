"""What the yields under other laws mean: does the verdict hang on them, what to measure next."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from typing import Any, Final

from tolsim.answers.wording import percent, percents
from tolsim.spread.alternatives import ALTERNATIVES, Alternative
from tolsim.stats.reweighting import Estimate

Entry = Mapping[str, Any]

FEWEST_PIECES = 10
DOUBTED: Final = ("guess", "common practice")
_UNCONFIRMED = ("response", "neighbours")  # expected of every unit, none drawn anew
_BY_NAME: Final[Mapping[str, Alternative]] = {other.name: other for other in ALTERNATIVES}


def conclusion(
    answer: Entry,
    own: Estimate,
    widths: Mapping[tuple[str, ...], float],
) -> dict[str, Any]:
    """Say whether the verdict depends on the laws, and name the guess to measure next.

    It depends ("yes") if under some law the yield lies outside the run's own interval while the
    interval under that law leaves the run's yield out; "perhaps" if only the first is so, or no
    unit was drawn anew to confirm it; "no" if every yield lies inside the run's own interval.

    Parameters
    ----------
    answer : mapping
        `together`, `families` and `meters` of `law_check`.
    own : Estimate
        Yield of the run.
    widths : mapping
        By tables of a family: largest sd of its laws in half widths of their bands.

    Returns
    -------
    dict
        `depends`, `next` and `sentence` of `law_check`.
    """
    entries = [*answer["together"], *(e for f in answer["families"] for e in f["entries"])]
    grades = {_grade(entry, own) for entry in entries}
    depends = "yes" if "yes" in grades else "perhaps" if "perhaps" in grades else "no"
    family = _next(answer["families"]) if depends != "no" else None
    named = None if family is None else _named(family, own, widths)
    sentence = " ".join((*_sentences(depends, entries, own, named), *_of_meters(answer["meters"])))
    return {"depends": depends, "next": named, "sentence": sentence}


def _grade(entry: Entry, own: Estimate) -> str:
    if own.low <= entry["estimate"] <= own.high:
        return "no"
    unsure = entry["low"] <= own.share <= entry["high"] or entry["method"] in _UNCONFIRMED
    return "perhaps" if unsure else "yes"


def _leading(entries: Sequence[Entry]) -> Entry | None:
    """The entry that moves the yield most."""
    moving = [entry for entry in entries if entry["change"]]
    return max(moving, key=lambda entry: abs(float(entry["change"])), default=None)


def _next(found: Sequence[Mapping[str, Any]]) -> Mapping[str, Any] | None:
    """Family that moves the yield most alone: a doubted one if any of them moves it at all."""
    moving = [family for family in found if _leading(family["entries"])]
    doubted = [family for family in moving if set(family["bases"]) & set(DOUBTED)]
    return next(iter(doubted or moving), None)  # they stand in this order already


def _named(
    family: Mapping[str, Any],
    own: Estimate,
    widths: Mapping[tuple[str, ...], float],
) -> dict[str, Any]:
    entry = _leading(family["entries"])
    assert entry is not None
    width = widths[tuple(family["tables"])]
    return {
        "tables": family["tables"],
        "parts": family["parts"],
        "law": entry["law"],
        "estimate": entry["estimate"],
        "change": entry["change"],
        "lots": family["lots"],
        "pieces": pieces(family["entries"], own, width),
    }


def pieces(entries: Sequence[Entry], own: Estimate, sd: float) -> int:
    """How many pieces to measure so that their mean no longer moves the verdict.

    With `sd` the standard deviation of the law in half widths of its band and W half of the
    width of the run's interval, a change of the yield by W is what matters.  If a shift of s
    half widths changes the yield by c, a shift of delta = s W / |c| matters, and the standard
    error of the mean, sd / sqrt(n), is that small from n = (sd / delta)^2 on.  So few pieces as
    would not show the form of the law are never named.
    """
    matters = 0.5 * (own.high - own.low)
    slope = max(
        (
            abs(float(entry["change"]) / _BY_NAME[entry["law"]].shift)
            for entry in entries
            if _BY_NAME[entry["law"]].shift
        ),
        default=0.0,
    )
    return max(math.ceil((sd * slope / matters) ** 2), FEWEST_PIECES)


def _sentences(
    depends: str, entries: Sequence[Entry], own: Estimate, named: Entry | None
) -> Iterator[str]:
    run = f"this run's interval, {percents(own.low, own.high)}"
    if depends == "no":
        low = min(float(entry["estimate"]) for entry in entries)
        high = max(float(entry["estimate"]) for entry in entries)
        yield (
            "The verdict does not depend on the law: with the same limits filled uniformly, as a"
            f" bell curve, shifted or sorted out the yield is {percents(low, high)}; {run}."
        )
    else:
        worst = _leading(entries)
        assert worst is not None
        who = "every table" if worst in entries[: len(ALTERNATIVES)] else "one table"
        verb = "depends" if depends == "yes" else "may depend"
        yield (
            f"The verdict {verb} on the law: with {who}"
            f" {worst['law']} ({_BY_NAME[worst['law']].words}), the yield would be"
            f" {percent(worst['estimate'])} ({percents(worst['low'], worst['high'])});"
            f" {run}."
        )
    if named is not None:
        tables, parts = ", ".join(named["tables"]), ", ".join(named["parts"])
        lots = ", from as many lots," if named["lots"] else ""
        yield (
            f"The guess worth measuring next: {tables} ({parts}). Alone, {named['law']}, it moves"
            f" the yield to {percent(named['estimate'])};"
            f" {named['pieces']} pieces{lots} would settle it."
        )


def _of_meters(meters: Sequence[Entry]) -> Iterator[str]:
    """What an unknown error of the meter, taken as it is most likely, leaves open."""
    for meter in meters:
        found = [float(entry["estimate"]) for entry in meter["entries"]]
        yield (
            f"Should the meter behind {', '.join(meter['tables'])} ({', '.join(meter['parts'])})"
            f" be off by all it may, the yield would be {percents(min(found), max(found))}."
        )
