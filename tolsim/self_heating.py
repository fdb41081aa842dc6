"""Passive parts warmer than their surroundings: by how much, in each case of a study.

A part that states a thermal resistance and whose spread table has a temperature law follows its
own temperature: ambient + rise of the board + thermal resistance x loss.  The loss is that of the
nominal unit on its orbit in that case, found together with the orbit.  A unit takes this rise
changed, to first order, by all that its cold values differ from the nominal ones: the slopes come
from orbits beside the nominal one.  Starting is judged with cold parts.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from tolsim.design import Design, Study
from tolsim.parts import Capacitor, Inductor, Resistor
from tolsim.spread.part_values import AMBIENT, HIGHEST_RISE, Rise
from tolsim.spread.sampling import tables_of
from tolsim.spread.table import SpreadTable

Floats = NDArray[np.float64]
Rises = Mapping[str, float]
"""Part to K above its surroundings."""

SETTLED_WITHIN = 0.05  # K; moves a part of 1000 ppm/K by 0.005 %
ROUNDS = 12
LOSS: Mapping[type, str] = {Capacitor: "loss", Inductor: "loss", Resistor: "dissipation"}


def warmed_parts(study: Study, tables: Mapping[str, SpreadTable]) -> tuple[str, ...]:
    """Parts whose values follow their self-heating."""
    return tuple(
        ref
        for ref in study.design.parts
        if thermal_resistance(study.design, ref)
        and any(
            spread.temperature is not None
            for name in tables_of(study, ref)
            for spread in tables[name].quantities.values()
        )
    )


def heating_notes(study: Study, tables: Mapping[str, SpreadTable]) -> list[str]:
    """How self-heating is taken, as a sentence; nothing if no part follows it."""
    refs = warmed_parts(study, tables)
    if not refs:
        return []
    note = (
        "Own temperature, surroundings plus thermal resistance times loss, moves the values of"
        f" {', '.join(refs)}. The loss is that of the nominal unit in each case, in every unit"
        " corrected to first order by its own values; starting is judged with cold parts"
    )
    return [note]


def thermal_resistance(design: Design, ref: str) -> float:
    """K/W of a passive part, 0 if it states none."""
    part = design.parts[ref]
    return getattr(part, "thermal_resistance", None) or 0.0 if type(part) in LOSS else 0.0


def loss_column(design: Design, ref: str) -> str:
    """Column of the loss of a passive part."""
    return f"{ref}.{LOSS[type(design.parts[ref])]}"


def rises_of(
    design: Design, refs: tuple[str, ...], figures: Mapping[str, NDArray[np.float64]]
) -> dict[str, float]:
    """Rise of each part, K, from the figures (1,) of one unit."""
    return {
        ref: min(
            thermal_resistance(design, ref) * float(figures[loss_column(design, ref)][0]),
            HIGHEST_RISE,
        )
        for ref in refs
    }


@dataclass(frozen=True)
class Heat:
    """What self-heating does in one case.

    Attributes
    ----------
    rises : mapping
        K, of every warmed part; empty if there is none, or no orbit to warm it.
    settled : bool
        False if the losses grew faster than the parts could warm: no balance was found.
    slopes : mapping
        Of each part, as `Rise` takes them.
    """

    rises: Rises = field(default_factory=dict)
    settled: bool = True
    slopes: Mapping[str, Mapping[str, tuple[float, float]]] = field(default_factory=dict)

    @property
    def of_units(self) -> dict[str, Rise]:
        """What `part_values` wants to warm the parts of every unit."""
        return {ref: Rise(kelvin, self.slopes.get(ref, {})) for ref, kelvin in self.rises.items()}


Orbit = TypeVar("Orbit")


def settle(
    cold: tuple[Rises, Orbit], warmed: Callable[[Rises], tuple[Rises, Orbit] | None]
) -> tuple[Heat, Orbit]:
    """Rises that lead to themselves, by plain repetition.

    Parameters
    ----------
    cold : tuple
        Rises that follow from the losses of the cold unit, and its orbit.
    warmed : callable
        Rises that follow from the orbit with parts so warm, and that orbit; None if there is none.

    Returns
    -------
    Heat, orbit
        The last rises whose orbit was found, with that orbit.
    """
    heat = Heat(settled=False)
    wanted, orbit = cold
    for _ in range(ROUNDS):
        found = warmed(wanted)
        if found is None:
            break
        follows, orbit = found
        balanced = all(abs(follows[ref] - wanted[ref]) < SETTLED_WITHIN for ref in wanted)
        heat = Heat(wanted, balanced)
        if balanced:
            break
        wanted = follows
    return heat, orbit


STEP = -0.01  # relative change of a value for its slope; down, as couplings end at 1
STEP_CELSIUS = 2.0
LEAST_SLOPE = 1e-3


def moved_aside(values: Mapping[str, Floats]) -> tuple[tuple[str, ...], dict[str, Floats]]:
    """The nominal unit and, beside it, one unit for every value that is moved a little.

    Returns
    -------
    keys : tuple of str
        What is moved in units 1, 2, ...; a value of zero is an absent element and stays.
    values : mapping
        Arrays (1 + len(keys),).
    """
    keys = tuple(key for key, value in values.items() if key == AMBIENT or value[0] != 0.0)
    moved = {key: np.repeat(value, 1 + len(keys)) for key, value in values.items()}
    for unit, key in enumerate(keys, 1):
        step = STEP_CELSIUS if key == AMBIENT else STEP * moved[key][0]
        moved[key][unit] += step
    return keys, moved


def slopes_of(
    design: Design,
    refs: Iterable[str],
    keys: tuple[str, ...],
    figures: Mapping[str, Floats],
    cold: Mapping[str, Floats],
) -> dict[str, dict[str, tuple[float, float]]]:
    """Slopes of the rise of each part, from the losses of the units of `moved_aside`.

    A unit without a loss (its orbit was not found) leaves no slope.

    Parameters
    ----------
    design : Design
    refs : iterable of str
        Warmed parts.
    keys : tuple of str
        As `moved_aside` returns them.
    figures : mapping
        Losses (1 + len(keys),) of the parts; NaN without an orbit.
    cold : mapping
        Values (1,) of the nominal unit with cold parts.
    """
    steps = np.array([STEP_CELSIUS if key == AMBIENT else STEP for key in keys])
    found = {}
    for ref in refs:
        loss = figures[loss_column(design, ref)]
        with np.errstate(divide="ignore", invalid="ignore"):
            slope = np.log(loss[1:] / loss[0]) / steps
        known = np.isfinite(slope) & (np.abs(slope) >= LEAST_SLOPE)
        found[ref] = {
            key: (float(cold[key][0]), float(slope[k])) for k, key in enumerate(keys) if known[k]
        }
    return found
