"""Supply contracts and repeated starts: borders against roots, tries against closed forms."""

from __future__ import annotations

import math
import re
from functools import cache

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq

from tests.test_starts import PLAIN, mistakes
from tolsim.answers.lines import start_lines
from tolsim.answers.start_words import tries_story
from tolsim.circuit.bias import bias_point
from tolsim.circuit.poweron.fates import Fate
from tolsim.circuit.startup import modes
from tolsim.evaluation import Plan, built
from tolsim.nominals import case_of, prepare
from tolsim.report.start_section import start_section
from tolsim.spread.part_values import part_values
from tolsim.spread.sampling import draw, factors
from tolsim.spread.tries import draw_tries
from tolsim.starts.contract import ROUNDS, find_borders, supply_contract
from tolsim.starts.leftover import left_over, states_of
from tolsim.starts.repeats import repeated_starts, tries_of_unit
from tolsim.stats.variance_split import share_between
from tolsim.study import read_study

ASKED = """
[supply_contract]
supply = ["-60 %", "-40 %"]
units = 1

[repeated_starts]
units = 2
tries = 5
off_time = ["1 us", "100 us"]
"""
FEW = 3  # rounds, for speed
VB = 'voltage = "4.2 V"'
SLOW = 'resistance = "1 ohm"\nramp_time = "1 ms"'


@cache
def plan(*, slow=True):
    """The quick push-pull without spread; the bias rail spreads by nothing either."""
    told = PLAIN.replace(VB, f"{VB}\nfollows_supply = false")
    told = told.replace('resistance = "1 ohm"', SLOW) if slow else told
    study = read_study(told + ASKED, {}, "stage.toml")
    return Plan(study, {}, factors(study, {}), prepare(study, {}, jobs=1))


def steps(*borders):
    """Units that start up to a border of their own."""

    def starts(units, place):
        return place < np.array(borders)[units]

    return starts


@given(st.lists(st.floats(-0.2, 1.2), min_size=1, max_size=6))
@settings(max_examples=60, deadline=None)
def test_halving_finds_every_border_and_a_batch_is_a_loop(borders):
    found = find_borders(steps(*borders), len(borders))
    for k, border in enumerate(borders):
        alone = find_borders(steps(border), 1)
        assert np.array_equal(found.safe[k], alone.safe[0], equal_nan=True)
        assert found.single[k] == alone.single[0]
        if border <= 0.0:
            assert np.isnan(found.safe[k])
        elif border > 1.0:
            assert found.beyond[k]
            assert found.safe[k] == 1.0
        else:
            assert found.safe[k] < border <= found.safe[k] + 2.0**-ROUNDS
            assert found.single[k]


def test_units_without_a_single_border_are_told_and_count_with_the_worst():
    """A hole in the middle; an island; an easy end that fails."""

    def starts(units, place):
        hole = (place > 0.3) & (place < 0.4)
        rules = [~hole, (place < 0.2) | (place > 0.5) & (place < 0.9), place > 0.5]
        return np.choose(units, [rule.astype(int) for rule in rules]).astype(bool)

    found = find_borders(starts, 3)
    assert found.single.tolist() == [False, False, False]
    assert found.safe[0] == 0.0
    assert found.safe[1] < 0.2 or found.safe[1] == 0.0
    assert np.isnan(found.safe[2])
    assert not found.beyond.any()


def growth(own, level):
    """Growth rate of the stage at rest with its supply at a share of the full voltage."""
    draws = built(own, draw(own.factors, own.study.run.seed, 0, 1))
    case = case_of(own.study, part_values(own.study, {}, "room", "lit", draws))
    case.values["vdd.voltage"][:] *= level
    network = case.network(case.cold_junctions())
    lead = modes(network, bias_point(network), own.cases[("room", "lit")].nominal.shift)
    return float(lead.growth[0])


@cache
def contract():
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("tolsim.starts.contract.ROUNDS", FEW)
        return supply_contract(plan(), plan().study.starts.supply_contract, jobs=1)


@pytest.mark.slow
def test_the_lowest_supply_is_where_growth_begins():
    """On a slow ramp the linear growth rate decides: its root, found by Brent's method."""
    root = brentq(lambda level: growth(plan(), level), 0.2, 1.0, xtol=1e-4)
    question = contract()["questions"][0]
    assert question["with_border"] == 1
    (border,) = question["borders"]
    assert root <= 1.0 + border <= root + 0.2 / 2**FEW


@pytest.mark.slow
def test_the_contract_as_a_sentence():
    told = " ".join(" ".join(start_lines({"supply_contract": contract()})).split())
    border = contract()["questions"][0]["borders"][0]
    volts = f"{24 * (1 + border):.3g} V"
    assert f"The supply vdd shall stand at {volts} or more when it is switched on" in told
    # Wilks with 1 unit: 0.05
    assert "This covers 5.0 % of units with 95 % confidence, by simulation of 1 unit in" in told
    assert "59 units would be needed to tell for 95" in told


