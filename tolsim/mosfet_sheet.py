"""What is known of a MOSFET: rows of its datasheet as printed, or model parameters."""

from __future__ import annotations

from typing import Self, TypeVar

from pydantic import model_validator

from tolsim.errors import Mistake
from tolsim.quantity import (
    Capacitance,
    CapacitanceOrZero,
    Conductance,
    Current,
    Gain,
    Resistance,
    ResistanceOrZero,
    Voltage,
    show,
)
from tolsim.records import Frozen

Row = TypeVar("Row", bound=Frozen)


def _window(row: Row) -> Row:
    """Refuse a datasheet row without any value, or whose values do not rise."""
    values = [getattr(row, key, None) for key in ("minimum", "typical", "maximum")]
    present = [value for value in values if value is not None]
    if not present:
        raise Mistake("at least one of the printed values", "Copy the row of the datasheet.")
    if present != sorted(present):
        raise Mistake("minimum <= typical <= maximum", "Check the row of the datasheet.")
    return row


class ThresholdRow(Frozen):
    """Gate threshold voltage at a small drain current; any value may be missing, not all."""

    minimum: Voltage | None = None
    typical: Voltage | None = None
    maximum: Voltage | None = None
    current: Current

    @model_validator(mode="after")
    def _is_a_window(self) -> Self:
        return _window(self)


class TransferRow(Frozen):
    """One point of the transfer curve: drain current at a gate voltage."""

    current: Current
    gate_voltage: Voltage


class TransconductanceRow(Frozen):
    """Forward transconductance at a drain current; one value may be missing."""

    minimum: Conductance | None = None
    typical: Conductance | None = None
    current: Current

    @model_validator(mode="after")
    def _is_a_window(self) -> Self:
        return _window(self)


class OnResistanceRow(Frozen):
    """Drain-source resistance when fully on, at a gate voltage; one value may be missing."""

    typical: Resistance | None = None
    maximum: Resistance | None = None
    gate_voltage: Voltage

    @model_validator(mode="after")
    def _is_a_window(self) -> Self:
        return _window(self)


class CapacitanceRow(Frozen):
    """Input, output and reverse capacitance at a drain voltage (gate at the source)."""

    ciss: Capacitance
    coss: Capacitance
    crss: Capacitance
    drain_voltage: Voltage

    @model_validator(mode="after")
    def _reverse_is_smallest(self) -> Self:
        # Ciss = Cgs + Cgd and Coss = Cds + Cgd, while Crss is Cgd alone.
        for key in ("ciss", "coss"):
            if getattr(self, key) <= self.crss:
                got = show(getattr(self, key), "F")
                raise Mistake(
                    f"more than crss ({show(self.crss, 'F')})", "Swap the rows.", key=key, got=got
                )
        return self


class Sheet(Frozen):
    """Datasheet rows of a MOSFET at 25 degC, as printed."""

    threshold: ThresholdRow
    transfer: TransferRow | None = None
    transconductance: TransconductanceRow | None = None
    on_resistance: OnResistanceRow | None = None
    capacitance: CapacitanceRow


class DeviceModel(Frozen):
    """MOSFET parameters given directly instead of datasheet rows (all at 25 degC)."""

    threshold: Voltage
    gain: Gain  # k in A/V2, i_d = k/2 (vgs - Vt)^2
    cgs: CapacitanceOrZero = 0.0
    cgd0: CapacitanceOrZero = 0.0
    cds0: CapacitanceOrZero = 0.0
    drift_resistance: ResistanceOrZero = 0.0


class BodyDiode(Frozen):
    """Diode from source to drain, same law as `Diode`."""

    voltage: Voltage = 0.75
    resistance: Resistance = 0.02
    knee: Voltage = 0.05
