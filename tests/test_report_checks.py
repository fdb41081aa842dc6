"""Law check and model check on the page and in the terminal: what was found is what is shown."""

from dataclasses import replace

import fake_run
import numpy as np
import pytest
import test_lawcheck
from test_report import read

from tolsim import lawcheck, workers
from tolsim.answers.lines import summary_lines
from tolsim.answers.prototype_words import board_sentence
from tolsim.answers.unit_files import FrameColumns
from tolsim.answers.wording import verdict_sentence
from tolsim.report import render
from tolsim.spread.sampling import draw
from tolsim.stats.plausibility import plausibility


@pytest.fixture(scope="module")
def laws():
    """A law check that found something, of the invented stage of its own tests."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(workers, "rows_of", test_lawcheck.invented)
        plan = test_lawcheck.plan_of(0.1)
        units = test_lawcheck.UNITS
        rows = test_lawcheck.invented(
            plan, draw(plan.factors, plan.study.run.seed, 0, units), units, units
        )
        return lawcheck.law_check(plan, FrameColumns(rows), 1)


def bench(value):
    """A board with one reading among 300 units about 80 V."""
    predicted = np.random.default_rng(1).normal(80.0, 2.0, size=(300, 1))
    found = plausibility(predicted, np.array([value]), np.array([0.5]), np.random.default_rng(2))
    reading = {
        "figure": "drain_peak",
        "title": "Peak drain voltage",
        "part": "Q1",
        "condition": "room",
        "state": "full",
        "unit_of_measure": "V",
        "worse": "high",
        "good_side": "low",
        "value": value,
        "uncertainty": 1.0,
        "p5": 76.7,
        "p50": 80.0,
        "p95": 83.3,
        "deviation": 2.0,
        "bare_p50": 80.4,
        "percentile": float(found.percentile[0]),
        "p": float(found.p[0]),
        "z": float(found.z[0]),
        "outside": bool(found.outside[0]),
        "share": float(found.share[0]),
    }
    board = {
        "name": "prototype",
        "title": "first board",
        "verdict": "pass" if found.joint_p >= 0.01 else "fail",
        "reason": "",
        "solved_again": True,
        "probes": [{"net": "a", "to": "gnd", "capacitance": 12e-12, "resistance": 1e7}],
        "fixed": {"C5.capacitance": 508e-12},
        "units": 300,
        "without": 2,
        "joint_p": found.joint_p,
        "distance": found.distance,
        "chi_square_p": found.chi_square_p,
        "readings": [reading],
        "suspect": {"reading": "Q1.drain_peak", "factor": "C5.capacitance tolerance"},
    }
    board["sentence"] = board_sentence(board, single=True)
    sentence = board["sentence"]
    return {"measured": True, "threshold": 0.01, "boards": [board], "sentence": sentence}


def shown(**entries):
    content = fake_run.report()
    summary = {**content.summary, **entries}
    return summary, read(render(replace(content, summary=summary))).text


def test_the_law_check_is_shown_law_by_law_and_family_by_family(laws):
    _, text = shown(law_check=laws)
    words = "".join(text)
    assert "Does the verdict hang on the laws?" in words
    assert laws["sentence"] in words
    for entry in laws["together"]:
        assert entry["law"] in words
    for family in laws["families"]:
        assert ", ".join(family["tables"]) in words


def test_a_law_check_that_was_not_made_says_why():
    reason = "fewer than 100 units"
    empty = {"done": False, "reason": reason, "sentence": "", "together": [], "families": []}
    _, text = shown(law_check=empty)
    assert f"Not asked of this run: {reason}." in "".join(text)


@pytest.mark.parametrize(("value", "verdict"), [(81.0, "pass"), (95.0, "FAIL")])
def test_the_model_check_stands_in_the_verdict_and_in_its_own_section(value, verdict):
    summary, text = shown(prototype=bench(value))
    words = "".join(text)
    assert f"Model check: {verdict}" in verdict_sentence(summary)
    assert "Does the model agree with the bench?" in words
    assert f"{value:.3g} V ± 1 V" in words
    assert "80.4 V without probe" in words or "80 V" in words
    assert "a to gnd, 12 pF, 10 Mohm" in words
    assert "C5.capacitance 508 pF" in words
    if verdict == "FAIL":
        assert "Suspect Q1 peak drain voltage first" in words
        assert "it follows C5.capacitance tolerance most" in words


def test_without_a_board_page_and_terminal_say_that_the_model_is_unchecked(laws):
    unchecked = "No prototype was measured: the model is unchecked."
    bare = {"measured": False, "threshold": 0.01, "boards": [], "sentence": unchecked}
    summary, text = shown(prototype=bare, law_check=laws)
    assert unchecked in "".join(text)
    lines = summary_lines(summary)
    assert "  no prototype was measured: the model is unchecked" in lines
    assert max(map(len, lines)) <= 80
    assert "Guessed laws" in lines
