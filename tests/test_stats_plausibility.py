"""A board among predicted units: closed forms, and the rate of false alarms."""

import numpy as np
import pytest
from scipy import stats

from tolsim.stats.plausibility import plausibility

CORRELATED = np.array([[1.0, 0.8], [0.8, 1.0]])


def rng(key=0):
    return np.random.default_rng([2026, key])


def test_percentile_and_z_of_a_normal_figure_and_a_normal_meter():
    """Value and error are normal, so is their sum: Phi((y - mu) / sqrt(sigma^2 + s^2))."""
    x = stats.norm(10.0, 2.0).ppf((np.arange(20_000) + 0.5) / 20_000)[:, None]
    found = plausibility(x, np.array([13.0]), np.array([1.5]), rng())
    assert found.percentile[0] == pytest.approx(stats.norm.cdf(3.0 / 2.5), abs=1e-4)
    assert found.z[0] == pytest.approx(3.0 / 2.5, rel=1e-3)
    assert found.p[0] == pytest.approx(2.0 * stats.norm.sf(3.0 / 2.5), abs=3e-4)
    assert not found.outside[0]


def test_distance_sees_two_readings_that_do_not_go_together():
    """Both within 1.5 sigma, in opposite directions, of figures that go together."""
    x = rng().multivariate_normal([0.0, 0.0], CORRELATED, size=4000)
    apart = plausibility(x, np.array([1.5, -1.5]), np.zeros(2), rng(1))
    known = float(np.sqrt([1.5, -1.5] @ np.linalg.inv(CORRELATED) @ [1.5, -1.5]))
    assert apart.distance == pytest.approx(known, rel=0.05)
    assert apart.joint_p < 0.01
    assert (apart.p > 0.1).all()
    together = plausibility(x, np.array([1.5, 1.5]), np.zeros(2), rng(1))
    assert together.joint_p > 0.2


def test_under_the_model_every_p_is_equally_likely_whatever_the_shape():
    """Lopsided, correlated figures, coarse meters, 150 units: rank of the board is uniform."""
    draws, found = rng(7), []
    error = np.array([0.5, 0.05, 0.0])
    for _ in range(500):
        normal = draws.multivariate_normal(
            np.zeros(3), [[1, 0.9, 0], [0.9, 1, 0], [0, 0, 1]], size=151
        )
        figures = np.column_stack([np.exp(normal[:, 0]), normal[:, 1], normal[:, 2] ** 3])
        board = figures[0] + error * draws.standard_normal(3)
        found.append(plausibility(figures[1:], board, error, draws).joint_p)
    p = np.array(found)
    assert stats.kstest(p, "uniform").pvalue > 0.01
    assert np.mean(p < 0.01) <= 0.025  # 1 % wanted; 13 or more of 500 come once in 1000


def test_a_board_from_elsewhere_is_found():
    x = rng().multivariate_normal([0.0, 0.0], CORRELATED, size=500)
    found = plausibility(x, np.array([6.0, 0.0]), np.array([0.1, 0.1]), rng(2))
    assert found.joint_p < 1e-4  # beyond all units: the chi-square law tells how far
    assert found.outside.tolist() == [True, False]
    assert np.argmax(found.share) == 0


def test_a_figure_that_does_not_scatter_is_judged_by_the_meter_alone():
    x = np.column_stack([np.full(200, 5.0), rng().normal(size=200)])
    near = plausibility(x, np.array([5.1, 0.0]), np.array([0.1, 0.0]), rng(3))
    far = plausibility(x, np.array([6.0, 0.0]), np.array([0.1, 0.0]), rng(3))
    assert near.joint_p > 0.05
    assert far.joint_p < 1e-6
    assert near.percentile[0] == pytest.approx(stats.norm.cdf(1.0))


def test_two_names_for_one_figure_do_not_break_the_distance():
    one = rng().normal(size=(300, 1))
    found = plausibility(np.hstack([one, one]), np.array([0.3, 0.3]), np.zeros(2), rng(4))
    assert np.isfinite([found.distance, found.joint_p]).all()
    assert found.joint_p > 0.1
