"""From the nominal orbit to the orbit of every unit.

First-order start: with z = (x0 / scale, ln T) and r(z; p) the closing gap of one period, the orbit
moves with a part value as dz/dp = -J^-1 dr/dp, J the Newton matrix of the nominal unit.  One
period of as many perturbed nominal units as there are spreading values gives every dr/dp at once.

Junction temperatures follow to first order too: with Theta the heat balance of the orbit,
dT/dp = (I - dTheta/dT)^-1 dTheta/dp.

Units that shooting does not settle from there are tried from other points of the orbit: where a
device switches at the start, the prediction has a corner there. What is left is led from the
nominal unit in blends of the part values; the leftovers are integrated in time from full swing:
what decays has no orbit.

A unit's answer depends on its own part values and the nominal unit only, never on its neighbours.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from tolsim.circuit.cycle import run_cycle
from tolsim.circuit.devices import Floats, Ints
from tolsim.circuit.nominal import Nominal, last_crossing
from tolsim.circuit.orbit import Solution, Status
from tolsim.circuit.shooting import (
    Frame,
    HeatResponse,
    Start,
    bordered_matrix,
    shoot,
    unsolved,
)
from tolsim.circuit.thermal import Case
from tolsim.circuit.transient import march

STEP_RELATIVE = 1e-2  # of a part value, up and down: large, since trapped charge amplifies noise
STEP_KELVIN = 1.0  # of a junction or the ambient
AMBIENT = "ambient"
COLDEST_START_C, HOTTEST_START_C = -60.0, 250.0  # predicted junctions stay within
SEEN_PERIODS, SEEN_STEPS = 8, 128  # looked at before shooting at a swing seen in time
SHOOTING_ROUNDS = 14
OTHER_PHASES = (1 / 3, 5 / 6)  # of the period, to start from when the first point will not do
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
    warmings: Mapping[str, Floats]  # key -> (k,) K of each junction per unit of `distance`
    heat: HeatResponse | None

    def start(self, case: Case) -> Start:
        """Predicted start of every unit of a case."""
        frame = self.nominal.frame
        assert frame is not None
        orbit = self.nominal.solution
        n = len(frame.scale)
        z = np.zeros((case.units, n + 1))
        warmer = np.zeros((case.units, len(orbit.junctions)))
        for key, slope in self.slopes.items():
            away = distance(key, case.values[key], self.values[key])[:, None]
            z += away * slope
            warmer += away * self.warmings[key]
        # a first-order guess is not trusted beyond the orbit's own size, which for the current of
        # a choke is its mean and not its ripple
        size = np.append(np.maximum(np.abs(orbit.samples).max(axis=(0, 1)) / frame.scale, 1.0), 1.0)
        z /= np.maximum(1.0, (np.abs(z) / size).max(axis=1, keepdims=True))
        x = orbit.samples[0] + z[:, :n] * frame.scale
        period = orbit.period * np.exp(np.clip(z[:, n], -0.4, 0.4))
        junctions = {
            ref: np.clip(celsius + warmer[:, k], COLDEST_START_C, HOTTEST_START_C)
            for k, (ref, celsius) in enumerate(orbit.junctions.items())
        }
        return Start(x, period, junctions)

    def from_phase(self, share: float, steps: int) -> Compass:
        """The same for orbits that begin a share of the period later; kept once made."""
        kept: dict[tuple[float, int], Compass] = self.__dict__.setdefault("_phases", {})
        if (share, steps) not in kept:
            nominal, frame = self.nominal, self.nominal.frame
            assert frame is not None
            orbit = replace(nominal.solution, samples=_turned(nominal.solution.samples, share))
            flow = (orbit.samples[1, 0] - orbit.samples[-2, 0]) / frame.scale
            row = flow / np.linalg.norm(flow)
            frame = replace(frame, point=orbit.samples[0, 0], row=row)
            moved = replace(nominal, solution=orbit, frame=frame)
            kept[share, steps] = aim(moved, tuple(self.slopes), steps)
        return kept[share, steps]


def distance(key: str, value: Floats, reference: Floats) -> Floats:
    """How far a value is from the nominal one: logarithm of the ratio, a difference for degC."""
    if key == AMBIENT or reference[0] <= 0:
        return value - reference
    ratio = value / reference
    return np.where(ratio > 0, np.log(np.maximum(ratio, 1e-300)), ratio - 1.0)


def aim(nominal: Nominal, keys: tuple[str, ...], steps: int) -> Compass:
    """Measure how the nominal orbit and its junctions move with each of the given part values.

    A value of exactly zero is an absent element (no series resistance, no junction): it has no
    small change, and units keep it at zero.
    """
    frame, orbit, case = nominal.frame, nominal.solution, nominal.case
    assert frame is not None
    keys = tuple(key for key in keys if key == AMBIENT or case.values[key][0] != 0)
    refs = tuple(orbit.junctions)
    moved, reach = _perturbed(nominal, keys, refs)
    n = len(frame.scale)
    x0 = np.repeat(orbit.samples[0], 2 * len(reach), axis=0)
    period = np.repeat(orbit.period, 2 * len(reach))
    network = moved.case.network(moved.junctions)
    cycle = run_cycle(network, x0, period, steps, derivatives=False)
    gap = _halves((cycle.samples[-1] - x0) / frame.scale) / reach[:, None]
    z = -np.linalg.solve(_nominal_matrix(nominal, steps), _pad(gap, frame).T).T.astype(np.float64)
    if frame.driven:
        z = np.concatenate([z, np.zeros((len(z), 1))], axis=1)
    # the heat balance where the orbit has moved along: a second period from the moved starts
    shift = np.concatenate([z, -z]) * np.concatenate([reach, reach])[:, None] / 2
    start = x0 + shift[:, :n] * frame.scale
    ahead = run_cycle(network, start, period * np.exp(shift[:, n]), steps, derivatives=False)
    balance = moved.case.balance(network, ahead.samples)
    theta = np.stack([balance[ref] for ref in refs], axis=1) if refs else np.zeros((len(x0), 0))
    return _coupled(nominal, keys, z, _halves(theta) / reach[:, None])


def _halves(values: Floats) -> Floats:
    """Upper half of the rows minus the lower half: moved up minus moved down."""
    half = len(values) // 2
    return values[:half] - values[half:]


def _coupled(nominal: Nominal, keys: tuple[str, ...], z: Floats, answer: Floats) -> Compass:
    """Close the loop between orbit and junctions; the last rows are the junctions' own."""
    transistors = answer.shape[1]
    own, values = slice(len(keys), None), slice(0, len(keys))
    gain = np.linalg.inv(np.eye(transistors) - answer[own].T).astype(np.float64)
    warmings = answer[values] @ gain.T
    slopes = z[values] + warmings @ z[own]
    heat = HeatResponse(gain, z[own]) if nominal.case.heated and transistors else None
    return Compass(
        nominal,
        nominal.case.values,
        dict(zip(keys, slopes, strict=True)),
        dict(zip(keys, warmings, strict=True)),
        heat,
    )


