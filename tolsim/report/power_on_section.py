"""The power-on of a run as the report shows it: texts, and widths of bars in percent."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from tolsim.answers.power_on_words import fate_words, latch_words, power_on_head, warning_words
from tolsim.answers.wording import between, shown

Summary = Mapping[str, Any]

CLASSES = {"starts": "good", "undecided": "open"}  # colours of the bars; all others are failures


def power_on_section(summary: Summary) -> dict[str, Any]:
    """Content of the section; empty if no unit was switched on in time."""
    entry = summary.get("power_on")
    if not entry:
        return {}
    return {
        "head": power_on_head(entry),
        "warning": warning_words(entry) if entry["warning"] else "",
        "latch": list(latch_words(entry["latched"])) if entry["latched"] else [],
        "cases": [_case(case) for case in entry["cases"]],
    }


def _case(case: Mapping[str, Any]) -> dict[str, Any]:
    """One row: a bar of the fates, and the time to full swing."""
    fates = sorted(case["fates"], key=lambda fate: (fate["fate"] != "starts", -fate["units"]))
    time = case["time"]
    return {
        "name": f"{case['condition']}, {case['state']}",
        "units": case["units"],
        "in_doubt": case["in_doubt"],
        "bars": [
            {
                "kind": CLASSES.get(fate["fate"], "bad"),
                "width": round(100.0 * fate["units"] / case["units"], 2),
            }
            for fate in fates
        ],
        "words": "; ".join(fate_words(fate) for fate in fates),
        "median": shown(time["p50"], "s") if time else "",
        "range": between([time["p5"], time["p95"]], "s") if time else "",
    }
