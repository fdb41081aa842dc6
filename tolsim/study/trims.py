"""Tables [trim.NAME]: which part an operator turns, what he reads, when he is content.

    [trim.bias]
    part = "P1"                      quantity = "setting" (what the kind has, if not given)
    range = ["2 %", "98 %"]          resolution = "0.2 %", coarse_step = a tenth of the range
    reading = "idle_current"         any figure a bench shows; "idle_voltage" with net = "bias"
    target = "60 mA", within = "5 %"
    condition, state                 the bench; from = "low end" (where the part stands if absent)
    meter = {gain = LAW, offset = LAW, noise = LAW}, setting_error = LAW, most_turns, order

Everything is told in SI afterwards, and every choice left open is filled in.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Mapping
from typing import Any

from tolsim.design import GROUND, Trim
from tolsim.errors import Mistake, Problem
from tolsim.figure_names import (
    FIGURES,
    IDLE_VOLTAGE,
    RAIL,
    TRANSITION_FIGURES,
    TRIM,
    FigureInfo,
    figure_of,
)
from tolsim.laws.reading import read_law, under
from tolsim.quantity import read, show
from tolsim.study.limits import bound
from tolsim.study.outline import Outline, Table
from tolsim.study.plain_words import written

ADJUSTABLE: Mapping[str, Mapping[str, str]] = {
    "potentiometer": {"setting": "1"},
    "capacitor": {"capacitance": "F"},
    "inductor": {"inductance": "H"},
    "resistor": {"resistance": "ohm"},
    "coupling": {"coupling": "1"},
    "load": {"coupling": "1"},
    RAIL: {"voltage": "V"},
}
"""Quantities an operator can turn, by kind of part, with their unit of measure."""

NO_METER_SHOWS = frozenset((
    "start_margin", "growth_rate", "start_frequency", "start_time", "slowest_multiplier",
    "energy_balance", "orbit_residual", "power_on_time", "latch_current",
)) | TRANSITION_FIGURES  # fmt: skip
COARSE_SHARE = 0.1  # of the range: common practice, no source
_KEYS = (
    "part", "quantity", "range", "resolution", "coarse_step", "reading", "net", "target", "within",
    "condition", "state", "from", "meter", "setting_error", "most_turns", "order", "source",
    "confidence",
)  # fmt: skip
_NEEDED = ("part", "reading", "target", "within", "resolution")
_METER = {"gain": "1", "offset": "", "noise": ""}  # unit of measure; "" that of the reading
_ENDS = ("low end", "high end")
_CONFIDENCES = ("measured", "sheet", "typical", "guess")
_NAME = re.compile(r"[A-Za-z][A-Za-z0-9_]*")
_NETS = ("nets", "net", "anode", "cathode", "drain", "gate", "source_net")
_MOST_TURNS = 200


def read_trims(outline: Outline, problems: list[Problem]) -> dict[str, Trim]:
    """All trims in the order in which they are done; mistakes are appended to `problems`."""
    found: dict[str, Trim] = {}
    taken: dict[str, str] = {}
    for name, table in outline.trims.items():
        reader = _Reader(outline, name, table, problems)
        trim = reader.trim()
        if trim is None:
            continue
        if trim.address in taken:
            got, other = f'"{trim.address}"', taken[trim.address]
            reader.tell("part", got, f"a quantity that trim {other} does not turn already")
        taken.setdefault(trim.address, name)
        found[name] = trim
    return dict(sorted(found.items(), key=lambda item: item[1].order))


class _Reader:
    """One table: knows where it stands, so that mistakes can say it."""

    def __init__(self, outline: Outline, name: str, table: Table, problems: list[Problem]) -> None:
        self.outline, self.name, self.table, self.problems = outline, name, table, problems
        self.place = f"trim.{name}"

    def tell(self, key: str, got: str, expected: str, cure: str = "") -> None:
        """Note a mistake."""
        self.problems.append(self.outline.problem(self.place, key, got, expected, cure))

    def unknown(self, key: str, name: object, what: str, valid: list[str]) -> None:
        """Note a name that does not exist."""
        self.problems.append(self.outline.unknown(self.place, key, name, what, valid))

    def trim(self) -> Trim | None:
        """The record, or None if anything is wrong."""
        before = len(self.problems)
        self._keys()
        ref, quantity, unit = self._adjusted()
        reading, reading_unit = self._reading()
        target = self._positive("target", reading_unit)
        ends = self._range(ref, unit)
        low, high = ends or (0.0, 1.0)
        resolution = self._positive("resolution", unit)
        if resolution is not None and resolution > high - low:
            self.tell("resolution", written(self.table["resolution"]), "less than the whole range")
        values = {
            "part": ref,
            "quantity": quantity,
            "unit_of_measure": unit,
            "range": (low, high),
            "reading": reading,
            "reading_unit": reading_unit,
            "net": self.table.get("net"),
            "target": target,
            "within": self._within(target, reading_unit),
            "resolution": resolution,
            "coarse_step": self._coarse(unit, low, high, resolution),
            "start": self._start(unit, ends),
            "condition": self._bench("condition", self.outline.conditions),
            "state": self._bench("state", self.outline.states),
            "most_turns": self._whole("most_turns", 40, 1, _MOST_TURNS),
            "meter": self._meter(reading_unit),
            "setting_error": self._law("setting_error", self.table.get("setting_error", 0), unit),
            "order": self._whole("order", 0, 0, 1000),
            "source": self._text("source"),
            "confidence": self._confidence(),
        }
        self._no_override(ref, quantity)
        return Trim(**values) if len(self.problems) == before else None

    def _keys(self) -> None:
        """Name, unknown keys, missing keys."""
        if not _NAME.fullmatch(self.name):
            signs = "a name of letters, digits and _, a letter first"
            self.tell("", f'the name "{self.name}"', signs)
        if self.name in self.outline.parts or self.name in self.outline.rails:
            self.tell("", f'the name "{self.name}" of a part or rail', "a name of its own")
        for key in self.table:
            if key not in _KEYS:
                self.unknown(key, key, "a key of a trim", list(_KEYS))
        for key in _NEEDED:
            if key not in self.table:
                self.tell(key, "nothing", "a value", f"A trim needs {', '.join(_NEEDED)}.")

    def _adjusted(self) -> tuple[str, str, str]:
        """Part, quantity and unit of measure of what is turned."""
        ref = self.table.get("part", "")
        fitting = [one for one, kind in self.outline.kinds.items() if kind in ADJUSTABLE]
        kind = self.outline.kinds.get(ref, "") if isinstance(ref, str) else ""
        if kind not in ADJUSTABLE:
            if "part" in self.table:
                self.unknown("part", ref, "a part or rail that can be turned", fitting)
            return str(ref), "", "1"
        turned = ADJUSTABLE[kind]
        quantity = self.table.get("quantity", next(iter(turned)))
        if quantity not in turned:
            self.unknown("quantity", quantity, f"what is turned in a {kind}", list(turned))
            return ref, "", "1"
        if kind == "potentiometer" and self.outline.parts[ref].get("end_zone") in (0, "0 %"):
            self.tell("part", f"{ref} with end_zone 0", "a potentiometer with end zones")
        return ref, quantity, turned[quantity]

    def _reading(self) -> tuple[str, str | None]:
        """Figure read and its unit of measure; None if it is not known."""
        given = self.table.get("reading")
        if given is None:
            return "", None
        if given == IDLE_VOLTAGE:
            nets = sorted(_nets(self.outline) - {GROUND})
            if self.table.get("net") not in nets:
                self.unknown("net", self.table.get("net"), "a net of this study", nets)
            return IDLE_VOLTAGE, "V"
        if "net" in self.table:
            self.tell("net", written(self.table["net"]), f"no net unless {IDLE_VOLTAGE} is read")
        ref, _, name = str(given).rpartition(".")
        owner = self.outline.kinds.get(ref, "") if ref else "stage"
        figure: FigureInfo | None = figure_of(owner, name) if owner not in ("", TRIM) else None
        if figure is None or name in NO_METER_SHOWS or name.startswith("trim_"):
            stage = [one.name for one in FIGURES.values() if one.owner == "stage"]
            valid = [one for one in stage if one not in NO_METER_SHOWS] + [IDLE_VOLTAGE]
            if ref in self.outline.kinds:
                own = [one for one in FIGURES.values() if one.owner == owner]
                shown = [one.name for one in own if one.name not in NO_METER_SHOWS]
                valid = [f"{ref}.{name}" for name in shown if not name.startswith("trim_")]
            self.unknown("reading", given, "a figure that a meter shows", valid)
            return "", None
        return str(given), figure.unit_of_measure

    def _number(self, key: str, value: object, unit: str | None) -> float | None:
        """Number of a text; None after telling what is wrong, or if its unit is not known."""
        if unit is None:
            return None
        try:
            return bound(value, unit)
        except Mistake as mistake:
            self.tell(key, written(value), mistake.expected, mistake.cure)
            return None

    def _positive(self, key: str, unit: str | None) -> float | None:
        """Number above zero of a key; None if it is missing or wrong."""
        if key not in self.table:
            return None
        number = self._number(key, self.table[key], unit)
        if number is not None and not number > 0.0:
            self.tell(key, written(self.table[key]), "a value above 0")
            return None
        return number

    def _range(self, ref: str, unit: str) -> tuple[float, float] | None:
        """Ends of the adjuster, those of a potentiometer its end zones; None if not known."""
        given = self.table.get("range")
        if given is None and self.outline.kinds.get(ref) == "potentiometer":
            zone = self.outline.parts[ref].get("end_zone", 0.01)
            try:
                share = read(zone, "1") if isinstance(zone, str) else float(zone)
            except (Mistake, TypeError, ValueError):  # told where the part is read
                share = 0.01
            return share, 1.0 - share
        if given is None and self.outline.kinds.get(ref) not in ADJUSTABLE:
            return None  # told where the part is read
        if not isinstance(given, list) or len(given) != len(_ENDS):
            got = "nothing" if given is None else written(given)
            self.tell("range", got, "a list of two values, the lower end first")
            return None
        low, high = (self._number("range", value, unit) for value in given)
        if low is None or high is None:
            return None
        if not 0.0 < low < high:
            self.tell("range", written(given), "two values above 0, the lower end first")
            return None
        return low, high

    def _within(self, target: float | None, unit: str | None) -> float | None:
        """Tolerance in the unit of the reading; "2 %" is a share of the target."""
        given = self.table.get("within")
        if isinstance(given, str) and given.strip().endswith("%") and unit != "1":
            share = self._positive("within", "1")
            return None if share is None or target is None else share * target
        return self._positive("within", unit)

    def _coarse(self, unit: str, low: float, high: float, resolution: float | None) -> float:
        """Largest step: a tenth of the range unless the study says so."""
        coarse = self._positive("coarse_step", unit)
        if coarse is None:
            return max(COARSE_SHARE * (high - low), resolution or 0.0)
        if resolution is not None and coarse < resolution:
            got = written(self.table["coarse_step"])
            self.tell("coarse_step", got, "at least the resolution")
        return coarse

    def _start(self, unit: str, ends: tuple[float, float] | None) -> float | None:
        """Where the adjuster is put before the first reading."""
        given = self.table.get("from")
        if given is None:
            return None
        if given in _ENDS:
            return ends[_ENDS.index(given)] if ends else None
        try:
            number = bound(given, unit)
        except Mistake:
            number = math.nan
        if math.isnan(number) or (ends and not ends[0] <= number <= ends[1]):
            reach = f"{show(ends[0], unit)} to {show(ends[1], unit)}" if ends else "the range"
            self.tell("from", written(given), f'"low end", "high end" or a place within {reach}')
        return number

    def _bench(self, key: str, tables: Mapping[str, Table]) -> str:
        """Condition or state of the bench: the only one, or a state in which units start."""
        given = self.table.get(key)
        starts = [name for name, table in tables.items() if table.get("starts_here") is True]
        if given is None and (len(tables) == 1 or starts):
            return (starts or [*tables])[0]
        if given not in tables:
            got = "nothing" if given is None else written(given)
            expected = f"the {key} in which it is done: {', '.join(tables)}"
            self.tell(key, got, expected)
        return str(given)

    def _whole(self, key: str, default: int, low: int, high: int) -> int:
        given = self.table.get(key, default)
        if isinstance(given, bool) or not isinstance(given, int) or not low <= given <= high:
            self.tell(key, written(given), f"a whole number of {low} to {high}")
            return default
        return given

    def _text(self, key: str) -> str | None:
        given = self.table.get(key)
        if given is not None and not isinstance(given, str):
            self.tell(key, written(given), "a text in quotes")
        return given if isinstance(given, str) else None

    def _confidence(self) -> Any:  # noqa: ANN401 - one of the words, checked here
        given = self.table.get("confidence")
        if given is not None and given not in _CONFIDENCES:
            self.unknown("confidence", given, "a confidence", list(_CONFIDENCES))
        return given

    def _meter(self, unit: str | None) -> dict[str, Any]:
        """Laws of the meter as written; a lone value as a number."""
        given = self.table.get("meter", {})
        if not isinstance(given, Mapping):
            self.tell("meter", written(given), "a table of gain, offset and noise")
            return {}
        found = {}
        for key, value in given.items():
            if key not in _METER:
                self.unknown(f"meter.{key}", key, "an error of a meter", list(_METER))
                continue
            found[key] = self._law(f"meter.{key}", value, _METER[key] or unit)
        return found

    def _law(self, key: str, given: object, unit: str | None) -> object:
        """A law as written, after reading it once to find its mistakes; a lone value as number."""
        if unit is None:
            return 0.0
        if not isinstance(given, Mapping):
            return 0.0 if given == 0 else self._number(key, given, unit) or 0.0

        def report(mistake: Mistake) -> None:
            self.problems.append(Problem.of(mistake, self.outline.file, self.place, key))

        read_law(given, unit, under(key, report))
        return given

    def _no_override(self, ref: str, quantity: str) -> None:
        """A state of the load cannot set what an operator has set."""
        for state, table in self.outline.states.items():
            values, spread = table.get("values", {}), table.get("spread", {})
            for section, key in ((values, f"{ref}.{quantity}"), (spread, ref)):
                if isinstance(section, Mapping) and key in section:
                    got = f'"{key}" in state {state}'
                    self.tell("part", got, "a quantity that no state of the load overrides")


def _nets(outline: Outline) -> set[str]:
    """Every net that parts and rails name."""
    return set(_named(outline.parts)) | set(_named(outline.rails))


def _named(tables: Mapping[str, Table]) -> Iterator[str]:
    for table in tables.values():
        for key in _NETS:
            given = table.get(key)
            for net in given if isinstance(given, list) else [given]:
                if isinstance(net, str):
                    yield net
