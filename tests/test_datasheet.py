"""Datasheet rows to model parameters: the model must reproduce the rows it was made from."""

import math

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from small_study import mosfet

from tolsim.errors import Mistake
from tolsim.spread.datasheet import device_parameters, threshold_window, window_assumptions

KNEE = 0.12  # default of the part, V


def sheet(**rows: object):
    return {
        "threshold": {"minimum": 2.0, "typical": 3.0, "maximum": 4.0, "current": 250e-6},
        "transfer": {"current": 10.0, "gate_voltage": 5.0},
        "on_resistance": {"typical": 0.30, "gate_voltage": 10.0},
        "capacitance": {"ciss": 1.2e-9, "coss": 2e-10, "crss": 5e-11, "drain_voltage": 25.0},
        **rows,
    }


def current(vgs, device, knee=KNEE):
    """Saturated drain current, i = k/2 S(vgs - Vt)^2 (Enz, Krummenacher, Vittoz 1995)."""
    overdrive = knee * math.log1p(math.exp((vgs - device.threshold) / knee))
    return 0.5 * device.gain * overdrive**2


@settings(max_examples=60, deadline=None)
@given(
    threshold=st.floats(1.0, 5.0),
    rise=st.floats(1.2, 6.0),
    test_current=st.floats(1e-5, 1e-2),
    large=st.floats(0.5, 100.0),
)
def test_threshold_row_and_transfer_point_are_reproduced(threshold, rise, test_current, large):
    rows = sheet(
        threshold={"typical": threshold, "current": test_current},
        transfer={"current": large, "gate_voltage": threshold + rise},
        on_resistance=None,
    )
    device = device_parameters(mosfet(sheet=rows))
    assert current(threshold, device) == pytest.approx(test_current, rel=1e-8)
    assert current(threshold + rise, device) == pytest.approx(large, rel=1e-8)


def test_a_known_device_comes_back():
    """Choose k = 11 A/V2 and Vt = 3.4 V, write its sheet, read the device from it."""
    k, vt, m, phi = 11.0, 3.4, 0.5, 0.8

    class Known:
        threshold, gain = vt, k

    rows = sheet(
        threshold={"typical": 3.3, "current": current(3.3, Known)},
        transfer={"current": current(6.0, Known), "gate_voltage": 6.0},
        on_resistance={"typical": 0.05 + 1.0 / (k * (10.0 - vt)), "gate_voltage": 10.0},
        capacitance={
            "ciss": 2e-9 + 280e-12 / (1 + 25 / phi) ** m,
            "coss": (280e-12 + 1400e-12) / (1 + 25 / phi) ** m,
            "crss": 280e-12 / (1 + 25 / phi) ** m,
            "drain_voltage": 25.0,
        },
    )
    device = device_parameters(mosfet(sheet=rows))
    assert device.threshold == pytest.approx(vt, abs=1e-9)
    assert device.gain == pytest.approx(k, rel=1e-9)
    assert device.drift_resistance == pytest.approx(0.05, rel=1e-9)
    assert (device.cgs, device.cgd0, device.cds0) == pytest.approx((2e-9, 280e-12, 1400e-12))
    assert device.assumptions == ()


def test_gain_from_transconductance():
    """Square law: gm = sqrt(2 k I)."""
    rows = sheet(transfer=None, transconductance={"typical": 8.0, "current": 4.0})
    device = device_parameters(mosfet(sheet=rows))
    assert math.sqrt(2.0 * device.gain * 4.0) == pytest.approx(8.0)
    assert device.assumptions == ()


def test_model_parameters_pass_unchanged():
    device = device_parameters(mosfet())
    assert (device.threshold, device.gain, device.cgs) == (3.4, 11.0, 2e-9)


@pytest.mark.parametrize(
    ("rows", "words"),
    [
        (
            {"transfer": None, "transconductance": {"minimum": 8.0, "current": 4.0}},
            "only the minimum",
        ),
        ({"transfer": None}, "channel taken as 50%"),
        ({"on_resistance": None}, "no drift resistance"),
        ({"on_resistance": {"maximum": 0.36, "gate_voltage": 10.0}}, "maximum / 1.2"),
        ({"on_resistance": {"typical": 0.001, "gate_voltage": 10.0}}, "taken as 0"),
    ],
)
def test_what_the_sheet_does_not_say_is_stated(rows, words):
    device = device_parameters(mosfet(sheet=sheet(**rows)))
    assert any(words in sentence for sentence in device.assumptions)
    assert device.drift_resistance >= 0.0


def test_maximum_on_resistance_only():
    rows = sheet(on_resistance={"maximum": 0.36, "gate_voltage": 10.0})
    same = sheet(on_resistance={"typical": 0.30, "gate_voltage": 10.0})
    one, other = (device_parameters(mosfet(sheet=given)) for given in (rows, same))
    assert one.drift_resistance == pytest.approx(other.drift_resistance)


@pytest.mark.parametrize(
    ("rows", "key"),
    [
        ({"transfer": {"current": 10.0, "gate_voltage": 3.1}}, "transfer"),
        ({"transfer": {"current": 1e-5, "gate_voltage": 5.0}}, "transfer"),
        ({"transfer": None, "on_resistance": None}, "transfer"),
        ({"on_resistance": {"typical": 0.3, "gate_voltage": 2.0}}, "on_resistance.gate_voltage"),
    ],
)
def test_contradicting_rows_are_refused(rows, key):
    with pytest.raises(Mistake) as caught:
        device_parameters(mosfet(sheet=sheet(**rows)))
    assert caught.value.key == key


@pytest.mark.parametrize(
    ("row", "window"),
    [
        ({"minimum": 2.0, "typical": 2.8, "maximum": 4.0}, (2.0, 2.8, 4.0)),
        ({"minimum": 2.0, "maximum": 4.0}, (2.0, 3.0, 4.0)),
        ({"minimum": 2.0, "typical": 2.8}, (2.0, 2.8, 3.6)),
        ({"typical": 2.8, "maximum": 4.0}, (1.6, 2.8, 4.0)),
        ({"typical": 2.8}, (2.3, 2.8, 3.3)),
        ({"minimum": 2.0}, (2.0, 2.5, 3.0)),
        ({"maximum": 4.0}, (3.0, 3.5, 4.0)),
    ],
)
def test_threshold_windows(row, window):
    part = mosfet(sheet=sheet(threshold={**row, "current": 250e-6}))
    found = threshold_window(part, 0.5)
    assert (found.minimum, found.typical, found.maximum) == pytest.approx(window)
    assert found.shift([-1.0, 0.0, 1.0]) == pytest.approx(
        [window[0] - window[1], 0.0, window[2] - window[1]]
    )
    assert bool(window_assumptions(part, 0.5)) == (len(row) < 3)


def test_a_model_has_the_implied_window_and_says_so():
    found = threshold_window(mosfet(), 0.5)
    assert (found.minimum, found.typical, found.maximum) == pytest.approx((2.9, 3.4, 3.9))
    assert "assumed" in window_assumptions(mosfet(), 0.5)[0]
