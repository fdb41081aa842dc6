"""Contract of every law: one list of laws, the same demands on all of them."""

import math
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from scipy.integrate import quad

from tolsim.errors import Mistake
from tolsim.laws import (
    LAWS,
    Asymmetric,
    Fixed,
    LogNormal,
    Measured,
    Moved,
    NormalMixture,
    SortedOut,
    StudentT,
    Triangular,
    TruncatedNormal,
    Uniform,
    Window,
)
from tolsim.laws.measured import Exponential, Sample
from tolsim.laws.reading import read_law

NORMAL = TruncatedNormal(-0.05, 0.05, 0.025)
CONTRACT = [
    Uniform(-0.05, 0.05),
    NORMAL,
    TruncatedNormal(-0.05, 0.05, 0.01, centre=0.04),
    TruncatedNormal(0.03, 0.05, 0.01),
    TruncatedNormal(1.0, 2.0, 0.2, centre=-0.4),  # the far upper tail only
    TruncatedNormal(-2.0, -1.0, 0.2, centre=0.4),
    LogNormal(0.0, 0.3, origin=-1.0),
    LogNormal(0.0, 0.15, low=-0.45, high=0.8, origin=-1.0),
    LogNormal(1000.0, 0.5, high=4000.0),
    Triangular(-0.05, 0.05),
    Triangular(-0.05, 0.05, mode=-0.05),
    Triangular(-0.05, 0.05, mode=0.05),
    Triangular(-0.015, 0.003, mode=0.0),
    Asymmetric(-0.2, 0.0, 0.8),
    Asymmetric(-0.1, 0.0, 0.3, below=0.2),
    SortedOut(NORMAL, -0.02, 0.02),
    SortedOut(Uniform(-0.05, 0.05), -0.02, 0.06),
    SortedOut(Uniform(-0.05, 0.05), 0.0, 0.02),
    StudentT(-0.2, 0.2, 0.01, 0.02, 4.0),
    StudentT(-0.05, 0.1, 0.0, 0.02, 1.0),
    StudentT(0.03, 0.05, 0.0, 0.01, 9.0),  # the upper tail only
    Window(-0.1, 0.0, 0.3),
    Window(None, 0.0, None, implied_half_width=0.2),
    Window(-0.02, None, 0.01),
    NormalMixture(-0.06, 0.05, (-0.03, -0.028, 0.0, 0.03), (0.004, 0.002, 0.01, 0.003)),
    NormalMixture(3.0, 3.9, (3.4, 3.5), (0.1, 0.2)),
    Exponential(StudentT(-1.0, 1.2, 0.1, 0.2, 9.0), origin=-1.0),
    Moved(StudentT(-0.2, 0.2, 0.01, 0.02, 4.0), 0.03),
    Measured(Uniform(-0.05, 0.05), Sample("reel.csv", 9, 0.0, 0.03, 0.0, "normal", 0.5)),
]
BUILT = {NormalMixture, Exponential, Measured, Moved}  # from readings; tables do not name them
every_law = pytest.mark.parametrize("law", CONTRACT, ids=str)


def test_every_law_is_under_contract():
    assert {type(law) for law in CONTRACT} | {Fixed} == set(LAWS.values()) | BUILT


@every_law
@settings(max_examples=50, deadline=None)
@given(u=st.floats(1e-9, 1.0 - 1e-9))
def test_cdf_undoes_ppf(law, u):
    assert float(law.cdf(law.ppf(u))) == pytest.approx(u, abs=2e-9)


@every_law
def test_ppf_rises_and_stays_inside_the_support(law):
    u = np.concatenate(([2.0**-53], np.linspace(1e-6, 1.0 - 1e-6, 4001), [1.0 - 2.0**-53]))
    x = law.ppf(u)
    low, high = law.support
    assert np.all(np.isfinite(x))
    assert np.all(np.diff(x) >= 0.0)
    assert low <= x[0]
    assert x[-1] <= high


@every_law
def test_cdf_is_zero_below_and_one_above_the_support(law):
    low, high = law.support
    assert float(law.cdf(low - 1.0)) == pytest.approx(0.0, abs=1e-12)
    assert float(law.cdf(min(high, 1e9) + 1.0)) == pytest.approx(1.0, abs=1e-12)


@every_law
@pytest.mark.filterwarnings("ignore::scipy.integrate.IntegrationWarning")  # steps of sorted laws
def test_moments_agree_with_quadrature_over_ppf(law):
    def integrate(function) -> float:
        ends = np.array([1e-14, 1e-4, 0.1, 0.2, 0.4, 0.5, 0.7, 0.9, 1.0 - 1e-4, 1.0 - 1e-14])
        pieces = pairwise(ends)
        return sum(quad(function, a, b, limit=400)[0] for a, b in pieces)

    mean = integrate(lambda u: float(law.ppf(u)))
    square = integrate(lambda u: float((law.ppf(u) - mean) ** 2))
    assert law.mean == pytest.approx(mean, abs=1e-5 * law.sd)
    assert law.sd == pytest.approx(math.sqrt(square), rel=1e-4)


