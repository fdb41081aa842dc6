"""The nominal orbit: from the bias point and its leading mode to a settled, checked orbit.

Several kicks of different size along the leading mode are integrated side by side over a few
tens of cycles; each end is handed to shooting, and the stable orbit with the largest swing wins.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tolsim.circuit.bias import Bias, bias_point
from tolsim.circuit.devices import Floats
from tolsim.circuit.network import Network
from tolsim.circuit.orbit import Solution, Status
from tolsim.circuit.shooting import Frame, Start, shoot
from tolsim.circuit.startup import Modes, modes, oscillation_scale
from tolsim.circuit.thermal import Case
from tolsim.circuit.transient import march

KICKS = (0.2, 0.5, 1.0, 2.0)  # of the highest supply voltage, on the leading net
COARSE_STEPS = 64  # per cycle of the leading mode, while finding the orbit
COARSE_CYCLES = 16
TRIES = 5
STILL_DYING = 0.97  # swing in the second half of the last cycles, relative to the first half
SHOOTING_ROUNDS = 40
PATIENCE = 3  # rounds that rival kicks get after the first has settled
LEVEL_SHARE = 0.25
SCALE_FLOOR = 1e-3  # of the largest amplitude of the same kind of state
LEAST_PURITY = 0.5  # share of a state's power in its strongest line, for a period to be read off
LEAST_CROSSINGS = 4  # upward crossings that make a period
REGULAR_WITHIN = 0.2  # of the coarse period, for an interval between crossings to count
LEAST_INTERVALS = 2


@dataclass(frozen=True)
class Nominal:
    """The nominal unit of a case: everything that other units are compared with and start from."""

    case: Case  # one unit
    bias: Bias
    modes: Modes
    shift: float  # rad/s, angular frequency scale of the stage
    solution: Solution
    frame: Frame | None  # None when no orbit was found

    @property
    def found(self) -> bool:
        """Whether the unit has an orbit."""
        return self.frame is not None


def find_nominal(case: Case, steps: int) -> Nominal:
    """Find the orbit of the first unit of a case.

    Parameters
    ----------
    case : Case
        One unit.
    steps : int
        TR-BDF2 steps per period of the final orbit.
    """
    network = case.network(case.cold_junctions())
    bias = bias_point(network)
    shift = _shift(network, bias)
    leading = modes(network, bias, shift)
    for attempt in range(TRIES):
        ends, window, step = _settle(network, bias, leading, shift, COARSE_CYCLES * 2**attempt)
        if attempt and leading.growth[0] < 0 and _dying(network, window):
            break
        guess = _first_guess(case, network, ends, window, step)
        if guess is None:
            continue
        frame, start = guess
        copies = case.take(np.zeros(len(start.period), dtype=np.intp))
        solution = shoot(copies, start, frame, steps, SHOOTING_ROUNDS, "nominal", patience=PATIENCE)
        best = _best(solution, frame)
        if best is not None:
            chosen = solution.take(np.array([best]))
            return Nominal(
                case, bias, leading, shift, chosen, frame_of(network, chosen, frame.lead)
            )
    return Nominal(case, bias, leading, shift, _none(case, network, steps), None)


def _shift(network: Network, bias: Bias) -> float:
    if network.drive_frequency is not None:
        return 2 * np.pi * network.drive_frequency
    return oscillation_scale(network, bias)


def _none(case: Case, network: Network, steps: int) -> Solution:
    """The answer "no orbit" for one unit."""
    return Solution(
        status=np.array([Status.NO_ORBIT], dtype=np.intp),
        samples=np.full((steps + 1, 1, network.states), np.nan),
        period=np.full(1, np.nan),
        residual=np.full(1, np.nan),
        multipliers=np.full((1, network.states), np.nan, dtype=complex),
        iterations=np.zeros(1, dtype=np.intp),
        junctions=case.cold_junctions(),
        way=np.array(["none"], dtype="U24"),
    )


def _settle(
    network: Network, bias: Bias, leading: Modes, shift: float, cycles: int
) -> tuple[Floats, Floats, float]:
    """Integrate the kicked copies; return the last quarter of the run and its step."""
    highest = _highest_supply(network)
    swing = np.max(np.abs(leading.vector[0]))
    mode = leading.vector[0].real / swing
    copies = network.take(np.zeros(len(KICKS), dtype=np.intp))
    x0 = bias.x[0] + np.array(KICKS)[:, None] * highest * mode
    period = 2 * np.pi / shift
    step = period / COARSE_STEPS
    phase_step = 1 / COARSE_STEPS if network.drive_matrix is not None else 0.0
    count = cycles * COARSE_STEPS
    with np.errstate(all="ignore"):
        samples = march(copies, x0, np.full(len(KICKS), step), count, phase_step)
    tail = samples[-(count // 4) - 1 :]
    return samples[-1], tail, step


def _dying(network: Network, window: Floats) -> bool:
    """Whether every kicked copy, small kick or large, still loses swing at the end of the run."""
    nets = [i for name, i in network.index.items() if name not in network.branches]
    half = len(window) // 2
    parts = window[:half, :, nets], window[half:, :, nets]
    before, after = (np.ptp(part, axis=0).max(axis=1) for part in parts)
    return bool(np.all(after < STILL_DYING * before))


def _highest_supply(network: Network) -> float:
    return max(float(np.max(volts)) for volts in network.known.values())


def _first_guess(
    case: Case, network: Network, ends: Floats, window: Floats, step: float
) -> tuple[Frame, Start] | None:
    """Frame and starts from the tails of the kicked copies."""
    sound = np.all(np.isfinite(window), axis=(0, 2))
    swings = np.ptp(window, axis=0)
    swings[~sound] = -1.0
    best = int(np.argmax(swings.max(axis=1)))
    if not sound[best]:
        return None
    driven = network.drive_frequency is not None
    scale = _scales(network, window[:, best])
    if driven:
        period = np.full(len(ends), 1.0 / (network.drive_frequency or 1.0))
        lead = int(np.argmax(scale))
        frame = Frame(scale, ends[best], np.zeros(len(scale)), lead, driven=True)
        return frame, _start(case, ends[sound], period[sound])
    found = _clearest_state(window[:, best], step)
    if found is None:
        return None
    lead, coarse_period = found
    places, periods = [], []
    for copy in np.flatnonzero(sound):
        crossing = last_crossing(window[:, copy, lead], step, coarse_period)
        if crossing is not None:
            places.append((copy, crossing[0]))
            periods.append(crossing[1])
    if not places:
        return None
    x = np.array([window[k, copy] for copy, k in places])
    main = next((i for i, (copy, _) in enumerate(places) if copy == best), 0)
    copy, k = places[main]
    flow = (window[min(k + 1, len(window) - 1), copy] - window[k - 1, copy]) / scale
    frame = Frame(scale, x[main], flow / np.linalg.norm(flow), lead, driven=False)
    return frame, _start(case, x, np.array(periods))


def _start(case: Case, x: Floats, period: Floats) -> Start:
    junctions = {
        ref: np.full(len(period), celsius[0]) for ref, celsius in case.cold_junctions().items()
    }
    return Start(x, period, junctions)


def _scales(network: Network, orbit: Floats) -> Floats:
    """Scale of each state: its amplitude, or a share of its level if that is larger.

    A choke carries a large direct current with a small ripple; its ripple would be a bad measure
    of how far its current may be off.  `orbit` is (m, n).
    """
    branch = np.array([name in network.branches for name in network.index])
    scale = np.maximum(0.5 * np.ptp(orbit, axis=0), LEVEL_SHARE * np.abs(orbit).max(axis=0))
    for kind in (branch, ~branch):
        if kind.any():
            scale[kind] = np.maximum(scale[kind], SCALE_FLOOR * max(scale[kind].max(), 1e-9))
    return scale


def _clearest_state(x: Floats, step: float) -> tuple[int, float] | None:
    """The state with the purest line in its spectrum, and the period of that line."""
    count = len(x)
    slope = np.linspace(-0.5, 0.5, count)[:, None]
    flat = x - x.mean(axis=0)
    flat = flat - slope * (12 * np.mean(flat * slope, axis=0))
    spectrum = np.abs(np.fft.rfft(flat * np.hanning(count)[:, None], axis=0)) ** 2
    spectrum[:4] = 0.0
    peak = np.argmax(spectrum, axis=0)
    around = np.array([spectrum[max(k - 2, 0) : k + 3, i].sum() for i, k in enumerate(peak)])
    purity = around / np.maximum(spectrum.sum(axis=0), 1e-300)
    large = np.ptp(flat, axis=0) > 1e-2 * np.ptp(flat, axis=0).max()
    purity = np.where(large & (spectrum.sum(axis=0) > 0), purity, 0.0)
    lead = int(np.argmax(purity))
    if purity[lead] < LEAST_PURITY:
        return None
    return lead, count * step / float(peak[lead])


def last_crossing(x: Floats, step: float, period: float) -> tuple[int, float] | None:
    """Sample just after the last upward mean crossing but one, and the mean interval, s.

    Intervals off the expected period by more than a fifth are ripple; None without two that fit.
    """
    centred = x - 0.5 * (x.max() + x.min())
    up = np.flatnonzero((centred[:-1] < 0) & (centred[1:] >= 0))
    if len(up) < LEAST_CROSSINGS:
        return None
    times = up + centred[up] / (centred[up] - centred[up + 1])
    gaps = np.diff(times) * step
    regular = np.abs(gaps / period - 1) < REGULAR_WITHIN
    if regular.sum() < LEAST_INTERVALS:
        return None
    return int(up[-2]) + 1, float(gaps[regular][-4:].mean())


def _best(solution: Solution, frame: Frame) -> int | None:
    """The settled copy with the largest swing."""
    swing = np.ptp(solution.samples[:, :, frame.lead], axis=0)
    swing = np.where(solution.status == Status.SETTLED, swing, -1.0)
    best = int(np.argmax(swing))
    return best if swing[best] > 0 else None


def frame_of(network: Network, solution: Solution, lead: int) -> Frame:
    """Scales and phase condition taken from a settled orbit of one unit."""
    orbit = solution.samples[:, 0]
    scale = _scales(network, orbit)
    flow = (orbit[1] - orbit[-2]) / scale
    driven = network.drive_frequency is not None
    return Frame(scale, orbit[0], flow / np.linalg.norm(flow), lead, driven)
