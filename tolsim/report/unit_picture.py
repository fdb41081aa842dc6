"""Picture of one unit: its waveforms over a period beside those of the nominal unit."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Protocol

import matplotlib as mpl
import numpy as np
from matplotlib.figure import Figure
from numpy.typing import NDArray

from tolsim.report.charts import BLUE, MUTED, RUST, STYLE, scale_of

Floats = NDArray[np.float64]

PANEL = (4.2, 2.4)  # inch


class Wave(Protocol):
    """What is drawn in one panel; see `presentation.Signal`."""

    @property
    def title(self) -> str:
        """Head of its panel."""

    @property
    def unit_of_measure(self) -> str:
        """Unit of measure of the waves, "V" or "A"."""

    @property
    def time(self) -> Floats:
        """Time along the nominal period, s, (m,)."""

    @property
    def nominal(self) -> Floats:
        """The nominal unit's wave, (m,)."""

    @property
    def units(self) -> Floats:
        """The waves of the units, of which the first is drawn, (m, N)."""


def draw_unit(
    number: int, rows: Mapping[str, Sequence[Wave]], words: Mapping[str, str], path: Path
) -> None:
    """Write a PNG: one row of panels per case.

    Parameters
    ----------
    rows : mapping
        Name of the case -> its signals.
    words : mapping
        Name of the case -> what the unit does there.
    """
    columns = max(len(waves) for waves in rows.values())
    size = (PANEL[0] * columns, PANEL[1] * len(rows) + 0.4)
    with mpl.rc_context({**STYLE, "font.sans-serif": ["DejaVu Sans"]}):
        figure = Figure(figsize=size, layout="constrained")
        figure.suptitle(f"Unit {number}", fontsize=14)
        grid = figure.subplots(len(rows), columns, squeeze=False)
        for line, (case, waves) in zip(grid, rows.items(), strict=True):
            for axes, wave in zip(line, waves, strict=False):
                size_now = float(np.nanmax(np.abs([wave.nominal, wave.units[:, 0]])))
                scale, prefix = scale_of(size_now)
                second, time_prefix = scale_of(float(np.ptp(wave.time)))
                axes.plot(wave.time / second, wave.nominal / scale, color=MUTED, lw=1.2)
                axes.plot(wave.time / second, wave.units[:, 0] / scale, color=BLUE, lw=1.6)
                axes.set_title(wave.title, fontsize=11)
                axes.set_xlabel(f"Time ({time_prefix}s)")
                axes.set_ylabel(f"{prefix}{wave.unit_of_measure}")
            bad = words.get(case, "") not in ("starts", "runs")
            line[0].annotate(
                f"{case}: {words.get(case, '')}",
                (0, 1.22),
                xycoords="axes fraction",
                color=RUST if bad else MUTED,
                fontsize=11,
            )
        figure.text(
            0.99, 0.99, "blue: this unit   grey: nominal unit", ha="right", va="top", fontsize=10
        )
        figure.savefig(path, dpi=110)
