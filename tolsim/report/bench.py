"""Prototypes beside the units the model predicts, as rows of the report."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from tolsim.answers.prototype_words import precise
from tolsim.answers.wording import DASH, percent, shown
from tolsim.quantity import show
from tolsim.spread.entry import UNITS

Entry = Mapping[str, Any]

REACH = 4.0  # deviations of prediction and meter together shown on either side
SMALLEST = 1e-4  # smaller probabilities are written as bounds


def bench_section(summary: Mapping[str, Any]) -> dict[str, Any]:
    """Content of the model check: sentence on top, boards with their readings."""
    found = summary.get("prototype") or {}
    return {
        "measured": bool(found.get("measured")),
        "sentence": found.get("sentence", ""),
        "threshold": percent(found.get("threshold"), 0),
        "boards": [_board(board) for board in found.get("boards", [])],
    }


def _board(board: Entry) -> dict[str, Any]:
    return {
        "name": board["title"] or board["name"],
        "sentence": board["sentence"],
        "verdict": board["verdict"],
        "units": board["units"],
        "without": board["without"],
        "probes": "; ".join(_probe(probe) for probe in board["probes"]),
        "fixed": ", ".join(_fixed(*one) for one in board["fixed"].items()),
        "joint": _probability(board["joint_p"]),
        "distance": DASH if board["distance"] is None else f"{board['distance']:.2f}",
        "rows": [_row(reading) for reading in board["readings"]],
    }


def _fixed(address: str, value: float) -> str:
    """A measured part in words: "C3.capacitance 9.97 nF"."""
    return f"{address} {show(value, UNITS.get(address.rpartition('.')[2], '1'))}"


def _probe(probe: Entry) -> str:
    """A probe in words: "d1 to gnd, 12 pF, 10 Mohm"."""
    words = [f"{probe['net']} to {probe['to']}"]
    if probe["capacitance"]:
        words.append(show(probe["capacitance"], "F"))
    if probe["resistance"] is not None:
        words.append(show(probe["resistance"], "ohm"))
    return ", ".join(words)


def _probability(p: float | None) -> str:
    if p is None:
        return DASH
    return f"{p:.2g}" if p >= SMALLEST else f"below {SMALLEST:g}"


def _row(reading: Entry) -> dict[str, Any]:
    unit = reading["unit_of_measure"]
    width = "K" if unit == "degC" else unit
    bare = reading["bare_p50"]
    title = reading["title"]

    def say(value: float) -> str:
        return precise(value, reading["uncertainty"], unit)

    return {
        "title": f"{reading['part']} {title.lower()}" if reading["part"] else title,
        "case": f"{reading['condition']}, {reading['state']}",
        "value": f"{say(reading['value'])} ± {shown(reading['uncertainty'], width)}",
        "predicted": say(reading["p50"]),
        "band": f"{say(reading['p5'])} to {say(reading['p95'])}",
        "bare": say(bare) if bare is not None and bare != reading["p50"] else "",
        "percentile": percent(reading["percentile"], 1),
        "z": f"{reading['z']:+.1f}",
        "p": _probability(reading["p"]),
        "outside": reading["outside"],
        "bar": _bar(reading),
    }


def _bar(reading: Entry) -> dict[str, float]:
    """Places on an axis from -4 to +4 deviations about the predicted median."""
    scale = (reading["deviation"] ** 2 + (0.5 * reading["uncertainty"]) ** 2) ** 0.5

    def place(value: float) -> float:
        away = (value - reading["p50"]) / scale if scale > 0.0 else 0.0
        return round(50.0 + 50.0 / REACH * min(max(away, -REACH), REACH), 2)

    value, width = reading["value"], reading["uncertainty"]
    return {
        "p5": place(reading["p5"]),
        "p95": place(reading["p95"]),
        "value": place(value),
        "low": place(value - width),
        "high": place(value + width),
    }
