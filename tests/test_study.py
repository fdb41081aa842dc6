"""From study files to checked studies, and every mistake at once."""

import contextlib
import re

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from study_texts import BAD, GOOD, TABLES, TOLD

from tolsim.errors import StudyError
from tolsim.study import load_study, open_study, read_study


def problems_of(text, tables=TABLES):
    with pytest.raises(StudyError) as caught:
        read_study(text, tables, "stage.toml")
    return caught.value.problems


def sentences_of(text):
    return [problem.sentence().removeprefix("stage.toml ") for problem in problems_of(text)]


def test_quantities_arrive_in_si():
    study = read_study(GOOD, TABLES)
    parts = study.design.parts
    assert parts["C1"].capacitance == 1e-9
    assert parts["L1"].saturation[1] == (4.0, pytest.approx(0.6))
    assert parts["Q1"].sheet.threshold.current == pytest.approx(250e-6)
    assert parts["L2"].coil.diameter == pytest.approx(0.04)
    assert study.design.rails["vdd"].resistance == pytest.approx(0.05)
    assert study.design.leak == pytest.approx(1e-8)
    assert study.states["dark"].values == {
        "LAMP.coupling": 0.05,
        "LAMP.resistance": 100.0,
        "vdd.voltage": 23.0,
    }
    assert study.conditions["hot"].supply == pytest.approx(0.1)
    assert study.conditions["hot"].age == 1000.0
    assert [limit.at_least for limit in study.limits] == [3.0, None]
    assert study.expected_frequency == (6e6, 8e6)
    assert (study.run.units, study.run.seed) == (200, 7)


def test_states_and_conditions_may_be_left_out():
    text = re.sub(r"\[states.*?(?=\[\[limits)", "", GOOD, flags=re.DOTALL)
    study = read_study(text, TABLES)
    assert study.states["normal"].starts_here
    assert study.conditions["room"].ambient == 25.0


def test_every_mistake_is_told_at_once_word_for_word():
    with pytest.raises(StudyError) as caught:
        read_study(BAD, TABLES, "bad.toml")
    assert str(caught.value) + "\n" == TOLD


def test_no_word_of_the_library_beneath_gets_through():
    assert not re.search(r"pydantic|validation error|Input should|type=|https?:", TOLD)


@pytest.mark.parametrize(
    ("text", "told"),
    [
        ("title = \\n", "line 1, column 9: expected valid TOML, got Invalid value."),
        ("title = ", "end of document: expected valid TOML, got Invalid value."),
        ('title = "a"\ntitle = "b"', "expected valid TOML, got Cannot overwrite a value."),
        ("[parts.C1\n", "line 1, column 10: expected valid TOML"),
    ],
)
def test_syntax_errors_have_a_line_and_a_cure(text, told):
    (sentence,) = sentences_of(text)
    assert told in sentence
    assert "Texts stand in quotes" in sentence


def replaced(old, new):
    assert old in GOOD
    return GOOD.replace(old, new, 1)


