"""Yields under other laws as rows of the report."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from tolsim.answers.wording import percent, percents

Entry = Mapping[str, Any]


def law_section(summary: Mapping[str, Any]) -> dict[str, Any]:
    """Content of the section on laws: sentence, rows for all tables at once and for families."""
    found = summary.get("law_check") or {}
    words = {other["law"]: other["words"] for other in found.get("alternatives", [])}
    entries = found.get("together", [])
    own = summary["yield"]
    ends = [*(entry["low"] for entry in entries), own["low"]]
    start = max(0.0, min(ends) - 0.02)
    return {
        "done": bool(found.get("done")),
        "reason": found.get("reason", ""),
        "sentence": found.get("sentence", ""),
        "counts": {key: found.get(key, 0) for key in ("laws", "guesses", "common_practice")},
        "own": {"low": _place(own["low"], start), "high": _place(own["high"], start)},
        "start": percent(start, 0),
        "together": [_row(entry, start) | {"words": words[entry["law"]]} for entry in entries],
        "families": [_family(family, start) for family in found.get("families", [])],
    }


def _place(share: float, start: float) -> float:
    """Where a share stands on the axis from `start` to 100 %, as percent of its length."""
    return round(100.0 * (share - start) / max(1.0 - start, 1e-9), 2)


def _row(entry: Entry, start: float) -> dict[str, Any]:
    bar = {key: max(_place(entry[key], start), 0.0) for key in ("estimate", "low", "high")}
    return {
        "law": entry["law"],
        "yield": f"{percent(entry['estimate'])} ({percents(entry['low'], entry['high'])})",
        "change": f"{100.0 * entry['change']:+.1f}",
        "how": _how(entry),
        "bar": bar,
    }


def _how(entry: Entry) -> str:
    """How the number came about."""
    words: list[str] = []
    if entry["method"].startswith("response"):
        words.append("all units moved along the fitted response")
    elif entry["method"].startswith("neighbours"):
        words.append("all units moved to where others show what happens")
    direct = entry["direct"]
    if direct:
        words.append(
            f"{direct['units']} units drawn anew, {direct['as_expected']} of them as expected"
        )
    if entry["method"] == "weights":
        words.append(f"all units weighted, worth {entry['effective_units']:.0f} plain ones")
    elif entry["effective_units"] is not None:
        words.append(f"weights would leave only {entry['effective_units']:.3g} units")
    return "; ".join(words)


def _family(family: Mapping[str, Any], start: float) -> dict[str, Any]:
    """A family with the law that moves the yield most."""
    worst = max(family["entries"], key=lambda entry: abs(entry["change"]))
    return _row(worst, start) | {
        "tables": ", ".join(family["tables"]),
        "parts": ", ".join(family["parts"]),
        "bases": ", ".join(family["bases"]),
        "guess": family["guesses"] > 0,
    }
