"""Lots side by side, a strip of units each: what a pooled histogram would hide."""

from __future__ import annotations

import numpy as np
from markupsafe import Markup
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from tolsim.answers.wording import shown
from tolsim.report.charts import BAND, BLUE, INK, RUST, WIDTH, chart_style, scale_of, svg
from tolsim.report.content import FAIL, PASS, UNDECIDED
from tolsim.report.lots import LotStrips

LOTS_IN_A_ROW = 25
MOST_LOTS = 100
ROW_HEIGHT = 1.75  # inch
MARKS = (  # verdict, colour, marker, size; failing units drawn last, on top
    (PASS, BLUE, "o", 6.0),
    (UNDECIDED, INK, "s", 9.0),
    (FAIL, RUST, "X", 20.0),
)


def lot_chart(strips: LotStrips | None, verdicts: NDArray[np.int8]) -> Markup:
    """Strips of the lots, that of the worst unit first, failing units marked.

    Empty if no lot or no value is known.
    """
    if strips is None or not np.isfinite(strips.values).any():
        return Markup()
    order = _worst_first(strips)[:MOST_LOTS]
    rows = [order[k : k + LOTS_IN_A_ROW] for k in range(0, order.size, LOTS_IN_A_ROW)]
    plain = strips.unit_of_measure in ("dB", "degC")
    known = strips.values[np.isfinite(strips.values)]
    scale, prefix = (1.0, "") if plain else scale_of(float(np.abs(known).max()))
    with chart_style():
        size = (WIDTH, ROW_HEIGHT * len(rows) + 0.4)
        figure = Figure(figsize=size, layout="constrained")
        panels = np.atleast_1d(figure.subplots(len(rows), sharey=True))
        for axes, lots in zip(panels, rows, strict=True):
            _row(axes, lots, strips, verdicts, scale)
        unit = strips.unit_of_measure.replace("degC", "°C")
        figure.supylabel(f"{strips.title} ({prefix}{unit})", fontsize=11.5)
        panels[-1].set_xlabel("Lot, the one with the worst unit first")
        return svg(figure, "lots", f"{strips.title} of every unit, lot by lot")


def _worst_first(strips: LotStrips) -> NDArray[np.int64]:
    """Lot numbers in the order of their worst unit."""
    sign = -1.0 if strips.at_most is not None else 1.0
    finite = np.isfinite(strips.values)
    lots = np.unique(strips.lot[finite])
    worst = [(sign * strips.values[finite & (strips.lot == lot)]).min() for lot in lots]
    return lots[np.argsort(worst, kind="stable")]


def _row(
    axes: Axes,
    lots: NDArray[np.int64],
    strips: LotStrips,
    verdicts: NDArray[np.int8],
    scale: float,
) -> None:
    """One panel: a strip for each of some lots."""
    for place, lot in enumerate(lots.tolist()):
        here = (strips.lot == lot) & np.isfinite(strips.values)
        values = strips.values[here] / scale
        axes.plot([place, place], [values.min(), values.max()], color=BAND, lw=4.0, zorder=1)
        for verdict, colour, marker, size in MARKS:
            own = values[verdicts[here] == verdict]
            where = np.full(own.size, place)
            axes.scatter(where, own, s=size, c=colour, marker=marker, lw=0, zorder=2 + verdict)
    for limit in (strips.at_least, strips.at_most):
        if limit is not None:
            axes.axhline(limit / scale, color=RUST, lw=1.1, ls=(0, (4, 2)), zorder=0)
            axes.set_title(
                f"limit {shown(limit, strips.unit_of_measure)}",
                fontsize=9.5,
                color=RUST,
                loc="right",
            )
    axes.set_xticks(range(lots.size), [str(lot) for lot in lots], rotation=90, fontsize=8.5)
    axes.set_xlim(-0.7, max(lots.size, LOTS_IN_A_ROW // 2) - 0.3)
    axes.grid(visible=False, axis="x")
    axes.yaxis.set_major_locator(MaxNLocator(nbins=4))
