"""A checked study: the design, its load states and conditions, its limits, how to run it.

Frozen records, SI floats (temperatures in degC).  `tolsim.study` reads them from TOML and
checks that they make sense together; nothing after it needs to check again.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Annotated, Any, Literal

from pydantic import Field

from tolsim.parts import AnyPart, Net
from tolsim.quantity import (
    Age,
    Current,
    Duration,
    Frequency,
    Leak,
    ResistanceOrZero,
    Share,
    SignedShare,
    Temperature,
    TemperatureDifference,
    Voltage,
)
from tolsim.records import Frozen

GROUND = "gnd"


class Rail(Frozen):
    """A net held at a DC voltage by a supply."""

    net: Net
    voltage: Voltage
    resistance: ResistanceOrZero = 0.0
    ramp_time: Duration | None = None
    current_limit: Current | None = None
    follows_supply: bool = True  # scaled by the supply deviation of a condition
    spread: str | None = None
    source: str | None = None


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
    """

    title: str = ""
    ambient: Temperature | Mapping[str, Any] = 25.0
    supply: SignedShare | Mapping[str, Any] = 0.0
    age: Age | Mapping[str, Any] = 0.0  # hours
    board_rise: TemperatureDifference = 0.0


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
    rank: tuple[str, ...] = ()  # figures to rank factors for, "Q1.drain_peak"


class Study(Frozen):
    """Everything a run needs, checked."""

    title: str
    scenario: str = ""
    design: Design
    states: Mapping[str, State]
    conditions: Mapping[str, Condition]
    limits: tuple[Limit, ...]
    run: Run
    expected_frequency: tuple[Frequency, Frequency] | None = None
    kind: Literal["self-oscillating", "driven"] = "self-oscillating"
