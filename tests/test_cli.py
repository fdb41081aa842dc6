"""The command line as a contract: whole answers, exit codes, nothing written by mistake."""

import subprocess
import sys
import tomllib

import pytest
from click.testing import CliRunner
from study_texts import GOOD

from tolsim.cli import main
from tolsim.errors import RunError
from tolsim.library import shipped_studies

HEAVY = {"numpy", "scipy", "pandas", "pint", "pydantic", "rich", "matplotlib", "joblib"}


@pytest.fixture
def place(tmp_path, monkeypatch):
    """An empty folder to work in."""
    monkeypatch.chdir(tmp_path)
    return tmp_path


def call(*arguments):
    return CliRunner().invoke(main, arguments)


def written(place, text, name="stage.toml"):
    (place / name).write_text(text, encoding="utf-8")
    return name


def test_help_loads_nothing_heavy():
    """`tolsim --help` must answer at once, so no big library may be loaded for it."""
    code = "import sys, tolsim.cli; print(*{name.split('.')[0] for name in sys.modules})"
    loaded = subprocess.run(  # noqa: S603 - our own interpreter
        [sys.executable, "-c", code], capture_output=True, text=True, check=True
    ).stdout.split()
    assert HEAVY.intersection(loaded) == set()


def test_help_names_verbs_cautions_and_exit_codes():
    answer = call("--help")
    assert answer.exit_code == 0
    for word in ("check", "run", "unit", "tables", "new", "kilovolts", "ozone", "Exit codes: 0"):
        assert word in answer.output
    assert max(map(len, answer.output.splitlines())) <= 80


@pytest.mark.parametrize("verb", ["check", "run", "unit", "tables", "new"])
def test_every_verb_has_help(verb):
    answer = call(verb, "--help")
    assert answer.exit_code == 0
    assert max(map(len, answer.output.splitlines())) <= 80


@pytest.mark.parametrize("verb", ["check", "run"])
def test_mistakes_end_with_2_and_nothing_written(place, verb):
    text = GOOD.replace('spread = "c-5"\n', "").replace('net = "vdd"', 'net = "vddd"')
    written(place, text.replace('capacitance = "75 pF"', "capacitance = 75"))
    answer = call(verb, "stage.toml")
    assert answer.exit_code == 2
    assert answer.output == (
        "Error: 3 mistakes:\n"
        '- stage.toml [rails.vdd] net: expected a net that parts join, got "vddd". '
        "Did you mean vdd?\n"
        '- stage.toml [parts.L1] nets: expected a net that other parts join too, got net "vdd" '
        "with this one connection. Did you mean vddd?\n"
        "- stage.toml [parts.C2] capacitance: expected a capacitance of 1 fF to 10 mF, got 75. "
        'Write the unit of measure too, like "2.7 nF".\n'
    )
    assert [path.name for path in place.iterdir()] == ["stage.toml"]


def test_check_shows_contents_and_assumptions(place):
    written(place, GOOD.replace('spread = "c-5"', 'spread = "class1-ceramic-5pct"'))
    answer = call("check", "--files-only", "stage.toml")
    assert answer.exit_code == 0, answer.output
    assert (
        "self-oscillating, 2 inductor, 3 capacitor, 1 resistor, 1 mosfet, 1 load" in answer.output
    )
    assert "states: dark (starts here), full" in answer.output
    assert "No spread table" in answer.output
    assert max(map(len, answer.output.splitlines())) <= 80


def test_a_study_that_is_not_there(place):
    written(place, GOOD, "lamp.toml")
    answer = call("check", "lmap.toml")
    assert answer.exit_code == 2
    assert "Did you mean lamp.toml?" in answer.output
    assert "Shipped studies:" in call("check", "qqqq").output


def test_a_run_that_cannot_be_finished_ends_with_1(place, monkeypatch):
    import tolsim.run

    def fails(*_, **__):
        raise RunError("the nominal unit settles on no orbit")

    monkeypatch.setattr(tolsim.run, "run_study", fails)
    written(place, GOOD.replace('spread = "c-5"', ""))
    answer = call("run", "stage.toml", "--units", "3")
    assert answer.exit_code == 1
    assert "Error: the nominal unit settles on no orbit" in answer.output


def test_a_stopped_run_says_how_to_go_on(place, monkeypatch):
    import tolsim.run

    def stopped(*_, **__):
        raise KeyboardInterrupt

    monkeypatch.setattr(tolsim.run, "run_study", stopped)
    written(place, GOOD.replace('spread = "c-5"', ""))
    answer = call("run", "stage.toml")
    assert answer.exit_code == 1
    assert "the same command goes on from there" in answer.output


