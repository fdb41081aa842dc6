"""What a periodic-steady-state solver hands on: the seam between solvers and figures."""

from __future__ import annotations

from dataclasses import dataclass, fields, replace
from enum import IntEnum

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.devices import Floats, Ints


class Status(IntEnum):
    """How the search for the orbit of one unit ended."""

    SETTLED = 0
    UNSTABLE = 1
    NO_ORBIT = 2
    NO_THERMAL_BALANCE = 3
    NOT_CONVERGED = 4

    @property
    def sentence(self) -> str:
        """What it means, for people."""
        return _SENTENCES[self]


_SENTENCES = {
    Status.SETTLED: "A periodic orbit was found and small disturbances die out.",
    Status.UNSTABLE: "A periodic orbit exists but small disturbances grow: it bursts or jumps"
    " away.",
    Status.NO_ORBIT: "The oscillation decays: integrated in time from full swing it died away.",
    Status.NO_THERMAL_BALANCE: "A junction finds no steady temperature: its loss rises faster than"
    " the heat that its cooling removes.",
    Status.NOT_CONVERGED: "The solver did not settle within its iterations and the time-domain"
    " check did not decide either.",
}


@dataclass(frozen=True)
class Solution:
    """Periodic orbits of N units."""

    status: Ints  # (N,) of Status
    samples: Floats  # (m + 1, N, n) over one period, first = last for a settled unit
    period: Floats  # (N,) s
    residual: Floats  # (N,) last Newton correction, relative to the amplitude of each state
    multipliers: NDArray[np.complex128]  # (N, n) Floquet multipliers, the phase one taken out
    iterations: Ints  # (N,) periods integrated
    junctions: dict[str, Floats]  # MOSFET -> (N,) junction temperature, degC
    way: NDArray[np.str_]  # (N,) which path of the solver settled it

    @property
    def units(self) -> int:
        """N."""
        return len(self.period)

    def take(self, units: Ints) -> Solution:
        """Return the orbits of some of the units."""
        picked = {
            field.name: getattr(self, field.name)[units]
            for field in fields(self)
            if field.name not in ("samples", "junctions")
        }
        junctions = {ref: celsius[units] for ref, celsius in self.junctions.items()}
        return replace(self, samples=self.samples[:, units], junctions=junctions, **picked)

    def put(self, units: Ints, other: Solution) -> Solution:
        """Return a solution with some units replaced."""
        merged = {}
        for field in fields(self):
            if field.name == "junctions":
                continue
            axis = 1 if field.name == "samples" else 0
            whole = getattr(self, field.name).copy()
            whole[(slice(None),) * axis + (units,)] = getattr(other, field.name)
            merged[field.name] = whole
        junctions = {}
        for ref, celsius in self.junctions.items():
            junctions[ref] = celsius.copy()
            junctions[ref][units] = other.junctions[ref]
        return replace(self, junctions=junctions, **merged)


def joined(parts: list[Solution]) -> Solution:
    """Solutions of several sets of units as one."""
    first = parts[0]
    if len(parts) == 1:
        return first
    # memory in the order in which the bulk solver makes it: the wave of a state is one piece
    waves = np.concatenate([part.samples.transpose(2, 0, 1) for part in parts], axis=2)
    return Solution(
        status=np.concatenate([part.status for part in parts]),
        samples=waves.transpose(1, 2, 0),
        period=np.concatenate([part.period for part in parts]),
        residual=np.concatenate([part.residual for part in parts]),
        multipliers=np.concatenate([part.multipliers for part in parts]),
        iterations=np.concatenate([part.iterations for part in parts]),
        junctions={
            ref: np.concatenate([part.junctions[ref] for part in parts]) for ref in first.junctions
        },
        way=np.concatenate([part.way for part in parts]),
    )
