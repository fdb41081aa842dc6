"""Stepper, bias point and shooting on circuits with closed answers, and against differences."""

from __future__ import annotations

from math import exp, pi, sqrt

import numpy as np
import pytest
from circuits import circuit_a, typical_values
from stages import capacitor, inductor, mosfet, resistor, self_biased, units_of

from tolsim.circuit import bias as bias_module
from tolsim.circuit.bias import bias_point
from tolsim.circuit.cycle import run_cycle
from tolsim.circuit.floquet import largest_beside_charge
from tolsim.circuit.network import Network
from tolsim.circuit.nominal import Nominal, find_nominal
from tolsim.circuit.thermal import Case
from tolsim.circuit.transient import march
from tolsim.design import Design, Rail
from tolsim.parts import Clamp, Diode

COIL, TANK = 1e-6, 1e-9
OMEGA = 1 / sqrt(COIL * TANK)


def network_of(parts: dict, voltage: float = 0.0, leak: float = 1e-15) -> Network:
    rails = {"vdd": Rail(net="vdd", voltage=max(voltage, 1.0))}
    case = units_of(
        Design(parts=parts, rails=rails, leak=leak), {"vdd.voltage": np.array([voltage])}
    )
    return case.network(case.cold_junctions())


def final(network: Network, x0: np.ndarray, duration: float, steps: int) -> np.ndarray:
    """State after `duration` in equal steps."""
    return march(network, x0[None], np.array([duration / steps]), steps)[-1, 0]


def test_ring_down() -> None:
    """Parallel R L C let go at 1 V: a damped cosine, a = 1 / (2 R C); second order in the step."""
    resistance = 500.0
    parts = {
        "C1": capacitor("a", "gnd", TANK),
        "L1": inductor("a", "gnd", COIL),
        "R1": resistor("a", "gnd", resistance),
    }
    network = network_of(parts)
    a = 1 / (2 * resistance * TANK)
    wd = sqrt(OMEGA**2 - a * a)
    end = 1.3 * 2 * pi / wd
    exact = exp(-a * end) * (np.cos(wd * end) - a / wd * np.sin(wd * end))
    x0 = np.zeros(2)
    x0[network.index["a"]] = 1.0
    errors = np.array(
        [final(network, x0, end, steps)[network.index["a"]] - exact for steps in (64, 128, 256)]
    )
    assert np.log2(errors[:-1] / errors[1:]) == pytest.approx(2.0, abs=0.05)
    assert abs(errors[1]) < 3e-3


def test_step_into_an_rlc() -> None:
    """Series R L C switched onto 5 V: the capacitor overshoots as the damped cosine says."""
    resistance, volts = 10.0, 5.0
    parts = {
        "R1": resistor("vdd", "a", resistance),
        "L1": inductor("a", "b", COIL),
        "C1": capacitor("b", "gnd", TANK),
    }
    network = network_of(parts, volts)
    a = resistance / (2 * COIL)
    wd = sqrt(OMEGA**2 - a * a)
    end = 0.8 * 2 * pi / wd
    exact = volts * (1 - exp(-a * end) * (np.cos(wd * end) + a / wd * np.sin(wd * end)))
    x0 = np.zeros(network.states)
    # net a has no capacitance: it starts where the current says, at the rail
    x0[network.index["a"]] = volts
    errors = np.array(
        [final(network, x0, end, steps)[network.index["b"]] - exact for steps in (64, 128, 256)]
    )
    assert np.log2(errors[:-1] / errors[1:]) == pytest.approx(2.0, abs=0.1)


def test_stiff_part_settles_without_ringing() -> None:
    """A time constant a thousandth of the step: at once at its end value (L-stability)."""
    parts = {"R1": resistor("vdd", "a", 1.0), "C1": capacitor("a", "gnd", 1e-12)}
    network = network_of(parts, 5.0)
    samples = march(network, np.zeros((1, 1)), np.array([1e-9]), 5)[:, 0, 0]
    errors = np.abs(samples - 5.0)
    assert errors[1] < 0.05
    assert (errors[2:] < 0.02 * errors[1:-1] + 1e-12).all()


def test_charge_leaves_only_through_conduction() -> None:
    """An island between a junction and a class-2 capacitor loses what its leak carries away.

    Such a net has no linear capacitance at all, the hardest case for the condensed stages.
    """
    leak, step, count = 1e-8, 2e-9, 2000
    parts = {
        "R1": resistor("vdd", "a", 50.0),
        "L1": inductor("a", "gnd", COIL),
        "D1": Diode(
            kind="diode", anode="i", cathode="a", voltage=300.0, resistance=1.0, capacitance=1e-9
        ),
        "C2": capacitor("i", "gnd", 1e-9, half_voltage=10.0),
    }
    network = network_of(parts, 8.0, leak)
    x0 = np.zeros((1, network.states))
    x0[0, network.index["a"]], x0[0, network.index["i"]] = 8.0, 1.0
    samples = march(network, x0, np.array([step]), count)

    def island(x: np.ndarray) -> float:
        q = network.devices.evaluate(network.port_voltages(x))[1]
        return float((network.E[0] @ x[0] + network.D.T @ q[0])[network.index["i"]])

    volts = samples[:, 0, network.index["i"]]
    carried = leak * step * (volts.sum() - 0.5 * (volts[0] + volts[-1]))
    start, end = island(samples[0]), island(samples[-1])
    assert end - start == pytest.approx(-carried, abs=5e-6 * abs(start))


