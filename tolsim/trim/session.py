"""Trims of a study, one after the other, on the nominal unit or on drawn units.

Each trim is done in its bench case: the operator reads a figure of the unit as it stands then,
at the bias point with the oscillation held or on the steady orbit, and turns its adjuster
(`trim.operator`).  What he leaves is the factor by which the quantity was moved; in every other
case the quantity follows its laws from there.  The hardest strain of the transistors on his way
is kept.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np

from tolsim.circuit.bias import bias_point
from tolsim.circuit.devices import Floats, Ints
from tolsim.circuit.orbit import Solution
from tolsim.circuit.thermal import Case, heats, mosfets
from tolsim.design import Study, Trim
from tolsim.figure_names import IDLE_VOLTAGE, TRIM_STRAINS
from tolsim.figures import measure_idle, measure_orbits
from tolsim.trim.operator import Adjuster, TrimStatus, operate

CaseName = tuple[str, str]  # condition, state
Values = dict[str, Floats]
IDLE = ("idle_current", "idle_dissipation", IDLE_VOLTAGE)


class Units(Protocol):
    """N units to be trimmed, and how they are solved."""

    def values(self, case: CaseName, moved: Mapping[str, Floats], *, runs: bool) -> Values:
        """Part values (N,) after the trims done so far; passive parts warm where the unit runs."""
        ...

    def error(self, trim: str, error: str) -> Floats:
        """One of `TRIM_ERRORS`, (N,)."""
        ...

    def orbits(self, name: CaseName, case: Case) -> Solution:
        """Steady orbits of some of the units."""
        ...

    def bias_guess(self, name: CaseName) -> Floats | None:
        """A bias point (n,) near those of the units, if one is known."""
        ...

    def usual_slope(self, trim: str) -> float:
        """Reading per position of the nominal unit; NaN if unknown."""
        ...


@dataclass(frozen=True)
class TrimLog:
    """What one trim did to N units; positions and readings in the units of the `Trim`.

    Attributes
    ----------
    status : (N,) of TrimStatus
    position, reading : (N,)
        Where the adjuster was left, and the true reading there.
    before : (N,)
        True reading of the untrimmed unit.
    turns : (N,)
        How often the adjuster was turned.
    slope : (N,)
        Reading per position; NaN if the operator saw none.
    strains : mapping of column to (N,)
        Hardest strain on the operator's way: "Q1.trim_drain_peak".
    way : tuple of (position (N,), reading (N,))
        Places and true readings in the order in which he saw them, the place the part was left at
        last; NaN where a unit was not read in that round.
    """

    status: Ints
    position: Floats
    reading: Floats
    before: Floats
    turns: Ints
    slope: Floats
    strains: Mapping[str, Floats]
    way: tuple[tuple[Floats, Floats], ...]


@dataclass(frozen=True)
class Trimmed:
    """Units as the operator leaves them: factors of `Draws.moved`, and a log per trim."""

    moved: Mapping[str, Floats] = field(default_factory=dict)
    logs: Mapping[str, TrimLog] = field(default_factory=dict)


def joined(blocks: Sequence[Trimmed]) -> dict[str, Floats]:
    """Factors of `Draws.moved` of units trimmed in blocks."""
    return {
        address: np.concatenate([block.moved[address] for block in blocks])
        for address in blocks[0].moved
    }


def is_idle(reading: str) -> bool:
    """Whether a figure is read at the bias point, the oscillation held."""
    return reading.rpartition(".")[2] in IDLE


def do_trims(study: Study, units: Units) -> Trimmed:
    """Trim units in the order of the study."""
    moved: dict[str, Floats] = {}
    logs: dict[str, TrimLog] = {}
    for name, trim in study.trims.items():
        runs = not is_idle(trim.reading)
        stands = units.values((trim.condition, trim.state), moved, runs=runs)
        logs[name] = _do_trim(study, name, units, stands)
        moved[trim.address] = logs[name].position / stands[trim.address]
    return Trimmed(moved, logs)


def _do_trim(study: Study, name: str, units: Units, stands: Values) -> TrimLog:
    """One trim, of units whose parts have the values `stands` before it."""
    trim = study.trims[name]
    untrimmed = stands[trim.address]
    every = np.arange(len(untrimmed))
    reader = _Reader(study, trim, units, stands)
    gain, offset, noise, setting = (
        units.error(name, error)
        for error in ("meter gain", "meter offset", "meter noise", "setting error")
    )

    def meter(position: Floats, some: Ints) -> Floats:
        return (1.0 + gain[some]) * reader.read(position, some) + offset[some] + noise[some]

    before = reader.read(untrimmed, every)
    start = untrimmed
    if trim.start is not None:  # he never sees the unit as it came
        start = np.full(len(every), trim.start)
        reader.begin()
    session = operate(meter, start, _adjuster(trim), units.usual_slope(name))
    position = np.clip(session.position + setting, *trim.range)
    reading = reader.read(position, every)
    return TrimLog(
        session.status,
        position,
        reading,
        before,
        session.moves,
        session.slope,
        reader.strains,
        tuple(reader.way),
    )


def _adjuster(trim: Trim) -> Adjuster:
    low, high = trim.range
    return Adjuster(
        low,
        high,
        trim.resolution,
        trim.coarse_step,
        trim.target,
        trim.within,
        trim.most_turns,
    )


class _Reader:
    """True readings of units whose adjuster stands anywhere, and the strains they were under."""

    def __init__(self, study: Study, trim: Trim, units: Units, stands: Values) -> None:
        self.study, self.trim, self.units, self.stands = study, trim, units, stands
        self.bench = trim.condition, trim.state
        count = len(stands[trim.address])
        self.position = np.full(count, np.nan)  # of the latest reading
        self.reading = np.full(count, np.nan)
        self.bias: Floats | None = None  # (N, n) bias points of the latest readings
        self.strains: dict[str, Floats] = {}
        self.way: list[tuple[Floats, Floats]] = []

    def read(self, position: Floats, some: Ints) -> Floats:
        """True readings at positions (M,) of the units `some` (M,)."""
        new = position != self.position[some]
        if new.any():
            which = some[new]
            values = {key: value[which] for key, value in self.stands.items()}
            values[self.trim.address] = position[new]
            case = Case(self.study.design, values, heats(self.study.design))
            figures = self._idle(case, which) if is_idle(self.trim.reading) else self._orbit(case)
            nothing = np.full(len(which), np.nan)
            self.reading[which] = figures.get(self.trim.reading, nothing)
            self.position[which] = position[new]
            self._note(figures, which)
        return self.reading[some]

    def begin(self) -> None:
        """Forget what was read and strained so far."""
        self.strains, self.way = {}, []
        self.position[:] = np.nan

    def _idle(self, case: Case, which: Ints) -> dict[str, Floats]:
        network = case.network(case.cold_junctions())
        if self.bias is None:
            guess = self.units.bias_guess(self.bench)
            begin = np.zeros(network.states) if guess is None else guess
            self.bias = np.tile(begin, (len(self.position), 1))
        bias = bias_point(network, self.bias[which])
        self.bias[which] = np.where(bias.settled[:, None], bias.x, self.bias[which])
        figures = measure_idle(case, network, bias)
        if self.trim.net is not None:
            figures[IDLE_VOLTAGE] = network.potential(self.trim.net, bias.x)
        return {key: np.where(bias.settled, value, np.nan) for key, value in figures.items()}

    def _orbit(self, case: Case) -> dict[str, Floats]:
        return measure_orbits(case, self.units.orbits(self.bench, case))

    def _note(self, figures: Mapping[str, Floats], which: Ints) -> None:
        """Keep the place, its reading and the hardest strain of every transistor."""
        seen = np.full((2, len(self.position)), np.nan)
        seen[:, which] = self.position[which], self.reading[which]
        self.way.append((seen[0], seen[1]))
        for ref in mosfets(self.study.design):
            for figure, strain in TRIM_STRAINS.items():
                if f"{ref}.{figure}" in figures:
                    nothing = np.full(len(self.position), np.nan)
                    worst = self.strains.setdefault(f"{ref}.{strain}", nothing)
                    worst[which] = np.fmax(worst[which], figures[f"{ref}.{figure}"])


def idle_voltages(study: Study, case: Case, guess: Floats) -> dict[str, Floats]:
    """What trims that read the idle voltage of a net would read in a case: column to (N,).

    Parameters
    ----------
    case : Case
        Units with cold parts.
    guess : (n,)
        A bias point near theirs.
    """
    reads = {name: trim for name, trim in study.trims.items() if trim.net is not None}
    if not reads:
        return {}
    network = case.network(case.cold_junctions())
    bias = bias_point(network, np.tile(guess, (case.units, 1)))
    return {
        f"{name}.trim_voltage": np.where(
            bias.settled, network.potential(trim.net or "", bias.x), np.nan
        )
        for name, trim in reads.items()
    }


FAILED = {
    TrimStatus.EXHAUSTED: "trim range exhausted",
    TrimStatus.TOO_COARSE: "trim too coarse",
}
OPEN = (TrimStatus.NO_READING, TrimStatus.UNSETTLED)


def trim_outcomes(study: Study, case: CaseName, trimmed: Trimmed) -> dict[str, np.ndarray]:
    """What the operator says of the units in their bench case: outcome to flags (N,)."""
    found: dict[str, np.ndarray] = {}
    for name, log in trimmed.logs.items():
        if (study.trims[name].condition, study.trims[name].state) != case:
            continue
        said = {word: log.status == code for code, word in FAILED.items()}
        said["undecided"] = np.isin(log.status, OPEN)
        for word, flags in said.items():
            found[word] = found.get(word, False) | flags
    return found


def trim_figures(study: Study, case: CaseName, trimmed: Trimmed) -> dict[str, Floats]:
    """Figures of the trims done in a case: column to (N,)."""
    figures: dict[str, Floats] = {}
    for name, log in trimmed.logs.items():
        trim = study.trims[name]
        if (trim.condition, trim.state) != case:
            continue
        low, high = trim.range
        figures |= {
            f"{name}.trim_position": (log.position - low) / (high - low),
            f"{name}.trim_turns": log.turns.astype(np.float64),
            f"{name}.trim_error": log.reading / trim.target - 1.0,
            f"{name}.trim_before": log.before / trim.target - 1.0,
            f"{name}.trim_slope": log.slope * (high - low) / trim.target,
            f"{name}.trim_status": log.status.astype(np.float64),
        }
        for column, strain in log.strains.items():
            figures[column] = np.fmax(figures.get(column, strain), strain)
    return figures
