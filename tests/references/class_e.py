"""Ideal class-E stage: exact periodic state of a switched linear circuit, two phases.

N. O. Sokal and A. D. Sokal, IEEE J. Solid-State Circuits SC-10 (1975) 168-176; F. H. Raab,
"Idealized operation of the class E tuned power amplifier", IEEE Trans. Circuits Syst. CAS-24
(1977) 725-735 (infinite Q and choke); N. O. Sokal, "Class-E RF power amplifiers", QEX
Jan/Feb 2001, Table 1 (finite Q); M. Acar, A. J. Annema, B. Nauta, IEEE Trans. Circuits
Syst. I 54 (2007) 2706-2717 (finite feed inductance).

Time is in radians (w = 1), the switch closes at 0 and opens at pi (duty one half).
"""

from __future__ import annotations

from dataclasses import dataclass
from math import pi, sqrt

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import expm
from scipy.optimize import root

Array = NDArray[np.float64]

# Raab 1977, closed forms of the limit of infinite loaded Q and choke.
RAAB_PEAK = 3.562010  # drain peak over V
RAAB_CURRENT = 1 + sqrt(1 + pi**2 / 4)  # switch current peak over DC current
RAAB_POWER = 8 / (pi**2 + 4)  # P R / V^2
RAAB_SHUNT = 8 / (pi * (pi**2 + 4))  # w C1 R
RAAB_REACTANCE = pi * (pi**2 - 4) / 16  # X / R


@dataclass(frozen=True)
class Figures:
    """Figures of one periodic state with V = 1, R = 1, w = 1."""

    power: float  # P R / V^2
    drain_peak: float  # over V
    switch_peak: float  # over the DC current
    switch_rms: float  # over the DC current
    turn_on_voltage: float  # drain voltage when the switch closes, over V
    supply_current: float  # V / R


@dataclass(frozen=True)
class Stage:
    """w C1 R, w C2 R, loaded Q = w L2 / R and w L1 / R of a stage with V = R = w = 1."""

    shunt: float
    series: float
    loaded_q: float
    feed: float = 1e5
    on_resistance: float = 0.0  # of the switch, over R; 0 is a short circuit


def _matrices(stage: Stage) -> tuple[Array, Array]:
    """Generators of the on and off phases for the state (v, iL1, iL2, vC2, 1)."""
    off = np.zeros((5, 5))
    off[0, 1], off[0, 2] = 1 / stage.shunt, -1 / stage.shunt
    off[1, 0], off[1, 4] = -1 / stage.feed, 1 / stage.feed
    off[2, [0, 2, 3]] = np.array([1.0, -1.0, -1.0]) / stage.loaded_q
    off[3, 2] = 1 / stage.series
    on = off.copy()
    if stage.on_resistance > 0:
        on[0, 0] -= 1 / (stage.on_resistance * stage.shunt)
    else:
        on[0] = 0.0
    return on, off


def _periodic_start(stage: Stage) -> Array:
    """State just after the switch has closed, shape (5,)."""
    on, off = _matrices(stage)
    close = np.eye(5)
    if stage.on_resistance == 0:
        close[0, 0] = 0.0  # an ideal switch dumps the charge of C1
    once = close @ expm(off * pi) @ expm(on * pi)
    x = np.linalg.solve(np.eye(4) - once[:4, :4], once[:4, 4])
    return np.append(x, 1.0)


def figures(stage: Stage, samples: int = 2000) -> Figures:
    """Exact steady state, sampled at Gauss points of both phases for means and peaks."""
    on, off = _matrices(stage)
    x_on = _periodic_start(stage)
    x_off = expm(on * pi) @ x_on
    closed = _walk(on, x_on, samples)
    opened = _walk(off, x_off, samples)
    switch = closed[:, 1] - closed[:, 2]
    if stage.on_resistance > 0:
        switch = closed[:, 0] / stage.on_resistance
    supply = (_mean(closed[:, 1]) + _mean(opened[:, 1])) / 2
    load = (_mean(closed[:, 2] ** 2) + _mean(opened[:, 2] ** 2)) / 2
    return Figures(
        power=load,
        drain_peak=float(opened[:, 0].max()),
        switch_peak=float(switch.max() / supply),
        switch_rms=float(np.sqrt(_mean(switch**2) / 2) / supply),
        turn_on_voltage=float((expm(off * pi) @ x_off)[0]),
        supply_current=supply,
    )