def test_bias_of_circuit_a() -> None:
    """Gate voltage and choke current of the agreed table; Kirchhoff's laws to rounding."""
    case = Case(circuit_a(), typical_values(circuit_a()))
    network = case.network(case.cold_junctions())
    found = bias_point(network)
    assert found.settled.all()
    assert found.x[0, network.index["ga"]] == pytest.approx(3.92433, abs=1e-5)
    assert found.x[0, network.index["LA"]] == pytest.approx(1.53805, abs=1e-5)
    f, _, g, c = network.devices.evaluate(found.v)
    residual = network.F[0] @ found.x[0] + network.D.T @ f[0] - network.source[0]
    assert np.abs(residual).max() < 1e-9
    np.testing.assert_array_equal(found.G, g)
    np.testing.assert_array_equal(found.C, c)


def test_bias_by_pseudo_transient(monkeypatch: pytest.MonkeyPatch) -> None:
    """With Newton from zero given no rounds at first, the led-in start reaches the same point."""
    parts = {
        "R1": resistor("vdd", "a", 100.0),
        "Z1": Clamp(kind="clamp", nets=("a", "b"), voltage=5.0, resistance=0.01, knee=0.02),
        "D1": Diode(kind="diode", anode="b", cathode="gnd", voltage=0.7, resistance=0.01),
        "C1": capacitor("a", "gnd", 1e-9),
        "Q1": mosfet("a", "b", 0.5, 0.1),
    }
    network = network_of(parts, 24.0)
    plain = bias_point(network)
    assert plain.settled.all()
    real, calls = bias_module._newton, []

    def blind_at_first(network: Network, x: np.ndarray):
        calls.append(len(x))
        if len(calls) == 1:
            return x, np.zeros(len(x), dtype=bool)
        return real(network, x)

    monkeypatch.setattr(bias_module, "_newton", blind_at_first)
    led = bias_point(network)
    assert led.settled.all()
    assert len(calls) == 2
    np.testing.assert_allclose(led.x, plain.x, rtol=1e-8, atol=1e-12)


@pytest.fixture(scope="module")
def nominal() -> Nominal:
    found = find_nominal(units_of(self_biased()), 64)
    assert found.found
    return found


def test_monodromy_against_differences(nominal: Nominal) -> None:
    """d x(T) / d x0 and d x(T) / dT carried along, against central differences."""
    network = nominal.case.network(nominal.solution.junctions)
    x0, period = nominal.solution.samples[0], nominal.solution.period
    cycle = run_cycle(network, x0, period, 64, derivatives=True)
    scale = nominal.frame.scale
    # columns are compared in units of the amplitudes
    for state in range(network.states):
        step = np.zeros_like(x0)
        step[0, state] = 1e-4 * scale[state]
        ends = [
            run_cycle(network, x0 + sign * step, period, 64, derivatives=False).samples[-1, 0]
            for sign in (1, -1)
        ]
        slope = (ends[0] - ends[1]) / 2e-4 / scale
        carried = cycle.monodromy[0, :, state] * scale[state] / scale
        np.testing.assert_allclose(carried, slope, atol=2e-3)
    longer, shorter = (
        run_cycle(network, x0, period * (1 + sign * 1e-5), 64, derivatives=False).samples[-1, 0]
        for sign in (1, -1)
    )
    slope = (longer - shorter) / 2e-5 / scale
    np.testing.assert_allclose(cycle.by_period[0] * period[0] / scale, slope, atol=2e-2)


def test_phase_multiplier_is_taken_out(nominal: Nominal) -> None:
    """The monodromy matrix has a multiplier of 1 (to the grid); the deflated ones do not."""
    network = nominal.case.network(nominal.solution.junctions)
    cycle = run_cycle(
        network, nominal.solution.samples[0], nominal.solution.period, 64, derivatives=True
    )
    raw = np.linalg.eigvals(cycle.monodromy[0])
    assert np.abs(raw - 1).min() < 0.02
    deflated = nominal.solution.multipliers
    assert largest_beside_charge(deflated)[0] < 0.9
    assert np.abs(deflated[0]).min() < 1e-9


def test_orbit_closes(nominal: Nominal) -> None:
    """First and last sample agree to the tolerance, and a second period repeats the first."""
    orbit = nominal.solution
    scale = nominal.frame.scale
    assert np.abs((orbit.samples[-1, 0] - orbit.samples[0, 0]) / scale).max() < 1e-4
    network = nominal.case.network(orbit.junctions)
    again = march(network, orbit.samples[-1], orbit.period / 64, 64)[-1, 0]
    assert np.abs((again - orbit.samples[0, 0]) / scale).max() < 3e-4


def test_transient_runs_into_the_orbit(nominal: Nominal) -> None:
    """Let go from the orbit with the bias 0.2 V off, it comes back: the multiplier is 0.84."""
    network = nominal.case.network(nominal.solution.junctions)
    orbit = nominal.solution
    x0 = orbit.samples[0].copy()
    x0[0, network.index["g"]] += 0.2
    swing = np.ptp(orbit.samples[:, 0, network.index["d"]])
    ends = march(network, x0, orbit.period / 64, 64 * 60)[-65:, 0, network.index["d"]]
    assert np.ptp(ends) == pytest.approx(swing, rel=1e-3)
