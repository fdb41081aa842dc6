"""Tables with measured laws: read beside their files, told in words, kept with a run."""

import json
import math
from pathlib import Path

import numpy as np
import pytest
from quick_study import text as quick_text
from scipy import stats

from tolsim.answers.reel_words import reel_sentences
from tolsim.errors import RequestError, StudyError
from tolsim.report.reel_section import reel_section
from tolsim.run import run_study
from tolsim.spread.alternatives import METERS, with_alternative
from tolsim.spread.part_values import part_values
from tolsim.spread.reading import read_shelf
from tolsim.spread.reel_record import reel_records
from tolsim.spread.sampling import draw, factors
from tolsim.spread.words import assumptions, describe
from tolsim.study import open_study
from tolsim.study.outline import every_text

HEAD = '[table.reel]\ntitle = "T"\nfor = "capacitor"\nbasis = "measured"\nsource = "our meter"\n'
PIECES = (99.1, 100.4, 98.7, 99.9, 100.8, 99.5, 98.2, 100.1, 99.0, 99.7, 101.0, 99.3)


def write(folder, law, readings=PIECES, more=""):
    lines = [f"{value:.1f}".replace(".", ",") for value in readings]
    (folder / "reel.csv").write_text("C [nF]\n" + "\n".join(lines) + "\n")
    text = f"{HEAD}{more}[table.reel.capacitance]\ntolerance = {law}\n"
    (folder / "tables.toml").write_text(text)
    return read_shelf(None, folder)


LAW = '{law = "measured", file = "reel.csv", nominal = "100 nF"}'


def test_readings_become_deviations_from_the_mark(tmp_path):
    table = write(tmp_path, LAW).tables["reel"]
    law = table.quantities["capacitance"].tolerance
    x = np.array(PIECES) / 100.0 - 1.0
    known = stats.t(11, x.mean(), x.std(ddof=1) * math.sqrt(1.0 + 1.0 / 12))
    assert float(law.ppf(0.5)) == pytest.approx(x.mean(), abs=1e-12)
    assert law.support[1] == pytest.approx(known.ppf(1.0 - 1.0 / 240), rel=1e-9)
    assert (law.sample.pieces, law.sample.file) == (12, "reel.csv")
    said = " ".join(describe(table))
    assert "12 pieces in reel.csv" in said
    assert "shape normal, fit to normal p =" in said


def test_absolute_readings_and_sorting_limits(tmp_path):
    given = (
        '{law = "measured", file = "reel.csv", nominal = "100 nF", low = "-5 nF", high = "5 nF",'
        ' meter_noise = "0.1 nF", shape = "as measured"}\ndeviation = "absolute"'
    )
    law = write(tmp_path, given).tables["reel"].quantities["capacitance"].tolerance
    assert law.support == pytest.approx((-5e-9, 5e-9))
    assert law.sample.noise == pytest.approx(1e-10)


@pytest.mark.parametrize(
    ("law", "key", "words"),
    [
        ('{law = "measured"}', "tolerance.file", "nothing"),
        ('{law = "measured", file = "reel.csv"}', "tolerance.nominal", "marked value"),
        ('{law = "measured", file = "../reel.csv", nominal = "1 nF"}', "tolerance.file", "below"),
        ('{law = "measured", file = "ree.csv", nominal = "1 nF"}', "tolerance.file ree.csv", "No"),
        ('{law = "measured", file = "reel.csv", nominal = "10 uF"}', "tolerance.nominal", "off"),
        ('{law = "measured", file = "reel.csv", nominal = "1 V"}', "tolerance.nominal", "V"),
        ('{law = "measured", file = "reel.csv", nominl = "1 nF"}', "tolerance.nominl", "nominal"),
        ('{law = "mesured", file = "reel.csv"}', "tolerance.law", "measured"),
        (LAW.replace("}", ', shape = "norml"}'), "tolerance.shape", "normal"),
        (LAW.replace("}", ', low = "1 %"}'), "tolerance.low", "around all"),
        (LAW.replace("}", ', meter_noise = "9 %"}'), "tolerance.meter_noise", "steadier"),
        (LAW.replace("}", ', column = "D"}'), "tolerance.column", "Columns here"),
    ],
)
def test_mistakes_have_their_place_and_cure(tmp_path, law, key, words):
    found = write(tmp_path, law).broken["reel"]
    assert key in [problem.key for problem in found]
    assert any(words in problem.sentence() for problem in found)


