"""Temperature and ageing laws as tables write them, to their classes."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any, Final

from tolsim import quantity
from tolsim.errors import Mistake, nearest_name
from tolsim.laws import Uniform
from tolsim.laws.reading import Report, read_law, under
from tolsim.spread.ageing import AgeingLaw, LinearAgeing, LogTimeAgeing, PowerAgeing, SqrtTimeAgeing
from tolsim.spread.codes import slope_letter
from tolsim.spread.temperature import (
    CopperTemperature,
    CurveTemperature,
    EnvelopeTemperature,
    LinearTemperature,
    TemperatureLaw,
    class1_temperature,
    class2_temperature,
)

Parameter = Callable[[object, Report], Any]


def _law(unit: str) -> Parameter:
    return lambda given, report: read_law(given, unit, report)


def _number(unit: str) -> Parameter:
    def parameter(given: object, report: Report) -> float | None:
        law = read_law(given, unit, report) if not isinstance(given, Mapping) else None
        if law is None:
            if isinstance(given, Mapping):
                report(Mistake("one number, not a law", got=f"{dict(given)}"))
            return None
        return law.mean

    return parameter


def _code(given: object, report: Report) -> str | None:
    if isinstance(given, str):
        return given
    report(Mistake('a code like "C0G" or "X7R"', got=f"{given!r}"))
    return None


def _word(given: object, report: Report) -> str | None:
    if isinstance(given, str):
        return given
    report(Mistake("a text in quotes", got=f"{given!r}"))
    return None


def _points(columns: int) -> Parameter:
    """Rows of a temperature and `columns` relative changes."""

    def parameter(given: object, report: Report) -> tuple[tuple[float, ...], ...] | None:
        if not isinstance(given, list) or not all(
            isinstance(row, list) and len(row) == columns + 1 for row in given
        ):
            example = ", ".join(['"-40 degC"', '"-2 %"', '"2 %"'][: columns + 1])
            report(Mistake(f"rows like [{example}]", got=f"{given!r}"))
            return None
        rows = []
        for row in given:
            try:
                rows.append(
                    (
                        quantity.read(str(row[0]), "degC"),
                        *(quantity.read(str(change), "1") for change in row[1:]),
                    )
                )
            except Mistake as mistake:
                report(Mistake(mistake.expected, mistake.cure, got=f"{row!r}"))
                return None
        return tuple(rows)

    return parameter


def _lettered(letter: str) -> TemperatureLaw:
    """Straight line of a resistor's slope letter, slope uniform over the band it allows."""
    most = slope_letter(letter)
    return LinearTemperature(Uniform(-most, most))


_TEMPERATURE: Final[Mapping[str, tuple[Callable[..., TemperatureLaw], Mapping[str, Parameter]]]] = {
    LinearTemperature.NAME: (
        LinearTemperature,
        {"slope": _law("1/K"), "reference": _number("degC")},
    ),
    EnvelopeTemperature.NAME: (
        EnvelopeTemperature,
        {"points": _points(2), "position": _law("1")},
    ),
    CurveTemperature.NAME: (CurveTemperature, {"points": _points(1), "stretch": _law("1")}),
    CopperTemperature.NAME: (
        CopperTemperature,
        {"reference": _number("degC"), "exponent": _number("1")},
    ),
    "class-1": (class1_temperature, {"code": _code}),
    "class-2": (class2_temperature, {"code": _code}),
    "slope-letter": (_lettered, {"letter": _code}),
}

_AGEING: Final[Mapping[str, tuple[Callable[..., AgeingLaw], Mapping[str, Parameter]]]] = {
    LogTimeAgeing.NAME: (
        LogTimeAgeing,
        {
            "rate": _law("1"),
            "reference": _number("h"),
            "origin": _number("h"),
            "earliest": _number("h"),
            "since": _word,
        },
    ),
    SqrtTimeAgeing.NAME: (SqrtTimeAgeing, {"rate": _law("1"), "reference": _number("h")}),
    LinearAgeing.NAME: (LinearAgeing, {"rate": _law("1"), "reference": _number("h")}),
    PowerAgeing.NAME: (
        PowerAgeing,
        {"rate": _law("1"), "reference": _number("h"), "exponent": _number("1")},
    ),
}

_OPTIONAL: Final = frozenset({"origin", "earliest", "since", "position", "stretch"})
_OPTIONAL_FOR_TEMPERATURE: Final = _OPTIONAL | {"reference", "exponent"}


def read_temperature(given: object, report: Report) -> TemperatureLaw | None:
    """Temperature law that a table states; None if there is none or a mistake was reported."""
    law: TemperatureLaw | None = _read(given, _TEMPERATURE, _OPTIONAL_FOR_TEMPERATURE, report)
    return law


def read_ageing(given: object, report: Report) -> AgeingLaw | None:
    """Ageing law that a table states; None if there is none or a mistake was reported."""
    law: AgeingLaw | None = _read(given, _AGEING, _OPTIONAL, report)
    return law


def _read(
    given: object,
    known: Mapping[str, tuple[Callable[..., Any], Mapping[str, Parameter]]],
    optional: frozenset[str],
    report: Report,
) -> Any:  # noqa: ANN401 - the class depends on the register
    """Read `{law = NAME, ...}` by the register `known`; NAME "none" says that nothing happens."""
    name = given.get("law") if isinstance(given, Mapping) else None
    if name == "none":
        return None
    if not isinstance(given, Mapping) or not isinstance(name, str) or name not in known:
        got = f'"{name}"' if name is not None else "nothing"
        names = [*known, "none"]
        nearest = nearest_name(str(name), names)
        report(Mistake("one of " + ", ".join(names), key="law", got=got, nearest=nearest))
        return None
    make, parameters = known[name]
    values = _parameters(given, name, parameters, optional, report)
    if values is None:
        return None
    try:
        return make(**values)
    except Mistake as mistake:
        report(mistake)
        return None


def _parameters(
    given: Mapping[str, object],
    name: str,
    parameters: Mapping[str, Parameter],
    optional: frozenset[str],
    report: Report,
) -> dict[str, Any] | None:
    """Values of the parameters, or None if one is unknown, wrong or missing."""
    sound = True
    values: dict[str, Any] = {}
    for key, value in given.items():
        if key == "law":
            continue
        if key in parameters:
            values[key] = parameters[key](value, under(key, report))
            continue
        nearest = nearest_name(key, list(parameters))
        expected = f"a parameter of the {name} law: " + ", ".join(parameters)
        report(Mistake(expected, key=key, got=f'"{key}"', nearest=nearest))
        sound = False
    for key in parameters:
        if key not in values and key not in optional:
            report(Mistake(f"a value (the {name} law needs it)", key=key, got="nothing"))
            sound = False
    return values if sound and None not in values.values() else None
