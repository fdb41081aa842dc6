"""Bulk solver on reference circuit A: units per second end to end, against a general integrator.

    python tests/benchmarks bulk_speed

One core.  Spread +-5 % on C and R, +-10 % on L and threshold, +-15 % on gain.  "End to end" is all
of it: choice of the order on probes, plan with pilots, orbits, multipliers, every figure, start
figures, and the share of units that shooting re-checks.  The yardstick is LSODA with a compiled
right-hand side over 60 cycles at rtol 1e-4, in the same run; ratios count, seconds drift.
"""

from __future__ import annotations

import statistics
import time

import numpy as np
from circuits import CIRCUIT_A_SPREAD, circuit_a, scattered, typical_values
from references.circuit_a import Values, run_cycles

from tolsim.building import BLOCK, TOGETHER
from tolsim.circuit.bulk.choice import Choice, choose
from tolsim.circuit.continuation import Compass, aim, solve_units
from tolsim.circuit.nominal import Nominal, find_nominal
from tolsim.circuit.thermal import Case
from tolsim.figures import measure_orbits, measure_start

STEPS, UNITS, PILOTS, RUNS = 192, 4096, 256, 5
RECHECKED = 0.01
CYCLES, FREQUENCY = 60, 6.6e6


def units_of(first: int, count: int) -> Case:
    """Units `first` ... of the spread, the same in every run."""
    design = circuit_a()
    values = typical_values(design, PILOTS + UNITS)
    spread = scattered(values, np.random.default_rng(1), CIRCUIT_A_SPREAD)
    return Case(design, {k: v[first : first + count] for k, v in spread.items()}, heated=False)


def run_units(nominal: Nominal, compass: Compass, choice: Choice) -> tuple[float, float, float]:
    """Seconds for orbits, for figures, for the re-check."""
    orbits = figures = 0.0
    for first in range(0, UNITS, TOGETHER * BLOCK):
        pool = units_of(PILOTS + first, TOGETHER * BLOCK)
        blocks = choice.solve_in_blocks(pool, compass, STEPS, BLOCK)
        for place in range(TOGETHER):
            began = time.perf_counter()
            solution = next(blocks)
            solved = time.perf_counter()
            case = pool.take(np.arange(place * BLOCK, (place + 1) * BLOCK))
            measure_orbits(case, solution)
            measure_start(case, nominal)
            orbits, figures = orbits + solved - began, figures + time.perf_counter() - solved
    some = units_of(PILOTS, max(16, int(RECHECKED * UNITS)))
    began = time.perf_counter()
    solve_units(some, compass, STEPS)
    return orbits, figures, time.perf_counter() - began


def yardstick() -> float:
    """Units per second of the general integrator."""
    duration = CYCLES / FREQUENCY
    run_cycles(Values(), duration / CYCLES, method="LSODA", rtol=1e-4)  # compile
    began = time.perf_counter()
    run_cycles(Values(), duration, method="LSODA", rtol=1e-4)
    return 1 / (time.perf_counter() - began)


def matrix_rate() -> float:
    """Measured single-precision product rate, operations per second."""
    a, b = np.ones((1024, 1024), np.float32), np.ones((1024, 64), np.float32)
    times = []
    for _ in range(40):
        began = time.perf_counter()
        a @ b
        times.append(time.perf_counter() - began)
    return 2 * a.size * b.shape[1] / statistics.median(times)


def work_per_unit(choice: Choice, iterations: float) -> float:
    """Floating-point operations of the products of one unit's iterations, counted by hand.

    The inverse Jacobian through the ports (a dense matrix over p K, blocks per harmonic), synthesis
    of p ports and analysis of p currents and p charges, per iteration.
    """
    assert choice.plan is not None
    grid, inverse = choice.plan.grid, choice.plan.reference.inverse
    ports = len(inverse.sensed.constant)
    blocks = (inverse.spread, inverse.sensed, inverse.acting)
    condensed = inverse.dense.size + sum(each.waves.size for each in blocks)
    return iterations * (2 * condensed + 3 * ports * 2 * grid.size * grid.points)


def main() -> None:
    """Print the table."""
    case = units_of(0, 1)
    nominal = find_nominal(Case(case.design, typical_values(case.design), heated=False), STEPS)
    keys = tuple(key for key in case.values if not key.endswith("largest_share"))
    rows = []
    for _ in range(RUNS):
        began = time.perf_counter()
        compass = aim(nominal, keys, STEPS)
        choice = choose(nominal, compass, units_of(0, PILOTS), STEPS)
        prepared = time.perf_counter() - began
        seconds = run_units(nominal, compass, choice)
        total = prepared + sum(seconds)
        rows.append((prepared, *seconds, UNITS / total, UNITS / sum(seconds), yardstick()))
    print(f"solver: {choice.record()}")
    iterations = choice.solve(units_of(PILOTS, TOGETHER * BLOCK), compass, STEPS).iterations.mean()
    work = work_per_unit(choice, float(iterations))
    columns = list(zip(*rows, strict=True))
    titles = ("prepare s", "orbits s", "figures s", "re-check s", "units/s", "units/s after")
    for title, column in zip((*titles, "LSODA units/s"), columns, strict=True):
        print(
            f"{title:>16}: {min(column):8.2f} {statistics.median(column):8.2f} {max(column):8.2f}"
        )
    ratios = [row[4] / row[6] for row in rows]
    print(f"{'ratio':>16}: {min(ratios):8.0f} {statistics.median(ratios):8.0f} {max(ratios):8.0f}")
    rate = work * UNITS / statistics.median(columns[1])
    print(
        f"{iterations:.2f} iterations, {work / 1e6:.1f} million operations per unit in products:"
        f" {rate / 1e9:.1f} of {matrix_rate() / 1e9:.1f} GF/s measured"
    )


if __name__ == "__main__":
    main()
