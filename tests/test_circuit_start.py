"""Modes at the bias point: what they say is what the circuit does, in time and over spread."""

from __future__ import annotations

from math import pi, sqrt

import numpy as np
import pytest
from circuits import CIRCUIT_A_SPREAD, circuit_a, scattered, typical_values
from stages import capacitor, inductor, mosfet, resistor, units_of

from tolsim.circuit.bias import bias_point
from tolsim.circuit.network import Network
from tolsim.circuit.startup import (
    modes,
    noise_amplitude,
    oscillation_scale,
    resemblance,
    small_signal,
    start_margin,
)
from tolsim.circuit.transient import march
from tolsim.design import Design, Rail

OMEGA = 2 * pi * 7.9e6
UNITS = 10


def at_bias(units: int = 1, **changes: np.ndarray):
    """Network and bias point of circuit A with other part values ("QA_gain" for QA.gain)."""
    design = circuit_a()
    given = {key.replace("_", "."): np.broadcast_to(v, units) for key, v in changes.items()}
    network = _network(design, given)
    point = bias_point(network)
    assert point.settled.all()
    return network, point


def _network(design: Design, changes: dict | None = None) -> Network:
    case = units_of(design, changes)
    return case.network(case.cold_junctions())


@pytest.fixture(scope="module")
def lot():
    """Spread units of circuit A, gate bias from below threshold to well above."""
    values = scattered(
        typical_values(circuit_a(), UNITS), np.random.default_rng(12), CIRCUIT_A_SPREAD
    )
    values["vb.voltage"] = np.linspace(3.3, 4.4, UNITS)
    network = _network(circuit_a(), values)
    return network, bias_point(network)


def test_a_margin_above_zero_is_growth(lot):
    """Sign of the margin and sign of the growth agree in every unit, and both occur."""
    network, point = lot
    growth = modes(network, point, OMEGA).growth
    margin = start_margin(network, point, OMEGA)
    np.testing.assert_array_equal(growth > 0, margin > 0)
    assert 0 < np.sum(growth > 0) < UNITS


def test_the_margin_is_what_the_transistors_can_lose():
    """Both gains weaker by the margin: the mode is sustained; half a dB to either side tells."""
    network, point = at_bias()
    margin = start_margin(network, point, OMEGA)[0]
    weaker = 11.0 * 10 ** (-(margin + np.array([-0.5, 0.0, 0.5])) / 20)
    network, point = at_bias(3, QA_gain=weaker, QB_gain=weaker)
    growth = modes(network, point, OMEGA).growth / OMEGA
    assert growth[0] > 5e-4
    # the bias current, and with it the drop over the chokes, is a little less
    assert abs(growth[1]) < 2e-4
    assert growth[2] < -5e-4


def test_a_growing_mode_grows_so_in_time():
    """A microvolt along the leading mode, one of its periods later: larger by exp(growth / f)."""
    network, point = at_bias()
    lead = modes(network, point, OMEGA)
    mode = lead.vector.real / np.abs(lead.vector).max()
    steps = 512
    x0 = point.x + 1e-6 * mode
    samples = march(network, x0, 1 / lead.frequency / steps, steps)
    factor = np.exp(lead.growth[0] / lead.frequency[0])
    assert factor > 5
    gained = (samples[-1] - point.x)[0] / 1e-6
    np.testing.assert_allclose(gained, factor * mode[0], atol=2e-3 * factor)


def test_the_scale_is_the_tank_however_strong_the_transistors():
    """Transistors thirty times as strong start at twice the frequency; the scale stays."""
    network, point = at_bias()
    assert oscillation_scale(network, point) == pytest.approx(OMEGA, rel=0.2)
    strong, strong_point = at_bias(QA_gain=330.0, QB_gain=330.0)
    scale = oscillation_scale(strong, strong_point)
    assert modes(strong, strong_point, scale).frequency[0] > 1.8 * OMEGA / (2 * pi)
    assert scale == pytest.approx(oscillation_scale(network, point), rel=0.2)


