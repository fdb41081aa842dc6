"""Variance shares and rank correlations against closed forms."""

import time

import numpy as np
import pytest
from scipy.stats import spearmanr

from tolsim.stats.ranking import rank_correlation, rank_factors


def ishigami(x):
    return np.sin(x[:, 0]) + 7 * np.sin(x[:, 1]) ** 2 + 0.1 * x[:, 2] ** 4 * np.sin(x[:, 0])


def sobol_g(u, a):
    return np.prod((np.abs(4 * u - 2) + a) / (1 + a), axis=1)


def test_ishigami():
    # Ishigami and Homma, Proc. ISUMA (1990) 398-403; first-order shares in closed form:
    # V1 = (1 + b pi^4 / 5)^2 / 2, V2 = a^2 / 8, V13 = b^2 pi^8 8 / 225.
    v1 = 0.5 * (1 + 0.1 * np.pi**4 / 5) ** 2
    v2, v13 = 49 / 8, 0.01 * np.pi**8 * 8 / 225
    shares = np.array([v1, v2, 0]) / (v1 + v2 + v13)
    assert shares == pytest.approx([0.313905, 0.442411, 0], abs=1e-6)

    rng = np.random.default_rng(3)
    covered = []
    for _ in range(12):
        x = rng.uniform(-np.pi, np.pi, (4000, 3))
        found = rank_factors(x, ishigami(x), rng)
        assert found.share == pytest.approx(shares, abs=0.035)  # three standard errors
        assert found.distinguishable[:2].all()
        assert found.remainder == pytest.approx(v13 / (v1 + v2 + v13), abs=0.04)  # pair 1-3
        covered.append((found.share_low <= shares) & (shares <= found.share_high))
    assert np.mean(covered) > 0.95 - 3 * np.sqrt(0.95 * 0.05 / 36)


def test_sobol_g():
    # Saltelli and Sobol', Matem. Mod. 7 (1995) 16-28: V_i = 1 / (3 (1 + a_i)^2).
    a = np.array([0, 1, 4.5, 9, 99, 99, 99, 99])
    parts = 1 / (3 * (1 + a) ** 2)
    shares = parts / (np.prod(1 + parts) - 1)
    assert shares[:4] == pytest.approx([0.716192, 0.179048, 0.023676, 0.007162], abs=1e-6)

    rng = np.random.default_rng(4)
    u = rng.random((10_000, 8))
    found = rank_factors(u, sobol_g(u, a), rng)
    assert found.share == pytest.approx(shares, abs=0.02)
    assert not found.distinguishable[4:].any()


def test_linear_model_covers_its_shares():
    # Y = sum c_i X_i of independent standard normals: S_i = c_i^2 / sum c^2.
    rng = np.random.default_rng(5)
    c = np.array([1.0, 2.0, 3.0, 4.0])
    covered = []
    for _ in range(60):
        x = rng.standard_normal((300, 4))
        found = rank_factors(x, x @ c, rng)
        covered.append((found.share_low <= c**2 / 30) & (c**2 / 30 <= found.share_high))
    assert np.mean(covered) > 0.95 - 3 * np.sqrt(0.95 * 0.05 / 240)


def test_shares_of_pure_noise_average_to_zero_and_are_rarely_believed():
    rng = np.random.default_rng(6)
    x, y = rng.random((100, 200)), rng.random(100)
    found = rank_factors(x, y, rng)
    assert abs(found.share.mean()) < 0.006  # unadjusted: 0.05
    assert found.distinguishable.mean() < 0.05
    assert found.remainder > 0.8


def test_pass_fail_finds_the_factor_that_fails_units():
    # Failing when X1 > 1.5 sigma: Var(E[y|X1]) = Var(y), share 1; X2 idle.
    rng = np.random.default_rng(7)
    x = rng.standard_normal((2000, 2))
    found = rank_factors(x, (x[:, 0] > 1.5).astype(float), rng)
    assert found.share[0] > 0.75  # a step inside one bin is fitted by one line only
    assert found.distinguishable.tolist() == [True, False]
    assert found.correlation_low[0] > 0


