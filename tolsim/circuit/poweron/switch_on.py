"""Switch N units on: from zero charge up the real ramp to the orbit, a latch, or nothing.

A ramp that lasts no more than `FAST_PERIODS` is integrated from the first moment.  A slower one is
followed along its bias points (`path`) until the growing mode has lifted the noise to a small
seed; from there the circuit is integrated in time, at first with the ramp as slow as it is, then
with the rest of it shortened to `REST_PERIODS`, which is still slow against the oscillation.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.devices import Floats, Ints
from tolsim.circuit.network import Network
from tolsim.circuit.poweron.envelope import BURST_RATIO, OSCILLATES, comes_and_goes, envelope
from tolsim.circuit.poweron.fates import Fate
from tolsim.circuit.poweron.path import RampPath, follow_ramp, onset
from tolsim.circuit.poweron.ramps import Shortened, shortened
from tolsim.circuit.startup import modes, noise_amplitude
from tolsim.circuit.thermal import Case, mosfets
from tolsim.circuit.transients.journey import Ending, Goal, Journey, Ramps, travel

FAST_PERIODS = 400.0  # a ramp up to here is integrated whole
CATCH_PERIODS = 100.0  # from the seed on in real time, while the swing builds up
REST_PERIODS = 200.0  # for what is left of a slow ramp
SETTLE_PERIODS = 250.0  # after everything is up
GROWTHS = 12.0  # e-folds of time that a growing mode is given beside
MOST_PERIODS = 4000.0
SLOW_TIMES = 5.0  # of the slowest time constant of the bias network, to settle
SEED_SHARE = 2e-3  # of the orbit's swing: small enough to grow by itself
LEAST_NOISE = 1e-6  # V; below it the port equations are not solved
NEAR_ORBIT = 0.35  # swing within this share of the orbit's counts as that orbit
CONDUCTS = 0.1  # of the running current, through a switch at rest
TOLERANCE = 2e-3  # local error: peaks on the way are then right to a few tenths of a percent


@dataclass(frozen=True)
class Expected:
    """What the units do once they run, as far as it is known."""

    swing: Floats  # (N, n) peak-to-peak of the states of the ordinary network
    period: Floats  # (N,) s
    lead: str  # state that tells the swing
    scale: Mapping[str, float]  # of every state
    current: Floats  # (N,) A, mean supply current of the orbit


@dataclass(frozen=True)
class PowerOn:
    """What became of N units.

    Attributes
    ----------
    fate : (N,) of Fate
    start_time : (N,)
        s after power-on, when the swing first passed 90 % of the orbit's; NaN if never.
    growth : (N,)
        1/s, of the leading mode when all rails are up.
    journey : Journey
        The part of it that was integrated, on the clock of `clock`.
    clock : Shortened
    network : Network
        With live rails; its states are those of the journey.
    idle_current : (N,)
        A, at the bias point that a unit without oscillation comes to.
    path : RampPath
        Bias points and leading modes along the ramp, on real time.
    watched : tuple of str
        States and ports whose ranges the journey keeps window by window.
    """

    fate: Ints
    start_time: Floats
    growth: Floats
    journey: Journey
    clock: Shortened
    network: Network
    idle_current: Floats
    path: RampPath
    watched: tuple[str, ...]


def switch_on(
    case: Case,
    ramps: Ramps,
    expected: Expected,
    shift: float,
    *,
    seed_phase: Floats | None = None,
    charge: Floats | None = None,
    junctions: Mapping[str, Floats] | None = None,
    also: tuple[str, ...] = (),
) -> PowerOn:
    """Switch the units of a case on.

    Parameters
    ----------
    case : Case
        N units, cold.
    ramps : Ramps
        Of all rails, in their order.
    expected : Expected
        Their orbits, or the nominal one for a unit without.
    shift : float, rad/s
        Angular frequency scale of the stage.
    seed_phase : (N,), optional
        rad, phase of the noise the oscillation grows from; 0 if not given.
    charge : (N, n), optional
        Residual states at power-on (of the live network); zero if not given.
    junctions : mapping, optional
        Junction temperatures, degC; ambient if not given.
    also : tuple of str, optional
        Further states or ports to be watched.
    """
    network = case.network(junctions or case.cold_junctions(), live_rails=True)
    phase = np.zeros(case.units) if seed_phase is None else seed_phase
    fast = ramps.up <= FAST_PERIODS * expected.period
    goal = _goal(network, expected)
    path = follow_ramp(network, ramps, shift)
    final = network.raised(1.0)
    lead = modes(final, path.last, shift)
    noise = np.maximum(noise_amplitude(final, path.last, lead, case.values["ambient"]), LEAST_NOISE)
    seed = np.maximum(SEED_SHARE * np.nanmax(goal.swing[:, _nets(network)], axis=1), 10.0 * noise)
    found = onset(path, noise, seed)
    never = ~np.isfinite(found.time)
    begin = np.where(fast, 0.0, np.where(never, ramps.up, found.time))
    # a mode that never grew is still at its noise: anything larger would be a kick
    late = found.x + _mode_of(network, found.vector, np.where(never, noise, seed), phase)
    early = _mode_of(network, lead.vector, noise, phase) + (0.0 if charge is None else charge)
    x0 = np.where(fast[:, None], early, late)
    knee = np.where(fast, ramps.up, begin + CATCH_PERIODS * expected.period)
    clock = shortened(ramps, knee, REST_PERIODS * expected.period)
    hopeless = path.final_growth <= 0
    limit = _limit(path, clock, begin, expected.period, lead.eigenvalues)
    watched = _watched(case, network, also)
    journey = travel(
        network,
        x0,
        clock.ramps,
        goal,
        expected.period,
        limit,
        begin=begin,
        hopeless=hopeless,
        watch=tuple(_place(network, name) for name in watched),
        tolerance=TOLERANCE,
    )
    idle = _idle_current(final, path)
    fate = _fates(journey, goal, clock.ramps.up, hopeless, idle > CONDUCTS * expected.current)
    return PowerOn(
        fate=fate,
        start_time=clock.real_time(journey.reached),
        growth=path.final_growth,
        journey=journey,
        clock=clock,
        network=network,
        idle_current=idle,
        path=path,
        watched=(expected.lead, *watched),
    )


def _nets(network: Network) -> Ints:
    """Places of the states that are voltages."""
    return np.array([i for name, i in network.index.items() if name not in network.branches])


def _goal(network: Network, expected: Expected) -> Goal:
    """The orbits as states of the live network; rails do not swing."""
    swing = np.full((network.units, network.states), np.nan)
    scale = np.full(network.states, np.nan)
    for place, (name, size) in enumerate(expected.scale.items()):
        if name in network.index:
            swing[:, network.index[name]] = expected.swing[:, place]
            scale[network.index[name]] = size
    branch = np.zeros(network.states, dtype=bool)
    for name in network.branches:
        branch[network.index[name]] = True
    for kind in (branch, ~branch):
        known = kind & np.isfinite(scale)
        scale[kind & ~known] = np.max(scale[known], initial=1.0)
    return Goal(swing, scale, network.index[expected.lead])


def _watched(case: Case, network: Network, also: tuple[str, ...]) -> tuple[str, ...]:
    """Drains, gates and inductor currents: what a start is told by; then what is asked for."""
    names = [name for part in mosfets(case.design).values() for name in (part.drain, part.gate)]
    names += [name for name in network.index if name in network.branches]
    known = [name for name in dict.fromkeys(names) if name in network.index]
    return tuple(dict.fromkeys((*known, *also)))


def _place(network: Network, name: str) -> int:
    """Place of a state or port in the ranges of a journey."""
    if name in network.index:
        return network.index[name]
    return network.states + network.ports[name]


def _mode_of(
    network: Network, vector: NDArray[np.complex128], size: Floats, phase: Floats
) -> Floats:
    """A mode as real states (N, n), of a given size at its largest port, V."""
    turned = vector * np.exp(1j * phase)[:, None]
    largest = np.abs(turned @ network.D.T).max(axis=1)
    return turned.real * (size / np.maximum(largest, 1e-300))[:, None]


def _slowest(eigenvalues: NDArray[np.complex128], period: Floats) -> Floats:
    """Slowest time constant of the circuit at rest, (N,) s; charge trapped for good left out."""
    rate = -np.where(np.isfinite(eigenvalues.real), eigenvalues.real, -np.inf)
    matters = rate > 1.0 / (MOST_PERIODS * period)[:, None]
    return 1.0 / np.where(matters, rate, np.inf).min(axis=1)


def _limit(
    path: RampPath,
    clock: Shortened,
    begin: Floats,
    period: Floats,
    eigenvalues: NDArray[np.complex128],
) -> Floats:
    """When time is up, (N,) s: growth, the bias network and the orbit have all had their time."""
    rate = np.maximum(path.final_growth, GROWTHS / MOST_PERIODS / period)
    growing = np.where(path.final_growth > 0, GROWTHS / rate, 0.0)
    slow = np.minimum(SLOW_TIMES * _slowest(eigenvalues, period), MOST_PERIODS * period)
    after = np.maximum(begin, clock.ramps.up)
    return after + np.minimum(SETTLE_PERIODS * period + growing + slow, MOST_PERIODS * period)


def _idle_current(final: Network, path: RampPath) -> Floats:
    """Current of all rails at the last bias point of the path, A."""
    current, *_ = final.devices.evaluate(path.last.v)
    total = np.zeros(final.units)
    for supply in final.supplies.values():
        total = total + supply.at(path.last.x, current)
    return total


def _fates(
    journey: Journey,
    goal: Goal,
    up: Floats,
    hopeless: NDArray[np.bool_],
    conducts: NDArray[np.bool_],
) -> Ints:
    """What became of every unit; `up` (N,) s is when the sources had reached their final values."""
    fate = np.full(len(journey.ending), Fate.UNDECIDED, dtype=np.intp)
    swing = (journey.last_high - journey.last_low)[:, goal.lead]
    wanted = goal.swing[:, goal.lead]
    resting = np.where(conducts, Fate.LATCHED, Fate.DIES)
    fate[journey.ending == Ending.SETTLED] = Fate.STARTS
    quiet = journey.ending == Ending.QUIET
    late = journey.ending == Ending.TIME_UP
    faded = late & hopeless & (swing < OSCILLATES * wanted)
    fate = np.where(quiet | faded, resting, fate)
    ratio, level = envelope(journey)
    steady = late & (ratio < BURST_RATIO) & (level > OSCILLATES * wanted)
    near = np.abs(level / wanted - 1.0) < NEAR_ORBIT
    fate = np.where(steady & near, Fate.STARTS, fate)
    fate = np.where(steady & ~near, Fate.OTHER_SWING, fate)
    bursts = late & (ratio >= BURST_RATIO) & comes_and_goes(journey, up, OSCILLATES * wanted)
    return np.where(bursts, Fate.BURSTS, fate)
