"""The mission of a run as the report shows it: texts, and widths of bars in percent."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from tolsim.answers.mission import hottest
from tolsim.answers.mission_words import hours_words, mission_sentences
from tolsim.answers.wording import list_of_units, percent, share_with_interval, shown

Summary = Mapping[str, Any]

MOST_PARTS = 8


def mission_section(summary: Summary) -> dict[str, Any]:
    """Content of the section; empty if the study states no mission."""
    mission = summary.get("mission")
    if not mission:
        return {}
    longest = max(case["share"] for case in mission["cases"])
    energy = mission["activation_energy"]
    return {
        "sentences": list(mission_sentences(summary, limits=False)),
        "cases": [
            {
                "name": f"{case['condition']}, {case['state']}",
                "hours": hours_words(case["hours"]),
                "share": percent(case["share"], 1),
                "width": round(100.0 * case["share"] / longest, 2),
            }
            for case in mission["cases"]
        ],
        "parts": _parts(mission),
        "reference": shown(mission["reference"], "degC") if mission["reference"] else "",
        "energy": shown(energy, "eV") if energy else "",
        "limits": [
            {
                "rule": limit["rule"],
                "units": limit["units"],
                "share": share_with_interval(limit),
                "mean": percent(limit["of_life"]["mean"]),
                "most": hours_words(limit["of_life"]["most"] * mission["hours"]),
                "first": list_of_units(limit["first_units"], limit["units"]),
            }
            for limit in mission["limits"]
            if limit["units"]
        ],
    }


def _parts(mission: Mapping[str, Any]) -> list[dict[str, Any]]:
    """The parts that age fastest, or run warmest, with bars from zero."""
    parts = hottest(mission["temperatures"])[:MOST_PARTS]
    if not parts:
        return []
    measures = [part["equivalent_hours"] or part["mean"] for part in parts]
    full = max(measure["p95"] for measure in measures)
    rows = []
    for part, measure in zip(parts, measures, strict=True):
        hot = part["equivalent_hours"] is not None
        mean = shown(part["mean"]["p50"], "degC")
        highest = shown(part["highest"]["p95"], "degC")
        missing = f"; {part['missing']} units without it" if part["missing"] else ""
        rows.append(
            {
                "name": f"{part['part']} {part['figure'].replace('_', ' ')}",
                "middle": hours_words(measure["p50"]) if hot else mean,
                "width": round(max(100.0 * measure["p50"] / full, 0.0), 2),
                "most_width": round(max(100.0 * measure["p95"] / full, 0.0), 2),
                "words": f"mean {mean}, hottest case {highest} (p95){missing}",
            }
        )
    return rows
