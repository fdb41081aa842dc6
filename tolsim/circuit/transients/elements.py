"""Devices as flat arrays for the compiled stepper: what each element sees, acts on, and its law.

All elements of a network stand in one order: smooth ramps (currents), then junctions and class-2
capacitors (charges), then saturating cores.  Slopes reach the Jacobians through a list of entries,
because most elements touch one or two ports only.
"""

from __future__ import annotations

from typing import NamedTuple, TypeVar

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import PchipInterpolator

from tolsim.circuit.devices import (
    BiasedCapacitors,
    Devices,
    Elements,
    Floats,
    Junctions,
    Ramps,
    SaturatingCore,
)

Kind = TypeVar("Kind", bound=Elements)
Integers = NDArray[np.int64]

KINDS = (Ramps, Junctions, BiasedCapacitors, SaturatingCore)
PARAMETERS = 4  # at most, of one element


class FlatElements(NamedTuple):
    """All e elements of N units over p ports; see `circuit.devices` for the laws."""

    ends: Integers  # (4,) end of each kind in the common order
    sense: Floats  # (e, p)
    inject: Floats  # (p, e)
    entry_to: Integers  # (m,) port an entry of the Jacobian belongs to,
    entry_seen: Integers  # (m,) port it is a slope against,
    entry_element: Integers  # (m,) element it comes from,
    entry_weight: Floats  # (m,) weight of that element's slope
    # (e, 4) of one unit or (N, e, 4), by kind: offset, knee, linear, square; c0, phi, grading;
    # c0, half, floor; L0
    numbers: Floats
    core_breaks: Floats  # (cores, b) A, the last one repeated to fill
    core_share: Floats  # (cores, 4, b - 1) cubic pieces of the share of L0, highest power first
    core_area: Floats  # (cores, 5, b - 1) their integral


def flatten(devices: Devices, units: int) -> tuple[FlatElements, tuple[str, ...]]:
    """Flat arrays of all elements for N units, and the names of the ramps in their order."""
    by_kind = [[each for each in devices.elements if isinstance(each, kind)] for kind in KINDS]
    ordered = [each for group in by_kind for each in group]
    counts = [sum(len(each.names) for each in group) for group in by_kind]
    empty = np.zeros((0, devices.ports))
    sense = np.concatenate([empty, *(each.sense for each in ordered)])
    inject = np.concatenate([empty.T, *(each.inject for each in ordered)], axis=1)
    seen = [
        (to, port, element, inject[to, element] * sense[element, port])
        for element in range(len(sense))
        for to in np.flatnonzero(inject[:, element])
        for port in np.flatnonzero(sense[element])
    ]
    to, port, element, weight = (np.array(column) for column in zip(*seen, strict=True))
    rows = [row for each in ordered for row in _numbers(each, units)]
    breaks, share, area = _core_pieces([e for e in ordered if isinstance(e, SaturatingCore)])
    flat = FlatElements(
        ends=np.cumsum(counts),
        sense=np.ascontiguousarray(sense),
        inject=np.ascontiguousarray(inject),
        entry_to=to.astype(np.int64),
        entry_seen=port.astype(np.int64),
        entry_element=element.astype(np.int64),
        entry_weight=weight.astype(float),
        numbers=np.ascontiguousarray(np.stack(rows, axis=1)),
        core_breaks=breaks,
        core_share=share,
        core_area=area,
    )
    return flat, tuple(name for each in by_kind[0] for name in each.names)


def _numbers(elements: Elements, units: int) -> list[Floats]:
    """Parameters (N, 4) of every element of a set."""
    if isinstance(elements, Ramps):
        columns = [elements.offset, elements.knee, elements.linear, elements.square]
    elif isinstance(elements, Junctions):
        columns = [elements.c0, elements.phi, elements.grading]
    elif isinstance(elements, BiasedCapacitors):
        columns = [elements.c0, elements.half, elements.floor]
    elif isinstance(elements, SaturatingCore):
        columns = [elements.inductance]
    else:
        raise TypeError(f"no compiled law for {type(elements).__name__}")
    table = np.zeros((len(elements.names), units, PARAMETERS))
    for k, column in enumerate(columns):
        table[:, :, k] = column
    return list(table)


def _core_pieces(cores: list[SaturatingCore]) -> tuple[Floats, Floats, Floats]:
    """Breaks and polynomial pieces of every core's share of L0 and of its integral."""
    most = max([2, *(len(core.currents) for core in cores)])
    breaks = np.zeros((len(cores), most))
    share = np.zeros((len(cores), 4, most - 1))
    area = np.zeros((len(cores), 5, most - 1))
    for row, core in enumerate(cores):
        law = PchipInterpolator(core.currents, core.shares)
        pieces = len(core.currents) - 1
        breaks[row] = core.currents[-1]
        breaks[row, : pieces + 1] = core.currents
        share[row, :, :pieces] = law.c
        area[row, :, :pieces] = law.antiderivative().c
    return breaks, share, area
