"""Trims of whole units: closed forms at the bias point, an independent orbit, counted endings."""

from dataclasses import dataclass, replace

import numpy as np
import pytest
import quick_study
import small_study
from circuits import circuit_a
from references import circuit_a as reference
from references.orbit import transient
from scipy.optimize import brentq

from tolsim.answers.lines import summary_lines
from tolsim.answers.trim_words import trim_sentences
from tolsim.answers.trims import wanted_places
from tolsim.circuit.thermal import Case
from tolsim.design import Condition, Design, Lots, Rail, Run, State, Study, Trim
from tolsim.errors import RunError, StudyError
from tolsim.laws import LAWS
from tolsim.nominals import prepare
from tolsim.parts import Inductor, Mosfet, Potentiometer, Resistor
from tolsim.replay import replay_unit
from tolsim.run import run_study
from tolsim.spread.part_values import part_values
from tolsim.spread.sampling import draw, draw_chosen, factors, trim_error
from tolsim.study import open_study
from tolsim.trim.operator import TrimStatus
from tolsim.trim.session import do_trims, idle_voltages

TABLES = small_study.tables(b"""
[table.pot]
title = "Potentiometer whose track drifts"
for = "potentiometer"
basis = "guess"
source = "made for a test"
[table.pot.resistance]
tolerance = {law = "uniform", half_width = "20 %"}
temperature = {law = "linear", slope = {law = "uniform", low = "-500 ppm/K", high = "500 ppm/K"}}
[table.pot.setting]
deviation = "absolute"
tolerance = {law = "uniform", half_width = "10 %"}
[table.r]
title = "Resistor"
for = "resistor"
basis = "guess"
source = "made for a test"
[table.r.resistance]
tolerance = {law = "uniform", half_width = "10 %"}
temperature = {law = "linear", slope = "1000 ppm/K"}
""")


def trim(**changes: object):
    keys = {
        "part": "P1",
        "quantity": "setting",
        "unit_of_measure": "1",
        "range": (0.01, 0.99),
        "reading": "idle_voltage",
        "reading_unit": "V",
        "net": "w",
        "target": 3.0,
        "within": 0.01,
        "resolution": 0.0005,
        "coarse_step": 0.1,
        "condition": "room",
        "state": "normal",
    }
    return Trim(**{**keys, **changes})


def divider(**changes: object):
    """A potentiometer across 5 V, its wiper loaded by 10 kohm and a gate that takes no current."""
    parts = {
        "P1": Potentiometer(
            kind="potentiometer",
            nets=("gnd", "w", "v5"),
            resistance=5e3,
            setting=0.5,
            spread="pot",
        ),
        "R1": Resistor(kind="resistor", nets=("w", "gnd"), resistance=10e3, spread="r"),
        "L1": Inductor(kind="inductor", nets=("v5", "d"), inductance=1e-5, resistance=1.0),
        "Q1": Mosfet(
            kind="mosfet", drain="d", gate="w", model={"threshold": 4.0, "gain": 0.01, "cgs": 1e-9}
        ),
    }
    return Study(
        title="divider",
        design=Design(parts=parts, rails={"v5": Rail(net="v5", voltage=5.0)}, leak=1e-14),
        states={"normal": State(starts_here=True)},
        conditions={"room": Condition(), "hot": Condition(ambient=85.0)},
        limits=(),
        run=Run(),
        trims={"bias": trim(**changes)},
    )


@dataclass
class Bench:
    """Drawn units of a study that is read at the bias point only."""

    study: Study
    draws: object

    def values(self, case, moved, *, runs):
        assert not runs
        return part_values(self.study, TABLES, *case, replace(self.draws, moved=moved))

    def error(self, name, error):
        return trim_error(self.study, self.draws, name, error)

    def orbits(self, name, case):
        raise AssertionError(name, case)

    def bias_guess(self, _):
        return None

    def usual_slope(self, _):
        return np.nan


def session(study, numbers=range(40)):
    draws = draw_chosen(factors(study, TABLES), 3, np.array(numbers))
    return do_trims(study, Bench(study, draws)), draws


