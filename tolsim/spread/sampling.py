"""The only place of chance: factors of a study, and their draws for any range of units.

Every factor has its own stream of random numbers, keyed by the seed and its name, and unit
k takes the k-th number of the stream.  So unit 1234 is the same unit whatever the number
of units, the chunks, the workers, or the other factors of the study.  The streams stand in
`tolsim.spread.streams`; with Sobol's sequence the axis a factor takes depends on the others.

What a reel shares is drawn once per reel: with lots of m units, unit k takes number k // m
of that stream, or a later reel's if one lasts several lots.

Factors are independent.  Where parts are not (parts of a reel track each other, a gain follows a
threshold, a pair is matched), their shares are tied together by `Draws.rank` when they become
part values, so that rankings can still take every factor for itself.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tolsim.design import Study, Trim
from tolsim.errors import Mistake
from tolsim.laws import Law
from tolsim.laws.reading import read_law
from tolsim.parts import Capacitor, Part
from tolsim.spread.dependence import Match, Tie, correlation_matrix
from tolsim.spread.matching import bin_widths
from tolsim.spread.needs import need_factors
from tolsim.spread.streams import RANDOM, Scheme, shares
from tolsim.spread.table import ASPECTS, FOLLOWING, Aspect, SpreadTable, correlations

CONDITION_UNITS: Mapping[str, str] = {"ambient": "degC", "supply": "1", "age": "h"}
"""What a condition may leave to chance, with its unit of measure."""

TRIM_ERRORS: Mapping[str, Aspect] = {
    "meter gain": "lot",
    "meter offset": "lot",
    "meter noise": "tolerance",
    "setting error": "tolerance",
}
"""What a trim may leave to chance; a meter's gain and offset are shared by a lot of units."""


@dataclass(frozen=True)
class Factor:
    """One independent random input of a study.

    Attributes
    ----------
    name : str
        "C1.capacitance tolerance", "reel tank-C: capacitance lot shift", "ambient".
    law : Law
        Law of its value.
    part, quantity : str
        Part (piece "C1#2" of a bank, or the reel of a shared factor) and quantity it acts
        on; empty for conditions.
    aspect : str
        "tolerance", "lot", "temperature", "ageing" or "condition".
    table : str
        Name of the spread table its law comes from; the condition, for conditions; empty for
        trims.
    every : int
        Successive units that share one draw: 1, or the units built from one reel.
    tie : Tie or None
        Other factors its part follows besides.
    match : Match or None
        The factor in whose bin its part lies.
    scheme : Scheme
        How its shares are drawn.
    """

    name: str
    law: Law
    part: str
    quantity: str
    aspect: Aspect
    table: str
    every: int = 1
    tie: Tie | None = None
    match: Match | None = None
    scheme: Scheme = RANDOM


