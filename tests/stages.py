"""Textbook stages as designs, and one-line ways to solve them: for the tests of physics."""

from __future__ import annotations

from collections.abc import Mapping
from math import pi

import numpy as np
from circuits import typical_values
from numpy.typing import NDArray

from tolsim.circuit.nominal import find_nominal
from tolsim.circuit.thermal import Case
from tolsim.design import Design, Rail
from tolsim.figures import measure_orbits
from tolsim.parts import (
    Capacitor,
    Coupling,
    DeviceModel,
    Diode,
    Drive,
    Inductor,
    Mosfet,
    Resistor,
)

Floats = NDArray[np.float64]


def capacitor(plus: str, minus: str, capacitance: float, **keys: object) -> Capacitor:
    return Capacitor(kind="capacitor", nets=(plus, minus), capacitance=capacitance, **keys)


def inductor(plus: str, minus: str, inductance: float, resistance: float = 0.0) -> Inductor:
    return Inductor(
        kind="inductor", nets=(plus, minus), inductance=inductance, resistance=resistance
    )


def resistor(plus: str, minus: str, resistance: float, **keys: object) -> Resistor:
    return Resistor(kind="resistor", nets=(plus, minus), resistance=resistance, **keys)


def mosfet(drain: str, gate: str, threshold: float, gain: float, **keys: object) -> Mosfet:
    """MOSFET without capacitance of its own unless `keys` give it some."""
    model = {
        name: keys.pop(name) for name in ("cgs", "cgd0", "cds0", "drift_resistance") if name in keys
    }
    device = DeviceModel(threshold=threshold, gain=gain, **model)
    return Mosfet(kind="mosfet", drain=drain, gate=gate, model=device, **keys)


def units_of(
    design: Design, changes: Mapping[str, Floats] | None = None, *, heated: bool = False
) -> Case:
    """As many units as the changed part values have entries, the rest as in the records."""
    changes = {key: np.atleast_1d(value) for key, value in (changes or {}).items()}
    count = max((len(value) for value in changes.values()), default=1)
    return Case(design, typical_values(design, count) | changes, heated)


def nominal_figures(design: Design, steps: int, *, heated: bool = False) -> dict[str, float]:
    """Figures of the nominal orbit."""
    nominal = find_nominal(units_of(design, heated=heated), steps)
    assert nominal.found
    figures = measure_orbits(nominal.case, nominal.solution)
    return {name: float(value[0]) for name, value in figures.items()}


# The driven stage with one switch: supply, load and frequency, chosen once for all tests of it.
SUPPLY, LOAD, FREQUENCY = 48.0, 13.289, 13.56e6
DRIVE_HIGH, SWITCH_THRESHOLD = 10.0, 5.0


def class_e(
    shunt: float,
    series: float,
    loaded_q: float,
    feed: float,
    *,
    on_resistance: float = 1e-4,
    linear_shunt: bool = True,
    supply: float = SUPPLY,
    **switch: object,
) -> Design:
    """Driven class-E stage from w C1 R, w C2 R, loaded Q, w L1 / R and the switch's r_on / R.

    The gate swings from 0 to twice the threshold in 0.2 % of a cycle, so that the switch is on
    for half of it; its resistance when on is 1 / (gain times overdrive).
    """
    w = 2 * pi * FREQUENCY
    gain = 1 / (on_resistance * LOAD * (DRIVE_HIGH - SWITCH_THRESHOLD))
    parts = {
        "LF": inductor("vdd", "d", feed * LOAD / w),
        "CT": capacitor("d", "e", series / (w * LOAD)),
        "LT": inductor("e", "o", loaded_q * LOAD / w),
        "RL": resistor("o", "gnd", LOAD, delivers_output=True),
        "V1": Drive(
            kind="drive",
            nets=("g", "gnd"),
            high=DRIVE_HIGH,
            frequency=FREQUENCY,
            rise_time=0.002 / FREQUENCY,
            resistance=1.0,
        ),
        "Q1": mosfet("d", "g", SWITCH_THRESHOLD, gain, **{"cgs": 1e-12, **switch}),
    }
    if linear_shunt:
        parts["CS"] = capacitor("d", "gnd", shunt / (w * LOAD))
    return Design(parts=parts, rails={"vdd": Rail(net="vdd", voltage=supply)}, leak=1e-12)


# The self-oscillating push-pull pair: a relay, when its switches are good enough.
PAIR_SUPPLY, PAIR_LOAD, PAIR_FREQUENCY = 100.0, 1e3, 1e6
CHOKE = 1000.0  # of the tank coil


def crossed_pair(q: float, *, gain: float = 3.0, choke_resistance: float = 10.0) -> Design:
    """Cross-coupled near-ideal switches, two stiff chokes, parallel tank of R / (w0 L) = q.

    The choke resistance only bounds the current at the bias point, where both switches conduct:
    what the stage sees as its supply is the mean drain voltage, V - I R.
    """
    w = 2 * pi * PAIR_FREQUENCY
    coil = PAIR_LOAD / (q * w)
    parts = {
        "CT": capacitor("a", "b", 1 / (w * w * coil)),
        "LT": inductor("a", "b", coil),
        "RT": resistor("a", "b", PAIR_LOAD, delivers_output=True),
    }
    for side, other in ("ab", "ba"):
        parts[f"L{side.upper()}"] = inductor("vdd", side, CHOKE * coil, choke_resistance)
        parts[f"Q{side.upper()}"] = mosfet(side, other, 0.05, gain, cgs=1e-15, knee=0.01)
    rails = {"vdd": Rail(net="vdd", voltage=PAIR_SUPPLY)}
    return Design(parts=parts, rails=rails, leak=1e-12)


def self_biased() -> Design:
    """Drain tank with a coupled gate coil; a diode at the gate sets the bias by the amplitude.

    Five states, and it can do everything: run, die (R1 too small), burst (RG times CC too long
    against the tank's own decay), run hot.
    """
    parts = {
        "L1": inductor("vdd", "d", 1e-6, 0.01),
        "L2": inductor("w", "gnd", 1e-6 / 9, 0.01),
        "K1": Coupling(kind="coupling", inductors=("L1", "L2"), coupling=0.95),
        "C1": capacitor("d", "gnd", 1e-9),
        "R1": resistor("vdd", "d", 632.0, delivers_output=True),
        "CC": capacitor("w", "g", 200e-12),
        "RG": resistor("vb", "g", 1e3),
        "D1": Diode(kind="diode", anode="g", cathode="k", voltage=0.7, resistance=5.0, knee=0.1),
        "Q1": mosfet(
            *("d", "g", 3.0, 0.05), cgs=20e-12, cgd0=2e-12, cds0=50e-12, thermal_resistance=20.0
        ),
    }
    rails = {
        "vdd": Rail(net="vdd", voltage=48.0),
        "vb": Rail(net="vb", voltage=4.0),
        "vk": Rail(net="k", voltage=4.5),
    }
    return Design(parts=parts, rails=rails)
