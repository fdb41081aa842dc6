"""Reading of spread tables: every mistake at once, with place, nearest name and cure."""

import hashlib

import pytest
from small_study import TABLES, capacitor, everything, mosfet, study, tables

from tolsim.design import State
from tolsim.laws import StudentT
from tolsim.parts import Coupling
from tolsim.spread.checks import check_spread
from tolsim.spread.reading import read_shelf, read_tables
from tolsim.spread.words import assumptions, describe, law_words

HEAD = 'title = "T"\nfor = "capacitor"\nbasis = "guess"\nsource = "a test"\n'


def problems_of(body, head=HEAD):
    problems = []
    text = f"[table.x]\n{head}[table.x.capacitance]\n{body}\n"
    assert read_tables(text.encode(), "x.toml", problems) == {}
    return problems


def test_a_sound_table_is_read():
    table = tables()["c-lot"]
    spread = table.quantities["capacitance"]
    assert (table.kinds, table.basis, table.source) == (("capacitor",), "guess", "made for a test")
    assert spread.shared == {"temperature"}
    assert spread.ageing.rate.support == pytest.approx((-0.03, -0.02))
    assert spread.temperature.reference == 25.0
    assert table.sha256 == hashlib.sha256(TABLES).hexdigest()
    assert set(table.guesses) >= {"capacitance tolerance", "esr tolerance"}


@pytest.mark.parametrize(
    ("body", "key", "nearest"),
    [
        ('tolerence = {law = "uniform", half_width = "5 %"}', "tolerence", "tolerance"),
        ('tolerance = {law = "uniforn", half_width = "5 %"}', "tolerance.law", "uniform"),
        ('tolerance = {law = "uniform", half_widht = "5 %"}', "tolerance.half_widht", "half_width"),
        ('tolerance = {law = "uniform", half_width = "5 pF"}', "tolerance.half_width", ""),
        ('deviation = "relativ"', "deviation", "relative"),
        ('deviation = "position"', "deviation", ""),
        ('temperature = {law = "liner", slope = "30 ppm/K"}', "temperature.law", "linear"),
        ('temperature = {law = "linear", slope = 30e-6}', "temperature.slope", ""),
        ('temperature = {law = "linear", slop = "30 ppm/K"}', "temperature.slop", "slope"),
        ('temperature = {law = "class-1", code = "U2Z"}', "temperature", "U2J"),
        ('temperature = {law = "class-2", code = 7}', "temperature.code", ""),
        ('temperature = {law = "curve", points = [["25 degC"]]}', "temperature.points", ""),
        ('temperature = {law = "curve", points = [["25 s", "1 %"]]}', "temperature.points", ""),
        ('temperature = {law = "copper", exponent = 3}', "temperature.exponent", ""),
        ('ageing = {law = "log-time", rate = "-2 %"}', "ageing.reference", ""),
        ('ageing = {law = "logtime", rate = "-2 %"}', "ageing.law", "log-time"),
        ('ageing = {law = "linear", rate = 1, reference = {law = "x"}}', "ageing.reference", ""),
        ('tolerance = {law = "uniform", half_width = "5 %", basis = "gues"}', "basis", "guess"),
        ('tolerance = {law = "uniform", half_width = "5 %", shared = "reel"}', "shared", ""),
        ('temperature = {law = "class-1", code = "C0G", shared = "real"}', "shared", "reel"),
        ('tolerance = {law = "uniform", low = "-120 %", high = "20 %"}', "tolerance", ""),
        ('implied_half_window = "5 A"', "implied_half_window", ""),
    ],
)  # fmt: skip
def test_mistakes_have_key_and_nearest_name(body, key, nearest):
    problems = problems_of(body)
    assert key in {problem.key for problem in problems}
    found = next(problem for problem in problems if problem.key == key)
    assert found.nearest == nearest
    assert found.file == "x.toml"
    assert found.table.startswith("table.x")
    assert found.sentence()


@pytest.mark.parametrize(
    ("head", "key", "nearest"),
    [
        ('for = "capacitor"\nbasis = "guess"\nsource = "s"\n', "title", ""),
        ('title = "T"\nfor = "capacitr"\nbasis = "guess"\nsource = "s"\n', "for", "capacitor"),
        ('title = "T"\nfor = "capacitor"\nbasis = "gess"\nsource = "s"\n', "basis", "guess"),
        ('title = "T"\nfor = "capacitor"\nbasis = "guess"\n', "source", ""),
        (HEAD + 'capacitence = "x"\n', "capacitence", "capacitance"),
    ],
)
def test_mistakes_of_the_head(head, key, nearest):
    problems = problems_of('tolerance = {law = "uniform", half_width = "5 %"}', head)
    found = next(problem for problem in problems if problem.key == key)
    assert found.nearest == nearest


def test_all_mistakes_are_reported_at_once():
    problems = problems_of(
        'tolerance = {law = "uniform", low = "3 V"}\ntemperature = {law = "coper"}\nagein = {}'
    )
    assert {problem.key for problem in problems} >= {
        "tolerance.low",
        "tolerance.high",
        "temperature.law",
        "agein",
    }


