"""Passive parts warmer than their surroundings: by how much, in each case of a study.

A part that states a thermal resistance and whose spread table has a temperature law follows its
own temperature: ambient + rise of the board + thermal resistance x loss.  The loss is that of the
nominal unit on its orbit in that case, found together with the orbit; every unit takes this rise
(its own ambient, age and slopes stay its own).  Starting is judged with cold parts.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from tolsim.answers.unit_files import UnitRows
from tolsim.design import Design, Study
from tolsim.parts import Capacitor, Inductor, Resistor
from tolsim.spread.sampling import tables_of
from tolsim.spread.table import SpreadTable

Rises = Mapping[str, float]
"""Part to K above its surroundings."""

SETTLED_WITHIN = 0.05  # K; moves a part of 1000 ppm/K by 0.005 %
ROUNDS = 12
HIGHEST_RISE = 300.0  # K; nothing soldered survives more
GAP_SHARE = 0.95  # of the units
LOSS: Mapping[type, str] = {Capacitor: "loss", Inductor: "loss", Resistor: "dissipation"}


def warmed_parts(study: Study, tables: Mapping[str, SpreadTable]) -> tuple[str, ...]:
    """Parts whose values follow their self-heating."""
    return tuple(
        ref
        for ref in study.design.parts
        if _thermal_resistance(study.design, ref)
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
        f" {', '.join(refs)}. The loss is the nominal unit's in each case, its rise the same in"
        " every unit; starting is judged with cold parts"
    )
    return [note]


def _thermal_resistance(design: Design, ref: str) -> float:
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
            _thermal_resistance(design, ref) * float(figures[loss_column(design, ref)][0]),
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
    """

    rises: Rises = field(default_factory=dict)
    settled: bool = True


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


def heat_record(
    study: Study, heats: Mapping[tuple[str, str], Heat], rows: UnitRows
) -> list[dict[str, Any]]:
    """What self-heating did: one entry per warmed part, in the case in which it runs hottest.

    Parameters
    ----------
    study : Study
    heats : mapping
        Of every case (condition, state).
    rows : UnitRows
        Figures of the units.

    Returns
    -------
    list of dict
        {part, condition, state, rise (K, taken for every unit), gap (K, within which the rises
        that the units' own losses make differ from it, 95 % of units), settled (in every case)}
    """
    found = []
    refs = dict.fromkeys(ref for heat in heats.values() for ref in heat.rises)
    for ref in refs:
        case = max(heats, key=lambda name: heats[name].rises.get(ref, -1.0))
        rise = heats[case].rises[ref]
        losses = rows.figure(loss_column(study.design, ref))[:, rows.cases.index(case)]
        own = _thermal_resistance(study.design, ref) * losses
        own = own[np.isfinite(own)]
        found.append(
            {
                "part": ref,
                "condition": case[0],
                "state": case[1],
                "rise": rise,
                "gap": float(np.quantile(np.abs(own - rise), GAP_SHARE)) if own.size else None,
                "settled": all(heat.settled for heat in heats.values()),
            }
        )
    return sorted(found, key=lambda entry: -float(entry["rise"]))
