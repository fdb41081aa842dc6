"""Textbook start conditions through bias point, modes and start margin.

The critical transconductance of Colpitts, Hartley and cross-coupled stages is in any text on
oscillators (K. K. Clarke, D. T. Hess, "Communication Circuits", 1971, chapter 6);
`references.start_conditions` has the characteristic polynomials.  Deep in saturation the MOSFET
of tolsim is a square-law one, g_m = k (vgs - Vt) = sqrt(2 k I), so that g_m is set by the gain.
"""

from __future__ import annotations

from math import pi, sqrt

import numpy as np
import pytest
from numpy.typing import NDArray
from references import start_conditions
from stages import capacitor, inductor, mosfet, resistor, units_of

from tolsim.circuit.bias import bias_point
from tolsim.circuit.startup import modes, oscillation_scale, start_margin
from tolsim.design import Design, Rail

Floats = NDArray[np.float64]

SHARES = np.array([0.98, 1.0, 1.02])  # of the critical transconductance
COIL, C1, C2, LOAD = 1e-6, 200e-12, 200e-12, 2e3
THRESHOLD, OVERDRIVE = 3.0, 4.0  # V
DRAIN_COIL, GATE_COIL = 3e-6, 1e-6  # of the Hartley stage


def start_of(design: Design, changes: dict[str, Floats]) -> tuple[Floats, Floats, Floats]:
    """Growth (1/s), frequency (Hz) and margin (dB) of every unit."""
    case = units_of(design, changes)
    network = case.network(case.cold_junctions())
    bias = bias_point(network)
    assert bias.settled.all()
    reference = oscillation_scale(network, bias)
    lead = modes(network, bias, reference)
    return lead.growth, lead.frequency, start_margin(network, bias, reference)


def check(design: Design, changes: dict[str, Floats], roots: list[complex]) -> None:
    """Growth, frequency and margin of the three units against their polynomial's roots."""
    growth, frequency, margin = start_of(design, changes)
    known = np.array(roots)
    assert growth == pytest.approx(known.real, rel=1e-3, abs=1e-6 * known.imag.max())
    assert frequency == pytest.approx(known.imag / (2 * pi), rel=1e-6)
    assert (np.sign(growth[[0, 2]]) == [-1, 1]).all()
    assert margin == pytest.approx(20 * np.log10(SHARES), abs=0.006)  # the search stops at 0.005


def test_colpitts() -> None:
    """Loss R at the drain: g_m R = C2 / C1; growth -+12492 1/s, 15.915494 MHz at 0.5 mS."""
    gm = SHARES * C2 / C1 / LOAD
    parts = {
        "R": resistor("vdd", "d", LOAD),
        "C1": capacitor("d", "gnd", C1),
        "C2": capacitor("g", "gnd", C2),
        "L": inductor("d", "g", COIL),
        "Q1": mosfet("d", "g", THRESHOLD, 1.0),
    }
    design = Design(parts=parts, rails={"vdd": Rail(net="vdd", voltage=9.0)}, leak=1e-15)
    current = gm * OVERDRIVE / 2  # the gate follows the drain through the coil
    changes = {
        "Q1.gain": gm / OVERDRIVE,
        "vdd.voltage": THRESHOLD + OVERDRIVE + current * LOAD,
    }
    check(design, changes, [start_conditions.colpitts(g, COIL, C1, C2, LOAD) for g in gm])
    growth, frequency, _ = start_of(design, changes)
    assert growth[[0, 2]] == pytest.approx([-12492, 12492], rel=1e-3)
    assert frequency[1] == pytest.approx(15.915494e6, rel=1e-7)


def test_colpitts_with_a_lossy_coil() -> None:
    """Loss r in the coil instead: g_m = r (C1 + C2) / L = 0.4 mS at 1 ohm."""
    r = 1.0
    gm = SHARES * r * (C1 + C2) / COIL
    assert gm[1] == pytest.approx(0.4e-3)
    parts = {
        "LF": inductor("vdd", "d", 1.0),  # feeds the drain, 1 H is no load at 16 MHz
        "C1": capacitor("d", "gnd", C1),
        "C2": capacitor("g", "gnd", C2),
        "L": inductor("d", "g", COIL, r),
        "Q1": mosfet("d", "g", THRESHOLD, 1.0),
    }
    rails = {"vdd": Rail(net="vdd", voltage=THRESHOLD + OVERDRIVE)}
    design = Design(parts=parts, rails=rails, leak=1e-15)
    roots = [start_conditions.colpitts_lossy_coil(g, COIL, C1, C2, r) for g in gm]
    check(design, {"Q1.gain": gm / OVERDRIVE}, roots)


