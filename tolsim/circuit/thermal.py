"""Junction temperatures: device values at temperature, dissipation along an orbit, heat balance.

Threshold falls linearly, gain falls as (T/298.15 K)^-1.5 (mobility), the drift region rises as
(T/298.15 K)^2.3; the exponents are the part's own.  The junction sits at ambient plus thermal
resistance times mean dissipation: a fixed point that may not exist (runaway).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from tolsim.circuit.assembly import PartValues, assemble
from tolsim.circuit.devices import Floats, Ints
from tolsim.circuit.kernels import element_waves
from tolsim.circuit.network import Network
from tolsim.design import Design
from tolsim.parts import Mosfet

REFERENCE_C = 25.0
KELVIN = 273.15
HIGHEST_C = 300.0  # silicon is long gone: a balance above this is no balance


def mosfets(design: Design) -> dict[str, Mosfet]:
    """The transistors of a design by reference designator."""
    return {ref: part for ref, part in design.parts.items() if isinstance(part, Mosfet)}


def heats(design: Design) -> bool:
    """Whether any junction follows the losses of its transistor."""
    return any(part.thermal_resistance for part in mosfets(design).values())


def hot_values(design: Design, values: PartValues, junctions: Mapping[str, Floats]) -> PartValues:
    """Part values with the MOSFET parameters moved from 25 degC to their junction temperature."""
    hot = dict(values)
    for ref, part in mosfets(design).items():
        celsius = junctions[ref]
        ratio = (celsius + KELVIN) / (REFERENCE_C + KELVIN)
        hot[f"{ref}.threshold"] = values[f"{ref}.threshold"] + part.threshold_slope * (
            celsius - REFERENCE_C
        )
        hot[f"{ref}.gain"] = values[f"{ref}.gain"] * ratio**part.gain_exponent
        hot[f"{ref}.drift_resistance"] = (
            values[f"{ref}.drift_resistance"] * ratio**part.drift_exponent
        )
    return hot


@dataclass(frozen=True)
class Case:
    """N units of a design at one condition and load state: what the solvers are asked to solve."""

    design: Design
    values: PartValues  # (N,) each
    heated: bool = True  # False holds every junction at `ambient`

    @property
    def units(self) -> int:
        """N."""
        return len(self.values["ambient"])

    def take(self, units: Ints) -> Case:
        """Return the case for some of the units."""
        picked = {key: value[units] for key, value in self.values.items()}
        return Case(self.design, picked, self.heated)

    def network(self, junctions: Mapping[str, Floats], *, live_rails: bool = False) -> Network:
        """Return the circuit at junction temperatures (N,) of every MOSFET, degC."""
        hot = hot_values(self.design, self.values, junctions)
        return assemble(self.design, hot, live_rails=live_rails)

    def cold_junctions(self) -> dict[str, Floats]:
        """Every junction at ambient."""
        return {ref: self.values["ambient"].copy() for ref in mosfets(self.design)}

    def balance(self, network: Network, samples: Floats) -> dict[str, Floats]:
        """Junction temperatures that the dissipation of an orbit would lead to, degC."""
        ambient = self.values["ambient"]
        if not self.heated:
            return self.cold_junctions()
        losses = dissipation(self.design, network, samples)
        return {
            ref: ambient + (part.thermal_resistance or 0.0) * losses[ref]
            for ref, part in mosfets(self.design).items()
        }


def dissipation(design: Design, network: Network, samples: Floats) -> dict[str, Floats]:
    """Mean dissipation of each MOSFET over one period, W: channel, body diode, drift, gate.

    Parameters
    ----------
    samples : (m + 1, N, n)
        States over a period, first = last.
    """
    x = samples[:-1]
    v = network.port_waves(x)
    ends = ("forward", "reverse", "body")
    inner = {f"{ref}:{end}" for ref in mosfets(design) for end in ends}
    currents = element_waves(network.devices, v, "current", inner)
    losses = {}
    for ref, part in mosfets(design).items():
        vds = v[network.ports[f"{ref}:ds"]]
        inside = currents[f"{ref}:forward"] + currents[f"{ref}:reverse"] - currents[f"{ref}:body"]
        losses[ref] = np.mean(inside * vds, axis=0) + _series_loss(network, ref, part, x)
    return losses


def _series_loss(network: Network, ref: str, part: Mosfet, x: Floats) -> Floats:
    """Mean loss in the drift and gate resistances, from the drops across them."""
    total = np.zeros(network.units)
    for outer, inner in ((part.drain, f"{ref}:drain"), (part.gate, f"{ref}:gate")):
        if inner not in network.index:
            continue
        drop = network.potential(outer, x) - network.potential(inner, x)
        total = total + np.mean(drop**2, axis=0) * network.series_conductance[inner]
    return total
