"""The self-oscillating push-pull pair against the current-mode class-D stage and the ideal relay.

H. Kobayashi, J. M. Hinrichs, P. M. Asbeck, "Current-mode class-D power amplifiers for high-
efficiency RF applications", IEEE Trans. Microwave Theory Tech. 49 (2001) 2480-2485 (from memory);
finite Q: closed form of `references.relay`.

What limits the agreement: the switches' resistance 1 / (k vgs), which is large while the gate, the
other drain, is near zero (at Q = 2 the more so, 3e-4), and the chokes, 1000 times the coil.
"""

from __future__ import annotations

from math import pi, sqrt

import numpy as np
import pytest
from references.relay import RIPPLE_TWO_CHOKES, relay
from stages import CHOKE, PAIR_FREQUENCY, PAIR_LOAD, crossed_pair, units_of

from tolsim.circuit.orbit import Status
from tolsim.circuit.shooting import Frame, Start, shoot
from tolsim.design import Design
from tolsim.figures import measure_orbits

STEPS = 1024


def settle(q: float, design: Design | None = None):
    """Figures and waves of the pair (or what was made of it), started from the relay's currents."""
    case = units_of(design or crossed_pair(q))
    network = case.network(case.cold_junctions())
    ideal = relay(q)
    feed = ideal.power * 100.0 / PAIR_LOAD / 2  # of each choke
    tank = 2 * feed * 2 / pi * q
    size = {"LA": feed, "LB": feed, "LT": tank, "a": 50 * pi, "b": 50 * pi}
    begin = {"LA": feed, "LB": feed, "LT": -tank}
    pin = {"a": 1.0, "b": -1.0}  # phase: the tank voltage passes through zero
    scale, x0, row = (
        np.array([[numbers.get(name, 0.0) for name in network.index]])
        for numbers in (size, begin, pin)
    )
    frame = Frame(scale[0], x0[0], row[0] / np.linalg.norm(row), network.index["a"], driven=False)
    period = 1 / (PAIR_FREQUENCY * ideal.frequency)
    start = Start(x0, np.array([period]), case.cold_junctions())
    orbit = shoot(case, start, frame, STEPS, 20, "test")
    assert orbit.status[0] == Status.SETTLED
    figures = {name: float(value[0]) for name, value in measure_orbits(case, orbit).items()}
    waves = {name: orbit.samples[:-1, 0, column] for name, column in network.index.items()}
    return figures, waves


@pytest.mark.parametrize(
    ("q", "frequency", "peak", "power"),
    [(2.0, 0.968246, 3.19681, 4.99297), (10.0, 0.998749, 3.14369, 4.93700)],
)
def test_relay(q: float, frequency: float, peak: float, power: float) -> None:
    """Finite Q: frequency, drain peak and power of the ideal relay to 6e-4, below resonance."""
    figures, waves = settle(q)
    supply = waves["a"].mean()
    assert figures["frequency"] / PAIR_FREQUENCY == pytest.approx(frequency, rel=6e-4)
    assert figures["QA.drain_peak"] / supply == pytest.approx(peak, rel=6e-4)
    assert figures["RT.dissipation"] * PAIR_LOAD / supply**2 == pytest.approx(power, rel=6e-4)
    assert figures["frequency"] < PAIR_FREQUENCY  # Groszkowski, Proc. IRE 21 (1933) 958-981


def test_current_mode_class_d() -> None:
    """Q = 40: drain peak pi V, power pi^2 V^2 / 2R, currents, choke ripple of the ideal."""
    figures, waves = settle(40.0)
    supply, current = waves["a"].mean(), figures["supply_current"]
    assert figures["QA.drain_peak"] / supply == pytest.approx(pi, rel=3e-4)
    assert figures["RT.dissipation"] * PAIR_LOAD / supply**2 == pytest.approx(pi**2 / 2, rel=3e-4)
    assert supply / current == pytest.approx(2 * PAIR_LOAD / pi**2, rel=5e-4)
    assert np.sqrt(np.mean(waves["a"] ** 2)) / supply == pytest.approx(pi / 2, rel=3e-4)
    assert figures["QA.drain_current_rms"] / current == pytest.approx(1 / sqrt(2), rel=2e-3)
    assert figures["QA.drain_current_peak"] / current == pytest.approx(1.0, rel=6e-3)
    assert np.ptp(waves["LT"]) / 2 / current == pytest.approx(40 * 2 / pi, rel=2e-3)
    w = 2 * pi * figures["frequency"]
    choke = CHOKE * PAIR_LOAD / (40 * 2 * pi * PAIR_FREQUENCY)
    assert np.ptp(waves["LA"]) * w * choke / supply == pytest.approx(RIPPLE_TWO_CHOKES, rel=5e-4)


def test_mean_drain_voltage_and_energy() -> None:
    """No mean voltage over a choke's inductance, and what goes in comes out."""
    figures, waves = settle(10.0)
    assert waves["a"].mean() == pytest.approx(100.0 - 10.0 * waves["LA"].mean(), rel=1e-6)
    assert abs(figures["energy_balance"]) < 1e-4
    assert figures["RT.dissipation"] < figures["input_power"]
