"""Passive parts follow their own temperature: balance, values, cold start, record."""

from dataclasses import replace

import numpy as np
import pytest
from quick_study import text
from small_study import capacitor, everything, study, tables

from tolsim.answers.unit_files import FrameColumns, UnitRows
from tolsim.evaluation import Plan, evaluate
from tolsim.figures.parts import resistor
from tolsim.heatcheck import heat_check
from tolsim.library import distributions_folder
from tolsim.nominals import prepare
from tolsim.parts import Resistor
from tolsim.recheck import recheck
from tolsim.report.page import _quality
from tolsim.self_heating import (
    ROUNDS,
    Heat,
    heating_notes,
    moved_aside,
    rises_of,
    settle,
    slopes_of,
    warmed_parts,
)
from tolsim.spread.part_values import Rise, nominal_values, own_rises, part_values
from tolsim.spread.reading import read_shelf
from tolsim.spread.sampling import draw, factors
from tolsim.study import read_study

TABLES = tables()


@pytest.mark.parametrize("gain", [0.0, 0.3, -0.4])
def test_the_balance_is_the_sum_of_a_geometric_series(gain):
    """A rise that warms the loss by `gain` per round ends at cold / (1 - gain)."""
    heat, orbit = settle(
        ({"L1": 20.0}, "cold"), lambda rises: ({"L1": 20.0 + gain * rises["L1"]}, "warm")
    )
    assert heat.settled
    assert orbit == "warm"
    assert heat.rises["L1"] == pytest.approx(20.0 / (1.0 - gain), abs=0.1)


def test_losses_that_outrun_the_heat_are_told():
    calls = []

    def warmed(rises):
        calls.append(rises)
        return {"L1": 20.0 + 1.5 * rises["L1"]}, "warm"

    heat, _ = settle(({"L1": 20.0}, "cold"), warmed)
    assert not heat.settled
    assert len(calls) == ROUNDS
    lost, orbit = settle(({"L1": 20.0}, "cold"), lambda _: None)
    assert (lost, orbit) == (Heat({}, settled=False), "cold")


def test_a_rise_is_thermal_resistance_times_loss_and_no_more_than_parts_stand():
    given = study({"C1": capacitor(thermal_resistance=100.0, spread="c-lot")})
    assert rises_of(given.design, ("C1",), {"C1.loss": np.array([0.25])}) == {"C1": 25.0}
    assert rises_of(given.design, ("C1",), {"C1.loss": np.array([50.0])}) == {"C1": 300.0}


def test_only_parts_that_can_tell_are_warmed():
    given = study(
        {
            "C1": capacitor(thermal_resistance=100.0, spread="c-lot"),
            "C2": capacitor(spread="c-lot"),  # no thermal resistance
            "C3": capacitor(thermal_resistance=100.0, spread="c-5"),  # no temperature law
            "C4": capacitor(thermal_resistance=100.0),  # no table
        }
    )
    assert warmed_parts(given, TABLES) == ("C1",)


def test_a_warm_part_is_one_in_warmer_air():
    """Rise 12 K at 25 degC gives the value of 37 degC, for that part only, to the last bit."""
    given = everything()
    draws = draw(factors(given, TABLES), 5, 0, 20)
    cold = part_values(given, TABLES, "room", "full", draws)
    warm = part_values(given, TABLES, "room", "full", draws, {"R1": Rise(5.0), "C2": Rise(12.0)})
    room = given.conditions["room"].model_copy(update={"ambient": 37.0})
    elsewhere = given.model_copy(update={"conditions": {"room": room}})
    expected = part_values(elsewhere, TABLES, "room", "full", draws)
    for key, values in warm.items():
        same = expected if key.startswith("C2.") else cold
        np.testing.assert_array_equal(values, same[key], err_msg=key)
    assert np.all(warm["C2.capacitance"] < cold["C2.capacitance"])  # 0 to -60 ppm/K


