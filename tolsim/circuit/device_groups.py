"""Which elements sit on which ports: the parts of a design -> elements over shared ports.

Devices across the same pair of nets share a port, so a gate clamp costs no extra unknown.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field

import numpy as np

from tolsim.circuit.devices import (
    BiasedCapacitors,
    Devices,
    Elements,
    Floats,
    Junctions,
    Ramps,
    SaturatingCore,
)
from tolsim.design import GROUND, Design, Rail
from tolsim.parts import Capacitor, Clamp, Diode, Inductor, Mosfet

PartValues = Mapping[str, Floats]
Weights = dict[int, float]  # port -> weight

BACKWARD_DROP = 0.7  # V, a one-way clamp conducts backwards like a diode
SHORT_EXCESS = 0.002  # of the current limit, by which it is exceeded at short circuit
LIMIT_KNEE = 0.001  # of the current limit, over which it sets in


@dataclass
class Ports:
    """Ports in the order they were asked for: net pairs first, then inductor currents.

    A current with a `scale` (ohm) is seen as a voltage, so that it has the size of the others.
    """

    pairs: list[tuple[str, str]] = field(default_factory=list)
    currents: list[str] = field(default_factory=list)
    numbers: dict[str, int] = field(default_factory=dict)
    scale: dict[str, float] = field(default_factory=dict)

    @property
    def count(self) -> int:
        """How many ports there are so far."""
        return len(self.pairs) + len(self.currents)

    def between(self, name: str, plus: str, minus: str) -> int:
        """Port number of a pair of nets, under a device's own name for it."""
        if (plus, minus) not in self.pairs:
            self.pairs.append((plus, minus))
        self.numbers[name] = self.pairs.index((plus, minus))
        return self.numbers[name]

    def current(self, name: str, branch: str, scale: float = 1.0) -> int:
        """Port number of an inductor's current; all pairs of nets must be there before."""
        self.numbers[name] = self.count
        self.currents.append(branch)
        self.scale[branch] = scale
        return self.numbers[name]


@dataclass
class _Rows:
    """Elements of one kind while they are being collected."""

    names: list[str] = field(default_factory=list)
    sense: list[Weights] = field(default_factory=list)
    inject: list[Weights] = field(default_factory=list)
    numbers: list[dict[str, Floats | float]] = field(default_factory=list)

    def add(
        self, name: str, sense: Weights, inject: Weights | None = None, **numbers: Floats | float
    ) -> None:
        self.names.append(name)
        self.sense.append(sense)
        self.inject.append(sense if inject is None else inject)
        self.numbers.append(numbers)

    def matrices(self, ports: int) -> tuple[Floats, Floats]:
        """`sense` (e, p) and `inject` (p, e)."""
        sense = np.zeros((len(self.names), ports))
        inject = np.zeros((ports, len(self.names)))
        for row, (sees, acts) in enumerate(zip(self.sense, self.inject, strict=True)):
            for port, weight in sees.items():
                sense[row, port] += weight
            for port, weight in acts.items():
                inject[port, row] += weight
        return sense, inject

    def stack(self, name: str, units: int) -> Floats:
        """One number per element: (e, N), or (e, 1) where no unit differs by construction."""
        rows = [numbers.get(name, 0.0) for numbers in self.numbers]
        if all(isinstance(row, float) for row in rows):
            return np.array(rows, dtype=float)[:, None]
        return np.stack([np.broadcast_to(row, (units,)) for row in rows])


def inner_nets(ref: str, part: Mosfet, values: PartValues) -> tuple[str, str]:
    """Gate and drain nets of the intrinsic transistor (inside its series resistances)."""
    gate = f"{ref}:gate" if part.gate_resistance > 0 else part.gate
    drain = f"{ref}:drain" if np.any(values[f"{ref}.drift_resistance"] > 0) else part.drain
    return gate, drain


def plate_net(ref: str, part: Capacitor, values: PartValues) -> str:
    """The net of a capacitor's dielectric, inside its series resistance."""
    return f"{ref}:plate" if np.any(values[f"{ref}.esr"] > 0) else part.nets[0]


def feed_branch(rail: str) -> str:
    """Name of the branch that carries the current of a rail with a limit or a cable."""
    return f"{rail}:feed"


def collect_devices(design: Design, values: PartValues, ports: Ports) -> Devices:
    """Elements of the design; `ports` is filled on the way."""
    units = len(values["ambient"])
    ramps, junctions, biased = _Rows(), _Rows(), _Rows()
    cores: dict[str, Inductor] = {}
    for ref, part in design.parts.items():
        match part:
            case Mosfet():
                _mosfet(ref, part, values, ports, ramps, junctions)
            case Diode():
                _diode(ref, part, values, ports, ramps, junctions)
            case Clamp():
                _clamp(ref, part, values, ports, ramps)
            case Capacitor() if part.half_voltage is not None:
                port = ports.between(ref, plate_net(ref, part, values), part.nets[1])
                c0 = values[f"{ref}.capacitance"]
                biased.add(ref, {port: 1.0}, c0=c0, half=part.half_voltage, floor=part.bias_floor)
            case Inductor() if part.saturation:
                cores[ref] = part
            case _:
                pass
    _see_currents(design, cores, ports, ramps)
    elements = _gathered(ramps, junctions, biased, ports.count, units)
    elements += [_core(ref, part, values, ports) for ref, part in cores.items()]
    return Devices(tuple(elements), ports.count)


