"""Figures of the passive parts, diodes and clamps: one function per kind, arrays (N,)."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from tolsim.circuit.devices import Floats
from tolsim.circuit.periodic import highest, largest, mean, rms
from tolsim.figures.waves import Waves
from tolsim.parts import Capacitor, Clamp, Diode, Inductor, Potentiometer, Resistor

Figures = dict[str, Floats]
PartValues = Mapping[str, Floats]


def capacitor(ref: str, part: Capacitor, waves: Waves, values: PartValues) -> Figures:
    """Stress of the hardest-worked piece of a bank: currents share by value."""
    voltage = waves.across(*part.nets)
    current = waves.capacitor_current(ref, part, values[f"{ref}.capacitance"])
    share = values[f"{ref}.largest_share"]
    alternating = rms(voltage - mean(voltage))
    through = rms(current)
    loss = through**2 * values[f"{ref}.esr"] * share
    figures = {
        "voltage_peak": largest(voltage),
        "voltage_rms": rms(voltage),
        "current_rms": through * share,
        "reactive_power": alternating * through * share,
        "loss": loss,
    }
    if part.thermal_resistance is not None:
        figures["self_heating"] = loss * part.thermal_resistance
    return figures | _body(loss, part.thermal_resistance, values)


def inductor(ref: str, part: Inductor, waves: Waves, values: PartValues) -> Figures:
    """Currents, loss in the winding, use of its saturation rating."""
    current = waves.branch(ref)
    loss = mean(current**2) * values[f"{ref}.resistance"]
    peak = largest(current)
    figures = {
        "current_peak": peak,
        "current_rms": rms(current),
        "loss": loss,
        "voltage_peak": largest(waves.across(*part.nets)),
    }
    if part.rating.saturation_current:
        figures["saturation_use"] = peak / part.rating.saturation_current
    return figures | _body(loss, part.thermal_resistance, values)


def _body(loss: Floats, thermal_resistance: float | None, values: PartValues) -> Figures:
    """Body temperature, where a thermal resistance is given."""
    if thermal_resistance is None:
        return {}
    return {"body_temperature": values["ambient"] + loss * thermal_resistance}


def resistor(ref: str, part: Resistor, waves: Waves, values: PartValues) -> Figures:
    """Heat."""
    dissipation = mean(waves.across(*part.nets) ** 2) / values[f"{ref}.resistance"]
    return {"dissipation": dissipation} | _body(dissipation, part.thermal_resistance, values)


def potentiometer(ref: str, part: Potentiometer, waves: Waves, values: PartValues) -> Figures:
    """Both halves of the track together."""
    low, wiper, high = part.nets
    setting = np.clip(values[f"{ref}.setting"], part.end_zone, 1 - part.end_zone)
    track = values[f"{ref}.resistance"]
    lower = mean(waves.across(wiper, low) ** 2) / (track * setting)
    upper = mean(waves.across(high, wiper) ** 2) / (track * (1 - setting))
    return {"dissipation": lower + upper}


def load(ref: str, waves: Waves, values: PartValues) -> Figures:
    """Power taken, current and voltage of the coupled loop."""
    current = waves.branch(ref)
    resistance = values[f"{ref}.resistance"]
    return {
        "dissipation": mean(current**2) * resistance,
        "current_rms": rms(current),
        "voltage_peak": largest(current) * resistance,
    }


def diode(ref: str, part: Diode, waves: Waves) -> Figures:
    """Heat, forward currents, reverse voltage."""
    voltage = waves.across(part.anode, part.cathode)
    current = waves.currents[ref]
    return {
        "dissipation": mean(voltage * current),
        "current_peak": highest(current),
        "current_rms": rms(current),
        "reverse_peak": highest(-voltage),
    }


def clamp(ref: str, part: Clamp, waves: Waves) -> Figures:
    """Heat and currents, both directions together."""
    current = waves.currents[f"{ref}:up"] - waves.currents[f"{ref}:down"]
    return {
        "dissipation": mean(waves.across(*part.nets) * current),
        "current_peak": largest(current),
        "current_rms": rms(current),
    }
