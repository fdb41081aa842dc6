"""Intervals over lots: closed forms, limiting cases, coverage in simulated lots."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from tolsim.stats.clusters import (
    between_lots,
    chance_in_batch,
    percentiles_of_lots,
    share_of_lots,
    tolerance_bound_of_lots,
)
from tolsim.stats.percentiles import percentiles
from tolsim.stats.proportion import share_interval


def lots(k, m):
    return np.repeat(np.arange(k), m)


def test_lots_that_fail_as_a_whole_are_counted_as_lots():
    """The exact binomial interval of lots: 3 of 20, Clopper and Pearson (1934)."""
    hit = np.repeat(np.arange(20) < 3, 25)
    found = share_of_lots(hit, lots(20, 25))
    assert (found.low, found.high) == pytest.approx([end.item() for end in share_interval(3, 20)])
    assert found.worth == pytest.approx(20)


def test_no_failing_lot_bounds_the_failing_lots():
    """Nothing failed in 60 lots: up to 1 - 0.025^(1/60) of lots may still fail whole."""
    found = share_of_lots(np.zeros(3000), lots(60, 50))
    assert (found.low, found.high) == (0.0, pytest.approx(1 - 0.025 ** (1 / 60)))


def test_four_failures_in_two_of_sixty_lots():
    """The units look like 0.04-0.34 %; over lots it must be wider on both sides."""
    failed = np.zeros(3000, bool)
    failed[[10, 12, 400, 401]] = True
    narrow = [end.item() for end in share_interval(4, 3000)]
    assert narrow == pytest.approx([0.00036, 0.0034], abs=6e-5)
    found = share_of_lots(failed, lots(60, 50))
    assert found.low < narrow[0]
    assert found.high > 2 * narrow[1]
    of_lots = share_of_lots(failed.reshape(60, 50).any(axis=1), np.arange(60))
    assert (of_lots.share, of_lots.low, of_lots.high) == pytest.approx(
        (2 / 60, 0.0041, 0.115), abs=4e-4
    )


@pytest.mark.parametrize("rho", [0.0, 0.2, 0.6])
def test_the_worth_of_many_lots_follows_the_design_effect(rho):
    """n / (1 + (m - 1) rho), Kish (1965); beta-binomial lots have intra-class correlation rho."""
    rng = np.random.default_rng(4)
    k, m, share = 4000, 12, 0.3
    spread = (1 - rho) / rho if rho else np.inf
    p = rng.beta(share * spread, (1 - share) * spread, k) if rho else np.full(k, share)
    hit = rng.random((k, m)) < p[:, None]
    found = share_of_lots(hit.ravel(), lots(k, m))
    assert found.worth == pytest.approx(k * m / (1 + (m - 1) * rho), rel=0.08)
    assert between_lots(hit.ravel(), lots(k, m)).share == pytest.approx(rho, abs=0.02)


@pytest.mark.parametrize(("k", "m"), [(50, 10), (60, 50)])
@pytest.mark.parametrize(("rho", "share"), [(0.0, 0.02), (0.3, 0.1), (0.9, 0.005), (0.9, 0.1)])
def test_the_interval_covers_the_true_share(k, m, rho, share):
    """Normal lot shifts and scatter with a limit: at most 8 % miss, where 95 % is asked for.

    At rho = 0.9 the interval of independent units misses half of the time.
    """
    rng = np.random.default_rng(9)
    limit, runs, missed, naive = stats.norm.ppf(share), 300, 0, 0
    for _ in range(runs):
        shift = rng.standard_normal((k, 1)) * np.sqrt(rho)
        hit = (shift + np.sqrt(1 - rho) * rng.standard_normal((k, m)) < limit).ravel()
        found = share_of_lots(hit, lots(k, m))
        missed += not found.low <= share <= found.high
        low, high = share_interval(hit.sum(), hit.size)
        naive += not low <= share <= high
    assert missed / runs <= 0.08
    if rho == 0.9 and share == 0.1:
        assert naive / runs > 0.35


@settings(max_examples=60, deadline=None)
@given(
    counts=st.lists(st.integers(0, 8), min_size=2, max_size=30),
    confidence=st.sampled_from([0.8, 0.95]),
)
def test_lots_never_narrow_an_interval(counts, confidence):
    hit = (np.arange(8) < np.array(counts)[:, None]).ravel()
    found = share_of_lots(hit, lots(len(counts), 8), confidence)
    low, high = share_interval(hit.sum(), hit.size, confidence)
    assert len(counts) - 1e-9 <= found.worth <= hit.size
    assert found.low <= low + 1e-9
    assert found.high >= high - 1e-9
    turned = share_of_lots(~hit, lots(len(counts), 8), confidence)
    assert (turned.low, turned.high) == pytest.approx((1 - found.high, 1 - found.low), abs=1e-9)


def test_one_lot_says_nothing_about_others():
    found = share_of_lots([0, 1, 0], [5, 5, 5])
    assert (found.low, found.high) == (0.0, 1.0)


def test_wrong_shapes_are_refused():
    with pytest.raises(ValueError, match="`hit` and `lot`"):
        share_of_lots([1, 0], [0])
    with pytest.raises(ValueError, match="boards"):
        chance_in_batch([1], [4], 5)


def test_percentile_intervals_widen_with_the_lots():
    rng = np.random.default_rng(3)
    k, m = 40, 25
    alone = rng.standard_normal(k * m)
    plain = percentiles(alone, (0.5, 0.9))
    one_each = percentiles_of_lots(alone, np.arange(k * m), (0.5, 0.9))
    np.testing.assert_array_equal(one_each.value, plain.value)
    np.testing.assert_allclose(one_each.low, plain.low, atol=0.03)
    np.testing.assert_allclose(one_each.high, plain.high, atol=0.03)
    shifted = np.repeat(rng.standard_normal(k), m) + 0.1 * alone
    naive, wide = percentiles(shifted, (0.5,)), percentiles_of_lots(shifted, lots(k, m), (0.5,))
    ratio = (wide.high - wide.low) / (naive.high - naive.low)
    assert 2.5 < ratio.item() < 7  # the root of the design effect is nearly 5


def test_the_percentile_interval_covers_when_lots_shift():
    """Median and p90 of normal lots with rho 0.8; the naive interval covers half of the time."""
    rng = np.random.default_rng(11)
    k, m, runs = 40, 10, 200
    truth = stats.norm.ppf([0.5, 0.9])
    missed, bound = np.zeros(2), 0
    for _ in range(runs):
        values = np.sqrt(0.8) * rng.standard_normal((k, 1))
        values = (values + np.sqrt(0.2) * rng.standard_normal((k, m))).ravel()
        found = percentiles_of_lots(values, lots(k, m), (0.5, 0.9))
        missed += (truth < found.low) | (truth > found.high)
        bound += tolerance_bound_of_lots(values, lots(k, m), 0.9, 0.95) < truth[1]
    assert np.all(missed / runs <= 0.08)
    assert bound / runs <= 0.08


def test_too_few_lots_leave_a_tail_open():
    values = np.repeat(np.arange(10.0), 50)
    found = percentiles_of_lots(values, lots(10, 50), (0.95,))
    assert np.isinf(found.high[0])
    assert np.isinf(tolerance_bound_of_lots(values, lots(10, 50)))
    assert np.isinf(tolerance_bound_of_lots(values, lots(10, 50), side="low"))
    empty = percentiles_of_lots([np.nan], [0], (0.5,))
    assert (empty.units, empty.missing) == (0, 1)
    assert np.isinf(tolerance_bound_of_lots([np.nan], [0]))


def test_between_lots_by_hand():
    """Lots (1, 3), (5, 7): mean squares 16 and 2, (16 - 2) / (16 + 2) = 7 / 9."""
    found = between_lots([1, 3, 5, 7, np.nan], [0, 0, 1, 1, 1])
    assert found.share == pytest.approx(7 / 9)
    assert found.low < found.share < found.high
    assert between_lots([1, 1, 2, 2], [0, 0, 1, 1]).share == 1.0
    assert np.isnan(between_lots([1, 2], [0, 0]).share)


def test_the_interval_of_the_share_between_lots_covers():
    rng = np.random.default_rng(2)
    missed = 0
    for _ in range(300):
        values = np.sqrt(0.6) * rng.standard_normal((15, 1))
        values = values + np.sqrt(0.4) * rng.standard_normal((15, 8))
        found = between_lots(values.ravel(), lots(15, 8))
        missed += not found.low <= 0.6 <= found.high
    assert missed / 300 <= 0.08


def test_the_chance_of_a_failure_in_a_batch():
    """Hypergeometric, scipy; one failing of 10 meets a batch of 4 with 4 / 10."""
    found = chance_in_batch([0, 1, 3, 10], [10, 10, 10, 10], 4)
    expected = [1 - stats.hypergeom(10, bad, 4).pmf(0) for bad in (0, 1, 3, 10)]
    np.testing.assert_allclose(found, expected, atol=1e-12)
    assert found[1] == pytest.approx(0.4)
    assert chance_in_batch([2], [50], 50)[0] == 1.0
