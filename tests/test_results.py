"""Summary, chunk files and the results folder."""

import json
import signal
import subprocess
import sys
import textwrap
from pathlib import Path

import fake_run
import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tolsim.answers.results import Results, summary_json
from tolsim.answers.summary import summarise
from tolsim.answers.unit_files import FrameColumns, UnitFiles, UnitRows
from tolsim.errors import RequestError, TolsimError

YIELD_KEYS = {"estimate", "low", "high", "confidence", "units", "passed", "failed", "undecided"}
FIGURE_KEYS = {
    "figure", "part", "condition", "state", "unit_of_measure", "nominal", "p50", "p95", "p99",
    "interval", "rating", "limit", "share_of_rating",
}  # fmt: skip


def make(units):
    checked = fake_run.study(units=units)
    table = fake_run.factors(units)
    rows = fake_run.rows(table, checked)
    return checked, rows, table


def summary_of(checked, rows, table):
    return summarise(
        checked,
        FrameColumns(rows),
        FrameColumns(table),
        fake_run.nominal(checked),
        fake_run.QUALITY,
        fake_run.PROVENANCE,
    )


@pytest.fixture(scope="module")
def run():
    return make(units=300)


@pytest.fixture(scope="module")
def summary(run):
    return summary_of(*run)


def test_promised_keys(summary):
    assert set(summary["yield"]) == YIELD_KEYS
    assert {"outcomes", "limits", "figures", "ranking", "quality", "provenance"} < set(summary)
    for entry in summary["figures"]:
        assert set(entry) >= FIGURE_KEYS
    for entry in summary["limits"]:
        assert {"rule", "figure", "parts", "bound", "units", "share", "low", "high"} <= set(entry)
    assert summary["quality"] == fake_run.QUALITY
    assert summary["provenance"]["seed"] == 7


def test_a_unit_fails_if_any_case_fails_and_undecided_units_are_shown(run, summary):
    _, rows, _ = run
    by_unit = rows.groupby("unit")["verdict"].agg(set)
    failed = sum("fail" in verdicts for verdicts in by_unit)
    undecided = sum("undecided" in v and "fail" not in v for v in by_unit)
    assert failed > 0
    assert undecided > 0
    found = summary["yield"]
    assert (found["failed"], found["undecided"]) == (failed, undecided)
    assert found["passed"] + failed + undecided == found["units"] == 300
    assert found["low"] < found["estimate"] < found["high"]


def test_outcomes_count_every_row(run, summary):
    _, rows, _ = run
    table = pd.DataFrame(summary["outcomes"])
    assert table["units"].sum() == len(rows)
    latched = table[table["outcome"] == "latched both on"].iloc[0]
    assert (latched["condition"], latched["state"], latched["units"]) == ("cold", "dark", 2)
    assert latched["first_units"] == [17, 230]
    assert latched["failed"] == 2
    assert latched["no_limit_broken"] == {"units": 2, "first_units": [17, 230]}
    over = table[table["outcome"] == "over stress"].iloc[0]
    assert over["no_limit_broken"]["units"] == 0
    assert latched["low"] < latched["share"] < latched["high"]


def test_limits_name_units_cases_and_parts(run, summary):
    checked, rows, _ = run
    drain, start = summary["limits"][0], summary["limits"][1]
    beyond = (rows[["Q1.drain_peak", "Q2.drain_peak"]] > 80.0).any(axis=1)
    assert drain["units"] == rows.loc[beyond, "unit"].nunique()
    assert drain["first_units"][0] == rows.loc[beyond, "unit"].min()
    assert {entry["part"] for entry in drain["by_part"]} <= {"Q1", "Q2"}
    assert drain["by_part"][0]["units"] <= drain["units"]
    assert [entry["state"] for entry in start["by_case"]] == ["dark", "dark"]
    assert start["rule"] == checked.limits[1].rule


def test_figures_against_rating_and_limit(run, summary):
    _, rows, _ = run
    entry = next(
        e
        for e in summary["figures"]
        if (e["part"], e["figure"], e["condition"], e["state"])
        == ("Q1", "drain_peak", "room", "dark")
    )
    here = rows[(rows["condition"] == "room") & (rows["state"] == "dark")]["Q1.drain_peak"]
    assert entry["p50"] == pytest.approx(np.quantile(here, 0.5, method="weibull"))
    assert (entry["rating"], entry["limit"], entry["limit_side"]) == (100.0, 80.0, "at_most")
    assert entry["share_of_rating"] == pytest.approx(entry["p99"] / 100.0)
    assert entry["interval"]["p50"][0] < entry["p50"] < entry["interval"]["p50"][1]
    assert entry["interval"]["p99"][1] is None  # 300 units cannot bound p99 from above
    margin = next(e for e in summary["figures"] if e["figure"] == "start_margin")
    assert (margin["worse"], margin["limit"], margin["limit_side"]) == ("low", 3.0, "at_least")
    band = next(e for e in summary["figures"] if e["figure"] == "frequency")
    assert (band["at_least"], band["at_most"]) == (5.9e6, 7.4e6)


def test_ranking_targets_and_order(summary):
    targets = [entry["target"] for entry in summary["ranking"]]
    assert targets == ["start_margin", "Q1.drain_peak", "pass/fail"]
    margin = summary["ranking"][0]
    assert margin["factors"][0]["factor"] == "reel Q: threshold lot shift"
    shares = [factor["share"] for factor in margin["factors"]]
    assert shares == sorted(shares, reverse=True)
    assert summary["ranking"][2]["missing"] == 1  # the undecided unit


