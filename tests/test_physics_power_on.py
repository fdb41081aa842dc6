"""Power-on in time against scipy, the shooting orbits, and closed forms.

The equations of reference circuit A are written out by hand in `references.circuit_a`; scipy's
LSODA integrates them from zero charge up the same ramps.
"""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from circuits import circuit_a, typical_values
from hypothesis import given, settings
from hypothesis import strategies as st
from references import circuit_a as reference
from stages import self_biased, units_of

from tolsim.circuit.devices import Devices
from tolsim.circuit.devices import Ramps as Saturation
from tolsim.circuit.network import Network
from tolsim.circuit.nominal import Nominal, find_nominal
from tolsim.circuit.poweron import latch as latch_module
from tolsim.circuit.poweron import switch_on as module
from tolsim.circuit.poweron.fates import Fate
from tolsim.circuit.poweron.latch import latch_of
from tolsim.circuit.poweron.ramps import profiles_of, ramps_of
from tolsim.circuit.poweron.switch_on import PowerOn, switch_on
from tolsim.circuit.thermal import Case
from tolsim.circuit.transients.journey import Goal, Journey, Ramps, travel
from tolsim.figures import measure_orbits
from tolsim.figures.power_on import expected_of, take

STATES = ("a", "b", "p", "q", "ga", "gb", "LA", "LB", "L")  # in the order of the reference
UNEVEN = replace(reference.Values(), gain=(11.0, 10.0), threshold=(3.4, 3.3))


def case_a(**changes: float) -> Case:
    """Circuit A with sides that differ as in `UNEVEN`, so that it starts by itself."""
    uneven = {"QB_gain": 10.0, "QB_threshold": 3.3} | changes
    given = {key.replace("_", "."): np.array([value]) for key, value in uneven.items()}
    design = circuit_a()
    return Case(design, typical_values(design) | given)


@cache
def nominal_a() -> Nominal:
    nominal = find_nominal(case_a(), 256)
    assert nominal.found
    return nominal


def together(rise: float, rails: int = 2) -> Ramps:
    """All rails in equal parts from 0 to full within `rise` seconds."""
    times = np.tile([0.0, rise], (1, rails, 1))
    return Ramps(times, np.tile([0.0, 1.0], (1, rails, 1)))


def switched_on(case: Case, ramps: Ramps, **keys: object) -> PowerOn:
    nominal = nominal_a()
    current = measure_orbits(nominal.case, nominal.solution)["supply_current"]
    expected = expected_of(nominal, nominal.solution, current)
    return switch_on(case, ramps, expected, nominal.shift, **keys)


def to_time(case: Case, ramps: Ramps, duration: float) -> tuple[Journey, list[int]]:
    """The default steps for a given time, and the places of the reference's states."""
    network = case.network(case.cold_junctions(), live_rails=True)
    nominal = nominal_a()
    samples = nominal.solution.samples
    names = list(nominal.case.network(nominal.solution.junctions).index)
    swing, scale = np.full((1, network.states), np.inf), np.ones(network.states)
    for k, name in enumerate(names):
        scale[network.index[name]] = max(np.ptp(samples[:, 0, k]) / 2, 0.3)
    places = [network.index[name] for name in STATES]
    period = nominal.solution.period
    found = travel(
        network,
        np.zeros((1, network.states)),
        ramps,
        Goal(swing, scale, places[0]),
        period,
        np.array([duration]),
        watch=tuple(places),
    )
    return found, places


@pytest.mark.parametrize(
    ("rise", "cycles"), [(1e-9, 110), pytest.param(6e-6, 180, marks=pytest.mark.slow)]
)
def test_power_on_of_circuit_a_is_that_of_scipy(rise: float, cycles: int) -> None:
    """Peaks of all nine states to 0.5 %, and the build-up of the swing within a cycle."""
    period = float(nominal_a().solution.period[0])
    # errors of a coarser reference would seed the swing that has decayed while the ramp rose
    times, states = reference.power_on(UNEVEN, rise, cycles * period, 1e-9)
    found, places = to_time(case_a(), together(rise), cycles * period)
    size = np.abs(states).max(axis=1)
    assert size[-1] > 4.0  # it does start within this time
    assert np.all(np.abs(found.highest[0, places] - states.max(axis=1)) < 5e-3 * size)
    assert np.all(np.abs(found.lowest[0, places] - states.min(axis=1)) < 5e-3 * size)
    level = 0.5 * states[-1].max()
    known = times[np.argmax(states[-1] > level)]
    window = int(np.argmax(found.watch_high[0, :, len(places)] > level))
    assert abs((window + 0.5) * period - known) < 1.5 * period


