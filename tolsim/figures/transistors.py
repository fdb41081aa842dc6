"""Figures of one MOSFET: stresses, where its heat comes from, its junction temperature."""

from __future__ import annotations

import numpy as np

from tolsim.circuit.devices import Floats
from tolsim.circuit.periodic import extremes, largest, mean, rms
from tolsim.figures.waves import Waves
from tolsim.parts import Mosfet


def mosfet(
    ref: str, part: Mosfet, waves: Waves, threshold: Floats, junction: Floats, supply: Floats
) -> dict[str, Floats]:
    """Figures of one transistor.

    Parameters
    ----------
    threshold : (N,)
        At the junction's temperature, V.
    junction : (N,)
        Junction temperature, degC.
    supply : (N,)
        Highest supply voltage, V, which the turn-on voltage is compared with.

    Notes
    -----
    Voltages are those at the terminals, and so is the drain current: with the charge that goes
    into and out of the drain's capacitances, without what circulates inside (the output
    capacitance discharging through the channel is a loss, not a current of the terminal).
    The channel's loss counts as conduction where the channel is ohmic (vds < vgs - Vt) and as
    switching where it is saturated: there the drain voltage has not collapsed yet, or has come
    back already.
    """
    inner_gate, inner_drain = waves.port(f"{ref}:gs"), waves.port(f"{ref}:ds")
    drain = waves.across(part.drain, part.source_net)
    gate = waves.across(part.gate, part.source_net)
    channel = waves.currents[f"{ref}:forward"] + waves.currents[f"{ref}:reverse"]
    body = -waves.currents[f"{ref}:body"]
    power = channel * inner_drain
    ohmic = inner_drain < inner_gate - threshold
    drift = _series(waves, part.drain, f"{ref}:drain")
    gate_loss = _series(waves, part.gate, f"{ref}:gate")
    conduction = mean(np.where(ohmic, power, 0.0)) + drift
    switching = mean(np.where(ohmic, 0.0, power))
    body_loss = mean(body * inner_drain)
    turn_on = _at_turn_on(inner_gate - threshold, inner_drain)
    drain_high, drain_low = extremes(drain)
    gate_high, gate_low = extremes(gate)
    drawn = _drain_current(ref, part, waves, channel + body)
    return {
        "drain_peak": drain_high,
        "drain_negative_peak": np.maximum(-drain_low, 0.0),
        "turn_on_voltage": turn_on,
        "turn_on_share": turn_on / supply,
        "gate_peak": np.maximum(gate_high, -gate_low),
        "gate_positive_peak": gate_high,
        "gate_negative_peak": np.maximum(-gate_low, 0.0),
        "drain_current_peak": largest(drawn),
        "drain_current_rms": rms(drawn),
        "dissipation": conduction + switching + body_loss + gate_loss,
        "conduction_loss": conduction,
        "switching_loss": switching,
        "body_diode_loss": body_loss,
        "gate_loss": gate_loss,
        "junction_temperature": junction,
    }


def _drain_current(ref: str, part: Mosfet, waves: Waves, conducted: Floats) -> Floats:
    """Current into the drain terminal, (m, N)."""
    inner = f"{ref}:drain"
    if inner in waves.network.index:
        return waves.series_current(part.drain, inner)
    return conducted + waves.rate(waves.charges[f"{ref}:gd"] + waves.charges[f"{ref}:ds"])


def _series(waves: Waves, outer: str, inner: str) -> Floats:
    """Mean loss in the resistance between a terminal and the intrinsic transistor."""
    if inner not in waves.network.index:
        return np.zeros(waves.network.units)
    return mean(waves.series_current(outer, inner) * waves.across(outer, inner))


def _at_turn_on(overdrive: Floats, drain: Floats) -> Floats:
    """Drain voltage where the gate crosses its threshold upwards; NaN if it never does.

    Of several crossings in a period the one with the highest drain voltage counts.
    """
    after, next_drain = np.roll(overdrive, -1, axis=0), np.roll(drain, -1, axis=0)
    rises = (overdrive < 0) & (after >= 0)
    gap = np.where(rises, after - overdrive, 1.0)
    share = np.where(rises, -overdrive / gap, 0.0)
    here = np.where(rises, drain + share * (next_drain - drain), -np.inf)
    found = here.max(axis=0)
    return np.where(np.isfinite(found), found, np.nan)