@dataclass(frozen=True)
class _Moved:
    """Copies of the nominal unit: each part value and each junction moved up, then each down."""

    case: Case
    junctions: dict[str, Floats]


def _perturbed(
    nominal: Nominal, keys: tuple[str, ...], refs: tuple[str, ...]
) -> tuple[_Moved, Floats]:
    """The moved copies, and the distance between up and down for each of the m moves."""
    case, orbit = nominal.case, nominal.solution
    moves = len(keys) + len(refs)
    copies = np.zeros(2 * moves, dtype=np.intp)
    values = {key: value[copies].copy() for key, value in case.values.items()}
    junctions = {ref: celsius[copies].copy() for ref, celsius in orbit.junctions.items()}
    reach = np.ones(moves)
    for row, key in enumerate(keys):
        base = float(case.values[key][0])
        small = STEP_KELVIN if key == AMBIENT else STEP_RELATIVE * abs(base)
        values[key][[row, moves + row]] += np.array([small, -small])
        up, down = distance(key, values[key][[row, moves + row]], case.values[key])
        reach[row] = up - down
    for row, ref in enumerate(refs, start=len(keys)):
        junctions[ref][[row, moves + row]] += np.array([STEP_KELVIN, -STEP_KELVIN])
        reach[row] = 2 * STEP_KELVIN
    return _Moved(Case(case.design, values, case.heated), junctions), reach


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
    solution = shoot(
        case, compass.start(case), frame, steps, SHOOTING_ROUNDS, "predicted", heat=compass.heat
    )
    for attempt in (_start_elsewhere, _lead_in, _decide_in_time):
        open_units = np.flatnonzero(np.isin(solution.status, UNSETTLED))
        if not open_units.size:
            break
        again = attempt(case.take(open_units), compass, frame, steps)
        solution = _keep_better(solution, open_units, again)
    return solution


