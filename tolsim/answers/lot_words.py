"""Results by lot in plain words, for terminal and report."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from tolsim.answers.wording import percent, percents

Summary = Mapping[str, Any]

MOST_WORST = 4


def lot_sentences(summary: Summary) -> Iterator[str]:
    """What is known by lot, a sentence each; nothing if the study has no lots."""
    lots = summary.get("lots")
    if not lots:
        return
    yield lots_built(lots)
    seen, lost = lots["with_failure"], lots["lost"]
    yield f"lots with a failing unit: {_counted(seen)}"
    if lots["lost_when"] * lots["units_per_lot"] > 1.0:
        when = f"{100 * lots['lost_when']:.3g} %"
        yield f"lots lost ({when} or more of their units fail): {_counted(lost)}"
    if lots["worst"]:
        worst = ", ".join(
            f"lot {entry['lot']} ({entry['failed']} of {entry['units']})"
            for entry in lots["worst"][:MOST_WORST]
        )
        more = ", ..." if len(lots["worst"]) > MOST_WORST else ""
        yield f"most failures: {worst}{more}"
    yield from _batch(lots)
    yield from _between(summary)


def lot_tables(summary: Summary) -> dict[str, Any]:
    """Rows of the chances in one batch, and how many lots have how many failures."""
    lots = summary.get("lots")
    if not lots:
        return {"batches": [], "lot_failures": ""}
    return {
        "batches": [
            {
                "boards": entry["boards"],
                "chance": f"{percent(entry['share'])} ({percents(entry['low'], entry['high'])})",
                "independent": percent(entry["independent"]),
            }
            for entry in lots["batches"]
        ],
        "lot_failures": ", ".join(
            f"{entry['failed'] or 'none'} in {entry['lots']} lot{'s' * (entry['lots'] != 1)}"
            for entry in lots["failures"]
        ),
    }


def lots_built(lots: Mapping[str, Any]) -> str:
    """How units share what they are built from."""
    text = f"{lots['lots']} lots of {lots['units_per_lot']} units, each from reels of its own"
    if lots["reels"]:
        lasting = ", ".join(f"{name} for {count}" for name, count in lots["reels"].items())
        text += f"; reels that last several lots: {lasting}"
    return text


def _counted(entry: Mapping[str, Any]) -> str:
    share = f"{percent(entry['share'])}, " if entry["lots"] else ""
    ends = percents(entry["low"], entry["high"])
    return f"{entry['lots']} of {entry['of']} ({share}interval {ends})"


def _batch(lots: Mapping[str, Any]) -> Iterator[str]:
    """The largest batch that comes from one lot."""
    batch = lots["batches"][-1]
    yield (
        f"chance of a failing unit among {batch['boards']} of one lot: {percent(batch['share'])}"
        f" (interval {percents(batch['low'], batch['high'])});"
        f" were they of many lots: {percent(batch['independent'])}"
    )


def _between(summary: Summary) -> Iterator[str]:
    lots = summary["lots"]
    told = [
        f"{_title(entry)} {max(entry['share'], 0.0):.0%}"
        for entry in lots["between"]
        if entry["share"] is not None
    ]
    if told:
        yield f"share of the variance that lies between lots: {', '.join(told)}"
    y = summary["yield"]
    alone = lots["independent"]
    yield (
        f"the yield is known as well as from {y['worth']:.0f} units that share nothing; taken for"
        f" {y['units']} such units its interval would wrongly read"
        f" {percents(alone['low'], alone['high'])}"
    )


def _title(entry: Mapping[str, Any]) -> str:
    """Title within a sentence; one that begins with a part keeps its capital."""
    title = str(entry["title"])
    return title if "." in entry["target"] else title.lower()
