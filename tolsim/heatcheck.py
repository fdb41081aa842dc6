"""Were parts as warm as their own losses make them?  A part of the units tells."""

from __future__ import annotations

from typing import Any

import numpy as np

from tolsim.answers.unit_files import UnitRows
from tolsim.evaluation import Plan
from tolsim.nominals import CaseName
from tolsim.self_heating import loss_column, thermal_resistance
from tolsim.spread.part_values import own_rises
from tolsim.spread.sampling import draw

MOST_UNITS = 256
GAP_SHARE = 0.95  # of the units


def heat_check(plan: Plan, rows: UnitRows) -> list[dict[str, Any]]:
    """What self-heating did: one entry per warmed part, in the case in which it runs hottest.

    Returns
    -------
    list of dict
        {part, condition, state, rise (K, of the nominal unit), gap (K, within which the rises by
        the units' own losses lie from those taken, for 95 % of units), settled (in that case)}.
        A case in which warm parts have no orbit is an entry without part.
    """
    heats = {name: prepared.heat for name, prepared in plan.cases.items()}
    found: list[dict[str, Any]] = []
    for ref in dict.fromkeys(ref for heat in heats.values() for ref in heat.rises):
        case = max(heats, key=lambda name: heats[name].rises.get(ref, -1.0))
        gap = _gap(plan, rows, case, ref)
        found.append(_entry(ref, case, heats[case].rises[ref], gap, settled=heats[case].settled))
    found.sort(key=lambda entry: -float(entry["rise"]))
    lost = [case for case, heat in heats.items() if not (heat.settled or heat.rises)]
    return found + [_entry("", case, 0.0, None, settled=False) for case in lost]


def _gap(plan: Plan, rows: UnitRows, case: CaseName, ref: str) -> float | None:
    """Largest gap of most units between the rise taken and the one by their own loss, K."""
    study = plan.study
    count = min(rows.unit.size, MOST_UNITS)
    draws = draw(plan.factors, study.run.seed, 0, count)
    rises = {ref: plan.cases[case].heat.of_units[ref]}
    taken = own_rises(study, plan.tables, *case, draws, rises)[ref]
    losses = rows.figure(loss_column(study.design, ref))[:count, rows.cases.index(case)]
    apart = np.abs(thermal_resistance(study.design, ref) * losses - taken)
    apart = apart[np.isfinite(apart)]
    return float(np.quantile(apart, GAP_SHARE)) if apart.size else None


def _entry(
    part: str, case: CaseName, rise: float, gap: float | None, *, settled: bool
) -> dict[str, Any]:
    where = {"condition": case[0], "state": case[1]}
    return {"part": part, **where, "rise": rise, "gap": gap, "settled": settled}
