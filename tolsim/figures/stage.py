"""Figures of whole stages and all their parts, from settled orbits, with the energy balance."""

from __future__ import annotations

import numpy as np

from tolsim.circuit.device_groups import feed_branch
from tolsim.circuit.devices import Floats
from tolsim.circuit.floquet import largest_beside_charge
from tolsim.circuit.network import Network
from tolsim.circuit.orbit import Solution
from tolsim.circuit.periodic import mean
from tolsim.circuit.thermal import Case, hot_values
from tolsim.design import Design, Rail
from tolsim.figures import parts as passive
from tolsim.figures.transistors import mosfet
from tolsim.figures.waves import Waves
from tolsim.parts import (
    AnyPart,
    Capacitor,
    Clamp,
    Diode,
    Drive,
    Inductor,
    Load,
    Mosfet,
    Potentiometer,
    Resistor,
)


def measure_orbits(case: Case, solution: Solution) -> dict[str, Floats]:
    """Every figure of every unit that has an orbit.

    Parameters
    ----------
    case : Case
        N units.
    solution : Solution
        Their orbits; units without one (NaN samples) get NaN figures.

    Returns
    -------
    dict of str to (N,)
        "frequency", "C1.voltage_peak", ... in SI units, temperatures in degC.
    """
    solved = np.flatnonzero(np.isfinite(solution.period))
    if not solved.size:
        return {}
    inner, orbits = case.take(solved), solution.take(solved)
    network = inner.network(orbits.junctions)
    waves = Waves.of(network, orbits)
    figures = _part_figures(inner, network, waves, orbits)
    figures |= _stage_figures(inner.design, network, waves, figures)
    figures["slowest_multiplier"] = largest_beside_charge(orbits.multipliers)
    figures["orbit_residual"] = orbits.residual
    return {name: _spread_out(values, solved, case.units) for name, values in figures.items()}


def _spread_out(
    values: Floats, solved: np.ndarray[tuple[int], np.dtype[np.intp]], units: int
) -> Floats:
    """Values of the solved units among all, NaN elsewhere."""
    whole = np.full(units, np.nan)
    whole[solved] = values
    return whole


def highest_supply(design: Design, network: Network) -> Floats:
    """The highest rail voltage of every unit, V."""
    return np.max([network.supplies[rail].volts for rail in design.rails], axis=0)


def _part_figures(
    case: Case, network: Network, waves: Waves, orbits: Solution
) -> dict[str, Floats]:
    figures: dict[str, Floats] = {}
    hot = hot_values(case.design, case.values, orbits.junctions)
    supply = highest_supply(case.design, network)
    for ref, part in case.design.parts.items():
        own: dict[str, Floats]
        match part:
            case Mosfet():
                threshold = hot[f"{ref}.threshold"]
                own = mosfet(ref, part, waves, threshold, orbits.junctions[ref], supply)
            case Capacitor():
                own = passive.capacitor(ref, part, waves, case.values)
            case Inductor():
                own = passive.inductor(ref, part, waves, case.values)
            case Resistor():
                own = passive.resistor(ref, part, waves, case.values)
            case Potentiometer():
                own = passive.potentiometer(ref, part, waves, case.values)
            case Load():
                own = passive.load(ref, waves, case.values)
            case Diode():
                own = passive.diode(ref, part, waves)
            case Clamp():
                own = passive.clamp(ref, part, waves)
            case _:  # couplings and drives have no figures of their own
                own = {}
        figures |= {f"{ref}.{name}": value for name, value in own.items()}
    return figures


