"""The figures tolsim computes: names, units of measure, ratings they are compared with.

A figure belongs to the whole stage ("frequency"), to a rail, to a trim, or to every part of a
kind ("capacitor.voltage_peak").  In the rows of results its column is the bare name for the
stage and "REF.name" for a part: "frequency", "C1.voltage_peak".
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Final, Literal

STAGE: Final = "stage"
RAIL: Final = "rail"
TRIM: Final = "trim"
IDLE_VOLTAGE: Final = "idle_voltage"
"""What a trim may read beside figures: the voltage of a net at the bias point."""

TRIM_STRAINS: Final[Mapping[str, str]] = {
    "idle_dissipation": "trim_idle_dissipation",
    "drain_peak": "trim_drain_peak",
    "gate_peak": "trim_gate_peak",
    "dissipation": "trim_dissipation",
    "junction_temperature": "trim_junction_temperature",
}
"""Figures of a MOSFET whose largest value while an operator trims is a figure of its own."""

TRANSITION_FIGURES: Final = frozenset((
    "settle_time", "transition_drain_peak", "transition_gate_peak", "transition_gate_positive_peak",
    "transition_gate_negative_peak", "transition_inner_gate_peak", "transition_current_peak",
    "transition_voltage_peak", "clamp_energy", "avalanche_energy",
))  # fmt: skip
"""Figures of the way to a state: from the moment the load changes until the unit has settled."""


@dataclass(frozen=True)
class FigureInfo:
    """What one figure is.

    Attributes
    ----------
    name : str
        As users write it in limits: "voltage_peak".
    title : str
        Heading for people.
    unit_of_measure : str
        Of the stored float; "1" for a pure number.
    owner : str
        "stage", "rail", "trim" or a part kind.
    rating : str or None
        Key of `tolsim.parts.Rating` the figure is compared with.
    worse : {"high", "low"}
        Which end of its distribution hurts.
    about : str
        One sentence.
    """

    name: str
    title: str
    unit_of_measure: str
    owner: str
    rating: str | None
    worse: Literal["high", "low"]
    about: str

    def column(self, ref: str) -> str:
        """Name of the column of this figure of part (or rail) `ref`."""
        return self.name if self.owner == STAGE else f"{ref}.{self.name}"


def _stage() -> list[FigureInfo]:
    rows: list[tuple[str, str, str, Literal["high", "low"], str]] = [
        ("frequency", "Frequency", "Hz", "high", "Fundamental of the steady orbit."),
        ("supply_current", "Supply current", "A", "high", "Mean current of all rails."),
        ("input_power", "Input power", "W", "high", "Mean power taken from all rails."),
        ("output_power", "Output power", "W", "low", "Mean power in the loads and outputs."),
        ("efficiency", "Efficiency", "1", "low", "Output power over input power."),
        (
            "start_margin",
            "Start margin",
            "dB",
            "low",
            "Factor by which transconductance may fall before growth stops.",
        ),
        ("growth_rate", "Growth rate", "1/s", "low", "Of the fastest mode at the bias point."),
        ("start_frequency", "Start frequency", "Hz", "high", "Of the mode that grows fastest."),
        ("start_time", "Start time", "s", "high", "From power-on to 90 % of the orbit."),
        (
            "power_on_time",
            "Power-on time",
            "s",
            "high",
            "Integrated from zero charge up the real ramp to 90 % of the orbit's swing.",
        ),
        ("latch_current", "Latch current", "A", "high", "Of all rails if it latches at power-on."),
        ("idle_current", "Idle current", "A", "high", "Of all rails at the bias point."),
        ("idle_dissipation", "Idle dissipation", "W", "high", "Of all parts at the bias point."),
        (
            "slowest_multiplier",
            "Slowest multiplier",
            "1",
            "high",
            "Largest Floquet multiplier beside the phase one; above 1 the orbit is unstable.",
        ),
        (
            "settle_time",
            "Settling after a change of load",
            "s",
            "high",
            "To within 2 % of the swing.",
        ),
        ("energy_balance", "Energy balance", "1", "high", "Relative gap between input and losses."),
        ("orbit_residual", "Orbit residual", "1", "high", "Relative gap after one cycle."),
    ]
    return [FigureInfo(n, title, unit, STAGE, None, worse, s) for n, title, unit, worse, s in rows]


def _of(owner: str, *rows: tuple[str, str, str, str | None, str]) -> list[FigureInfo]:
    return [FigureInfo(n, t, unit, owner, rating, "high", s) for n, t, unit, rating, s in rows]


_VOLTAGE_PEAK = ("voltage_peak", "Peak voltage", "V")
_CURRENT_PEAK = ("current_peak", "Peak current", "A")
_CURRENT_RMS = ("current_rms", "RMS current", "A")
_DISSIPATION = ("dissipation", "Dissipation", "W", "power", "Mean power turned into heat.")
_BODY = ("body_temperature", "Body temperature", "degC", "temperature")
_CHANGE_CURRENT = ("transition_current_peak", "Peak current in a change", "A")
_ON_THE_WAY = "Largest from the change of load until the unit has settled."
_LARGEST = "Largest magnitude within a cycle, DC included."


def _strains() -> list[tuple[str, str, str, str | None, str]]:
    """Largest values while trimming: name, title, unit of measure, rating, sentence."""
    words = (
        ("idle_dissipation", "Idle dissipation while trimmed", "W", None),
        ("drain_peak", "Peak drain voltage while trimmed", "V", "drain_voltage"),
        ("gate_peak", "Peak gate voltage while trimmed", "V", "gate_voltage"),
        ("dissipation", "Dissipation while trimmed", "W", "power"),
        ("junction_temperature", "Junction while trimmed", "degC", "junction_temperature"),
    )
    about = "Largest on the operator's way; running figures only where the reading needs the orbit."
    return [(TRIM_STRAINS[name], title, unit, rating, about) for name, title, unit, rating in words]


def _changes() -> list[tuple[str, str, str, str | None, str]]:
    """Figures of a MOSFET while the load changes."""
    inner = "Behind the gate resistance; largest magnitude, either sign."
    below = "How far the gate goes below the source, as a positive number."
    taken = "What the breakdown takes in a change, were it at the rated drain voltage."
    drain, gate = "Peak drain voltage in a change", "Peak gate voltage in a change"
    positive, negative = "Positive gate peak in a change", "Negative gate peak in a change"
    return [
        ("transition_drain_peak", drain, "V", "drain_voltage", _ON_THE_WAY),
        ("transition_gate_peak", gate, "V", "gate_voltage", "At the pin. " + _ON_THE_WAY),
        ("transition_gate_positive_peak", positive, "V", None, _ON_THE_WAY),
        ("transition_gate_negative_peak", negative, "V", None, below),
        ("transition_inner_gate_peak", "Peak inner gate in a change", "V", "gate_voltage", inner),
        ("avalanche_energy", "Avalanche energy in a change", "J", None, taken),
    ]


_PARTS: Final = [
    *_of(
        RAIL,
        ("current_mean", "Mean current", "A", None, "Mean current the rail delivers."),
        ("current_ripple", "Ripple current", "A", None, "Peak-to-peak alternating current."),
        (*_CHANGE_CURRENT, None, _ON_THE_WAY),
    ),
    *_of(
        "capacitor",
        (*_VOLTAGE_PEAK, "voltage", _LARGEST),
        ("voltage_rms", "RMS voltage", "V", None, "Of the alternating part and DC together."),
        (*_CURRENT_RMS, "current", "Of the hottest piece of a bank."),
        ("reactive_power", "Reactive power", "var", "reactive_power", "RMS volts times amperes."),
        ("loss", "Loss", "W", None, "Mean power turned into heat."),
        ("self_heating", "Self-heating", "K", None, "Rise of the body above its surroundings."),
        (*_BODY, "Surroundings plus self-heating."),
    ),
    *_of(
        "inductor",
        (*_CURRENT_PEAK, "saturation_current", _LARGEST),
        (*_CURRENT_RMS, "current", "DC included."),
        ("loss", "Loss", "W", "power", "Mean power turned into heat."),
        (*_VOLTAGE_PEAK, None, _LARGEST),
        ("saturation_use", "Saturation use", "1", None, "Peak over saturation current."),
        (*_CHANGE_CURRENT, "saturation_current", _ON_THE_WAY),
        ("transition_voltage_peak", "Peak voltage in a change", "V", None, _ON_THE_WAY),
        (*_BODY, "Surroundings plus self-heating."),
        (
            "power_on_current_peak",
            "Peak current at power-on",
            "A",
            "saturation_current",
            "Largest from zero charge to the steady swing.",
        ),
    ),
    *_of("resistor", _DISSIPATION, (*_BODY, "Surroundings plus self-heating.")),
    *_of("potentiometer", _DISSIPATION),
    *_of(
        "load",
        ("dissipation", "Dissipation", "W", None, "Mean power taken by the loop of the load."),
        (*_CURRENT_RMS, None, "In the loop of the load."),
        (*_VOLTAGE_PEAK, None, "Across the resistance of the loop."),
    ),
    *_of(
        "diode",
        _DISSIPATION,
        (*_CURRENT_PEAK, None, "Largest forward current."),
        (*_CURRENT_RMS, "current", "DC included."),
        ("reverse_peak", "Peak reverse voltage", "V", "voltage", "Largest cathode-anode voltage."),
    ),
    *_of(
        "clamp",
        _DISSIPATION,
        (*_CURRENT_PEAK, None, _LARGEST),
        (*_CURRENT_RMS, "current", "DC included."),
        ("clamp_energy", "Energy in a change", "J", None, "Taken while the load changes."),
    ),
    *_of(
        "mosfet",
        ("drain_peak", "Peak drain voltage", "V", "drain_voltage", "Largest drain-source voltage."),
        (
            "drain_negative_peak",
            "Negative drain excursion",
            "V",
            None,
            "How far the drain goes below the source, as a positive number.",
        ),
        ("turn_on_voltage", "Turn-on voltage", "V", None, "Drain voltage when the gate turns on."),
        ("turn_on_share", "Turn-on share", "1", None, "Turn-on voltage over supply voltage."),
        ("gate_peak", "Peak gate voltage", "V", "gate_voltage", "Largest magnitude, either sign."),
        ("gate_positive_peak", "Positive gate peak", "V", None, "Largest gate-source voltage."),
        (
            "gate_negative_peak",
            "Negative gate peak",
            "V",
            None,
            "How far the gate goes below the source, as a positive number.",
        ),
        (
            "drain_current_peak",
            "Peak drain current",
            "A",
            "drain_current",
            "At the terminal; " + _LARGEST[0].lower() + _LARGEST[1:],
        ),
        ("drain_current_rms", "RMS drain current", "A", None, "DC included."),
        _DISSIPATION,
        ("conduction_loss", "Conduction loss", "W", None, "Share of the loss while fully on."),
        ("switching_loss", "Switching loss", "W", None, "Overlap at turn-on and turn-off."),
        ("body_diode_loss", "Body diode loss", "W", None, "Loss in the body diode."),
        ("gate_loss", "Gate loss", "W", None, "Loss in the gate resistance."),
        (
            "junction_temperature",
            "Junction temperature",
            "degC",
            "junction_temperature",
            "At the heat balance, resistance and threshold following it.",
        ),
        ("idle_dissipation", "Idle dissipation", "W", None, "At the bias point."),
        *_strains(),
        *_changes(),
        (
            "power_on_drain_peak",
            "Peak drain voltage at power-on",
            "V",
            "drain_voltage",
            "Largest from zero charge to the steady swing.",
        ),
        (
            "power_on_gate_peak",
            "Peak gate voltage at power-on",
            "V",
            "gate_voltage",
            "Largest magnitude, either sign, at the pin or behind the gate resistance.",
        ),
    ),
    FigureInfo(
        "latch_damage_time",
        "Time to damage in a latch",
        "s",
        "mosfet",
        None,
        "low",
        "From full supply to the junction limit, if it latches at power-on.",
    ),
    *_of(
        TRIM,
        ("trim_position", "Final position", "1", None, "Of the adjuster, as share of its range."),
        ("trim_turns", "Turns", "1", None, "How often the operator turned the adjuster."),
        ("trim_error", "Error after trim", "1", None, "True reading over target, less 1."),
        ("trim_before", "Error before trim", "1", None, "The same of the untrimmed unit."),
        ("trim_voltage", "Idle voltage read", "V", None, "Of the net a trim reads, in any case."),
        ("trim_slope", "Slope", "1", None, "Reading over target per whole range of the adjuster."),
    ),
]

FIGURES: Final[Mapping[str, FigureInfo]] = {
    **{info.name: info for info in _stage()},
    **{f"{info.owner}.{info.name}": info for info in _PARTS},
}
"""Every figure: the stage's by name, others by "owner.name" ("mosfet.drain_peak")."""

