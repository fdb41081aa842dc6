"""N units from their orbit in one state of the load through the change, each to its own end."""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntEnum

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.devices import Floats, Ints
from tolsim.circuit.load_change.handover import hand_over
from tolsim.circuit.load_change.road import Road
from tolsim.circuit.network import Network
from tolsim.circuit.transients.journey import (
    STEPS_PER_WINDOW,
    Ending,
    Goal,
    Journey,
    Ramps,
    travel,
)

SETTLED_WITHIN = 0.02  # of the last swing: nearer counts as settled
STEADY_WINDOWS = 16  # at the end, whose swing tells whether it still moves
STEADY_WITHIN = 0.01
MOST_CYCLES = 400.0
STEADY = 5e-3  # change over some windows that counts as none
TOLERANCE = 2e-3  # local error; peaks are then right to 0.1 % or so, see the tests


class Fate(IntEnum):
    """What becomes of a unit when its load changes."""

    ARRIVES = 0
    DIES = 1
    ELSEWHERE = 2
    UNDECIDED = 3

    @property
    def sentence(self) -> str:
        """What it means, for people."""
        return _SENTENCES[self]


_SENTENCES = {
    Fate.ARRIVES: "It settles on the orbit of the new state.",
    Fate.DIES: "Its oscillation dies away and does not come back.",
    Fate.ELSEWHERE: "It swings steadily, but not on the orbit of the new state.",
    Fate.UNDECIDED: "It had not settled when the time was up.",
}


@dataclass(frozen=True)
class Passage:
    """What N units did from the moment of the change on.

    Ranges are over w quantities: n states, then port voltages, then probes.
    """

    fate: Ints  # (N,) of Fate
    time: Floats  # (N,) s, from the beginning of the change to the end of the run
    settle: Floats  # (N,) s, after which the swing stays near its last; NaN unless it arrives
    x: Floats  # (N, n) states at the end
    highest: Floats  # (N, w)
    lowest: Floats  # (N, w)
    energy: Floats  # (N, e) J taken up by every ramp element
    ramp_names: tuple[str, ...]
    ends: Floats  # (N, windows) s, end of each window of about a period; NaN after the last
    watch_high: Floats  # (N, windows, k) of the watched quantities in it, the goal's lead first
    watch_low: Floats  # (N, windows, k)

    def energy_of(self, name: str) -> Floats:
        """Energy one element has taken up, (N,) J; 0 if there is none of that name."""
        if name not in self.ramp_names:
            return np.zeros(len(self.time))
        return self.energy[:, self.ramp_names.index(name)]

    def put(self, units: NDArray[np.intp], other: Passage) -> Passage:
        """The same with the energies of some of the units taken from another run."""
        names = tuple(dict.fromkeys((*self.ramp_names, *other.ramp_names)))
        energy = np.stack([self.energy_of(name) for name in names], axis=1)
        energy[units] = np.stack([other.energy_of(name) for name in names], axis=1)
        return Passage(**{**vars(self), "energy": energy, "ramp_names": names})


def travel_road(
    road: Road,
    x0: Floats,
    goal: Goal,
    period: Floats,
    duration: float,
    *,
    begin: Floats | None = None,
    cycles: float = MOST_CYCLES,
    watch: tuple[int, ...] = (),
    regrows: NDArray[np.bool_] | None = None,
    steady: float = STEADY,
    tolerance: float = TOLERANCE,
) -> Passage:
    """Take N units along a road.

    Parameters
    ----------
    road : Road
    x0 : (N, n)
        States on the orbit of the old state, at the moment the change begins.
    goal : Goal
        Orbit of the new state.
    period : (N,) s
        Of that orbit.
    duration : float, s
        Of the change.
    begin : (N,), optional
        s, on the clock of the drive.
    cycles : float
        Time that units get after the change, in periods.
    regrows : (N,) bool, optional
        Units that grow by themselves in the new state: gone quiet is not their end.
    steady, tolerance : float
        See `travel`.
    """
    start = np.zeros(len(period)) if begin is None else begin
    pieces = len(road.stations) - 1
    clock, x, legs = start, x0, []
    hopeless = np.ones(len(period), dtype=bool) if regrows is None else ~regrows
    for k in range(1, pieces + 1):
        network = road.stations[k]
        x = hand_over(road.stations[k - 1], network, x, period, _phase(network, clock))
        last = k == pieces
        span, until = period, clock + cycles * period
        if not last:  # whole windows, the last of which ends with the piece
            left = np.maximum(start + duration * k / pieces - clock, period / STEPS_PER_WINDOW)
            span = left / np.ceil(left / period)
            until = clock + left - 0.5 * span
        legs.append(
            travel(
                network,
                x,
                Ramps.none(len(period)),
                goal,
                span,
                until,
                begin=clock,
                hopeless=hopeless if last else None,
                watch=watch,
                steady=steady if last else 0.0,
                tolerance=tolerance,
            )
        )
        clock, x = legs[-1].time, legs[-1].x
    return _joined(legs, start, goal)


