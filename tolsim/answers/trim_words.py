"""The trims of a run in plain words, for terminal and report."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from typing import Any

from tolsim.answers.trims import place_words
from tolsim.answers.wording import list_of_units, percent, percents, shown

Summary = Mapping[str, Any]
Entry = Mapping[str, Any]

ENDINGS = (
    ("exhausted", "at an end of the range"),
    ("too_coarse", "between two steps too coarse"),
    ("no_reading", "where the meter showed nothing further on"),
    ("unsettled", "when the operator gave up"),
)
FINEST = 0.01  # %, that deviations are told to


def width_words(share: float | None) -> str:
    """Width of a spread: "17 %", "670 %"."""
    return deviation(share).removeprefix("+")


def deviation(share: float | None) -> str:
    """Deviation from a target: "+2.1 %", "-12 %", "+580 %"."""
    if share is None:
        return "unknown"
    places = max(0, 1 - math.floor(math.log10(max(abs(100.0 * share), FINEST))))
    return f"{100.0 * share:+.{places}f} %"


def spread_words(spread: Mapping[str, Any]) -> str:
    """Where 99 % of the units lie: "-2.1 % to +3 %"."""
    return f"{deviation(spread['low'])} to {deviation(spread['high'])}"


def trim_sentences(summary: Summary) -> Iterator[str]:
    """What the operator did to the units, a few sentences per trim; nothing without trims."""
    for entry in summary.get("trim") or ():
        yield f"{heading(entry)}:"
        yield from entry_sentences(entry)


def entry_sentences(entry: Entry) -> Iterator[str]:
    """Sentences of one trim, under its heading."""
    yield _task(entry)
    yield from _not_set(entry)
    yield _before_and_after(entry)
    yield from _needs(entry)
    yield from _hardest(entry)


def heading(entry: Entry) -> str:
    """What is turned to what reading: "idle: P1 setting to an idle current of 500 mA"."""
    target = shown(entry["target"], entry["reading_unit"])
    return (
        f"{entry['trim']}: {entry['part']} {entry['quantity']} to {entry['reading_title']} {target}"
    )


def _task(entry: Entry) -> str:
    units, turns = sum(entry["endings"].values()), entry["turns"]
    within = shown(entry["within"], entry["reading_unit"])
    done = f"{entry['endings']['set']} of {units} units set within {within}"
    where = f"{entry['condition']}, {entry['state']}"
    if turns["p50"] is None:
        return f"{where}: {done}."
    middle = f"{turns['p50']:.0f}"
    noun = "turn" if middle == "1" else "turns"
    return f"{where}: {done}, in {middle} {noun}, one in twenty in {turns['p95']:.0f} or more."


def _not_set(entry: Entry) -> Iterator[str]:
    """Units that ended otherwise."""
    counts = [(entry["endings"][key], words) for key, words in ENDINGS if entry["endings"][key]]
    if not counts:
        high = percent(entry["exhausted_share"]["high"])
        yield f"No unit used up the range; up to {high} of them may."
        return
    told = ", ".join(f"{count} {words}" for count, words in counts)
    first = list_of_units(entry["first_not_set"], sum(count for count, _ in counts))
    share = entry["exhausted_share"]
    exhausted = ""
    if entry["endings"]["exhausted"]:
        ends = f"{percent(share['share'])}, {percents(share['low'], share['high'])}"
        low = entry["at_low_end"]
        exhausted = f" Range exhausted: {ends}; {low} at the low end."
    yield f"Not set: {told} (units {first}).{exhausted}"


def _before_and_after(entry: Entry) -> str:
    """Spread of the reading before, after, and elsewhere."""
    title = entry["reading_title"]
    text = (
        f"99 % of units, {title} against target: untrimmed {spread_words(entry['before'])},"
        f" set {spread_words(entry['error'])}"
    )
    elsewhere = [
        case
        for case in entry["drift"]
        if (case["condition"], case["state"]) != (entry["condition"], entry["state"])
    ]
    if elsewhere:
        worst = max(elsewhere, key=lambda case: float(case["width"]))
        text += (
            f"; elsewhere at most {spread_words(worst)} ({worst['condition']}, {worst['state']})"
        )
    return f"{text}."


def _needs(entry: Entry) -> Iterator[str]:
    """Range and resolution that the units ask for."""
    low, high = entry["needed_range"]
    unit = entry["unit_of_measure"]
    if low is None:
        return
    first, last = entry["range"]
    beyond = " (beyond the range extrapolated)" if low < first or high > last else ""
    ends = f"{place_words(low, unit)} to {place_words(high, unit)}"
    text = f"99 % of units need a range of {ends}{beyond}"
    if entry["needed_resolution"] is not None:
        most = place_words(entry["needed_resolution"], unit)
        text += f" and steps of at most {most} (here {place_words(entry['resolution'], unit)})"
    yield f"{text}."


def _hardest(entry: Entry) -> Iterator[str]:
    """The strain on the operator's way that comes nearest to its rating, else the largest heat."""
    rated = [strain for strain in entry["strains"] if strain["rating"]]
    if rated:
        worst = max(rated, key=lambda strain: float(strain["p99"] / strain["rating"]))
        use = f", {percent(worst['p99'] / worst['rating'], 0)} of its rating"
    elif entry["strains"]:
        worst, use = max(entry["strains"], key=lambda strain: float(strain["p99"])), ""
    else:
        return
    value = shown(worst["p99"], worst["unit_of_measure"])
    yield f"Hardest on the way: {worst['part']} {worst['title'].lower()}, p99 {value}{use}."
