"""Nonlinear devices as three kinds of elements over the ports, with exact derivatives.

`v` holds the port voltages, shape (p, N), unit axis last.  An element sees one controlling
voltage u = `sense` v - offset and acts on the ports through `inject`:

    Ramps       current  i = a S(u) + b/2 S(u)^2,   S(u) = s ln(1 + exp(u/s))
    Junctions   charge   q = integral of C0 / (1 + u/phi)^m for u > 0, C0 u below
    others      charge of a class-2 capacitor, flux of a saturating core

A diode or one side of a clamp is one ramp (a); a MOSFET channel is two,
i_d = k/2 [ S(vgs - Vt)^2 - S(vgs - vds - Vt)^2 ] (b = k and -k): Enz, Krummenacher, Vittoz,
"An analytical MOS transistor model valid in all regions of operation", Analog Integrated Circuits
and Signal Processing 8 (1995) 83-114.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import Protocol, Self

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import PchipInterpolator

Floats = NDArray[np.float64]
Ints = NDArray[np.intp]

SQUARE_ROOT = 0.5  # grading of an abrupt junction


class Elements(Protocol):
    """A set of like elements.  `kind` says whether they give currents or charges."""

    @property
    def names(self) -> tuple[str, ...]:
        """Their e names, like "Q1:forward"."""

    @property
    def kind(self) -> str:
        """What they answer with: "current" or "charge"."""

    @property
    def sense(self) -> Floats:
        """Weights of the port voltages in the controlling voltages, (e, p)."""

    @property
    def inject(self) -> Floats:
        """Weights of the answers in the port currents or charges, (p, e)."""

    def respond(self, v: Floats) -> tuple[Floats, Floats]:
        """Answers and their slopes d/du, (e, N) each, at port voltages (p, N)."""

    def take(self, units: Ints) -> Self:
        """Return the same elements for some of the units."""


def soft_ramp(u: Floats, s: Floats) -> tuple[Floats, Floats]:
    """Smooth max(u, 0): s ln(1 + exp(u/s)) and its derivative, without overflow."""
    decay = np.exp(-np.abs(u) / s)
    total = 1.0 + decay
    return np.maximum(u, 0.0) + s * np.log(total), np.where(u >= 0.0, 1.0, decay) / total


def pick(values: Floats, units: Ints) -> Floats:
    """Units of an array whose last axis is the unit; a last axis of 1 means "same for all"."""
    return values if values.shape[-1] == 1 else values[..., units]


@dataclass(frozen=True)
class Ramps:
    """e smooth ramps: i = linear S(u) + square/2 S(u)^2, u = sense v - offset."""

    names: tuple[str, ...]  # "Q1:forward", "Q1:reverse", "Q1:body", "D1", "Z1:up", "Z1:down"
    sense: Floats
    inject: Floats
    offset: Floats  # (e, N)
    knee: Floats  # (e, 1)
    linear: Floats  # (e, N)
    square: Floats  # (e, N)
    kind: str = "current"

    def respond(self, v: Floats) -> tuple[Floats, Floats]:
        """Currents, A, and their slopes, S: (e, N) each, at port voltages (p, N)."""
        ramp, slope = soft_ramp(self.sense @ v - self.offset, self.knee)
        half = 0.5 * self.square * ramp
        return (self.linear + half) * ramp, (self.linear + 2.0 * half) * slope

    def take(self, units: Ints) -> Ramps:
        """Return the same elements for some of the units."""
        return replace(
            self,
            offset=pick(self.offset, units),
            linear=pick(self.linear, units),
            square=pick(self.square, units),
        )


@dataclass(frozen=True)
class Junctions:
    """e depletion charges: C(u) = c0 / (1 + u/phi)^m for u > 0, c0 below; u = sense v."""

    names: tuple[str, ...]
    sense: Floats
    inject: Floats
    c0: Floats  # (e, N)
    phi: Floats  # (e, 1)
    grading: Floats  # (e, 1)
    kind: str = "charge"

    @cached_property
    def _square_root(self) -> bool:
        # several times faster than a general power, and by far the usual grading
        return bool(np.all(self.grading == SQUARE_ROOT))

    def respond(self, v: Floats) -> tuple[Floats, Floats]:
        """Charges, C, and capacitances, F: (e, N) each, at port voltages (p, N)."""
        u = self.sense @ v
        stretch = 1.0 + np.maximum(u, 0.0) / self.phi
        power = np.sqrt(stretch) if self._square_root else stretch**self.grading
        depth = self.phi / (1.0 - self.grading) * (stretch / power - 1.0)
        return self.c0 * (depth + np.minimum(u, 0.0)), self.c0 / power

    def take(self, units: Ints) -> Junctions:
        """Return the same elements for some of the units."""
        return replace(self, c0=pick(self.c0, units))


@dataclass(frozen=True)
class BiasedCapacitors:
    """e class-2 capacitors: C(u) = c0 [r + (1 - r) / (1 + (u/h)^2)], charge its integral."""

    names: tuple[str, ...]
    sense: Floats
    inject: Floats
    c0: Floats  # (e, N)
    half: Floats  # (e, 1)
    floor: Floats  # (e, 1)
    kind: str = "charge"

    def respond(self, v: Floats) -> tuple[Floats, Floats]:
        """Charges, C, and capacitances, F: (e, N) each, at port voltages (p, N)."""
        x = (self.sense @ v) / self.half
        soft = 1.0 - self.floor
        charge = self.c0 * self.half * (self.floor * x + soft * np.arctan(x))
        return charge, self.c0 * (self.floor + soft / (1.0 + x * x))

    def take(self, units: Ints) -> BiasedCapacitors:
        """Return the same elements for some of the units."""
        return replace(self, c0=pick(self.c0, units))


@dataclass(frozen=True)
class SaturatingCore:
    """One inductor whose inductance falls with current; its port "voltage" is its current.

    The "charge" is the flux beyond the constant part: L0 (integral of share(i) - i), share from
    monotone interpolation of (current, share of L0) points and constant after the last one.
    """

    names: tuple[str, ...]
    sense: Floats
    inject: Floats
    inductance: Floats  # (1, N)
    currents: Floats  # (j,) rising, first 0
    shares: Floats  # (j,)
    kind: str = "charge"

    @cached_property
    def _share(self) -> PchipInterpolator:
        return PchipInterpolator(self.currents, self.shares)

    @cached_property
    def _area(self) -> PchipInterpolator:
        return self._share.antiderivative()

    def respond(self, v: Floats) -> tuple[Floats, Floats]:
        """Flux beyond the constant part, Wb, and its slope, H: (1, N) each, at ports (p, N)."""
        current = self.sense @ v
        size = np.abs(current)
        inside = np.minimum(size, self.currents[-1])
        area = self._area(inside) + self.shares[-1] * (size - inside)
        flux = self.inductance * np.sign(current) * (area - size)
        return flux, self.inductance * (self._share(inside) - 1.0)

    def take(self, units: Ints) -> SaturatingCore:
        """Return the same core for some of the units."""
        return replace(self, inductance=pick(self.inductance, units))


@dataclass(frozen=True)
class Devices:
    """All elements of a network over its p ports."""

    elements: tuple[Elements, ...]
    ports: int

    @cached_property
    def _spread(self) -> tuple[Floats, ...]:
        """For each set, the (p p, e) matrix that sums slopes d/du into Jacobian entries."""
        return tuple(
            np.einsum("ie,ej->ije", each.inject, each.sense).reshape(self.ports**2, -1)
            for each in self.elements
        )

    def evaluate(self, v: Floats) -> tuple[Floats, Floats, Floats, Floats]:
        """Port currents f and charges q (N, p), and df/dv, dq/dv (N, p, p), at v (N, p)."""
        units, ports = v.shape
        across = np.ascontiguousarray(v.T)
        value = {kind: np.zeros((ports, units)) for kind in ("current", "charge")}
        slope = {kind: np.zeros((ports**2, units)) for kind in ("current", "charge")}
        for elements, spread in zip(self.elements, self._spread, strict=True):
            amount, steepness = elements.respond(across)
            value[elements.kind] += elements.inject @ amount
            slope[elements.kind] += spread @ steepness
        shape = (units, ports, ports)
        return (
            value["current"].T,
            value["charge"].T,
            slope["current"].T.reshape(shape),
            slope["charge"].T.reshape(shape),
        )

    def take(self, units: Ints) -> Devices:
        """Return the same devices for some of the units."""
        taken = Devices(tuple(each.take(units) for each in self.elements), self.ports)
        taken.__dict__["_spread"] = self._spread  # depends on the topology only
        return taken
