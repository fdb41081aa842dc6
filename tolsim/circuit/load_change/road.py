"""The circuits a change of load passes through: part values from one state's to the next one's."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.assembly import PartValues, assemble
from tolsim.circuit.devices import Floats
from tolsim.circuit.load_change.probes import Pairs, Probe, breaking_down, probed
from tolsim.circuit.network import Network
from tolsim.circuit.thermal import hot_values, mosfets
from tolsim.design import GROUND, Design
from tolsim.parts import Capacitor, Inductor, Mosfet

PIECES = 8  # of a change that takes its time: values stand still within each
SERIES = (".esr", ".drift_resistance")
LEAST_SERIES = 1e-6  # ohm: keeps an inner net where the other state needs it


@dataclass(frozen=True)
class Road:
    """Networks of N units from the state that is left to the one that is reached.

    Attributes
    ----------
    stations : tuple of Network
        First that of the old state, last that of the new one, those of a slow change between.
    probes : mapping
        Voltages watched beside states and ports, by the names of `watched_pairs`.
    """

    stations: tuple[Network, ...]
    probes: Mapping[str, Probe]

    def breaking_down(self, volts: Mapping[str, float]) -> Road:
        """The same circuits with transistors that break down at these drain voltages."""
        return Road(tuple(breaking_down(one, volts) for one in self.stations), self.probes)

    def take(self, units: NDArray[np.intp]) -> Road:
        """Return the road of some of the units."""
        probes = {
            name: Probe(probe.column, probe.sign, probe.offset[units])
            for name, probe in self.probes.items()
        }
        return Road(tuple(one.take(units) for one in self.stations), probes)


def road(
    design: Design,
    before: PartValues,
    after: PartValues,
    junctions: Mapping[str, Floats],
    *,
    pieces: int,
) -> Road:
    """Circuits whose values move in a straight line from `before` to `after` in equal steps.

    Parameters
    ----------
    before, after : mapping of "REF.quantity" to (N,)
    junctions : mapping of str to (N,)
        Junction temperatures, degC: those of the old state, for heat takes far longer to flow.
    pieces : int
        1 for a change at once.
    """
    before, after = _same_nets(before, after)
    pairs = watched_pairs(design)
    stations: list[Network] = []
    probes: dict[str, Probe] = {}
    for k in range(pieces + 1):
        share = k / pieces
        values = {
            key: value if k == 0 else _between(value, after[key], share)
            for key, value in before.items()
        }
        network, probes = probed(assemble(design, hot_values(design, values, junctions)), pairs)
        stations.append(network)
    return Road(tuple(stations), probes)


def _between(old: Floats, new: Floats, share: float) -> Floats:
    """A value on the way; one that does not change keeps every bit."""
    return np.where(share == 1.0, new, np.where(old == new, old, old + share * (new - old)))


def _same_nets(before: PartValues, after: PartValues) -> tuple[PartValues, PartValues]:
    """Values that make the same nets in both states."""
    inner = [
        key
        for key in before
        if key.endswith(SERIES) and np.any(before[key] > 0) != np.any(after[key] > 0)
    ]
    return tuple(  # type: ignore[return-value]
        {**values, **{key: np.maximum(values[key], LEAST_SERIES) for key in inner}}
        for values in (before, after)
    )


def watched_pairs(design: Design) -> Pairs:
    """Nets between which the voltage is watched: "Q1:drain pin", "Q1:gate pin", "L1"."""
    pairs: dict[str, tuple[str, str]] = {}
    feeds = {rail.net for rail in design.rails.values()} | {GROUND}
    for ref, part in design.parts.items():
        if isinstance(part, Mosfet):
            pairs[f"{ref}:drain pin"] = (part.drain, part.source_net)
            pairs[f"{ref}:gate pin"] = (part.gate, part.source_net)
        elif isinstance(part, Inductor) and not feeds & set(part.nets):
            pairs[ref] = part.nets  # a coil; what hangs on a rail is a choke
    return pairs


def ratings(design: Design) -> dict[str, float]:
    """Rated drain voltage of every transistor that has one, V."""
    rated = {ref: part.rating.drain_voltage for ref, part in mosfets(design).items()}
    return {ref: volts for ref, volts in rated.items() if volts is not None}


def carried(samples: Floats, old: Network, new: Network, design: Design) -> Floats:
    """States (..., N, n) of one network in the order of another; an inner net like its terminal."""
    if tuple(old.index) == tuple(new.index):
        return samples
    columns = [old.potential(_outer(design, name, old), samples) for name in new.index]
    return np.stack(columns, axis=-1)


def _outer(design: Design, name: str, network: Network) -> str:
    if name in network.index:
        return name
    ref, _, inner = name.partition(":")
    part = design.parts[ref]
    if isinstance(part, Capacitor):
        return part.nets[0]
    assert isinstance(part, Mosfet)
    return part.gate if inner == "gate" else part.drain