def test_spearman_against_scipy_and_its_null_spread():
    rng = np.random.default_rng(8)
    x, y = rng.standard_normal((40, 3000)), rng.standard_normal(40)
    r, low, high = rank_correlation(x, y)
    assert r[:5] == pytest.approx([spearmanr(x[:, j], y).statistic for j in range(5)])
    # Kendall, Rank Correlation Methods: standard deviation 1 / sqrt(n - 1) without relation.
    assert r.std() == pytest.approx(1 / np.sqrt(39), rel=0.05)
    assert np.mean((low <= 0) & (high >= 0)) == pytest.approx(0.95, abs=0.02)


def test_monotonic_but_curved_is_rank_correlation_one():
    x = np.linspace(0.1, 5, 50)[:, None]
    r, low, high = rank_correlation(x, np.exp(x[:, 0]))
    assert r[0] == low[0] == high[0] == pytest.approx(1.0)


def test_large_offset_does_not_spoil_the_moments():
    # As NIST StRD NumAcc4 (mean 10000000.2, spread 0.1), where one-pass sums of squares give 0.
    rng = np.random.default_rng(9)
    x = rng.random((400, 2))
    y = x[:, 0] + 0.3 * x[:, 1]
    plain = rank_factors(x, y, np.random.default_rng(1))
    moved = rank_factors(1e7 + 0.1 * x, 1e7 + 0.1 * y, np.random.default_rng(1))
    assert moved.share == pytest.approx(plain.share, abs=1e-6)
    assert moved.share_low == pytest.approx(plain.share_low, abs=1e-6)


def test_estimates_do_not_depend_on_the_order_of_the_units():
    rng = np.random.default_rng(10)
    x = rng.random((200, 3))
    y = x[:, 0] * x[:, 1]
    order = rng.permutation(200)
    a = rank_factors(x, y, np.random.default_rng(1))
    b = rank_factors(x[order], y[order], np.random.default_rng(1))
    assert a.share == pytest.approx(b.share, abs=1e-12)
    assert a.correlation == pytest.approx(b.correlation, abs=1e-12)


@pytest.mark.parametrize(
    ("target", "words"),
    [
        (np.zeros(100), "same in every unit"),
        (np.r_[np.ones(2), np.zeros(98)], "only 2 of 100"),
        (np.r_[np.arange(5.0), np.full(95, np.nan)], "only 5 units have this figure"),
    ],
)
def test_what_cannot_be_ranked_says_why(target, words):
    found = rank_factors(
        np.random.default_rng(1).random((100, 2)), target, np.random.default_rng(1)
    )
    assert words in found.reason
    assert np.isnan(found.share).all()
    assert not found.distinguishable.any()


def test_a_factor_that_does_not_vary_has_no_share():
    rng = np.random.default_rng(12)
    x = np.column_stack([np.full(100, 3.0), rng.random(100)])
    found = rank_factors(x, x[:, 1] ** 2, rng)
    assert found.share[0] == 0
    assert np.isnan(found.correlation[0])
    assert found.distinguishable.tolist() == [False, True]


def test_few_failing_units_leave_some_replicates_without_any():
    """Of 40 units 5 fail: one bootstrap sample in 200 holds none of them."""
    u = np.random.default_rng(8).random((40, 2))
    found = rank_factors(u, u[:, 0] > np.sort(u[:, 0])[-6], np.random.default_rng(10))
    assert np.isfinite([found.share_low, found.share_high]).all()
    assert found.distinguishable.tolist() == [True, False]


def test_shapes_are_checked():
    with pytest.raises(ValueError, match=r"\(n, k\)"):
        rank_factors(np.zeros(4), np.zeros(4), np.random.default_rng(1))


def test_hundred_factors_are_ranked_quickly():
    rng = np.random.default_rng(13)
    x = rng.random((500, 100))
    start = time.perf_counter()
    rank_factors(x, x[:, 0], rng)
    assert time.perf_counter() - start < 2.0


