"""Marks on parts of a study: value and spread as the standards read them."""

import pytest
from quick_study import text as quick_text

from tolsim.answers.provenance import provenance_of
from tolsim.errors import StudyError
from tolsim.spread.words import describe
from tolsim.study import open_study

SHUNT = 'capacitance = "3 nF"\nspread = "class1-ceramic-5pct"'
BIAS = 'resistance = "3.3 kohm"'


def opened(tmp_path, capacitor=SHUNT, resistor=BIAS):
    path = tmp_path / "study.toml"
    path.write_text(quick_text().replace(SHUNT, capacitor).replace(BIAS, resistor))
    return open_study(path)


def test_a_mark_gives_value_tolerance_and_temperature(tmp_path):
    found = opened(tmp_path, 'marking = "302J C0G"', 'marking = "3k3J S"')
    part = found.study.design.parts["CA"]
    assert part.capacitance == pytest.approx(3e-9)
    table = found.tables[part.spread]
    spread = table.quantities["capacitance"]
    assert spread.tolerance.support == pytest.approx((-0.05, 0.05))
    assert spread.temperature.drawn.support == pytest.approx((-30e-6, 30e-6))
    assert table.guesses == ("capacitance tolerance",)  # letters are limits, not laws
    assert "letter J of IEC 60062, code C0G of EIA-198-1" in describe(table)[0]
    resistor = found.study.design.parts["RBA"]
    assert resistor.resistance == pytest.approx(3300)
    slope = found.tables[resistor.spread].quantities["resistance"].temperature.drawn
    assert slope.support == pytest.approx((-1e-4, 1e-4))
    assert "marking-302J-C0G" in provenance_of(found)["tables"]


def test_small_capacitors_have_limits_in_picofarads(tmp_path):
    found = opened(tmp_path, 'marking = "4R7D NP0"')
    spread = found.tables["marking-4R7D-NP0"].quantities["capacitance"]
    assert spread.deviation == "absolute"
    assert spread.tolerance.support == pytest.approx((-5e-13, 5e-13))


def test_class_2_codes_and_marks_without_letters(tmp_path):
    found = opened(tmp_path, 'marking = "302 X7R"')
    spread = found.tables["marking-302-X7R"].quantities["capacitance"]
    assert spread.tolerance is None
    assert spread.temperature.points[0] == (-55.0, -0.15, 0.15)
    bare = opened(tmp_path, 'marking = "3n0"')
    assert bare.study.design.parts["CA"].spread is None


def test_a_table_named_beside_the_mark_wins(tmp_path):
    found = opened(tmp_path, 'marking = "302J C0G"\nspread = "class1-ceramic-1pct"')
    assert found.study.design.parts["CA"].spread == "class1-ceramic-1pct"
    assert found.warnings[0] == (
        'study.toml [parts.CA] marking: tolerance -5 to 5 % by the mark "302J C0G", -1 to 1 % by'
        " the table class1-ceramic-1pct. The table is followed; drop spread to follow the mark."
    )


@pytest.mark.parametrize(
    ("marking", "spread", "words"),
    [
        ("302J C0G", "class1-ceramic-5pct", []),
        ("302J", "class1-ceramic-n750-5pct", []),  # a mark without a code says nothing of slopes
        ("302J C0G", "class1-ceramic-n750-5pct", ["change at -20 degC -0.13"]),
        ("302K X7R", "class2-ceramic-x7r-10pct", []),
        ("302M X7R", "class1-ceramic-5pct", ["tolerance -20 to 20 %", "change at"]),
        ("302K", "example-measured-film", []),  # measured, and within what the mark promises
    ],
)
def test_marks_that_contradict_their_table_are_told(tmp_path, marking, spread, words):
    found = opened(tmp_path, f'marking = "{marking}"\nspread = "{spread}"')
    told = [warning for warning in found.warnings if "parts.CA]" in warning]
    assert len(told) == len(words)
    for warning, part in zip(told, words, strict=True):
        assert part in warning


def test_all_wrong_marks_are_told_at_once(tmp_path):
    with pytest.raises(StudyError) as caught:
        opened(tmp_path, 'marking = "302L C0G"', 'marking = "332K"')
    told = {(p.table, p.key) for p in caught.value.problems}
    assert {("parts.CA", "marking"), ("parts.RBA", "marking")} <= told
    text = str(caught.value)
    assert "15 % in older lists" in text
    assert "332 kohm, or 3300 ohm of 10 %" in text


@pytest.mark.parametrize(
    ("marking", "words"),
    [
        ('"302J"\ncapacitance = "3 nF"', "either marking or capacitance"),
        ('"302J C0G X7R"', "one temperature code"),
        ('"302J C0X"', "C0G"),
        ('"000"', "above 0"),
        ("302", "a mark like"),
    ],
)
def test_marks_that_make_no_sense(tmp_path, marking, words):
    with pytest.raises(StudyError) as caught:
        opened(tmp_path, f"marking = {marking}")
    assert words in str(caught.value)
    assert all(problem.key == "marking" for problem in caught.value.problems)


def test_only_capacitors_and_resistors_are_marked(tmp_path):
    path = tmp_path / "study.toml"
    path.write_text(quick_text().replace('inductance = "2.2 uH"', 'marking = "2R2K"'))
    with pytest.raises(StudyError, match="on a capacitor or resistor only"):
        open_study(path)
