"""Windings: round-wire corrections, skin and proximity effect, and the spread of their shape."""

import math

import numpy as np
import pytest
from pydantic import ValidationError
from scipy.constants import mu_0
from scipy.special import ellipe, ellipk
from small_study import inductor, study

from tolsim.library import distributions_folder
from tolsim.parts import Inductor
from tolsim.spread.checks import check_spread
from tolsim.spread.coil import (
    air_coil_inductance,
    lead_inductance,
    mutual_correction,
    round_wire_inductance,
)
from tolsim.spread.part_values import nominal_values, part_values
from tolsim.spread.reading import read_tables
from tolsim.spread.sampling import draw, factors
from tolsim.spread.winding import winding_notes
from tolsim.spread.wire import COPPER, coil_resistance, crowding, skin_depth, skin_effect
from tolsim.spread.words import assumptions

TABLES = read_tables((distributions_folder() / "windings.toml").read_bytes(), "windings.toml", [])


# Rosa's B for 2 ... 10 turns: E. B. Rosa, Bull. Bureau of Standards 2 (1906), Table VIII;
# F. W. Grover 1946, Table 39 (values from memory).
ROSA_B = [0.0, 0.1137, 0.1663, 0.1973, 0.2180, 0.2329, 0.2443, 0.2532, 0.2604, 0.2664]


def test_mutual_correction_is_rosas_table():
    assert mutual_correction(np.arange(1, 11)) == pytest.approx(ROSA_B, abs=1e-4)


def test_mutual_correction_for_many_turns():
    """ln(2 pi) - 3/2 for an endless coil, from Stirling; next term -ln(N) / (6 N)."""
    for turns in (300, 5000):
        limit = math.log(2.0 * math.pi) - 1.5 - math.log(turns) / (6.0 * turns) - 0.33084 / turns
        assert float(mutual_correction(turns)) == pytest.approx(limit, abs=1e-6)


def loops(turns, diameter, length, wire, internal):
    """Sum over coaxial rings: Maxwell's mutual inductance of two circles, and of each with itself.

    M = mu0 a [(2/k - k) K - (2/k) E], k^2 = 4 a^2 / (4 a^2 + z^2) (Treatise, art. 701);
    L = mu0 a [ln(8 a / r) - 2 + Y].
    """
    a, pitch = diameter / 2.0, length / turns
    total = turns * mu_0 * a * (math.log(8.0 * a / (wire / 2.0)) - 2.0 + internal)
    for n in range(1, turns):
        square = 4.0 * a**2 / (4.0 * a**2 + (n * pitch) ** 2)
        k = math.sqrt(square)
        mutual = mu_0 * a * ((2.0 / k - k) * ellipk(square) - 2.0 / k * ellipe(square))
        total += 2.0 * (turns - n) * mutual
    return total


@pytest.mark.parametrize(
    ("turns", "diameter", "length", "wire", "within"),
    [
        (8, 60e-3, 41e-3, 2e-3, 1.0e-3),
        (20, 20e-3, 30e-3, 1e-3, 0.7e-3),
        (50, 10e-3, 50e-3, 0.8e-3, 0.7e-3),
        (2, 50e-3, 10e-3, 3e-3, 1.7e-3),
        (4, 7e-3, 5e-3, 1e-3, 5.0e-3),  # pitch a third of the radius: Rosa's lines are curved
    ],
)
@pytest.mark.parametrize("internal", [0.0, 0.25])
def test_corrected_sheet_is_the_sum_of_its_loops(turns, diameter, length, wire, within, internal):
    ours = float(round_wire_inductance(turns, diameter, length, wire, internal))
    assert ours == pytest.approx(loops(turns, diameter, length, wire, internal), rel=within)
    sheet = float(air_coil_inductance(turns, diameter, length))
    assert abs(sheet / ours - 1.0) > 2.0 * abs(ours / loops(
        turns, diameter, length, wire, internal) - 1.0)  # fmt: skip


def test_loops_of_the_check_are_grovers():
    """Two circles of 0.25 and 0.20 m, 0.10 m apart, 0.24879 uH (Grover 1946) check the formula."""
    big, small, apart = 0.25, 0.20, 0.10
    square = 4.0 * big * small / ((big + small) ** 2 + apart**2)
    k = math.sqrt(square)
    mutual = mu_0 * math.sqrt(big * small) * (
        (2.0 / k - k) * ellipk(square) - 2.0 / k * ellipe(square))  # fmt: skip
    assert mutual == pytest.approx(0.24878736e-6, rel=1e-7)
    assert loops(1, 0.1, 0.01, 2e-3, 0.0) == pytest.approx(250.791e-9, rel=1e-5)
    assert loops(1, 0.1, 0.01, 2e-3, 0.25) == pytest.approx(266.499e-9, rel=1e-5)


