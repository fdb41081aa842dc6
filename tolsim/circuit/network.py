"""The circuit of N units as arrays: linear matrices, ports, devices.

Modified nodal analysis with unknowns x = net voltages and inductor currents, shape (N, n):

    d/dt [ E x + P q(v) ] + F x + P f(v) = b(t),      v = D x + v0,   P = D'

E, F (N, n, n); D (p, n) is the same for every unit; b = `source` + `drive_matrix` u(phase) with
u the periodic drive waveforms.  Nets held by an ideal supply are not unknowns: their voltages
stand in `source` and v0.

With live rails every net but ground is an unknown, and b gains the sum over the rails of
level_r(t) `rail_matrix`[:, :, r], level 1 being the rail's full voltage.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.devices import Devices, Floats, Ints


@dataclass(frozen=True)
class SupplyCurrent:
    """Current a rail delivers: row . x + level offset + through . f (conduction only, A).

    The level is 1 but in networks with live rails, where it is that of this rail.
    """

    row: Floats  # (N, n)
    offset: Floats  # (N,)
    through: Floats  # (p,)
    volts: Floats  # (N,) voltage of the ideal source

    def at(self, x: Floats, f: Floats, level: Floats | float = 1.0) -> Floats:
        """Current (..., N) for states (..., N, n), port currents (..., N, p), levels (..., N)."""
        return np.einsum("...un,un->...u", x, self.row) + level * self.offset + f @ self.through

    def take(self, units: Ints) -> SupplyCurrent:
        """Return the same supply for some of the units."""
        return replace(
            self, row=self.row[units], offset=self.offset[units], volts=self.volts[units]
        )


@dataclass(frozen=True)
class Network:
    """N units of one topology, ready for every solver."""

    E: Floats  # (N, n, n)
    F: Floats  # (N, n, n)
    D: Floats  # (p, n)
    v0: Floats  # (N, p)
    source: Floats  # (N, n)
    devices: Devices
    index: Mapping[str, int]  # "net" or "L1" (inductor current) -> position in x
    branches: frozenset[str]  # the names in `index` that are currents
    ports: Mapping[str, int]  # "Q1:gs" -> port
    known: Mapping[str, Floats]  # nets of fixed voltage -> (N,)
    supplies: Mapping[str, SupplyCurrent]  # rail name -> its current
    series_conductance: Mapping[str, Floats]  # inner net "Q1:drain" -> (N,) S to its outer net
    drive_matrix: Floats | None = None  # (N, n, d)
    drive_shape: DriveShape | None = None
    drive_frequency: float | None = None
    leak: float = 0.0  # S, from every net to ground
    rail_matrix: Floats | None = None  # (N, n, R), only with live rails
    rail_names: tuple[str, ...] = ()  # of its R columns
    held: Floats | None = None  # (N, n) C that fixed nets put on the others; None: nothing

    @property
    def units(self) -> int:
        """N."""
        return int(self.E.shape[0])

    @property
    def states(self) -> int:
        """n, the number of unknowns."""
        return int(self.E.shape[1])

    def take(self, units: Ints) -> Network:
        """The same circuit for some of the units (indices, repeats allowed)."""
        return replace(
            self,
            E=self.E[units],
            F=self.F[units],
            v0=self.v0[units],
            source=self.source[units],
            devices=self.devices.take(units),
            known={net: volts[units] for net, volts in self.known.items()},
            supplies={rail: supply.take(units) for rail, supply in self.supplies.items()},
            series_conductance={net: g[units] for net, g in self.series_conductance.items()},
            drive_matrix=None if self.drive_matrix is None else self.drive_matrix[units],
            drive_shape=None if self.drive_shape is None else self.drive_shape.take(units),
            rail_matrix=None if self.rail_matrix is None else self.rail_matrix[units],
            held=None if self.held is None else self.held[units],
        )

    def raised(self, level: Floats | float = 1.0) -> Network:
        """The circuit with its live rails held at levels (one, or (R,), or (N, R)) for good."""
        if self.rail_matrix is None:
            return self
        levels = np.broadcast_to(level, (self.units, len(self.rail_names)))
        pushed = np.einsum("unr,ur->un", self.rail_matrix, levels)
        return replace(self, source=self.source + pushed, rail_matrix=None, rail_names=())

    def port_voltages(self, x: Floats) -> Floats:
        """v = D x + v0 for x of shape (..., N, n)."""
        return x @ self.D.T + self.v0

    def port_waves(self, x: Floats) -> Floats:
        """Port voltages (p, m, N) along states x (m, N, n), each wave in one piece of memory."""
        volts = np.empty((len(self.D), *x.shape[:2]))
        for port, row in enumerate(self.D):
            volts[port] = self.v0[:, port]
            for state in np.flatnonzero(row):
                volts[port] += row[state] * x[..., state]
        return volts

    def potential(self, net: str, x: Floats) -> Floats:
        """Voltage of a net for x of shape (..., N, n)."""
        if net in self.index:
            return x[..., self.index[net]]
        return np.broadcast_to(self.known[net], x.shape[:-1])

    def source_at(self, phase: float) -> Floats:
        """b at a phase of the drive period, (N, n)."""
        if self.drive_matrix is None or self.drive_shape is None:
            return self.source
        levels = self.drive_shape.at(phase)
        return self.source + np.einsum("und,ud->un", self.drive_matrix, levels)

    def mean_source(self) -> Floats:
        """b averaged over a drive period (a constant where there is no drive), (N, n)."""
        if self.drive_matrix is None:
            return self.source
        phases = np.arange(64) / 64
        return np.mean([self.source_at(phase) for phase in phases], axis=0)


@dataclass(frozen=True)
class DriveShape:
    """Periodic waveforms of d drive sources: square with cosine edges, or sine.

    `edge` is the rise time as a share of the period; a square wave crosses its middle at
    phase 0 (rising) and at phase `duty` (falling).
    """

    low: Floats  # (N, d)
    high: Floats  # (N, d)
    duty: NDArray[np.float64]  # (d,)
    edge: NDArray[np.float64]  # (d,)
    sine: NDArray[np.bool_]  # (d,)

    def at(self, phase: float | Floats) -> Floats:
        """Source voltages (N, d) at a phase in periods; for a single unit also phases (m, 1)."""
        turn = phase % 1.0
        half = np.maximum(self.edge / 2, 1e-12)

        def risen(distance: Floats) -> Floats:
            return 0.5 + 0.5 * np.sin(0.5 * np.pi * np.clip(distance / half, -1.0, 1.0))

        # the rising edge around phase 0 is seen from both ends of the period
        rising = risen(turn + 0 * half), risen(turn - 1.0 + 0 * half)
        square = rising[0] - risen(turn - self.duty) + rising[1]
        wave = np.where(self.sine, 0.5 + 0.5 * np.sin(2 * np.pi * turn), square)
        return self.low + (self.high - self.low) * wave

    def take(self, units: Ints) -> DriveShape:
        """Return the same waveforms for some of the units."""
        return replace(self, low=self.low[units], high=self.high[units])
