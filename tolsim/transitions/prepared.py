"""Changes of load of the nominal unit: when in the cycle they strain most, what is expected."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from joblib import Parallel, cpu_count, delayed, parallel_config
from numpy.typing import NDArray

from tolsim.circuit.bias import bias_point
from tolsim.circuit.devices import Floats
from tolsim.circuit.load_change.passage import MOST_CYCLES, Fate, Passage, travel_road
from tolsim.circuit.load_change.road import PIECES, Road, carried, ratings, road
from tolsim.circuit.network import Network
from tolsim.circuit.orbit import Solution
from tolsim.circuit.startup import modes
from tolsim.circuit.thermal import Case
from tolsim.circuit.transients.journey import Goal
from tolsim.design import Design, Study
from tolsim.figures.load_change import measure_passage
from tolsim.nominals import CaseName, PreparedCase
from tolsim.parts import Mosfet
from tolsim.spread.part_values import nominal_values
from tolsim.spread.table import SpreadTable
from tolsim.transition import Transition
from tolsim.trim.nominal_unit import trim_nominal

PHASES = 4  # of the cycle, tried on the nominal unit
AT_ONCE = 0.25  # of a period: quicker changes are taken as sudden
AVALANCHE_CYCLES = 60.0  # after a change; what breaks down later does so on its orbit
STRAINS = {"transition_drain_peak": "drain_voltage", "transition_gate_peak": "gate_voltage"}

MoveName = tuple[str, int]  # condition, number of the transition
Values = Mapping[str, Floats]


@dataclass(frozen=True)
class PreparedMove:
    """One change of load under one condition, ready for its units.

    Attributes
    ----------
    phases : tuple of float
        Moments of the change in the cycle, in periods after the phase condition of the orbit;
        the one that strains the nominal unit most comes first.
    lead : int
        State whose swing is watched.
    scale, swing : ndarray (n,)
        Size of every state; swing of the nominal unit in the new state.
    period : float, s
        Of the nominal unit in the new state.
    figures : mapping
        Of the nominal unit, at the first of the phases.
    fate : Fate
        Of the nominal unit.
    phase_effect : float
        How far the hardest strain of the nominal unit at its worst phase lies above the one at
        its best, relative.
    """

    transition: Transition
    phases: tuple[float, ...]
    lead: int
    scale: Floats
    swing: Floats
    period: float
    figures: Mapping[str, float]
    fate: Fate
    phase_effect: float


def prepared_changes(
    study: Study,
    tables: Mapping[str, SpreadTable],
    cases: Mapping[CaseName, PreparedCase],
    jobs: int | None = 1,
) -> tuple[dict[CaseName, PreparedCase], dict[MoveName, PreparedMove]]:
    """Follow the nominal unit through every transition under every condition.

    Transitions of which it has no orbit in one of the two states are left out.

    Returns
    -------
    cases, moves
        Cases with the nominal figures of the changes that lead to them.
    """
    if not study.transitions:
        return dict(cases), {}
    moved = trim_nominal(study, tables).moved
    names = [
        (condition, number)
        for condition in study.conditions
        for number, transition in enumerate(study.transitions)
        if all(
            cases[condition, state].nominal.found for state in (transition.before, transition.after)
        )
    ]
    with parallel_config(backend="loky", inner_max_num_threads=1):
        work = Parallel(n_jobs=min(jobs or cpu_count(), max(len(names), 1)))
        found = work(
            delayed(_prepared)(
                study,
                tables,
                name,
                cases[name[0], study.transitions[name[1]].before],
                cases[name[0], study.transitions[name[1]].after],
                moved,
            )
            for name in names
        )
    moves = dict(zip(names, found, strict=True))
    return _with_figures(study, cases, moves), moves


def _with_figures(
    study: Study, cases: Mapping[CaseName, PreparedCase], moves: Mapping[MoveName, PreparedMove]
) -> dict[CaseName, PreparedCase]:
    """Cases whose nominal figures have those of the changes that lead to them, the worst."""
    changed = dict(cases)
    for (condition, number), move in moves.items():
        name = condition, study.transitions[number].after
        own = dict(changed[name].figures)
        for column, value in move.figures.items():
            own[column] = float(np.fmax(own.get(column, np.nan), value))
        changed[name] = replace(changed[name], figures=own)
    return changed


def _prepared(
    study: Study,
    tables: Mapping[str, SpreadTable],
    name: MoveName,
    before: PreparedCase,
    after: PreparedCase,
    moved: Mapping[str, Floats],
) -> PreparedMove:
    condition, number = name
    transition = study.transitions[number]
    old, new = before.nominal, after.nominal
    cold = (
        nominal_values(study, tables, condition, state, moved=moved)
        for state in (transition.before, transition.after)
    )
    values = as_warm(old.case.values, *cold)
    assert new.frame is not None
    copies = np.zeros(PHASES, dtype=np.intp)
    network = new.case.network(new.solution.junctions)
    branches = np.array([one in network.branches for one in network.index])
    both = np.concatenate([old.solution.samples, new.solution.samples])
    scale = Goal.of(both, branches, new.frame.lead).scale
    move = PreparedMove(
        transition=transition,
        phases=tuple(k / PHASES for k in range(PHASES)),
        lead=new.frame.lead,
        scale=scale,
        swing=np.ptp(new.solution.samples[:, 0], axis=0),
        period=float(new.solution.period[0]),
        figures={},
        fate=Fate.UNDECIDED,
        phase_effect=0.0,
    )
    swing = np.tile(move.swing, (PHASES, 1))
    way = roads(study, old.case, values, old.solution.junctions, move).take(copies)
    start = starts(old.case, old.solution, way, move.phases)
    passage = follow(study, move, way, start, old.solution.period[copies], swing)
    figures = measure_passage(study.design, way, passage)
    strain = _strain(study.design, figures)
    order = np.argsort(-strain, kind="stable")
    worst = int(order[0])
    return replace(
        move,
        phases=tuple(move.phases[k] for k in order),
        figures={column: float(value[worst]) for column, value in figures.items()},
        fate=Fate(passage.fate[worst]),
        phase_effect=float(strain.max() / strain.min() - 1.0) if strain.min() > 0 else 0.0,
    )


def _strain(design: Design, figures: Mapping[str, Floats]) -> Floats:
    """Hardest use of a rated voltage at every phase; without ratings, the drain voltage."""
    uses = []
    for ref, part in design.parts.items():
        if not isinstance(part, Mosfet):
            continue
        for figure, rating in STRAINS.items():
            rated = getattr(part.rating, rating)
            if rated and f"{ref}.{figure}" in figures:
                uses.append(figures[f"{ref}.{figure}"] / rated)
    if not uses:
        uses = [value for name, value in figures.items() if name.endswith("drain_peak")]
    return np.asarray(np.nan_to_num(np.max(uses, axis=0)))


def as_warm(warm: Values, cold_before: Values, cold_after: Values) -> Values:
    """Values in the new state of parts that are as warm as in the old one: heat flows slowly.

    Parameters
    ----------
    warm : mapping of str to (N,)
        In the old state.
    cold_before, cold_after : mapping of str to (N,)
        In both states, with every part at ambient.
    """
    values = {}
    for key, value in warm.items():
        old, new = cold_before[key], cold_after[key]
        ratio = np.divide(new, old, out=np.ones_like(value), where=old != 0.0)
        changed = np.where(old != 0.0, value * ratio, new)
        values[key] = np.where(old == new, value, changed)
    return values


def roads(
    study: Study,
    before: Case,
    after: Values,
    junctions: Mapping[str, Floats],
    move: PreparedMove,
) -> Road:
    """The road of N units between their values in two states."""
    pieces = PIECES if move.transition.time > AT_ONCE * move.period else 1
    return road(study.design, before.values, after, junctions, pieces=pieces)


def starts(before: Case, solution: Solution, way: Road, phases: tuple[float, ...]) -> Floats:
    """States (k, n) of one unit on its old orbit at k phases, or (N, n) at a single one."""
    network = before.network(solution.junctions)
    samples = carried(solution.samples, network, way.stations[0], before.design)
    places = [round(phase * (len(samples) - 1)) for phase in phases]
    return samples[places, 0] if len(phases) > 1 else samples[places[0]]


def follow(
    study: Study,
    move: PreparedMove,
    way: Road,
    start: Floats,
    old_period: Floats,
    swing: Floats,
    *,
    phases: tuple[float, ...] | None = None,
    period: Floats | None = None,
    watch: tuple[int, ...] = (),
) -> Passage:
    """N units through a change of load, with what avalanches take where a drain goes too high.

    Parameters
    ----------
    start : (N, n)
    old_period : (N,) s
    swing : (N, n)
        Of the new orbit.
    phases : tuple of float, optional
        Moment of the change in each unit's cycle; those of `move` if not given.
    period : (N,), optional
        s, of the new orbit; that of the nominal unit if not given.
    watch : tuple of int, optional
        Further quantities whose range in every window is kept.
    """
    units = len(start)
    span = np.full(units, move.period) if period is None else period
    goal = Goal(swing, move.scale, move.lead)
    begin = np.asarray(phases or move.phases) * old_period
    driven = study.kind == "driven"
    duration = move.transition.time

    def travelled(
        way: Road,
        chosen: NDArray[np.intp],
        regrows: NDArray[np.bool_],
        cycles: float = MOST_CYCLES,
    ) -> Passage:
        own = Goal(goal.swing[chosen], goal.scale, goal.lead)
        return travel_road(
            way.take(chosen),
            start[chosen],
            own,
            span[chosen],
            duration,
            begin=begin[chosen],
            regrows=regrows,
            watch=watch,
            cycles=cycles,
        )

    everyone = np.arange(units)
    regrows = np.full(units, driven)
    passage = travelled(way, everyone, regrows)
    quiet = np.flatnonzero(passage.fate == Fate.DIES)
    if quiet.size:
        regrows[quiet] = _grows(way.stations[-1].take(quiet), 2 * np.pi / move.period)
        if regrows.any():
            passage = travelled(way, everyone, regrows)
    rated = ratings(study.design)
    over = np.zeros(units, dtype=bool)
    for ref, volts in rated.items():
        _, high = way.probes[f"{ref}:drain pin"].ends(passage.lowest, passage.highest)
        over |= high > volts
    beyond = np.flatnonzero(over)
    if beyond.size:
        held = travelled(way.breaking_down(rated), beyond, regrows[beyond], AVALANCHE_CYCLES)
        passage = passage.put(beyond, held)
    return passage


def _grows(network: Network, shift: float) -> NDArray[np.bool_]:
    """Whether a unit that has gone quiet starts again by itself, (N,)."""
    return np.asarray(modes(network, bias_point(network), shift).growth > 0.0)
