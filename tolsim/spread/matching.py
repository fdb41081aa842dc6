"""Parts picked to go with another one: what a study asks of a pair, and whether it can be had.

    [parts.Q2]
    matched_with = "Q1"
    match = {threshold = "50 mV"}        # both from one bin of this width

A pair is sorted at goods-in, before temperature and age, from one reel: matching acts on the
scatter within the lot.
"""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping

from tolsim.design import Rail, Study
from tolsim.errors import Mistake, Problem, nearest_name
from tolsim.parts import AnyPart, Capacitor, Mosfet, Part
from tolsim.quantity import read
from tolsim.spread.datasheet import device_parameters, threshold_window
from tolsim.spread.entry import UNITS
from tolsim.spread.table import QuantitySpread, SpreadTable


def bin_widths(part: Part, table: SpreadTable) -> dict[str, float]:
    """Width of the bin of each matched quantity, in the numbers of its tolerance law.

    Raises
    ------
    Mistake
        With the first width that cannot be read, or that has no scatter to act on.
    """
    widths = {}
    for quantity, text in (part.match or {}).items():
        spread = table.quantities.get(quantity)
        if spread is None or spread.tolerance is None:
            spreading = [q for q, s in table.quantities.items() if s.tolerance is not None]
            near = nearest_name(quantity, spreading)
            want = "a quantity that scatters within the lot: " + ", ".join(spreading)
            raise Mistake(want, key=f"match.{quantity}", got=f'"{quantity}"', nearest=near)
        widths[quantity] = _width(part, quantity, text, spread)
    return widths


def _width(part: Part, quantity: str, text: object, spread: QuantitySpread) -> float:
    """One width, in the numbers of the law."""
    key, unit = f"match.{quantity}", UNITS.get(quantity, "1")
    if not isinstance(text, str):
        raise Mistake(f"a width with its unit of measure, {unit} or %", key=key, got=f"{text!r}")
    try:
        if text.strip().endswith("%") and unit != "1":
            value = read(text, "1") * abs(_nominal(part, quantity, spread))
        else:
            value = read(text, unit)
    except Mistake as mistake:
        raise Mistake(mistake.expected, mistake.cure, key=key, got=f'"{text}"') from None
    if not value > 0.0:
        raise Mistake("a width above 0", key=key, got=f'"{text}"')
    if spread.deviation == "absolute":
        return value
    if spread.deviation == "position" and isinstance(part, Mosfet):
        window = threshold_window(part, spread.implied_half_window)
        return value / max(window.maximum - window.typical, window.typical - window.minimum)
    return value / abs(_nominal(part, quantity, spread))


def _nominal(part: Part, quantity: str, spread: QuantitySpread) -> float:
    """Nominal value that deviations are relative to."""
    if isinstance(part, Mosfet):
        own = getattr(device_parameters(part), quantity, 1.0)
    else:
        own = getattr(part, quantity, None)
    if spread.deviation == "relative" and not isinstance(own, float):
        want = "a quantity that the part states by itself"
        raise Mistake(want, key=f"match.{quantity}", got=f'"{quantity}"')
    return float(own or 1.0)


def matching_problems(
    study: Study, tables: Mapping[str, SpreadTable], file: str, unread: Collection[str] = ()
) -> Iterator[Problem]:
    """Pairs that cannot be had: other parts, other reels, quantities without scatter.

    Of pairs with parts that are `unread`, for mistakes of their own, nothing is said.
    """
    for reference, part in study.design.parts.items():
        if part.matched_with is None and part.match is None:
            continue
        if part.matched_with in unread:
            continue
        place = f"parts.{reference}"
        for mistake in _of_pair(study, tables, reference, part):
            yield Problem.of(mistake, file, place)


def _of_pair(
    study: Study, tables: Mapping[str, SpreadTable], reference: str, part: AnyPart
) -> Iterator[Mistake]:
    """Mistakes of one pair; the first that makes the rest meaningless ends the list."""
    if part.matched_with is None or not part.match:
        key, other = ("match", "matched_with") if part.match is None else ("matched_with", "match")
        want = f"both matched_with and match, as in {other} of the same part"
        yield Mistake(want, key=key, got="nothing")
        return
    alike = [
        name
        for name, other in study.design.parts.items()
        if other.kind == part.kind and name != reference
    ]
    if part.matched_with not in alike:
        near = nearest_name(part.matched_with, alike)
        want = f"another {part.kind} of this study"
        yield Mistake(want, key="matched_with", got=f'"{part.matched_with}"', nearest=near)
        return
    mate = study.design.parts[part.matched_with]
    if mate.matched_with is not None:
        cure = f'Write matched_with = "{mate.matched_with}".'
        got = f'"{part.matched_with}", which is matched itself'
        yield Mistake("the first part of the group", cure, key="matched_with", got=got)
    if part.reel is None or part.reel != mate.reel:
        cure = "Pairs are picked from one reel: give both parts the same reel."
        yield Mistake(f'"{mate.reel}"', cure, key="reel", got=f'"{part.reel}"')
    if {part.spread, mate.spread} - tables.keys() - {None}:  # unknown, or with mistakes: told there
        return
    if part.spread is None or part.spread != mate.spread:
        got, want = f'"{part.spread}"', f'"{mate.spread}", as {part.matched_with}'
        yield Mistake(want, key="spread", got=got)
        return
    yield from _of_mates(study, tables[part.spread], reference, part, mate)


def _of_mates(
    study: Study, table: SpreadTable, reference: str, part: AnyPart, mate: AnyPart
) -> Iterator[Mistake]:
    """Mistakes of two parts that follow one table."""
    if any(reference in s.spread or part.matched_with in s.spread for s in study.states.values()):
        yield Mistake("one table in all load states", key="matched_with", got="a table per state")
    if isinstance(part, Capacitor) and max(part.pieces, getattr(mate, "pieces", 1)) > 1:
        yield Mistake("single parts, not banks", key="matched_with", got="pieces in parallel")
    try:
        if bin_widths(part, table) != bin_widths(
            mate.model_copy(update={"match": part.match}), table
        ):
            yield Mistake("parts of the same nominal value", key="matched_with", got="others")
    except Mistake as mistake:
        yield mistake


def pair_words(part: AnyPart | Rail) -> Iterator[tuple[str, str]]:
    """Quantity and words of every match of a part, for the list of inputs."""
    if isinstance(part, Rail) or not part.match:
        return
    for quantity, width in part.match.items():
        yield quantity, f"matched with {part.matched_with}: both from one bin {width} wide"
