"""The parts a design may be built from: one frozen class per kind, SI floats inside.

Text with units of measure is read when a part is made (`tolsim.quantity`); after
that every number is a float in SI units, except temperatures, which are in degC
because every temperature law of the trade is referenced to 25 degC.

Each class lists in `QUANTITIES` the names of the numbers that may spread from
unit to unit.  "C3.capacitance" is then the address of one such number everywhere:
in study files, factors, part values and reports.
"""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping
from typing import Annotated, Any, ClassVar, Literal, Self, get_args

from pydantic import Field, model_validator

from tolsim.errors import Mistake
from tolsim.mosfet_sheet import BodyDiode, DeviceModel, Sheet
from tolsim.quantity import (
    Capacitance,
    CapacitanceOrZero,
    Current,
    Duration,
    Frequency,
    HeatCapacity,
    Inductance,
    Power,
    ReactivePower,
    Resistance,
    ResistanceOrZero,
    Share,
    SignedVoltage,
    Temperature,
    ThermalResistance,
    Voltage,
    VoltageSlope,
    show,
)
from tolsim.records import Frozen, at_most_one, both_or_neither, exactly_one
from tolsim.winding import Coil, Core

Net = Annotated[str, Field(pattern=r"^[A-Za-z][A-Za-z0-9_]*$")]


class Rating(Frozen):
    """Largest values the maker allows; a limit may be a share of one of them."""

    voltage: Voltage | None = None
    current: Current | None = None
    power: Power | None = None
    reactive_power: ReactivePower | None = None
    temperature: Temperature | None = None
    saturation_current: Current | None = None
    drain_voltage: Voltage | None = None
    gate_voltage: Voltage | None = None
    drain_current: Current | None = None
    junction_temperature: Temperature | None = None


class Part(Frozen):
    """What every part has: a spread table, a reel it is fed from, ratings, an origin note."""

    QUANTITIES: ClassVar[tuple[str, ...]] = ()
    SHAPE: ClassVar[tuple[str, ...]] = ()  # spread by tables too, but not set by load states
    RATINGS: ClassVar[tuple[str, ...]] = ()

    spread: str | None = None
    reel: str | None = None
    matched_with: str | None = None
    match: Mapping[str, Any] | None = None  # quantity to width of the bin both lie in
    rating: Rating = Rating()
    source: str | None = None
    confidence: Literal["measured", "sheet", "typical", "guess"] | None = None

    @classmethod
    def together(cls, given: Collection[str]) -> Iterator[Mistake]:  # noqa: ARG003 - for kinds
        """Mistakes in which keys are given together, whatever their values."""
        return iter(())

    @model_validator(mode="after")
    def _keys_go_together(self) -> Self:
        given = {name for name in type(self).model_fields if getattr(self, name) is not None}
        for mistake in self.together(given):
            raise mistake
        return self


class Capacitor(Part):
    """Capacitor or bank of `pieces` equal capacitors in parallel.

    Loss is an equivalent series resistance, given as `esr` or as `tan_delta` at
    `loss_frequency`.  A class-2 dielectric loses capacitance under voltage:
    C(v) = C [ r + (1 - r) / (1 + (v / half_voltage)^2) ] with r = `bias_floor`.
    """

    QUANTITIES: ClassVar = ("capacitance", "esr")
    RATINGS: ClassVar = ("voltage", "current", "reactive_power", "temperature")

    kind: Literal["capacitor"]
    nets: tuple[Net, Net]
    capacitance: Capacitance
    pieces: Annotated[int, Field(ge=1, le=1000)] = 1
    esr: ResistanceOrZero | None = None
    tan_delta: Share | None = None
    loss_frequency: Frequency | None = None
    half_voltage: Voltage | None = None
    bias_floor: Share = 0.2
    thermal_resistance: ThermalResistance | None = None

    @classmethod
    def together(cls, given: Collection[str]) -> Iterator[Mistake]:
        """Loss is given in one way only, and tan_delta at a frequency."""
        yield from at_most_one(given, "esr", "tan_delta")
        yield from both_or_neither(given, "tan_delta", "loss_frequency")


