"""The stepper where it is hard: nets without capacitance, sharp devices, runaway units, drives."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import brentq
from stages import capacitor, inductor, mosfet, resistor, units_of

from tolsim.circuit import stepper as module
from tolsim.circuit.network import Network
from tolsim.circuit.stepper import PORT_TOLERANCE, StepMatrices, solve_each, solve_ports
from tolsim.circuit.transient import march
from tolsim.design import Design, Rail
from tolsim.parts import Clamp, Drive

STEP = 1e-9
RAILS = {"vdd": Rail(net="vdd", voltage=24.0)}


def network_of(parts: dict, changes: dict | None = None) -> Network:
    case = units_of(Design(parts=parts, rails=RAILS), changes)
    return case.network(case.cold_junctions())


def floating_drain(supply: np.ndarray) -> Network:
    """A drain between choke and transistor whose only capacitance is the transistor's own."""
    parts = {
        "L1": inductor("vdd", "d", 10e-6),
        "Q1": mosfet("d", "gnd", 3.0, 10.0, cds0=1e-9),
    }
    return network_of(parts, {"vdd.voltage": supply})


def by_bisection(
    network: Network, matrices: StepMatrices, unit: int, port: int, target: float
) -> float:
    """Voltage of the only port that moves, by a solver that needs no derivative."""
    own = network.devices.take(np.array([unit]))

    def residual(volts: float) -> float:
        v = np.zeros((1, own.ports))
        v[0, port] = volts
        f, q, *_ = own.evaluate(v)
        return volts + float(matrices.K[unit, port] @ (q + matrices.c[unit] * f)[0]) - target

    return float(brentq(residual, -1000.0, 5000.0, xtol=1e-12, rtol=1e-14))


@pytest.mark.parametrize("guess", [0.0, -3.0, 400.0])
def test_a_net_without_linear_capacitance_settles(guess):
    """Residuals of thousands of volts mean little there: Newton ends on the root all the same.

    The trap: a net with junction capacitance only sees the choke through an impedance so high
    that a millivolt off the root leaves volts of residual, so no residual may decide anything.
    """
    network = floating_drain(np.array([24.0, 30.0]))
    port = network.ports["Q1:ds"]
    matrices = StepMatrices.of(network, np.full(2, STEP))
    target = np.zeros((2, network.devices.ports))
    target[:, port] = [3e4, 4e5]
    start = np.full_like(target, guess)
    start[:, [k for k in range(network.devices.ports) if k != port]] = 0.0
    found = solve_ports(network.devices, matrices.c, matrices.K, target, start)
    careful = module._solve_damped(network.devices, matrices.c, matrices.K, target, start)
    for unit in range(2):
        root = by_bisection(network, matrices, unit, port, target[unit, port])
        assert found.v[unit, port] == pytest.approx(root, abs=1e-6)
        assert careful.v[unit, port] == pytest.approx(root, abs=1e-6)
        assert careful.settled[unit]
        # the trap is there: the slope of the residual is huge
        assert careful.matrix[unit, port, port] > 1e3


def test_a_sharp_clamp_far_beyond_its_knee_settles():
    """Straight Newton jumps between the branches of a steep clamp; the damped one comes down."""
    parts = {
        "R1": resistor("vdd", "a", 10.0),
        "C1": capacitor("a", "gnd", 1e-12),
        "Z1": Clamp(kind="clamp", nets=("a", "gnd"), voltage=10.0, resistance=1e-3, knee=1e-3),
    }
    network = network_of(parts)
    matrices = StepMatrices.of(network, np.array([1e-6]))
    for target in (9.0, 12.0, 900.0, -900.0):
        wanted = np.array([[target]])
        found = solve_ports(
            network.devices, matrices.c, matrices.K, wanted, np.array([[-np.sign(target) * 40.0]])
        )
        assert found.settled.all()
        root = by_bisection(network, matrices, 0, 0, target)
        assert found.v[0, 0] == pytest.approx(root, abs=1e-6)


def test_stragglers_do_not_disturb_the_settled():
    """A unit that needs the careful solver leaves the answers of the others alone."""
    network = floating_drain(np.array([24.0, 24.0, 24.0]))
    port = network.ports["Q1:ds"]
    matrices = StepMatrices.of(network, np.full(3, STEP))
    target = np.zeros((3, network.devices.ports))
    target[:, port] = [3e4, 3e4, 3e4]
    guess = np.zeros_like(target)
    guess[:, port] = [10.0, 3e6, np.nan]
    found = solve_ports(network.devices, matrices.c, matrices.K, target, guess)
    assert found.settled.all()
    assert np.ptp(found.v[:, port]) < PORT_TOLERANCE


def test_a_unit_that_is_not_a_number_is_not_waited_for(monkeypatch):
    """One lost unit costs a few evaluations per stage, not all rounds times all halvings."""
    network = floating_drain(np.array([24.0, np.nan]))
    calls = []
    real = module.measure

    def counted(*given):
        calls.append(1)
        return real(*given)

    monkeypatch.setattr(module, "measure", counted)
    x0 = np.zeros((2, network.states))
    with np.errstate(all="ignore"):
        samples = march(network, x0, np.full(2, STEP), 50)
    assert np.isfinite(samples[:, 0]).all()
    assert np.isnan(samples[1:, 1]).any(axis=1).all()
    assert len(calls) < 50 * 2 * 8
    alone = march(network.take(np.array([0])), x0[:1], np.full(1, STEP), 50)
    np.testing.assert_allclose(samples[:, 0], alone[:, 0], atol=1e-6)


def test_a_singular_unit_is_lost_alone():
    """A matrix without inverse gives NaN to its unit and the solution to all others."""
    matrix = np.array([[[2.0, 0.0], [0.0, 4.0]], [[1.0, 1.0], [1.0, 1.0]], np.eye(2)])
    sides = np.ones((3, 2, 1))
    found = solve_each(matrix, sides)[:, :, 0]
    np.testing.assert_array_equal(found[0], [0.5, 0.25])
    assert np.isnan(found[1]).all()
    np.testing.assert_array_equal(found[2], [1.0, 1.0])


def driven_rc(frequency: float, resistance: float, capacitance: float) -> Network:
    source = Drive(
        kind="drive", nets=("a", "gnd"), shape="sine", low=-3.0, high=5.0,
        frequency=frequency, resistance=resistance,
    )  # fmt: skip
    return network_of({"V1": source, "C1": capacitor("a", "gnd", capacitance)})


def test_driven_rc_is_second_order():
    """Sine through R onto C: amplitude 1 / sqrt(1 + (w R C)^2), lag atan(w R C), error ~ step^2."""
    frequency, resistance, capacitance = 1e6, 50.0, 4e-9
    network = driven_rc(frequency, resistance, capacitance)
    lag = 2 * np.pi * frequency * resistance * capacitance

    def truth(phase: np.ndarray) -> np.ndarray:
        turn = 2 * np.pi * phase - np.arctan(lag)
        return 1.0 + 4.0 * np.sin(turn) / np.hypot(1.0, lag)

    errors = []
    for steps in (32, 64, 128):
        x0 = np.array([[truth(np.array(0.0))]])
        step = np.array([1 / frequency / steps])
        samples = march(network, x0, step, steps, 1 / steps)[:, 0, 0]
        errors.append(np.max(np.abs(samples - truth(np.arange(steps + 1) / steps))))
    assert np.log2(np.array(errors[:-1]) / errors[1:]) == pytest.approx(2.0, abs=0.1)
    assert errors[-1] < 1e-3