def test_places_that_cannot_be_written_end_with_2(place):
    written(place, GOOD.replace('spread = "c-5"', ""))
    answer = call("run", "stage.toml", "--out", "stage.toml/out")
    assert answer.exit_code == 2
    assert "Error: 'stage.toml" in answer.output


def test_run_hands_over_what_was_asked(place, monkeypatch):
    import fake_run

    import tolsim.run

    asked = {}

    def runs(opened, **options):
        asked.update(options, title=opened.study.title)
        options["progress"](2, 4)
        return fake_run.results()

    monkeypatch.setattr(tolsim.run, "run_study", runs)
    written(place, GOOD.replace('spread = "c-5"', ""))
    answer = call("run", "stage.toml", "--units", "4", "--seed", "0", "--jobs", "2", "--out", "o")
    assert answer.exit_code == 0, answer.output
    del asked["progress"]
    assert asked == {
        "title": "Push-pull half, on the bench",
        "units": 4,
        "seed": 0,
        "jobs": 2,
        "law_check": None,
        "out": place.__class__("o"),
    }
    assert "488 pass every limit" in answer.output
    assert "Report: o/report.html" in answer.output
    assert max(map(len, answer.stdout.splitlines())) <= 80


def test_out_must_not_be_a_file(place):
    written(place, GOOD)
    answer = call("run", "stage.toml", "--out", "stage.toml")
    assert answer.exit_code == 2
    assert "is a file" in answer.output


def test_wrong_options_end_with_2(place):
    written(place, GOOD)
    for arguments in (
        ("run", "stage.toml", "--units", "0"),
        ("run",),
        ("unit", "none", "3"),
        ("x",),
    ):
        assert call(*arguments).exit_code == 2


def test_tables_are_listed_and_shown():
    answer = call("tables")
    assert answer.exit_code == 0
    assert "class1-ceramic-5pct" in answer.output
    assert max(map(len, answer.output.splitlines())) <= 80
    one = call("tables", "class1-ceramic-5pct")
    assert one.exit_code == 0
    assert "capacitance" in one.output
    assert max(map(len, one.output.splitlines())) <= 80
    wrong = call("tables", "class1-ceramic-5pc")
    assert wrong.exit_code == 2
    assert "Did you mean class1-ceramic-5pct?" in wrong.output


def test_tables_are_drawn(place):
    drawn = call("tables", "film-pet-10pct", "--picture", "film.svg")
    assert drawn.exit_code == 0
    assert "Polyester" in (place / "film.svg").read_text(encoding="utf-8")
    call("tables", "film-pet-10pct", "--picture", "again.svg")
    assert (place / "again.svg").read_bytes() == (place / "film.svg").read_bytes()
    call("tables", "mosfet-window-wide", "--picture", "q.png")
    assert (place / "q.png").read_bytes().startswith(b"\x89PNG")
    for arguments in (("film-pet-10pct", "--picture", "x.gif"), ("--picture", "x.svg")):
        assert call("tables", *arguments).exit_code == 2


def test_tables_with_mistakes_are_left_out_or_told(place):
    written(place, "[table.torn]\ntitle = 1\n", "mine.toml")
    answer = call("tables", "--tables", ".")
    assert answer.exit_code == 0
    assert "mine.toml [table.torn]" in answer.output
    assert call("tables", "class1-ceramic-5pct", "--tables", ".").exit_code == 0
    wrong = call("tables", "torn", "--tables", ".")
    assert wrong.exit_code == 2
    assert "[table.torn] title" in wrong.output


@pytest.mark.parametrize("name", shipped_studies())
def test_new_writes_a_study_that_checks(place, name):
    answer = call("new", "mine.toml", "--from", name)
    assert answer.exit_code == 0
    assert tomllib.loads((place / "mine.toml").read_text(encoding="utf-8"))["title"]
    assert call("check", "--files-only", "mine.toml").exit_code == 0


def test_new_never_overwrites(place):
    written(place, "precious", "mine.toml")
    answer = call("new", "mine.toml")
    assert answer.exit_code == 2
    assert "exists already" in answer.output
    assert (place / "mine.toml").read_text(encoding="utf-8") == "precious"
    assert call("new", "none/mine.toml").exit_code == 2
    assert call("new", "other.toml", "--from", "nope").exit_code == 2
    assert not (place / "other.toml").exists()