def wiper(setting, track, load):
    """Closed form: two resistances and a load."""
    low = 1.0 / (1.0 / (setting * track) + 1.0 / load)
    return 5.0 * low / (low + (1.0 - setting) * track)


def test_a_loaded_divider_ends_where_the_closed_form_says():
    study = divider()
    done, draws = session(study)
    log = done.logs["bias"]
    values = part_values(study, TABLES, "room", "normal", draws)
    track, load = values["P1.resistance"], values["R1.resistance"]
    assert (log.status == TrimStatus.SET).all()
    np.testing.assert_allclose(log.reading, wiper(log.position, track, load), rtol=1e-6)
    np.testing.assert_allclose(log.before, wiper(values["P1.setting"], track, load), rtol=1e-6)
    assert np.abs(log.reading - 3.0).max() <= 0.01
    for unit in range(40):
        one = track[unit], load[unit]
        ideal = brentq(lambda s, one=one: wiper(s, *one) - 3.0, 0.01, 0.99)
        assert abs(log.position[unit] - ideal) < 0.01 / 3.0


def test_the_part_stays_where_it_was_left_and_drifts_from_there():
    study = divider()
    done, draws = session(study)
    trimmed = replace(draws, moved=done.moved)
    for condition in ("room", "hot"):
        before = part_values(study, TABLES, condition, "normal", draws)
        after = part_values(study, TABLES, condition, "normal", trimmed)
        np.testing.assert_allclose(after["P1.setting"], done.logs["bias"].position, rtol=1e-14)
        for key in before:
            if key != "P1.setting":
                np.testing.assert_array_equal(before[key], after[key])


def test_a_selected_resistor_keeps_its_temperature_law():
    changes = {"part": "R1", "quantity": "resistance", "unit_of_measure": "ohm", "target": 1.5}
    study = divider(range=(1e3, 60e3), resolution=10.0, coarse_step=3e3, **changes)
    done, draws = session(study)
    log = done.logs["bias"]
    assert (log.status == TrimStatus.SET).all()
    hot = part_values(study, TABLES, "hot", "normal", replace(draws, moved=done.moved))
    np.testing.assert_allclose(hot["R1.resistance"], log.position * 1.06, rtol=1e-12)


def test_errors_of_the_meter_pass_through_exactly():
    gain = {"law": "uniform", "half_width": "3 %"}
    offset = {"law": "uniform", "half_width": "20 mV"}
    study = divider(
        meter={"gain": gain, "offset": offset, "noise": offset}, within=1e-4, resolution=1e-6
    )
    done, draws = session(study)
    column = draws.column
    errors = [f"trim bias: meter {error}" for error in ("gain", "offset", "noise")]
    g, b, n = (draws.values[:, column[name]] for name in errors)
    assert np.std(g) > 0.01
    np.testing.assert_allclose(done.logs["bias"].reading, (3.0 - b - n) / (1.0 + g), atol=1.2e-4)


def test_the_hand_moves_the_part_by_its_setting_error():
    error = {"law": "uniform", "half_width": "0.4 %"}
    still, _ = session(divider())
    moved, draws = session(divider(setting_error=error))
    hand = draws.values[:, draws.column["trim bias: setting error"]]
    gap = moved.logs["bias"].position - still.logs["bias"].position
    np.testing.assert_allclose(gap, hand, atol=1e-12)


@pytest.mark.parametrize("start", [0.01, None])
def test_units_do_not_depend_on_their_neighbours(start):
    study = divider(start=start)
    together, _ = session(study, range(12))
    for number in (0, 7, 11):
        alone, _ = session(study, [number])
        one, many = alone.logs["bias"], together.logs["bias"]
        for name in ("status", "position", "turns"):
            assert getattr(one, name)[0] == getattr(many, name)[number]
        np.testing.assert_allclose(one.reading[0], many.reading[number], rtol=1e-12)


