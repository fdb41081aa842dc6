"""A second look, in time, at units whose orbit search left something open.

An unstable orbit is disturbed and run on the slow scale: does it burst?  A unit without an orbit
that is switched on and swings is shot at from where it swings.
"""

from __future__ import annotations

import numpy as np

from tolsim.circuit.continuation import shoot_from
from tolsim.circuit.devices import Floats
from tolsim.circuit.orbit import Solution, Status
from tolsim.circuit.poweron.bursts import look_at_bursts
from tolsim.circuit.poweron.fates import Fate
from tolsim.circuit.thermal import Case
from tolsim.figures.power_on import expected_of, measure_power_on
from tolsim.nominals import PreparedCase


def bursts_confirmed(prepared: PreparedCase, case: Case, solution: Solution) -> Solution:
    """Orbits with the status of unstable ones as a run in time tells it."""
    frame = prepared.compass.nominal.frame
    known = np.isfinite(solution.period)
    units = np.flatnonzero((solution.status == Status.UNSTABLE) & known)
    if frame is None or not units.size:
        return solution
    status = look_at_bursts(case.take(units), solution.take(units), frame.lead, frame.scale)
    some = solution.take(units)
    return solution.put(units, Solution(**{**vars(some), "status": status}))


def found_by_power_on(
    prepared: PreparedCase,
    case: Case,
    cold: Case,
    solution: Solution,
    current: Floats,
    steps: int,
) -> Solution:
    """Orbits, with those that only switching on could find.

    Parameters
    ----------
    case, cold : Case
        N units with passive parts as warm as they run, and before they have run.
    current : (N,)
        Mean supply current on the orbits, A.
    steps : int
        Per period.
    """
    lost = np.isin(solution.status, (Status.NOT_CONVERGED, Status.NO_ORBIT))
    if not (lost.any() and prepared.nominal.found):
        return solution
    expected = expected_of(prepared.nominal, solution, current)
    seen = measure_power_on(cold, expected, prepared.start.shift, lost)
    units = np.flatnonzero((seen.fate == Fate.STARTS) | (seen.fate == Fate.OTHER_SWING))
    if not units.size:
        return solution
    again = shoot_from(
        case.take(units), prepared.compass, seen.x[units], expected.period[units], steps
    )
    better = np.flatnonzero(again.status == Status.SETTLED)
    return solution.put(units[better], again.take(better))
