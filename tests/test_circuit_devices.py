"""Every kind of element: derivatives, conservation of charge, its own law."""

from __future__ import annotations

import numpy as np
import pytest
from circuits import circuit_a, typical_values
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad
from stages import capacitor, inductor, mosfet, resistor, units_of

from tolsim.circuit.devices import soft_ramp
from tolsim.circuit.kernels import element_waves
from tolsim.circuit.network import Network
from tolsim.circuit.thermal import Case
from tolsim.design import Design, Rail
from tolsim.parts import AnyPart, BodyDiode, Clamp, Diode, Inductor

RAILS = {"vdd": Rail(net="vdd", voltage=12.0)}


def network_of(parts: dict[str, AnyPart]) -> Network:
    case = units_of(Design(parts=parts, rails=RAILS))
    return case.network(case.cold_junctions())


def zoo() -> Network:
    """One of every nonlinear kind."""
    return network_of(
        {
            "RD": resistor("vdd", "d", 10.0),
            "RG": resistor("vdd", "g", 10.0),
            "Q1": mosfet("d", "g", 3.0, 2.0, cgd0=100e-12, cds0=300e-12),
            "Q2": mosfet("g", "d", 2.0, 1.0, cgd0=50e-12, cds0=80e-12, grading=0.35),
            "Z1": Clamp(kind="clamp", nets=("g", "gnd"), voltage=8.0, resistance=1.0),
            "Z2": Clamp(
                kind="clamp", nets=("d", "gnd"), voltage=9.0, resistance=1.0, direction="one"
            ),
            "D1": Diode(
                kind="diode",
                anode="g",
                cathode="d",
                voltage=0.7,
                resistance=0.5,
                capacitance=40e-12,
            ),
            "C2": capacitor("d", "g", 1e-9, half_voltage=20.0, bias_floor=0.3),
            "L1": Inductor(
                kind="inductor",
                nets=("d", "gnd"),
                inductance=1e-6,
                resistance=0.1,
                saturation=((2.0, 0.9), (4.0, 0.5), (6.0, 0.3)),
            ),
        }
    )


VOLTS = st.lists(st.floats(-15, 15), min_size=6, max_size=6)


@settings(max_examples=60, deadline=None)
@given(volts=VOLTS)
def test_derivatives(volts: list[float]) -> None:
    """df/dv and dq/dv against central differences, for all kinds at once."""
    network = zoo()
    ports = network.devices.ports
    v = np.array([volts[:ports] + [0.5] * (ports - len(volts))])
    step = 1e-5
    _, _, conductance, capacitance = network.devices.evaluate(v)
    for port in range(ports):
        move = np.zeros_like(v)
        move[0, port] = step
        f_up, q_up, *_ = network.devices.evaluate(v + move)
        f_down, q_down, *_ = network.devices.evaluate(v - move)
        scale_f, scale_q = np.abs(conductance).max() + 1e-3, np.abs(capacitance).max()
        slope_f, slope_q = (f_up - f_down) / (2 * step), (q_up - q_down) / (2 * step)
        np.testing.assert_allclose(conductance[0, :, port], slope_f[0], atol=2e-4 * scale_f)
        np.testing.assert_allclose(capacitance[0, :, port], slope_q[0], atol=2e-4 * scale_q)


def test_soft_ramp() -> None:
    """s ln(1 + exp(u / s)): max(u, 0) far off, s ln 2 at 0, no overflow."""
    u, s = np.array([-1e6, -1.0, 0.0, 1.0, 1e6]), np.array(0.1)
    value, slope = soft_ramp(u, s)
    assert value == pytest.approx(
        [0, 0.1 * np.log1p(np.exp(-10)), 0.1 * np.log(2), 1.0, 1e6], abs=1e-5
    )
    assert slope == pytest.approx([0, 0, 0.5, 1, 1], abs=1e-4)


