"""What a spread table amounts to: new parts at 25 degC, cold and hot ones, old ones.

Nothing is drawn by chance: laws are taken at evenly spaced shares and combined.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tolsim.laws import Law
from tolsim.spread.entry import UNITS
from tolsim.spread.table import QuantitySpread, SpreadTable

Floats = NDArray[np.float64]

COLD, HOT, OLD = -20.0, 85.0, 10_000.0  # degC, degC, h
_SHARES = 501  # points of each law
_POINTS = 4001  # of their sum
_FAR = 0.005  # beyond which parts are few: 99 % lie between


@dataclass(frozen=True)
class Portrait:
    """One quantity of a table.

    Attributes
    ----------
    new : ndarray (m,)
        Deviations of new parts at 25 degC, sorted, equally likely; empty without a law.
    ends : tuple of float
        Beyond which no new part lies.
    unit : str
        Of `new`: "%" of nominal, "" for positions in the threshold window, else a unit.
    drift : mapping
        "at -20 degC", ... to the change there in per cent: (1 part in 200 below, middle one,
        1 in 200 above), for those that change.
    """

    new: Floats
    ends: tuple[float, float]
    unit: str
    drift: Mapping[str, tuple[float, float, float]]

    def between(self, share: float) -> tuple[float, float]:
        """Ends of the middle `share` of new parts."""
        low, high = np.quantile(self.new, [0.5 - 0.5 * share, 0.5 + 0.5 * share])
        return float(low), float(high)


def portraits(table: SpreadTable) -> dict[str, Portrait]:
    """Portrait of every quantity of a table."""
    return {name: _portrait(name, spread) for name, spread in table.quantities.items()}


def _portrait(name: str, spread: QuantitySpread) -> Portrait:
    scale, unit = 1.0, UNITS.get(name, "")
    if spread.deviation == "relative":
        scale, unit = 100.0, "%"
    elif spread.deviation == "position":
        unit = ""
    laws = [law for law in (spread.lot, spread.tolerance, spread.meter) if law is not None]
    ends = (
        scale * sum(law.support[0] for law in laws),
        scale * sum(law.support[1] for law in laws),
    )
    return Portrait(scale * _sum(laws), ends, unit, _drift(spread))


def _evenly(law: Law, points: int) -> Floats:
    return law.ppf((np.arange(points) + 0.5) / points)


def _sum(laws: list[Law]) -> Floats:
    """Values of a sum of independent laws at evenly spaced shares, sorted."""
    if not laws:
        return np.empty(0)
    values = _evenly(laws[0], _SHARES if laws[1:] else _POINTS)
    for law in laws[1:]:
        sums = np.add.outer(values, _evenly(law, _SHARES)).ravel()
        values = np.quantile(sums, (np.arange(_POINTS) + 0.5) / _POINTS)
    return values


def _drift(spread: QuantitySpread) -> dict[str, tuple[float, float, float]]:
    shares = np.array([_FAR, 0.5, 1.0 - _FAR])
    found: dict[str, Floats] = {}
    if spread.temperature is not None:
        law = spread.temperature.drawn
        drawn = np.zeros(3) if law is None else law.ppf(shares)
        for celsius in (COLD, HOT):
            found[f"at {celsius:.0f} degC"] = spread.temperature.factor(drawn, celsius)
    if spread.ageing is not None:
        factor = spread.ageing.factor(spread.ageing.rate.ppf(shares), OLD)
        found[f"after {OLD:.0f} h"] = factor
    changes = {
        words: np.sort(100.0 * (np.ones(3) * factor - 1.0)) for words, factor in found.items()
    }
    return {
        words: (float(change[0]), float(change[1]), float(change[2]))
        for words, change in changes.items()
    }
