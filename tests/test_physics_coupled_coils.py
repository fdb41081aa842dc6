"""Coupled coils: the load reflected into a coil, its efficiency, split resonances.

Reflected impedance Z_r = (w M)^2 / (R2 + j w L2) is in any circuit text; as the transformer model
of an inductive discharge: R. B. Piejak, V. A. Godyak, B. M. Alexandrovich, Plasma Sources Sci.
Technol. 1 (1992) 179-186.  Numbers worked out by the project for 13.56 MHz.
"""

from __future__ import annotations

from math import pi, sqrt

import numpy as np
import pytest
from stages import capacitor, inductor, mosfet, nominal_figures, resistor, units_of

from tolsim.circuit.bias import bias_point
from tolsim.circuit.startup import modes
from tolsim.design import Design, Rail
from tolsim.parts import Coupling, Drive, Load

OMEGA = 2 * pi * 13.56e6
L1, R1, L2, R2, K = 2e-6, 0.3, 0.2e-6, 5.0, 0.4
LOAD = Load(kind="load", coil="L1", coupling=K, inductance=L2, resistance=R2)


def response(design: Design, net: str) -> tuple[np.ndarray, dict[str, int]]:
    """States under a unit current into a net at 13.56 MHz, from the network's own matrices."""
    case = units_of(design)
    network = case.network(case.cold_junctions())
    inflow = np.zeros(network.states)
    inflow[network.index[net]] = 1.0
    return np.linalg.solve(1j * OMEGA * network.E[0] + network.F[0], inflow), dict(network.index)


def test_reflected_impedance() -> None:
    """Z_r = 7.365807 - j 25.102669 ohm, L_eff = 1.705368 uH, link efficiency 0.960865."""
    design = Design(parts={"L1": inductor("a", "gnd", L1, R1), "LAMP": LOAD}, rails={}, leak=1e-15)
    x, index = response(design, "a")
    impedance = x[index["a"]]  # of a unit current
    reflected = impedance - R1 - 1j * OMEGA * L1
    assert reflected == pytest.approx(7.365807 - 25.102669j, rel=1e-6)
    effective = impedance.imag / OMEGA
    assert effective == pytest.approx(1.705368e-6, rel=1e-6)
    assert sqrt(L1 / effective) == pytest.approx(1.0829, abs=1e-4)  # frequency rises
    lost, used = (abs(x[index[name]]) ** 2 * r for name, r in (("L1", R1), ("LAMP", R2)))
    assert used / (lost + used) == pytest.approx(0.960865, rel=1e-6)


def test_most_reflected_resistance() -> None:
    """At R2 = w L2 it is k^2 w L1 / 2 = 13.6320 ohm."""
    load = LOAD.model_copy(update={"resistance": OMEGA * L2})
    design = Design(parts={"L1": inductor("a", "gnd", L1, R1), "LAMP": load}, rails={}, leak=1e-15)
    x, index = response(design, "a")
    assert x[index["a"]].real - R1 == pytest.approx(13.6320, rel=1e-5)


def test_efficiency_of_a_driven_link() -> None:
    """The same efficiency from the orbit: a sine source into the coil, heat in coil and load."""
    source = Drive(
        kind="drive",
        nets=("a", "gnd"),
        shape="sine",
        low=-10.0,
        high=10.0,
        frequency=13.56e6,
        resistance=50.0,
    )
    parts = {"V1": source, "L1": inductor("a", "gnd", L1, R1), "LAMP": LOAD}
    # a transistor that never conducts: a stage has one
    parts |= {"RD": resistor("vdd", "d", 1e3), "Q1": mosfet("d", "gnd", 5.0, 1e-6)}
    design = Design(parts=parts, rails={"vdd": Rail(net="vdd", voltage=10.0)}, leak=1e-12)
    found = nominal_figures(design, 256)
    coil, load = found["L1.loss"], found["LAMP.dissipation"]
    assert load / (coil + load) == pytest.approx(0.960865, rel=1e-5)
    current = 10.0 / abs(50.0 + R1 + 7.365807 + 1j * (OMEGA * L1 - 25.102669))
    assert found["L1.current_peak"] == pytest.approx(current, rel=3e-4)


@pytest.mark.parametrize("k", [0.3, -0.3])
def test_split_resonances(k: float) -> None:
    """Two equal resonators split to f0 / sqrt(1 +- k): 0.877058 and 1.195229 at k = 0.3."""
    coil, tank = 1e-6, 100e-12
    parts = {
        "L1": inductor("a", "gnd", coil),
        "L2": inductor("b", "gnd", coil),
        "C1": capacitor("a", "gnd", tank),
        "C2": capacitor("b", "gnd", tank),
        "K1": Coupling(kind="coupling", inductors=("L1", "L2"), coupling=k),
    }
    case = units_of(Design(parts=parts, rails={}, leak=1e-12))
    network = case.network(case.cold_junctions())
    f0 = 1 / (2 * pi * sqrt(coil * tank))
    found = modes(network, bias_point(network), 2 * pi * f0).eigenvalues[0]
    lines = np.unique(np.round(np.abs(found.imag) / (2 * pi) / f0, 6))
    assert lines == pytest.approx([0.877058, 1.195229], abs=2e-6)
