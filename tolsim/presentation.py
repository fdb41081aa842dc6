"""What the report shows beside the statistics: waveforms, inputs and origins, small print."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tolsim.answers.results import Results
from tolsim.circuit.nominal import Nominal
from tolsim.circuit.orbit import Solution
from tolsim.circuit.thermal import Case, mosfets
from tolsim.design import Study
from tolsim.evaluation import Plan, built, solve_case
from tolsim.figures.waves import Waves
from tolsim.inputs import input_rows
from tolsim.parts import Inductor
from tolsim.report import ReportInput, Waveform, report_input
from tolsim.self_heating import heating_notes
from tolsim.spread.sampling import Draws, draw, draw_chosen, tables_of
from tolsim.spread.table import SpreadTable
from tolsim.spread.words import assumptions
from tolsim.study import StudyFile
from tolsim.unit_changes import change_ways

Floats = NDArray[np.float64]

WAVE_UNITS = 128  # enough for 5 % and 95 % bands
BAND = (0.05, 0.95)

NOT_MODELLED = (
    "Changes of load that the study does not state: those states are judged by their orbits alone.",
    (
        "Power-on in time of every unit: only doubtful ones and a share of the others are switched"
        " on, with cold junctions; the others are judged by their modes and orbits."
    ),
    "Stray inductance and capacitance that the study does not list as parts.",
    "Core loss beyond a constant series resistance, proximity effect that changes with frequency.",
    "Package inductance of the transistors, gate charge plateau beyond the capacitance law.",
    "The discharge itself: each load state is a coupled loop with fixed resistance.",
    "Wear-out: ageing laws move values, they do not break parts.",
)
CAUTIONS = (  # beside those that stand on every page
    (
        "A unit that does not start can hold both transistors in conduction: limit the supply"
        " current of first tests."
    ),
    (
        "The numbers are estimates from a model and from the laws listed above. They do not"
        " replace measurement on built units, guards and interlocks."
    ),
)


def report_content(plan: Plan, opened: StudyFile, results: Results) -> ReportInput:
    """Gather the report of a finished run."""
    study = plan.study
    return report_input(
        results,
        study,
        waveforms=tuple(_waveforms(plan)),
        inputs=tuple(input_rows(study, opened.tables)),
        assumptions=(
            *assumptions(study, opened.tables),
            *heating_notes(study, opened.tables),
        ),
        not_modelled=NOT_MODELLED,
        cautions=CAUTIONS,
        lots=_lots_differ(study, opened.tables),
        ways=tuple(change_ways(plan, results, reference_condition(study))),
        repeat_command=f"tolsim run study.toml --units {study.run.units} --seed {study.run.seed}",
    )


def _lots_differ(study: Study, tables: Mapping[str, SpreadTable]) -> bool:
    """True if a spread table of the study has a law for whole lots."""
    references = (*study.design.parts, *study.design.rails)
    names = {name for ref in references for name in tables_of(study, ref)}
    spreads = [spread for name in names for spread in tables[name].quantities.values()]
    return any(spread.lot is not None or spread.shared for spread in spreads)


def reference_condition(study: Study) -> str:
    """The condition whose waveforms are shown: the one nearest to 25 degC at nominal supply."""

    def strangeness(name: str) -> tuple[float, ...]:
        condition = study.conditions[name]
        numbers = (condition.supply, condition.ambient, condition.age)
        supply, ambient, age = (0.0 if isinstance(n, Mapping) else float(n) for n in numbers)
        return (abs(supply), abs(ambient - 25.0), age)

    return min(study.conditions, key=strangeness)


@dataclass(frozen=True)
class Signal:
    """One voltage or current over a period: the nominal unit (m + 1,) and others (m + 1, N)."""

    title: str
    label: str
    unit_of_measure: str
    time: Floats  # (m + 1,) s, over the nominal period
    nominal: Floats
    units: Floats


def _shown_units(plan: Plan) -> Draws:
    """Units that make the bands of waveforms: the first ones, or from as many lots as can be."""
    study = plan.study
    count = min(WAVE_UNITS, study.run.units)
    if study.lots is None:
        return draw(plan.factors, study.run.seed, 0, count)
    return draw_chosen(plan.factors, study.run.seed, np.arange(count) * study.run.units // count)


def _waveforms(plan: Plan) -> Iterator[Waveform]:
    """Drain and gate of the first transistor and the hardest-worked coil, in every state."""
    condition = reference_condition(plan.study)
    draws = built(plan, _shown_units(plan))
    for state in plan.study.states:
        nominal = plan.cases[(condition, state)].nominal
        if not nominal.found:
            continue
        case, solution = solve_case(plan, (condition, state), draws)
        for signal in signals(plan.study, nominal, case, solution):
            low, high = np.quantile(signal.units, BAND, axis=1)
            yield Waveform(
                signal.title,
                signal.label,
                signal.unit_of_measure,
                state,
                signal.time,
                signal.nominal,
                low,
                high,
            )


def signals(study: Study, nominal: Nominal, case: Case, solution: Solution) -> Iterator[Signal]:
    """Drain and gate voltage of the first transistor, current of the hardest-worked coil.

    Units without an orbit are left out; if none has one, the nominal unit stands in.
    """
    ideal = Waves.of(nominal.case.network(nominal.solution.junctions), nominal.solution)
    settled = np.flatnonzero(np.isfinite(solution.period))
    units = ideal
    if settled.size:
        orbits = solution.take(settled)
        units = Waves.of(case.take(settled).network(orbits.junctions), orbits)
    for title, label, unit, one, many in _pairs(study, ideal, units):
        time = np.arange(len(one) + 1) / len(one) * ideal.period[0]
        yield Signal(title, label, unit, time, _closed(one)[:, 0], _closed(many))


def _closed(wave: Floats) -> Floats:
    """A period with its first point again at the end."""
    return np.concatenate([wave, wave[:1]])


def _pairs(
    study: Study, ideal: Waves, units: Waves
) -> Iterator[tuple[str, str, str, Floats, Floats]]:
    transistors = mosfets(study.design)
    if transistors:
        ref, part = next(iter(transistors.items()))
        for word, net in (("drain", part.drain), ("gate", part.gate)):
            one, many = (waves.across(net, part.source_net) for waves in (ideal, units))
            yield f"{ref} {word} voltage", ref, "V", one, many
    coils = [ref for ref, part in study.design.parts.items() if isinstance(part, Inductor)]
    if coils:
        hardest = max(coils, key=lambda ref: float(np.ptp(ideal.branch(ref))))
        yield f"{hardest} current", hardest, "A", ideal.branch(hardest), units.branch(hardest)
