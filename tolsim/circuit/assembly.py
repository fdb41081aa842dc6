"""Design + part values of N units -> Network.

Every part leaves its stamp in the full nodal matrices (all nets, known and unknown); the columns
of nets held by an ideal supply are then moved to the right-hand side.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from tolsim.circuit.device_groups import (
    Ports,
    collect_devices,
    feed_branch,
    inner_nets,
    plate_net,
)
from tolsim.circuit.devices import Devices, Floats
from tolsim.circuit.network import DriveShape, Network, SupplyCurrent
from tolsim.design import GROUND, Design, Rail
from tolsim.parts import (
    Capacitor,
    Clamp,
    Coupling,
    Drive,
    Inductor,
    Load,
    Mosfet,
    Potentiometer,
    Resistor,
)

PartValues = Mapping[str, Floats]

IDEAL_RESISTANCE = 1e-6  # ohm, of an ideal rail while it is live
LEAST_RESISTANCE = 1e-3  # ohm, of a supply whose current is limited or runs through a cable


@dataclass(frozen=True)
class DriveLevels:
    """One drive source, its rise time as a share of the period."""

    low: Floats
    high: Floats
    duty: float
    edge: float
    sine: bool
    frequency: float

    @classmethod
    def of(cls, ref: str, part: Drive, values: PartValues) -> DriveLevels:
        """Levels of N units of one drive source."""
        rise = 0.02 / part.frequency if part.rise_time is None else part.rise_time
        return cls(
            low=values[f"{ref}.low"],
            high=values[f"{ref}.high"],
            duty=part.duty,
            edge=rise * part.frequency,
            sine=part.shape == "sine",
            frequency=part.frequency,
        )


@dataclass
class Stamps:
    """Two-terminal stamps, collected before the unknowns are numbered."""

    units: int
    nets: dict[str, None] = field(default_factory=dict)  # ordered set
    conductances: list[tuple[str, str, Floats]] = field(default_factory=list)
    capacitances: list[tuple[str, str, Floats]] = field(default_factory=list)
    inductors: dict[str, tuple[str, str, Floats, Floats]] = field(default_factory=dict)
    mutuals: list[tuple[str, str, Floats]] = field(default_factory=list)
    drives: list[tuple[str, str, Floats, DriveLevels]] = field(default_factory=list)
    known: dict[str, Floats] = field(default_factory=dict)
    series: dict[str, Floats] = field(default_factory=dict)

    def conductance(self, a: str, b: str, g: Floats) -> None:
        """Conductance (N,) between two nets, S."""
        self.meet(a, b)
        self.conductances.append((a, b, g))

    def series_conductance(self, outer: str, inner: str, g: Floats) -> None:
        """A resistance inside a part, between its terminal and an inner net."""
        self.conductance(outer, inner, g)
        self.series[inner] = g

    def capacitance(self, a: str, b: str, c: Floats) -> None:
        """Capacitance (N,) between two nets, F."""
        self.meet(a, b)
        self.capacitances.append((a, b, c))

    def inductor(self, ref: str, a: str, b: str, inductance: Floats, resistance: Floats) -> None:
        """Inductance (N,), H, in series with a resistance (N,), ohm, between two nets."""
        self.meet(a, b)
        self.inductors[ref] = (a, b, inductance, resistance)

    def meet(self, *nets: str) -> None:
        """Make these nets known, in the order they are met."""
        for net in nets:
            self.nets.setdefault(net)


def assemble(design: Design, values: PartValues, *, live_rails: bool = False) -> Network:
    """Build the network of N units.

    Parameters
    ----------
    values : mapping of "REF.quantity" to (N,)
        Part values; MOSFET parameters at their junction temperature (`thermal.hot_values`).
    live_rails : bool
        Leave the voltages of the rails open: every net but ground becomes an unknown (an ideal
        rail gets `IDEAL_RESISTANCE`), and what the rails push stands in `rail_matrix` instead of
        `source`.
    """
    units = len(next(iter(values.values())))
    stamps = Stamps(units)
    stamps.known[GROUND] = np.zeros(units)
    for name, rail in design.rails.items():
        _stamp_rail(stamps, name, rail, values, live=live_rails)
    for ref, part in design.parts.items():
        _stamp(stamps, ref, part, values)
    ports = Ports()
    devices = collect_devices(design, values, ports)
    for plus, minus in ports.pairs:
        stamps.meet(plus, minus)
    return _number(design, stamps, ports, devices, live_rails=live_rails)


def _stamp_rail(stamps: Stamps, name: str, rail: Rail, values: PartValues, *, live: bool) -> None:
    """Source, resistance and cable of a rail, and the bulk capacitor at its net."""
    source, volts, units = f"{name}:source", values[f"{name}.voltage"], stamps.units
    if rail.own_current:
        stamps.known[source] = volts
        inductance = _full(units, rail.inductance or 0.0)
        resistance = _full(units, max(rail.resistance, LEAST_RESISTANCE))
        stamps.inductor(feed_branch(name), source, rail.net, inductance, resistance)
    elif rail.resistance > 0 or live:
        stamps.known[source] = volts
        stamps.conductance(
            source, rail.net, _full(units, 1 / (rail.resistance or IDEAL_RESISTANCE))
        )
    else:
        stamps.known[rail.net] = volts
    if rail.bulk_capacitance is not None:
        inner = f"{name}:bulk" if rail.bulk_resistance > 0 else rail.net
        if rail.bulk_resistance > 0:
            stamps.series_conductance(rail.net, inner, _full(units, 1 / rail.bulk_resistance))
        stamps.capacitance(inner, GROUND, _full(units, rail.bulk_capacitance))


def _full(units: int, value: float) -> Floats:
    return np.full(units, value)


def _stamp(stamps: Stamps, ref: str, part: object, values: PartValues) -> None:
    """Linear stamps of one part (nonlinear ones come from `collect_devices`)."""
    match part:
        case Capacitor():
            _stamp_capacitor(stamps, ref, part, values)
        case Inductor():
            stamps.inductor(
                ref, *part.nets, values[f"{ref}.inductance"], values[f"{ref}.resistance"]
            )
        case Load():
            # a loop of its own: the secondary of the coil, referred to ground at one point
            stamps.inductor(
                ref, GROUND, GROUND, values[f"{ref}.inductance"], values[f"{ref}.resistance"]
            )
            stamps.mutuals.append((part.coil, ref, values[f"{ref}.coupling"]))
        case Coupling():
            stamps.mutuals.append((*part.inductors, values[f"{ref}.coupling"]))
        case Resistor():
            stamps.conductance(*part.nets, 1 / values[f"{ref}.resistance"])
        case Potentiometer():
            low, wiper, high = part.nets
            setting = np.clip(values[f"{ref}.setting"], part.end_zone, 1 - part.end_zone)
            track = values[f"{ref}.resistance"]
            stamps.conductance(low, wiper, 1 / np.maximum(track * setting, 1e-3))
            stamps.conductance(wiper, high, 1 / np.maximum(track * (1 - setting), 1e-3))
        case Clamp():
            stamps.capacitance(*part.nets, values[f"{ref}.capacitance"])
        case Mosfet():
            _stamp_mosfet(stamps, ref, part, values)
        case Drive():
            g = _full(stamps.units, 1 / part.resistance)
            stamps.conductance(*part.nets, g)
            stamps.drives.append((*part.nets, g, DriveLevels.of(ref, part, values)))
        case _:  # diodes are devices only
            pass


def _stamp_capacitor(stamps: Stamps, ref: str, part: Capacitor, values: PartValues) -> None:
    plus, minus = part.nets
    esr = values[f"{ref}.esr"]
    inner = plate_net(ref, part, values)
    if inner != plus:
        stamps.series_conductance(plus, inner, 1 / np.maximum(esr, 1e-6))
    if part.half_voltage is None:
        stamps.capacitance(inner, minus, values[f"{ref}.capacitance"])
    else:
        stamps.meet(inner, minus)


def _stamp_mosfet(stamps: Stamps, ref: str, part: Mosfet, values: PartValues) -> None:
    gate, drain = inner_nets(ref, part, values)
    if gate != part.gate:
        stamps.series_conductance(part.gate, gate, _full(stamps.units, 1 / part.gate_resistance))
    if drain != part.drain:
        drift = np.maximum(values[f"{ref}.drift_resistance"], 1e-6)
        stamps.series_conductance(part.drain, drain, 1 / drift)
    stamps.capacitance(gate, part.source_net, values[f"{ref}.cgs"])


@dataclass
class _Equations:
    """The arrays being filled, with the rule for rows and columns of known nets."""

    index: Mapping[str, int]
    known: Mapping[str, Floats]
    E: Floats
    F: Floats
    source: Floats
    pushes: Mapping[str, Floats]  # right-hand sides of their own, by net of a live rail's source
    held: Floats  # charge that fixed nets put on the others

    def right_side(self, net: str) -> Floats:
        """The right-hand side (N, n) that a known net pushes on."""
        return self.pushes.get(net, self.source)

    def conductance(self, a: str, b: str, g: Floats) -> None:
        for row, column, sign in ((a, a, 1), (a, b, -1), (b, b, 1), (b, a, -1)):
            if row in self.index and column in self.index:
                self.F[:, self.index[row], self.index[column]] += sign * g
            elif row in self.index:
                self.right_side(column)[:, self.index[row]] -= sign * g * self.known[column]

    def capacitance(self, a: str, b: str, c: Floats) -> None:
        # a plate on a net of fixed voltage only shifts the charge, by what is `held`
        for row, column, sign in ((a, a, 1), (a, b, -1), (b, b, 1), (b, a, -1)):
            if row in self.index and column in self.index:
                self.E[:, self.index[row], self.index[column]] += sign * c
            elif row in self.index:
                self.held[:, self.index[row]] += sign * c * self.known[column]

    def inductor(self, ref: str, a: str, b: str, inductance: Floats, resistance: Floats) -> None:
        """L di/dt + R i - v_a + v_b = 0, i flowing from a to b."""
        branch = self.index[ref]
        self.E[:, branch, branch] += inductance
        self.F[:, branch, branch] += resistance
        for net, sign in ((a, 1), (b, -1)):
            if net in self.index:
                self.F[:, self.index[net], branch] += sign
                self.F[:, branch, self.index[net]] -= sign
            else:
                self.right_side(net)[:, branch] += sign * self.known[net]


def _number(
    design: Design, stamps: Stamps, ports: Ports, devices: Devices, *, live_rails: bool
) -> Network:
    """Number the unknowns and fill the matrices."""
    nets = [net for net in stamps.nets if net not in stamps.known]
    index = {name: i for i, name in enumerate([*nets, *stamps.inductors])}
    units, n = stamps.units, len(index)
    rails = tuple(design.rails) if live_rails else ()
    push = np.zeros((units, n, len(rails)))
    eq = _Equations(
        index,
        stamps.known,
        np.zeros((units, n, n)),
        np.zeros((units, n, n)),
        np.zeros((units, n)),
        {f"{name}:source": push[:, :, r] for r, name in enumerate(rails)},
        np.zeros((units, n)),
    )
    for a, b, g in stamps.conductances:
        eq.conductance(a, b, g)
    for a, b, c in stamps.capacitances:
        eq.capacitance(a, b, c)
    for ref, branch in stamps.inductors.items():
        eq.inductor(ref, *branch)
    for one, other, k in stamps.mutuals:
        mutual = k * np.sqrt(stamps.inductors[one][2] * stamps.inductors[other][2])
        eq.E[:, index[one], index[other]] += mutual
        eq.E[:, index[other], index[one]] += mutual
    for net in nets:
        eq.conductance(net, GROUND, _full(units, design.leak))
    incidence, offset = _incidence(ports, index, stamps)
    matrix, shape, frequency = _drives(stamps, index, n)
    return Network(
        E=eq.E,
        F=eq.F,
        D=incidence,
        v0=offset,
        source=eq.source,
        devices=devices,
        index=index,
        branches=frozenset(stamps.inductors),
        ports=ports.numbers,
        known={GROUND: stamps.known[GROUND]} if live_rails else stamps.known,
        supplies=_supplies(design, stamps, ports, index),
        series_conductance=stamps.series,
        leak=design.leak,
        drive_matrix=matrix,
        drive_shape=shape,
        drive_frequency=frequency,
        rail_matrix=push if live_rails else None,
        rail_names=rails,
        held=eq.held if eq.held.any() else None,
    )


def _incidence(ports: Ports, index: Mapping[str, int], stamps: Stamps) -> tuple[Floats, Floats]:
    """D (p, n) and v0 (N, p) of v = D x + v0."""
    incidence = np.zeros((ports.count, len(index)))
    offset = np.zeros((stamps.units, ports.count))
    for port, (plus, minus) in enumerate(ports.pairs):
        for net, sign in ((plus, 1.0), (minus, -1.0)):
            if net in index:
                incidence[port, index[net]] += sign
            else:
                offset[:, port] += sign * stamps.known[net]
    for port, ref in enumerate(ports.currents, start=len(ports.pairs)):
        incidence[port, index[ref]] = ports.scale.get(ref, 1.0)
    return incidence, offset


def _supplies(
    design: Design, stamps: Stamps, ports: Ports, index: Mapping[str, int]
) -> dict[str, SupplyCurrent]:
    """Current delivered by each rail as a linear function of x, plus port currents."""
    supplies = {}
    for name, rail in design.rails.items():
        source = f"{name}:source"
        terminal = source if source in stamps.known else rail.net
        row = np.zeros((stamps.units, len(index)))
        offset = np.zeros(stamps.units)
        for a, b, g in stamps.conductances:
            for here, there in ((a, b), (b, a)):
                if here != terminal:
                    continue
                offset = offset + g * stamps.known[terminal]
                if there in index:
                    row[:, index[there]] -= g
                else:
                    offset = offset - g * stamps.known[there]
        for ref, (a, b, _, _) in stamps.inductors.items():
            row[:, index[ref]] += float(a == terminal) - float(b == terminal)
        through = np.array(
            [float(plus == terminal) - float(minus == terminal) for plus, minus in ports.pairs]
            + [0.0] * len(ports.currents)
        )
        supplies[name] = SupplyCurrent(row, offset, through, stamps.known[terminal])
    return supplies


def _drives(
    stamps: Stamps, index: Mapping[str, int], n: int
) -> tuple[Floats | None, DriveShape | None, float | None]:
    """Norton equivalents of the drive sources."""
    if not stamps.drives:
        return None, None, None
    matrix = np.zeros((stamps.units, n, len(stamps.drives)))
    for d, (plus, minus, g, _) in enumerate(stamps.drives):
        for net, sign in ((plus, 1.0), (minus, -1.0)):
            if net in index:
                matrix[:, index[net], d] += sign * g
    records = [drive for *_, drive in stamps.drives]
    shape = DriveShape(
        low=np.stack([levels.low for levels in records], axis=1),
        high=np.stack([levels.high for levels in records], axis=1),
        duty=np.array([levels.duty for levels in records]),
        edge=np.array([levels.edge for levels in records]),
        sine=np.array([levels.sine for levels in records]),
    )
    return matrix, shape, records[0].frequency
