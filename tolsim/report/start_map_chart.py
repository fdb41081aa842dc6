"""Picture of a start map: one cell per pair of values, coloured by the share that starts."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import matplotlib as mpl
from markupsafe import Markup
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.figure import Figure
from matplotlib.patches import Rectangle

from tolsim.answers.start_words import axis_title, axis_value, commonest_failure, good
from tolsim.quantity import typeset
from tolsim.report.charts import BLUE, INK, RUST, WIDTH, chart_style, svg

ROW = 0.62  # inch
MOST_WORDS = 5  # columns beside which a failure is written out
DARK = 0.92  # share from which a cell is so dark that its text is white
BAR = 0.12  # of a cell's height
COLOURS = {  # told apart also without red and green; hatched besides
    "starts": (BLUE, ""),
    "latched": ("#b2441c", ""),
    "dies away": ("#e0b13a", ""),
    "bursts": ("#6b5ca5", ""),
    "other swing": ("#8a8f94", ""),
    "undecided": ("#ffffff", "////"),
    "not run": ("#ffffff", ""),
}
SHORT = {"dies away": "dies", "other swing": "other", "undecided": "open"}


def start_map_chart(entry: Mapping[str, Any]) -> Markup:
    """Cells with the share of units that start, the commonest failure and a bar of all outcomes.

    Parameters
    ----------
    entry : mapping
        Key `start_map` of the summary.
    """
    across, down = entry["across"], entry["down"]
    columns, rows = len(across["values"]), len(down["values"])
    shade = LinearSegmentedColormap.from_list("starts", [RUST, "#f3f0ea", BLUE])
    with chart_style():
        mpl.rcParams["axes.grid"] = False
        figure = Figure(figsize=(WIDTH, 0.9 + ROW * rows), layout="constrained")
        axes = figure.subplots()
        for cell in entry["cells"]:
            x, y = across["values"].index(cell["across"]), down["values"].index(cell["down"])
            share = good(cell)["share"]
            axes.add_patch(Rectangle((x, y), 1, 1, fc=shade(share), ec="white", lw=2))
            ink = "white" if share > DARK or share < 1.0 - DARK else INK
            failure = commonest_failure(cell)
            size = 11.5 if columns <= MOST_WORDS else 9.0
            said = f"{100 * share:.0f} %"
            if failure is not None and columns <= MOST_WORDS:
                word = SHORT.get(str(failure["outcome"]), str(failure["outcome"]))
                axes.text(x + 0.5, y + 0.62, word, ha="center", va="center", color=ink, size=9.5)
                axes.text(x + 0.5, y + 0.3, said, ha="center", va="center", color=ink, size=size)
            else:
                axes.text(x + 0.5, y + 0.45, said, ha="center", va="center", color=ink, size=size)
            _bar(axes, x, y, cell)
        axes.set_xlim(0, columns)
        axes.set_ylim(rows, 0)
        axes.set_xticks([k + 0.5 for k in range(columns)], _ticks(across))
        axes.set_yticks([k + 0.5 for k in range(rows)], _ticks(down))
        axes.tick_params(length=0, labelsize=10.5 if columns <= MOST_WORDS else 8.5)
        for side in axes.spines.values():
            side.set_visible(False)
        axes.set_xlabel(_capital(axis_title(across)))
        axes.set_ylabel(_capital(axis_title(down)))
        return svg(figure, "startmap", "Share of units that start in each cell")


def _bar(axes: Any, x: int, y: int, cell: Mapping[str, Any]) -> None:  # noqa: ANN401 - untyped
    """All outcomes of a cell as one stacked bar along its lower edge."""
    left = x + 0.06
    axes.add_patch(Rectangle((left, y + 0.82), 0.88, BAR, fc="white", ec="white", lw=1.5))
    for outcome in cell["outcomes"]:
        width = 0.88 * outcome["share"]
        colour, hatch = COLOURS[outcome["outcome"]]
        axes.add_patch(
            Rectangle((left, y + 0.82), width, BAR, fc=colour, ec="white", lw=0.4, hatch=hatch)
        )
        left += width


def _ticks(axis: Mapping[str, Any]) -> list[str]:
    return [typeset(axis_value(axis, value)) for value in axis["values"]]


def _capital(text: str) -> str:
    return text[:1].upper() + text[1:]
