"""Text with a unit of measure to an SI float and back: used at the doors only.

"2.7 nF" becomes 2.7e-9.  Temperatures stay in degC and ages in hours, because every
temperature and ageing law of the trade is written in them.

`read` and `show` are the two verbs.  The rest are annotated float types for the records
of `tolsim.parts` and `tolsim.design`: each knows its unit of measure and the range in
which such a value can be meant seriously, so 5.6 F for 5.6 pF is caught at the door.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from typing import Annotated, Any, Final

import pint
from pydantic import BeforeValidator, ValidationInfo

from tolsim.errors import Mistake

UNITS_MANDATORY: Final = "units_mandatory"
"""Key of the pydantic context that makes a bare number for a dimensional value a mistake."""

_NUMBER = re.compile(r"([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)\s*(.*)")
_FACTOR = r"(?:1|[A-Za-z_µμΩ°%²]+(?:(?:\^|\*\*)?-?[1-9])?)"
_UNIT_TEXT = re.compile(rf"(?:{_FACTOR}(?:\s?[*/]\s?{_FACTOR})*)?")
_PREFIXES: Final = {
    -15: "f", -12: "p", -9: "n", -6: "u", -3: "m", 0: "", 3: "k", 6: "M", 9: "G", 12: "T",
}  # fmt: skip
_TAKES_PREFIX: Final = frozenset(("F", "H", "ohm", "S", "A", "V", "Hz", "W", "var", "s", "m", "J"))


@dataclass(frozen=True)
class Kind:
    """A kind of quantity: its unit of measure and the range it can be meant in.

    Attributes
    ----------
    name : str
        With its article: "a capacitance".
    unit : str
        Unit of measure of the float; "1" for a pure number.
    low, high : float
        Plausible range, ends included.
    zero : bool
        True if zero is allowed although it lies below `low`.
    example : str
        Text the user could have written.
    """

    name: str
    unit: str
    low: float
    high: float
    example: str
    zero: bool = False

    def phrase(self) -> str:
        """What is expected, for a message: "a capacitance of 1 fF to 10 mF"."""
        zero = "0 or " if self.zero else ""
        return f"{self.name} of {zero}{show(self.low, self.unit)} to {show(self.high, self.unit)}"

    def check(self, value: float) -> float:
        """Return `value` if it lies in the range, else raise `Mistake`."""
        if self.low <= value <= self.high or (self.zero and value == 0.0):
            return value
        wrong_sign = self.low >= 0.0 and -self.high <= value < 0.0
        cure = "Check the sign." if wrong_sign else "Check the prefix and unit."
        raise Mistake(self.phrase(), cure)


@cache
def _registry() -> pint.UnitRegistry[Any]:
    """Pint's registry, made on first use because it takes a third of a second."""
    registry: pint.UnitRegistry[Any] = pint.UnitRegistry()
    registry.define("var = volt * ampere")
    registry.define("decibels = [decibels]")  # a plain number of dB, never converted to a ratio
    return registry


def _unit_of(text: str, wanted: str) -> pint.Unit:
    """Pint unit of a unit text as people write it: "A/V2", "ppm/degC", "Ω", "dB".

    Only names, single digits and * / ^ are let through, for pint would evaluate the rest.
    """
    if not _UNIT_TEXT.fullmatch(text):
        raise pint.UndefinedUnitError(text)
    text = re.sub(r"(?<=[A-Za-z])(\d)", r"**\1", text)
    if text == "dB":
        text = "decibels"
    if wanted != "degC":  # a difference, or something per degree: no offset
        text = re.sub(r"°C|degC|celsius", "delta_degC", text)
    return _registry().Unit(text or "dimensionless")


