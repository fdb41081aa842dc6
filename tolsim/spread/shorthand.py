"""What a marking or a datasheet says, rewritten as the parameters of a law.

- `"J"` or `{law = ..., letter = "J", ...}`: limits of a tolerance letter (IEC 60062), in per
  cent for relative deviations, in picofarads for absolute ones of capacitors;
- `{law = "window", typical = "7370 pF", maximum = "9600 pF"}`: values of a sheet, as deviations
  from typical.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping
from itertools import pairwise
from typing import Final

from tolsim import quantity
from tolsim.errors import Mistake
from tolsim.laws.reading import Report
from tolsim.spread.codes import tolerance_letter

_WINDOW: Final = ("minimum", "typical", "maximum")
_SMALL: Final = 1e-12  # F, a capacitor whose letters mean picofarads
_LARGE: Final = 1e-9


def without_letter(
    words: object, kinds: Collection[str], quantity_name: str, deviation: str, report: Report
) -> object:
    """`words` with limits in place of a tolerance letter; None if a mistake was reported.

    Parameters
    ----------
    words : anything
        What the table says of a tolerance or a lot.
    kinds : collection of str
        Kinds of part the table is for: letters of capacitors and resistors differ.
    quantity_name, deviation : str
        Quantity, and whether its deviations are "relative" or "absolute".
    report : callable
        Called with every mistake.
    """
    if isinstance(words, str) and len(words.strip()) == 1 and words.strip().isalpha():
        words = {"law": "uniform", "letter": words.strip()}
    if not isinstance(words, Mapping) or "letter" not in words:
        return words
    rest = {key: value for key, value in words.items() if key != "letter"}
    try:
        return {**rest, **_limits(str(words["letter"]), rest, kinds, quantity_name, deviation)}
    except Mistake as mistake:
        report(Mistake(mistake.expected, mistake.cure, "letter", mistake.got))
        return None


def _limits(
    letter: str,
    rest: Collection[str],
    kinds: Collection[str],
    quantity_name: str,
    deviation: str,
) -> dict[str, object]:
    """Limits a letter means, as a table would write them."""
    twice = [key for key in ("low", "high", "half_width") if key in rest]
    if twice:
        raise Mistake("either a letter or limits", "Drop one.", got=f"{twice[0]} too")
    if quantity_name not in ("capacitance", "resistance", "inductance"):
        cure = "Letters tell the tolerance of capacitance, resistance or inductance."
        raise Mistake("limits in numbers", cure, got=f"a letter for {quantity_name}")
    capacitance = None
    if "capacitor" in kinds:
        capacitance = _SMALL if deviation == "absolute" else _LARGE
    elif deviation == "absolute":
        cure = "Letters of other parts than capacitors mean per cent."
        raise Mistake("relative deviations with a letter", cure, got="absolute ones")
    limits = tolerance_letter(letter, capacitance)
    unit = " F" if limits.absolute else ""
    ends = {"low": limits.low, "high": limits.high}
    return {key: f"{end:.6g}{unit}" for key, end in ends.items()}


def as_deviations(
    words: Mapping[str, object], unit: str, report: Report
) -> Mapping[str, object] | None:
    """A window in the unit of measure of its quantity as relative deviations.

    They are taken from `typical`, else from `nominal`, else from the middle of the limits.  A
    window already written in per cent is left as it is.  None if a mistake was reported.
    """
    given = {key: words[key] for key in _WINDOW if isinstance(words.get(key), str)}
    if unit == "1" or not any(_reads(str(value), unit) for value in given.values()):
        return words
    values: dict[str, float] = {}
    sound = True
    for key, value in {**given, **{k: words[k] for k in ("nominal",) if k in words}}.items():
        try:
            values[key] = quantity.read(str(value), unit)
        except Mistake as mistake:
            cure = mistake.cure or "Write all values of a window in the same way."
            report(Mistake(mistake.expected, cure, key, f'"{value}"'))
            sound = False
    stated = [key for key in _WINDOW if key in values]
    for lower, upper in pairwise(stated):
        if values[lower] > values[upper]:
            expected = f"a value above {lower} = {words[lower]}"
            report(Mistake(expected, key=upper, got=f'"{words[upper]}"'))
            sound = False
    if not sound:
        return None
    ends = [values[key] for key in ("minimum", "maximum") if key in values]
    middle = sum(ends) / len(ends) if len(ends) == len(_WINDOW) - 1 else None
    nominal = values.get("nominal", values.get("typical", middle))
    if nominal is None or not nominal > 0.0:
        cure = f'Say what the limit is a limit of: typical = "100 {unit}".'
        report(Mistake("a typical or nominal value", cure, "typical", "nothing"))
        return None
    rest = {key: value for key, value in words.items() if key not in (*_WINDOW, "nominal")}
    return {**rest, **{key: values[key] / nominal - 1.0 for key in _WINDOW if key in values}}


def _reads(text: str, unit: str) -> bool:
    try:
        quantity.read(text, unit)
    except Mistake:
        return False
    return True
