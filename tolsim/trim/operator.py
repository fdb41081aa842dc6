"""How an operator turns one adjuster until a meter shows the target: all units side by side.

The adjuster moves by whole steps of its resolution, counted from where it stands at first.  Each
round reads the meter and moves once: while the target is on one side of all readings, by what
the last two readings promise (secant), never more than a coarse step; once it lies between two
readings, to the secant's place between them or, when that does not halve the interval, to its
middle.  It ends

- set: the meter shows the target within the tolerance;
- too coarse: neighbouring steps lie on either side of the target and neither is within it;
- exhausted: at an end of the range and the target still lies beyond;
- no reading: the meter shows nothing where the operator could still go;
- unsettled: the patience is used up.

Secant and bisection together are the method of Dekker (in Dejon, Henrici, eds., "Constructive
Aspects of the Fundamental Theorem of Algebra", 1969, 37-48); the coarse step and the first turn
in the direction known from the nominal unit are common practice, no source.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from enum import IntEnum

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.intp]
Flags = NDArray[np.bool_]

Meter = Callable[[Floats, Ints], Floats]
"""What the meter shows at positions (M,) of the units (M,); NaN if it shows nothing."""

NEVER = 2.0  # halvings a bracket may miss before the middle is taken


class TrimStatus(IntEnum):
    """How the trim of one unit ended."""

    SET = 0
    TOO_COARSE = 1
    EXHAUSTED = 2
    NO_READING = 3
    UNSETTLED = 4


@dataclass(frozen=True)
class Adjuster:
    """One adjuster and how it is turned.

    Attributes
    ----------
    low, high : float
        Ends of its range, in the unit of measure of the quantity.
    resolution : float
        Smallest step.
    coarse : float
        Largest step the operator takes.
    target, within : float
        Reading wanted, and how near it must come; in the unit of measure of the reading.
    patience : int
        Most moves.
    """

    low: float
    high: float
    resolution: float
    coarse: float
    target: float
    within: float
    patience: int

    def place(self, start: Floats, steps: Ints) -> Floats:
        """Position after so many steps of the resolution from the start, within the range."""
        return np.clip(start + steps * self.resolution, self.low, self.high)


@dataclass(frozen=True)
class Session:
    """Where the operator left each of N units.

    Attributes
    ----------
    status : (N,) of TrimStatus
    position : (N,)
        Of the adjuster, in the unit of measure of the quantity.
    shown : (N,)
        Meter reading there; NaN if it showed nothing.
    moves : (N,)
        How often the adjuster was turned.
    slope : (N,)
        Reading per position, from the last two readings that differ; NaN if there are none.
    """

    status: Ints
    position: Floats
    shown: Floats
    moves: Ints
    slope: Floats


def operate(
    meter: Meter, start: Floats, adjuster: Adjuster, usual_slope: float = np.nan
) -> Session:
    """Turn the adjuster of every unit until the meter shows the target.

    Parameters
    ----------
    meter : callable
        See `Meter`; called once per round for the units still in work.
    start : (N,)
        Where the adjusters stand at first; moved into the range if outside.
    adjuster : Adjuster
    usual_slope : float
        Reading per position that the operator expects from other units; NaN if unknown.

    Returns
    -------
    Session
    """
    work = _Bench(adjuster, np.clip(start, adjuster.low, adjuster.high), usual_slope)
    for _ in range(adjuster.patience + 1):
        units = np.flatnonzero(work.status < 0)
        if not units.size:
            break
        position = adjuster.place(work.start[units], work.steps[units])
        work.note(units, meter(position, units))
        work.move(np.flatnonzero(work.status < 0))
    return work.session()


class _Bench:
    """All units in work; steps count from each unit's start."""

    def __init__(self, adjuster: Adjuster, start: Floats, usual_slope: float) -> None:
        count = len(start)
        self.adjuster, self.start = adjuster, start
        self.status = np.full(count, -1, dtype=np.intp)
        self.steps = np.zeros(count, dtype=np.intp)
        self.moves = np.zeros(count, dtype=np.intp)
        # ends of the range in steps; the last one may be shorter than the others
        reach = adjuster.resolution * (1.0 + 1e-9)
        self.first = -np.ceil((start - adjuster.low) / reach).astype(np.intp)
        self.last = np.ceil((adjuster.high - start) / reach).astype(np.intp)
        self.slope = np.full(count, usual_slope) * adjuster.resolution  # reading per step
        self.measured = np.zeros(count, dtype=bool)
        self.gap = np.full(count, np.nan)  # shown - target, now
        self.before = np.zeros(count, dtype=np.intp), np.full(count, np.nan)  # steps, gap
        self.under = np.zeros(count, dtype=np.intp), np.full(count, np.nan)
        self.over = np.zeros(count, dtype=np.intp), np.full(count, np.nan)
        self.width = np.full(count, np.inf)  # of the bracket, when it was looked at last
        self.walled = np.zeros(count, dtype=bool)  # a place without reading bounds the way
        self.upward = np.where(adjuster.high - start >= start - adjuster.low, 1, -1)

    def note(self, units: Ints, shown: Floats) -> None:
        """Enter the readings of a round."""
        gap = shown - self.adjuster.target
        steps = self.steps[units]
        last_steps, last_gap = self.before[0][units], self.before[1][units]
        with np.errstate(divide="ignore", invalid="ignore"):
            slope = (gap - last_gap) / (steps - last_steps)
        tells = np.isfinite(slope) & (slope != 0.0)
        self.slope[units] = np.where(tells, slope, self.slope[units])
        self.measured[units] |= tells
        self.gap[units] = gap
        for side, here in ((self.under, gap < 0.0), (self.over, gap >= 0.0)):
            side[0][units[here]], side[1][units[here]] = steps[here], gap[here]
        read = np.isfinite(gap)
        self._wall(units[~read & np.isfinite(last_gap)])
        self.before[0][units[read]], self.before[1][units[read]] = steps[read], gap[read]
        self.status[units[np.abs(gap) <= self.adjuster.within]] = TrimStatus.SET

    def _wall(self, units: Ints) -> None:
        """Bound the way of units whose meter went blank: nobody turns there again."""
        here, up = self.steps[units], self.steps[units] > self.before[0][units]
        self.last[units] = np.where(up, np.minimum(self.last[units], here - 1), self.last[units])
        self.first[units] = np.where(up, self.first[units], np.maximum(self.first[units], here + 1))
        self.walled[units] = True

    def move(self, units: Ints) -> None:
        """Turn every adjuster once, or end where no turn helps."""
        target = np.where(np.isfinite(self.gap[units]), self._wanted(units), self._groping(units))
        target = np.clip(target, self.first[units], self.last[units])
        stuck = target == self.steps[units]
        self._end(units[stuck])
        moving = units[~stuck]
        spent = self.moves[moving] >= self.adjuster.patience
        self.status[moving[spent]] = TrimStatus.UNSETTLED
        moving = moving[~spent]
        self.steps[moving] = target[~stuck][~spent]
        self.moves[moving] += 1

    def _wanted(self, units: Ints) -> Ints:
        """Step to go to after a reading; the present one if there is nothing better."""
        inside = np.isfinite(self.under[1][units]) & np.isfinite(self.over[1][units])
        return np.where(inside, self._between(units), self._towards(units))

    def _towards(self, units: Ints) -> Ints:
        """Secant step, at most a coarse one, while the target lies beyond all readings."""
        most = max(1, round(self.adjuster.coarse / self.adjuster.resolution))
        slope, gap = self.slope[units], self.gap[units]
        known = np.isfinite(slope) & (slope != 0.0)
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            promised = np.where(known, -gap / slope, self.upward[units] * float(most))
        turn = np.clip(np.nan_to_num(promised, posinf=most, neginf=-most), -most, most)
        whole = np.where(np.abs(turn) < 1.0, np.sign(turn), np.round(turn)).astype(np.intp)
        return self.steps[units] + whole

    def _between(self, units: Ints) -> Ints:
        """Place within the bracket: secant's, or the middle where the bracket did not halve."""
        (below, low_gap), (above, high_gap) = (
            (side[0][units], side[1][units]) for side in (self.under, self.over)
        )
        width = np.abs(above - below)
        middle = (below + above) // 2
        with np.errstate(divide="ignore", invalid="ignore"):
            straight = below - low_gap * (above - below) / (high_gap - low_gap)
        chord = np.round(np.nan_to_num(straight)).astype(np.intp)
        first, last = np.minimum(below, above), np.maximum(below, above)
        chord = np.clip(chord, first + 1, last - 1)
        slow = width * NEVER > self.width[units]
        self.width[units] = np.where(slow, width, np.minimum(self.width[units], width))
        place = np.where(slow & np.isfinite(self.width[units]), middle, chord)
        nearer = np.where(-low_gap <= high_gap, below, above)
        return np.where(width <= 1, nearer, place)

    def _groping(self, units: Ints) -> Ints:
        """Step to go to when the meter shows nothing: half way back, or on if it never did."""
        most = max(1, round(self.adjuster.coarse / self.adjuster.resolution))
        ever = np.isfinite(self.before[1][units])
        back = np.round((self.steps[units] + self.before[0][units]) / 2.0).astype(np.intp)
        back = np.where(np.abs(self.steps[units] - back) < 1, self.before[0][units], back)
        return np.where(ever, back, self.steps[units] + self.upward[units] * most)

    def _end(self, units: Ints) -> None:
        """Units whose operator stays where he is without being content."""
        inside = np.isfinite(self.under[1][units]) & np.isfinite(self.over[1][units])
        status = np.where(inside, TrimStatus.TOO_COARSE, TrimStatus.EXHAUSTED)
        blank = ~np.isfinite(self.gap[units]) | (self.walled[units] & ~inside)
        status[blank] = TrimStatus.NO_READING
        self.status[units] = status

    def session(self) -> Session:
        """Everything as the operator leaves it."""
        status = np.where(self.status < 0, TrimStatus.UNSETTLED, self.status)
        slope = np.where(self.measured, self.slope / self.adjuster.resolution, np.nan)
        position = self.adjuster.place(self.start, self.steps)
        shown = self.gap + self.adjuster.target
        return Session(status, position, shown, self.moves, slope)
