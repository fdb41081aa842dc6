"""Figures of starting: modes at the bias point, margin, time to full swing, idle losses."""

from __future__ import annotations

import numpy as np

from tolsim.circuit.bias import Bias, bias_point
from tolsim.circuit.critical import Critical
from tolsim.circuit.devices import Floats
from tolsim.circuit.kernels import element_waves
from tolsim.circuit.network import Network
from tolsim.circuit.nominal import Nominal
from tolsim.circuit.startup import critical_point, modes, noise_amplitude, resemblance, start_margin
from tolsim.circuit.thermal import Case, mosfets

FULL_SWING = 0.9  # of the orbit's amplitude


def measure_start(case: Case, nominal: Nominal) -> dict[str, Floats]:
    """Start figures of every unit, junctions at ambient temperature.

    Returns
    -------
    dict of str to (N,)
        Start margin, growth, frequency, time, idle currents and losses; "mode_match" is the
        likeness of the leading mode to the nominal one (0 to 1), not a figure of its own.
    """
    network = case.network(case.cold_junctions())
    guess = np.broadcast_to(nominal.bias.x[0], (case.units, network.states))
    bias = bias_point(network, guess)
    lead = modes(network, bias, nominal.shift)
    margin = start_margin(network, bias, nominal.shift, _nominal_critical(nominal), lead)
    noise = noise_amplitude(network, bias, lead, case.values["ambient"])
    swing = _orbit_swing(nominal)
    with np.errstate(divide="ignore", invalid="ignore"):
        time = np.where(lead.growth > 0, np.log(FULL_SWING * swing / noise) / lead.growth, np.inf)
    unsettled = np.where(bias.settled, 1.0, np.nan)
    figures = {
        "start_margin": margin,
        "growth_rate": lead.growth,
        "start_frequency": lead.frequency,
        "start_time": np.where(np.isfinite(time), time, np.nan),
        "mode_match": resemblance(network, lead.vector, nominal.modes.vector[0]),
    }
    figures |= measure_idle(case, network, bias)
    return {name: values * unsettled for name, values in figures.items()}


def measure_idle(case: Case, network: Network, bias: Bias) -> dict[str, Floats]:
    """Idle currents and losses of every unit at a bias point, each (N,)."""
    port_current, *_ = network.devices.evaluate(bias.v)
    idle_current = np.zeros(case.units)
    idle_power = np.zeros(case.units)
    channel = element_waves(network.devices, bias.v.T[:, None], "current")
    for rail, supply in network.supplies.items():
        current = supply.at(bias.x, port_current)
        idle_current = idle_current + current
        # a supply at its limit lowers its voltage
        volts = supply.volts - channel.get(f"{rail}:limit", np.zeros((1, case.units)))[0]
        idle_power = idle_power + volts * current
    figures = {"idle_current": idle_current, "idle_dissipation": idle_power}
    for ref in mosfets(case.design):
        current = channel[f"{ref}:forward"][0] + channel[f"{ref}:reverse"][0]
        figures[f"{ref}.idle_dissipation"] = current * bias.v[:, network.ports[f"{ref}:ds"]]
    return figures


def _nominal_critical(nominal: Nominal) -> Critical | None:
    network = nominal.case.network(nominal.case.cold_junctions())
    return critical_point(network, nominal.bias, nominal.shift)


def _orbit_swing(nominal: Nominal) -> float:
    """Largest port amplitude of the nominal orbit, V."""
    if not nominal.found:
        return 1.0
    network = nominal.case.network(nominal.solution.junctions)
    volts = network.port_voltages(nominal.solution.samples[:, 0])
    return float(0.5 * np.ptp(volts, axis=0).max())
