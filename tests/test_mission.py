"""Missions: hours over cases, checked by hand-made units; Arrhenius against its table."""

import fake_run
import numpy as np
import pandas as pd
import pytest
from study_texts import GOOD, TABLES

from tolsim.answers.counting import Counting
from tolsim.answers.lines import summary_lines
from tolsim.answers.mission import arrhenius, mission_entry
from tolsim.answers.mission_words import NO_BREAK, energy_words, hours_words, mission_sentences
from tolsim.answers.results import Results
from tolsim.answers.summary import summarise
from tolsim.answers.unit_files import FrameColumns, UnitRows
from tolsim.answers.wording import DASH
from tolsim.errors import StudyError
from tolsim.mission import Mission
from tolsim.report import render, report_input
from tolsim.study import read_study


# AF = exp[(E / k) (1 / T_use - 1 / T_stress)], k = 8.617333e-5 eV/K (JESD91; JEP122).
@pytest.mark.parametrize(
    ("energy", "use", "stress", "factor"),
    [
        (0.5, 25, 125, 132.66),
        (0.7, 55, 125, 77.645),
        (0.7, 40, 125, 254.14),
        (0.3, 55, 125, 6.4573),
        (1.1, 85, 125, 35.899),
    ],
)
def test_arrhenius_factors(energy, use, stress, factor):
    assert float(arrhenius(np.float64(stress), energy, use)) == pytest.approx(factor, rel=1e-4)
    assert float(arrhenius(np.float64(use), energy, use)) == 1.0


def mission(**keys: object):
    own = {"years": 5, "conditions": {"room": 1500.0, "cold": 500.0},
           "states": {"dark": 0.1, "full": 0.9}}  # fmt: skip
    return Mission(**(own | keys))


def test_hours_of_a_case():
    """5 years x 1500 h x 90 %."""
    assert mission().hours("room", "full") == pytest.approx(6750.0)
    assert mission().hours("room", "glow") == 0.0
    assert mission().hours("hot", "full") == 0.0
    cases = [(c, s) for c in ("room", "cold") for s in ("dark", "glow", "full")]
    assert sum(mission().hours(*case) for case in cases) == pytest.approx(10_000.0)
    assert mission(states={}).hours("room", "any") == 7500.0


def three_units():
    """Room and cold, dark and full; unit 1 breaks a limit in the cold and dark, unit 2 stops."""
    rows = []
    for unit in range(3):
        for condition in ("room", "cold"):
            for state in ("dark", "glow", "full"):
                cold, full = condition == "cold", state == "full"
                rows.append({
                    "unit": unit, "condition": condition, "state": state,
                    "verdict": "pass", "outcome": "runs", "failed_limits": "",
                    "status": "settled", "way": "predicted",
                    "input_power": 10.0 + 40.0 * full + unit,
                    "output_power": 35.0 * full,
                    "Q1.junction_temperature": 80.0 + unit - 50.0 * cold + 20.0 * full,
                    "C5.body_temperature": 60.0 - 45.0 * cold,
                })  # fmt: skip
    table = pd.DataFrame(rows)
    broken = (table["unit"] == 1) & (table["condition"] == "cold") & (table["state"] == "dark")
    table.loc[broken, ["verdict", "failed_limits"]] = ["fail", "1"]
    glow = (table["unit"] == 0) & (table["state"] == "glow")  # takes no hours: must not count
    table.loc[glow, ["verdict", "failed_limits"]] = ["fail", "0"]
    stopped = (table["unit"] == 2) & (table["condition"] == "cold") & (table["state"] == "full")
    figures = ["input_power", "output_power", "Q1.junction_temperature", "C5.body_temperature"]
    table.loc[stopped, "verdict"] = "undecided"
    table.loc[stopped, figures] = np.nan
    return table


def entry_of(table, **keys: object):
    study = fake_run.study().model_copy(update={"mission": mission(**keys)})
    rows = UnitRows.of(FrameColumns(table))
    nominal = {case: {"input_power": 50.0 if case[1] == "full" else 10.0} for case in rows.cases}
    return mission_entry(study, rows, Counting(0.95), nominal)


def test_units_by_hand():
    """Hours: room dark 750, room full 6750, cold dark 250, cold full 2250, of 10 000."""
    entry = entry_of(three_units())
    assert entry["hours"] == 10_000.0
    assert {(c["condition"], c["state"]): c["hours"] for c in entry["cases"]} == {
        ("room", "dark"): 750.0, ("room", "full"): 6750.0,
        ("cold", "dark"): 250.0, ("cold", "full"): 2250.0,
    }  # fmt: skip
    power = {one["figure"]: one for one in entry["power"]}
    assert power["mean_input_power"]["missing"] == 1  # unit 2
    assert power["mean_input_power"]["units"] == 2
    assert power["mean_input_power"]["nominal"] == pytest.approx(0.1 * 10 + 0.9 * 50)
    assert power["mean_input_power"]["p50"] == pytest.approx(46.5)  # of 46 and 47
    assert power["energy_per_year"]["p50"] == pytest.approx(46.5 * 2000 * 3600)
    assert power["mean_output_power"]["p50"] == pytest.approx(0.9 * 35)
    order = entry["in_order"]
    assert (order["units"], order["of"]) == (1, 3)  # glow takes no hours
    assert order["of_life"]["least"] == pytest.approx(0.775)  # unit 2: without cold full
    assert order["of_life"]["mean"] == pytest.approx((1 + 0.975 + 0.775) / 3)
    assert order["undecided"] == pytest.approx(0.225 / 3)
    limits = {one["limit"]: one for one in entry["limits"]}
    assert (limits[1]["units"], limits[1]["first_units"]) == (1, [1])
    assert limits[1]["of_life"] == {
        "mean": pytest.approx(0.025 / 3), "most": pytest.approx(0.025)}  # fmt: skip
    assert limits[0]["units"] == 0