def test_a_tighter_tolerance_never_leaves_a_larger_error_than_it_allows():
    for within in (0.1, 0.03, 0.01, 0.003):
        done, _ = session(divider(within=within, resolution=1e-5))
        assert np.abs(done.logs["bias"].reading - 3.0).max() <= within


def test_strain_is_the_largest_on_the_way():
    """From the low end upwards idle loss only rises; from the high end it was larger before."""
    keys = {"reading": "Q1.idle_dissipation", "net": None, "reading_unit": "W", "target": 1e-3}
    ends = []
    for start in (0.01, 0.99):
        done, _ = session(divider(start=start, within=1e-5, **keys), range(8))
        log = done.logs["bias"]
        assert (log.status == TrimStatus.SET).all()
        np.testing.assert_allclose(log.reading, 1e-3, atol=1e-5)
        ends.append(log.strains["Q1.trim_idle_dissipation"])
    assert (ends[1] > 2.0 * ends[0]).all()


def test_trims_follow_their_order_and_build_on_each_other():
    """The second trim starts where the first left the unit, and moves the reading of the first."""
    study = divider()
    load = {"part": "R1", "quantity": "resistance", "unit_of_measure": "ohm", "target": 2.8}
    second = trim(range=(1e3, 60e3), resolution=10.0, coarse_step=3e3, **load)
    study = study.model_copy(update={"trims": {"bias": study.trims["bias"], "load": second}})
    done, draws = session(study)
    assert list(done.logs) == ["bias", "load"]
    np.testing.assert_allclose(done.logs["load"].before, done.logs["bias"].reading, rtol=1e-9)
    after = part_values(study, TABLES, "room", "normal", replace(draws, moved=done.moved))
    tuned = wiper(after["P1.setting"], after["P1.resistance"], after["R1.resistance"])
    assert np.abs(tuned - 2.8).max() <= 0.01 * (1.0 + 1e-6)


def test_order_in_the_file_is_that_of_its_numbers(tmp_path):
    later = TRIM.format(highest=4.6) + "order = 2\n"
    sooner = (
        later.replace("bias", "rail").replace('"vb"', '"vdd"').replace("order = 2", "order = 1")
    )
    sooner = sooner.replace('["3.7 V", "4.6 V"]', '["20 V", "28 V"]')
    (tmp_path / "study.toml").write_text(quick_study.text() + later + sooner)
    assert list(open_study(tmp_path / "study.toml").study.trims) == ["rail", "bias"]


def test_one_meter_serves_a_lot():
    gain = {"law": "uniform", "half_width": "3 %"}
    study = divider(meter={"gain": gain, "noise": {"law": "uniform", "half_width": "1 mV"}})
    study = study.model_copy(update={"lots": Lots(units_per_lot=5)})
    drawn = draw(factors(study, TABLES), 1, 0, 10)
    gains = drawn.values[:, drawn.column["trim bias: meter gain"]]
    assert len(set(gains)) == 2
    assert len(set(drawn.values[:, drawn.column["trim bias: meter noise"]])) == 10


def test_the_idle_voltage_is_told_in_every_case():
    """It drifts with the track and the load: closed form in the hot case too."""
    study = divider()
    done, draws = session(study)
    values = part_values(study, TABLES, "hot", "normal", replace(draws, moved=done.moved))
    found = idle_voltages(study, Case(study.design, values, heated=False), np.zeros(3))
    track, load = values["P1.resistance"], values["R1.resistance"]
    formula = wiper(values["P1.setting"], track, load)
    np.testing.assert_allclose(found["bias.trim_voltage"], formula, rtol=1e-6)


