"""Exact binomial intervals and the yield with undecided units."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tolsim.stats.proportion import share_interval, share_upper_bound, yield_estimate


@pytest.mark.parametrize(
    ("count", "units", "low", "high"),
    [
        # Newcombe, Statistics in Medicine 17 (1998) 857-872, table I, method 5 (81/263, 0/20);
        # the two long rows computed from the beta law with 30 digits.
        (81, 263, 0.252737, 0.367622),
        (0, 20, 0.0, 0.168433),
        (990, 1000, 0.981687, 0.995194),
        (0, 10_000, 0.0, 0.000369),
    ],
)
def test_clopper_pearson_reference_values(count, units, low, high):
    assert np.allclose(share_interval(count, units), (low, high), atol=6e-7)


def test_nist_handbook_example():
    # NIST/SEMATECH e-Handbook 7.2.4.2: 4 defectives of 20, 90 % two-sided: 0.071354, 0.401029.
    low, high = share_interval(4, 20, 0.90)
    assert np.allclose((low, high), (0.071354, 0.401029), atol=1e-6)


@pytest.mark.parametrize(
    ("units", "bound"), [(59, 0.049508), (100, 0.029513), (300, 0.009936), (1000, 0.002991)]
)
def test_no_failure_seen_still_bounds_the_rate_only_near_three_in_n(units, bound):
    # 1 - 0.05^(1/n), the "rule of three": Hanley and Lippman-Hand, JAMA 249 (1983) 1743-1745.
    assert share_upper_bound(0, units) == pytest.approx(bound, abs=6e-7)


def test_interval_is_vectorised_and_knows_nothing_of_no_units():
    low, high = share_interval([0, 3, 0], [10, 10, 0])
    assert low[2] == 0.0
    assert high[2] == 1.0
    assert np.allclose((low[1], high[1]), share_interval(3, 10))


@pytest.mark.parametrize(("share", "units"), [(0.02, 60), (0.3, 25)])
def test_covers_the_true_share_at_least_as_often_as_promised(share, units):
    # Exact coverage: sum the binomial law over every count whose interval holds the share.
    from scipy.stats import binom

    counts = np.arange(units + 1)
    low, high = share_interval(counts, units)
    covered = (low <= share) & (share <= high)
    assert binom.pmf(counts[covered], units, share).sum() >= 0.95


def test_undecided_units_widen_the_yield_on_both_sides():
    sure = yield_estimate(493, 7)
    unsure = yield_estimate(493, 0, 7)
    assert sure.estimate == unsure.estimate == 0.986
    assert np.allclose((sure.low, sure.high), share_interval(493, 500))
    assert unsure.low == sure.low  # every undecided unit counted as failed
    assert unsure.high == 1.0  # every undecided unit counted as passed


@given(
    passed=st.integers(0, 400),
    failed=st.integers(0, 400),
    undecided=st.integers(0, 50),
    tighter=st.integers(0, 30),
)
def test_fewer_passing_units_never_raise_the_yield(passed, failed, undecided, tighter):
    if passed + failed + undecided == 0:
        return
    moved = min(tighter, passed)
    before = yield_estimate(passed, failed, undecided)
    after = yield_estimate(passed - moved, failed + moved, undecided)
    assert after.estimate <= before.estimate
    assert after.low <= before.low
    assert after.high <= before.high


@pytest.mark.parametrize("bad", [(5, 3, 0.95), (-1, 3, 0.95), (1, 3, 1.0), (1, 3, 95)])
def test_nonsense_is_refused(bad):
    with pytest.raises(ValueError, match="must lie"):
        share_interval(*bad)


def test_a_yield_of_no_units_is_refused():
    with pytest.raises(ValueError, match="at least one unit"):
        yield_estimate(0, 0)
