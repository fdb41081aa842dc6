"""How long a unit with its switches on and no oscillation lasts, until a junction is too hot.

The supply then sees chokes and switches in series.  Its current rises with an electrical time
constant tau of the circuit at that bias point, i(t) = I (1 - exp(-t/tau)), and with it the
dissipation, P(t) = P(T) (i/I)^2, where P(T) is that of the bias point at junction temperature T.
The junction is one thermal pole, C dT/dt = P - (T - T_ambient) / R, so that C matters while the
current is short and R when it lasts.  The heat capacity is that of the junction and what is
fastened to it; where a part does not state one, `HEAT_CAPACITY` stands in (a guess).

For tau the area between I and i(t) is taken, divided by I, as in W. C. Elmore, "The transient
response of damped linear networks", J. Appl. Phys. 19 (1948) 55: the slowest mode would not do,
for it is a charge trapped between capacitors, which the current does not feel.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from tolsim.circuit.bias import Bias, bias_point
from tolsim.circuit.devices import Floats
from tolsim.circuit.network import Network
from tolsim.circuit.startup import small_signal
from tolsim.circuit.thermal import HIGHEST_C, Case, dissipation, mosfets

HEAT_CAPACITY = 0.05  # J/K, a power package's die and the tab under it (guess)
FIRST_MOMENT, LAST_MOMENT = 1e-7, 1e3  # s
MOMENTS = 800
SHORTEST_RISE = 1e-9  # s
GRID = (0.0, 50.0, 100.0, 175.0, HIGHEST_C - 25.0)  # K above ambient, for P(T)


@dataclass(frozen=True)
class Latch:
    """N units that sit in DC conduction."""

    current: Floats  # (N,) A, of all rails in the end, junctions at ambient
    rise_time: Floats  # (N,) s, electrical time constant tau of the current
    damage_time: Mapping[str, Floats]  # MOSFET -> (N,) s to its junction limit; inf if never


def latch_of(case: Case, guess: Floats | None = None) -> Latch:
    """What DC conduction does to the units of a case.

    Parameters
    ----------
    case : Case
        N cold units.
    guess : (N, n), optional
        Bias points to begin from.
    """
    ambient = case.values["ambient"]
    powers: dict[str, list[Floats]] = {ref: [] for ref in mosfets(case.design)}
    x = guess
    current = rise = np.zeros(case.units)
    for above in GRID:
        network = case.network(dict.fromkeys(powers, ambient + above))
        bias = bias_point(network, x)
        x = bias.x
        losses = dissipation(case.design, network, np.stack([bias.x, bias.x]))
        for ref, loss in losses.items():
            powers[ref].append(loss)
        if above == 0.0:
            flows, *_ = network.devices.evaluate(bias.v)
            current = sum((s.at(bias.x, flows) for s in network.supplies.values()), current)
            rise = _rise_time(network, bias, current)
    times = {}
    for ref, part in mosfets(case.design).items():
        limit = part.rating.junction_temperature
        times[ref] = np.full(case.units, np.inf)
        if limit is not None and part.thermal_resistance:
            times[ref] = _time_to(
                limit,
                ambient,
                np.stack(powers[ref]),
                rise,
                part.thermal_resistance,
                part.thermal_capacity or HEAT_CAPACITY,
            )
    return Latch(current, rise, times)


def _rise_time(network: Network, bias: Bias, current: Floats) -> Floats:
    """Area missing under the supply current as it rises from zero charge, over `current`, (N,) s.

    With C dx/dt + J x = b the area under the missing states is J^-1 C x(end).
    """
    storage, slopes, _ = small_signal(network, bias)
    missing = np.einsum("uij,uj->ui", storage, bias.x)[:, :, None]
    area = np.linalg.solve(slopes, missing)[:, :, 0]
    flows = np.einsum("uij,uj->ui", bias.G, area @ network.D.T)
    charge = np.zeros(network.units)
    for supply in network.supplies.values():
        charge = charge + supply.at(area, flows, 0.0)
    return np.maximum(charge / current, SHORTEST_RISE)


def _time_to(
    limit: float, ambient: Floats, power: Floats, rise: Floats, resistance: float, capacity: float
) -> Floats:
    """When each junction passes `limit`, (N,) s; `power` (g, N) W at the temperatures of `GRID`."""
    moments = np.geomspace(FIRST_MOMENT, LAST_MOMENT, MOMENTS)
    warm = np.zeros(len(ambient))  # K above ambient
    found = np.where(ambient >= limit, 0.0, np.inf)
    before = 0.0
    for now in moments:
        share = -np.expm1(-0.5 * (before + now) / rise)
        heat = _at(warm, power) * share**2
        # exact for constant heat, so that steps may be long against R C
        end = resistance * heat
        warm = np.minimum(
            end + (warm - end) * np.exp(-(now - before) / (resistance * capacity)), HIGHEST_C
        )
        found = np.where(np.isinf(found) & (ambient + warm >= limit), now, found)
        before = now
    return found


def _at(warm: Floats, power: Floats) -> Floats:
    """Power of every unit at its temperature, linear between the points of `GRID`."""
    grid = np.array(GRID)
    place = np.clip(np.searchsorted(grid, warm, side="right") - 1, 0, len(grid) - 2)
    share = np.clip((warm - grid[place]) / (grid[place + 1] - grid[place]), 0.0, 1.0)
    every = np.arange(len(warm))
    return (1.0 - share) * power[place, every] + share * power[place + 1, every]
