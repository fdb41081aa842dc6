"""Keys of rails in studies, recorded ramps, and supplies in words."""

from __future__ import annotations

import re

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.quick_study import text
from tolsim import StudyError
from tolsim.answers.provenance import provenance_of
from tolsim.answers.supply_words import supply_entries, supply_words
from tolsim.circuit.supply_ramp import profile_of
from tolsim.design import Bounce, Dip, Rail
from tolsim.run import keep_recordings
from tolsim.study import StudyFile, read_study
from tolsim.study.recording import read_recording
from tolsim.study.supplies import Recordings

HEAD = "[rails.vdd]\n"


TEXT = re.sub(r"^(spread|reel) = .*\n", "", text(), flags=re.MULTILINE)


def opened(folder, keys):
    """The quick study with more keys for its first rail."""
    recordings = Recordings(folder)
    study = read_study(TEXT.replace(HEAD, f"{HEAD}{keys}\n"), {}, "stage.toml", recordings)
    return StudyFile(study, TEXT, {}, recordings=recordings.read)


def mistakes(folder, keys):
    with pytest.raises(StudyError) as caught:
        opened(folder, keys)
    return [problem.sentence() for problem in caught.value.problems]


def test_all_keys_of_a_supply_are_read(tmp_path):
    keys = """
ramp = "smooth"
ramp_time = "5 ms"
delay = "20 ms"
current_limit = "3 A"
foldback = "40 %"
inductance = "800 nH"
bulk_capacitance = "470 uF"
bulk_resistance = "60 mohm"
dip = {at = "200 ms", depth = "60 %", length = "1 ms"}
bounce = {count = 3, period = "1 ms", open_share = "30 %"}
"""
    rail = opened(tmp_path, keys).study.design.rails["vdd"]
    assert rail.dip == Dip(at=0.2, depth=0.6, length=1e-3)
    assert rail.bounce == Bounce(count=3, period=1e-3, open_share=0.3)
    words = supply_words(rail)
    assert "limited to 3 A (1.2 A at short circuit)" in words
    assert "cable of 800 nH, 470 uF at the net with 60 mohm in series" in words
    assert "rises smoothly in 5 ms, 20 ms after power-on; contact bounces 3 times" in words
    assert words.endswith("dips to 40 % for 1 ms, 200 ms after power-on")


def test_words_of_the_simplest_supply():
    assert supply_words(Rail(net="vdd", voltage=24.0)) == "24 V, ideal; rises at once"


def test_every_mistake_of_a_supply_is_told_at_once(tmp_path):
    keys = """
ramp = "step"
ramp_time = "5 ms"
foldback = "40 %"
bulk_resistance = "60 mohm"
delay = "-1 ms"
dip = {at = "2 ms", depth = 3, length = "1 ms"}
bounce = {count = 0, period = "1 ms", openshare = 0.2}
ramp_file = "scope.csv"
"""
    told = mistakes(tmp_path, keys)
    for part in (
        'ramp_time: expected no ramp_time with this ramp, got ramp = "step". Drop it',
        "current_limit: expected current_limit beside foldback",
        "bulk_capacitance: expected bulk_capacitance beside foldback",
        "bulk_resistance: expected bulk_capacitance beside it",
        "delay: expected a duration of 0 or 1 ps to 1 Ms",
        "[rails.vdd.dip] depth: expected a share of 0 to 1",
        "[rails.vdd.bounce] count: expected a whole number",
        "openshare: expected only keys known here, got openshare = 0.2. Did you mean open_share?",
        'ramp: expected ramp = "csv" beside ramp_file. Drop one of them.',
    ):
        assert any(part in sentence for sentence in told), (part, told)


@pytest.mark.parametrize(
    ("keys", "sentence"),
    [
        ('ramp = "linear"', "ramp: expected ramp_time beside it, for a linear ramp"),
        ('ramp = "csv"', 'ramp_file: expected ramp_file beside ramp = "csv"'),
        ('ramp = "ramp"', 'ramp: expected "step", "linear", "smooth"'),
        ('bulk_capacitance = "1 mF"', "bulk_capacitance: expected one of resistance, inductance"),
        ('ramp_file = "no.csv"', 'ramp_file: expected a file of time and voltage, got "no.csv"'),
        ('ramp_file = "../a.csv"', "ramp_file: expected a file in the folder of the study"),
        ('ramp_file = "summary.json"', "ramp_file: expected a text file ending in .csv"),
        ('ramp_points = [["0 s", 0], ["1 s", 0.5]]', "expected 0 at the first point and 1 at the"),
        ('ramp_points = [["2 s", 0], ["1 s", 1]]', "expected two or more points, one after the"),
        ('ramp_points = [[0, 0], ["1 s", 1]]', "expected a duration of 0 or 1 ps"),
    ],
)
def test_a_mistake_says_what_is_expected(tmp_path, keys, sentence):
    told = mistakes(tmp_path, keys)
    assert len(told) == 1, told
    assert sentence in told[0]


def test_points_of_the_study_are_the_ramp(tmp_path):
    points = 'ramp_points = [["0 s", "0 %"], ["1 ms", "120 %"], ["3 ms", "100 %"]]'
    rail = opened(tmp_path, points).study.design.rails["vdd"]
    assert profile_of(rail).at(np.array([0.5e-3, 1e-3, 2e-3])) == pytest.approx([0.6, 1.2, 1.1])
    assert supply_words(rail) == "24 V, ideal; rises as drawn, in 3 ms"