def test_summary_is_plain_strict_json_and_the_same_bytes_each_time(run, summary):
    text = summary_json(summary)
    assert json.loads(text) == summary
    assert summary_json(summary_of(*run)) == text


def test_zero_failures_still_have_an_interval():
    checked = fake_run.study(drain_share=1.0, margin=-50.0)
    table = fake_run.factors(100)
    rows = fake_run.rows(table, checked)
    rows = rows.assign(verdict="pass", outcome="runs", failed_limits="")
    found = summary_of(checked, rows, table)
    assert found["yield"]["estimate"] == 1.0
    assert found["yield"]["low"] == pytest.approx(0.025 ** (1 / 100))
    assert found["limits"][0]["high"] == pytest.approx(1 - 0.025 ** (1 / 100))
    assert "same in every unit" in found["ranking"][-1]["reason"]


@settings(max_examples=10, deadline=None)
@given(st.randoms(use_true_random=False))
def test_the_order_of_the_rows_changes_nothing(random):
    checked, rows, table = make(units=60)
    rows = rows[rows["unit"] != 17]
    order = list(range(60))
    random.shuffle(order)
    shuffled = rows.sample(frac=1, random_state=random.randrange(1000))
    cases = rows[["condition", "state"]].drop_duplicates()
    shuffled = cases.merge(shuffled, how="left", sort=False)  # cases keep their order
    table = table[table["unit"] != 17]
    a = summary_of(checked, rows, table)
    b = summary_of(checked, shuffled, table.sample(frac=1, random_state=1))
    assert summary_json(a) == summary_json(b)


def test_missing_rows_are_refused(run):
    _, rows, _ = run
    with pytest.raises(ValueError, match="exactly one row"):
        UnitRows.of(FrameColumns(rows.drop(index=5)))


def test_chunks_merge_to_the_same_summary(run, tmp_path, summary):
    checked, rows, table = run
    files = UnitFiles(tmp_path)
    for first in (100, 0, 200):
        units = range(first, first + 100)
        files.write_chunk(first, rows[rows["unit"].isin(units)], table[table["unit"].isin(units)])
    assert files.finished() == {0: 100, 100: 100, 200: 100}
    unmerged = summarise(
        checked,
        files.units(),
        files.factors(),
        fake_run.nominal(checked),
        fake_run.QUALITY,
        fake_run.PROVENANCE,
    )
    files.merge()
    assert files.units().paths == (tmp_path / "units.parquet",)
    merged = summarise(
        checked,
        files.units(),
        files.factors(),
        fake_run.nominal(checked),
        fake_run.QUALITY,
        fake_run.PROVENANCE,
    )
    assert merged == unmerged == summary
    assert not list(tmp_path.rglob("*.part"))


def test_results_folder_round_trip(run, tmp_path, summary):
    _, rows, table = run
    results = Results.in_memory(summary, "title = 'x'\n", rows, table).save(tmp_path / "out")
    again = Results.open(tmp_path / "out")
    assert again.complete
    assert again.study_text == "title = 'x'\n"
    assert again.summary == summary
    pd.testing.assert_frame_equal(again.factors, table)
    assert len(again.units) == len(rows)
    assert results.yield_["passed"] == summary["yield"]["passed"]
    assert {"p99_low", "p99_high"} <= set(again.figures.columns)
    assert set(again.ranking["target"]) == {"start_margin", "Q1.drain_peak", "pass/fail"}
    assert len(again.limits) == 5
    assert len(again.cases) == 6
    assert len(again.outcomes) >= 6
    assert again.quality["rechecked"]["agreed"] == 25
    assert again.provenance["seed"] == 7
    with pytest.raises(AttributeError):
        again.folder = None


def test_a_killed_run_leaves_its_finished_chunks_readable(tmp_path):
    script = textwrap.dedent(
        """
        import sys, os, signal
        sys.path.insert(0, sys.argv[1])
        import fake_run
        from pathlib import Path
        from tolsim.answers.unit_files import UnitFiles
        table = fake_run.factors(50)
        rows = fake_run.rows(table.assign(unit=range(250, 300)), fake_run.study())
        UnitFiles(Path(sys.argv[2])).write_chunk(0, rows, table)
        (Path(sys.argv[2]) / "chunks" / "units-0000050.parquet.part").write_bytes(b"half")
        os.kill(os.getpid(), signal.SIGKILL)
        """
    )
    done = subprocess.run(  # noqa: S603 - our own script
        [sys.executable, "-c", script, str(Path(__file__).parent), str(tmp_path)], check=False
    )
    assert done.returncode == -signal.SIGKILL
    results = Results.open(tmp_path)
    assert not results.complete
    assert len(results.factors) == 50
    assert len(results.units) == 300


@pytest.mark.parametrize("name", ["summary.json", "units.parquet", "factors.parquet"])
def test_a_damaged_folder_is_told_plainly(run, tmp_path, summary, name):
    _, units, factors = run
    Results.in_memory(summary, "", units, factors).save(tmp_path)
    (tmp_path / name).write_bytes(b"PAR1 and no more")
    with pytest.raises(RequestError, match=f"{name}' is damaged"):
        Results.open(tmp_path)


def test_a_folder_without_results_is_told_plainly(tmp_path):
    with pytest.raises(TolsimError, match="holds no results"):
        Results.open(tmp_path)
