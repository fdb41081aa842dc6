"""The smallest single change with which a unit would have started.

Each knob is turned alone, to both sides, in steps that grow; between the last step that does not
help and the first that does the border is found by bisection.  What helps in a narrow window
between two steps is not seen.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from tolsim.circuit.poweron.fates import Fate
from tolsim.circuit.poweron.knobs import Knob, knobs_of
from tolsim.circuit.poweron.ramps import ramps_of
from tolsim.circuit.poweron.switch_on import FAST_PERIODS, Expected, switch_on
from tolsim.circuit.supply_ramp import STEP_TIME, RampProfile
from tolsim.circuit.thermal import Case
from tolsim.circuit.transients.journey import Ramps

STEPS = (0.025, 0.05, 0.1, 0.2)  # of a voltage, or of the whole track of a potentiometer
SHORTER = (0.5, 0.2, 0.05, 0.01)  # of the ramp's own duration
LONGER = (2.0, 5.0, 20.0, 100.0)
LEAST_PERIODS = 10.0  # a ramp shorter than that is first made as long
ROUNDS = 4  # of bisection

Values = tuple[float, ...]


@dataclass(frozen=True)
class Remedy:
    """One knob turned to one side.

    Attributes
    ----------
    knob : Knob
    own : float
        Where it stands: s, V, or share of the track.
    starts_at : float or None
        The nearest place found at which the unit starts; None if it starts at none.
    fails_at : float
        The farthest place short of it at which it does not; if it starts at none, the farthest
        one that was tried.
    """

    knob: Knob
    own: float
    starts_at: float | None
    fails_at: float


@dataclass(frozen=True)
class Bench:
    """One unit that can be switched on with its knobs turned."""

    case: Case
    expected: Expected
    shift: float
    profiles: Mapping[str, RampProfile]

    def fates(self, trials: Sequence[tuple[Knob, float]]) -> list[Fate]:
        """What becomes of the unit with each of some knobs turned, one at a time."""
        fates = [Fate.NOT_RUN] * len(trials)
        ramps = [self._ramps(*trial) for trial in trials]
        limit = FAST_PERIODS * float(self.expected.period[0])
        quick = np.array([bool(one.up[0] <= limit) for one in ramps])
        # `switch_on` follows a batch along its bias points if one ramp of it is slow
        for kind in (True, False):
            places = np.flatnonzero(quick == kind).tolist()
            if not places:
                continue
            done = switch_on(
                self._case([trials[k] for k in places]),
                _joined([ramps[k] for k in places]),
                self._expected([trials[k] for k in places]),
                self.shift,
            )
            for place, fate in zip(places, done.fate.tolist(), strict=True):
                fates[place] = Fate(fate)
        return fates

    def place_of(self, knob: Knob) -> float:
        """Where a knob stands."""
        if knob.kind == "ramp":
            return self.profiles[knob.name].rise
        return float(self.case.values[knob.key][0])

    def _ramps(self, knob: Knob, place: float) -> Ramps:
        profiles = dict(self.profiles)
        if knob.kind == "ramp":
            profiles[knob.name] = profiles[knob.name].stretched(place)
        return ramps_of(profiles, 1)

    def _case(self, trials: Sequence[tuple[Knob, float]]) -> Case:
        case = self.case.take(np.zeros(len(trials), dtype=np.intp))
        values = dict(case.values)
        for row, (knob, place) in enumerate(trials):
            if knob.kind != "ramp":
                values[knob.key] = values[knob.key].copy()
                values[knob.key][row] = place
        return replace(case, values=values)

    def _expected(self, trials: Sequence[tuple[Knob, float]]) -> Expected:
        """The orbit grows with the supply."""
        ratio = np.array(
            [
                place / self.place_of(knob) if knob.kind == "supply" else 1.0
                for knob, place in trials
            ]
        )
        own = self.expected
        return replace(
            own,
            swing=own.swing * ratio[:, None],
            period=np.repeat(own.period, len(ratio)),
            current=own.current * ratio,
        )


def _joined(ramps: Sequence[Ramps]) -> Ramps:
    return Ramps(
        np.concatenate([one.times for one in ramps]), np.concatenate([one.levels for one in ramps])
    )


def remedies(bench: Bench) -> tuple[Remedy, ...]:
    """Turn every knob of a unit that does not start, to both sides."""
    period = float(bench.expected.period[0])
    ways = [
        (knob, way)
        for knob in knobs_of(bench.case.design)
        for way in _ways(knob, bench.place_of(knob), period)
    ]
    trials = [(knob, place) for knob, way in ways for place in way]
    fates = iter(bench.fates(trials))
    found = []
    for knob, way in ways:
        own = bench.place_of(knob)
        helps = [next(fates) == Fate.STARTS for _ in way]
        if any(helps):
            first = helps.index(True)
            found.append(Remedy(knob, own, way[first], way[first - 1] if first else own))
        else:
            found.append(Remedy(knob, own, None, way[-1]))
    return _sharpened(bench, found)


def _sharpened(bench: Bench, found: list[Remedy]) -> tuple[Remedy, ...]:
    """Bisect between what does not help and what does, all knobs side by side."""
    for _ in range(ROUNDS):
        places = [k for k, one in enumerate(found) if one.starts_at is not None]
        if not places:
            break
        trials = [(found[k].knob, _between(found[k])) for k in places]
        for k, (_, place), fate in zip(places, trials, bench.fates(trials), strict=True):
            if fate == Fate.STARTS:
                found[k] = replace(found[k], starts_at=place)
            else:
                found[k] = replace(found[k], fails_at=place)
    return tuple(found)


def _between(one: Remedy) -> float:
    """Geometric middle for a ramp, else the arithmetic one."""
    assert one.starts_at is not None
    if one.knob.kind == "ramp":
        return float(np.sqrt(one.starts_at * one.fails_at))
    return 0.5 * (one.starts_at + one.fails_at)


def _ways(knob: Knob, own: float, period: float) -> list[Values]:
    """Places tried on both sides of where a knob stands, the nearest first."""
    if knob.kind == "ramp":
        least = max(own, LEAST_PERIODS * period)
        longer = tuple(least * factor for factor in LONGER)
        longer = longer if least == own else (least, *longer)
        shorter = tuple(own * factor for factor in SHORTER if own * factor > STEP_TIME)
        return [way for way in (shorter, longer) if way]
    size = 1.0 if knob.kind == "setting" else own
    both = [tuple(own + sign * step * size for step in STEPS) for sign in (-1.0, 1.0)]
    if knob.kind == "setting":
        both = [tuple(place for place in way if 0.0 <= place <= 1.0) for way in both]
    return [way for way in both if way]


def nearest(found: Sequence[Remedy]) -> list[Remedy]:
    """Those that help, the smallest relative change first."""

    def size(one: Remedy) -> float:
        assert one.starts_at is not None
        if one.knob.kind == "ramp":
            return abs(float(np.log10(one.starts_at / one.own)))
        return abs(one.starts_at - one.own) / (1.0 if one.knob.kind == "setting" else one.own)

    return sorted((one for one in found if one.starts_at is not None), key=size)
