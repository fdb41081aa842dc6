"""Designs used by several tests, built through the Python interface (SI floats)."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from tolsim.design import Design, Rail
from tolsim.parts import BodyDiode, Capacitor, Clamp, DeviceModel, Inductor, Mosfet, Resistor

Floats = NDArray[np.float64]


def circuit_a() -> Design:
    """Reference circuit A: push-pull pair, coil between two series capacitors, crossed dividers."""
    parts = {
        "LA": Inductor(kind="inductor", nets=("vdd", "a"), inductance=18e-6, resistance=0.06),
        "LB": Inductor(kind="inductor", nets=("vdd", "b"), inductance=18e-6, resistance=0.06),
        "CA": Capacitor(kind="capacitor", nets=("a", "gnd"), capacitance=3e-9),
        "CB": Capacitor(kind="capacitor", nets=("b", "gnd"), capacitance=3e-9),
        "CSA": Capacitor(kind="capacitor", nets=("a", "p"), capacitance=510e-12),
        "CSB": Capacitor(kind="capacitor", nets=("b", "q"), capacitance=510e-12),
        "CPQ": Capacitor(kind="capacitor", nets=("p", "q"), capacitance=5e-12),
        "L": Inductor(kind="inductor", nets=("p", "q"), inductance=2.2e-6, resistance=3.6),
        "CFA": Capacitor(kind="capacitor", nets=("q", "ga"), capacitance=75e-12),
        "CFB": Capacitor(kind="capacitor", nets=("p", "gb"), capacitance=75e-12),
    }
    for side in "ab":
        up = side.upper()
        gate = f"g{side}"
        parts |= {
            f"CG{up}": Capacitor(kind="capacitor", nets=(gate, "gnd"), capacitance=1.6e-9),
            f"RB{up}": Resistor(kind="resistor", nets=("vb", gate), resistance=3.3e3),
            f"RG{up}": Resistor(kind="resistor", nets=(gate, "gnd"), resistance=47e3),
            f"Z{up}": Clamp(
                kind="clamp", nets=(gate, "gnd"), voltage=18.0, resistance=0.2, knee=0.2
            ),
            f"Q{up}": Mosfet(
                kind="mosfet",
                drain=side,
                gate=gate,
                source_net="gnd",
                model=DeviceModel(threshold=3.4, gain=11.0, cgd0=280e-12, cds0=1400e-12),
                knee=0.15,
                body_diode=BodyDiode(voltage=0.75, resistance=0.02, knee=0.05),
            ),
        }
    rails = {"vdd": Rail(net="vdd", voltage=24.0), "vb": Rail(net="vb", voltage=4.2)}
    return Design(parts=parts, rails=rails)


def typical_values(design: Design, units: int = 1) -> dict[str, Floats]:
    """Part values of identical units straight from the records (no spread model involved)."""
    values: dict[str, float] = {}
    for ref, part in design.parts.items():
        match part:
            case Mosfet():
                assert part.model is not None
                for name in ("threshold", "gain", "drift_resistance", "cgs", "cgd0", "cds0"):
                    values[f"{ref}.{name}"] = getattr(part.model, name)
            case Capacitor():
                values[f"{ref}.capacitance"] = part.capacitance
                values[f"{ref}.esr"] = part.esr or 0.0
                values[f"{ref}.largest_share"] = 1.0 / part.pieces
            case Inductor():
                values[f"{ref}.inductance"] = part.inductance or 0.0
                values[f"{ref}.resistance"] = part.resistance or 0.0
            case _:
                for name in part.QUANTITIES:
                    values[f"{ref}.{name}"] = getattr(part, name)
    for name, rail in design.rails.items():
        values[f"{name}.voltage"] = rail.voltage
    values["ambient"] = 25.0
    return {key: np.full(units, float(value)) for key, value in values.items()}


def scattered(
    values: Mapping[str, Floats], rng: np.random.Generator, shares: Mapping[str, float]
) -> dict[str, Floats]:
    """Values with uniform relative scatter; `shares` maps a quantity name to its half width."""
    changed = dict(values)
    for key, value in values.items():
        width = shares.get(key.split(".")[-1], 0.0)
        if width:
            changed[key] = value * (1 + width * rng.uniform(-1, 1, value.shape))
    return changed


CIRCUIT_A_SPREAD = {"capacitance": 0.05, "inductance": 0.10, "threshold": 0.10, "gain": 0.15} | {
    "resistance": 0.05,
    "cgd0": 0.05,
    "cds0": 0.05,
}
