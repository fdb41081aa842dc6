"""What holds for any units: neighbours, order and chunks change nothing, limits only tighten."""

from __future__ import annotations

import numpy as np
import pytest
from circuits import scattered, typical_values
from hypothesis import given, settings
from hypothesis import strategies as st
from small_study import study
from stages import self_biased, units_of

from tolsim.circuit.continuation import Compass, aim, solve_units
from tolsim.circuit.nominal import find_nominal
from tolsim.circuit.orbit import Solution, Status
from tolsim.circuit.thermal import Case
from tolsim.design import Limit
from tolsim.figures import measure_orbits, measure_start
from tolsim.verdicts import judge

STEPS = 64
SPREAD = {
    "capacitance": 0.1,
    "inductance": 0.05,
    "resistance": 0.3,
    "threshold": 0.1,
    "gain": 0.3,
    "coupling": 0.04,
    "voltage": 0.03,
}


@pytest.fixture(scope="module")
def compass() -> Compass:
    nominal = find_nominal(units_of(self_biased(), heated=True), STEPS)
    assert nominal.found
    return aim(nominal, tuple(nominal.case.values), STEPS)


def units(count: int, seed: int) -> Case:
    values = scattered(typical_values(self_biased(), count), np.random.default_rng(seed), SPREAD)
    return Case(self_biased(), values)


def answers(case: Case, compass: Compass) -> tuple[Solution, dict[str, np.ndarray]]:
    solution = solve_units(case, compass, STEPS)
    return solution, measure_orbits(case, solution) | measure_start(case, compass.nominal)


def same(one: tuple[Solution, dict[str, np.ndarray]], other: tuple[Solution, dict]) -> None:
    """Status, rounds and path exactly; figures to the rounding of another order of sums."""
    (first, figures), (second, others) = one, other
    assert first.status.tolist() == second.status.tolist()
    assert first.iterations.tolist() == second.iterations.tolist()
    assert first.way.tolist() == second.way.tolist()
    assert figures.keys() == others.keys()
    for name, value in figures.items():
        if name in {"energy_balance", "orbit_residual"}:  # themselves differences near zero
            np.testing.assert_allclose(value, others[name], atol=1e-6)
        else:
            np.testing.assert_allclose(value, others[name], rtol=1e-6, atol=1e-12, err_msg=name)


def joined(parts: list[tuple[Solution, dict[str, np.ndarray]]]):
    """Answers of several chunks as one."""
    first = parts[0][0]
    whole = first
    if len(parts) > 1:
        picked = np.concatenate([np.full(part.units, k) for k, (part, _) in enumerate(parts)])
        whole = first.take(np.zeros(len(picked), dtype=np.intp))
        for k, (part, _) in enumerate(parts):
            whole = whole.put(np.flatnonzero(picked == k), part)
    names = parts[0][1]
    return whole, {name: np.concatenate([figures[name] for _, figures in parts]) for name in names}


@settings(max_examples=3, deadline=None, derandomize=True)
@given(seed=st.integers(0, 2**32 - 1), size=st.integers(1, 5))
def test_chunk_size_changes_nothing(compass: Compass, seed: int, size: int) -> None:
    """Batch equals loop (chunks of 1) and any other chunks: values, status, rounds."""
    case = units(6, seed)
    starts = range(0, 6, size)
    chunks = [answers(case.take(np.arange(k, min(k + size, 6))), compass) for k in starts]
    same(answers(case, compass), joined(chunks))


@settings(max_examples=3, deadline=None, derandomize=True)
@given(seed=st.integers(0, 2**32 - 1), order=st.permutations(range(6)))
def test_permuting_units_permutes_answers(compass: Compass, seed: int, order: list[int]) -> None:
    case, shuffle = units(6, seed), np.array(order)
    solution, figures = answers(case, compass)
    permuted = solution.take(shuffle), {name: value[shuffle] for name, value in figures.items()}
    same(answers(case.take(shuffle), compass), permuted)


def test_a_lost_neighbour_changes_nothing(compass: Compass) -> None:
    """A unit of impossible values beside good ones: it alone has no answer."""
    case = units(4, 5)
    values = {key: value.copy() for key, value in case.values.items()}
    values["C1.capacitance"][2] = np.nan
    solution = solve_units(Case(case.design, values), compass, STEPS)
    assert solution.status[2] == Status.NOT_CONVERGED
    good = np.array([0, 1, 3])
    alone = solve_units(case.take(good), compass, STEPS)
    assert solution.status[good].tolist() == alone.status.tolist()
    np.testing.assert_allclose(solution.period[good], alone.period, rtol=1e-9)


