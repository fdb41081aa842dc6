"""Picture of one power-on: envelopes of what swings and flows, beside other units."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Protocol

import matplotlib as mpl
import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from numpy.typing import NDArray

from tolsim.report.charts import BLUE, INK, MUTED, RUST, STYLE, scale_of

Floats = NDArray[np.float64]

PANEL = (4.2, 2.3)  # inch
COLUMNS = 3
FAINT = 0.3
COLOURS = (MUTED, RUST)  # of the units beside
SWINGS = 0.05  # of the wanted swing: less is no oscillation
LEAST = 1e-2  # V or A, least height of a panel
BEFORE = 0.25  # of the integrated time, shown of a slow ramp before it


class Way(Protocol):
    """What is drawn of a unit; see `figures.track.Track`."""

    @property
    def time(self) -> Floats:
        """Moments, s, (m,)."""

    @property
    def high(self) -> Mapping[str, Floats]:
        """Upper edges, (m,) each."""

    @property
    def low(self) -> Mapping[str, Floats]:
        """Lower edges, (m,) each."""

    @property
    def lead(self) -> str:
        """The state whose swing tells."""

    @property
    def swing(self) -> Floats:
        """Its swing, (m,)."""

    @property
    def wanted(self) -> float:
        """The swing of the orbit."""

    @property
    def integrated_from(self) -> float:
        """Before that the unit follows its bias points, s."""

    @property
    def thresholds(self) -> Mapping[str, float]:
        """Of every MOSFET, V."""

    @property
    def figures(self) -> Mapping[str, float]:
        """Figures of the power-on."""

    @property
    def all_on(self) -> int | None:
        """First window in which every gate stays above its threshold."""

    @property
    def currents(self) -> tuple[str, ...]:
        """The states that are currents."""


@dataclass(frozen=True)
class Beside:
    """A unit drawn for comparison."""

    title: str
    way: Way


@dataclass(frozen=True)
class Panel:
    """One quantity: its name in the tracks, and the words over its panel."""

    name: str  # empty for the swing
    title: str
    unit: str


def draw_tracks(
    title: str, way: Way, beside: Sequence[Beside], panels: Sequence[Panel], base: Path
) -> list[Path]:
    """Write `base`.png and `base`.svg: one panel per quantity.

    Parameters
    ----------
    way : Way
        The unit, drawn over the others in blue.
    panels : sequence of Panel
    base : Path
        Without extension.
    """
    rows = -(-len(panels) // COLUMNS)
    ways = [*(one.way for one in beside), way]
    first, last = _span(ways)
    scale, prefix = scale_of(last)
    with mpl.rc_context({**STYLE, "font.sans-serif": ["DejaVu Sans"]}):
        size = (PANEL[0] * COLUMNS, PANEL[1] * rows + 0.9)
        figure = Figure(figsize=size, layout="constrained")
        figure.suptitle(title, fontsize=14)
        grid = figure.subplots(rows, COLUMNS, squeeze=False, sharex=True).ravel()
        for axes, panel in zip(grid, panels, strict=False):
            for colour, one in zip(COLOURS, beside, strict=False):
                _band(axes, one.way, panel, scale, colour)
            _band(axes, way, panel, scale, BLUE)
            _marks(axes, way, panel, scale)
            low, high = axes.get_ylim()
            axes.set_ylim(min(low, 0.0), max(high, min(low, 0.0) + LEAST))
            axes.set_title(panel.title, fontsize=11)
            axes.set_ylabel(panel.unit)
            axes.set_xlim(first / scale, last / scale)
        for axes in grid[len(panels) :]:
            axes.set_visible(False)
        for axes in grid[max(len(panels) - COLUMNS, 0) : len(panels)]:
            axes.set_xlabel(f"Time after power-on ({prefix}s)")
            axes.tick_params(labelbottom=True)
        figure.legend(
            handles=_legend(way, beside),
            loc="outside lower center",
            ncols=3,
            fontsize=10,
            frameon=False,
        )
        paths = [base.with_name(f"{base.name}.{kind}") for kind in ("png", "svg")]
        figure.savefig(paths[0], dpi=110)
        figure.savefig(paths[1], metadata={"Date": None})
    return paths


def _span(ways: Sequence[Way]) -> tuple[float, float]:
    """What is shown of the time: a slow ramp only from shortly before all swing, if they do."""
    last = max(float(way.time[-1]) for way in ways)
    begin = min(way.integrated_from for way in ways)
    if not all(way.swing.max() > SWINGS * way.wanted for way in ways):
        return 0.0, last
    return max(begin - BEFORE * (last - begin), 0.0), last


def _band(axes: Axes, way: Way, panel: Panel, scale: float, colour: str) -> None:
    time = way.time / scale
    if not panel.name:
        axes.plot(time, way.swing, color=colour, lw=1.5)
        return
    if panel.name not in way.high:
        return
    high, low = way.high[panel.name], way.low[panel.name]
    axes.fill_between(time, low, high, color=colour, alpha=FAINT, lw=0)
    for edge in (low, high):
        axes.plot(time, edge, color=colour, lw=0.9)


def _marks(axes: Axes, way: Way, panel: Panel, scale: float) -> None:
    """Threshold of a gate, start, the moment all gates are on, and when a junction is too hot."""
    ref, _, end = panel.name.partition(":")
    if end == "gs" and ref in way.thresholds:
        axes.axhline(way.thresholds[ref], color=INK, lw=0.9, ls=":")
    start = way.figures.get("power_on_time", np.nan)
    if np.isfinite(start):
        axes.axvline(start / scale, color=BLUE, lw=1.0, ls="--")
    if way.all_on is not None:
        axes.axvline(way.time[way.all_on] / scale, color=INK, lw=1.0, ls="-.")
    damage = _damage(way)
    if damage <= way.time[-1]:
        axes.axvline(damage / scale, color=RUST, lw=1.4)


def _damage(way: Way) -> float:
    times = [v for name, v in way.figures.items() if name.endswith(".latch_damage_time")]
    known = [time for time in times if np.isfinite(time)]
    return min(known, default=np.inf)


def _legend(way: Way, beside: Sequence[Beside]) -> list[Line2D]:
    """What every line means, as far as it is in the picture."""
    lines = [Line2D([], [], color=BLUE, lw=2, label="this unit")]
    lines += [
        Line2D([], [], color=colour, lw=2, label=one.title)
        for colour, one in zip(COLOURS, beside, strict=False)
    ]
    lines.append(Line2D([], [], color=INK, lw=0.9, ls=":", label="threshold of the gate"))
    if np.isfinite(way.figures.get("power_on_time", np.nan)):
        lines.append(Line2D([], [], color=BLUE, ls="--", label="90 % of the swing"))
    if way.all_on is not None:
        lines.append(Line2D([], [], color=INK, ls="-.", label="every gate above threshold"))
    damage = _damage(way)
    if np.isfinite(damage):
        scale, prefix = scale_of(damage)
        shown = damage <= way.time[-1]
        later = "" if shown else ", later than shown"
        label = f"junction at its limit after {damage / scale:.3g} {prefix}s{later}"
        lines.append(Line2D([], [], color=RUST, lw=1.4, label=label))
    return lines
