"""Numbers and sentences as people read them."""

import fake_run
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tolsim.answers.lines import summary_lines
from tolsim.answers.wording import (
    FARTHEST_DB,
    between,
    failures,
    hardest,
    measured,
    outcome_words,
    percent,
    percents,
    share_with_interval,
    shown,
    verdict_sentence,
)
from tolsim.circuit.startup import MARGIN_STEPS_DB


def bare(passed, failed, undecided, low, high):
    units = passed + failed + undecided
    y = {
        "estimate": passed / units,
        "low": low,
        "high": high,
        "confidence": 0.95,
        "units": units,
        "passed": passed,
        "failed": failed,
        "undecided": undecided,
    }
    return {"yield": y, "limits": [], "outcomes": [], "figures": [], "ranking": [], "quality": {}}


@pytest.mark.parametrize(
    ("share", "text"),
    [
        (0.986, "98.6 %"),
        (0.9926, "99.3 %"),
        (0.99963, "99.96 %"),
        (0.999949, "99.995 %"),
        (0.002, "0.20 %"),
        (0.00005, "0.0050 %"),
        (0.0, "0 %"),
        (1.0, "100 %"),
        (None, "\u2013"),
    ],
)
def test_percent(share, text):
    assert percent(share) == text


@given(st.floats(1e-7, 1 - 1e-7))
def test_a_share_that_is_not_0_or_1_never_reads_so(share):
    number = float(percent(share).split()[0])
    assert 0 < number < 100


def test_an_end_moved_off_its_border_by_a_trifle_is_written_there():
    """Lots leave fractions of units: 0.00005 % beside 9.5 % says no more than 0."""
    assert percents(5e-7, 0.095) == "0.0 to 9.5 %"
    assert percents(0.728, 0.99997) == "72.8 to 100.0 %"
    assert percents(0.0, 0.1) == "0 to 10.0 %"


def test_intervals():
    assert percents(0.9714, 0.9943) == "97.1 to 99.4 %"
    assert between([79.1, 81.26], "V") == "79.1 to 81.3 V"
    assert between([950.0, 1200.0], "V") == "950 V to 1.20 kV"
    assert between([79.1, None], "V") == "79.1 V to open"


def test_three_significant_digits():
    assert measured(14.0, "V") == "14.0 V"
    assert measured(9, "degC") == "9.00 °C"
    assert measured(0.5, "1") == "0.500"
    assert measured(0.0, "V") == "0 V"
    assert shown(600.0, "V") == "600 V"
    assert shown(float("inf"), "V") == shown(None, "V") == "\u2013"


def test_nothing_seen_is_never_a_bare_zero():
    entry = {"units": 0, "share": 0.0, "low": 0.0, "high": 0.0074}
    assert share_with_interval(entry) == "none seen (up to 0.74 %)"


def test_verdict_follows_the_pattern():
    summary = bare(493, 7, 0, 0.9714, 0.9943)
    summary["limits"] = [
        {
            "title": "Start margin",
            "unit_of_measure": "dB",
            "bound": {"at_most": None, "at_least": 3.0, "share_of_rating": None},
            "by_part": [],
            "units": 7,
            "first_units": [12, 40],
        }
    ]
    assert verdict_sentence(summary) == (
        "Of 500 simulated units, 493 pass every limit in every state and condition: yield "
        "98.6 % (95 % interval 97.1 to 99.4 %). 0 undecided. Most often failed: start margin at "
        "least 3 dB, in 7 units, first 12."
    )


def test_verdict_without_failures_bounds_what_was_not_seen():
    sentence = verdict_sentence(bare(500, 0, 0, 0.99265, 1.0))
    assert "yield 100 % (95 % interval 99.3 to 100 %)" in sentence
    assert sentence.endswith("No failure was seen; up to 0.73 % of units may still fail.")


def test_failures_are_ordered_and_name_outcomes_without_limits():
    found = failures(fake_run.results().summary)
    assert [failure.units for failure in found] == sorted(
        (failure.units for failure in found), reverse=True
    )
    assert "latched both on (cold, dark)" in {failure.name for failure in found}
    assert not any("over stress" in failure.name for failure in found)


@pytest.mark.parametrize(
    ("outcome", "units", "words"),
    [
        ("starts only with a kick", 1, "starts only with a kick"),
        ("starts only with a kick", 3, "start only with a kick"),
        ("dies away", 2, "die away"),
        ("starts late", 2, "start late"),
        ("latched both on", 2, "latched both on"),
        ("wrong mode", 2, "wrong mode"),
    ],
)
def test_outcomes_agree_with_the_number_of_units(outcome, units, words):
    assert outcome_words({"outcome": outcome, "units": units}) == words


def test_hardest_driven_first():
    uses = [use for use, _ in hardest(fake_run.results().summary)]
    assert uses[0] > 1.0
    assert uses == sorted(uses, reverse=True)


def test_terminal_summary_fits_80_columns_and_begins_with_the_verdict():
    summary = fake_run.results().summary
    lines = summary_lines(summary)
    assert max(len(line) for line in lines) <= 80
    assert " ".join(lines).startswith(verdict_sentence(summary))
    text = "\n".join(lines)
    for words in ("undecided", "Q1 peak drain voltage", "reel Q: threshold lot shift", "25 agree"):
        assert words in text


def test_terminal_summary_of_next_to_nothing():
    assert summary_lines(bare(1, 0, 0, 0.025, 1.0))[0].startswith("Of 1 simulated units, 1 passes")


def test_margins_at_the_end_of_the_search_say_so():
    assert MARGIN_STEPS_DB[-1] == FARTHEST_DB
    assert shown(60.0, "dB") == "60 dB or more"
    assert shown(-60.0, "dB") == "-60 dB or less"
    assert shown(59.2, "dB") == "59.2 dB"
