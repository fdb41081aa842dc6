"""The chain from spread tables to an answer on two cases with closed forms.

Sampling -> part values -> circuit -> bias and modes -> yield or distribution: a start yield of
0.949911, and the frequency of an LC circuit with 5 % parts (both worked out by the project).
"""

from __future__ import annotations

from math import log, pi, sqrt

import numpy as np
import pytest
from scipy.stats import norm
from small_study import study, tables
from stages import capacitor, inductor, mosfet, resistor

from tolsim.circuit.bias import bias_point
from tolsim.circuit.startup import modes
from tolsim.circuit.thermal import Case
from tolsim.design import Design, Rail, Study
from tolsim.spread.part_values import part_values
from tolsim.spread.sampling import draw, factors
from tolsim.stats.percentiles import percentiles
from tolsim.stats.proportion import share_interval

TABLES = b"""
[table.threshold]
title = "Threshold 3 V, 0.3 V sigma, shared by the reel"
for = "mosfet"
basis = "guess"
source = "made for a test"
[table.threshold.threshold]
lot = {law = "truncated-normal", half_width = "60 %", sigma = "10 %"}

[table.bias]
title = "Bias 4 V, 50 mV sigma"
for = "rail"
basis = "guess"
source = "made for a test"
[table.bias.voltage]
tolerance = {law = "truncated-normal", half_width = "7.5 %", sigma = "1.25 %"}

[table.coil]
title = "5 % coil"
for = "inductor"
basis = "guess"
source = "made for a test"
[table.coil.inductance]
tolerance = {law = "uniform", half_width = "5 %"}

[table.capacitor]
title = "5 % capacitor"
for = "capacitor"
basis = "guess"
source = "made for a test"
[table.capacitor.capacitance]
tolerance = {law = "uniform", half_width = "5 %"}
"""

UNITS = 20_000
MANY = 200_000  # the tank alone is quick
GAIN, HALF_LOAD, FEEDBACK = 0.2, 100.0, 0.1


def drawn(case: Study, seed: int, count: int) -> tuple[Case, np.ndarray, np.ndarray]:
    """Units of a study, growth and frequency of their leading mode."""
    spread = tables(TABLES)
    draws = draw(factors(case, spread), seed, 0, count)
    units = Case(case.design, part_values(case, spread, "room", "normal", draws), heated=False)
    network = units.network(units.cold_junctions())
    bias = bias_point(network)
    assert bias.settled.all()
    lead = modes(network, bias, 2 * pi * 10e6)
    return units, lead.growth, lead.frequency


def divider_pair() -> Study:
    """Push-pull pair with a tenth of the opposite drain on each gate, by capacitive dividers."""
    parts = {
        "RT": resistor("a", "b", 2 * HALF_LOAD),
        "LT": inductor("a", "b", 0.25e-6),
        "CT": capacitor("a", "b", 0.9e-9),
    }
    for side, other in ("ab", "ba"):
        gate = f"g{side}"
        parts |= {
            f"L{side}": inductor("vdd", side, 1e-3, 0.01),
            f"C{side}": capacitor(other, gate, 10e-12),
            f"CG{side}": capacitor(gate, "gnd", 90e-12),
            f"RB{side}": resistor("vb", gate, 1e8),
            f"Q{side}": mosfet(side, gate, 3.0, GAIN, knee=0.02, spread="threshold", reel="fets"),
        }
    rails = {
        "vdd": Rail(net="vdd", voltage=20.0),
        "vb": Rail(net="vb", voltage=4.0, spread="bias"),
    }
    return study(parts, rails).model_copy(
        update={"design": Design(parts=parts, rails=rails, leak=1e-15)}
    )


def test_start_yield() -> None:
    """Bias N(4, 0.05), threshold N(3, 0.3): P = Phi[(4 - 3 - 0.5) / sqrt(sum)] = 0.949911.

    It starts when g_m (R_p / 2) k > 1, that is when bias - threshold > 1 / (0.2 x 100 x 0.1).
    """
    units, growth, _ = drawn(divider_pair(), seed=11, count=UNITS)
    starts = growth > 0
    needed = 1 / (GAIN * HALF_LOAD * FEEDBACK)
    over = units.values["vb.voltage"] - units.values["Qa.threshold"] - needed
    clear = np.abs(over) > 2e-3  # V; the gates' bias resistors and the chokes cost a little
    assert (starts == (over > 0))[clear].all()
    assert clear.mean() > 0.99
    exact = norm.cdf((4.0 - 3.0 - needed) / sqrt(0.05**2 + 0.3**2))
    assert exact == pytest.approx(0.949911, abs=1e-6)
    low, high = share_interval(int(starts.sum()), UNITS, 0.95)
    assert low < exact < high
    assert high - low < 0.007


def tank() -> Study:
    """A 10 MHz tank of 5 % parts beside a transistor that does not conduct."""
    coil = 1e-6
    parts = {
        "L1": inductor("vdd", "d", coil),
        "C1": capacitor("d", "gnd", 1 / (coil * (2 * pi * 10e6) ** 2)),
        "R1": resistor("d", "gnd", 1e5),
        "Q1": mosfet("d", "gnd", 3.0, 1e-6),
    }
    parts["L1"] = parts["L1"].model_copy(update={"spread": "coil"})
    parts["C1"] = parts["C1"].model_copy(update={"spread": "capacitor"})
    return study(parts, {"vdd": Rail(net="vdd", voltage=10.0)})


def test_frequency_of_five_percent_parts() -> None:
    """f / f0 = 1 / sqrt(a b), a and b uniform in 1 +- 5 %: moments and quantiles in closed form.

    With t = 0.05: E[a^-1/2] = (sqrt(1 + t) - sqrt(1 - t)) / t, E[1/a] = ln[(1 + t)/(1 - t)] / 2t.
    """
    _, _, frequency = drawn(tank(), seed=3, count=MANY)
    ratio = frequency / 10e6
    t = 0.05
    first = (sqrt(1 + t) - sqrt(1 - t)) / t
    mean, second = first**2, (log((1 + t) / (1 - t)) / (2 * t)) ** 2
    deviation = sqrt(second - mean**2)
    assert (mean, deviation) == pytest.approx((1.000625782, 0.020442875), abs=1e-9)
    assert ratio.mean() == pytest.approx(mean, abs=3 * deviation / sqrt(MANY))
    assert ratio.std() == pytest.approx(deviation, rel=4e-3)
    assert ratio.min() >= 0.952381
    assert ratio.max() <= 1.052632
    shares = (0.01, 0.05, 0.50, 0.95, 0.99)
    known = np.array([0.9588454, 0.9669791, 1.0004101, 1.0354454, 1.0448640])
    found = percentiles(ratio, shares, 0.99)
    assert (found.low < known).all()
    assert (known < found.high).all()