def test_tries_are_the_same_whoever_else_is_tried():
    both = draw_tries(3, np.array([7, 2]), 6, (1e-3, 1.0), 0.2)
    alone = draw_tries(3, np.array([2]), 4, (1e-3, 1.0), 0.2)
    assert np.array_equal(both.phase[1, :4], alone.phase[0])
    assert np.array_equal(both.off_time[1, :4], alone.off_time[0])
    assert not np.array_equal(both.phase[0], both.phase[1])
    many = draw_tries(3, np.arange(40), 200, (1e-3, 1.0), 0.2)
    assert 0.8 < many.stretch.min() < 0.81
    assert 1.19 < many.stretch.max() < 1.2
    assert np.median(many.off_time) == pytest.approx(math.sqrt(1e-3), rel=0.05)


def test_charge_is_left_as_resistors_let_it_go():
    """A gate of the push-pull discharges into the bias supply through 3.3 kohm."""
    own = plan(slow=False)
    draws = built(own, draw(own.factors, 1, 0, 1))
    case = case_of(own.study, part_values(own.study, {}, "room", "lit", draws))
    network = case.network(case.cold_junctions(), live_rails=True)
    x0 = states_of(case, network, {"ga": np.array([4.0]), "gb": np.array([4.0])})
    assert x0[0, network.index["ga"]] == 4.0
    assert x0[0, network.index["vdd"]] == pytest.approx(24.0)
    x0[0] = 0.0
    x0[0, [network.index["ga"], network.index["gb"]]] = 4.0
    # gate: 1.6 nF and Cgd at 0 V, the rest of the stage moves with it; so only bounds of tau
    tau = 3300.0 * (1.6e-9 + np.array([0.0, 280e-12 + 75e-12]))
    later = left_over(network, x0, np.array([2e-5]))[0, network.index["ga"]]
    low, high = 4.0 * np.exp(-2e-5 / tau)
    assert low <= later <= 1.1 * high
    assert np.abs(left_over(network, x0, np.array([10.0]))).max() < 1e-3


@cache
def repeats():
    own = plan(slow=False)
    return repeated_starts(own, own.study.starts.repeated_starts, jobs=1)


def test_a_sure_unit_starts_in_every_try():
    assert [row["starts"] for row in repeats()["units"]] == [5, 5]
    assert repeats()["charge_counts"]
    row = repeats()["units"][0]
    assert row["low"] == pytest.approx(0.025**0.2)
    assert row["start_time"]["shortest"] < row["start_time"]["longest"]
    assert repeats()["split"]["between"] is None
    told = " ".join(" ".join(start_lines({"repeated_starts": repeats()})).split())
    assert "2 of the 2 start in all 5 tries" in told


def test_the_same_seed_gives_the_same_tries():
    own = plan(slow=False)
    number = repeats()["units"][1]["unit"]
    again = tries_of_unit(own, own.study.starts.repeated_starts, number)
    assert (again.attempt.fate == Fate.STARTS).all()
    assert again.attempt.start_time.min() == repeats()["units"][1]["start_time"]["shortest"]


def test_variance_between_units_by_hand():
    """Rows 0, 0 and 1, 1 differ only between units; equal rows only within them."""
    assert share_between([[0, 0], [1, 1]]) == 1.0
    assert share_between([[0, 1], [0, 1]]) == 0.0
    assert share_between([[1, 1], [1, 1]]) is None
    rng = np.random.default_rng(1)
    y = rng.normal(size=(4000, 1)) * 2.0 + rng.normal(size=(4000, 6))
    assert share_between(y) == pytest.approx(0.8, abs=0.01)


def test_every_mistake_of_contract_and_repeats_is_told():
    told = mistakes("""
[supply_contract]
ramp_time = ["10 ms", "1 ms"]
rails = ["vd"]
conditions = ["rooom"]

[repeated_starts]
tries = 1
off_time = ["1 s", "1 ms"]
""")
    assert sum("the lower end first" in one for one in told) == 1  # the other table is unread
    assert any("Did you mean vdd?" in one for one in told)
    assert any("Did you mean room?" in one for one in told)
    assert any("tries" in one for one in told)
    assert re.search(
        r"\[supply_contract\] ramp_time: expected ramp_time or supply",
        mistakes("[supply_contract]\nunits = 3\n")[0],
    )


def test_repeats_reach_the_report_and_the_story_of_a_unit():
    section = start_section({"repeated_starts": repeats()})["repeats"]
    assert [row["starts"] for row in section["rows"]] == [5, 5]
    number = repeats()["units"][0]["unit"]
    (told,) = tries_story({"repeated_starts": repeats()}, number)
    assert told == f"Unit {number} starts in 5 of 5 tries (47.8 to 100 %)."
    assert tries_story({"repeated_starts": repeats()}, 999) == []
    assert tries_story({}, number) == []
