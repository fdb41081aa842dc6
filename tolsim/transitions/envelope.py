"""Drain and coil of one unit along its changes of load: highest and lowest in every cycle."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from tolsim.circuit.devices import Floats
from tolsim.circuit.load_change.passage import Fate, Passage
from tolsim.circuit.load_change.road import Road
from tolsim.circuit.orbit import Solution, Status
from tolsim.circuit.thermal import Case
from tolsim.design import Study
from tolsim.transition import Transition
from tolsim.transitions.prepared import PreparedMove, Values, as_warm, follow, roads, starts


@dataclass(frozen=True)
class Envelope:
    """One unit in one change of load.

    Attributes
    ----------
    condition : str
    transition : Transition
    fate : Fate
    time : ndarray (windows,)
        s after the beginning of the change, end of each window of about a cycle.
    low, high : mapping of str to ndarray (windows,)
        V, by name: "Q1 drain", "L1 voltage".
    """

    condition: str
    transition: Transition
    fate: Fate
    time: Floats
    low: Mapping[str, Floats]
    high: Mapping[str, Floats]


def envelope(
    study: Study,
    condition: str,
    move: PreparedMove,
    before: tuple[Case, Solution],
    after: Solution,
    cold: tuple[Values, Values],
) -> Envelope | None:
    """The way of the first of N units; None if it has no orbit to start from.

    Parameters
    ----------
    before : tuple
        The unit in the old state.
    after : Solution
        Its orbit in the new one.
    cold : tuple
        Its part values in both, with every part at ambient.
    """
    first = np.zeros(1, dtype=np.intp)
    case, solution, goal = before[0].take(first), before[1].take(first), after.take(first)
    if solution.status[0] != Status.SETTLED:
        return None
    old, new = ({key: value[first] for key, value in values.items()} for values in cold)
    way = roads(study, case, as_warm(case.values, old, new), solution.junctions, move)
    settled = goal.status[0] == Status.SETTLED
    swing = np.ptp(goal.samples, axis=0) if settled else move.swing[None]
    names = _shown(way)
    passage = follow(
        study,
        move,
        way,
        starts(case, solution, way, move.phases[:1]),
        solution.period,
        swing,
        phases=move.phases[:1],
        period=goal.period if settled else np.array([move.period]),
        watch=tuple(way.probes[probe].column for probe in names.values()),
    )
    ranges = {
        title: _range(way, passage, probe, place)
        for place, (title, probe) in enumerate(names.items(), 1)
    }
    return Envelope(
        condition,
        move.transition,
        Fate(passage.fate[0]),
        passage.ends[0],
        {title: low for title, (low, _) in ranges.items()},
        {title: high for title, (_, high) in ranges.items()},
    )


def _shown(way: Road) -> dict[str, str]:
    """Title to probe: the first drain and every coil."""
    drains = [name for name in way.probes if name.endswith(":drain pin")]
    coils = [name for name in way.probes if ":" not in name]
    shown = {f"{name.partition(':')[0]} drain": name for name in drains[:1]}
    return shown | {f"{name} voltage": name for name in coils}


def _range(way: Road, passage: Passage, name: str, place: int) -> tuple[Floats, Floats]:
    """Lowest and highest of a probe in every window, (windows,) each."""
    probe = way.probes[name]
    one = probe.sign * passage.watch_low[0, :, place] + probe.offset[0]
    other = probe.sign * passage.watch_high[0, :, place] + probe.offset[0]
    return np.minimum(one, other), np.maximum(one, other)
