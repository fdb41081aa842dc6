"""Chosen solver on several stages: units per second, and accuracy on 192 spread units.

Circuit A, the same with a coil of 0.5 ohm (high Q), a single-ended heated stage and one with diode
gates and clamps, the last two as shipped.  Rates count orbits, multipliers, every figure and the
start figures; choice and plan are given apart.  The truth is shooting at two and four times the
steps, extrapolated (errors fall by four): frequency, and peak and rms of every state.
"""

from __future__ import annotations

import time
from collections.abc import Iterator

import numpy as np
from circuits import CIRCUIT_A_SPREAD, circuit_a, scattered, typical_values

from tolsim.building import BLOCK, TOGETHER
from tolsim.circuit.bulk.choice import Choice, choose
from tolsim.circuit.bulk.judges import Marks
from tolsim.circuit.continuation import Compass, aim, solve_units
from tolsim.circuit.nominal import Nominal, find_nominal
from tolsim.circuit.orbit import Status
from tolsim.circuit.thermal import Case
from tolsim.figures import measure_orbits, measure_start
from tolsim.library import find_study
from tolsim.nominals import case_of
from tolsim.spread.part_values import nominal_values, part_values
from tolsim.spread.sampling import draw, factors
from tolsim.study import open_study

PILOTS, UNITS, JUDGED = 256, 1024, 192
STUDIES = (("tip-heater", "room", "tip_cold"), ("work-heater", "room", "cold_steel"))


def stages() -> Iterator[tuple[str, Case, Case, int]]:
    """Name, nominal unit, spread units and steps per cycle of every stage."""
    design = circuit_a()
    for name, resistance in (("circuit A", 3.6), ("circuit A, 0.5 ohm", 0.5)):
        nominal = typical_values(design) | {"L.resistance": np.full(1, resistance)}
        many = typical_values(design, PILOTS + UNITS)
        many |= {"L.resistance": np.full(PILOTS + UNITS, resistance)}
        spread = scattered(many, np.random.default_rng(1), CIRCUIT_A_SPREAD)
        yield name, Case(design, nominal, heated=False), Case(design, spread, heated=False), 192
    for name, condition, state in STUDIES:
        opened = open_study(find_study(name))
        study, tables = opened.study, opened.tables
        draws = draw(factors(study, tables), study.run.seed, 0, PILOTS + UNITS)
        nominal_case = case_of(study, nominal_values(study, tables, condition, state))
        spread_case = case_of(study, part_values(study, tables, condition, state, draws))
        yield f"{name}, {state}", nominal_case, spread_case, study.run.steps_per_cycle


def main() -> None:
    """Print one block per stage."""
    for name, nominal_case, units, steps in stages():
        nominal = find_nominal(nominal_case, steps)
        keys = tuple(k for k, value in units.values.items() if np.ptp(value) > 0)
        compass = aim(nominal, keys, steps)
        began = time.perf_counter()
        choice = choose(nominal, compass, units.take(np.arange(PILOTS)), steps)
        chosen = time.perf_counter() - began
        rest = units.take(np.arange(PILOTS, PILOTS + UNITS))
        rate, unsettled = _rate(choice, rest, compass, nominal, steps)
        order = f", {choice.harmonics} harmonics" if choice.harmonics else ""
        print(f"{name}: {choice.solver}{order}, chosen in {chosen:.1f} s", flush=True)
        print(f"  {rate:.0f} units/s, {unsettled} of {UNITS} unsettled")
        judged = rest.take(np.arange(JUDGED))
        print(f"  {_accuracy(choice, judged, compass, steps)}", flush=True)


def _rate(
    choice: Choice, units: Case, compass: Compass, nominal: Nominal, steps: int
) -> tuple[float, int]:
    unsettled = 0
    began = time.perf_counter()
    for first in range(0, UNITS, TOGETHER * BLOCK):
        pool = units.take(np.arange(first, first + TOGETHER * BLOCK))
        for place, solution in enumerate(choice.solve_in_blocks(pool, compass, steps, BLOCK)):
            case = pool.take(np.arange(place * BLOCK, (place + 1) * BLOCK))
            measure_orbits(case, solution)
            measure_start(case, nominal)
            unsettled += int(np.sum(solution.status != Status.SETTLED))
    return UNITS / (time.perf_counter() - began), unsettled


def _accuracy(choice: Choice, units: Case, compass: Compass, steps: int) -> str:
    answers = [choice.solve(units, compass, steps)]
    answers += [solve_units(units, compass, k * steps) for k in (2, 4)]
    known = np.all([answer.status == Status.SETTLED for answer in answers], axis=0)
    mine, coarse, fine = (Marks.of(answer.take(np.flatnonzero(known))) for answer in answers)
    errors = mine.errors(coarse.beyond(fine), np.ones(int(known.sum()), dtype=bool))
    return (
        f"largest errors of {known.sum()} units: frequency {errors.frequency:.1e},"
        f" peak {errors.peak:.1e}, rms {errors.rms:.1e}"
    )


if __name__ == "__main__":
    main()
