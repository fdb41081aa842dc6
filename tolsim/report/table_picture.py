"""Picture of one spread table as SVG or PNG: new parts, and their change with heat and age."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping
from pathlib import Path
from typing import Protocol

import matplotlib as mpl
import numpy as np
import seaborn as sns
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from numpy.typing import NDArray

from tolsim.report.charts import BLUE, MUTED, RUST, STYLE

Floats = NDArray[np.float64]

SUFFIXES = (".svg", ".png")
ROW = 2.1  # inch


class Drawn(Protocol):
    """What is drawn in one row; see `spread.portrait.Portrait`."""

    @property
    def new(self) -> Floats:
        """Deviations of new parts, (m,)."""

    @property
    def unit(self) -> str:
        """Unit of measure of the deviations."""

    @property
    def drift(self) -> Mapping[str, tuple[float, float, float]]:
        """Where or when -> change in per cent: low, middle, high."""


def draw_table(title: str, rows: Mapping[str, Drawn], note: str, path: Path) -> None:
    """Write the picture; the ending of `path` says which format.

    Parameters
    ----------
    title : str
        Head of the picture.
    rows : mapping
        Quantity in plain words -> its portrait.
    note : str
        Line at the foot, such as which laws are guesses.
    path : Path
        File to write.
    """
    style = {**STYLE, "font.sans-serif": ["DejaVu Sans"], "font.size": 9.5}
    with mpl.rc_context(style):
        figure = Figure(figsize=(8.4, ROW * len(rows) + 0.9), layout="constrained")
        figure.suptitle(title, fontsize=12)
        grid = figure.subplots(len(rows), 2, squeeze=False, width_ratios=(3, 2))
        for line, (name, row) in zip(grid, rows.items(), strict=True):
            _new(line[0], name, row)
            _drift(line[1], row)
        if note:
            figure.supxlabel(textwrap.fill(note, 100), fontsize=9, color=RUST)
        figure.savefig(path, dpi=130, metadata={"Date": None} if path.suffix == ".svg" else None)


def _new(axes: Axes, name: str, row: Drawn) -> None:
    axes.set_title(f"{name}, new at 25 °C", fontsize=10, loc="left")
    axes.set_yticks([])
    axes.spines["left"].set_visible(False)
    if row.new.size and np.ptp(row.new) > 0.0:
        sns.histplot(row.new, ax=axes, bins=40, stat="density", color=BLUE, ec="white", lw=0.3)
    else:
        axes.text(0.5, 0.5, "every part alike", transform=axes.transAxes, ha="center", color=MUTED)
    axes.set_ylabel("")
    axes.set_xlabel(
        {"%": "% of nominal", "": "position in the window, or share"}.get(row.unit, row.unit)
    )


def _drift(axes: Axes, row: Drawn) -> None:
    if not row.drift:
        axes.set_axis_off()
        words = "no law for temperature\nor age in this table"
        axes.text(0.5, 0.5, words, transform=axes.transAxes, ha="center", color=MUTED)
        return
    axes.set_title("change", fontsize=10, loc="left")
    labels = [words.replace("degC", "°C") for words in row.drift]
    for place, (low, middle, high) in enumerate(row.drift.values()):
        axes.plot([low, high], [place, place], color=BLUE, lw=5, solid_capstyle="butt", alpha=0.5)
        axes.plot([middle], [place], "o", color=BLUE, ms=5)
    axes.axvline(0.0, color=MUTED, lw=0.9)
    axes.set_yticks(range(len(labels)), labels)
    axes.set_ylim(-0.6, len(labels) - 0.4)
    axes.invert_yaxis()
    axes.set_xlabel("% (1 part in 200 beyond either end)")
