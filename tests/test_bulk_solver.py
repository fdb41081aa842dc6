"""Collocation agrees with shooting, and a unit's answer has the same bits in any company."""

import pickle
from dataclasses import replace

import numpy as np
import pytest
from circuits import CIRCUIT_A_SPREAD, circuit_a, scattered, typical_values

from tolsim.circuit.bulk.chord import iterate
from tolsim.circuit.bulk.newton import settle_stubborn
from tolsim.circuit.bulk.plan import prepare_fast, taught
from tolsim.circuit.bulk.solve import WAY, solve_units_fast
from tolsim.circuit.continuation import aim, solve_units
from tolsim.circuit.nominal import find_nominal
from tolsim.circuit.orbit import Status
from tolsim.circuit.periodic import highest, rms
from tolsim.circuit.thermal import Case

STEPS, HARMONICS, PILOTS = 128, 32, 48


def prepared(design, values, heated, spread, harmonics=HARMONICS):
    """Plan, compass and 80 spread units of a design."""
    nominal = find_nominal(Case(design, values, heated), STEPS)
    many = {key: np.repeat(value, 80) for key, value in values.items()}
    case = Case(design, scattered(many, np.random.default_rng(7), spread), heated)
    keys = tuple(key for key in values if not key.endswith("largest_share"))
    compass = aim(nominal, keys, STEPS)
    plan = prepare_fast(nominal, compass, case.take(np.arange(PILOTS)), STEPS, harmonics)
    return plan, compass, case


@pytest.fixture(scope="module")
def push_pull():
    design = circuit_a()
    return prepared(design, typical_values(design), False, CIRCUIT_A_SPREAD)


@pytest.fixture(scope="module")
def hot_push_pull():
    """Circuit A whose transistors warm up through drift and gate resistances."""
    design = circuit_a()
    parts = dict(design.parts)
    for ref in ("QA", "QB"):
        model = parts[ref].model.model_copy(update={"drift_resistance": 0.05})
        parts[ref] = parts[ref].model_copy(
            update={"model": model, "gate_resistance": 1.0, "thermal_resistance": 2.0}
        )
    design = design.model_copy(update={"parts": parts})
    return prepared(design, typical_values(design), True, CIRCUIT_A_SPREAD)


def test_orbits_agree_with_finer_shooting(push_pull):
    plan, compass, case = push_pull
    units = case.take(np.arange(8))
    bulk, fine = solve_units_fast(units, plan), solve_units(units, compass, 4 * STEPS)
    assert np.all(bulk.status == Status.SETTLED)
    assert np.all(bulk.way == WAY)
    np.testing.assert_allclose(bulk.period, fine.period, rtol=2e-4)
    for state in range(bulk.samples.shape[2]):
        wave, truth = bulk.samples[:-1, :, state], fine.samples[:-1, :, state]
        np.testing.assert_allclose(highest(wave), highest(truth), rtol=6e-3)
        np.testing.assert_allclose(rms(wave), rms(truth), rtol=6e-3)


def test_junctions_settle_where_shooting_puts_them(hot_push_pull):
    plan, compass, case = hot_push_pull
    units = case.take(np.arange(8))
    bulk, shot = solve_units_fast(units, plan), solve_units(units, compass, 2 * STEPS)
    assert np.all(bulk.way == WAY)
    for ref, celsius in bulk.junctions.items():
        rise = shot.junctions[ref] - 25.0
        assert np.all(rise > 5.0)
        np.testing.assert_allclose(celsius - 25.0, rise, rtol=2e-2)


def test_multipliers_agree_with_shooting(push_pull):
    plan, compass, case = push_pull
    units = case.take(np.arange(8))
    bulk, shot = solve_units_fast(units, plan), solve_units(units, compass, 2 * STEPS)
    slowest, truth = np.abs(bulk.multipliers).max(axis=1), np.abs(shot.multipliers).max(axis=1)
    np.testing.assert_allclose(slowest, truth, atol=0.03)
    assert np.all(slowest < 1.0)


