"""Tables [[transitions]]: the states a stage goes through, in order.

    [[transitions]]
    from = "dark"                    to = "glow", time = "20 us" (0 if not given: at once)
    needs = {part = "L1", figure = "voltage_peak", at_least = "300 V", spread = LAW}
    stays_while = {part = "LAMP", figure = "current_rms", at_least = "0.3 A", spread = LAW}
    falls_back_to = "dark"           where it goes when it does not stay (`from` if not given)

`needs` is judged on each unit's orbit in the state it comes from, `stays_while` on its orbit in
the state it goes to; `spread` is the law of a relative deviation of the level.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import replace
from typing import Any, Final

from tolsim.errors import Mistake, Problem
from tolsim.figure_names import TRANSITION_FIGURES, TRIM, figures_of
from tolsim.laws.reading import read_law
from tolsim.quantity import KINDS, read
from tolsim.study.limits import bound
from tolsim.study.outline import Outline, Table
from tolsim.study.plain_words import written
from tolsim.transition import Requirement, Transition

_KEYS: Final = ("from", "to", "time", "needs", "stays_while", "falls_back_to")
_NEED_KEYS: Final = ("part", "figure", "at_least", "spread")
_TIME: Final = replace(KINDS["duration"], zero=True)
_NOT_ON_AN_ORBIT: Final = frozenset(("idle_dissipation",))


def read_transitions(
    outline: Outline, given: object, problems: list[Problem]
) -> tuple[Transition, ...]:
    """All transitions in their order; mistakes are appended to `problems`."""
    if given is None:
        return ()
    if not isinstance(given, list):
        cure = "Write each change of load as a table [[transitions]]."
        problems.append(
            outline.problem("transitions", "", written(given), "a list of tables", cure)
        )
        return ()
    found = []
    for number, table in enumerate(given, 1):
        place = f"transitions #{number}"
        if not isinstance(table, Mapping):
            problems.append(outline.problem(place, "", written(table), "a table"))
            continue
        before = len(problems)
        problems += _names(outline, place, table)
        values = {
            "before": table.get("from"),
            "after": table.get("to"),
            "time": _time(outline, place, table, problems),
            "falls_back_to": table.get("falls_back_to"),
        }
        for key in ("needs", "stays_while"):
            if key in table:
                values[key] = _requirement(outline, f"{place}.{key}", table[key], problems)
        if len(problems) == before:
            found.append(Transition(**values))
    return tuple(found)


def _names(outline: Outline, place: str, table: Table) -> Iterator[Problem]:
    """Keys, and the states they name."""
    for key in table:
        if key not in _KEYS:
            yield outline.unknown(place, key, key, "a key of a transition", _KEYS)
    states = list(outline.states)
    for key in ("from", "to", "falls_back_to"):
        if key not in table:
            if key != "falls_back_to":
                yield outline.problem(place, key, "nothing", "a state of this study", "Add it.")
        elif table[key] not in states:
            yield outline.unknown(place, key, table[key], "a state of this study", states)
    if "from" in table and table.get("from") == table.get("to"):
        yield outline.problem(place, "to", written(table["to"]), "another state than from")
    if "falls_back_to" in table and "stays_while" not in table:
        cure = "Say when it falls back: stays_while = {part, figure, at_least}."
        yield outline.problem(place, "stays_while", "nothing", "a need beside falls_back_to", cure)
    if "falls_back_to" in table and table.get("falls_back_to") == table.get("to"):
        got = written(table["falls_back_to"])
        yield outline.problem(place, "falls_back_to", got, "another state than to")


def _time(outline: Outline, place: str, table: Table, problems: list[Problem]) -> float:
    value = table.get("time", "0 s")
    try:
        return _seconds(value)
    except Mistake as mistake:
        problems.append(
            outline.problem(place, "time", written(value), mistake.expected, mistake.cure)
        )
        return 0.0


def _seconds(value: object) -> float:
    """Duration of a change, s; a bare 0 will do."""
    if isinstance(value, str):
        return float(_TIME.check(read(value, "s")))
    if value == 0 and not isinstance(value, bool):
        return 0.0
    raise Mistake(_TIME.phrase(), f'Write it like "{_TIME.example}".')


def _requirement(
    outline: Outline, place: str, given: object, problems: list[Problem]
) -> Requirement | None:
    """One level of a figure, as a number in the figure's unit of measure."""
    if not isinstance(given, Mapping):
        example = '{part = "L1", figure = "voltage_peak", at_least = "300 V"}'
        problems.append(
            outline.problem(place, "", written(given), "a table", f"Write it like {example}.")
        )
        return None
    before = len(problems)
    problems += [
        outline.unknown(place, key, key, "a key here", _NEED_KEYS)
        for key in given
        if key not in _NEED_KEYS
    ]
    problems += [
        outline.problem(place, key, "nothing", "a value", "Add it.")
        for key in _NEED_KEYS[:3]
        if key not in given
    ]
    unit = _figure_unit(outline, place, given, problems)
    level = _level(outline, place, given, unit, problems)
    spread = _spread(outline, place, given, problems)
    if len(problems) > before:
        return None
    return Requirement(part=given["part"], figure=given["figure"], at_least=level, spread=spread)


