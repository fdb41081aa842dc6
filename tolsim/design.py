"""A checked study: the design, its load states and conditions, its limits, how to run it.

Frozen records, SI floats (temperatures in degC).  `tolsim.study` reads them from TOML and
checks that they make sense together; nothing after it needs to check again.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Annotated, Any, Literal, Self

from pydantic import Field, model_validator

from tolsim.errors import Mistake
from tolsim.mission import Mission
from tolsim.parts import AnyPart, Net
from tolsim.prototype import Prototype
from tolsim.quantity import (
    Age,
    Capacitance,
    Current,
    Duration,
    DurationOrZero,
    Frequency,
    Inductance,
    InnerShare,
    Leak,
    Level,
    ResistanceOrZero,
    Share,
    SignedShare,
    Temperature,
    TemperatureDifference,
    Voltage,
    show,
)
from tolsim.records import Frozen
from tolsim.starts.asked import Starts
from tolsim.transition import Transition

GROUND = "gnd"


class Dip(Frozen):
    """A passing fall of a supply's voltage: to 1 - `depth` of what it would be."""

    at: DurationOrZero  # s after power-on
    depth: Share
    length: Duration


class Bounce(Frozen):
    """A switch whose contact opens again `count` times after the first touch."""

    count: Annotated[int, Field(ge=1, le=100)]
    period: Duration  # s, from one touch to the next
    open_share: InnerShare = 0.5  # of the period


class Rail(Frozen):
    """A net held at a DC voltage by a supply: source, limit, resistance, cable, bulk capacitor.

    The source rises to `voltage` by its ramp; without one it is a step.  The current limit holds
    at full output voltage and falls to the share `foldback` of it at short circuit.
    """

    net: Net
    voltage: Voltage
    resistance: ResistanceOrZero = 0.0
    inductance: Inductance | None = None  # of the cable
    current_limit: Current | None = None
    foldback: Share | None = None
    bulk_capacitance: Capacitance | None = None  # from the net to ground
    bulk_resistance: ResistanceOrZero = 0.0  # in series with it
    ramp: Literal["step", "linear", "smooth", "exponential", "csv", "points"] | None = None
    ramp_time: Duration | None = None
    ramp_file: str | None = None  # recorded time and voltage, in the folder of the study
    ramp_points: tuple[tuple[DurationOrZero, Level], ...] = ()  # also those of the file
    delay: DurationOrZero = 0.0
    trip_time: Duration | None = None  # until a fuse or the supply itself ends an overload
    dip: Dip | None = None
    bounce: Bounce | None = None
    follows_supply: bool = True  # scaled by the supply deviation of a condition
    spread: str | None = None
    source: str | None = None

    @property
    def own_current(self) -> bool:
        """Whether the supply's current is a quantity of its own: it has a limit or a cable."""
        return self.inductance is not None or self.current_limit is not None


class Design(Frozen):
    """Parts joined at nets.  `parts` and `rails` map reference designators to records."""

    parts: Mapping[str, AnyPart]
    rails: Mapping[str, Rail]
    leak: Leak = 1e-8  # S, from every net to ground


class State(Frozen):
    """A named state of the load: `values` overrides "REF.quantity", `spread` overrides tables."""

    title: str = ""
    starts_here: bool = False
    values: Mapping[str, float] = {}
    spread: Mapping[str, str] = {}


class Condition(Frozen):
    """Ambient temperature, supply deviation and age at which every unit is judged.

    A chosen number, or a law (mapping with key "law") from which each unit draws its own.
    Ages are hours since the unit was built; a unit repaired since then was last soldered
    `since_soldering` hours ago.
    """

    title: str = ""
    ambient: Temperature | Mapping[str, Any] = 25.0
    supply: SignedShare | Mapping[str, Any] = 0.0
    age: Age | Mapping[str, Any] = 0.0  # hours
    since_soldering: Age | None = None  # hours; as old as the unit if not given
    board_rise: TemperatureDifference = 0.0

    @model_validator(mode="after")
    def _soldered_after_it_was_built(self) -> Self:
        since, age = self.since_soldering, self.age
        if since is not None and not isinstance(age, Mapping) and since > age:
            raise Mistake(
                f"no more than the age ({show(age, 'h')})",
                "A unit is soldered when it is built, or later.",
                key="since_soldering",
                got=show(since, "h"),
            )
        return self