def channel(vgs: float, vds: float) -> float:
    """Terminal current of a MOSFET of 3 V, 2 A/V^2, its body diode left out."""
    network = network_of(
        {
            "RD": resistor("vdd", "d", 10.0),
            "RG": resistor("vdd", "g", 10.0),
            "Q1": mosfet("d", "g", 3.0, 2.0, knee=0.02),
        }
    )
    v = np.zeros((2, 1, 1))
    v[network.ports["Q1:gs"]], v[network.ports["Q1:ds"]] = vgs, vds
    currents = element_waves(network.devices, v, "current")
    return float((currents["Q1:forward"] + currents["Q1:reverse"])[0, 0])


def test_mosfet_is_square_law() -> None:
    """Saturation k/2 (vgs - Vt)^2, triode k [(vgs - Vt) vds - vds^2 / 2], symmetric."""
    assert channel(5.0, 10.0) == pytest.approx(4.0)
    assert channel(5.0, 0.5) == pytest.approx(2 * (2 * 0.5 - 0.125))
    assert channel(2.0, 10.0) == pytest.approx(0.0, abs=1e-6)
    # source and drain exchanged: gate to the new source is vgs - vds
    assert channel(5.0, -1.0) == pytest.approx(-channel(6.0, 1.0))


def test_body_diode_carries_the_reverse_current() -> None:
    body = BodyDiode(voltage=0.8, resistance=0.1, knee=0.02)
    network = network_of(
        {"RD": resistor("vdd", "d", 10.0), "Q1": mosfet("d", "gnd", 3.0, 2.0, body_diode=body)}
    )
    v = np.zeros((1, network.devices.ports))
    v[0, network.ports["Q1:ds"]] = -1.3
    current = network.devices.evaluate(v)[0][0, network.ports["Q1:ds"]]
    assert current == pytest.approx(-(1.3 - 0.8) / 0.1, rel=1e-6)


def current_of(part: AnyPart, volts: float) -> float:
    network = network_of({"R1": resistor("vdd", "a", 10.0), "X": part})
    return float(network.devices.evaluate(np.array([[volts]]))[0][0, 0])


def test_clamps() -> None:
    """Both ways at +-V; one way with a diode drop backwards."""
    both = Clamp(kind="clamp", nets=("a", "gnd"), voltage=10.0, resistance=2.0, knee=0.02)
    one = both.model_copy(update={"direction": "one"})
    assert [current_of(both, v) for v in (12, 5, -5, -12)] == pytest.approx([1, 0, 0, -1], abs=1e-9)
    assert [current_of(one, v) for v in (12, 5, -0.3)] == pytest.approx([1, 0, 0], abs=1e-6)
    assert current_of(one, -2.7) == pytest.approx(-1.0)


def test_diode() -> None:
    part = Diode(kind="diode", anode="a", cathode="gnd", voltage=0.7, resistance=0.5, knee=0.02)
    assert [current_of(part, v) for v in (1.7, -20)] == pytest.approx([2.0, 0.0], abs=1e-9)


