"""Shares under another law, against laws whose answers are known in closed form."""

import numpy as np
import pytest

from tolsim.laws import TruncatedNormal, Uniform
from tolsim.stats.neighbours import Neighbours
from tolsim.stats.proportion import share_interval
from tolsim.stats.response import Response, foretold, normal_scores, slopes
from tolsim.stats.reweighting import corrected_share, effective_units, weighted_share

BELL = TruncatedNormal(-1.0, 1.0, 0.4)
FLAT = Uniform(-1.0, 1.0)


def moved(figures, factors, changed):
    """Figures of the same units with their factors changed."""
    return Response.of(figures, factors).at(changed)


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


def test_scores_keep_the_order_and_marks_their_place():
    values = np.array([3.0, -20.0, np.nan, 25.0, 30.0, -22.0])
    scores, marks = normal_scores(values, np.array([0.0, 28.0, np.inf, -30.0]))
    known = np.isfinite(values)
    assert np.array_equal(np.argsort(scores[known]), np.argsort(values[known]))
    for value, mark in ((0.0, marks[0]), (28.0, marks[1])):
        assert np.array_equal(scores[known] > mark, values[known] > value)
    assert marks[2] == np.inf
    assert marks[3] < np.nanmin(scores)


def test_a_jump_that_one_factor_makes_is_known_from_neighbours():
    """A figure that falls with x and collapses below x = -0.5: half of the units cross over."""
    rng = np.random.default_rng(8)
    x = rng.uniform(-1.0, 1.0, size=(600, 12))
    figure = np.where(x[:, 0] < -0.5, -25.0, 30.0 - 5.0 * x[:, 0]) + 0.1 * rng.normal(size=600)
    passing = figure > 3.0
    found = Neighbours.of(x, passing.astype(float))
    assert found.columns.tolist() == [0]
    there = found.share_at(np.column_stack([0.5 * (x[:, 0] - 1.0), x[:, 1:]]))
    expected = passing + there - found.share_around()
    assert passing.mean() == pytest.approx(0.75, abs=0.04)
    assert expected.mean() == pytest.approx(0.5, abs=0.03)
    # lines through the figure do not foretell it, and that is seen from the units themselves
    scores, (mark,) = normal_scores(figure, np.array([3.0]))
    lines = foretold(scores[:, None], x)[:, 0] > mark
    assert np.mean((found.share_around() - passing) ** 2) < 0.5 * np.mean(lines != passing)


def test_where_nothing_decides_there_are_no_neighbours():
    rng = np.random.default_rng(9)
    x = rng.uniform(size=(400, 80))
    assert Neighbours.of(x, (rng.uniform(size=400) < 0.9).astype(float)) is None
    assert Neighbours.of(x, np.ones(400)) is None
    assert Neighbours.of(x, (x[:, 0] > 0.04).astype(float)) is None  # some 16 units fail


def test_a_fit_foretells_the_other_half_of_a_linear_answer():
    rng = np.random.default_rng(10)
    x = rng.normal(size=(300, 10))
    figure = x @ rng.normal(size=10) + 0.05 * rng.normal(size=300)
    assert np.std(foretold(figure[:, None], x)[:, 0] - figure) < 0.1


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
