"""Rows of the report's tables: texts, and positions of bars in percent of their track."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal

from tolsim.answers.wording import (
    DASH,
    GOOD,
    NO_START,
    between,
    bound_words,
    hardest,
    limits_words,
    list_of_units,
    measured,
    outcome_words,
    percent,
    percents,
    share_with_interval,
    shown,
)
from tolsim.spread.quantity_words import factor_words

Summary = Mapping[str, Any]
Level = Literal["fine", "near", "over"]

NEAR = 0.9  # of the limit: from here on the bar warns
TRACK = 1.15  # the track of a bar ends at this share of the rating, unless more is needed
TOP_FACTORS = 8
MINUS = "\u2212"


@dataclass(frozen=True)
class Bar:
    """A bar against a rating; all positions in percent of its track."""

    start: float  # p50
    end: float  # p99
    whisker_start: float  # interval of p99
    whisker_end: float
    nominal: float | None
    limit: float | None
    rating: float | None


@dataclass(frozen=True)
class StressRow:
    """One stress of one part in its worst case."""

    part: str
    title: str
    case: str
    rating: str
    limit: str
    rule: str
    nominal: str
    p50: str
    p95: str
    p95_interval: str
    p99: str
    p99_interval: str
    bound: str
    use: str
    level: Level
    level_words: str
    bar: Bar


def stress_rows(summary: Summary) -> list[StressRow]:
    """Every figure with a rating or an upper limit, worst case only, most used first."""
    return [_stress_row(use, entry) for use, entry in hardest(summary)]


def _stress_row(use: float, entry: Mapping[str, Any]) -> StressRow:
    unit = entry["unit_of_measure"]
    level: Level = "over" if use > 1.0 else "near" if use > NEAR else "fine"
    words = {"fine": "within", "near": "close", "over": "beyond"}[level]
    return StressRow(
        part=entry["part"],
        title=entry["title"],
        case=f"{entry['condition']}, {entry['state']}",
        rating=shown(entry["rating"], unit),
        limit=shown(entry["limit"], unit),
        rule=entry["rule"] or "",
        nominal=measured(entry["nominal"], unit),
        p50=measured(entry["p50"], unit),
        p95=measured(entry["p95"], unit),
        p95_interval=between(entry["interval"]["p95"], unit),
        p99=measured(entry["p99"], unit),
        p99_interval=between(entry["interval"]["p99"], unit),
        bound=measured(entry["bound_95"], unit),
        use=f"{100 * use:.0f} %",
        level=level,
        level_words=words,
        bar=_bar(entry),
    )


def _bar(entry: Mapping[str, Any]) -> Bar:
    rating = entry["rating"] or entry["limit"]
    low, high = entry["interval"]["p99"]
    low = entry["p99"] if low is None else low
    known = [entry["p99"], high or 0.0, entry["nominal"] or 0.0]
    full = max(TRACK * rating, 1.02 * max(known))

    def place(value: float | None) -> float | None:
        return None if value is None else round(min(max(100.0 * value / full, 0.0), 100.0), 2)

    return Bar(
        start=place(entry["p50"]) or 0.0,
        end=place(entry["p99"]) or 0.0,
        whisker_start=place(low) or 0.0,
        whisker_end=100.0 if high is None else place(high) or 0.0,
        nominal=place(entry["nominal"]),
        limit=place(entry["limit"]),
        rating=place(entry["rating"]),
    )


def stage_rows(summary: Summary) -> list[dict[str, str]]:
    """Figures of the whole stage in every case, as texts."""
    return [_stage_row(entry) for entry in summary["figures"] if not entry["part"]]


def limited_stage_rows(summary: Summary) -> list[dict[str, str]]:
    """Figures of the whole stage that have limits, in the case that comes nearest to one."""
    nearest: dict[str, tuple[float, Mapping[str, Any]]] = {}
    for entry in summary["figures"]:
        gaps = _gaps(entry)
        if entry["part"] or not gaps:
            continue
        gap = min(gaps)
        if entry["figure"] not in nearest or gap < nearest[entry["figure"]][0]:
            nearest[entry["figure"]] = (gap, entry)
    return [_stage_row(entry) for _, entry in nearest.values()]


def _gaps(entry: Mapping[str, Any]) -> list[float]:
    """Room between the 1 % or 99 % end of a figure and its limits, relative to the limit."""
    ends = ((entry["at_most"], entry["p99"], -1), (entry["at_least"], entry["p1"], 1))
    return [
        sign * (value - limit) / (abs(limit) or 1.0)
        for limit, value, sign in ends
        if limit is not None and value is not None
    ]


def _stage_row(entry: Mapping[str, Any]) -> dict[str, str]:
    unit = entry["unit_of_measure"]
    return {
        "title": entry["title"],
        "case": f"{entry['condition']}, {entry['state']}",
        "nominal": measured(entry["nominal"], unit),
        "p1": measured(entry["p1"], unit),
        "p50": measured(entry["p50"], unit),
        "p99": measured(entry["p99"], unit),
        "p1_interval": between(entry["interval"]["p1"], unit),
        "p99_interval": between(entry["interval"]["p99"], unit),
        "limits": limits_words(entry["at_least"], entry["at_most"], unit),
        "missing": str(entry["missing"]),
    }


def other_rows(summary: Summary) -> list[dict[str, str]]:
    """Figures of parts that have neither rating nor limit, in every case, as texts."""
    return [
        {
            "title": f"{entry['part']} {entry['title'].lower()}",
            "case": f"{entry['condition']}, {entry['state']}",
            "nominal": measured(entry["nominal"], entry["unit_of_measure"]),
            "p50": measured(entry["p50"], entry["unit_of_measure"]),
            "p99": measured(entry["p99"], entry["unit_of_measure"]),
            "p99_interval": between(entry["interval"]["p99"], entry["unit_of_measure"]),
        }
        for entry in summary["figures"]
        if entry["part"] and entry["limit"] is None and entry["rating"] is None
    ]


def limit_rows(summary: Summary) -> list[dict[str, Any]]:
    """One row per limit of the study: what it asks, how many units break it, and where."""
    rows = []
    for entry in summary["limits"]:
        parts = entry["by_part"]
        broken = [case for case in entry["by_case"] if case["units"]]
        rows.append(
            {
                "rule": entry["rule"],
                "figure": entry["title"],
                "bound": bound_words(entry),
                "units": entry["units"],
                "share": share_with_interval(entry),
                "where": "; ".join(
                    f"{case['condition']}, {case['state']}: {case['units']}" for case in broken
                ),
                "parts": ", ".join(f"{part['part']}: {part['units']}" for part in parts),
                "first": list_of_units(entry["first_units"], entry["units"]),
            }
        )
    return sorted(rows, key=lambda row: -row["units"])


def case_rows(summary: Summary) -> list[dict[str, Any]]:
    """Yield and outcomes of every condition and state."""
    rows = []
    for case in summary["cases"]:
        here = [
            entry
            for entry in summary["outcomes"]
            if (entry["condition"], entry["state"]) == (case["condition"], case["state"])
        ]
        here.sort(key=lambda entry: (entry["outcome"] not in GOOD, -entry["units"]))
        rows.append(
            {
                "condition": case["condition"],
                "state": case["state"],
                "yield": f"{percent(case['estimate'])} ({percents(case['low'], case['high'])})",
                "failed": case["failed"],
                "undecided": case["undecided"],
                "clean": all(entry["outcome"] in GOOD for entry in here) and not case["failed"],
                "outcomes": [
                    {
                        "name": entry["outcome"],
                        "good": entry["outcome"] in GOOD,
                        "units": entry["units"],
                        "share": share_with_interval(entry),
                        "first": list_of_units(entry["first_units"], entry["units"]),
                    }
                    for entry in here
                ],
            }
        )
    return rows


def start_sentences(summary: Summary, start_states: tuple[str, ...]) -> list[str]:
    """For every case in which units are switched on: how many start, and what the others do."""
    sentences = []
    for case in summary["cases"]:
        if case["state"] not in start_states:
            continue
        others = [
            entry
            for entry in summary["outcomes"]
            if (entry["condition"], entry["state"]) == (case["condition"], case["state"])
            and entry["outcome"] in NO_START
        ]
        units = case["units"]
        lost = sum(entry["units"] for entry in others)
        sentence = (
            f"{case['condition']}, {case['state']}: {units - lost} of {units} units start by "
            "themselves in time."
        )
        for entry in others:
            sentence += (
                f" {entry['units']} {outcome_words(entry)}: {share_with_interval(entry)}, "
                f"{'unit' if entry['units'] == 1 else 'units'} "
                f"{list_of_units(entry['first_units'], entry['units'])}."
            )
        sentences.append(sentence.replace("….", "…"))
    return sentences


def ranking_columns(summary: Summary) -> list[dict[str, Any]]:
    """One column per ranking target, with its leading factors as bars."""
    return [_ranking_column(entry) for entry in summary["ranking"]]


def _ranking_column(entry: Mapping[str, Any]) -> dict[str, Any]:
    factors = [] if entry["reason"] else entry["factors"]
    seen = [factor for factor in factors if factor["distinguishable"]]
    top = factors[: max(3, min(TOP_FACTORS, len(seen)))]
    rest = entry["remainder"]
    return {
        "title": entry["title"],
        "units": entry["units"],
        "missing": entry["missing"],
        "reason": entry["reason"],
        "factors": [
            {
                "name": factor_words(factor["factor"]),
                "seen": factor["distinguishable"],
                "share": percent(factor["share"], 0),
                "interval": percents_whole(factor["low"], factor["high"]),
                "correlation": _signed(factor["rank_correlation"]),
                "correlation_interval": (
                    f"{_signed(factor['rank_low'])} to {_signed(factor['rank_high'])}"
                ),
                "width": _clip(factor["share"]),
                "low": _clip(factor["low"]),
                "high": _clip(factor["high"]),
            }
            for factor in top
        ],
        "seen": len(seen),
        "not_seen": len(factors) - len(seen),
        "too_much": bool(seen) and rest["share"] < 0.0,
        "remainder": (
            ""
            if entry["reason"]
            else f"{percent(rest['share'], 0)} ({percents_whole(rest['low'], rest['high'])})"
        ),
    }


def percents_whole(low: float, high: float) -> str:
    """Interval of a variance share in whole percent, within 0 and 100 %."""
    return f"{_clip(low):.0f} to {_clip(high):.0f} %"


def _clip(share: float) -> float:
    return round(min(max(100.0 * share, 0.0), 100.0), 2)


def _signed(value: float | None) -> str:
    return DASH if value is None else f"{value:+.2f}".replace("-", MINUS)
