"""Draws to part values: closed forms, sharing by reels, states, conditions, banks."""

import numpy as np
import pytest
from small_study import capacitor, everything, inductor, mosfet, study, tables

from tolsim.design import Condition, State
from tolsim.spread.coil import air_coil_inductance
from tolsim.spread.part_values import nominal_values, part_values
from tolsim.spread.sampling import draw, factors

TABLES = tables()


def values_of(given, count, condition="room", state="normal", seed=1, first=0):
    draws = draw(factors(given, TABLES), seed, first, count)
    return part_values(given, TABLES, condition, state, draws)


KEYS = {
    "ambient", "C1.capacitance", "C1.esr", "C1.largest_share", "L1.inductance", "L1.resistance",
    "K1.coupling", "R1.resistance", "P1.resistance", "P1.setting", "D1.voltage", "D1.resistance",
    "D1.capacitance", "Z1.voltage", "Z1.resistance", "Z1.capacitance", "Q1.threshold", "Q1.gain",
    "Q1.drift_resistance", "Q1.cgs", "Q1.cgd0", "Q1.cds0", "V1.high", "V1.low", "LAMP.coupling",
    "LAMP.inductance", "LAMP.resistance", "vdd.voltage", "vb.voltage",
}  # fmt: skip


def test_every_part_has_its_values():
    values = values_of(everything(), 7, "hot", "full")
    nominal = nominal_values(everything(), TABLES, "hot", "full")
    assert set(values) >= KEYS
    assert set(values) == set(nominal)
    for key in values:
        assert values[key].shape == (7,), key
        assert nominal[key].shape == (1,), key
        assert np.all(np.isfinite(values[key])), key


def test_nominal_values_are_the_ones_written_down():
    values = nominal_values(everything(), TABLES, "room", "full")
    fresh = 1.0 / (1.0 - 0.025 * 3.0)  # one hour old, marked value at 1000 h, -2.5 % per decade
    expected = {
        "ambient": 25.0,
        "C1.capacitance": 3e-9 * fresh,
        "C1.largest_share": 1.0 / 3.0,
        "C1.esr": 1e-3 / (2.0 * np.pi * 1e6 * 3e-9),  # tan delta / (2 pi f C)
        "C2.largest_share": 1.0,
        "C2.esr": 0.0,
        "L1.inductance": float(air_coil_inductance(10, 0.02, 0.02)),
        "L2.resistance": 0.06,
        "K1.coupling": 0.3,
        "P1.setting": 0.5,
        "Q1.threshold": 3.4,
        "Q1.gain": 11.0,
        "Q1.cgs": 2e-9,
        "V1.high": 10.0,
        "LAMP.resistance": 5.0,
        "vdd.voltage": 24.0,
    }
    for key, value in expected.items():
        assert values[key][0] == pytest.approx(value, rel=1e-12), key
    q = 2.0 * np.pi * 1e7 * values["L1.inductance"] / values["L1.resistance"]
    assert q[0] == pytest.approx(200.0)


def test_states_override_values_and_keep_the_rank():
    full = values_of(everything(), 200, state="full")["LAMP.resistance"]
    dark = values_of(everything(), 200, state="dark")["LAMP.resistance"]
    u = (full / 5.0 - 0.9) / 0.2
    np.testing.assert_allclose(dark, 500.0 * (0.5 + u), rtol=1e-9)
    assert np.ptp(dark) > 300.0
    assert nominal_values(everything(), TABLES, "room", "dark")["LAMP.resistance"] == 500.0


def test_conditions_change_the_environment_only():
    room, hot = (
        values_of(everything(), 50, "room", "full"),
        values_of(everything(), 50, "hot", "full"),
    )
    assert np.all(room["ambient"] == 25.0)
    assert np.all((hot["ambient"] >= 60.0) & (hot["ambient"] <= 80.0))  # law plus board rise
    np.testing.assert_allclose(hot["vdd.voltage"], 0.9 * room["vdd.voltage"])
    np.testing.assert_array_equal(hot["vb.voltage"], room["vb.voltage"])
    np.testing.assert_array_equal(hot["Q1.threshold"], room["Q1.threshold"])
    assert nominal_values(everything(), TABLES, "hot", "full")["ambient"][0] == 70.0


