"""Orbits of many units by collocation, what does not settle by shooting."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.bulk.chord import Iterated
from tolsim.circuit.bulk.grid import sampled, synthesis
from tolsim.circuit.bulk.multipliers import multipliers
from tolsim.circuit.bulk.newton import settle_stubborn
from tolsim.circuit.bulk.plan import FastPlan
from tolsim.circuit.bulk.residual import HEAT_SCALE, LONGEST_LOG
from tolsim.circuit.bulk.unit_table import TopologyError
from tolsim.circuit.continuation import solve_units
from tolsim.circuit.devices import Floats, Ints
from tolsim.circuit.floquet import largest_beside_charge
from tolsim.circuit.orbit import Solution, Status, joined
from tolsim.circuit.thermal import HIGHEST_C, Case

BLOCK = 128  # units turned into samples together
SMALLEST_SWING = 0.02  # of the nominal orbit's: below, it is another solution than the oscillation
NEAR = 0.02  # last update of a chord iteration that is worth going on from
WAY = "collocation"
STUBBORN_WAY = "collocation, Newton"


def solve_units_fast(case: Case, plan: FastPlan) -> Solution:
    """Orbit of every unit of a case, as `solve_in_blocks` finds it."""
    return joined(list(solve_in_blocks(case, plan, BLOCK)))


def solve_in_blocks(case: Case, plan: FastPlan, block: int) -> Iterator[Solution]:
    """Orbits of the units of a case, `block` units at a time.

    The chord iteration, which settles nearly all, has all units in one pool: the fewer pools, the
    fewer slots stand idle while a last unit settles.  An orbit that does not settle, is unstable,
    or is not the oscillation looked for is tried again by Newton-GMRES, then by shooting with its
    own fall-backs (`continuation.solve_units`), beside those of its own block only.

    Yields
    ------
    Solution
        Samples on the plan's even grid; `way` tells which solver settled each unit.
    """
    parts = [
        np.arange(first, min(first + block, case.units)) for first in range(0, case.units, block)
    ]
    try:
        start = plan.predictor.start(case)
        iterated = plan.iterate(case, start)
    except TopologyError:
        # some unit is of another kind: what becomes of a block must not depend on other blocks
        if len(parts) > 1:
            for units in parts:
                yield from solve_in_blocks(case.take(units), plan, block)
        else:
            yield solve_units(case, plan.compass, plan.steps)
        return
    for units in parts:
        yield _settled(case.take(units), plan, start[:, units], _taken(iterated, units))


def solve_directly(case: Case, plan: FastPlan) -> tuple[Iterated, Solution]:
    """What the chord iteration alone settles, without any fall-back."""
    iterated = plan.iterate(case, plan.predictor.start(case))
    return iterated, _finish(case, plan, iterated)


def _settled(case: Case, plan: FastPlan, start: Floats, iterated: Iterated) -> Solution:
    """Orbits from where the chord iteration ended, with the fall-backs."""
    solution = _finish(case, plan, iterated)
    left = np.flatnonzero(solution.status != Status.SETTLED)
    if left.size:
        near = np.isfinite(iterated.update) & (iterated.update < NEAR)
        begin = np.where(near, iterated.z, start)[:, left]
        again = _settle_stubborn(case.take(left), plan, begin)
        again.iterations[:] += solution.iterations[left]
        solution = solution.put(left, again)
    left = np.flatnonzero(solution.status != Status.SETTLED)
    if not left.size:
        return solution
    again = solve_units(case.take(left), plan.compass, plan.steps)
    again.iterations[:] += solution.iterations[left]
    return solution.put(left, again)


def _settle_stubborn(case: Case, plan: FastPlan, start: Floats) -> Solution:
    """Newton-GMRES."""
    residual = plan.residual(case, exact=True)
    solution = _finish(case, plan, settle_stubborn(residual, plan.reference.inverse, start))
    return replace(solution, way=np.full(case.units, STUBBORN_WAY, dtype="U24"))


def _taken(iterated: Iterated, units: Ints) -> Iterated:
    return Iterated(
        iterated.z[:, units],
        iterated.update[units],
        iterated.iterations[units],
        iterated.settled[units],
    )


def _finish(case: Case, plan: FastPlan, iterated: Iterated) -> Solution:
    """Samples, multipliers and status of iterated units."""
    topology, grid = plan.topology, plan.grid
    n, K, units = topology.states, grid.size, case.units
    good = iterated.settled & np.isfinite(iterated.z).all(axis=0)
    z = iterated.z if good.all() else np.where(good, iterated.z, plan.reference.z[:, None])
    scaled = z[: n * K].reshape(n, K, units)
    waves = np.empty((n, plan.steps + 1, units))
    waves[:, :-1] = sampled(scaled, synthesis(grid.harmonics, plan.steps))
    waves[:, :-1] *= topology.scale[:, None, None]
    waves[:, -1] = waves[:, 0]
    samples = waves.transpose(1, 2, 0)
    turned = np.zeros(units) if topology.driven else z[n * K]
    period = 2 * np.pi / (plan.reference.anchor.omega * np.exp(turned))
    junctions = _junctions(case, plan, z)
    network = case.network(junctions)
    found = multipliers(network, scaled, period, topology.scale)
    good &= _is_the_oscillation(scaled, turned, junctions, plan)
    stable = largest_beside_charge(found) < 1.0
    status = np.where(stable, Status.SETTLED, Status.UNSTABLE)
    lost = ~good
    samples[:, lost] = np.nan
    return Solution(
        status=np.where(good, status, Status.NOT_CONVERGED).astype(np.intp),
        samples=samples,
        period=np.where(good, period, np.nan),
        residual=iterated.update,
        multipliers=found,
        iterations=iterated.iterations.copy(),
        junctions={ref: np.where(good, celsius, np.nan) for ref, celsius in junctions.items()},
        way=np.full(units, WAY, dtype="U24"),
    )


def _junctions(case: Case, plan: FastPlan, z: Floats) -> dict[str, Floats]:
    heated = plan.topology.heated
    if not heated:
        return case.cold_junctions()
    rows = z[len(z) - len(heated) :] * HEAT_SCALE
    return dict(zip(heated, rows, strict=True))


def _is_the_oscillation(
    scaled: Floats, turned: Floats, junctions: dict[str, Floats], plan: FastPlan
) -> NDArray[np.bool_]:
    """Of a size, a frequency and a temperature that the nominal orbit makes credible."""
    nominal = plan.reference.z[: scaled.shape[0] * scaled.shape[1]].reshape(scaled.shape[:2])
    lead = int(np.argmax(np.linalg.norm(nominal[:, 1:], axis=1)))
    swing = np.linalg.norm(scaled[lead, 1:], axis=0)
    alive = swing > SMALLEST_SWING * np.linalg.norm(nominal[lead, 1:])
    sane = np.abs(turned) < LONGEST_LOG
    for celsius in junctions.values():
        sane &= celsius < HIGHEST_C
    return sane & (alive | plan.topology.driven)
