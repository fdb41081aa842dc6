"""Prototypes: what a probe does, measured parts, the door, and boards that fit or do not."""

from __future__ import annotations

from math import sqrt

import numpy as np
import pandas as pd
import pytest
import quick_study
import small_study
from references.relay import relay
from stages import PAIR_FREQUENCY, crossed_pair
from study_texts import GOOD, TABLES
from test_physics_push_pull import settle

from tolsim import modelcheck
from tolsim.answers.prototype_words import board_sentence, precise
from tolsim.answers.unit_files import FrameColumns
from tolsim.design import Run, State, Study
from tolsim.errors import RunError, StudyError
from tolsim.evaluation import Plan
from tolsim.modelcheck import model_check, shown_by, with_parts, with_probes
from tolsim.prototype import BenchReading, Probe, Prototype
from tolsim.run import run_study
from tolsim.spread.part_values import part_values
from tolsim.spread.sampling import draw, factors
from tolsim.study import open_study, read_study

READING = BenchReading(
    part="",
    figure="frequency",
    value=1e6,
    uncertainty=1e3,
    unit_of_measure="Hz",
    condition="room",
    state="normal",
)


def board(**keys: object) -> Prototype:
    return Prototype(readings=(READING,), **keys)


def test_a_probe_across_the_tank_lowers_the_frequency_as_more_capacitance_does():
    """f = f0 / sqrt(1 + Cp / C), at the loaded Q the larger capacitance makes."""
    q = 10.0
    design = crossed_pair(q)
    tank = design.parts["CT"].capacitance
    extra = 0.2
    study = Study(
        title="pair", design=design, states={"normal": State()}, conditions={}, limits=(), run=Run()
    )
    probe = Probe(net="a", to="b", capacitance=extra * tank, resistance=1e9)
    probed = with_probes(study, board(probes=(probe,))).design
    figures, _ = settle(q, probed)
    raised = sqrt(1.0 + extra)
    expected = PAIR_FREQUENCY / raised * relay(q * raised).frequency
    assert figures["frequency"] == pytest.approx(expected, rel=6e-4)
    assert set(design.parts) < set(probed.parts)  # the study itself is left as it was


def test_measured_parts_have_their_value_in_every_unit_and_the_rest_still_scatters():
    study, tables = small_study.everything(), small_study.tables()
    values = {"C2.capacitance": 1.07e-9, "Q1.threshold": 3.1, "LAMP.resistance": 7.0}
    fixed, own = with_parts(study, tables, values)
    draws = draw(factors(fixed, own), 3, 0, 50)
    plain = draw(factors(study, tables), 3, 0, 50)
    for state in ("dark", "full"):
        here = part_values(fixed, own, "room", state, draws)
        before = part_values(study, tables, "room", state, plain)
        assert here["Q1.threshold"] == pytest.approx(np.full(50, 3.1), rel=1e-12)
        assert here["LAMP.resistance"] == pytest.approx(np.full(50, 7.0), rel=1e-12)
        for address in ("C3.capacitance", "Q2.threshold", "Q1.gain", "P1.setting"):
            np.testing.assert_array_equal(here[address], before[address])
    # its slope and ageing are still those of its table
    again, own_again = with_parts(study, tables, {**values, "C2.capacitance": 1e-9})
    for condition in ("room", "hot"):
        here = part_values(fixed, own, condition, "full", draws)["C2.capacitance"]
        usual = part_values(again, own_again, condition, "full", draws)["C2.capacitance"]
        np.testing.assert_allclose(here / usual, 1.07, rtol=1e-12)
        assert here.std() > 0.0


BOARD = """
[prototype]
condition = "room"
state = "{state}"
probe = {{net = "a", capacitance = "12 pF", resistance = "10 Mohm"}}
parts = {{"C2.capacitance" = "77 pF"}}
readings = [
  {{figure = "frequency", value = "7.0 MHz", uncertainty = "5 kHz"}},
  {{figure = "Q1.drain_peak", value = "60 V", uncertainty = "2 %"}},
]
"""
CASE = """
[prototype.case]
condition = "room"
state = "{state}"
[[prototype.case.readings]]
figure = "Q1.case_temperature"
value = "60 degC"
uncertainty = "3 K"
junction_to_case = "1 K/W"
"""


def states_of(text: str) -> list[str]:
    return list(read_study(text, TABLES).states)