def _stage_figures(
    design: Design, network: Network, waves: Waves, figures: dict[str, Floats]
) -> dict[str, Floats]:
    """Powers, currents of the rails, efficiency and the energy balance."""
    answer: dict[str, Floats] = {"frequency": 1.0 / waves.period}
    supply_power = np.zeros(network.units)
    total_current = np.zeros(network.units)
    for rail, supply in network.supplies.items():
        current = supply.at(waves.x, np.zeros(len(supply.through)))
        for name, branch in waves.currents.items():
            share = float(_injection(network, name) @ supply.through)
            if share:
                current = current + share * branch
        answer[f"{rail}.current_mean"] = mean(current)
        answer[f"{rail}.current_ripple"] = np.ptp(current, axis=0)
        total_current = total_current + mean(current)
        supply_power = (
            supply_power + supply.volts * mean(current) - _held_back(waves, rail, current)
        )
    output = _output_power(design, figures, network.units)
    driven = _drive_power(design, network, waves)
    incoming = supply_power + driven
    spent = _dissipated(design, network, waves, figures)
    return answer | {
        "supply_current": total_current,
        "input_power": supply_power,
        "output_power": output,
        "efficiency": output / np.where(incoming > 0, incoming, np.nan),
        "energy_balance": (incoming - spent) / np.where(incoming > 0, incoming, np.nan),
    }


def _held_back(waves: Waves, rail: str, current: Floats) -> Floats:
    """Power that a supply does not give because its limit lowers its voltage, W."""
    drop = waves.currents.get(f"{rail}:limit")
    return np.zeros(waves.network.units) if drop is None else mean(drop * current)


def _injection(network: Network, name: str) -> Floats:
    """How one element's current enters the port currents, (p,)."""
    for elements in network.devices.elements:
        if elements.kind == "current" and name in elements.names:
            return elements.inject[:, elements.names.index(name)]
    raise KeyError(name)


def _output_power(design: Design, figures: dict[str, Floats], units: int) -> Floats:
    """Power in the loads and in the resistors marked as output."""
    total = np.zeros(units)
    for ref, part in design.parts.items():
        if isinstance(part, Load) or (isinstance(part, Resistor) and part.delivers_output):
            total = total + figures[f"{ref}.dissipation"]
    return total


def _drive_power(design: Design, network: Network, waves: Waves) -> Floats:
    """Mean power that the drive sources put in (their series resistance counts as outside)."""
    total = np.zeros(network.units)
    if network.drive_matrix is None or network.drive_shape is None:
        return total
    drives = [part for part in design.parts.values() if isinstance(part, Drive)]
    points = len(waves.x)
    levels = np.stack([network.drive_shape.at(k / points) for k in range(points)])
    for d, part in enumerate(drives):
        voltage = waves.across(*part.nets)
        total = total + mean(voltage * (levels[..., d] - voltage)) / part.resistance
    return total


def _dissipated(
    design: Design, network: Network, waves: Waves, figures: dict[str, Floats]
) -> Floats:
    """All heat and output: parts, sources' resistances, and the leaks."""
    total = np.zeros(network.units)
    for ref, part in design.parts.items():
        name = _heat_figure(part)
        if isinstance(part, Capacitor):
            plate = f"{ref}:plate"
            if plate in network.index:
                current = waves.series_current(part.nets[0], plate)
                total = total + mean(current * waves.across(part.nets[0], plate))
        elif name is not None:
            total = total + figures[f"{ref}.{name}"]
    for name, rail in design.rails.items():
        total = total + _supply_loss(network, waves, name, rail)
    nets = [i for net, i in network.index.items() if net not in network.branches]
    return total + design.leak * np.sum(np.mean(waves.x[..., nets] ** 2, axis=0), axis=-1)


def _supply_loss(network: Network, waves: Waves, name: str, rail: Rail) -> Floats:
    """Heat in the resistance and cable of a supply and in its bulk capacitor, W."""
    total = np.zeros(network.units)
    feed = feed_branch(name)
    if feed in network.index:
        resistance = network.F[:, network.index[feed], network.index[feed]]
        total = total + resistance * mean(waves.branch(feed) ** 2)
    elif rail.resistance > 0:
        total = total + mean(waves.across(f"{name}:source", rail.net) ** 2) / rail.resistance
    bulk = f"{name}:bulk"
    if bulk in network.index:
        total = total + mean(waves.series_current(rail.net, bulk) * waves.across(rail.net, bulk))
    return total


def _heat_figure(part: AnyPart) -> str | None:
    match part:
        case Inductor():
            return "loss"
        case Mosfet() | Resistor() | Potentiometer() | Load() | Diode() | Clamp():
            return "dissipation"
        case _:
            return None
