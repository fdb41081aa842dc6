"""Does the verdict hang on the guessed laws?  The yield again, under other plausible laws.

Every tolerance and lot law is replaced by others with the same promised limits: all tables at
once, and one family of tables at a time.  What a yield would be under them is read from the
units already solved, by weights where enough of them count, else by moving each unit's figures
along the fitted response; units drawn anew under the other law, on the same streams of chance,
correct that reading.  Laws are a matter of ignorance: none of this widens the yield's interval.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tolsim.answers.bounds import applies, bounds
from tolsim.answers.counting import Counting
from tolsim.answers.law_words import conclusion
from tolsim.answers.unit_files import Columns, UnitRows
from tolsim.evaluation import Plan, passes
from tolsim.families import Family, families, metered
from tolsim.laws import Law
from tolsim.spread.alternatives import (
    ALTERNATIVES,
    METERS,
    REPLACED,
    Alternative,
    replaced_law,
    with_alternative,
)
from tolsim.spread.sampling import Factor, draw, factors
from tolsim.stats.neighbours import Neighbours
from tolsim.stats.response import Response, foretold, normal_scores
from tolsim.stats.reweighting import Estimate, corrected_share, effective_units, weighted_share
from tolsim.workers import Variation, evaluate_variations

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

FEWEST_UNITS = 100  # below, a yield is too wide for its law to matter
MOST_UNITS = 5_000  # more sharpen no answer
DIRECT_SHARE = 0.05  # of the units, drawn anew under each law that needs it
FEWEST_DIRECT, MOST_DIRECT = 32, 512
ENOUGH_EFFECTIVE = 0.5  # share of the units that weights must leave to be trusted alone
HALF = 0.5
GRID = 401  # places at which one law must have parts wherever the other has
DOUBTED = ("guess", "common practice")  # bases that switch the check on


def wanted(plan: Plan) -> bool:
    """Tell whether the laws are to be checked: as the study says, else if any is a guess."""
    asked = plan.study.run.law_check
    if asked is not None:
        return asked
    found = families(plan.study, plan.tables, plan.factors)
    return any(basis in DOUBTED for family in found for basis in family.bases)


def law_check(plan: Plan, units: Columns, jobs: int | None) -> dict[str, Any]:
    """Estimate the yield under other laws.

    Parameters
    ----------
    plan : Plan
        Of the finished run.
    units : Columns
        One row per unit, condition and state.
    jobs : int, optional
        Worker processes; all cores if None.

    Returns
    -------
    dict
        `law_check` of the summary, see `tolsim.answers.results`.
    """
    found = families(plan.study, plan.tables, plan.factors)
    reason = ""
    if not wanted(plan):
        reason = "switched off" if plan.study.run.law_check is False else "no law is a guess"
    elif not found:
        reason = "every tolerance and lot law is measured, or there is none"
    elif plan.study.run.units < FEWEST_UNITS:
        reason = f"fewer than {FEWEST_UNITS} units"
    counts = {
        "laws": sum(len(family.bases) for family in found),
        "guesses": sum(family.bases.count("guess") for family in found),
        "common_practice": sum(family.bases.count("common practice") for family in found),
    }
    if reason:
        return {"done": False, "reason": reason, **counts, **_nothing()}
    return {"done": True, "reason": "", **counts, **_Check(plan, units, found).answer(jobs)}


def _nothing() -> dict[str, Any]:
    return {
        "alternatives": [],
        "together": [],
        "families": [],
        "meters": [],
        "units": 0,
        "direct_units": 0,
        "depends": None,
        "next": None,
        "sentence": "",
    }


@dataclass(frozen=True)
class _Scope:
    """Families of tables whose laws are replaced together, by one alternative."""

    families: tuple[Family, ...]
    other: Alternative

    @property
    def tables(self) -> tuple[str, ...]:
        return tuple(name for family in self.families for name in family.tables)


@dataclass(frozen=True)
class _Reading:
    """What is expected of every unit under other laws, before any is drawn anew."""

    scope: _Scope
    estimate: Estimate
    method: str
    expected: Floats  # (N,) passing, 1 or 0 or between
    effective: float | None  # units that weights leave; None if some parts were never drawn


@dataclass
class _Check:
    """One pass over all laws."""

    plan: Plan
    units: Columns
    families: tuple[Family, ...]

    def __post_init__(self) -> None:
        self.study = self.plan.study
        rows = UnitRows.of(self.units)
        self.count = min(rows.unit.size, MOST_UNITS)
        self.passed = passes(rows)[: self.count]
        self.figures, self.at_most, self.at_least = self._judged(rows)
        self.fails_anyway = ~self.passed & self._within(self.figures)
        self.direct = min(
            max(FEWEST_DIRECT, min(round(DIRECT_SHARE * self.count), MOST_DIRECT)), self.count
        )
        self.anew = (
            np.arange(self.direct) * self.count // self.direct
        )  # from as many lots as can be
        self.counting = Counting.of(
            self.study.lots, rows.unit[: self.count], self.study.run.confidence
        )

    @cached_property
    def _foreteller(self) -> tuple[Neighbours | None, Floats]:
        return self._choose()

    @cached_property
    def response(self) -> Response:
        """How the judged figures answer to the factors."""
        return Response.of(self.figures, self.drawn)

    @property
    def neighbours(self) -> Neighbours | None:
        """Units in the factors that decide the verdict; None if fitted figures foretell better."""
        return self._foreteller[0]

    @property
    def around(self) -> Floats:
        """Share of passing units around each unit (N,), itself left out."""
        return self._foreteller[1]

    @cached_property
    def drawn(self) -> Floats:
        """What parts have of every factor (N, k), ties and matches between them included."""
        return self._had(self.plan.factors)

    def _had(self, of: Sequence[Factor]) -> Floats:
        draws = draw(of, self.study.run.seed, 0, self.count)
        return np.column_stack([draws.of(factor.name, factor.law) for factor in of])

    def answer(self, jobs: int | None) -> dict[str, Any]:
        """All that is found, as plain numbers and texts."""
        together = [self._read(_Scope(self.families, other)) for other in ALTERNATIVES]
        alone = {
            family: [self._read(_Scope((family,), other)) for other in self._apply_to(family)]
            for family in self.families
        }
        moves = [reading for readings in alone.values() for reading in readings]
        meters = {
            family: [self._read(_Scope((family,), other)) for other in METERS]
            for family in metered(self.study, self.plan.tables)
        }
        leading = [max(ways, key=self._size) for ways in (moves, *meters.values())]
        anew = [reading for reading in (*together, *leading) if reading.method != "weights"]
        found = dict(zip(map(id, anew), self._draw_anew(anew, jobs), strict=True))
        rate = self._disagreement(anew, found)
        entries = [self._entry(reading, found.get(id(reading)), rate) for reading in together]
        by_family = [
            {
                "tables": list(family.tables),
                "parts": list(family.parts),
                "bases": sorted(set(family.bases)),
                "guesses": family.bases.count("guess"),
                "lots": family.lots,
                "entries": [self._entry(one, found.get(id(one)), rate) for one in readings],
            }
            for family, readings in alone.items()
        ]
        answer = {
            "alternatives": [{"law": other.name, "words": other.words} for other in ALTERNATIVES],
            "together": entries,
            "families": sorted(by_family, key=_largest_change, reverse=True),
            "meters": [
                {
                    "tables": list(family.tables),
                    "parts": list(family.parts),
                    "entries": [self._entry(one, found.get(id(one)), rate) for one in readings],
                }
                for family, readings in meters.items()
            ],
            "units": self.count,
            "direct_units": self.direct * len(anew),
        }
        widths = {family.tables: family.relative_sd for family in self.families}
        return answer | conclusion(answer, self._counted(self.passed), widths)

    def _counted(self, hit: Flags) -> Estimate:
        """Share of units, with the interval their lots allow."""
        return Estimate(float(hit.mean()), *self.counting.interval(hit), float(hit.size))

    def _judged(self, rows: UnitRows) -> tuple[Floats, Floats, Floats]:
        """Normal scores of figures that limits judge (N, f), with those of their bounds (f,)."""
        columns, tops, floors = [], [], []
        for bound in bounds(self.study):
            if bound.column not in rows.source.names:
                continue
            values = rows.figure(bound.column)[: self.count]
            top = np.inf if bound.at_most is None else bound.at_most
            floor = -np.inf if bound.at_least is None else bound.at_least
            for c, case in enumerate(rows.cases):
                if applies(self.study.limits[bound.limit], *case):
                    scores, marks = normal_scores(values[:, c], np.array([top, floor]))
                    columns.append(scores)
                    tops.append(marks[0])
                    floors.append(marks[1])
        table = np.column_stack(columns) if columns else np.empty((self.count, 0))
        return table, np.array(tops), np.array(floors)

    def _within(self, figures: Floats) -> Flags:
        """Units that break no limit; a figure a unit does not have breaks none."""
        with np.errstate(invalid="ignore"):
            beyond = (figures > self.at_most) | (figures < self.at_least)
        return ~np.asarray(beyond.any(axis=1), bool)

    def _apply_to(self, family: Family) -> Iterator[Alternative]:
        """Alternatives that change any law of a family."""
        for other in ALTERNATIVES:
            if any(self._other(f, other) != f.law for f in self._factors_of((family,))):
                yield other

    def _other(self, factor: Factor, other: Alternative) -> Law | None:
        """The law of a factor under an alternative."""
        spread = self.plan.tables[factor.table].quantities[factor.quantity]
        return replaced_law(spread, factor.aspect, other)

    def _factors_of(self, chosen: Sequence[Family]) -> list[Factor]:
        names = {name for family in chosen for name in family.tables}
        return [f for f in self.plan.factors if f.table in names and f.aspect in REPLACED]

    def _size(self, reading: _Reading) -> float:
        """How far a reading is from the run's own share."""
        return abs(reading.estimate.share - float(self.passed.mean()))

    def _read(self, scope: _Scope) -> _Reading:
        """By weights if enough of the units count, else by the fitted response."""
        confidence = self.study.run.confidence
        weights = self._weights(scope)
        effective = None if weights is None else effective_units(weights)
        if weights is not None:
            estimate = weighted_share(self.passed, weights, confidence)
            if estimate.effective >= ENOUGH_EFFECTIVE * self.count:
                return _Reading(scope, estimate, "weights", self.passed.astype(float), effective)
        tables = with_alternative(self.plan.tables, scope.tables, scope.other)
        changed = self._had(factors(self.study, tables))
        if self.neighbours is not None:
            expected = self.passed + self.neighbours.share_at(changed) - self.around
            return _Reading(scope, self._expected(expected), "neighbours", expected, effective)
        expected = (self._within(self.response.at(changed)) & ~self.fails_anyway).astype(float)
        return _Reading(scope, self._expected(expected), "response", expected, effective)

    def _choose(self) -> tuple[Neighbours | None, Floats]:
        """Neighbours, if they foretell the verdicts of the run better than fitted figures do."""
        found = Neighbours.of(self.drawn, self.passed.astype(float))
        if found is None:
            return None, self.passed.astype(float)
        around = found.share_around()
        # what fails without breaking a limit (a start, a trim) no figure foretells
        fitted = self._within(foretold(self.figures, self.drawn))
        better = np.mean((around - self.passed) ** 2) < np.mean(fitted != self.passed)
        return (found if better else None), around

    def _expected(self, expected: Floats) -> Estimate:
        """Share of units expected to pass, with an interval as wide as counted ones have."""
        share = float(np.clip(expected.mean(), 0.0, 1.0))
        counted = self._counted(expected > HALF)
        low, high = share - counted.share + counted.low, share - counted.share + counted.high
        return Estimate(share, max(low, 0.0), min(high, 1.0), counted.effective)

    def _weights(self, scope: _Scope) -> Floats | None:
        """Density ratios (N,); None where they do not tell the share under the other law.

        That is where some parts of it were never drawn, where one rank stands for values under
        several tables, where parts depend on each other, and where units share what they are
        built from.
        """
        own = self._factors_of(scope.families)
        several = any(len(family.tables) > 1 for family in scope.families)
        if self.study.lots or several or any(factor.tie or factor.match for factor in own):
            return None
        weights = np.ones(self.count)
        for column, factor in enumerate(self.plan.factors):
            other = self._other(factor, scope.other) if factor in own else None
            if other is None or other == factor.law:
                continue
            if not _covers(factor.law, other):
                return None
            values = self.drawn[:, column]
            density = factor.law.pdf(values)
            weights *= other.pdf(values) / np.where(density > 0.0, density, np.inf)
        return weights if np.any(weights > 0.0) else None

    def _draw_anew(self, readings: Sequence[_Reading], jobs: int | None) -> list[Flags]:
        """Which of the units `anew` (m,) pass when drawn under each other law."""
        variations = []
        for reading in readings:
            tables = with_alternative(self.plan.tables, reading.scope.tables, reading.scope.other)
            variations.append(Variation(tables, factors(self.study, tables)))
        return evaluate_variations(self.plan, variations, self.anew, jobs)

    def _disagreement(self, anew: Sequence[_Reading], found: Mapping[int, Flags]) -> float:
        """Mean square by which units drawn anew came out otherwise than expected, all laws."""
        off = sum(float(np.sum((one.expected[self.anew] - found[id(one)]) ** 2)) for one in anew)
        return (off + 1.0) / (self.direct * len(anew) + 2.0)

    def _entry(self, reading: _Reading, found: Flags | None, rate: float) -> dict[str, Any]:
        estimate, method = reading.estimate, reading.method
        direct = None
        if found is not None:
            before = reading.expected[self.anew]
            confidence = self.study.run.confidence
            estimate = corrected_share(reading.estimate, before, found, rate, confidence)
            direct = {
                "units": self.direct,
                "passed": int(found.sum()),
                "as_expected": int(((before > HALF) == found).sum()),
            }
            method = f"{method}, drawn anew"
        own = float(self.passed.mean())
        return {
            "law": reading.scope.other.name,
            "method": method,
            "estimate": estimate.share,
            "low": estimate.low,
            "high": estimate.high,
            "effective_units": reading.effective,
            "change": estimate.share - own,
            "direct": direct,
        }


def _covers(law: Law, other: Law) -> bool:
    """True if `law` has parts wherever `other` has."""
    places = other.ppf((np.arange(GRID) + 0.5) / GRID)
    return bool(np.all(law.pdf(places) > 0.0))


def _largest_change(family: Mapping[str, Any]) -> float:
    return max((abs(entry["change"]) for entry in family["entries"]), default=0.0)
