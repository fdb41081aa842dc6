"""Runs in time where the search for orbits leaves something open."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from circuits import CIRCUIT_A_SPREAD, circuit_a, scattered, typical_values

from tolsim.circuit.continuation import aim, solve_units
from tolsim.circuit.nominal import find_nominal
from tolsim.circuit.orbit import Status
from tolsim.circuit.poweron.bursts import look_at_bursts
from tolsim.circuit.thermal import Case
from tolsim.figures.power_on import expected_of, measure_power_on
from tolsim.nominals import PreparedCase
from tolsim.second_look import bursts_confirmed, found_by_power_on
from tolsim.self_heating import Heat

STEPS = 128
UNITS = 2


@pytest.fixture(scope="module")
def solved():
    """Two unlike units of circuit A with their orbits, and the case they belong to."""
    design = circuit_a()
    nominal = find_nominal(Case(design, typical_values(design), heated=False), STEPS)
    compass = aim(nominal, tuple(nominal.case.values), STEPS)
    values = scattered(typical_values(design, UNITS), np.random.default_rng(5), CIRCUIT_A_SPREAD)
    case = Case(design, values, heated=False)
    orbits = solve_units(case, compass, STEPS)
    assert (orbits.status == Status.SETTLED).all()
    prepared = PreparedCase(nominal, compass, {}, Heat(), nominal)
    return prepared, case, orbits


def test_an_orbit_that_was_not_found_is_found_by_switching_on(solved):
    """Both units forgotten: switched on they swing, and shooting from there finds their orbits."""
    prepared, case, orbits = solved
    forgotten = replace(
        orbits,
        status=np.full(UNITS, Status.NOT_CONVERGED, dtype=np.intp),
        samples=np.full_like(orbits.samples, np.nan),
        period=np.full(UNITS, np.nan),
    )
    current = np.full(UNITS, 4.0)
    found = found_by_power_on(prepared, case, case, forgotten, current, STEPS)
    assert found.status.tolist() == [Status.SETTLED, Status.SETTLED]
    assert (found.way == "power-on").all()
    np.testing.assert_allclose(found.period, orbits.period, rtol=1e-5)


def test_a_stable_orbit_taken_for_an_unstable_one_comes_back(solved):
    """The disturbance dies out in time, whatever status the unit was given."""
    prepared, case, orbits = solved
    doubted = replace(
        orbits,
        status=np.full(UNITS, Status.UNSTABLE, dtype=np.intp),
        multipliers=np.full_like(orbits.multipliers, 1.05),
    )
    looked = bursts_confirmed(prepared, case, doubted)
    assert looked.status.tolist() == [Status.SETTLED, Status.SETTLED]


def test_a_swing_that_dies_is_no_burst(solved):
    """Without supply voltage the same start decays."""
    prepared, case, orbits = solved
    off = Case(case.design, case.values | {"vdd.voltage": np.full(UNITS, 0.5)}, heated=False)
    frame = prepared.nominal.frame
    doubted = replace(orbits, multipliers=np.full_like(orbits.multipliers, 1.2))
    status = look_at_bursts(off, doubted, frame.lead, frame.scale)
    assert status.tolist() == [Status.NO_ORBIT, Status.NO_ORBIT]


def test_units_that_are_not_chosen_are_not_switched_on(solved):
    """Nothing is told of them."""
    prepared, case, _ = solved
    expected = expected_of(prepared.nominal, prepared.nominal.solution, np.full(1, 4.0))
    one = case.take(np.array([0]))
    none = measure_power_on(one, expected, prepared.start.shift, np.array([False]))
    assert none.fate.tolist() == [0]
    assert np.isnan(none.x).all()