class Limit(Frozen):
    """A bound on one figure: absolute (`at_most`, `at_least`) or a share of the part's rating."""

    figure: str
    parts: tuple[str, ...] = ()  # empty: every part that has this figure
    states: tuple[str, ...] = ()  # empty: every state
    conditions: tuple[str, ...] = ()
    at_most: float | None = None
    at_least: float | None = None
    share_of_rating: Share | None = None
    rule: str


class Run(Frozen):
    """How to run the study."""

    units: Annotated[int, Field(ge=1, le=10_000_000)] = 500
    seed: Annotated[int, Field(ge=0)] = 1
    confidence: Annotated[float, Field(gt=0.5, lt=1)] = 0.95
    steps_per_cycle: Annotated[int, Field(ge=32, le=4096)] = 192
    solver: Literal["auto", "shooting"] = "auto"
    law_check: bool | None = None  # None: if any tolerance or lot law is a guess
    sampling: Literal["random", "latin-hypercube", "sobol"] = "random"
    power_on_share: Share = 0.05  # of the units that look sure to start, switched on in time
    rank: tuple[str, ...] = ()  # figures to rank factors for, "Q1.drain_peak"
    transition_share: Share = 0.05  # of the units, whose changes of load are integrated in time
    transition_phases: Annotated[int, Field(ge=1, le=16)] = 1  # of the cycle, to change at


class Lots(Frozen):
    """How units share what they are built from.

    Units 0 ... units_per_lot - 1 are lot 0, and so on: every reel is bought anew for each lot,
    or for as many lots as `reels` says of it.
    """

    units_per_lot: Annotated[int, Field(ge=1, le=1_000_000)]
    reels: Mapping[str, Annotated[int, Field(ge=1, le=1_000_000)]] = {}  # lots that one lasts
    lost_when: Share = 0.1  # share of failing units that makes a lot a lost one

    def units_of(self, reel: str) -> int:
        """Units that are built from one reel (or from one purchase of a part without reel)."""
        return self.units_per_lot * self.reels.get(reel, 1)

    @property
    def lots_together(self) -> int:
        """Lots that may share reels: only groups of so many are independent of each other."""
        return math.lcm(*self.reels.values())

    @property
    def block(self) -> int:
        """Units in such a group."""
        return self.units_per_lot * self.lots_together


class Meter(Frozen):
    """Laws of the errors of a meter: it shows (1 + gain) true + offset + noise.

    Gain and offset belong to the meter and so to a whole lot of units; noise to each reading
    taken when the operator stops.  Each is a law (mapping with key "law") or a number.
    """

    gain: Mapping[str, Any] | float = 0.0
    offset: Mapping[str, Any] | float = 0.0
    noise: Mapping[str, Any] | float = 0.0


class Trim(Frozen):
    """One adjuster that an operator turns per unit until a reading meets its target.

    Position, range, resolution, coarse step and setting error are in `unit_of_measure`, that of
    the quantity; target, tolerance, offset and noise in `reading_unit`, that of the figure read.
    """

    part: str  # or a rail
    quantity: str
    unit_of_measure: str
    range: tuple[float, float]
    reading: str  # figure: "frequency", "Q1.idle_dissipation"; "idle_voltage" at `net`
    reading_unit: str
    net: str | None = None
    target: float
    within: float
    resolution: float
    coarse_step: float
    start: float | None = None  # None: where the part stands untrimmed
    condition: str
    state: str
    most_turns: int = 40
    meter: Meter = Meter()
    setting_error: Mapping[str, Any] | float = 0.0
    order: int = 0
    source: str | None = None
    confidence: Literal["measured", "sheet", "typical", "guess"] | None = None

    @property
    def address(self) -> str:
        """What is adjusted: "P1.setting"."""
        return f"{self.part}.{self.quantity}"


class Study(Frozen):
    """Everything a run needs, checked."""

    title: str
    scenario: str = ""
    design: Design
    states: Mapping[str, State]
    conditions: Mapping[str, Condition]
    limits: tuple[Limit, ...]
    run: Run
    lots: Lots | None = None  # none: every unit from reels of its own
    mission: Mission | None = None
    prototypes: Mapping[str, Prototype] = {}
    trims: Mapping[str, Trim] = {}  # in the order in which they are done
    transitions: tuple[Transition, ...] = ()  # of the load, in their order
    starts: Starts = Starts()
    expected_frequency: tuple[Frequency, Frequency] | None = None
    kind: Literal["self-oscillating", "driven"] = "self-oscillating"
