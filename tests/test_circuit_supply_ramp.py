"""Levels of a rail after power-on."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tolsim.circuit.supply_ramp import STEP_TIME, profile_of
from tolsim.design import Bounce, Dip, Rail

KINDS = ("step", "linear", "smooth", "exponential")
durations = st.floats(1e-6, 1.0)


def rail(**supply: object) -> Rail:
    return Rail.model_validate({"net": "vdd", "voltage": 24.0, **supply})


def test_a_rail_without_ramp_is_a_step():
    ramp = profile_of(rail())
    assert ramp.at(np.array([0.0, 0.5 * STEP_TIME, STEP_TIME, 1.0])) == pytest.approx(
        [0.0, 0.5, 1.0, 1.0]
    )
    assert ramp.end == STEP_TIME


def test_a_ramp_time_alone_means_equal_parts():
    ramp = profile_of(rail(ramp_time=2e-3, delay=1e-3))
    times = np.array([0.0, 1e-3, 1.5e-3, 2e-3, 3e-3, 9.0])
    assert ramp.at(times) == pytest.approx([0.0, 0.0, 0.25, 0.5, 1.0, 1.0])


def test_curved_ramps_follow_their_formulas():
    smooth = profile_of(rail(ramp="smooth", ramp_time=1.0))
    assert smooth.at(0.25) == pytest.approx(0.5 - 0.5 * np.cos(np.pi / 4), abs=1e-3)
    slow = profile_of(rail(ramp="exponential", ramp_time=1.0))
    tau = 1.0 / np.log(100.0)
    assert slow.at(tau) == pytest.approx((1 - np.exp(-1)) / 0.99, abs=1e-3)


@given(st.sampled_from(KINDS), durations, st.just(0.0) | durations)
def test_plain_ramps_only_rise_and_end_at_1(kind: str, ramp_time: float, delay: float):
    given_time = {} if kind == "step" else {"ramp_time": ramp_time}
    ramp = profile_of(rail(ramp=kind, delay=delay, **given_time))
    assert (np.diff(ramp.times) > 0).all()
    assert (np.diff(ramp.levels) >= 0).all()
    assert ramp.times[0] == 0.0
    assert ramp.levels[0] == 0.0
    assert ramp.levels[-1] == 1.0
    assert ramp.at(delay) == pytest.approx(0.0, abs=1e-9)
    assert ramp.at(2 * ramp.end) == 1.0


@given(st.sampled_from(KINDS[1:]), durations, durations, st.just(0.0) | durations, st.floats(0, 1))
def test_a_stretched_ramp_is_the_ramp_of_that_time(
    kind: str, one: float, other: float, delay: float, share: float
):
    stretched = profile_of(rail(ramp=kind, ramp_time=one, delay=delay)).stretched(other)
    direct = profile_of(rail(ramp=kind, ramp_time=other, delay=delay))
    when = delay + share * other
    assert stretched.at(when) == pytest.approx(direct.at(when), abs=1e-5)
    assert stretched.end == pytest.approx(direct.end)


def test_a_dip_keeps_its_length_and_moves_with_the_end_of_the_rise():
    dip = Dip(at=5e-3, depth=0.6, length=1e-3)
    ramp = profile_of(rail(ramp_time=2e-3, dip=dip))
    assert ramp.at(np.array([5e-3, 5.5e-3, 6e-3])) == pytest.approx([1.0, 0.4, 1.0])
    later = ramp.stretched(4e-3)
    assert later.at(np.array([2e-3, 4e-3, 7.5e-3, 8e-3])) == pytest.approx([0.5, 1.0, 0.4, 1.0])
    assert later.end == pytest.approx(8e-3)


def test_a_bouncing_contact_opens_as_often_as_it_should():
    bounce = Bounce(count=3, period=1e-3, open_share=0.3)
    ramp = profile_of(rail(bounce=bounce, delay=2e-3))
    times = 2e-3 + np.linspace(1e-8, 4e-3, 40001)
    closed = ramp.at(times) > 0.5
    assert np.count_nonzero(np.diff(closed.astype(int)) < 0) == 3
    assert np.mean(~closed[times < 5e-3]) == pytest.approx(0.3, abs=0.01)
    assert closed[-1]


def test_recorded_points_may_overshoot_and_keep_their_shape():
    points = ((0.0, 0.0), (1e-3, 1.2), (2e-3, 1.0))
    ramp = profile_of(rail(ramp="csv", ramp_points=points, delay=1e-3))
    assert ramp.at(np.array([1e-3, 1.5e-3, 2e-3, 3e-3])) == pytest.approx([0.0, 0.6, 1.2, 1.0])
    assert ramp.stretched(4e-3).at(3e-3) == pytest.approx(1.2)
