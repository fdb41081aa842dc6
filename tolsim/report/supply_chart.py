"""How the supplies rise after power-on, as a picture."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from markupsafe import Markup
from matplotlib.figure import Figure

from tolsim.circuit.supply_ramp import STEP_TIME, RampProfile, profile_of
from tolsim.design import Rail
from tolsim.report.charts import BLUE, HEIGHT, MUTED, RUST, WIDTH, chart_style, scale_of, svg

MARGIN = 0.08  # of the last corner's time, shown after it
COLOURS = (BLUE, RUST, MUTED, "#6b5ca5", "#3f7f4f")
DASHES = ("-", (0, (5, 2)), (0, (1, 1.5)), "-.")


def supply_chart(rails: Mapping[str, Rail]) -> Markup:
    """Level of each rail against time; nothing if all of them are there at once."""
    ramps = {name: profile_of(rail) for name, rail in rails.items()}
    last = max((ramp.end for ramp in ramps.values()), default=0.0)
    if last <= STEP_TIME:
        return Markup()
    with chart_style():
        figure = Figure(figsize=(WIDTH, HEIGHT), layout="constrained")
        axes = figure.subplots()
        scale, prefix = scale_of(last)
        for k, (name, ramp) in enumerate(ramps.items()):
            times, levels = _corners(ramp, last)
            axes.plot(
                times / scale,
                100 * levels,
                color=COLOURS[k % len(COLOURS)],
                ls=DASHES[k % len(DASHES)],
                lw=1.6,
                label=name,
            )
        axes.set_xlim(0.0, (1 + MARGIN) * last / scale)
        axes.margins(y=0.1)
        axes.set_xlabel(f"Time after power-on ({prefix}s)")
        axes.set_ylabel("Source (% of its voltage)")
        axes.legend(frameon=False, loc="lower right")
        return svg(figure, "supplies", "Rise of every supply after power-on")


def _corners(ramp: RampProfile, last: float) -> tuple[np.ndarray, np.ndarray]:
    """Points of a ramp, and its level at the end of the picture."""
    end = (1 + MARGIN) * last
    return np.append(ramp.times, end), np.append(ramp.levels, ramp.levels[-1])
