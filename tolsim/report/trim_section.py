"""The trims of a run as the report shows them: texts and charts."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from tolsim.answers.trim_words import deviation, entry_sentences, heading, spread_words, width_words
from tolsim.answers.wording import DASH, percent, shown
from tolsim.report.trim_chart import positions_chart, readings_chart

Summary = Mapping[str, Any]
Entry = Mapping[str, Any]


def trim_section(summary: Summary) -> list[dict[str, Any]]:
    """Content of the section, one dict per trim; empty without trims."""
    return [
        {
            "heading": heading(entry),
            "sentences": list(entry_sentences(entry)),
            "positions": positions_chart(entry, number),
            "readings": readings_chart(entry, number),
            "rows": list(_rows(entry)),
            "strains": list(_strains(entry)),
            "target": shown(entry["target"], entry["reading_unit"]),
            "reading": entry["reading_title"],
        }
        for number, entry in enumerate(summary.get("trim") or ())
    ]


def _rows(entry: Entry) -> Iterator[dict[str, str]]:
    """Reading against target before, after, and in every case."""
    bench = f"{entry['condition']}, {entry['state']}"
    yield _row(f"{bench}, untrimmed", entry["before"])
    yield _row(f"{bench}, units that were set", entry["error"])
    for case in entry["drift"]:
        yield _row(f"{case['condition']}, {case['state']}", case)


def _row(name: str, spread: Mapping[str, Any]) -> dict[str, str]:
    return {
        "name": name,
        "middle": deviation(spread["p50"]),
        "inner": spread_words(spread),
        "width": width_words(spread["width"]),
    }


def _strains(entry: Entry) -> Iterator[dict[str, str]]:
    """Strains on the operator's way."""
    for strain in entry["strains"]:
        unit, rating = strain["unit_of_measure"], strain["rating"]
        yield {
            "name": f"{strain['part']} {strain['title'].lower()}",
            "rating": shown(rating, unit),
            "p50": shown(strain["p50"], unit),
            "p99": shown(strain["p99"], unit),
            "highest": shown(strain["highest"], unit),
            "use": percent(strain["p99"] / rating, 0) if rating else DASH,
        }