def test_a_unit_has_the_same_bits_in_any_company(push_pull):
    plan, _, case = push_pull
    whole = solve_units_fast(case, plan)
    for units in (np.arange(5), np.array([79]), np.arange(80)[::-1], np.arange(13, 80)):
        part = solve_units_fast(case.take(units), plan)
        assert np.array_equal(part.samples, whole.samples[:, units])
        assert np.array_equal(part.period, whole.period[units])
        assert np.array_equal(part.iterations, whole.iterations[units])
        assert np.array_equal(part.multipliers, whole.multipliers[units])


def test_heated_units_have_the_same_bits_in_any_company(hot_push_pull):
    plan, _, case = hot_push_pull
    whole = solve_units_fast(case, plan)
    units = np.array([70, 3, 41])
    part = solve_units_fast(case.take(units), plan)
    assert np.array_equal(part.samples, whole.samples[:, units])
    for ref, celsius in part.junctions.items():
        assert np.array_equal(celsius, whole.junctions[ref][units])


def test_a_plan_survives_the_road_to_a_worker(push_pull):
    plan, _, case = push_pull
    units = case.take(np.arange(3))
    copy = pickle.loads(pickle.dumps(plan))  # noqa: S301 # our own bytes
    assert np.array_equal(
        solve_units_fast(units, copy).samples, solve_units_fast(units, plan).samples
    )


def test_the_tolerance_bounds_the_error_and_not_only_the_update(push_pull):
    """An update says little about the error of a slow direction: tight and usual ends compare."""
    plan, _, case = push_pull
    start = plan.predictor.start(case)
    usual = plan.iterate(case, start)
    tight = iterate(plan.residual(case), plan.reference.inverse, start, 60, 1e-6)
    assert tight.settled.all()
    error = np.abs(usual.z - tight.z).max(axis=0)
    assert np.percentile(error, 90) < 2e-4
    assert error.max() < 1e-3


def test_pilots_improve_the_first_order_start(push_pull):
    plan, _, case = push_pull
    fresh = case.take(np.arange(PILOTS, 80))
    start = plan.predictor.start(fresh)
    end = plan.iterate(fresh, start).z
    x = plan.predictor.deviations(fresh)
    straight = (
        plan.predictor.origin[:, None] + np.stack(list(plan.predictor.slopes.values()), axis=1) @ x
    )
    learnt = np.median(np.abs(start - end).max(axis=0))
    assert learnt < np.median(np.abs(straight - end).max(axis=0))


def test_newton_comes_to_the_same_orbits_as_the_chord(push_pull):
    plan, _, case = push_pull
    units = case.take(np.arange(3))
    end = plan.iterate(units, plan.predictor.start(units))
    nominal = np.repeat(plan.reference.z[:, None], 3, axis=1)
    residual = plan.residual(units, exact=True)
    newton = settle_stubborn(residual, plan.reference.inverse, nominal)
    assert newton.settled.all()
    np.testing.assert_allclose(newton.z, end.z, atol=2e-4)


def test_what_does_not_settle_goes_to_shooting(push_pull, monkeypatch):
    """Units far outside the spread: no chord from the nominal unit reaches them."""
    asked = []

    def shooting(case, compass, _):
        asked.append(case.values["L.inductance"])
        copies = np.zeros(case.units, dtype=np.intp)
        return replace(compass.nominal.solution.take(copies), way=np.array(["stand-in"]))

    monkeypatch.setattr("tolsim.circuit.bulk.solve.solve_units", shooting)
    plan, _, case = push_pull
    values = {key: value[:2].copy() for key, value in case.values.items()}
    values["L.inductance"] *= np.array([1.0, 5.0])
    solution = solve_units_fast(Case(case.design, values, case.heated), plan)
    assert solution.way[0] == WAY
    assert solution.way[1] == "stand-in"
    assert [list(each) for each in asked] == [[values["L.inductance"][1]]]


def test_starts_from_which_nothing_settles_are_dropped(push_pull, monkeypatch):
    plan, _, case = push_pull
    pilots = case.take(np.arange(PILOTS))
    assert taught(plan, pilots) is not plan

    def astray(predictor, pilots, z):  # noqa: ARG001
        return replace(predictor, origin=predictor.origin + 50.0)

    monkeypatch.setattr("tolsim.circuit.bulk.plan.learn", astray)
    assert taught(plan, pilots) is plan
