"""Which solver serves each case of a run, measured on the study's own first units.

Order and solver are decided in the first condition of every load state on spread pilot units
(`circuit.bulk.choice`); the other conditions of that state take the same order.  The pilots are
always the first units of the study, however many the run has, so that unit k comes out the same.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace

from joblib import Parallel, cpu_count, delayed, parallel_config

from tolsim.circuit.bulk.choice import Choice, choose
from tolsim.circuit.bulk.plan import prepare_fast
from tolsim.circuit.bulk.reference import NoReferenceError
from tolsim.circuit.bulk.unit_table import TopologyError
from tolsim.circuit.devices import Floats
from tolsim.circuit.thermal import Case
from tolsim.design import Study
from tolsim.nominals import CaseName, PreparedCase, case_of
from tolsim.spread.part_values import part_values
from tolsim.spread.sampling import Draws, Factor, draw
from tolsim.spread.table import SpreadTable
from tolsim.trim.drawn import trim_draws
from tolsim.trim.session import is_idle

PILOTS = 256


def wants_bulk(study: Study) -> bool:
    """Whether the bulk solver is tried: unless the study pins shooting.

    The number of units must not matter: the same solver serves unit k in a short run and in a
    long one.
    """
    return study.run.solver != "shooting"


def choose_solvers(
    study: Study,
    tables: Mapping[str, SpreadTable],
    factors: Sequence[Factor],
    cases: Mapping[CaseName, PreparedCase],
    jobs: int | None,
) -> dict[CaseName, Choice]:
    """Choose a solver for every case whose nominal unit has an orbit; shooting serves the others.

    Parameters
    ----------
    jobs : int, optional
        Worker processes; all cores if None.
    """
    states = tuple(dict.fromkeys(state for _, state in cases))
    own = {
        state: {
            name: case for name, case in cases.items() if name[1] == state and case.nominal.found
        }
        for state in states
    }
    alone = [replace(factor, every=1) for factor in factors]  # pilots show the spread of all lots
    draws = draw(alone, study.run.seed, 0, PILOTS)
    draws = replace(draws, moved=_moved(study, tables, cases, own, draws))
    with parallel_config(backend="loky", inner_max_num_threads=1):
        work = Parallel(n_jobs=min(jobs or cpu_count(), len(states)))
        found = work(delayed(_choose_in_state)(study, tables, draws, own[s]) for s in states)
    return {name: choice for part in found for name, choice in part.items()}


def _moved(
    study: Study,
    tables: Mapping[str, SpreadTable],
    cases: Mapping[CaseName, PreparedCase],
    own: Mapping[str, Mapping[CaseName, PreparedCase]],
    draws: Draws,
) -> Mapping[str, Floats]:
    """What the operator moves in the pilot units.

    Where he reads on the orbit, the solver of the bench case is chosen on pilots that are not
    trimmed yet: their spread is the wider one, so it serves all that he may pass through.
    """
    benches = [
        (trim.condition, trim.state) for trim in study.trims.values() if not is_idle(trim.reading)
    ]
    choices: dict[CaseName, Choice] = {}
    for name in dict.fromkeys(benches):
        if name in own[name[1]]:
            choices |= _choose_in_state(study, tables, draws, {name: own[name[1]][name]})
    return trim_draws(study, tables, cases, choices, draws).moved


def _choose_in_state(
    study: Study,
    tables: Mapping[str, SpreadTable],
    draws: Draws,
    cases: Mapping[CaseName, PreparedCase],
) -> dict[CaseName, Choice]:
    """Choose in the first condition, follow in the others."""
    found: dict[CaseName, Choice] = {}
    first: Choice | None = None
    for name, prepared in cases.items():
        values = part_values(study, tables, *name, draws, prepared.heat.of_units)
        pilots = case_of(study, values)
        if first is None:
            first = choose(prepared.nominal, prepared.compass, pilots, study.run.steps_per_cycle)
            found[name] = first
        else:
            found[name] = _follow(first, prepared, pilots, study.run.steps_per_cycle)
    return found


def _follow(first: Choice, prepared: PreparedCase, pilots: Case, steps: int) -> Choice:
    """The same solver and order in another condition."""
    if first.plan is None:
        return first
    try:
        plan = prepare_fast(prepared.nominal, prepared.compass, pilots, steps, first.harmonics)
    except (NoReferenceError, TopologyError) as problem:
        words = f"{first.harmonics} harmonics: {problem}"
        return replace(first, solver="shooting", harmonics=0, plan=None, reason=words)
    return replace(first, plan=plan)
