"""The nominal unit of every case of a study, and the compass that leads to all other units."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from joblib import Parallel, cpu_count, delayed, parallel_config
from numpy.typing import NDArray

from tolsim.circuit.bias import bias_point
from tolsim.circuit.continuation import Compass, aim, solve_units
from tolsim.circuit.cycle import run_cycle
from tolsim.circuit.devices import Floats
from tolsim.circuit.nominal import Nominal, find_nominal, frame_of
from tolsim.circuit.orbit import Solution, Status
from tolsim.circuit.startup import modes
from tolsim.circuit.thermal import Case, heats
from tolsim.design import Study
from tolsim.errors import RunError
from tolsim.figures import measure_orbits, measure_start
from tolsim.figures.power_on import expected_of, measure_power_on
from tolsim.self_heating import (
    Heat,
    Rises,
    moved_aside,
    rises_of,
    settle,
    slopes_of,
    warmed_parts,
)
from tolsim.spread.part_values import Values, nominal_values
from tolsim.spread.table import SpreadTable
from tolsim.trim.nominal_unit import trim_nominal
from tolsim.trim.session import Trimmed, idle_voltages, trim_figures

CaseName = tuple[str, str]  # condition, state


@dataclass(frozen=True)
class PreparedCase:
    """One condition and state, ready for its units.

    `nominal` runs with its passive parts as warm as `heat` says; `start` is what units that are
    switched on cold are compared with.
    """

    nominal: Nominal
    compass: Compass
    figures: Mapping[str, float]  # of the nominal unit
    heat: Heat
    start: Nominal


def cases_of(study: Study) -> tuple[CaseName, ...]:
    """Every condition with every state, start states first."""
    states = sorted(study.states, key=lambda name: not study.states[name].starts_here)
    return tuple((condition, state) for condition in study.conditions for state in states)


def switched_on_here(study: Study, name: CaseName) -> bool:
    """Whether units of this case are switched on in time."""
    oscillates = study.kind == "self-oscillating" and study.states[name[1]].starts_here
    return oscillates and study.run.power_on_share > 0


def case_of(study: Study, values: Values) -> Case:
    """Units of a study as the circuit core takes them."""
    return Case(study.design, values, heats(study.design))


@dataclass(frozen=True)
class _StateFound:
    """The nominal units of one load state under every condition, and the way from its orbit."""

    nominals: Mapping[CaseName, Nominal]  # with cold passive parts
    leader: Compass | None  # None if no condition of this state has an orbit


def prepare(
    study: Study, tables: Mapping[str, SpreadTable], jobs: int | None = 1
) -> dict[CaseName, PreparedCase]:
    """Find the nominal orbit of every case, load states side by side.

    In each state the first condition is integrated from its kicked bias point; the others are
    followed from it through the change of part values, and only where that fails integrated
    themselves.

    Parameters
    ----------
    jobs : int, optional
        Worker processes; all cores if None.

    Raises
    ------
    RunError
        If the nominal unit has no periodic orbit in any case.
    """
    trimmed = trim_nominal(study, tables)
    names = cases_of(study)
    states = tuple(dict.fromkeys(state for _, state in names))
    with parallel_config(backend="loky", inner_max_num_threads=1):
        work = Parallel(n_jobs=min(jobs or cpu_count(), len(states)))
        looked_for = work(delayed(_find_state)(study, tables, s, trimmed.moved) for s in states)
        by_state = dict(zip(states, looked_for, strict=True))
    if all(found.leader is None for found in by_state.values()):
        raise RunError(_no_orbit({k: v for f in by_state.values() for k, v in f.nominals.items()}))
    stand_in = next(found.leader for found in by_state.values() if found.leader is not None)
    with parallel_config(backend="loky", inner_max_num_threads=1):
        work = Parallel(n_jobs=min(jobs or cpu_count(), len(names)))
        prepared = work(
            delayed(_prepare_case)(
                study,
                tables,
                name,
                by_state[name[1]].nominals[name],
                by_state[name[1]].leader or stand_in,
                trimmed.moved,
            )
            for name in names
        )
    merged = dict(zip(names, prepared, strict=True))
    return {name: _with_trims(study, name, merged[name], trimmed) for name in names}


def _with_trims(
    study: Study, name: CaseName, prepared: PreparedCase, trimmed: Trimmed
) -> PreparedCase:
    """Add what was read while the nominal unit was trimmed in this case."""
    figures = trim_figures(study, name, trimmed)
    plain = {column: float(value[0]) for column, value in figures.items()}
    return replace(prepared, figures={**prepared.figures, **plain})


def _find_state(
    study: Study, tables: Mapping[str, SpreadTable], state: str, moved: Mapping[str, Floats]
) -> _StateFound:
    """Nominal units of one load state."""
    steps = study.run.steps_per_cycle
    found: dict[CaseName, Nominal] = {}
    leader: Compass | None = None
    for name in cases_of(study):
        if name[1] != state:
            continue
        case = case_of(study, nominal_values(study, tables, *name, moved=moved))
        nominal = None if leader is None else _follow(case, leader, steps)
        found[name] = nominal or find_nominal(case, steps)
        if leader is None and found[name].found:
            leader = aim(found[name], tuple(case.values), steps)
    return _StateFound(found, leader)


def _prepare_case(
    study: Study,
    tables: Mapping[str, SpreadTable],
    name: CaseName,
    nominal: Nominal,
    leader: Compass,
    moved: Mapping[str, Floats],
) -> PreparedCase:
    """Aim from the nominal orbit of a case; one that was not found is looked for once more."""
    again = None if nominal.found else _follow(nominal.case, leader, study.run.steps_per_cycle)
    cold = again or nominal
    warm, heat = _warmed(study, tables, name, cold, leader, moved)
    return _prepared(study, name, cold, warm, heat, leader)


def _warmed(
    study: Study,
    tables: Mapping[str, SpreadTable],
    name: CaseName,
    cold: Nominal,
    leader: Compass,
    moved: Mapping[str, Floats],
) -> tuple[Nominal, Heat]:
    """The nominal unit with its passive parts at their own temperature."""
    refs = warmed_parts(study, tables)
    if not refs or not cold.found:
        return cold, Heat()

    def found(nominal: Nominal) -> tuple[Rises, Nominal]:
        figures = measure_orbits(nominal.case, nominal.solution)
        return rises_of(study.design, refs, figures), nominal

    def warmed(assumed: Rises) -> tuple[Rises, Nominal] | None:
        case = case_of(study, nominal_values(study, tables, *name, assumed, moved))
        nominal = _follow(case, leader, study.run.steps_per_cycle)
        return None if nominal is None else found(nominal)

    heat, warm = settle(found(cold), warmed)
    return warm, heat


def _follow(case: Case, leader: Compass, steps: int) -> Nominal | None:
    """The nominal unit of another case, reached from the leader's; None if it is not."""
    reference = leader.nominal
    solution = solve_units(case, leader, steps)
    if solution.status[0] != Status.SETTLED or reference.frame is None:
        return None
    network = case.network(case.cold_junctions())
    bias = bias_point(network, reference.bias.x)
    frame = frame_of(network, solution, reference.frame.lead)
    leading = modes(network, bias, reference.shift)
    return Nominal(case, bias, leading, reference.shift, solution, frame)