NAMES: Final[tuple[str, ...]] = tuple(dict.fromkeys(info.name for info in FIGURES.values()))
"""Bare names users may write in limits, each once."""


def figures_of(owner: str) -> tuple[FigureInfo, ...]:
    """Figures of "stage", "rail" or a part kind, in reporting order."""
    return tuple(info for info in FIGURES.values() if info.owner == owner)


def figure_of(owner: str, name: str) -> FigureInfo | None:
    """Figure `name` of `owner`, or None if it has no such figure."""
    return FIGURES.get(name if owner == STAGE else f"{owner}.{name}")


def targets(
    name: str, refs: Sequence[str], kinds: Mapping[str, str]
) -> tuple[tuple[str, FigureInfo], ...]:
    """Whose figure a limit or ranking means.

    Parameters
    ----------
    name : str
        Figure as users write it.
    refs : sequence of str
        Parts or rails named; none named means the stage and every part that has the figure.
    kinds : mapping
        Owner of every part, rail and trim: {"C1": "capacitor", "vdd": "rail"}.

    Returns
    -------
    tuple of (str, FigureInfo)
        Part or rail ("" for the stage) and figure, in the order of `refs` or `kinds`.
    """
    owners = {"": STAGE, **kinds}
    pairs = ((ref, figure_of(owners[ref], name)) for ref in refs or owners if ref in owners)
    return tuple((ref, info) for ref, info in pairs if info is not None)
