"""Text with units of measure to floats and back."""

import contextlib

import pytest
from hypothesis import given
from hypothesis import strategies as st
from pydantic import TypeAdapter, ValidationError

from tolsim.errors import Mistake
from tolsim.quantity import (
    KINDS,
    UNITS_MANDATORY,
    Capacitance,
    CapacitanceOrZero,
    Share,
    SignedShare,
    SignedVoltage,
    Temperature,
    read,
    show,
    typeset,
)


@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        ("2.7 nF", "F", 2.7e-9),
        ("2.7nF", "F", 2.7e-9),
        (" 4.7 µH ", "H", 4.7e-6),  # micro sign
        ("4.7 μH", "H", 4.7e-6),  # Greek mu
        ("4.7 uH", "H", 4.7e-6),
        ("3.3 kΩ", "ohm", 3300.0),
        ("60 mohm", "ohm", 0.06),
        ("1e3 pF", "F", 1e-9),
        (".5 mm", "m", 5e-4),
        ("85 degC", "degC", 85.0),
        ("-40 °C", "degC", -40.0),
        ("300 K", "degC", 26.85),
        ("15 K", "K", 15.0),
        ("15 degC", "K", 15.0),  # a difference has no offset
        ("-30 ppm/K", "1/K", -30e-6),
        ("-30 ppm/degC", "1/K", -30e-6),
        ("1.2 degC/W", "K/W", 1.2),
        ("-6 mV/K", "V/K", -6e-3),
        ("11 A/V2", "A/V^2", 11.0),
        ("11 A/V^2", "A/V^2", 11.0),
        ("5 %", "1", 0.05),
        ("0.05", "1", 0.05),
        ("2 years", "h", 17532.0),
        ("250 var", "var", 250.0),
        ("250 VA", "var", 250.0),
        ("3 dB", "dB", 3.0),
    ],
)
def test_reads_what_people_write(text, unit, value):
    assert read(text, unit) == pytest.approx(value, rel=1e-12)


@pytest.mark.parametrize(
    ("text", "unit", "cure"),
    [
        ("2,7 nF", "F", "Write the decimal point as a point."),
        ("nF", "F", "Write a number, a space, a unit."),
        ("", "F", "Write a number, a space, a unit."),
        ("5.6", "F", 'Write the unit of measure: "5.6 F" if it is that.'),
        ("5 mA", "F", "'mA' measures something else."),
        ("5 1", "F", "'1' measures something else."),
        ("3 dB", "1", "'dB' measures something else."),
        ("5 foo", "F", "'foo' is no unit of measure known here."),
        ("5 )(", "F", "')(' is no unit of measure known here."),
        ("5 F; F", "F", "'F; F' is no unit of measure known here."),
    ],
)
def test_refuses_the_rest_with_its_cure(text, unit, cure):
    with pytest.raises(Mistake) as caught:
        read(text, unit)
    assert caught.value.cure == cure


@given(st.text(max_size=20))
def test_any_text_is_read_or_refused(text):
    """Whatever stands in a file, nothing but a Mistake comes out of reading it."""
    with contextlib.suppress(Mistake):
        assert isinstance(read(text, "F"), float)


@given(st.text("kKmnFVAHz1290°CdegrC%/*^-. ()", max_size=10))
def test_any_unit_is_read_or_refused(text):
    """The same for texts that come near to units of measure."""
    with contextlib.suppress(Mistake):
        assert isinstance(read(f"5 {text}", "degC"), float)


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [
        (2.7e-9, "F", "2.7 nF"),
        (61.874, "V", "61.87 V"),
        (6.60444e6, "Hz", "6.604 MHz"),
        (999.96, "V", "1 kV"),
        (-5.156, "V", "-5.156 V"),
        (0.0, "A", "0 A"),
        (1e-20, "F", "1e-05 fF"),
        (85.0, "degC", "85 degC"),
        (0.25, "1", "0.25"),
        (1.83e7, "1/s", "1.83e+07 1/s"),
        (float("nan"), "V", "n/a"),
        (float("inf"), "V", "inf V"),
    ],
)
def test_shows_with_a_prefix(value, unit, text):
    assert show(value, unit) == text


@given(st.sampled_from(list(KINDS.values())), st.floats(0.0, 1.0))
def test_what_is_shown_can_be_read_back(kind, position):
    value = kind.low + position * (kind.high - kind.low)
    assert read(show(value, kind.unit, 12), kind.unit) == pytest.approx(value, rel=1e-9)


@pytest.mark.parametrize("kind", KINDS.values(), ids=list(KINDS))
def test_examples_are_in_range(kind):
    assert kind.check(read(kind.example, kind.unit)) > 0.0


def test_range_of_its_kind():
    with pytest.raises(ValidationError, match=r"a capacitance of 1 fF to 10 mF.*prefix"):
        TypeAdapter(Capacitance).validate_python("5.6 F")
    with pytest.raises(ValidationError, match="Check the sign"):
        TypeAdapter(Capacitance).validate_python("-5.6 nF")
    with pytest.raises(ValidationError, match="a capacitance"):
        TypeAdapter(Capacitance).validate_python(float("nan"))
    assert TypeAdapter(CapacitanceOrZero).validate_python("0 F") == 0.0
    assert TypeAdapter(SignedVoltage).validate_python("-5 V") == -5.0
    assert TypeAdapter(SignedShare).validate_python("-10 %") == pytest.approx(-0.1)


def test_a_bare_number_is_for_python_only():
    """Python callers pass SI floats; a file must say the unit of measure."""
    adapter = TypeAdapter(Temperature)
    in_file = {UNITS_MANDATORY: True}
    assert adapter.validate_python(85) == 85.0
    assert adapter.validate_python("85 degC", context=in_file) == 85.0
    with pytest.raises(ValidationError, match="unit of measure"):
        adapter.validate_python(85, context=in_file)
    with pytest.raises(ValidationError, match="a temperature"):
        adapter.validate_python(True)
    assert TypeAdapter(Share).validate_python(0.8, context=in_file) == 0.8


@pytest.mark.parametrize(
    ("typed", "printed"),
    [
        ("2.2 uH", "2.2 µH"),
        ("3.3 kohm", "3.3 kΩ"),
        ("60 mohm, 5 ohm", "60 mΩ, 5 Ω"),
        ("11 A/V^2", "11 A/V²"),
        ("at 85 degC", "at 85 °C"),
        ("a kohm-meter of unusual make", "a kohm-meter of unusual make"),
    ],
)
def test_typeset(typed, printed):
    assert typeset(typed) == printed
