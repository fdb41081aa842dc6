"""The compiled element laws: the same numbers as `circuit.devices`, and their own derivatives."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from stages import capacitor, mosfet, resistor, units_of

from tolsim.circuit.devices import BiasedCapacitors, Elements, Junctions, Ramps, SaturatingCore
from tolsim.circuit.network import Network
from tolsim.circuit.transients.elements import KINDS, flatten
from tolsim.circuit.transients.laws import Point, evaluate, new_point, solve_small, unit_elements
from tolsim.design import Design, Rail
from tolsim.parts import BodyDiode, Clamp, Diode, Inductor

UNITS = 3


def zoo() -> Network:
    """Every kind of element, two different cores, and units that differ."""
    parts = {
        "RD": resistor("vdd", "d", 10.0),
        "RG": resistor("vdd", "g", 10.0),
        "Q1": mosfet(
            *("d", "g", 3.0, 2.0),
            cgd0=100e-12,
            cds0=300e-12,
            body_diode=BodyDiode(voltage=0.75, resistance=0.02, knee=0.05),
        ),
        "Q2": mosfet("g", "d", 2.0, 1.0, cgd0=50e-12, cds0=80e-12, grading=0.35),
        "Z1": Clamp(kind="clamp", nets=("g", "gnd"), voltage=8.0, resistance=1.0),
        "Z2": Clamp(kind="clamp", nets=("d", "gnd"), voltage=9.0, resistance=1.0, direction="one"),
        "D1": Diode(
            kind="diode", anode="g", cathode="d", voltage=0.7, resistance=0.5, capacitance=40e-12
        ),
        "C2": capacitor("d", "g", 1e-9, half_voltage=20.0, bias_floor=0.3),
        "L1": core(((2.0, 0.9), (4.0, 0.5), (6.0, 0.3))),
        "L2": core(((1.0, 0.7), (3.0, 0.4))),  # its row of breaks is filled up
    }
    changes = {
        "Q1.threshold": np.array([2.6, 3.0, 3.4]),
        "Q1.cgd0": np.array([80e-12, 100e-12, 130e-12]),
        "C2.capacitance": np.array([0.8e-9, 1e-9, 1.2e-9]),
        "L1.inductance": np.array([0.9e-6, 1e-6, 1.1e-6]),
    }
    case = units_of(Design(parts=parts, rails={"vdd": Rail(net="vdd", voltage=12.0)}), changes)
    return case.network(case.cold_junctions())


def core(saturation: tuple[tuple[float, float], ...]) -> Inductor:
    return Inductor(
        kind="inductor",
        nets=("d", "gnd"),
        inductance=1e-6,
        resistance=0.1,
        saturation=saturation,
    )


NETWORK = zoo()
PORTS = NETWORK.devices.ports
FLAT, RAMP_NAMES = flatten(NETWORK.devices, UNITS)
VOLTS = st.lists(st.floats(-30, 30), min_size=PORTS, max_size=PORTS)


def answer(unit: int, volts: np.ndarray) -> Point:
    """What the compiled laws say of one unit."""
    point = new_point(NETWORK.states, PORTS, FLAT.numbers.shape[1])
    point.v[:] = volts
    evaluate(unit_elements(FLAT, unit), point)
    return point


def test_every_kind_is_there():
    kinds = {type(each) for each in NETWORK.devices.elements}
    assert kinds == set(KINDS) == {Ramps, Junctions, BiasedCapacitors, SaturatingCore}


@settings(max_examples=150, deadline=None)
@given(volts=VOLTS, unit=st.integers(0, UNITS - 1))
def test_same_as_devices(volts: list[float], unit: int) -> None:
    """Currents, charges and both Jacobians to rounding, at any voltages, of every unit."""
    v = np.array(volts)
    found = answer(unit, v)
    f, q, g, c = NETWORK.devices.evaluate(np.tile(v, (UNITS, 1)))
    # below its corner a ramp of 50 S is the logarithm of nearly 1;
    # what a core adds is the small difference of two fluxes L0 i, here of some 1e-6 H
    flux = 1e-6 * np.abs(v).max()
    for mine, known, lost in ((found.f, f, 50.0), (found.q, q, flux + 1e-12)):
        size = np.abs(known[unit]).max()
        np.testing.assert_allclose(mine, known[unit], rtol=1e-11, atol=1e-13 * size + 1e-15 * lost)
    # the slope of a squared ramp carries the same logarithm of nearly 1
    for mine, known, lost in ((found.g, g, 50.0), (found.c, c, 1e-10)):
        size = np.abs(known[unit]).max()
        np.testing.assert_allclose(mine, known[unit], rtol=1e-11, atol=1e-13 * size + 1e-15 * lost)


@settings(max_examples=60, deadline=None)
@given(volts=st.lists(st.floats(-15, 15), min_size=PORTS, max_size=PORTS))
def test_derivatives(volts: list[float]) -> None:
    """df/dv and dq/dv against central differences of the compiled laws themselves."""
    v, step = np.array(volts), 1e-5
    here = answer(1, v)
    size_g, size_c = np.abs(here.g).max() + 1e-3, np.abs(here.c).max() + 1e-8
    for port in range(PORTS):
        move = np.zeros(PORTS)
        move[port] = step
        up, down = answer(1, v + move), answer(1, v - move)
        slope_f, slope_q = (up.f - down.f) / (2 * step), (up.q - down.q) / (2 * step)
        np.testing.assert_allclose(here.g[:, port], slope_f, atol=2e-4 * size_g)
        np.testing.assert_allclose(here.c[:, port], slope_q, atol=2e-4 * size_c)


def test_order_of_the_elements():
    """Ramps, junctions, class-2, cores; each with its own numbers and its own ports."""
    found, row = answer(2, np.linspace(-3.0, 7.0, PORTS)), 0
    v = np.tile(np.linspace(-3.0, 7.0, PORTS)[:, None], UNITS)
    names: list[str] = []
    for kind, end in zip(KINDS, FLAT.ends, strict=True):
        for each in _of(kind):
            value, slope = each.respond(v)
            rows = slice(row, row + len(each.names))
            np.testing.assert_allclose(found.value[rows], value[:, 2], rtol=1e-11, atol=1e-16)
            np.testing.assert_allclose(found.slope[rows], slope[:, 2], rtol=1e-11, atol=1e-20)
            row += len(each.names)
            names += each.names if kind is Ramps else ()
        assert row == end
    assert row == len(found.value)
    assert tuple(names) == RAMP_NAMES


def _of(kind: type) -> list[Elements]:
    return [each for each in NETWORK.devices.elements if isinstance(each, kind)]


@settings(max_examples=60, deadline=None)
@given(seed=st.integers(0, 10**6), size=st.integers(1, 8))
def test_small_systems(seed: int, size: int) -> None:
    """Elimination against numpy, with a leading zero that needs a row exchange."""
    rng = np.random.default_rng(seed)
    matrix, side = rng.normal(size=(size, size)), rng.normal(size=size)
    if size > 1:
        matrix[0, 0] = 0.0
    known = np.linalg.solve(matrix, side)
    left = side.copy()
    assert solve_small(matrix.copy(), left)
    bound = 1e-12 * np.linalg.cond(matrix) * np.abs(known).max()
    assert left == pytest.approx(known, abs=bound)


def test_a_singular_system_is_told():
    assert not solve_small(np.array([[1.0, 2.0], [2.0, 4.0]]), np.ones(2))
    assert not solve_small(np.zeros((2, 2)), np.ones(2))
