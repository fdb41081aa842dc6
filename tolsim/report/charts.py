"""Pictures of the report as inline SVG: text stays text, no ids clash, nothing is fetched."""

from __future__ import annotations

import html
import io
import re
from typing import Any

import matplotlib as mpl
import numpy as np
from markupsafe import Markup
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from tolsim.answers.wording import shown
from tolsim.report.content import Waveform

Floats = NDArray[np.float64]

INK, MUTED, GRID = "#1f2a33", "#5c6873", "#dfe4e8"
BLUE, BAND, RUST = "#1d6a96", "#bcd7e6", "#b2441c"
WIDTH, HEIGHT = 4.6, 2.7  # inch; drawn for a phone's width, so that text stays readable
MOST_BINS = 36

STYLE: dict[Any, Any] = {
    "svg.fonttype": "none",
    "svg.hashsalt": "tolsim",
    "font.family": ["sans-serif"],
    "font.sans-serif": ["system-ui", "sans-serif", "DejaVu Sans"],
    "font.size": 11.5,
    "axes.edgecolor": MUTED,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.8,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.grid": True,
    "axes.axisbelow": True,
    "grid.color": GRID,
    "grid.linewidth": 0.7,
    "xtick.color": MUTED,
    "ytick.color": MUTED,
    "text.color": INK,
    "text.parse_math": False,  # a "$" in a user's name is a dollar sign
}

_SCALES = ((1e-9, "n"), (1e-6, "µ"), (1e-3, "m"), (1.0, ""), (1e3, "k"), (1e6, "M"))


def start_margin_chart(margins: Floats, limit: float | None) -> Markup:
    """Histogram of the start margin (N,) in dB, with the limit and the border of starting."""
    known = margins[np.isfinite(margins)]
    if known.size == 0:
        return Markup()
    with chart_style():
        figure, axes = _canvas()
        borders = [0.0] if limit is None else [0.0, limit]
        low, high = min(known.min(), *borders), max(known.max(), *borders)
        pad = 0.04 * (high - low) or 1.0
        count = int(min(MOST_BINS, max(8, 2 * np.cbrt(known.size) + 4)))
        edges = np.linspace(low - pad, high + pad, count + 1)
        if limit is not None:  # the limit is a bin edge, so that no bar straddles it
            edges += limit - edges[np.argmin(np.abs(edges - limit))]
        heights, edges = np.histogram(known, edges)
        failing = edges[1:] <= (0.0 if limit is None else limit) + 1e-9
        colours = np.where(failing, RUST, BLUE).tolist()
        axes.bar(edges[:-1], heights, np.diff(edges), align="edge", color=colours, ec="white")
        axes.set_ylim(0, 1.3 * heights.max())
        _mark(axes, 0.0, f"0 dB: {np.sum(known <= 0)} below", MUTED, 1.0)
        if limit:
            words = f"limit {shown(limit, 'dB')}: {np.sum(known < limit)} below"
            _mark(axes, limit, words, RUST, 0.9)
        axes.set_xlabel("Start margin of each unit, worst condition (dB)")
        axes.set_ylabel("Units")
        axes.yaxis.set_major_locator(MaxNLocator(integer=True, nbins=5))
        return svg(figure, "margin", "Histogram of the start margin of all units")


def waveform_chart(wave: Waveform, number: int) -> Markup:
    """One cycle: the nominal unit as a line in the band of all units."""
    with chart_style():
        figure, axes = _canvas()
        time_scale, time_prefix = scale_of(float(np.ptp(wave.time)))
        peak = float(np.nanmax(np.abs([wave.nominal, wave.low, wave.high])))
        scale, prefix = scale_of(peak)
        time = (wave.time - wave.time[0]) / time_scale
        axes.fill_between(
            time,
            wave.low / scale,
            wave.high / scale,
            color=BAND,
            lw=0,
            label="5 % to 95 % of units",
        )
        axes.plot(time, wave.nominal / scale, color=BLUE, lw=1.6, label="nominal unit")
        axes.set_xlim(time[0], time[-1])
        axes.margins(y=0.12)
        axes.set_xlabel(f"Time ({time_prefix}s)")
        axes.set_ylabel(f"{wave.label} ({prefix}{wave.unit_of_measure})")
        axes.yaxis.set_major_locator(MaxNLocator(nbins=5))
        return svg(figure, f"wave{number}", f"{wave.title}, state {wave.state}")


def chart_style() -> Any:  # noqa: ANN401 - matplotlib's context has no public type
    """Context in which every chart is drawn."""
    return mpl.rc_context(STYLE)


def _canvas() -> tuple[Figure, Axes]:
    figure = Figure(figsize=(WIDTH, HEIGHT), layout="constrained")
    return figure, figure.subplots()


def _mark(axes: Axes, place: float, words: str, colour: str, height: float) -> None:
    axes.axvline(place, color=colour, lw=1.2, ls=(0, (4, 2)))
    axes.annotate(
        words,
        (place, height),
        xycoords=("data", "axes fraction"),
        xytext=(4, -2),
        textcoords="offset points",
        va="top",
        fontsize=10.5,
        color=colour,
        bbox={"fc": "white", "ec": "none", "pad": 0.6},  # a second line may stand behind it
    )


def scale_of(size: float) -> tuple[float, str]:
    """Power of 1000 and its prefix that make `size` 1 to 1000."""
    fitting = [pair for pair in _SCALES if pair[0] <= size]
    return fitting[-1] if fitting else (1.0, "")


def svg(figure: Figure, name: str, title: str) -> Markup:
    """SVG element without header, outside names or scripts; ids begin with `name`."""
    raw = io.StringIO()
    figure.savefig(raw, format="svg", transparent=True, metadata={"Date": None})
    text = raw.getvalue()
    text = text[text.index("<svg") :]
    text = re.sub(r"<metadata>.*?</metadata>", "", text, flags=re.DOTALL)
    text = re.sub(r'\s+xmlns(:\w+)?="[^"]*"', "", text)
    text = text.replace("xlink:href", "href")
    text = re.sub(r'\bid="', f'id="{name}-', text)
    text = re.sub(r"(href=\"|url\()#", rf"\1#{name}-", text)
    text = re.sub(
        r'<svg [^>]*viewBox="([^"]*)"[^>]*>', r'<svg viewBox="\1" role="img">', text, count=1
    )
    text = text.replace(">", f"><title>{html.escape(title)}</title>", 1).strip()
    return Markup(text)  # noqa: S704 - matplotlib has escaped every text in it