def test_a_position_must_stay_in_the_window_and_a_mosfet_has_no_ambient_law():
    text = b"""[table.q]
title = "Q"
for = "mosfet"
basis = "guess"
source = "s"
[table.q.threshold]
deviation = "position"
lot = {law = "uniform", low = -0.9, high = 0.9}
tolerance = {law = "uniform", low = -0.3, high = 0.3}
[table.q.gain]
temperature = {law = "linear", slope = "30 ppm/K"}
"""
    problems = []
    read_tables(text, "q.toml", problems)
    assert {(problem.table, problem.key) for problem in problems} == {
        ("table.q.threshold", "deviation"),
        ("table.q.gain", "temperature"),
    }


def test_files_that_are_no_toml():
    for data in (b"[table.x\n", b"\xff[table.x]\n", b"[table.x]\n[table.x]\n"):
        problems = []
        read_tables(data, "x.toml", problems)
        assert len(problems) == 1


def test_look_up_goes_from_the_study_outwards(tmp_path):
    def table(folder, name, title) -> None:
        folder.mkdir(exist_ok=True)
        text = f'[table.{name}]\ntitle = "{title}"\nfor = "resistor"\nbasis = "measured"\n'
        text += f'source = "s"\n[table.{name}.resistance]\ntolerance = "1 %"\n'
        (folder / f"{name}.toml").write_text(text, encoding="utf-8")

    near, given = tmp_path / "near", tmp_path / "given"
    table(near, "resistor-thick-1pct", "mine")
    table(given, "resistor-thick-1pct", "theirs")
    table(given, "resistor-own", "own")
    (near / "study.toml").write_text("title = 'a study'\n[parts.R1]\n", encoding="utf-8")
    found = read_shelf(near / "study.toml", given).tables
    assert found["resistor-thick-1pct"].title == "mine"
    assert found["resistor-own"].file == "resistor-own.toml"
    assert "class1-ceramic-5pct" in found
    assert read_shelf(None, given).tables["resistor-thick-1pct"].title == "theirs"
    assert read_shelf(None, None).tables["resistor-thick-1pct"].title not in ("mine", "theirs")


def test_a_name_used_twice_in_one_folder_is_a_mistake(tmp_path):
    for file in ("a.toml", "b.toml"):
        (tmp_path / file).write_bytes(TABLES)
    problems = read_shelf(None, tmp_path).problems()
    assert problems
    assert all("a.toml" in problem.expected for problem in problems)


def test_descriptions_name_source_and_guess():
    said = describe(tables()["c-lot"])
    assert "made for a test" in said[0]
    assert sum("[guess]" in sentence for sentence in said) == 5
    assert any("-60 ppm/K" in sentence and "shared by a reel" in sentence for sentence in said)
    assert any("2.5 %" in sentence for sentence in said)


def test_assumptions_are_stated():
    said = assumptions(everything(), tables())
    assert any(words.startswith("No spread table") and "R1" in words for words in said)
    assert any(words.startswith("Q1: threshold window") for words in said)
    assert any(words.startswith("LAMP") and "rank" in words for words in said)
    assert any("lossless" in words and "C2" in words for words in said)


def test_a_sound_study_passes_the_checks():
    assert check_spread(everything(), tables(), "s.toml") == []


def test_mistakes_of_a_study():
    sheet = {
        "threshold": {"typical": 3.0, "current": 250e-6},
        "transfer": {"current": 10.0, "gate_voltage": 3.01},
        "capacitance": {"ciss": 1e-9, "coss": 3e-10, "crss": 1e-10, "drain_voltage": 25.0},
    }
    half_pf = b"""[table.half]
title = "half a picofarad"
for = "capacitor"
basis = "guess"
source = "s"
[table.half.capacitance]
deviation = "absolute"
tolerance = {law = "uniform", half_width = "0.5 pF"}
[table.close]
title = "close coupling"
for = "coupling"
basis = "guess"
source = "s"
[table.close.coupling]
tolerance = {law = "uniform", half_width = "10 %"}
"""
    given = study(
        {
            "C1": capacitor(spread="c-5", reel="a"),
            "C2": capacitor(spread="c-lot", reel="a"),
            "C3": capacitor(spread="half", capacitance=0.3e-12),
            "K1": Coupling(kind="coupling", inductors=("L1", "L2"), coupling=0.85, spread="close"),
            "Q1": mosfet(sheet=sheet),
        },
        states={"far": State(), "near": State(values={"K1.coupling": 0.95})},
    )
    problems = check_spread(given, tables() | tables(half_pf), "s.toml")
    assert [(problem.table, problem.key) for problem in problems] == [
        ("parts.Q1.sheet", "transfer"),
        ("parts.C2", "spread"),
        ("parts.C3", "spread"),
        ("parts.K1", "spread"),
    ]


def test_pure_numbers_of_a_law_are_no_percentages():
    words = law_words(StudentT(-0.1, 0.1, 0.0, 0.02, 4.0), "share")
    assert words == "student-t (low -10 %, high 10 %, centre 0 %, scale 2 %, degrees of freedom 4)"
