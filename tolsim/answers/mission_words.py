"""The mission of a run in plain words, for terminal and report."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from tolsim.answers.mission import hottest
from tolsim.answers.wording import measured, percent, percents, shown

Summary = Mapping[str, Any]

MOST_CASES = 4
MOST_LIMITS = 2
MOST_PARTS = 3
LEAST_SHARE = 0.005  # of the hours, to be named among the cases
KILOWATT_HOUR = 3.6e6  # J
WHOLE_FROM = 100.0  # h; below, digits after the point count
NO_BREAK = "\u00a0"


def hours_words(hours: float) -> str:
    """Hours to three digits, in one piece where lines are broken: "32 100 h"."""
    rounded = float(f"{hours:.3g}")
    number = f"{rounded:,.0f}" if rounded >= WHOLE_FROM else f"{rounded:g}"
    return f"{number} h".replace(",", NO_BREAK).replace(" ", NO_BREAK)


def mission_sentences(summary: Summary, *, limits: bool = True) -> Iterator[str]:
    """What the mission means for the units, a sentence each; nothing if there is none.

    Parameters
    ----------
    summary : mapping
        As documented in `tolsim.answers.results`.
    limits : bool
        False leaves out the limits one by one, for a page that has a table of them.
    """
    mission = summary.get("mission")
    if not mission:
        return
    yield mission_head(mission)
    yield from _power(mission)
    yield in_order_words(mission)
    if limits:
        yield from _limits(mission)
    parts = hottest(mission["temperatures"])[:MOST_PARTS]
    if parts and parts[0]["equivalent_hours"]:
        told = "; ".join(
            f"{part['part']} {hours_words(part['equivalent_hours']['p50'])}"
            f" (p95 {hours_words(part['equivalent_hours']['p95'])})"
            for part in parts
        )
        reference = shown(mission["reference"], "degC")
        yield f"ages most, in hours at {reference} that do the same: {told}"
    elif parts:
        told = "; ".join(
            f"{part['part']} {shown(part['mean']['p50'], 'degC')}"
            f" (p95 {shown(part['mean']['p95'], 'degC')})"
            for part in parts
        )
        yield f"warmest over all hours, on average: {told}"


def _limits(mission: Mapping[str, Any]) -> Iterator[str]:
    """The limits that units are beyond for longest."""
    broken = [limit for limit in mission["limits"] if limit["units"]]
    broken.sort(key=lambda limit: -float(limit["of_life"]["mean"]))
    for limit in broken[:MOST_LIMITS]:
        who = "1 unit" if limit["units"] == 1 else f"{limit['units']} units, one of them"
        hours = hours_words(limit["of_life"]["most"] * mission["hours"])
        yield f"beyond a limit ({limit['rule']}): {who} for {hours}"
    if len(broken) > MOST_LIMITS:
        yield f"{len(broken) - MOST_LIMITS} more limits for fewer hours, in the report"


def mission_head(mission: Mapping[str, Any]) -> str:
    """How long it runs, and where it spends most of its hours."""
    cases = sorted(mission["cases"], key=lambda case: -float(case["share"]))
    told = ", ".join(
        f"{case['condition']} / {case['state']} {percent(case['share'], 0)}"
        for case in cases[:MOST_CASES]
        if case["share"] >= LEAST_SHARE
    )
    more = ", ..." if sum(case["share"] >= LEAST_SHARE for case in cases) > MOST_CASES else ""
    return f"{mission['years']:g} years, {hours_words(mission['hours'])} of running: {told}{more}"


def _power(mission: Mapping[str, Any]) -> Iterator[str]:
    entries = {entry["figure"]: entry for entry in mission["power"]}
    power, energy = entries.get("mean_input_power"), entries.get("energy_per_year")
    if power is None or energy is None or power["p50"] is None:
        return
    missing = power["missing"]
    told = f" ({missing} units that stop in some case are not counted)" if missing else ""
    yield (
        f"mean input power p50 {measured(power['p50'], 'W')}, p95 {measured(power['p95'], 'W')};"
        f" energy a year p50 {energy_words(energy['p50'])}, p95 {energy_words(energy['p95'])}"
        f"{told}"
    )


def energy_words(joule: float | None) -> str:
    """Energy in kilowatt hours."""
    return shown(None, "W") if joule is None else f"{joule / KILOWATT_HOUR:.3g}{NO_BREAK}kWh"


def in_order_words(mission: Mapping[str, Any]) -> str:
    """How many units are in order all their life, and how long the worst is not."""
    entry = mission["in_order"]
    text = (
        f"within every limit for every hour: {entry['units']} of {entry['of']} units"
        f" ({percent(entry['share'])}, interval {percents(entry['low'], entry['high'])})"
    )
    if entry["of_life"]["least"] < 1.0:
        text += f"; the worst unit for {hours_words(entry['of_life']['least'] * mission['hours'])}"
    return text