def test_power_on_ends_on_the_shooting_orbit() -> None:
    """Peak-to-peak of all states to 0.2 %, chokes (which take longest) to 0.5 %."""
    nominal = nominal_a()
    period = float(nominal.solution.period[0])
    found, places = to_time(case_a(), together(1e-9), 600 * period)
    names = list(nominal.case.network(nominal.solution.junctions).index)
    swing = np.ptp(nominal.solution.samples[:, 0], axis=0)
    own = np.array([swing[names.index(name)] for name in STATES])
    away = (found.last_high - found.last_low)[0, places] / own - 1.0
    assert np.all(np.abs(away[[0, 1, 2, 3, 4, 5, 8]]) < 2e-3)
    assert np.all(np.abs(away[[6, 7]]) < 5e-3)


def test_path_and_whole_integration_agree(monkeypatch: pytest.MonkeyPatch) -> None:
    """A ramp of 400 periods, integrated whole and followed along its bias points.

    Same fate, start times within a tenth.  The path holds the noise at its floor while the early
    bias points damp it; integrated whole it dies away meanwhile, and the start comes later.
    """
    period = float(nominal_a().solution.period[0])
    rise = 400 * period
    answers = []
    for most in (1e9, 0.0):
        monkeypatch.setattr(module, "FAST_PERIODS", most)
        answers.append(switched_on(case_a(), together(rise)))
    whole, path = answers
    assert whole.fate.tolist() == path.fate.tolist() == [Fate.STARTS]
    assert path.journey.begin[0] > 0.1 * rise  # it was another way indeed
    assert whole.journey.begin[0] == 0.0
    assert path.start_time[0] == pytest.approx(whole.start_time[0], rel=0.1)


def latched() -> Case:
    """Gates held at 9.3 V, and a coil too lossy to swing: both switches deep in triode."""
    return case_a(vb_voltage=10.0, L_resistance=40.0, LA_resistance=1.0, LB_resistance=1.0)


def test_a_latched_unit_draws_the_current_of_chokes_and_switches() -> None:
    """Per side i = k [(vgs - Vt) v - v^2 / 2] = (V - v) / R, a quadratic equation."""
    done = switched_on(latched(), together(1e-9))
    assert done.fate.tolist() == [Fate.LATCHED]
    total = 0.0
    gate = 10.0 * 47.0 / (47.0 + 3.3)
    for gain, threshold in ((11.0, 3.4), (10.0, 3.3)):
        over, r = gate - threshold, 1.0
        # k v^2 / 2 - (k over + 1 / R) v + V / R = 0
        roots = np.roots([gain / 2, -(gain * over + 1 / r), 24.0 / r])
        total += (24.0 - roots.min()) / r
    bias = 10.0 / (47e3 + 3.3e3) * 2  # of the dividers
    latch = latch_of(latched())
    assert latch.current[0] == pytest.approx(total + bias, rel=1e-3)
    assert done.idle_current[0] == pytest.approx(total + bias, rel=1e-3)
    # the electrical time constant: choke over its resistance and that of the switch
    switch = 1 / (11.0 * (gate - 3.4) - 11.0 * roots.min())
    assert latch.rise_time[0] == pytest.approx(18e-6 / (1.0 + switch), rel=0.05)


def test_heating_is_that_of_one_pole() -> None:
    """Constant power into R and C: t = -R C ln(1 - rise / (P R)), to the 3 % of the moments."""
    resistance, capacity, power = 1.5, 0.05, np.array([80.0, 110.0, 500.0, 5e4])
    found = latch_module._time_to(
        *(150.0, np.full(4, 25.0), np.tile(power, (len(latch_module.GRID), 1))),
        *(np.full(4, 1e-9), resistance, capacity),
    )
    known = -resistance * capacity * np.log1p(-125.0 / (power[1:] * resistance))
    assert np.isinf(found[0])  # 80 W end at 145 degC
    assert found[1:] == pytest.approx(known, rel=0.03)


@settings(max_examples=12, deadline=None)
@given(
    power=st.floats(10.0, 1e5),
    factor=st.floats(1.0, 10.0),
    rise=st.floats(1e-7, 1e-2),
    capacity=st.floats(1e-3, 1.0),
)
def test_more_power_never_takes_longer(
    power: float, factor: float, rise: float, capacity: float
) -> None:
    """Time to damage falls with power and rises with heat capacity and with the current's rise."""

    def time(watts: float, tau: float, joules: float) -> float:
        table = np.full((len(latch_module.GRID), 1), watts)
        return float(
            latch_module._time_to(150.0, np.array([25.0]), table, np.array([tau]), 1.0, joules)[0]
        )

    one = time(power, rise, capacity)
    assert time(factor * power, rise, capacity) <= one
    assert time(power, factor * rise, capacity) >= one
    assert time(power, rise, factor * capacity) >= one


