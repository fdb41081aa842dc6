"""Changes of load against closed forms: what carries over, how it rings down, where energy goes."""

from __future__ import annotations

from collections.abc import Mapping
from math import exp, pi, sqrt

import numpy as np
import pytest
from numpy.typing import NDArray
from stages import capacitor, inductor, mosfet, resistor, units_of

from tolsim.circuit.load_change.handover import hand_over
from tolsim.circuit.load_change.passage import Fate, Passage, travel_road
from tolsim.circuit.load_change.road import Road, carried, road
from tolsim.circuit.transients.journey import Goal
from tolsim.design import Design, Rail
from tolsim.parts import Clamp, Inductor, Load

Floats = NDArray[np.float64]

COIL, TANK = 1e-6, 1e-9
OMEGA = 1 / sqrt(COIL * TANK)
PERIOD = 2 * pi / OMEGA
LEAK = 1e-15


def design(volts: float = 10.0, **parts: object) -> Design:
    """Parts beside a transistor without capacitance that never conducts."""
    off = mosfet("vdd", "gnd", 5.0, 1e-6)
    return Design(
        parts={"Q1": off, **parts}, rails={"vdd": Rail(net="vdd", voltage=volts)}, leak=LEAK
    )


def way(
    plan: Design, before: Mapping[str, float], after: Mapping[str, float], pieces: int = 1
) -> Road:
    """Road of one unit between two states given by some of their values."""
    values = [
        units_of(plan, {key: np.array([value]) for key, value in given.items()}).values
        for given in (before, after)
    ]
    junctions = {"Q1": np.array([25.0])}
    return road(plan, *values, junctions, pieces=pieces)


def changed(
    plan: Design, before: Mapping[str, float], after: Mapping[str, float], x: Mapping[str, float]
) -> Mapping[str, float]:
    """States just after a change at once, by name."""
    old, new = way(plan, before, after).stations
    state = np.zeros((1, old.states))
    for name, value in x.items():
        state[0, old.index[name]] = value
    found = hand_over(old, new, state, np.array([PERIOD]), 0.0)
    return {name: float(found[0, i]) for name, i in new.index.items()}


def tank(**parts: object) -> Design:
    return design(C1=capacitor("a", "gnd", TANK), L1=inductor("a", "gnd", COIL), **parts)


def test_a_capacitor_keeps_its_charge_and_a_coil_its_flux():
    """Q = C V and L I do not jump: V' = V C / C', and the energy becomes Q^2 / 2 C'."""
    before = {"C1.capacitance": TANK, "L1.inductance": COIL}
    after = {"C1.capacitance": 1.6 * TANK, "L1.inductance": 0.8 * COIL}
    found = changed(tank(), before, after, {"a": 8.0, "L1": 0.5})
    assert found["a"] == pytest.approx(8.0 / 1.6, rel=1e-4)
    assert found["L1"] == pytest.approx(0.5 / 0.8, rel=1e-4)
    energy = 0.5 * 1.6 * TANK * found["a"] ** 2
    assert energy == pytest.approx((8.0 * TANK) ** 2 / (2 * 1.6 * TANK), rel=2e-4)


def test_nothing_jumps_when_nothing_changes():
    x = {"a": 8.0, "L1": 0.5}
    found = changed(tank(), {}, {}, x)
    assert {name: found[name] for name in x} == pytest.approx(x, rel=1e-4)


def test_a_capacitor_to_a_rail_keeps_the_charge_between_its_plates():
    """C (v - V) is what stays, not C v."""
    plan = design(10.0, C1=capacitor("a", "vdd", TANK), R1=resistor("a", "gnd", 1e6))
    before, after = {"C1.capacitance": TANK}, {"C1.capacitance": 2.5 * TANK}
    found = changed(plan, before, after, {"a": 4.0})
    assert found["a"] == pytest.approx(10.0 - 6.0 / 2.5, rel=1e-4)


def test_coupled_coils_keep_both_fluxes():
    """L1 i1 + M i2 and M i1 + L2 i2 stay while M changes."""
    load = Load(kind="load", coil="L1", coupling=0.1, inductance=4e-7, resistance=10.0)
    before, after = {"LAMP.coupling": 0.1}, {"LAMP.coupling": 0.5}
    found = changed(tank(LAMP=load), before, after, {"L1": 1.0, "LAMP": 0.2})
    mutual = [k * sqrt(COIL * 4e-7) for k in (0.1, 0.5)]
    flux = np.array([COIL * 1.0 + mutual[0] * 0.2, mutual[0] * 1.0 + 4e-7 * 0.2])
    exact = np.linalg.solve([[COIL, mutual[1]], [mutual[1], 4e-7]], flux)
    assert [found["L1"], found["LAMP"]] == pytest.approx(exact, rel=1e-4)


