"""Shape of samples: tests of fit, cut ends and hollow middles, against simulation and scipy."""

import numpy as np
import pytest
from scipy import stats

from tolsim.stats.sample_shape import cut_ends, hollow_middle, normal_fit

RNG = np.random.default_rng(20260501)
START = RNG.bit_generator.state


@pytest.fixture(autouse=True)
def _from_the_start():
    """Every test draws the same numbers, whichever others run."""
    RNG.bit_generator.state = START


def test_distance_is_that_of_scipy():
    """The statistic against scipy.stats.goodness_of_fit, which computes it another way."""
    x = RNG.normal(3.0, 0.2, 40)
    known = {"loc": float(x.mean()), "scale": float(x.std(ddof=1))}
    with np.errstate(all="ignore"):
        other = stats.goodness_of_fit(
            stats.norm, x, known_params=known, statistic="ad", n_mc_samples=20, rng=1
        )
    assert normal_fit(x).distance == pytest.approx(other.statistic, rel=1e-9)


@pytest.mark.parametrize("size", [10, 25, 100])
def test_p_is_uniform_under_the_normal_law(size):
    """The fitted formulas of D'Agostino and Stephens hold their level."""
    p = np.array([normal_fit(RNG.normal(size=size)).p for _ in range(4000)])
    for level in (0.01, 0.05, 0.10, 0.25):  # they were made for the lower levels
        sd = np.sqrt(level * (1.0 - level) / 4000)
        assert np.mean(p < level) == pytest.approx(level, rel=0.08, abs=4.0 * sd)


def test_a_textbook_level():
    """Critical 5 % value 0.752 of A*2 (D'Agostino, Stephens 1986, table 4.7, case 3)."""
    x = RNG.normal(size=30)
    factor = 1.0 + 0.75 / 30 + 2.25 / 900
    corrected = normal_fit(x).distance * factor
    below = normal_fit(x).p
    assert (below > 0.05) == (corrected < 0.752)
    assert np.exp(1.2937 - 5.709 * 0.752 + 0.0186 * 0.752**2) == pytest.approx(0.05, abs=0.0005)


def test_gross_misfits_have_no_chance():
    x = np.concatenate([RNG.normal(0.0, 1.0, 500), RNG.normal(40.0, 1.0, 500)])
    assert 0.0 <= normal_fit(x).p < 1e-20


@pytest.mark.parametrize("size", [8, 30, 100, 500])
def test_whole_samples_are_seldom_called_cut(size):
    """One in two hundred for the range, and one for each end."""
    told = np.mean([bool(cut_ends(RNG.normal(size=size))) for _ in range(3000)])
    assert told == pytest.approx(0.0125, abs=0.008)


@pytest.mark.parametrize(
    ("low", "high", "size", "ends", "power"),
    [
        (-1.0, 1.0, 100, {"lower", "upper"}, 0.9),
        (-1.5, 1.5, 150, {"lower", "upper"}, 0.9),
        (0.0, 9.0, 50, {"lower"}, 0.85),
        (-9.0, 0.5, 150, {"upper"}, 0.9),
    ],
)
def test_cut_samples_are_found(low, high, size, ends, power):
    law = stats.truncnorm(low, high)
    told = [set(cut_ends(law.rvs(size, random_state=RNG))) for _ in range(300)]
    assert np.mean([found == ends for found in told]) > power


def test_a_removed_middle_is_found_and_none_is_invented():
    def sorted_out(size):
        x = RNG.normal(0.0, 2.5, 20 * size)
        return x[(abs(x) > 2.0) & (abs(x) < 5.0)][:size]

    assert np.mean([hollow_middle(sorted_out(30)) for _ in range(300)]) > 0.95
    for law in (stats.norm(), stats.uniform(), stats.expon(), stats.lognorm(0.8)):
        told = np.mean([hollow_middle(law.rvs(30, random_state=RNG)) for _ in range(1000)])
        assert told <= 0.015


def test_too_few_or_equal_readings_say_nothing():
    assert cut_ends([1.0, 2.0, 3.0]) == ()
    assert cut_ends([1.0] * 20) == ()
    assert not hollow_middle([1.0, 1.0, 9.0, 9.0])
    assert not hollow_middle([2.0] * 20)
