"""Datasheet rows of a MOSFET to model parameters at 25 degC, with every assumption stated.

Model in saturation (drain far above gate):  i_d = k/2 S(vgs - Vt)^2,  S(x) = s ln(1 + e^(x/s)),
with s the knee width of the part (Enz, Krummenacher, Vittoz 1995 interpolation).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.optimize import brentq

from tolsim.errors import Mistake
from tolsim.laws.window import completed
from tolsim.mosfet_sheet import OnResistanceRow, Sheet, TransferRow
from tolsim.parts import Mosfet

TYPICAL_TO_MAXIMUM_ON = 1.2  # Rds(on) maximum / typical, where the sheet gives one of them
CHANNEL_SHARE = 0.5  # of Rds(on), where the sheet has no row for the gain


@dataclass(frozen=True)
class ThresholdWindow:
    """Gate threshold at the test current of the sheet, V."""

    minimum: float
    typical: float
    maximum: float

    def shift(self, position: ArrayLike) -> NDArray[np.float64]:
        """Threshold at `position` (-1 minimum, 0 typical, +1 maximum) less the typical one."""
        position = np.asarray(position, dtype=np.float64)
        below, above = self.typical - self.minimum, self.maximum - self.typical
        return np.where(position < 0.0, position * below, position * above)


@dataclass(frozen=True)
class DeviceParameters:
    """Model parameters at 25 degC: V, A/V2, ohm, F; and how they were arrived at.

    `assumptions` are sentences about everything the sheet did not say.
    """

    threshold: float
    gain: float
    drift_resistance: float
    cgs: float
    cgd0: float
    cds0: float
    assumptions: tuple[str, ...] = ()


def device_parameters(mosfet: Mosfet) -> DeviceParameters:
    """Parameters of a MOSFET given by datasheet rows or directly.

    Raises
    ------
    Mistake
        If the rows contradict each other: a transfer point that no square law through the
        threshold reaches, or an on-resistance at a gate voltage below threshold.
    """
    if mosfet.model is not None:
        model = mosfet.model
        return DeviceParameters(
            model.threshold,
            model.gain,
            model.drift_resistance,
            model.cgs,
            model.cgd0,
            model.cds0,
        )
    if mosfet.sheet is None:
        raise Mistake("either sheet or model", "Copy the rows of the datasheet.", key="sheet")
    sheet, said = mosfet.sheet, []
    window = threshold_window(mosfet, 1.0)
    gain, from_gain = _gain(sheet, window.typical, mosfet.knee)
    said += from_gain
    threshold = window.typical - _inverse_knee(
        math.sqrt(2.0 * sheet.threshold.current / gain), mosfet.knee
    )
    drift, from_drift = _drift_resistance(sheet, threshold, gain)
    said += from_drift
    row = sheet.capacitance
    growth = (1.0 + row.drain_voltage / mosfet.junction_potential) ** mosfet.grading
    return DeviceParameters(
        threshold,
        gain,
        drift,
        row.ciss - row.crss,
        row.crss * growth,
        (row.coss - row.crss) * growth,
        tuple(said),
    )


def threshold_window(mosfet: Mosfet, implied_half_window: float) -> ThresholdWindow:
    """Threshold window of the sheet, completed where values are missing.

    A missing limit mirrors the other one about typical; typical, if missing, is the middle;
    with one value only, or with model parameters, `implied_half_window` (V) is taken.
    """
    return ThresholdWindow(*completed(*_printed_threshold(mosfet), implied_half_window))


def _printed_threshold(mosfet: Mosfet) -> tuple[float | None, float | None, float | None]:
    """Minimum, typical and maximum as far as they are given."""
    if mosfet.sheet is not None:
        row = mosfet.sheet.threshold
        return row.minimum, row.typical, row.maximum
    return None, mosfet.model.threshold if mosfet.model is not None else None, None


def window_assumptions(mosfet: Mosfet, implied_half_window: float) -> tuple[str, ...]:
    """Sentences about what `threshold_window` had to assume."""
    window = threshold_window(mosfet, implied_half_window)
    implied = f"{window.minimum:.3g} / {window.typical:.3g} / {window.maximum:.3g} V"
    if mosfet.sheet is None:
        return (f"threshold window {implied} assumed around the model threshold",)
    row = mosfet.sheet.threshold
    missing = [name for name in ("minimum", "typical", "maximum") if getattr(row, name) is None]
    if not missing:
        return ()
    return (f"threshold {' and '.join(missing)} not on the sheet: window taken as {implied}",)


def _inverse_knee(value: float, knee: float) -> float:
    """Overdrive x with S(x) = value: x = s ln(e^(value/s) - 1), without overflow."""
    return value + knee * math.log(-math.expm1(-value / knee))


def _gain(sheet: Sheet, threshold_row: float, knee: float) -> tuple[float, list[str]]:
    """Gain k in A/V2 from the best row there is."""
    if sheet.transfer is not None:
        return _gain_from_transfer(sheet.transfer, sheet.threshold.current, threshold_row, knee), []
    row = sheet.transconductance
    if row is not None:
        said = []
        conductance = row.typical
        if conductance is None:
            conductance = row.minimum or 0.0
            said = ["transconductance: only the minimum is on the sheet, taken as typical"]
        return conductance**2 / (2.0 * row.current), said  # gm = sqrt(2 k I), square law
    on = sheet.on_resistance
    if on is None:
        raise Mistake(
            "a row for the gain",
            "Give transfer, transconductance or on_resistance.",
            key="transfer",
            got="none",
        )
    overdrive = _overdrive(on.gate_voltage, threshold_row)
    resistance, said = _on_resistance(on)
    said.append(
        f"gain: no transfer point or transconductance on the sheet, channel taken as "
        f"{CHANNEL_SHARE:.0%} of the on-resistance (guess)"
    )
    return 1.0 / (CHANNEL_SHARE * resistance * overdrive), said


def _gain_from_transfer(
    row: TransferRow, test_current: float, threshold_row: float, knee: float
) -> float:
    """Gain k so that one square law passes through the threshold row and the transfer point.

    With y = sqrt(2/k) the overdrives are S^-1(y sqrt I) and their difference must be the
    difference of the gate voltages; it rises with y, from s/2 ln(I2/I1) at y = 0.
    """
    small, large = math.sqrt(test_current), math.sqrt(row.current)
    rise = row.gate_voltage - threshold_row
    least = knee * math.log(large / small) if large > small else math.inf
    if not rise > least:
        raise Mistake(
            f"a transfer point more than {max(least, 0.0):.3g} V above the threshold row"
            if large > small
            else "a transfer point at more current than the threshold row",
            "Take a point well above threshold.",
            key="transfer",
            got=f"{row.current:g} A at {row.gate_voltage:g} V",
        )

    def excess(log_y: float) -> float:
        y = math.exp(log_y)
        return _inverse_knee(y * large, knee) - _inverse_knee(y * small, knee) - rise

    highest = math.log((rise + 10.0 * knee) / (large - small)) + 1.0
    root = float(brentq(excess, highest - 30.0, highest, xtol=1e-13))
    return 2.0 * math.exp(-2.0 * root)


def _on_resistance(row: OnResistanceRow) -> tuple[float, list[str]]:
    """Typical on-resistance, ohm."""
    if row.typical is not None:
        return row.typical, []
    typical = (row.maximum or 0.0) / TYPICAL_TO_MAXIMUM_ON
    said = (
        f"on-resistance: only the maximum is on the sheet, typical taken as "
        f"maximum / {TYPICAL_TO_MAXIMUM_ON:g} (guess)"
    )
    return typical, [said]


def _overdrive(gate_voltage: float, threshold: float) -> float:
    """Gate voltage of the on-resistance row above threshold."""
    if not gate_voltage > threshold:
        raise Mistake(
            f"a gate voltage above the threshold of {threshold:.3g} V",
            key="on_resistance.gate_voltage",
            got=f"{gate_voltage:g} V",
        )
    return gate_voltage - threshold


def _drift_resistance(sheet: Sheet, threshold: float, gain: float) -> tuple[float, list[str]]:
    """What the channel, 1 / (k (Vgs - Vt)), leaves of the on-resistance."""
    row = sheet.on_resistance
    if row is None:
        return 0.0, ["on-resistance not on the sheet: no drift resistance, channel only"]
    total, said = _on_resistance(row)
    channel = 1.0 / (gain * _overdrive(row.gate_voltage, threshold))
    if channel > total:
        said.append(
            f"on-resistance {total:.3g} ohm is less than the channel of the gain row "
            f"({channel:.3g} ohm): drift resistance taken as 0"
        )
    return max(total - channel, 0.0), said
