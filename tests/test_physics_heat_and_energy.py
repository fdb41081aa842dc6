"""Conservation laws of every unit, and the closed loop of junction heat.

Thermal closure of a resistance R0 (1 + alpha dT) under a fixed current: dT = P0 Rth / (1 - alpha P0
Rth), no solution from P0 Rth = 1 / alpha on (elementary; numbers worked out by the project).
"""

from __future__ import annotations

import numpy as np
import pytest
from circuits import CIRCUIT_A_SPREAD, circuit_a, scattered, typical_values
from scipy.optimize import brentq
from stages import mosfet, resistor, self_biased, units_of

from tolsim.circuit.continuation import Compass, aim, solve_units
from tolsim.circuit.nominal import find_nominal
from tolsim.circuit.orbit import Solution, Status
from tolsim.circuit.thermal import Case
from tolsim.design import Design, Rail
from tolsim.figures import measure_orbits
from tolsim.parts import Drive

STEPS = 128
CURRENT = 10.0  # A, forced through the switch by a large resistance
KELVIN = 273.15


def led_units(design: Design, count: int, seed: int) -> tuple[Case, Solution, dict]:
    """Spread units with junctions in the loop, their orbits and figures."""
    nominal = find_nominal(Case(design, typical_values(design)), STEPS)
    compass = aim(nominal, tuple(nominal.case.values), STEPS)
    values = scattered(typical_values(design, count), np.random.default_rng(seed), CIRCUIT_A_SPREAD)
    case = Case(design, values)
    solution = solve_units(case, compass, STEPS)
    assert (solution.status == Status.SETTLED).all()
    return case, solution, measure_orbits(case, solution)


def warmed(design: Design, **thermal: float) -> Design:
    """The design with a thermal resistance at the named transistors."""
    parts = {
        ref: part.model_copy(update={"thermal_resistance": thermal[ref]})
        if ref in thermal
        else part
        for ref, part in design.parts.items()
    }
    return design.model_copy(update={"parts": parts})


@pytest.fixture(scope="module")
def batch() -> tuple[Case, Solution, dict]:
    return led_units(warmed(circuit_a(), QA=1.5, QB=1.5), 16, 2)


def test_mean_drain_voltage(batch: tuple[Case, Solution, dict]) -> None:
    """V - I R for every unit: a periodic choke takes no mean voltage."""
    case, solution, _ = batch
    index = case.network(solution.junctions).index
    mean = solution.samples[:-1].mean(axis=0)
    for drain, choke in (("a", "LA"), ("b", "LB")):
        drop = mean[:, index[choke]] * case.values[f"{choke}.resistance"]
        assert mean[:, index[drain]] == pytest.approx(case.values["vdd.voltage"] - drop, rel=5e-5)


def test_energy_balance_of_a_push_pull(batch: tuple[Case, Solution, dict]) -> None:
    """DC power in equals all heat and output to 0.5 % at worst: here 0.1 % for every unit."""
    _, _, figures = batch
    balance = np.abs(figures["energy_balance"])
    assert balance.max() < 1e-3
    assert np.median(balance) < 5e-4


def test_junctions_close_the_loop(batch: tuple[Case, Solution, dict]) -> None:
    """Junction = ambient + thermal resistance x dissipation, and the device is at that heat."""
    case, solution, figures = batch
    for ref in ("QA", "QB"):
        expected = case.values["ambient"] + 1.5 * figures[f"{ref}.dissipation"]
        assert solution.junctions[ref] == pytest.approx(expected, abs=0.1)
        assert (solution.junctions[ref] > 40).all()


def test_energy_balance_of_other_stages() -> None:
    """Spread units of a one-switch stage biased by its own gate diode."""
    _, _, figures = led_units(self_biased(), 16, 3)
    assert np.abs(figures["energy_balance"]).max() < 5e-3
    assert (figures["output_power"] < figures["input_power"]).all()


def switch_under_current(exponent: float, thermal_resistance: float = 2.0) -> Design:
    """A switch that is always on, 10 A through its drift resistance of 0.2 ohm at 25 degC."""
    parts = {
        "RL": resistor("vdd", "d", 1e4),
        "V1": Drive(
            kind="drive", nets=("g", "gnd"), low=9.0, high=10.0, frequency=1e6, resistance=1.0
        ),
        "Q1": mosfet(
            *("d", "g", 3.0, 1e5),
            cgs=1e-12,
            drift_resistance=0.2,
            drift_exponent=exponent,
            thermal_resistance=thermal_resistance,
        ),
    }
    return Design(parts=parts, rails={"vdd": Rail(net="vdd", voltage=1e4 * CURRENT)}, leak=1e-12)


