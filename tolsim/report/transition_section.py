"""Changes of load as the report shows them: fates by change, peaks against ratings, envelopes."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

import numpy as np
from markupsafe import Markup
from matplotlib.figure import Figure

from tolsim.answers.transition_words import (
    change_title,
    energies,
    followed_words,
    hardest_peaks,
)
from tolsim.answers.wording import list_of_units, measured, percent, share_with_interval, shown
from tolsim.report.charts import BLUE, INK, RUST, WIDTH, chart_style, scale_of, svg
from tolsim.report.ways import Way

Summary = Mapping[str, Any]

MOST_ROWS = 12
PANEL_HEIGHT = 2.6  # inch


def transition_section(summary: Summary, ways: Sequence[Way]) -> dict[str, Any]:
    """Content of the section; empty if the study states no change of load."""
    entry = summary.get("transitions")
    if not entry:
        return {}
    return {
        "followed": followed_words(entry),
        "changes": [
            {
                "title": change_title(change),
                "condition": change["condition"],
                "fate": fate["fate"],
                "units": f"{fate['units']} of {fate['of']}",
                "share": share_with_interval(fate),
                "first": ""
                if fate["fate"] == "arrives"
                else list_of_units(fate["first_units"], fate["units"]),
            }
            for change in entry["changes"]
            for fate in change["fates"]
        ],
        "peaks": [_row(peak) for peak in hardest_peaks(summary)[:MOST_ROWS]],
        "energies": [_row(peak) for peak in energies(summary)[:MOST_ROWS]],
        "charts": list(transition_charts(ways)),
    }


def _row(entry: Mapping[str, Any]) -> dict[str, str]:
    unit = entry["unit_of_measure"]
    rating = entry["rating"]
    return {
        "part": entry["part"],
        "title": entry["title"],
        "where": f"{entry['condition']}, {entry['state']}",
        "nominal": shown(entry["nominal"], unit),
        "p50": measured(entry["p50"], unit),
        "highest": measured(entry["highest"], unit),
        "rating": shown(rating, unit),
        "use": percent(entry["highest"] / rating, 0) if rating else "",
    }


def transition_charts(ways: Sequence[Way]) -> Iterator[dict[str, Any]]:
    """Highest and lowest value of every cycle, one picture per change and voltage."""
    panels = list(dict.fromkeys((way.change, way.quantity) for way in ways))
    for number, (change, quantity) in enumerate(panels):
        own = [way for way in ways if (way.change, way.quantity) == (change, quantity)]
        yield {"title": f"{quantity}, {change}", "svg": _chart(own, number)}


def _chart(ways: Sequence[Way], number: int) -> Markup:
    """One voltage in one change: envelopes of the nominal and of the worst unit."""
    with chart_style():
        figure = Figure(figsize=(WIDTH, PANEL_HEIGHT), layout="constrained")
        axes = figure.subplots()
        scale, prefix = scale_of(max(float(np.nanmax(way.time)) for way in ways))
        for way, colour in zip(ways, (INK, BLUE, RUST), strict=False):
            axes.plot(way.time / scale, way.high, color=colour, lw=1.2, label=way.unit)
            axes.plot(way.time / scale, way.low, color=colour, lw=1.2)
            if way.rating is not None:
                axes.axhline(way.rating, color=RUST, lw=1.0, ls=(0, (4, 2)), zorder=0)
        axes.set_ylabel("V")
        axes.set_xlabel(f"time after the change begins ({prefix}s)")
        axes.legend(fontsize=9, frameon=False, loc="center right")
        title = f"{ways[0].quantity} in the change {ways[0].change}"
        return svg(figure, f"change{number}", title)
