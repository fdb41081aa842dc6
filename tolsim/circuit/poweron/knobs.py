"""What can be turned to make a unit start: ramps, supplies, and what sets the gates' bias."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal

from tolsim.circuit.thermal import mosfets
from tolsim.design import GROUND, Design
from tolsim.parts import Inductor, Potentiometer, Resistor

Kind = Literal["ramp", "supply", "bias", "setting"]


@dataclass(frozen=True)
class Knob:
    """Something that is turned: a rail's ramp or voltage, or the setting of a potentiometer."""

    kind: Kind
    name: str  # of the rail or potentiometer

    @property
    def key(self) -> str:
        """The part value it changes (a ramp changes none)."""
        return f"{self.name}.setting" if self.kind == "setting" else f"{self.name}.voltage"


def knobs_of(design: Design) -> tuple[Knob, ...]:
    """The knobs of a design: of rails that feed drains, then of what feeds only gates.

    Feeds are followed through resistors, inductors and potentiometers, up to a rail or ground.
    """
    refs = mosfets(design).values()
    drains, _ = _feeding(design, [part.drain for part in refs])
    gates, pots = _feeding(design, [part.gate for part in refs])
    knobs = [Knob("ramp", name) for name in design.rails if name in drains]
    knobs += [Knob("supply", name) for name in design.rails if name in drains]
    knobs += [Knob("bias", name) for name in design.rails if name in gates - drains]
    knobs += [Knob("setting", ref) for ref in design.parts if ref in pots]
    return tuple(knobs)


def _feeding(design: Design, nets: list[str]) -> tuple[set[str], set[str]]:
    """Rails and potentiometers that DC reaches some nets from."""
    held: dict[str, set[str]] = {GROUND: set()}
    for name, rail in design.rails.items():
        held.setdefault(rail.net, set()).add(name)
    links: dict[str, list[tuple[str, str]]] = {}
    for ref, nets_of in _conductors(design):
        for net in nets_of:
            links.setdefault(net, []).extend((ref, other) for other in nets_of if other != net)
    rails, pots, seen, todo = set[str](), set[str](), set(nets), list(nets)
    while todo:
        net = todo.pop()
        if net in held:
            rails |= held[net]
            continue
        for ref, other in links.get(net, []):
            if isinstance(design.parts[ref], Potentiometer):
                pots.add(ref)
            if other not in seen:
                seen.add(other)
                todo.append(other)
    return rails, pots


def _conductors(design: Design) -> Iterator[tuple[str, tuple[str, ...]]]:
    for ref, part in design.parts.items():
        if isinstance(part, Resistor | Inductor | Potentiometer):
            yield ref, part.nets
