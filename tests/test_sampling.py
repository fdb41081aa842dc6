"""Units are the same whatever else is asked for; draws follow their laws."""

import hashlib
import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.random import Generator, Philox
from scipy import stats
from small_study import capacitor, everything, inductor, study, tables

from tolsim.laws import LogNormal, Uniform
from tolsim.spread.sampling import Factor, draw, factors

ANY = Uniform(0.0, 1.0)


def factor(name, law=ANY):
    return Factor(name, law, name, "", "tolerance", "")


A, B = factor("A.x tolerance"), factor("B.x tolerance", LogNormal(1.0, 0.3))


@settings(max_examples=60, deadline=None)
@given(first=st.integers(0, 10**7), count=st.integers(0, 50), seed=st.integers(0, 2**70))
def test_a_unit_is_the_same_in_any_chunk(first, count, seed):
    together = draw([A, B], seed, first, count)
    alone = [draw([A, B], seed, first + k, 1) for k in range(count)]
    assert together.u.shape == (count, 2)
    for k, one in enumerate(alone):
        np.testing.assert_array_equal(together.u[k], one.u[0])
        np.testing.assert_array_equal(together.values[k], one.values[0])


def test_other_factors_and_their_order_change_nothing():
    column = draw([A], 7, 0, 100).u[:, 0]
    np.testing.assert_array_equal(draw([B, A], 7, 0, 100).u[:, 1], column)
    np.testing.assert_array_equal(draw([A, B], 7, 0, 100).u[:, 0], column)


def test_units_of_a_longer_run_begin_with_the_shorter_one():
    np.testing.assert_array_equal(draw([A], 1, 0, 1000).u[:10], draw([A], 1, 0, 10).u)


def test_the_stream_is_philox_keyed_by_seed_and_name():
    """The same numbers by another road, so that no version may change a stored run."""
    digest = hashlib.blake2b(b"7\nA.x tolerance", digest_size=16).digest()
    raw = Generator(Philox(key=int.from_bytes(digest, "little"))).bit_generator.random_raw(9)
    expected = [((int(word) >> 12) + 0.5) / 2**52 for word in raw]
    np.testing.assert_array_equal(draw([A], 7, 0, 9).u[:, 0], expected)
    np.testing.assert_array_equal(draw([A], 7, 5, 4).u[:, 0], expected[5:])


def test_shares_lie_in_the_open_interval():
    u = draw([A], 3, 0, 200_000).u
    assert u.min() > 0.0
    assert u.max() < 1.0
    highest = ((2**52 - 1) + 0.5) * 2.0**-52
    assert 0.0 < 0.5 * 2.0**-52
    assert highest < 1.0


def test_columns_are_uniform_and_independent():
    """Kolmogorov-Smirnov and Pearson at p = 1e-3, fixed seed."""
    u = draw([A, B, factor("C")], 11, 0, 20_000).u
    for column in u.T:
        assert stats.kstest(column, "uniform").pvalue > 1e-3
    for one, other in itertools.combinations(u.T, 2):
        assert stats.pearsonr(one, other).pvalue > 1e-3
    other_seed = draw([A], 12, 0, 20_000).u[:, 0]
    assert stats.pearsonr(u[:, 0], other_seed).pvalue > 1e-3


def test_values_are_the_laws_of_the_shares():
    draws = draw([A, B], 5, 3, 100)
    np.testing.assert_array_equal(draws.values[:, 1], B.law.ppf(draws.u[:, 1]))
    assert draws.names == (A.name, B.name)
    assert (draws.first, draws.count) == (3, 100)


def test_factors_of_a_study():
    names = [factor.name for factor in factors(everything(), tables())]
    assert len(names) == len(set(names))
    for name in (
        "C1#1.capacitance tolerance",
        "C1#3.capacitance tolerance",
        "reel tank: capacitance lot shift",
        "reel tank: capacitance temperature slope",
        "C2.capacitance tolerance",
        "C2.capacitance ageing rate",
        "C1.esr tolerance",
        "C3.capacitance lot shift",
        "C3.capacitance temperature slope",
        "reel fets: threshold lot shift",
        "Q1.threshold tolerance",
        "Q2.threshold tolerance",
        "LAMP.resistance tolerance",
        "P1.setting tolerance",
        "vdd.voltage tolerance",
        "ambient",
    ):
        assert name in names
    assert "C1.capacitance tolerance" not in names
    assert "C1.capacitance lot shift" not in names
    assert "R1.resistance tolerance" not in names


def test_a_factor_knows_its_part_and_table():
    found = {factor.name: factor for factor in factors(everything(), tables())}
    piece = found["C1#2.capacitance tolerance"]
    assert (piece.part, piece.quantity, piece.aspect, piece.table) == (
        "C1#2",
        "capacitance",
        "tolerance",
        "c-lot",
    )
    assert found["reel tank: capacitance lot shift"].part == "tank"
    assert found["ambient"].aspect == "condition"


def test_no_tables_no_factors():
    assert factors(study({"C1": capacitor(), "L1": inductor()}), {}) == ()
    assert draw((), 1, 0, 5).values.shape == (5, 0)


@pytest.mark.parametrize("seed", [0, 1])
def test_seed_zero_is_a_seed(seed):
    assert draw([A], seed, 0, 1).u[0, 0] != draw([A], seed + 1, 0, 1).u[0, 0]