def test_frequency_of_circuit_a_after_its_coil_was_squeezed():
    """The trimmed coil, put into the equations written by hand, gives the target."""
    state = {"part": "L", "quantity": "inductance", "unit_of_measure": "H", "net": None}
    study = Study(
        title="circuit A",
        design=circuit_a(),
        states={"normal": State(starts_here=True)},
        conditions={"room": Condition()},
        limits=(),
        run=Run(steps_per_cycle=160),
        trims={
            "coil": trim(
                range=(1.8e-6, 2.6e-6),
                resolution=2e-9,
                coarse_step=80e-9,
                reading="frequency",
                reading_unit="Hz",
                target=6.7e6,
                within=3e3,
                **state,
            )
        },
    )
    case = prepare(study, {})["room", "normal"]
    coil = float(case.nominal.case.values["L.inductance"][0])
    assert coil < 2.2e-6
    assert case.figures["frequency"] == pytest.approx(6.7e6, abs=3e3)
    assert case.figures["QA.trim_drain_peak"] >= case.figures["QA.drain_peak"]
    values = reference.Values(coil=coil)
    slope, ringing = reference.slope_of(values), 2.0 * np.pi / reference.start_mode(values).imag
    _, period = transient(slope, reference.kicked(values), 40 * ringing, reference.PIN)
    # before it was trimmed the stage ran 1.4 % lower
    assert 1.0 / period == pytest.approx(6.7e6, rel=1e-3)


TRIM = """
[trim.bias]
part = "vb"
range = ["3.7 V", "{highest} V"]
resolution = "5 mV"
reading = "idle_current"
target = "3 A"
within = "3 %"
from = "low end"
meter = {{gain = {{law = "uniform", half_width = "1 %"}}}}
"""

STRAIN = """
[[limits]]
figure = "trim_idle_dissipation"
parts = ["QA"]
at_most = "36 W"
rule = "the bench has no fan"
"""


COIL = """
[trim.coil]
part = "L"
range = ["1.9 uH", "2.5 uH"]
resolution = "1 nH"
reading = "frequency"
target = "6.7 MHz"
within = "0.1 %"
"""


@pytest.fixture(scope="module")
def trimmed_run(tmp_path_factory):
    """Six push-pull stages; the range ends below what the weakest of them need."""
    folder = tmp_path_factory.mktemp("trim")
    coarse = quick_study.text(units=6).replace("cycle = 128", "cycle = 64")
    (folder / "study.toml").write_text(coarse + STRAIN + TRIM.format(highest=4.1))
    return run_study(folder / "study.toml", jobs=1, out=folder / "out")


def test_units_are_set_or_counted_as_exhausted(trimmed_run):
    rows = trimmed_run.units
    set_, out = (rows["bias.trim_status"] == code for code in (0, 2))
    assert (set_ | out).all()
    assert set_.any()
    assert out.any()
    assert (rows["outcome"][out] == "trim range exhausted").all()
    assert (rows["verdict"][out] == "fail").all()
    assert set(rows["bias.trim_position"][out]) <= {0.0, 1.0}
    np.testing.assert_allclose(rows["idle_current"], 3.0 * (1.0 + rows["bias.trim_error"]))
    assert rows["bias.trim_error"][set_].abs().max() < 0.041
    assert rows["bias.trim_before"].abs().max() > 0.3
    counted = trimmed_run.outcomes.set_index("outcome")["units"]
    assert counted["trim range exhausted"] == out.sum()


def test_the_summary_counts_and_measures_what_the_rows_hold(trimmed_run):
    rows = trimmed_run.units
    (entry,) = trimmed_run.summary["trim"]
    set_ = rows["bias.trim_status"] == 0
    assert entry["endings"] == {
        "set": set_.sum(),
        "too_coarse": 0,
        "exhausted": (~set_).sum(),
        "no_reading": 0,
        "unsettled": 0,
    }
    assert entry["first_not_set"] == rows["unit"][~set_].tolist()
    assert sum(entry["position_counts"]) == 6
    assert entry["at_low_end"] == (rows["bias.trim_position"][~set_] < 0.5).sum()
    volts = 3.7 + 0.4 * rows["bias.trim_position"]
    low, high = entry["needed_range"]
    assert low < volts.median() < high
    assert high > 4.1  # the range ends there
    assert entry["error"]["p50"] == pytest.approx(rows["bias.trim_error"][set_].median())
    assert entry["before"]["width"] > 5.0 * entry["error"]["width"]
    (drift,) = entry["drift"]
    assert drift["p50"] == pytest.approx((rows["idle_current"] / 3.0 - 1.0).median())
    steep = 3.0 * rows["bias.trim_slope"].abs().quantile(0.99) / 0.4
    assert entry["needed_resolution"] == pytest.approx(2.0 * 0.09 / steep)
    assert {strain["part"] for strain in entry["strains"]} == {"QA", "QB"}
    (row,) = trimmed_run.trims.to_dict("records")
    assert (row["trim"], row["set"], row["exhausted"]) == ("bias", set_.sum(), (~set_).sum())
    assert row["error_p50"] == entry["error"]["p50"]