def _keep_better(solution: Solution, units: Ints, again: Solution) -> Solution:
    """Take the new answer of those units for which it is one.

    A burst that happens to be quiet when the time-domain run ends is not "no orbit": whatever was
    found unstable stays so unless a stable orbit turns up.
    """
    was_unstable = solution.status[units] == Status.UNSTABLE
    better = np.where(
        was_unstable, again.status == Status.SETTLED, again.status != Status.NOT_CONVERGED
    )
    spent = solution.iterations.copy()
    spent[units] += again.iterations
    picked = np.flatnonzero(better)
    merged = solution.put(units[picked], again.take(picked))
    merged.iterations[:] = spent
    return merged


def _start_elsewhere(case: Case, compass: Compass, frame: Frame, steps: int) -> Solution:
    """Predict and shoot from other points of the orbit.

    With a tank of high Q the switching moves along the orbit from unit to unit (measured: 33 of 192
    units failed from where the coil current crosses zero, none from a third of a period later).
    """
    found = unsolved(case, case.units, len(frame.scale), steps, "another phase")
    if frame.driven:
        return found
    for share in OTHER_PHASES:
        left = np.flatnonzero(found.status != Status.SETTLED)
        if not left.size:
            break
        other = compass.from_phase(share, steps)
        assert other.nominal.frame is not None
        solution = shoot(
            *(case.take(left), other.start(case.take(left)), other.nominal.frame),
            *(steps, SHOOTING_ROUNDS, "another phase"),
            heat=other.heat,
        )
        back = _turned(solution.samples, -share)
        found = found.put(left, replace(solution, samples=back))
    return found


def _turned(samples: Floats, share: float) -> Floats:
    """Samples (m + 1, N, n) of a period, begun a share of it later."""
    turned = np.roll(samples[:-1], -round(share * (len(samples) - 1)), axis=0)
    return np.concatenate([turned, turned[:1]])


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
            Case(case.design, values, case.heated),
            here,
            frame,
            steps,
            SHOOTING_ROUNDS,
            "blended",
            heat=compass.heat,
        )
        done = np.isin(solution.status, (Status.SETTLED, Status.UNSTABLE))
        # a unit that failed here goes on from its last good place
        here.x[done] = solution.samples[0, done]
        here.period[done] = solution.period[done]
        for ref in here.junctions:
            here.junctions[ref][done] = solution.junctions[ref][done]
    assert solution is not None
    return solution


def _seen_in_time(tail: Floats, start: Start, step: Floats, frame: Frame) -> Start:
    """Start shooting where and as fast as each unit was seen to swing at the end of the run.

    Far from the nominal unit the predicted period would send Newton astray.
    """
    x, period = tail[-1].copy(), start.period.copy()
    if frame.driven:
        return Start(x, period, start.junctions)
    for unit in range(len(period)):  # a handful: what neither prediction nor blends settled
        seen = last_crossing(tail[:, unit, frame.lead], float(step[unit]), float(period[unit]))
        if seen is not None:
            place, period[unit] = seen
            x[unit] = tail[place, unit]
    return Start(x, period, start.junctions)


def shoot_from(case: Case, compass: Compass, x: Floats, period: Floats, steps: int) -> Solution:
    """Orbits of units that were seen to swing in time, shot at from where they were seen.

    Parameters
    ----------
    x : (N, n)
        States while they swung.
    period : (N,)
        s, about as fast as they should.
    """
    frame = compass.nominal.frame
    assert frame is not None
    network = case.network(case.cold_junctions())
    step = period / SEEN_STEPS
    phase_step = 1.0 / SEEN_STEPS if frame.driven else 0.0
    with np.errstate(all="ignore"):  # a unit that runs away is told by its status
        tail = march(network, x, step, SEEN_PERIODS * SEEN_STEPS, phase_step)
    start = _seen_in_time(tail, Start(x, period, case.cold_junctions()), step, frame)
    return shoot(case, start, frame, steps, SHOOTING_ROUNDS, "power-on", heat=compass.heat)


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
    tail = samples[-8 * LEAD_STEPS :]
    swing = np.ptp(tail[..., frame.lead], axis=0) / np.ptp(orbit.samples[:, 0, frame.lead])
    dead = swing < DECAYED
    again = _seen_in_time(tail, start, step, frame)
    solution = shoot(
        case, again, frame, steps, 2 * SHOOTING_ROUNDS, "time domain", heat=compass.heat
    )
    status = np.where(
        dead & (solution.status == Status.NOT_CONVERGED), Status.NO_ORBIT, solution.status
    )
    solution.status[:] = status
    return solution