def hartley_stage() -> Design:
    """L1 at the drain, L2 at the gate, uncoupled, C between them, R at the drain."""
    parts = {
        "L1": inductor("vdd", "d", DRAIN_COIL),
        "R": resistor("vdd", "d", LOAD),
        "L2": inductor("g", "vb", GATE_COIL),
        "C": capacitor("d", "g", C1),
        "Q1": mosfet("d", "g", THRESHOLD, 1.0),
    }
    rails = {
        "vdd": Rail(net="vdd", voltage=20.0),
        "vb": Rail(net="vb", voltage=THRESHOLD + OVERDRIVE),
    }
    return Design(parts=parts, rails=rails, leak=1e-15)


def test_hartley() -> None:
    """Critical g_m R = L1 / L2."""
    gm = SHARES * DRAIN_COIL / GATE_COIL / LOAD
    roots = [start_conditions.hartley(g, DRAIN_COIL, GATE_COIL, C1, LOAD) for g in gm]
    check(hartley_stage(), {"Q1.gain": gm / OVERDRIVE}, roots)


def test_margin_far_from_critical() -> None:
    """A Hartley stage 20 dB below and above its start: the margin says so."""
    gain = np.array([0.1, 10.0]) * DRAIN_COIL / GATE_COIL / LOAD / OVERDRIVE
    growth, _, margin = start_of(hartley_stage(), {"Q1.gain": gain})
    assert (np.sign(growth) == [-1, 1]).all()
    assert margin == pytest.approx([-20.0, 20.0], abs=0.01)


def test_cross_coupled_pair() -> None:
    """R across both drains: g_m R = 2; the gates sit at the drains, g_m = sqrt(2 k I) too."""
    tank = 4e3
    gm = SHARES * 2 / tank
    parts = {
        "LA": inductor("vdd", "a", COIL / 2),
        "LB": inductor("vdd", "b", COIL / 2),
        "C": capacitor("a", "b", C1),
        "R": resistor("a", "b", tank),
        "QA": mosfet("a", "b", THRESHOLD, 1.0),
        "QB": mosfet("b", "a", THRESHOLD, 1.0),
    }
    rails = {"vdd": Rail(net="vdd", voltage=THRESHOLD + OVERDRIVE)}
    design = Design(parts=parts, rails=rails, leak=1e-15)
    gain = gm / OVERDRIVE
    current = gain * OVERDRIVE**2 / 2
    assert gm == pytest.approx(np.sqrt(2 * gain * current))
    roots = [start_conditions.cross_coupled(g, COIL, C1, tank) for g in gm]
    check(design, {"QA.gain": gain, "QB.gain": gain}, roots)


def test_frequency_sensitivity() -> None:
    """Colpitts, d ln f / d ln C1 = -C2 / (2 (C1 + C2)): -3/8 and -1/8 at C1 : C2 = 1 : 3."""
    small, large = 100e-12, 300e-12
    parts = {
        "LF": inductor("vdd", "d", 1.0),
        "C1": capacitor("d", "gnd", small),
        "C2": capacitor("g", "gnd", large),
        "L": inductor("d", "g", COIL),
        "Q1": mosfet("d", "g", THRESHOLD, 1e-6),
    }
    rails = {"vdd": Rail(net="vdd", voltage=THRESHOLD + OVERDRIVE)}
    design = Design(parts=parts, rails=rails, leak=1e-15)
    step = 1e-4
    up = 1 + step * np.array([0.0, 1.0, 0.0])
    over = 1 + step * np.array([0.0, 0.0, 1.0])
    _, frequency, _ = start_of(
        design, {"C1.capacitance": small * up, "C2.capacitance": large * over}
    )
    slopes = np.log(frequency[1:] / frequency[0]) / np.log1p(step)
    assert slopes == pytest.approx([-0.375, -0.125], abs=1e-4)
    series = small * large / (small + large)
    assert frequency[0] == pytest.approx(1 / (2 * pi * sqrt(COIL * series)), rel=1e-6)
