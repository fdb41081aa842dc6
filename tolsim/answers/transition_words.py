"""The changes of load of a run in plain words, for terminal and report."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from tolsim.answers.wording import list_of_units, measured, percent, percents, shown
from tolsim.figure_names import TRANSITION_FIGURES

Summary = Mapping[str, Any]
Entry = Mapping[str, Any]

LEAST_ENERGY = 1e-12  # J, below which nothing was taken
INNER = "transition_inner_gate_peak"
ENERGIES = ("avalanche_energy", "clamp_energy")
WORDS = {
    "arrives": "settle on their new orbit",
    "dies": "die away",
    "ends elsewhere": "end on another orbit",
    "undecided": "not settled in time",
    "does not ignite": "do not ignite",
    "falls back": "fall back",
    "not reached": "never get there",
}


def transition_sentences(summary: Summary) -> Iterator[str]:
    """What changes of load do, a sentence each; nothing if the study states none."""
    entry = summary.get("transitions")
    if not entry:
        return
    yield followed_words(entry)
    for number in sorted({change["number"] for change in entry["changes"]}):
        changes = [change for change in entry["changes"] if change["number"] == number]
        yield f"{change_title(changes[0])}: {_worst_fates(changes)}"
    told = {INNER}  # with the gate's pin, all but alike
    for peak in hardest_peaks(summary):
        if peak["figure"] not in told:
            told.add(peak["figure"])
            yield peak_words(peak)
    yield from energy_sentences(summary)


def followed_words(entry: Entry) -> str:
    """For how many units the numbers stand."""
    phases = "" if entry["phases"] == 1 else f", at {entry['phases']} moments of the cycle each"
    return f"integrated in time for {entry['units']} of {entry['of']} units{phases}"


def change_title(change: Entry) -> str:
    """What it is and how long it takes, "dark to glow, in 20 us"."""
    took = "at once" if not change["time"] else f"in {shown(change['time'], 's')}"
    return f"{change['from']} to {change['to']}, {took}"


def _worst_fates(changes: list[Any]) -> str:
    """Fates in the condition where fewest units arrive, one after the other."""

    def arrive(change: Entry) -> float:
        lost = [fate["share"] for fate in change["fates"] if fate["fate"] != "arrives"]
        return 1.0 - sum(lost)

    worst = min(changes, key=arrive)
    told = "; ".join(fate_words(fate) for fate in worst["fates"]) or "no unit was followed"
    return f"{told} ({worst['condition']})" if len(changes) > 1 else told


def fate_words(fate: Entry) -> str:
    """How many units, how sure that is, and the first of them."""
    told = f"{fate['units']} of {fate['of']} {WORDS[fate['fate']]}"
    if fate["fate"] == "arrives":
        return told
    units = list_of_units(fate["first_units"][:3], fate["units"])
    return f"{told} ({percents(fate['low'], fate['high'])}; unit {units})"


def hardest_peaks(summary: Summary) -> list[Entry]:
    """Peaks of changes that have a rating, each in its worst case, hardest first."""
    worst: dict[tuple[str, str], Entry] = {}
    for entry in summary["figures"]:
        if entry["figure"] not in TRANSITION_FIGURES or not entry["rating"]:
            continue
        key = entry["part"], entry["figure"]
        if key not in worst or entry["highest"] > worst[key]["highest"]:
            worst[key] = entry
    return sorted(worst.values(), key=lambda entry: -float(entry["highest"] / entry["rating"]))


def peak_words(entry: Entry) -> str:
    """One peak against its rating."""
    unit = entry["unit_of_measure"]
    return (
        f"{entry['part']} {entry['title'].lower()}: p50 {measured(entry['p50'], unit)},"
        f" highest {measured(entry['highest'], unit)}"
        f" ({percent(entry['highest'] / entry['rating'], 0)} of rating)"
        f" ({entry['condition']}, {entry['state']})"
    )


def energies(summary: Summary) -> list[Entry]:
    """Energies taken in a change, each in its worst case, largest first."""
    worst: dict[tuple[str, str], Entry] = {}
    for entry in summary["figures"]:
        if entry["figure"] in ENERGIES and entry["highest"] > LEAST_ENERGY:
            key = entry["part"], entry["figure"]
            if key not in worst or entry["highest"] > worst[key]["highest"]:
                worst[key] = entry
    return sorted(worst.values(), key=lambda entry: -float(entry["highest"]))


def energy_sentences(summary: Summary) -> Iterator[str]:
    """What breakdown and clamps take; the hardest of each kind."""
    for figure in ENERGIES:
        own = [entry for entry in energies(summary) if entry["figure"] == figure]
        for entry in own[:1]:
            highest, middle = (measured(entry[key], "J") for key in ("highest", "p50"))
            yield (
                f"{entry['part']} {entry['title'].lower()}: p50 {middle}, highest {highest}"
                f" ({entry['condition']}, {entry['state']})"
            )
