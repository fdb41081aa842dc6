"""Tables on switching on: [start_map], [supply_contract], [repeated_starts].

    [start_map]
    across = {what = "ramp_time", rails = ["main"], values = ["100 us", "1 ms", "10 ms"]}
    down = {what = "ambient", values = ["-20 degC", "25 degC", "60 degC"]}
    units, condition, state, with_run

    [supply_contract]
    ramp_time = ["100 us", "30 ms"]      fastest and slowest that are tried
    supply = ["-40 %", "0 %"]            lowest and highest deviation that are tried
    rails, conditions, state, units, covers, with_run

    [repeated_starts]
    units, tries, off_time, ramp_jitter, condition, state, with_run

An axis sets the ramp time of some rails or all, the ambient, the supply deviation, the age, or any
value of a part or rail by its address, as load states do.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any, TypeVar

from pydantic import BaseModel, create_model

from tolsim.design import Condition, Rail
from tolsim.records import Frozen
from tolsim.spread.entry import UNITS
from tolsim.starts.asked import (
    CONDITION_AXES,
    RAMP_TIME,
    Axis,
    RepeatedStarts,
    StartMap,
    Starts,
    SupplyContract,
)
from tolsim.study.outline import Outline, Table, texts
from tolsim.study.plain_words import written
from tolsim.study.reading import Reading

Record = TypeVar("Record", bound=BaseModel)

_AXES = ("across", "down")


class _Axis(Frozen):
    """The table of an axis as written."""

    what: str
    values: tuple[Any, ...]
    rails: tuple[str, ...] = ()


def read_starts(outline: Outline, reading: Reading) -> Starts:
    """All tables on switching on; mistakes are added to those of `reading`."""
    readers = {
        name: _Reader(outline, reading, name) for name in Starts.model_fields if name in reading.raw
    }
    found: dict[str, Any] = {}
    for name, reader in readers.items():
        table = reader.table()
        if table is not None:
            found[name] = getattr(reader, name)(table)
    return Starts(**found)


class _Reader:
    """One table; knows where it stands, so that mistakes can say it."""

    def __init__(self, outline: Outline, reading: Reading, place: str) -> None:
        self.outline, self.reading, self.place = outline, reading, place
        self.before = len(reading.problems)

    def tell(self, place: str, key: str, got: str, expected: str, cure: str = "") -> None:
        """Note a mistake."""
        self.reading.problems.append(self.outline.problem(place, key, got, expected, cure))

    def table(self) -> Table | None:
        """The table, if it is one, of a study that can be switched on."""
        given = self.reading.raw[self.place]
        if not isinstance(given, Mapping):
            self.tell("", self.place, written(given), f"a table [{self.place}]")
            return None
        if self.outline.driven:
            expected = "no such table in a driven study"
            self.tell(self.place, "", 'kind = "driven"', expected, "A driven stage need not start.")
            return None
        return given

    def start_map(self, table: Table) -> StartMap | None:
        """Two axes of different things."""
        axes = {key: self._axis(table, key) for key in _AXES}
        across, down = axes.values()
        if across and down and _same(across, down, self.outline):
            expected = "something else than across sets"
            self.tell(f"{self.place}.down", "what", f'"{down.what}"', expected)
        given = {"condition": self._condition(table), "state": self._state(table)}
        plain = {key: value for key, value in table.items() if key not in _AXES}
        stand_in = Axis(what=RAMP_TIME, unit_of_measure="s", values=(1.0,))
        filled = {key: axis or stand_in for key, axis in axes.items()}
        return self._record(StartMap, {**plain, **filled, **given})

    def supply_contract(self, table: Table) -> SupplyContract | None:
        """At least one of its two questions, ends in order."""
        asked = [key for key in ("ramp_time", "supply") if key in table]
        if not asked:
            cure = 'For example ramp_time = ["100 us", "30 ms"].'
            self.tell(self.place, "ramp_time", "neither", "ramp_time or supply, or both", cure)
        self._rails(self.place, texts(table, "rails"))
        conditions = texts(table, "conditions") or list(self.outline.conditions)
        for name in conditions:
            if name not in self.outline.conditions:
                self._unknown("conditions", name, self.outline.conditions)
        given: dict[str, Any] = {"state": self._state(table)}
        if "conditions" not in table:
            given["conditions"] = conditions
        found = self._record(SupplyContract, {**table, **given})
        for key in asked if found else ():
            self._rising(table, key, getattr(found, key))
        return found

    def repeated_starts(self, table: Table) -> RepeatedStarts | None:
        """Its off time, ends in order."""
        given = {"condition": self._condition(table), "state": self._state(table)}
        found = self._record(RepeatedStarts, {**table, **given})
        if found:
            self._rising(table, "off_time", found.off_time)
        return found

    def _record(self, model: type[Record], table: Table) -> Record | None:
        return self.reading.record(model, table, self.place)

    def _rising(self, table: Table, key: str, ends: tuple[float, float]) -> None:
        if ends[0] >= ends[1]:
            self.tell(self.place, key, written(table[key]), "the lower end first")

    def _unknown(self, key: str, name: object, valid: Mapping[str, Table]) -> None:
        kind = key.removesuffix("s")
        what = f"a {kind} of this study"
        told = self.outline.unknown(self.place, key, name, what, list(valid))
        self.reading.problems.append(told)

    def _condition(self, table: Table) -> str:
        """The condition named, or the first."""
        given = table.get("condition", next(iter(self.outline.conditions)))
        if given not in self.outline.conditions:
            self._unknown("condition", given, self.outline.conditions)
        return str(given)

    def _state(self, table: Table) -> str:
        """The state named, or the first to start in."""
        states = self.outline.states
        starting = [name for name, one in states.items() if one.get("starts_here") is True]
        given = table.get("state", next(iter(starting), next(iter(states))))
        if given not in states:
            self._unknown("state", given, states)
        return str(given)

    def _rails(self, place: str, names: Sequence[str]) -> None:
        for name in names:
            if name not in self.outline.rails:
                what, valid = "a rail of this study", list(self.outline.rails)
                told = self.outline.unknown(place, "rails", name, what, valid)
                self.reading.problems.append(told)

    def _axis(self, table: Table, key: str) -> Axis | None:
        """An axis with its values as numbers."""
        place = f"{self.place}.{key}"
        if key not in table:
            cure = f'For example {key} = {{what = "ambient", values = ["-20 degC", "60 degC"]}}.'
            self.tell(self.place, key, "nothing", "a table of what and values", cure)
            return None
        before = len(self.reading.problems)
        raw = self.reading.record(_Axis, table[key], place)
        if raw is None:
            return None
        self._rails(place, raw.rails)
        if raw.rails and (raw.what in CONDITION_AXES or "." in raw.what):
            self.tell(place, "rails", written(raw.rails), f'no rails beside what = "{raw.what}"')
        numbers = [self._value(place, raw.what, value) for value in raw.values]
        if not numbers:
            self.tell(place, "values", "none", "at least one value")
        elif numbers[0] is not None and len(set(numbers)) < len(numbers):
            self.tell(place, "values", written(raw.values), "each value once")
        known = [number for number in numbers if number is not None]
        if len(self.reading.problems) > before:
            return None
        unit = self._unit(raw.what)
        return Axis(what=raw.what, unit_of_measure=unit, values=tuple(known), rails=raw.rails)

    def _unit(self, what: str) -> str:
        if what == RAMP_TIME:
            return "s"
        return CONDITION_AXES.get(what) or UNITS.get(what.rpartition(".")[2], "1")

    def _value(self, place: str, what: str, value: object) -> float | None:
        """One value of an axis as a number; None after telling what is wrong."""
        if "." in what:
            if self._trimmed(place, what):
                return None
            return self.reading.override(self.outline, place, what, value)
        if what != RAMP_TIME and what not in CONDITION_AXES:
            valid = [RAMP_TIME, *CONDITION_AXES]
            cure = "Or the address of a value, as load states have it: "
            cure += f'"{next(iter(self.outline.rails), "vdd")}.voltage".'
            told = self.outline.unknown(
                place, "what", what, f"one of {', '.join(valid)}", valid, cure
            )
            if told not in self.reading.problems:
                self.reading.problems.append(told)
            return None
        if isinstance(value, Mapping):
            self.tell(place, "values", written(value), "a chosen value, no law")
            return None
        owner: type[BaseModel] = Rail if what == RAMP_TIME else Condition
        info = owner.model_fields[what]
        single = create_model("Value", values=(info.rebuild_annotation(), ...))
        found = self.reading.record(single, {"values": value}, place)
        number = getattr(found, "values", None)
        return None if number is None else float(number)

    def _trimmed(self, place: str, what: str) -> bool:
        """Whether a trim turns that value; told once."""
        for name, trim in self.outline.trims.items():
            if trim.get("part") != what.rpartition(".")[0]:
                continue
            quantity = trim.get("quantity", what.rpartition(".")[2])
            if quantity == what.rpartition(".")[2]:
                cure = "What an operator sets for each unit is not the same for all of them."
                told = self.outline.problem(
                    place, "what", f'"{what}", turned by trim {name}', "a value no trim turns", cure
                )
                if told not in self.reading.problems:
                    self.reading.problems.append(told)
                return True
        return False


def _same(across: Axis, down: Axis, outline: Outline) -> bool:
    """Whether both axes set the same thing."""
    if across.what != down.what:
        return False
    every = list(outline.rails)
    return bool(set(across.rails or every) & set(down.rails or every)) or across.what != RAMP_TIME