def test_a_range_that_ended_too_soon_is_extrapolated():
    """Closed form: readings that are straight lines of the position reach the target there."""
    target, volts = 3.0, np.array([2.5, 4.0, 40.0, 5.0])
    position = np.array([1.0, 0.75, 0.1, 0.6])
    error, slope = volts * position / target - 1.0, volts / target
    was_set = np.array([False, True, False, False])
    exhausted = np.array([True, False, True, False])
    wanted = wanted_places(position, error, slope, was_set, exhausted)
    np.testing.assert_allclose(wanted, [1.2, 0.75, 0.075, np.nan])


def test_a_limit_on_the_way_is_judged(trimmed_run):
    """A unit that was strained too hard while trimmed fails, whatever it does afterwards."""
    rows = trimmed_run.units
    beyond = rows["QA.trim_idle_dissipation"] > 36.0
    (limit,) = (e for e in trimmed_run.summary["limits"] if e["figure"] == "trim_idle_dissipation")
    assert limit["units"] == beyond.sum() > 0
    assert (rows["verdict"][beyond] == "fail").all()
    way = rows["QA.trim_idle_dissipation"]
    assert (way >= rows["QA.idle_dissipation"] * (1.0 - 1e-9)).all()


def test_a_coil_is_trimmed_as_warm_as_it_runs(tmp_path):
    """What the operator read is what the bench case shows, self-heating included."""
    text = quick_study.text(units=1).replace("cycle = 128", "cycle = 64")
    text = text.replace('"3.6 ohm"\n', '"3.6 ohm"\nthermal_resistance = "4 K/W"\n')
    (tmp_path / "study.toml").write_text(text + COIL)
    found = run_study(tmp_path / "study.toml", jobs=1)
    assert found.quality["self_heating"][0]["rise"] > 100.0
    (row,) = found.units.to_dict("records")
    assert row["frequency"] == pytest.approx(6.7e6 * (1.0 + row["coil.trim_error"]), rel=1e-9)
    assert abs(row["coil.trim_error"]) <= 1e-3


def test_the_words_name_the_ones_that_were_not_set(trimmed_run):
    text = " ".join(trim_sentences(trimmed_run.summary))
    out = trimmed_run.units["bias.trim_status"] == 2
    assert f"{6 - out.sum()} of 6 units set within 90 mA" in text
    assert f"Not set: {out.sum()} at an end of the range" in text
    assert "99 % of units, idle current against target: untrimmed" in text
    lines = summary_lines(trimmed_run.summary)
    assert "Trimmed at the bench" in lines
    assert max(map(len, lines)) <= 80
    assert list(trim_sentences({"trim": []})) == []


def test_the_report_shows_the_trim_and_its_laws(trimmed_run):
    page = (trimmed_run.folder / "report.html").read_text(encoding="utf-8")
    assert "What trimming does" in page
    assert "vb voltage after trim, whole range (V)" in page
    assert "Off the target (%)" in page
    assert "trim bias meter gain" in page


def test_fewer_units_are_the_same_units(trimmed_run, tmp_path):
    (tmp_path / "study.toml").write_text(trimmed_run.study_text)
    fewer = run_study(tmp_path / "study.toml", units=2, jobs=1).units
    same = trimmed_run.units.head(2).reset_index(drop=True)
    assert fewer.equals(same)


