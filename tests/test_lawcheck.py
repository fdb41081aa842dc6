"""The yield under other laws, on a study whose yields are known in closed form.

The stage is replaced by an invented one: its only figure is the sum of two deviations of part
values, and is judged by one limit.  Everything else is the real road.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import quick_study
import small_study

from tolsim import lawcheck, workers
from tolsim.answers.law_words import pieces
from tolsim.answers.unit_files import FrameColumns
from tolsim.design import Limit, Lots
from tolsim.evaluation import Plan
from tolsim.families import families
from tolsim.laws import Fixed, LogNormal, Moved, SortedOut, TruncatedNormal, Uniform
from tolsim.run import run_study
from tolsim.spread.alternatives import ALTERNATIVES, band, replacement
from tolsim.spread.part_values import part_values
from tolsim.spread.sampling import draw, factors
from tolsim.stats.reweighting import Estimate
from tolsim.study import open_study

UNITS = 800
TEXT = b"""
[table.flat]
title = "Capacitor, 5 %"
for = "capacitor"
basis = "guess"
source = "made for a test"
[table.flat.capacitance]
tolerance = {law = "uniform", half_width = "5 %"}
[table.bell]
title = "Inductor, 5 %"
for = "inductor"
basis = "common practice"
source = "made for a test"
[table.bell.inductance]
tolerance = {law = "truncated-normal", half_width = "5 %", sigma = "2 %"}
"""


def plan_of(top, law_check=None, text=TEXT, lots=None):
    """Plan of a study with one capacitor and one inductor, the figure limited to `top`."""
    parts = {"C1": small_study.capacitor(spread="flat"), "L1": small_study.inductor(spread="bell")}
    study = small_study.study(parts)
    limit = Limit(figure="frequency", at_most=top, rule="made for a test")
    run = study.run.model_copy(update={"units": UNITS, "law_check": law_check})
    study = study.model_copy(update={"limits": (limit,), "run": run, "lots": lots})
    tables = small_study.tables(text)
    return Plan(study, tables, factors(study, tables), {})


def invented(plan, draws, count, _block, _numbers=None):
    """Rows of units of a stage whose frequency is 3 dC + dL (relative deviations)."""
    values = part_values(plan.study, plan.tables, "room", "normal", draws)
    figure = 3.0 * (values["C1.capacitance"] / 1e-9 - 1.0) + values["L1.inductance"] / 1e-6 - 1.0
    beyond = figure > plan.study.limits[0].at_most
    return pd.DataFrame(
        {
            "unit": np.arange(count),
            "condition": "room",
            "state": "normal",
            "verdict": np.where(beyond, "fail", "pass"),
            "outcome": "starts",
            "failed_limits": np.where(beyond, "0", ""),
            "status": "settled",
            "way": "shooting",
            "frequency": figure,
        }
    )


def truth(top, law_c, law_l):
    """P(3 dC + dL <= top) by quadrature over the law of dC."""
    u = (np.arange(40_000) + 0.5) / 40_000
    return float(np.mean(law_l.cdf(top - 3.0 * law_c.ppf(u))))


FLAT, BELL = Uniform(-0.05, 0.05), TruncatedNormal(-0.05, 0.05, 0.02)


@pytest.fixture
def checked(monkeypatch):
    """The law check of the invented stage."""
    monkeypatch.setattr(workers, "rows_of", invented)

    def check(top, jobs=1, **keys):
        plan = plan_of(top, **keys)
        draws = draw(plan.factors, plan.study.run.seed, 0, UNITS)
        rows = invented(plan, draws, UNITS, UNITS)
        return lawcheck.law_check(plan, FrameColumns(rows), jobs)

    return check


def test_yields_under_other_laws_agree_with_quadrature(checked):
    top = 0.1
    found = checked(top)
    assert found["done"]
    for entry, other in zip(found["together"], ALTERNATIVES, strict=True):
        laws = (replacement(law, "tolerance", other) for law in (FLAT, BELL))
        assert entry["low"] - 0.01 <= truth(top, *laws) <= entry["high"] + 0.01, entry["law"]
    for family in found["families"]:
        for entry in family["entries"]:
            other = next(other for other in ALTERNATIVES if other.name == entry["law"])
            own = [
                replacement(law, "tolerance", other) if name in family["tables"] else law
                for name, law in (("flat", FLAT), ("bell", BELL))
            ]
            assert entry["estimate"] == pytest.approx(truth(top, *own), abs=0.045), entry["law"]
    methods = {e["method"] for f in found["families"] for e in f["entries"]}
    assert {"weights", "response"} <= methods


def test_units_that_fail_without_breaking_a_limit_are_foretold_by_units_alike(monkeypatch):
    """The stage does not start above dC = 3 %: no figure tells, the neighbours do."""

    def starting(plan, draws, count, block, _numbers=None):
        rows = invented(plan, draws, count, block)
        values = part_values(plan.study, plan.tables, "room", "normal", draws)
        dead = values["C1.capacitance"] > 1.03e-9
        return rows.assign(verdict=np.where(dead, "fail", "pass"), failed_limits="")

    monkeypatch.setattr(workers, "rows_of", starting)
    plan = plan_of(10.0)
    rows = starting(plan, draw(plan.factors, plan.study.run.seed, 0, UNITS), UNITS, UNITS)
    found = lawcheck.law_check(plan, FrameColumns(rows), 1)
    flat = next(family for family in found["families"] if family["tables"] == ["flat"])
    assert {e["method"].split(",")[0] for e in flat["entries"]} <= {"neighbours", "weights"}
    for entry in flat["entries"]:
        other = next(other for other in ALTERNATIVES if other.name == entry["law"])
        known = float(replacement(FLAT, "tolerance", other).cdf(0.03))
        assert entry["estimate"] == pytest.approx(known, abs=0.045), entry["law"]
    assert found["next"]["tables"] == ["flat"]


def test_the_part_that_moves_the_yield_is_named(checked):
    found = checked(0.1)
    assert found["depends"] == "yes"
    assert found["next"]["tables"] == ["flat"]
    assert found["next"]["parts"] == ["C1"]
    assert "flat (C1)" in found["sentence"]
    assert (found["laws"], found["guesses"], found["common_practice"]) == (2, 1, 1)


def test_a_limit_nobody_comes_near_does_not_depend_on_the_law(checked):
    found = checked(0.5)
    assert found["depends"] == "no"
    assert found["next"] is None
    assert found["sentence"].startswith("The verdict does not depend on the law")


def test_the_check_is_made_if_a_law_is_a_guess_or_if_asked_for(checked):
    told = TEXT.replace(b"guess", b"standard").replace(b"common practice", b"datasheet")
    assert checked(0.1, text=told)["reason"] == "no law is a guess"
    assert checked(0.1, text=told, law_check=True)["done"]
    assert checked(0.1, law_check=False)["reason"] == "switched off"


def test_a_measured_law_is_not_doubted(checked):
    found = checked(0.1, text=TEXT.replace(b"guess", b"measured"))
    assert [family["tables"] for family in found["families"]] == [["bell"]]
    for entry, other in zip(found["together"], ALTERNATIVES, strict=True):
        known = truth(0.1, FLAT, replacement(BELL, "tolerance", other))
        assert entry["estimate"] == pytest.approx(known, abs=0.045)
    measured = TEXT.replace(b"guess", b"measured").replace(b"common practice", b"measured")
    assert not checked(0.1, text=measured, law_check=True)["done"]


def test_units_of_a_lot_are_counted_by_lots(checked):
    text = TEXT.replace(b'tolerance = {law = "uniform"', b'lot = {law = "uniform"')
    plain, lots = checked(0.1, text=text), checked(0.1, text=text, lots=Lots(units_per_lot=20))
    for one, other in zip(plain["together"], lots["together"], strict=True):
        assert other["high"] - other["low"] > one["high"] - one["low"]
        assert other["effective_units"] is None


def test_parts_that_depend_on_each_other_are_not_weighted(checked):
    tied = (
        TEXT
        + b"""[table.bell.resistance]