def test_straight_leads():
    """2 l [ln(2 l / r) - 3/4] nH, l in cm (Rosa 1908): 10 cm of 1 mm wire is 104.8 nH."""
    hand = 2.0 * 10.0 * (math.log(2.0 * 10.0 / 0.05) - 0.75)
    assert float(lead_inductance(0.2, 1e-3, 0.25)) == pytest.approx(2.0 * hand * 1e-9, rel=1e-6)


def test_stretching_a_coil():
    """A build log read 199, 155 and 128 nH while stretching four turns in steps of 2.5 mm.

    The first two readings fix length and diameter of the sheet; the third must follow.  (They
    fix a mean diameter above the 7 mm that was told, which may be that of the mandrel.)
    """
    lengths = np.linspace(1e-3, 9e-3, 4001)
    diameter = 10.5e-3
    ratio = air_coil_inductance(4, diameter, lengths + 2.5e-3) / air_coil_inductance(
        4, diameter, lengths)  # fmt: skip
    length = lengths[np.argmin(np.abs(ratio - 155.0 / 199.0))]
    first, third = (float(air_coil_inductance(4, diameter, length + d)) for d in (0.0, 5e-3))
    assert first == pytest.approx(199e-9, rel=0.03)
    assert third / first == pytest.approx(128.0 / 199.0, rel=0.02)


# R_ac / R_dc of an isolated round wire, from Bessel functions (Kelvin 1889), copper at 20 degC.
@pytest.mark.parametrize(
    ("diameter", "frequency", "ratio"), [(1e-3, 1e6, 4.04534), (2e-3, 13.56e6, 28.1136)]
)
def test_skin_effect(diameter, frequency, ratio):
    resistance, inductance = skin_effect(diameter, frequency, 1.724e-8)
    assert float(resistance) == pytest.approx(ratio, rel=2e-6)
    depth = float(skin_depth(frequency, 1.724e-8))
    # a thick wire is a flat strip of surface impedance (1 + j) / (sigma depth)
    assert float(inductance) == pytest.approx(4.0 * depth / diameter, rel=0.02)


def test_skin_depth_of_copper():
    """66.083 um at 1 MHz, 17.946 um at 13.56 MHz: sqrt(2 rho / (omega mu0))."""
    assert skin_depth([1e6, 13.56e6], 1.724e-8) == pytest.approx([66.083e-6, 17.946e-6], rel=5e-5)


def test_skin_effect_at_low_frequency():
    """1 + (a / depth)^4 / 48 for the resistance, 1 - (a / depth)^4 / 96 for the inductance."""
    small = 0.4
    wire = 2.0 * small * float(skin_depth(1e4))
    resistance, inductance = skin_effect(wire, 1e4)
    assert float(resistance) == pytest.approx(1.0 + small**4 / 48.0, rel=1e-5)
    assert float(inductance) == pytest.approx(1.0 - small**4 / 96.0, rel=1e-5)


def test_thick_wires_do_not_overflow():
    resistance, _ = skin_effect(0.1, 1e9)
    assert float(resistance) == pytest.approx(0.025 / float(skin_depth(1e9)) + 0.25, rel=1e-5)


def test_crowding_of_thin_wires_in_a_long_coil():
    """1 + (pi^2 / 2) (d / p)^2: a perfect cylinder in half the field of the coil across it.

    Inside H = I / p, outside 0, so the wire lies in I / (2 p); its surface then carries up to
    twice that field, and loss is the mean of the square over its circumference.
    """
    for filling, within in ((0.1, 0.002), (0.2, 0.008), (0.3, 0.05)):
        exact = 1.0 + math.pi**2 / 2.0 * filling**2
        assert float(crowding(1e6, filling)) == pytest.approx(exact, abs=within)


def test_crowding_is_smooth_and_grows_with_filling():
    filling = np.linspace(0.0, 1.0, 201)
    for slenderness in (0.0, 0.05, 0.7, 1.5, 7.0, 40.0, 1e9):
        factor = crowding(slenderness, filling)
        assert factor[0] == 1.0
        assert np.all(np.diff(factor) > 0.0)
    assert crowding([0.0, 1.0, 10.0], [1.0, 0.5, 0.9]) == pytest.approx([5.31, 1.67, 2.93])
    # rows and columns of the table have no steps: neighbouring rows differ by less than 12 %
    rows = np.array([[float(crowding(s, f)) for f in (0.2, 0.4, 0.7)] for s in (0, 0.2, 8, 10)])
    assert np.all(np.abs(rows[1::2] / rows[::2] - 1.0) < 0.05)