def test_zero_spread_gives_the_nominal_answer(compass: Compass) -> None:
    """Units without deviation settle in one round on the nominal orbit itself."""
    case = Case(self_biased(), typical_values(self_biased(), 3))
    solution, figures = answers(case, compass)
    assert (solution.status == Status.SETTLED).all()
    assert (solution.iterations == 1).all()
    nominal = compass.nominal
    known = measure_orbits(nominal.case, nominal.solution) | measure_start(nominal.case, nominal)
    for name, value in known.items():
        np.testing.assert_allclose(
            figures[name], np.repeat(value, 3), rtol=1e-4, atol=1e-4, err_msg=name
        )


def troubled() -> Case:
    """A unit that settles, one that bursts, a dead, a too hot and an impossible one."""
    changes = {
        "RG.resistance": np.array([1e3, 7e4, 1e3, 1e3, 1e3]),
        "R1.resistance": np.array([632.0, 632.0, 60.0, 632.0, 632.0]),
        "ambient": np.array([25.0, 25.0, 25.0, 299.0, 25.0]),
        "C1.capacitance": np.array([1e-9] * 4 + [np.nan]),
    }
    return units_of(self_biased(), changes, heated=True)


def test_every_status_in_one_call(compass: Compass) -> None:
    """Settled, bursting, dead, too hot and impossible units side by side, each with its status.

    Bursts ("squegging"): W. A. Edson, "Vacuum-Tube Oscillators", 1953, chapter 13: the bias must
    follow the amplitude faster than the tank can change it.
    """
    case = troubled()
    solution = solve_units(case, compass, STEPS)
    wanted = [
        *(Status.SETTLED, Status.UNSTABLE, Status.NO_ORBIT),
        *(Status.NO_THERMAL_BALANCE, Status.NOT_CONVERGED),
    ]
    assert [Status(code) for code in solution.status] == wanted
    assert set(wanted) == set(Status)
    assert np.isfinite(solution.period).tolist() == [True, True, False, False, False]
    assert all(status.sentence for status in Status)
    figures = measure_orbits(case, solution)
    assert all(value.shape == (case.units,) for value in figures.values())
    assert figures["slowest_multiplier"][0] < 1 < figures["slowest_multiplier"][1]


@pytest.mark.slow
def test_troubled_units_alone_and_together(compass: Compass) -> None:
    """Batch equals loop through every fall-back too."""
    case = troubled()
    together = solve_units(case, compass, STEPS)
    for unit in range(case.units):
        alone = solve_units(case.take(np.array([unit])), compass, STEPS)
        assert alone.status[0] == together.status[unit]
        np.testing.assert_allclose(alone.period[0], together.period[unit], rtol=1e-6)


@pytest.mark.slow
def test_where_bursts_begin(compass: Compass) -> None:
    """A complex pair of multipliers leaves the unit circle as the bias gets slower."""
    resistances = np.array([1e4, 3e4, 5e4, 6e4])
    case = units_of(self_biased(), {"RG.resistance": resistances}, heated=True)
    solution = solve_units(case, compass, 128)
    largest = solution.multipliers[np.arange(4), np.abs(solution.multipliers).argmax(axis=1)]
    assert (np.diff(np.abs(largest[1:])) > 0).all()
    assert solution.status.tolist() == [Status.SETTLED] * 3 + [Status.UNSTABLE]
    assert np.abs(largest[3].imag) > 0.3


LIMITS = st.lists(
    st.tuples(st.sampled_from(["drain_peak", "current_rms", "voltage_peak"]), st.floats(0, 100)),
    min_size=1,
    max_size=3,
)


@settings(max_examples=40, deadline=None)
@given(limits=LIMITS, tighter=st.floats(0, 1), seed=st.integers(0, 2**32 - 1))
def test_a_tighter_limit_never_raises_the_yield(
    limits: list[tuple[str, float]], tighter: float, seed: int
) -> None:
    """Whatever the figures: lowering any bound passes the same units or fewer."""
    rng = np.random.default_rng(seed)
    count = 50
    status = rng.integers(0, 5, count)
    columns = ("Q1.drain_peak", "C1.current_rms", "L1.current_rms", "C1.voltage_peak")
    figures = {name: np.where(status < 2, rng.uniform(0, 100, count), np.nan) for name in columns}
    figures |= {
        "growth_rate": rng.normal(1, 1, count),
        "start_frequency": np.full(count, 5e6),
        "mode_match": rng.uniform(0, 1, count),
        "idle_current": rng.uniform(0, 1, count),
    }

    def passed(share: float) -> np.ndarray:
        rules = tuple(
            Limit(figure=name, at_most=share * bound, rule="test") for name, bound in limits
        )
        design = study(self_biased().parts, self_biased().rails)
        case = design.model_copy(update={"limits": rules})
        nominal = {"start_frequency": 5e6, "supply_current": 1.0}
        return judge(case, "room", "normal", status, figures, nominal).verdict == "pass"

    loose, tight = passed(1.0), passed(tighter)
    assert not (tight & ~loose).any()