def charge_and_capacitance(part: AnyPart, volts: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    network = network_of({"R1": resistor("vdd", "a", 10.0), "X": part})
    found = [network.devices.evaluate(np.array([[v]])) for v in volts]
    return np.array([f[1][0, 0] for f in found]), np.array([f[3][0, 0, 0] for f in found])


def test_junction_charge() -> None:
    """C0 / (1 + v / phi)^m in reverse, C0 forward; the charge is its integral."""
    part = Diode(
        kind="diode",
        anode="a",
        cathode="gnd",
        voltage=0.7,
        resistance=0.5,
        capacitance=1e-9,
        junction_potential=0.6,
        grading=0.35,
    )
    volts = np.array([-0.5, 0.0, 1.0, 25.0])

    def law(v: float) -> float:
        return 1e-9 / (1 + max(v, 0) / 0.6) ** 0.35

    q, c = charge_and_capacitance(part, -volts)  # reverse voltage counts from cathode to anode
    assert c == pytest.approx([law(v) for v in volts])
    assert -q == pytest.approx([quad(law, 0, v)[0] for v in volts], rel=1e-6, abs=1e-20)


def test_class_2_capacitor() -> None:
    """Half of what voltage can take is gone at the half voltage; the charge is odd."""
    part = capacitor("a", "gnd", 1e-6, half_voltage=20.0, bias_floor=0.2)
    q, c = charge_and_capacitance(part, np.array([0.0, 20.0, -20.0, 1e4]))
    assert c == pytest.approx(1e-6 * np.array([1.0, 0.6, 0.6, 0.2]), rel=1e-4)
    assert q[1] == pytest.approx(-q[2])
    assert q[1] == pytest.approx(1e-6 * 20 * (0.2 + 0.8 * np.pi / 4))


def test_saturating_core() -> None:
    """Flux = integral of L(i): small-signal L at first, the last share beyond the last point."""
    points = ((2.0, 0.9), (4.0, 0.5))
    part = Inductor(
        kind="inductor", nets=("a", "gnd"), inductance=1e-6, resistance=0.0, saturation=points
    )
    network = network_of({"R1": resistor("vdd", "a", 10.0), "L1": part})
    amps = np.array([0.0, 2.0, 4.0, 10.0, -10.0])
    found = [network.devices.evaluate(np.array([[i]])) for i in amps]
    inductance = 1e-6 + np.array([f[3][0, 0, 0] for f in found])
    flux = 1e-6 * amps + np.array([f[1][0, 0] for f in found])
    assert inductance == pytest.approx(1e-6 * np.array([1.0, 0.9, 0.5, 0.5, 0.5]))
    assert flux[3] - flux[2] == pytest.approx(0.5e-6 * 6)
    assert flux[4] == pytest.approx(-flux[3])
    assert flux[2] < 4e-6 * 0.9


def test_charge_is_conserved_around_a_cycle() -> None:
    """Voltages led around a closed path bring every charge back: no path dependence.

    The work done on the charges, the integral of v dq, is then zero too (a capacitance matrix that
    were not symmetric would pump energy).
    """
    network = zoo()
    ports = network.devices.ports
    angle = np.linspace(0, 2 * np.pi, 4001)
    v = np.stack([(3 + k) * np.sin(angle + k) for k in range(ports)], axis=1)
    q = np.array([network.devices.evaluate(point[None])[1][0] for point in v])
    scale = np.ptp(q, axis=0)
    np.testing.assert_allclose(q[-1], q[0], atol=1e-12 * scale.max())
    work = np.sum(0.5 * (v[1:] + v[:-1]) * np.diff(q, axis=0))
    assert abs(work) < 1e-5 * np.abs(np.sum(scale * np.ptp(v, axis=0)))
    _, _, _, capacitance = network.devices.evaluate(v[100][None])
    np.testing.assert_allclose(capacitance[0], capacitance[0].T, rtol=1e-12)


def test_taken_units_answer_alike() -> None:
    """Elements of picked units give what they give in the batch."""
    values = typical_values(circuit_a(), 3)
    values["QA.gain"] = np.array([5.0, 11.0, 20.0])
    case = Case(circuit_a(), values)
    network = case.network(case.cold_junctions())
    v = np.tile(np.linspace(-2, 20, network.devices.ports), (3, 1))
    whole = network.devices.evaluate(v)
    part = network.devices.take(np.array([2])).evaluate(v[[2]])
    for all_units, one in zip(whole, part, strict=True):
        np.testing.assert_array_equal(all_units[[2]], one)


def test_plain_inductor_has_no_port() -> None:
    network = network_of({"R1": resistor("vdd", "a", 10.0), "L1": inductor("a", "gnd", 1e-6)})
    assert network.devices.ports == 0