def test_resistance_of_a_single_loop_is_that_of_its_wire():
    frequency, wire = 5e6, 2e-3
    loop = float(coil_resistance(1, 0.05, 3e-3, wire, frequency))
    along = math.hypot(math.pi * 0.05, 3e-3)
    straight = COPPER * along / (math.pi * 1e-6) * float(skin_effect(wire, frequency)[0])
    assert loop == pytest.approx(straight, rel=1e-12)
    many = float(coil_resistance(400, 0.05, 1.2, wire, frequency))
    wire_alone = straight / along * math.hypot(400 * math.pi * 0.05, 1.2)
    assert many / wire_alone == pytest.approx(float(crowding(24.0, 2.0 / 3.0)), rel=0.05)


def coil(**keys: object):
    own = {"turns": 8, "diameter": "60 mm", "length": "41 mm", "wire": "1 mm",
           "frequency": "3.3 MHz"}  # fmt: skip
    return Inductor(kind="inductor", nets=("a", "b"), coil=own | keys)


def test_a_coil_needs_neither_resistance_nor_q():
    values = nominal_values(study({"L1": coil()}), {}, "room", "normal")
    skin = 0.25 * float(skin_effect(1e-3, 3.3e6)[1])
    wound = float(round_wire_inductance(8, 0.06, 0.041, 1e-3, skin))
    assert values["L1.inductance"][0] == wound
    assert values["L1.resistance"][0] == float(coil_resistance(8, 0.06, 0.041, 1e-3, 3.3e6))
    assert 0.2 < values["L1.resistance"][0] < 0.3
    by_pitch = coil(length=None, pitch="5.125 mm")
    same = nominal_values(study({"L1": by_pitch}), {}, "room", "normal")
    assert same["L1.inductance"][0] == pytest.approx(wound, rel=1e-12)
    longer = nominal_values(study({"L1": coil(leads="40 mm")}), {}, "room", "normal")
    assert longer["L1.inductance"][0] > wound + 15e-9
    assert longer["L1.resistance"][0] > values["L1.resistance"][0]


def test_measured_loss_wins_over_the_wire():
    measured = Inductor(kind="inductor", nets=("a", "b"), coil=coil().coil, resistance="0.4 ohm")
    values = nominal_values(study({"L1": measured}), {}, "room", "normal")
    assert values["L1.resistance"][0] == 0.4


@pytest.mark.parametrize(
    ("wrong", "words"),
    [
        ({"wire": "6 mm"}, "no thicker than the pitch"),
        ({"pitch": "5 mm"}, "only one of length and pitch"),
        ({"length": None}, "either length or pitch"),
        ({"wire": None}, "wire beside frequency"),
        ({"frequency": "60 MHz"}, "less than a quarter wavelength"),
        ({"frequency": None}, "a coil with wire and frequency"),
    ],
)
def test_coils_that_cannot_be(wrong, words):
    with pytest.raises(ValidationError) as caught:
        coil(**wrong)
    assert words in str(caught.value)


def test_every_unit_is_wound_anew():
    """Values are the formulas of the drawn dimensions, unit by unit."""
    given = study({"L1": Inductor(**{**coil().model_dump(), "spread": "wound-on-former"})})
    found = factors(given, TABLES)
    draws = draw(found, 3, 0, 40)
    values = part_values(given, TABLES, "room", "normal", draws)
    drawn = {}
    for k, factor in enumerate(found):
        if factor.aspect in ("tolerance", "lot"):
            drawn[factor.quantity] = drawn.get(factor.quantity, 0.0) + draws.values[:, k]
    turns = 8.0 + drawn["turns"]
    diameter, wire = 0.06 * (1.0 + drawn["diameter"]), 1e-3 * (1.0 + drawn["wire"])
    length = 0.041 * (1.0 + drawn["pitch"])
    skin = 0.25 * skin_effect(wire, 3.3e6)[1]
    expected = round_wire_inductance(turns, diameter, length, wire, skin)
    np.testing.assert_allclose(values["L1.inductance"], expected, rtol=1e-9)
    resistance = coil_resistance(turns, diameter, length, wire, 3.3e6)
    np.testing.assert_allclose(
        values["L1.resistance"], resistance * (1.0 + drawn["resistance"]), rtol=1e-9
    )
    assert 0.005 < np.std(expected) / np.mean(expected) < 0.02