TANK = {
    "L1": inductor("vdd", "a", 10e-6, 0.5),
    "C1": capacitor("a", "gnd", 1e-9),
    "R1": resistor("a", "b", 200.0),  # b has no capacitance: an algebraic net
    "R2": resistor("b", "gnd", 9800.0),
}
RAILS = {"vdd": Rail(net="vdd", voltage=12.0)}


def test_modes_of_a_tank():
    """Roots of s^2 + (R / L + G / C) s + (1 + R G) / (L C), and one mode without memory."""
    network = _network(Design(parts=TANK, rails=RAILS, leak=1e-12))
    point = bias_point(network)
    lead = modes(network, point, 1e7)
    a, b = 0.5 / 10e-6 + 1e-4 / 1e-9, (1 + 0.5e-4) / (10e-6 * 1e-9)
    assert lead.growth[0] == pytest.approx(-a / 2, rel=1e-6)
    assert lead.frequency[0] == pytest.approx(sqrt(b - a * a / 4) / (2 * pi), rel=1e-6)
    assert np.sum(np.isneginf(lead.eigenvalues[0].real)) == 1
    assert not lead.starts[0]
    assert oscillation_scale(network, point) == pytest.approx(sqrt(b), rel=1e-2)


def test_only_transistors_are_weakened():
    """The transconductance part of J holds g_m between gate and drain, and nothing else."""
    parts = TANK | {
        "RG": resistor("g", "vdd", 1e5),
        "RH": resistor("g", "gnd", 1e5),
        "Q1": mosfet("a", "g", 3.0, 2.0, knee=0.02),
    }
    network = _network(Design(parts=parts, rails=RAILS, leak=1e-12))
    point = bias_point(network)
    _, _, through = small_signal(network, point)
    expected = np.zeros((network.states, network.states))
    gate = point.x[0, network.index["g"]]
    expected[network.index["a"], network.index["g"]] = 2.0 * (gate - 3.0)
    np.testing.assert_allclose(through[0], expected, rtol=1e-6, atol=1e-9)


def test_thermal_noise():
    """The rms voltage on a capacitor is sqrt(k T / C), whether it rings with a coil or not."""
    kt = 1.380649e-23 * 290.0
    parts = TANK | {"Q1": mosfet("a", "gnd", 3.0, 2.0)}
    network = _network(Design(parts=parts, rails=RAILS))
    point = bias_point(network)
    ringing = noise_amplitude(network, point, modes(network, point, 1e7), np.array([16.85]))
    # of a sine the amplitude is sqrt 2 times the rms value
    assert ringing[0] == pytest.approx(sqrt(2 * kt / 1e-9), rel=2e-2)
    latch = {
        "RA": resistor("vdd", "a", 100.0),
        "RB": resistor("vdd", "b", 100.0),
        "CA": capacitor("a", "gnd", 1e-9),
        "CB": capacitor("b", "gnd", 1e-9),
        "QA": mosfet("a", "b", 3.0, 0.02),
        "QB": mosfet("b", "a", 3.0, 0.02),
    }
    network = _network(Design(parts=latch, rails=RAILS))
    point = bias_point(network)
    lead = modes(network, point, 1e7)
    assert lead.growth[0] > 0
    assert lead.frequency[0] == 0
    # a mode of two capacitors: half of its noise shows on each
    falling = noise_amplitude(network, point, lead, np.array([16.85]))
    assert falling[0] == pytest.approx(sqrt(kt / 2e-9), rel=1e-6)


def test_likeness_of_modes(lot):
    """A mode is like itself, like its other phases, and unlike an orthogonal one."""
    network, point = lot
    vector = modes(network, point, OMEGA).vector
    own = resemblance(network, vector * np.exp(0.7j), vector[0])
    assert own[0] == pytest.approx(1.0)
    assert np.all((own >= 0) & (own <= 1 + 1e-12))
    common = np.zeros((1, network.states), dtype=complex)
    common[0, [network.index["ga"], network.index["gb"]]] = 1.0
    opposed = common[0].copy()
    opposed[network.index["gb"]] = -1.0
    assert resemblance(network.take(np.array([0])), common, opposed)[0] < 1e-12
