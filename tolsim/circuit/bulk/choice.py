"""Which solver, and how many harmonics, for the units of one case: measured on spread pilots.

The nominal unit is no judge: at 32 harmonics its peaks are right to 0.04 % while those of spread
units are 0.4 % wrong (measured).  So a few dozen spread units are settled by shooting at the
study's steps and at twice as many; the errors of its second-order steps fall by four, hence
(4 fine - coarse)/3 as reference (Richardson) for frequency, and for peak and rms of every state.
Collocation serves the case at the first order that meets the accuracy; where none does (a hard
clamp, sharp switching) or too few units settle, shooting does.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field, fields

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.bulk.plan import FastPlan, prepare_fast
from tolsim.circuit.bulk.reference import NoReferenceError
from tolsim.circuit.bulk.solve import WAY, solve_in_blocks, solve_units_fast
from tolsim.circuit.bulk.unit_table import TopologyError
from tolsim.circuit.continuation import SHOOTING_ROUNDS, Compass, solve_units
from tolsim.circuit.devices import Floats, Ints
from tolsim.circuit.nominal import Nominal
from tolsim.circuit.orbit import Solution, Status
from tolsim.circuit.periodic import highest, largest, rms
from tolsim.circuit.shooting import Start, shoot
from tolsim.circuit.thermal import Case

ORDERS = (16, 24, 32, 40, 48, 56, 64, 80, 96, 128)
PROBES = 64  # spread units that decide
ATTEMPTS = 3  # orders tried
LARGEST_SYSTEM = 3000  # unknowns: beyond, the inverse Jacobian costs more than it saves
FREQUENCY_LIMIT = 1e-4
WAVE_LIMIT = 1e-3  # peaks and rms
FEWEST_SETTLED = 0.7  # share of the probes that collocation settles itself
RESERVE = 0.8  # of the accuracy: other units may be a little worse than the probes
ORDER_POWER = 4.0  # errors fall about like harmonics to this power
LAST_LINES = 8  # of a spectrum, that tell how it ends
TAIL = 4e-4  # of a state's amplitude: what the first order tried may leave out


@dataclass(frozen=True)
class Errors:
    """Largest relative differences from the reference over all probes."""

    frequency: float
    peak: float
    rms: float

    @property
    def excess(self) -> float:
        """Largest error over its limit."""
        return max(self.frequency / FREQUENCY_LIMIT, max(self.peak, self.rms) / WAVE_LIMIT)


@dataclass(frozen=True)
class Choice:
    """The solver chosen for a case, and why."""

    solver: str  # "collocation" or "shooting"
    harmonics: int  # 0 for shooting
    plan: FastPlan | None = field(repr=False)
    errors: Errors  # of the chosen solver
    shooting_errors: Errors
    settled_share: float  # of the probes, by the chosen solver itself
    reason: str

    def record(self) -> dict[str, object]:
        """Plain numbers and words, for the report and the summary."""
        plain: dict[str, object] = {
            each.name: getattr(self, each.name)
            for each in fields(self)
            if each.name not in ("plan", "errors", "shooting_errors")
        }
        for prefix, errors in (("", self.errors), ("shooting_", self.shooting_errors)):
            plain |= {
                f"{prefix}{each.name}_error": getattr(errors, each.name) for each in fields(errors)
            }
        return plain

    def solve(self, case: Case, compass: Compass, steps: int) -> Solution:
        """Orbits of the units of the case, by the chosen solver."""
        if self.plan is None:
            return solve_units(case, compass, steps)
        return solve_units_fast(case, self.plan)

    def solve_in_blocks(
        self, case: Case, compass: Compass, steps: int, block: int
    ) -> Iterator[Solution]:
        """The same, `block` units at a time; a unit's bits depend on its own block only."""
        if self.plan is None:
            yield from by_shooting(case, compass, steps, block)
        else:
            yield from solve_in_blocks(case, self.plan, block)


def by_shooting(case: Case, compass: Compass, steps: int, block: int) -> Iterator[Solution]:
    """Orbits of the units of a case by shooting, `block` units at a time."""
    for first in range(0, case.units, block):
        units = np.arange(first, min(first + block, case.units))
        yield solve_units(case.take(units), compass, steps)


@dataclass(frozen=True)
class _Marks:
    """What is compared, of the probes that settled."""

    frequency: Floats  # (N,)
    peak: Floats  # (2 n, N) highest value and largest magnitude of every state
    rms: Floats  # (n, N)

    @classmethod
    def of(cls, solution: Solution) -> _Marks:
        waves = [solution.samples[:-1, :, i] for i in range(solution.samples.shape[2])]
        peaks = [highest(wave - wave.mean(axis=0)) for wave in waves] + [largest(w) for w in waves]
        return cls(1 / solution.period, np.array(peaks), np.array([rms(wave) for wave in waves]))

    def beyond(self, finer: _Marks) -> _Marks:
        """Richardson: the limit of steps halved again and again."""
        return _Marks(
            (4 * finer.frequency - self.frequency) / 3,
            (4 * finer.peak - self.peak) / 3,
            (4 * finer.rms - self.rms) / 3,
        )

    def among(self, units: int, places: Ints) -> _Marks:
        """The same marks among more units, NaN elsewhere."""
        marks = []
        for values in (self.frequency, self.peak, self.rms):
            whole = np.full((*values.shape[:-1], units), np.nan)
            whole[..., places] = values
            marks.append(whole)
        return _Marks(*marks)

    def errors(self, truth: _Marks, units: NDArray[np.bool_]) -> Errors:
        if not units.any():
            return Errors(np.inf, np.inf, np.inf)

        def worst(mine: Floats, true: Floats) -> float:
            # a state that hardly moves is measured against the largest of its kind over the units
            size = np.maximum(np.abs(true), 1e-2 * np.abs(true).max(axis=-1, keepdims=True))
            return float((np.abs(mine - true) / np.maximum(size, 1e-300)).max())

        return Errors(
            worst(self.frequency[units], truth.frequency[units]),
            worst(self.peak[:, units], truth.peak[:, units]),
            worst(self.rms[:, units], truth.rms[:, units]),
        )


