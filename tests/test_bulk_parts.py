"""The pieces of the bulk solver: basis, kernels, topology, multipliers."""

from types import SimpleNamespace

import numpy as np
import pytest
from circuits import CIRCUIT_A_SPREAD, circuit_a, scattered, typical_values

from tolsim.circuit.bulk.grid import Grid, analyse, synthesis
from tolsim.circuit.bulk.multipliers import _pass
from tolsim.circuit.bulk.unit_table import (
    Topology,
    TopologyError,
    UnitTable,
    bare_network,
    drive_spectra,
)
from tolsim.circuit.devices import BiasedCapacitors, Devices, Junctions, Ramps, SaturatingCore
from tolsim.circuit.floquet import largest_beside_charge
from tolsim.circuit.kernels import Scratch, element_waves, kernels_of
from tolsim.circuit.network import DriveShape
from tolsim.circuit.nominal import find_nominal
from tolsim.circuit.thermal import Case

RNG = np.random.default_rng(3)


@pytest.fixture(scope="module")
def nominal():
    design = circuit_a()
    return find_nominal(Case(design, typical_values(design), heated=False), 128)


def some_devices(units):
    """Two ports and a core current, every kind of element on them, per-unit numbers."""
    see, act = np.array([[1.0, -1.0, 0.0]]), np.array([[0.0], [1.0], [0.0]])
    flux = np.array([[0.0, 0.0, 1.0]])
    around = 1 + 0.1 * RNG.uniform(-1, 1, (1, units))
    return Devices(
        (
            Ramps(("r",), see, act, 1.2 * around, np.array([[0.1]]), around, 3 * around),
            Ramps(("far",), see, act, 90 * around, np.array([[0.1]]), around, np.zeros((1, units))),
            Junctions(("j",), see, see.T, around, np.array([[0.8]]), np.array([[0.5]])),
            Junctions(("k",), see, see.T, around, np.array([[0.7]]), np.array([[0.33]])),
            BiasedCapacitors(("b",), see, see.T, around, np.array([[5.0]]), np.array([[0.2]])),
            SaturatingCore(
                ("c",), flux, flux.T, around, np.array([0.0, 1.0, 3.0]), np.array([1.0, 0.9, 0.3])
            ),
        ),
        ports=3,
    )


def test_synthesis_and_analysis_are_inverse():
    grid = Grid(7)
    np.testing.assert_allclose(grid.analysis @ grid.synthesis, np.eye(grid.size), atol=1e-14)
    x = RNG.standard_normal((grid.size, 3))
    np.testing.assert_allclose(analyse(synthesis(7, 40) @ x, 7), x, atol=1e-14)


def test_derivative_of_a_cosine_is_minus_sine():
    grid = Grid(5)
    x = np.zeros((1, grid.size, 1))
    x[0, 3] = 2.0  # 2 cos 3 theta
    phase = 2 * np.pi * np.arange(grid.points) / grid.points
    slope = grid.synthesis @ grid.derive(x)[0, :, 0]
    np.testing.assert_allclose(slope, -6 * np.sin(3 * phase), atol=1e-13)


def test_products_fold_onto_low_harmonics_without_room_in_the_grid():
    """Why 4 points per harmonic: at 2 the square of the top harmonic falls on the mean wrongly."""
    harmonics = 6
    x = np.zeros(2 * harmonics + 1)
    x[harmonics - 1] = 1.0  # cos 5 theta; its square has harmonic 10
    wide, narrow = 4 * harmonics, 2 * harmonics + 1
    exact = analyse((synthesis(harmonics, wide) @ x) ** 2, harmonics)
    folded = analyse((synthesis(harmonics, narrow) @ x) ** 2, harmonics)
    np.testing.assert_allclose(exact, [0.5] + [0.0] * 12, atol=1e-14)
    assert np.abs(folded - exact).max() > 0.4
    assert Grid(harmonics).points >= wide


@pytest.mark.parametrize("dtype", [np.float64, np.float32])
def test_kernels_agree_with_the_elements_that_have_derivatives(dtype):
    """A residual that disagrees with its Jacobian never converges (measured: 0 of 4096)."""
    units, points = 5, 16
    devices = some_devices(units)
    v = RNG.uniform(-6, 6, (3, points, units))
    scratch = Scratch.of(points, units, dtype)
    kernels = kernels_of(devices, units)
    for kernel, elements in zip(kernels, devices.elements, strict=True):
        rows = tuple(kernel.rows.astype(dtype))
        found = kernel.evaluate(v.astype(dtype), rows, scratch)
        truth = np.stack([elements.respond(v[:, k])[0][0] for k in range(points)])
        if found is None:
            assert np.abs(truth).max() < np.finfo(dtype).eps
            continue
        tolerance = 1e-12 if dtype == np.float64 else 2e-5
        np.testing.assert_allclose(found, truth, rtol=tolerance, atol=tolerance)


