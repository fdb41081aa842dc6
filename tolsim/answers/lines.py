"""The summary of a run as plain lines of at most 80 columns, for the terminal."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Mapping
from typing import Any

from tolsim.answers.lot_words import lot_sentences
from tolsim.answers.mission_words import mission_sentences
from tolsim.answers.power_on_words import power_on_sentences
from tolsim.answers.reel_words import reel_sentences
from tolsim.answers.start_words import (
    contract_sentences,
    map_sentences,
    map_table,
    repeat_sentences,
)
from tolsim.answers.transition_words import transition_sentences
from tolsim.answers.trim_words import trim_sentences
from tolsim.answers.wording import (
    failures,
    hardest,
    list_of_units,
    measured,
    percent,
    verdict_sentence,
)
from tolsim.spread.quantity_words import factor_words

WIDTH = 80
MOST_FAILURES = 6
MOST_STRESSES = 8
MOST_FACTORS = 3
BAR = 12  # columns for 0 to 100 % of the limit

Summary = Mapping[str, Any]


def summary_lines(summary: Summary) -> list[str]:
    """Verdict, failures, hardest driven parts, leading factors and quality as lines.

    Parameters
    ----------
    summary : mapping
        As documented in `tolsim.answers.results`.
    """
    lines = textwrap.wrap(verdict_sentence(summary), WIDTH)
    for heading, body in (
        ("Failing units (one unit may appear in several rows)", _failures(summary)),
        ("Switched on in time", _wrapped(power_on_sentences(summary))),
        ("Trimmed at the bench", _wrapped(trim_sentences(summary))),
        ("By lot, with 95 % intervals", _wrapped(lot_sentences(summary))),
        ("Over the mission, with 95 % intervals", _wrapped(mission_sentences(summary))),
        *_starts(summary),
        ("When the load changes, with 95 % intervals", _wrapped(transition_sentences(summary))),
        ("Hardest driven: p99 over the limit, else over the rating", _stresses(summary)),
        ("What matters: share of variance, 95 % interval", _factors(summary)),
        ("Guessed laws", _laws(summary.get("law_check") or {})),
        ("Measured reels", _wrapped(reel_sentences(summary))),
        ("Quality", _quality(summary["quality"], summary.get("prototype"))),
    ):
        rows = list(body)
        if rows:
            title = heading.replace("95 %", f"{100 * summary['yield']['confidence']:.3g} %")
            lines += ["", title, *(_cut(f"  {row}") for row in rows)]
    return lines


def start_lines(summary: Summary) -> list[str]:
    """What was asked about switching on, as lines."""
    lines: list[str] = []
    for heading, rows in _starts(summary):
        lines += ["", heading, *(_cut(f"  {row}") for row in rows)] if rows else []
    return lines[1:]


def _starts(summary: Summary) -> Iterator[tuple[str, list[str]]]:
    yield "Supply contract", list(_wrapped(contract_sentences(summary)))
    yield "Repeated starts", list(_wrapped(repeat_sentences(summary)))
    yield "Start map", [*_wrapped(map_sentences(summary)), *map_table(summary)]


def _failures(summary: Summary) -> Iterator[str]:
    found = failures(summary)
    for failure in found[:MOST_FAILURES]:
        units = list_of_units(failure.first_units[:4], failure.units)
        name = textwrap.shorten(failure.name, 48, placeholder=" ...")
        yield f"{failure.units:>6}  {name:<48}  {units}"
    if len(found) > MOST_FAILURES:
        yield f"{len(found) - MOST_FAILURES} more kinds of failure in the report"


def _wrapped(sentences: Iterator[str]) -> Iterator[str]:
    for sentence in sentences:
        yield from textwrap.wrap(sentence, WIDTH - 2, subsequent_indent="  ")


def _stresses(summary: Summary) -> Iterator[str]:
    for use, entry in hardest(summary)[:MOST_STRESSES]:
        filled = "#" * min(round(use * BAR), BAR)
        over = "!" if use > 1.0 else " "
        name = textwrap.shorten(f"{entry['part']} {entry['title'].lower()}", 27, placeholder="...")
        p99 = measured(entry["p99"], entry["unit_of_measure"])
        where = f"{entry['condition']}, {entry['state']}"
        yield f"{name:<27} [{filled:<{BAR}}]{over}{use:>5.0%}  {p99:>8}  {where}"


def _factors(summary: Summary) -> Iterator[str]:
    for ranking in summary["ranking"]:
        if ranking["reason"]:
            told = f"{ranking['title']}: not ranked, {ranking['reason']}"
            yield from textwrap.wrap(told, WIDTH - 2, subsequent_indent="  ")
            continue
        yield f"{ranking['title']}:"
        seen = [factor for factor in ranking["factors"] if factor["distinguishable"]]
        for factor in seen[:MOST_FACTORS]:
            low, high = max(factor["low"], 0.0), min(factor["high"], 1.0)
            name = textwrap.shorten(factor_words(factor["factor"]), 46, placeholder="...")
            yield f"  {name:<46} {max(factor['share'], 0.0):>4.0%}  ({low:.0%} to {high:.0%})"
        if not seen:
            yield "  no factor can be told from one without effect"


def _laws(law_check: Mapping[str, Any]) -> Iterator[str]:
    yield from textwrap.wrap(law_check.get("sentence", ""), WIDTH - 2)


def _quality(quality: Mapping[str, Any], bench: Mapping[str, Any] | None) -> Iterator[str]:
    if bench is not None and not bench["measured"]:
        yield "no prototype was measured: the model is unchecked"
    if quality.get("sampling"):
        yield f"sampling: {quality['sampling']}"
    balance, again = quality.get("energy_balance"), quality.get("rechecked")
    if balance and balance.get("worst") is not None:
        yield f"energy balance: worst unit off by {percent(balance['worst'])}"
    if again:
        yield f"solved again in the time domain: {again['units']}, {again['agreed']} agree"
    crosscheck = quality.get("crosscheck")
    if crosscheck:
        worst = crosscheck["worst"]
        yield (
            f"solved by both solvers: {crosscheck['units']}, at most"
            f" {percent(worst['difference'])} apart ({worst['figure']})"
        )


def _cut(line: str) -> str:
    return line.rstrip() if len(line) <= WIDTH else line[: WIDTH - 3].rstrip() + "..."
