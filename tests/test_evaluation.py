"""Units of a study on their way through every case: the same whatever is asked for beside them."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import quick_study
from hypothesis import given, settings
from hypothesis import strategies as st

from tolsim import building
from tolsim.circuit.shooting import TOLERANCE
from tolsim.evaluation import Plan, evaluate
from tolsim.nominals import prepare
from tolsim.run import run_study
from tolsim.spread.part_values import nominal_values, part_values
from tolsim.spread.sampling import draw, factors
from tolsim.study import StudyFile, open_study

CONDITIONS = (("room", 25.0, 0.0), ("warm", 60.0, -5.0))


def written(folder: Path, text: str) -> Path:
    """A study file with coarse steps."""
    path = folder / "quick.toml"
    path.write_text(text.replace("steps_per_cycle = 128", "steps_per_cycle = 64"), encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def opened(tmp_path_factory) -> StudyFile:
    """The quick study under two conditions."""
    place = tmp_path_factory.mktemp("quick")
    return open_study(written(place, quick_study.text(conditions=CONDITIONS)))


@pytest.fixture(scope="module")
def plan(opened) -> Plan:
    """Ready to evaluate any unit by shooting."""
    cases = prepare(opened.study, opened.tables)
    return Plan(opened.study, opened.tables, factors(opened.study, opened.tables), cases)


@settings(max_examples=15, deadline=None)
@given(first=st.integers(0, 10_000), count=st.integers(1, 20), unit=st.integers(0, 19))
def test_parts_of_a_unit_do_not_depend_on_how_many_units_there_are(opened, first, count, unit):
    """Unit k has the same part values to the last bit in a batch of any size and beginning."""
    unit %= count
    names = factors(opened.study, opened.tables)
    many, one = (
        part_values(opened.study, opened.tables, "warm", "lit", draw(names, 5, begin, size))
        for begin, size in ((first, count), (first + unit, 1))
    )
    assert many.keys() == one.keys()
    for key, values in many.items():
        assert values[unit] == one[key][0], key


@pytest.mark.parametrize(("first", "sizes"), [(0, (1, 2, 3)), (777, (4, 1, 1))])
def test_chunks_give_the_rows_of_one_chunk(plan, first, sizes):
    """Six units in one chunk, or in three of any sizes: same words, same numbers."""
    whole = evaluate(plan, first, 6, 6)
    begins = first + np.cumsum([0, *sizes[:-1]])
    parts = [evaluate(plan, int(a), n, n) for a, n in zip(begins, sizes, strict=True)]
    order = ["condition", "state", "unit"]
    ours = whole.rows.sort_values(order, ignore_index=True)
    theirs = pd.concat([part.rows for part in parts]).sort_values(order, ignore_index=True)
    assert ours["unit"].tolist() == 2 * list(range(first, first + 6))
    residual = ["orbit_residual"]  # what is left of an error, not a property of a unit
    pd.testing.assert_frame_equal(
        ours.drop(columns=residual), theirs.drop(columns=residual), rtol=TOLERANCE, atol=1e-12
    )
    drawn = pd.concat([part.factors for part in parts], ignore_index=True)
    pd.testing.assert_frame_equal(whole.factors, drawn, check_exact=True)


def test_surplus_units_are_dropped(plan):
    """Two of a block of four have the bits of the block of four."""
    few, many = evaluate(plan, 40, 2, 4), evaluate(plan, 40, 4, 4)
    rows = many.rows[many.rows["unit"] < 42].reset_index(drop=True)
    pd.testing.assert_frame_equal(few.rows, rows, check_exact=True)


@pytest.mark.parametrize(("share", "expected"), [(0.9, 1.0), (0.4, 0.0)])
def test_without_spread_the_yield_is_all_or_nothing(tmp_path, monkeypatch, share, expected):
    """A study whose parts do not spread passes with every unit or with none: all are nominal."""
    monkeypatch.setattr(building, "BLOCK", 3)
    text = quick_study.text(units=6, drain_share=share)
    plain = [line for line in text.splitlines() if not line.startswith(("spread", "reel"))]
    path = written(tmp_path, "\n".join(plain))
    study = open_study(path)
    assert factors(study.study, study.tables) == ()
    nominal = nominal_values(study.study, study.tables, "room", "lit")
    values = part_values(study.study, study.tables, "room", "lit", draw((), 1, 0, 2))
    assert {key: both.tolist() for key, both in values.items()} == {
        key: [one[0], one[0]] for key, one in nominal.items()
    }
    results = run_study(path, jobs=1)
    found = results.yield_
    assert (found["estimate"], found["units"], found["undecided"]) == (expected, 6, 0)
    for entry in results.summary["figures"]:
        if entry["figure"] in {"orbit_residual", "energy_balance"}:  # errors
            continue
        assert entry["p50"] == pytest.approx(entry["nominal"], rel=TOLERANCE, abs=1e-9), entry
        name = f"{entry['part']}.{entry['figure']}" if entry["part"] else entry["figure"]
        known = results.units[name].dropna()  # a share of the units is switched on in time
        assert np.ptp(known) <= 1e-9 * abs(entry["nominal"]), name