def test_conditions_with_laws_share_their_draw():
    """Common random numbers: the same unit is warm in each condition that lets ambient vary."""
    narrow = {"law": "uniform", "low": "20 degC", "high": "30 degC"}
    wide = {"law": "uniform", "low": "0 degC", "high": "50 degC"}
    given = study(
        {"C1": capacitor()},
        conditions={"narrow": Condition(ambient=narrow), "wide": Condition(ambient=wide)},
    )
    one = values_of(given, 20, "narrow")["ambient"]
    other = values_of(given, 20, "wide")["ambient"]
    np.testing.assert_allclose((one - 20.0) / 10.0, other / 50.0, atol=1e-12)


def test_temperature_and_age_multiply():
    """C = C0 (1 + lot + tolerance) (1 + slope dT) [1 - k log10 t] / [1 - k log10 1000 h]."""
    given = study(
        {"C1": capacitor(spread="c-lot")},
        conditions={"late": Condition(ambient=85.0, age=1e5), "room": Condition(age=1000.0)},
    )
    found = factors(given, TABLES)
    draws = draw(found, 4, 0, 30)
    column = {factor.aspect: draws.values[:, k] for k, factor in enumerate(found)
              if factor.quantity == "capacitance"}  # fmt: skip
    base = 1e-9 * (1.0 + column["lot"] + column["tolerance"])
    ageing = (1.0 + 5.0 * column["ageing"]) / (1.0 + 3.0 * column["ageing"])
    expected = base * (1.0 + 60.0 * column["temperature"]) * ageing
    values = part_values(given, TABLES, "late", "normal", draws)["C1.capacitance"]
    np.testing.assert_allclose(values, expected, rtol=1e-12)
    np.testing.assert_allclose(
        part_values(given, TABLES, "room", "normal", draws)["C1.capacitance"], base, rtol=1e-12
    )


def test_soldering_sets_one_clock_back():
    """At 1 h a part reads 1 / 0.925 = 1.0811 of its marked (1000 h) value, at ten years 0.9475.

    IEC 60384-9 annex, 2.5 % per decade.  A repair starts again at 1.0811.
    """
    rows = {
        "new": Condition(),
        "referee": Condition(age=1000.0),
        "old": Condition(age=87600.0),
        "repaired": Condition(age=87600.0, since_soldering=1.0),
        "a month later": Condition(age=87600.0 + 720.0, since_soldering=720.0),
    }
    given = study({"C1": capacitor(spread="c-lot"), "C2": capacitor(spread="c-film")},
                  conditions=rows)  # fmt: skip
    laws = TABLES | tables(FILM)
    found = {
        name: {key: value[0] / 1e-9 for key, value in nominal_values(given, laws, name, "normal")
               .items() if key.endswith("capacitance")}
        for name in rows
    }  # fmt: skip
    ceramic = {name: values["C1.capacitance"] for name, values in found.items()}
    assert ceramic["new"] == ceramic["repaired"] == pytest.approx(1.08108, abs=5e-6)
    assert ceramic["referee"] == pytest.approx(1.0, abs=1e-12)
    assert ceramic["old"] == pytest.approx(0.94750, abs=5e-6)
    assert ceramic["a month later"] == pytest.approx(1.0 + 0.025 * 0.142668 / 0.925, abs=1e-5)
    film = {name: values["C2.capacitance"] for name, values in found.items()}
    assert film["new"] == 1.0
    assert film["repaired"] == film["old"] == pytest.approx(1.02)  # rate at ten years


