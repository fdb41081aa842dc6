"""Plain words for the quantities that spread: "series resistance" for `esr`."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Final

_WORDS: Final[Mapping[str, str]] = {
    "al": "inductance factor",
    "capacitance_scale": "scale of all capacitances",
    "drift_resistance": "resistance of the drift zone",
    "esr": "series resistance",
    "high": "upper level",
    "low": "lower level",
    "wire": "wire diameter",
}


def plain(quantity: str) -> str:
    """Quantity as one says it; names that are words already stay as they are."""
    return _WORDS.get(quantity, quantity.replace("_", " "))
