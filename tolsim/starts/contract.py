"""The supply contract: the slowest ramp and the lowest supply from which each unit still starts.

Every unit is tried at both ends of a stated range and, where they differ, between them, halving
the distance round by round; all units and conditions go through a round side by side.  Halving
takes for granted that there is one border.  So two more tries are made, one on either side of
what was found; a unit they contradict is told as one without a single border, and counts with the
worst that is known of it.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from joblib import Parallel, delayed
from numpy.typing import NDArray

from tolsim.answers.counting import Counting
from tolsim.circuit.devices import Floats, Ints
from tolsim.evaluation import Plan, built, stored_plan
from tolsim.spread.sampling import Draws, draw
from tolsim.starts.asked import SupplyContract
from tolsim.starts.attempt import running, stretched_ramps, switch_units_on
from tolsim.stats.percentiles import wilks_units
from tolsim.workers import on_disk

Flags = NDArray[np.bool_]
Progress = Callable[[int, int], None]
Starts = Callable[[Ints, Floats], Flags]
"""Which of some units (m,) start, each at a place of its own (m,), from 0 (easy) to 1 (hard)."""
Question = Literal["ramp_time", "supply"]

ROUNDS = 7  # a 128th of the range
SHARES = (0.05, 0.5, 0.95)
NEVER = -1.0  # place of a unit that does not even start at the easy end
FIRST_UNITS = 20


@dataclass(frozen=True)
class Borders:
    """How far each of N units can go from the easy end (0) towards the hard one (1).

    Attributes
    ----------
    safe : (N,)
        Farthest place known to start with nothing known to fail before it; NaN: not even 0.
    beyond : (N,)
        Starts at the hard end too, so its border lies beyond.
    single : (N,)
        Nothing speaks against one border.
    """

    safe: Floats
    beyond: Flags
    single: Flags


def find_borders(starts: Starts, units: int) -> Borders:
    """Halve the range for all units together, then try what halving took for granted."""
    every = np.arange(units)
    easy, hard = starts(every, np.zeros(units)), starts(every, np.ones(units))
    low, high = np.zeros(units), np.ones(units)
    between = easy & ~hard
    halved = np.flatnonzero(between)
    for _ in range(ROUNDS if halved.size else 0):
        middle = 0.5 * (low + high)
        good = starts(halved, middle[halved])
        low[halved[good]], high[halved[~good]] = middle[halved[good]], middle[halved[~good]]
    # where both ends agree, the tries go to a third and two thirds of the range
    before = np.where(between, 0.5 * low, 1.0 / 3.0)
    after = np.where(between, 0.5 * (high + 1.0), 2.0 / 3.0)
    first, second = starts(every, before), starts(every, after)
    single = np.where(between, first & ~second, (first == easy) & (second == easy) & (easy == hard))
    safe = np.where(between & first, low, 0.0)
    safe = np.where(easy & hard, np.where(single, 1.0, np.where(first, before, 0.0)), safe)
    return Borders(np.where(easy, safe, np.nan), easy & hard & single, single)


def supply_contract(
    plan: Plan, asked: SupplyContract, jobs: int | None = None, progress: Progress | None = None
) -> dict[str, Any]:
    """Find how slow and how low the supply may be for the first units of a plan.

    Returns
    -------
    dict
        As the key `supply_contract` of the summary.
    """
    draws = built(plan, draw(plan.factors, plan.study.run.seed, 0, asked.units))
    questions: list[Question] = ["ramp_time"] if asked.ramp_time is not None else []
    questions += ["supply"] if asked.supply is not None else []
    tasks = [(question, condition) for question in questions for condition in asked.conditions]
    share = -(-asked.units // max(1, -(-(jobs or 1) // len(tasks))))
    parts = [(task, first) for task in tasks for first in range(0, asked.units, share)]
    found: dict[tuple[Question, str], list[Borders]] = {task: [] for task in tasks}
    with on_disk(plan) as plan_file, Parallel(n_jobs=jobs or -1, return_as="generator") as work:
        results = work(
            delayed(_stored_borders)(plan_file, asked, *task, draws.rows(first, share))
            for task, first in parts
        )
        for done, ((task, _), borders) in enumerate(zip(parts, results, strict=True), 1):
            found[task].append(borders)
            if progress is not None:
                progress(done, len(parts))
    numbers = np.arange(asked.units, dtype=np.int64)
    counting = Counting.of(plan.study.lots, numbers, plan.study.run.confidence)
    return {
        "conditions": list(asked.conditions),
        "state": asked.state,
        "units": asked.units,
        "confidence": counting.confidence,
        "covers": asked.covers,
        "questions": [
            _entry(plan, asked, question, _worst(found, question, asked), counting)
            for question in questions
        ],
    }


def _worst(
    found: dict[tuple[Question, str], list[Borders]], question: Question, asked: SupplyContract
) -> Borders:
    """Every unit in the condition that is hardest for it."""
    rows = [found[(question, condition)] for condition in asked.conditions]

    def joined(key: str) -> NDArray[Any]:
        return np.stack([np.concatenate([getattr(b, key) for b in row]) for row in rows])

    safe = joined("safe")
    return Borders(
        np.where(np.isnan(safe).any(axis=0), np.nan, safe.min(axis=0)),
        np.asarray(joined("beyond").all(axis=0)),
        np.asarray(joined("single").all(axis=0)),
    )


def _stored_borders(
    plan_file: str, asked: SupplyContract, question: Question, condition: str, draws: Draws
) -> Borders:
    return borders_of(stored_plan(plan_file), asked, question, condition, draws)


def borders_of(
    plan: Plan, asked: SupplyContract, question: Question, condition: str, draws: Draws
) -> Borders:
    """How far trimmed units can go in one condition, in shares of the range."""
    name, design = (condition, asked.state), plan.study.design
    if question == "ramp_time":
        usual = running(plan, name, draws, {})

        def at_ramp(units: Ints, place: Floats) -> Flags:
            times = real(asked, question, place)
            stretched = dict.fromkeys(asked.rails or design.rails, times)
            ramps = stretched_ramps(design, units.size, stretched)
            return switch_units_on(usual.take(units), ramps).starts

        return find_borders(at_ramp, draws.count)
    following = [rail for rail, one in design.rails.items() if one.follows_supply]

    def at_supply(units: Ints, place: Floats) -> Flags:
        level = 1.0 + real(asked, question, place)
        own, levels = _chosen(draws, units), dict.fromkeys(following, level)
        there = running(plan, name, own, {"supply": 0.0}, levels)
        return switch_units_on(there, stretched_ramps(design, units.size, {})).starts

    return find_borders(at_supply, draws.count)


def _chosen(draws: Draws, units: Ints) -> Draws:
    """Draws of some of the units; rows keep what they hold, not their numbers."""
    moved = {address: factor[units] for address, factor in draws.moved.items()}
    return Draws(draws.factors, draws.first, draws.u[units], draws.values[units], moved)


def real(asked: SupplyContract, question: Question, place: Floats) -> Floats:
    """Ramp times, s, or supply deviations at places between the easy end (0) and the hard one."""
    if question == "ramp_time":
        assert asked.ramp_time is not None
        low, high = np.log(asked.ramp_time)
        return np.asarray(np.exp(low + place * (high - low)))
    assert asked.supply is not None
    lowest, highest = asked.supply
    return np.asarray(highest - place * (highest - lowest))


def _entry(
    plan: Plan, asked: SupplyContract, question: Question, borders: Borders, counting: Counting
) -> dict[str, Any]:
    """One question as the summary holds it; places beyond what was tried are told as such."""
    never = np.isnan(borders.safe)
    place = np.where(never, NEVER, borders.safe)
    ends = [float(one) for one in real(asked, question, np.array([0.0, 1.0]))]
    between = counting.percentiles(place, SHARES)
    groups = len(place) if counting.group is None else len(np.unique(counting.group))
    bound = counting.bound(place, asked.covers, "low")
    enough = bool(np.isfinite(bound))
    covers = asked.covers if enough else (1.0 - counting.confidence) ** (1.0 / groups)
    return {
        "question": question,
        "unit_of_measure": "s" if question == "ramp_time" else "1",
        "rails": _rails(plan, asked, question),
        "ends": ends,
        "with_border": int(np.count_nonzero(~never & ~borders.beyond)),
        "beyond": int(np.count_nonzero(borders.beyond)),
        "never": int(np.count_nonzero(never)),
        "first_never": np.flatnonzero(never)[:FIRST_UNITS].tolist(),
        "not_single": int(np.count_nonzero(~borders.single)),
        "first_not_single": np.flatnonzero(~borders.single)[:FIRST_UNITS].tolist(),
        "percentiles": [
            {
                "share": share,
                "value": _told(asked, question, between.value[k]),
                "interval": [
                    _told(asked, question, between.low[k]),
                    _told(asked, question, between.high[k]),
                ],
            }
            for k, share in enumerate(SHARES)
        ],
        "bound": {
            "value": _told(asked, question, bound if enough else float(place.min())),
            "covers": float(covers),
            "enough": enough,
            "needs": wilks_units(asked.covers, counting.confidence),
        },
        "borders": [_told(asked, question, one) for one in place],
    }


def _rails(plan: Plan, asked: SupplyContract, question: Question) -> list[dict[str, Any]]:
    """Rails a question is about, with their nominal voltage."""
    rails = plan.study.design.rails
    if question == "ramp_time":
        chosen = list(asked.rails or rails)
    else:
        chosen = [rail for rail, one in rails.items() if one.follows_supply]
    return [{"rail": rail, "voltage": rails[rail].voltage} for rail in chosen]


def _told(asked: SupplyContract, question: Question, place: float) -> float | None:
    """Ramp time or deviation at a place; None for one that is not within what was tried."""
    if not 0.0 <= place <= 1.0:
        return None
    return float(real(asked, question, np.array(place)))
