"""The condensed inverse against the inverse of a Jacobian measured column by column."""

import numpy as np
import pytest
from circuits import circuit_a, typical_values
from stages import class_e, self_biased

from tolsim.circuit.bulk.grid import Grid
from tolsim.circuit.bulk.inverse import SingularError, inverse_at
from tolsim.circuit.bulk.reference import anchor_of, first_unknowns
from tolsim.circuit.bulk.residual import Residual
from tolsim.circuit.bulk.unit_table import Topology, UnitTable, bare_network, heated_junctions
from tolsim.circuit.nominal import find_nominal
from tolsim.circuit.thermal import Case
from tolsim.parts import Mosfet

HARMONICS, SLOTS, PROBE = 10, 16, 1e-6


def warm_circuit_a():
    """Circuit A with drift and gate resistances, junctions unknown."""
    design = circuit_a()
    parts = dict(design.parts)
    for ref, part in design.parts.items():
        if isinstance(part, Mosfet):
            model = part.model.model_copy(update={"drift_resistance": 0.05})
            change = {"model": model, "gate_resistance": 1.0, "thermal_resistance": 2.0}
            parts[ref] = part.model_copy(update=change)
    return design.model_copy(update={"parts": parts})


def at_work(design, heated):
    """Nominal unit, a residual with it in all slots, and unknowns near its orbit."""
    case = Case(design, typical_values(design), heated)
    nominal = find_nominal(case, 96)
    grid = Grid(HARMONICS)
    network = bare_network(case)
    topology = Topology.of((network,), nominal.frame.scale, heated_junctions(case))
    z = first_unknowns(nominal.solution, topology, grid)[:, 0]
    anchor = anchor_of(z, 2 * np.pi / float(nominal.solution.period[0]), topology, grid)
    table = UnitTable.of(case, topology, np.float64)
    residual = Residual(design, table, topology, grid, anchor, SLOTS)
    residual.load(np.arange(SLOTS), np.zeros(SLOTS, dtype=np.intp))
    return case, residual, z


def measured_jacobian(residual, z):
    """dR/dz by central differences, a few columns at a time."""
    matrix = np.empty((len(z), len(z)))
    for first in range(0, len(z), SLOTS // 2):
        columns = np.arange(first, min(first + SLOTS // 2, len(z)))
        probes = np.repeat(z[:, None], SLOTS, axis=1)
        probes[columns, columns - first] += PROBE
        probes[columns, columns - first + SLOTS // 2] -= PROBE
        value = residual.evaluate(probes)
        half = value[:, : SLOTS // 2] - value[:, SLOTS // 2 :]
        matrix[:, columns] = half[:, : len(columns)] / (2 * PROBE)
    return matrix


STAGES = {
    "oscillator": (circuit_a(), False),
    "warm oscillator": (warm_circuit_a(), True),
    "diode bias, coupled coils": (self_biased(), True),
    "driven stage": (class_e(0.2, 0.4, 10.0, 50.0, on_resistance=0.05), False),
}


@pytest.mark.parametrize("name", STAGES)
def test_corrections_undo_the_jacobian(name):
    case, residual, z = at_work(*STAGES[name])
    inverse = inverse_at(case, residual, z)
    jacobian = measured_jacobian(residual, z)
    move = np.random.default_rng(4).standard_normal((len(z), SLOTS))
    found = inverse.corrector(SLOTS)(jacobian @ move)
    np.testing.assert_allclose(found, -move, atol=2e-4)


@pytest.mark.parametrize("name", STAGES)
def test_single_precision_loses_no_more_than_a_rounded_inverse(name):
    """Trapped charge makes the system ill-conditioned; taking it apart must not make it worse."""
    case, residual, z = at_work(*STAGES[name])
    jacobian = measured_jacobian(residual, z)
    move = np.random.default_rng(4).standard_normal((len(z), 3))
    gap = jacobian @ move
    found = inverse_at(case, residual, z).single().corrector(3)(gap)
    assert found.dtype == np.float32
    rounded = np.linalg.inv(jacobian).astype(np.float32) @ gap.astype(np.float32)
    assert np.abs(found + move).max() < 4 * np.abs(rounded - move).max() + 1e-3


def test_unknowns_that_are_no_numbers_have_no_inverse():
    case, residual, z = at_work(*STAGES["oscillator"])
    with pytest.raises(SingularError), np.errstate(all="ignore"):
        inverse_at(case, residual, np.full_like(z, np.nan))
