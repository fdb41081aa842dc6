"""What a study asks about switching on: records of its tables on starts."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Annotated, Final

from pydantic import Field

from tolsim.quantity import Duration, InnerShare, Share, SignedShare
from tolsim.records import Frozen

RAMP_TIME: Final = "ramp_time"
CONDITION_AXES: Final[Mapping[str, str]] = {"ambient": "degC", "supply": "1", "age": "h"}
"""What an axis may set of the condition, with its unit of measure."""

Units = Annotated[int, Field(ge=1, le=10_000)]


class Axis(Frozen):
    """One side of a start map: what is set, and to which values."""

    what: str  # "ramp_time", "ambient", "supply", "age" or "REF.quantity"
    unit_of_measure: str
    values: Annotated[tuple[float, ...], Field(min_length=1, max_length=20)]
    rails: tuple[str, ...] = ()  # whose ramps are stretched; empty: all


class StartMap(Frozen):
    """Units switched on under every pair of values of two axes."""

    across: Axis
    down: Axis
    condition: str
    state: str
    units: Units = 24
    with_run: bool = True  # False leaves it to `tolsim start-map`


class SupplyContract(Frozen):
    """How slow and how low a supply may be, looked for unit by unit."""

    ramp_time: tuple[Duration, Duration] | None = None  # s, from the fastest to the slowest
    supply: tuple[SignedShare, SignedShare] | None = None  # deviation, from the lowest up
    rails: tuple[str, ...] = ()  # whose ramps are stretched; empty: all
    conditions: tuple[str, ...]  # a unit must start in all of them
    state: str
    units: Units = 24
    covers: InnerShare = 0.95  # of all units, by the bound for the purchase
    with_run: bool = True


class RepeatedStarts(Frozen):
    """The same units switched on again and again."""

    condition: str
    state: str
    units: Units = 8
    tries: Annotated[int, Field(ge=2, le=1000)] = 20
    off_time: tuple[Duration, Duration] = (10e-3, 10.0)  # s, between two tries
    ramp_jitter: Share = 0.1  # of the ramp times, to either side
    with_run: bool = True


class Starts(Frozen):
    """All that a study asks about switching on."""

    start_map: StartMap | None = None
    supply_contract: SupplyContract | None = None
    repeated_starts: RepeatedStarts | None = None
