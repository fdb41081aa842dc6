"""Draws of n units to the values of every part, under one condition and in one load state.

    value = nominal (1 + lot shift + tolerance) x temperature(T) x ageing(hours)

Keys are addresses: "C1.capacitance" (total of a bank), "Q1.threshold", "vdd.voltage",
"ambient".  Every value is an array (N,), N the number of units.  MOSFET values are those
at 25 degC junction temperature; all others belong to the ambient of the condition, or to the
part's own temperature where its rise above that is given.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from tolsim.design import Condition, Rail, State, Study
from tolsim.laws import Law
from tolsim.parts import (
    AnyPart,
    Capacitor,
    Coupling,
    Inductor,
    Load,
    Mosfet,
    Potentiometer,
)
from tolsim.spread.datasheet import device_parameters, threshold_window
from tolsim.spread.sampling import (
    CONDITION_UNITS,
    Draws,
    aspect_words,
    condition_law,
    factor_name,
    reel_of,
)
from tolsim.spread.table import QuantitySpread, SpreadTable
from tolsim.spread.winding import inductance_of, resistance_of, shape_of

Floats = NDArray[np.float64]
Values = dict[str, Floats]
Drawn = Callable[[str, str, Law], Floats]
"""Value of a factor in every unit: (name, aspect, law) to an array (N,)."""

AMBIENT = "ambient"
MOST_CHANGE = 1.0  # of the logarithm of a rise, to which first order is believed
HIGHEST_RISE = 300.0  # K; nothing soldered survives more
HIGHEST_COUPLING = 0.9999  # spread must not couple two coils more than fully


def part_values(
    study: Study,
    tables: Mapping[str, SpreadTable],
    condition: str,
    state: str,
    draws: Draws,
    rises: Mapping[str, Rise] | None = None,
) -> Values:
    """Values of every part of the units in `draws`.

    Parameters
    ----------
    study : Study
    tables : mapping
        Spread tables by name, as `spread.reading.read_shelf` finds them.
    condition, state : str
        Names in the study.
    draws : Draws
        N units.
    rises : mapping, optional
        By how much each part is warmer than ambient; parts not named are as warm.

    Returns
    -------
    dict
        Address to array (N,); see the top of this module.
    """

    def drawn(name: str, aspect: str, law: Law) -> Floats:
        if aspect == "meter":  # one unknown number for all units, so its best estimate
            return np.full(draws.count, law.mean)
        return draws.of(name, law)  # same rank, the law of this state or condition

    own: Mapping[str, float | Floats] = {}
    if rises:
        own = own_rises(study, tables, condition, state, draws, rises)
    values = _Maker(study, tables, condition, state, draws.count, drawn, own).values()
    return adjusted(study, values, draws.moved)


@dataclass(frozen=True)
class Rise:
    """How much warmer than ambient a part runs, and how that goes with the values of a unit.

    Attributes
    ----------
    kelvin : float
        Of the nominal unit.
    slopes : mapping
        Address of a value to (value of the cold nominal unit, slope): the rise changes by slope
        per relative change of that value; for "ambient" per K.
    """

    kelvin: float
    slopes: Mapping[str, tuple[float, float]] = field(default_factory=dict)

    def of(self, cold: Values) -> Floats:
        """Rise (N,) of units with these values of cold parts, to first order in them."""
        change = np.zeros(len(cold[AMBIENT]))
        for key, (usual, slope) in self.slopes.items():
            apart = cold[key] - usual
            change = change + slope * (apart if key == AMBIENT else apart / usual)
        factor = np.exp(np.clip(change, -MOST_CHANGE, MOST_CHANGE))
        return np.minimum(self.kelvin * factor, HIGHEST_RISE)


def own_rises(
    study: Study,
    tables: Mapping[str, SpreadTable],
    condition: str,
    state: str,
    draws: Draws,
    rises: Mapping[str, Rise],
) -> dict[str, Floats]:
    """Rise (N,) of each part in every drawn unit."""
    cold = part_values(study, tables, condition, state, draws)
    return {reference: rise.of(cold) for reference, rise in rises.items()}


def nominal_values(
    study: Study,
    tables: Mapping[str, SpreadTable],
    condition: str,
    state: str,
    rises: Mapping[str, float] | None = None,
    moved: Mapping[str, Floats] = MappingProxyType({}),
) -> Values:
    """Values of the nominal unit, arrays (1,): no deviation, laws of conditions at their median.

    Slopes, positions and ageing rates are at their median too.  `moved` is as in `Draws`.
    """

    def drawn(_: str, aspect: str, law: Law) -> Floats:
        return np.zeros(1) if aspect in ("tolerance", "lot", "meter") else law.ppf(np.full(1, 0.5))

    values = _Maker(study, tables, condition, state, 1, drawn, rises or {}).values()
    return adjusted(study, values, moved)


def adjusted(study: Study, values: Values, moved: Mapping[str, Floats]) -> Values:
    """Values after trimming: every trimmed quantity times the factor the operator moved it by.

    So it goes on following its temperature and ageing laws from where he left it.
    """
    changed = values | {key: values[key] * factor for key, factor in moved.items()}
    for address in moved:
        reference = address.partition(".")[0]
        part = study.design.parts.get(reference)
        if part is not None:
            changed = within_reach(reference, part, changed)
    return changed


def within_reach(reference: str, part: AnyPart, values: Values) -> Values:
    """The same values, no coupling beyond full and no wiper in the end zones."""
    if isinstance(part, Coupling | Load):
        key = f"{reference}.coupling"
        values[key] = np.clip(values[key], -HIGHEST_COUPLING, HIGHEST_COUPLING)
    if isinstance(part, Potentiometer):
        key = f"{reference}.setting"
        values[key] = np.clip(values[key], part.end_zone, 1.0 - part.end_zone)
    return values


@dataclass
class _Maker:
    """One pass over the parts of a study."""

    study: Study
    tables: Mapping[str, SpreadTable]
    condition_name: str
    state_name: str
    count: int
    drawn: Drawn
    rises: Mapping[str, float | Floats]

    def __post_init__(self) -> None:
        self.condition: Condition = self.study.conditions[self.condition_name]
        self.state: State = self.study.states[self.state_name]
        self.ambient = self._of_condition("ambient") + self.condition.board_rise
        self.supply = self._of_condition("supply")
        self.age = self._of_condition("age")
        since = self.condition.since_soldering
        self.since_soldering = self.age if since is None else np.minimum(since, self.age)

    def values(self) -> Values:
        """All part values."""
        values: Values = {AMBIENT: self.ambient}
        for reference, part in self.study.design.parts.items():
            values |= self._of_part(reference, part)
        for reference, rail in self.study.design.rails.items():
            values |= self._of_rail(reference, rail)
        return values

    def _of_condition(self, quantity: str) -> Floats:
        given = getattr(self.condition, quantity)
        if isinstance(given, Mapping):
            law = condition_law(given, CONDITION_UNITS[quantity])
            return self.drawn(quantity, "condition", law)
        return np.full(self.count, float(given))

    def _of_part(self, reference: str, part: AnyPart) -> Values:
        """Values of one part, by its kind."""
        if isinstance(part, Capacitor):
            return self._of_capacitor(reference, part)
        if isinstance(part, Mosfet):
            return self._of_mosfet(reference, part)
        if isinstance(part, Inductor):
            return self._of_inductor(reference, part)
        nominal = {quantity: getattr(part, quantity) for quantity in part.QUANTITIES}
        values = {
            f"{reference}.{quantity}": self.spread(reference, quantity, value, part.reel)
            for quantity, value in nominal.items()
        }
        return within_reach(reference, part, values)

    def _of_rail(self, reference: str, rail: Rail) -> Values:
        voltage = self.spread(reference, "voltage", rail.voltage, None)
        if rail.follows_supply:
            voltage = voltage * (1.0 + self.supply)
        return {f"{reference}.voltage": voltage}

    def _of_capacitor(self, reference: str, part: Capacitor) -> Values:
        """Total of the pieces, share of the largest one, and series resistance of the whole."""
        pieces = range(1, part.pieces + 1) if part.pieces > 1 else (None,)
        total = np.zeros(self.count)
        largest = np.zeros(self.count)
        for piece in pieces:
            value = self.spread(reference, "capacitance", part.capacitance, part.reel, piece)
            total += value
            np.maximum(largest, value, out=largest)
        esr = self.spread(reference, "esr", _esr(part), part.reel) / part.pieces
        return {
            f"{reference}.capacitance": total,
            f"{reference}.largest_share": largest / total,
            f"{reference}.esr": esr,
        }

    def _of_inductor(self, reference: str, part: Inductor) -> Values:
        """Inductance and resistance: given, or those of the winding as this unit has it."""
        shape = shape_of(part)
        wound = {
            name: self.spread(reference, name, value, part.reel) for name, value in shape.items()
        }
        inductance = inductance_of(part, wound)
        as_drawn = {name: np.asarray(value) for name, value in shape.items()}
        nominal = float(inductance_of(part, as_drawn))
        resistance = resistance_of(part, nominal, wound)
        return {
            f"{reference}.inductance": self.spread(reference, "inductance", inductance, part.reel),
            f"{reference}.resistance": self.spread(reference, "resistance", resistance, part.reel),
        }

    def _of_mosfet(self, reference: str, part: Mosfet) -> Values:
        """Model parameters at 25 degC; one scale for all three capacitances."""
        nominal = device_parameters(part)
        table = self._table(reference)
        spread = table.quantities.get("threshold") if table else None
        threshold = self._nominal(reference, "threshold", nominal.threshold)
        if spread is not None and spread.deviation == "position":
            window = threshold_window(part, spread.implied_half_window)
            position = self._deviation(reference, "threshold", part.reel, None)
            value = (threshold + window.shift(position)) * self._drift(
                reference, "threshold", part.reel
            )
        else:
            value = self.spread(reference, "threshold", nominal.threshold, part.reel)
        scale = self.spread(reference, "capacitance_scale", 1.0, part.reel)
        return {
            f"{reference}.threshold": value,
            f"{reference}.gain": self.spread(reference, "gain", nominal.gain, part.reel),
            f"{reference}.drift_resistance": self.spread(
                reference, "drift_resistance", nominal.drift_resistance, part.reel
            ),
            f"{reference}.cgs": nominal.cgs * scale,
            f"{reference}.cgd0": nominal.cgd0 * scale,
            f"{reference}.cds0": nominal.cds0 * scale,
        }

    def spread(
        self,
        reference: str,
        quantity: str,
        nominal: float | Floats,
        reel: str | None,
        piece: int | None = None,
    ) -> Floats:
        """Value of one quantity in every unit: deviation, temperature, ageing."""
        base = self._nominal(reference, quantity, nominal)
        spread = self._laws(reference, quantity)
        if spread is None:
            return np.full(self.count, base, dtype=np.float64)
        deviation = self._deviation(reference, quantity, reel, piece)
        value = base + deviation if spread.deviation == "absolute" else base * (1.0 + deviation)
        return value * self._drift(reference, quantity, reel)

    def _nominal(self, reference: str, quantity: str, value: float | Floats) -> float | Floats:
        """Nominal value, or what the load state puts in its place."""
        return self.state.values.get(f"{reference}.{quantity}", value)

    def _table(self, reference: str) -> SpreadTable | None:
        owner = self.study.design.parts.get(reference) or self.study.design.rails[reference]
        name = self.state.spread.get(reference, owner.spread)
        return self.tables[name] if name else None

    def _laws(self, reference: str, quantity: str) -> QuantitySpread | None:
        table = self._table(reference)
        return table.quantities.get(quantity) if table else None

    def _draw(
        self, reference: str, quantity: str, aspect: str, reel: str | None, piece: int | None
    ) -> Floats | None:
        """Draw of one aspect; None if its law leaves nothing to chance."""
        table = self._table(reference)
        law = table.quantities[quantity].drawn(aspect) if table else None
        if table is None or law is None:
            return None
        words = aspect_words(table, quantity, aspect)
        shared_by = reel_of(reel, table, quantity, aspect)
        owner = table.owner(reference, aspect)
        return self.drawn(factor_name(owner, quantity, words, shared_by, piece), aspect, law)

    def _deviation(
        self, reference: str, quantity: str, reel: str | None, piece: int | None
    ) -> Floats:
        """Lot shift plus tolerance, plus the error of the meter they were read from."""
        deviation = np.zeros(self.count)
        for aspect, number in (("lot", None), ("tolerance", piece), ("meter", None)):
            drawn = self._draw(reference, quantity, aspect, reel, number)
            if drawn is not None:
                deviation = deviation + drawn
        return deviation

    def _celsius(self, reference: str) -> Floats:
        """Temperature of a part."""
        rise = self.rises.get(reference)
        return self.ambient if rise is None else self.ambient + rise

    def _drift(self, reference: str, quantity: str, reel: str | None) -> Floats:
        """Factor of temperature and age."""
        spread = self._laws(reference, quantity)
        factor = np.ones(self.count)
        if spread is not None and spread.temperature is not None:
            drawn = self._draw(reference, quantity, "temperature", reel, None)
            factor = factor * spread.temperature.factor(
                0.0 if drawn is None else drawn, self._celsius(reference)
            )
        if spread is not None and spread.ageing is not None:
            drawn = self._draw(reference, quantity, "ageing", reel, None)
            hours = self.since_soldering if spread.ageing.clock == "soldering" else self.age
            factor = factor * spread.ageing.factor(0.0 if drawn is None else drawn, hours)
        return factor


def _esr(part: Capacitor) -> float:
    """Series resistance of one piece, ohm: given, or tan delta / (2 pi f C)."""
    if part.esr is not None:
        return part.esr
    if part.tan_delta is not None and part.loss_frequency is not None:
        return part.tan_delta / (2.0 * math.pi * part.loss_frequency * part.capacitance)
    return 0.0