@every_law
def test_an_array_is_answered_as_its_elements_are(law):
    u = np.random.default_rng(5).uniform(size=(3, 4))
    together = law.ppf(u)
    alone = np.array([[float(law.ppf(value)) for value in row] for row in u])
    assert together.shape == u.shape
    np.testing.assert_allclose(together, alone, rtol=0, atol=1e-15 * max(1.0, np.max(abs(alone))))


@every_law
def test_pdf_is_the_slope_of_cdf_and_nothing_outside(law):
    ends = law.ppf(np.linspace(1e-6, 1.0 - 1e-6, 41))
    for low, high in pairwise(ends):
        # where the density steps: at the edges of a bin that was sorted out, at a mode
        edges = (
            getattr(law, name, None) or 0.0
            for name in ("removed_low", "removed_high", "mode", "typical")
        )
        inside = sorted({low, high, *(e for e in edges if low < e < high)})
        mass = sum(quad(law.pdf, a, b, epsabs=1e-13)[0] for a, b in pairwise(inside))
        assert mass == pytest.approx(float(law.cdf(high) - law.cdf(low)), rel=1e-7)
    bottom, top = law.support
    assert float(law.pdf(bottom - 0.1)) == 0.0
    assert float(law.pdf(min(top, 1e9) + 0.1)) == pytest.approx(0.0, abs=1e-12)


@pytest.mark.parametrize(
    ("law", "known"),
    [
        (Uniform(-0.05, 0.05), stats.uniform(-0.05, 0.1)),
        (TruncatedNormal(-0.05, 0.05, 0.02), stats.truncnorm(-2.5, 2.5, 0.0, 0.02)),
        (StudentT(-1e5, 1e5, 0.5, 2.0, 5.0), stats.t(5.0, 0.5, 2.0)),
        (LogNormal(1000.0, 0.5), stats.lognorm(0.5, 0.0, 1000.0)),
        (Triangular(-1.0, 2.0, mode=0.5), stats.triang(0.5, -1.0, 3.0)),
    ],
)
def test_pdf_agrees_with_scipy(law, known):
    x = law.ppf(np.linspace(0.001, 0.999, 101))
    np.testing.assert_allclose(law.pdf(x), known.pdf(x), rtol=1e-9)


def test_fixed_never_varies():
    law = Fixed(0.3)
    assert np.all(law.ppf(np.linspace(0.01, 0.99, 5)) == 0.3)
    assert (law.mean, law.sd, law.support) == (0.3, 0.0, (0.3, 0.3))
    assert list(law.cdf([0.2, 0.3, 0.4])) == [0.0, 1.0, 1.0]
    assert list(law.pdf([0.2, 0.3, 0.4])) == [0.0, np.inf, 0.0]


# sd of a law within +-t: uniform t/sqrt 3, triangular t/sqrt 6 (closed forms); normal cut at n
# sigma: 1 - 2 n phi(n) / (2 Phi(n) - 1) under the root, Johnson, Kotz & Balakrishnan vol. 1
# section 13.10.1; digits computed with mpmath.
def test_sd_of_uniform_and_triangle():
    assert Uniform(-1.0, 1.0).sd == pytest.approx(0.5773502692, rel=1e-9)
    assert Triangular(-1.0, 1.0).sd == pytest.approx(0.4082482905, rel=1e-9)


@pytest.mark.parametrize(
    ("sigmas", "ratio"),
    [(1.0, 0.539560), (1.5, 0.742647), (2.0, 0.879626), (2.5, 0.954597), (3.0, 0.986578)],
)
def test_sd_of_the_cut_normal(sigmas, ratio):
    assert TruncatedNormal(-sigmas, sigmas, 1.0).sd == pytest.approx(ratio, abs=5e-7)


def test_cut_normal_agrees_with_scipy():
    law = TruncatedNormal(-0.02, 0.05, 0.03, centre=0.01)
    other = stats.truncnorm(-1.0, 4.0 / 3.0, loc=0.01, scale=0.03)
    u = np.linspace(0.001, 0.999, 101)
    np.testing.assert_allclose(law.ppf(u), other.ppf(u), atol=1e-12)
    assert law.mean == pytest.approx(other.mean(), abs=1e-12)
    assert law.sd == pytest.approx(other.std(), rel=1e-9)


def test_unbounded_lognormal_agrees_with_scipy():
    law, other = LogNormal(2.0, 0.4), stats.lognorm(0.4, scale=2.0)
    u = np.linspace(0.001, 0.999, 101)
    np.testing.assert_allclose(law.ppf(u), other.ppf(u), rtol=1e-12)
    assert (law.mean, law.sd) == pytest.approx((other.mean(), other.std()), rel=1e-12)