def test_a_coil_does_not_depend_on_its_neighbours():
    given = study({"L1": Inductor(**{**coil().model_dump(), "spread": "wound-by-hand"})})
    found = factors(given, TABLES)
    whole = part_values(given, TABLES, "room", "normal", draw(found, 3, 0, 20))
    for first, count in ((0, 1), (7, 5), (19, 1)):
        part = part_values(given, TABLES, "room", "normal", draw(found, 3, first, count))
        for key, values in part.items():
            np.testing.assert_array_equal(values, whole[key][first : first + count], err_msg=key)


def test_coils_of_one_winder_share_a_habit():
    parts = {
        ref: Inductor(**{**coil().model_dump(), "spread": "wound-by-hand", "reel": reel})
        for ref, reel in (("L1", "first winder"), ("L2", "first winder"), ("L3", "second"))
    }
    given = study(parts)
    values = part_values(given, TABLES, "room", "normal", draw(factors(given, TABLES), 1, 0, 4000))
    one, two, three = (values[f"L{k}.inductance"] for k in (1, 2, 3))
    assert np.corrcoef(one, two)[0, 1] > 0.3
    assert abs(np.corrcoef(one, three)[0, 1]) < 0.06


def test_turns_that_would_overlap_touch():
    tight = coil(length="8.1 mm", wire="1 mm")
    given = study({"L1": Inductor(**{**tight.model_dump(), "spread": "wound-by-hand"})})
    values = part_values(given, TABLES, "room", "normal", draw(factors(given, TABLES), 1, 0, 500))
    assert np.all(np.isfinite(values["L1.inductance"]))
    assert np.all(values["L1.inductance"] > 0.0)


def core(**keys: object):
    return Inductor(
        kind="inductor", nets=("a", "b"), core={"al": "25 nH", "turns": 12}, resistance=0.1, **keys
    )


def test_cores_by_inductance_factor():
    """L = A_L n^2: 12 uH on 49 uH per 100 turns needs 49.5 turns."""
    assert nominal_values(study({"L1": core()}), {}, "room", "normal")["L1.inductance"][0] == (
        pytest.approx(25e-9 * 144)
    )
    assert 100.0 * math.sqrt(12.0 / 49.0) == pytest.approx(49.5, abs=0.02)
    for wrong in ({"al": "25 nH", "turns": 12.5}, {"al": "25 nH"}):
        with pytest.raises(ValidationError):
            Inductor(kind="inductor", nets=("a", "b"), core=wrong, resistance=0.1)
    with pytest.raises(ValidationError, match="core"):
        Inductor(kind="inductor", nets=("a", "b"), core={"al": "25 nH", "turns": 2},
                 inductance="1 uH", resistance=0.1)  # fmt: skip


def test_cores_of_one_lot_share_their_factor_and_read_high():
    parts = {f"L{k}": core(spread="core-iron-powder-rf", reel="cores") for k in (1, 2)}
    given = study(parts)
    values = part_values(given, TABLES, "room", "normal", draw(factors(given, TABLES), 2, 0, 8000))
    one, two = values["L1.inductance"], values["L2.inductance"]
    assert np.corrcoef(one, two)[0, 1] > 0.7
    assert one.mean() / (25e-9 * 144) == pytest.approx(1.015, abs=0.002)  # (0 + 0.5 + 4) / 3 %


def test_laws_on_a_shape_need_one():
    plain = study({"L1": inductor(spread="wound-on-former")})
    told = [str(problem) for problem in check_spread(plain, TABLES, "s.toml")]
    assert len(told) == 1
    assert "diameter" in told[0]
    assert "Give coil (with wire) or core" in told[0]
    wound = study({"L1": Inductor(**{**coil().model_dump(), "spread": "wound-on-former"})})
    assert check_spread(wound, TABLES, "s.toml") == []
    cored = study({"L1": core(spread="wound-by-hand")})
    assert len(check_spread(cored, TABLES, "s.toml")) == 1


def test_notes_say_where_the_formulas_end():
    notes = winding_notes(coil())
    assert any("self-capacitance of about 2.9 pF" in note for note in notes)
    assert any("Medhurst" in note for note in notes)
    assert not any("wavelengths" in note for note in notes)
    assert any("wavelengths" in note for note in winding_notes(coil(frequency="30 MHz")))
    assert any("stretched" in note for note in winding_notes(coil(wire="0.1 mm")))
    assert winding_notes(core()) == []
    assert not any("expected" in note for note in winding_notes(coil(), (3.0e6, 4.0e6)))
    (off,) = [note for note in winding_notes(coil(), (6.0e6, 7.0e6)) if "expected" in note]
    assert "taken at 3.3 MHz, but the stage is expected at 6 MHz to 7 MHz" in off
    said = assumptions(study({"L1": coil()}), {})
    assert any(sentence.startswith("L1: self-capacitance") for sentence in said)