def _see_currents(design: Design, cores: Iterable[str], ports: Ports, ramps: _Rows) -> None:
    """Ports of saturating cores and limited supplies; they come last, being no pairs of nets."""
    limited = {name: rail for name, rail in design.rails.items() if rail.current_limit is not None}
    for name, rail in limited.items():
        if rail.foldback is not None:
            ports.between(f"{name}:output", rail.net, GROUND)
    for ref in cores:
        ports.current(ref, ref)
    for name, rail in limited.items():
        _limiter(name, rail, ports, ramps)


def _gathered(
    ramps: _Rows, junctions: _Rows, biased: _Rows, ports: int, units: int
) -> list[Elements]:
    """Elements of the kinds that occur."""
    elements: list[Elements] = []
    for kind, rows, numbers in (
        (Ramps, ramps, ("offset", "knee", "linear", "square")),
        (Junctions, junctions, ("c0", "phi", "grading")),
        (BiasedCapacitors, biased, ("c0", "half", "floor")),
    ):
        if rows.names:
            elements.append(_built(kind, rows, numbers, ports, units))
    return elements


def _mosfet(
    ref: str, part: Mosfet, values: PartValues, ports: Ports, ramps: _Rows, junctions: _Rows
) -> None:
    gate, drain = inner_nets(ref, part, values)
    gs = ports.between(f"{ref}:gs", gate, part.source_net)
    ds = ports.between(f"{ref}:ds", drain, part.source_net)
    threshold, gain = values[f"{ref}.threshold"], values[f"{ref}.gain"]
    knee, body = part.knee, part.body_diode
    forward, reverse = {gs: 1.0}, {gs: 1.0, ds: -1.0}
    ramps.add(f"{ref}:forward", forward, {ds: 1.0}, square=gain, offset=threshold, knee=knee)
    ramps.add(f"{ref}:reverse", reverse, {ds: 1.0}, square=-gain, offset=threshold, knee=knee)
    ramps.add(
        f"{ref}:body", {ds: -1.0}, offset=body.voltage, knee=body.knee, linear=1 / body.resistance
    )
    phi, grading = part.junction_potential, part.grading
    cgd0, cds0 = values[f"{ref}.cgd0"], values[f"{ref}.cds0"]
    junctions.add(f"{ref}:gd", {ds: 1.0, gs: -1.0}, c0=cgd0, phi=phi, grading=grading)
    junctions.add(f"{ref}:ds", {ds: 1.0}, c0=cds0, phi=phi, grading=grading)


def _diode(
    ref: str, part: Diode, values: PartValues, ports: Ports, ramps: _Rows, junctions: _Rows
) -> None:
    port = ports.between(ref, part.anode, part.cathode)
    conductance = 1 / values[f"{ref}.resistance"]
    ramps.add(ref, {port: 1.0}, offset=values[f"{ref}.voltage"], knee=part.knee, linear=conductance)
    if np.any(values[f"{ref}.capacitance"] > 0):
        junctions.add(
            ref,
            {port: -1.0},
            c0=values[f"{ref}.capacitance"],
            phi=part.junction_potential,
            grading=part.grading,
        )


def _clamp(ref: str, part: Clamp, values: PartValues, ports: Ports, ramps: _Rows) -> None:
    port = ports.between(ref, *part.nets)
    conductance = 1 / values[f"{ref}.resistance"]
    upper = values[f"{ref}.voltage"]
    lower = upper if part.direction == "both" else BACKWARD_DROP
    ramps.add(f"{ref}:up", {port: 1.0}, offset=upper, knee=part.knee, linear=conductance)
    ramps.add(f"{ref}:down", {port: -1.0}, offset=lower, knee=part.knee, linear=conductance)


def _limiter(name: str, rail: Rail, ports: Ports, ramps: _Rows) -> None:
    """Voltage drop in the supply's branch that holds its current i at the limit.

    With u = (V / I) i, I the limit and V the nominal voltage, the drop is S(u - V) / `SHORT_EXCESS`
    for a constant limit, and S(u - f V - (1 - f) v) / `SHORT_EXCESS` for one that falls with the
    output voltage v to its share f at short circuit.
    """
    assert rail.current_limit is not None
    as_voltage = rail.voltage / rail.current_limit
    port = ports.current(f"{name}:limit", feed_branch(name), as_voltage)
    left = 1.0 if rail.foldback is None else rail.foldback
    sense = {port: 1.0}
    if rail.foldback is not None:
        sense[ports.numbers[f"{name}:output"]] = left - 1.0
    ramps.add(
        f"{name}:limit",
        sense,
        {port: 1.0 / as_voltage},  # the port's scale stands in its row of P too
        offset=left * rail.voltage,
        knee=LIMIT_KNEE * rail.voltage,
        linear=1.0 / SHORT_EXCESS,
    )


def _built(
    kind: Callable[..., Elements], rows: _Rows, numbers: tuple[str, ...], ports: int, units: int
) -> Elements:
    """Elements of one kind from their collected rows, `numbers` named as the kind names them."""
    sense, inject = rows.matrices(ports)
    stacked = {name: rows.stack(name, units) for name in numbers}
    return kind(names=tuple(rows.names), sense=sense, inject=inject, **stacked)


def _core(ref: str, part: Inductor, values: PartValues, ports: Ports) -> SaturatingCore:
    points = sorted({0.0: 1.0, **dict(part.saturation)}.items())
    sense = np.zeros((1, ports.count))
    sense[0, ports.numbers[ref]] = 1.0
    return SaturatingCore(
        names=(ref,),
        sense=sense,
        inject=sense.T,
        inductance=values[f"{ref}.inductance"][None],
        currents=np.array([amps for amps, _ in points]),
        shares=np.array([share for _, share in points]),
    )
