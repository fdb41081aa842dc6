"""The page: self-contained, verdict first, honest about what is not known."""

import re
from dataclasses import replace
from html.parser import HTMLParser

import fake_run
import numpy as np
import pytest

from tolsim.answers.supply_words import supply_entries
from tolsim.answers.wording import verdict_sentence
from tolsim.design import Rail
from tolsim.inputs import input_rows
from tolsim.library import find_study
from tolsim.report import render, write_report
from tolsim.study import open_study


@pytest.fixture(scope="module")
def content():
    return fake_run.report()


@pytest.fixture(scope="module")
def page(content):
    return render(content)


class Words(HTMLParser):
    """Visible text of a page, and the order in which its elements close."""

    def __init__(self) -> None:
        super().__init__()
        self.text, self.ids, self.tags, self.open = [], [], set(), []

    def handle_starttag(self, tag, attrs):
        """Remember ids and what is open."""
        self.tags.add(tag)
        self.ids += [value for name, value in attrs if name == "id"]
        if tag not in {"meta", "br", "link", "hr", "img"}:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        """Open and close at once."""
        self.handle_starttag(tag, attrs)
        self.handle_endtag(tag)

    def handle_endtag(self, tag):
        """Elements close in the order in which they opened."""
        assert self.open.pop() == tag

    def handle_data(self, data):
        """Keep text, but not styles."""
        if not self.open or self.open[-1] != "style":
            self.text.append(data)


def read(page):
    words = Words()
    words.feed(page)
    assert words.open == []
    return words


def text_of(page):
    return re.sub(r"\s+", " ", " ".join(read(page).text))


def test_nothing_is_fetched_and_nothing_runs(page):
    assert "http:" not in page
    assert "https:" not in page
    assert "@import" not in page
    assert not re.search(r"url\((?!#)", page)
    assert not re.search(r'\b(src|href)="(?!#)', page)
    tags = read(page).tags
    assert not tags & {"script", "link", "iframe", "img", "object"}


def test_verdict_comes_first(content, page):
    text = text_of(page)
    verdict = verdict_sentence(content.summary)
    assert text.index(verdict) < text.index("Does it start?") < text.index("What fails")
    assert text.index("What fails") < text.index("Cautions") < text.index("How to repeat it")


def test_undecided_units_are_shown(page):
    text = text_of(page)
    assert "1 undecided." in text
    assert "lower end of the yield takes these units as failed" in text


def test_guesses_are_marked(page):
    assert page.count('class="badge guess"') == 2
    assert "2 of 6 inputs are guesses" in text_of(page)
    assert "not stated" in text_of(page)  # a guess without a source


def test_parts_of_the_same_law_share_a_row():
    opened = open_study(find_study("plant-lamp"))
    rows = list(input_rows(opened.study, opened.tables))
    laws = [(row.quantity, row.law, row.table, row.basis, row.source) for row in rows]
    assert len(laws) == len(set(laws))
    (row,) = [row for row in rows if row.quantity == "series resistance"]
    assert row.part.startswith("C1, C2, C3, C4")
    (row,) = [r for r in rows if r.part.startswith("C1,") and "lot shift" in r.law]
    assert row.nominal.startswith("C1, C2: 680 pF; C3, C4: 470 pF")
    words = {word for row in rows for word in (row.quantity, row.law, row.nominal)}
    assert not any("_" in word or "ohm" in word or "degC" in word for word in words)
    assert any("µH" in word for word in words)


def test_no_rate_without_interval(page):
    text = text_of(page)
    assert "none seen (up to" in text
    assert not re.search(r"[^.\d]0 %(?! \()", text.replace("to 0 %", ""))


def test_every_caution_stands_there_once(page):
    text = text_of(page)
    for word in ("kilovolts", "ultraviolet", "ozone", "licensed practice"):
        assert text.count(word) == 1


