"""One chunk of units through every case: draws -> values -> orbits -> figures -> verdicts."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import lru_cache
from pathlib import Path

import joblib
import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tolsim.answers.power_on import SURE_MARGIN_DB
from tolsim.answers.unit_files import UnitFiles, UnitRows
from tolsim.circuit.bulk.choice import Choice, shot_in_blocks
from tolsim.circuit.continuation import solve_units
from tolsim.circuit.devices import Floats
from tolsim.circuit.orbit import Solution, Status
from tolsim.circuit.poweron.fates import Fate
from tolsim.circuit.thermal import Case
from tolsim.design import Study
from tolsim.figures import measure_orbits, measure_start
from tolsim.figures.power_on import SwitchedOn, expected_of, measure_power_on
from tolsim.nominals import CaseName, PreparedCase, case_of, switched_on_here
from tolsim.second_look import bursts_confirmed, found_by_power_on
from tolsim.spread.part_values import part_values
from tolsim.spread.sampling import Draws, Factor, draw
from tolsim.spread.table import SpreadTable
from tolsim.transitions.drawn import SolvedCase, Told, tell_transitions
from tolsim.transitions.prepared import MoveName, PreparedMove
from tolsim.trim.drawn import trim_draws
from tolsim.trim.session import Trimmed, idle_voltages, joined, trim_figures, trim_outcomes
from tolsim.verdicts import judge, overruled

MOST_IMBALANCE = 0.02  # of the input power, between it and all losses


@dataclass(frozen=True)
class Plan:
    """All that a worker needs to evaluate any unit of a study."""

    study: Study
    tables: Mapping[str, SpreadTable]
    factors: tuple[Factor, ...]
    cases: Mapping[CaseName, PreparedCase]
    choices: Mapping[CaseName, Choice] = field(default_factory=dict)  # none: shooting
    moves: Mapping[MoveName, PreparedMove] = field(default_factory=dict)  # changes of load


@dataclass(frozen=True)
class Chunk:
    """Finished units."""

    first: int
    rows: pd.DataFrame  # one row per unit, condition and state
    factors: pd.DataFrame  # one row per unit


def evaluate(plan: Plan, first: int, count: int, block: int) -> Chunk:
    """Units `first` ... `first + count - 1` in every case, `block` of them after the other.

    Always whole blocks are solved, the surplus is dropped, and a unit is never touched by another
    block than its own: so its last bits depend neither on how many units the run has nor on how
    many blocks are evaluated together.
    """
    draws = draw(plan.factors, plan.study.run.seed, first, -(-count // block) * block)
    rows = rows_of(plan, draws, count, block)
    factors = pd.DataFrame(draws.values[:count], columns=list(draws.names))
    factors.insert(0, "unit", np.arange(first, first + count))
    return Chunk(first, rows, factors)


def rows_of(
    plan: Plan, draws: Draws, count: int, block: int, numbers: NDArray[np.intp] | None = None
) -> pd.DataFrame:
    """Rows of the first `count` drawn units in every case, `block` of them after the other.

    `numbers` (N,) are those of the units where they do not follow each other.
    """
    number = draws.first + np.arange(draws.count) if numbers is None else numbers
    number = np.where(np.arange(draws.count) < count, number, -1)  # nobody asks for the surplus
    trims = [trim_drawn(plan, draws.rows(row, block)) for row in range(0, draws.count, block)]
    draws = replace(draws, moved=joined(trims))
    cases = [solved_in_blocks(plan, name, draws, block) for name in plan.cases]
    tables = []
    for place, blocks in enumerate(zip(*cases, strict=True)):
        solved = dict(zip(plan.cases, blocks, strict=True))
        own, first = draws.rows(place * block, block), place * block
        told: Mapping[CaseName, Told] = {}
        asked = number[first : first + own.count]
        if plan.study.transitions:
            told = tell_transitions(plan.study, plan.tables, plan.moves, solved, own, asked)
        for name, one in solved.items():
            table = _rows(plan, name, own, one, trims[place], told.get(name), asked)
            tables.append(table.head(count - first))
    return pd.concat(tables, ignore_index=True)


@lru_cache(maxsize=1)
def stored_plan(plan_file: str) -> Plan:
    """Read a plan once per worker, its large arrays shared between workers through the file."""
    plan: Plan = joblib.load(plan_file, mmap_mode="r")
    return plan


def evaluate_stored(
    plan_file: str, folder: Path | None, first: int, count: int, block: int
) -> Chunk | int:
    """Evaluate for a worker: the plan comes from a file, not with every task.

    A chunk that goes into a results folder is written here, so that the parent, which has a core
    to share, need not receive and write it.
    """
    chunk = evaluate(stored_plan(plan_file), first, count, block)
    return chunk if folder is None else store_chunk(folder, chunk)


def store_chunk(folder: Path, chunk: Chunk) -> int:
    """Write a chunk into a results folder; the number of its units."""
    UnitFiles(folder).write_chunk(chunk.first, chunk.rows, chunk.factors)
    return len(chunk.factors)


def trim_drawn(plan: Plan, draws: Draws) -> Trimmed:
    """Trim the drawn units of a plan; `solve_case` wants the draws with what was moved."""
    return trim_draws(plan.study, plan.tables, plan.cases, plan.choices, draws)


def built(plan: Plan, draws: Draws) -> Draws:
    """The drawn units as they leave the bench."""
    return replace(draws, moved=trim_drawn(plan, draws).moved)


def solve_case(plan: Plan, name: CaseName, draws: Draws) -> tuple[Case, Solution]:
    """Orbits of units as `built` leaves them, in one case, passive parts as warm as they run."""
    case = _drawn_case(plan, name, draws)
    compass, steps = plan.cases[name].compass, plan.study.run.steps_per_cycle
    choice = plan.choices.get(name)
    if choice is None:
        return case, solve_units(case, compass, steps)
    return case, choice.solve(case, compass, steps)


def _drawn_case(plan: Plan, name: CaseName, draws: Draws) -> Case:
    rises = plan.cases[name].heat.of_units
    return case_of(plan.study, part_values(plan.study, plan.tables, *name, draws, rises))


def case_figures(
    plan: Plan, name: CaseName, draws: Draws, case: Case, solution: Solution
) -> dict[str, Floats]:
    """Figures of solved units, start figures (cold) where the state is one to start in."""
    prepared = plan.cases[name]
    figures = dict(measure_orbits(case, solution))
    starts = plan.study.states[name[1]].starts_here
    if starts and plan.study.kind == "self-oscillating":
        cold = case
        if prepared.heat.rises:
            cold = case_of(plan.study, part_values(plan.study, plan.tables, *name, draws))
        figures |= measure_start(cold, prepared.start)
    return figures


def switch_units_on(
    plan: Plan,
    name: CaseName,
    draws: Draws,
    solution: Solution,
    figures: Mapping[str, Floats],
    numbers: NDArray[np.intp],
) -> SwitchedOn | None:
    """Power-on in time of the units whose start is in doubt, and of a share of the others.

    None where units do not start, or no orbit is known that they should reach.  `numbers` (N,)
    are those of the units, so that the share is the same units in whatever company; negative for
    units nobody asks for, which stay off.
    """
    prepared, share = plan.cases[name], plan.study.run.power_on_share
    if not (switched_on_here(plan.study, name) and prepared.nominal.found):
        return None
    sure = (solution.status == Status.SETTLED) & (figures["start_margin"] > SURE_MARGIN_DB)
    sure &= figures["growth_rate"] > 0
    sampled = numbers % max(round(1 / share), 1) == 0
    cold = case_of(plan.study, part_values(plan.study, plan.tables, *name, draws))
    expected = expected_of(prepared.nominal, solution, figures["supply_current"])
    chosen = (sampled | ~sure) & (numbers >= 0)
    return measure_power_on(cold, expected, prepared.start.shift, chosen)


def solved_in_blocks(plan: Plan, name: CaseName, draws: Draws, block: int) -> Iterator[SolvedCase]:
    """The drawn units in one case, solved and measured, one block after the other."""
    case = _drawn_case(plan, name, draws)
    compass, steps = plan.cases[name].compass, plan.study.run.steps_per_cycle
    choice = plan.choices.get(name)
    if choice is None:
        solutions = shot_in_blocks(case, compass, steps, block)
    else:
        solutions = choice.solve_in_blocks(case, compass, steps, block)
    for place, solution in enumerate(solutions):
        own = draws.rows(place * block, block)
        own_case = case.take(np.arange(place * block, place * block + own.count))
        yield SolvedCase(own_case, *_trusted(plan, name, own, own_case, solution))


def _rows(
    plan: Plan,
    name: CaseName,
    draws: Draws,
    solved: SolvedCase,
    trimmed: Trimmed,
    told: Told | None,
    numbers: NDArray[np.intp],
) -> pd.DataFrame:
    """Rows of solved units, with what switching on and the changes of load say of them."""
    solution, figures = solved.solution, dict(solved.figures)
    switched = switch_units_on(plan, name, draws, solution, figures, numbers)
    fate = None
    if switched is not None:
        figures |= switched.figures
        fate = switched.fate
    figures |= trim_figures(plan.study, name, trimmed) | _idle_voltages(plan, name, draws)
    figures |= told.figures if told else {}
    verdicts = judge(
        plan.study,
        *name,
        solution.status,
        figures,
        plan.cases[name].figures,
        fate,
    )
    verdicts = overruled(verdicts, told.said if told else {})
    verdicts = overruled(verdicts, trim_outcomes(plan.study, name, trimmed))
    figures.pop("mode_match", None)
    condition, state = name
    columns: dict[str, object] = {
        "unit": np.arange(draws.first, draws.first + draws.count),
        "condition": condition,
        "state": state,
        "verdict": verdicts.verdict.astype(object),
        "outcome": verdicts.outcome.astype(object),
        "failed_limits": verdicts.failed_limits,
        "status": np.array([_status_word(code) for code in solution.status], dtype=object),
        "way": solution.way.astype(object),
        "power_on": _power_on_words(fate, draws.count),
    }
    if plan.study.transitions:
        columns["changes"] = told.words if told else np.full(draws.count, "", dtype=object)
    missing = np.full(draws.count, np.nan)
    ordered = {column: figures.get(column, missing) for column in figure_columns(plan)}
    return pd.DataFrame(columns | ordered)


def _trusted(
    plan: Plan, name: CaseName, draws: Draws, case: Case, solution: Solution
) -> tuple[Solution, dict[str, Floats]]:
    """Orbits and figures of units; what does not keep its energy is solved again by shooting.

    A unit that still does not is none that can be judged.
    """
    figures = case_figures(plan, name, draws, case, solution)
    for last in (False, True):
        settled = solution.status == Status.SETTLED
        lost = np.flatnonzero(settled & ~(np.abs(figures["energy_balance"]) < MOST_IMBALANCE))
        if not lost.size:
            break
        if last:
            status = solution.status.copy()
            status[lost] = Status.NOT_CONVERGED
            return replace(solution, status=status), figures
        steps = plan.study.run.steps_per_cycle
        again = solve_units(case.take(lost), plan.cases[name].compass, steps)
        solution = solution.put(lost, again)
        figures = case_figures(plan, name, draws, case, solution)
    looked = _second_look(plan, name, draws, case, solution, figures)
    if looked is solution:
        return solution, figures
    return looked, case_figures(plan, name, draws, case, looked)


def _second_look(
    plan: Plan,
    name: CaseName,
    draws: Draws,
    case: Case,
    solution: Solution,
    figures: Mapping[str, Floats],
) -> Solution:
    """Runs in time where the search for orbits left something open."""
    prepared = plan.cases[name]
    solution = bursts_confirmed(prepared, case, solution)
    if not switched_on_here(plan.study, name):
        return solution
    cold = case_of(plan.study, part_values(plan.study, plan.tables, *name, draws))
    current, steps = figures["supply_current"], plan.study.run.steps_per_cycle
    return found_by_power_on(prepared, case, cold, solution, current, steps)


def _power_on_words(fate: NDArray[np.intp] | None, units: int) -> NDArray[np.object_]:
    """What became of every unit that was switched on in time, in words; else empty."""
    words = {int(code): code.name.lower().replace("_", " ") for code in Fate}
    words[int(Fate.NOT_RUN)] = ""
    codes = np.zeros(units, dtype=np.intp) if fate is None else fate
    return np.array([words[int(code)] for code in codes], dtype=object)


def passes(rows: UnitRows) -> NDArray[np.bool_]:
    """Units (N,) that pass in every case."""
    codes, words = rows.words("verdict")
    return np.asarray((codes == (words.index("pass") if "pass" in words else -2)).all(axis=1))


def _idle_voltages(plan: Plan, name: CaseName, draws: Draws) -> dict[str, Floats]:
    """What trims that read an idle voltage would read in this case."""
    if not any(trim.net for trim in plan.study.trims.values()):
        return {}
    cold = case_of(plan.study, part_values(plan.study, plan.tables, *name, draws))
    return idle_voltages(plan.study, cold, plan.cases[name].start.bias.x[0])


def _status_word(code: int) -> str:
    return Status(code).name.lower().replace("_", " ")


def figure_columns(plan: Plan) -> Sequence[str]:
    """Every figure any case can have, in one order for all chunks."""
    names: dict[str, None] = {}  # those of trims among them: the nominal unit is trimmed too
    for prepared in plan.cases.values():
        names |= dict.fromkeys(name for name in prepared.figures if name != "mode_match")
    return tuple(names)
