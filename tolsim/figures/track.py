"""One unit's power-on against real time: envelopes, and what can be read off them.

A ramp that is slow against the oscillation begins with a part where the unit follows its bias
points; there nothing swings, so both edges of an envelope lie on the bias point.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from tolsim.circuit.devices import Floats
from tolsim.circuit.poweron.fates import Fate
from tolsim.circuit.poweron.ramps import ramps_of
from tolsim.circuit.poweron.switch_on import Expected, PowerOn, switch_on
from tolsim.circuit.supply_ramp import RampProfile
from tolsim.circuit.thermal import Case, hot_values, mosfets
from tolsim.figures.power_on import figures_of

ABOUT = 4  # windows to each side that a slope is taken over
APART = 0.2  # of a quantity's size: envelopes that differ by more have parted


@dataclass(frozen=True)
class Track:
    """Envelopes of one unit from power-on to its end, at m moments.

    Attributes
    ----------
    fate : Fate
    time : (m,) s
        Real time after power-on; the end of each window of one period.
    high, low : mapping of str to (m,)
        Largest and smallest value in the window: states ("d", "L2", "main:feed") and ports
        ("Q1:gs", "Q1:ds").
    growth : (m,) 1/s
        Of the leading mode at the bias point that the supplies of that moment give.
    lead : str
        State whose swing tells whether the unit oscillates.
    wanted : float
        Swing of that state on the orbit, V or A.
    integrated_from : float, s
        Before that moment the unit follows its bias points.
    thresholds : mapping of str to float
        Of every MOSFET, at ambient temperature, V.
    figures : mapping of str to float
        As a run stores them: "power_on_time", "Q1.power_on_drain_peak", "latch_current", ...
    idle_current : float, A
        Of all rails at the bias point with all rails up.
    currents : tuple of str
        The states that are currents.
    """

    fate: Fate
    time: Floats
    high: Mapping[str, Floats]
    low: Mapping[str, Floats]
    growth: Floats
    lead: str
    wanted: float
    integrated_from: float
    thresholds: Mapping[str, float]
    figures: Mapping[str, float]
    idle_current: float
    currents: tuple[str, ...]

    @property
    def swing(self) -> Floats:
        """Peak-to-peak of the lead in each window, (m,)."""
        return self.high[self.lead] - self.low[self.lead]

    @property
    def all_on(self) -> int | None:
        """First window in which every gate stays above its threshold; None if there is none."""
        above = [self.low[f"{ref}:gs"] > volts for ref, volts in self.thresholds.items()]
        together = np.all(above, axis=0)
        return int(np.argmax(together)) if together.any() else None

    def middle(self, name: str) -> Floats:
        """Middle of an envelope, (m,)."""
        return 0.5 * (self.high[name] + self.low[name])

    def slope(self, values: Floats, place: int) -> float:
        """Least-squares slope of (m,) values around a moment, per s."""
        around = slice(max(place - ABOUT, 0), place + ABOUT + 1)
        t, y = self.time[around], values[around]
        t = t - t.mean()
        spread = float(t @ t)
        return float(t @ (y - y.mean())) / spread if spread > 0 else 0.0

    def parts_from(self, other: Track) -> tuple[float, str] | None:
        """When (s) and in which quantity this unit first goes another way than another one."""
        first: tuple[float, str] | None = None
        until = min(self.time[-1], other.time[-1])
        early = self.time <= until
        for name in self.high:
            if name not in other.high:
                continue
            sides = [
                (side[name], np.interp(self.time, other.time, its[name]))
                for side, its in ((self.high, other.high), (self.low, other.low))
            ]
            size = max(float(np.abs(np.stack(pair)[:, early]).max()) for pair in sides)
            gap = np.max([np.abs(own - its) for own, its in sides], axis=0)
            apart = np.flatnonzero(early & (gap > APART * size))
            if apart.size and (first is None or self.time[apart[0]] < first[0]):
                first = float(self.time[apart[0]]), name
        return first


def track_of(
    case: Case, expected: Expected, shift: float, profiles: Mapping[str, RampProfile]
) -> Track:
    """Switch one unit on and keep its way.

    Parameters
    ----------
    case : Case
        One cold unit.
    expected : Expected
        Its orbit, or the nominal one.
    shift : float, rad/s
        Angular frequency scale of the stage.
    profiles : mapping
        Rail to its ramp, in the order of the rails.
    """
    refs = mosfets(case.design)
    ports = tuple(f"{ref}:{end}" for ref in refs for end in ("ds", "gs"))
    nets = tuple(rail.net for rail in case.design.rails.values())
    done = switch_on(case, ramps_of(profiles, 1), expected, shift, also=(*ports, *nets))
    hot = hot_values(case.design, case.values, case.cold_junctions())
    time, high, low = _envelopes(done)
    return Track(
        fate=Fate(int(done.fate[0])),
        time=time,
        high=high,
        low=low,
        growth=np.interp(time, done.path.times[0], done.path.growth[0]),
        lead=expected.lead,
        wanted=float(expected.swing[0, list(expected.scale).index(expected.lead)]),
        integrated_from=float(done.journey.begin[0]),
        thresholds={ref: float(hot[f"{ref}.threshold"][0]) for ref in refs},
        figures={name: float(v[0]) for name, v in figures_of(case, done).items()},
        idle_current=float(done.idle_current[0]),
        currents=tuple(name for name in high if name in done.network.branches),
    )


def _envelopes(done: PowerOn) -> tuple[Floats, dict[str, Floats], dict[str, Floats]]:
    """Real time (m,), and both edges of every watched quantity: bias points, then windows."""
    journey, network, path = done.journey, done.network, done.path
    begin, count = float(journey.begin[0]), int(journey.windows[0])
    count = min(count, journey.watch_high.shape[1])
    ends = begin + (float(journey.time[0]) - begin) * np.arange(1, count + 1) / max(count, 1)
    before = np.flatnonzero(path.times[0] < begin)
    time = np.concatenate([path.times[0, before], done.clock.real_time(ends)])
    x = path.x[before, 0]
    bias = {name: x[:, place] for name, place in network.index.items()}
    volts = x @ network.D.T + network.v0[0]
    bias |= {name: volts[:, place] for name, place in network.ports.items()}
    edges: list[dict[str, Floats]] = []
    for windows in (journey.watch_high, journey.watch_low):
        rows = windows[0, :count].astype(float).T
        edges.append(
            {
                name: np.concatenate([bias[name], row])
                for name, row in zip(done.watched, rows, strict=True)
            }
        )
    return time, edges[0], edges[1]