def test_letter_z_taken_as_uniform_runs_30_percent_high():
    """-20/+80 %: the mean of a uniform law is +30 %, not 0 (IEC 60062 letter Z, first moments)."""
    assert Uniform(-0.2, 0.8).mean == pytest.approx(0.3)
    law = Asymmetric(-0.2, 0.0, 0.8)
    assert float(law.cdf(0.0)) == pytest.approx(0.5)


def test_sorting_out_leaves_nothing_in_the_middle():
    law = SortedOut(NORMAL, -0.02, 0.02)
    x = law.ppf(np.linspace(0.0005, 0.9995, 1000))
    assert np.min(np.abs(x)) >= 0.02
    assert law.mean == pytest.approx(0.0, abs=1e-12)
    assert law.sd > NORMAL.sd


@pytest.mark.parametrize(
    ("make", "key"),
    [
        (lambda: Uniform(0.1, -0.1), "high"),
        (lambda: Uniform(math.nan, 0.1), "low"),
        (lambda: Fixed(math.inf), "value"),
        (lambda: TruncatedNormal(-1.0, 1.0, 0.0), "sigma"),
        (lambda: TruncatedNormal(-1.0, 1.0, 0.01, centre=2.0), "centre"),
        (lambda: LogNormal(-1.0, 0.3), "median"),
        (lambda: LogNormal(1.0, 0.3, low=2.0, high=1.5), "high"),
        (lambda: Triangular(0.0, 1.0, mode=2.0), "mode"),
        (lambda: Asymmetric(-0.2, 0.0, 0.8, below=1.0), "below"),
        (lambda: SortedOut(NORMAL, -0.06, 0.06), "removed_high"),
        (lambda: StudentT(-1.0, 1.0, 0.0, -1.0, 5.0), "scale"),
        (lambda: StudentT(-1.0, 1.0, 0.0, 1.0, 0.0), "degrees_of_freedom"),
        (lambda: StudentT(1e6, 1e7, 0.0, 1.0, 5.0), "low"),
        (lambda: NormalMixture(-1.0, 1.0, (0.0,), ()), "sigmas"),
        (lambda: NormalMixture(-1.0, 1.0, (0.0,), (0.0,)), "sigmas"),
        (lambda: NormalMixture(20.0, 21.0, (0.0,), (0.1,)), "low"),
        (lambda: SortedOut(NORMAL, 0.06, 0.07), "removed_low"),
    ],
)
def test_wrong_parameters_are_named(make, key):
    with pytest.raises(Mistake) as caught:
        make()
    assert caught.value.key == key


def read(given, unit="1", *, relative=False):
    mistakes = []
    return read_law(given, unit, mistakes.append, relative=relative), mistakes


def test_laws_are_read_with_units_and_half_widths():
    law, _ = read({"law": "uniform", "half_width": "5 %"})
    assert law == Uniform(-0.05, 0.05)
    law, _ = read({"law": "truncated-normal", "half_width": 0.05, "sigma": 0.0167})
    assert law == TruncatedNormal(-0.05, 0.05, 0.0167)
    law, _ = read({"law": "uniform", "low": "-30 ppm/K", "high": "30 ppm/K"}, "1/K")
    assert law.support == pytest.approx((-30e-6, 30e-6))
    law, _ = read("95 ppm/K", "1/K")
    assert (type(law), law.mean) == (Fixed, pytest.approx(95e-6))
    law, _ = read({"law": "sorted-out", "whole": {"law": "uniform", "half_width": "5 %"},
                    "removed": "2 %"})  # fmt: skip
    assert law == SortedOut(Uniform(-0.05, 0.05), -0.02, 0.02)


def test_widths_of_temperatures_are_kelvins():
    law, _ = read(
        {"law": "truncated-normal", "low": "0 degC", "high": "50 degC", "sigma": "8 K"}, "degC"
    )
    assert law == TruncatedNormal(0.0, 50.0, 8.0)


def test_a_relative_lognormal_describes_the_factor():
    law, _ = read({"law": "lognormal", "sigma": 0.3}, relative=True)
    assert float(law.ppf(0.5)) == pytest.approx(0.0)
    assert law.support[0] == -1.0


def test_every_mistake_is_reported_with_the_nearest_name():
    law, mistakes = read({"law": "uniform", "half_wdth": "5 %", "low": "3 V"})
    assert law is None
    assert {mistake.key for mistake in mistakes} == {"half_wdth", "low"}
    assert mistakes[0].nearest == "half_width"
    _, mistakes = read({"law": "unifrom", "half_width": "5 %"})
    assert (mistakes[0].key, mistakes[0].nearest) == ("law", "uniform")
    _, mistakes = read({"law": "truncated-normal"})
    assert {mistake.key for mistake in mistakes} == {"low", "high", "sigma"}
    _, mistakes = read({"law": "uniform", "low": 1, "high": 2}, "degC")
    assert len(mistakes) == 2