SCOPES = {
    "points": "time,volts\n{unit},V\n" + "\n".join(f"{k},{v}" for k, v in enumerate("013555555")),
    "commas": "# trace of March\nt [{unit}];U (V)\n"
    + "\n".join(f"{k},0;{v},00" for k, v in enumerate("013555555")),
    "tabs": "sample\tt in {unit}\tCH1 [mV]\n"
    + "\n".join(f"{k}\t{k}\t{v}e3" for k, v in enumerate("013555555")),
    "blanks": "\n".join(f"{k}{{unit}} {v},0" for k, v in enumerate("013555555")),
}


@pytest.mark.parametrize("manner", SCOPES)
@pytest.mark.parametrize(("unit", "second"), [("ms", 1e-3), ("us", 1e-6), ("s", 1.0)])
def test_recordings_are_read_as_instruments_write_them(tmp_path, manner, unit, second):
    (tmp_path / "scope.csv").write_text(SCOPES[manner].format(unit=unit), encoding="utf-8")
    ramp = profile_of(opened(tmp_path, 'ramp_file = "scope.csv"').study.design.rails["vdd"])
    assert ramp.at(np.array([0.0, 1, 1.5, 2, 3, 8]) * second) == pytest.approx(
        [0.0, 0.2, 0.4, 0.6, 1.0, 1.0]
    )
    assert ramp.end == pytest.approx(8 * second)


@given(st.lists(st.floats(-0.5, 0.5), min_size=4, max_size=60), st.floats(0.5, 400.0))
def test_a_recording_gives_its_own_shape_back(tmp_path_factory, wiggles, volts):
    """Whatever was recorded, the ramp is it within the fineness, as share of the final voltage."""
    folder = tmp_path_factory.mktemp("scope")
    times = np.arange(len(wiggles) * 3) * 1e-4
    levels = np.concatenate([[0.0], np.cumsum(np.abs(wiggles))[1:], np.ones(len(wiggles) * 2)])
    rows = [
        f"{t:.6f};{u:.9f}".replace(".", ",") for t, u in zip(times, volts * levels, strict=True)
    ]
    (folder / "scope.csv").write_text("\n".join(["time [s];U [V]", *rows]), encoding="utf-8")
    recording = read_recording(folder, "scope.csv", lambda _, mistake: pytest.fail(str(mistake)))
    rail = Rail(net="vdd", voltage=24.0, ramp_points=recording.points)
    assert profile_of(rail).at(times) == pytest.approx(levels, abs=1.1e-3)


def test_every_bad_line_of_a_recording_is_told(tmp_path):
    lines = ["t [ms];U [V]", "0;0", "1;x", "2;3", "2;4", "3", "4;5", "5;5", "6;5"]
    (tmp_path / "scope.csv").write_text("\n".join(lines), encoding="utf-8")
    told = mistakes(tmp_path, 'ramp_file = "scope.csv"\nfoldback = 2')
    for part in (
        'scope.csv [line 3]: expected a number, got "x"',
        "scope.csv [line 5]: expected a time after that of line 4, got 0.002 s",
        "scope.csv [line 6]: expected time and voltage, got 1 column",
        "foldback: expected a share of 0 to 1",
    ):
        assert any(part in sentence for sentence in told), (part, told)


@pytest.mark.parametrize(
    ("text", "sentence"),
    [
        ("0;0\n1;2\n2;5\n3;5\n", "a unit of time, got none. Write the unit into the head"),
        ("t [s];U\n0;0\n1;2\n2;4\n3;7\n", "an end within 5 % of the final voltage"),
        ("t [s];U\n0;4\n1;5\n2;5\n3;5\n", "a first reading near 0 V, got 80 % of the final"),
        ("t [s];A [V];B [V]\n0;0;0\n1;5;0\n", "one column of voltage, got 2 columns of voltage"),
        ("only words\n", "lines of time and voltage, got none"),
        ("t [s];U\n0;0\n1;5\n", "at least 4 readings, got 2"),
    ],
)
def test_a_recording_that_is_no_ramp(tmp_path, text, sentence):
    (tmp_path / "scope.csv").write_text(text, encoding="utf-8")
    told = mistakes(tmp_path, 'ramp_file = "scope.csv"')
    assert len(told) == 1, told
    assert sentence in told[0]


def test_a_recording_is_hashed_with_what_a_run_is_made_from(tmp_path):
    (tmp_path / "scope.csv").write_text("t [ms];U\n0;0\n1;2\n2;5\n3;5\n", encoding="utf-8")
    study = opened(tmp_path, 'ramp_file = "scope.csv"')
    first = provenance_of(study)["recordings"]
    (tmp_path / "scope.csv").write_text("t [ms];U\n0;0\n1;3\n2;5\n3;5\n", encoding="utf-8")
    second = provenance_of(opened(tmp_path, 'ramp_file = "scope.csv"'))["recordings"]
    assert first.keys() == second.keys() == {"scope.csv"}
    assert first != second
    assert "recordings" not in provenance_of(opened(tmp_path, ""))
    assert supply_entries(study.study.design.rails)[0]["words"].endswith(
        "rises as recorded in scope.csv"
    )


def test_results_keep_the_recordings_beside_the_study(tmp_path):
    """What a results folder holds reads as the same study."""
    (tmp_path / "in" / "traces").mkdir(parents=True)
    (tmp_path / "in" / "traces" / "scope.csv").write_bytes(b"t [ms];U\xb0\n0;0\n1;2\n2;5\n3;5\n")
    keys = 'ramp_file = "traces/scope.csv"'
    first = opened(tmp_path / "in", keys)
    keep_recordings(first, tmp_path / "out")
    second = opened(tmp_path / "out", keys)
    assert second.study == first.study
    assert provenance_of(second)["recordings"] == provenance_of(first)["recordings"]
