"""What the order of the bulk solver is judged by, on spread units.

Two judges that share nothing but the circuit: shooting, whose second-order steps are extrapolated
to none, (4 fine - coarse)/3 (Richardson), and collocation itself at twice the order.  The first
sees every error, also of the grid the devices are evaluated on; the second has no errors of steps
and sees best what the order leaves out.  Compared are frequency, and peak and rms of every state.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.bulk.grid import Grid, sampled, synthesis
from tolsim.circuit.bulk.plan import FastPlan
from tolsim.circuit.bulk.reference import settle_reference
from tolsim.circuit.continuation import SHOOTING_ROUNDS, Compass
from tolsim.circuit.devices import Floats, Ints
from tolsim.circuit.nominal import Nominal
from tolsim.circuit.orbit import Solution, Status
from tolsim.circuit.periodic import highest, largest, rms
from tolsim.circuit.shooting import Start, shoot
from tolsim.circuit.thermal import Case

FREQUENCY_LIMIT = 1e-4
WAVE_LIMIT = 1e-3  # peaks and rms
TIGHT = 3e-6  # scaled error of the orbits at twice the order: a tenth of the usual one


@dataclass(frozen=True)
class Errors:
    """Largest relative differences from the truth over all units judged."""

    frequency: float
    peak: float
    rms: float

    @property
    def excess(self) -> float:
        """Largest error over its limit."""
        return max(self.frequency / FREQUENCY_LIMIT, max(self.peak, self.rms) / WAVE_LIMIT)


UNKNOWN = Errors(np.inf, np.inf, np.inf)


@dataclass(frozen=True)
class Marks:
    """What is compared, of N units."""

    frequency: Floats  # (N,)
    peak: Floats  # (2 n, N) highest value and largest magnitude of every state
    rms: Floats  # (n, N)

    @classmethod
    def of(cls, solution: Solution) -> Marks:
        """Marks of solved orbits."""
        return cls.of_waves(solution.samples[:-1].transpose(2, 0, 1), solution.period)

    @classmethod
    def of_waves(cls, waves: Floats, period: Floats) -> Marks:
        """Marks of waves (n, m, N), the end of the period left out."""
        peaks = [highest(wave - wave.mean(axis=0)) for wave in waves] + [largest(w) for w in waves]
        return cls(1 / period, np.array(peaks), np.array([rms(wave) for wave in waves]))

    def beyond(self, finer: Marks) -> Marks:
        """Richardson: the limit of steps halved again and again."""
        return Marks(
            (4 * finer.frequency - self.frequency) / 3,
            (4 * finer.peak - self.peak) / 3,
            (4 * finer.rms - self.rms) / 3,
        )

    def among(self, units: int, places: Ints) -> Marks:
        """The same marks among more units, NaN elsewhere."""
        marks = []
        for values in (self.frequency, self.peak, self.rms):
            whole = np.full((*values.shape[:-1], units), np.nan)
            whole[..., places] = values
            marks.append(whole)
        return Marks(*marks)

    def errors(self, truth: Marks, units: NDArray[np.bool_]) -> Errors:
        """Largest errors among some of the units; unknown without any."""
        if not units.any():
            return UNKNOWN

        def worst(mine: Floats, true: Floats) -> float:
            # a state that hardly moves is measured against the largest of its kind over the units
            size = np.maximum(np.abs(true), 1e-2 * np.abs(true).max(axis=-1, keepdims=True))
            return float((np.abs(mine - true) / np.maximum(size, 1e-300)).max())

        return Errors(
            worst(self.frequency[units], truth.frequency[units]),
            worst(self.peak[:, units], truth.peak[:, units]),
            worst(self.rms[:, units], truth.rms[:, units]),
        )


@dataclass(frozen=True)
class Truth:
    """Marks of probes as a judge finds them, and which of the probes it settled."""

    marks: Marks
    sound: NDArray[np.bool_]

    def errors(self, marks: Marks, units: NDArray[np.bool_]) -> Errors:
        """How far off the marks of some units are."""
        return marks.errors(self.marks, units & self.sound)


def at_twice_the_order(nominal: Nominal, plan: FastPlan, units: Case, z: Floats) -> Truth:
    """The same orbits with twice the harmonics, from the unknowns where they settled before.

    Raises
    ------
    NoReferenceError
        If the nominal orbit does not settle there.
    """
    grid, topology = Grid(2 * plan.grid.harmonics), plan.topology
    reference = settle_reference(nominal.case, nominal.solution, topology, grid)
    finer = replace(plan, grid=grid, reference=reference, single=False)
    settled = finer.iterate(units, _widened(z, plan, grid), TIGHT)
    good = settled.settled & np.isfinite(settled.z).all(axis=0)
    z = np.where(good, settled.z, reference.z[:, None])
    scaled = z[: topology.states * grid.size].reshape(topology.states, grid.size, units.units)
    waves = sampled(scaled, synthesis(grid.harmonics, plan.steps))
    turned = np.zeros(units.units) if topology.driven else z[topology.states * grid.size]
    period = 2 * np.pi / (reference.anchor.omega * np.exp(turned))
    return Truth(Marks.of_waves(waves * topology.scale[:, None, None], period), good)


def _widened(z: Floats, plan: FastPlan, grid: Grid) -> Floats:
    """Unknowns (unknowns, N) with zeros for the harmonics that the plan's order lacks."""
    n, low, high = plan.topology.states, plan.grid.harmonics, grid.harmonics
    x = z[: n * plan.grid.size].reshape(n, plan.grid.size, -1)
    wide = np.zeros((n, grid.size, z.shape[1]))
    wide[:, : low + 1] = x[:, : low + 1]
    wide[:, high + 1 : high + 1 + low] = x[:, low + 1 :]
    return np.concatenate([wide.reshape(n * grid.size, -1), z[n * plan.grid.size :]])


def by_shooting(
    probes: Case, compass: Compass, steps: int, near: Solution | None
) -> tuple[Truth, Errors]:
    """The truth of steps made ever finer, and how far shooting at the study's steps is off.

    Parameters
    ----------
    near : Solution, optional
        Orbits near by, where there are some.
    """
    start = compass.start(probes)
    if near is not None:
        settled = near.status == Status.SETTLED
        start.x[settled] = near.samples[0, settled]
        start.period[settled] = near.period[settled]
        for ref, celsius in near.junctions.items():
            start.junctions[ref][settled] = celsius[settled]
    coarse = _shot(probes, compass, start, steps)
    # what shooting does not settle at once serves as no reference
    quick = np.flatnonzero(coarse.status == Status.SETTLED)
    coarse = coarse.take(quick)
    begin = Start(coarse.samples[0], coarse.period, coarse.junctions)
    fine = _shot(probes.take(quick), compass, begin, 2 * steps)
    truth = Marks.of(coarse).beyond(Marks.of(fine))
    both = fine.status == Status.SETTLED
    errors = Marks.of(coarse).errors(truth, both)
    sound = np.zeros(probes.units, dtype=bool)
    sound[quick] = both
    return Truth(truth.among(probes.units, quick), sound), errors


def _shot(case: Case, compass: Compass, start: Start, steps: int) -> Solution:
    """Orbits by shooting without its fall-backs."""
    frame = compass.nominal.frame
    assert frame is not None
    return shoot(case, start, frame, steps, SHOOTING_ROUNDS, "probe", heat=compass.heat)
