"""Does a unit with an unstable orbit burst?  A run on the slow scale tells.

A multiplier outside the unit circle says that small disturbances grow, not what they grow into.
The unit is disturbed and run for as long as the disturbance needs to grow `GROWTHS` times by e, and
then for as long again.
"""

from __future__ import annotations

import numpy as np

from tolsim.circuit.devices import Floats, Ints
from tolsim.circuit.floquet import largest_beside_charge
from tolsim.circuit.orbit import Solution, Status
from tolsim.circuit.poweron.envelope import BURST_RATIO, OSCILLATES, comes_and_goes, envelope
from tolsim.circuit.thermal import Case
from tolsim.circuit.transients.journey import Goal, Ramps, travel

KICK = 0.03  # of the way to the point a quarter of a period later
GROWTHS = 8.0
FEWEST, MOST = 200.0, 3000.0  # periods of a run
NEAR = 0.02  # of the orbit's swing
STEADY = 1.02  # largest over smallest swing of a unit that came back


def look_at_bursts(case: Case, orbits: Solution, lead: int, scale: Floats) -> Ints:
    """Status of units whose orbits are unstable, after a run in time.

    `UNSTABLE` if the swing comes and goes, or never settles; `SETTLED` if the unit returned to its
    orbit after all (the multiplier was a matter of the grid); `NO_ORBIT` if the swing died.

    Parameters
    ----------
    case : Case
        N units.
    orbits : Solution
        Their orbits, all with samples.
    lead : int
        State whose swing tells.
    scale : (n,)
        Size of every state.
    """
    network = case.network(orbits.junctions)
    start = orbits.samples[0]
    quarter = orbits.samples[(len(orbits.samples) - 1) // 4]
    rate = np.log(np.maximum(largest_beside_charge(orbits.multipliers), 1.0 + 1e-6))
    periods = np.clip(2.0 * GROWTHS / rate, FEWEST, MOST)
    goal = Goal(np.ptp(orbits.samples, axis=0), scale, lead)
    journey = travel(
        network,
        start + KICK * (quarter - start),
        Ramps.none(case.units),
        goal,
        orbits.period,
        periods * orbits.period,
        steady=-1.0,  # no early end: what looks steady at first may still grow
    )
    ratio, level = envelope(journey)
    share = level / goal.swing[:, lead]
    status = np.full(case.units, Status.UNSTABLE, dtype=np.intp)
    back = (ratio < STEADY) & (np.abs(share - 1.0) < NEAR) & (periods < MOST)
    swings = comes_and_goes(journey, np.zeros(case.units), OSCILLATES * goal.swing[:, lead])
    died = (share < OSCILLATES) & ~((ratio >= BURST_RATIO) & swings)
    status[back] = Status.SETTLED
    status[died] = Status.NO_ORBIT
    return status
