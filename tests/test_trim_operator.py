"""The operator of a trim against closed forms of linear and curved adjusters."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from tolsim.trim.operator import Adjuster, TrimStatus, operate


def adjuster(**changes: float):
    keys = {
        "low": 0.01,
        "high": 0.99,
        "resolution": 0.002,
        "coarse": 0.1,
        "target": 2.0,
        "within": 0.02,
        "patience": 30,
    }
    return Adjuster(**{**keys, **changes})


def divider(volts):
    """Wiper of an unloaded potentiometer: reading = volts x setting."""
    return lambda position, units: volts[units] * position


def test_linear_adjuster_is_set_within_its_tolerance():
    volts = np.linspace(3.0, 6.0, 301)
    found = operate(divider(volts), np.full(301, 0.5), adjuster())
    assert (found.status == TrimStatus.SET).all()
    np.testing.assert_allclose(found.shown, volts * found.position, rtol=1e-14)
    assert np.abs(found.shown - 2.0).max() <= 0.02
    np.testing.assert_allclose(found.position, 2.0 / volts, atol=0.02 / 3.0)
    np.testing.assert_allclose(found.slope[found.moves > 0], volts[found.moves > 0], rtol=1e-9)


def test_what_resolution_leaves_is_uniform_over_one_step():
    """Closed form: the ideal place is uniform against the grid, so the rest is +-step/2."""
    volts = 1.0 / stats.qmc.Halton(1, scramble=True, seed=3).random(4000)[:, 0] * 0.5 + 2.2
    step = 0.004
    wanted = adjuster(resolution=step, within=0.0, coarse=0.08)
    found = operate(divider(volts), np.full(4000, 0.5), wanted)
    inside = (2.0 / volts > 0.02) & (2.0 / volts < 0.98)
    rest = (found.position - 2.0 / volts)[inside] / step
    assert np.abs(rest).max() <= 0.5 + 1e-9
    assert stats.kstest(rest + 0.5, "uniform").pvalue > 1e-3
    assert (found.status[inside] == TrimStatus.TOO_COARSE).all()


def test_error_of_the_meter_passes_through_exactly():
    """Closed form: with shown = (1 + g) true + b the true reading is (target - b) / (1 + g)."""
    gain, offset = np.linspace(-0.03, 0.03, 61), np.linspace(-0.05, 0.05, 61)
    volts = np.full(61, 5.0)

    def meter(position, units):
        return (1.0 + gain[units]) * volts[units] * position + offset[units]

    fine = adjuster(resolution=1e-6, within=1e-5)
    found = operate(meter, np.full(61, 0.3), fine)
    assert (found.status == TrimStatus.SET).all()
    np.testing.assert_allclose(5.0 * found.position, (2.0 - offset) / (1.0 + gain), atol=1.1e-5)


def test_square_law_from_its_dead_zone():
    """A drain current is zero up to the threshold: the operator goes on until it rises."""
    threshold = np.linspace(0.3, 0.7, 101)

    def meter(position, units):
        return 40.0 * np.maximum(position - threshold[units], 0.0) ** 2

    found = operate(meter, np.full(101, 0.01), adjuster(target=0.4, within=0.01, resolution=1e-4))
    assert (found.status == TrimStatus.SET).all()
    np.testing.assert_allclose(found.position, threshold + 0.1, atol=0.002)
    assert found.moves.max() <= 20


def test_range_that_does_not_reach_the_target_is_exhausted_at_its_end():
    volts = np.array([1.0, 5.0, 400.0])
    found = operate(divider(volts), np.full(3, 0.5), adjuster())
    wanted = [TrimStatus.EXHAUSTED, TrimStatus.SET, TrimStatus.EXHAUSTED]
    assert found.status.tolist() == wanted
    assert found.position[0] == 0.99
    assert found.position[2] == pytest.approx(0.01)


def test_a_step_too_coarse_ends_at_the_nearer_side():
    found = operate(
        divider(np.array([10.0])), np.array([0.512]), adjuster(resolution=0.03, within=0.01)
    )
    assert found.status[0] == TrimStatus.TOO_COARSE
    assert abs(found.position[0] - 0.2) <= 0.015


def test_meter_that_shows_nothing():
    """No reading at all, none below a place (the operator goes on), none above it (he stops)."""

    def meter(position, units):
        blank = (units == 0) | ((units == 1) & (position < 0.5)) | ((units == 2) & (position > 0.5))
        return np.where(blank, np.nan, 3.0 * position)

    found = operate(meter, np.full(3, 0.1), adjuster())
    wanted = [TrimStatus.NO_READING, TrimStatus.SET, TrimStatus.NO_READING]
    assert found.status.tolist() == wanted
    assert 0.49 < found.position[2] <= 0.5


def test_patience_ends():
    found = operate(divider(np.array([5.0])), np.array([0.9]), adjuster(patience=2, coarse=0.02))
    assert found.status[0] == TrimStatus.UNSETTLED
    assert found.moves[0] == 2


def test_target_already_shown_needs_no_turn():
    found = operate(divider(np.array([4.0])), np.array([0.5]), adjuster())
    assert (found.status[0], found.moves[0], found.position[0]) == (TrimStatus.SET, 0, 0.5)
    assert np.isnan(found.slope[0])


def test_falling_reading_is_followed_whatever_was_expected():
    capacitance = np.linspace(8e-12, 14e-12, 13)

    def frequency(position, units):
        return 1.0 / (2.0 * np.pi * np.sqrt(1e-6 * (capacitance[units] + position)))

    wanted = adjuster(
        low=2e-12, high=22e-12, resolution=1e-13, coarse=2e-12, target=33e6, within=0.1e6
    )
    for expected in (np.nan, 1e18, -1e18):
        found = operate(frequency, np.full(13, 12e-12), wanted, expected)
        assert (found.status == TrimStatus.SET).all()
        ideal = 1.0 / ((2.0 * np.pi * 33e6) ** 2 * 1e-6) - capacitance
        np.testing.assert_allclose(found.position, ideal, atol=0.2e-12)


@settings(max_examples=40, deadline=None)
@given(
    st.lists(st.tuples(st.floats(0.2, 8.0), st.floats(-1.0, 1.0)), min_size=1, max_size=6),
    st.floats(0.02, 0.98),
    st.sampled_from([1.0, 2.0, 0.5]),
)
def test_batch_is_the_same_as_one_by_one(units, start, power):
    size, bend = np.array(units).T

    def meter(position, some):
        return size[some] * position**power * (1.0 + 0.3 * bend[some] * np.sin(3.0 * position))

    wanted = adjuster(target=1.0)
    together = operate(meter, np.full(len(size), start), wanted, 1.0)
    for unit in range(len(size)):

        def alone(position, some, unit=unit):
            return meter(position, np.full(len(some), unit))

        single = operate(alone, np.full(1, start), wanted, 1.0)
        for name in ("status", "position", "shown", "moves", "slope"):
            np.testing.assert_array_equal(getattr(single, name)[0], getattr(together, name)[unit])


@settings(max_examples=30, deadline=None)
@given(st.floats(2.5, 9.0), st.floats(0.001, 0.2), st.floats(0.0, 1.0))
def test_a_set_unit_is_within_any_tolerance_wide_or_tight(volts, wide, share):
    """A tighter tolerance never leaves a reading farther off than it allows."""
    tight = max(wide * share, 1e-4)
    for within in (wide, tight):
        wanted = adjuster(within=within, resolution=1e-5)
        found = operate(divider(np.array([volts])), np.array([0.5]), wanted)
        assert found.status[0] == TrimStatus.SET
        assert abs(found.shown[0] - 2.0) <= within


@pytest.mark.parametrize("start", [0.01, 0.99, 0.5])
def test_no_move_exceeds_a_coarse_step(start):
    visited = []

    def meter(position, _):
        visited.append(position[0])
        return 6.0 * position

    operate(meter, np.array([start]), adjuster(coarse=0.05))
    assert np.abs(np.diff(visited)).max() <= 0.05 + 1e-9


@pytest.mark.parametrize(("share", "all_set"), [(0.99, True), (2.0, False)])
def test_steps_of_twice_the_tolerance_over_the_slope_are_the_largest_that_do(share, all_set):
    """Closed form: two neighbouring steps on either side of the band are 2 within / slope apart."""
    start = np.linspace(0.3, 0.31, 200)
    wanted = adjuster(within=0.01, resolution=share * 2.0 * 0.01 / 5.0)
    found = operate(divider(np.full(200, 5.0)), start, wanted)
    assert (found.status == TrimStatus.SET).all() == all_set
    assert set(found.status) <= {TrimStatus.SET, TrimStatus.TOO_COARSE}