def optimum(loaded_q: float, feed: float = 1e5) -> Stage:
    """Shunt and series capacitors that close the switch at zero voltage and zero slope."""

    def residual(guess: Array) -> Array:
        stage = Stage(guess[0], guess[1], loaded_q, feed)
        on, off = _matrices(stage)
        end = expm(off * pi) @ expm(on * pi) @ _periodic_start(stage)
        return np.array([end[0], (off @ end)[0]])

    answer = root(residual, np.array([0.2, 1 / (loaded_q - 1.2)]), tol=1e-12)
    return Stage(float(answer.x[0]), float(answer.x[1]), loaded_q, feed)


@dataclass(frozen=True)
class FiniteFeed:
    """Design set of a stage with finite feed inductance and a sinusoidal output current."""

    feed: float  # w L / R
    shunt: float  # w C R
    power: float  # P R / V^2
    reactance: float  # X / R
    drain_peak: float  # over V
    switch_peak: float  # over the DC current
    feed_ripple: float  # peak to peak over the DC current


def finite_feed(q: float, samples: int = 20001) -> FiniteFeed:
    """Optimum for q = 1 / (w sqrt(L C)); scaled here to L = V = w = 1, C = 1 / q^2.

    State (v, iL, cos t, sin t, 1); the output current a cos t + b sin t and the starting
    feed current follow from three linear conditions: v, dv/dt and the change of iL over the
    period are zero when the switch closes.
    """
    c = 1 / q**2

    def end(feed_start: float, a: float, b: float) -> tuple[Array, Array, Array]:
        on = np.zeros((5, 5))
        on[1, 4] = 1.0
        on[2, 3], on[3, 2] = -1.0, 1.0
        off = on.copy()
        off[0, 1], off[0, 2], off[0, 3] = 1 / c, -a / c, -b / c
        off[1, 0] = -1.0
        x_on = np.array([0.0, feed_start, 1.0, 0.0, 1.0])
        x_off = expm(on * pi) @ x_on
        return _walk_even(on, x_on, samples), _walk_even(off, x_off, samples), off

    def gap(feed_start: float, a: float, b: float) -> Array:
        _, opened, off = end(feed_start, a, b)
        last = opened[-1]
        return np.array([last[0], (off @ last)[0], last[1] - feed_start])

    base = gap(0.0, 0.0, 0.0)
    columns = np.array([gap(*unit) - base for unit in np.eye(3)]).T
    feed_start, a, b = np.linalg.solve(columns, -base)
    closed, opened, _ = end(feed_start, a, b)
    grid = np.linspace(0, pi, samples)
    supply = (_trapezoid(closed[:, 1]) + _trapezoid(opened[:, 1])) / 2
    amplitude = np.hypot(a, b)
    r = 2 * supply / amplitude**2
    # Fundamental of v as a phasor relative to the output current gives R + j X.
    v_cos = _trapezoid(opened[:, 0] * np.cos(grid + pi))
    v_sin = _trapezoid(opened[:, 0] * np.sin(grid + pi))
    impedance = (v_cos - 1j * v_sin) / (a - 1j * b)
    both = np.concatenate([closed[:, 1], opened[:, 1]])
    switch = closed[:, 1] - a * np.cos(grid) - b * np.sin(grid)
    return FiniteFeed(
        feed=1 / r,
        shunt=c * r,
        power=supply * r,
        reactance=float(impedance.imag / impedance.real),
        drain_peak=float(opened[:, 0].max()),
        switch_peak=float(switch.max() / supply),
        feed_ripple=float(np.ptp(both) / supply),
    )


def _walk(generator: Array, start: Array, samples: int) -> Array:
    """States at the mid points of equal steps over half a period, shape (samples, 5)."""
    step = expm(generator * (pi / samples))
    return _march(step, expm(generator * (pi / samples / 2)) @ start, samples)


def _walk_even(generator: Array, start: Array, samples: int) -> Array:
    """States at equally spaced instants including both ends, shape (samples, 5)."""
    return _march(expm(generator * (pi / (samples - 1))), start, samples)


def _march(step: Array, x: Array, samples: int) -> Array:
    states = np.empty((samples, len(x)))
    for k in range(samples):
        states[k] = x
        x = step @ x
    return states


def _mean(wave: Array) -> float:
    """Mean by the mid-point rule."""
    return float(np.mean(wave))


def _trapezoid(wave: Array) -> float:
    return float((wave.sum() - (wave[0] + wave[-1]) / 2) / (len(wave) - 1))
