"""Stages with gate diodes, clamps and coupled loads against equations written out by hand.

`references.circuit_b`: push-pull parallel tank whose gates are pulled down through diodes to the
opposite drain and clamped; `references.circuit_c`: one switch with a capacitive feedback divider.
Both drive a coupled load loop.  Accuracy to hold at the default steps: as for circuit A.
"""

from __future__ import annotations

import numpy as np
import pytest
from references import circuit_b, circuit_c
from references.orbit import Orbit, peak, rms, trough
from stages import capacitor, inductor, mosfet, nominal_figures, resistor

from tolsim.design import Design, Rail
from tolsim.parts import BodyDiode, Clamp, Diode, Load

STEPS = 128
BODY = BodyDiode(voltage=0.75, resistance=0.02, knee=0.05)


def push_pull() -> Design:
    """Circuit B as a design."""
    c = circuit_b.Values()
    parts = {
        "CT": capacitor("a", "b", c.tank),
        "LT": inductor("a", "b", c.coil, c.coil_resistance),
        "W": Load(
            kind="load",
            coil="LT",
            coupling=c.coupling,
            inductance=c.loop,
            resistance=c.loop_resistance,
        ),
    }
    for side, other in ("ab", "ba"):
        gate, up = f"g{side}", side.upper()
        parts |= {
            f"L{up}": inductor("vdd", side, c.choke, c.choke_resistance),
            f"R{up}": resistor("vg", gate, c.pull_up),
            f"D{up}": Diode(
                kind="diode",
                anode=gate,
                cathode=other,
                voltage=c.diode_voltage,
                resistance=1 / c.diode_conductance,
                knee=c.diode_knee,
                capacitance=c.diode_capacitance,
            ),
            f"Z{up}": Clamp(
                kind="clamp",
                nets=(gate, "gnd"),
                voltage=c.clamp_voltage,
                resistance=1 / c.clamp_conductance,
                knee=c.clamp_knee,
            ),
            f"Q{up}": mosfet(
                side,
                gate,
                c.threshold,
                c.gain,
                cgs=c.gate_capacitor,
                cgd0=c.cgd0,
                cds0=c.cds0,
                knee=c.knee,
                body_diode=BODY,
            ),
        }
    rails = {
        "vdd": Rail(net="vdd", voltage=c.supply),
        "vg": Rail(net="vg", voltage=c.gate_rail),
    }
    return Design(parts=parts, rails=rails, leak=c.leak)


def single_ended() -> Design:
    """Circuit C as a design."""
    c = circuit_c.Values()
    parts = {
        "LC": inductor("vdd", "d", c.choke, c.choke_resistance),
        "CD": capacitor("d", "gnd", c.shunt),
        "CS": capacitor("d", "e", c.series),
        "LT": inductor("e", "x", c.coil, c.coil_resistance),
        "W": Load(
            kind="load",
            coil="LT",
            coupling=c.coupling,
            inductance=c.loop,
            resistance=c.loop_resistance,
        ),
        "CX": capacitor("x", "gnd", c.foot),
        "CF": capacitor("x", "y", c.feedback),
        "CY": capacitor("y", "gnd", c.tap),
        "RY": resistor("y", "gnd", c.tap_resistor),
        "RD": resistor("y", "g", c.delay),
        "RB": resistor("vb", "g", c.bias_resistor),
        "Q1": mosfet(
            "d",
            "g",
            c.threshold,
            c.gain,
            cgs=c.gate_capacitor,
            cgd0=c.cgd0,
            cds0=c.cds0,
            knee=c.knee,
            body_diode=BODY,
        ),
    }
    rails = {"vdd": Rail(net="vdd", voltage=c.supply), "vb": Rail(net="vb", voltage=c.bias)}
    return Design(parts=parts, rails=rails, leak=c.leak)


def check(found: dict[str, float], orbit: Orbit, known: dict[str, float]) -> None:
    assert found["frequency"] == pytest.approx(orbit.frequency, rel=2e-4)
    for name, value in known.items():
        assert found[name] == pytest.approx(value, rel=2e-3), name
    assert abs(found["energy_balance"]) < 5e-3


@pytest.mark.slow
def test_push_pull_with_gate_diodes_and_clamps() -> None:
    """Circuit B: frequency, stresses, diode and clamp currents, supply, output power."""
    c, orbit = circuit_b.Values(), circuit_b.settled_orbit(circuit_b.Values())
    a, b, ga, ia, ib, coil, loop = (
        orbit.states[:, k]
        for k in (
            *(circuit_b.A, circuit_b.B, circuit_b.GA, circuit_b.IA),
            *(circuit_b.IB, circuit_b.IL, circuit_b.IW),
        )
    )
    soft = np.logaddexp(0, (ga - b - c.diode_voltage) / c.diode_knee) * c.diode_knee
    clamped = np.logaddexp(0, (ga - c.clamp_voltage) / c.clamp_knee) * c.clamp_knee
    known = {
        "QA.drain_peak": peak(a),
        "QA.gate_positive_peak": peak(ga),
        "DA.reverse_peak": peak(b - ga),
        "ZA.current_rms": c.clamp_conductance * rms(clamped),
        "LA.current_rms": rms(ia),
        "LT.current_rms": rms(coil),
        "W.current_rms": rms(loop),
        "vdd.current_mean": (ia + ib).mean(),
    }
    found = nominal_figures(push_pull(), STEPS)
    check(found, orbit, known)
    # the diode conducts in a pulse of a few steps with vertical edges, its peak most of all
    current = c.diode_conductance * soft
    assert found["DA.current_rms"] == pytest.approx(rms(current), rel=0.02)
    assert found["DA.dissipation"] == pytest.approx((current * (ga - b)).mean(), rel=0.02)
    assert found["DA.current_peak"] == pytest.approx(peak(current), rel=0.2)


@pytest.mark.slow
def test_single_ended_with_divider() -> None:
    """Circuit C: frequency, stresses, supply current, output power."""
    orbit = circuit_c.settled_orbit(circuit_c.Values())
    d, g, feed, coil, loop = (
        orbit.states[:, k]
        for k in (circuit_c.D, circuit_c.G, circuit_c.IC, circuit_c.IL, circuit_c.IW)
    )
    known = {
        "Q1.drain_peak": peak(d),
        "Q1.gate_positive_peak": peak(g),
        "Q1.gate_negative_peak": -trough(g),
        "LC.current_rms": rms(feed),
        "LT.current_peak": max(peak(coil), -trough(coil)),
        "LT.current_rms": rms(coil),
        "W.current_rms": rms(loop),
        "vdd.current_mean": feed.mean(),
    }
    check(nominal_figures(single_ended(), STEPS), orbit, known)
