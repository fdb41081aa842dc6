"""Every shipped spread table is sound, says where it comes from, and can be drawn."""

import re

import numpy as np
import pytest

from tolsim.library import distributions_folder
from tolsim.spread.reading import read_shelf
from tolsim.spread.table import ASPECTS, BASES
from tolsim.spread.words import describe

TABLES = read_shelf(None, None).tables
every_table = pytest.mark.parametrize("table", TABLES.values(), ids=list(TABLES))

FAMILIES = {  # what a stage needs, by kind of part
    "capacitor": 34, "inductor": 16, "coupling": 2, "resistor": 8, "potentiometer": 4,
    "diode": 2, "clamp": 3, "mosfet": 5, "drive": 1, "load": 6, "rail": 5,
}  # fmt: skip


def test_no_shipped_table_has_a_mistake():
    assert read_shelf(None, None).problems() == []


def test_every_family_is_there():
    for kind, count in FAMILIES.items():
        assert sum(kind in table.kinds for table in TABLES.values()) >= count, kind


@every_table
def test_it_says_where_it_comes_from(table):
    assert table.title
    assert table.basis in BASES
    assert len(table.source) > 8
    for spread in table.quantities.values():
        for origin in spread.origins.values():
            assert origin.basis in BASES
            assert len(origin.source) >= 8
    assert re.fullmatch(r"[0-9a-f]{64}", table.sha256)
    assert (distributions_folder() / table.file).is_file()


@every_table
def test_every_law_can_be_drawn_and_moves_little(table):
    u = np.array([1e-9, 0.1, 0.5, 0.9, 1.0 - 1e-9])
    for spread in table.quantities.values():
        drawn = {aspect: spread.drawn(aspect) for aspect in ASPECTS}
        for law in drawn.values():
            if law is not None:
                x = law.ppf(u)
                assert np.all(np.isfinite(x))
                assert np.all(np.diff(x) >= 0.0)
                assert np.all(np.isfinite(law.support))  # corners need ends
        celsius = np.array([[-40.0], [25.0], [125.0]])
        if spread.temperature is not None:
            values = drawn["temperature"].ppf(u) if drawn["temperature"] else np.zeros(1)
            factor = spread.temperature.factor(values, celsius)
            assert np.all((factor > 0.1) & (factor < 2.0))
        if spread.ageing is not None:
            factor = spread.ageing.factor(drawn["ageing"].ppf(u), np.array([[0.0], [1e5]]))
            assert np.all((factor > 0.5) & (factor < 1.5))


@every_table
def test_it_can_be_described(table):
    said = describe(table)
    laws = sum(
        getattr(spread, aspect) is not None
        for spread in table.quantities.values()
        for aspect in ASPECTS
    )
    ties = sum(bool(spread.follows) for spread in table.quantities.values())
    assert len(said) == laws + ties + 1
    assert sum("[guess]" in sentence for sentence in said) == len(table.guesses)


def test_lot_and_scatter_fill_the_marked_tolerance():
    """A grade of 5 % never delivers a part outside 5 % (IEC 60062 letters are limits)."""
    for name, limit in {
        "class1-ceramic-1pct": 0.01,
        "class1-ceramic-2pct": 0.02,
        "class1-ceramic-5pct": 0.05,
        "class1-ceramic-10pct": 0.10,
        "class2-ceramic-x7r-10pct": 0.10,
        "film-pp-5pct": 0.05,
        "resistor-thick-1pct": 0.01,
        "clamp-zener-5pct": 0.05,
        "clamp-zener-2pct": 0.02,
        "clamp-varistor-10pct": 0.10,
        "class1-ceramic-p100-5pct": 0.05,
        "class1-ceramic-n330-5pct": 0.05,
        "class1-ceramic-n1500-10pct": 0.10,
        "rf-porcelain-p90-5pct": 0.05,
        "rf-power-ceramic-n750-10pct": 0.10,
        "class2-ceramic-x7r-20pct": 0.20,
        "class2-ceramic-z5u-20pct": 0.20,
        "film-pp-1pct": 0.01,
        "film-pp-10pct": 0.10,
        "film-ps-2pct": 0.02,
        "film-pps-5pct": 0.05,
        "mica-1pct": 0.01,
        "electrolytic-20pct": 0.20,
        "choke-drum-10pct": 0.10,
        "choke-drum-20pct": 0.20,
        "resistor-thin-1pct": 0.01,
        "resistor-carbon-film-5pct": 0.05,
        "resistor-shunt-1pct": 0.01,
    }.items():
        spreads = TABLES[name].quantities
        spread = next(iter(spreads.values()))
        reach = sum(law.support[1] for law in (spread.lot, spread.tolerance) if law is not None)
        assert reach == pytest.approx(limit), name


# EIA-198-1 and EIA-198: change at 85 degC from 25 degC in per cent, lowest and highest.
@pytest.mark.parametrize(
    ("name", "low", "high"),
    [
        ("class1-ceramic-5pct", -0.18, 0.18),
        ("class1-ceramic-p100-5pct", 0.42, 0.78),
        ("class1-ceramic-n330-5pct", -2.34, -1.62),
        ("class1-ceramic-n750-5pct", -5.22, -3.78),
        ("class1-ceramic-n1500-10pct", -10.5, -7.5),
        ("class2-ceramic-x5r-20pct", -15.0, 15.0),
        ("class2-ceramic-y5v", -82.0, 22.0),
        ("class2-ceramic-z5u-20pct", -56.0, 22.0),
    ],
)
def test_temperature_of_the_classes(name, low, high):
    law = TABLES[name].quantities["capacitance"].temperature
    change = 100.0 * (law.factor(law.drawn.ppf([1e-12, 1.0 - 1e-12]), 85.0) - 1.0)
    assert change == pytest.approx([low, high], abs=0.01)


# Rates per decade of hours: X7R and X5R 2.5 within 2 to 3 %, Y5V up to 7 %, Z5U 3 to 7 %.
@pytest.mark.parametrize(
    ("name", "rates"),
    [
        ("class2-ceramic-x7r-10pct", (-3, -2)),
        ("class2-ceramic-x7r-20pct", (-3, -2)),
        ("class2-ceramic-y5v", (-7, -5)),
        ("class2-ceramic-z5u-20pct", (-7, -3)),
    ],
)
def test_ageing_of_the_classes(name, rates):
    law = TABLES[name].quantities["capacitance"].ageing
    assert law.rate.support == pytest.approx(tuple(rate / 100 for rate in rates))
    middle = law.rate.mean
    decades = law.factor(middle, 10_000.0) / law.factor(middle, 1000.0)
    # relative to one hour: 1 + k log10 t (EIA-521), so 10 000 h over 1000 h:
    assert float(decades) == pytest.approx((1 + 4 * middle) / (1 + 3 * middle), rel=1e-12)
    for nothing in ("class1-ceramic-5pct", "mica-1pct"):
        assert TABLES[nothing].quantities["capacitance"].ageing is None


def test_guesses_are_marked_where_a_standard_gives_limits_only():
    """A letter or code never tells how parts lie between the limits."""
    for name, table in TABLES.items():
        for quantity, spread in table.quantities.items():
            for aspect in ("tolerance", "lot"):
                if getattr(spread, aspect) is not None:
                    assert spread.origins[aspect].basis != "standard" or (
                        type(getattr(spread, aspect)).__name__ == "Uniform"
                    ), (name, quantity, aspect)


def test_there_are_enough_of_them():
    assert len(TABLES) >= 80
