"""One entry `[table.NAME]` of a table file to a `SpreadTable`, every mistake told.

title, `for` (part kinds), basis, source, and one sub-table per quantity with the laws
`tolerance`, `lot`, `temperature` and `ageing`.  A law may carry its own basis and source.
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final, cast, get_args

from tolsim.errors import Mistake, Problem, nearest_name
from tolsim.laws import Law, Measured
from tolsim.laws.reading import read_law
from tolsim.parts import AnyPart
from tolsim.spread import measured_reading
from tolsim.spread.dependence_reading import dependence_mistakes, read_follows, read_tracking
from tolsim.spread.drift_reading import read_ageing, read_temperature
from tolsim.spread.readings import Readings
from tolsim.spread.shorthand import as_deviations, without_letter
from tolsim.spread.table import (
    ASPECTS,
    BASES,
    DEVIATIONS,
    Basis,
    Deviation,
    Origin,
    QuantitySpread,
    SpreadTable,
)

QUANTITIES: Final[Mapping[str, tuple[str, ...]]] = {
    **{
        get_args(part.model_fields["kind"].annotation)[0]: part.QUANTITIES + part.SHAPE
        for part in get_args(get_args(AnyPart)[0])
    },
    "rail": ("voltage",),
}
"""Quantities that may spread, by kind of part."""

UNITS: Final[Mapping[str, str]] = {
    "capacitance": "F",
    "esr": "ohm",
    "inductance": "H",
    "diameter": "m",
    "length": "m",
    "pitch": "m",
    "wire": "m",
    "al": "H",
    "resistance": "ohm",
    "voltage": "V",
    "threshold": "V",
    "gain": "A/V^2",
    "drift_resistance": "ohm",
    "high": "V",
    "low": "V",
}
"""Units of measure of the quantities; those not named are pure numbers."""

_SHEET_UNITS: Final = {"capacitance_scale": "F"}  # of sheet rows for quantities that have none
_BESIDE_LAWS: Final = ("basis", "source", "shared", "tracking")
_HEAD: Final = ("title", "for", "basis", "source")
_SETTINGS: Final = ("deviation", "implied_half_window", "follows")


@dataclass
class Entry:
    """Reader of one entry: knows where it stands, so that mistakes can say it."""

    file: str
    table: str
    problems: list[Problem] = field(default_factory=list)
    file_text: str = ""
    folder: Path | None = None
    readings: dict[str, Readings] = field(default_factory=dict)

    def report(self, mistake: Mistake, table: str = "", prefix: str = "") -> None:
        """Note a mistake with its place."""
        inner = "" if prefix and mistake.key == "value" else mistake.key
        key = ".".join(word for word in (prefix, inner) if word)
        self.problems.append(
            Problem(
                self.file,
                table or self.table,
                key,
                mistake.got,
                mistake.expected,
                mistake.nearest,
                mistake.cure,
            )
        )

    def read(self, name: str, entry: object, sha256: str) -> SpreadTable | None:
        """The whole entry, or None if it has any mistake."""
        before = len(self.problems)
        if not isinstance(entry, Mapping):
            self.report(Mistake("a table of keys", got=f"{entry!r}"))
            return None
        kinds = self._kinds(entry.get("for"))
        origin = self._origin(entry, None, "")
        title = self._text(entry, "title", "")
        likely = kinds or tuple(QUANTITIES)  # whatever it is for, its laws shall be read
        allowed = tuple(dict.fromkeys(q for kind in likely for q in QUANTITIES[kind]))
        quantities: dict[str, QuantitySpread] = {}
        for key, value in entry.items():
            if key in _HEAD:
                continue
            if key not in allowed:
                self._unknown(key, (*_HEAD, *allowed), "")
            elif not isinstance(value, Mapping):
                self.report(Mistake("a table of laws", key=key, got=f"{value!r}"))
            else:
                having = kinds or tuple(kind for kind in likely if key in QUANTITIES[kind])
                quantities[key] = self._quantity(key, value, having, origin)
        for mistake in dependence_mistakes(quantities):
            self.report(mistake)
        if not quantities and len(self.problems) == before:
            self.report(Mistake("laws for at least one of " + ", ".join(allowed), got="none"))
        if len(self.problems) > before:
            return None
        return SpreadTable(
            name,
            title,
            kinds,
            origin.basis,
            origin.source,
            quantities,
            self.file,
            self._hash(sha256),
            self.file_text,
            {path: readings.text for path, readings in self.readings.items()},
        )

    def _hash(self, sha256: str) -> str:
        """Hash of the table file, or of it and the files of readings the entry names."""
        if not self.readings:
            return sha256
        parts = [sha256, *(readings.sha256 for readings in self.readings.values())]
        return hashlib.sha256("\n".join(parts).encode()).hexdigest()

    def _unknown(self, key: str, valid: tuple[str, ...], table: str) -> None:
        nearest = nearest_name(key, list(valid))
        expected = "one of " + ", ".join(valid)
        self.report(Mistake(expected, key=key, got=f'"{key}"', nearest=nearest), table)

    def _choice(self, value: object, valid: tuple[str, ...], key: str, table: str) -> str:
        """One of the words in `valid`."""
        if value not in valid:
            got = f'"{value}"' if value is not None else "nothing"
            nearest = nearest_name(str(value), list(valid))
            self.report(
                Mistake("one of " + ", ".join(valid), key=key, got=got, nearest=nearest), table
            )
            return valid[0]
        return str(value)

    def _text(self, entry: Mapping[str, Any], key: str, table: str) -> str:
        value = entry.get(key)
        if not isinstance(value, str) or not value.strip():
            got = "nothing" if value is None else f"{value!r}"
            self.report(Mistake("a text", key=key, got=got), table)
            return ""
        return value.strip()

    def _kinds(self, given: object) -> tuple[str, ...]:
        """Kinds of part the entry is for."""
        words = [given] if isinstance(given, str) or given is None else given
        if not isinstance(words, list):
            words = [str(given)]
        before = len(self.problems)
        kinds = tuple(self._choice(word, tuple(QUANTITIES), "for", "") for word in words)
        return kinds if len(self.problems) == before else ()

    def _origin(self, words: Mapping[str, Any], default: Origin | None, table: str) -> Origin:
        """Basis and source of an entry, or of one law that has its own."""
        if default is not None and not {"basis", "source"} & set(words):
            return default
        basis = self._choice(words.get("basis"), BASES, "basis", table)
        return Origin(cast("Basis", basis), self._text(words, "source", table))

    def _quantity(
        self, name: str, given: Mapping[str, Any], kinds: tuple[str, ...], origin: Origin
    ) -> QuantitySpread:
        """Laws of one quantity."""
        table = f"{self.table}.{name}"
        given = self._with_meter(given, table)
        for key in given:
            if key not in (*_SETTINGS, *ASPECTS):
                self._unknown(key, (*ASPECTS, *_SETTINGS), table)
        ways = DEVIATIONS if name == "threshold" else DEVIATIONS[:2]
        deviation = self._choice(given.get("deviation", "relative"), ways, "deviation", table)
        laws: dict[str, Any] = {}
        origins: dict[str, Origin] = {}
        shared: set[str] = set()
        tracking: dict[str, float] = {}
        for aspect in ASPECTS:
            if aspect not in given:
                continue
            if aspect == "temperature" and "mosfet" in kinds:
                self.report(
                    Mistake(
                        "no temperature law: a MOSFET follows its junction",
                        "Set threshold_slope, gain_exponent or drift_exponent of the part.",
                        key=aspect,
                        got="one",
                    ),
                    table,
                )
                continue
            words = given[aspect]
            if isinstance(words, Mapping):
                own = self._origin(words, origin, f"{table}.{aspect}")
                if self._shared(words, aspect, table):
                    shared.add(aspect)
                alike = read_tracking(words, aspect, lambda mistake: self.report(mistake, table))
                tracking |= {} if alike is None else {aspect: alike}
                words = {k: v for k, v in words.items() if k not in _BESIDE_LAWS}
            else:
                own = origin
            laws[aspect] = self._law(aspect, words, name, deviation, kinds, table)
            if isinstance(laws[aspect], Measured) and own is origin and own.basis != "measured":
                sample = laws[aspect].sample
                own = Origin("measured", f"{sample.pieces} pieces in {sample.file}")
            if laws[aspect] is not None:
                origins[aspect] = own
        spread = QuantitySpread(
            **laws,
            deviation=cast("Deviation", deviation),
            implied_half_window=self._half_window(given, table),
            shared=frozenset(shared),
            tracking=tracking,
            follows=self._follows(given, origin, origins, table),
            origins=origins,
        )
        self._check_reach(spread, table)
        return spread

    def _follows(
        self, given: Mapping[str, Any], origin: Origin, origins: dict[str, Origin], table: str
    ) -> dict[str, float]:
        """Other quantities this one follows; their origin joins the others."""
        if "follows" not in given:
            return {}
        words = given["follows"]
        if isinstance(words, Mapping):
            origins["follows"] = self._origin(words, origin, f"{table}.follows")
        return read_follows(words, lambda mistake: self.report(mistake, table))

    def _with_meter(self, given: Mapping[str, Any], table: str) -> Mapping[str, Any]:
        """The `meter_bias` of a measured law as a law of its own: the same for all parts."""
        tolerance = given.get("tolerance")
        if not isinstance(tolerance, Mapping) or "meter_bias" not in tolerance:
            return given
        if tolerance.get("law") != measured_reading.NAME or "meter" in given:
            expected = "meter_bias in a measured law, and no law meter beside it"
            self.report(Mistake(expected, key="tolerance.meter_bias"), table)
            return given
        rest = {key: value for key, value in tolerance.items() if key != "meter_bias"}
        meter = {"law": "uniform", "half_width": tolerance["meter_bias"]}
        own = {key: tolerance[key] for key in ("basis", "source") if key in tolerance}
        return {**given, "tolerance": rest, "meter": {**meter, **own}}

    def _law(
        self,
        aspect: str,
        words: object,
        name: str,
        deviation: str,
        kinds: tuple[str, ...],
        table: str,
    ) -> object:
        """Law of one aspect, of the class that belongs to it."""

        def report(mistake: Mistake) -> None:
            self.report(mistake, table, aspect)

        if aspect == "temperature":
            return read_temperature(words, report)
        if aspect == "ageing":
            return read_ageing(words, report)
        own = UNITS.get(name, "1")
        if isinstance(words, Mapping) and words.get("law") == measured_reading.NAME:
            reel = measured_reading.read_measured(words, self.folder, own, deviation, report)
            if reel is None:
                return None
            self.readings[reel.path] = reel.readings
            return reel.law
        words = without_letter(words, kinds, name, deviation, report)
        if isinstance(words, Mapping) and words.get("law") == "window" and deviation == "relative":
            words = as_deviations(words, _SHEET_UNITS.get(name, own), report)
        if words is None:
            return None
        unit = own if deviation == "absolute" else "1"
        also = (measured_reading.NAME,)
        return read_law(words, unit, report, relative=deviation == "relative", also=also)

    def _shared(self, words: Mapping[str, Any], aspect: str, table: str) -> bool:
        """True if the law is drawn once for a whole reel."""
        if "shared" not in words:
            return False
        if aspect in ("temperature", "ageing"):
            return self._choice(words["shared"], ("reel", "part"), "shared", table) == "reel"
        self.report(
            Mistake("no key shared: a reel shares lot, a table its meter", key="shared"), table
        )
        return False

    def _half_window(self, given: Mapping[str, Any], table: str) -> float:
        """Half of the threshold window to assume, in V."""
        if "implied_half_window" not in given:
            return 1.0

        def report(mistake: Mistake) -> None:
            self.report(mistake, table, "implied_half_window")

        law = read_law(given["implied_half_window"], "V", report)
        if law is not None and not law.support[0] > 0.0:
            report(Mistake("a voltage above 0", got=f"{law.support[0]:g} V"))
        return law.mean if law is not None else 1.0

    def _check_reach(self, spread: QuantitySpread, table: str) -> None:
        """Lot shift and tolerance together must leave a part that can exist."""
        every = (spread.tolerance, spread.lot, spread.meter)
        laws: list[Law] = [law for law in every if law is not None]
        low = sum(law.support[0] for law in laws)
        high = sum(law.support[1] for law in laws)
        if spread.deviation == "position" and (low < -1.0 - 1e-9 or high > 1.0 + 1e-9):
            self.report(
                Mistake(
                    "tolerance and lot that stay together within -1 .. 1",
                    "Parts outside the datasheet window are not delivered.",
                    key="deviation",
                    got=f"{low:g} .. {high:g}",
                ),
                table,
            )
        if spread.deviation == "relative" and laws and low < -1.0:
            self.report(
                Mistake("a smallest value above zero", key="tolerance", got=f"{low:.0%} together"),
                table,
            )
