"""Van der Pol's oscillator through the same orbit search as every stage.

x'' - mu (1 - x^2) x' + x = 0 is a capacitor, a coil and the current mu (x^3/3 - x) side by side,
here at 1e7 rad/s.  Period, amplitude and Floquet multiplier: `references.van_der_pol`, from a
34-digit Taylor integration that agrees with P. Amore, arXiv:2111.12198 (2021).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from math import exp, pi

import numpy as np
import pytest
from references import van_der_pol

from tolsim.circuit.devices import Devices
from tolsim.circuit.network import Network
from tolsim.circuit.nominal import Nominal, find_nominal
from tolsim.circuit.periodic import highest
from tolsim.circuit.shooting import Start, shoot

OMEGA = 1e7  # rad/s, of the tank alone


@dataclass(frozen=True)
class Cubic:
    """The current mu (v^3/3 - v) as an element of its own, mu (1, N)."""

    mu: np.ndarray
    names: tuple[str, ...] = ("cubic",)
    kind: str = "current"

    sense = inject = np.eye(1)

    def respond(self, v):
        return self.mu * (v**3 / 3 - v), self.mu * (v**2 - 1)

    def take(self, units):
        return replace(self, mu=self.mu[:, units])


@dataclass(frozen=True)
class Oscillator:
    """Stands where a `Case` does: N oscillators of mu (N,), without transistors."""

    mu: np.ndarray

    @property
    def units(self):
        return len(self.mu)

    def take(self, units):
        return Oscillator(self.mu[units])

    def cold_junctions(self):
        return {}

    def balance(self, _network, _samples):
        return {}

    def network(self, _junctions):
        units = self.units
        storage = np.tile(np.eye(2) / OMEGA, (units, 1, 1))
        incidence = np.tile([[0.0, 1.0], [-1.0, 0.0]], (units, 1, 1))
        return Network(
            E=storage,
            F=incidence,
            D=np.array([[1.0, 0.0]]),
            v0=np.zeros((units, 1)),
            source=np.zeros((units, 2)),
            devices=Devices((Cubic(self.mu[None]),), 1),
            index={"x": 0, "L": 1},
            branches=frozenset({"L"}),
            ports={"cubic": 0},
            known={"gnd": np.zeros(units), "top": np.ones(units)},
            supplies={},
            series_conductance={},
        )


def orbit(mu: float, steps: int) -> Nominal:
    nominal = find_nominal(Oscillator(np.array([mu])), steps)
    assert nominal.found
    return nominal


def period_of(nominal: Nominal) -> float:
    return float(nominal.solution.period[0]) * OMEGA


def amplitude_of(nominal: Nominal) -> float:
    return float(highest(nominal.solution.samples[:-1, :, 0])[0])


def multiplier_of(nominal: Nominal) -> float:
    return float(np.abs(nominal.solution.multipliers[0]).max())


def test_moderate_mu() -> None:
    """mu = 1 at 1024 steps: period 6.66328685932 and amplitude 2.00861986 to 1e-6."""
    known, found = van_der_pol.TABLE[1.0], orbit(1.0, 1024)
    assert period_of(found) == pytest.approx(known.period, rel=1e-6)
    assert amplitude_of(found) == pytest.approx(known.amplitude, rel=1e-6)
    assert multiplier_of(found) == pytest.approx(exp(known.log_multiplier), rel=5e-3)


def test_multiplier_settles_as_steps_grow_finer() -> None:
    """mu = 1 at 4096 steps: multiplier 8.59695e-4 to 5e-4 (the flow must not see the gap)."""
    known = exp(van_der_pol.TABLE[1.0].log_multiplier)
    assert multiplier_of(orbit(1.0, 4096)) == pytest.approx(known, rel=5e-4)


def test_strong_mu() -> None:
    """mu = 5 at 1024 steps: period to 2e-5, amplitude to 2e-5, multiplier (8e-38) next to none."""
    known, found = van_der_pol.TABLE[5.0], orbit(5.0, 1024)
    assert period_of(found) == pytest.approx(known.period, rel=2e-5)
    assert amplitude_of(found) == pytest.approx(known.amplitude, rel=2e-5)
    assert multiplier_of(found) < 1e-4


def test_weak_mu() -> None:
    """mu = 0.2 at 1024 steps against Lindstedt's series; multiplier near exp(-2 pi mu)."""
    found = orbit(0.2, 1024)
    assert period_of(found) == pytest.approx(2 * pi / van_der_pol.frequency_series(0.2), rel=3e-6)
    assert amplitude_of(found) == pytest.approx(van_der_pol.amplitude_series(0.2), rel=3e-6)
    assert multiplier_of(found) == pytest.approx(exp(-0.4 * pi), rel=0.01)


def test_second_order() -> None:
    """Twice the steps, a quarter of the error of the period, from 64 steps on."""
    errors = [
        abs(period_of(orbit(1.0, steps)) / van_der_pol.TABLE[1.0].period - 1)
        for steps in (64, 128, 256, 512)
    ]
    orders = np.log2(np.array(errors[:-1]) / np.array(errors[1:]))
    assert orders == pytest.approx(2.0, abs=0.1)
    assert errors[1] < 6e-5  # at the default of 128 steps


def test_batch_equals_loop() -> None:
    """Three mu side by side, led from mu = 1, settle as each does alone."""
    found = orbit(1.0, 128)
    mus = np.array([0.8, 1.0, 1.3])

    def settle(some: np.ndarray):
        copies = np.zeros(len(some), dtype=np.intp)
        start = Start(found.solution.samples[0][copies], found.solution.period[copies], {})
        return shoot(Oscillator(some), start, found.frame, 128, 20, "test")

    together = settle(mus)
    alone = [settle(mus[[k]]) for k in range(3)]
    assert together.period == pytest.approx([one.period[0] for one in alone], rel=1e-12)
    assert together.iterations.tolist() == [one.iterations[0] for one in alone]
    assert np.all(np.diff(together.period) > 0)  # stronger mu, longer period
