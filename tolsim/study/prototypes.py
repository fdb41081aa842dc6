"""Tables [prototype] or [prototype.NAME]: what a built board showed on the bench.

    [prototype.first]
    condition, state                 where it was measured; a reading may name its own
    probe = {net = "d1", capacitance = "12 pF", resistance = "10 Mohm"}    or a list of them
    parts = {"C3.capacitance" = "1.02 nF"}                                 measured on that board
    readings = [{figure = "Q1.drain_peak", value = "104 V", uncertainty = "2 V"}]

An uncertainty is the expanded one (k = 2), in the figure's unit of measure or in % of the value.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from tolsim.design import GROUND
from tolsim.errors import Mistake
from tolsim.figure_names import FIGURES, RAIL, STAGE, TRIM, FigureInfo, figure_of, figures_of
from tolsim.prototype import CASE_TEMPERATURE, BenchReading, Probe, Prototype
from tolsim.quantity import ThermalResistance
from tolsim.records import Frozen
from tolsim.study.limits import bound
from tolsim.study.outline import Outline, Table
from tolsim.study.plain_words import written
from tolsim.study.reading import Reading

SINGLE = "prototype"  # name of the board of a plain [prototype]

_NO_METER = frozenset(("slowest_multiplier", "energy_balance", "orbit_residual", "growth_rate"))
_AT_START = frozenset(("start_margin", "start_frequency", "start_time"))
_NETS = ("nets", "net", "anode", "cathode", "drain", "gate", "source_net")


class _Board(Frozen):
    """The table as written."""

    title: str = ""
    source: str | None = None
    condition: str | None = None
    state: str | None = None
    readings: tuple[Any, ...]
    probe: Any = ()
    parts: Mapping[str, Any] = {}


class _Line(Frozen):
    """One reading as written."""

    figure: str
    value: Any
    uncertainty: Any
    condition: str | None = None
    state: str | None = None
    junction_to_case: ThermalResistance | None = None


def read_prototypes(outline: Outline, reading: Reading) -> dict[str, Prototype]:
    """All boards by name; mistakes are added to those of `reading`."""
    section = reading.raw.get(SINGLE, {})
    if not isinstance(section, dict):
        return {}
    if "readings" in section or not all(isinstance(one, dict) for one in section.values()):
        boards: dict[str, Table] = {SINGLE: section} if section else {}
    else:
        boards = reading.tables(SINGLE)
    found = {}
    for name, table in boards.items():
        place = SINGLE if boards.keys() == {SINGLE} and table is section else f"{SINGLE}.{name}"
        board = _Reader(outline, reading, place).board(table)
        if board is not None:
            found[name] = board
    return found


class _Reader:
    """One board; knows where it stands, so that mistakes can say it."""

    def __init__(self, outline: Outline, reading: Reading, place: str) -> None:
        self.outline, self.reading, self.place = outline, reading, place

    def tell(self, place: str, key: str, got: str, expected: str, cure: str = "") -> None:
        """Note a mistake."""
        self.reading.problems.append(self.outline.problem(place, key, got, expected, cure))

    def board(self, table: Table) -> Prototype | None:
        """The record, or None if anything is wrong."""
        before = len(self.reading.problems)
        raw = self.reading.record(_Board, table, self.place)
        if raw is None:
            return None
        if not raw.readings:
            self.tell(self.place, "readings", "none", "at least one reading")
        for key in ("condition", "state"):
            self._case(self.place, key, getattr(raw, key))
        lines = [self._line(raw, number, line) for number, line in enumerate(raw.readings, 1)]
        probes = list(self._probes(raw.probe))
        parts = {
            address: self.reading.override(self.outline, f"{self.place}.parts", address, value)
            for address, value in raw.parts.items()
        }
        readings = [line for line in lines if line is not None]
        self._once(readings)
        if len(self.reading.problems) > before:
            return None
        known = {address: value for address, value in parts.items() if value is not None}
        return Prototype(
            title=raw.title,
            source=raw.source,
            readings=tuple(readings),
            probes=tuple(probes),
            parts=known,
        )

    def _case(self, place: str, key: str, given: str | None) -> str | None:
        """A condition or state by name; the only one if none is given."""
        valid = self._valid(key)
        if given is None:
            return valid[0] if len(valid) == 1 else None
        if given not in valid:
            what = f"a {key} of this study"
            self.reading.problems.append(self.outline.unknown(place, key, given, what, valid))
            return None
        return given

    def _line(self, raw: _Board, number: int, given: object) -> BenchReading | None:
        place = f"{self.place}.readings #{number}"
        line = self.reading.record(_Line, given, place)
        if line is None:
            return None
        condition, state = (self._where(place, key, raw, line) for key in ("condition", "state"))
        ref, _, name = line.figure.rpartition(".")
        figure = self._figure(place, line, ref, name)
        if figure is None:
            return None
        unit = figure.unit_of_measure
        value = self._number(place, "value", line.value, unit)
        uncertainty = self._uncertainty(place, line.uncertainty, value, unit)
        if (
            state
            and name in _AT_START
            and self.outline.states[state].get("starts_here") is not True
        ):
            cure = "Name the state in which the stage is switched on."
            self.tell(place, "state", f'"{state}"', "a state with starts_here", cure)
        if value is None or uncertainty is None or condition is None or state is None:
            return None
        return BenchReading(
            part=ref,
            figure=name,
            value=value,
            uncertainty=uncertainty,
            unit_of_measure=unit,
            junction_to_case=line.junction_to_case,
            condition=condition,
            state=state,
        )

    def _where(self, place: str, key: str, raw: _Board, line: _Line) -> str | None:
        """Condition or state of a reading: its own, else that of the board."""
        own, given = getattr(line, key), getattr(line, key) or getattr(raw, key)
        if given is not None and own is None:
            return given if given in self._valid(key) else None  # told for the board already
        found = self._case(place, key, given)
        if given is None and found is None:
            expected = f"the {key} it was measured in: {', '.join(self._valid(key))}"
            self.tell(place, key, "nothing", expected, "Name it here, or for the whole board.")
        return found

    def _valid(self, key: str) -> list[str]:
        return list(self.outline.conditions if key == "condition" else self.outline.states)

    def _figure(self, place: str, line: _Line, ref: str, name: str) -> FigureInfo | None:
        """The figure a reading shows; a case temperature counts as the junction's, cooler."""
        kind = self.outline.kinds.get(ref, "") if ref else STAGE
        if name == CASE_TEMPERATURE and kind == "mosfet":
            if line.junction_to_case is None:
                expected = "the thermal resistance from junction to case"
                self.tell(place, "junction_to_case", "nothing", expected, "It is on the datasheet.")
            if "thermal_resistance" not in self.outline.parts.get(ref, {}):
                expected = f"thermal_resistance of {ref}, or its junction stays at ambient"
                self.tell(f"parts.{ref}", "thermal_resistance", "nothing", expected)
            return figure_of(kind, "junction_temperature")
        if line.junction_to_case is not None:
            self.tell(place, "junction_to_case", "a value", f"it with {CASE_TEMPERATURE} only")
        figure = figure_of(kind, name) if kind not in ("", TRIM) else None
        if figure is not None and name not in _NO_METER:
            return figure
        if kind in ("", TRIM):
            valid = [one for one, k in self.outline.kinds.items() if k not in (RAIL, TRIM)]
            what = "a figure of the stage, or of a part of this study"
            valid = valid if ref else [one for one in FIGURES if "." not in one]
            bad = self.outline.unknown(place, "figure", ref or name, what, valid)
        else:
            named = [one.name for one in figures_of(kind) if one.name not in _NO_METER]
            extra = [CASE_TEMPERATURE] if kind == "mosfet" else []
            valid = [f"{ref}.{one}" if ref else one for one in named + extra]
            bad = self.outline.unknown(
                place, "figure", line.figure, "a figure a bench shows", valid
            )
        self.reading.problems.append(bad)
        return None

    def _number(self, place: str, key: str, given: object, unit: str) -> float | None:
        try:
            return bound(given, unit)
        except Mistake as mistake:
            self.tell(place, key, written(given), mistake.expected, mistake.cure)
            return None

    def _uncertainty(
        self, place: str, given: object, value: float | None, unit: str
    ) -> float | None:
        """In the figure's unit of measure, or a share of the value."""
        relative = isinstance(given, str) and given.strip().endswith("%") and unit != "1"
        found = self._number(
            place, "uncertainty", given, "1" if relative else "K" if unit == "degC" else unit
        )
        if found is not None and found < 0.0:
            self.tell(place, "uncertainty", written(given), "a width, 0 or more")
            return None
        return None if found is None or value is None else found * (abs(value) if relative else 1.0)

    def _probes(self, given: object) -> Iterator[Probe]:
        tables = given if isinstance(given, list | tuple) else [given]
        nets = sorted(_nets(self.outline))
        for number, table in enumerate(tables, 1):
            place = f"{self.place}.probe" + (f" #{number}" if len(tables) > 1 else "")
            probe = self.reading.record(Probe, table, place)
            if probe is None:
                continue
            for key in ("net", "to"):
                net = getattr(probe, key)
                if net not in nets:
                    what = "a net of this study"
                    bad = self.outline.unknown(place, key, net, what, nets)
                    self.reading.problems.append(bad)
            if probe.net == probe.to:
                self.tell(place, "net", f'"{probe.net}"', f'another net than "{probe.to}"')
            if not probe.capacitance and probe.resistance is None:
                self.tell(
                    place, "capacitance", "nothing", "a capacitance or resistance of the probe"
                )
            yield probe

    def _once(self, readings: list[BenchReading]) -> None:
        """Two readings of one figure in one case would count one meter twice."""
        seen = set()
        for one in readings:
            key = (one.column, one.condition, one.state)
            if key in seen:
                got = f"{one.column} twice in {one.condition}, {one.state}"
                self.tell(self.place, "readings", got, "each once", "Give their mean.")
            seen.add(key)


def _nets(outline: Outline) -> set[str]:
    """Every net that parts and rails name, and ground."""
    found = {GROUND}
    for table in (*outline.parts.values(), *outline.rails.values()):
        for key in _NETS:
            given = table.get(key)
            found.update(net for net in (given if isinstance(given, list) else [given]) if net)
    return {net for net in found if isinstance(net, str)}
