"""Which solver, and how many harmonics, for the units of one case: measured on spread pilots.

The nominal unit is no judge: at 32 harmonics its peaks are right to 0.04 % while those of spread
units are 0.4 % wrong (measured).  So a few dozen spread units are solved at the order in question,
at twice the order, and by shooting extrapolated in its steps (`judges`).  Collocation serves the
case at the first order that meets the accuracy before both judges; where none does (a hard clamp,
sharp switching) or too few units settle, shooting does.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field, fields

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.bulk.judges import (
    UNKNOWN,
    Errors,
    Marks,
    Truth,
    at_twice_the_order,
    by_shooting,
)
from tolsim.circuit.bulk.plan import FastPlan, taught, untaught
from tolsim.circuit.bulk.reference import NoReferenceError
from tolsim.circuit.bulk.solve import WAY, solve_directly, solve_in_blocks, solve_units_fast
from tolsim.circuit.bulk.unit_table import TopologyError
from tolsim.circuit.continuation import Compass, solve_units
from tolsim.circuit.nominal import Nominal
from tolsim.circuit.orbit import Solution, Status
from tolsim.circuit.thermal import Case

ORDERS = (16, 24, 32, 40, 48, 56, 64, 80, 96, 128)
PROBES = 64  # spread units that decide
FEW = 16  # of them tell how far shooting is off where it serves without rival
ATTEMPTS = 3  # orders tried
LARGEST_SYSTEM = 4000  # unknowns: beyond, an iteration costs more than it saves
FEWEST_SETTLED = 0.7  # share of the probes that collocation settles itself
RESERVE = 0.8  # of the accuracy: other units may be a little worse than the probes
ORDER_POWER = 4.0  # errors fall about like harmonics to this power
OUT_OF_REACH = 1.25  # of the highest order: what needs more is refused without a trial
LAST_LINES = 8  # of a spectrum, that tell how it ends
TAIL = 4e-4  # of a state's amplitude: what the first order tried may leave out


@dataclass(frozen=True)
class Choice:
    """The solver chosen for a case, and why."""

    solver: str  # "collocation" or "shooting"
    harmonics: int  # 0 for shooting
    plan: FastPlan | None = field(repr=False)
    errors: Errors  # of the chosen solver, against shooting extrapolated in its steps
    order_errors: Errors | None  # of collocation, against twice its order
    shooting_errors: Errors  # of shooting at the study's steps
    settled_share: float  # of the probes, by the chosen solver itself
    reason: str

    def record(self) -> dict[str, object]:
        """Plain numbers and words, for the report and the summary."""
        plain: dict[str, object] = {
            each.name: getattr(self, each.name)
            for each in fields(self)
            if each.name != "plan" and not each.name.endswith("errors")
        }
        named = {"": self.errors, "order_": self.order_errors, "shooting_": self.shooting_errors}
        for prefix, errors in named.items():
            for each in fields(Errors):
                value = np.nan if errors is None else getattr(errors, each.name)
                plain[f"{prefix}{each.name}_error"] = value if np.isfinite(value) else None
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
            yield from shot_in_blocks(case, compass, steps, block)
        else:
            yield from solve_in_blocks(case, self.plan, block)


def shot_in_blocks(case: Case, compass: Compass, steps: int, block: int) -> Iterator[Solution]:
    """Orbits of the units of a case by shooting, `block` units at a time."""
    for first in range(0, case.units, block):
        units = np.arange(first, min(first + block, case.units))
        yield solve_units(case.take(units), compass, steps)


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
    order = _first_order(nominal, orders)
    best: _Trial | None = None
    judge: tuple[Truth, Errors] | None = None
    for _ in range(ATTEMPTS):
        if order is None:
            break
        try:
            trial = _tried(nominal, compass, pilots, steps, order)
        except (NoReferenceError, TopologyError) as problem:
            reason = f"{order} harmonics: {problem}"
            order = _next_order(order, 2.0, nominal, orders)
            continue
        excess = trial.order_errors.excess
        if trial.share() < FEWEST_SETTLED or excess <= RESERVE:
            judge = judge or by_shooting(probes, compass, steps, trial.solution)
            if trial.share(judge[0]) < FEWEST_SETTLED:
                words = f"settles only {100 * trial.share(judge[0]):.0f} % of the spread units"
                reason = f"{order} harmonics: {words}"
                break  # more harmonics do not help that
            excess = max(excess, trial.errors(judge[0]).excess)
        reason = f"{order} harmonics: {excess:.2g} times the accuracy wanted"
        if best is None or excess < best.excess(judge):
            best = trial
        if excess <= RESERVE:
            break
        order = _next_order(order, max(excess / RESERVE, 1.2), nominal, orders)
    if judge is None and best is None:  # shooting serves anyway, and only says how well
        judge = by_shooting(probes.take(np.arange(min(FEW, probes.units))), compass, steps, None)
    judge = judge or by_shooting(probes, compass, steps, best.solution if best else None)
    # short of the accuracy both ways, the smaller error serves
    if best is not None and best.excess(judge) < max(judge[1].excess, 1.0):
        return best.choice(judge, pilots)
    share = float(judge[0].sound.mean())
    return Choice("shooting", 0, None, judge[1], None, judge[1], share, reason)


@dataclass(frozen=True)
class _Trial:
    """Probes solved at one order, by the chord iteration alone."""

    plan: FastPlan
    solution: Solution
    order_errors: Errors  # against twice the order

    @property
    def settled(self) -> NDArray[np.bool_]:
        return self.solution.status == Status.SETTLED

    def share(self, truth: Truth | None = None) -> float:
        """Share settled, of those that have an orbit according to a judge."""
        some = self.settled if truth is None else self.settled[truth.sound]
        return float(some.mean()) if some.size else 0.0

    def errors(self, truth: Truth) -> Errors:
        """Errors against shooting."""
        return truth.errors(Marks.of(self.solution), self.settled)

    def excess(self, judge: tuple[Truth, Errors] | None) -> float:
        """Largest error over its limit, as far as it is known."""
        known = self.order_errors.excess
        return known if judge is None else max(known, self.errors(judge[0]).excess)

    def choice(self, judge: tuple[Truth, Errors], pilots: Case) -> Choice:
        """The choice of this order, its plan taught by the pilots."""
        harmonics = self.plan.grid.harmonics
        reason = f"{harmonics} harmonics: {self.excess(judge):.2g} times the accuracy wanted"
        return Choice(
            WAY,
            harmonics,
            taught(self.plan, pilots),
            self.errors(judge[0]),
            self.order_errors,
            judge[1],
            self.share(judge[0]),
            reason,
        )


def _tried(nominal: Nominal, compass: Compass, pilots: Case, steps: int, order: int) -> _Trial:
    """Solve the probes at an order and at twice that order."""
    probes = pilots.take(np.arange(min(PROBES, pilots.units)))
    plan = untaught(nominal, compass, pilots, steps, order)
    iterated, solution = solve_directly(probes, plan)
    if np.mean(solution.status == Status.SETTLED) < FEWEST_SETTLED:
        # units far from the nominal one: better starts may be what they need
        iterated, solution = solve_directly(probes, taught(plan, pilots))
    units = np.flatnonzero(solution.status == Status.SETTLED)
    errors = UNKNOWN
    if units.size:
        truth = at_twice_the_order(nominal, plan, probes.take(units), iterated.z[:, units])
        if truth.sound.mean() >= FEWEST_SETTLED:
            errors = truth.errors(Marks.of(solution.take(units)), truth.sound)
    return _Trial(plan, solution, errors)


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
    if not higher or needed > OUT_OF_REACH * higher[-1]:
        return None
    return next((each for each in higher if each >= needed), higher[-1])
