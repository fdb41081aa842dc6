"""How the source of a rail rises after power-on: its level against time, a share of its voltage.

    step          at once (within `STEP_TIME`), after the delay
    linear        in equal parts over the ramp time
    smooth        half a cosine over the ramp time (a supply with soft start)
    exponential   1 - exp(-t/tau), complete at the ramp time, where 99 % would be reached
    csv           as recorded
    points        as drawn

Contact bounce and dips multiply what the ramp gives: an open contact counts as a source at 0 V,
which also draws charge back and so is harsher than a contact that is open.  All of them are
straight pieces between points, so an integrator can put its steps on the corners.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from tolsim.circuit.devices import Floats
from tolsim.design import Bounce, Dip, Rail

STEP_TIME = 1e-9  # s, rise of a step
CURVE_PIECES = 64  # of a smooth or exponential ramp
FULL_SHARE = 0.99  # of the final voltage, which an exponential ramp counts as reached
EDGE_SHARE = 0.01  # of a bounce's period or of a dip's length, duration of its edges


@dataclass(frozen=True)
class RampProfile:
    """Level of a rail's source against time after power-on, straight between its points.

    Before the first point it is the level of the first one (0 but for a recorded ramp), after
    the last one it stays, at 1.
    """

    times: Floats  # (K,) s, rising, the first 0
    levels: Floats  # (K,) share of the rail's voltage
    delay: float = 0.0  # s, when the rise begins
    rise: float = STEP_TIME  # s, how long it takes

    @property
    def end(self) -> float:
        """Time after which the level is constant, s."""
        return float(self.times[-1])

    def at(self, t: Floats | float) -> Floats:
        """Levels at times of any shape, s."""
        return np.asarray(np.interp(t, self.times, self.levels))

    def stretched(self, ramp_time: float) -> RampProfile:
        """The same shape with another duration of the rise, s.

        What falls into the rise is stretched with it; what comes later moves with its end.
        """
        finish = self.delay + self.rise
        inside = self.delay + (self.times - self.delay) * (ramp_time / self.rise)
        after = self.times + (ramp_time - self.rise)
        late = np.where(self.times <= finish, inside, after)
        times = np.where(self.times <= self.delay, self.times, late)
        return replace(self, times=times, rise=ramp_time)


def profile_of(rail: Rail) -> RampProfile:
    """The level of a rail after power-on, with its delay, bounces and dip."""
    times, levels = _ramp(rail)
    rise = float(times[-1])
    if rail.delay > 0:
        times, levels = np.append(0.0, rail.delay + times), np.append(levels[0], levels)
    ramp = RampProfile(times, levels, rail.delay, rise)
    if rail.bounce is not None:
        ramp = _multiplied(ramp, *_bounces(rail.bounce, rail.delay))
    if rail.dip is not None:
        ramp = _multiplied(ramp, *_dip(rail.dip))
    return ramp


def ramp_kind(rail: Rail) -> str:
    """The kind of ramp, also where the study leaves it open."""
    if rail.ramp is not None:
        return rail.ramp
    if rail.ramp_file is not None:
        return "csv"
    if rail.ramp_points:
        return "points"
    return "step" if rail.ramp_time is None else "linear"


def _ramp(rail: Rail) -> tuple[Floats, Floats]:
    """Times (K,) from the beginning of the rise, and levels (K,) from 0 to 1."""
    kind, ramp_time = ramp_kind(rail), rail.ramp_time or STEP_TIME
    if kind in ("csv", "points"):
        times, levels = np.array(rail.ramp_points, dtype=float).T
        return times - times[0], levels
    if kind in ("step", "linear"):
        return np.array([0.0, ramp_time]), np.array([0.0, 1.0])
    share = np.arange(CURVE_PIECES + 1) / CURVE_PIECES
    if kind == "smooth":
        return share * ramp_time, 0.5 - 0.5 * np.cos(np.pi * share)
    left = (1.0 - FULL_SHARE) ** share
    return share * ramp_time, (1.0 - left) / FULL_SHARE


def _bounces(bounce: Bounce, start: float) -> tuple[Floats, Floats]:
    """Factor on the ramp: closed, then open, `count` times, then closed for good."""
    edge, closed = EDGE_SHARE * bounce.period, (1.0 - bounce.open_share) * bounce.period
    edge = min(edge, 0.25 * closed, 0.25 * bounce.open_share * bounce.period)
    corners = np.array([closed - edge, closed, bounce.period - edge, bounce.period])
    touches = start + bounce.period * np.arange(bounce.count)
    times = (touches[:, None] + corners).ravel()
    return times, np.tile([1.0, 0.0, 0.0, 1.0], bounce.count)


def _dip(dip: Dip) -> tuple[Floats, Floats]:
    """Factor on the ramp."""
    edge, finish = EDGE_SHARE * dip.length, dip.at + dip.length
    low = 1.0 - dip.depth
    return np.array([dip.at, dip.at + edge, finish - edge, finish]), np.array([1.0, low, low, 1.0])


def _multiplied(ramp: RampProfile, times: Floats, factors: Floats) -> RampProfile:
    """The ramp times a factor given at some times (1 before and after them)."""
    corners = np.union1d(ramp.times, times)
    return replace(
        ramp, times=corners, levels=ramp.at(corners) * np.interp(corners, times, factors)
    )
