"""Switching on: maps, contracts and repeated starts of a stage whose answers are known.

The stage is the quick push-pull without spread behind a supply of 1 ohm.  A bias below the
threshold (3.4 V) gives transistors that do not conduct: nothing grows.  4.2 V starts.  At 6 V the
two transistors would draw 2 x 11/2 (6 - 3.4)^2 = 74 A from a supply that can give 24 V / 1 ohm:
they sit in their resistive region, where there is no gain, and the stage is latched.
"""

from __future__ import annotations

import re
from functools import cache

import numpy as np
import pytest

from tests.quick_study import text
from tolsim import StudyError
from tolsim.answers.lines import start_lines
from tolsim.evaluation import Plan, built
from tolsim.nominals import prepare
from tolsim.report.start_section import start_section, write_starts
from tolsim.spread.sampling import draw, factors
from tolsim.starts.attempt import FATE_NAMES, running, stretched_ramps, switch_units_on
from tolsim.starts.grid import in_cell, setting_of, start_map
from tolsim.study import read_study

PLAIN = re.sub(r"^(spread|reel) = .*\n", "", text(units=4), flags=re.MULTILINE).replace(
    'voltage = "24 V"', 'voltage = "24 V"\nresistance = "1 ohm"'
)
ASKED = """
[start_map]
across = {what = "vb.voltage", values = ["2.5 V", "4.2 V", "6 V"]}
down = {what = "ramp_time", rails = ["vdd"], values = ["10 us", "1 ms"]}
units = 2
"""


@cache
def plan():
    """The stage, ready for its units."""
    study = read_study(PLAIN + ASKED, {}, "stage.toml")
    return Plan(study, {}, factors(study, {}), prepare(study, {}, jobs=1))


@cache
def found():
    return start_map(plan(), plan().study.starts.start_map, jobs=1)


def mistakes(asked):
    with pytest.raises(StudyError) as caught:
        read_study(PLAIN + asked, {}, "stage.toml")
    return [problem.sentence().removeprefix("stage.toml ") for problem in caught.value.problems]


def test_without_spread_every_cell_is_all_or_nothing():
    """Off below the threshold, running above it, latched where the supply cannot follow."""
    wanted = {2.5: "dies away", 4.2: "starts", 6.0: "latched"}
    assert len(found()["cells"]) == 6
    for cell in found()["cells"]:
        shares = {one["outcome"]: one["share"] for one in cell["outcomes"]}
        assert shares.pop(wanted[cell["across"]]) == 1.0
        assert not any(shares.values())
        assert (cell["start_time"] is not None) == (cell["across"] == 4.2)
    # Clopper-Pearson for 2 of 2: 0.025 ** (1 / 2)
    low = found()["cells"][1]["outcomes"][0]["low"]
    assert low == pytest.approx(0.025**0.5)


def test_a_map_is_its_cells_one_after_the_other():
    """Shared orbits and workers change nothing."""
    asked, own = plan().study.starts.start_map, plan()
    draws = built(own, draw(own.factors, own.study.run.seed, 0, asked.units))
    for cell, entry in zip([(0, 1), (1, 1), (2, 0)], (3, 4, 2), strict=True):
        name = (asked.condition, asked.state)
        units = running(own, name, draws, setting_of(asked, cell))
        alone = in_cell(own, asked, cell, units)
        outcomes = found()["cells"][entry]["outcomes"]
        assert {FATE_NAMES[fate] for fate in alone.fate} == {
            one["outcome"] for one in outcomes if one["units"]
        }
        if alone.starts.all():
            assert found()["cells"][entry]["start_time"] == np.median(alone.start_time)


def test_units_in_a_batch_are_switched_on_as_if_alone():
    """A slow ramp beside a fast one: each is followed in its own way."""
    own = plan()
    draws = built(own, draw(own.factors, 5, 0, 2))
    units = running(own, ("room", "lit"), draws, {})
    ramps = stretched_ramps(own.study.design, 2, {"vdd": np.array([10e-6, 1e-3])})
    both = switch_units_on(units, ramps)
    for k in range(2):
        one = np.array([k])
        alone = switch_units_on(units.take(one), ramps.take(one))
        assert alone.fate[0] == both.fate[k]
        assert alone.start_time[0] == both.start_time[k]


def test_stretched_ramps_leave_the_other_rails_alone():
    ramps = stretched_ramps(plan().study.design, 3, {"vb": np.array([1e-3, 2e-3, 1e-3])})
    assert ramps.times[:, 0, -1] == pytest.approx([1e-9] * 3)
    assert ramps.times[:, 1, -1] == pytest.approx([1e-3, 2e-3, 1e-3])


def test_a_map_in_words_fits_the_terminal():
    lines = start_lines({"start_map": found()})
    assert max(map(len, lines)) <= 80
    told = " ".join(" ".join(lines).split())
    assert "same 2 units were switched on under 6 pairs of vb.voltage and ramp time of vdd" in told
    assert "All start in 2 of the 6 cells. Fewest start at vb.voltage 2.5 V" in told
    assert "0 % D" in told
    assert "D dies away, L latched" in told
    assert start_lines({"start_map": {}}) == []


def test_the_picture_says_what_the_cells_say(tmp_path):
    section = start_section({"start_map": found()})["map"]
    drawn = str(section["chart"])
    assert drawn.count("100 %") == 2
    assert drawn.count(">dies<") + drawn.count(">latched<") == 4
    assert {one["name"] for one in section["key"]} == {"starts", "latched", "dies away"}
    assert len(section["rows"]) == 6
    answers, picture = write_starts({"start_map": found()}, tmp_path)
    assert answers.exists()
    assert picture.read_text().startswith("<svg xmlns=")


def test_every_mistake_of_a_map_is_told_at_once():
    told = mistakes("""
[start_map]
across = {what = "ramptime", rails = ["vddd"], values = ["100 us"]}
down = {what = "ambient", values = ["25 degC", "25 degC", "-300 degC"]}
units = 0
state = "lid"
""")
    places = ["state", "units", "across] rails", "across] what", "down] values"]
    assert all(any(place in one for one in told) for place in places)
    assert any("Did you mean vdd?" in one for one in told)
    assert any("Did you mean ramp_time?" in one for one in told)
    assert len(told) == 6


def test_both_sides_of_a_map_set_different_things():
    axis = '{what = "ramp_time", values = ["1 ms"]}'
    told = mistakes(f"[start_map]\nacross = {axis}\ndown = {axis}\n")
    assert told == [
        '[start_map.down] what: expected something else than across sets, got "ramp_time".'
    ]
    first, second = (
        axis.replace("values", 'rails = ["vdd"], values'),
        axis.replace("values", 'rails = ["vb"], values'),
    )
    study = read_study(f"{PLAIN}[start_map]\nacross = {first}\ndown = {second}\n", {}, "s.toml")
    assert study.starts.start_map.down.rails == ("vb",)