class Inductor(Part):
    """Inductor: inductance (or air coil, or core), winding resistance (or Q at a frequency).

    A coil whose wire and frequency are known needs neither resistance nor Q.  `saturation`
    lists (current, share of the small-signal inductance left).
    """

    QUANTITIES: ClassVar = ("inductance", "resistance")
    SHAPE: ClassVar = ("turns", "diameter", "length", "pitch", "wire", "al")
    RATINGS: ClassVar = ("current", "saturation_current", "power", "temperature")

    kind: Literal["inductor"]
    nets: tuple[Net, Net]
    inductance: Inductance | None = None
    coil: Coil | None = None
    core: Core | None = None
    resistance: ResistanceOrZero | None = None
    q: Annotated[float, Field(gt=0, le=1e5)] | None = None
    q_frequency: Frequency | None = None
    saturation: tuple[tuple[Current, Share], ...] = ()
    thermal_resistance: ThermalResistance | None = None

    @classmethod
    def together(cls, given: Collection[str]) -> Iterator[Mistake]:
        """Inductance and loss are each given in exactly one way, and q at a frequency."""
        yield from exactly_one(given, "inductance", "core" if "core" in given else "coil")
        if "core" in given:
            yield from at_most_one(given, "core", "coil")
        if "coil" in given:  # its wire may give the loss
            yield from at_most_one(given, "resistance", "q")
        else:
            yield from exactly_one(given, "resistance", "q")
        yield from both_or_neither(given, "q", "q_frequency")

    @model_validator(mode="after")
    def _has_loss(self) -> Self:
        wire = self.coil is not None and self.coil.gives_resistance
        if self.resistance is None and self.q is None and not wire:
            raise Mistake(
                "either resistance or q, or a coil with wire and frequency",
                "Give one of them.",
                key="resistance",
                got="neither",
            )
        return self

    @model_validator(mode="after")
    def _saturation_falls(self) -> Self:
        currents = [current for current, _ in self.saturation]
        shares = [share for _, share in self.saturation]
        if currents != sorted(set(currents)) or shares != sorted(shares, reverse=True):
            raise Mistake("currents that rise and shares that fall", key="saturation")
        return self


class Coupling(Part):
    """Magnetic coupling between two inductors."""

    QUANTITIES: ClassVar = ("coupling",)

    kind: Literal["coupling"]
    inductors: tuple[str, str]
    coupling: Annotated[float, Field(gt=-1, lt=1)]


class Resistor(Part):
    """Resistor; `delivers_output` marks the one whose power is the useful output."""

    QUANTITIES: ClassVar = ("resistance",)
    RATINGS: ClassVar = ("power", "voltage", "temperature")

    kind: Literal["resistor"]
    nets: tuple[Net, Net]
    resistance: Resistance
    delivers_output: bool = False
    thermal_resistance: ThermalResistance | None = None


class Potentiometer(Part):
    """Potentiometer; `nets` are (low end, wiper, high end), setting 0 is the low end."""

    QUANTITIES: ClassVar = ("resistance", "setting")
    RATINGS: ClassVar = ("power",)

    kind: Literal["potentiometer"]
    nets: tuple[Net, Net, Net]
    resistance: Resistance
    setting: Share
    end_zone: Share = 0.01


class Diode(Part):
    """Diode from anode to cathode: i = (1/r) S(v - V), S a smoothed knee of width `knee`."""

    QUANTITIES: ClassVar = ("voltage", "resistance", "capacitance")
    RATINGS: ClassVar = ("voltage", "current", "power")

    kind: Literal["diode"]
    anode: Net
    cathode: Net
    voltage: Voltage
    resistance: Resistance
    knee: Voltage = 0.05
    capacitance: CapacitanceOrZero = 0.0
    junction_potential: Voltage = 0.8
    grading: Annotated[float, Field(gt=0, lt=1)] = 0.5