@pytest.mark.parametrize("kind", ["current", "charge"])
def test_waves_of_elements_are_what_the_devices_answer(kind):
    devices, v = some_devices(4), RNG.uniform(-3, 3, (3, 9, 4))
    truth = {}
    for elements in devices.elements:
        if elements.kind == kind:
            points = np.stack([elements.respond(v[:, k])[0] for k in range(9)], axis=1)
            truth |= dict(zip(elements.names, points, strict=True))
    found = element_waves(devices, v, kind)
    assert found.keys() == truth.keys()
    for name, wave in found.items():
        np.testing.assert_allclose(wave, truth[name], rtol=1e-12, atol=1e-15)
    name = next(iter(truth))
    (only,) = element_waves(devices, v, kind, {name}).items()
    assert only[0] == name
    assert np.array_equal(only[1], found[name])


def test_an_element_is_skipped_only_where_its_current_is_exactly_zero():
    """Skipping may depend on neighbours in a block, so it must not change a bit."""
    for dtype in (np.float32, np.float64):
        quiet = dtype(Scratch.of(1, 1, dtype).quiet)
        assert np.log(dtype(1) + np.exp(quiet)) == 0


def test_a_coupling_that_the_topology_lacks_is_refused(nominal):
    case = nominal.case
    topology = Topology.of((bare_network(case),), nominal.frame.scale, ())
    poorer = Topology(
        topology.scale, topology.storage[1:], topology.conduction, topology.driven, ()
    )
    with pytest.raises(TopologyError):
        UnitTable.of(case, poorer, np.float64)


def test_coarse_multipliers_are_deflated_and_refine_to_those_of_shooting(nominal):
    """Undeflated, the phase multiplier reads about 1.2 at 16 steps: it would look unstable."""
    network = nominal.case.network(nominal.solution.junctions)
    orbit = nominal.solution
    waves = orbit.samples[:-1] / nominal.frame.scale
    coefficients = analyse(waves, 48).transpose(2, 0, 1)
    truth = np.sort(np.abs(orbit.multipliers[0]))[::-1]
    for steps, tolerance in ((16, 0.03), (128, 2e-3)):
        found = _pass(network, coefficients, orbit.period, nominal.frame.scale, steps)
        assert largest_beside_charge(found)[0] < 1.0
        np.testing.assert_allclose(np.abs(found[0, :2]), truth[:2], atol=tolerance)


def test_scattered_units_share_one_topology(nominal):
    values = typical_values(circuit_a(), 6)
    case = Case(circuit_a(), scattered(values, RNG, CIRCUIT_A_SPREAD), heated=False)
    topology = Topology.of((bare_network(nominal.case),), nominal.frame.scale, ())
    table = UnitTable.of(case, topology, np.float64)
    part = UnitTable.of(case.take(np.array([4])), topology, np.float64)
    assert np.array_equal(table.linear[:, 4:5], part.linear)
    assert np.array_equal(table.device[:, 4:5], part.device)


def test_spectra_of_drives_are_those_of_their_waves():
    """Square and sine between 0 and 1, of whatever level: the fundamental in closed form."""
    shape = DriveShape(
        low=np.full((3, 2), -2.0),
        high=np.full((3, 2), 5.0),
        duty=np.array([0.5, 0.5]),
        edge=np.array([0.05, 0.05]),
        sine=np.array([False, True]),
    )
    phases = np.arange(40)[:, None] / 40
    unit = shape.take(np.array([0]))
    one_by_one = np.array([unit.at(float(phase))[0] for phase in phases[:, 0]])
    np.testing.assert_allclose(unit.at(phases), one_by_one, atol=1e-14)
    square, sine = drive_spectra(SimpleNamespace(drive_shape=shape), Grid(8))
    np.testing.assert_allclose(sine[[0, 1, 9]], [0.5, 0.0, 0.5], atol=1e-12)
    # a square wave of half duty: 2 / (pi k), rounded by edges that are half a cosine
    width = 2 * np.pi * 0.05 / 2
    rounded = np.cos(width) / (1 - (2 * width / np.pi) ** 2)
    assert square[9] == pytest.approx(2 / np.pi * rounded, abs=1e-6)
    assert square[0] == pytest.approx(0.5, abs=1e-6)