MU, OMEGA = 0.01, 1e7


def soft_oscillator() -> Network:
    """Tank with the current mu (-v + v |v| / 2) across it, of two squared ramps with a sharp knee.

    x'' - mu (1 - |x|) x' + x = 0: the oscillator of van der Pol with |x| in place of x^2.
    """
    corner = Saturation(
        names=("up", "down"),
        sense=np.array([[1.0], [-1.0]]),
        inject=np.array([[1.0, -1.0]]),
        offset=np.zeros((2, 1)),
        knee=np.full((2, 1), 1e-3),
        linear=np.zeros((2, 1)),
        square=np.full((2, 1), MU),
    )
    return Network(
        E=np.eye(2)[None] / OMEGA,
        F=np.array([[[-MU, 1.0], [-1.0, 0.0]]]),
        D=np.array([[1.0, 0.0]]),
        v0=np.zeros((1, 1)),
        source=np.zeros((1, 2)),
        devices=Devices((corner,), 1),
        index={"x": 0, "L": 1},
        branches=frozenset({"L"}),
        ports={"tank": 0},
        known={},
        supplies={},
        series_conductance={},
    )


def test_slow_envelope_is_the_averaged_one() -> None:
    """Amplitude against the first-order average, to 1 %, from a tenth of the orbit's on.

    N. N. Bogoliubov, Y. A. Mitropolsky, Asymptotic Methods in the Theory of Non-Linear
    Oscillations (1961), chapter 1: a' = -1 / (2 pi) integral of f sin, here
    a' = mu a / 2 (1 - 4 a / (3 pi)) as |cos| sin^2 has the mean 2 / (3 pi); a logistic curve.
    """
    cycles, period, begun = 400, 2 * np.pi / OMEGA, 0.2
    found = travel(
        soft_oscillator(),
        np.array([[begun, 0.0]]),
        Ramps.none(1),
        Goal(np.full((1, 2), np.inf), np.ones(2), 0),
        np.array([period]),
        np.array([cycles * period]),
    )
    amplitude = 0.5 * (found.watch_high - found.watch_low)[0, :cycles, 0].astype(float)
    final, t = 3 * np.pi / 4, 2 * np.pi * (np.arange(cycles) + 0.5)
    known = final / (1 + (final / begun - 1) * np.exp(-0.5 * MU * t))
    assert amplitude[2:] == pytest.approx(known[2:], rel=0.01)
    assert amplitude[-1] == pytest.approx(final, rel=2e-3)


def test_a_long_bias_network_makes_bursts() -> None:
    """R C of the bias against the tank's own decay: the pause follows R C, the swing is no orbit.

    The diode pulls the bias down while the stage swings; in the pause it comes back through R, so
    bursts are spaced by about R C (from 4.5 V pulled down to a threshold near 3 V and more).
    """
    design = self_biased()
    nominal = find_nominal(units_of(design), 128)
    current = measure_orbits(nominal.case, nominal.solution)["supply_current"]
    one = expected_of(nominal, nominal.solution, current)
    resistance, capacitance = np.array([1e3, 1e3, 1e3]), np.array([200e-12, 5e-9, 10e-9])
    case = units_of(design, {"RG.resistance": resistance, "CC.capacitance": capacitance})
    done = switch_on(
        case,
        ramps_of(profiles_of(design), 3),
        take(one, np.zeros(3, dtype=np.intp)),
        nominal.shift,
    )
    assert done.fate.tolist() == [Fate.STARTS, Fate.BURSTS, Fate.BURSTS]
    spacing = [_spacing(done.journey, unit) for unit in (1, 2)]
    constants = (resistance * capacitance)[1:]
    assert np.all(spacing > 0.5 * constants)
    assert np.all(spacing < 5.0 * constants)
    assert spacing[1] > 1.3 * spacing[0]


def _spacing(journey: Journey, unit: int) -> float:
    """Mean time between the beginnings of bursts, s."""
    swing = (journey.watch_high - journey.watch_low)[unit, : journey.windows[unit], 0]
    high = swing > 0.5 * swing.max()
    begins = np.flatnonzero(high[1:] & ~high[:-1])
    return float(np.mean(np.diff(begins)) * journey.window[unit])
