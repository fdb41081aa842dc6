"""What README says can be done, can be done: its study runs, its code runs, its words are true."""

import json
import re
from pathlib import Path

import pandas as pd
import pytest
from click.testing import CliRunner

import tolsim
from tolsim.cli import main
from tolsim.library import distributions_folder, shipped_studies

ROOT = Path(__file__).resolve().parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")
LARGEST_PICTURE = 250_000  # bytes


def blocks(language):
    return re.findall(rf"```{language}\n(.*?)```", README, flags=re.DOTALL)


def indented():
    """Examples that stand inside a list."""
    return [re.sub(r"(?m)^ {6}", "", text) for text in re.findall(r"\n((?: {6}\S.*\n)+)", README)]


@pytest.fixture
def place(tmp_path, monkeypatch):
    """A folder with README's study, to work in."""
    (study,) = blocks("toml")
    (tmp_path / "beacon.toml").write_text(study, encoding="utf-8")
    monkeypatch.chdir(tmp_path)
    return tmp_path


def test_the_study_is_short_and_without_mistakes(place):
    text = (place / "beacon.toml").read_text(encoding="utf-8")
    assert sum(bool(line.strip()) for line in text.splitlines()) <= 35
    assert tolsim.load_study("beacon.toml").title in text


def test_the_spread_table_shown_can_be_used(place):
    (table,) = (text for text in indented() if text.startswith("[table"))
    (place / "ours.toml").write_text(table, encoding="utf-8")
    readings = distributions_folder() / "readings" / "example_film_10n.csv"
    (place / "reel.csv").write_bytes(readings.read_bytes())
    study = (place / "beacon.toml").read_text(encoding="utf-8")
    (place / "beacon.toml").write_text(study.replace("film-pp-5pct", "our-film"), encoding="utf-8")
    assert tolsim.load_study("beacon.toml")


def test_the_trim_shown_can_be_used(place):
    (trim,) = (text for text in indented() if text.startswith("[trim"))
    study = shipped_studies()["plant-lamp"].read_text(encoding="utf-8")
    study = re.sub(r"(?ms)^\[trim\..*?^$", "", study)
    (place / "lamp.toml").write_text(study + trim, encoding="utf-8")
    assert tolsim.load_study("lamp.toml").trims["idle"].target == pytest.approx(0.06)


def test_the_study_runs_and_its_failures_are_those_told(place):
    arguments = ["run", "beacon.toml", "--units", "30", "--jobs", "1"]
    answer = CliRunner().invoke(main, arguments)
    assert answer.exit_code == 0, answer.output
    folder = place / "results" / "beacon"
    summary = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    failing = {entry["figure"]: entry["units"] for entry in summary["limits"]}
    assert failing["start_margin"] > 0 == failing["gate_peak"]
    table = README.split("## The results folder")[1].split("\n\n")[1]
    told = set(re.findall(r"`([^`]+)`", table))
    assert told == {f"{p.name}/" if p.is_dir() else p.name for p in folder.iterdir()} - {"chunks/"}
    for key in summary:
        assert key in ("format", "title", "kind") or f"`{key}`" in README


def test_the_python_example_returns_pandas_objects(place, capsys):
    (code,) = blocks("python")
    names = {}
    exec(compile(code, "README.md", "exec"), names)  # noqa: S102 - our own README
    assert isinstance(names["results"].yield_, pd.Series)
    for table in ("stress", "failing", "drawn"):
        assert isinstance(names[table], pd.DataFrame)
        assert not names[table].empty
    assert "estimate" in capsys.readouterr().out
    assert [path.name for path in place.iterdir()] == ["beacon.toml"]


def test_ci_runs_the_test_command_of_readme():
    _, tests = blocks("sh")
    assert tests.strip() in (ROOT / ".ci" / "run").read_text(encoding="utf-8").splitlines()


def test_the_run_command_names_a_shipped_study():
    run, _ = blocks("sh")
    assert run.split()[-1] in shipped_studies()
    for name in shipped_studies():
        assert f"`{name}`" in README


def test_every_verb_and_exit_code_is_told():
    for verb in main.commands:
        assert f"`tolsim {verb} " in README
    assert "Exit codes: 0 all right; 1 the run could not be finished; 2 the request" in README


def test_the_picture_is_there_and_small():
    (name,) = re.findall(r"!\[.+\]\((.+)\)", README)
    assert 0 < (ROOT / name).stat().st_size < LARGEST_PICTURE