def test_hours_of_heat_by_hand():
    entry = entry_of(three_units(), activation_energy=0.7, reference=55.0)
    q1, c5 = entry["temperatures"]
    assert (q1["part"], q1["missing"], c5["part"]) == ("Q1", 1, "C5")
    means = [(750 * 80 + 6750 * 100 + 250 * 30 + 2250 * 50) / 1e4 + unit for unit in (0, 1)]
    assert q1["mean"]["p50"] == pytest.approx(np.mean(means))
    assert q1["highest"]["p50"] == pytest.approx(100.5)
    k = 8.617333262e-5
    hours = sum(
        h * np.exp(0.7 / k * (1 / 328.15 - 1 / (273.15 + t)))
        for h, t in ((7500, 60.0), (2500, 15.0))
    )
    assert c5["equivalent_hours"]["p50"] == pytest.approx(hours, rel=1e-12)
    assert entry_of(three_units())["temperatures"][0]["equivalent_hours"] is None


def test_a_study_without_mission_says_nothing():
    rows = UnitRows.of(FrameColumns(three_units()))
    assert mission_entry(fake_run.study(), rows, Counting(0.95), {}) == {}
    assert list(mission_sentences({"mission": {}})) == []
    assert fake_run.results().summary["mission"] == {}


def test_units_that_never_run_are_no_average():
    table = three_units()
    table["input_power"] = np.nan
    power = entry_of(table)["power"]
    assert (power[0]["units"], power[0]["missing"], power[0]["p50"]) == (0, 3, None)
    assert all(
        "input power" not in line for line in mission_sentences({"mission": entry_of(table)})
    )


def run_with_mission():
    checked = fake_run.study().model_copy(
        update={"mission": mission(activation_energy=0.7, reference=55.0)}
    )
    table = fake_run.factors()
    found = fake_run.rows(table, checked)
    summary = summarise(
        checked, FrameColumns(found), FrameColumns(table), fake_run.nominal(checked),
        fake_run.QUALITY, fake_run.PROVENANCE,
    )  # fmt: skip
    return Results.in_memory(summary, "", found, table), checked


def test_terminal_and_report_tell_the_mission():
    results, checked = run_with_mission()
    lines = summary_lines(results.summary)
    assert all(len(line) <= 80 for line in lines)
    head = lines.index("Over the mission, with 95 % intervals")
    told = " ".join(line.strip() for line in lines[head + 1 : head + 12]).replace(NO_BREAK, " ")
    assert "5 years, 10 000 h of running: room / full 68 %" in told
    assert "kWh" in told
    assert "ages most, in hours at 55 °C that do the same: Q" in told
    page = render(report_input(results, checked))
    assert "Over the mission" in page
    assert "Hours that age as much at 55 °C" in page
    assert "Over the mission" not in render(fake_run.report())


def test_numbers_in_words():
    assert hours_words(32_149.0) == "32 100 h".replace(" ", NO_BREAK)
    assert hours_words(12.34) == f"12.3{NO_BREAK}h"
    assert energy_words(7.2e6) == f"2{NO_BREAK}kWh"
    assert energy_words(None) == DASH


MISSION = """
[mission]
years = 10
conditions = {room = "3000 h", hot = "500 h"}
states = {dark = "2 %", full = "98 %"}
activation_energy = "0.7 eV"
reference = "55 degC"
"""


def test_a_mission_is_read():
    found = read_study(GOOD + MISSION, TABLES).mission
    assert found.hours_a_year == 3500.0
    assert found.hours("hot", "full") == pytest.approx(4900.0)
    assert (found.activation_energy, found.reference) == (pytest.approx(0.7), 55.0)


@pytest.mark.parametrize(
    ("old", "new", "told"),
    [
        ("room =", "rom =", 'one of the conditions of this study, got "rom". Did you mean room?'),
        ("full =", "ful =", "one of the states of this study"),
        ('"98 %"', '"97 %"', "shares that add up to 100 %, got 99 %"),
        ('"3000 h"', '"9000 h"', "at most 8766 h, a year, got 9500 h"),
        ('reference = "55 degC"', "", "reference beside activation_energy"),
        ('states = {dark = "2 %", full = "98 %"}', "", "the share of the hours that each state"),
        ('"0.7 eV"', '"0.7 V"', "an activation energy of 0.05 eV to 5 eV"),
        ("years = 10", "years = 0.1", "no more than the 0.1 years of the mission (877 h)"),
    ],
)
def test_mistakes_in_a_mission(old, new, told):
    with pytest.raises(StudyError) as caught:
        read_study(GOOD + MISSION.replace(old, new), TABLES, "s.toml")
    sentences = [problem.sentence() for problem in caught.value.problems]
    assert len(sentences) == 1
    assert told in sentences[0]
