"""Transients of reference circuit A, against a general stiff integrator at equal accuracy.

One unit, 60 cycles from its bias point with the gates pushed apart by 1 V: it builds up and runs.
The reference is LSODA on the equations written out by hand, with a compiled right-hand side, at
the loosest tolerance that is as accurate.  Both errors are told: the worst of the peaks of all
nine states, as a share of each state's largest value, against LSODA at a very tight tolerance.
"""

from __future__ import annotations

import time

import numpy as np
from circuits import circuit_a, typical_values
from numpy.typing import NDArray
from references.circuit_a import Values, kicked, slope_of
from scipy.integrate import solve_ivp

from tolsim.circuit.network import Network
from tolsim.circuit.thermal import Case
from tolsim.circuit.transients.journey import Goal, Journey, Ramps, travel

Floats = NDArray[np.float64]

PERIOD, CYCLES, RUNS = 1 / 6.604e6, 60, 5
TIGHT = 1e-10
TOLERANCES = (1e-3, 3e-4, 1e-4, 3e-5, 1e-5, 1e-6, 1e-7)
STATES = ("a", "b", "p", "q", "ga", "gb", "LA", "LB", "L")  # in the order of the reference


def main() -> None:
    """Print rate, ratio and both errors."""
    # the unit's sides differ, so that no run rests on rounding alone
    values = Values(gain=(11.0, 10.0))
    design = circuit_a()
    case = Case(design, typical_values(design) | {"QB.gain": np.array([10.0])})
    network = case.network(case.cold_junctions(), live_rails=True)
    places = [network.index[name] for name in STATES]
    exact = _reference(values, TIGHT)
    size = np.max(np.abs(exact), axis=0)
    own = _travel(network, places, values, size)
    found = np.stack([own.highest[0, places], own.lowest[0, places]])
    error = float(np.max(np.abs(found - exact) / size))
    rival, tolerance = np.inf, TIGHT
    for tolerance in TOLERANCES:
        rival = float(np.max(np.abs(_reference(values, tolerance) - exact) / size))
        if rival <= error:
            break
    rates, ratios = [], []
    for _ in range(RUNS):
        began = time.process_time()
        _reference(values, tolerance)
        other = time.process_time() - began
        began = time.process_time()
        _travel(network, places, values, size)
        rates.append(1.0 / (time.process_time() - began))
        ratios.append(rates[-1] * other)
    print(f"steps per cycle: {own.steps[0] / own.windows[0]:.0f}")
    print(f"units/s per core: {_spread(rates)}")
    print(f"ratio to LSODA (compiled, rtol {tolerance:g}): {_spread(ratios)}")
    print(f"worst peak: here {error:.1e}, LSODA {rival:.1e} of the largest value")


def _reference(values: Values, rtol: float) -> Floats:
    """Highest and lowest of the nine states, (2, 9)."""
    answer = solve_ivp(
        slope_of(values),
        (0.0, CYCLES * PERIOD),
        kicked(values),
        method="LSODA",
        rtol=rtol,
        atol=rtol * 1e-2,
    )
    return np.stack([answer.y.max(axis=1), answer.y.min(axis=1)])


def _travel(network: Network, places: list[int], values: Values, size: Floats) -> Journey:
    """The same run at the default steps."""
    x0 = np.zeros((1, network.states))
    x0[0, places] = kicked(values)
    scale = np.ones(network.states)
    scale[places] = size
    supplies = {"vdd": values.supply, "vb": values.bias}
    for name, volts in supplies.items():
        x0[0, network.index[name]] = volts
    full = Ramps(np.tile([0.0, 1e-12], (1, 2, 1)), np.ones((1, 2, 2)))
    period = np.array([PERIOD])
    goal = Goal(np.full((1, network.states), np.inf), scale, places[0])
    return travel(network, x0, full, goal, period, (CYCLES - 0.5) * period)


def _spread(numbers: list[float]) -> str:
    return f"min {min(numbers):.1f}, median {np.median(numbers):.1f}, max {max(numbers):.1f}"


if __name__ == "__main__":
    main()