def test_shares_beyond_everything_are_called_chance(content):
    ranking = [
        {**entry, "remainder": {"share": -0.2, "low": -0.4, "high": -0.1}}
        for entry in content.summary["ranking"]
    ]
    page = render(replace(content, summary={**content.summary, "ranking": ranking}))
    assert "add up to more than 100 %" in text_of(page)
    assert "Left over: -" not in text_of(page)


def test_yield_over_lots_is_not_the_yield_of_a_lot(content):
    words = "so this is the yield over many lots"
    assert words in text_of(render(replace(content, lots=True)))
    assert words not in text_of(render(replace(content, lots=False)))


def test_failing_units_are_named(page):
    text = text_of(page)
    assert "latched both on" in text
    assert "17, 230" in text
    assert "2 latched both on: 0.40 % (0.048 to 1.4 %), units 17, 230." in text


def test_same_content_same_bytes(content, page):
    assert render(content) == page


def test_ids_of_pictures_do_not_clash(page):
    ids = read(page).ids
    assert len(ids) == len(set(ids))
    for target in re.findall(r'(?:href="|url\()#([^")]+)', page):
        assert target in ids


def test_texts_of_users_are_escaped(content):
    wave = replace(content.waveforms[0], title="<b>", label="$x_1$ & <i>")
    page = render(replace(content, title="<script>", scenario="<img>", waveforms=(wave,)))
    tags = read(page).tags
    assert not tags & {"script", "img", "i"}
    assert "$x_1$" in text_of(page)


def test_a_page_with_next_to_nothing_on_it(content):
    summary = {**content.summary, "figures": [], "limits": [], "ranking": [], "quality": {}}
    empty = replace(
        content,
        summary=summary,
        start_margins=np.full(500, np.nan),
        start_margin_limit=None,
        start_states=(),
        waveforms=(),
        inputs=(),
        not_modelled=(),
        study_text="",
    )
    text = text_of(render(empty))
    assert "No state of this study is one in which the stage is switched on." in text
    assert "there is nothing to compare with" in text


def test_many_states_fold_the_quiet_ones(content):
    summary = dict(content.summary)
    case = next(c for c in summary["cases"] if c["state"] == "full")
    outcome = next(o for o in summary["outcomes"] if o["state"] == "full")
    summary["cases"] = summary["cases"] + [{**case, "state": f"s{i}"} for i in range(20)]
    summary["outcomes"] = summary["outcomes"] + [{**outcome, "state": f"s{i}"} for i in range(20)]
    assert "more in which no unit fails" in text_of(render(replace(content, summary=summary)))


def test_file_is_written_whole(content, page, tmp_path):
    write_report(content, tmp_path / "report.html")
    assert (tmp_path / "report.html").read_text(encoding="utf-8") == page
    assert [path.name for path in tmp_path.iterdir()] == ["report.html"]


def test_start_margins_are_those_of_start_states(content):
    rows = fake_run.results().units
    dark = rows[rows["state"] == "dark"].groupby("unit")["start_margin"].min()
    assert content.start_margins == pytest.approx(dark.to_numpy(), nan_ok=True)
    assert content.start_margin_limit == 3.0
    assert np.bincount(content.verdicts).tolist() == [
        content.summary["yield"][key] for key in ("passed", "failed", "undecided")
    ]


def test_supplies_are_told_and_their_rise_is_drawn(content):
    """Each rail in words; a picture as soon as one of them takes its time."""
    slow = Rail(net="vdd", voltage=36.0, resistance=0.1, current_limit=4.0, ramp_time=5e-3)
    rails = {"supply": slow, "bias": Rail(net="v5", voltage=5.0)}
    summary = {**content.summary, "supplies": supply_entries(rails)}
    page = render(replace(content, summary=summary, rails=rails))
    words = text_of(page)
    assert "supply net vdd 36 V, limited to 4 A, 100 mohm; rises evenly in 5 ms" in words
    assert "bias net v5 5 V, ideal; rises at once" in words
    assert "Rise after power-on" in words
    still = render(replace(content, rails={"bias": rails["bias"]}))
    assert "Rise after power-on" not in still