def test_lines_of_the_file_are_named(tmp_path):
    write(tmp_path, LAW)
    (tmp_path / "reel.csv").write_text("C [nF]\n99\nx\n98\ny\n")
    found = read_shelf(None, tmp_path).broken["reel"]
    assert [problem.key for problem in found] == [
        "tolerance.file reel.csv line 3",
        "tolerance.file reel.csv line 5",
    ]


def test_changed_readings_change_the_hash_of_the_table(tmp_path):
    one = write(tmp_path, LAW).tables["reel"].sha256
    again = write(tmp_path, LAW).tables["reel"].sha256
    other = write(tmp_path, LAW, (*PIECES, 99.9)).tables["reel"].sha256
    assert one == again != other


def study_text():
    return quick_text(units=8).replace('"class1-ceramic-5pct"', '"reel"')


@pytest.mark.slow
def test_a_run_keeps_the_readings_and_notices_changed_ones(tmp_path):
    write(tmp_path, LAW)
    (tmp_path / "study.toml").write_text(study_text())
    out = tmp_path / "out"
    first = run_study(tmp_path / "study.toml", units=8, jobs=1, out=out)
    assert (out / "tables" / "reel.csv").read_text() == (tmp_path / "reel.csv").read_text()
    moved = open_study(out / "study.toml", out / "tables")
    again = run_study(moved, units=8, jobs=1)
    assert again.factors.equals(first.factors)
    write(tmp_path, LAW, (*PIECES[:-1], 99.9))
    with pytest.raises(RequestError, match="other spread tables"):
        run_study(tmp_path / "study.toml", units=8, jobs=1, out=out)


def test_readings_far_from_the_frequency_of_use_are_told(tmp_path):
    write(tmp_path, LAW.replace("}", ', test_frequency = "1 kHz"}'))
    (tmp_path / "study.toml").write_text(study_text())
    opened = open_study(tmp_path / "study.toml")
    band = opened.study.model_copy(update={"expected_frequency": (6e6, 7e6)})
    assert any("measured at 1 kHz, used at 6 MHz" in s for s in assumptions(band, opened.tables))
    near = opened.study.model_copy(update={"expected_frequency": (1e3, 2e3)})
    assert not any("measured at" in s for s in assumptions(near, opened.tables))


def test_mistakes_in_tables_nobody_uses_are_warnings(tmp_path: Path):
    write(tmp_path, LAW)
    (tmp_path / "study.toml").write_text(study_text())
    (tmp_path / "other.toml").write_text("[table.torn]\ntitle = ")
    (tmp_path / "more.toml").write_text(HEAD.replace("table.reel", "table.half") + "x = 1\n")
    opened = open_study(tmp_path / "study.toml")
    assert {warning.split()[0].rstrip(":") for warning in opened.warnings} == {
        "more.toml",
        "other.toml",
    }
    text = study_text().replace('"air-coil-on-former"', '"half"')
    (tmp_path / "study.toml").write_text(text)
    with pytest.raises(StudyError) as caught:
        open_study(tmp_path / "study.toml")
    assert [problem.file for problem in caught.value.problems] == ["more.toml"]
    (tmp_path / "study.toml").write_text(study_text().replace('"air-coil-on-former"', '"torn"'))
    with pytest.raises(StudyError) as caught:
        open_study(tmp_path / "study.toml")
    assert [problem.file for problem in caught.value.problems] == ["other.toml"]


def test_every_text_of_a_study_may_name_a_table():
    raw = {"a": "x", "b": [{"c": "y"}, 3, None], "d": {"e": {"f": "z"}}, "g": 1.0}
    assert every_text(raw) == {"x", "y", "z"}


def test_an_unknown_table_may_lie_in_a_file_that_cannot_be_read(tmp_path):
    (tmp_path / "study.toml").write_text(study_text())
    (tmp_path / "torn.toml").write_text("[table.x\n[ table . y]\n= 1")
    with pytest.raises(StudyError) as caught:
        open_study(tmp_path / "study.toml")
    files = {problem.file for problem in caught.value.problems}
    assert files == {"study.toml", "torn.toml"}


