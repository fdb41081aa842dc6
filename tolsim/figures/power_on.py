"""Figures of switching on: when it starts, what it strains on the way, what a latch destroys."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.devices import Floats, Ints
from tolsim.circuit.nominal import Nominal
from tolsim.circuit.orbit import Solution, Status
from tolsim.circuit.poweron.fates import Fate
from tolsim.circuit.poweron.latch import latch_of
from tolsim.circuit.poweron.ramps import profiles_of, ramps_of
from tolsim.circuit.poweron.switch_on import Expected, PowerOn, switch_on
from tolsim.circuit.thermal import Case, mosfets
from tolsim.circuit.transients.journey import Ramps
from tolsim.design import GROUND
from tolsim.parts import Inductor


@dataclass(frozen=True)
class SwitchedOn:
    """Figures and fate of N units; NaN and `Fate.NOT_RUN` where it was not integrated."""

    fate: Ints  # (N,)
    figures: Mapping[str, Floats]  # (N,) each
    x: Floats  # (N, n) states of the ordinary network at the end


def expected_of(nominal: Nominal, orbits: Solution, current: Floats) -> Expected:
    """What units do once they run; a unit without orbit is expected to do as the nominal one.

    Parameters
    ----------
    nominal : Nominal
        With an orbit.
    orbits : Solution
        Of N units.
    current : (N,)
        Mean supply current on the orbits, A; NaN where there is none.
    """
    assert nominal.frame is not None
    names = tuple(nominal.case.network(nominal.solution.junctions).index)
    none = (orbits.status != Status.SETTLED) | ~np.isfinite(orbits.period)
    own = np.ptp(nominal.solution.samples[:, 0], axis=0)
    swing = np.where(none[:, None], own, np.ptp(orbits.samples, axis=0))
    period = np.where(none, nominal.solution.period[0], orbits.period)
    scale = dict(zip(names, nominal.frame.scale.tolist(), strict=True))
    return Expected(swing, period, names[nominal.frame.lead], scale, current)


def take(expected: Expected, units: Ints) -> Expected:
    """What some of the units are expected to do."""
    return Expected(
        expected.swing[units],
        expected.period[units],
        expected.lead,
        expected.scale,
        expected.current[units],
    )


def measure_power_on(
    cold: Case,
    expected: Expected,
    shift: float,
    chosen: NDArray[np.bool_],
    ramps: Ramps | None = None,
) -> SwitchedOn:
    """Switch the chosen ones of N units on by the ramps of their design.

    Parameters
    ----------
    cold : Case
        The units before they have run.
    expected : Expected
        Their orbits.
    shift : float, rad/s
        Angular frequency scale of the stage.
    chosen : (N,)
    ramps : Ramps, optional
        In place of the design's own.
    """
    units = np.flatnonzero(chosen)
    if not units.size:
        return _spread_out(None, {}, units, cold, expected)
    some = cold.take(units)
    own = ramps.take(units) if ramps is not None else None
    way = own or ramps_of(profiles_of(cold.design), len(units))
    done = switch_on(some, way, take(expected, units), shift)
    return _spread_out(done, figures_of(some, done), units, cold, expected)


def figures_of(case: Case, done: PowerOn) -> dict[str, Floats]:
    """Figures of units that were switched on, (N,) each."""
    figures = {"power_on_time": done.start_time}
    return figures | _strains(case, done) | _latches(case, done)


def _spread_out(
    done: PowerOn | None,
    figures: Mapping[str, Floats],
    units: Ints,
    case: Case,
    expected: Expected,
) -> SwitchedOn:
    """Answers of some units among all of a case."""
    whole = np.full(case.units, Fate.NOT_RUN, dtype=np.intp)
    x = np.full((case.units, len(expected.scale)), np.nan)
    if done is not None:
        whole[units] = done.fate
        places = [done.network.index[name] for name in expected.scale]
        x[units] = done.journey.x[:, places]
    columns = {}
    for name, values in figures.items():
        columns[name] = np.full(case.units, np.nan)
        columns[name][units] = values
    return SwitchedOn(whole, columns, x)


def _strains(case: Case, done: PowerOn) -> dict[str, Floats]:
    """Largest voltages and currents on the way."""
    found: dict[str, Floats] = {}
    n = done.network.states
    sides = _ranges(done)
    for ref, part in mosfets(case.design).items():
        inside = n + done.network.ports[f"{ref}:gs"]
        drain, gate = f"{ref}.power_on_drain_peak", f"{ref}.power_on_gate_peak"
        found[drain] = sides[0][:, _across(done, part.drain, part.source_net, f"{ref}:ds")]
        pin = _across(done, part.gate, part.source_net, f"{ref}:gs")
        found[gate] = np.max([np.abs(side[:, k]) for k in (pin, inside) for side in sides], axis=0)
    for ref, other in case.design.parts.items():
        if isinstance(other, Inductor) and ref in done.network.index:
            place = done.network.index[ref]
            found[f"{ref}.power_on_current_peak"] = np.max(np.abs([s[:, place] for s in sides]), 0)
    return found


def _ranges(done: PowerOn) -> tuple[Floats, Floats]:
    """Highest and lowest values on the way, (N, n + p), where time was the real one.

    The part of a slow ramp that was shortened rings as the real one does not: there only the swing
    that builds up in real time counts, and the one it settles to.
    """
    journey, clock = done.journey, done.clock
    high, low = journey.highest.copy(), journey.lowest.copy()
    slow = np.flatnonzero(clock.ratio < 1.0)
    if not slow.size:
        return high, low
    high[slow], low[slow] = journey.last_high[slow], journey.last_low[slow]
    ends = journey.begin[:, None] + journey.window[:, None] * (
        1.0 + np.arange(journey.watch_high.shape[1])
    )
    real = (ends <= clock.knee[:, None])[slow]
    for column, name in enumerate(done.watched):
        place = _place_of(done, name)
        tops = np.where(real, journey.watch_high[slow, :, column], -np.inf).max(axis=1)
        feet = np.where(real, journey.watch_low[slow, :, column], np.inf).min(axis=1)
        high[slow, place] = np.maximum(high[slow, place], tops)
        low[slow, place] = np.minimum(low[slow, place], feet)
    return high, low


def _place_of(done: PowerOn, name: str) -> int:
    """Place of a watched state or port in the ranges of a journey."""
    index = done.network.index
    return index[name] if name in index else done.network.states + done.network.ports[name]


def _across(done: PowerOn, net: str, source: str, port: str) -> int:
    """Place of a voltage in the ranges of a journey: at the pins if the source is ground."""
    if source == GROUND and net in done.network.index:
        return done.network.index[net]
    return done.network.states + done.network.ports[port]


def _latches(case: Case, done: PowerOn) -> dict[str, Floats]:
    """Current and time to damage of the latched units; NaN for all others."""
    units = np.flatnonzero(done.fate == Fate.LATCHED)
    names = [f"{ref}.latch_damage_time" for ref in mosfets(case.design)]
    found = {name: np.full(case.units, np.nan) for name in ("latch_current", *names)}
    if units.size:
        latch = latch_of(case.take(units))
        found["latch_current"][units] = latch.current
        for ref, time in latch.damage_time.items():
            found[f"{ref}.latch_damage_time"][units] = np.where(np.isinf(time), np.nan, time)
    return found
