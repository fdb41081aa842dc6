"""Parts that depend on each other: copulas by their closed forms, matched pairs, mistakes."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from small_study import TABLES, capacitor, mosfet, study, tables

from tolsim.inputs import input_rows
from tolsim.laws import TruncatedNormal, Uniform
from tolsim.parts import Resistor
from tolsim.spread.checks import check_spread
from tolsim.spread.dependence import Match, Tie, correlation_matrix, is_possible
from tolsim.spread.part_values import nominal_values, part_values
from tolsim.spread.reading import read_tables
from tolsim.spread.sampling import draw, factors
from tolsim.spread.words import describe

MORE = (
    TABLES
    + b"""
[table.r-track]
title = "Resistor whose slopes track in a reel"
for = "resistor"
basis = "guess"
source = "made for a test"
[table.r-track.resistance]
temperature.law = "linear"
temperature.slope = {law = "uniform", half_width = "100 ppm/K"}
temperature.tracking = 0.9
ageing.law = "none"

[table.m-follow]
title = "MOSFET whose gain follows the threshold"
for = "mosfet"
basis = "datasheet"
source = "made for a test"
[table.m-follow.threshold]
deviation = "position"
implied_half_window = "0.5 V"
lot = {law = "uniform", low = -0.7, high = 0.7}
tolerance = {law = "truncated-normal", low = -0.3, high = 0.3, sigma = 0.1}
[table.m-follow.gain]
lot = {law = "uniform", half_width = "10 %"}
tolerance = {law = "uniform", half_width = "5 %"}
follows = {threshold = -0.4, basis = "guess", source = "high threshold, low gain"}
[table.m-follow.drift_resistance]
tolerance = {law = "uniform", half_width = "5 %"}
follows = {threshold = 0.3, gain = -0.5}
"""
)
N = 40_000


def resistor(**keys):
    return Resistor(kind="resistor", nets=("a", "b"), resistance=1000.0, **keys)


def values_of(checked, count=N, condition="room"):
    known = tables(MORE)
    draws = draw(factors(checked, known), 3, 0, count)
    return draws, part_values(checked, known, condition, "normal", draws)


def normal_copula(one, other, rho):
    """Spearman 6/pi asin(rho/2), Kendall 2/pi asin(rho): Kruskal, J. Am. Stat. Assoc. 53 (1958)."""
    assert stats.spearmanr(one, other).statistic == pytest.approx(
        6 / np.pi * np.arcsin(rho / 2), abs=0.015
    )
    assert stats.kendalltau(one, other).statistic == pytest.approx(
        2 / np.pi * np.arcsin(rho), abs=0.015
    )


@pytest.mark.parametrize("rho", [0.5, 0.8, 0.9])
def test_tracking_is_a_gaussian_copula_with_the_laws_kept(rho):
    tie = Tie.to_reel("reel", rho)
    shares = [draw_of(name) for name in ("reel", "one", "other")]
    one, other = (tie.rank(own, shares[:1]) for own in shares[1:])
    normal_copula(one, other, rho)
    for share in (one, other):
        assert stats.kstest(share, "uniform").pvalue > 1e-3
        assert 0 < share.min() < share.max() < 1


def draw_of(name):
    return np.random.default_rng(sum(name.encode())).random(N)


def test_parts_of_one_reel_track_and_those_of_two_do_not():
    parts = {"R1": "x", "R2": "x", "R3": "y", "R4": None}
    parts = {ref: resistor(spread="r-track", reel=reel) for ref, reel in parts.items()}
    checked = study(parts).model_copy()
    hot = checked.model_copy(
        update={
            "conditions": {"room": checked.conditions["room"].model_copy(update={"ambient": 125.0})}
        }
    )
    draws, values = values_of(hot)
    slopes = {ref: values[f"{ref}.resistance"] / 1000.0 - 1.0 for ref in parts}
    normal_copula(slopes["R1"], slopes["R2"], 0.9)
    assert abs(stats.spearmanr(slopes["R1"], slopes["R3"]).statistic) < 0.02
    law = stats.uniform(-0.01, 0.02)  # 100 ppm/K over 100 K
    for slope in slopes.values():
        assert stats.kstest(slope, law.cdf).pvalue > 1e-3
    assert "reel x: resistance temperature slope" in draws.names
    assert not any(name.startswith("reel") and "R4" in name for name in draws.names)
    corr = np.corrcoef(draws.u.T) - np.eye(len(draws.names))
    assert np.abs(corr).max() < 0.025  # factors stay independent: rankings need them so


def test_quantities_of_one_part_follow_each_other():
    checked = study({"Q1": mosfet(spread="m-follow", reel="q")})
    draws, _ = values_of(checked)
    wanted = {("threshold", "gain"): -0.4, ("threshold", "drift_resistance"): 0.3}
    wanted[("gain", "drift_resistance")] = -0.5
    for (one, other), rho in wanted.items():
        ranks = [draws.rank(f"Q1.{quantity} tolerance") for quantity in (one, other)]
        normal_copula(*ranks, rho)
        assert stats.kstest(ranks[1], "uniform").pvalue > 1e-3
    lots = [draws.rank(f"reel q: {quantity} lot shift") for quantity in ("threshold", "gain")]
    normal_copula(*lots, -0.4)


def test_lognormal_laws_keep_their_moments_under_a_copula():
    """Pearson (exp(s^2 rho) - 1) / (exp(s^2) - 1) of lognormals with s = 0.5: 0.779517 at 0.8."""
    tie = Tie.to_quantities(["one"], np.eye(1), np.array([0.8]))
    one = draw_of("one")
    pair = [stats.lognorm(0.5).ppf(share) for share in (one, tie.rank(draw_of("other"), [one]))]
    assert np.corrcoef(pair)[0, 1] == pytest.approx(0.779517, abs=0.02)


def test_impossible_correlations_are_known():
    pairs = {("b", "a"): 0.9, ("c", "b"): 0.9, ("c", "a"): -0.9}
    assert not is_possible(correlation_matrix(["a", "b", "c"], pairs))
    assert is_possible(correlation_matrix(["a", "b"], pairs))


def test_the_nominal_unit_and_zero_spread_know_nothing_of_it():
    checked = study(
        {
            "Q1": mosfet(spread="m-follow", reel="q"),
            "Q2": mosfet(spread="m-follow", reel="q", matched_with="Q1", match={"gain": "1 %"}),
        }
    )
    values = nominal_values(checked, tables(MORE), "room", "normal")
    assert values["Q2.gain"] == values["Q1.gain"] == 11.0


def pair(**match):
    return study(
        {
            "Q1": mosfet(spread="m-follow", reel="q"),
            "Q2": mosfet(spread="m-follow", reel="q", matched_with="Q1", match=match),
        }
    )


def test_a_matched_pair_lies_in_one_bin_and_keeps_the_law_of_the_lot():
    alone = values_of(pair(gain="1 %"))[1]
    _, values = values_of(pair(threshold="20 mV"))
    apart = np.abs(values["Q1.threshold"] - values["Q2.threshold"])
    assert apart.max() <= 0.020
    assert np.abs(alone["Q1.threshold"] - alone["Q2.threshold"]).max() > 0.1
    np.testing.assert_array_equal(values["Q1.threshold"], alone["Q1.threshold"])
    ends = stats.ks_2samp(values["Q2.threshold"], alone["Q2.threshold"]).pvalue
    assert ends > 1e-3


def test_two_of_one_bin_differ_like_two_of_a_narrow_law():
    """Uniform law, whole bins: the difference has standard deviation width / root 6."""
    law, width = Uniform(-0.5, 0.5), 0.2
    mate = draw_of("mate")
    mine = Match("mate", width).rank(draw_of("mine"), mate, law)
    apart = law.ppf(mine) - law.ppf(mate)
    assert apart.std() == pytest.approx(width / np.sqrt(6), rel=0.02)
    assert stats.kstest(mine, "uniform").pvalue > 1e-3


@settings(max_examples=50, deadline=None)
@given(
    own=st.floats(2**-53, 1 - 2**-53),
    mate=st.floats(2**-53, 1 - 2**-53),
    width=st.floats(1e-3, 2.0),
)
def test_no_match_is_wider_than_its_bin(own, mate, width):
    law = TruncatedNormal(-0.3, 0.3, 0.1)
    rank = Match("mate", width).rank(np.array([own]), np.array([mate]), law)
    assert 0 < rank[0] < 1
    assert abs(law.ppf(rank)[0] - law.ppf(mate)) <= width + 1e-9


def test_the_gain_of_a_matched_part_follows_the_threshold_it_was_matched_to():
    draws, values = values_of(pair(threshold="20 mV"))
    normal_copula(draws.rank("Q2.threshold tolerance"), draws.rank("Q2.gain tolerance"), -0.4)
    between = stats.spearmanr(
        draws.rank("Q1.gain tolerance"), draws.rank("Q2.gain tolerance")
    ).statistic
    assert between == pytest.approx(0.15, abs=0.03)  # -0.4 twice, through thresholds all but equal
    assert np.abs(np.corrcoef(draws.u.T) - np.eye(len(draws.names))).max() < 0.025
    assert values["Q2.gain"].min() > 0


def test_a_unit_is_the_same_in_any_chunk():
    known = tables(MORE)
    checked = pair(threshold="20 mV", gain="1 %")
    found = factors(checked, known)
    whole = part_values(checked, known, "room", "normal", draw(found, 3, 0, 30))
    late = part_values(checked, known, "room", "normal", draw(found, 3, 20, 10))
    for address, value in late.items():
        np.testing.assert_array_equal(value, whole[address][20:])


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ('temperature.tracking = 0.9\ntemperature.shared = "reel"', "a reel shares this law"),
        ("temperature.tracking = 1.0", "below 1"),
        ('temperature.tracking = "much"', "a correlation"),
        ("follows = 3", "a table like"),
        ("follows = {tolerance = 0.5}", "another quantity"),
        ("follows = {esr = 1.5}", "between -1 and 1"),
        ("follows = {esr = 0.5}", "a tolerance or a lot law of both"),
    ],
)
def test_mistakes_in_a_table(text, words):
    table = f"""