def test_the_bias_of_a_meter_is_one_unknown_number_for_all_parts(tmp_path):
    law = LAW.replace("}", ', meter_bias = "1 %"}')
    table = write(tmp_path, law).tables["reel"]
    assert table.quantities["capacitance"].meter.support == pytest.approx((-0.01, 0.01))
    assert "error of the meter, the same for all parts" in " ".join(describe(table))
    (tmp_path / "study.toml").write_text(study_text())
    opened = open_study(tmp_path / "study.toml")
    # an unknown constant is not scattered over units: it is taken as it is most likely
    assert not any("meter" in factor.name for factor in factors(opened.study, opened.tables))
    up = METERS[1]
    moved = with_alternative(opened.tables, ["reel"], up)
    one, other = values_of(opened.study, opened.tables), values_of(opened.study, moved)
    for part, nominal in (("CA", 3e-9), ("CSA", 510e-12)):  # what if: all parts, all units alike
        change = (other[f"{part}.capacitance"] - one[f"{part}.capacitance"]) / nominal
        np.testing.assert_allclose(change, 0.01, atol=1e-9)


def values_of(study, tables):
    draws = draw(factors(study, tables), 3, 0, 50)
    condition, state = next(iter(study.conditions)), next(iter(study.states))
    return part_values(study, tables, condition, state, draws)


def test_a_meter_has_one_law_only(tmp_path):
    law = (
        LAW.replace("}", ', meter_bias = "1 %"}') + '\nmeter = {law = "uniform", half_width = 0.1}'
    )
    found = write(tmp_path, law).broken["reel"]
    assert [problem.key for problem in found] == ["tolerance.meter_bias"]


def test_readings_are_called_measured_whatever_the_rest_of_the_table_is(tmp_path):
    table = write(tmp_path, LAW).tables["reel"]
    assert table.quantities["capacitance"].origins["tolerance"].source == "our meter"
    text = (tmp_path / "tables.toml").read_text().replace('basis = "measured"', 'basis = "guess"')
    (tmp_path / "tables.toml").write_text(text)
    origin = (
        read_shelf(None, tmp_path).tables["reel"].quantities["capacitance"].origins["tolerance"]
    )
    assert (origin.basis, origin.source) == ("measured", "12 pieces in reel.csv")


def test_reels_are_told_in_summary_terminal_and_report(tmp_path):
    given = ', meter_noise = "0.1 %", meter_bias = "0.3 %", test_frequency = "10 kHz"}'
    write(tmp_path, LAW.replace("}", given))
    (tmp_path / "study.toml").write_text(study_text())
    opened = open_study(tmp_path / "study.toml")
    (entry,) = reel_records(opened.study, opened.tables)
    assert entry["parts"] == ["CA", "CSA", "CFA", "CB", "CSB", "CFB"]
    assert (entry["pieces"], entry["meter_bias"]) == (12, pytest.approx(0.003))
    assert entry["values"] == sorted(entry["values"])
    x, below = entry["next"]["curve"]
    law = opened.tables["reel"].quantities["capacitance"].tolerance
    np.testing.assert_allclose(below, law.cdf(x))
    summary = {"reels": [entry]}
    said = " ".join(reel_sentences(summary))
    assert "from reel.csv. 12 pieces, mean -0.358 %" in said
    assert "off by up to 0.3 %" in said
    (section,) = reel_section(summary)
    assert section["chart"].startswith("<svg")
    assert reel_section({}) == []
    assert json.loads(json.dumps(summary)) == summary


def test_remarks_on_readings_stand_among_the_assumptions(tmp_path):
    low, high = np.linspace(97.0, 97.8, 20), np.linspace(102.2, 103.0, 20)
    write(tmp_path, LAW, (*low, *high))
    (tmp_path / "study.toml").write_text(study_text())
    opened = open_study(tmp_path / "study.toml")
    said = " ".join(assumptions(opened.study, opened.tables))
    assert "capacitance in reel.csv: hollow middle: a tighter grade was sorted out" in said
