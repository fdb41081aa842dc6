"""How mistakes are told."""

import pickle

import pytest

from tolsim.errors import Mistake, Problem, StudyError, nearest_name


def test_a_problem_says_place_got_expected_nearest_and_cure():
    problem = Problem(
        "stage.toml",
        "parts.C1",
        "spread",
        '"clas1"',
        "a spread table",
        "class1",
        "See tolsim tables.",
    )
    assert problem.sentence() == (
        'stage.toml [parts.C1] spread: expected a spread table, got "clas1". '
        "Did you mean class1? See tolsim tables."
    )


def test_a_problem_leaves_out_what_it_does_not_know():
    assert Problem("stage.toml", "", "", "", "valid TOML").sentence() == (
        "stage.toml: expected valid TOML."
    )


def test_a_mistake_gets_its_place():
    mistake = Mistake("less than high", "Swap them.", key="low", got="5 V")
    assert str(mistake) == "low: expected less than high (got 5 V). Swap them."
    assert Problem.of(mistake, "a.toml", "parts.V1", "other", "other") == Problem(
        "a.toml", "parts.V1", "low", "5 V", "less than high", "", "Swap them."
    )


def test_a_study_error_lists_everything():
    problems = [Problem("a", "", "x", "1", "2"), Problem("a", "", "y", "1", "2")]
    assert str(StudyError(problems)) == (
        "2 mistakes:\n- a x: expected 2, got 1.\n- a y: expected 2, got 1."
    )
    assert str(StudyError(problems[:1])).startswith("1 mistake:\n")


@pytest.mark.parametrize(
    "error", [StudyError([Problem("a", "b", "c", "d", "e")]), Mistake("x", "y", key="k", got="g")]
)
def test_errors_travel_between_processes(error):
    there = pickle.loads(pickle.dumps(error))  # noqa: S301 - our own bytes
    assert str(there) == str(error)


def test_nearest_name_looks_past_case_and_slips():
    assert nearest_name("q1", ["Q1", "Q2"]) == "Q1"
    assert nearest_name("drian", ["drain", "gate"]) == "drain"
    assert nearest_name("xyz", ["drain", "gate"]) == ""
    assert nearest_name("x", []) == ""