def test_a_saturating_core_keeps_its_flux():
    """L0 halves: the current doubles where the core is linear, and more where it is not."""
    points = ((1.0, 1.0), (2.0, 0.5))
    core = Inductor(
        kind="inductor", nets=("a", "gnd"), inductance=COIL, resistance=0.0, saturation=points
    )
    plan = design(C1=capacitor("a", "gnd", TANK), L1=core)
    before, after = {"L1.inductance": COIL}, {"L1.inductance": 0.5 * COIL}
    assert changed(plan, before, after, {"L1": 0.4})["L1"] == pytest.approx(0.8, rel=1e-4)
    assert changed(plan, before, after, {"L1": 0.9})["L1"] > 1.9


def run(
    path: Road,
    x: Mapping[str, float],
    lead: str,
    swing: float,
    cycles: float,
    period: float = PERIOD,
) -> Passage:
    """One unit from given states; `swing` is that of the orbit it is compared with."""
    network = path.stations[-1]
    state = np.zeros((1, network.states))
    for name, value in x.items():
        state[0, network.index[name]] = value
    wanted = np.zeros((1, network.states))
    place = network.index[lead]
    wanted[0, place] = swing
    scale = np.where([name in network.branches for name in network.index], 1.0, 10.0)
    goal = Goal(wanted, scale, place)
    return travel_road(path, state, goal, np.array([period]), 0.0, cycles=cycles)


def test_ring_down_after_the_load_came():
    """Parallel R L C: the swing falls as exp(-t / 2 R C), and the unit is told to die."""
    plan = tank(R1=resistor("a", "gnd", 1e9))
    ohms = 1500.0
    path = way(plan, {"R1.resistance": 1e9}, {"R1.resistance": ohms})
    passage = run(path, {"a": 10.0}, "a", 20.0, 200.0)
    swing = passage.watch_high[0, :, 0] - passage.watch_low[0, :, 0]
    ends = passage.ends[0]
    early, late = 2, 40
    ratio = swing[late] / swing[early]
    # 64 steps a cycle damp by 2e-4 each, so 38 cycles by 0.7 %
    assert ratio == pytest.approx(exp(-(ends[late] - ends[early]) / (2 * ohms * TANK)), rel=0.015)
    assert passage.fate[0] == Fate.DIES
    assert passage.highest[0, path.stations[-1].index["a"]] == pytest.approx(10.0, rel=0.01)


def test_a_loss_free_tank_swings_on_elsewhere():
    """Half the capacitance, at its crest: twice the voltage, for ever; not the orbit expected."""
    path = way(tank(), {"C1.capacitance": TANK}, {"C1.capacitance": 0.5 * TANK})
    period = PERIOD * sqrt(0.5)
    passage = run(path, {"a": 10.0}, "a", 20.0, 60.0, period)
    assert passage.fate[0] == Fate.ELSEWHERE
    assert passage.highest[0, path.stations[-1].index["a"]] == pytest.approx(20.0, rel=0.01)
    passage = run(path, {"a": 10.0}, "a", 40.0, 60.0, period)
    assert passage.fate[0] == Fate.ARRIVES
    assert passage.settle[0] == 0.0


def test_a_slow_change_is_adiabatic():
    """Swing energy over frequency stays in a change that is slow: V ~ C^(-3/4) at fixed L."""
    path = way(tank(), {"C1.capacitance": TANK}, {"C1.capacitance": 1.2 * TANK}, pieces=32)
    network = path.stations[-1]
    state = np.zeros((1, network.states))
    state[0, network.index["a"]] = 10.0
    wanted = np.zeros((1, network.states))
    wanted[0, network.index["a"]] = 20.0
    goal = Goal(wanted, np.where([n in network.branches for n in network.index], 1.0, 10.0),
                network.index["a"])  # fmt: skip
    passage = travel_road(path, state, goal, np.array([PERIOD]), 37.7 * PERIOD, cycles=40.0)
    swing = passage.watch_high[0, :, 0] - passage.watch_low[0, :, 0]
    assert swing[-1] == pytest.approx(20.0 * 1.2**-0.75, rel=0.01)


