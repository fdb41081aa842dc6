"""Figures, their owners and ratings agree with the parts."""

from tolsim.figure_names import FIGURES, figure_of, figures_of, targets
from tolsim.parts import PART_KINDS


def test_ratings_are_ratings_of_the_kind():
    for info in FIGURES.values():
        if info.rating is not None:
            assert info.rating in PART_KINDS[info.owner].RATINGS, info


def test_a_name_has_one_unit_of_measure_whoever_owns_it():
    units = {(info.name, info.unit_of_measure) for info in FIGURES.values()}
    assert len(units) == len({name for name, _ in units})


def test_columns():
    assert figure_of("stage", "frequency").column("") == "frequency"
    assert figure_of("mosfet", "drain_peak").column("Q1") == "Q1.drain_peak"
    assert figure_of("mosfet", "frequency") is None
    rail = {"current_mean", "current_ripple", "transition_current_peak"}
    assert {info.name for info in figures_of("rail")} == rail


def test_targets_of_a_limit():
    kinds = {"C1": "capacitor", "Q1": "mosfet", "L1": "inductor"}
    assert [ref for ref, _ in targets("voltage_peak", (), kinds)] == ["C1", "L1"]
    assert [ref for ref, _ in targets("voltage_peak", ("L1", "Q1"), kinds)] == ["L1"]
    assert [ref for ref, _ in targets("frequency", (), kinds)] == [""]
    assert [ref for ref, _ in targets("idle_dissipation", (), kinds)] == ["", "Q1"]
