"""The compiled stepper: closed forms, conservation, drives, batches, and units that are lost."""

from __future__ import annotations

import numpy as np
import pytest
from circuits import CIRCUIT_A_SPREAD, circuit_a, scattered, typical_values
from scipy.integrate import solve_ivp
from stages import capacitor, class_e, inductor, units_of

from tolsim.circuit.bias import bias_point
from tolsim.circuit.network import Network
from tolsim.circuit.startup import modes
from tolsim.circuit.thermal import Case
from tolsim.circuit.transients.journey import Ending, Goal, Journey, Ramps, travel
from tolsim.design import Design, Rail
from tolsim.parts import Clamp, Diode

VOLTS = 10.0
COIL, TANK, LOSS = 1e-6, 1e-9, 2.0
OMEGA = 1.0 / np.sqrt(COIL * TANK)


def live(design: Design, changes: dict | None = None) -> Network:
    case = units_of(design, changes)
    return case.network(case.cold_junctions(), live_rails=True)


def ramps(units: int, rails: int, rise: float) -> Ramps:
    """All rails in equal parts from 0 to full within `rise` seconds."""
    times = np.tile([0.0, rise], (units, rails, 1))
    return Ramps(times, np.tile([0.0, 1.0], (units, rails, 1)))


def no_goal(network: Network, scale: np.ndarray) -> Goal:
    """Nothing to reach: run until time is up."""
    return Goal(np.full((network.units, network.states), np.inf), scale, 0)


def run(
    network: Network, rise: float, limit: float, scale: float = 10.0, **keys: object
) -> Journey:
    """From zero, or `x0`, to the limit, by windows of 1/16 of it."""
    units, n = network.units, network.states
    x0 = keys.pop("x0", np.zeros((units, n)))
    rails = 0 if network.rail_matrix is None else network.rail_matrix.shape[2]
    goal = no_goal(network, np.full(n, scale))
    windows = keys.pop("windows", 16)
    span = np.full(units, limit)
    # stop within one step of the limit
    return travel(
        network, x0, ramps(units, rails, rise), goal, span / windows, 0.9999 * span, **keys
    )


def ladder(loss: float) -> Design:
    """Rail, coil, capacitor in series; a clamp far out of reach gives it a port."""
    parts = {
        "L": inductor("vdd", "c", COIL, loss),
        "C": capacitor("c", "gnd", TANK),
        "Z": Clamp(kind="clamp", nets=("c", "gnd"), voltage=1e3, resistance=1.0),
    }
    return Design(parts=parts, rails={"vdd": Rail(net="vdd", voltage=VOLTS)}, leak=1e-15)


def stepped(time: float) -> float:
    """Voltage of a series RLC after a step of its source at 0."""
    decay = LOSS / (2 * COIL)
    ring = np.sqrt(OMEGA**2 - decay**2)
    swing = np.cos(ring * time) + decay / ring * np.sin(ring * time)
    return float(VOLTS * (1 - np.exp(-decay * time) * swing))


def test_rlc_step_through_a_live_rail():
    """Series RLC on a step (1e-4 of a period): closed form, at its end and at its peak."""
    network = live(ladder(LOSS))
    period = 2 * np.pi / OMEGA
    place = network.index["c"]
    found = run(network, 1e-4 * period, 3.3 * period, steps_per_window=128)
    middle = 0.5e-4 * period  # the ramp acts as a step at its middle
    assert found.ending[0] == Ending.TIME_UP
    assert found.x[0, place] == pytest.approx(stepped(found.time[0] - middle), abs=2e-3 * VOLTS)
    decay = LOSS / (2 * COIL)
    ring = np.sqrt(OMEGA**2 - decay**2)
    peak = VOLTS * (1 + np.exp(-decay * np.pi / ring))
    assert found.highest[0, place] == pytest.approx(peak, rel=1e-4)
    assert found.highest_at[0, place] == pytest.approx(np.pi / ring, rel=0.02)


def test_second_order_in_the_step():
    """Twice the steps, a quarter of the error, on a ramp that lasts all the time."""
    network = live(ladder(LOSS))
    period = 2 * np.pi / OMEGA
    slope = VOLTS / (20 * period)

    def rates(t: float, y: np.ndarray) -> list[float]:
        return [(slope * t - LOSS * y[0] - y[1]) / COIL, y[0] / TANK]

    errors = []
    for steps in (32, 64, 128):
        found = run(
            network, 20 * period, 4 * period, steps_per_window=steps, tolerance=1.0, windows=4
        )
        known = solve_ivp(rates, (0, found.time[0]), [0.0, 0.0], rtol=1e-10, atol=1e-12).y[1, -1]
        errors.append(abs(found.x[0, network.index["c"]] - known))
    assert np.log2(np.array(errors[:-1]) / errors[1:]) == pytest.approx(2.0, abs=0.35)


