"""The law of the next piece, against Student's t and against pieces drawn afresh."""

import math

import numpy as np
import pytest
from scipy import stats

from tolsim.errors import Mistake
from tolsim.laws import NormalMixture, StudentT
from tolsim.laws.measured import Exponential
from tolsim.laws.predictive import kernel_width, next_piece

RNG = np.random.default_rng(7)
START = RNG.bit_generator.state


@pytest.fixture(autouse=True)
def _from_the_start():
    """Every test draws the same numbers, whichever others run."""
    RNG.bit_generator.state = START


def test_the_next_piece_follows_student():
    """Gelman et al., Bayesian Data Analysis, 3rd ed., section 3.2: t_(n-1), s sqrt(1 + 1/n)."""
    x = RNG.normal(0.004, 0.01, 12)
    law = next_piece(x, low=-1e3, high=1e3).predictive
    known = stats.t(11, x.mean(), x.std(ddof=1) * math.sqrt(1.0 + 1.0 / 12))
    u = np.linspace(0.001, 0.999, 77)
    np.testing.assert_allclose(law.ppf(u), known.ppf(u), rtol=1e-9)


def test_the_law_ends_where_so_many_pieces_cannot_speak():
    x = RNG.normal(0.0, 0.01, 10)
    law = next_piece(x).predictive
    known = stats.t(9, x.mean(), x.std(ddof=1) * math.sqrt(1.1))
    assert law.support == pytest.approx((known.ppf(1.0 / 200), known.ppf(1.0 - 1.0 / 200)))


def cover(shape, law, n, trials=250, **given):
    """Ranks of a fresh piece in the law learnt from n others: uniform if the law is honest."""
    ranks = []
    for _ in range(trials):
        pieces = law(n + 1)
        found = next_piece(pieces[:n], shape=shape, **given)
        ranks.append(float(found.cdf(pieces[n])))
    return np.array(ranks)


@pytest.mark.parametrize("n", [5, 8, 30])
def test_a_fresh_piece_falls_anywhere_in_the_law(n):
    ranks = cover("normal", lambda k: RNG.normal(0.0, 0.02, k), n, 1500, low=-1e3, high=1e3)
    assert stats.kstest(ranks, "uniform").pvalue > 0.001


@pytest.mark.parametrize(
    ("law", "n", "most"),
    [
        (lambda k: RNG.normal(0.0, 0.02, k), 20, 0.96),
        (lambda k: RNG.exponential(0.02, k), 40, 0.96),
        # stretching moves two narrow humps apart: on the wide side
        (lambda k: RNG.choice([-0.03, 0.03], k) + RNG.normal(0.0, 0.003, k), 30, 1.0),
    ],
)
def test_smoothed_readings_hold_the_share_they_promise(law, n, most):
    """Nine in ten fresh pieces lie between the 5 and 95 % points."""
    ranks = cover("as measured", law, n)
    inside = np.mean((ranks > 0.05) & (ranks < 0.95))
    assert 0.9 - 0.055 < inside <= most


def test_smoothed_readings_have_the_variance_of_student():
    x = RNG.normal(0.0, 0.01, 25)
    law = next_piece(x, shape="as measured", low=-9.0, high=9.0)
    scale = x.std(ddof=1) * math.sqrt(1.0 + 1.0 / 25)
    assert law.sd == pytest.approx(stats.t(24, 0.0, scale).std(), rel=1e-9)
    assert law.mean == pytest.approx(x.mean(), rel=1e-9)


def test_many_readings_are_summed_up():
    x = RNG.exponential(0.01, 3000)
    law = next_piece(x, shape="as measured")
    assert len(law.predictive.centres) == 200
    known = stats.expon(0.0, 0.01)
    for u in (0.1, 0.5, 0.9):
        assert float(law.ppf(u)) == pytest.approx(known.ppf(u), abs=1.5e-3)


