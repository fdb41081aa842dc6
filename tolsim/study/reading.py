"""Tables of a study file to records, keeping every mistake instead of stopping at one."""

from __future__ import annotations

from collections.abc import Collection, Mapping
from dataclasses import dataclass, field, replace
from typing import TypeVar

from pydantic import BaseModel, ValidationError, create_model

from tolsim.design import Condition, Limit, Rail, State
from tolsim.errors import Mistake, Problem, nearest_name
from tolsim.figure_names import TRIM
from tolsim.laws.reading import read_law
from tolsim.mosfet_sheet import DeviceModel
from tolsim.parts import PART_KINDS, Mosfet, Part
from tolsim.quantity import UNITS_MANDATORY
from tolsim.study.limits import limit_place, with_numbers
from tolsim.study.outline import Outline, Table, kinds_of, texts
from tolsim.study.plain_words import tell, written

Record = TypeVar("Record", bound=BaseModel)

_CONDITION_UNITS = {"ambient": "degC", "supply": "1", "age": "h"}


@dataclass
class Reading:
    """One pass over the tables of a file, keeping every mistake."""

    file: str
    raw: Table
    problems: list[Problem] = field(default_factory=list)

    def record(self, model: type[Record], table: object, place: str) -> Record | None:
        """Table as a record, or None after telling what is wrong with it."""
        try:
            return model.model_validate(table, context={UNITS_MANDATORY: True})
        except ValidationError as error:
            self.problems += tell(error, model, self.file, place)
            return None

    def tables(self, section: str) -> dict[str, Table]:
        """Tables of a section by name; anything else that stands in it is told."""
        found = self.raw.get(section, {})
        tables: dict[str, Table] = {}
        for name, table in found.items() if isinstance(found, dict) else ():
            if isinstance(table, dict):
                tables[name] = table
            else:
                got, expected = f"{name} = {written(table)}", f"a table [{section}.{name}]"
                self.problems.append(Problem(self.file, section, name, got, expected))
        return tables

    def outline(self, tables: Mapping[str, Collection[str]]) -> Outline:
        """The file as written, for checks between tables."""
        parts, rails = self.tables("parts"), self.tables("rails")
        trims = self.tables("trim")
        limits = self.raw.get("limits", [])
        run = self.raw.get("run", {})
        driven = self.raw.get("kind") == "driven"
        return Outline(
            file=self.file,
            driven=driven,
            parts=parts,
            rails=rails,
            states=self.tables("states") or {"normal": {"starts_here": not driven}},
            conditions=self.tables("conditions") or {"room": {}},
            limits=[
                limit if isinstance(limit, dict) else {}
                for limit in (limits if isinstance(limits, list) else [])
            ],
            rank=texts(run, "rank") if isinstance(run, dict) else [],
            kinds=dict.fromkeys(trims, TRIM) | kinds_of(parts, rails, PART_KINDS),
            tables=tables,
            trims=trims,
        )

    def records(
        self, tables: Mapping[str, Table], section: str, model: type[Record]
    ) -> dict[str, Record]:
        """All tables of a section as records of one kind."""
        records = {
            name: self.record(model, table, f"{section}.{name}") for name, table in tables.items()
        }
        return {name: record for name, record in records.items() if record is not None}

    def parts(self, outline: Outline) -> dict[str, Part]:
        """All parts, each as a record of its kind."""
        found: dict[str, Part] = {}
        for ref, table in outline.parts.items():
            place = f"parts.{ref}"
            kind = table.get("kind")
            model = PART_KINDS.get(kind) if isinstance(kind, str) else None
            if model is None:
                valid = list(PART_KINDS)
                got = "nothing" if kind is None else written(kind)
                near, expected = nearest_name(str(kind), valid), f"one of {', '.join(valid)}"
                self.problems.append(Problem(self.file, place, "kind", got, expected, near))
                continue
            together = [Problem.of(m, self.file, place) for m in model.together(table.keys())]
            told = len(self.problems)
            part = self.record(model, table, place)
            # A record tells the first of these itself, but only if all its values can be read.
            self.problems += [p for p in together if p not in self.problems[told:]]
            if part is not None:
                found[ref] = part
        return found

    def states(self, outline: Outline) -> dict[str, State]:
        """All load states, their values as numbers of the quantity they override."""
        found = {}
        for name, table in outline.states.items():
            place = f"states.{name}"
            values = table.get("values", {})
            numbers = {}
            for address, value in values.items() if isinstance(values, dict) else ():
                number = self.override(outline, f"{place}.values", address, value)
                if number is not None:
                    numbers[address] = number
            read = {**table, "values": numbers} if isinstance(values, dict) else table
            state = self.record(State, read, place)
            if state is not None:
                found[name] = state
        return found

    def override(self, outline: Outline, place: str, address: str, value: object) -> float | None:
        """Value of "REF.quantity", read as that quantity of that part."""
        ref, _, quantity = address.partition(".")
        kind = outline.kinds.get(ref)
        if kind is None:
            if ref not in outline.parts:
                valid = [*outline.parts, *outline.rails]
                self.problems.append(
                    outline.unknown(place, address, ref, "a part or rail of this study", valid)
                )
            return None
        model: type[BaseModel] = PART_KINDS.get(kind, Rail)
        quantities = PART_KINDS[kind].QUANTITIES if kind in PART_KINDS else ("voltage",)
        if quantity not in quantities:
            valid = [f"{ref}.{name}" for name in quantities]
            self.problems.append(
                outline.unknown(place, address, address, "a quantity of that part", valid)
            )
            return None
        source = DeviceModel if model is Mosfet else model
        info = source.model_fields[quantity]
        single = create_model("Override", value=(info.rebuild_annotation(), ...))
        try:
            record = single.model_validate({"value": value}, context={UNITS_MANDATORY: True})
        except ValidationError as error:
            told = tell(error, single, self.file, place)
            self.problems += [replace(problem, key=address) for problem in told]
            return None
        number: float = record.value  # type: ignore[attr-defined]
        return number

    def conditions(self, outline: Outline) -> dict[str, Condition]:
        """All conditions; laws in them are read once here only to find their mistakes."""
        found = self.records(outline.conditions, "conditions", Condition)
        for name, table in outline.conditions.items():
            for quantity, unit in _CONDITION_UNITS.items():
                given = table.get(quantity)
                mistakes: list[Mistake] = []
                if isinstance(given, Mapping):
                    read_law(given, unit, mistakes.append)
                place = f"conditions.{name}.{quantity}"
                self.problems += [Problem.of(mistake, self.file, place) for mistake in mistakes]
        return found

    def limits(self, outline: Outline) -> tuple[Limit, ...]:
        """All limits, their bounds as numbers."""
        found = []
        for number, table in enumerate(outline.limits, 1):
            place = limit_place(number)
            numbers, problems = with_numbers(table, outline, place)
            self.problems += problems
            limit = self.record(Limit, numbers, place)
            if limit is not None:
                found.append(limit)
        return tuple(found)
