"""Stamps of every part kind against matrices written down by hand."""

from __future__ import annotations

import numpy as np
import pytest
from stages import capacitor, inductor, mosfet, resistor, units_of

from tolsim.circuit.bias import bias_point
from tolsim.circuit.network import DriveShape, Network
from tolsim.design import Design, Rail
from tolsim.parts import (
    AnyPart,
    Clamp,
    Coupling,
    Diode,
    Drive,
    Load,
    Potentiometer,
)

LEAK = 1e-9


def network_of(
    parts: dict[str, AnyPart],
    rails: dict[str, Rail] | None = None,
    changes: dict[str, np.ndarray] | None = None,
) -> Network:
    case = units_of(Design(parts=parts, rails=rails or {}, leak=LEAK), changes)
    return case.network(case.cold_junctions())


def test_rlc_between_nets() -> None:
    """R, L (with winding resistance) and C between two unknown nets."""
    network = network_of(
        {
            "R1": resistor("a", "b", 50.0),
            "C1": capacitor("a", "b", 2e-9),
            "L1": inductor("a", "b", 3e-6, 0.7),
        }
    )
    assert dict(network.index) == {"a": 0, "b": 1, "L1": 2}
    g = 1 / 50.0
    F = [[g + LEAK, -g, 1], [-g, g + LEAK, -1], [-1, 1, 0.7]]
    E = [[2e-9, -2e-9, 0], [-2e-9, 2e-9, 0], [0, 0, 3e-6]]
    np.testing.assert_allclose(network.F[0], F, rtol=1e-14)
    np.testing.assert_allclose(network.E[0], E, rtol=1e-14)
    assert not network.source.any()


def test_parts_at_an_ideal_rail() -> None:
    """The rail's column moves to the right-hand side; its current is counted."""
    parts = {
        "R1": resistor("vdd", "a", 50.0),
        "L1": inductor("vdd", "a", 3e-6),
        "C1": capacitor("vdd", "a", 1e-9),
    }
    network = network_of(parts, {"vdd": Rail(net="vdd", voltage=12.0)})
    assert dict(network.index) == {"a": 0, "L1": 1}
    np.testing.assert_allclose(network.source[0], [12.0 / 50.0, 12.0])
    np.testing.assert_allclose(network.F[0], [[1 / 50.0 + LEAK, -1], [1, 0]])
    np.testing.assert_allclose(network.E[0], [[1e-9, 0], [0, 3e-6]])
    x = np.array([[2.0, 0.3]])  # 2 V on a, 0.3 A in the coil
    assert network.supplies["vdd"].at(x, np.zeros((1, 0)))[0] == pytest.approx(10 / 50.0 + 0.3)


def test_rail_with_source_resistance() -> None:
    """Its net becomes unknown; the current is the drop over the resistance."""
    network = network_of(
        {"R1": resistor("vdd", "gnd", 10.0)},
        {"vdd": Rail(net="vdd", voltage=12.0, resistance=2.0)},
    )
    bias = bias_point(network)
    assert bias.x[0, network.index["vdd"]] == pytest.approx(10.0)
    assert network.supplies["vdd"].at(bias.x, np.zeros((1, 0)))[0] == pytest.approx(1.0)


def test_couplings_and_loads() -> None:
    """M = k sqrt(L1 L2) off the diagonal; a load is a loop of its own."""
    network = network_of(
        {
            "L1": inductor("a", "gnd", 4e-6),
            "L2": inductor("b", "gnd", 1e-6),
            "K1": Coupling(kind="coupling", inductors=("L1", "L2"), coupling=0.5),
            "W": Load(kind="load", coil="L1", coupling=0.3, inductance=1e-6, resistance=5.0),
        }
    )
    rows = [network.index[name] for name in ("L1", "L2", "W")]
    block = network.E[0][np.ix_(rows, rows)]
    np.testing.assert_allclose(block, 1e-6 * np.array([[4, 1, 0.6], [1, 1, 0], [0.6, 0, 1]]))
    assert network.F[0, network.index["W"], network.index["W"]] == 5.0


def test_loss_of_a_capacitor() -> None:
    """Series resistance makes an inner net between it and the dielectric."""
    network = network_of({"C1": capacitor("a", "gnd", 1e-9, esr=0.5)})
    a, plate = network.index["a"], network.index["C1:plate"]
    assert network.F[0, a, plate] == pytest.approx(-2.0)
    assert network.E[0, plate, plate] == pytest.approx(1e-9)
    assert network.E[0, a, a] == 0


@pytest.mark.parametrize(("setting", "share"), [(0.25, 0.25), (0.0, 0.02), (1.0, 0.98)])
def test_potentiometer(setting: float, share: float) -> None:
    """The wiper divides; it never gets into the end zone of 2 %."""
    part = Potentiometer(
        kind="potentiometer",
        nets=("gnd", "w", "vb"),
        resistance=10e3,
        setting=setting,
        end_zone=0.02,
    )
    network = network_of({"P1": part}, {"vb": Rail(net="vb", voltage=5.0)})
    assert bias_point(network).x[0, network.index["w"]] == pytest.approx(5 * share, rel=1e-4)


