"""Periodic steady state by shooting: Newton on x(T; x0) = x0 with the period unknown.

    [ M - I   dx(T)/dT ] [dx0]     [ x(T) - x0              ]
    [ row     0        ] [dT ] = - [ row . (x0 - reference) ]

M is the monodromy matrix carried along the steps, `row` the phase condition: the start stays on
the plane through a reference point, across the reference flow.  T. J. Aprille, T. N. Trick,
"A computer algorithm to determine the steady-state response of nonlinear oscillators", IEEE Trans.
Circuit Theory CT-19 (1972) 354-360.  Driven stages have T given and no phase row.

The junction temperatures take part: after each period they move to the heat balance of that period.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.charge import charge_rows, islands
from tolsim.circuit.cycle import Cycle, run_cycle
from tolsim.circuit.devices import Floats, Ints
from tolsim.circuit.floquet import deflated_multipliers, largest_beside_charge
from tolsim.circuit.orbit import Solution, Status
from tolsim.circuit.stepper import solve_each
from tolsim.circuit.thermal import HIGHEST_C, Case

TOLERANCE = 2e-5  # accepted Newton correction, relative to the amplitude of each state
HEAT_TOLERANCE = 0.05  # K
LONGEST_MOVE = 0.6  # of the amplitude, per round
LONGEST_DRIVEN_MOVE = 10.0  # the same: a clocked stage is nearly linear, its guess far off
LARGEST_PERIOD_MOVE = 0.08  # relative, per round
HEAT_FROM = 0.05  # temperatures move once the correction is below this
LARGEST_HEAT_MOVE = 40.0  # K per round
SMALLEST_SWING = 1e-3  # of the reference amplitude: below, the "orbit" is the bias point


@dataclass(frozen=True)
class Frame:
    """Scales and phase condition shared by all units of a case, from the nominal orbit."""

    scale: Floats  # (n,) amplitude of each state
    point: Floats  # (n,) reference point
    row: Floats  # (n,) phase row, in scaled states
    lead: int  # state that swings hardest against its scale
    driven: bool


@dataclass(frozen=True)
class HeatResponse:
    """How heat balance and orbit of the nominal unit answer to its k junction temperatures.

    With Theta(T) the balance that the orbit at junction temperatures T leads to, `gain` is
    (I - dTheta/dT)^-1: one Newton step of T = Theta(T) is `gain` (Theta - T).
    """

    gain: Floats  # (k, k)
    orbit: Floats  # (k, n + 1) d(x0 / scale, ln T) per kelvin


@dataclass
class Start:
    """Where each unit begins."""

    x: Floats  # (N, n)
    period: Floats  # (N,)
    junctions: dict[str, Floats]  # (N,) each

    def take(self, units: Ints) -> Start:
        """Return the starts of some of the units."""
        return Start(
            self.x[units],
            self.period[units],
            {ref: celsius[units] for ref, celsius in self.junctions.items()},
        )


def shoot(
    case: Case,
    start: Start,
    frame: Frame,
    steps: int,
    rounds: int,
    way: str,
    *,
    heat: HeatResponse | None = None,
    patience: int | None = None,
) -> Solution:
    """Settle the orbit of every unit, or say so.

    Parameters
    ----------
    steps : int
        TR-BDF2 steps per period.
    rounds : int
        Largest number of periods integrated per unit.
    way : str
        Name of this path for the record.
    heat : HeatResponse, optional
        Speeds the heat balance up; without it temperatures go to the balance of each round.
    patience : int, optional
        For rival starts of one unit: rounds to go on after the first stable orbit.

    Returns
    -------
    Solution
        Units not settled carry `Status.NOT_CONVERGED` and NaN samples.
    """
    units, n = start.x.shape
    found = unsolved(case, units, n, steps, way)
    members: Floats | None = None
    active = np.arange(units)
    here = start.take(np.arange(units))
    working = case
    rounds_left: int | None = None
    for round_ in range(1, rounds + 1):
        network = working.network(here.junctions)
        with np.errstate(all="ignore"):  # a unit that runs away is sorted out below, by its status
            cycle = run_cycle(network, here.x, here.period, steps, derivatives=True)
        move = _newton_move(cycle, here, frame)
        size = np.abs(move).max(axis=1)
        balance = working.balance(network, cycle.samples)
        warming = _heat_moves(here, balance, size, heat)
        still = np.abs(warming).max(axis=1, initial=0.0)
        swing = np.ptp(cycle.samples[:, :, frame.lead], axis=0) / frame.scale[frame.lead]
        alive = frame.driven | (swing > SMALLEST_SWING)
        runaway = (size < HEAT_FROM) & _at_ceiling(here, balance)
        done = (size < TOLERANCE) & (still < HEAT_TOLERANCE) & cycle.settled & alive & ~runaway
        if done.any():
            picked = np.flatnonzero(done)
            if members is None:
                members = islands(network)
            charges = charge_rows(network.take(picked), members, here.x[picked])
            _record(found, active[picked], picked, cycle, here, size, frame, charges)
        lost = ~np.isfinite(size) | ~alive | ~cycle.settled
        found.status[active[runaway]] = Status.NO_THERMAL_BALANCE
        found.iterations[active] = round_
        if patience is not None and np.any(found.status == Status.SETTLED):
            rounds_left = patience if rounds_left is None else rounds_left - 1
            if rounds_left <= 0:
                break
        going = np.flatnonzero(~(done | lost | runaway))
        if not going.size:
            break
        if heat is not None:
            move = move + (warming @ heat.orbit)[:, : move.shape[1]]
        here = _advance(here, move, warming, frame)
        active, working, here = active[going], working.take(going), here.take(going)
    return found


def unsolved(case: Case, units: int, n: int, steps: int, way: str) -> Solution:
    """A solution still to be found."""
    return Solution(
        status=np.full(units, Status.NOT_CONVERGED, dtype=np.intp),
        samples=np.full((steps + 1, units, n), np.nan),
        period=np.full(units, np.nan),
        residual=np.full(units, np.nan),
        multipliers=np.full((units, n), np.nan, dtype=complex),
        iterations=np.zeros(units, dtype=np.intp),
        junctions={ref: np.full(units, np.nan) for ref in case.cold_junctions()},
        way=np.full(units, way, dtype="U24"),
    )


def bordered_matrix(cycle: Cycle, frame: Frame, period: Floats) -> Floats:
    """Newton matrix in scaled unknowns (x / scale, ln T); no last row and column if driven."""
    assert cycle.monodromy is not None
    units, n, _ = cycle.monodromy.shape
    size = n if frame.driven else n + 1
    matrix = np.zeros((units, size, size))
    matrix[:, :n, :n] = cycle.monodromy * (frame.scale / frame.scale[:, None]) - np.eye(n)
    if not frame.driven:
        assert cycle.by_period is not None
        matrix[:, :n, n] = cycle.by_period * period[:, None] / frame.scale
        matrix[:, n, :n] = frame.row
    return matrix


def _newton_move(cycle: Cycle, here: Start, frame: Frame) -> Floats:
    """Newton correction of (x / scale, ln T), (N, n + 1); NaN where the system is unsolvable."""
    matrix = bordered_matrix(cycle, frame, here.period)
    gap = (cycle.samples[-1] - here.x) / frame.scale
    if not frame.driven:
        phase = ((here.x - frame.point) / frame.scale) @ frame.row
        gap = np.concatenate([gap, phase[:, None]], axis=1)
    sound = np.isfinite(matrix).all(axis=(1, 2)) & np.isfinite(gap).all(axis=1)
    matrix[~sound] = np.eye(matrix.shape[1])
    move = -solve_each(matrix, gap[:, :, None])[:, :, 0]
    move[~sound] = np.nan
    return move


def _heat_moves(
    here: Start, balance: dict[str, Floats], size: Floats, heat: HeatResponse | None
) -> Floats:
    """Temperature moves (N, k) towards the balance, none while the orbit is still far off."""
    if not here.junctions:
        return np.zeros((len(size), 0))
    gap = np.stack(
        [np.minimum(balance[ref], HIGHEST_C) - celsius for ref, celsius in here.junctions.items()],
        axis=1,
    )
    step = gap if heat is None else gap @ heat.gain.T
    near = (size < HEAT_FROM)[:, None] & np.isfinite(step)
    return np.where(near, np.clip(step, -LARGEST_HEAT_MOVE, LARGEST_HEAT_MOVE), 0.0)


def _at_ceiling(here: Start, balance: dict[str, Floats]) -> NDArray[np.bool_]:
    """Units with a junction at the highest temperature that still wants to rise."""
    hot = np.zeros(len(here.period), dtype=bool)
    for ref, celsius in here.junctions.items():
        hot |= (celsius >= HIGHEST_C - HEAT_TOLERANCE) & (balance[ref] > HIGHEST_C)
    return hot


def _advance(here: Start, move: Floats, warming: Floats, frame: Frame) -> Start:
    """Apply the correction, shortened where it is too long to be trusted."""
    n = here.x.shape[1]
    longest = np.abs(move[:, :n]).max(axis=1)
    limit = LONGEST_DRIVEN_MOVE if frame.driven else LONGEST_MOVE
    share = np.minimum(1.0, limit / np.maximum(longest, 1e-300))
    period = here.period
    if not frame.driven:
        share = np.minimum(share, LARGEST_PERIOD_MOVE / np.maximum(np.abs(move[:, n]), 1e-300))
        period = here.period * np.exp(share * move[:, n])
    x = here.x + share[:, None] * move[:, :n] * frame.scale
    junctions = {
        ref: np.minimum(celsius + warming[:, k], HIGHEST_C)
        for k, (ref, celsius) in enumerate(here.junctions.items())
    }
    return Start(x, period, junctions)


def _record(
    found: Solution,
    places: Ints,
    picked: Ints,
    cycle: Cycle,
    here: Start,
    size: Floats,
    frame: Frame,
    charges: Floats,
) -> None:
    """Write settled units into the solution (which is still being built here)."""
    assert cycle.monodromy is not None
    found.samples[:, places] = cycle.samples[:, picked]
    found.period[places] = here.period[picked]
    found.residual[places] = size[picked]
    for ref, celsius in here.junctions.items():
        found.junctions[ref][places] = celsius[picked]
    multipliers = deflated_multipliers(
        cycle.monodromy[picked],
        cycle.samples[:, picked],
        frame.scale,
        charges,
        driven=frame.driven,
    )
    found.multipliers[places] = multipliers
    stable = largest_beside_charge(multipliers) < 1.0
    found.status[places] = np.where(stable, Status.SETTLED, Status.UNSTABLE)
