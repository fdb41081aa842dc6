"""Multipliers with known answers, trapped charge, and what both say about circuits."""

from __future__ import annotations

import numpy as np
import pytest
from circuits import circuit_a, typical_values
from stages import capacitor, inductor, mosfet, resistor, self_biased, units_of

from tolsim.circuit.charge import charge_rows, islands
from tolsim.circuit.continuation import aim
from tolsim.circuit.cycle import run_cycle
from tolsim.circuit.floquet import largest_beside_charge, sorted_multipliers
from tolsim.circuit.network import Network
from tolsim.circuit.nominal import Nominal, find_nominal
from tolsim.circuit.orbit import Status
from tolsim.circuit.shooting import shoot
from tolsim.circuit.thermal import Case
from tolsim.circuit.transient import march
from tolsim.design import Design, Rail
from tolsim.parts import Coupling, Diode, Load

STEPS = 128


def network_of(parts: dict) -> Network:
    design = Design(parts=parts, rails={"vdd": Rail(net="vdd", voltage=24.0)})
    case = units_of(design)
    return case.network(case.cold_junctions())


def island_nets(network: Network) -> list[set[str]]:
    """Names of the nets of each island."""
    names = np.array(list(network.index))
    return [set(names[row > 0]) for row in islands(network)]


def test_the_island_of_circuit_a():
    """The coil hangs between capacitors only: its two ends are one island, no other net is on any.

    Gates are held by resistors, drains by chokes.
    """
    case = Case(circuit_a(), typical_values(circuit_a()))
    assert island_nets(case.network(case.cold_junctions())) == [{"p", "q"}]


def test_what_holds_a_net():
    """Resistors, coils, diodes and transistors tie a net down; capacitors and couplings do not."""
    parts = {
        "R1": resistor("vdd", "d", 10.0),
        "Q1": mosfet("d", "f", 3.0, 1.0, cgd0=1e-12),  # its gate floats
        "C1": capacitor("f", "gnd", 1e-9),
        "L1": inductor("d", "gnd", 1e-6),
        "L2": inductor("s", "t", 1e-6),  # a secondary without reference
        "K1": Coupling(kind="coupling", inductors=("L1", "L2"), coupling=0.5),
        "C2": capacitor("t", "d", 1e-9),
        "W": Load(kind="load", coil="L1", coupling=0.3, inductance=1e-6, resistance=5.0),
        "D1": Diode(kind="diode", anode="gnd", cathode="k", voltage=0.7, resistance=1.0),
        "C3": capacitor("k", "d", 1e-9),
        "R2": resistor("m", "n", 10.0),  # joined to each other, not to anything else
        "C4": capacitor("m", "d", 1e-9),
    }
    found = island_nets(network_of(parts))
    assert sorted(sorted(nets) for nets in found) == [["f"], ["m", "n"], ["s", "t"]]


def test_given_multipliers_come_back():
    """A matrix is built with known multipliers, flow and charge row: the others are returned."""
    rng = np.random.default_rng(8)
    wanted = np.array([0.9, 0.5 + 0.4j, 0.5 - 0.4j, -0.3])
    blocks = np.zeros((6, 6))
    blocks[0, 0] = blocks[1, 1] = 1.0  # phase and charge
    blocks[0, 1] = 1e-3  # which couple: without care the double root splits into 1 +- something
    blocks[2, 2], blocks[5, 5] = 0.9, -0.3
    blocks[3:5, 3:5] = [[0.5, 0.4], [-0.4, 0.5]]
    scale = np.geomspace(1e-3, 1e2, 6)
    basis = rng.standard_normal((6, 6)) * scale[:, None]
    monodromy = (basis @ blocks @ np.linalg.inv(basis))[None]
    flow, row = basis[:, 0][None], np.linalg.inv(basis)[1][None, None]
    np.testing.assert_allclose(row[0] @ monodromy[0], row[0], rtol=1e-6)
    found = sorted_multipliers(monodromy, flow, scale, row)[0]
    order = np.lexsort((-found[:4].imag, -np.abs(found[:4]).round(6)))
    np.testing.assert_allclose(found[:4][order], wanted, atol=1e-8)
    np.testing.assert_allclose(found[4:], 0.0, atol=1e-8)
    driven = sorted_multipliers(monodromy, None, scale)[0]
    assert np.sum(np.abs(driven - 1) < 1e-4) == 2
    assert largest_beside_charge(driven[None])[0] == pytest.approx(0.9)


