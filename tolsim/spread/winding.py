"""From the shape of every unit's winding to its inductance and resistance.

The laws of a spread table may act on the shape (turns, diameter, length or pitch, wire; the
inductance factor of a core) or on the inductance and resistance that follow from it, or on both.
"""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray
from scipy.constants import speed_of_light

from tolsim.parts import Inductor
from tolsim.quantity import show
from tolsim.spread.coil import air_coil_inductance, lead_inductance, round_wire_inductance
from tolsim.spread.wire import coil_resistance, skin_depth, skin_effect
from tolsim.winding import Coil

Floats = NDArray[np.float64]

LONG_WIRE = 0.1  # wavelengths; beyond, the lumped coil is a few per cent off
NEAR = 1.2  # times the expected frequency: the loss is then within 10 %
SKIN_DEPTHS = 5.0  # in a wire; with fewer the measured crowding is stretched


def shape_of(part: Inductor) -> dict[str, float]:
    """Nominal numbers of the shape that may spread; empty if the inductance is given itself."""
    if part.core is not None:
        return {"al": part.core.al}
    coil = part.coil
    if coil is None:
        return {}
    shape = {"turns": coil.turns, "diameter": coil.diameter, "length": coil.winding_length}
    shape["pitch"] = coil.winding_length / coil.turns
    if coil.wire is not None:
        shape["wire"] = coil.wire
    return shape


def inductance_of(part: Inductor, shape: Mapping[str, Floats]) -> Floats:
    """Inductance (N,) in H from the shape of every unit; the number given where there is none.

    Parameters
    ----------
    part : Inductor
    shape : mapping
        Every key of `shape_of(part)`, arrays (N,).
    """
    if part.core is not None:
        return shape["al"] * float(part.core.turns) ** 2
    coil = part.coil
    if coil is None:
        return np.asarray(part.inductance, dtype=np.float64)
    turns, diameter, length = _wound(coil, shape)
    if coil.wire is None:
        return air_coil_inductance(turns, diameter, length)
    internal = np.asarray(0.0)
    if coil.frequency is not None:
        internal = 0.25 * skin_effect(shape["wire"], coil.frequency)[1]
    inductance = round_wire_inductance(turns, diameter, length, shape["wire"], internal)
    if coil.leads is not None:
        inductance = inductance + lead_inductance(coil.leads, shape["wire"], internal)
    return inductance


def resistance_of(part: Inductor, nominal_inductance: float, shape: Mapping[str, Floats]) -> Floats:
    """Series resistance (N,) in ohm: given, from Q, or from the wire of every unit."""
    if part.q is not None and part.q_frequency is not None:
        return np.asarray(2.0 * math.pi * part.q_frequency * nominal_inductance / part.q)
    coil = part.coil
    if part.resistance is not None or coil is None or coil.frequency is None:
        return np.asarray(part.resistance or 0.0)
    turns, diameter, length = _wound(coil, shape)
    leads = coil.leads or 0.0
    return coil_resistance(turns, diameter, length, shape["wire"], coil.frequency, leads)


def _wound(coil: Coil, shape: Mapping[str, Floats]) -> tuple[Floats, Floats, Floats]:
    """Turns, diameter and winding length; turns that would overlap touch."""
    pitch_scale = shape["pitch"] / (coil.winding_length / coil.turns)
    length = shape["length"] * pitch_scale
    if coil.length is None:  # the pitch is kept, so more turns are longer
        length = length * (shape["turns"] / coil.turns)
    if coil.wire is not None:
        length = np.maximum(length, shape["turns"] * shape["wire"])
    return shape["turns"], shape["diameter"], length


def winding_notes(part: Inductor, expected: tuple[float, float] | None = None) -> list[str]:
    """What was assumed about a coil, and where its formulas are near their end.

    Parameters
    ----------
    part : Inductor
    expected : tuple, optional
        Lowest and highest frequency the stage is expected to run at, Hz.
    """
    coil = part.coil
    if coil is None or coil.wire is None:
        return []
    said = []
    capacitance = show(self_capacitance(coil.diameter, coil.winding_length), "F", 2)
    said.append(
        f"self-capacitance of about {capacitance} is not counted: list it as a part if it matters"
    )
    if coil.frequency is None:
        return said
    at = show(coil.frequency, "Hz")
    if part.resistance is None and part.q is None:
        said.append(
            f"resistance from copper wire at 25 degC and {at}: skin effect exact, proximity of"
            " turns by Medhurst's measurements (an estimate, some 10 % of it uncertain)"
        )
        depths = coil.wire / float(skin_depth(coil.frequency))
        if depths < SKIN_DEPTHS:
            said.append(
                f"the wire is only {depths:.2g} skin depths thick at {at}: the proximity effect"
                " is stretched beyond its measurements"
            )
    if expected is not None and not (expected[0] / NEAR <= coil.frequency <= expected[1] * NEAR):
        said.append(
            f"its loss is taken at {at}, but the stage is expected at {show(expected[0], 'Hz')} to"
            f" {show(expected[1], 'Hz')}"
        )
    waves = coil.wire_length * coil.frequency / speed_of_light
    if waves > LONG_WIRE:
        said.append(
            f"its wire is {waves:.2g} wavelengths long at {at}: it acts as more inductance than"
            " its geometry gives"
        )
    return said


def self_capacitance(diameter: float, length: float) -> float:
    """Medhurst's capacitance of a coil with one end at ground, F (1947; value from memory).

    C / pF = D / cm [0.1126 l/D + 0.08 + 0.27 sqrt(D/l)].
    """
    slenderness = length / diameter
    return 1e-10 * diameter * (0.1126 * slenderness + 0.08 + 0.27 / math.sqrt(slenderness))