def test_a_unit_takes_the_rise_of_its_own_values():
    """Loss as V^2 R: 1 % more volts and 10 % more ohms give 2 % + 10 %; 2 K of air by slope."""
    rise = Rise(20.0, {"vdd.voltage": (24.0, 2.0), "L1.resistance": (0.5, 1.0),
                       "ambient": (25.0, -0.01)})  # fmt: skip
    cold = {
        "ambient": np.array([25.0, 25.0, 27.0]),
        "vdd.voltage": np.array([24.0, 24.24, 24.0]),
        "L1.resistance": np.array([0.5, 0.55, 0.5]),
    }
    expected = 20.0 * np.exp([0.0, 0.02 + 0.1, -0.02])
    np.testing.assert_allclose(rise.of(cold), expected, rtol=1e-12)
    assert rise.of(cold)[0] == 20.0  # the nominal unit has its own rise to the last bit
    far = cold | {"L1.resistance": np.array([50.0, 5.0, 1.5])}
    assert np.all(rise.of(far) <= 20.0 * np.e)  # first order is not believed beyond
    assert np.all(Rise(290.0, rise.slopes).of(far) <= 300.0)


def test_slopes_are_those_of_the_losses():
    """Loss V^2 / R of one resistor: slopes 2 and -1, whatever else moves."""
    given = study({"R1": Resistor(kind="resistor", nets=("a", "gnd"), resistance=50.0)})
    base = {"vdd.voltage": np.array([10.0]), "R1.resistance": np.array([50.0]),
            "ambient": np.array([25.0]), "C1.esr": np.array([0.0])}  # fmt: skip
    keys, beside = moved_aside(base)
    assert keys == ("vdd.voltage", "R1.resistance", "ambient")  # what is zero stays away
    assert all(values.shape == (4,) for values in beside.values())
    loss = beside["vdd.voltage"] ** 2 / beside["R1.resistance"]
    found = slopes_of(given.design, ("R1",), keys, {"R1.dissipation": loss}, base)["R1"]
    assert found["vdd.voltage"] == (10.0, pytest.approx(2.0, rel=0.01))
    assert found["R1.resistance"] == (50.0, pytest.approx(-1.0, rel=0.01))
    assert "ambient" not in found
    loss[1] = np.nan  # no orbit there
    assert set(slopes_of(given.design, ("R1",), keys, {"R1.dissipation": loss}, base)["R1"]) == {
        "R1.resistance"
    }


def test_a_resistor_tells_its_own_temperature():
    """10 V across 100 ohm is 1 W; 50 K/W above 40 degC is 90 degC."""

    class TenVolts:
        def across(self, *_):
            return np.full((5, 2), 10.0)

    part = Resistor(kind="resistor", nets=("a", "b"), resistance=100.0, thermal_resistance=50.0)
    values = {"R1.resistance": np.full(2, 100.0), "ambient": np.full(2, 40.0)}
    figures = resistor("R1", part, TenVolts(), values)
    assert figures["dissipation"] == pytest.approx([1.0, 1.0])
    assert figures["body_temperature"] == pytest.approx([90.0, 90.0])


def test_notes_name_the_warmed_parts():
    given = study({"C1": capacitor(thermal_resistance=100.0, spread="c-lot"), "C2": capacitor()})
    (note,) = heating_notes(given, TABLES)
    assert "moves the values of C1." in note
    assert heating_notes(study({"C2": capacitor()}), TABLES) == []


def test_board_rise_reaches_every_part():
    given = everything()
    hot = given.conditions["hot"].model_copy(update={"ambient": 50.0, "board_rise": 10.0})
    warm_air = hot.model_copy(update={"ambient": 60.0, "board_rise": 0.0})
    one, other = (
        nominal_values(given.model_copy(update={"conditions": {"hot": condition}}), TABLES, "hot",
                       "full")
        for condition in (hot, warm_air)
    )  # fmt: skip
    assert {key: value[0] for key, value in one.items()} == {k: v[0] for k, v in other.items()}