follows = {inductance = 0.8}
tolerance = {law = "truncated-normal", half_width = "20 %", sigma = "8 %"}
"""
    )
    found = checked(0.1, text=tied)
    bell = next(family for family in found["families"] if family["tables"] == ["bell"])
    assert all(entry["effective_units"] is None for entry in bell["entries"])
    known = {e["law"]: e["estimate"] for e in bell["entries"]}
    plain = checked(0.1)
    bell = next(family for family in plain["families"] if family["tables"] == ["bell"])
    for entry in bell["entries"]:
        assert known[entry["law"]] == pytest.approx(entry["estimate"], abs=0.03)


def test_pieces_to_measure_follow_the_stated_formula():
    """A shift of half a half width costs 10 points, 2 points matter: delta = 0.5 x 2 / 10."""
    entries = [{"law": "shifted up", "change": -0.10}, {"law": "uniform", "change": -0.4}]
    own = Estimate(0.9, 0.88, 0.92, 500.0)
    assert pieces(entries, own, 0.6) == 36  # (0.6 / 0.1)^2
    assert pieces([{"law": "shifted up", "change": 0.0}], own, 0.6) == 10


@pytest.mark.parametrize("other", ALTERNATIVES, ids=lambda other: other.name)
def test_alternatives_keep_the_promised_limits(other):
    law = other.within(-0.2, 0.6)
    u = (np.arange(10_000) + 0.5) / 10_000
    values = law.ppf(u)
    assert band(law) == (-0.2, 0.6)
    assert values.min() >= -0.2
    assert values.max() <= 0.6
    if not other.shift:
        assert values.mean() == pytest.approx(0.2, abs=1e-3)
    else:
        assert (values.mean() - 0.2) / 0.4 == pytest.approx(other.shift, abs=0.05)


def test_what_is_replaced_and_what_stays():
    hollow = next(other for other in ALTERNATIVES if other.name == "sorted out")
    assert replacement(FLAT, "lot", hollow) == FLAT
    assert isinstance(replacement(FLAT, "tolerance", hollow), SortedOut)
    assert replacement(Fixed(0.0), "tolerance", hollow) == Fixed(0.0)
    low, high = band(LogNormal(1.0, 0.2))
    assert np.isfinite([low, high]).all()
    assert LogNormal(1.0, 0.2).cdf(high) == pytest.approx(0.995)


def test_tables_that_share_parts_or_reels_make_one_family():
    study = small_study.everything()
    tables = small_study.tables()
    found = families(study, tables, factors(study, tables))
    by_table = {family.tables: family for family in found}
    assert ("dark", "lit") in by_table
    assert by_table[("c-lot",)].parts == ("C1", "C2", "C3")
    assert by_table[("c-lot",)].lots
    assert not by_table[("pot",)].lots
    assert set(by_table[("m-window",)].bases) == {"guess"}


def test_a_real_run_carries_the_check_and_it_is_the_same_on_one_core_and_on_two(
    tmp_path, monkeypatch
):
    monkeypatch.setattr(lawcheck, "FEWEST_UNITS", 6)
    monkeypatch.setattr(lawcheck, "FEWEST_DIRECT", 3)
    path = tmp_path / "quick.toml"
    path.write_text(quick_study.text(units=6), encoding="utf-8")
    opened = open_study(path)
    one, two = (run_study(opened, jobs=jobs, law_check=True).summary for jobs in (1, 2))
    assert one["law_check"]["done"]
    assert one["law_check"] == two["law_check"]
    assert all(entry["direct"]["units"] == 3 for entry in one["law_check"]["together"])


def test_a_meter_that_may_be_off_leaves_a_band_of_yields(checked):
    """Both ends agree with quadrature over the moved law; the run itself takes no error."""
    top = 0.1
    meter = b'[table.bell.inductance]\nmeter = {law = "uniform", half_width = "3 %"}\n'
    found = checked(top, text=TEXT.replace(b"[table.bell.inductance]\n", meter))
    (entry,) = found["meters"]
    assert (entry["tables"], entry["parts"]) == (["bell"], ["L1"])
    for one, by in zip(entry["entries"], (-0.03, 0.03), strict=True):
        assert one["estimate"] == pytest.approx(truth(top, FLAT, Moved(BELL, by)), abs=0.03)
    assert "Should the meter behind bell (L1) be off by all it may" in found["sentence"]
    assert found["together"][0]["change"] == checked(top)["together"][0]["change"]
