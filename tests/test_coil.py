"""Current-sheet inductance against published tables and fits."""

import math

import numpy as np
import pytest
from scipy.constants import mu_0

from tolsim.errors import Mistake
from tolsim.spread.coil import air_coil_inductance, nagaoka

# Nagaoka 1909 table, diameter / length; digits recomputed from the elliptic integrals in mpmath.
NAGAOKA = {
    0.1: 0.958807, 0.2: 0.920093, 0.25: 0.901649, 0.5: 0.818136, 0.8: 0.735079, 1.0: 0.688423,
    1.25: 0.638094, 2.0: 0.525510, 2.5: 0.471865, 4.0: 0.365432, 5.0: 0.319825, 10.0: 0.203324,
}  # fmt: skip
INCH = 0.0254


@pytest.mark.parametrize(("ratio", "coefficient"), NAGAOKA.items())
def test_nagaoka_coefficient(ratio, coefficient):
    assert float(nagaoka(ratio)) == pytest.approx(coefficient, abs=6e-7)


def test_nagaoka_keeps_its_digits_for_long_coils():
    """K = 1 - 4 (D/l) / (3 pi) + (D/l)^2 / 8 - ... for long coils (Grover 1946, ch. 16)."""
    ratio = np.array([1e-8, 1e-5, 1e-3])
    series = 1.0 - 4.0 * ratio / (3.0 * math.pi) + ratio**2 / 8.0
    np.testing.assert_allclose(nagaoka(ratio), series, rtol=1e-11)


def test_wheeler_1982_agrees_within_a_tenth_of_a_percent():
    """Wheeler, Proc. IEEE 70 (1982) 1449: a fit good to 0.1 % from short to long coils."""
    shape = np.geomspace(0.02, 10.0, 200)  # length / diameter
    radius, turns = 0.02, 7.0
    length = shape * 2.0 * radius
    relative = length / radius
    fit = (
        mu_0 * turns**2 * radius
        * (np.log(1.0 + np.pi / relative) + 1.0 / (2.3 + 1.6 * relative + 0.44 * relative**2))
    )  # fmt: skip
    exact = air_coil_inductance(turns, 2.0 * radius, length)
    assert np.max(np.abs(fit / exact - 1.0)) < 1.05e-3


@pytest.mark.parametrize(
    ("diameter", "length", "turns", "microhenry", "wheeler_1928"),
    [(2.0, 2.0, 20, 13.80634, 13.79310), (2.0, 4.0, 50, 51.2742, 51.0204)],
)
def test_worked_coils(diameter, length, turns, microhenry, wheeler_1928):
    """Wheeler, Proc. IRE 16 (1928) 1398: L = r2 N2 / (9 r + 10 l), inches, to about 1 %."""
    sheet = 1e6 * float(air_coil_inductance(turns, diameter * INCH, length * INCH))
    assert sheet == pytest.approx(microhenry, rel=2e-6)
    radius = diameter / 2.0
    assert radius**2 * turns**2 / (9.0 * radius + 10.0 * length) == pytest.approx(
        wheeler_1928, rel=2e-6
    )


def test_coils_broadcast_and_refuse_nonsense():
    assert air_coil_inductance([1.0, 2.0], 0.05, 0.05).shape == (2,)
    for wrong in ((0.0, 0.05, 0.05), (5.0, -0.05, 0.05), (5.0, 0.05, 0.0)):
        with pytest.raises(Mistake):
            air_coil_inductance(*wrong)