def _prepared(
    study: Study, name: CaseName, cold: Nominal, warm: Nominal, heat: Heat, leader: Compass
) -> PreparedCase:
    """Aim from the case's own nominal orbit, or from the leader's if it has none."""
    compass, figures = leader, {}
    if warm.found:
        keys = tuple(key for key in warm.case.values if not key.endswith("largest_share"))
        compass = aim(warm, keys, study.run.steps_per_cycle)
        figures = measure_orbits(warm.case, warm.solution)
    if heat.rises:
        heat = replace(heat, slopes=_heat_slopes(study, cold, compass, heat))
    start = cold if cold.found else leader.nominal
    if study.kind == "self-oscillating":
        start_from = cold if cold.found else replace(leader.nominal, bias=cold.bias)
        figures = figures | measure_start(cold.case, start_from)
    if warm.found and switched_on_here(study, name):
        expected = expected_of(warm, warm.solution, figures["supply_current"])
        once = measure_power_on(cold.case, expected, start.shift, np.ones(1, dtype=bool))
        figures = {**figures, **once.figures}
    figures = figures | idle_voltages(study, cold.case, cold.bias.x[0])
    plain = {name: float(value[0]) for name, value in figures.items()}
    return PreparedCase(warm, compass, plain, heat, start)


def _heat_slopes(
    study: Study, cold: Nominal, compass: Compass, heat: Heat
) -> Mapping[str, Mapping[str, tuple[float, float]]]:
    """How the rise of each warm part goes with the values of a unit, from orbits beside it."""
    keys, values = moved_aside(compass.nominal.case.values)
    case = case_of(study, values)
    solution, sound = _orbits_beside(case, compass, study.run.steps_per_cycle)
    figures = measure_orbits(case, solution)
    known = {name: np.where(sound, figure, np.nan) for name, figure in figures.items()}
    return slopes_of(study.design, heat.rises, keys, known, cold.case.values)


def _orbits_beside(case: Case, compass: Compass, steps: int) -> tuple[Solution, NDArray[np.bool_]]:
    """Orbits so near the nominal one that its compass leads there: a period each, not closed.

    What they miss falls with the square of the distance, so a slope needs no shooting.

    Returns
    -------
    solution, (N,) bool
        Whether every step was solved.
    """
    start = compass.start(case)
    network = case.network(start.junctions)
    cycle = run_cycle(network, start.x, start.period, steps, derivatives=False)
    copies = compass.nominal.solution.take(np.zeros(case.units, dtype=np.intp))
    way = replace(
        copies, samples=cycle.samples, period=start.period, junctions=dict(start.junctions)
    )
    return way, cycle.settled


def _no_orbit(found: Mapping[CaseName, Nominal]) -> str:
    lines = []
    for (condition, state), nominal in found.items():
        growth = float(np.asarray(nominal.modes.growth)[0])
        tells = "grows" if growth > 0 else "decays"
        lines.append(f"  {condition} / {state}: the leading mode {tells} ({growth:.3g} 1/s)")
    return (
        "The nominal unit settles on no periodic orbit in any case, so there is nothing to"
        " compare units with.\n" + "\n".join(lines) + "\n"
        "Look at the bias point (is any gate above its threshold?), the feedback and the load."
    )
