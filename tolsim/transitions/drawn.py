"""Changes of load of drawn units: who takes part, what becomes of them, what it asks of parts."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.devices import Floats
from tolsim.circuit.load_change.passage import Fate
from tolsim.circuit.orbit import Solution, Status
from tolsim.circuit.thermal import Case
from tolsim.design import Study
from tolsim.figures.load_change import measure_passage
from tolsim.nominals import CaseName
from tolsim.spread.needs import need_factor
from tolsim.spread.part_values import part_values
from tolsim.spread.sampling import Draws
from tolsim.spread.table import SpreadTable
from tolsim.transition import Transition
from tolsim.transitions.prepared import MoveName, PreparedMove, as_warm, follow, roads, starts

Flags = NDArray[np.bool_]
Numbers = NDArray[np.int64]

FATES = {
    Fate.ARRIVES: "arrives",
    Fate.DIES: "dies",
    Fate.ELSEWHERE: "ends elsewhere",
    Fate.UNDECIDED: "undecided",
}
NOT_MET = "does not ignite"
FALLS_BACK = "falls back"
NOT_REACHED = "not reached"
NOT_RUN = "not integrated"
OUTCOMES = {
    NOT_MET: NOT_MET,
    FALLS_BACK: "drops out",
    FATES[Fate.DIES]: "drops out",
    FATES[Fate.ELSEWHERE]: "ends elsewhere",
    FATES[Fate.UNDECIDED]: "undecided",
}
"""What a fate makes of the outcome in the state the change leads to; others leave it alone."""

NOWHERE = ""  # the place of a unit whose oscillation has died or is not known


@dataclass(frozen=True)
class SolvedCase:
    """Units of a block in one case."""

    case: Case
    solution: Solution
    figures: Mapping[str, Floats]


@dataclass
class Told:
    """What the changes that lead into one case say of the units of a block.

    Attributes
    ----------
    figures : mapping of str to (N,)
        Worst over the changes; NaN for units that were not followed.
    said : mapping of str to (N,)
        Outcome to the units that have it.
    words : (N,) of str
        "0 arrives;2 dies": number of the transition and its fate.
    """

    figures: dict[str, Floats]
    said: dict[str, Flags]
    words: NDArray[np.object_]

    @classmethod
    def nothing(cls, units: int) -> Told:
        """No change leads here."""
        return cls({}, {}, np.full(units, "", dtype=object))

    def add(self, number: int, fates: NDArray[np.object_], figures: Mapping[str, Floats]) -> None:
        """Take note of one transition."""
        for column, values in figures.items():
            known = self.figures.get(column)
            self.figures[column] = values if known is None else np.fmax(known, values)
        for fate, outcome in OUTCOMES.items():
            hit = fates == fate
            if hit.any():
                self.said[outcome] = self.said.get(outcome, np.zeros(len(fates), bool)) | hit
        for unit, fate in enumerate(fates):
            before = f"{self.words[unit]};" if self.words[unit] else ""
            self.words[unit] = f"{before}{number} {fate}"


def stride(study: Study) -> int:
    """Every so manieth unit is followed through its changes of load; 0 for none."""
    share = study.run.transition_share
    return max(round(1.0 / share), 1) if share > 0.0 else 0


def followed(study: Study, numbers: Numbers) -> Flags:
    """Units (N,) that are followed, by their numbers: the same ones whatever the run."""
    every = stride(study)
    return numbers % every == 0 if every else np.zeros(len(numbers), dtype=bool)


def tell_transitions(
    study: Study,
    tables: Mapping[str, SpreadTable],
    moves: Mapping[MoveName, PreparedMove],
    solved: Mapping[CaseName, SolvedCase],
    draws: Draws,
    numbers: Numbers,
) -> dict[CaseName, Told]:
    """What becomes of the units of a block in every case that a change of load leads to.

    Parameters
    ----------
    solved : mapping
        The block in every case.
    draws : Draws
        As the units leave the bench.
    numbers : (N,)
        Their numbers; negative for units nobody asks for, which are not followed.
    """
    told: dict[CaseName, Told] = {}
    chosen = followed(study, numbers) & (numbers >= 0)
    for condition in study.conditions:
        for number, fates, figures in _one_condition(
            study, tables, moves, solved, draws, chosen, condition
        ):
            name = condition, study.transitions[number].after
            told.setdefault(name, Told.nothing(draws.count)).add(number, fates, figures)
    return told


def _one_condition(
    study: Study,
    tables: Mapping[str, SpreadTable],
    moves: Mapping[MoveName, PreparedMove],
    solved: Mapping[CaseName, SolvedCase],
    draws: Draws,
    chosen: Flags,
    condition: str,
) -> Iterator[tuple[int, NDArray[np.object_], dict[str, Floats]]]:
    """Fates and figures of the block, transition by transition; units stay where they end."""
    place = np.full(draws.count, NOWHERE, dtype=object)
    last = None
    for number, transition in enumerate(study.transitions):
        before, after = solved[condition, transition.before], solved[condition, transition.after]
        if last is None or last.after != transition.before:  # a sequence of its own
            place[:] = transition.before
        here = (place == transition.before) & (before.solution.status == Status.SETTLED)
        fates = np.where(here, NOT_RUN, NOT_REACHED).astype(object)
        met = _reaches(transition, "needs", before, draws)
        fates[here & ~met] = NOT_MET
        going = here & met
        move = moves.get((condition, number))
        figures: dict[str, Floats] = {}
        run = np.flatnonzero(going & chosen)
        if move is not None and run.size:
            cold = (
                part_values(study, tables, condition, state, draws)
                for state in (transition.before, transition.after)
            )
            values = as_warm(before.case.values, *cold)
            own = Case(study.design, values).take(run)
            fates[run], figures = _followed(study, move, before, after, own, run)
        stays = _reaches(transition, "stays_while", after, draws)
        arrived = np.isin(fates, (NOT_RUN, FATES[Fate.ARRIVES])) & going
        fates[arrived & ~stays] = FALLS_BACK
        fell = transition.falls_back_to or transition.before
        place[going] = NOWHERE
        place[arrived] = np.where(stays[arrived], transition.after, fell)
        last = transition
        yield number, fates, figures


def _reaches(transition: Transition, key: str, solved: SolvedCase, draws: Draws) -> Flags:
    """Units (N,) whose figure reaches its level; one without an orbit does not."""
    need = getattr(transition, key)
    if need is None:
        return np.ones(draws.count, dtype=bool)
    level: Floats | float = need.at_least
    name = need_factor(transition, key)
    if name in draws.column:
        level = level * (1.0 + draws.of(name, draws.factors[draws.column[name]].law))
    values = solved.figures.get(need.column, np.full(draws.count, np.nan))
    with np.errstate(invalid="ignore"):
        return np.asarray(values >= level)


def _followed(
    study: Study,
    move: PreparedMove,
    before: SolvedCase,
    after: SolvedCase,
    values: Case,
    run: NDArray[np.intp],
) -> tuple[NDArray[np.object_], dict[str, Floats]]:
    """Fates (m,) of the units `run`, and figures (N,) with NaN for all others."""
    units = len(before.solution.period)
    case, solution = before.case.take(run), before.solution.take(run)
    goal = after.solution.take(run)
    settled = goal.status == Status.SETTLED
    swing = np.where(settled[:, None], np.ptp(goal.samples, axis=0), move.swing)
    period = np.where(settled, goal.period, move.period)
    way = roads(study, case, values.values, solution.junctions, move)
    worst: dict[str, Floats] = {}
    fates = np.full(run.size, int(Fate.ARRIVES))
    for phase in move.phases[: study.run.transition_phases]:
        passage = follow(
            study,
            move,
            way,
            starts(case, solution, way, (phase,)),
            solution.period,
            swing,
            phases=(phase,) * run.size,
            period=period,
        )
        for column, found in measure_passage(study.design, way, passage).items():
            own = worst.setdefault(column, np.full(units, np.nan))
            own[run] = np.fmax(own[run], found)
        fates = np.where(passage.fate > fates, passage.fate, fates)
    words = np.array([FATES[Fate(fate)] for fate in fates], dtype=object)
    return words, worst
