"""Units built in lots: what a lot shares, what a summary says of lots, what a study may ask."""

import fake_run
import numpy as np
import pandas as pd
import pytest
import quick_study
from hypothesis import given, settings
from hypothesis import strategies as st
from small_study import capacitor, everything, study, tables
from study_texts import GOOD, TABLES

from tolsim.answers.lines import summary_lines
from tolsim.answers.lot_words import lot_tables
from tolsim.answers.results import Results
from tolsim.answers.summary import summarise
from tolsim.answers.unit_files import FrameColumns
from tolsim.design import Condition, Lots
from tolsim.errors import StudyError
from tolsim.report import render, report_input
from tolsim.run import run_study
from tolsim.spread.part_values import part_values
from tolsim.spread.sampling import draw, factors
from tolsim.stats.clusters import share_of_lots
from tolsim.stats.proportion import share_interval
from tolsim.study import read_study


def in_lots(checked, **keys):
    return checked.model_copy(update={"lots": Lots(**keys)})


def drawn(checked, first, count, seed=7):
    return draw(factors(checked, tables()), seed, first, count)


LOT_WORDS = ("lot shift", "capacitance temperature slope")


def test_units_of_a_lot_share_its_reels_and_nothing_else():
    draws = drawn(in_lots(everything(), units_per_lot=10), 0, 40)
    for column, factor in enumerate(draws.factors):
        by_lot = draws.values[:, column].reshape(4, 10)
        shared = any(words in factor.name for words in LOT_WORDS)
        assert factor.every == (10 if shared else 1)
        assert (np.ptp(by_lot, axis=1) == 0).all() == shared
        assert len(np.unique(by_lot[:, 0])) == 4


def test_a_lot_takes_the_number_a_unit_of_many_lots_would_take():
    alone = drawn(everything(), 0, 4)
    lots = drawn(in_lots(everything(), units_per_lot=10), 0, 40)
    column = lots.column["reel tank: capacitance lot shift"]
    np.testing.assert_array_equal(lots.values[::10, column], alone.values[:, column])


def test_without_lots_every_unit_draws_as_before():
    """Lots of one unit, reels that last one lot: the same bits as no lots at all."""
    plain = drawn(everything(), 3, 50)
    single = drawn(in_lots(everything(), units_per_lot=1), 3, 50)
    np.testing.assert_array_equal(plain.u, single.u)
    np.testing.assert_array_equal(plain.values, single.values)


def test_a_reel_may_last_several_lots():
    checked = in_lots(everything(), units_per_lot=5, reels={"tank": 3, "C3": 2})
    draws = drawn(checked, 0, 60)
    every = {factor.name: factor.every for factor in draws.factors}
    assert every["reel tank: capacitance lot shift"] == 15
    assert every["C3.capacitance lot shift"] == 10
    assert every["reel fets: threshold lot shift"] == 5
    assert (checked.lots.lots_together, checked.lots.block) == (6, 30)


@settings(max_examples=40, deadline=None)
@given(
    per_lot=st.integers(1, 30),
    lasts=st.integers(1, 4),
    first=st.integers(0, 10**6),
    count=st.integers(0, 40),
)
def test_a_unit_is_the_same_in_any_chunk(per_lot, lasts, first, count):
    checked = in_lots(everything(), units_per_lot=per_lot, reels={"tank": lasts})
    together = drawn(checked, first, count)
    for k in range(count):
        np.testing.assert_array_equal(together.u[k], drawn(checked, first + k, 1).u[0])


def test_in_a_bank_scatter_falls_with_the_root_of_pieces_and_the_lot_shift_stays():
    """Lot 2.5 %, pieces 0.8 %: five have root(2.5^2 + 0.8^2 / 5) = 2.53 % over many lots.

    Within one lot 0.8 % / root 5 is left.  Both laws are cut at three sigma, which leaves 0.98658
    of it (Johnson, Kotz, Balakrishnan, section 13.10.1).
    """
    cut = 0.986578
    bank = study(
        {"C1": capacitor(spread="c-lot", reel="tank", pieces=5)},
        conditions={"room": Condition(age=1000.0)},  # the referee age: no change yet
    )
    for per_lot, expected in ((1, np.hypot(2.5, 0.8 / np.sqrt(5))), (20_000, 0.8 / np.sqrt(5))):
        draws = draw(factors(in_lots(bank, units_per_lot=per_lot), tables()), 5, 0, 20_000)
        value = part_values(bank, tables(), "room", "normal", draws)["C1.capacitance"] / 5e-9
        spread = 100 * value.std()
        assert spread == pytest.approx(cut * expected, rel=0.03)
        if per_lot == 1:
            assert spread / cut == pytest.approx(2.53, abs=0.05)


