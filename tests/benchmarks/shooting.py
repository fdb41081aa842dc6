"""Shooting over 512 spread units of reference circuit A, against a general stiff integrator.

Spread: +-5 % C and R, +-10 % L and threshold, +-15 % gain.  Orbit and multipliers of every unit
count; the reference is LSODA with a compiled right-hand side of the same equations, 60 cycles of
settling at rtol 1e-6 (what it takes to come within 1 % of the choke currents).
"""

from __future__ import annotations

import time

import numpy as np
from circuits import CIRCUIT_A_SPREAD, circuit_a, scattered, typical_values
from references.circuit_a import Values, run_cycles

from tolsim.circuit.continuation import aim, solve_units
from tolsim.circuit.nominal import find_nominal
from tolsim.circuit.orbit import Status
from tolsim.circuit.thermal import Case
from tolsim.figures import measure_orbits

UNITS, STEPS, BATCH, RUNS = 512, 128, 256, 5
FINE_STEPS = 1024
SETTLING_CYCLES = 60


def main() -> None:
    """Print rate, ratio and accuracy."""
    design = circuit_a()
    began = time.perf_counter()
    nominal = find_nominal(Case(design, typical_values(design)), STEPS)
    nominal_time = time.perf_counter() - began
    values = scattered(typical_values(design, UNITS), np.random.default_rng(1), CIRCUIT_A_SPREAD)
    keys = tuple(key for key, value in values.items() if np.ptp(value) > 0)
    case = Case(design, values)
    rates, ratios = [], []
    for _ in range(RUNS):
        reference = _reference_rate()
        began = time.perf_counter()
        compass = aim(nominal, keys, STEPS)
        batches = np.split(np.arange(UNITS), UNITS // BATCH)
        solutions = [solve_units(case.take(units), compass, STEPS) for units in batches]
        rates.append(UNITS / (time.perf_counter() - began))
        ratios.append(rates[-1] / reference)
    status = np.concatenate([solution.status for solution in solutions])
    print(f"nominal orbit: {nominal_time:.2f} s")
    print(f"units/s per core at {STEPS} steps: {_spread(rates)}")
    print(f"ratio to LSODA (compiled, {SETTLING_CYCLES} cycles, rtol 1e-6): {_spread(ratios)}")
    print(f"settled: {np.sum(status == Status.SETTLED)} of {UNITS}")
    _accuracy(case.take(np.arange(24)), nominal, keys)


def _reference_rate() -> float:
    """Units per second of LSODA on the nominal unit."""
    run_cycles(Values(), 1e-7, method="LSODA", rtol=1e-6)  # compile outside the clock
    began = time.perf_counter()
    run_cycles(Values(), SETTLING_CYCLES / 6.604e6, method="LSODA", rtol=1e-6)
    return 1.0 / (time.perf_counter() - began)


def _accuracy(case: Case, nominal: object, keys: tuple[str, ...]) -> None:
    """Worst difference to a solution with many more steps."""
    coarse = measure_orbits(case, solve_units(case, aim(nominal, keys, STEPS), STEPS))
    fine = measure_orbits(case, solve_units(case, aim(nominal, keys, FINE_STEPS), FINE_STEPS))
    for title, endings in (
        ("frequency", ("frequency",)),
        ("drain, gate and coil peaks", ("drain_peak", "gate_peak", "L.current_peak")),
        ("rms values", ("voltage_rms", "L.current_rms")),
        ("supply current", ("supply_current",)),
    ):
        worst = max(
            float(np.max(np.abs(coarse[name] / fine[name] - 1)))
            for name in fine
            if name.endswith(endings)
        )
        print(f"worst difference to {FINE_STEPS} steps, {title}: {worst:.1e}")


def _spread(numbers: list[float]) -> str:
    return f"min {min(numbers):.0f}, median {np.median(numbers):.0f}, max {max(numbers):.0f}"


if __name__ == "__main__":
    main()
