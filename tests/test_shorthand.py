"""Tolerance letters and datasheet windows as tables write them."""

import numpy as np
import pytest
from small_study import capacitor, study

from tolsim.errors import Mistake
from tolsim.laws import Asymmetric, Triangular, TruncatedNormal, Uniform, Window
from tolsim.laws.window import completed
from tolsim.spread.reading import read_tables
from tolsim.spread.words import assumptions, describe

HEAD = '[table.x]\ntitle = "T"\nfor = "{kind}"\nbasis = "guess"\nsource = "a test"\n'


def table(law, kind="capacitor", name="capacitance", more=""):
    problems = []
    text = f"{HEAD.format(kind=kind)}[table.x.{name}]\n{more}\ntolerance = {law}\n"
    found = read_tables(text.encode(), "x.toml", problems)
    return found.get("x"), problems


def law_of(law, kind="capacitor", name="capacitance", more=""):
    found, problems = table(law, kind, name, more)
    assert problems == []
    return found.quantities[name].tolerance


def test_a_letter_alone_says_no_more_than_its_limits():
    assert law_of('"J"') == Uniform(-0.05, 0.05)
    assert law_of('"Z"') == Uniform(-0.2, 0.8)
    assert law_of('"W"', "resistor", "resistance") == Uniform(-0.0005, 0.0005)
    assert law_of('"K"', "inductor", "inductance") == Uniform(-0.1, 0.1)


def test_a_letter_gives_the_limits_of_another_law():
    law = law_of('{law = "truncated-normal", letter = "G", sigma = "0.7 %"}')
    assert type(law) is TruncatedNormal
    assert law.support == (-0.02, 0.02)
    assert law.sigma == pytest.approx(0.007)


def test_letters_of_absolute_capacitances_are_picofarads():
    assert law_of('"D"', more='deviation = "absolute"').support == pytest.approx((-5e-13, 5e-13))


@pytest.mark.parametrize(
    ("law", "kind", "name", "more", "words"),
    [
        ('"L"', "capacitor", "capacitance", "", "15 % in older lists"),
        ('"Z"', "resistor", "resistance", "", "tolerance letter"),
        ('"J"', "capacitor", "capacitance", 'deviation = "absolute"', "below 10 pF"),
        ('"J"', "resistor", "resistance", 'deviation = "absolute"', "mean per cent"),
        ('"J"', "capacitor", "esr", "", "limits in numbers"),
        ('{law = "uniform", letter = "J", half_width = "1 %"}', "capacitor", "capacitance", "",
         "either a letter or limits"),
    ],
)  # fmt: skip
def test_letters_that_do_not_fit_are_refused(law, kind, name, more, words):
    found, problems = table(law, kind, name, more)
    assert found is None
    assert [problem.key for problem in problems] == ["tolerance.letter"]
    assert words in problems[0].sentence()


def test_slope_letters_make_straight_lines():
    problems = []
    text = HEAD.format(kind="resistor") + (
        '[table.x.resistance]\ntemperature = {law = "slope-letter", letter = "S"}\n'
    )
    found = read_tables(text.encode(), "x.toml", problems)
    slope = found["x"].quantities["resistance"].temperature.drawn
    assert slope.support == pytest.approx((-1e-4, 1e-4))


@pytest.mark.parametrize(
    ("given", "whole", "kind"),
    [
        ((-0.05, 0.0, 0.1), (-0.05, 0.0, 0.1), Asymmetric),
        ((-0.05, None, 0.1), (-0.05, 0.025, 0.1), Uniform),
        ((None, 0.0, 0.3), (-0.3, 0.0, 0.3), Asymmetric),
        ((-0.1, 0.0, None), (-0.1, 0.0, 0.1), Asymmetric),
        ((None, 0.0, None), (-0.2, 0.0, 0.2), Asymmetric),
        ((None, None, 0.2), (-0.2, 0.0, 0.2), Asymmetric),
        ((-0.2, None, None), (-0.2, 0.0, 0.2), Asymmetric),
        ((0.0, 0.0, 0.2), (0.0, 0.0, 0.2), Triangular),
    ],
)
def test_windows_are_completed(given, whole, kind):
    window = Window(*given, implied_half_width=0.2)
    assert window.whole == pytest.approx(whole)
    assert type(window.implied) is kind
    assert window.support == pytest.approx((whole[0], whole[2]))
    if kind is Asymmetric:
        assert float(window.cdf(whole[1])) == pytest.approx(0.5)  # half on each side of typical
    assert completed(*given, 0.2) == pytest.approx(whole)


@pytest.mark.parametrize(
    ("given", "key"),
    [
        ({}, "typical"),
        ({"typical": 1.0}, "implied_half_width"),
        ({"typical": 1.0, "implied_half_width": -1.0}, "implied_half_width"),
        ({"minimum": 1.0, "typical": 0.5}, "typical"),
        ({"minimum": 1.0, "maximum": 1.0}, "maximum"),
        ({"minimum": 0.0, "typical": 0.0, "maximum": 0.0}, "maximum"),
    ],
)
def test_impossible_windows_are_refused(given, key):
    with pytest.raises(Mistake) as caught:
        Window(**given)
    assert caught.value.key == key


def test_values_of_a_sheet_become_deviations_from_typical():
    law = law_of(
        '{law = "window", typical = "7370 pF", maximum = "9600 pF"}', "mosfet", "capacitance_scale"
    )
    assert law.support == pytest.approx((-(9600 / 7370 - 1), 9600 / 7370 - 1))
    law = law_of('{law = "window", minimum = "90 pF", maximum = "120 pF"}')
    assert law.support == pytest.approx((-15 / 105, 15 / 105))
    law = law_of('{law = "window", maximum = "120 pF", nominal = "100 pF"}')
    assert law.support == pytest.approx((-0.2, 0.2))
    absolute = law_of(
        '{law = "window", minimum = "-0.5 pF", maximum = "1 pF"}', more='deviation = "absolute"'
    )
    assert absolute.support == pytest.approx((-5e-13, 1e-12))


def test_one_value_implies_a_width():
    assert law_of('{law = "window", typical = "0 %"}').support == pytest.approx((-0.3, 0.3))
    law = law_of('{law = "window", typical = "100 pF", implied_half_width = "12 %"}')
    assert law.support == pytest.approx((-0.12, 0.12))


@pytest.mark.parametrize(
    ("law", "key"),
    [
        ('{law = "window", maximum = "120 pF"}', "tolerance.typical"),
        ('{law = "window", typical = "100 pF", maximum = "20 %"}', "tolerance.maximum"),
        ('{law = "window", typical = "100 pF", maximum = "90 pF"}', "tolerance.maximum"),
        ('{law = "window", typcal = "100 pF"}', "tolerance.typcal"),
    ],
)
def test_mistakes_in_windows_are_told(law, key):
    found, problems = table(law)
    assert found is None
    assert key in [problem.key for problem in problems]


def test_what_was_assumed_of_a_window_is_told():
    found, _ = table('{law = "window", maximum = "20 %"}')
    assert "taken as -20 % .. 20 %, half of the parts" in " ".join(describe(found))
    said = assumptions(study({"C1": capacitor(spread="x")}), {"x": found})
    assert any("minimum not on the sheet, window taken as -20 %" in words for words in said)


def test_the_law_of_a_window_is_drawn_like_its_implied_one():
    window = Window(-0.1, 0.0, 0.3)
    u = np.linspace(0.01, 0.99, 9)
    np.testing.assert_array_equal(window.ppf(u), Asymmetric(-0.1, 0.0, 0.3).ppf(u))
