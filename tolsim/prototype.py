"""A built board as it was measured: readings with their uncertainty, and how they were taken."""

from __future__ import annotations

from collections.abc import Mapping

from tolsim.parts import Net
from tolsim.quantity import CapacitanceOrZero, Resistance
from tolsim.records import Frozen

CASE_TEMPERATURE = "case_temperature"


class Probe(Frozen):
    """What a probe puts between a net and ground (or another net) while it is attached."""

    net: Net
    to: Net = "gnd"
    capacitance: CapacitanceOrZero = 0.0
    resistance: Resistance | None = None


class BenchReading(Frozen):
    """One figure as a meter showed it.

    `uncertainty` is the expanded one with coverage factor 2, as calibration sheets state it (JCGM
    100:2008, section 6): about 95 % of errors lie within it.  A case temperature stands for the
    junction temperature less `junction_to_case` (K/W) times the dissipation.
    """

    part: str  # "" for the stage
    figure: str
    value: float
    uncertainty: float
    unit_of_measure: str
    condition: str
    state: str
    junction_to_case: float | None = None

    @property
    def column(self) -> str:
        """Name of the figure's column: "frequency", "Q1.drain_peak"."""
        return f"{self.part}.{self.figure}" if self.part else self.figure


class Prototype(Frozen):
    """One board: its readings, the probes attached meanwhile, its own part values if known.

    Part values are as a nominal value is stated: at 25 degC, at the age its ageing law counts
    from, per piece of a bank.
    """

    title: str = ""
    source: str | None = None
    readings: tuple[BenchReading, ...]
    probes: tuple[Probe, ...] = ()
    parts: Mapping[str, float] = {}  # "C3.capacitance"