def test_ring_down_with_its_energy():
    """A charged tank without source: (C v^2 + L i^2) / 2 falls as the R/L of its coil says."""
    network = live(ladder(LOSS))
    x0 = np.zeros((1, network.states))
    x0[0, network.index["c"]] = 5.0
    period = 2 * np.pi / OMEGA
    silent = np.zeros((1, 1, 2))
    found = travel(
        network,
        x0,
        Ramps(np.array([[[0.0, 1.0]]]), silent),
        no_goal(network, np.full(network.states, 5.0)),
        np.array([period]),
        np.array([19.99 * period]),
        steps_per_window=256,
    )
    v, i = found.x[0, network.index["c"]], found.x[0, network.index["L"]]
    energy = 0.5 * (TANK * v**2 + COIL * i**2)
    share = np.exp(-LOSS / COIL * found.time[0])
    # at a whole number of periods the phase is that of the start
    assert energy == pytest.approx(0.5 * TANK * 25.0 * share, rel=0.02)


def test_charge_of_an_island_is_conserved():
    """A net held by capacitors and a junction alone keeps its charge while the rail rings."""
    parts = {
        "L": inductor("vdd", "c", COIL, LOSS),
        "C": capacitor("c", "gnd", TANK),
        "CI": capacitor("c", "i", 200e-12),
        "CG": capacitor("i", "gnd", 100e-12),
        "D": Diode(  # a junction with a forward voltage that is never reached
            kind="diode", anode="gnd", cathode="i", voltage=1e3, resistance=1.0, capacitance=300e-12
        ),
    }
    design = Design(parts=parts, rails={"vdd": Rail(net="vdd", voltage=VOLTS)}, leak=1e-15)
    network = live(design)

    def charge(x: np.ndarray) -> float:
        _, q, *_ = network.devices.evaluate(network.port_voltages(x))
        return float((x @ network.E[0].T + q @ network.D)[0, network.index["i"]])

    period = 2 * np.pi / OMEGA
    found = run(network, 0.1 * period, 12.3 * period, windows=12)
    assert np.ptp([found.highest[0, network.index["i"]], 0.0]) > 1.0  # it has moved
    # the leak of 1 fS at some 10 V takes 2e-20 C in this time
    assert abs(charge(found.x) - charge(np.zeros((1, network.states)))) < 3e-11 * 200e-12 * VOLTS


def test_growth_rate_is_the_eigenvalue():
    """Circuit A at a fixed bias point: a small seed grows and turns as its leading mode, to 1 %."""
    network = live(circuit_a()).raised(1.0)
    bias = bias_point(network)
    lead = modes(network, bias, 4e7)
    period = 1.0 / lead.frequency[0]
    vector = lead.vector[0] * 1e-6 / np.abs(lead.vector[0]).max()
    found = travel(
        network,
        bias.x + vector.real,
        Ramps.none(1),
        no_goal(network, np.abs(bias.x[0]) + 1.0),
        np.array([period]),
        np.array([2.9 * period]),
        steps_per_window=256,
    )
    # the rest is Re(a vector) with a = exp((growth + j 2 pi frequency) t)
    parts, *_ = np.linalg.lstsq(
        np.stack([vector.real, -vector.imag], axis=1), (found.x - bias.x)[0], rcond=None
    )
    assert np.log(np.hypot(*parts)) / found.time[0] == pytest.approx(lead.growth[0], rel=0.01)
    turned = 2 * np.pi * lead.frequency[0] * found.time[0]
    away = (np.arctan2(parts[1], parts[0]) - turned + np.pi) % (2 * np.pi) - np.pi
    assert abs(away) < 0.01 * turned


def test_a_drive_is_followed():
    """A square drive of 1 ohm at a gate of 1 pF: the gate does what `DriveShape` says."""
    network = live(class_e(0.18, 0.2, 5.0, 0.7, on_resistance=0.05))
    shape, frequency = network.drive_shape, network.drive_frequency
    assert shape is not None
    assert frequency is not None
    found = run(network, 1e-9, 40.0 / frequency, windows=40, steps_per_window=256)
    gate = network.index["g"]
    wave = shape.at(np.linspace(0, 1, 1000, endpoint=False)[:, None])
    assert found.last_high[0, gate] == pytest.approx(wave.max(), rel=0.01)
    assert found.last_low[0, gate] == pytest.approx(wave.min(), abs=0.01 * wave.max())
    assert found.last_mean[0, gate] == pytest.approx(wave.mean(), rel=0.01)


def spread_a(units: int) -> Network:
    values = scattered(
        typical_values(circuit_a(), units), np.random.default_rng(4), CIRCUIT_A_SPREAD
    )
    case = Case(circuit_a(), values)
    return case.network(case.cold_junctions(), live_rails=True)


def test_unit_by_unit_is_the_batch():
    """A unit is the same alone and among others, to the last bit."""
    network = spread_a(3)
    together = run(network, 1e-7, 3e-6)
    for unit in range(3):
        alone = run(network.take(np.array([unit])), 1e-7, 3e-6)
        for name in ("x", "highest", "lowest", "energy", "last_mean", "steps", "time"):
            np.testing.assert_array_equal(getattr(alone, name)[0], getattr(together, name)[unit])


def test_a_lost_unit_is_a_status():
    """A unit whose equations give no number ends as lost; its neighbours go on."""
    network = spread_a(3)
    x0 = np.zeros((3, network.states))
    x0[1, network.index["ga"]] = np.nan
    found = run(network, 1e-7, 1e-6, x0=x0)
    assert found.ending.tolist() == [Ending.TIME_UP, Ending.LOST, Ending.TIME_UP]
    assert np.isfinite(found.x[[0, 2]]).all()
