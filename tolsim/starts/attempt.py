"""Units switched on at a setting: other values than the study's, other ramp times.

A setting puts numbers in the place of what a condition or a load state says; the units stay as
they were drawn and trimmed.  What a unit does once it runs is solved at that setting, from the
condition of the study that is nearest to it; a unit without orbit there is held against the
nominal one.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.continuation import solve_units
from tolsim.circuit.devices import Floats, Ints
from tolsim.circuit.orbit import Solution, Status
from tolsim.circuit.poweron.fates import Fate
from tolsim.circuit.poweron.ramps import profiles_of, ramps_of
from tolsim.circuit.poweron.switch_on import FAST_PERIODS, Expected, switch_on
from tolsim.circuit.thermal import Case
from tolsim.circuit.transients.journey import Ramps
from tolsim.design import Design, Study
from tolsim.evaluation import Plan
from tolsim.figures import measure_orbits
from tolsim.figures.power_on import expected_of, take
from tolsim.nominals import CaseName, PreparedCase, case_of
from tolsim.spread.part_values import nominal_values, part_values
from tolsim.spread.sampling import Draws
from tolsim.starts.asked import CONDITION_AXES

Setting = Mapping[str, float]
"""What is set, as an axis names it, and to which value."""
Levels = Mapping[str, Floats]
"""Rail to the factor (N,) on its voltage, one per unit."""

FATE_NAMES: Final[Mapping[Fate, str]] = {
    Fate.NOT_RUN: "not run",
    Fate.STARTS: "starts",
    Fate.LATCHED: "latched",
    Fate.DIES: "dies away",
    Fate.BURSTS: "bursts",
    Fate.OTHER_SWING: "other swing",
    Fate.UNDECIDED: "undecided",
}
"""What became of a unit, in the words of the summary."""

_FULL_SCALE = {"ambient": 50.0, "supply": 0.1, "age": 1e4}  # what counts as equally far


@dataclass(frozen=True)
class Running:
    """What units do at a setting once they run.

    Attributes
    ----------
    cold : Case
        The N units before they are switched on.
    expected : Expected
        Their orbits, the nominal one for a unit without.
    has_orbit : (N,)
    shift : float, rad/s
        Angular frequency scale of the stage.
    mean : mapping of str to (N,)
        State to its mean over the orbit.
    """

    cold: Case
    expected: Expected
    has_orbit: NDArray[np.bool_]
    shift: float
    mean: Mapping[str, Floats]

    def take(self, units: Ints) -> Running:
        """Return some of the units."""
        expected = take(self.expected, units)
        mean = {name: value[units] for name, value in self.mean.items()}
        return Running(self.cold.take(units), expected, self.has_orbit[units], self.shift, mean)


@dataclass(frozen=True)
class Attempt:
    """What became of N units that were switched on."""

    fate: Ints  # (N,) of Fate
    start_time: Floats  # (N,) s, NaN for a unit that does not start

    @property
    def starts(self) -> NDArray[np.bool_]:
        """Which of them start."""
        return np.asarray(self.fate == Fate.STARTS)


def running(
    plan: Plan, name: CaseName, draws: Draws, setting: Setting, levels: Levels | None = None
) -> Running:
    """Solve what drawn and trimmed units do at a setting once they run.

    Parameters
    ----------
    levels : mapping, optional
        Further factors on rail voltages, one per unit.
    """
    study, prepared = moved_study(plan.study, name, setting), nearest(plan, name, setting)
    heat, own = prepared.heat, levels or {}
    cold = _at_levels(case_of(study, part_values(study, plan.tables, *name, draws)), own)
    values = part_values(study, plan.tables, *name, draws, heat.of_units)
    warm = _at_levels(case_of(study, values), own)
    nominal = case_of(study, nominal_values(study, plan.tables, *name, heat.rises))
    both = _joined(warm, nominal)
    solution = solve_units(both, prepared.compass, plan.study.run.steps_per_cycle)
    found = np.asarray(solution.status == Status.SETTLED)
    expected, there = _expected(both, solution, prepared)
    units = np.arange(cold.units)
    last = there.samples[:-1, 0].mean(axis=0)
    means = np.where(found[:, None], solution.samples[:-1].mean(axis=0), last)
    mean = dict(zip(expected.scale, means.T, strict=True))
    return Running(cold, expected, found, prepared.nominal.shift, mean).take(units)


def _at_levels(case: Case, levels: Levels) -> Case:
    """The same units with other rail voltages."""
    moved = {
        f"{rail}.voltage": case.values[f"{rail}.voltage"] * own for rail, own in levels.items()
    }
    return Case(case.design, {**case.values, **moved}, case.heated)


def _joined(units: Case, nominal: Case) -> Case:
    """The nominal unit behind drawn ones, so that both are solved in one go."""
    values = {
        key: np.concatenate([value, nominal.values[key]]) for key, value in units.values.items()
    }
    return Case(units.design, values, units.heated)


def _expected(case: Case, solution: Solution, prepared: PreparedCase) -> tuple[Expected, Solution]:
    """Orbits as a power-on wants them, and the one that units without take: the last, the nominal.

    If that has none either, it is the one its compass stands on.
    """
    reference = prepared.compass.nominal
    there = solution.take(np.array([case.units - 1]))
    if there.status[0] != Status.SETTLED:
        there = reference.solution
    nowhere = np.full(case.units, np.nan)
    current = measure_orbits(case, solution).get("supply_current", nowhere)
    current = np.where(solution.status == Status.SETTLED, current, np.nan)
    usual = current[-1] if np.isfinite(current[-1]) else prepared.figures.get("supply_current")
    filled = np.where(np.isfinite(current), current, np.nan if usual is None else usual)
    return expected_of(replace(reference, solution=there), solution, filled), there


def moved_study(study: Study, name: CaseName, setting: Setting) -> Study:
    """The study with a setting in one of its conditions and states."""
    condition, state = name
    conditions, states = dict(study.conditions), dict(study.states)
    own = {key: value for key, value in setting.items() if key in CONDITION_AXES}
    conditions[condition] = conditions[condition].model_copy(update=own)
    addresses = {key: value for key, value in setting.items() if "." in key}
    values = {**states[state].values, **addresses}
    states[state] = states[state].model_copy(update={"values": values})
    return study.model_copy(update={"conditions": conditions, "states": states})


def nearest(plan: Plan, name: CaseName, setting: Setting) -> PreparedCase:
    """The prepared case of a state whose condition is nearest to a setting."""
    wanted = moved_study(plan.study, name, setting).conditions[name[0]]

    def distance(case: CaseName) -> float:
        condition = plan.study.conditions[case[0]]
        apart = 0.0
        for key, full in _FULL_SCALE.items():
            here, there = getattr(condition, key), getattr(wanted, key)
            if not (isinstance(here, Mapping) or isinstance(there, Mapping)):
                apart += abs(here - there) / full
        return apart if case[0] != name[0] else apart - 1e-9  # its own, if others are no nearer

    same_state = [case for case in plan.cases if case[1] == name[1]]
    return plan.cases[min(same_state, key=distance)]


def stretched_ramps(design: Design, units: int, ramp_times: Mapping[str, Floats | float]) -> Ramps:
    """Ramps of N units, some of them stretched.

    Parameters
    ----------
    ramp_times : mapping
        Rail to its ramp time, s, one or (N,); rails not named rise as the study says.
    """
    profiles = profiles_of(design)
    ramps = ramps_of(profiles, units)
    for place, (rail, profile) in enumerate(profiles.items()):
        if rail not in ramp_times:
            continue
        each = np.broadcast_to(np.asarray(ramp_times[rail], dtype=np.float64), (units,))
        distinct, kind = np.unique(each, return_inverse=True)
        corners = np.stack([profile.stretched(float(time)).times for time in distinct])[kind]
        filled = corners.shape[1]
        ramps.times[:, place, :filled] = corners
        ramps.times[:, place, filled:] = corners[:, -1:]
    return ramps


def switch_units_on(
    units: Running, ramps: Ramps, *, phase: Floats | None = None, charge: Floats | None = None
) -> Attempt:
    """Switch units on; none is touched by the ramps of the others.

    A ramp is integrated whole or followed along bias points for a batch as a whole, so units
    are parted by that first.
    """
    fast = ramps.up <= FAST_PERIODS * units.expected.period
    fate = np.full(len(fast), Fate.UNDECIDED, dtype=np.intp)
    start_time = np.full(len(fast), np.nan)
    for kind in (fast, ~fast):
        own = np.flatnonzero(kind)
        if not own.size:
            continue
        some = units.take(own)
        found = switch_on(
            some.cold,
            ramps.take(own),
            some.expected,
            some.shift,
            seed_phase=None if phase is None else phase[own],
            charge=None if charge is None else charge[own],
        )
        fate[own], start_time[own] = found.fate, found.start_time
    return Attempt(fate, np.where(fate == Fate.STARTS, start_time, np.nan))