@dataclass(frozen=True)
class Draws:
    """Draws of `count` units, from unit `first` on.

    Attributes
    ----------
    factors : tuple of Factor
        The k columns.
    first : int
        Number of the unit in the first row.
    u : ndarray (count, k)
        Shares in the open interval (0, 1), uniform and independent.
    values : ndarray (count, k)
        The same draws as values: law.ppf(u).
    moved : mapping of str to ndarray (count,)
        Address of every trimmed quantity to the factor by which the operator moved it.
    """

    factors: tuple[Factor, ...]
    first: int
    u: NDArray[np.float64]
    values: NDArray[np.float64]
    moved: Mapping[str, NDArray[np.float64]] = field(default_factory=dict)

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the columns."""
        return tuple(factor.name for factor in self.factors)

    @property
    def count(self) -> int:
        """Number of units."""
        return len(self.u)

    @cached_property
    def column(self) -> Mapping[str, int]:
        """Column of each factor, by name."""
        return {factor.name: index for index, factor in enumerate(self.factors)}

    @cached_property
    def _ranks(self) -> dict[str, NDArray[np.float64]]:
        """Shares after ties and matches, of the factors asked for so far."""
        return {}

    def rank(self, name: str) -> NDArray[np.float64]:
        """Share of the law below what a part has, (count,): its own draw, tied and matched."""
        factor, own = self.factors[self.column[name]], self.u[:, self.column[name]]
        if factor.tie is None and factor.match is None:
            return own
        if name not in self._ranks:
            if factor.tie is not None:
                own = factor.tie.rank(own, [self.rank(leader) for leader, _ in factor.tie.leaders])
            if factor.match is not None:
                own = factor.match.rank(own, self.rank(factor.match.mate), factor.law)
            self._ranks[name] = own
        return self._ranks[name]

    def of(self, name: str, law: Law) -> NDArray[np.float64]:
        """Value of a factor in every unit, (count,), under the law of a state or condition."""
        factor = self.factors[self.column[name]]
        if factor.law == law and factor.tie is None and factor.match is None:
            return self.values[:, self.column[name]]
        return law.ppf(self.rank(name))

    def rows(self, begin: int, count: int) -> Draws:
        """Draws of `count` of the units, from row `begin` on."""
        chosen = slice(begin, begin + count)
        moved = {address: factor[chosen] for address, factor in self.moved.items()}
        return Draws(self.factors, self.first + begin, self.u[chosen], self.values[chosen], moved)


def factor_name(
    part: str, quantity: str, what: str, reel: str | None, piece: int | None = None
) -> str:
    """Name of a factor: by its part, its piece of a bank, or the reel that shares it."""
    if reel is not None:
        return f"reel {reel}: {quantity} {what}"
    address = part if piece is None else f"{part}#{piece}"
    return f"{address}.{quantity} {what}"


def aspect_words(table: SpreadTable, quantity: str, aspect: str) -> str:
    """Words for an aspect in the name of a factor."""
    spread = table.quantities[quantity]
    if aspect == "temperature" and spread.temperature:
        return spread.temperature.WHAT
    if aspect == "ageing" and spread.ageing:
        return spread.ageing.WHAT
    return {"tolerance": "tolerance", "lot": "lot shift", "meter": "meter error"}[aspect]


def reel_of(reel: str | None, table: SpreadTable, quantity: str, aspect: str) -> str | None:
    """Reel whose parts share the draw of this aspect, if any."""
    return reel if is_shared(table, quantity, aspect) and aspect != "meter" else None


def is_shared(table: SpreadTable, quantity: str, aspect: str) -> bool:
    """True if this aspect belongs to a reel or a meter, not to a single part."""
    return aspect in ("lot", "meter") or aspect in table.quantities[quantity].shared


def factors(study: Study, tables: Mapping[str, SpreadTable]) -> tuple[Factor, ...]:
    """All factors of a study in the order of its parts, rails and conditions.

    A part whose table differs between load states has one factor for all of them: a unit
    keeps its rank, and each state's own law turns the rank into a value.  Conditions share
    one factor per quantity in the same way.
    """
    found: dict[str, Factor] = {}
    sources = (*_of_parts(study, tables), *_of_conditions(study), *_of_trims(study))
    for factor in (*sources, *(Factor(*one) for one in need_factors(study))):
        found.setdefault(factor.name, factor)
    method = study.run.sampling
    if method == "random":
        return tuple(found.values())
    axes = len(found)
    return tuple(
        replace(factor, scheme=Scheme(method, axis, axes))
        for axis, factor in enumerate(found.values())
    )


def tables_of(study: Study, reference: str) -> Iterator[str]:
    """Names of the tables a part or rail follows: its own, then those of the load states."""
    part = study.design.parts.get(reference) or study.design.rails[reference]
    own = [part.spread] if part.spread else []
    yield from dict.fromkeys(
        own
        + [state.spread[reference] for state in study.states.values() if reference in state.spread]
    )


def _of_parts(study: Study, tables: Mapping[str, SpreadTable]) -> Iterator[Factor]:
    for reference, part in {**study.design.parts, **study.design.rails}.items():
        pieces = part.pieces if isinstance(part, Capacitor) else 1
        reel = getattr(part, "reel", None)
        every = study.lots.units_of(reel or reference) if study.lots else 1
        for name in tables_of(study, reference):
            found = _of_table(tables[name], reference, reel, pieces, every)
            if isinstance(part, Part) and part.match:
                yield from _matched(part, tables[name], found, reference)
            else:
                yield from found


def _of_table(
    table: SpreadTable, part: str, reel: str | None, pieces: int, every: int
) -> Iterator[Factor]:
    """Factors one table makes for one part, `every` units of which come from one reel."""
    for quantity, spread in table.quantities.items():
        for aspect in ASPECTS:
            law = spread.drawn(aspect)
            if law is None or aspect == "meter":  # an unknown constant is no scatter of units
                continue
            words = aspect_words(table, quantity, aspect)
            shared_by = reel_of(reel, table, quantity, aspect)
            tracking = spread.tracking.get(aspect)
            tie = quantities_tie(table, part, quantity, aspect, shared_by)
            if reel is not None and tracking is not None:
                whole = factor_name(part, quantity, words, reel)
                yield Factor(whole, law, reel, quantity, aspect, table.name, every)
                tie = Tie.to_reel(whole, tracking)
            scattered = aspect == "tolerance" and quantity == "capacitance" and pieces > 1
            for piece in range(1, pieces + 1) if scattered else (None,):
                own = table.owner(part, aspect)
                owner = own if piece is None else f"{part}#{piece}"
                yield Factor(
                    factor_name(own, quantity, words, shared_by, piece),
                    law,
                    shared_by or owner,
                    quantity,
                    aspect,
                    table.name,
                    every if is_shared(table, quantity, aspect) else 1,
                    tie,
                )


def quantities_tie(
    table: SpreadTable, part: str, quantity: str, aspect: str, reel: str | None
) -> Tie | None:
    """Tie of one aspect to those quantities of the same part that stand before it in the table."""
    pairs = correlations(table.quantities)
    drawn = [q for q, s in table.quantities.items() if s.drawn(aspect) is not None]
    before = drawn[: drawn.index(quantity)]
    if aspect not in FOLLOWING or not pairs or not before:
        return None
    matrix = correlation_matrix([*before, quantity], pairs)
    wanted = matrix[-1, :-1]
    if not wanted.any():
        return None
    names = [factor_name(part, q, aspect_words(table, q, aspect), reel) for q in before]
    return Tie.to_quantities(names, matrix[:-1, :-1], wanted)


def _matched(
    part: Part, table: SpreadTable, factors: Iterator[Factor], reference: str
) -> Iterator[Factor]:
    """The factors of a part, those of matched quantities with their bins."""
    widths = bin_widths(part, table)
    for factor in factors:
        if factor.aspect != "tolerance" or factor.quantity not in widths:
            yield factor
            continue
        mate = f"{part.matched_with}{factor.name.removeprefix(reference)}"
        yield replace(factor, match=Match(mate, widths[factor.quantity]))


def _of_conditions(study: Study) -> Iterator[Factor]:
    for name, condition in study.conditions.items():
        for quantity, unit in CONDITION_UNITS.items():
            given = getattr(condition, quantity)
            if isinstance(given, Mapping):
                yield Factor(quantity, condition_law(given, unit), "", quantity, "condition", name)


def trim_factor(trim: str, error: str) -> str:
    """Name of a factor of a trim; errors are those of `TRIM_ERRORS`."""
    return f"trim {trim}: {error}"


def _of_trims(study: Study) -> Iterator[Factor]:
    for name, trim in study.trims.items():
        for error, law in trim_laws(trim).items():
            aspect = TRIM_ERRORS[error]
            every = study.lots.units_per_lot if study.lots and aspect == "lot" else 1
            yield Factor(trim_factor(name, error), law, name, error, aspect, "", every)


def trim_laws(trim: Trim) -> dict[str, Law]:
    """Laws of the errors of a trim that are left to chance."""
    stated = {error: _stated(trim, error) for error in TRIM_ERRORS}
    return {
        error: condition_law(given, trim_unit(trim, error))
        for error, given in stated.items()
        if isinstance(given, Mapping)
    }


def _stated(trim: Trim, error: str) -> Any:  # noqa: ANN401 - a law or a number
    """What the study says of an error of a trim."""
    owner = trim.meter if error.startswith("meter") else trim
    return getattr(owner, error.removeprefix("meter ").replace(" ", "_"))


def trim_unit(trim: Trim, error: str) -> str:
    """Unit of measure of an error of a trim."""
    if error == "setting error":
        return trim.unit_of_measure
    return "1" if error == "meter gain" else trim.reading_unit


def trim_error(study: Study, draws: Draws, trim: str, error: str) -> NDArray[np.float64]:
    """One error of a trim in every drawn unit, (count,): a draw, or the number the study gives."""
    column = draws.column.get(trim_factor(trim, error))
    if column is not None:
        return draws.values[:, column]
    return np.full(draws.count, float(_stated(study.trims[trim], error)))


def condition_law(given: Mapping[str, object], unit: str) -> Law:
    """Law a condition states; raises the first `Mistake` in it."""
    mistakes: list[Mistake] = []
    law = read_law(given, unit, mistakes.append)
    if law is None:
        raise mistakes[0]
    return law


def draw(factors: Sequence[Factor], seed: int, first: int, count: int) -> Draws:
    """Draw `count` units from unit `first` on.

    Parameters
    ----------
    factors : sequence of Factor
        As `factors` returns them.
    seed : int
        Seed of the study.
    first, count : int
        Range of units.

    Returns
    -------
    Draws
    """
    u = np.empty((len(factors), count)).T  # columns are contiguous
    values = np.empty((len(factors), count)).T
    for column, factor in enumerate(factors):
        u[:, column] = _shares(factor, seed, first, count)
        values[:, column] = factor.law.ppf(u[:, column])
    return Draws(tuple(factors), first, u, values)


def draw_chosen(factors: Sequence[Factor], seed: int, numbers: NDArray[np.intp]) -> Draws:
    """Draw some units that need not follow each other; `first` is the lowest of them."""
    each = [draw(factors, seed, int(number), 1) for number in numbers]
    return Draws(
        tuple(factors),
        int(np.min(numbers)),
        np.concatenate([one.u for one in each]),
        np.concatenate([one.values for one in each]),
    )


def _shares(factor: Factor, seed: int, first: int, count: int) -> NDArray[np.float64]:
    """Shares of units `first` ... `first + count - 1`, in the open interval (0, 1)."""
    turn = np.arange(first, first + count) // factor.every
    if not count:
        return np.empty(0)
    low, high = int(turn[0]), int(turn[-1])
    return shares(factor.scheme, seed, factor.name, low, high - low + 1)[turn - low]
