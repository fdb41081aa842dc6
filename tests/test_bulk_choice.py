"""The order and the solver are chosen on spread units, and the choice says what it measured."""

from dataclasses import replace

import numpy as np
import pytest
from circuits import CIRCUIT_A_SPREAD, circuit_a, scattered, typical_values

from tolsim.circuit.bulk import choice as chosen
from tolsim.circuit.bulk.choice import Choice, choose
from tolsim.circuit.bulk.judges import Errors, Marks, at_twice_the_order, by_shooting
from tolsim.circuit.bulk.plan import untaught
from tolsim.circuit.bulk.reference import NoReferenceError
from tolsim.circuit.bulk.solve import solve_directly
from tolsim.circuit.continuation import aim
from tolsim.circuit.nominal import find_nominal
from tolsim.circuit.thermal import Case

STEPS, PILOTS = 128, 24


@pytest.fixture(scope="module")
def stage():
    """Nominal unit, compass and pilots of circuit A."""
    design = circuit_a()
    nominal = find_nominal(Case(design, typical_values(design), heated=False), STEPS)
    values = typical_values(design, PILOTS)
    pilots = Case(design, scattered(values, np.random.default_rng(2), CIRCUIT_A_SPREAD), False)
    keys = tuple(key for key in values if not key.endswith("largest_share"))
    return nominal, aim(nominal, keys, STEPS), pilots


@pytest.fixture(scope="module")
def made(stage):
    return choose(*stage, STEPS)


def test_circuit_a_is_served_by_collocation_within_the_accuracy(made):
    assert made.solver == "collocation"
    assert made.harmonics >= 40
    assert made.errors.frequency < 1e-4
    assert max(made.errors.peak, made.errors.rms) < 1e-3
    assert made.settled_share == 1.0


def test_both_judges_say_about_the_same(made):
    """Nothing but the circuit is common to them, so an error in either would set them apart."""
    for name in ("frequency", "peak", "rms"):
        shot, twice = getattr(made.errors, name), getattr(made.order_errors, name)
        assert twice == pytest.approx(shot, rel=0.3), name


def test_the_record_is_plain_and_complete(made):
    record = made.record()
    assert {"solver", "harmonics", "frequency_error", "peak_error", "rms_error"} <= record.keys()
    assert 0 < record["order_peak_error"] < 1e-3
    assert all(isinstance(value, str | int | float) for value in record.values())


def test_too_few_harmonics_are_noticed_and_left_to_shooting(stage, monkeypatch):
    monkeypatch.setattr(chosen, "TAIL", 1.0)  # lets a hopeless order be tried
    made = choose(*stage, STEPS, orders=(16,))
    assert made.solver == "shooting"
    assert made.plan is None
    assert "16 harmonics" in made.reason
    assert made.record()["order_peak_error"] is None


def test_an_order_that_only_shooting_approves_of_is_refused(stage, monkeypatch):
    """Twice the order has to agree as well."""
    monkeypatch.setattr(chosen, "at_twice_the_order", lambda *_: chosen.Truth(*_wrong(stage[2])))
    assert choose(*stage, STEPS).solver == "shooting"


def _wrong(units):
    marks = Marks(*(np.full((*rows, units.units), 7.0) for rows in ((), (18,), (9,))))
    return marks, np.ones(units.units, dtype=bool)


def test_an_order_out_of_reach_is_refused_after_one_trial(stage, monkeypatch):
    """Neither shooting nor further orders are spent on probes before the reach is known."""
    monkeypatch.setattr(chosen, "TAIL", 1.0)
    asked = []

    def counted(nominal, compass, pilots, steps, order):
        asked.append(order)
        return untaught(nominal, compass, pilots, steps, order)

    monkeypatch.setattr(chosen, "untaught", counted)
    assert choose(*stage, STEPS, orders=(16, 24)).solver == "shooting"
    assert asked == [16]


def test_an_order_without_nominal_orbit_gives_its_reason(stage, monkeypatch):
    def failing(*_):
        raise NoReferenceError("slipped")

    monkeypatch.setattr(chosen, "untaught", failing)
    made = choose(*stage, STEPS)
    assert made.solver == "shooting"
    assert made.reason.endswith("harmonics: slipped")


def test_twice_the_order_is_as_near_to_the_truth_as_shooting(stage):
    """At 24 harmonics errors are large; both judges must see the same ones, unit by unit."""
    nominal, compass, pilots = stage
    plan = untaught(nominal, compass, pilots, STEPS, 24)
    iterated, solution = solve_directly(pilots, plan)
    twice = at_twice_the_order(nominal, plan, pilots, iterated.z)
    shot, _ = by_shooting(pilots, compass, STEPS, solution)
    assert twice.sound.all()
    assert shot.sound.all()
    np.testing.assert_allclose(twice.marks.frequency, shot.marks.frequency, rtol=3e-5)
    mine = Marks.of(solution)
    away = np.abs(mine.rms - shot.marks.rms).max()
    assert np.abs(twice.marks.rms - shot.marks.rms).max() < 0.3 * away


def test_edges_that_no_order_carries_are_left_to_shooting(stage):
    made = choose(*stage, STEPS, orders=(16, 24))
    assert made.solver == "shooting"
    assert "edges" in made.reason


def test_a_refusal_without_trial_shoots_few_units(stage, monkeypatch):
    """Nothing is to be chosen then: shooting serves, and a few units tell how far it is off."""
    asked = []

    def counted(probes, *rest):
        asked.append(probes.units)
        return by_shooting(probes, *rest)

    monkeypatch.setattr(chosen, "by_shooting", counted)
    made = choose(*stage, STEPS, orders=(16, 24))
    assert asked == [chosen.FEW]
    assert 0 < made.shooting_errors.peak < 0.01


def test_the_next_order_follows_from_the_excess(stage):
    nominal, orders = stage[0], (32, 48, 64, 96)
    assert chosen._next_order(32, 1.2, nominal, orders) == 48
    assert chosen._next_order(32, 12.0, nominal, orders) == 64
    assert chosen._next_order(96, 2.0, nominal, orders) is None


def test_errors_are_measured_against_their_own_limits():
    assert Errors(1e-4, 0.0, 0.0).excess == pytest.approx(1.0)
    assert Errors(0.0, 1e-3, 2e-3).excess == pytest.approx(2.0)


def test_a_choice_without_plan_solves_by_shooting(stage, made):
    _, compass, pilots = stage
    units = pilots.take(np.arange(2))
    shooting: Choice = replace(made, solver="shooting", plan=None)
    assert list(shooting.solve(units, compass, STEPS).way) == ["predicted"] * 2
    assert list(made.solve(units, compass, STEPS).way) == ["collocation"] * 2
