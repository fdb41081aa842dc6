"""Temperature and ageing laws against standards and closed forms."""

import numpy as np
import pytest

from tolsim.errors import Mistake
from tolsim.laws import Fixed, Uniform
from tolsim.spread.ageing import LinearAgeing, LogTimeAgeing, PowerAgeing, SqrtTimeAgeing
from tolsim.spread.drift_reading import read_ageing
from tolsim.spread.temperature import (
    CopperTemperature,
    CurveTemperature,
    EnvelopeTemperature,
    LinearTemperature,
    class1_temperature,
    class2_temperature,
)


# Change from 25 to 85 degC, from the code of EIA-198-1 alone: 60 K times the slope.
@pytest.mark.parametrize(
    ("code", "percent", "within"),
    [("C0G", 0.0, 0.18), ("U2J", -4.5, 0.72), ("M7G", 0.6, 0.18), ("P3K", -9.0, 1.5)],
)
def test_class_1_change_to_85_degrees(code, percent, within):
    law = class1_temperature(code)
    low, high = law.drawn.support
    changes = 100.0 * (law.factor([low, high], 85.0) - 1.0)
    assert changes == pytest.approx([percent - within, percent + within], abs=1e-9)
    assert law.factor(high, 25.0) == 1.0


def test_frequency_drift_of_c0g_and_a_coil():
    """-1/2 (30 ppm/K + 50 ppm/K) 60 K = -0.24 % (small changes of f = 1 / (2 pi sqrt(LC)))."""
    c = LinearTemperature(Fixed(30e-6)).factor(30e-6, 85.0)
    coil = LinearTemperature(Fixed(50e-6)).factor(50e-6, 85.0)
    assert 100.0 * (1.0 / np.sqrt(c * coil) - 1.0) == pytest.approx(-0.24, abs=1e-3)


def test_class_2_envelope():
    """EIA-198: X7R stays within 15 % from -55 to 125 degC, Y5V within +22/-82 % to 85 degC."""
    x7r = class2_temperature("X7R")
    celsius = np.linspace(-55.0, 125.0, 181)
    upper, lower = x7r.factor(1.0, celsius), x7r.factor(-1.0, celsius)
    assert (upper.max(), lower.min()) == pytest.approx((1.15, 0.85))
    assert np.all((lower <= 1.0) & (upper >= 1.0))
    assert x7r.factor([-1.0, 0.3, 1.0], 25.0) == pytest.approx([1.0, 1.0, 1.0])
    y5v = class2_temperature("Y5V")
    assert y5v.factor([-1.0, 1.0], 85.0) == pytest.approx([0.18, 1.22])
    assert y5v.factor(0.5, 200.0) == y5v.factor(0.5, 85.0)  # held beyond the ends


def test_curve_passes_through_its_points_and_is_stretched():
    law = CurveTemperature(((-40.0, -0.04), (20.0, 0.0), (100.0, 0.05)), Uniform(0.5, 1.0))
    assert law.factor(1.0, [-40.0, 20.0, 100.0]) == pytest.approx([0.96, 1.0, 1.05])
    assert law.factor(0.5, 100.0) == pytest.approx(1.025)
    assert np.all(np.diff(law.factor(1.0, np.linspace(-40, 100, 300))) >= 0.0)
    assert CurveTemperature(law.points).drawn is None


def test_copper_at_dc_and_at_high_frequency():
    """Slope 0.00393 /K at 20 degC (IEC 60028): 20 to 100 degC x 1.3144, its root x 1.1465."""
    assert CopperTemperature(20.0).factor(0.0, 100.0) == pytest.approx(1.3144, abs=5e-5)
    assert CopperTemperature(20.0, 0.5).factor(0.0, 100.0) == pytest.approx(1.1465, abs=5e-5)
    assert CopperTemperature(25.0).factor(0.0, 25.0) == pytest.approx(1.0)


