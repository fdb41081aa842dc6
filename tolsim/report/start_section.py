"""Switching on as the report shows it: the start map, the supply contract, repeated starts."""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from tolsim.answers.start_words import (
    axis_title,
    axis_value,
    contract_sentences,
    map_sentences,
    repeat_sentences,
)
from tolsim.answers.unit_files import write_text
from tolsim.answers.wording import list_of_units, percent, percents, shown
from tolsim.report.start_map_chart import COLOURS, start_map_chart

Summary = Mapping[str, Any]


def start_section(summary: Summary) -> dict[str, Any]:
    """Content of the section; empty if nothing was asked about switching on."""
    found = {
        "contract": list(contract_sentences(summary)),
        "repeats": _repeats(summary),
        "map": _map(summary),
    }
    return found if any(found.values()) else {}


def write_starts(found: Summary, folder: Path) -> list[Path]:
    """Write what switching on was asked for, and the map as a picture, into a folder."""
    folder.mkdir(parents=True, exist_ok=True)
    answers = folder / "starts.json"
    write_text(answers, json.dumps(found, indent=1, allow_nan=False) + "\n")
    if not found.get("start_map"):
        return [answers]
    picture = folder / "start-map.svg"
    drawn = str(start_map_chart(found["start_map"]))
    write_text(picture, drawn.replace("<svg", '<svg xmlns="http://www.w3.org/2000/svg"', 1) + "\n")
    return [answers, picture]


def _map(summary: Summary) -> dict[str, Any]:
    entry = summary.get("start_map")
    if not entry:
        return {}
    seen = {one["outcome"] for cell in entry["cells"] for one in cell["outcomes"] if one["units"]}
    return {
        "sentences": list(map_sentences(summary)),
        "chart": start_map_chart(entry),
        "key": [
            {"name": name, "colour": colour, "hatched": bool(hatch)}
            for name, (colour, hatch) in COLOURS.items()
            if name in seen
        ],
        "across": axis_title(entry["across"]),
        "down": axis_title(entry["down"]),
        "rows": list(_cells(entry)),
    }


def _repeats(summary: Summary) -> dict[str, Any]:
    entry = summary.get("repeated_starts")
    if not entry:
        return {}
    return {
        "sentences": list(repeat_sentences(summary)),
        "tries": entry["tries"],
        "rows": [
            {
                "unit": row["unit"],
                "chosen": row["chosen"],
                "margin": shown(row["start_margin"], "dB"),
                "starts": row["starts"],
                "width": round(100.0 * row["share"], 2),
                "low": round(100.0 * row["low"], 2),
                "high": round(100.0 * row["high"], 2),
                "interval": percents(row["low"], row["high"]),
                "others": ", ".join(
                    f"{one['outcome']} {one['tries']}"
                    for one in row["outcomes"]
                    if one["outcome"] != "starts"
                ),
            }
            for row in entry["units"]
        ],
    }


def _cells(entry: Mapping[str, Any]) -> Iterator[dict[str, str]]:
    for cell in entry["cells"]:
        start, *others = cell["outcomes"]
        failing = entry["units"] - start["units"]
        yield {
            "across": axis_value(entry["across"], cell["across"]),
            "down": axis_value(entry["down"], cell["down"]),
            "starts": f"{percent(start['share'])} ({percents(start['low'], start['high'])})",
            "others": ", ".join(f"{one['outcome']} {one['units']}" for one in others),
            "first": list_of_units(cell["first_failing"][:6], failing),
            "time": shown(cell["start_time"], "s"),
        }