def _level(
    outline: Outline, place: str, given: Table, unit: str | None, problems: list[Problem]
) -> float:
    """The level itself, above 0."""
    if unit is None or "at_least" not in given:
        return 0.0
    got = written(given["at_least"])
    try:
        level = bound(given["at_least"], unit)
    except Mistake as mistake:
        problems.append(outline.problem(place, "at_least", got, mistake.expected, mistake.cure))
        return 0.0
    if not level > 0.0:
        problems.append(outline.problem(place, "at_least", got, "more than 0"))
    return level


def _figure_unit(outline: Outline, place: str, given: Table, problems: list[Problem]) -> str | None:
    """Unit of measure of the figure named; None if part or figure is wrong."""
    ref, figure = given.get("part"), given.get("figure")
    if ref is None:
        return None
    kinds = {name: kind for name, kind in outline.kinds.items() if kind != TRIM}
    if ref not in kinds:
        if ref not in outline.parts:  # a part of unknown kind is told elsewhere
            problems.append(
                outline.unknown(place, "part", ref, "a part or rail of this study", list(kinds))
            )
        return None
    valid = {
        info.name: info.unit_of_measure
        for info in figures_of(kinds[str(ref)])
        if info.name not in TRANSITION_FIGURES
        and info.name not in _NOT_ON_AN_ORBIT
        and not info.name.startswith("trim_")
    }
    if figure is None:
        return None
    if figure not in valid:
        what = f"a figure that {kinds[str(ref)]} {ref} has on its orbit"
        problems.append(outline.unknown(place, "figure", figure, what, list(valid)))
        return None
    return valid[str(figure)]


def _spread(
    outline: Outline, place: str, given: Table, problems: list[Problem]
) -> Mapping[str, Any] | None:
    """The law of the level's relative deviation, read once here to find its mistakes."""
    law = given.get("spread")
    if law is None:
        return None
    if not isinstance(law, Mapping):
        cure = 'Write it like {law = "uniform", half_width = "10 %"}.'
        problems.append(outline.problem(place, "spread", written(law), "a law", cure))
        return None
    mistakes: list[Mistake] = []
    read_as = read_law(law, "1", mistakes.append, relative=True)
    problems += [Problem.of(mistake, outline.file, f"{place}.spread") for mistake in mistakes]
    if read_as is not None and not read_as.support[0] > -1.0:
        got = f"deviations down to {100 * read_as.support[0]:.3g} %"
        problems.append(outline.problem(place, "spread", got, "levels that stay above 0"))
    return law