def test_a_board_arrives_in_si():
    state = states_of(GOOD)[0]
    found = read_study(GOOD + BOARD.format(state=state), TABLES).prototypes["prototype"]
    frequency, drain = found.readings
    assert (frequency.value, frequency.uncertainty) == (7e6, 5e3)
    assert drain.uncertainty == pytest.approx(1.2)  # 2 % of 60 V
    assert found.probes[0].capacitance == pytest.approx(12e-12)
    assert found.parts == {"C2.capacitance": pytest.approx(77e-12)}


def test_a_case_temperature_is_read_beside_a_junction():
    heated = GOOD.replace('kind = "mosfet"', 'kind = "mosfet"\nthermal_resistance = "5 K/W"', 1)
    text = heated + CASE.format(state=states_of(GOOD)[0])
    (case,) = read_study(text, TABLES).prototypes["case"].readings
    assert (case.column, case.value, case.uncertainty) == ("Q1.case_temperature", 60.0, 3.0)
    assert case.junction_to_case == pytest.approx(1.0)


def test_every_mistake_of_a_board_is_told_at_once():
    text = """
[prototype.first]
condition = "rom"
probe = {net = "z9", capacitance = "12 V"}
parts = {"C9.capacitance" = "1 nF"}
readings = [
  {figure = "frequenzy", value = "7 MHz", uncertainty = "5 kHz"},
  {figure = "Q1.drain_peek", value = "60 V", uncertainty = "1 V"},
  {figure = "Q1.drain_peak", value = "60 A", uncertainty = "-1 V"},
  {figure = "Q1.case_temperature", value = "60 degC", uncertainty = "3 K"},
  {figure = "Q1.gate_peak", uncertainty = "1 V"},
]
[prototype.second]
readings = []
colour = "blue"
"""
    with pytest.raises(StudyError) as caught:
        read_study(GOOD + text, TABLES, "stage.toml")
    told = str(caught.value)
    for words in (
        "[prototype.first] condition: expected a condition of this study",
        "Did you mean frequency?",
        "Did you mean Q1.drain_peak?",
        "[prototype.first.readings #3] value",
        "[prototype.first.readings #4] junction_to_case",
        "[prototype.first.readings #5] value",
        "[prototype.first.parts] C9.capacitance: expected a part or rail of this study",
        "[prototype.first.probe] capacitance",
        "[prototype.second] colour",
    ):
        assert words in told, (words, told)


@pytest.fixture(scope="module")
def checked(tmp_path_factory):
    """Summary of a run with a board of its own kind, the same board spoilt, and one probed."""
    folder = tmp_path_factory.mktemp("boards")
    path = folder / "quick.toml"
    path.write_text(quick_study.text(units=4, seed=99), encoding="utf-8")
    hidden = run_study(path, jobs=1, law_check=False).units.set_index("unit").loc[2]
    line = '{{figure = "{}", value = "{:.6g} {}", uncertainty = "{}"}}'
    read = {
        "frequency": line.format("frequency", hidden["frequency"], "Hz", "2 kHz"),
        "drain": line.format("QA.drain_peak", hidden["QA.drain_peak"], "V", "1 V"),
        "spoilt": line.format("frequency", 1.2 * hidden["frequency"], "Hz", "2 kHz"),
    }
    probe = 'probe = {net = "a", capacitance = "100 pF", resistance = "10 Mohm"}'
    boards = f"""
[prototype.own]
readings = [{read["frequency"]}, {read["drain"]}]
[prototype.spoilt]
readings = [{read["spoilt"]}, {read["drain"]}]
[prototype.probed]
readings = [{read["frequency"]}]
{probe}
parts = {{"L.inductance" = "2.2 uH"}}
"""
    path.write_text(quick_study.text(units=24) + boards, encoding="utf-8")
    results = run_study(open_study(path), jobs=1, law_check=False)
    assert results.prototype["board"].tolist() == ["own"] * 2 + ["spoilt"] * 2 + ["probed"]
    assert results.law_check.empty
    return results.summary


def test_a_board_of_the_model_passes_and_a_spoilt_one_fails(checked):
    own, spoilt, _ = checked["prototype"]["boards"]
    assert own["verdict"] == "pass"
    assert spoilt["verdict"] == "fail"
    assert spoilt["suspect"]["reading"] == "frequency"
    assert "Model check: FAIL" in checked["prototype"]["sentence"]
    for reading in own["readings"]:
        assert reading["bare_p50"] == reading["p50"]
        assert 0.0 < reading["percentile"] < 1.0