FILM = b"""
[table.c-film]
title = "Capacitor that drifts with the root of time"
for = "capacitor"
basis = "guess"
source = "made for a test"
[table.c-film.capacitance]
ageing = {law = "sqrt-time", rate = "2 %", reference = "87600 h"}
"""


def test_no_unit_was_soldered_before_it_was_built():
    with pytest.raises(ValueError, match="no more than the age"):
        Condition(age=10.0, since_soldering=11.0)
    drawn = Condition(age={"law": "uniform", "low": "0 h", "high": "100 h"}, since_soldering=50.0)
    given = study({"C1": capacitor(spread="c-lot")}, conditions={"room": drawn})
    young = values_of(given, 400)["C1.capacitance"]  # some are younger than that themselves
    assert np.all(np.isfinite(young))


def test_parts_of_one_reel_share_the_lot_shift():
    """Correlation of two parts of one reel: var(lot) / (var(lot) + var(scatter))."""
    given = study({
        "C1": capacitor(spread="c-lot", reel="a"),
        "C2": capacitor(spread="c-lot", reel="a"),
        "C3": capacitor(spread="c-lot", reel="b"),
    }, conditions={"room": Condition(age=1000.0)})  # fmt: skip
    values = values_of(given, 40_000)
    lot, scatter = 0.986578 * 0.025, 0.986578 * 0.008
    share = lot**2 / (lot**2 + scatter**2)
    one, two, three = (values[f"C{k}.capacitance"] for k in (1, 2, 3))
    assert np.corrcoef(one, two)[0, 1] == pytest.approx(share, abs=0.005)
    assert np.corrcoef(one, three)[0, 1] == pytest.approx(0.0, abs=0.02)


def test_a_bank_averages_scatter_but_not_the_lot_shift():
    """Five pieces: sd = sqrt(2.5^2 + 0.8^2 / 5) % = 2.53 % (variance of a mean), cut at 3 sigma."""
    given = study(
        {"C1": capacitor(spread="c-lot", pieces=5)}, conditions={"room": Condition(age=1000.0)}
    )
    values = values_of(given, 40_000)
    relative = values["C1.capacitance"] / 5e-9
    expected = 0.986578 * np.hypot(0.025, 0.008 / np.sqrt(5.0))
    assert expected == pytest.approx(0.986578 * 0.0253, rel=2e-3)
    assert relative.std() == pytest.approx(expected, rel=0.015)
    assert np.all(values["C1.largest_share"] >= 0.2)
    assert np.all(values["C1.largest_share"] < 0.22)


def test_zero_spread_is_the_nominal_answer():
    bare = study({"C1": capacitor(), "L1": inductor(), "Q1": mosfet()})
    nominal = nominal_values(bare, {}, "room", "normal")
    draws = draw(factors(bare, {}), 1, 0, 3)
    for key, value in part_values(bare, {}, "room", "normal", draws).items():
        np.testing.assert_array_equal(value, np.repeat(nominal[key], 3))


def test_chunks_and_permutations_of_units():
    whole = values_of(everything(), 12, "hot", "full")
    for first in (0, 5, 11):
        part = values_of(everything(), 12 - first, "hot", "full", first=first)
        for key, value in part.items():
            np.testing.assert_array_equal(value, whole[key][first:], err_msg=key)


def test_threshold_position_in_the_window():
    sheet = {
        "threshold": {"minimum": 2.0, "typical": 2.8, "maximum": 4.0, "current": 250e-6},
        "transconductance": {"typical": 8.0, "current": 8.0},
        "capacitance": {"ciss": 1e-9, "coss": 3e-10, "crss": 1e-10, "drain_voltage": 25.0},
    }
    given = study({"Q1": mosfet(sheet=sheet, spread="m-window")})
    nominal = nominal_values(given, TABLES, "room", "normal")["Q1.threshold"][0]
    found = factors(given, TABLES)
    draws = draw(found, 2, 0, 4000)
    position = sum(
        draws.values[:, k] for k, factor in enumerate(found) if factor.quantity == "threshold"
    )
    shift = part_values(given, TABLES, "room", "normal", draws)["Q1.threshold"] - nominal
    np.testing.assert_allclose(shift, np.where(position < 0, 0.8 * position, 1.2 * position))
    assert -0.8 <= shift.min() < -0.75
    assert 1.15 < shift.max() <= 1.2