def _phase(network: Network, clock: Floats) -> float:
    """Phase of the drive, in periods; the same for all units, whose clocks then agree."""
    return 0.0 if network.drive_frequency is None else float(clock[0] * network.drive_frequency)


def _joined(legs: list[Journey], start: Floats, goal: Goal) -> Passage:
    """The legs of a journey as one passage."""
    last = legs[-1]
    ends, high, low = _windows(legs, start)
    swing = high[:, :, 0] - low[:, :, 0]
    fate = _fates(last.ending, swing, goal)
    lost = np.any([leg.ending == Ending.LOST for leg in legs], axis=0)
    fate[lost] = Fate.UNDECIDED
    settle = np.where(fate == Fate.ARRIVES, _settle_time(ends, swing), np.nan)
    return Passage(
        fate=fate,
        time=last.time - start,
        settle=settle,
        x=last.x,
        highest=np.max([leg.highest for leg in legs], axis=0),
        lowest=np.min([leg.lowest for leg in legs], axis=0),
        energy=np.sum([leg.energy for leg in legs], axis=0),
        ramp_names=last.ramp_names,
        ends=ends,
        watch_high=high,
        watch_low=low,
    )


def _windows(legs: list[Journey], start: Floats) -> tuple[Floats, Floats, Floats]:
    """Ends (N, windows) and ranges (N, windows, k) of the windows of all legs, one after another.

    Rows are as long as the longest of them; NaN fills the others.
    """
    units, k = len(start), legs[0].watch_high.shape[2]
    counts = np.array([leg.windows for leg in legs])
    longest = int(counts.sum(axis=0).max(initial=1))
    ends = np.full((units, longest), np.nan)
    high, low = np.full((units, longest, k), np.nan), np.full((units, longest, k), np.nan)
    for unit in range(units):
        place = 0
        for leg in legs:
            count = int(min(leg.windows[unit], leg.watch_high.shape[1]))
            into = slice(place, place + count)
            share = np.arange(1, count + 1) / max(count, 1)
            span = leg.time[unit] - leg.begin[unit]
            ends[unit, into] = leg.begin[unit] - start[unit] + span * share
            high[unit, into] = leg.watch_high[unit, :count]
            low[unit, into] = leg.watch_low[unit, :count]
            place += count
    return ends, high, low


def _last(swing: Floats) -> Floats:
    """Swing in the last window of every unit."""
    count = np.isfinite(swing).sum(axis=1)
    return swing[np.arange(len(swing)), np.maximum(count - 1, 0)]


def _fates(ending: Ints, swing: Floats, goal: Goal) -> Ints:
    """What the endings mean."""
    fate = np.full(len(ending), int(Fate.UNDECIDED), dtype=np.intp)
    fate[ending == Ending.SETTLED] = Fate.ARRIVES
    fate[ending == Ending.QUIET] = Fate.DIES
    for unit in np.flatnonzero(ending == Ending.TIME_UP):
        own = swing[unit][np.isfinite(swing[unit])]
        tail = own[-STEADY_WINDOWS:]
        if own.size < 2 * STEADY_WINDOWS or not np.ptp(tail) <= STEADY_WITHIN * tail.max():
            continue
        if tail[-1] > STEADY_WITHIN * goal.swing[unit, goal.lead]:
            fate[unit] = Fate.ELSEWHERE
    return fate


def _settle_time(ends: Floats, swing: Floats) -> Floats:
    """End of the last window whose swing is off the last one by more than `SETTLED_WITHIN`."""
    with np.errstate(invalid="ignore"):
        off = np.abs(swing - _last(swing)[:, None]) > SETTLED_WITHIN * _last(swing)[:, None]
    place = np.where(off.any(axis=1), off.shape[1] - np.argmax(off[:, ::-1], axis=1), 0)
    return np.where(place > 0, ends[np.arange(len(ends)), np.maximum(place - 1, 0)], 0.0)