def test_meter_noise_is_taken_out_of_the_scatter():
    pieces = RNG.normal(0.0, 0.01, 4000)
    readings = pieces + RNG.normal(0.0, 0.01, 4000)
    naive, cleaned = next_piece(readings), next_piece(readings, noise=0.01)
    assert naive.sd == pytest.approx(math.sqrt(2) * 0.01, rel=0.05)
    assert cleaned.sd == pytest.approx(0.01, rel=0.05)
    assert next_piece(readings, noise=0.01, shape="as measured").sd == pytest.approx(0.01, rel=0.06)


def test_noise_of_next_to_nothing_changes_nothing():
    x = RNG.normal(0.0, 0.01, 15)
    one = next_piece(x, low=-1.0, high=1.0)
    other = next_piece(x, low=-1.0, high=1.0, noise=1e-9)
    u = np.linspace(0.01, 0.99, 21)
    np.testing.assert_allclose(other.ppf(u), one.ppf(u), atol=0.01 * one.sd)


def test_a_fresh_piece_under_noise():
    def readings(k):
        pieces = RNG.normal(0.0, 0.02, k)
        noisy = pieces + RNG.normal(0.0, 0.01, k)
        noisy[-1] = pieces[-1]  # the next piece itself, not its reading
        return noisy

    ranks = cover("normal", readings, 12, 500, noise=0.01, low=-1e3, high=1e3)
    assert stats.kstest(ranks, "uniform").pvalue > 0.001


def test_shapes_are_chosen_by_what_fits():
    normal = next_piece(RNG.normal(0.0, 0.01, 60), origin=-1.0)
    assert (normal.sample.shape, type(normal.predictive)) == ("normal", StudentT)
    skewed = next_piece(np.exp(RNG.normal(0.0, 0.4, 200)) - 1.0, origin=-1.0)
    assert (skewed.sample.shape, type(skewed.predictive)) == ("lognormal", Exponential)
    assert skewed.support[0] > -1.0
    humps = RNG.choice([-0.03, 0.03], 60) + RNG.normal(0.0, 0.003, 60)
    two = next_piece(humps, origin=-1.0)
    assert (two.sample.shape, type(two.predictive)) == ("as measured", NormalMixture)
    assert any("hollow middle" in remark for remark in two.sample.remarks)
    assert float(two.cdf(0.01) - two.cdf(-0.01)) < 0.05  # the hollow is kept


def test_what_readings_look_like_is_told():
    cut = stats.truncnorm(-1.0, 1.0, 0.0, 0.02).rvs(120, random_state=3)
    assert "state them as low and high" in next_piece(cut).sample.remarks[0]
    assert "few pieces" in next_piece(RNG.normal(size=6)).sample.remarks[0]
    assert math.isnan(next_piece(RNG.normal(size=6)).sample.fit_p)
    forced = next_piece(RNG.exponential(1.0, 200), shape="normal")
    assert "does not fit" in forced.sample.remarks[-1]


def test_stated_limits_end_the_law():
    x = RNG.normal(0.0, 0.01, 20)
    assert next_piece(x, low=-0.05, high=0.05).support == (-0.05, 0.05)
    assert next_piece(x, shape="as measured", high=0.05).support[1] == 0.05
    logs = next_piece(x, shape="lognormal", origin=-1.0, low=-0.05, high=0.05)
    assert logs.support == pytest.approx((-0.05, 0.05))


@pytest.mark.parametrize(
    ("readings", "given", "key"),
    [
        ([0.0, 0.1, 0.2], {}, "file"),
        ([0.1] * 10, {}, "file"),
        (np.linspace(-0.01, 0.01, 10), {"noise": 0.05}, "meter_noise"),
        (np.linspace(-0.01, 0.01, 10), {"low": -0.005}, "low"),
        (np.linspace(-0.01, 0.01, 10), {"high": 0.005}, "high"),
    ],
)
def test_readings_that_make_no_law_are_refused(readings, given, key):
    with pytest.raises(Mistake) as caught:
        next_piece(np.array(readings), **given)
    assert caught.value.key == key


def test_kernels_are_narrow_for_narrow_humps():
    humps = np.concatenate([RNG.normal(-1.0, 0.05, 40), RNG.normal(1.0, 0.05, 40)])
    assert kernel_width(humps) < 0.15
    assert 0.2 < kernel_width(RNG.normal(size=80)) < 0.8