@pytest.fixture(scope="module")
def linear() -> tuple[Design, Compass, float, float]:
    """A drift resistance in proportion to absolute temperature, 20 W and alpha = 0.008 at 125 K.

    At an ambient of 125 K the law R ~ T is R0 (1 + dT / 125 K): alpha = 0.008 per kelvin exactly.
    """
    design = switch_under_current(1.0)
    ambient, at_25 = 125.0 - KELVIN, 0.2 * (25 + KELVIN) / 125.0
    changes = {"ambient": np.array([ambient]), "Q1.drift_resistance": np.array([at_25])}
    nominal = find_nominal(units_of(design, changes, heated=True), 32)
    assert nominal.found
    return design, aim(nominal, tuple(nominal.case.values), 32), ambient, at_25


def rises(linear: tuple[Design, Compass, float, float], powers: np.ndarray) -> tuple:
    """Status and junction rise of units that would lose `powers` watts if they stayed cold."""
    design, compass, ambient, at_25 = linear
    changes = {
        "ambient": np.full(len(powers), ambient),
        "Q1.drift_resistance": at_25 * powers / 20.0,
    }
    solution = solve_units(units_of(design, changes, heated=True), compass, 32)
    return solution.status, solution.junctions["Q1"] - ambient


def test_fixed_point(linear: tuple[Design, Compass, float, float]) -> None:
    """P0 = 20 W on 2 K/W at alpha = 0.008: 58.824 K; other powers by the same formula."""
    rise = linear[1].nominal.solution.junctions["Q1"][0] - linear[2]
    assert rise == pytest.approx(58.824, abs=0.1)
    powers = np.array([4.0, 10.0, 15.0, 30.0])
    status, found = rises(linear, powers)
    assert (status == Status.SETTLED).all()
    assert found == pytest.approx(2 * powers / (1 - 0.008 * 2 * powers), abs=0.15)


def test_runaway(linear: tuple[Design, Compass, float, float]) -> None:
    """P0 Rth >= 1 / alpha = 125 K has no balance, and says so; just below, none under 300 degC."""
    powers = np.array([20.0, 60.0, 65.0, 80.0, 200.0])
    status, found = rises(linear, powers)
    assert status.tolist() == [Status.SETTLED] + [Status.NO_THERMAL_BALANCE] * 4
    assert np.isnan(found[1:]).all()


def test_power_law_of_silicon() -> None:
    """Drift resistance ~ (T / 298 K)^2.3, x 1.945 at 125 degC: the balance of an outside solver."""
    ratio = ((125 + KELVIN) / (25 + KELVIN)) ** 2.3
    assert ratio == pytest.approx(1.945, abs=2e-3)
    design = switch_under_current(2.3, thermal_resistance=1.5)
    nominal = find_nominal(units_of(design, heated=True), 32)
    balance = brentq(
        lambda t: 25 + 1.5 * CURRENT**2 * 0.2 * ((t + KELVIN) / (25 + KELVIN)) ** 2.3 - t, 25, 150
    )
    assert nominal.solution.junctions["Q1"][0] == pytest.approx(balance, abs=0.15)


def test_heat_moves_the_threshold_and_the_gain() -> None:
    """A held junction (heated=False) sees ambient; a heated one its own temperature."""
    held = find_nominal(units_of(self_biased()), STEPS)
    heated = find_nominal(units_of(self_biased(), heated=True), STEPS)
    assert held.solution.junctions["Q1"][0] == 25.0
    junction = float(heated.solution.junctions["Q1"][0])
    assert junction > 35
    part = self_biased().parts["Q1"]
    network = heated.case.network(heated.solution.junctions)
    ramps = network.devices.elements[0]
    forward = ramps.names.index("Q1:forward")
    assert ramps.offset[forward, 0] == pytest.approx(3.0 - 6e-3 * (junction - 25))
    expected = 0.05 * ((junction + KELVIN) / (25 + KELVIN)) ** part.gain_exponent
    assert ramps.square[forward, 0] == pytest.approx(expected)
