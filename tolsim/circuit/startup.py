"""Does the stage start by itself?  Modes of the circuit linearised at its bias point.

With J = F + P G P' and C = E + P C_v P' the small-signal equation is C dx/dt + J x = 0, and a mode
e^(lambda t) solves J x = -lambda C x.  C is singular (nets without capacitance), so the pencil is
inverted about a real shift sigma of the order of the oscillation: mu = eig((J + sigma C)^-1 C),
lambda = sigma - 1/mu; the algebraic modes fall on mu = 0 and drop out.

The start margin is the factor on every transconductance, in dB, at which the growth of the
oscillation mode vanishes (bias point held): positive means it starts.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.bias import Bias
from tolsim.circuit.critical import Critical, critical_of, follow_critical
from tolsim.circuit.devices import Floats
from tolsim.circuit.network import Network

Complexes = NDArray[np.complex128]
Growth = Callable[[Floats, NDArray[np.intp]], Floats]  # (dB, units) -> relative growth

BOLTZMANN = 1.380649e-23  # J/K, exact (SI 2019)
MARGIN_STEPS_DB = (6.0, 14.0, 30.0, 60.0)  # outward search for the sign change
MARGIN_ROUNDS = 12
SUSTAINED = 1e-4  # relative growth that counts as none
MARGIN_TOLERANCE_DB = 0.005
SCALE_FACTORS = 25  # transconductance factors tried, 1e-4 to 1
SCALE_SHIFTS = 13  # shifts tried, 1e4 to 1e10 1/s
NEAR_MODE = (0.4, 2.5)  # |lambda| window, relative to the reference, that belongs to the mode


@dataclass(frozen=True)
class Modes:
    """The oscillation mode of each unit, and every other one."""

    growth: Floats  # (N,) 1/s, real part of the leading mode
    frequency: Floats  # (N,) Hz; 0 for a mode that grows without oscillating
    vector: Complexes  # (N, n) its shape
    eigenvalues: Complexes  # (N, n) all, -inf for algebraic ones

    @property
    def starts(self) -> NDArray[np.bool_]:
        """Whether the leading mode grows, (N,)."""
        return self.growth > 0


def small_signal(network: Network, bias: Bias) -> tuple[Floats, Floats, Floats]:
    """C, J and the transconductance part of J, each (N, n, n)."""
    D = network.D
    through = bias.G.copy()
    diagonal = np.arange(through.shape[1])
    through[:, diagonal, diagonal] = 0.0  # only transistors couple one port to another
    through[:, _currents(network)] = 0.0  # and supplies whose limit falls with their voltage
    return (
        network.E + D.T @ bias.C @ D,
        network.F + D.T @ bias.G @ D,
        D.T @ through @ D,
    )


def _currents(network: Network) -> NDArray[np.intp]:
    """Ports that are currents of branches."""
    branches = [network.index[name] for name in network.branches]
    return np.flatnonzero(np.any(network.D[:, branches] != 0, axis=1))


def modes(network: Network, bias: Bias, sigma: float) -> Modes:
    """All modes of every unit and the leading one.

    Parameters
    ----------
    sigma : float, 1/s
        Shift, of the order of the oscillation's angular frequency.
    """
    C, J, _ = small_signal(network, bias)
    mu, vectors = np.linalg.eig(np.linalg.solve(J + sigma * C, C))
    eigenvalues = _unshift(mu, sigma)
    lead = np.argmax(_rank(eigenvalues, sigma), axis=1)
    units = np.arange(network.units)
    value = eigenvalues[units, lead]
    return Modes(
        growth=value.real,
        frequency=np.abs(value.imag) / (2 * np.pi),
        vector=vectors[units, :, lead].astype(complex),
        eigenvalues=eigenvalues,
    )


def _unshift(mu: Complexes, sigma: float) -> Complexes:
    """lambda = sigma - 1/mu, algebraic modes to -infinity."""
    finite = np.abs(mu) > 1e-9 / sigma * 1e-3
    safe = np.where(finite, mu, 1.0)
    return np.where(finite, sigma - 1.0 / safe, -np.inf).astype(complex)


def _rank(eigenvalues: Complexes, sigma: float) -> Floats:
    """Order of leadership: growing modes first, then the least damped oscillating one.

    A decaying real mode never leads: the slowest one is only a charge trapped between capacitors.
    """
    real = np.where(np.isfinite(eigenvalues.real), eigenvalues.real, -np.inf)
    oscillates = np.abs(eigenvalues.imag) > 1e-6 * sigma
    return np.where(oscillates | (real > 1e-6 * sigma), real, -np.inf)


def start_margin(
    network: Network,
    bias: Bias,
    reference: float,
    near: Critical | None = None,
    known: Modes | None = None,
) -> Floats:
    """Margin of every unit in dB, within +-60 dB.

    Parameters
    ----------
    reference : float, rad/s
        Angular frequency of the nominal oscillation mode.
    near : Critical, optional
        Critical point of the nominal unit: most units are followed from it, which is quicker.
    known : Modes, optional
        The units' modes with the same shift, where they are known already.
    """
    C, J, through = small_signal(network, bias)

    def growth(decibel: Floats, units: NDArray[np.intp]) -> Floats:
        factor = 10.0 ** (-decibel / 20.0)
        scaled = J[units] + (factor - 1.0)[:, None, None] * through[units]
        mu = np.linalg.eigvals(np.linalg.solve(scaled + reference * C[units], C[units]))
        return _mode_growth(_unshift(mu.astype(complex), reference), reference) / reference

    every = np.arange(network.units)
    if known is None:
        g_here = growth(np.zeros(network.units), every)
    else:
        g_here = _mode_growth(known.eigenvalues, reference) / reference
    margin = np.where(g_here > 0, 1.0, -1.0) * MARGIN_STEPS_DB[-1]
    left = every
    if near is not None:
        found = follow_critical(C, J, through, near)
        decibel = -20.0 * np.log10(found.factor)
        likely = found.settled & (np.abs(decibel) < MARGIN_STEPS_DB[-1]) & (decibel * g_here > 0)
        followed = np.flatnonzero(likely)
        # no other mode may grow where the followed one is just sustained
        followed = followed[np.abs(growth(decibel[followed], followed)) < SUSTAINED]
        margin[followed] = decibel[followed]
        left = np.setdiff1d(every, followed)
    if left.size:
        margin[left] = _search_margin(growth, left, g_here[left])
    return margin


def critical_point(network: Network, bias: Bias, reference: float) -> Critical | None:
    """Where the mode of the first unit is just sustained; None if nowhere within +-60 dB."""
    C, J, through = (matrix[:1] for matrix in small_signal(network, bias))
    decibel = float(start_margin(network, bias, reference)[0])
    if abs(decibel) >= MARGIN_STEPS_DB[-1]:
        return None
    found = critical_of(C, J, through, 10.0 ** (-decibel / 20.0), reference)
    return found if found.settled[0] else None


def _search_margin(growth: Growth, units: NDArray[np.intp], g_start: Floats) -> Floats:
    """Margin of some units by outward steps until the growth changes sign, then inward."""
    upward = np.where(g_start > 0, 1.0, -1.0)  # weaken what starts, strengthen what does not
    low, g_low = np.zeros(len(units)), g_start.copy()
    high, g_high = low.copy(), g_low.copy()
    open_units = np.arange(len(units))
    for step in MARGIN_STEPS_DB:
        trial = upward[open_units] * step
        g_trial = growth(trial, units[open_units])
        crossed = g_trial * g_start[open_units] <= 0
        low[open_units], g_low[open_units] = high[open_units], g_high[open_units]
        high[open_units], g_high[open_units] = trial, g_trial
        open_units = open_units[~crossed]
        if not open_units.size:
            break
    margin = upward * MARGIN_STEPS_DB[-1]
    crossing = np.setdiff1d(np.arange(len(units)), open_units)
    margin[crossing] = _refine(
        growth, units[crossing], low[crossing], g_low[crossing], high[crossing], g_high[crossing]
    )
    return margin


def _refine(
    growth: Growth,
    units: NDArray[np.intp],
    low: Floats,
    g_low: Floats,
    high: Floats,
    g_high: Floats,
) -> Floats:
    """Bracketed secant (Illinois rule) on the growth, all units together."""
    a, fa, b, fb = low, g_low, high, g_high
    last = np.zeros(len(units))
    middle = 0.5 * (a + b)
    for _ in range(MARGIN_ROUNDS):
        slope = np.where(fb == fa, 1.0, fb - fa)
        middle = np.where(fb == fa, 0.5 * (a + b), b - fb * (b - a) / slope)
        f = growth(middle, units)
        replaces_b = f * fa < 0
        # the end that stays twice in a row loses half its weight
        fa = np.where(replaces_b & (last > 0), 0.5 * fa, fa)
        fb = np.where(~replaces_b & (last < 0), 0.5 * fb, fb)
        last = np.where(replaces_b, 1.0, -1.0)
        move = np.where(replaces_b, np.abs(middle - b), np.abs(middle - a))
        b, fb = np.where(replaces_b, middle, b), np.where(replaces_b, f, fb)
        a, fa = np.where(replaces_b, a, middle), np.where(replaces_b, fa, f)
        if move.max(initial=0.0) < MARGIN_TOLERANCE_DB:
            break
    return middle


def _mode_growth(eigenvalues: Complexes, reference: float) -> Floats:
    """Largest real part among modes near the reference frequency or growing without oscillation."""
    size = np.abs(eigenvalues)
    near = (size > NEAR_MODE[0] * reference) & (size < NEAR_MODE[1] * reference)
    oscillates = np.abs(eigenvalues.imag) > 1e-3 * reference
    bursts_out = ~oscillates & (eigenvalues.real > 1e-3 * reference)
    real = np.where((near & oscillates) | bursts_out, eigenvalues.real, -np.inf)
    best = real.max(axis=1)
    return np.where(np.isfinite(best), best, -reference)


def noise_amplitude(network: Network, bias: Bias, lead: Modes, ambient_c: Floats) -> Floats:
    """Thermal amplitude of the leading modes on their largest port, V.

    Equipartition (Nyquist, Phys. Rev. 32 (1928) 110): a mode of g quadratic terms holds g k T / 2,
    and its mean energy at amplitude 1 is x* C x / (2 g), with g = 2 for one that oscillates and 1
    for one that does not.  So its port amplitude is g sqrt(k T / C_eff), with
    C_eff = x* C x / |x_port|^2.
    """
    C, _, _ = small_signal(network, bias)
    energy = np.einsum("ui,uij,uj->u", lead.vector.conj(), C, lead.vector).real
    swing = np.abs(lead.vector @ network.D.T).max(axis=1)
    capacitance = np.abs(energy) / np.maximum(swing, 1e-300) ** 2
    terms = np.where(lead.frequency > 0, 2.0, 1.0)
    return terms * np.sqrt(BOLTZMANN * (ambient_c + 273.15) / np.maximum(capacitance, 1e-15))


def resemblance(network: Network, vector: Complexes, reference: Complexes) -> Floats:
    """How alike two mode shapes are, 0 to 1 (modal assurance criterion on port voltages).

    R. J. Allemang, D. L. Brown, "A correlation coefficient for modal vector analysis",
    Proc. 1st Int. Modal Analysis Conf. (1982) 110-116.

    Parameters
    ----------
    vector : (N, n)
    reference : (n,)
    """
    mine = vector @ network.D.T
    other = reference @ network.D.T
    overlap = np.abs(mine @ other.conj()) ** 2
    return overlap / np.maximum(
        np.sum(np.abs(mine) ** 2, axis=1) * np.sum(np.abs(other) ** 2), 1e-300
    )


def oscillation_scale(network: Network, bias: Bias) -> float:
    """Angular frequency of the mode that oscillates first when transconductance rises from nothing.

    At full transconductance a strongly regenerative stage may leave its bias point without
    oscillating at all (real, growing modes); the frequency it will run near is that of the pair
    which crosses into growth first.  A stage that cannot grow gives its least damped pair.

    Parameters
    ----------
    network, bias
        The first unit counts.
    """
    C, J, through = (matrix[0] for matrix in small_signal(network, bias))
    factors = np.concatenate([np.geomspace(1e-4, 1.0, SCALE_FACTORS), [0.0]])
    best, least_damping = 1e7, -np.inf
    crossing, crossed = np.inf, 0.0
    for sigma in np.geomspace(1e4, 1e10, SCALE_SHIFTS):
        scaled = J + (factors - 1.0)[:, None, None] * through
        inverse = np.linalg.solve(scaled + sigma * C, np.broadcast_to(C, scaled.shape))
        values = _unshift(np.linalg.eigvals(inverse).astype(complex), float(sigma))
        omega = np.abs(values.imag)
        # trust a pair only where the shift is of its own order
        near = (omega > 0.2 * sigma) & (omega < 5.0 * sigma) & np.isfinite(values.real)
        growing = near & (values.real > 0)
        for row in np.flatnonzero(growing[:-1].any(axis=1)):
            if factors[row] < crossing:
                pick = np.argmax(np.where(growing[row], values[row].real, -np.inf))
                crossing, crossed = float(factors[row]), float(omega[row, pick])
            break
        damping = np.where(near, values.real / np.where(near, omega, 1.0), -np.inf)[-2]
        if damping.max() > least_damping:
            least_damping, best = float(damping.max()), float(omega[-2, np.argmax(damping)])
    return crossed if np.isfinite(crossing) else best