def read(text: str, unit: str) -> float:
    """Number that `text` means in `unit`.

    Parameters
    ----------
    text : str
        Number and unit of measure: "2.7 nF", "85 degC", "-30 ppm/K", "5 %".
    unit : str
        Unit of measure wanted, in the same spelling: "F", "degC", "1/K", "1", "h".

    Returns
    -------
    float
        In `unit`: SI for all units used inside tolsim but degC and h.

    Raises
    ------
    Mistake
        If the text is no number, has no unit or an unknown one, or has another dimension.
    """
    example = "a number with a unit of measure" + (f" like {unit}" if unit != "1" else "")
    if re.match(r"\s*[+-]?\d+,\d", text):
        raise Mistake(example, "Write the decimal point as a point.")
    match = _NUMBER.fullmatch(text.strip())
    if match is None:
        raise Mistake(example, "Write a number, a space, a unit.")
    number, unit_text = float(match[1]), match[2]
    if not unit_text and unit != "1":
        raise Mistake(example, f'Write the unit of measure: "{text.strip()} {unit}" if it is that.')
    try:
        return float(
            _registry().Quantity(number, _unit_of(unit_text, unit)).m_as(_unit_of(unit, unit))
        )
    except pint.DimensionalityError:
        raise Mistake(example, f"'{unit_text}' measures something else.") from None
    except Exception as error:
        # Pint answers odd unit texts with errors of many kinds ("A0" with a KeyError).
        raise Mistake(example, f"'{unit_text}' is no unit of measure known here.") from error


def show(value: float, unit: str, digits: int = 4) -> str:
    """Write `value` with a prefix: "2.7 nF", "61.87 V", "85 degC".

    Parameters
    ----------
    value : float
        In `unit`.
    unit : str
        "F", "V", "degC", ...; "1" for a pure number.
    digits : int
        Significant digits; trailing zeros are dropped.

    Returns
    -------
    str
        "n/a" if the value is not a number.
    """
    if math.isnan(value):
        return "n/a"
    if unit == "1":
        return f"{value:.{digits}g}"
    if unit not in _TAKES_PREFIX or value == 0.0 or math.isinf(value):
        return f"{value:.{digits}g} {unit}"
    exponent = (
        int(f"{value:.{digits - 1}e}".split("e")[1]) // 3 * 3
    )  # after rounding: 999.96 is 1 k
    exponent = min(max(exponent, min(_PREFIXES)), max(_PREFIXES))
    return f"{value / 10.0**exponent:.{digits}g} {_PREFIXES[exponent]}{unit}"


def typeset(text: str) -> str:
    """`text` with the signs of print instead of those of keyboards: µH, kΩ, °C, A/V²."""
    for typed, printed in _PRINTED:
        text = typed.sub(printed, text)
    return text


_PRINTED: Final = (
    (re.compile(r"(?<=\d )u(?=(?:F|H|ohm|S|A|V|Hz|W|var|s|m)\b)"), "µ"),
    (re.compile(r"(?<=\d )([fpnµmkMGT]?)ohm\b"), r"\1Ω"),
    (re.compile(r"(?<=\d )degC\b"), "°C"),
    (re.compile(r"\^2\b|\*\*2\b"), "²"),
)
KINDS: Final[Mapping[str, Kind]] = {
    kind.name.split(" ", 1)[1]: kind
    for kind in (
        Kind("a capacitance", "F", 1e-15, 1e-2, "2.7 nF"),
        Kind("an inductance", "H", 1e-11, 10.0, "4.7 uH"),
        Kind("a resistance", "ohm", 1e-6, 1e12, "3.3 kohm"),
        Kind("a conductance", "S", 1e-12, 1e5, "5 S"),
        Kind("a leak", "S", 1e-15, 1e-5, "10 nS"),
        Kind("a current", "A", 1e-12, 1e4, "2 A"),
        Kind("a voltage", "V", 1e-6, 1e6, "24 V"),
        Kind("a frequency", "Hz", 1.0, 1e11, "6.78 MHz"),
        Kind("a duration", "s", 1e-12, 1e6, "10 ms"),
        Kind("a length", "m", 1e-6, 100.0, "40 mm"),
        Kind("a power", "W", 1e-9, 1e7, "2 W"),
        Kind("a reactive power", "var", 1e-9, 1e9, "250 var"),
        Kind("a temperature", "degC", -100.0, 500.0, "85 degC"),
        Kind("a temperature difference", "K", 0.0, 300.0, "15 K"),
        Kind("a thermal resistance", "K/W", 1e-4, 1e5, "1.2 K/W"),
        Kind("a heat capacity", "J/K", 1e-6, 1e5, "50 mJ/K"),
        Kind("a gain", "A/V^2", 1e-6, 1e5, "11 A/V^2"),
        Kind("an age", "h", 0.0, 1e7, "10000 h"),
        Kind("an activation energy", "eV", 0.05, 5.0, "0.7 eV"),
    )
}
_SHARE: Final = Kind("a share", "1", 0.0, 1.0, "80 %")
_INNER_SHARE: Final = Kind("a share", "1", 0.01, 0.99, "50 %")
_LEVEL: Final = Kind("a level", "1", -1.0, 10.0, "100 %")
_SIGNED_SHARE: Final = Kind("a deviation", "1", -1.0, 1.0, "-10 %")
_SIGNED_VOLTAGE: Final = Kind("a voltage", "V", -1e6, 1e6, "-5 V")
_VOLTAGE_SLOPE: Final = Kind("a voltage slope", "V/K", -1.0, 1.0, "-6 mV/K")


