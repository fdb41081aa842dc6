"""The sentences of summary and report: shares, intervals and the verdict in plain words."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from tolsim.quantity import show

Summary = Mapping[str, Any]

DIGITS = 3
FARTHEST_DB = 60.0  # margins are not searched for beyond, see circuit.startup
MOST_DECIMALS = 6
NO_DISTANCE = 1e-3  # of an interval: an end nearer to 0 or to 1 than that is written as there
DASH = "\u2013"  # nothing to show
OPEN = "open"  # an end this many units cannot bound

GOOD = frozenset(("starts", "runs"))
NO_START = (
    "latched both on",
    "latched on",
    "dies away",
    "starts only with a kick",
    "wrong mode",
    "starts late",
    "undecided",
)


def shown(value: float | None, unit_of_measure: str) -> str:
    """Number with its unit of measure, three significant digits; a dash for nothing."""
    if value is None or not math.isfinite(value):
        return DASH
    if unit_of_measure == "dB" and abs(value) >= FARTHEST_DB:
        end = f"{math.copysign(FARTHEST_DB, value):.0f} dB"
        return f"{end} or more" if value > 0 else f"{end} or less"
    return show(value, unit_of_measure, DIGITS).replace("degC", "°C")


def measured(value: float | None, unit_of_measure: str) -> str:
    """As `shown`, with the zeros that tell its precision: "14.0 V"."""
    text = shown(value, unit_of_measure)
    number, blank, unit = text.partition(" ")
    digits = sum(letter.isdigit() for letter in number.lstrip("-0."))
    if not 0 < digits < DIGITS or "e" in number:
        return text
    point = "" if "." in number else "."
    return f"{number}{point}{'0' * (DIGITS - digits)}{blank}{unit}"


def between(ends: Sequence[float | None], unit_of_measure: str) -> str:
    """Interval of a figure: "79.1 to 81.3 V"; an end that is not known is "open"."""
    low, high = ends
    first = OPEN if low is None else measured(low, unit_of_measure)
    last = OPEN if high is None else measured(high, unit_of_measure)
    number, _, unit = first.partition(" ")
    if unit and last.endswith(f" {unit}"):
        first = number
    return f"{first} to {last}"


def decimals(share: float) -> int:
    """Decimals of a percentage that keep its distance from 0 and from 100 % visible."""
    above, below = 100.0 * abs(share), 100.0 * abs(1.0 - share)
    if min(above, below) < 10.0**-MOST_DECIMALS:
        return 1
    wanted = 1 - math.floor(math.log10(above)), -math.floor(math.log10(below))
    return min(max(1, *wanted), MOST_DECIMALS)


def percent(share: float | None, places: int | None = None) -> str:
    """Share as a percentage: "98.6 %", "99.97 %", "0 %"."""
    if share is None:
        return DASH
    text = f"{100.0 * share:.{decimals(share) if places is None else places}f}"
    return f"{text.removesuffix('.0')} %" if share in {0.0, 1.0} else f"{text} %"


def percents(low: float, high: float) -> str:
    """Interval of a share: "97.1 to 99.4 %"."""
    # an end that a part of a unit in lots has moved off 0 or 1 says no more than 0 or 1
    first = percent(low, 1 if 0.0 < low < NO_DISTANCE * high else None)
    last = percent(high, 1 if 0.0 < 1.0 - high < NO_DISTANCE * (1.0 - low) else None)
    return f"{first.removesuffix(' %')} to {last}"


def share_with_interval(entry: Mapping[str, Any]) -> str:
    """Share of an entry that has `units`, `share`, `low` and `high`; never a bare 0 %."""
    if not entry["units"]:
        return f"none seen (up to {percent(entry['high'])})"
    return f"{percent(entry['share'])} ({percents(entry['low'], entry['high'])})"


def list_of_units(numbers: list[int], count: int) -> str:
    """First unit numbers, and whether there are more: "17, 230, …"."""
    return ", ".join(str(number) for number in numbers) + (", …" if count > len(numbers) else "")


@dataclass(frozen=True)
class Failure:
    """One way in which units fail: its name, how many units, the first of them."""

    name: str
    units: int
    first_units: list[int]


def outcome_words(entry: Mapping[str, Any]) -> str:
    """Outcome as said of its units: "1 starts only with a kick", "3 start only with a kick"."""
    verb, _, rest = entry["outcome"].partition(" ")
    if verb == "does" and entry["units"] != 1:
        return f"do {rest}"
    if verb not in {"starts", "runs"} and entry["outcome"] != "dies away":
        return str(entry["outcome"])
    if entry["units"] != 1:
        verb = "die" if verb == "dies" else verb.removesuffix("s")
    return f"{verb} {rest}".rstrip()


def failures(summary: Summary) -> list[Failure]:
    """Every way units fail, most frequent first: limits, then outcomes that break none.

    One unit may appear in several.
    """
    found = []
    for entry in summary["limits"]:
        if entry["units"]:
            parts = [part["part"] for part in entry["by_part"]]
            where = f" ({', '.join(parts)})" if parts else ""
            name = f"{entry['title'][:1].lower()}{entry['title'][1:]} {bound_words(entry)}{where}"
            found.append(Failure(name, entry["units"], entry["first_units"]))
    for entry in summary["outcomes"]:
        rest = entry["no_limit_broken"]
        if rest["units"]:
            name = f"{entry['outcome']} ({entry['condition']}, {entry['state']})"
            found.append(Failure(name, rest["units"], rest["first_units"]))
    return sorted(found, key=lambda failure: -failure.units)


def bound_words(entry: Mapping[str, Any]) -> str:
    """What a limit asks of its figure: "at most 80 % of rating", "at least 3 dB"."""
    bound, unit = entry["bound"], entry["unit_of_measure"]
    if bound["share_of_rating"] is not None:
        return f"at most {100 * bound['share_of_rating']:.3g} % of rating"
    return limits_words(bound["at_least"], bound["at_most"], unit)


def limits_words(at_least: float | None, at_most: float | None, unit: str) -> str:
    """Limits of a figure in words; empty without any."""
    words = []
    if at_least is not None:
        words.append(f"at least {shown(at_least, unit)}")
    if at_most is not None:
        words.append(f"at most {shown(at_most, unit)}")
    return ", ".join(words)


def hardest(summary: Summary) -> list[tuple[float, Mapping[str, Any]]]:
    """Share of the limit (else the rating) used at p99, and its entry, most used first.

    One entry per part and figure: that of its worst condition and state.
    """
    worst: dict[tuple[str, str], tuple[float, Mapping[str, Any]]] = {}
    for entry in summary["figures"]:
        reference = entry["at_most"] or entry["rating"]
        if not entry["part"] or not reference or entry["p99"] is None:
            continue
        use = entry["p99"] / reference
        key = (entry["part"], entry["figure"])
        if key not in worst or use > worst[key][0]:
            worst[key] = (use, entry)
    return sorted(worst.values(), key=lambda pair: -pair[0])


def verdict_sentence(summary: Summary) -> str:
    """Say the verdict: how many units pass, how sure that is, and what fails most."""
    y = summary["yield"]
    verb = "passes" if y["passed"] == 1 else "pass"
    lots = f" in {summary['lots']['lots']} lots" if summary.get("lots") else ""
    sentence = (
        f"Of {y['units']} simulated units{lots}, {y['passed']} {verb} every limit in every state "
        f"and condition: yield {percent(y['estimate'])} ({confidence_words(summary)} "
        f"{percents(y['low'], y['high'])}). {y['undecided']} undecided."
    )
    found = failures(summary)
    if found:
        worst = found[0]
        first = worst.first_units[0]
        units = f"unit {first}" if worst.units == 1 else f"{worst.units} units, first {first}"
        sentence = f"{sentence} Most often failed: {worst.name}, in {units}."
    elif not y["failed"]:
        unseen = percent(1.0 - y["low"])
        sentence = f"{sentence} No failure was seen; up to {unseen} of units may still fail."
    bench = summary.get("prototype") or {}
    checked = [bench["sentence"]] if bench.get("measured") else []
    return " ".join([sentence, *checked, *doubts(summary)])


def doubts(summary: Summary) -> list[str]:
    """Warnings that belong beside the verdict: checks of the solution that did not agree."""
    found = []
    crosscheck = summary["quality"].get("crosscheck") or {}
    if crosscheck.get("warning"):
        worst = crosscheck["worst_judged"]
        found.append(
            f"Warning: two solvers differ by {percent(worst['difference'])} in {worst['figure']}"
            f" ({worst['condition']}, {worst['state']})."
        )
    again = summary["quality"].get("rechecked") or {}
    if again.get("agreed", 0) < again.get("units", 0):
        off = again.get("worst_difference")
        by = "" if off is None else f", by up to {percent(off)}"
        found.append(
            f"Warning: {again['units'] - again['agreed']} of {again['units']} units solved again"
            f" in the time domain came out differently{by}; more steps_per_cycle may cure it."
        )
    switched = summary.get("power_on") or {}
    if switched.get("warning"):
        found.append(
            f"Warning: {switched['sure_failed']} units that looked sure to start did not when"
            " switched on in time."
        )
    return found


def confidence_words(summary: Summary) -> str:
    """Name of the intervals: "95 % interval", "95 % interval over lots"."""
    over = " over lots" if summary.get("lots") else ""
    return f"{100 * summary['yield']['confidence']:.3g} % interval{over}"
