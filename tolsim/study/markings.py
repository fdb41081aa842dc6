"""`marking = "472J C0G"` on a part of a study: the value and the spread that the mark tells.

The mark gives the value, its letter the limits of the tolerance, a class code or a slope letter
the temperature law.  A mark says nothing of how parts lie between the limits, nor of ageing;
a part that also names a spread table follows the table, and only its value is read.
"""

from __future__ import annotations

import json
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any, Final

from tolsim.errors import Mistake, Problem
from tolsim.spread.codes import Tolerance, class1_code, class2_code, slope_letter
from tolsim.spread.reading import read_tables
from tolsim.spread.table import SpreadTable
from tolsim.spread.value_codes import capacitor_code, resistor_code

KEY: Final = "marking"
_VALUE: Final = {"capacitor": ("capacitance", "F"), "resistor": ("resistance", "ohm")}


@dataclass(frozen=True)
class Beside:
    """A mark of a part that also names a spread table.

    Attributes
    ----------
    text, quantity : str
        The mark, and what it is a value of.
    value : float
        That value, SI.
    named : str
        The table the part follows.
    table : SpreadTable
        What it would follow by the mark.
    """

    text: str
    quantity: str
    value: float
    named: str
    table: SpreadTable


@dataclass
class Expanded:
    """A study with values and spread tables in place of marks.

    Attributes
    ----------
    raw : mapping
        The file as written, without marks.
    tables : dict
        Spread tables made from marks, by name.
    problems : list of Problem
        Marks that cannot be read.
    beside : dict
        Marks of parts that name a table as well, by reference.
    """

    raw: dict[str, Any]
    tables: dict[str, SpreadTable] = field(default_factory=dict)
    problems: list[Problem] = field(default_factory=list)
    beside: dict[str, Beside] = field(default_factory=dict)


@dataclass(frozen=True)
class _Mark:
    """What a mark tells: the value, limits, and the temperature law as a table writes it."""

    value: float
    tolerance: Tolerance | None
    letter: str
    temperature: str
    sources: tuple[str, ...]


def expanded(raw: Mapping[str, Any], file: str) -> Expanded:
    """Read every mark of a study file.

    Parameters
    ----------
    raw : mapping
        The file as written.
    file : str
        Its name, for messages.
    """
    parts = raw.get("parts")
    found = Expanded(dict(raw))
    if not isinstance(parts, Mapping):
        return found
    found.raw["parts"] = {ref: _part(ref, part, found, file) for ref, part in parts.items()}
    return found


def _part(ref: str, part: object, found: Expanded, file: str) -> object:
    """One part with what its mark tells; as it was if it has none, or one that cannot be read."""
    if not isinstance(part, Mapping) or KEY not in part:
        return part
    kind = str(part.get("kind"))
    rest = {key: value for key, value in part.items() if key != KEY}
    try:
        mark = _mark(kind, part)
    except Mistake as mistake:
        got = mistake.got or json.dumps(part[KEY], ensure_ascii=False, default=str)
        found.problems.append(Problem.of(mistake, file, f"parts.{ref}", KEY, got))
        if kind in _VALUE:  # any value will do: its absence shall not be told as well
            rest.setdefault(_VALUE[kind][0], f"1e-6 {_VALUE[kind][1]}")
        return rest
    name, unit = _VALUE[kind]
    rest[name] = f"{mark.value:.12g} {unit}"
    if not (mark.tolerance or mark.temperature):
        return rest
    text = str(part[KEY])
    table = _table(kind, text, mark)
    if "spread" in part:
        found.beside[ref] = Beside(text, name, mark.value, str(part["spread"]), table)
    else:
        found.tables[table.name] = table
        rest["spread"] = table.name
    return rest


def _mark(kind: str, part: Mapping[str, Any]) -> _Mark:
    """The mark of a part, if it can have one and has no value beside it."""
    if kind not in _VALUE:
        raise Mistake("a mark on a capacitor or resistor only", got=f"one on {kind}")
    name = _VALUE[kind][0]
    if name in part:
        raise Mistake(f"either {KEY} or {name}", "Drop one of them.", got="both")
    return _read(kind, part[KEY])


def _read(kind: str, text: object) -> _Mark:
    """The words of a mark."""
    words = str(text).split() if isinstance(text, str) else []
    if not words:
        raise Mistake('a mark like "472J C0G" or "4k7J"')
    value, tolerance = capacitor_code(words[0]) if kind == "capacitor" else resistor_code(words[0])
    letter = words[0][-1] if tolerance else ""
    sources = [f"letter {letter} of IEC 60062"] if tolerance else []
    temperature = ""
    for word in words[1:]:
        if temperature:
            raise Mistake("a value and one temperature code", got=f'"{word}" as well')
        temperature, source = _temperature(kind, word)
        sources.append(source)
    if not value > 0.0:
        raise Mistake("a value above 0", "A bridge of 0 ohm is a net, not a part.", got=words[0])
    return _Mark(value, tolerance, letter, temperature, tuple(sources))


def _temperature(kind: str, word: str) -> tuple[str, str]:
    """Temperature law of a code word as a table writes it, and where the code is defined."""
    if kind == "resistor":
        slope_letter(word)
        return f'{{law = "slope-letter", letter = "{word}"', f"slope letter {word} of IEC 60062"
    code = word.upper().replace("NP0", "C0G").replace("NPO", "C0G").replace("COG", "C0G")
    if re.fullmatch(r"[XYZ]\d[A-Z]", code):
        class2_code(code)
        return f'{{law = "class-2", code = "{code}"', f"code {code} of EIA-198"
    class1_code(code)
    return f'{{law = "class-1", code = "{code}"', f"code {code} of EIA-198-1"


def _table(kind: str, text: str, mark: _Mark) -> SpreadTable:
    """Spread table of a mark, by way of the text it would have in a table file."""
    name = "marking-" + re.sub(r"[^A-Za-z0-9]+", "-", text).strip("-")
    lines = "\n".join(_lines(kind, text, name, mark)) + "\n"
    problems: list[Problem] = []
    tables = read_tables(lines.encode(), f"{name}.toml", problems)
    assert not problems, problems
    return tables[name]


def _lines(kind: str, text: str, name: str, mark: _Mark) -> Iterator[str]:
    yield f"[table.{name}]"
    yield f'title = "As marked: {text}"'
    yield f'for = "{kind}"'
    yield 'basis = "standard"'
    yield f'source = "mark {text}: {", ".join(mark.sources)}"'
    yield f"[table.{name}.{_VALUE[kind][0]}]"
    if mark.tolerance:
        unit = " F" if mark.tolerance.absolute else ""
        low, high = (f"{end:.9g}{unit}" for end in (mark.tolerance.low, mark.tolerance.high))
        if mark.tolerance.absolute:
            yield 'deviation = "absolute"'
        yield (
            f'tolerance = {{law = "uniform", low = "{low}", high = "{high}", basis = "guess", '
            f'source = "limits by letter {mark.letter} of IEC 60062; evenly between them"}}'
        )
    if mark.temperature:
        yield f'temperature = {mark.temperature}, shared = "reel"}}'
