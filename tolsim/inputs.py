"""Every input of a study with its law, its basis and its source, in plain words."""

from __future__ import annotations

from collections.abc import Iterator, Mapping

from tolsim.design import Rail, Study
from tolsim.parts import AnyPart, Inductor, Mosfet
from tolsim.quantity import show, typeset
from tolsim.report import InputRow
from tolsim.spread.datasheet import device_parameters
from tolsim.spread.entry import UNITS
from tolsim.spread.matching import pair_words
from tolsim.spread.quantity_words import plain
from tolsim.spread.sampling import tables_of, trim_laws, trim_unit
from tolsim.spread.table import ASPECTS, SpreadTable
from tolsim.spread.winding import shape_of
from tolsim.spread.words import law_words, spread_words


def input_rows(study: Study, tables: Mapping[str, SpreadTable]) -> Iterator[InputRow]:
    """One row per law (or one for all parts without spread): its parts, basis and source."""
    alike: dict[tuple[str, ...], dict[str, list[str]]] = {}
    for row in (*_single_rows(study, tables), *_trim_rows(study)):
        key = (row.quantity, row.law, row.table, row.basis, row.source)
        alike.setdefault(key, {}).setdefault(row.nominal, []).append(row.part)
    for (quantity, law, table, basis, source), nominals in alike.items():
        parts = ", ".join(ref for refs in nominals.values() for ref in refs)
        nominal = next(iter(nominals))
        if len(nominals) > 1:
            given = {value: refs for value, refs in nominals.items() if value}
            nominal = "; ".join(f"{', '.join(refs)}: {value}" for value, refs in given.items())
        yield InputRow(parts, quantity, nominal, law, table, basis, source)


def _single_rows(study: Study, tables: Mapping[str, SpreadTable]) -> Iterator[InputRow]:
    for ref, part in {**study.design.parts, **study.design.rails}.items():
        names = list(tables_of(study, ref))
        if not names:
            source = part.source or ""
            basis = getattr(part, "confidence", None) or ""
            yield InputRow(ref, "all values", "", "no spread", "", basis, source)
        for name in names:
            table = tables[name]
            for quantity, spread in table.quantities.items():
                nominal = _nominal(part, quantity)
                for aspect in (*ASPECTS, "follows"):
                    if not getattr(spread, aspect):
                        continue
                    origin = spread.origins[aspect]
                    words = spread_words(table, quantity, aspect)
                    yield InputRow(
                        ref,
                        plain(quantity),
                        nominal,
                        typeset(words),
                        name,
                        origin.basis,
                        origin.source,
                    )
        for quantity, words in pair_words(part):
            yield InputRow(ref, plain(quantity), "", words, "", "", "asked for by the study")


def _nominal(part: AnyPart | Rail, quantity: str) -> str:
    """Nominal value of a quantity with its unit of measure; empty if it has none of its own."""
    value = getattr(part, quantity, None)
    if isinstance(part, Inductor):
        value = shape_of(part).get(quantity, value)
    if isinstance(part, Mosfet):
        value = getattr(device_parameters(part), quantity, value)
    return typeset(show(value, UNITS.get(quantity, "1"))) if isinstance(value, float) else ""


def _trim_rows(study: Study) -> Iterator[InputRow]:
    """Laws of what goes wrong when parts are trimmed."""
    for name, trim in study.trims.items():
        laws = trim_laws(trim)
        target = show(trim.target, trim.reading_unit)
        basis, source = trim.confidence or "", trim.source or ""
        if not laws:
            yield InputRow(f"trim {name}", "operator", target, "no error", "", basis, source)
        for error, law in laws.items():
            words = law_words(law, trim_unit(trim, error))
            yield InputRow(f"trim {name}", error, target, typeset(words), "", basis, source)
