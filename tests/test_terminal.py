"""What is shown on the terminal fits 80 columns, and says what matters first."""

import math
from pathlib import Path

import fake_run

from tolsim.terminal import progress, show_operating_point, show_summary


def shown_by(capsys):
    text = capsys.readouterr().out
    assert max(map(len, text.splitlines())) <= 80
    return text


def test_summary_begins_with_the_verdict_and_ends_with_the_report(capsys):
    show_summary(fake_run.results().summary, Path("results") / "lamp")
    text = shown_by(capsys)
    assert text.startswith("Of 500 simulated units, 488 pass")
    assert text.rstrip().endswith("Report: results/lamp/report.html")


def test_operating_point_tells_cases_and_nearest_limits(capsys):
    study = fake_run.study()
    cases = fake_run.nominal(study)
    show_operating_point(study, cases)
    text = shown_by(capsys)
    assert all(state in text for state in study.states)
    assert "no steady orbit" not in text
    near = text[text.index("Nearest to their limits:") :]
    assert "at most 80 V" in near
    assert "at least 3 dB" in near
    assert " MHz to " in near


def test_cases_without_an_orbit_are_named(capsys):
    study = fake_run.study()
    cases = {**fake_run.nominal(study), ("cold", "dark"): {"start_margin": -math.inf}}
    show_operating_point(study, cases)
    assert "It settles on no steady orbit in: cold / dark." in shown_by(capsys)


def test_progress_takes_news_and_stays_off_stdout(capsys):
    with progress() as step:
        step(0, 10)
        step(10, 10)
    assert capsys.readouterr().out == ""
