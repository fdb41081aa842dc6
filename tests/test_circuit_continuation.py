"""From the nominal orbit to spread units whose tank hardly loses energy."""

import numpy as np
import pytest
from circuits import CIRCUIT_A_SPREAD, circuit_a, scattered, typical_values

from tolsim.circuit.continuation import aim, solve_units
from tolsim.circuit.nominal import find_nominal
from tolsim.circuit.orbit import Status
from tolsim.circuit.thermal import Case

STEPS, UNITS, COIL_OHM = 128, 24, 0.5


@pytest.fixture(scope="module")
def sharp():
    """Circuit A with a coil of 0.5 ohm in place of 3.6: compass and spread units."""
    design = circuit_a()
    values = typical_values(design) | {"L.resistance": np.array([COIL_OHM])}
    nominal = find_nominal(Case(design, values, heated=False), STEPS)
    many = {key: np.repeat(value, UNITS) for key, value in values.items()}
    units = Case(design, scattered(many, np.random.default_rng(1), CIRCUIT_A_SPREAD), heated=False)
    keys = tuple(key for key in values if not key.endswith("largest_share"))
    return aim(nominal, keys, STEPS), units


def test_units_of_high_q_settle_from_another_point_of_the_orbit(sharp):
    """From the zero of the coil current a drain switches right there, and Newton is led astray."""
    compass, units = sharp
    solution = solve_units(units, compass, STEPS)
    assert np.all(solution.status == Status.SETTLED)
    assert set(solution.way) == {"predicted", "another phase"}
    # they are orbits: the last sample is the first
    np.testing.assert_allclose(solution.samples[-1], solution.samples[0], atol=0.01)


def test_a_prediction_from_another_phase_is_the_same_orbit(sharp):
    compass, units = sharp
    one = units.take(np.array([0]))
    here, there = compass.start(one), compass.from_phase(0.25, STEPS).start(one)
    np.testing.assert_allclose(there.period, here.period, rtol=1e-4)
    assert compass.from_phase(0.25, STEPS) is compass.from_phase(0.25, STEPS)
    point = compass.nominal.solution.samples[STEPS // 4, 0]
    moved = compass.from_phase(0.25, STEPS).nominal
    np.testing.assert_array_equal(moved.frame.point, point)