def test_energy_of_an_avalanche():
    """Unclamped inductive switching: E = 1/2 L I^2 V_br / (V_br - V_dd).

    The formula every data sheet's avalanche rating rests on; value from memory, and derived: the
    supply adds V_dd I t / 2 while the current falls to zero in t = L I / (V_br - V_dd).
    """
    coil, supply, ohms, rated = 100e-6, 20.0, 10.0, 100.0
    switch = mosfet("d", "gnd", 5.0, 1e-6, cds0=5e-12)
    plan = Design(
        parts={
            "Q1": switch,
            "L1": inductor("vdd", "d", coil),
            "R1": resistor("d", "gnd", ohms),
        },
        rails={"vdd": Rail(net="vdd", voltage=supply)},
        leak=1e-12,
    )
    path = way(plan, {"R1.resistance": ohms}, {"R1.resistance": 1e7})
    start = {"d": supply, "L1": supply / ohms}
    free = run(path, start, "d", 40.0, 5.0, 1e-6)
    assert free.highest[0, path.stations[-1].index["d"]] > 5 * rated
    held = run(path.breaking_down({"Q1": rated}), start, "d", 40.0, 5.0, 1e-6)
    assert held.highest[0, path.stations[-1].index["d"]] == pytest.approx(rated, rel=0.01)
    exact = 0.5 * coil * (supply / ohms) ** 2 * rated / (rated - supply)
    assert held.energy_of("Q1:avalanche")[0] == pytest.approx(exact, rel=0.01)


def test_energy_of_a_clamp():
    """The clamp takes 1/2 L I^2 less what the tank keeps below the clamp's voltage."""
    volts, amps, coil, tiny = 15.0, 1.0, 20e-6, 50e-12
    plan = design(
        C1=capacitor("a", "gnd", tiny),
        L1=inductor("a", "gnd", coil),
        R1=resistor("a", "gnd", 1.0),
        Z1=Clamp(kind="clamp", nets=("a", "gnd"), voltage=volts, resistance=0.05, knee=0.05),
    )
    path = way(plan, {"R1.resistance": 1.0}, {"R1.resistance": 1e9})
    passage = run(path, {"L1": amps}, "a", 30.0, 12.0, 2 * pi * sqrt(coil * tiny))
    taken = passage.energy_of("Z1:down")[0] + passage.energy_of("Z1:up")[0]
    kept = 0.5 * tiny * volts**2
    assert taken == pytest.approx(0.5 * coil * amps**2 - kept, rel=0.01)
    assert passage.energy_of("Z1:down")[0] > 0.9 * taken  # the current leaves by the lower side


def test_many_units_are_each_alone():
    """Bit for bit: no unit knows its neighbours."""
    plan = tank(R1=resistor("a", "gnd", 1e9))
    ohms = np.array([800.0, 1500.0, 4000.0])
    values = [units_of(plan, {"R1.resistance": given}).values for given in (np.full(3, 1e9), ohms)]
    path = road(plan, *values, {"Q1": np.full(3, 25.0)}, pieces=3)
    network = path.stations[-1]
    state = np.zeros((3, network.states))
    state[:, network.index["a"]] = 10.0, 12.0, 14.0
    wanted = np.zeros((3, network.states))
    wanted[:, network.index["a"]] = 20.0
    scale = np.where([name in network.branches for name in network.index], 1.0, 10.0)
    period = np.full(3, PERIOD)

    def travelled(units: NDArray[np.intp]) -> Passage:
        goal = Goal(wanted[units], scale, network.index["a"])
        return travel_road(path.take(units), state[units], goal, period[units], 6 * PERIOD)

    together = travelled(np.arange(3))
    for unit in range(3):
        alone = travelled(np.array([unit]))
        for name in ("highest", "lowest", "x", "time", "fate"):
            assert np.array_equal(getattr(alone, name)[0], getattr(together, name)[unit])


def test_a_series_resistance_that_only_one_state_has():
    """The inner net it makes starts at the voltage of its terminal."""
    plan = tank(C2=capacitor("a", "gnd", TANK))
    path = way(plan, {"C2.esr": 0.0}, {"C2.esr": 0.5})
    assert all("C2:plate" in one.index for one in path.stations)
    bare = units_of(plan)
    old = bare.network(bare.cold_junctions())
    samples = np.zeros((3, 1, old.states))
    samples[:, 0, old.index["a"]] = 1.0, 2.0, 3.0
    moved = carried(samples, old, path.stations[0], plan)
    assert moved[:, 0, path.stations[0].index["C2:plate"]].tolist() == [1.0, 2.0, 3.0]
    assert moved[:, 0, path.stations[0].index["a"]].tolist() == [1.0, 2.0, 3.0]