def run_in_lots(units=300, **keys):
    """The invented run, its lot shift drawn anew only for every lot."""
    lots = Lots(**{"units_per_lot": 10, **keys})
    checked = in_lots(fake_run.study(units=units), **lots.model_dump())
    table = fake_run.factors(units)
    shift = "reel Q: threshold lot shift"
    table[shift] = table[shift].to_numpy()[np.arange(units) // lots.units_per_lot]
    rows = fake_run.rows(table, checked)
    parts = (checked, FrameColumns(rows), FrameColumns(table), fake_run.nominal(checked))
    return rows, Results.in_memory(
        summarise(*parts, fake_run.QUALITY, fake_run.PROVENANCE), "", rows, table
    )


@pytest.fixture(scope="module")
def run():
    return run_in_lots()


def failing(rows):
    return rows.groupby("unit")["verdict"].agg(lambda words: (words == "fail").any()).to_numpy()


def test_the_yield_counts_lots(run):
    rows, results = run
    found, failed = results.summary["yield"], failing(rows)
    assert (found["counted_by"], found["units"]) == ("lots", 300)
    by_lots = share_of_lots(failed, np.arange(300) // 10)
    assert found["high"] == pytest.approx(1 - by_lots.low)
    low, high = (end.item() for end in share_interval(found["passed"], 300))
    assert found["low"] < low
    assert found["high"] > high
    alone = results.summary["lots"]["independent"]
    assert (alone["low"], alone["high"]) == pytest.approx((low, high), abs=0.02)
    for entry in (*results.summary["limits"], *results.summary["outcomes"]):
        low, high = share_interval(entry["units"], 300)
        assert entry["low"] <= low + 1e-9
        assert entry["high"] >= high - 1e-9


def test_lots_are_counted_as_pandas_counts_them(run):
    rows, results = run
    lots, failed = results.summary["lots"], failing(rows)
    by_lot = pd.Series(failed).groupby(np.arange(300) // 10).sum()
    assert lots["lots"] == 30
    told = {entry["failed"]: entry["lots"] for entry in lots["failures"]}
    assert told == by_lot.value_counts().to_dict()
    assert lots["with_failure"]["lots"] == (by_lot > 0).sum()
    assert lots["lost"]["lots"] == (by_lot >= 1).sum()
    assert lots["worst"][0]["failed"] == by_lot.max()
    assert lots["batches"][-1]["boards"] == 10
    assert lots["batches"][-1]["share"] == pytest.approx((by_lot > 0).mean())
    assert lots["batches"][0]["share"] == pytest.approx(failed.mean())
    assert lots["batches"][0]["independent"] == pytest.approx(failed.mean())
    one_board, y = lots["batches"][0], results.summary["yield"]
    assert (1 - one_board["high"], 1 - one_board["low"]) == pytest.approx(
        (y["low"], y["high"]), abs=0.01
    )
    margin = next(entry for entry in lots["between"] if entry["target"] == "start_margin")
    assert margin["share"] > 0.5


def test_a_lot_is_lost_from_the_share_that_the_study_names(run):
    rows, _ = run
    by_lot = pd.Series(failing(rows)).groupby(np.arange(300) // 10).sum()
    _, stricter = run_in_lots(lost_when=0.3)
    assert stricter.summary["lots"]["lost"]["lots"] == (by_lot >= 3).sum()


def test_lots_that_share_a_reel_are_one_group():
    """With reels that last six lots 30 lots are five groups: far less is known."""
    _, alone = run_in_lots()
    _, together = run_in_lots(reels={"Q": 6})
    assert together.summary["lots"]["lots_together"] == 6
    assert together.summary["yield"]["low"] < alone.summary["yield"]["low"]
    assert all("independent lots" in entry["reason"] for entry in together.summary["ranking"])


def test_a_lot_not_built_to_its_end_is_no_whole_lot():
    _, results = run_in_lots(units=295)
    assert results.summary["lots"]["lots"] == 30
    assert results.summary["lots"]["with_failure"]["of"] == 29


def test_percentile_intervals_and_ranking_know_the_lots(run):
    _, results = run
    checked = fake_run.study(units=300)
    plain = summarise(
        checked,
        results.unit_columns,
        results.factor_columns,
        fake_run.nominal(checked),
        fake_run.QUALITY,
        fake_run.PROVENANCE,
    )
    assert plain["lots"] == {}
    for ours, naive in zip(results.summary["figures"], plain["figures"], strict=True):
        assert ours["p50"] == naive["p50"]
        if ours["figure"] == "start_margin":
            wide = np.ptp(ours["interval"]["p50"])
            assert wide > 1.5 * np.ptp(naive["interval"]["p50"])
    ours, naive = (summary["ranking"][0]["factors"][0] for summary in (results.summary, plain))
    assert ours["factor"] == naive["factor"] == "reel Q: threshold lot shift"
    assert ours["high"] - ours["low"] > naive["high"] - naive["low"]


def test_the_terminal_tells_by_lot(run):
    _, results = run
    lines = summary_lines(results.summary)
    text = "\n".join(lines)
    assert "By lot, with 95 % intervals" in lines
    assert "in 30 lots" in " ".join(lines[:2])
    assert "interval over lots" in text.replace("\n", " ")
    assert "lots with a failing unit" in text
    assert "independent" not in text
    assert all(len(line) <= 80 for line in lines)
    checked = fake_run.results().summary
    assert "By lot" not in "".join(summary_lines(checked))


LOTS = """
[lots]
units_per_lot = 25
lost_when = "20 %"
"""


def test_a_study_says_how_units_share_reels():
    lots = read_study(GOOD + LOTS, TABLES).lots
    assert (lots.units_per_lot, lots.lost_when, lots.reels) == (25, 0.2, {})
    assert read_study(GOOD, TABLES).lots is None
    assert read_study(GOOD + LOTS + "reels = {vdd = 4}\n", TABLES).lots.units_of("vdd") == 100


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("[lots]\n", "units_per_lot"),
        ("[lots]\nunits_per_lot = 0\n", "units_per_lot"),
        ("[lots]\nunits_per_lot = 5\nlost_when = 0\n", "a share above 0"),
        ("[lots]\nunits_per_lot = 5\nlost_at = 0.1\n", "lost_when"),
        ("[lots]\nunits_per_lot = 5\nreels = {nowhere = 2}\n", "a reel of this study"),
        ("[lots]\nunits_per_lot = 5\nreels = {C1 = 0}\n", "C1"),
        ("lots = 5\n", "a table"),
    ],
)
def test_mistakes_in_lots_are_told(text, words):
    text = GOOD + text if text.startswith("[") else text + GOOD
    with pytest.raises(StudyError) as caught:
        read_study(text, TABLES)
    assert words in str(caught.value)


def test_the_report_shows_lots_side_by_side(run):
    rows, results = run
    checked = in_lots(fake_run.study(units=300), units_per_lot=10)
    content = report_input(results, checked)
    page = render(content)
    assert "Lot by lot" in page
    assert "the one with the worst unit first" in page
    assert "Lots with a failing unit" in page
    strips = content.strips
    most = max(results.summary["limits"], key=lambda entry: entry["units"])
    assert strips.title.lower().endswith(most["title"].lower())
    np.testing.assert_array_equal(strips.lot, np.arange(300) // 10)
    worst = rows.groupby("unit")[["Q1.drain_peak", "Q2.drain_peak"]].max().to_numpy()
    assert any(np.array_equal(strips.values, column, equal_nan=True) for column in worst.T)
    assert "Lot by lot" not in render(fake_run.report())


def test_chances_in_a_batch_grow_with_its_boards(run):
    _, results = run
    shares = [entry["share"] for entry in results.summary["lots"]["batches"]]
    assert shares == sorted(shares)
    rows = lot_tables(results.summary)
    assert [row["boards"] for row in rows["batches"]] == [1, 5, 10]
    assert "none in" in rows["lot_failures"]


def test_another_sampling_is_told_beside_the_quality():
    checked = fake_run.study(units=60)
    run = checked.run.model_copy(update={"sampling": "latin-hypercube"})
    checked = checked.model_copy(update={"run": run})
    table = fake_run.factors(60)
    rows = FrameColumns(fake_run.rows(table, checked))
    nominal = fake_run.nominal(checked)
    summary = summarise(
        checked, rows, FrameColumns(table), nominal, fake_run.QUALITY, fake_run.PROVENANCE
    )
    assert summary["quality"]["sampling"].startswith("latin-hypercube; intervals as for random")
    assert any("latin-hypercube" in line for line in summary_lines(summary))


def test_lots_are_a_table_in_python(run):
    rows, results = run
    found = results.lots
    assert list(found.columns) == ["lot", "units", "failed", "undecided"]
    assert found["units"].tolist() == [10] * 30
    by_lot = pd.Series(failing(rows)).groupby(np.arange(300) // 10).sum()
    assert found["failed"].tolist() == by_lot.tolist()
    assert found["undecided"].sum() == results.summary["yield"]["undecided"]
    assert fake_run.results().lots.empty


def test_a_run_in_lots_begins_with_the_same_unit_and_tells_of_its_lots(tmp_path):
    """Lot 0 takes the numbers that unit 0 takes without lots."""
    found = {}
    for name, lots in (("plain", ""), ("lots", "\n[lots]\nunits_per_lot = 3\n")):
        path = tmp_path / f"{name}.toml"
        path.write_text(quick_study.text(units=6) + lots, encoding="utf-8")
        found[name] = run_study(path, jobs=1)
    one, other = (results.units.query("unit == 0") for results in found.values())
    pd.testing.assert_frame_equal(one, other)
    drawn = found["lots"].factors.set_index("unit")
    shared = [name for name in drawn if "lot shift" in name]
    assert shared
    assert (drawn.loc[0, shared] == drawn.loc[2, shared]).all()
    assert (drawn.loc[2, shared] != drawn.loc[3, shared]).all()
    assert found["lots"].summary["lots"]["lots"] == 2
    assert found["lots"].lots["units"].tolist() == [3, 3]
