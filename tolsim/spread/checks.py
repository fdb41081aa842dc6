"""Can every law of a study be drawn for its parts?  Every mistake at once.

That the tables named exist and fit the kind of part is checked before (`tolsim.study.checks`).
"""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping

from tolsim.design import Study
from tolsim.errors import Mistake, Problem
from tolsim.parts import Inductor, Mosfet
from tolsim.spread.datasheet import device_parameters
from tolsim.spread.matching import matching_problems
from tolsim.spread.reading import UNITS
from tolsim.spread.sampling import tables_of
from tolsim.spread.table import QuantitySpread, SpreadTable
from tolsim.spread.winding import shape_of


def check_spread(
    study: Study,
    tables: Mapping[str, SpreadTable],
    file: str,
    unread: Collection[str] = (),
) -> list[Problem]:
    """Mistakes in how a study uses spread tables, reels and datasheet rows.

    Parameters
    ----------
    study : Study
        What could be read of it; its spread tables exist, or their absence is told elsewhere.
    tables : mapping
        All sound tables the study can name.
    file : str
        Name of the study file, for the messages.
    unread : collection of str
        Parts with mistakes of their own, which are not in `study`.

    Returns
    -------
    list of Problem
        Empty if all is well.
    """
    return [
        *_datasheets(study, file),
        *_reels(study, tables, file),
        *_reach(study, tables, file),
        *_shapes(study, tables, file),
        *matching_problems(study, tables, file, unread),
    ]


def _datasheets(study: Study, file: str) -> Iterator[Problem]:
    """Every MOSFET's rows can be turned into model parameters."""
    for reference, part in study.design.parts.items():
        if isinstance(part, Mosfet):
            try:
                device_parameters(part)
            except Mistake as mistake:
                yield _problem(mistake, file, f"parts.{reference}.sheet", mistake.key)


def _problem(mistake: Mistake, file: str, table: str, key: str) -> Problem:
    return Problem(file, table, key, mistake.got, mistake.expected, mistake.nearest, mistake.cure)


def _reels(study: Study, tables: Mapping[str, SpreadTable], file: str) -> Iterator[Problem]:
    """Parts of one reel are the same purchase, so they follow the same table."""
    first: dict[str, tuple[str, str | None]] = {}
    for reference, part in study.design.parts.items():
        if part.reel is None:
            continue
        other, table = first.setdefault(part.reel, (reference, part.spread))
        unknown = {part.spread, table} - tables.keys() - {None}  # which is told elsewhere
        if part.spread != table and not unknown:
            yield Problem(
                file,
                f"parts.{reference}",
                "spread",
                f'"{part.spread}"',
                f'"{table}", as {other} of the same reel "{part.reel}"',
                cure="Parts of one reel share a lot shift; give other parts another reel.",
            )


def _shapes(study: Study, tables: Mapping[str, SpreadTable], file: str) -> Iterator[Problem]:
    """A law on the shape of a winding needs a part whose shape is given."""
    for reference, part in study.design.parts.items():
        if not isinstance(part, Inductor):
            continue
        known = shape_of(part)
        for name in filter(tables.__contains__, tables_of(study, reference)):
            laws = [quantity for quantity in part.SHAPE if quantity in tables[name].quantities]
            missing = [quantity for quantity in laws if quantity not in known]
            if missing:
                yield Problem(
                    file,
                    f"parts.{reference}",
                    "spread",
                    f"{name} with laws for {', '.join(missing)}",
                    "a part that states " + ", ".join(missing),
                    cure="Give coil (with wire) or core, or take a table with an inductance law.",
                )


def _reach(study: Study, tables: Mapping[str, SpreadTable], file: str) -> Iterator[Problem]:
    """No spread may make a value negative, or couple two coils fully."""
    for reference in study.design.parts:
        for name in filter(tables.__contains__, tables_of(study, reference)):
            for quantity, spread in tables[name].quantities.items():
                for value in _nominals(study, reference, quantity):
                    low, high = _ends(spread, value)
                    if quantity in UNITS and quantity != "low" and low < 0.0 < value:
                        got = f"{name} reaching {low:.3g} {UNITS[quantity]}"
                        yield Problem(
                            file, f"parts.{reference}", "spread", got, f"a {quantity} above 0"
                        )
                    if quantity == "coupling" and max(abs(low), abs(high)) >= 1.0:
                        got = f"{name} reaching {max(abs(low), abs(high)):.3g}"
                        yield Problem(
                            file, f"parts.{reference}", "spread", got, "a coupling below 1"
                        )


def _nominals(study: Study, reference: str, quantity: str) -> Iterator[float]:
    """The nominal value of a quantity, and those the load states put in its place."""
    part = study.design.parts[reference]
    shape = shape_of(part) if isinstance(part, Inductor) else {}
    own = shape.get(quantity, getattr(part, quantity, None))
    if isinstance(own, float):
        yield own
    for state in study.states.values():
        if f"{reference}.{quantity}" in state.values:
            yield state.values[f"{reference}.{quantity}"]


def _ends(spread: QuantitySpread, nominal: float) -> tuple[float, float]:
    """Lowest and highest value that lot shift and tolerance allow."""
    laws = [law for law in (spread.lot, spread.tolerance, spread.meter) if law is not None]
    low = sum(law.support[0] for law in laws)
    high = sum(law.support[1] for law in laws)
    if spread.deviation == "absolute":
        return nominal + low, nominal + high
    return nominal * (1.0 + low), nominal * (1.0 + high)