def test_ports_are_shared() -> None:
    """A clamp across a gate costs no port of its own; every device finds its port."""
    network = network_of(
        {
            "RD": resistor("vdd", "d", 10.0),
            "RG": resistor("vdd", "g", 10.0),
            "Q1": mosfet("d", "g", 3.0, 1.0),
            "Z1": Clamp(kind="clamp", nets=("g", "gnd"), voltage=10.0, resistance=1.0),
            "D1": Diode(kind="diode", anode="g", cathode="d", voltage=0.7, resistance=1.0),
        },
        {"vdd": Rail(net="vdd", voltage=12.0)},
    )
    assert network.ports["Q1:gs"] == network.ports["Z1"]
    assert network.devices.ports == 3
    gate, drain = network.index["g"], network.index["d"]
    row = network.D[network.ports["D1"]]
    assert row[gate] == 1
    assert row[drain] == -1


def test_series_resistances_of_a_mosfet() -> None:
    """Gate and drift resistance make inner nets, where the intrinsic transistor sits."""
    network = network_of(
        {
            "RD": resistor("vdd", "d", 10.0),
            "RG": resistor("vdd", "g", 10.0),
            "Q1": mosfet("d", "g", 3.0, 1.0, drift_resistance=0.1, gate_resistance=2.0),
        },
        {"vdd": Rail(net="vdd", voltage=12.0)},
    )
    assert network.F[0, network.index["d"], network.index["Q1:drain"]] == pytest.approx(-10.0)
    assert network.F[0, network.index["g"], network.index["Q1:gate"]] == pytest.approx(-0.5)
    row = network.D[network.ports["Q1:ds"]]
    assert row[network.index["Q1:drain"]] == 1


def shape(**changes: object) -> DriveShape:
    values: dict[str, object] = {"duty": 0.5, "edge": 0.1, "sine": False} | changes
    return DriveShape(
        low=np.array([[-1.0]]),
        high=np.array([[3.0]]),
        duty=np.array([values["duty"]], dtype=float),
        edge=np.array([values["edge"]], dtype=float),
        sine=np.array([values["sine"]]),
    )


def test_drive_waveforms() -> None:
    """Square with edges centred on phase 0 and the duty, sine between its levels."""
    square = shape()
    levels = [square.at(phase)[0, 0] for phase in (0.0, 0.05, 0.25, 0.45, 0.5, 0.55, 0.75, 0.95)]
    assert levels == pytest.approx([1, 3, 3, 3, 1, -1, -1, -1])
    assert square.at(1.25)[0, 0] == square.at(0.25)[0, 0]
    phases = np.arange(4096) / 4096
    for duty in (0.3, 0.5, 0.8):
        mean = np.mean([shape(duty=duty).at(phase)[0, 0] for phase in phases])
        assert mean == pytest.approx(-1 + 4 * duty, abs=2e-3)
    sine = [shape(sine=True).at(phase)[0, 0] for phase in (0.0, 0.25, 0.5, 0.75)]
    assert sine == pytest.approx([1, 3, 1, -1])


def test_drive_as_a_source_with_resistance() -> None:
    """Norton equivalent: conductance on the diagonal, current into its net."""
    source = Drive(
        kind="drive", nets=("g", "gnd"), low=0.0, high=10.0, frequency=1e6, resistance=4.0
    )
    network = network_of({"V1": source, "R1": resistor("g", "gnd", 4.0)})
    g = network.index["g"]
    assert network.F[0, g, g] == pytest.approx(0.5 + LEAK)
    assert network.source_at(0.25)[0, g] == pytest.approx(10 / 4)
    assert network.source_at(0.75)[0, g] == pytest.approx(0.0, abs=1e-12)
    assert network.drive_frequency == 1e6
    assert network.mean_source()[0, g] == pytest.approx(5 / 4, rel=1e-6)


def test_units_keep_their_own_values() -> None:
    """`take` picks units; a batch is its units side by side."""
    parts = {"R1": resistor("vdd", "a", 50.0), "C1": capacitor("a", "gnd", 1e-9)}
    rails = {"vdd": Rail(net="vdd", voltage=12.0)}
    values = np.array([10.0, 20.0, 40.0])
    network = network_of(parts, rails, {"R1.resistance": values})
    assert network.F[:, 0, 0] == pytest.approx(1 / values + LEAK)
    picked = network.take(np.array([2, 0]))
    assert picked.F[:, 0, 0] == pytest.approx(1 / values[[2, 0]] + LEAK)
    assert picked.units == 2
