"""Spread tables and assumptions in plain sentences, for screens and reports."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import fields

from tolsim.design import Study
from tolsim.laws import Law, LogNormal, Measured, Uniform, Window
from tolsim.parts import Capacitor, Inductor, Mosfet
from tolsim.quantity import show
from tolsim.spread.ageing import AgeingLaw
from tolsim.spread.datasheet import device_parameters, window_assumptions
from tolsim.spread.quantity_words import plain
from tolsim.spread.reading import UNITS
from tolsim.spread.sampling import tables_of
from tolsim.spread.table import ASPECTS, QuantitySpread, SpreadTable
from tolsim.spread.temperature import TemperatureLaw
from tolsim.spread.winding import winding_notes

_LABELS: Mapping[str, str] = {
    "tolerance": "scatter within the lot",
    "lot": "lot shift",
    "temperature": "temperature",
    "ageing": "ageing",
    "meter": "error of the meter, the same for all parts",
}

_PURE = ("exponent", "below", "degrees_of_freedom")  # parameters without unit of measure
FAR_FREQUENCY = 10.0  # a meter further from the frequency of use is worth a sentence


def describe(table: SpreadTable) -> list[str]:
    """Plain sentences about a table: what it is for, each law, its basis and source.

    Parameters
    ----------
    table : SpreadTable

    Returns
    -------
    list of str
        First the title, then one sentence per law; guesses end in "[guess]".
    """
    kinds = ", ".join(table.kinds)
    said = [f"{table.title} (for {kinds}; {table.basis}: {table.source})."]
    for quantity, spread in table.quantities.items():
        for aspect in (*ASPECTS, "follows"):
            if not getattr(spread, aspect):
                continue
            origin = spread.origins[aspect]
            words = f"{plain(quantity)}, {spread_words(table, quantity, aspect)}"
            if (origin.basis, origin.source) != (table.basis, table.source):
                words += f" ({origin.source})"
            said.append(words + ("  [guess]" if origin.basis == "guess" else f"  [{origin.basis}]"))
    return said


def guess_words(table: SpreadTable) -> str:
    """Laws of a table that are guesses: "capacitance (tolerance, lot); series resistance (lot)"."""
    laws: dict[str, list[str]] = {}
    for words in table.guesses:
        name, _, aspect = words.partition(" ")
        laws.setdefault(plain(name), []).append(aspect)
    return "; ".join(f"{name} ({', '.join(aspects)})" for name, aspects in laws.items())


def spread_words(table: SpreadTable, quantity: str, aspect: str) -> str:
    """One law of a table, or what a quantity follows, in words: "tolerance: normal (...)"."""
    spread = table.quantities[quantity]
    if aspect == "follows":
        others = (f"{other} with correlation {rho:g}" for other, rho in spread.follows.items())
        return f"follows {', '.join(others)}"
    words = law_words(getattr(spread, aspect), _unit(quantity, aspect, spread))
    if spread.deviation == "position" and aspect in ("tolerance", "lot", "meter"):
        words += " in half widths of the datasheet window"
    shared = ", shared by a reel" if aspect in spread.shared or aspect == "lot" else ""
    if aspect in spread.tracking:
        shared = f", tracking {spread.tracking[aspect]:g} in a reel"
    return f"{_LABELS[aspect]}: {words}{shared}"


def assumptions(study: Study, tables: Mapping[str, SpreadTable]) -> tuple[str, ...]:
    """What a study leaves open and how it was filled, as sentences.

    Parts without a spread table, rows missing on a datasheet, threshold windows implied,
    losses not given, load states that keep a unit's rank.
    """
    said: list[str] = []
    unspread = [
        reference
        for reference in (*study.design.parts, *study.design.rails)
        if not list(tables_of(study, reference))
    ]
    if unspread:
        said.append("No spread table, every unit has the nominal value: " + ", ".join(unspread))
    for reference in study.design.parts:
        said += [f"{reference}: {words}" for words in _of_part(study, tables, reference)]
    lossless = [
        reference
        for reference, part in study.design.parts.items()
        if isinstance(part, Capacitor) and part.esr is None and part.tan_delta is None
    ]
    if lossless:
        said.append("Neither esr nor tan_delta given, taken as lossless: " + ", ".join(lossless))
    return tuple(dict.fromkeys(said))


def _of_part(study: Study, tables: Mapping[str, SpreadTable], reference: str) -> Iterator[str]:
    """What one part leaves open."""
    part = study.design.parts[reference]
    names = list(tables_of(study, reference))
    if isinstance(part, Mosfet):
        yield from device_parameters(part).assumptions
        for name in names:
            spread = tables[name].quantities.get("threshold")
            if spread is not None and spread.deviation == "position":
                yield from window_assumptions(part, spread.implied_half_window)
    for name in names:
        yield from _measured_elsewhere(study, tables[name])
        yield from _windows(tables[name])
        yield from _seen(tables[name])
    if isinstance(part, Inductor):
        yield from winding_notes(part, study.expected_frequency)
    if len(names) > 1:
        yield (
            f"a unit keeps its rank in every load state; each state's table "
            f"({', '.join(names)}) turns the rank into a value"
        )


def _seen(table: SpreadTable) -> Iterator[str]:
    """What readings look like that a law was made of."""
    for quantity, spread in table.quantities.items():
        for law in (spread.tolerance, spread.lot):
            if isinstance(law, Measured):
                file = law.sample.file
                yield from (f"{plain(quantity)} in {file}: {words}" for words in law.sample.remarks)


def _windows(table: SpreadTable) -> Iterator[str]:
    """Laws taken for windows of sheets, which state limits and no law."""
    for quantity, spread in table.quantities.items():
        for aspect in ("tolerance", "lot"):
            law = getattr(spread, aspect)
            if isinstance(law, Window):
                missing = f"{' and '.join(law.missing)} not on the sheet, " if law.missing else ""
                words = _implied_words(law, _unit(quantity, aspect, spread))
                name = f"{plain(quantity)} of {table.name}"
                yield f"{name}: {missing}window taken as {words}"


def _measured_elsewhere(study: Study, table: SpreadTable) -> Iterator[str]:
    """Readings taken at a frequency far from that of use."""
    if study.expected_frequency is None:
        return
    low, high = study.expected_frequency
    for quantity, spread in table.quantities.items():
        for law in (spread.tolerance, spread.lot):
            at = law.sample.test_frequency if isinstance(law, Measured) else None
            if at is not None and not low / FAR_FREQUENCY <= at <= high * FAR_FREQUENCY:
                use = f"{show(low, 'Hz')} to {show(high, 'Hz')}"
                yield (
                    f"{plain(quantity)} of {table.name} was measured at {show(at, 'Hz')}, used at "
                    f"{use}: what changes with frequency is not in the readings"
                )


def law_words(law: Law | TemperatureLaw | AgeingLaw, unit: str) -> str:
    """A law in words: its name and every parameter that is set, with units of measure."""
    if isinstance(law, Measured):
        return _measured_words(law, unit)
    if isinstance(law, Window):
        return _window_words(law, unit)
    words = []
    for field in fields(law):
        value = getattr(law, field.name)
        if value is None or (isinstance(law, LogNormal) and field.name == "origin"):
            continue
        words.append(f"{field.name.replace('_', ' ')} {_value_words(law, field.name, value, unit)}")
    return f"{law.NAME} ({', '.join(words)})" if words else law.NAME


def _window_words(law: Window, unit: str) -> str:
    """What the sheet says, and the law taken for it."""
    given = ", ".join(
        f"{name} {_number(value, unit)}"
        for name in ("minimum", "typical", "maximum")
        if (value := getattr(law, name)) is not None
    )
    return f"window of the sheet ({given}; taken as {_implied_words(law, unit)})"


def _implied_words(law: Window, unit: str) -> str:
    """The law taken for a window in words."""
    low, _, high = (_number(value, unit) for value in law.whole)
    if isinstance(law.implied, Uniform):
        return f"{low} .. {high}, every value equally likely"
    return f"{low} .. {high}, half of the parts on each side of typical"


def _measured_words(law: Measured, unit: str) -> str:
    """What was measured, what it looked like, and what is expected of the next piece."""
    sample = law.sample
    low, high = law.support
    words = [
        f"measured ({sample.pieces} pieces in {sample.file}",
        f"mean {_number(sample.mean, unit)}",
        f"scatter {_number(sample.sd, unit)}",
    ]
    if sample.noise:
        words.append(f"of which meter noise {_number(sample.noise, unit)}")
    if sample.test_frequency is not None:
        words.append(f"at {show(sample.test_frequency, 'Hz')}")
    text = ", ".join(words) + f"; shape {sample.shape}"
    if math.isfinite(sample.fit_p):
        fitted = "normal" if sample.shape == "as measured" else sample.shape
        text += f", fit to {fitted} p = {sample.fit_p:.2g}"
    text += f"; next piece {_number(low, unit)} .. {_number(high, unit)}"
    text += f", standard deviation {_number(law.sd, unit)}"
    return "; ".join([text, *sample.remarks]) + ")"


def _value_words(law: Law | TemperatureLaw | AgeingLaw, name: str, value: object, unit: str) -> str:
    """One parameter in words."""
    if isinstance(value, Law):
        return law_words(value, {"slope": "1/K", "position": "1", "stretch": "1"}.get(name, unit))
    if isinstance(value, str):
        return value
    if isinstance(value, tuple):
        rows = (
            f"{row[0]:g} degC " + " .. ".join(_number(change, "share") for change in row[1:])
            for row in value
        )
        return "; ".join(rows)
    if name in ("exponent", "below", "degrees_of_freedom") or (
        law.NAME == "lognormal" and name == "sigma"
    ):
        return f"{value:g}"
    own = "h" if isinstance(law, AgeingLaw) else "degC" if isinstance(law, TemperatureLaw) else unit
    return _number(float(str(value)), own)


def _number(value: float, unit: str) -> str:
    if unit == "share":
        return f"{100.0 * value:.4g} %"
    if unit == "1/K":
        return f"{1e6 * value:.4g} ppm/K"
    if unit == "h":
        return f"{value:.6g} h"
    return show(value, unit)


def _unit(quantity: str, aspect: str, spread: QuantitySpread) -> str:
    """Unit of measure in which the numbers of a law are shown."""
    if aspect in ("temperature", "ageing") or spread.deviation == "relative":
        return "share"
    if spread.deviation == "position" or quantity == "turns":
        return "1"
    return UNITS.get(quantity, "share")
