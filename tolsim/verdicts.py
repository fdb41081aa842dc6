"""What each unit does in one case, and whether that is good enough.

The outcome says what happens; the verdict says pass, fail or undecided.  A unit the solver could
not settle is "undecided" unless something already fails it: it is never left out.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tolsim.answers.bounds import Bound, applies, bounds
from tolsim.circuit.orbit import Status
from tolsim.circuit.poweron.fates import Fate
from tolsim.design import Study
from tolsim.figure_names import STAGE, TRIM
from tolsim.parts import Mosfet

Floats = NDArray[np.float64]
Words = NDArray[np.str_]
Flags = NDArray[np.bool_]

START_FIGURES = ("start_margin", "growth_rate", "start_frequency", "start_time", "power_on_time")
LATCHED_SHARE = 0.5  # of the nominal running current: an idle unit above it sits in DC conduction
LIKE_NOMINAL = 0.5  # likeness of the leading mode below which it is another mode
OFF_FREQUENCY = 0.3  # relative to the nominal start frequency, for another mode
WORD_LENGTH = "U32"

LATCHED, LATCHED_ALONE = "latched both on", "latched on"  # a single switch has no other
OPEN_ENDED = (Status.NO_ORBIT, Status.NOT_CONVERGED)

GOOD_OUTCOMES = ("runs", "starts")


@dataclass(frozen=True)
class CaseVerdicts:
    """Verdicts of N units in one condition and state."""

    outcome: Words  # (N,)
    verdict: Words  # (N,) "pass", "fail", "undecided"
    failed_limits: NDArray[np.object_]  # (N,) "0;3": numbers of the limits not kept


def judge(
    study: Study,
    condition: str,
    state: str,
    status: NDArray[np.intp],
    figures: Mapping[str, Floats],
    nominal: Mapping[str, float],
    fate: NDArray[np.intp] | None = None,
) -> CaseVerdicts:
    """Outcome, verdict and failed limits of every unit.

    Parameters
    ----------
    status : (N,)
        Solver status, see `Status`.
    figures : mapping of column to (N,)
        "mode_match" among them where the state is one in which units start.
    nominal : mapping
        Figures of the nominal unit in the same case.
    fate : (N,), optional
        Of `Fate`: what became of the units that were switched on in time.
    """
    starts_here = study.states[state].starts_here and study.kind == "self-oscillating"
    outcome = _orbit_outcomes(status, starts_here=starts_here)
    if starts_here:
        outcome = _start_outcomes(outcome, status, figures, nominal, _switches(study))
        if fate is not None:
            outcome = _switched_on(outcome, status, figures, fate, _switches(study))
    outcome = _wrong_frequency(study, outcome, status, figures)
    broken = _broken_limits(study, (condition, state), figures, len(status), starts=starts_here)
    outcome = _limit_outcomes(outcome, broken)
    failed = ~np.isin(outcome, (*GOOD_OUTCOMES, "undecided"))
    failed |= np.any([hit for _, hit in broken], axis=0) if broken else False
    verdict = np.where(failed, "fail", np.where(outcome == "undecided", "undecided", "pass"))
    return CaseVerdicts(outcome, verdict.astype(WORD_LENGTH), _numbers(broken, len(status)))


def overruled(verdicts: CaseVerdicts, said: Mapping[str, Flags]) -> CaseVerdicts:
    """Verdicts after what a change of load or the trimming operator says: outcome to flags (N,).

    What they put aside fails, whatever it does else; what they leave open may have failed already.
    """
    outcome, verdict = verdicts.outcome.copy(), verdicts.verdict.copy()
    for word, flags in said.items():
        hits = flags & (verdict == "pass") if word == "undecided" else flags
        outcome[hits] = word
        verdict[hits] = word if word == "undecided" else "fail"
    return CaseVerdicts(outcome, verdict, verdicts.failed_limits)


def _orbit_outcomes(status: NDArray[np.intp], *, starts_here: bool) -> Words:
    """What the search for the orbit says by itself."""
    words = {
        Status.SETTLED: "starts" if starts_here else "runs",
        Status.UNSTABLE: "bursts",
        Status.NO_ORBIT: "dies away" if starts_here else "drops out",
        Status.NO_THERMAL_BALANCE: "no thermal balance",
        Status.NOT_CONVERGED: "undecided",
    }
    outcome = np.full(len(status), "undecided", dtype=WORD_LENGTH)
    for code, word in words.items():
        outcome[status == code] = word
    return outcome


def _start_outcomes(
    outcome: Words,
    status: NDArray[np.intp],
    figures: Mapping[str, Floats],
    nominal: Mapping[str, float],
    switches: int,
) -> Words:
    """Refine by the modes at the bias point."""
    growth = figures["growth_rate"]
    grows = growth > 0
    outcome = outcome.copy()
    settled = status == Status.SETTLED
    outcome[settled & ~grows] = "starts only with a kick"
    # a nominal unit that leaves its bias point without oscillating has no frequency to compare
    usual = nominal["start_frequency"]
    off = np.abs(figures["start_frequency"] - usual) > OFF_FREQUENCY * usual
    other = (figures["mode_match"] < LIKE_NOMINAL) & off
    outcome[settled & grows & other] = "wrong mode"
    without = status == Status.NO_ORBIT
    running = nominal.get("supply_current", np.nan)
    latched = figures["idle_current"] > LATCHED_SHARE * running
    outcome[without & ~grows & latched] = LATCHED if switches > 1 else LATCHED_ALONE
    # growth without an orbit to grow into is a contradiction only the time domain can resolve
    outcome[without & grows] = "undecided"
    # without a bias point nobody knows whether it starts; what bursts or overheats fails anyway
    outcome[np.isnan(growth) & (settled | without)] = "undecided"
    return outcome


def _switched_on(
    outcome: Words,
    status: NDArray[np.intp],
    figures: Mapping[str, Floats],
    fate: NDArray[np.intp],
    switches: int,
) -> Words:
    """What a power-on in time says goes before what modes and orbit say."""
    settled = status == Status.SETTLED
    rests = (fate == Fate.DIES) & settled & ~(figures["growth_rate"] > 0)
    words = {
        "starts": (fate == Fate.STARTS) & settled,
        LATCHED if switches > 1 else LATCHED_ALONE: fate == Fate.LATCHED,
        "dies away": (fate == Fate.DIES) & ~rests,
        "starts only with a kick": rests,
        "bursts": fate == Fate.BURSTS,
        "wrong mode": fate == Fate.OTHER_SWING,
        # it swings, but on no orbit that was found; or nobody knows
        "undecided": ((fate == Fate.STARTS) & np.isin(status, OPEN_ENDED))
        | (fate == Fate.UNDECIDED),
    }
    outcome = outcome.copy()
    for word, flags in words.items():
        outcome[flags] = word
    return outcome


def _switches(study: Study) -> int:
    return sum(isinstance(part, Mosfet) for part in study.design.parts.values())


def _wrong_frequency(
    study: Study, outcome: Words, status: NDArray[np.intp], figures: Mapping[str, Floats]
) -> Words:
    """Orbits outside the frequencies the user expects of the wanted mode."""
    if study.expected_frequency is None or "frequency" not in figures:
        return outcome
    low, high = study.expected_frequency
    frequency = figures["frequency"]
    outside = (status == Status.SETTLED) & ((frequency < low) | (frequency > high))
    return np.where(outside, "wrong mode", outcome)


def _broken_limits(
    study: Study,
    case: tuple[str, str],
    figures: Mapping[str, Floats],
    units: int,
    *,
    starts: bool,
) -> list[tuple[Bound, Flags]]:
    """Bounds that count in this case, each with the units that break it."""
    found = []
    for bound in bounds(study):
        if not applies(study.limits[bound.limit], *case):
            continue
        if bound.figure.name in START_FIGURES and not starts:
            continue
        values = figures.get(bound.column)
        if values is None:
            continue
        broken = np.zeros(units, dtype=bool)
        with np.errstate(invalid="ignore"):
            if bound.at_most is not None:
                broken |= values > bound.at_most
            if bound.at_least is not None:
                broken |= values < bound.at_least
        found.append((bound, broken))
    return found


def _limit_outcomes(outcome: Words, broken: list[tuple[Bound, Flags]]) -> Words:
    """Name the outcome of units that run, but not within their limits."""
    outcome = outcome.copy()
    good = np.isin(outcome, GOOD_OUTCOMES)
    kinds: tuple[tuple[str, Callable[[Bound], bool]], ...] = (
        ("starts late", lambda bound: bound.figure.name in ("start_time", "power_on_time")),
        ("out of band", lambda bound: bound.figure.name == "frequency"),
        ("over stress", lambda bound: bound.figure.owner not in (STAGE, TRIM)),
    )
    for word, belongs in kinds:
        hits = [hit for bound, hit in broken if belongs(bound)]
        if hits:
            outcome[good & np.any(hits, axis=0)] = word
    return outcome


def _numbers(broken: list[tuple[Bound, Flags]], units: int) -> NDArray[np.object_]:
    """Limit numbers each unit breaks, as text."""
    texts = np.full(units, "", dtype=object)
    for limit in sorted({bound.limit for bound, _ in broken}):
        hit = np.any([flags for bound, flags in broken if bound.limit == limit], axis=0)
        for unit in np.flatnonzero(hit):
            texts[unit] = f"{texts[unit]};{limit}" if texts[unit] else str(limit)
    return texts
