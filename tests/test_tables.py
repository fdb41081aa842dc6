"""Every shipped spread table is sound, says where it comes from, and can be drawn."""

import re

import numpy as np
import pytest

from tolsim.library import distributions_folder
from tolsim.spread.reading import load_tables
from tolsim.spread.table import ASPECTS, BASES
from tolsim.spread.words import describe

TABLES = load_tables(None, None)
every_table = pytest.mark.parametrize("table", TABLES.values(), ids=list(TABLES))

FAMILIES = {  # what a stage needs, by kind of part
    "capacitor": 12, "inductor": 6, "coupling": 2, "resistor": 4, "potentiometer": 2,
    "diode": 1, "clamp": 1, "mosfet": 3, "drive": 1, "load": 3, "rail": 2,
}  # fmt: skip


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
    assert len(said) == laws + 1
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
    }.items():
        spreads = TABLES[name].quantities
        spread = next(iter(spreads.values()))
        reach = sum(law.support[1] for law in (spread.lot, spread.tolerance) if law is not None)
        assert reach == pytest.approx(limit), name
