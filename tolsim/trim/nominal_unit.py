"""Trims of the nominal unit: no error of meter or hand; it must reach every target.

It is trimmed twice: first to the nearest step, which tells how the reading follows the adjuster,
then like every other unit by an operator who knows that.  So a unit without spread ends where the
nominal one does.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np

from tolsim.circuit.continuation import Compass, aim, solve_units
from tolsim.circuit.devices import Floats
from tolsim.circuit.nominal import find_nominal
from tolsim.circuit.orbit import Solution
from tolsim.circuit.thermal import Case, heats
from tolsim.design import Study, Trim
from tolsim.errors import RunError
from tolsim.figures import measure_orbits
from tolsim.quantity import show
from tolsim.self_heating import Rises, rises_of, settle, warmed_parts
from tolsim.spread.part_values import Values, nominal_values
from tolsim.spread.table import SpreadTable
from tolsim.trim.operator import TrimStatus
from tolsim.trim.session import CaseName, TrimLog, Trimmed, do_trims

_WHY = {
    TrimStatus.TOO_COARSE: "one step of the resolution takes it from one side to the other",
    TrimStatus.EXHAUSTED: "the range of the adjuster ends before",
    TrimStatus.NO_READING: "the meter shows nothing on the way there",
    TrimStatus.UNSETTLED: "the operator's turns are used up",
}


def trim_nominal(study: Study, tables: Mapping[str, SpreadTable]) -> Trimmed:
    """Trim the nominal unit.

    Raises
    ------
    RunError
        If it cannot be set to a target: then no target or range makes sense.
    """
    if not study.trims:
        return Trimmed()
    unit = _NominalUnit(study, tables)
    unit.slopes = {name: float(log.slope[0]) for name, log in _learn(study, unit).items()}
    trimmed = do_trims(study, unit)
    logs = {
        name: replace(log, slope=np.where(np.isnan(log.slope), unit.slopes[name], log.slope))
        for name, log in trimmed.logs.items()
    }
    trimmed = Trimmed(trimmed.moved, logs)
    failed = [
        _failure(name, study.trims[name], log)
        for name, log in trimmed.logs.items()
        if log.status[0] != TrimStatus.SET
    ]
    if failed:
        raise RunError(
            "The nominal unit cannot be trimmed.\n"
            + "\n".join(failed)
            + "\nChange the target, the range, the resolution or the tolerance of the trim."
        )
    return trimmed


def _learn(study: Study, unit: _NominalUnit) -> Mapping[str, TrimLog]:
    """Trim to the nearest step: nobody is content before he has seen both sides of the target."""
    eager = {name: trim.model_copy(update={"within": 0.0}) for name, trim in study.trims.items()}
    return do_trims(study.model_copy(update={"trims": eager}), unit).logs


def _failure(name: str, trim: Trim, log: TrimLog) -> str:
    """One sentence about a target that was not reached."""
    place = show(float(log.position[0]), trim.unit_of_measure)
    reading = show(float(log.reading[0]), trim.reading_unit)
    return (
        f"  trim {name}: {trim.reading} of {show(trim.target, trim.reading_unit)} is not reached:"
        f" {_WHY[TrimStatus(log.status[0])]}"
        f" ({trim.address} left at {place}, reading {reading})."
    )


@dataclass
class _NominalUnit:
    """The nominal unit at the bench; remembers one orbit per case, to go on from."""

    study: Study
    tables: Mapping[str, SpreadTable]
    compasses: dict[CaseName, Compass] = field(default_factory=dict)
    slopes: Mapping[str, float] = field(default_factory=dict)
    rises: dict[CaseName, Rises] = field(default_factory=dict)

    def values(self, case: CaseName, moved: Mapping[str, Floats], *, runs: bool) -> Values:
        rises = self._rises(case, moved) if runs else {}
        return nominal_values(self.study, self.tables, *case, rises, moved)

    def _rises(self, name: CaseName, moved: Mapping[str, Floats]) -> Rises:
        """How much warmer its passive parts run; looked for once, before the first trim there."""
        refs = warmed_parts(self.study, self.tables)
        if not refs:
            return {}
        if name not in self.rises:

            def found(assumed: Rises) -> tuple[Rises, None] | None:
                values = nominal_values(self.study, self.tables, *name, assumed, moved)
                case = Case(self.study.design, values, heats(self.study.design))
                figures = measure_orbits(case, self.orbits(name, case))
                return (rises_of(self.study.design, refs, figures), None) if figures else None

            cold = found({})
            self.rises[name] = {} if cold is None else settle(cold, found)[0].rises
        return self.rises[name]

    def error(self, trim: str, error: str) -> Floats:  # noqa: ARG002 - it has none
        return np.zeros(1)

    def orbits(self, name: CaseName, case: Case) -> Solution:
        steps = self.study.run.steps_per_cycle
        if name in self.compasses:
            return solve_units(case, self.compasses[name], steps)
        nominal = find_nominal(case, steps)
        if nominal.found:
            self.compasses[name] = aim(nominal, tuple(case.values), steps)
        return nominal.solution

    def bias_guess(self, name: CaseName) -> Floats | None:  # noqa: ARG002 - none is known yet
        return None

    def usual_slope(self, trim: str) -> float:
        return self.slopes.get(trim, np.nan)
