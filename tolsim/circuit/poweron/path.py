"""Where oscillation begins to grow while a slow ramp passes through bias points.

While the supplies rise slowly against the oscillation, each unit follows its bias point, and its
leading mode grows or decays with the momentary real part of its eigenvalue.  From the noise of
amplitude a0 the swing is a0 exp(G), where G is the integral of the growth rate, started anew
whenever it would fall below zero: a mode cannot fall below the noise.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.bias import Bias, bias_point
from tolsim.circuit.devices import Floats
from tolsim.circuit.network import Network
from tolsim.circuit.startup import Complexes, modes
from tolsim.circuit.transients.journey import Ramps

POINTS = 12  # bias points along the ramp
MOST_CORNERS = 6  # of a ramp, for bias points to sit on them
FINE = 24  # points of the integral between two of them


@dataclass(frozen=True)
class RampPath:
    """Bias points and leading modes of N units along their ramps, at m moments."""

    times: Floats  # (N, m) s
    x: Floats  # (m, N, n) bias points
    growth: Floats  # (N, m) 1/s
    vectors: Complexes  # (m, N, n) leading modes
    settled: NDArray[np.bool_]  # (N,) whether every bias point was found
    last: Bias  # the bias point when all rails are up

    @property
    def final_growth(self) -> Floats:
        """Growth when all rails are up, (N,) 1/s."""
        return self.growth[:, -1]


def follow_ramp(network: Network, ramps: Ramps, shift: float) -> RampPath:
    """Bias points and modes of live networks along their ramps, each from the one before.

    Parameters
    ----------
    shift : float, rad/s
        Angular frequency scale of the stage.
    """
    times = _moments(ramps)
    units, n = network.units, network.states
    guess = np.zeros((units, n))
    xs, vectors, growth = [], [], []
    settled = np.ones(units, dtype=bool)
    bias = None
    for k in range(times.shape[1]):
        raised = network.raised(ramps.at(times[:, k]))
        bias = bias_point(raised, guess)
        lead = modes(raised, bias, shift)
        guess = np.where(bias.settled[:, None], bias.x, guess)
        settled &= bias.settled
        xs.append(bias.x)
        vectors.append(lead.vector)
        growth.append(lead.growth)
    assert bias is not None
    return RampPath(times, np.stack(xs), np.stack(growth, axis=1), np.stack(vectors), settled, bias)


def _moments(ramps: Ramps) -> Floats:
    """Moments (N, m): corners of the ramps as far as they are few, and equal parts between."""
    equal = ramps.up[:, None] * np.linspace(0.0, 1.0, POINTS)[1:]
    units, rails, corners = ramps.times.shape
    if corners > MOST_CORNERS:
        return equal
    return np.sort(np.concatenate([equal, ramps.times.reshape(units, rails * corners)], axis=1))


@dataclass(frozen=True)
class Onset:
    """When the swing of N units leaves the noise behind, on the quasi-static path."""

    time: Floats  # (N,) s, when it reaches the wanted amplitude; inf if it never does
    x: Floats  # (N, n) bias point then (the last one if never)
    vector: Complexes  # (N, n) leading mode then
    largest: Floats  # (N,) largest ln(swing / noise) up to the end of the ramp


def onset(path: RampPath, noise: Floats, wanted: Floats) -> Onset:
    """When the swing of every unit grows from `noise` to `wanted`, both (N,) V."""
    need = np.log(wanted / noise)
    units, m = path.growth.shape
    integral, largest = np.zeros(units), np.zeros(units)
    when = np.full(units, np.inf)
    place = np.full(units, m - 1.0)
    for k in range(1, m):
        step = (path.times[:, k] - path.times[:, k - 1]) / FINE
        for j in range(FINE):
            share = (j + 0.5) / FINE
            rate = (1.0 - share) * path.growth[:, k - 1] + share * path.growth[:, k]
            integral = np.maximum(0.0, integral + rate * step)
            first = np.isinf(when) & (integral >= need)
            when[first] = (path.times[:, k - 1] + (j + 1) * step)[first]
            place[first] = k - 1 + (j + 1) / FINE
            largest = np.maximum(largest, integral)
    # what still grows when everything is up arrives later
    rate = path.final_growth
    waits = np.isinf(when) & (rate > 0)
    left = np.maximum(need - integral, 0.0) / np.where(waits, rate, 1.0)
    when = np.where(waits, path.times[:, -1] + left, when)
    low = np.minimum(place.astype(int), m - 2)
    share = (place - low)[:, None]
    every = np.arange(units)
    x = (1.0 - share) * path.x[low, every] + share * path.x[low + 1, every]
    nearest = np.rint(place).astype(int)
    return Onset(when, x, path.vectors[nearest, every], largest)


def take(path: RampPath, units: NDArray[np.intp]) -> RampPath:
    """Return the paths of some of the units."""
    return replace(
        path,
        times=path.times[units],
        x=path.x[:, units],
        growth=path.growth[units],
        vectors=path.vectors[:, units],
        settled=path.settled[units],
        last=Bias(*(value[units] for value in vars(path.last).values())),
    )
