"""From solver status and figures to outcome and verdict: every word, and laws of limits."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tolsim.answers import wording
from tolsim.answers.summary import summarise
from tolsim.answers.unit_files import FrameColumns
from tolsim.circuit.orbit import Status
from tolsim.circuit.poweron.fates import Fate
from tolsim.design import Condition, Design, Limit, Rail, Run, State, Study
from tolsim.parts import DeviceModel, Mosfet, Rating
from tolsim.verdicts import CaseVerdicts, judge, overruled

NOMINAL = {"start_frequency": 7e6, "supply_current": 2.0}
GOOD = {
    "frequency": 6.6e6,
    "Q1.drain_peak": 60.0,
    "growth_rate": 1e6,
    "start_frequency": 7e6,
    "start_time": 2e-6,
    "mode_match": 1.0,
    "idle_current": 1.5,
    "efficiency": 0.8,
}
DRAIN, LATE, BAND, WASTE = range(4)  # limits of the study, by number


def study(drain_share: float = 0.8, latest: float = 1e-4) -> Study:
    """One transistor, a start state and a running state, four limits."""
    q1 = Mosfet(
        kind="mosfet",
        drain="d",
        gate="g",
        model=DeviceModel(threshold=3.0, gain=5.0),
        rating=Rating(drain_voltage=100.0),
    )
    limits = (
        Limit(figure="drain_peak", share_of_rating=drain_share, rule="drain"),
        Limit(figure="start_time", at_most=latest, rule="soon"),
        Limit(figure="frequency", at_least=6e6, at_most=7.2e6, rule="band"),
        Limit(figure="efficiency", at_least=0.5, rule="waste"),
    )
    return Study(
        title="Verdicts",
        design=Design(parts={"Q1": q1}, rails={"vdd": Rail(net="vdd", voltage=24.0)}),
        states={"dark": State(starts_here=True), "lit": State()},
        conditions={"room": Condition()},
        limits=limits,
        run=Run(units=1),
        expected_frequency=(5e6, 8e6),
    )


@dataclass(frozen=True)
class Row:
    """One unit and what is to be said of it."""

    outcome: str
    verdict: str = "fail"
    status: Status = Status.SETTLED
    state: str = "dark"
    broken: str = ""
    figures: dict[str, float] = field(default_factory=dict)


DECAYS = {"growth_rate": -1e6}
NO_FIGURES = {"frequency": np.nan, "Q1.drain_peak": np.nan, "efficiency": np.nan}
NO_START = dict.fromkeys(("growth_rate", "start_frequency", "start_time", "idle_current"), np.nan)
ROWS = (
    Row("starts", "pass"),
    Row("runs", "pass", state="lit"),
    Row("runs", "pass", state="lit", figures=DECAYS),
    Row("starts late", broken="1", figures={"start_time": 2e-4}),
    Row("starts only with a kick", figures=DECAYS | {"start_time": np.nan}),
    Row("latched on", status=Status.NO_ORBIT, figures=NO_FIGURES | DECAYS),
    Row("dies away", status=Status.NO_ORBIT, figures=NO_FIGURES | DECAYS | {"idle_current": 0.1}),
    Row("drops out", status=Status.NO_ORBIT, state="lit", figures=NO_FIGURES),
    Row("bursts", status=Status.UNSTABLE),
    Row("bursts", status=Status.UNSTABLE, figures=NO_START),
    Row("wrong mode", figures={"mode_match": 0.2, "start_frequency": 40e6}),
    Row("wrong mode", broken="2", figures={"frequency": 20e6}),
    Row("starts", "pass", figures={"mode_match": 0.2}),  # another shape at the same frequency
    Row("over stress", broken="0", figures={"Q1.drain_peak": 90.0}),
    Row("over stress", broken="0;2", figures={"Q1.drain_peak": 90.0, "frequency": 7.5e6}),
    Row("no thermal balance", status=Status.NO_THERMAL_BALANCE, figures=NO_FIGURES),
    Row("no thermal balance", status=Status.NO_THERMAL_BALANCE, figures=NO_FIGURES | NO_START),
    Row("out of band", broken="2", figures={"frequency": 7.5e6}),
    Row("starts", broken="3", figures={"efficiency": 0.4}),  # it runs, and yet it fails
    Row("undecided", "undecided", status=Status.NOT_CONVERGED, figures=NO_FIGURES),
    Row("undecided", "undecided", Status.NOT_CONVERGED, "lit", figures=NO_FIGURES),
    Row("undecided", "undecided", status=Status.NO_ORBIT, figures=NO_FIGURES),  # it grows, whereto?
    Row("undecided", "undecided", figures=NO_START),  # no bias point
    Row("undecided", broken="0", figures=NO_START | {"Q1.drain_peak": 90.0}),
)


@pytest.mark.parametrize("state", ["dark", "lit"])
def test_every_outcome(state):
    """All units of a state judged in one call, each with its outcome, verdict and limits."""
    rows = [row for row in ROWS if row.state == state]
    columns = {
        name: np.array([(GOOD | row.figures)[name] for row in rows], dtype=float) for name in GOOD
    }
    status = np.array([row.status for row in rows], dtype=np.intp)
    found = judge(study(), "room", state, status, columns, NOMINAL)
    assert found.outcome.tolist() == [row.outcome for row in rows]
    assert found.verdict.tolist() == [row.verdict for row in rows]
    assert found.failed_limits.tolist() == [row.broken for row in rows]


OTHER_FAILURES = {"drops out", "bursts", "over stress", "no thermal balance", "out of band"}


def test_the_table_above_is_complete():
    """Every word of the vocabulary occurs in the table, and no other; one switch latches alone."""
    known = wording.GOOD | set(wording.NO_START) | OTHER_FAILURES
    assert {row.outcome for row in ROWS} == known - {"latched both on"}


FATES = (
    (Fate.NOT_RUN, {}, Status.SETTLED, "starts"),
    (Fate.STARTS, {}, Status.SETTLED, "starts"),
    (Fate.STARTS, DECAYS, Status.SETTLED, "starts"),  # the ramp itself kicks it
    (Fate.STARTS, {}, Status.NO_ORBIT, "undecided"),  # it swings on an orbit nobody found
    (Fate.LATCHED, {}, Status.SETTLED, "latched on"),  # an orbit exists, but it is not reached
    (Fate.DIES, DECAYS, Status.SETTLED, "starts only with a kick"),
    (Fate.DIES, {}, Status.SETTLED, "dies away"),
    (Fate.DIES, DECAYS, Status.NO_ORBIT, "dies away"),
    (Fate.BURSTS, {}, Status.SETTLED, "bursts"),
    (Fate.OTHER_SWING, {}, Status.SETTLED, "wrong mode"),
    (Fate.UNDECIDED, {}, Status.SETTLED, "undecided"),
)


def test_what_happens_in_time_goes_before_what_modes_say():
    """The fate of a unit that was switched on decides its outcome."""
    columns = {
        name: np.array([(GOOD | figures)[name] for _, figures, _, _ in FATES], dtype=float)
        for name in GOOD
    }
    status = np.array([status for _, _, status, _ in FATES], dtype=np.intp)
    fate = np.array([fate for fate, *_ in FATES], dtype=np.intp)
    found = judge(study(), "room", "dark", status, columns, NOMINAL, fate)
    assert found.outcome.tolist() == [word for *_, word in FATES]
    good = {"starts"}
    assert [verdict == "pass" for verdict in found.verdict] == [word in good for *_, word in FATES]


@st.composite
def lots(draw):
    """Statuses and figures of a few units, some of them missing as a solver leaves them."""
    units = draw(st.integers(1, 12))
    status = np.array(draw(st.lists(st.sampled_from(Status), min_size=units, max_size=units)))

    def column(low: float, high: float) -> np.ndarray:
        numbers = st.floats(low, high)
        return np.array(draw(st.lists(numbers, min_size=units, max_size=units)))

    figures = {
        "frequency": column(4e6, 9e6),
        "Q1.drain_peak": column(20, 120),
        "growth_rate": column(-1e6, 5e6),
        "start_frequency": column(2e6, 12e6),
        "start_time": column(1e-6, 3e-4),
        "mode_match": column(0, 1),
        "idle_current": column(0, 4),
        "efficiency": column(0.3, 1),
    }
    without = ~np.isin(status, (Status.SETTLED, Status.UNSTABLE))
    for name in ("frequency", "Q1.drain_peak", "efficiency"):
        figures[name][without] = np.nan
    figures["start_time"][figures["growth_rate"] <= 0] = np.nan
    return status, figures


def summary_of(checked: Study, status: np.ndarray, figures: dict[str, np.ndarray]) -> dict:
    """Summary of units judged in both states with the same figures."""
    blocks = []
    for state in checked.states:
        judged = judge(checked, "room", state, status, figures, NOMINAL)
        blocks.append(
            pd.DataFrame(
                {
                    "unit": np.arange(len(status)),
                    "condition": "room",
                    "state": state,
                    "verdict": judged.verdict.astype(object),
                    "outcome": judged.outcome.astype(object),
                    "failed_limits": judged.failed_limits,
                    "status": "any",
                    "Q1.drain_peak": figures["Q1.drain_peak"],
                }
            )
        )
    rows = FrameColumns(pd.concat(blocks, ignore_index=True))
    factors = FrameColumns(pd.DataFrame({"unit": np.arange(len(status))}))
    nominal = {("room", state): NOMINAL for state in checked.states}
    return summarise(checked, rows, factors, nominal, {}, {})


@settings(max_examples=60, deadline=None)
@given(lots(), st.floats(0.3, 1.0), st.floats(0.3, 1.0), st.floats(1e-6, 3e-4), st.floats(0, 1))
def test_a_tighter_limit_never_raises_the_yield(lot, one, other, latest, factor):
    """Lower bounds on stress and start time fail the same units and perhaps more."""
    status, figures = lot
    loose, tight = study(max(one, other), latest), study(min(one, other), latest * factor)
    for state in ("dark", "lit"):
        wide = judge(loose, "room", state, status, figures, NOMINAL)
        narrow = judge(tight, "room", state, status, figures, NOMINAL)
        assert not np.any((narrow.verdict == "pass") & (wide.verdict != "pass"))
        assert not np.any((narrow.verdict != "fail") & (wide.verdict == "fail"))
    before, after = (summary_of(s, status, figures)["yield"] for s in (loose, tight))
    assert after["estimate"] <= before["estimate"]
    assert after["low"] <= before["low"]
    assert after["high"] <= before["high"]
    assert after["failed"] >= before["failed"]


@settings(max_examples=60, deadline=None)
@given(lots())
def test_undecided_units_are_counted_and_never_pass(lot):
    """Every unit is passed, failed or undecided; an unsolved one fails only by a broken limit."""
    status, figures = lot
    summary = summary_of(study(), status, figures)
    found = summary["yield"]
    assert found["passed"] + found["failed"] + found["undecided"] == found["units"] == len(status)
    assert found["passed"] <= np.sum(status == Status.SETTLED)
    assert sum(entry["units"] for entry in summary["outcomes"]) == 2 * len(status)
    for state in ("dark", "lit"):
        judged = judge(study(), "room", state, status, figures, NOMINAL)
        unsolved = status == Status.NOT_CONVERGED
        words = np.where(judged.failed_limits[unsolved] == "", "undecided", "fail")
        np.testing.assert_array_equal(judged.verdict[unsolved], words)
    if found["undecided"] == len(status):
        assert (found["estimate"], found["low"], found["high"]) == (0.0, 0.0, 1.0)


@settings(max_examples=30, deadline=None)
@given(lots(), st.randoms(use_true_random=False))
def test_the_order_of_units_permutes_their_verdicts(lot, random):
    """Each unit is judged by itself."""
    status, figures = lot
    order = list(range(len(status)))
    random.shuffle(order)
    shuffled = {name: values[order] for name, values in figures.items()}
    for state in ("dark", "lit"):
        here = judge(study(), "room", state, status, figures, NOMINAL)
        there = judge(study(), "room", state, status[order], shuffled, NOMINAL)
        np.testing.assert_array_equal(there.outcome, here.outcome[order])
        np.testing.assert_array_equal(there.verdict, here.verdict[order])
        np.testing.assert_array_equal(there.failed_limits, here.failed_limits[order])


def test_what_the_operator_puts_aside_fails_and_what_he_leaves_open_is_undecided():
    verdicts = CaseVerdicts(
        np.array(["runs", "over stress", "runs", "over stress", "undecided"]),
        np.array(["pass", "fail", "pass", "fail", "undecided"], dtype="U32"),
        np.array(["", "0", "", "0", ""], dtype=object),
    )
    verdicts = replace(verdicts, outcome=verdicts.outcome.astype("U32"))
    first, last = np.array([1, 1, 0, 0, 0], bool), np.array([0, 0, 1, 1, 1], bool)
    judged = overruled(verdicts, {"trim range exhausted": first, "undecided": last})
    assert judged.outcome.tolist() == [
        "trim range exhausted",
        "trim range exhausted",
        "undecided",
        "over stress",
        "undecided",
    ]
    assert judged.verdict.tolist() == ["fail", "fail", "undecided", "fail", "undecided"]
    assert judged.failed_limits.tolist() == ["", "0", "", "0", ""]


def test_two_switches_latch_both():
    """With a second switch the word says that both conduct."""
    one = study()
    parts = {"Q1": one.design.parts["Q1"], "Q2": one.design.parts["Q1"]}
    design = one.design.model_copy(update={"parts": parts})
    two = one.model_copy(update={"design": design})
    columns = {name: np.array([value]) for name, value in GOOD.items()}
    found = judge(
        two, "room", "dark", np.array([Status.SETTLED]), columns, NOMINAL, np.array([Fate.LATCHED])
    )
    assert found.outcome.tolist() == ["latched both on"]
