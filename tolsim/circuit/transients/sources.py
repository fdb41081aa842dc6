"""Sources that change with time: rails that come up, periodic drives; compiled."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.devices import Floats
from tolsim.circuit.network import Network
from tolsim.circuit.transients.compiling import hot

PROFILE, SQUARE, SINE = 0, 1, 2


class Sources(NamedTuple):
    """s sources of one unit; a profile is piecewise linear and constant after its last point."""

    kind: NDArray[np.int64]  # (s,) PROFILE, SQUARE or SINE
    times: Floats  # (s, k) s, rising; of profiles
    levels: Floats  # (s, k) of profiles
    low: Floats  # (s,) of drives
    high: Floats  # (s,)
    duty: Floats  # (s,)
    edge: Floats  # (s,) share of the period
    frequency: float  # Hz, of the drives


class SourceTable(NamedTuple):
    """The sources of N units: `Sources` with a first axis where units differ."""

    kind: NDArray[np.int64]  # (s,)
    times: Floats  # (N, s, k)
    levels: Floats  # (N, s, k)
    low: Floats  # (N, s)
    high: Floats  # (N, s)
    duty: Floats  # (s,)
    edge: Floats  # (s,)
    frequency: float
    matrix: Floats  # (N, n, s) right-hand side at level 1


def sources_of(network: Network, times: Floats, levels: Floats) -> SourceTable:
    """Rails with their profiles, then the drives of the network.

    Parameters
    ----------
    times, levels : (N, r, k)
        Of the r live rails, in the order of `network.rail_names`.
    """
    rails = levels.shape[1]
    shape = network.drive_shape
    drives = 0 if shape is None else len(shape.duty)
    units, total = network.units, rails + drives
    kind = np.full(total, PROFILE, dtype=np.int64)
    all_times = np.zeros((units, total, levels.shape[2]))
    all_levels = np.ones_like(all_times)
    all_times[:, :rails], all_levels[:, :rails] = times, levels
    low, high = np.zeros((units, total)), np.ones((units, total))
    duty, edge = np.full(total, 0.5), np.full(total, 0.02)
    matrix = np.zeros((units, network.states, total))
    if network.rail_matrix is not None:
        matrix[:, :, :rails] = network.rail_matrix
    if shape is not None and network.drive_matrix is not None:
        kind[rails:] = np.where(shape.sine, SINE, SQUARE)
        low[:, rails:], high[:, rails:] = shape.low, shape.high
        duty[rails:], edge[rails:] = shape.duty, shape.edge
        matrix[:, :, rails:] = network.drive_matrix
    frequency = network.drive_frequency or 0.0
    return SourceTable(kind, all_times, all_levels, low, high, duty, edge, frequency, matrix)


@hot
def unit_sources(table: SourceTable, unit: int) -> Sources:
    """The sources of one unit."""
    return Sources(
        table.kind,
        table.times[unit],
        table.levels[unit],
        table.low[unit],
        table.high[unit],
        table.duty,
        table.edge,
        table.frequency,
    )


@hot
def _risen(distance: float, half: float) -> float:
    """A cosine edge from 0 to 1 around distance 0."""
    return 0.5 + 0.5 * math.sin(0.5 * math.pi * min(max(distance / half, -1.0), 1.0))


@hot
def _along(times: Floats, levels: Floats, time: float) -> float:
    """A piecewise linear profile at a time."""
    if time <= times[0]:
        return levels[0]
    if time >= times[-1]:
        return levels[-1]
    below, above = 0, len(times) - 1
    while above - below > 1:
        middle = (below + above) // 2
        if time < times[middle]:
            above = middle
        else:
            below = middle
    share = (time - times[below]) / (times[above] - times[below])
    return levels[below] + share * (levels[above] - levels[below])


@hot
def level(sources: Sources, source: int, time: float) -> float:
    """Level of one source at a time, s."""
    kind = sources.kind[source]
    if kind == PROFILE:
        return _along(sources.times[source], sources.levels[source], time)
    turn = (time * sources.frequency) % 1.0
    if kind == SINE:
        wave = 0.5 + 0.5 * math.sin(2.0 * math.pi * turn)
    else:
        half = max(0.5 * sources.edge[source], 1e-12)
        fall = _risen(turn - sources.duty[source], half)
        wave = _risen(turn, half) - fall + _risen(turn - 1.0, half)
    low = sources.low[source]
    return low + (sources.high[source] - low) * wave