SHIPPED = read_shelf(None, distributions_folder()).tables
KINDS = {name: table.kinds for name, table in SHIPPED.items()}
THERMAL = 'resistance = "3.6 ohm"\nthermal_resistance = "2 K/W"'


@pytest.fixture(scope="module")
def two_stages():
    """The quick stage without and with a thermal resistance of its coil."""
    found = {}
    for name, own in (("cool", 'resistance = "3.6 ohm"'), ("warm", THERMAL)):
        told = text(units=4).replace('resistance = "3.6 ohm"', own)
        given = read_study(told, KINDS)
        found[name] = given, prepare(given, SHIPPED)["room", "lit"]
    return found


def test_the_nominal_unit_is_in_balance(two_stages):
    _, case = two_stages["warm"]
    assert case.heat.settled
    rise = case.heat.rises["L"]
    assert rise > 20.0
    assert case.figures["L.loss"] * 2.0 == pytest.approx(rise, abs=0.05)
    # copper at high frequency: root of 1 + 0.00393 (T - 20), against 25 degC
    ratio = np.sqrt((1 + 0.00393 * (5 + rise)) / (1 + 0.00393 * 5))
    assert case.nominal.case.values["L.resistance"][0] == pytest.approx(3.6 * ratio, rel=1e-12)
    assert case.figures["L.body_temperature"] == pytest.approx(25.0 + rise, abs=0.05)


def test_starting_is_judged_cold_and_nothing_else_moves(two_stages):
    _, cool = two_stages["cool"]
    _, warm = two_stages["warm"]
    assert cool.heat == Heat()
    assert cool.start is cool.nominal
    assert warm.figures["start_margin"] == cool.figures["start_margin"]
    assert warm.figures["frequency"] != cool.figures["frequency"]


def test_every_unit_is_warm_and_the_gap_is_told(two_stages):
    given, case = two_stages["warm"]
    names = factors(given, SHIPPED)
    plan = Plan(given, SHIPPED, names, {("room", "lit"): case})
    chunk = evaluate(plan, 0, 4, 4)
    record = heat_check(plan, UnitRows.of(FrameColumns(chunk.rows)))
    assert [entry["part"] for entry in record] == ["L"]
    draws = draw(names, given.run.seed, 0, 4)
    own, rise = 2.0 * chunk.rows["L.loss"].to_numpy(), case.heat.rises["L"]
    taken = own_rises(given, SHIPPED, "room", "lit", draws, case.heat.of_units)["L"]
    assert record[0]["gap"] == pytest.approx(np.quantile(np.abs(own - taken), 0.95))
    assert record[0]["gap"] < 0.3 * np.quantile(np.abs(own - rise), 0.95)  # worth its slopes
    cold = part_values(given, SHIPPED, "room", "lit", draws)
    warm = part_values(given, SHIPPED, "room", "lit", draws, case.heat.of_units)
    assert np.all(warm["L.resistance"] > 1.02 * cold["L.resistance"])
    again = recheck(plan)["rechecked"]
    assert again["units"] == again["agreed"] == 4  # in time, with the same warm parts
    words = dict(_quality({"self_heating": record}))["Own temperature of parts"]
    assert words.startswith("L: ")
    assert "for 95 % of units" in words


def test_a_case_without_warm_orbit_is_told(two_stages):
    given, case = two_stages["cool"]
    lost = replace(case, heat=Heat({}, settled=False))
    plan = Plan(given, SHIPPED, factors(given, SHIPPED), {("room", "lit"): lost})
    rows = UnitRows.of(FrameColumns(evaluate(plan, 0, 2, 2).rows))
    (entry,) = heat_check(plan, rows)
    assert (entry["part"], entry["settled"]) == ("", False)
    words = dict(_quality({"self_heating": [entry]}))["Own temperature of parts"]
    assert (
        words == "room, lit: the nominal unit has no orbit with warm parts; they are taken as cold"
    )