@pytest.mark.parametrize(
    ("old", "new", "told"),
    [
        ('nets = ["p", "ga"]', 'nets = ["p", "gaa"]', 'net "gaa" with this one connection'),
        ('nets = ["p", "ga"]', 'nets = ["p", "gaa"]', "Did you mean ga?"),
        (
            'kind = "resistor"\nnets = ["vb", "ga"]\nresistance = "3.3 kohm"',
            'kind = "capacitor"\nnets = ["vb", "ga"]\ncapacitance = "3.3 nF"',
            '[parts.Q1] gate: expected a path for direct current to a rail or to gnd, got net "ga"',
        ),
        ('net = "vb"', 'net = "gnd"', 'got "gnd", held by ground already'),
        (
            'resistance = "50 mohm"\n\n[rails.bias]\nnet = "vb"',
            '\n[rails.bias]\nnet = "gate_bias"',
            '[rails.bias] net: expected a net that parts join, got "gate_bias"',
        ),
        ("coupling = 0.3", "coupling = 1.0", "expected a number above -1 and below 1, got 1.0"),
        ('coil = "L2"', 'coil = "L9"', '[parts.LAMP] coil: expected an inductor, got "L9"'),
        ("starts_here = true", "", "expected a state with starts_here = true"),
        (
            'title = "Push',
            'kind = "driven"\ntitle = "Push',
            'expected a part of kind drive, since kind = "driven"',
        ),
        ("[states.full]", '[states."a/b"]', 'got the name "a/b"'),
        ("[conditions.room]", "[conditions]\nroom = 3", "expected a table [conditions.room]"),
        ("share_of_rating = 0.7", "share_of_rating = 1.2", "expected a share of 0 to 1, got 1.2"),
        (
            'voltage = "500 V", ',
            "",
            "expected the rating that limits #2 compares",
        ),
        (
            'figure = "start_margin"\nat_least = "3 dB"',
            'figure = "frequency"\nat_least = "7 MHz"\nat_most = "6 MHz"',
            "[limits #1] at_least: expected less than at_most",
        ),
        ('at_least = "3 dB"', 'at_least = "3 V"', "'V' measures something else"),
        (
            'figure = "start_margin"\nat_least = "3 dB"',
            'figure = "start_margin"\nshare_of_rating = 0.5',
            "no rating belongs to this figure",
        ),
        ('figure = "start_margin"', 'figure = "Q1.drain_peak"', "Did you mean drain_peak?"),
        ('resistance = "60 mohm"', "", "expected either resistance or q, got neither"),
        ('q_frequency = "7 MHz"', "", "expected q_frequency beside q"),
        ('[["2 A", "95 %"], ["4 A", "60 %"]]', '[["4 A", "60 %"], ["2 A", "95 %"]]', "rise"),
        ('[["2 A", "95 %"], ["4 A", "60 %"]]', '[["2 A"]]', "expected 2 items"),
    ],
)
def test_one_mistake_is_told_with_its_place(old, new, told):
    assert any(told in sentence for sentence in sentences_of(replaced(old, new)))


def test_one_slip_in_a_net_is_told_once():
    """A misspelt net must not drag a trail of other complaints behind it."""
    told = problems_of(replaced('nets = ["a", "gnd"]', 'nets = ["aa", "gnd"]'))
    assert [problem.table for problem in told] == ["parts.C1"]


def added(ref, kind, nets, *lines):
    return "\n".join([f"[parts.{ref}]", f'kind = "{kind}"', f"nets = {nets}", *lines, ""])


def test_a_net_between_capacitors_is_legal():
    text = replaced('nets = ["a", "p"]', 'nets = ["x", "p"]')
    text += added("C9", "capacitor", '["a", "x"]', 'capacitance = "500 pF"')
    assert "C9" in read_study(text, TABLES).design.parts


def test_lossless_loops_have_no_direct_current():
    text = replaced('resistance = "50 mohm"', "")
    text = text.replace('resistance = "60 mohm"', 'resistance = "0 ohm"', 1)
    assert read_study(text, TABLES)  # one lossless choke from an ideal rail is no loop
    coil = ('inductance = "1 uH"', 'resistance = "0 ohm"')
    (sentence,) = sentences_of(text + added("L9", "inductor", '["a", "gnd"]', *coil))
    assert "loop of lossless inductors" in sentence


def test_parts_joined_to_nothing_else():
    island = [added(ref, "resistor", '["x", "y"]', 'resistance = "1 kohm"') for ref in ("R8", "R9")]
    told = sentences_of(GOOD + "".join(island))
    assert len(told) == 2
    assert all("nets that lead to a rail or to gnd" in sentence for sentence in told)


def test_couplings_that_are_impossible_together():
    coil = ('inductance = "1 uH"', "q = 100", 'q_frequency = "7 MHz"')
    text = GOOD
    for ref in ("L7", "L8", "L9"):
        text += added(ref, "inductor", '["a", "ga"]', *coil)
    for one, other in (("L7", "L8"), ("L8", "L9"), ("L7", "L9")):
        text += f'[parts.K{one}{other}]\nkind = "coupling"\ninductors = ["{one}", "{other}"]\n'
        text += f"coupling = {-0.9 if (one, other) == ('L7', 'L9') else 0.9}\n"
    (sentence,) = sentences_of(text)
    assert "couplings that real coils can have together" in sentence
    assert read_study(text.replace("-0.9", "0.9"), TABLES)


def test_files_that_cannot_be_read(tmp_path):
    with pytest.raises(StudyError, match="Check the name"):
        load_study(tmp_path / "none.toml")
    file = tmp_path / "latin.toml"
    file.write_bytes(b'title = "\xe4"')
    with pytest.raises(StudyError, match="UTF-8"):
        load_study(file)