def test_a_trimmed_unit_is_replayed_as_trimmed(trimmed_run):
    replay = replay_unit(trimmed_run.folder, 0)
    stored = trimmed_run.units.iloc[0]
    assert any("trim bias" in sentence.lower() for sentence in replay.story)
    way = next(sentence for sentence in replay.story if "on the way: 3.7 V" in sentence)
    assert way.count(" A") + way.count(" mA") == stored["bias.trim_turns"] + 1
    wave = next(iter(replay.signals.values()))[0]
    assert wave.units.max() == pytest.approx(stored["QA.drain_peak"], rel=0.01)


def test_a_unit_without_spread_ends_where_the_nominal_one_does(tmp_path):
    plain = [line for line in quick_study.text(units=1).splitlines() if "spread" not in line]
    text = "\n".join(plain) + TRIM.format(highest=4.6).replace("1 %", "0 %")
    text = text.replace('{law = "uniform", half_width = "0 %"}', "0")
    (tmp_path / "study.toml").write_text(text)
    found = run_study(tmp_path / "study.toml", jobs=1)
    entries = {entry["figure"]: entry for entry in found.summary["figures"]}
    for figure in ("trim_position", "trim_turns", "trim_error", "idle_current"):
        assert entries[figure]["nominal"] == pytest.approx(entries[figure]["p50"], rel=1e-9), figure


def test_a_target_out_of_reach_of_the_nominal_unit_is_told():
    with pytest.raises(RunError, match=r"trim bias: idle_voltage of 4.99 V is not reached"):
        prepare(divider(target=4.99, range=(0.01, 0.9)), TABLES)


WRONG = """
[trim.QA]
part = "vb"
range = ["4.8 V", "3.7 V"]
resolution = "5 mohm"
reading = "idle_curent"
target = "3 A"
within = "3 %"
from = "bottom"
meter = {gain = {law = "unifrom"}, ofset = 1}

[trim.second]
part = "C9"
reading = "start_margin"
target = "3 dB"
condition = "roof"
"""


def test_every_mistake_is_told_with_its_cure(tmp_path):
    path = tmp_path / "study.toml"
    path.write_text(quick_study.text() + WRONG)
    with pytest.raises(StudyError) as caught:
        open_study(path)
    told = [problem.sentence().removeprefix("study.toml ") for problem in caught.value.problems]
    assert " ".join(told) == " ".join(TOLD.replace("LAWS", ", ".join(LAWS)).split())


TOLD = """
[trim.QA]: expected a name of its own, got the name "QA" of a part or rail.
[trim.QA] reading: expected a figure that a meter shows, got "idle_curent". Did you mean
  idle_current?
[trim.QA] range: expected two values above 0, the lower end first, got ["4.8 V", "3.7 V"].
[trim.QA] resolution: expected a number with a unit of measure like V, got "5 mohm". 'mohm'
  measures something else.
[trim.QA] from: expected "low end", "high end" or a place within the range, got "bottom".
[trim.QA] meter.gain.law: expected one of LAWS, got "unifrom". Did you mean uniform?
[trim.QA] meter.ofset: expected an error of a meter, got "ofset". Did you mean offset?
[trim.second] within: expected a value, got nothing. A trim needs part, reading, target,
  within, resolution.
[trim.second] resolution: expected a value, got nothing. A trim needs part, reading, target,
  within, resolution.
[trim.second] part: expected a part or rail that can be turned, got "C9". Known here: L, LA,
  CA, CSA, CFA, CGA, RBA, LB, CB, CSB, CFB, CGB, RBB, vdd, vb.
[trim.second] reading: expected a figure that a meter shows, got "start_margin". Known here:
  frequency, supply_current, input_power, output_power, efficiency, idle_current,
  idle_dissipation, idle_voltage.
[trim.second] condition: expected the condition in which it is done: room, got "roof".
"""


def test_draws_of_a_trim_are_factors(trimmed_run):
    assert "trim bias: meter gain" in trimmed_run.factors.columns
    study = divider(setting_error={"law": "uniform", "half_width": "1 %"})
    names = [factor.name for factor in factors(study, TABLES)]
    assert names[-1] == "trim bias: setting error"
    assert draw(factors(study, TABLES), 1, 0, 4).values[:, -1].std() > 0.0
