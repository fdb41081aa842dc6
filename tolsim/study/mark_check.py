"""Does the table named beside a mark say the same as the mark?  The table is followed anyway."""

from __future__ import annotations

from collections.abc import Iterator, Mapping

import numpy as np

from tolsim.laws import Measured
from tolsim.spread.alternatives import band
from tolsim.spread.table import QuantitySpread, SpreadTable
from tolsim.study.markings import Beside

PLACES = (-20.0, 85.0)  # degC
_SHARES = np.array([0.005, 0.995])  # of slopes and positions
_NEAR = 0.25  # of the width the mark allows; nearer ends say the same
_LEAST = 2e-4  # relative; smaller differences do not matter


def mark_warnings(
    marks: Mapping[str, Beside], tables: Mapping[str, SpreadTable], file: str
) -> Iterator[str]:
    """One sentence per law in which a mark and the table named beside it differ.

    Parameters
    ----------
    marks : mapping
        Reference of a part to its mark, for parts that name a table as well.
    tables : mapping
        All sound tables.
    file : str
        Name of the study file.
    """
    for ref, mark in marks.items():
        named = tables.get(mark.named)
        if named is None:
            continue
        said = mark.table.quantities[mark.quantity]
        followed = named.quantities.get(mark.quantity, QuantitySpread())
        for what, one, other in _differences(said, followed, mark.value):
            yield (
                f'{file} [parts.{ref}] marking: {what} {_words(one)} by the mark "{mark.text}", '
                f"{_words(other)} by the table {mark.named}. The table is followed; drop spread to"
                " follow the mark."
            )


Range = tuple[float, float]


def _differences(
    said: QuantitySpread, followed: QuantitySpread, value: float
) -> Iterator[tuple[str, Range, Range]]:
    """What differs, as the mark and as the table have it, in shares of the value."""
    if said.tolerance is not None:
        one, other = _ends(said, value), _ends(followed, value)
        measured = isinstance(followed.tolerance, Measured)  # who has measured knows better
        inside = one[0] <= other[0] and other[1] <= one[1]
        if not (measured and inside) and _apart(one, other):
            yield "tolerance", one, other
    if said.temperature is not None:
        for celsius in PLACES:
            one, other = _change(said, celsius), _change(followed, celsius)
            if _apart(one, other):
                yield f"change at {celsius:.0f} degC", one, other
                return


def _apart(one: Range, other: Range) -> bool:
    slack = _NEAR * (one[1] - one[0]) + _LEAST
    return abs(one[0] - other[0]) > slack or abs(one[1] - other[1]) > slack


def _ends(spread: QuantitySpread, value: float) -> Range:
    """Ends of lot shift and tolerance together."""
    bands = [band(law) for law in (spread.lot, spread.tolerance) if law is not None]
    scale = value if spread.deviation == "absolute" else 1.0
    return sum(low for low, _ in bands) / scale, sum(high for _, high in bands) / scale


def _words(ends: Range) -> str:
    low, high = (f"{100.0 * end + 0.0:.3g}" for end in ends)
    return f"{low} to {high} %"


def _change(spread: QuantitySpread, celsius: float) -> Range:
    """Least and largest change from 25 degC."""
    if spread.temperature is None:
        return 0.0, 0.0
    law = spread.temperature.drawn
    drawn = np.zeros(2) if law is None else law.ppf(_SHARES)
    change = spread.temperature.factor(drawn, celsius) - 1.0
    return float(change.min()), float(change.max())