@pytest.fixture(scope="module")
def push_pull() -> Nominal:
    design = circuit_a()
    return find_nominal(Case(design, typical_values(design), heated=False), STEPS)


def test_multipliers_of_circuit_a(push_pull):
    """Phase and trapped charge are taken out to exactly 0, the largest other one is 0.973."""
    assert push_pull.found
    orbit = push_pull.solution
    sizes = np.abs(orbit.multipliers[0])
    assert sizes[0] == pytest.approx(0.973, abs=1e-3)
    assert np.sum(sizes < 1e-12) >= 2
    network = push_pull.case.network(orbit.junctions)
    cycle = run_cycle(network, orbit.samples[0], orbit.period, STEPS, derivatives=True)
    raw = np.linalg.eigvals(cycle.monodromy[0])
    assert np.sum(np.abs(raw - 1) < 0.02) == 2


def test_trapped_charge_stays(push_pull):
    """One period moves the charge of the island by the leak only, and so do its derivatives."""
    orbit = push_pull.solution
    network = push_pull.case.network(orbit.junctions)
    members = islands(network)
    rows = charge_rows(network, members, orbit.samples[0])[0]
    cycle = run_cycle(network, orbit.samples[0], orbit.period, STEPS, derivatives=True)
    np.testing.assert_allclose(
        rows @ cycle.monodromy[0], rows, atol=2e-5 * np.abs(rows).max()
    )  # the leak takes 1e-8 S x 0.15 us of some 100 pF

    def charge(x: np.ndarray) -> float:
        q = network.devices.evaluate(network.port_voltages(x[None]))[1][0]
        return float(members[0] @ (network.E[0] @ x + network.D.T @ q))

    swing = network.E[0, network.index["p"], network.index["p"]] * 250.0
    ends = cycle.samples[-1, 0] - cycle.samples[0, 0]
    assert abs(charge(cycle.samples[-1, 0]) - charge(cycle.samples[0, 0])) < 1e-5 * swing
    assert np.abs(ends).max() < 1e-3


def test_the_nominal_orbit_takes_few_rounds(push_pull):
    """From the kicked bias point to the orbit of circuit A in at most eight periods of shooting."""
    assert push_pull.solution.iterations[0] <= 8
    assert push_pull.solution.residual[0] < 2e-5


def test_multipliers_are_how_disturbances_go_on_in_time():
    """A nudged gate, marched on: a running orbit forgets it, a bursting one enlarges it.

    The shift in time that is left of the nudge drops out of differences from cycle to cycle; these
    obey d'' = (m1 + m2) d' - m1 m2 d with m1, m2 the two largest multipliers.
    """
    design = self_biased()
    nominal = find_nominal(units_of(design, heated=True), STEPS)
    compass = aim(nominal, tuple(nominal.case.values), STEPS)
    case = units_of(design, {"RG.resistance": np.array([3e4, 7e4])}, heated=True)
    start = compass.start(case)
    orbits = shoot(case, start, nominal.frame, STEPS, 40, "test", heat=compass.heat)
    assert orbits.status.tolist() == [Status.SETTLED, Status.UNSTABLE]
    network = case.network(orbits.junctions)
    scale = np.ptp(orbits.samples, axis=0)
    nudge = np.zeros_like(scale)
    nudge[:, network.index["g"]] = 1e-5 * scale[:, network.index["g"]]
    begin, cycles = orbits.samples[0], 16
    ways = [
        march(network, x0, orbits.period / STEPS, cycles * STEPS)[2 * STEPS :: STEPS]
        for x0 in (begin, begin + nudge)
    ]
    change = np.diff((ways[1] - ways[0]) / scale, axis=0)
    for unit, found in enumerate(orbits.multipliers[:, :2]):
        d = change[:, unit]
        known = np.stack([d[1:-1].ravel(), d[:-2].ravel()], axis=1)
        total, product = np.linalg.lstsq(known, d[2:].ravel(), rcond=None)[0]
        assert found.sum().real == pytest.approx(total, abs=1e-2)
        assert found.prod().real == pytest.approx(-product, abs=1e-2)
