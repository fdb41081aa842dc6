"""Units as columns of tables: every number that tells one unit from another is a row.

Two tables, so that a slot of the solver is refilled by copying one column of each: `linear`
(entries of E and F, sources, drive amplitudes, series conductances, ambient) stays in double
precision, `device` (the rows of the kernels) is in the precision the devices are evaluated in.

States are scaled: z_j = x_j / scale_j, so the tables hold E_ij scale_j and F_ij scale_j.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.assembly import assemble
from tolsim.circuit.bulk.grid import Grid, analyse
from tolsim.circuit.devices import Floats, Ints
from tolsim.circuit.kernels import Kernel, kernels_of
from tolsim.circuit.network import Network
from tolsim.circuit.thermal import Case, mosfets
from tolsim.parts import Mosfet

Place = tuple[int, int]
SHAPE_SAMPLES = 64  # per harmonic, for the spectrum of a drive waveform


class TopologyError(ValueError):
    """A unit couples states that neither the nominal unit nor the pilots couple."""


@dataclass(frozen=True)
class Topology:
    """What all units of a case share: which entries exist, scales, unknowns."""

    scale: Floats  # (n,)
    storage: tuple[Place, ...]  # entries of E
    conduction: tuple[Place, ...]  # entries of F
    driven: bool
    heated: tuple[str, ...]  # transistors whose junction temperature is an unknown

    @classmethod
    def of(cls, networks: tuple[Network, ...], scale: Floats, heated: tuple[str, ...]) -> Topology:
        """Entries that are not zero in any unit of the given networks."""
        E = np.any([np.any(network.E != 0, axis=0) for network in networks], axis=0)
        F = np.any([np.any(network.F != 0, axis=0) for network in networks], axis=0)
        driven = networks[0].drive_matrix is not None
        return cls(scale, _places(E), _places(F), driven, heated)

    @property
    def states(self) -> int:
        """Number of states n."""
        return len(self.scale)

    def unknowns(self, grid: Grid) -> int:
        """Coefficients of every state, ln w unless driven, heated junctions."""
        return self.states * grid.size + int(not self.driven) + len(self.heated)


def _places(mask: NDArray[np.bool_]) -> tuple[Place, ...]:
    return tuple((int(i), int(j)) for i, j in np.argwhere(mask))


@dataclass(frozen=True)
class UnitTable:
    """N units of one topology."""

    network: Network  # junctions at 25 degC where they are unknowns, else at ambient
    kernels: tuple[Kernel, ...]
    linear: Floats  # (r, N)
    device: NDArray[np.floating]  # (r', N)
    entries: dict[str, slice]  # name of a group -> its rows of `linear`
    kernel_rows: tuple[slice, ...]  # rows of `device` of each kernel
    sources: tuple[int, ...]  # states with a source
    drives: tuple[tuple[int, int], ...]  # (state, drive) of each drive amplitude

    @property
    def units(self) -> int:
        """Number of units N."""
        return int(self.linear.shape[1])

    def take(self, units: Ints) -> UnitTable:
        """Some of the units; the network stays that of all."""
        return replace(self, linear=self.linear[:, units], device=self.device[:, units])

    @classmethod
    def of(cls, case: Case, topology: Topology, dtype: type[np.floating]) -> UnitTable:
        """Tables of a case.

        Raises
        ------
        TopologyError
            If a unit has an entry that the topology lacks.
        """
        network = bare_network(case)
        groups: dict[str, list[Floats]] = {
            "E": _entries(network.E, topology.storage, topology.scale),
            "F": _entries(network.F, topology.conduction, topology.scale),
            "v0": list(network.v0.T),
            "ambient": [case.values["ambient"]],
        }
        offset, drives = _drive_rows(network)
        sources = tuple(int(i) for i in np.flatnonzero(np.any(offset != 0, axis=0)))
        groups["source"] = [offset[:, i] for i in sources]
        groups["drive"] = list(drives.values())
        groups["drift"] = [
            network.series_conductance.get(f"{ref}:drain", np.zeros(case.units))
            for ref in topology.heated
        ]
        groups["gate"] = [
            network.series_conductance.get(f"{ref}:gate", np.zeros(case.units))
            for ref in topology.heated
        ]
        for end in ("drain", "gate"):
            groups[f"known {end}"] = [
                _known_end(network, getattr(part, end), f"{ref}:{end}")
                for ref, part in _heated_parts(case, topology)
            ]
        entries, linear = _stack(groups, case.units)
        kernels = kernels_of(network.devices, case.units)
        numbered = {str(k): list(kernel.rows) for k, kernel in enumerate(kernels)}
        places, device = _stack(numbered, case.units)
        rows = tuple(places[str(k)] for k in range(len(kernels)))
        return cls(
            network, kernels, linear, device.astype(dtype), entries, rows, sources, tuple(drives)
        )


def _stack(groups: dict[str, list[Floats]], units: int) -> tuple[dict[str, slice], Floats]:
    """Rows of all groups below each other, and where each group stands."""
    entries, first = {}, 0
    for name, rows in groups.items():
        entries[name] = slice(first, first + len(rows))
        first += len(rows)
    table = np.empty((first, units))
    for name, rows in groups.items():
        for k, row in enumerate(rows):
            table[entries[name].start + k] = row
    return entries, table


def bare_network(case: Case) -> Network:
    """Transistors at 25 degC if their temperature is an unknown, at ambient if it is given."""
    if case.heated:
        return assemble(case.design, case.values)
    return case.network(case.cold_junctions())


def heated_junctions(case: Case) -> tuple[str, ...]:
    """Transistors whose junction temperature follows from their own loss."""
    return tuple(mosfets(case.design)) if case.heated else ()


def _heated_parts(case: Case, topology: Topology) -> list[tuple[str, Mosfet]]:
    parts = mosfets(case.design)
    return [(ref, parts[ref]) for ref in topology.heated]


def _known_end(network: Network, outer: str, inner: str) -> Floats:
    """Voltage of a terminal with a resistance behind it where an ideal supply holds it, else 0."""
    if inner in network.index and outer in network.known:
        return network.known[outer]
    return np.zeros(network.units)


def _entries(matrix: Floats, places: tuple[Place, ...], scale: Floats) -> list[Floats]:
    """Scaled entries of a matrix (N, n, n), refusing any outside the pattern."""
    mask = np.zeros(matrix.shape[1:], dtype=bool)
    for i, j in places:
        mask[i, j] = True
    if np.any(matrix[:, ~mask] != 0):
        raise TopologyError("a unit has a coupling that the nominal unit and the pilots lack")
    return [matrix[:, i, j] * scale[j] for i, j in places]


def _drive_rows(network: Network) -> tuple[Floats, dict[Place, Floats]]:
    """Constant source (N, n) and amplitude (N,) of every drive at every state it enters."""
    if network.drive_matrix is None or network.drive_shape is None:
        return network.source, {}
    shape = network.drive_shape
    offset = network.source + np.einsum("und,ud->un", network.drive_matrix, shape.low)
    reach = network.drive_matrix * (shape.high - shape.low)[:, None, :]
    return offset, {
        (int(i), int(d)): reach[:, i, d] for i, d in np.argwhere(np.any(reach != 0, axis=0))
    }


def drive_spectra(network: Network, grid: Grid) -> Floats:
    """Coefficients (d, K) of every drive waveform between its levels 0 and 1."""
    shape = network.drive_shape
    if shape is None:
        return np.zeros((0, grid.size))
    count = len(shape.duty)
    unit = replace(shape, low=np.zeros((1, count)), high=np.ones((1, count)))
    points = SHAPE_SAMPLES * grid.harmonics
    waves = unit.at(np.arange(points)[:, None] / points)
    return analyse(waves, grid.harmonics).T
