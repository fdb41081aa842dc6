"""Plain words for the quantities that spread: "series resistance" for `esr`."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Final

_WORDS: Final[Mapping[str, str]] = {
    "al": "inductance factor",
    "esr": "series resistance",
    "high": "upper level",
    "low": "lower level",
    "wire": "wire diameter",
}


def plain(quantity: str) -> str:
    """Quantity as one says it; names that are words already stay as they are."""
    return _WORDS.get(quantity, quantity.replace("_", " "))


def factor_words(name: str) -> str:
    """Name of a factor with its quantity in plain words: "C1.series resistance tolerance"."""
    return _QUANTITY.sub(lambda found: found[1] + plain(found[2]), name, count=1)


_QUANTITY: Final = re.compile(r"((?:\.|: ))([a-z_]+)(?= )")