def test_a_probe_lowers_what_is_predicted_and_measured_parts_leave_less_scatter(checked):
    own, _, probed = checked["prototype"]["boards"]
    with_probe, without = probed["readings"][0], own["readings"][0]
    assert probed["solved_again"]
    assert with_probe["p50"] < with_probe["bare_p50"]
    assert with_probe["deviation"] < without["deviation"]
    assert probed["fixed"] == {"L.inductance": pytest.approx(2.2e-6)}
    assert not (probed["suspect"]["factor"] or "").startswith("L.inductance")


def test_a_case_is_cooler_than_its_junction_by_its_own_resistance():
    reading = READING.model_copy(
        update={"part": "Q1", "figure": "case_temperature", "junction_to_case": 1.5}
    )
    figures = {"Q1.junction_temperature": np.array([90.0]), "Q1.dissipation": np.array([8.0])}
    assert shown_by(reading, figures.__getitem__) == pytest.approx([78.0])


def test_too_few_units_or_a_probe_that_stops_the_stage_give_no_answer(monkeypatch):
    probe = Probe(net="a", resistance=1.0)
    study = small_study.everything()
    run = study.run.model_copy(update={"units": 19})
    study = study.model_copy(update={"prototypes": {"one": board(probes=(probe,))}, "run": run})
    plan = Plan(study, {}, (), {})
    few = model_check(plan, FrameColumns(pd.DataFrame()), FrameColumns(pd.DataFrame()), 1)
    assert few["boards"][0]["reason"] == "fewer than 20 units"

    def stopped(*_: object) -> None:
        raise RunError("no orbit")

    monkeypatch.setattr(modelcheck, "prepare", stopped)
    monkeypatch.setattr(modelcheck, "built", lambda _plan, draws: draws)
    run = study.run.model_copy(update={"units": 30})
    plan = Plan(study.model_copy(update={"run": run}), {}, (), {})
    rows = pd.DataFrame({"unit": np.arange(30), "condition": "room", "state": "normal"})
    dead = model_check(plan, FrameColumns(rows), FrameColumns(rows[["unit"]]), 1)
    assert dead["boards"][0]["verdict"] == "no answer"
    assert "does not run" in dead["sentence"]


def test_a_measured_part_is_no_longer_matched_with_its_mate():
    study = small_study.everything()
    parts = dict(study.design.parts)
    match = {"matched_with": "Q1", "match": {"threshold": "0.1"}}
    parts["Q2"] = parts["Q2"].model_copy(update=match)
    study = study.model_copy(update={"design": study.design.model_copy(update={"parts": parts})})
    fixed, own = with_parts(study, small_study.tables(), {"Q1.threshold": 3.2})
    values = part_values(fixed, own, "room", "full", draw(factors(fixed, own), 3, 0, 50))
    assert np.ptp(values["Q1.threshold"]) == 0.0
    assert values["Q2.threshold"].std() > 0.0


def test_a_reading_is_told_with_the_digits_its_meter_has():
    assert precise(2.017e6, 1e3, "Hz") == "2.017 MHz"
    assert precise(92.04, 2.3, "V") == "92 V"
    assert precise(0.86, 0.0, "A") == "860 mA"
    assert precise(36.04, 2.0, "degC") == "36 °C"


def test_luck_is_told_where_a_side_is_the_good_one():
    far = {"figure": "start_margin", "part": "", "title": "Start margin", "percentile": 0.96}
    entry = {"verdict": "pass", "name": "one", "joint_p": 0.2}
    words = {
        good: board_sentence({**entry, "readings": [{**far, "good_side": good}]}, single=True)
        for good in ("high", "low", None)
    }
    assert words["high"].endswith(
        "start margin is higher than in 96 % of the units: a lucky starter."
    )
    assert words["low"].endswith("an unlucky starter.")
    assert words[None].endswith("of the units.")


def test_no_board_means_an_unchecked_model():
    entry = {"verdict": "no answer", "reason": "only 3 units run in all its cases"}
    said = board_sentence({**entry, "name": "prototype", "readings": []}, single=True)
    assert said == "Model check: no answer for the prototype, only 3 units run in all its cases."
