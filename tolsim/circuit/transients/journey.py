"""Send N units through time: rails that come up, loads that change; each to its own end."""

from __future__ import annotations

from dataclasses import dataclass, field, fields
from enum import IntEnum

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.devices import Floats, Ints
from tolsim.circuit.network import Network
from tolsim.circuit.transients.elements import flatten
from tolsim.circuit.transients.kernel import LOST, QUIET, SETTLED, TIME_UP, Record, Task, run_all
from tolsim.circuit.transients.sources import sources_of
from tolsim.circuit.transients.stepping import Circuit

RUNGS = 10
STEPS_PER_WINDOW = 64
TOLERANCE = 3e-4
STEADY = 5e-3
NEAR = 0.35
QUIET_SHARE = 1e-3
MOST_WINDOWS = 20_000  # kept of the watched quantities
SCALE_FLOOR = 1e-3


class Ending(IntEnum):
    """How the run of a unit ended."""

    SETTLED = SETTLED
    QUIET = QUIET
    TIME_UP = TIME_UP
    LOST = LOST


@dataclass(frozen=True)
class Ramps:
    """How the live rails of N units come up: piecewise linear, constant after the last point."""

    times: Floats  # (N, r, k) s; a repeated last time fills a row
    levels: Floats  # (N, r, k), 1 is the full voltage

    @classmethod
    def none(cls, units: int) -> Ramps:
        """No live rails."""
        return cls(np.zeros((units, 0, 2)), np.zeros((units, 0, 2)))

    @property
    def up(self) -> Floats:
        """When all rails are up, (N,) s."""
        return self.times[:, :, -1].max(axis=1, initial=0.0)

    def at(self, time: Floats) -> Floats:
        """Levels (N, r) at a time (N,) of every unit, s."""
        found = np.empty(self.times.shape[:2])
        for unit, rail in np.ndindex(*found.shape):
            found[unit, rail] = np.interp(
                time[unit], self.times[unit, rail], self.levels[unit, rail]
            )
        return found

    def take(self, units: Ints) -> Ramps:
        """Return the ramps of some of the units."""
        return Ramps(self.times[units], self.levels[units])


@dataclass(frozen=True)
class Goal:
    """The orbit a run is expected to reach: peak-to-peak of every state, and how large each is."""

    swing: Floats  # (N, n)
    scale: Floats  # (n,)
    lead: int  # state whose swing tells

    @classmethod
    def of(cls, samples: Floats, branches: NDArray[np.bool_], lead: int) -> Goal:
        """From orbits (m + 1, N, n); `branches` (n,) says which states are currents."""
        swing = np.ptp(samples, axis=0)
        level = np.abs(samples).max(axis=0)
        scale = np.nanmax(np.maximum(0.5 * swing, 0.25 * level), axis=0)
        for kind in (branches, ~branches):
            if kind.any():
                scale[kind] = np.maximum(scale[kind], SCALE_FLOOR * max(scale[kind].max(), 1e-9))
        return cls(swing, scale, lead)


@dataclass(frozen=True)
class Journey:
    """What N units did on their way; ranges are over n states, then p port voltages."""

    ending: Ints  # (N,) of Ending
    time: Floats  # (N,) s, when the run ended
    x: Floats  # (N, n) states then
    reached: Floats  # (N,) s, when the swing first passed 90 % of the goal; NaN if never
    highest: Floats  # (N, n + p) of the whole run
    lowest: Floats  # (N, n + p)
    highest_at: Floats  # (N, n + p) s
    last_high: Floats  # (N, n + p) of the last window
    last_low: Floats  # (N, n + p)
    last_mean: Floats  # (N, n + p)
    energy: Floats  # (N, e) J taken up by every ramp element
    watch_high: NDArray[np.float32]  # (N, windows, k) of the watched quantities
    watch_low: NDArray[np.float32]  # (N, windows, k)
    windows: Ints  # (N,)
    steps: Ints  # (N,)
    window: Floats  # (N,) s
    begin: Floats  # (N,) s
    ramp_names: tuple[str, ...] = field(default=())

    def take(self, units: Ints) -> Journey:
        """Return some of the units."""
        picked = {
            each.name: getattr(self, each.name)[units]
            for each in fields(self)
            if each.name != "ramp_names"
        }
        return Journey(**picked, ramp_names=self.ramp_names)


def travel(
    network: Network,
    x0: Floats,
    ramps: Ramps,
    goal: Goal,
    period: Floats,
    limit: Floats,
    *,
    begin: Floats | None = None,
    hopeless: NDArray[np.bool_] | None = None,
    watch: tuple[int, ...] = (),
    tolerance: float = TOLERANCE,
    steps_per_window: int = STEPS_PER_WINDOW,
    steady: float = STEADY,
    near: float = NEAR,
) -> Journey:
    """Run N units from states x0 (N, n) until each has come to its end.

    Parameters
    ----------
    network : Network
        With live rails where they are to come up.
    ramps : Ramps
        Of the live rails.
    goal : Goal
        Orbit to compare with.
    period : (N,)
        s, of the expected oscillation: window of observation and measure of the longest step.
    limit : (N,)
        s, when a unit's time is up.
    begin : (N,), optional
        s, where on the ramps' clock the run starts.
    hopeless : (N,), optional
        Units that cannot grow once everything is up; they end when they go quiet.
    watch : tuple of int
        Further states (or n + port) whose range in every window is kept; the goal's lead comes
        first by itself.
    """
    units, n = x0.shape
    ports = network.D.shape[0]
    flat, names = flatten(network.devices, units)
    start = np.zeros(units) if begin is None else begin
    kept = int(min(MOST_WINDOWS, np.ceil(((limit - start) / period).max(initial=1.0)) + 2))
    watched = np.array([goal.lead, *watch], dtype=np.int64)
    circuit = Circuit(
        np.ascontiguousarray(network.E),
        np.ascontiguousarray(network.F),
        np.ascontiguousarray(network.D),
        np.ascontiguousarray(network.v0),
        np.ascontiguousarray(network.source),
    )
    task = Task(
        x=np.ascontiguousarray(x0),
        step=period / steps_per_window,
        window=period,
        begin=start,
        up=ramps.up,
        limit=limit,
        hopeless=np.zeros(units, dtype=bool) if hopeless is None else hopeless,
        goal=goal.swing,
        scale=goal.scale,
        watch=watched,
        rungs=RUNGS,
        tolerance=tolerance,
        steady=steady,
        near=near,
        quiet=QUIET_SHARE,
    )
    wide = n + ports
    record = Record(
        ending=np.zeros(units, dtype=np.int64),
        time=np.zeros(units),
        x=np.zeros((units, n)),
        reached=np.full(units, np.nan),
        highest=np.full((units, wide), -np.inf),
        lowest=np.full((units, wide), np.inf),
        highest_at=np.zeros((units, wide)),
        last_high=np.zeros((units, wide)),
        last_low=np.zeros((units, wide)),
        last_mean=np.zeros((units, wide)),
        energy=np.zeros((units, len(names))),
        watch_high=np.full((units, kept, len(watched)), np.nan, dtype=np.float32),
        watch_low=np.full((units, kept, len(watched)), np.nan, dtype=np.float32),
        windows=np.zeros(units, dtype=np.int64),
        steps=np.zeros(units, dtype=np.int64),
    )
    run_all(circuit, flat, sources_of(network, ramps.times, ramps.levels), task, record)
    return Journey(**record._asdict(), window=period, begin=start, ramp_names=names)
