"""What was measured of the parts of a study, as plain records for summary and report."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import numpy as np

from tolsim.design import Study
from tolsim.laws import Measured
from tolsim.spread.entry import UNITS
from tolsim.spread.quantity_words import plain
from tolsim.spread.sampling import tables_of
from tolsim.spread.table import QuantitySpread, SpreadTable

CURVE = 61  # points of the law of the next piece


def reel_records(study: Study, tables: Mapping[str, SpreadTable]) -> list[dict[str, Any]]:
    """One record per measured law that parts of the study follow; see `answers.results`."""
    parts: dict[str, list[str]] = {}
    for ref in (*study.design.parts, *study.design.rails):
        for name in tables_of(study, ref):
            parts.setdefault(name, []).append(ref)
    return [
        {"table": name, "parts": refs, **_record(quantity, spread, law)}
        for name, refs in parts.items()
        for quantity, spread in tables[name].quantities.items()
        for law in (spread.lot, spread.tolerance)
        if isinstance(law, Measured)
    ]


def _record(quantity: str, spread: QuantitySpread, law: Measured) -> dict[str, Any]:
    sample = law.sample
    low, high = law.support
    curve = np.linspace(min(low, sample.values[0]), max(high, sample.values[-1]), CURVE)
    absolute = spread.deviation == "absolute"
    return {
        "quantity": plain(quantity),
        "unit_of_measure": UNITS.get(quantity, "1") if absolute else "share",
        "file": sample.file,
        "pieces": sample.pieces,
        "values": list(sample.values),
        "mean": sample.mean,
        "sd": sample.sd,
        "meter_noise": sample.noise,
        "meter_bias": spread.meter.support[1] if spread.meter is not None else 0.0,
        "test_frequency": sample.test_frequency,
        "shape": sample.shape,
        "fit_p": sample.fit_p if math.isfinite(sample.fit_p) else None,
        "remarks": list(sample.remarks),
        "next": {
            "low": low,
            "high": high,
            "sd": law.sd,
            "curve": [curve.tolist(), law.cdf(curve).tolist()],
        },
    }
