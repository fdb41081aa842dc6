"""Voltages and currents of every part along one period, on an even grid of m points.

Arrays are (m, N).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from tolsim.circuit.devices import Floats
from tolsim.circuit.kernels import element_waves
from tolsim.circuit.network import Network
from tolsim.circuit.orbit import Solution
from tolsim.parts import Capacitor


@dataclass(frozen=True)
class Waves:
    """One period of N units."""

    network: Network
    x: Floats  # (m, N, n)
    period: Floats  # (N,)

    @classmethod
    def of(cls, network: Network, solution: Solution) -> Waves:
        """Waves of solved orbits; the last sample, equal to the first, is left out."""
        # each state's wave in one piece of memory, seen as (m, N, n)
        waves = np.ascontiguousarray(solution.samples[:-1].transpose(2, 0, 1))
        return cls(network, waves.transpose(1, 2, 0), solution.period)

    @cached_property
    def ports(self) -> Floats:
        """Port voltages (p, m, N), each port's wave in one piece of memory."""
        return self.network.port_waves(self.x)

    @cached_property
    def currents(self) -> dict[str, Floats]:
        """Current of every nonlinear element, along its own controlling direction."""
        return element_waves(self.network.devices, self.ports, "current")

    @cached_property
    def charges(self) -> dict[str, Floats]:
        """Charge of every nonlinear element ("Q1:ds"), C, (m, N)."""
        return element_waves(self.network.devices, self.ports, "charge")

    def net(self, name: str) -> Floats:
        """Voltage of a net."""
        return self.network.potential(name, self.x)

    def across(self, plus: str, minus: str) -> Floats:
        """Voltage between two nets, (m, N)."""
        return self.net(plus) - self.net(minus)

    def port(self, name: str) -> Floats:
        """Voltage of a device's port."""
        return self.ports[self.network.ports[name]]

    def branch(self, ref: str) -> Floats:
        """Current of an inductor or load loop."""
        return self.x[..., self.network.index[ref]]

    def rate(self, wave: Floats) -> Floats:
        """Time derivative, fourth-order central differences around the period."""
        around = np.concatenate([wave[-2:], wave, wave[:2]])
        slope = around[3:-1] - around[1:-3]
        slope *= 8
        slope -= around[4:] - around[:-4]
        slope /= 12 * (self.period / len(wave))
        return slope

    def series_current(self, outer: str, inner: str) -> Floats:
        """Current through the resistance between a terminal and the inner net of a part."""
        return self.across(outer, inner) * self.network.series_conductance[inner]

    def capacitor_current(self, ref: str, part: Capacitor, capacitance: Floats) -> Floats:
        """Current of a capacitor (whole bank)."""
        plate = f"{ref}:plate"
        if plate in self.network.index:
            return self.series_current(part.nets[0], plate)
        voltage = self.across(*part.nets)
        if part.half_voltage is None:
            return capacitance * self.rate(voltage)
        x = voltage / part.half_voltage
        left = part.bias_floor + (1 - part.bias_floor) / (1 + x * x)
        return capacitance * left * self.rate(voltage)
