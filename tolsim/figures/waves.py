"""Voltages and currents of every part along one period, on an even grid of m points.

Arrays are (m, N).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from tolsim.circuit.bulk.kernels import element_currents
from tolsim.circuit.devices import Floats, Junctions
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
        """Port voltages (m, N, p), each port's wave in one piece of memory."""
        m, units, _ = self.x.shape
        volts = np.empty((len(self.network.D), m, units))
        for port, row in enumerate(self.network.D):
            volts[port] = self.network.v0[:, port]
            for state in np.flatnonzero(row):
                volts[port] += row[state] * self.x[..., state]
        return volts.transpose(1, 2, 0)

    @cached_property
    def currents(self) -> dict[str, Floats]:
        """Current of every nonlinear element, along its own controlling direction."""
        return element_currents(self.network.devices, self.ports.transpose(2, 0, 1))

    def charge(self, name: str) -> Floats:
        """Charge of one junction element ("Q1:ds"), C, (m, N)."""
        for elements in self.network.devices.elements:
            if isinstance(elements, Junctions) and name in elements.names:
                return elements.only(name).respond_along(self.ports.transpose(2, 0, 1))
        raise KeyError(name)

    def net(self, name: str) -> Floats:
        """Voltage of a net."""
        return self.network.potential(name, self.x)

    def across(self, plus: str, minus: str) -> Floats:
        """Voltage between two nets, (m, N)."""
        return self.net(plus) - self.net(minus)

    def port(self, name: str) -> Floats:
        """Voltage of a device's port."""
        return self.ports[..., self.network.ports[name]]

    def branch(self, ref: str) -> Floats:
        """Current of an inductor or load loop."""
        return self.x[..., self.network.index[ref]]

    def rate(self, wave: Floats) -> Floats:
        """Time derivative, fourth-order central differences around the period."""
        near = np.roll(wave, -1, axis=0) - np.roll(wave, 1, axis=0)
        far = np.roll(wave, -2, axis=0) - np.roll(wave, 2, axis=0)
        step = self.period / len(wave)
        return (8 * near - far) / (12 * step)

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