def test_a_hundred_idle_factors_beside_a_strong_one_are_hardly_ever_seen():
    idle = 0
    for seed in range(8):
        rng = np.random.default_rng(seed)
        x = rng.normal(size=(60, 100))
        y = 3.0 * x[:, 0] + rng.normal(size=60)
        seen = rank_factors(x, y, np.random.default_rng(1)).distinguishable
        assert seen[0]
        idle += int(seen[1:].sum())
    assert idle <= 1


class TestLots:
    """Ten units share each draw of the first factors; only the first one matters to the target."""

    def sample(self, seed, lots=60, size=10, shared=12):
        rng = np.random.default_rng(seed)
        of_lots = np.repeat(rng.standard_normal((lots, shared)), size, axis=0)
        x = np.column_stack([of_lots, rng.standard_normal((lots * size, 3))])
        y = 3.0 * x[:, 0] + x[:, shared] + 0.01 * rng.standard_normal(lots * size)
        return x, y, np.repeat(np.arange(lots), size)

    def test_shares_are_right_and_chance_in_lots_is_not_taken_for_effect(self):
        alarms = {"lots": 0, "units": 0}
        for seed in range(6):
            x, y, lot = self.sample(seed)
            by_lot = rank_factors(x, y, np.random.default_rng(1), lot=lot)
            by_unit = rank_factors(x, y, np.random.default_rng(1))
            assert by_lot.share[0] == pytest.approx(0.9, abs=0.05)
            assert by_lot.share[12] == pytest.approx(0.1, abs=0.05)
            assert by_lot.distinguishable[[0, 12]].all()
            assert by_lot.share_low[0] <= 0.9 <= by_lot.share_high[0]
            alarms["lots"] += by_lot.distinguishable[1:12].sum()
            alarms["units"] += by_unit.distinguishable[1:12].sum()
        assert alarms["lots"] <= 1
        assert alarms["units"] > 20  # what would be said if lot-mates counted as independent

    def test_intervals_of_what_lots_share_are_those_of_so_many_lots(self):
        x, y, lot = self.sample(3)
        found = rank_factors(x, y, np.random.default_rng(1), lot=lot)
        _, low, high = rank_correlation(x[::10, 1:2], y[::10])
        width = found.correlation_high[1] - found.correlation_low[1]
        assert width == pytest.approx((high - low).item(), rel=0.2)

    @pytest.mark.parametrize("lots", [10, 20])
    def test_a_few_lots_that_line_up_by_chance_accuse_no_factor(self, lots):
        """At most one run in twenty may name any of 39 factors without effect."""
        rng, false, true = np.random.default_rng(5), 0, 0
        for _ in range(40):
            x = np.repeat(rng.standard_normal((lots, 40)), 10, axis=0)
            y = 2.0 * x[:, 0] + 0.5 * rng.standard_normal(10 * lots)
            found = rank_factors(x, y, rng, replicates=100, lot=np.arange(10 * lots) // 10)
            true += found.distinguishable[0]
            false += found.distinguishable[1:].any()
        assert true >= 38
        assert false <= 5  # more has a chance of 1.4 % at one in twenty

    def test_a_lot_for_every_unit_is_no_lot_at_all(self):
        x, y, _ = self.sample(5, lots=200, size=1)
        plain = rank_factors(x, y, np.random.default_rng(1))
        alone = rank_factors(x, y, np.random.default_rng(1), lot=np.arange(200))
        np.testing.assert_array_equal(alone.share, plain.share)
        np.testing.assert_array_equal(alone.share_low, plain.share_low)
        np.testing.assert_array_equal(alone.correlation_high, plain.correlation_high)

    def test_few_lots_are_not_ranked(self):
        x, y, lot = self.sample(1, lots=5)
        assert "5 independent lots" in rank_factors(x, y, np.random.default_rng(1), lot=lot).reason
