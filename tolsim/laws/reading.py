"""A law as tables write it, `{law = "uniform", half_width = "5 %"}`, to a `Law`.

Every mistake is reported, not only the first, so that one look at the file cures it.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import MISSING, fields
from typing import Any, Final

from tolsim import quantity
from tolsim.errors import Mistake, nearest_name
from tolsim.laws import LAWS, Fixed, Law, LogNormal, SortedOut, Window

IMPLIED_HALF_WIDTH: Final = 0.3
"""Of typical, where a sheet gives one value only: maxima often lie 30 % above typical ones."""

Report = Callable[[Mistake], None]

_WIDTHS: Final = frozenset({"sigma", "half_width", "removed", "scale", "implied_half_width"})
_PURE: Final = frozenset({"below", "degrees_of_freedom"})
_HALF_WIDTH_HELP: Final = 'Give low and high, or half_width: {law = "uniform", half_width = "5 %"}.'


def read_law(
    given: object, unit: str, report: Report, *, relative: bool = False, also: Sequence[str] = ()
) -> Law | None:
    """Law that a table or study states.

    Parameters
    ----------
    given : mapping, text or number
        `{law = NAME, ...}`; a lone value means a `Fixed` law.
    unit : str
        Unit of measure of the values, as `quantity.read` takes it ("1", "1/K", "V", "degC").
        Bare numbers are allowed for "1" only.
    report : callable
        Called with every `Mistake` found; its key names the parameter.
    relative : bool
        True for relative deviations: a lognormal law then describes the factor 1 + x.
    also : sequence of str
        Names of laws that would be right here too, but are read elsewhere.

    Returns
    -------
    Law or None
        None if a mistake was reported.
    """
    if not isinstance(given, Mapping):
        value = _number(given, unit, "value", report)
        return None if value is None else Fixed(value)
    name = given.get("law")
    kind = LAWS.get(name) if isinstance(name, str) else None
    if kind is None:
        report(
            Mistake(
                "one of " + ", ".join((*LAWS, *also)),
                key="law",
                got=f'"{name}"' if name is not None else "nothing",
                nearest=nearest_name(str(name), [*LAWS, *also]),
            )
        )
        return None
    words = {key: value for key, value in given.items() if key != "law"}
    if kind is LogNormal and relative:
        words = {"median": 0.0, "origin": -1.0, **words}
    if kind is Window and relative:
        words = {"implied_half_width": IMPLIED_HALF_WIDTH, **words}
        if len({"minimum", "maximum"} & words.keys()) == 1:
            words.setdefault("typical", 0.0)  # what the limit is a limit of: the nominal value
    return _build(kind, words, unit, report, relative=relative)


def _build(
    kind: type[Law], words: Mapping[str, object], unit: str, report: Report, *, relative: bool
) -> Law | None:
    """Make a law of class `kind` from its parameters as written."""
    valid = [field.name for field in fields(kind)]
    shorthand = ["half_width"] if {"low", "high"} <= set(valid) and kind is not LogNormal else []
    shorthand += ["removed"] if kind is SortedOut else []
    read: dict[str, Any] = {}
    sound = True
    for key, value in words.items():
        if key not in (*valid, *shorthand):
            report(
                Mistake(
                    f"a parameter of the {kind.NAME} law: " + ", ".join((*valid, *shorthand)),
                    key=key,
                    got=f'"{key}"',
                    nearest=nearest_name(key, [*valid, *shorthand]),
                )
            )
            sound = False
        elif key == "whole":
            read[key] = read_law(value, unit, under(key, report), relative=relative)
        else:
            read[key] = _number(value, _unit_of(kind, key, unit), key, report)
    parameters = _without_shorthand(read)
    for field in fields(kind) if sound else ():  # a misspelt name is not missing as well
        if field.default is MISSING and field.name not in parameters:
            cure = _HALF_WIDTH_HELP if field.name in ("low", "high") else ""
            expected = f"a value (the {kind.NAME} law needs it)"
            report(Mistake(expected, cure, key=field.name, got="nothing"))
            sound = False
    if not sound or None in parameters.values():
        return None
    try:
        return kind(**parameters)
    except Mistake as mistake:
        report(mistake)
        return None


def _without_shorthand(read: Mapping[str, Any]) -> dict[str, Any]:
    """Limits in place of half widths, which are meant about zero."""
    parameters = dict(read)
    if "half_width" in parameters:
        parameters = {**_either_side(parameters.pop("half_width"), "low", "high"), **parameters}
    if "removed" in parameters:
        ends = _either_side(parameters.pop("removed"), "removed_low", "removed_high")
        parameters = {**ends, **parameters}
    return parameters


def _either_side(half: float | None, low: str, high: str) -> dict[str, float | None]:
    """Limits a half width means; None, already reported, stays None."""
    return {low: None, high: None} if half is None else {low: -half, high: half}


def _unit_of(kind: type[Law], key: str, unit: str) -> str:
    """Unit of measure of one parameter: widths of temperatures are kelvins, shares are pure."""
    if key in _PURE or (kind is LogNormal and key == "sigma"):
        return "1"
    return "K" if key in _WIDTHS and unit == "degC" else unit


def _number(value: object, unit: str, key: str, report: Report) -> float | None:
    """One parameter: text with a unit of measure, or a bare number where none is needed."""
    if isinstance(value, bool) or not isinstance(value, str | int | float):
        report(Mistake("a number or a text like '5 %'", key=key, got=f"{value!r}"))
        return None
    if not isinstance(value, str):
        if unit == "1":
            return float(value)
        report(
            Mistake(
                "a text with a unit of measure",
                f'Write "{value} {unit}" if it is that.',
                key=key,
                got=f"{value}",
            )
        )
        return None
    try:
        return quantity.read(value, unit)
    except Mistake as mistake:
        report(Mistake(mistake.expected, mistake.cure, key=key, got=f'"{value}"'))
        return None


def under(key: str, report: Report) -> Report:
    """Report that puts `key` before the key of a mistake inside it."""

    def inner(mistake: Mistake) -> None:
        inside = "" if mistake.key in ("", "value") else f".{mistake.key}"
        report(
            Mistake(
                mistake.expected,
                mistake.cure,
                key=key + inside,
                got=mistake.got,
                nearest=mistake.nearest,
            )
        )

    return inner
