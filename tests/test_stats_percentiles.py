"""Order-statistic intervals and Wilks tolerance bounds."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import binom, norm, quantile_test

from tolsim.stats.percentiles import percentiles, tolerance_bound, wilks_units

ONE_SIDED = {
    # coverage, confidence: units for order 1, 2, 3, ...  Wilks, Ann. Math. Statist. 12 (1941)
    # 91-96; the 59 / 93 / 124 row is the familiar one of nuclear safety practice.
    (0.95, 0.95): (59, 93, 124, 153, 181, 208),
    (0.95, 0.99): (90, 130, 165, 198, 229, 259),
    (0.99, 0.95): (299, 473, 628, 773, 913, 1049),
    (0.99, 0.90): (230, 388, 531),
    (0.99, 0.99): (459, 662, 838),
    (0.90, 0.95): (29, 46, 61, 76, 89, 103),
    (0.90, 0.90): (22, 38, 52),
    (0.999, 0.95): (2995, 4742, 6294),
}
TWO_SIDED = {(0.95, 0.95): (93, 153, 208), (0.99, 0.95): (473, 773, 1049)}


@pytest.mark.parametrize("key", ONE_SIDED)
def test_wilks_one_sided(key):
    orders = range(1, len(ONE_SIDED[key]) + 1)
    assert tuple(wilks_units(*key, order=order) for order in orders) == ONE_SIDED[key]


@pytest.mark.parametrize("key", TWO_SIDED)
def test_wilks_two_sided(key):
    assert tuple(wilks_units(*key, order=o, sides=2) for o in (1, 2, 3)) == TWO_SIDED[key]


def test_tolerance_bound_appears_at_the_wilks_size():
    values = np.arange(1.0, 94.0)
    assert tolerance_bound(values[:58]) == np.inf
    assert tolerance_bound(values[:59]) == 59.0  # the largest reading
    assert tolerance_bound(values) == 92.0  # 93 readings allow the second largest
    assert tolerance_bound(values[:59], side="low") == 1.0
    assert tolerance_bound(values[:58], side="low") == -np.inf


def test_nist_percentile_example():
    # NIST/SEMATECH e-Handbook 7.2.6.2: 12 gauge readings, 90th percentile 95.1981.
    readings = [95.1772, 95.1567, 95.1937, 95.1959, 95.1442, 95.0610]
    readings += [95.1591, 95.1195, 95.1065, 95.0925, 95.1990, 95.1682]
    assert percentiles(readings, [0.9]).value[0] == pytest.approx(95.1981, abs=5e-5)


def test_agrees_with_scipy_quantile_test():
    rng = np.random.default_rng(5)
    for n in (25, 100, 501):
        sample = rng.normal(size=n)
        ours = percentiles(sample, [0.1, 0.5, 0.95])
        for j, share in enumerate(ours.shares):
            theirs = quantile_test(sample, p=share).confidence_interval(0.95)
            low = -np.inf if np.isnan(theirs.low) else theirs.low
            high = np.inf if np.isnan(theirs.high) else theirs.high
            assert (ours.low[j], ours.high[j]) == (low, high)


@pytest.mark.parametrize("n", [20, 100, 500])
@pytest.mark.parametrize("share", [0.5, 0.95, 0.99])
def test_covers_normal_quantiles_as_often_as_promised(n, share):
    # Exact coverage does not depend on the law: P(first <= B < last), B ~ binomial(n, share).
    ranks = np.arange(1.0, n + 1)
    found = percentiles(ranks, [share])
    first = found.low[0] if np.isfinite(found.low[0]) else 0
    last = found.high[0] if np.isfinite(found.high[0]) else n + 1
    coverage = binom.cdf(last - 1, n, share) - binom.cdf(first - 1, n, share)
    assert coverage >= 0.95

    rng = np.random.default_rng(11)
    samples = rng.normal(size=(400, n))
    truth = norm.ppf(share)
    hits = [
        found.low[0] <= truth <= found.high[0]
        for found in (percentiles(sample, [share]) for sample in samples)
    ]
    assert np.mean(hits) >= 0.95 - 3 * np.sqrt(0.95 * 0.05 / 400)


def test_a_thin_sample_admits_it_cannot_bound_the_tail():
    found = percentiles(np.arange(100.0), [0.99])
    assert np.isfinite(found.low[0])
    assert found.high[0] == np.inf


def test_missing_readings_are_counted_not_hidden():
    found = percentiles([1.0, np.nan, 2.0, np.inf], [0.5])
    assert (found.units, found.missing) == (2, 2)
    nothing = percentiles([np.nan, np.nan])
    assert np.isnan(nothing.value).all()
    assert (nothing.units, nothing.missing) == (0, 2)


@given(st.permutations(list(range(40))))
def test_the_order_of_the_units_does_not_matter(order):
    values = np.sqrt(np.arange(40.0))
    a, b = percentiles(values), percentiles(values[np.asarray(order)])
    assert np.array_equal(a.value, b.value)
    assert np.array_equal(a.low, b.low)
    assert np.array_equal(a.high, b.high)


@given(st.lists(st.floats(-1e12, 1e12), min_size=1, max_size=60))
def test_the_value_lies_inside_its_interval(values):
    found = percentiles(values, [0.05, 0.5, 0.95])
    assert np.all(found.low <= found.value)
    assert np.all(found.value <= found.high)


def test_nonsense_is_refused():
    with pytest.raises(ValueError, match="between 0 and 1"):
        percentiles([1.0], [95])
    with pytest.raises(ValueError, match="coverage"):
        wilks_units(1.5, 0.95)
    with pytest.raises(ValueError, match="coverage"):
        tolerance_bound([1.0], coverage=95)
