"""Shares under another law, against laws whose answers are known in closed form."""

import numpy as np
import pytest

from tolsim.laws import TruncatedNormal, Uniform
from tolsim.stats.proportion import share_interval
from tolsim.stats.response import moved, slopes
from tolsim.stats.reweighting import corrected_share, effective_units, weighted_share

BELL = TruncatedNormal(-1.0, 1.0, 0.4)
FLAT = Uniform(-1.0, 1.0)


def plain(hit):
    """Share of units that all count alike."""
    return weighted_share(hit, np.ones(hit.size))


def test_equal_weights_are_plain_counting():
    hit = np.arange(200) < 188
    found = weighted_share(hit, np.full(200, 0.3))
    assert found.effective == pytest.approx(200.0)
    assert (found.low, found.high) == pytest.approx(
        [float(end) for end in share_interval(188, 200)]
    )


def test_effective_units_of_a_known_ratio_of_densities():
    """Kish's number tends to N / E[w^2]; drawn flat for a bell, E[w^2] is the integral of q^2/p."""
    u = (np.arange(200_000) + 0.5) / 200_000
    x = FLAT.ppf(u)
    weights = BELL.pdf(x) / FLAT.pdf(x)
    grid = np.linspace(-1.0, 1.0, 20_001)
    square = np.trapezoid(BELL.pdf(grid) ** 2 / FLAT.pdf(grid), grid)
    assert effective_units(weights) / u.size == pytest.approx(1.0 / square, rel=1e-4)


def test_weights_give_the_share_of_the_other_law_and_intervals_that_cover_it():
    """Two factors flat, asked for bells: P(x < 0.3) P(y < 0.6) by their own cdf."""
    truth = float(BELL.cdf(0.3) * BELL.cdf(0.6))
    rng = np.random.default_rng(7)
    covered, shares = 0, []
    for _ in range(400):
        x = FLAT.ppf(rng.uniform(size=(300, 2)))
        weights = (BELL.pdf(x) / FLAT.pdf(x)).prod(axis=1)
        found = weighted_share((x[:, 0] < 0.3) & (x[:, 1] < 0.6), weights)
        covered += found.low <= truth <= found.high
        shares.append(found.share)
    assert np.mean(shares) == pytest.approx(truth, abs=4 * np.std(shares) / 20)
    assert covered >= 372  # of 400; a nominal 95 % interval misses 28 or more once in 10 000


def test_a_wrong_expectation_is_corrected_by_what_is_found():
    rng = np.random.default_rng(3)
    truth, shares, covered = 0.8, [], 0
    for _ in range(400):
        found = rng.uniform(size=500) < truth
        expected = found | (rng.uniform(size=500) < 0.3)  # flatters: 0.86 in place of 0.8
        few = slice(0, 60)
        off = float(np.mean(expected[few] != found[few]))
        answer = corrected_share(plain(expected), expected[few], found[few], off)
        shares.append(answer.share)
        covered += answer.low <= truth <= answer.high
    assert np.mean(shares) == pytest.approx(truth, abs=4 * np.std(shares) / 20)
    assert covered >= 360


def test_no_failure_anywhere_still_leaves_room_for_failures():
    all_, few = np.ones(500, bool), np.ones(40, bool)
    found = corrected_share(plain(all_), few, few, disagreement=1.0 / 200)
    assert found.share == found.high == 1.0
    assert found.low == pytest.approx(1.0 - 1.96 * np.sqrt(1.0 / 200 / 40), abs=0.002)


def test_figures_move_exactly_along_a_linear_answer_and_stay_where_nothing_changed():
    rng = np.random.default_rng(11)
    x, other = rng.normal(size=(80, 5)), rng.normal(size=(80, 5))
    true = rng.normal(size=(5, 2))
    figures = x @ true + 3.0
    figures[:7, 1] = np.nan
    there = moved(figures, x, other)
    np.testing.assert_allclose(there[:, 0], (other @ true + 3.0)[:, 0], atol=1e-7)
    np.testing.assert_allclose(there[7:, 1], (other @ true + 3.0)[7:, 1], atol=1e-7)
    assert np.isnan(there[:7, 1]).all()
    np.testing.assert_array_equal(moved(figures, x, x), figures)


def test_too_few_units_move_nothing():
    figures = np.arange(10.0)[:, None]
    x = np.random.default_rng(1).normal(size=(10, 5))
    np.testing.assert_array_equal(moved(figures, x, x + 1.0), figures)


def test_more_factors_than_units_still_show_the_few_that_matter():
    """Two strong slopes among 150, noise, 100 units: the penalty is found by itself."""
    rng = np.random.default_rng(2)
    x = rng.normal(size=(100, 150))
    y = (4.0 * x[:, 0] - 3.0 * x[:, 1] + 0.1 * rng.normal(size=100))[:, None]
    found = slopes(x, y)[:, 0]
    assert set(np.argsort(-np.abs(found))[:2]) == {0, 1}
    assert found[0] > 0 > found[1]


def test_noise_alone_has_next_to_no_slopes():
    rng = np.random.default_rng(4)
    x, y = rng.normal(size=(300, 40)), rng.normal(size=(300, 30))
    assert np.mean(slopes(x, y) ** 2) < 0.5 / 300  # least squares would give 1 / 300 and more
