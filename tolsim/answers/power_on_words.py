"""The power-on of a run in plain words, for terminal and report."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from tolsim.answers.wording import between, list_of_units, shown

Summary = Mapping[str, Any]
Entry = Mapping[str, Any]

FATE_WORDS = {
    "starts": "start",
    "latched": "latch with the switches on",
    "dies": "stay at rest",
    "bursts": "burst",
    "other swing": "swing otherwise than their orbit",
    "undecided": "undecided",
}


def power_on_sentences(summary: Summary) -> Iterator[str]:
    """What switching on did, a sentence each; nothing if no unit was switched on in time."""
    entry = summary.get("power_on")
    if not entry:
        return
    yield power_on_head(entry)
    for case in entry["cases"]:
        yield case_words(case)
    if entry["warning"]:
        yield warning_words(entry)
    if entry["latched"]:
        yield from latch_words(entry["latched"])


def power_on_head(entry: Entry) -> str:
    """How many were switched on, and which."""
    every = round(1 / entry["share"])
    return (
        f"{entry['units']} of {entry['of_units']} units were switched on in time, from zero charge"
        f" up the real ramp: all whose start is in doubt, and one in {every} of the others."
    )


def case_words(case: Entry) -> str:
    """What became of them in one case."""
    ordered = sorted(case["fates"], key=lambda fate: -fate["units"])
    fates = ", ".join(fate_words(fate) for fate in ordered)
    text = (
        f"{case['condition']}, {case['state']}: of {case['units']} ({case['in_doubt']} in doubt)"
        f" {fates}."
    )
    time = case["time"]
    if time:
        text += f" Swing at 90 % after {shown(time['p50'], 's')}"
        text += f" (5 to 95 %: {between([time['p5'], time['p95']], 's')})."
    return text


def fate_words(fate: Entry) -> str:
    """How many units share a fate, and which if it is a bad one."""
    text = f"{fate['units']} {FATE_WORDS[fate['fate']]}"
    if fate["fate"] == "starts":
        return text
    return f"{text} (units {list_of_units(fate['first_units'], fate['units'])})"


def warning_words(entry: Entry) -> str:
    """Units that modes and orbit called sure, and that did not start."""
    return (
        f"{entry['sure_failed']} units that looked sure to start did not: modes and orbits alone"
        " cannot judge this stage. Set power_on_share = 1 under [run] to switch every unit on."
    )


def latch_words(latched: Entry) -> Iterator[str]:
    """Current and time of units that sit in DC conduction."""
    current, units = latched["current"], latched["units"]
    yield (
        f"{units} {'unit latches' if units == 1 else 'units latch'}"
        f" ({list_of_units(latched['first_units'], units)}):"
        f" {shown(current['median'], 'A')} from the supplies, at most"
        f" {shown(current['highest'], 'A')}."
    )
    shortest = latched["shortest_damage_time"]
    if shortest is None:
        yield "No junction of a latched unit reaches its limit, or no limit is stated."
        return
    text = f"The first junction is at its limit {shown(shortest, 's')} after the supply is up"
    if latched["trip_time"] is None:
        yield text + "; no rail states the trip_time of a fuse."
        return
    yield (
        f"{text}; the fuse or limiter opens after {shown(latched['trip_time'], 's')} and saves"
        f" {latched['saved_by_trip']} of {units}."
    )