def choose(
    nominal: Nominal, compass: Compass, pilots: Case, steps: int, orders: tuple[int, ...] = ORDERS
) -> Choice:
    """Try collocation on spread units and say what shall serve the case.

    Parameters
    ----------
    pilots : Case
        The first units of the study, always the same number of them; the first `PROBES` decide.
    steps : int
        TR-BDF2 steps per period of shooting, and even samples of every answer.
    """
    probes = pilots.take(np.arange(min(PROBES, pilots.units)))
    reason = "the waveforms have edges that no affordable number of harmonics carries"
    best: Choice | None = None
    judge: _Judge | None = None
    order = _first_order(nominal, orders)
    for _ in range(ATTEMPTS):
        if order is None:
            break
        try:
            plan = prepare_fast(nominal, compass, pilots, steps, order)
        except (NoReferenceError, TopologyError) as problem:
            reason = f"{order} harmonics: {problem}"
            order = _next_order(order, 2.0, nominal, orders)
            continue
        solution = solve_units_fast(probes, plan)
        judge = judge or _judge(probes, compass, steps, solution)
        itself = (solution.way == WAY) & (solution.status == Status.SETTLED)
        share = float(itself[judge.sound].mean()) if judge.sound.any() else 0.0
        errors = _Marks.of(solution).errors(judge.truth, itself & judge.sound)
        reason = f"{order} harmonics: {errors.excess:.2g} times the accuracy wanted"
        if share < FEWEST_SETTLED:
            reason = f"{order} harmonics: settles only {100 * share:.0f} % of the spread units"
        elif best is None or errors.excess < best.errors.excess:
            best = Choice(WAY, order, plan, errors, judge.errors, share, reason)
            if errors.excess <= RESERVE:
                return best
        order = _next_order(order, max(errors.excess / RESERVE, 1.2), nominal, orders)
    judge = judge or _judge(probes, compass, steps, None)
    # short of the accuracy both ways, the smaller error serves
    if best is not None and best.errors.excess < max(judge.errors.excess, 1.0):
        return best
    share = float(judge.sound.mean())
    return Choice("shooting", 0, None, judge.errors, judge.errors, share, reason)


@dataclass(frozen=True)
class _Judge:
    """The reference, the probes that have one, and how far shooting at the study's steps is off."""

    truth: _Marks
    sound: NDArray[np.bool_]
    errors: Errors


def _judge(probes: Case, compass: Compass, steps: int, near: Solution | None) -> _Judge:
    """Shoot at the study's steps and at twice as many, from orbits near by where there are some."""
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
    truth = _Marks.of(coarse).beyond(_Marks.of(fine))
    both = fine.status == Status.SETTLED
    errors = _Marks.of(coarse).errors(truth, both)
    sound = np.zeros(probes.units, dtype=bool)
    sound[quick] = both
    return _Judge(truth.among(probes.units, quick), sound, errors)


def _shot(case: Case, compass: Compass, start: Start, steps: int) -> Solution:
    """Orbits by shooting without its fall-backs."""
    frame = compass.nominal.frame
    assert frame is not None
    return shoot(case, start, frame, steps, SHOOTING_ROUNDS, "probe", heat=compass.heat)


def _first_order(nominal: Nominal, orders: tuple[int, ...]) -> int | None:
    """The first order that leaves out next to nothing of the nominal waveforms."""
    waves = nominal.solution.samples[:-1]
    lines = np.abs(np.fft.rfft(waves, axis=0)) * 2 / len(waves)
    size = np.maximum(0.5 * np.ptp(waves, axis=0), 1e-2 * np.abs(waves).max(axis=0))
    size = np.maximum(size, 1e-6 * size.max())
    strength = (lines / size).max(axis=(1, 2))
    end = len(strength) - 1
    for order in _affordable(nominal, orders):
        # beyond what the samples can show, lines go on falling about like this
        left = strength[min(order + 1, end - LAST_LINES) :].max() * min(1.0, end / order) ** 3
        if left < TAIL:
            return order
    return None


def _affordable(nominal: Nominal, orders: tuple[int, ...]) -> list[int]:
    states = nominal.solution.samples.shape[2]
    return [order for order in orders if states * (2 * order + 1) <= LARGEST_SYSTEM]


def _next_order(order: int, excess: float, nominal: Nominal, orders: tuple[int, ...]) -> int | None:
    """The order at which the errors should meet the accuracy."""
    needed = order * excess ** (1 / ORDER_POWER)
    higher = [each for each in _affordable(nominal, orders) if each > order]
    if not higher or needed > 2 * higher[-1]:
        return None
    return next((each for each in higher if each >= needed), higher[-1])
