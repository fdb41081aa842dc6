"""The measured reels of a study as the report shows them: readings beside the law made of them."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
from markupsafe import Markup
from matplotlib.figure import Figure

from tolsim.answers.reel_words import entry_sentences, heading
from tolsim.report.charts import BAND, BLUE, HEIGHT, RUST, WIDTH, chart_style, scale_of, svg

CONFIDENCE = 0.95


def reel_section(summary: Mapping[str, Any]) -> list[dict[str, Any]]:
    """Content of the section, one dict per measured law; empty without."""
    return [
        {
            "heading": heading(entry),
            "sentences": list(entry_sentences(entry)),
            "chart": _chart(entry, number),
        }
        for number, entry in enumerate(summary.get("reels") or ())
    ]


def _chart(entry: Mapping[str, Any], number: int) -> Markup:
    """Share of pieces below a value: readings with their band, and the law of the next piece.

    The band holds the whole true curve with 95 % confidence: sqrt(ln(2/alpha) / (2n)) on
    either side (Dvoretzky, Kiefer, Wolfowitz 1956; constant of Massart, Ann. Probab. 18
    (1990) 1269-1283).
    """
    values = np.array(entry["values"])
    scale, unit = 0.01, "% from nominal"
    if entry["unit_of_measure"] != "share":
        scale, prefix = scale_of(float(np.max(np.abs(values))))
        unit = f"{prefix}{entry['unit_of_measure']} from nominal"
    below = np.arange(1, values.size + 1) / values.size
    half = math.sqrt(math.log(2.0 / (1.0 - CONFIDENCE)) / (2.0 * values.size))
    x, law = (np.array(column) for column in entry["next"]["curve"])
    steps = np.concatenate([[x[0]], values, [x[-1]]]) / scale
    shares = np.concatenate([[0.0], below, [1.0]])
    with chart_style():
        figure = Figure(figsize=(WIDTH, HEIGHT), layout="constrained")
        axes = figure.subplots()
        low, high = (100.0 * np.clip(shares + side, 0.0, 1.0) for side in (-half, half))
        axes.fill_between(steps, low, high, step="post", color=BAND, alpha=0.6, lw=0)
        axes.step(steps, 100.0 * shares, where="post", color=BLUE, lw=1.5)
        axes.plot(x / scale, 100.0 * law, color=RUST, lw=1.6)
        axes.set_ylim(0, 100)
        axes.set_xlabel(f"{entry['quantity'].capitalize()} ({unit})")
        axes.set_ylabel("% of pieces below")
        return svg(figure, f"reel{number}", f"Readings of {entry['file']} and the law of them")