# C(t) = C(1 h) [1 - k log10(t / 1 h)], k = 2.5 % (IEC 60384-9 annex, EIA-521), in closed form.
@pytest.mark.parametrize(
    ("hours", "percent"),
    [(1, 0.0), (10, -2.5), (100, -5.0), (1e3, -7.5), (1e4, -10.0), (87600, -12.36)],
)
def test_class_2_ageing_from_the_first_hour(hours, percent):
    law = LogTimeAgeing(Fixed(-0.025), reference=1.0)
    assert 100.0 * (law.factor(-0.025, hours) - 1.0) == pytest.approx(percent, abs=5e-3)


def test_the_two_time_origins_differ():
    """Ten years against 1000 h: 0.94750 by the 1 h origin, 0.95144 when based at 1000 h.

    1 - 0.025 log10(87.6) = 0.95144; 0.876438 / 0.925 = 0.94750.
    """
    assert LogTimeAgeing(Fixed(-0.025)).factor(-0.025, 87600.0) == pytest.approx(0.94750, abs=5e-6)
    based = LogTimeAgeing(Fixed(-0.025), reference=1000.0, origin=1000.0)
    assert based.factor(-0.025, 87600.0) == pytest.approx(0.95144, abs=5e-6)


def test_no_log_of_zero_hours():
    law = LogTimeAgeing(Fixed(-0.025), earliest=24.0)
    assert law.factor(-0.025, 0.0) == law.factor(-0.025, 24.0)
    assert law.factor(0.0, [0.0, 1e5]) == pytest.approx([1.0, 1.0])  # class 1: rate 0


def test_each_law_has_its_clock():
    assert LogTimeAgeing(Fixed(-0.025)).clock == "soldering"
    assert LogTimeAgeing(Fixed(-0.025), since="build").clock == "build"
    assert SqrtTimeAgeing(Fixed(0.02), 87600.0).clock == "build"
    mistakes = []
    words = {"law": "log-time", "rate": "-2 %", "reference": "1000 h", "since": "build"}
    assert read_ageing(words, mistakes.append).clock == "build"
    assert read_ageing(words | {"since": "birth"}, mistakes.append) is None
    assert [mistake.key for mistake in mistakes] == ["since"]


def test_power_laws_of_time():
    """Root of time: half of the ten-year drift after 2.5 years."""
    assert SqrtTimeAgeing(Fixed(0.02), 87600.0).factor(0.02, 21900.0) == pytest.approx(1.01)
    assert LinearAgeing(Fixed(0.02), 1000.0).factor(0.02, [0.0, 500.0]) == pytest.approx(
        [1.0, 1.01]
    )
    assert PowerAgeing(Fixed(0.1), 100.0, 2.0).factor(0.1, 50.0) == pytest.approx(1.025)


@pytest.mark.parametrize(
    ("make", "key"),
    [
        (lambda: EnvelopeTemperature(((25.0, 0.0, 0.0),)), "points"),
        (lambda: EnvelopeTemperature(((25.0, 0.1, 0.2), (85.0, -0.1, 0.1))), "points"),
        (
            lambda: EnvelopeTemperature(((25.0, 0, 0), (85.0, -0.1, 0.1)), Uniform(-2, 1)),
            "position",
        ),
        (lambda: CurveTemperature(((25.0, 0.0), (20.0, 0.1))), "points"),
        (lambda: CopperTemperature(25.0, 0.0), "exponent"),
        (lambda: LogTimeAgeing(Fixed(-0.02), reference=0.0), "reference"),
        (lambda: LogTimeAgeing(Fixed(-0.02), since="delivery"), "since"),
        (lambda: PowerAgeing(Fixed(0.1), 100.0, 0.0), "exponent"),
        (lambda: LinearAgeing(Fixed(0.1), -1.0), "reference"),
    ],
)
def test_wrong_parameters_are_named(make, key):
    with pytest.raises(Mistake) as caught:
        make()
    assert caught.value.key == key