class Clamp(Part):
    """Clamp between two nets.

    It conducts "both" ways at +-voltage, or "one" way with a diode drop backwards.
    """

    QUANTITIES: ClassVar = ("voltage", "resistance", "capacitance")
    RATINGS: ClassVar = ("power", "current")

    kind: Literal["clamp"]
    nets: tuple[Net, Net]
    voltage: Voltage
    resistance: Resistance
    direction: Literal["both", "one"] = "both"
    knee: Voltage = 0.2
    capacitance: CapacitanceOrZero = 0.0


class Mosfet(Part):
    """Power MOSFET, n-channel: datasheet rows or model parameters, plus temperature laws.

    Temperature laws: threshold + threshold_slope (T - 25 degC), gain ~ (T/298.15 K)^gain_exponent,
    drift resistance ~ (T/298.15 K)^drift_exponent.
    """

    QUANTITIES: ClassVar = ("threshold", "gain", "drift_resistance", "capacitance_scale")
    RATINGS: ClassVar = (
        "drain_voltage",
        "gate_voltage",
        "drain_current",
        "power",
        "junction_temperature",
    )

    kind: Literal["mosfet"]
    drain: Net
    gate: Net
    source_net: Net = "gnd"
    sheet: Sheet | None = None
    model: DeviceModel | None = None
    knee: Voltage = 0.12  # width s of the sub-threshold knee
    junction_potential: Voltage = 0.8
    grading: Annotated[float, Field(gt=0, lt=1)] = 0.5
    gate_resistance: ResistanceOrZero = 0.0
    body_diode: BodyDiode = BodyDiode()
    thermal_resistance: ThermalResistance | None = None  # junction to ambient, K/W
    thermal_capacity: HeatCapacity | None = None  # J/K, of the junction and what is fastened to it
    threshold_slope: VoltageSlope = -6e-3
    gain_exponent: Annotated[float, Field(ge=-4, le=0)] = -1.5
    drift_exponent: Annotated[float, Field(ge=0, le=5)] = 2.3

    @classmethod
    def together(cls, given: Collection[str]) -> Iterator[Mistake]:
        """The device is given in exactly one way."""
        yield from exactly_one(given, "sheet", "model")


class Drive(Part):
    """Periodic source with series resistance for driven stages, `nets[0]` positive."""

    QUANTITIES: ClassVar = ("high", "low")

    kind: Literal["drive"]
    nets: tuple[Net, Net]
    shape: Literal["square", "sine"] = "square"
    low: SignedVoltage = 0.0
    high: Voltage
    frequency: Frequency
    duty: Annotated[float, Field(gt=0, lt=1)] = 0.5
    rise_time: Duration | None = None
    resistance: Resistance

    @model_validator(mode="after")
    def _edges_fit(self) -> Self:
        if self.low >= self.high:
            raise Mistake(
                f"less than high ({show(self.high, 'V')})", key="low", got=show(self.low, "V")
            )
        shortest = min(self.duty, 1.0 - self.duty) / self.frequency
        if self.rise_time is not None and self.rise_time >= shortest:
            raise Mistake(
                f"less than the shorter part of a cycle ({show(shortest, 's')})",
                key="rise_time",
                got=show(self.rise_time, "s"),
            )
        return self


class Load(Part):
    """Series R-L loop coupled by k to a coil: the transformer model of an inductive discharge.

    Piejak, Godyak, Alexandrovich, Plasma Sources Sci. Technol. 1 (1992) 179-186.
    """

    QUANTITIES: ClassVar = ("coupling", "inductance", "resistance")

    kind: Literal["load"]
    coil: str
    coupling: Annotated[float, Field(gt=-1, lt=1)]
    inductance: Inductance
    resistance: Resistance


AnyPart = Annotated[
    Capacitor
    | Inductor
    | Coupling
    | Resistor
    | Potentiometer
    | Diode
    | Clamp
    | Mosfet
    | Drive
    | Load,
    Field(discriminator="kind"),
]

PART_KINDS: Mapping[str, type[Part]] = {
    get_args(record.model_fields["kind"].annotation)[0]: record
    for record in get_args(get_args(AnyPart)[0])
}
"""Record of each kind, by the word used in study files."""
