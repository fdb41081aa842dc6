"""Voltages between nets that are watched along a transient, and transistors that break down."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from tolsim.circuit.devices import Devices, Floats, Ramps
from tolsim.circuit.network import Network

BREAKDOWN_SLOPE = 0.1  # ohm, in avalanche: common practice, no source
BREAKDOWN_KNEE = 0.2  # V

Pairs = Mapping[str, tuple[str, str]]  # name -> nets


@dataclass(frozen=True)
class Probe:
    """A voltage as sign * (state or port) + offset; `column` counts states, then ports."""

    column: int
    sign: float
    offset: Floats  # (N,)

    def ends(self, low: Floats, high: Floats) -> tuple[Floats, Floats]:
        """Lowest and highest voltage from ranges (..., w) of all states and ports."""
        one = self.sign * low[:, self.column] + self.offset
        other = self.sign * high[:, self.column] + self.offset
        return np.minimum(one, other), np.maximum(one, other)


def probed(network: Network, pairs: Pairs) -> tuple[Network, dict[str, Probe]]:
    """The network with every pair of nets to be seen, and where.

    A pair with one fixed net is a state; for others a port is added that no device touches.
    """
    probes: dict[str, Probe] = {}
    rows: list[Floats] = []
    offsets: list[Floats] = []
    for name, (plus, minus) in pairs.items():
        seen = [net in network.index for net in (plus, minus)]
        if not any(seen):
            continue
        if all(seen):
            row = np.zeros(network.states)
            row[network.index[plus]], row[network.index[minus]] = 1.0, -1.0
            probes[name] = Probe(
                network.states + len(network.D) + len(rows), 1.0, np.zeros(network.units)
            )
            rows.append(row)
            offsets.append(np.zeros(network.units))
        elif seen[0]:
            probes[name] = Probe(network.index[plus], 1.0, -network.known[minus])
        else:
            probes[name] = Probe(network.index[minus], -1.0, network.known[plus])
    if not rows:
        return network, probes
    wider = replace(
        network,
        D=np.concatenate([network.D, rows]),
        v0=np.concatenate([network.v0, np.stack(offsets, axis=1)], axis=1),
        devices=_widened(network.devices, len(rows)),
    )
    return wider, probes


def _widened(devices: Devices, more: int) -> Devices:
    """The same devices over more ports, which none of them touches."""
    elements = tuple(
        replace(  # type: ignore[type-var]
            each,
            sense=np.pad(each.sense, ((0, 0), (0, more))),
            inject=np.pad(each.inject, ((0, more), (0, 0))),
        )
        for each in devices.elements
    )
    return Devices(elements, devices.ports + more)


def breaking_down(network: Network, volts: Mapping[str, float]) -> Network:
    """The network with transistors that hold their drain at a voltage by avalanche.

    Parameters
    ----------
    volts : mapping of str to float
        Breakdown voltage of each transistor: its rating, for a sheet promises no more.
    """
    ports = network.devices.ports
    sense = np.zeros((len(volts), ports))
    for row, ref in enumerate(volts):
        sense[row, network.ports[f"{ref}:ds"]] = 1.0
    column = np.array(list(volts.values()))[:, None]
    avalanche = Ramps(
        names=tuple(f"{ref}:avalanche" for ref in volts),
        sense=sense,
        inject=sense.T.copy(),
        offset=column,
        knee=np.full_like(column, BREAKDOWN_KNEE),
        linear=np.full_like(column, 1.0 / BREAKDOWN_SLOPE),
        square=np.zeros_like(column),
    )
    return replace(network, devices=Devices((*network.devices.elements, avalanche), ports))