[table.c]
title = "T"
for = "capacitor"
basis = "guess"
source = "s"
[table.c.esr]
ageing = {{law = "linear", rate = "1 %", reference = "1000 h"}}
[table.c.capacitance]
tolerance = {{law = "uniform", half_width = "5 %"}}
temperature.law = "linear"
temperature.slope = "10 ppm/K"
{text}
"""
    problems = []
    read_tables(table.encode(), "t.toml", problems)
    assert words in " ".join(problem.sentence() for problem in problems)


def test_correlations_that_cannot_hold_together_are_refused():
    bad = MORE.replace(b"{threshold = 0.3, gain = -0.5}", b"{threshold = 0.95, gain = 0.9}")
    problems = []
    read_tables(bad, "t.toml", problems)
    assert "can hold together" in problems[0].sentence()


@pytest.mark.parametrize(
    ("keys", "words"),
    [
        ({"matched_with": "Q1"}, "both matched_with and match"),
        ({"match": {"gain": "1 %"}}, "both matched_with and match"),
        ({"matched_with": "Q11", "match": {"gain": "1 %"}}, "Did you mean Q1"),
        ({"matched_with": "C1", "match": {"gain": "1 %"}}, "another mosfet"),
        ({"matched_with": "Q1", "match": {"gain": "1 %"}, "reel": "other"}, "one reel"),
        ({"matched_with": "Q1", "match": {"gain": "1 %"}, "spread": "m-window"}, "m-follow"),
        ({"matched_with": "Q1", "match": {"treshold": "1 V"}}, "Did you mean threshold"),
        ({"matched_with": "Q1", "match": {"threshold": "1 A"}}, "measures something else"),
        ({"matched_with": "Q1", "match": {"threshold": "-1 mV"}}, "above 0"),
        ({"matched_with": "Q1", "match": {"threshold": 0.05}}, "with its unit of measure"),
        (
            {
                "matched_with": "Q1",
                "match": {"gain": "1 A/V^2"},
                "model": {"threshold": 3.4, "gain": 12.0, "cgs": 2e-9},
            },
            "same nominal value",
        ),
    ],
)
def test_mistakes_in_a_pair(keys, words):
    parts = {
        "Q1": mosfet(spread="m-follow", reel="q"),
        "Q2": mosfet(**{"spread": "m-follow", "reel": "q", **keys}),
        "C1": capacitor(),
    }
    problems = check_spread(study(parts), tables(MORE), "stage.toml")
    text = " ".join(problem.sentence() for problem in problems)
    assert words in text
    assert "parts.Q2" in text


def test_banks_and_parts_matched_with_matched_ones_are_refused():
    one = {"spread": "c-lot", "reel": "t"}
    with_c1 = {"matched_with": "C1", "match": {"capacitance": "1 %"}}
    parts = {
        "C1": capacitor(**one),
        "C2": capacitor(**one, **with_c1),
        "C3": capacitor(**one, matched_with="C2", match={"capacitance": "5 pF"}),
        "C4": capacitor(**one, **with_c1, pieces=3),
    }
    problems = check_spread(study(parts), tables(MORE), "stage.toml")
    told = {problem.table: problem.sentence() for problem in problems}
    assert set(told) == {"parts.C3", "parts.C4"}
    assert 'Write matched_with = "C1"' in told["parts.C3"]
    assert "not banks" in told["parts.C4"]


def test_what_depends_on_what_is_told():
    known = tables(MORE)
    words = " ".join(describe(known["m-follow"]))
    assert "gain, follows threshold with correlation -0.4" in words
    assert "high threshold, low gain" in words
    assert "tracking 0.9 in a reel" in " ".join(describe(known["r-track"]))
    rows = list(input_rows(pair(threshold="20 mV"), known))
    match = next(row for row in rows if "matched with Q1" in row.law)
    assert (match.part, match.quantity) == ("Q2", "threshold")
    assert "20 mV" in match.law
    follows = next(row for row in rows if "follows threshold" in row.law and row.guess)
    assert follows.source == "high threshold, low gain"
