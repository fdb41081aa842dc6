"""Trims of drawn units: their values and errors, and the solver that serves the bench case."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from tolsim.circuit.bulk.choice import Choice
from tolsim.circuit.continuation import solve_units
from tolsim.circuit.devices import Floats
from tolsim.circuit.orbit import Solution
from tolsim.circuit.thermal import Case
from tolsim.design import Study
from tolsim.nominals import CaseName, PreparedCase
from tolsim.spread.part_values import Values, part_values
from tolsim.spread.sampling import Draws, trim_error
from tolsim.spread.table import SpreadTable
from tolsim.trim.session import Trimmed, do_trims


def trim_draws(
    study: Study,
    tables: Mapping[str, SpreadTable],
    cases: Mapping[CaseName, PreparedCase],
    choices: Mapping[CaseName, Choice],
    draws: Draws,
) -> Trimmed:
    """Trim drawn units.

    Parameters
    ----------
    cases : mapping
        The trimmed nominal unit of every case.
    choices : mapping
        Solvers of the cases; shooting serves a case without choice.
    draws : Draws
        N units.
    """
    if not study.trims:
        return Trimmed()
    return do_trims(study, _Drawn(study, tables, cases, choices, draws))


@dataclass(frozen=True)
class _Drawn:
    """Units of `draws` at the bench."""

    study: Study
    tables: Mapping[str, SpreadTable]
    cases: Mapping[CaseName, PreparedCase]
    choices: Mapping[CaseName, Choice]
    draws: Draws

    def values(self, case: CaseName, moved: Mapping[str, Floats], *, runs: bool) -> Values:
        rises = self.cases[case].heat.of_units if runs else {}
        return part_values(self.study, self.tables, *case, replace(self.draws, moved=moved), rises)

    def error(self, trim: str, error: str) -> Floats:
        return trim_error(self.study, self.draws, trim, error)

    def orbits(self, name: CaseName, case: Case) -> Solution:
        compass, steps = self.cases[name].compass, self.study.run.steps_per_cycle
        choice = self.choices.get(name)
        if choice is None:
            return solve_units(case, compass, steps)
        return choice.solve(case, compass, steps)

    def bias_guess(self, name: CaseName) -> Floats | None:
        return np.asarray(self.cases[name].start.bias.x[0])

    def usual_slope(self, trim: str) -> float:
        one = self.study.trims[trim]
        relative = self.cases[one.condition, one.state].figures[f"{trim}.trim_slope"]
        return relative * one.target / (one.range[1] - one.range[0])
