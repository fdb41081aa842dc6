"""Harmonic balance residual of U units side by side, in place.

With the states as Fourier coefficients X (n, K) on a grid of m points (see `grid`), w the angular
frequency, D the derivative by phase, f and q the port currents and charges,

    R = F X + w D [ E X + P Q ] + P F_h - B e_0 (- drive spectra)          (n, K)
    0 = <D X_ref, X>_S                    phase, unless driven             (1,)
    0 = (T - T_ambient - R_th P_loss) / 100 K     for every heated junction

(Nakhla, Vlach, IEEE Trans. Circuits Syst. CAS-23 (1976) 85-91, with all states kept, so that a
singular E needs no special case.)  Q and F_h are Fourier coefficients of q(v(t)) and f(v(t)).
The unknowns z are (X / scale, ln w / w_ref, T / 100 K), unit axis last: (unknowns, U).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.bulk.grid import Grid
from tolsim.circuit.bulk.unit_table import Place, Topology, UnitTable, drive_spectra
from tolsim.circuit.devices import Floats, Ints
from tolsim.circuit.kernels import Scratch, weighted
from tolsim.circuit.thermal import KELVIN, REFERENCE_C, mosfets
from tolsim.design import Design

HEAT_SCALE = 100.0  # K, unit of the temperature unknowns
SMALL_VOLTS = 1e-5  # change that a loss is differentiated by
LONGEST_LOG = 0.5  # ln of the frequency ratio, and
HOTTEST = 1000.0  # degC: bounds that keep a unit that runs away computable


@dataclass(frozen=True)
class Anchor:
    """Reference of the unknowns: frequency unit and phase condition, from the nominal orbit."""

    omega: float  # rad/s
    phase: Floats  # (n K,) row of the phase condition in scaled unknowns


@dataclass(frozen=True)
class HotSpot:
    """Where a junction temperature enters."""

    ref: str
    kernels: tuple[int, int, int]  # forward, reverse, body
    drift: tuple[int, int] | None  # states of the drain terminal (-1: held by a supply) and inside
    gate: tuple[int, int] | None
    threshold_slope: float
    gain_exponent: float
    drift_exponent: float
    thermal_resistance: float


class Residual:
    """Work space for U units; `load` puts units into slots, `evaluate` gives R."""

    def __init__(
        self,
        design: Design,
        table: UnitTable,
        topology: Topology,
        grid: Grid,
        anchor: Anchor,
        units: int,
    ) -> None:
        self.table, self.topology, self.grid, self.anchor = table, topology, grid, anchor
        self.units = units
        dtype = table.device.dtype
        n, K, m = topology.states, grid.size, grid.points
        ports = len(table.network.D)
        self.linear = np.ones((len(table.linear), units))
        self.device = np.ones((len(table.device), units), dtype)
        self._out = np.empty((topology.unknowns(grid), units))
        self._slab, self._stored = np.empty((K, units)), np.empty((n, K, units))
        self._v = np.empty((ports, m, units), dtype)
        self._f, self._q = np.empty_like(self._v), np.empty_like(self._v)
        self._narrow = np.empty((K, units), dtype)
        self._scratch = Scratch.of(m, units, dtype.type)
        self._synthesis = grid.synthesis.astype(dtype)
        self._analysis = grid.analysis.astype(dtype)
        self._ports = [_port_weights(row, topology.scale) for row in table.network.D]
        self._spectra = drive_spectra(table.network, grid)
        self._hot = _hot_spots(design, table, topology)

    def load(self, slots: Ints, units: Ints) -> None:
        """Put units of the table into slots."""
        self.linear[:, slots] = self.table.linear[:, units]
        self.device[:, slots] = self.table.device[:, units]

    def _rows(self, name: str) -> Floats:
        return self.linear[self.table.entries[name]]

    def omega(self, z: Floats) -> Floats:
        """Angular frequency (U,)."""
        if self.topology.driven:
            return np.full(z.shape[1], self.anchor.omega)
        y = z[self.topology.states * self.grid.size]
        return self.anchor.omega * np.exp(np.clip(y, -LONGEST_LOG, LONGEST_LOG))

    def evaluate(self, z: Floats) -> Floats:
        """R (unknowns, U) at z; the array is overwritten by the next call."""
        n, K, h = self.topology.states, self.grid.size, self.grid.harmonics
        x = z[: n * K].reshape(n, K, self.units)
        out = self._out[: n * K].reshape(n, K, self.units)
        hot = z[len(z) - len(self._hot) :] * HEAT_SCALE
        self._conduct(x, out)
        device = self._heat_devices(hot)
        drifts = self._heat_drifts(x, hot, out)
        losses = self._evaluate_devices(x, device)
        stored = self._stored
        stored[:] = 0.0
        self._products(self.topology.storage, "E", x, stored)
        self._inject(out, stored)
        wave = self._slab
        turning = self.omega(z) * self.grid.orders
        for state in range(n):
            np.multiply(stored[state, h + 1 :], turning, out=wave[:h])
            out[state, 1 : h + 1] += wave[:h]
            np.multiply(stored[state, 1 : h + 1], turning, out=wave[:h])
            out[state, h + 1 :] -= wave[:h]
        if not self.topology.driven:
            self._out[n * K] = self.anchor.phase @ z[: n * K]
        ambient = self._rows("ambient")[0]
        for k, spot in enumerate(self._hot):
            rise = spot.thermal_resistance * (losses[k] + drifts[k])
            self._out[k - len(self._hot)] = (hot[k] - ambient - rise) / HEAT_SCALE
        return self._out

    def border_rows(self, z: Floats) -> Floats:
        """Derivatives (b, n K) of phase condition and heat balances by the states of one unit.

        Parameters
        ----------
        z : (unknowns,)
            Of the unit that sits in all slots.
        """
        n, K = self.topology.states, self.grid.size
        x = z[: n * K].reshape(n, K)
        hot = z[len(z) - len(self._hot) :] * HEAT_SCALE
        rows = [] if self.topology.driven else [self.anchor.phase]
        if self._hot:
            device = self._heat_devices(np.repeat(hot[:, None], self.units, axis=1))[:, :1]
            volts = self.table.network.D @ (x * self.topology.scale[:, None])
            volts[:, 0] += self._rows("v0")[:, 0]
            waves = volts @ self.grid.synthesis.T
            for k, spot in enumerate(self._hot):
                row = self.table.network.D.T @ self._loss_slopes(spot, waves, device)
                row += self._drop_slopes(k, float(hot[k]), x)
                row *= -spot.thermal_resistance / HEAT_SCALE * self.topology.scale[:, None]
                rows.append(row.ravel())
        return np.array(rows).reshape(len(rows), n * K)

    def _loss_slopes(self, spot: HotSpot, waves: Floats, device: NDArray[np.floating]) -> Floats:
        """Derivatives (p, K) of the loss in channel and body diode by the port coefficients.

        The loss is a mean over time of something local in time, so that one small change per port
        serves all coefficients.
        """
        ports, m = waves.shape
        v = np.repeat(waves[:, :, None], 2 * ports, axis=2)
        places = np.arange(ports)
        v[places, :, places] += SMALL_VOLTS
        v[places, :, ports + places] -= SMALL_VOLTS
        scratch = Scratch.of(m, 2 * ports, np.float64)
        loss = np.zeros((m, 2 * ports))
        for place in spot.kernels:
            kernel = self.table.kernels[place]
            amount = kernel.evaluate(v, tuple(device[self.table.kernel_rows[place]]), scratch)
            if amount is not None:
                loss += amount * weighted(v, kernel.inject, scratch.sum)
        slopes = (loss[:, :ports] - loss[:, ports:]).T / (2 * SMALL_VOLTS)
        return slopes @ self.grid.synthesis / m

    def _drop_slopes(self, k: int, celsius: float, x: Floats) -> Floats:
        """Derivatives (n, K) of the losses in drift and gate resistances, by unscaled states."""
        spot, slopes = self._hot[k], np.zeros_like(x)
        warm = float(_ratio(np.array(celsius))) ** -spot.drift_exponent
        for ends, name, factor in ((spot.drift, "drift", warm), (spot.gate, "gate", 1.0)):
            if ends is None:
                continue
            known = self._rows("known drain" if name == "drift" else "known gate")[k]
            copies = np.repeat(x[:, :, None], self.units, axis=2)
            steep = factor * self._rows(name)[k, 0] * self._drop(copies, ends, known)[:, 0]
            steep[0] *= 2.0  # the mean of a square counts a constant in full, a wave by half
            outer, inner = ends
            slopes[inner] -= steep
            if outer >= 0:
                slopes[outer] += steep
        return slopes

    def _products(self, places: tuple[Place, ...], name: str, x: Floats, out: Floats) -> None:
        for (i, j), entry in zip(places, self._rows(name), strict=True):
            np.multiply(x[j], entry, out=self._slab)
            out[i] += self._slab

    def _conduct(self, x: Floats, out: Floats) -> None:
        """F X - sources."""
        out[:] = 0.0
        self._products(self.topology.conduction, "F", x, out)
        for state, level in zip(self.table.sources, self._rows("source"), strict=True):
            out[state, 0] -= level
        for (state, drive), reach in zip(self.table.drives, self._rows("drive"), strict=True):
            out[state] -= self._spectra[drive][:, None] * reach

    def _evaluate_devices(self, x: Floats, device: NDArray[np.floating]) -> list[Floats]:
        """Port currents and charges on the grid; mean losses of the hot transistors."""
        for port, (weights, offset) in enumerate(zip(self._ports, self._rows("v0"), strict=True)):
            coefficients = _combine(x, weights, self._slab)
            coefficients[0] += offset
            np.copyto(self._narrow, coefficients, casting="same_kind")
            np.matmul(self._synthesis, self._narrow, out=self._v[port])
        self._f[:], self._q[:] = 0, 0
        amounts = {"current": self._f, "charge": self._q}
        hot_kernels = {k: place for place, spot in enumerate(self._hot) for k in spot.kernels}
        losses = [np.zeros(self.units) for _ in self._hot]
        for k, kernel in enumerate(self.table.kernels):
            rows = tuple(device[self.table.kernel_rows[k]])
            amount = kernel.evaluate(self._v, rows, self._scratch)
            if amount is None:
                continue
            for port, weight in kernel.inject:
                target = amounts[kernel.kind][port]
                if weight == 1.0:
                    target += amount
                elif weight == -1.0:
                    target -= amount
                else:
                    target += weight * amount
            if k in hot_kernels:
                amount *= weighted(self._v, kernel.inject, self._scratch.sum)
                losses[hot_kernels[k]] += amount.mean(axis=0)
        return losses

    def _inject(self, out: Floats, stored: Floats) -> None:
        """P F_h into R, P Q into the stored charges (both through D' without the scales)."""
        for port, row in enumerate(self.table.network.D):
            for wave, target in ((self._f, out), (self._q, stored)):
                np.matmul(self._analysis, wave[port], out=self._narrow)
                np.copyto(self._slab, self._narrow)
                for state in np.flatnonzero(row):
                    if row[state] > 0:
                        target[state] += self._slab
                    else:
                        target[state] -= self._slab

    def _heat_devices(self, hot: Floats) -> NDArray[np.floating]:
        """Device rows at the junction temperatures (see `thermal.hot_values`)."""
        if not self._hot:
            return self.device
        rows = self.device.copy()
        for spot, celsius in zip(self._hot, hot, strict=True):
            ratio = _ratio(celsius)
            for k in spot.kernels[:2]:
                offset, _, square = range(*self.table.kernel_rows[k].indices(len(rows)))
                rows[offset] += (spot.threshold_slope * (celsius - REFERENCE_C)).astype(rows.dtype)
                rows[square] *= (ratio**spot.gain_exponent).astype(rows.dtype)
        return rows

    def _heat_drifts(self, x: Floats, hot: Floats, out: Floats) -> list[Floats]:
        """Correct R for drift resistances off 25 degC; losses in drift and gate resistances."""
        losses = []
        for k, (spot, celsius) in enumerate(zip(self._hot, hot, strict=True)):
            loss = np.zeros(self.units)
            if spot.drift is not None:
                cold = self._rows("drift")[k]
                conductance = cold * _ratio(celsius) ** -spot.drift_exponent
                drop = self._drop(x, spot.drift, self._rows("known drain")[k])
                loss += conductance * _mean_square(drop)
                drop *= conductance - cold
                outer, inner = spot.drift
                if outer >= 0:
                    out[outer] += drop
                out[inner] -= drop
            if spot.gate is not None:
                drop = self._drop(x, spot.gate, self._rows("known gate")[k])
                loss += self._rows("gate")[k] * _mean_square(drop)
            losses.append(loss)
        return losses

    def _drop(self, x: Floats, ends: tuple[int, int], known: Floats) -> Floats:
        """Coefficients of the voltage between an outer net and the inner one."""
        outer, inner = ends
        drop = np.multiply(x[inner], -self.topology.scale[inner], out=self._slab)
        if outer >= 0:
            drop += self.topology.scale[outer] * x[outer]
        else:
            drop[0] += known
        return drop


def _ratio(celsius: Floats) -> Floats:
    kelvin = np.clip(celsius, -KELVIN + 50.0, HOTTEST) + KELVIN
    return kelvin / (REFERENCE_C + KELVIN)


def _mean_square(coefficients: Floats) -> Floats:
    """Mean square over a period (Parseval)."""
    square = 0.5 * np.sum(coefficients**2, axis=0)
    return square + 0.5 * coefficients[0] ** 2


def _port_weights(row: Floats, scale: Floats) -> tuple[tuple[int, float], ...]:
    return tuple((int(state), float(row[state] * scale[state])) for state in np.flatnonzero(row))


def _combine(x: Floats, weights: tuple[tuple[int, float], ...], out: Floats) -> Floats:
    """Weighted sum of state coefficients, (K, U)."""
    if not weights:
        out[:] = 0.0
        return out
    (state, weight), *others = weights
    np.multiply(x[state], weight, out=out)
    for other, share in others:
        out += share * x[other]
    return out


def _channel(names: list[str], ref: str) -> tuple[int, int, int]:
    forward, reverse, body = (
        names.index(f"{ref}:{name}") for name in ("forward", "reverse", "body")
    )
    return forward, reverse, body


def _hot_spots(design: Design, table: UnitTable, topology: Topology) -> tuple[HotSpot, ...]:
    names = [kernel.name for kernel in table.kernels]
    index = table.network.index
    spots = []
    for ref in topology.heated:
        part = mosfets(design)[ref]

        def ends(outer: str, inner: str) -> tuple[int, int] | None:
            return (index.get(outer, -1), index[inner]) if inner in index else None

        spots.append(
            HotSpot(
                ref,
                _channel(names, ref),
                ends(part.drain, f"{ref}:drain"),
                ends(part.gate, f"{ref}:gate"),
                part.threshold_slope,
                part.gain_exponent,
                part.drift_exponent,
                part.thermal_resistance or 0.0,
            )
        )
    return tuple(spots)
