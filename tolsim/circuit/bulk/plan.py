"""What the bulk solver prepares once per case: order, inverse Jacobian, predictor."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from tolsim.circuit.bulk.chord import TOLERANCE, Iterated, iterate
from tolsim.circuit.bulk.grid import Grid
from tolsim.circuit.bulk.prediction import Predictor, first_order, learn
from tolsim.circuit.bulk.reference import SLOTS, Reference, settle_reference
from tolsim.circuit.bulk.residual import Residual
from tolsim.circuit.bulk.unit_table import Topology, UnitTable, bare_network, heated_junctions
from tolsim.circuit.continuation import Compass
from tolsim.circuit.devices import Floats
from tolsim.circuit.nominal import Nominal
from tolsim.circuit.thermal import Case

FEW_SLOTS = 4  # for the few units that need long iterations
CHECKED = 32  # settled pilots that must settle from what they taught as well
LEAST_SETTLED_AGAIN = 0.8  # of them
NOISE = 1e-5  # scaled update that single precision may make; above, devices run in double


@dataclass(frozen=True)
class FastPlan:
    """Everything that solves any unit of one case by collocation; picklable."""

    compass: Compass
    grid: Grid
    topology: Topology
    reference: Reference
    predictor: Predictor
    single: bool  # devices in single precision
    steps: int  # even samples handed on per period

    def residual(self, case: Case, *, exact: bool = False) -> Residual:
        """Work space for the units of a case; `exact`: few slots in double precision."""
        slots = FEW_SLOTS if exact else SLOTS
        dtype = np.float32 if self.single and not exact else np.float64
        table = UnitTable.of(case, self.topology, dtype)
        return Residual(case.design, table, self.topology, self.grid, self.reference.anchor, slots)

    def iterate(self, case: Case, start: Floats, tolerance: float = TOLERANCE) -> Iterated:
        """Chord iteration of every unit of a case."""
        return iterate(self.residual(case), self.reference.inverse, start, tolerance=tolerance)


def prepare_fast(
    nominal: Nominal, compass: Compass, pilots: Case, steps: int, harmonics: int
) -> FastPlan:
    """Prepare a case: the untaught plan, taught.

    Raises
    ------
    NoReferenceError
        If the nominal orbit does not settle at this order.
    TopologyError
        If units couple what others do not.
    """
    return taught(untaught(nominal, compass, pilots, steps, harmonics), pilots)


def untaught(
    nominal: Nominal, compass: Compass, pilots: Case, steps: int, harmonics: int
) -> FastPlan:
    """A plan whose starts are right to first order; raises like `prepare_fast`."""
    frame, case = nominal.frame, nominal.case
    assert frame is not None
    grid = Grid(harmonics)
    hot = heated_junctions(case)
    networks = (bare_network(case), bare_network(pilots))
    topology = Topology.of(networks, frame.scale, hot)
    reference = settle_reference(case, nominal.solution, topology, grid)
    keys = tuple(compass.slopes)
    predictor = first_order(case, reference, topology, grid, keys)
    plan = FastPlan(compass, grid, topology, reference, predictor, single=True, steps=steps)
    return replace(plan, single=_device_noise(plan, case) < NOISE)


def taught(plan: FastPlan, pilots: Case) -> FastPlan:
    """The plan with what pilots tell of higher orders.

    Parameters
    ----------
    pilots : Case
        The first units of the study, always the same number of them: every unit starts from what
        they teach, so another set would move the last bits of all answers.
    """
    solved = plan.iterate(pilots, plan.predictor.start(pilots))
    good = np.flatnonzero(solved.settled)
    wiser = replace(plan, predictor=learn(plan.predictor, pilots.take(good), solved.z[:, good]))
    if not good.size:
        return wiser
    # measured: where the chord iteration hardly contracts it settles from afar, by what its
    # history tells, but not from starts whose error is all of the kind it cannot remove
    some = pilots.take(good[:CHECKED])
    again = wiser.iterate(some, wiser.predictor.start(some))
    return wiser if again.settled.mean() >= LEAST_SETTLED_AGAIN else plan


def _device_noise(plan: FastPlan, case: Case) -> float:
    """Update that single precision makes of the settled nominal orbit."""
    residual = plan.residual(case)
    slots = np.arange(residual.units)
    residual.load(slots, np.zeros(len(slots), dtype=np.intp))
    gap = residual.evaluate(np.repeat(plan.reference.z[:, None], len(slots), axis=1))
    return float(np.abs(plan.reference.inverse.corrector(1)(gap[:, :1])).max())
