"""From the nominal orbit to the orbit of every unit.

First-order start: with z = (x0 / scale, ln T) and r(z; p) the closing gap of one period, the orbit
moves with a part value as dz/dp = -J^-1 dr/dp, J the Newton matrix of the nominal unit.  One
period of as many perturbed nominal units as there are spreading values gives every dr/dp at once.

Units that shooting does not settle from there are led from the nominal unit in blends of their
part values; the leftovers are integrated in time from full swing: what decays has no orbit.

A unit's answer depends on its own part values and the nominal unit only, never on its neighbours.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from tolsim.circuit.cycle import run_cycle
from tolsim.circuit.devices import Floats, Ints
from tolsim.circuit.nominal import Nominal
from tolsim.circuit.orbit import Solution, Status
from tolsim.circuit.shooting import Frame, Start, bordered_matrix, shoot
from tolsim.circuit.thermal import Case
from tolsim.circuit.transient import march

STEP_RELATIVE = 1e-3  # perturbation of a value that scales, for dr/dp
STEP_ABSOLUTE = 1e-3  # V, degC ... of a value that may be zero or negative
SHOOTING_ROUNDS = 14
BLENDS = (0.25, 0.5, 0.75, 1.0)
LEAD_STEPS = 64  # per cycle, in the time-domain decision
LEAD_CYCLES = 120
DECAYED = 0.05  # of the nominal swing
UNSETTLED = (Status.NOT_CONVERGED, Status.UNSTABLE)


@dataclass(frozen=True)
class Compass:
    """Where the orbit goes when part values move: first-order predictor about the nominal unit."""

    nominal: Nominal
    values: Mapping[str, Floats]  # of the nominal unit, (1,)
    slopes: Mapping[str, Floats]  # key -> (n + 1,) d(x0 / scale, ln T) per unit of `distance`

    def start(self, case: Case) -> Start:
        """Predicted start of every unit of a case."""
        frame = self.nominal.frame
        assert frame is not None
        orbit = self.nominal.solution
        n = len(frame.scale)
        z = np.zeros((case.units, n + 1))
        for key, slope in self.slopes.items():
            z += distance(case.values[key], self.values[key])[:, None] * slope
        # a first-order guess is not trusted beyond the orbit's own size
        z /= np.maximum(1.0, np.abs(z).max(axis=1, keepdims=True))
        x = orbit.samples[0] + z[:, :n] * frame.scale
        period = orbit.period * np.exp(np.clip(z[:, n], -0.4, 0.4))
        warmer = case.values["ambient"] - self.values["ambient"]
        junctions = {ref: celsius + warmer for ref, celsius in orbit.junctions.items()}
        return Start(x, period, junctions)


def distance(value: Floats, reference: Floats) -> Floats:
    """How far a value is from the nominal one: logarithm of the ratio, or difference near zero."""
    if reference[0] > 0 and np.all(value > 0):
        return np.log(value / reference)
    return value - reference


def aim(nominal: Nominal, keys: tuple[str, ...], steps: int) -> Compass:
    """Measure how the nominal orbit moves with each of the given part values.

    A value of exactly zero is an absent element (no series resistance, no junction): it has no
    small change, and units keep it at zero.
    """
    frame, orbit, case = nominal.frame, nominal.solution, nominal.case
    assert frame is not None
    keys = tuple(key for key in keys if case.values[key][0] != 0)
    copies = np.zeros(len(keys) + 1, dtype=np.intp)
    values = {key: value[copies].copy() for key, value in case.values.items()}
    reach = np.zeros(len(keys))
    for row, key in enumerate(keys):
        base = values[key][row]
        values[key][row] = base * (1 + STEP_RELATIVE) if base > 0 else base + STEP_ABSOLUTE
        reach[row] = distance(values[key][row : row + 1], case.values[key])[0]
    junctions = {ref: celsius[copies] for ref, celsius in orbit.junctions.items()}
    network = Case(case.design, values, case.heated).network(junctions)
    x0 = orbit.samples[0][copies]
    cycle = run_cycle(network, x0, orbit.period[copies], steps, derivatives=False)
    gap = (cycle.samples[-1] - x0) / frame.scale
    change = (gap[:-1] - gap[-1]) / reach[:, None]
    z = -np.linalg.solve(_nominal_matrix(nominal, steps), _pad(change, frame).T).T
    if frame.driven:
        z = np.concatenate([z, np.zeros((len(keys), 1))], axis=1)
    return Compass(nominal, case.values, dict(zip(keys, z, strict=True)))


def _nominal_matrix(nominal: Nominal, steps: int) -> Floats:
    orbit, frame = nominal.solution, nominal.frame
    assert frame is not None
    network = nominal.case.network(orbit.junctions)
    cycle = run_cycle(network, orbit.samples[0], orbit.period, steps, derivatives=True)
    return bordered_matrix(cycle, frame, orbit.period)[0]


def _pad(change: Floats, frame: Frame) -> Floats:
    """Add the phase row, which no part value moves."""
    if frame.driven:
        return change
    return np.concatenate([change, np.zeros((len(change), 1))], axis=1)


def solve_units(case: Case, compass: Compass, steps: int) -> Solution:
    """Orbit of every unit of a case, by shooting with its fall-backs.

    Returns
    -------
    Solution
        `status` says for each unit how the search ended; nothing is left out.
    """
    frame = compass.nominal.frame
    assert frame is not None
    solution = shoot(case, compass.start(case), frame, steps, SHOOTING_ROUNDS, "predicted")
    for attempt in (_lead_in, _decide_in_time):
        open_units = np.flatnonzero(np.isin(solution.status, UNSETTLED))
        if not open_units.size:
            break
        again = attempt(case.take(open_units), compass, frame, steps)
        solution = _keep_better(solution, open_units, again)
    return solution


def _keep_better(solution: Solution, units: Ints, again: Solution) -> Solution:
    """Take the new answer of those units for which it is one."""
    better = (again.status != Status.NOT_CONVERGED) & ~(
        (again.status == Status.UNSTABLE) & (solution.status[units] == Status.UNSTABLE)
    )
    spent = solution.iterations.copy()
    spent[units] += again.iterations
    picked = np.flatnonzero(better)
    merged = solution.put(units[picked], again.take(picked))
    merged.iterations[:] = spent
    return merged


def _lead_in(case: Case, compass: Compass, frame: Frame, steps: int) -> Solution:
    """Follow each unit from the nominal one in blends of the part values."""
    nominal = compass.nominal
    copies = np.zeros(case.units, dtype=np.intp)
    here = Start(
        nominal.solution.samples[0][copies].copy(),
        nominal.solution.period[copies].copy(),
        {ref: celsius[copies].copy() for ref, celsius in nominal.solution.junctions.items()},
    )
    solution = None
    for blend in BLENDS:
        values = {
            key: (1 - blend) * compass.values[key] + blend * value
            for key, value in case.values.items()
        }
        solution = shoot(
            Case(case.design, values, case.heated), here, frame, steps, SHOOTING_ROUNDS, "blended"
        )
        done = np.isin(solution.status, (Status.SETTLED, Status.UNSTABLE))
        # a unit that failed here goes on from its last good place
        here.x[done] = solution.samples[0, done]
        here.period[done] = solution.period[done]
        for ref in here.junctions:
            here.junctions[ref][done] = solution.junctions[ref][done]
    assert solution is not None
    return solution


def _decide_in_time(case: Case, compass: Compass, frame: Frame, steps: int) -> Solution:
    """Integrate from the nominal orbit: decay means no orbit, a lasting swing is shot at again."""
    orbit = compass.nominal.solution
    copies = np.zeros(case.units, dtype=np.intp)
    start = compass.start(case)
    network = case.network(start.junctions)
    step = start.period / LEAD_STEPS
    phase = 1 / LEAD_STEPS if frame.driven else 0.0
    with np.errstate(all="ignore"):
        samples = march(network, orbit.samples[0][copies], step, LEAD_STEPS * LEAD_CYCLES, phase)
    tail = samples[-4 * LEAD_STEPS :, :, frame.lead]
    swing = np.ptp(tail, axis=0) / np.ptp(orbit.samples[:, 0, frame.lead])
    dead = swing < DECAYED
    again = Start(samples[-1], start.period, start.junctions)
    solution = shoot(case, again, frame, steps, 2 * SHOOTING_ROUNDS, "time domain")
    status = np.where(
        dead & (solution.status == Status.NOT_CONVERGED), Status.NO_ORBIT, solution.status
    )
    solution.status[:] = status
    return solution