def test_a_mark_before_the_first_letter_is_no_mistake(tmp_path):
    """Some editors begin every UTF-8 file with one."""
    study = tmp_path / "stage.toml"
    study.write_text(GOOD.replace('spread = "c-5"', ""), encoding="utf-8-sig")
    assert open_study(study).text.startswith(GOOD[:20])


def test_what_else_lies_beside_the_study(tmp_path):
    (tmp_path / "old.toml").mkdir()
    (tmp_path / "lost.toml").symlink_to(tmp_path / "nowhere")
    study = tmp_path / "stage.toml"
    study.write_text(GOOD.replace('spread = "c-5"', ""), encoding="utf-8")
    assert open_study(study).study.title


def test_tables_in_the_study_itself_are_told_once(tmp_path):
    study = tmp_path / "stage.toml"
    good = GOOD.replace('spread = "c-5"', "")
    study.write_text(f"# [table.x] in a remark is none\n{good}", encoding="utf-8")
    assert open_study(study).study.title
    study.write_text(f"{good}\n[table.mine]\ntitle = 'x'\n", encoding="utf-8")
    with pytest.raises(StudyError, match="to another file beside the study") as caught:
        open_study(study)
    assert len(caught.value.problems) == 1


def test_tables_lie_beside_the_study(tmp_path):
    (tmp_path / "stage.toml").write_text(GOOD, encoding="utf-8")
    with pytest.raises(StudyError, match="a known spread table"):
        load_study(tmp_path / "stage.toml")
    (tmp_path / "mine.toml").write_text(
        '[table.c-5]\ntitle = "Mine"\nfor = "capacitor"\nbasis = "guess"\nsource = "a test"\n'
        '[table.c-5.capacitance]\ntolerance = {law = "uniform", half_width = "5 %"}\n',
        encoding="utf-8",
    )
    opened = open_study(tmp_path / "stage.toml")
    assert opened.tables["c-5"].title == "Mine"
    assert opened.text == GOOD
    assert load_study(str(tmp_path / "stage.toml")) == opened.study


LINES = GOOD.splitlines()
KEYED = [number for number, line in enumerate(LINES) if " = " in line]


def read_or_refused(number, line):
    """The good study with one line spoilt is a study or a StudyError, nothing else."""
    with contextlib.suppress(StudyError):
        read_study("\n".join([*LINES[:number], line, *LINES[number + 1 :]]), TABLES)


@settings(max_examples=60, deadline=None)
@given(
    st.integers(0, len(LINES) - 1),
    st.sampled_from(["", "x = 1", "3", '"', '"a" = {}', "[[a]]", "[parts]", "[limits]"]),
)
def test_any_line_may_be_spoilt(number, line):
    read_or_refused(number, line)


@settings(max_examples=60, deadline=None)
@given(
    st.sampled_from(KEYED),
    st.sampled_from(["{}", "[]", "true", "-3", "0", "nan", '""', '"5 V"', '"gnd"', "[[1]]"]),
)
def test_any_value_may_be_spoilt(number, value):
    read_or_refused(number, f"{LINES[number].split(' = ')[0]} = {value}")


def test_mistakes_of_every_sort_are_told_together(tmp_path):
    """Slips in laws, pairs and reels are told although others keep the study from being read."""
    (tmp_path / "mine.toml").write_text(
        '[table.c-5]\ntitle = "Mine"\nfor = "capacitr"\nbasis = "guess"\nsource = "a test"\n'
        '[table.c-5.capacitance]\ntolerance = {law = "unifrm", half_width = "5 %"}\n'
        "ageing = 3\n",
        encoding="utf-8",
    )
    lines = ['capacitance = "1 nF"', 'spread = "film-pp-5pct"', 'matched_with = "C9"']
    lines += ['match = {capacitance = "1 %"}']
    text = GOOD + added("CX", "capacitor", '["vdd", "gnd"]', *lines)
    text = re.sub(r"seed = \d+", "seed = -1", text)
    (tmp_path / "stage.toml").write_text(text, encoding="utf-8")
    with pytest.raises(StudyError) as caught:
        open_study(tmp_path / "stage.toml")
    told = [(problem.table, problem.key) for problem in caught.value.problems]
    assert ("parts.CX", "matched_with") in told
    assert ("run", "seed") in told
    assert ("table.c-5", "for") in told
    assert ("table.c-5.capacitance", "tolerance.law") in told
    assert ("table.c-5.capacitance", "ageing.law") in told
