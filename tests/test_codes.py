"""Marking codes against the standards (IEC 60062:2016, IEC 60063:2015, EIA-198)."""

import pytest
from small_study import capacitor, study

from tolsim.errors import Mistake
from tolsim.parts import Resistor
from tolsim.spread.codes import (
    Class1,
    Class2,
    Tolerance,
    class1_code,
    class2_code,
    slope_letter,
    tolerance_letter,
)
from tolsim.spread.preferred import (
    e_series,
    is_preferred,
    nearest_preferred,
    neighbours,
    smallest_series,
)
from tolsim.spread.purchase import value_notes
from tolsim.spread.value_codes import capacitor_code, resistor_code

# IEC 60062:2016, table of tolerance codes: per cent from 10 pF on.
PER_CENT = {
    "B": 0.1,
    "C": 0.25,
    "D": 0.5,
    "F": 1,
    "G": 2,
    "H": 3,
    "J": 5,
    "K": 10,
    "M": 20,
    "N": 30,
}
LOPSIDED = {"Q": (-10, 30), "T": (-10, 50), "S": (-20, 50), "Z": (-20, 80)}
PICOFARADS = {"B": 0.1, "C": 0.25, "D": 0.5, "F": 1, "G": 2}


@pytest.mark.parametrize(("letter", "limit"), PER_CENT.items())
def test_symmetric_letters(letter, limit):
    for capacitance in (None, 100e-12):
        tolerance = tolerance_letter(letter, capacitance)
        assert (tolerance.low, tolerance.high) == pytest.approx((-limit / 100, limit / 100))
        assert not tolerance.absolute


@pytest.mark.parametrize(("letter", "limits"), LOPSIDED.items())
def test_lopsided_letters(letter, limits):
    tolerance = tolerance_letter(letter, 10e-9)
    assert (100 * tolerance.low, 100 * tolerance.high) == pytest.approx(limits)


@pytest.mark.parametrize(("letter", "limit"), PICOFARADS.items())
def test_letters_mean_picofarads_below_10_pf(letter, limit):
    tolerance = tolerance_letter(letter, 9.99e-12)
    assert tolerance == Tolerance(-limit * 1e-12, limit * 1e-12, absolute=True)


def test_10_pf_itself_is_per_cent():
    assert capacitor_code("100D") == (pytest.approx(10e-12), Tolerance(-0.005, 0.005))
    value, tolerance = capacitor_code("4R7D")
    assert value == pytest.approx(4.7e-12)
    assert tolerance.high / value == pytest.approx(0.106, abs=5e-4)


@pytest.mark.parametrize("letter", ["E", "L", "P", "A", "Y", "R"])
def test_letters_of_older_lists_are_refused_for_capacitors(letter):
    with pytest.raises(Mistake):
        tolerance_letter(letter, 100e-12)


@pytest.mark.parametrize("letter", ["H", "J", "K", "Z"])
def test_per_cent_letters_are_refused_below_10_pf(letter):
    with pytest.raises(Mistake):
        tolerance_letter(letter, 4.7e-12)


@pytest.mark.parametrize(
    ("code", "farads"),
    [("104K", 100e-9), ("105K", 1e-6), ("5p6", 5.6e-12), ("4R7", 4.7e-12), ("2n2", 2.2e-9)],
)
def test_value_codes(code, farads):
    assert capacitor_code(code)[0] == pytest.approx(farads)


@pytest.mark.parametrize(
    ("code", "ohms"),
    [
        ("472", 4700), ("4702", 47e3), ("4k7", 4.7e3), ("4K7", 4.7e3), ("R47", 0.47), ("47R", 47),
        ("4R7", 4.7), ("1M0", 1e6), ("47K", 47e3), ("000", 0), ("1R00", 1), ("10R0", 10),
    ],
)  # fmt: skip
def test_value_codes_of_resistors(code, ohms):
    assert resistor_code(code) == (pytest.approx(ohms), None)


def test_resistor_marks_with_letters():
    assert resistor_code("472J") == (pytest.approx(4700), Tolerance(-0.05, 0.05))
    assert resistor_code("4702F") == (pytest.approx(47e3), Tolerance(-0.01, 0.01))
    assert resistor_code("4k7K") == (pytest.approx(4700), Tolerance(-0.1, 0.1))
    assert resistor_code("R47J") == (pytest.approx(0.47), Tolerance(-0.05, 0.05))


def test_marks_with_two_meanings_are_refused_with_both():
    with pytest.raises(Mistake) as caught:
        resistor_code("472K")
    assert "472 kohm" in caught.value.cure
    assert "4700 ohm of 10 %" in caught.value.cure
    for letter, words in {"L": "0.01 %", "P": "-0/+100 %", "E": "0.25 %", "Y": "older"}.items():
        with pytest.raises(Mistake) as caught:
            tolerance_letter(letter, 1e-9)
        assert words in caught.value.cure
    for letter in ("Z", "M"):
        with pytest.raises(Mistake) as caught:
            slope_letter(letter)
        assert "Lists differ" in caught.value.cure
    for code in ("", "R", "K", "abc", "12", "47kk7"):
        with pytest.raises(Mistake):
            resistor_code(code)


def test_slope_letters():
    """IEC 60062 with the colours of the same slopes (black 250, brown 100, red 50 ppm/K)."""
    assert [round(1e6 * slope_letter(letter)) for letter in "USRQP"] == [250, 100, 50, 25, 15]
    with pytest.raises(Mistake):
        slope_letter("J")


