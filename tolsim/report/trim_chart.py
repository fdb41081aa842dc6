"""Pictures of trims: where adjusters were left, and how far readings are off their target."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from markupsafe import Markup
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from tolsim.report.charts import (
    BLUE,
    HEIGHT,
    MUTED,
    RUST,
    WIDTH,
    chart_style,
    scale_of,
    svg,
)


def positions_chart(entry: Mapping[str, Any], number: int) -> Markup:
    """Histogram of where an adjuster was left, over its whole range; an entry of `trim`."""
    counts = np.array(entry["position_counts"])
    if not counts.any():
        return Markup()
    with chart_style():
        figure = Figure(figsize=(WIDTH, HEIGHT), layout="constrained")
        axes = figure.subplots()
        (low, high), unit = entry["range"], entry["unit_of_measure"]
        scale, prefix = (0.01, "%") if unit == "1" else scale_of(max(abs(low), abs(high)))
        edges = np.linspace(low, high, counts.size + 1) / scale
        axes.bar(edges[:-1], counts, np.diff(edges), align="edge", color=BLUE, ec="white")
        if entry["nominal"] is not None:
            axes.set_ylim(0, 1.25 * counts.max())
            middle = entry["nominal"] / scale
            axes.axvline(middle, color=MUTED, lw=1.2, ls=(0, (4, 2)))
            axes.annotate(
                "nominal unit",
                (middle, 1.2 * counts.max()),
                xytext=(4, 0),
                textcoords="offset points",
                color=MUTED,
                va="top",
                bbox={"fc": "white", "ec": "none", "pad": 0.6},
            )
        axes.set_xlim(edges[0], edges[-1])
        name = f"{entry['part']} {entry['quantity']}"
        axes.set_xlabel(f"{name} after trim, whole range ({prefix}{'' if unit == '1' else unit})")
        axes.set_ylabel("Units")
        axes.yaxis.set_major_locator(MaxNLocator(integer=True, nbins=5))
        return svg(figure, f"trim{number}", f"Histogram of {name} after trim")


def readings_chart(entry: Mapping[str, Any], number: int) -> Markup:
    """Reading against target: 99 % and 90 % of units untrimmed, set, and in every case."""
    rows = [("untrimmed", entry["before"]), ("set", entry["error"])]
    rows += [(f"{case['condition']}, {case['state']}", case) for case in entry["drift"]]
    rows = [(name, spread) for name, spread in rows if spread["p50"] is not None]
    if not rows:
        return Markup()
    with chart_style():
        figure = Figure(figsize=(WIDTH, 0.9 + 0.3 * len(rows)), layout="constrained")
        axes = figure.subplots()
        axes.axvline(0.0, color=RUST, lw=1.2, ls=(0, (4, 2)))
        for place, (_, spread) in enumerate(rows):
            colour = RUST if place == 0 else BLUE
            for ends, width in ((("low", "high"), 2.0), (("p5", "p95"), 7.0)):
                across = [100.0 * spread[end] for end in ends]
                axes.plot(across, [place, place], color=colour, lw=width, solid_capstyle="butt")
            axes.plot([100.0 * spread["p50"]], [place], "|", color="white", ms=9, mew=1.6)
        axes.set_yticks(range(len(rows)), [name for name, _ in rows])
        axes.set_ylim(len(rows) - 0.4, -0.6)
        figure.supxlabel("Off the target (%); thick 90 % of units, thin 99 %", fontsize="medium")
        axes.xaxis.set_major_locator(MaxNLocator(nbins=6))
        return svg(figure, f"drift{number}", f"{entry['reading_title']} against its target")
