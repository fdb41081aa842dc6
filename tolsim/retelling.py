"""One unit switched on again in time, beside the nominal unit and the nearest that passes."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from tolsim.answers.unit_power_on import (
    parting_sentence,
    power_on_story,
    remedy_sentences,
    words_of,
)
from tolsim.circuit.orbit import Solution
from tolsim.circuit.poweron.fates import Fate
from tolsim.circuit.poweron.otherwise import Bench, Remedy, remedies
from tolsim.circuit.poweron.ramps import profiles_of
from tolsim.circuit.thermal import Case
from tolsim.design import Design
from tolsim.evaluation import Plan, built, solve_case
from tolsim.figures import measure_orbits
from tolsim.figures.power_on import expected_of
from tolsim.figures.track import Track, track_of
from tolsim.nominals import CaseName, case_of
from tolsim.spread.part_values import part_values
from tolsim.spread.sampling import Draws, draw

Solved = tuple[Case, Solution]


@dataclass(frozen=True)
class SwitchedOnAgain:
    """Power-on of a unit in one case.

    Attributes
    ----------
    unit, nominal : Track
        Of this unit and of the nominal one.
    neighbour : Track or None
        Of the nearest passing unit, if there is one.
    remedies : tuple of Remedy
        Which single changes would have made it start; empty if it starts or was not asked.
    titles : mapping of str to str
        What is worth drawing of a track, and its words; "" is the swing of the lead.
    """

    unit: Track
    nominal: Track
    neighbour: Track | None
    remedies: tuple[Remedy, ...]
    titles: Mapping[str, str]


def switch_on_again(
    plan: Plan, draws: Draws, neighbour: int | None, solved: Mapping[CaseName, Solved]
) -> dict[CaseName, SwitchedOnAgain]:
    """Switch a unit on in every case it starts in; remedies are tried where it fails first.

    Parameters
    ----------
    draws : Draws
        One unit as it leaves the bench.
    neighbour : int or None
        Number of a unit to compare it with.
    solved : mapping
        The unit and its orbit in every case.
    """
    study = plan.study
    beside = None
    if neighbour is not None:
        beside = built(plan, draw(plan.factors, study.run.seed, neighbour, 1))
    found: dict[CaseName, SwitchedOnAgain] = {}
    explained = False
    for name, prepared in plan.cases.items():
        starts = study.kind == "self-oscillating" and study.states[name[1]].starts_here
        if not (starts and prepared.nominal.found):
            continue
        bench = _bench(plan, name, draws, solved[name])
        unit = _track(bench)
        other = None
        if beside is not None:
            other = _track(_bench(plan, name, beside, solve_case(plan, name, beside)))
        fails = unit.fate != Fate.STARTS
        tried = remedies(bench) if fails and not explained else ()
        explained |= fails
        nominal = prepared.nominal
        current = measure_orbits(nominal.case, nominal.solution)["supply_current"]
        expected = expected_of(nominal, nominal.solution, current)
        own = Bench(prepared.start.case, expected, prepared.start.shift, profiles_of(study.design))
        titles = _titles(study.design, unit)
        found[name] = SwitchedOnAgain(unit, _track(own), other, tried, titles)
    return found


def _bench(plan: Plan, name: CaseName, draws: Draws, solved: Solved) -> Bench:
    """A unit ready to be switched on, as the run does it."""
    prepared, study = plan.cases[name], plan.study
    case, solution = solved
    current = measure_orbits(case, solution)["supply_current"]
    cold = case_of(study, part_values(study, plan.tables, *name, draws))
    expected = expected_of(prepared.nominal, solution, current)
    return Bench(cold, expected, prepared.start.shift, profiles_of(study.design))


def _track(bench: Bench) -> Track:
    return track_of(bench.case, bench.expected, bench.shift, bench.profiles)


def _titles(design: Design, track: Track) -> dict[str, str]:
    """The swing, transistors, currents and rails."""
    names = [f"{ref}:{end}" for ref in track.thresholds for end in ("ds", "gs")]
    names += [*track.currents, *(rail.net for rail in design.rails.values())]
    titles = {"": f"swing of {words_of(design, track.lead)}"}
    return titles | {name: words_of(design, name) for name in dict.fromkeys(names)}


def power_on_sentences(
    plan: Plan, found: Mapping[CaseName, SwitchedOnAgain], neighbour: int | None
) -> list[str]:
    """The story of every power-on, case by case."""
    design, story = plan.study.design, []
    for name, case in found.items():
        story.append(f"Power-on in {name[0]} / {name[1]}:")
        told = power_on_story(design, case.unit)
        if case.unit.fate != Fate.STARTS and case.neighbour is not None:
            told.append(parting_sentence(design, case.unit, case.neighbour, f"unit {neighbour}"))
        told += remedy_sentences(case.remedies) if case.remedies else []
        story += [f"  {sentence}" for sentence in told]
    return story