def test_nonsense_codes_are_refused():
    for code in ("", "K", "12", "1234K", "4,7"):
        with pytest.raises(Mistake):
            capacitor_code(code)


# IEC 60063:2015.
E24 = (
    10,
    11,
    12,
    13,
    15,
    16,
    18,
    20,
    22,
    24,
    27,
    30,
    33,
    36,
    39,
    43,
    47,
    51,
    56,
    62,
    68,
    75,
    82,
    91,
)


def test_e24_with_its_eight_exceptions():
    assert tuple(round(10 * value) for value in e_series(24)) == E24
    formula = [round(10 ** (1 + i / 24)) for i in range(24)]
    differ = {f: v for f, v in zip(formula, E24, strict=True) if f != v}
    assert differ == {26: 27, 29: 30, 32: 33, 35: 36, 38: 39, 42: 43, 46: 47, 83: 82}


def test_small_series_are_parts_of_e24():
    assert e_series(12) == e_series(24)[::2]
    assert e_series(6) == (1.0, 1.5, 2.2, 3.3, 4.7, 6.8)
    assert e_series(3) == (1.0, 2.2, 4.7)


def test_fine_series_and_the_value_920():
    e192 = e_series(192)
    assert len(set(e192)) == 192
    assert e192[185] == 9.20
    assert round(100 * 10 ** (185 / 192)) == 919
    assert e_series(96) == e192[::2]
    assert e_series(48) == e192[::4]
    assert 9.20 not in e_series(96)
    with pytest.raises(Mistake):
        e_series(10)


@pytest.mark.parametrize(
    ("value", "size", "nearest"),
    [
        (4.9e3, 6, 4.7e3),
        (9.7e-10, 24, 1e-9),
        (4.6e-3, 12, 4.7e-3),
        (1.0, 3, 1.0),
        (3.3e-12, 6, 3.3e-12),
    ],
)
def test_nearest_preferred(value, size, nearest):
    assert nearest_preferred(value, size) == pytest.approx(nearest, rel=1e-12)


def test_neighbours_and_membership():
    assert neighbours(4.7e-9, 12) == pytest.approx((3.9e-9, 5.6e-9))
    assert neighbours(5e-9, 12) == pytest.approx((4.7e-9, 5.6e-9))
    assert neighbours(1e3, 24) == pytest.approx((910, 1100))
    assert neighbours(9.5, 6) == pytest.approx((6.8, 10))
    assert is_preferred(4.7e-9, 3)
    assert not is_preferred(5e-9, 24)
    assert is_preferred(4.99e3, 96)
    assert [smallest_series(v) for v in (4.7, 68, 820, 91, 9.2, 49.9, 5.0)] == [
        3, 6, 12, 24, 192, 96, None
    ]  # fmt: skip
    with pytest.raises(Mistake):
        neighbours(0.0, 12)


def test_values_nobody_sells_are_told():
    parts = {
        "C1": capacitor(capacitance="4.6 nF"),
        "C2": capacitor(capacitance="4.7 nF"),
        "C3": capacitor(capacitance="3.17 pF", spread="stray-capacitance"),
        "R1": Resistor(kind="resistor", nets=("a", "b"), resistance="5.01 kohm"),
        "R2": Resistor(kind="resistor", nets=("a", "b"), resistance="49.9 ohm"),
    }
    assert list(value_notes(study(parts))) == [
        "C1 4.6 nF is in no E series; nearest of E24: 4.7 nF",
        "R1 5.01 kohm is in no E series; nearest of E96: 4.99 kohm",
    ]


# EIA-198-1: code, slope and its tolerance in ppm/K.
@pytest.mark.parametrize(
    ("code", "slope", "tolerance"),
    [
        ("C0G", 0, 30), ("NP0", 0, 30), ("M7G", 100, 30), ("B2G", -30, 30), ("U1G", -75, 30),
        ("P2G", -150, 30), ("R2G", -220, 30), ("S2H", -330, 60), ("T2H", -470, 60),
        ("U2J", -750, 120), ("P3K", -1500, 250), ("R3L", -2200, 500), ("S3N", -3300, 2500),
    ],
)  # fmt: skip
def test_class_1_codes(code, slope, tolerance):
    decoded = class1_code(code)
    assert isinstance(decoded, Class1)
    assert decoded.slope == pytest.approx(slope * 1e-6)
    assert decoded.tolerance == pytest.approx(tolerance * 1e-6)


# EIA-198: Z is +10 degC and 7 is +125 degC; some printed lists have them wrong.
@pytest.mark.parametrize(
    ("code", "expected"),
    [
        ("X7R", Class2(-55, 125, -0.15, 0.15)),
        ("X5R", Class2(-55, 85, -0.15, 0.15)),
        ("X7T", Class2(-55, 125, -0.33, 0.22)),
        ("Y5V", Class2(-30, 85, -0.82, 0.22)),
        ("Z5U", Class2(10, 85, -0.56, 0.22)),
    ],
)
def test_class_2_codes(code, expected):
    assert class2_code(code) == expected


def test_unknown_class_codes_name_a_near_one():
    with pytest.raises(Mistake) as caught:
        class1_code("U2Z")
    assert caught.value.nearest == "U2J"
    with pytest.raises(Mistake) as caught:
        class2_code("X7Q")
    assert caught.value.nearest.startswith("X7")
