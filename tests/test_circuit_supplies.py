"""Supplies with limit, cable and bulk capacitor against closed forms; live rails against fixed."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.circuits import circuit_a, typical_values
from tolsim.circuit.assembly import assemble
from tolsim.circuit.bias import bias_point
from tolsim.circuit.network import Network
from tolsim.circuit.nominal import find_nominal
from tolsim.circuit.startup import start_margin
from tolsim.circuit.supply_ramp import profile_of
from tolsim.circuit.thermal import Case
from tolsim.circuit.transient import march
from tolsim.design import Design, Rail
from tolsim.figures import measure_orbits
from tolsim.parts import Capacitor, Resistor

Floats = NDArray[np.float64]
LEAK = 1e-12


def resistor(ohms: float) -> Resistor:
    return Resistor(kind="resistor", nets=("vdd", "gnd"), resistance=ohms)


def live(rail: Rail, **parts: object) -> Network:
    design = Design.model_validate({"parts": parts, "rails": {"vdd": rail}, "leak": LEAK})
    return assemble(design, typical_values(design), live_rails=True)


def rise(network: Network, rail: Rail, step: float, count: int) -> Floats:
    """States (count + 1, n) of the only unit from rest."""
    ramp = profile_of(rail)
    start = np.zeros((1, network.states))

    def levels(t: Floats) -> Floats:
        """Counted from the end of the step, which is far shorter than those of the march."""
        return ramp.at(t + ramp.end)[:, None]

    return march(network, start, np.array([step]), count, levels=levels)[:, 0]


def test_step_of_cable_and_bulk_capacitor_rings_as_it_must():
    """Series R-L into C, from any textbook of circuits.

    v = V [1 - e^(-a t) (cos w t + a/w sin w t)], i = V/(w L) e^(-a t) sin w t, with a = R/2L and
    w^2 = 1/LC - a^2.
    """
    r, cable, c, volts = 0.05, 2e-6, 100e-6, 24.0
    rail = Rail(net="vdd", voltage=volts, resistance=r, inductance=cable, bulk_capacitance=c)
    network = live(rail, R1=resistor(1e9))
    step, count = 2e-7, 1500
    x = rise(network, rail, step, count)
    t = np.arange(count + 1) * step
    a = r / (2 * cable)
    w = np.sqrt(1 / (cable * c) - a * a)
    exact = volts * (1 - np.exp(-a * t) * (np.cos(w * t) + a / w * np.sin(w * t)))
    assert np.abs(x[:, network.index["vdd"]] - exact).max() < 2e-3 * volts
    current = network.supplies["vdd"].at(x[:, None], np.zeros((len(x), 1, 0)), 1.0)[:, 0]
    flowing = volts / (w * cable) * np.exp(-a * t) * np.sin(w * t)
    assert np.abs(current - flowing).max() < 2e-3 * np.abs(flowing).max()


def test_series_resistance_of_the_bulk_capacitor_divides_the_step():
    """Source R into C with series resistance: the net starts at V r/(R + r), time (R + r) C."""
    big, small, c = 0.9, 0.1, 10e-6
    rail = Rail(net="vdd", voltage=10.0, resistance=big, bulk_capacitance=c, bulk_resistance=small)
    network = live(rail, R1=resistor(1e9))
    x = rise(network, rail, 1e-7, 300)
    t = np.arange(301) * 1e-7
    exact = 10.0 * (1 - big / (big + small) * np.exp(-t / ((big + small) * c)))
    assert x[10:, network.index["vdd"]] == pytest.approx(exact[10:], rel=2e-3)
    supply = network.supplies["vdd"]
    current = supply.at(x[-1:, None], np.zeros((1, 1, 0)), 1.0)[0, 0]
    assert current == pytest.approx((10.0 - x[-1, network.index["vdd"]]) / big)


def test_a_limited_supply_charges_a_capacitor_in_a_straight_line():
    """dv/dt = I/C until the voltage is there."""
    rail = Rail(net="vdd", voltage=20.0, resistance=0.05, current_limit=2.0)
    charge = Capacitor(kind="capacitor", nets=("vdd", "gnd"), capacitance=100e-6)
    network = live(rail, C1=charge)
    x = rise(network, rail, 2e-6, 700)
    t = np.arange(701) * 2e-6
    volts = x[:, network.index["vdd"]]
    middle = (t > 5e-5) & (t < 9e-4)
    assert np.diff(volts)[middle[1:]] / 2e-6 == pytest.approx(2.0 / 100e-6, rel=4e-3)
    assert volts[middle] == pytest.approx(2.0 / 100e-6 * t[middle], rel=3e-3, abs=0.02)
    assert volts[-1] == pytest.approx(20.0, rel=1e-3)
    assert x[:, network.index["vdd:feed"]].max() < 2.0 * 1.005


@pytest.mark.parametrize("foldback", [None, 0.3])
def test_limit_against_output_voltage(foldback: float | None):
    """Below the limit V - R i; at it I, or I (f + (1 - f) v/V) with foldback."""
    volts, limit, r = 24.0, 3.0, 0.1
    rail = Rail(net="vdd", voltage=volts, resistance=r, current_limit=limit, foldback=foldback)
    for load in (100.0, 10.0, 5.0, 1.0, 0.1, 0.01):
        design = Design(parts={"R1": resistor(load)}, rails={"vdd": rail}, leak=LEAK)
        network = assemble(design, typical_values(design))
        bias = bias_point(network)
        assert bias.settled.all()
        out = network.potential("vdd", bias.x)[0]
        current = network.supplies["vdd"].at(bias.x, np.zeros((1, network.D.shape[0])))[0]
        share = 1.0 if foldback is None else foldback + (1 - foldback) * out / volts
        assert current == pytest.approx(min(volts / (load + r), limit * share), abs=3e-3 * limit)
        assert out == pytest.approx(current * load)


def test_live_rails_at_their_full_level_are_the_network_itself():
    """Bias point and a stretch of the running stage, for ideal rails and ones with series parts."""
    ideal = circuit_a()
    series = {
        "vdd": Rail(net="vdd", voltage=24.0, resistance=0.1, inductance=1e-6, current_limit=9.0),
        "vb": Rail(net="vb", voltage=4.2, resistance=1.0),
    }
    for design in (ideal, ideal.model_copy(update={"rails": series})):
        values = typical_values(design, 2)
        fixed = assemble(design, values)
        free = assemble(design, values, live_rails=True)
        assert free.rail_names == ("vdd", "vb")
        assert set(free.known) == {"gnd"}
        still, raised = bias_point(fixed), bias_point(free.raised())
        same = [free.index[name] for name in fixed.index]
        assert raised.x[:, same] == pytest.approx(still.x, rel=1e-6, abs=1e-7)
        kick = still.x.copy()
        kick[:, fixed.index["ga"]] += 0.3
        start = raised.x.copy()
        start[:, same] = kick
        step = np.full(2, 1 / 6.6e6 / 128)
        one = march(fixed, kick, step, 1000)
        ones = np.ones((2, 2))
        other = march(free, start, step, 1000, levels=lambda _, ones=ones: ones)
        assert np.abs(other[..., same] - one).max() < 1e-6 * np.abs(one).max()
        for name, supply in fixed.supplies.items():
            f, *_ = fixed.devices.evaluate(fixed.port_voltages(one[-1]))
            g, *_ = free.devices.evaluate(free.port_voltages(other[-1]))
            expected = supply.at(one[-1], f)
            assert free.supplies[name].at(other[-1], g) == pytest.approx(expected, rel=1e-4)


def test_units_picked_from_a_live_network_keep_their_rails():
    design = circuit_a()
    values = typical_values(design, 3)
    values["vdd.voltage"] = np.array([20.0, 24.0, 28.0])
    picked = assemble(design, values, live_rails=True).take(np.array([2, 0]))
    bias = bias_point(picked.raised(np.array([0.5, 1.0])))
    assert picked.potential("vdd", bias.x) == pytest.approx([14.0, 10.0], rel=1e-5)


@pytest.mark.parametrize(
    ("supply", "current"),
    [
        ({"inductance": 2e-6, "bulk_capacitance": 10e-6, "bulk_resistance": 0.02}, None),
        ({"current_limit": 3.9}, 3.9),
    ],
)
def test_energy_of_a_running_stage_closes(supply: dict[str, float], current: float | None) -> None:
    """Power from the source is all heat and output, also with the stage held at the limit."""
    plain = circuit_a()
    rail = Rail(net="vdd", voltage=24.0, resistance=0.05, **supply)  # type: ignore[arg-type]
    design = plain.model_copy(update={"rails": {**plain.rails, "vdd": rail}})
    mean, figures = running(design)
    assert abs(figures["energy_balance"]) < 1e-3
    assert figures["frequency"] == pytest.approx(6.60444e6, rel=1e-3)
    if current is None:  # nothing but direct current comes through the cable
        assert figures["vdd.current_ripple"] < 1e-4
        assert figures["vdd.current_mean"] == pytest.approx(4.22 * (24 - 0.05 * 4.2) / 24, rel=3e-3)
        return
    drawn = figures["vdd.current_mean"]
    assert drawn == pytest.approx(current, rel=5e-3)
    given = (mean["vdd"] + 0.05 * drawn) * drawn  # not the 24 V that the limit holds back
    assert figures["input_power"] == pytest.approx(given, rel=1e-3)


def running(design: Design) -> tuple[dict[str, float], dict[str, float]]:
    """Mean net voltages and figures of the nominal orbit, started near it."""
    case = Case(design, typical_values(design), heated=False)
    nominal = find_nominal(case, 128)
    assert nominal.found
    index = case.network(case.cold_junctions()).index
    mean = nominal.solution.samples[:-1, 0].mean(axis=0)
    figures = measure_orbits(case, nominal.solution)
    return (
        {name: float(mean[i]) for name, i in index.items()},
        {name: float(value[0]) for name, value in figures.items()},
    )


def test_a_folding_limit_charges_a_capacitor_exponentially():
    """C dv/dt = I [f + (1 - f) v/V] gives v = V f/(1 - f) [e^((1 - f) I t/(C V)) - 1]."""
    volts, limit, left, c = 20.0, 2.0, 0.25, 100e-6
    rail = Rail(net="vdd", voltage=volts, current_limit=limit, foldback=left, bulk_capacitance=c)
    network = live(rail, R1=resistor(1e9))
    step, count = 2e-6, 1100
    v = rise(network, rail, step, count)[:, network.index["vdd"]]
    t = np.arange(count + 1) * step
    rate = (1 - left) * limit / (c * volts)
    exact = volts * left / (1 - left) * (np.exp(rate * t) - 1)
    charging = (exact > 0.05 * volts) & (exact < 0.95 * volts)
    assert charging.sum() > 300
    assert v[charging] == pytest.approx(exact[charging], rel=0.012)
    assert v[-1] == pytest.approx(volts, rel=1e-3)


def test_a_limit_that_is_not_reached_changes_nothing_about_the_start():
    """Its slope against the output voltage is no transconductance."""
    plain = circuit_a()
    margins = []
    for extra in ({}, {"current_limit": 9.0, "foldback": 0.3}):
        rail = Rail(
            net="vdd",
            voltage=24.0,
            resistance=0.1,
            inductance=1e-6,
            bulk_capacitance=1e-4,
            bulk_resistance=0.05,
            **extra,  # type: ignore[arg-type]
        )
        design = plain.model_copy(update={"rails": {**plain.rails, "vdd": rail}})
        network = assemble(design, typical_values(design))
        margins.append(start_margin(network, bias_point(network), 5e7)[0])
    assert margins[1] == pytest.approx(margins[0], abs=1e-3)
    assert margins[0] > 3.0
