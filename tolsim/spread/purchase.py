"""Values that cannot be bought as they stand: in no E series of IEC 60063."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Final

from tolsim.design import Study
from tolsim.parts import Capacitor, Resistor
from tolsim.quantity import show
from tolsim.spread.preferred import nearest_preferred, smallest_series

_NOT_BOUGHT: Final = ("stray", "trimmer", "load")  # tables of what is not sold by its value
_SERIES: Final = {Capacitor: ("capacitance", "F", 24), Resistor: ("resistance", "ohm", 96)}


def value_notes(study: Study) -> Iterator[str]:
    """One sentence per capacitor or resistor whose value is in no E series.

    Strays, trimmers and loads are left out, by the name of their spread table; so is the
    resistor that stands for the load.
    """
    for ref, part in study.design.parts.items():
        if not isinstance(part, Capacitor | Resistor):
            continue
        if (part.spread or "").startswith(_NOT_BOUGHT) or getattr(part, "delivers_output", False):
            continue
        name, unit, size = _SERIES[type(part)]
        value = float(getattr(part, name))
        if smallest_series(value) is None:
            near = show(nearest_preferred(value, size), unit)
            yield f"{ref} {show(value, unit)} is in no E series; nearest of E{size}: {near}"
