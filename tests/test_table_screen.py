"""Tables on the terminal: what the pictures and their numbers say, in blocks and in ASCII."""

import io
import re

import numpy as np
import pytest

from tolsim.spread.portrait import portraits
from tolsim.spread.quantity_words import factor_words, plain
from tolsim.spread.reading import read_shelf
from tolsim.table_screen import show_table, show_tables
from tolsim.text_picture import axis, can_show_blocks, hill

TABLES = read_shelf(None, None).tables


def test_a_hill_has_its_heights():
    assert hill(np.array([0.0, 1.0, 2.0, 4.0]), 2, blocks=True) == ["   █", " ▄██"]
    assert hill(np.array([0.0, 1.0, 2.0, 4.0]), 1, blocks=False) == [" .:#"]
    assert hill(np.array([0.0, 1e-6, 1.0]), 1, blocks=True) == [" ▁█"]  # seldom is not never
    assert hill(np.zeros(3), 1, blocks=True) == ["   "]


def test_labels_stand_below_their_places():
    assert axis(-1.0, 1.0, 21, {-1.0: "-1", 0.0: "0", 1.0: "1", 5.0: "far"}) == (
        "-1        0         1"
    )
    assert axis(0.0, 1.0, 9, {0.0: "zero", 0.1: "hidden"}) == "zero"


def test_blocks_only_where_the_screen_knows_them():
    assert can_show_blocks("utf-8")
    assert can_show_blocks("cp437") is False or can_show_blocks("cp437")  # never an error
    assert not can_show_blocks("ascii")
    assert not can_show_blocks("latin-1")
    assert not can_show_blocks(None)
    assert not can_show_blocks("no such encoding")


def test_a_portrait_adds_lot_and_scatter():
    """Uniform +-2.5 % and normal, sigma 0.8 % cut at 2.5 %: variances add."""
    portrait = portraits(TABLES["class1-ceramic-5pct"])["capacitance"]
    spread = TABLES["class1-ceramic-5pct"].quantities["capacitance"]
    sd = np.hypot(spread.lot.sd, spread.tolerance.sd)
    assert portrait.new.std() / 100 == pytest.approx(sd, rel=0.01)
    assert portrait.ends == pytest.approx((-5.0, 5.0))
    low, high = portrait.between(0.99)
    assert low == pytest.approx(-high, rel=0.01)
    # EIA-198-1, C0G: 30 ppm/K over 60 K is 0.18 %; 99 of 100 of an even band
    assert portrait.drift["at 85 degC"] == pytest.approx((-0.18 * 0.99, 0.0, 0.18 * 0.99), abs=1e-9)
    assert "after 10000 h" not in portrait.drift


def test_a_portrait_of_ageing():
    """EIA-521: 2.5 % per decade, 10 000 h beside 1000 h: (1 - 0.1) / (1 - 0.075) - 1."""
    portrait = portraits(TABLES["class2-ceramic-x7r-10pct"])["capacitance"]
    middle = portrait.drift["after 10000 h"][1]
    assert middle == pytest.approx(100 * ((1 - 0.1) / (1 - 0.075) - 1), abs=0.01)


@pytest.mark.parametrize("name", TABLES)
def test_every_table_can_be_shown(capsys, name):
    show_table(TABLES[name])
    text = capsys.readouterr().out
    lines = text.splitlines()
    assert max(map(len, lines)) <= 80
    assert TABLES[name].title[:40] in text
    for quantity in TABLES[name].quantities:
        words = plain(quantity)
        assert any(line.startswith(words[0].upper() + words[1:]) for line in lines)
    assert ("Guessed:" in text) == bool(TABLES[name].guesses)


def test_pictures_degrade_to_ascii(monkeypatch):
    out = io.TextIOWrapper(io.BytesIO(), encoding="ascii")
    monkeypatch.setattr("sys.stdout", out)
    show_table(TABLES["class1-ceramic-5pct"])
    out.seek(0)
    text = out.read()
    assert "#" * 10 in text
    assert "99 of 100 -" in text


def test_the_list_is_grouped_and_marks_guesses(capsys):
    show_tables(TABLES)
    text = capsys.readouterr().out
    heads = [line for line in text.splitlines() if line.endswith(":") and line[0] != " "]
    assert heads[:3] == ["capacitor:", "inductor:", "coupling:"]
    assert all(f" {name} " in text for name in TABLES)
    assert re.search(r"mosfet-stress-case +\* ", text)
    assert re.search(r"class1-ceramic-half-pf +Class", text)


def test_factors_are_said_in_plain_words():
    assert factor_words("C1.esr tolerance") == "C1.series resistance tolerance"
    assert factor_words("C1#2.capacitance tolerance") == "C1#2.capacitance tolerance"
    assert factor_words("reel Q lot: capacitance_scale lot shift") == (
        "reel Q lot: capacitance scale lot shift"
    )
    assert factor_words("ambient") == "ambient"
    assert factor_words("readings of our-film.esr meter error") == (
        "readings of our-film.series resistance meter error"
    )