def test_a_model_gets_the_implied_window_and_one_capacitance_scale():
    values = values_of(everything(), 2000, state="full")
    shift = values["Q1.threshold"] - 3.4
    assert -0.5 <= shift.min() < -0.45
    assert 0.45 < shift.max() <= 0.5
    assert np.corrcoef(values["Q1.threshold"], values["Q2.threshold"])[0, 1] > 0.7
    assert np.ptp(values["Q1.cgs"] / 2e-9) > 0.19


def test_a_trimmer_stops_at_its_end_zones():
    setting = values_of(everything(), 500, state="full")["P1.setting"]
    assert setting.min() == 0.02
    assert setting.max() == 0.98


def test_overrides_reach_any_quantity():
    given = study(
        {"C1": capacitor(pieces=2), "Q1": mosfet()},
        states={"other": State(values={"C1.capacitance": 2e-9, "Q1.threshold": 3.0})},
    )
    values = nominal_values(given, {}, "room", "other")
    assert values["C1.capacitance"][0] == pytest.approx(4e-9)  # the value of each piece
    assert values["Q1.threshold"][0] == 3.0


# f = f0 / sqrt(ab), a ~ U(1 +- 5 %), b ~ U(1 +- 5 %).  From E[a^-1/2] = (sqrt(1+t) - sqrt(1-t)) / t
# and E[1/a] = ln[(1+t)/(1-t)] / (2t): mean 1.000625782, sd 0.020442875; quantiles by
# inverting the exact distribution of the product in mpmath.
def test_frequency_of_an_lc_circuit():
    given = study({"C1": capacitor(spread="c-5"), "L1": inductor(spread="l-5")})
    count = 400_000
    values = values_of(given, count, seed=20)
    c, coil = values["C1.capacitance"], values["L1.inductance"]
    f = 1.0 / np.sqrt(c * 1e9 * coil * 1e6)
    t = 0.05
    root = (np.sqrt(1 + t) - np.sqrt(1 - t)) / t
    inverse = np.log((1 + t) / (1 - t)) / (2 * t)
    assert root**2 == pytest.approx(1.000625782, abs=5e-10)
    sd = np.sqrt(inverse**2 - root**4)
    assert sd == pytest.approx(0.020442875, abs=5e-10)
    assert f.mean() == pytest.approx(root**2, abs=4.0 * sd / np.sqrt(count))
    assert f.std() == pytest.approx(sd, rel=4.0 / np.sqrt(2.0 * count))
    exact = {0.001: 0.9544142, 0.01: 0.9588454, 0.05: 0.9669791, 0.5: 1.0004101,
             0.95: 1.0354454, 0.99: 1.0448640, 0.999: 1.0501607}  # fmt: skip
    for share, quantile in exact.items():
        assert np.quantile(f, share) == pytest.approx(quantile, abs=3e-4)
        below = np.mean(f <= quantile)
        assert below == pytest.approx(share, abs=4.0 * np.sqrt(share * (1 - share) / count))
    # First-order shares 0.499948 each: the relation is all but straight, so r^2 measures them.
    assert np.corrcoef(f, c)[0, 1] ** 2 == pytest.approx(0.499948, abs=0.005)
    assert np.corrcoef(f, coil)[0, 1] ** 2 == pytest.approx(0.499948, abs=0.005)
    low, high = 1.0 / 1.05, 1.0 / 0.95
    assert low < f.min()
    assert f.max() < high
