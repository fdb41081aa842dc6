"""The story of one power-on: its numbers are those of the run, and its remedies really help."""

from __future__ import annotations

import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from circuits import circuit_a
from stages import units_of

from tolsim.answers.unit_power_on import parting_sentence, power_on_story, remedy_sentences
from tolsim.circuit.nominal import find_nominal
from tolsim.circuit.poweron.fates import Fate
from tolsim.circuit.poweron.knobs import Knob, knobs_of
from tolsim.circuit.poweron.otherwise import Bench, nearest, remedies
from tolsim.circuit.poweron.ramps import profiles_of, ramps_of
from tolsim.circuit.poweron.switch_on import switch_on
from tolsim.design import Design, Rail
from tolsim.figures import measure_orbits
from tolsim.figures.power_on import expected_of
from tolsim.figures.track import Track, track_of
from tolsim.parts import Potentiometer
from tolsim.report.power_on_picture import Beside, Panel, draw_tracks

FOLDBACK = {"resistance": 0.5, "current_limit": 4.0, "foldback": 0.4, "ramp_time": 2e-6}


@pytest.fixture(scope="module")
def healthy() -> Bench:
    """Reference circuit A with ideal rails."""
    nominal = find_nominal(units_of(circuit_a()), 128)
    current = measure_orbits(nominal.case, nominal.solution)["supply_current"]
    expected = expected_of(nominal, nominal.solution, current)
    return Bench(nominal.case, expected, nominal.shift, profiles_of(circuit_a()))


def fed(healthy: Bench, bias: float, **rail: float) -> Bench:
    """The same circuit with another bias and a main supply of its own."""
    main = Rail(net="vdd", voltage=24.0, **rail)
    design = Design(
        parts=circuit_a().parts, rails={"vdd": main, "vb": Rail(net="vb", voltage=bias)}
    )
    return replace(healthy, case=units_of(design), profiles=profiles_of(design))


def way_of(bench: Bench) -> Track:
    return track_of(bench.case, bench.expected, bench.shift, bench.profiles)


@pytest.fixture(scope="module")
def stuck(healthy: Bench) -> Bench:
    """A unit that its supply's foldback keeps from starting."""
    return fed(healthy, 4.2, **FOLDBACK)


def test_a_unit_that_starts_tells_when_and_its_peaks(healthy: Bench) -> None:
    track = way_of(healthy)
    assert track.fate == Fate.STARTS
    story = power_on_story(healthy.case.design, track)
    told = float(re.search(r"swing after ([\d.]+) us", story[0]).group(1))
    crossed = track.time[np.argmax(track.swing >= 0.9 * track.wanted)]
    assert told * 1e-6 == pytest.approx(crossed, rel=5e-3)
    peak = float(re.search(r"QA drain peaks at ([\d.]+) V", story[1]).group(1))
    assert peak == pytest.approx(track.high["QA:ds"].max(), rel=5e-3)


def test_the_moment_all_gates_are_on_is_that_of_the_run(stuck: Bench) -> None:
    """Told numbers against the envelopes, and the current's slope against its finite difference."""
    track = way_of(stuck)
    assert track.fate != Fate.STARTS
    place = track.all_on
    assert place is not None
    before, here = place - 1, place
    gates = [track.low["QA:gs"], track.low["QB:gs"]]
    volts = 3.4
    assert all(low[here] > volts for low in gates)
    assert not all(low[before] > volts for low in gates)
    text = " ".join(power_on_story(stuck.case.design, track))
    time = float(re.search(r"At ([\d.]+) us every gate stays", text).group(1))
    assert time * 1e-6 == pytest.approx(track.time[here], rel=5e-3)
    current, slope = re.search(r"LA current ([\d.]+) mA rising ([\d.]+) mA/us", text).groups()
    middle = 0.5 * (track.high["LA"] + track.low["LA"])
    assert float(current) * 1e-3 == pytest.approx(middle[here], rel=5e-3)
    span = track.time[here + 4] - track.time[here - 4]
    rough = (middle[here + 4] - middle[here - 4]) / span
    assert float(slope) * 1e3 == pytest.approx(rough, rel=0.1)


def test_a_remedy_helps_in_a_run_of_its_own(stuck: Bench, healthy: Bench) -> None:
    """The changed design, built anew and switched on, starts."""
    found = remedies(stuck)
    best = next(one for one in nearest(found) if one.knob == Knob("bias", "vb"))
    assert best.starts_at is not None
    assert best.own > best.starts_at
    other = fed(healthy, best.starts_at, **FOLDBACK)
    done = switch_on(other.case, ramps_of(other.profiles, 1), other.expected, other.shift)
    assert done.fate[0] == Fate.STARTS
    told = remedy_sentences(found)
    assert told[0].startswith("It would have started")
    assert any(f"{best.starts_at:.3g} V instead of 4.2 V" in line for line in told)


def test_where_nothing_helps_it_is_said_what_was_tried(healthy: Bench) -> None:
    """Gates far above threshold hold the supply down whatever is turned a little."""
    found = remedies(fed(healthy, 7.0, **FOLDBACK))
    assert nearest(found) == []
    assert remedy_sentences(found)[0].startswith("No single change that was tried makes it start")


def test_a_unit_parts_from_another_where_envelopes_first_differ(
    healthy: Bench, stuck: Bench
) -> None:
    own, other = way_of(stuck), way_of(healthy)
    when, name = own.parts_from(other)
    assert name in own.high
    sides = (own.high[name], other.high[name]), (own.low[name], other.low[name])
    gaps = [np.abs(a - np.interp(own.time, other.time, b)) for a, b in sides]
    size = max(np.abs(np.interp(own.time, other.time, b)).max() for _, b in sides)
    assert np.max([gap[own.time < when] for gap in gaps], initial=0.0) <= 0.25 * max(size, 24.0)
    text = parting_sentence(stuck.case.design, own, other, "unit 7")
    assert text.startswith("It parts from unit 7 after ")
    assert own.parts_from(own) is None


def test_knobs_are_found_by_the_nets() -> None:
    """Rails behind chokes are supplies, what reaches gates through resistors is bias."""
    base = circuit_a()
    assert knobs_of(base) == (Knob("ramp", "vdd"), Knob("supply", "vdd"), Knob("bias", "vb"))
    pot = Potentiometer(kind="potentiometer", nets=("gnd", "w", "vb"), resistance=1e4, setting=0.5)
    moved = {
        ref: part.model_copy(update={"nets": ("w", part.nets[1])}) if ref[:2] == "RB" else part
        for ref, part in base.parts.items()
    }
    knobs = knobs_of(Design(parts={**moved, "P1": pot}, rails=base.rails))
    assert knobs[-2:] == (Knob("bias", "vb"), Knob("setting", "P1"))


def test_pictures_are_written(healthy: Bench, stuck: Bench, tmp_path: Path) -> None:
    panels = [Panel("", "swing", "A"), Panel("QA:gs", "QA gate", "V"), Panel("LA", "LA", "A")]
    beside = [Beside("nominal unit", way_of(healthy))]
    png, svg = draw_tracks("Unit 3", way_of(stuck), beside, panels, tmp_path / "unit-3")
    assert png.read_bytes().startswith(b"\x89PNG")
    text = svg.read_text(encoding="utf-8")
    for words in ("QA gate", "threshold of the gate", "every gate above threshold", "nominal unit"):
        assert words in text