class Reader:
    """Pydantic validator of one kind: text or number in, checked float out."""

    def __init__(self, kind: Kind, *, zero: bool = False) -> None:
        self.kind = Kind(**{**vars(kind), "zero": zero or kind.zero})

    def __call__(self, value: Any, info: ValidationInfo) -> float:  # noqa: ANN401 - from a file
        """Read and check `value`; a bare number may be refused by the context (see `study`)."""
        kind = self.kind
        if isinstance(value, str):
            try:
                return kind.check(read(value, kind.unit))
            except Mistake as mistake:
                about_range = mistake.expected == kind.phrase()
                cure = "" if about_range else f' For example "{kind.example}".'
                raise Mistake(kind.phrase(), mistake.cure + cure) from None
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise Mistake(kind.phrase(), f'Write it like "{kind.example}".')
        strict = info.context is not None and info.context.get(UNITS_MANDATORY, False)
        if strict and kind.unit != "1":
            raise Mistake(kind.phrase(), f'Write the unit of measure too, like "{kind.example}".')
        return kind.check(float(value))


def _field(kind: Kind, *, zero: bool = False) -> BeforeValidator:
    return BeforeValidator(Reader(kind, zero=zero), json_schema_input_type=str | float)


Capacitance = Annotated[float, _field(KINDS["capacitance"])]
CapacitanceOrZero = Annotated[float, _field(KINDS["capacitance"], zero=True)]
Inductance = Annotated[float, _field(KINDS["inductance"])]
Resistance = Annotated[float, _field(KINDS["resistance"])]
ResistanceOrZero = Annotated[float, _field(KINDS["resistance"], zero=True)]
Conductance = Annotated[float, _field(KINDS["conductance"])]
Leak = Annotated[float, _field(KINDS["leak"])]
Current = Annotated[float, _field(KINDS["current"])]
Voltage = Annotated[float, _field(KINDS["voltage"])]
SignedVoltage = Annotated[float, _field(_SIGNED_VOLTAGE)]
Frequency = Annotated[float, _field(KINDS["frequency"])]
Duration = Annotated[float, _field(KINDS["duration"])]
DurationOrZero = Annotated[float, _field(KINDS["duration"], zero=True)]
Length = Annotated[float, _field(KINDS["length"])]
Power = Annotated[float, _field(KINDS["power"])]
ReactivePower = Annotated[float, _field(KINDS["reactive power"])]
Temperature = Annotated[float, _field(KINDS["temperature"])]  # degC
TemperatureDifference = Annotated[float, _field(KINDS["temperature difference"])]
ThermalResistance = Annotated[float, _field(KINDS["thermal resistance"])]
HeatCapacity = Annotated[float, _field(KINDS["heat capacity"])]
VoltageSlope = Annotated[float, _field(_VOLTAGE_SLOPE)]
Gain = Annotated[float, _field(KINDS["gain"])]
Share = Annotated[float, _field(_SHARE)]
InnerShare = Annotated[float, _field(_INNER_SHARE)]
Level = Annotated[float, _field(_LEVEL)]
SignedShare = Annotated[float, _field(_SIGNED_SHARE)]
Age = Annotated[float, _field(KINDS["age"])]  # hours
ActivationEnergy = Annotated[float, _field(KINDS["activation energy"])]  # eV
