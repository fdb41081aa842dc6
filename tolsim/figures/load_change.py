"""Figures of a change of load: what the way to the next state asked of every part."""

from __future__ import annotations

import numpy as np

from tolsim.circuit.device_groups import feed_branch
from tolsim.circuit.devices import Floats
from tolsim.circuit.load_change.passage import Passage
from tolsim.circuit.load_change.road import Road, ratings
from tolsim.circuit.network import Network
from tolsim.design import Design, Rail
from tolsim.parts import Clamp, Inductor, Mosfet


def measure_passage(design: Design, road: Road, passage: Passage) -> dict[str, Floats]:
    """Figures of N units, from the moment of the change to the end of the run.

    Returns
    -------
    dict of str to (N,)
        "settle_time", "Q1.transition_drain_peak", "Z1.clamp_energy", ... in SI units.  Energies
        are what a part takes until the unit has settled; a rail without resistance and cable has
        no current of its own here.
    """
    figures: dict[str, Floats] = {"settle_time": passage.settle}
    network = road.stations[-1]
    rated = ratings(design)
    for ref, part in design.parts.items():
        own: dict[str, Floats] = {}
        if isinstance(part, Mosfet):
            own = _mosfet(ref, network, road, passage)
            if ref in rated:
                own["avalanche_energy"] = passage.energy_of(f"{ref}:avalanche")
        elif isinstance(part, Inductor):
            own = _inductor(ref, network, road, passage)
        elif isinstance(part, Clamp):
            sides = (passage.energy_of(f"{ref}:{side}") for side in ("up", "down"))
            own = {"clamp_energy": np.sum(list(sides), axis=0)}
        figures |= {f"{ref}.{name}": value for name, value in own.items()}
    for name, rail in design.rails.items():
        current = _rail_current(name, rail, network, passage)
        if current is not None:
            figures[f"{name}.transition_current_peak"] = current
    return figures


def _mosfet(ref: str, network: Network, road: Road, passage: Passage) -> dict[str, Floats]:
    """Voltages at the pins, and at the gate behind its resistance; all against the source net.

    An inductance between source and ground is a part of its own, so these are voltages behind it.
    """
    own = {}
    ends = {
        pin: road.probes[f"{ref}:{pin} pin"].ends(passage.lowest, passage.highest)
        for pin in ("drain", "gate")
        if f"{ref}:{pin} pin" in road.probes
    }
    if "drain" in ends:
        own["transition_drain_peak"] = ends["drain"][1]
    if "gate" in ends:
        low, high = ends["gate"]
        own["transition_gate_peak"] = np.maximum(np.abs(low), np.abs(high))
        own["transition_gate_positive_peak"] = high
        own["transition_gate_negative_peak"] = np.maximum(-low, 0.0)
    inner = network.states + network.ports[f"{ref}:gs"]
    sides = np.abs([passage.lowest[:, inner], passage.highest[:, inner]])
    own["transition_inner_gate_peak"] = sides.max(axis=0)
    return own


def _inductor(ref: str, network: Network, road: Road, passage: Passage) -> dict[str, Floats]:
    place = network.index[ref]
    sides = np.abs([passage.lowest[:, place], passage.highest[:, place]])
    own = {"transition_current_peak": sides.max(axis=0)}
    if ref in road.probes:
        across = np.abs(road.probes[ref].ends(passage.lowest, passage.highest))
        own["transition_voltage_peak"] = across.max(axis=0)
    return own


def _rail_current(name: str, rail: Rail, network: Network, passage: Passage) -> Floats | None:
    """Largest current that a rail delivers; None where it is no quantity of the network."""
    feed = feed_branch(name)
    if feed in network.index:
        return passage.highest[:, network.index[feed]]
    if rail.resistance > 0 and rail.net in network.index:
        lowest = passage.lowest[:, network.index[rail.net]]
        return np.asarray((network.known[f"{name}:source"] - lowest) / rail.resistance)
    return None
