"""The critical transconductance followed from the nominal unit is the one that a search finds."""

import numpy as np
from circuits import CIRCUIT_A_SPREAD, circuit_a, scattered, typical_values

from tolsim.circuit.bias import bias_point
from tolsim.circuit.critical import follow_critical
from tolsim.circuit.startup import (
    critical_point,
    modes,
    oscillation_scale,
    small_signal,
    start_margin,
)
from tolsim.circuit.thermal import Case

UNITS = 12


def stage(units, bias=4.2):
    """Network, bias and reference frequency of circuit A."""
    design = circuit_a()
    values = typical_values(design, units)
    values["vb.voltage"] = np.full(units, bias)
    values = scattered(values, np.random.default_rng(4), CIRCUIT_A_SPREAD if units > 1 else {})
    case = Case(design, values, heated=False)
    network = case.network(case.cold_junctions())
    point = bias_point(network)
    return network, point, oscillation_scale(network, point)


def test_a_critical_point_sustains_a_mode():
    network, bias, omega = stage(1)
    near = critical_point(network, bias, omega)
    C, J, through = small_signal(network, bias)
    A = J + (near.factor[0] - 1) * through + 1j * near.omega[0] * C
    scale = np.abs(J[0]) @ np.abs(near.vector[0])
    assert np.max(np.abs(A[0] @ near.vector[0]) / scale) < 1e-3


def test_followed_margins_are_those_of_the_search():
    nominal, bias, omega = stage(1)
    near = critical_point(nominal, bias, omega)
    network, points, _ = stage(UNITS)
    followed = start_margin(network, points, omega, near, modes(network, points, omega))
    searched = start_margin(network, points, omega)
    np.testing.assert_allclose(followed, searched, atol=0.01)
    C, J, through = small_signal(network, points)
    assert follow_critical(C, J, through, near).settled.mean() > 0.5


def test_a_stage_without_transconductance_has_no_critical_point():
    network, bias, omega = stage(1, bias=0.0)
    assert critical_point(network, bias, omega) is None
