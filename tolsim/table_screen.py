"""Spread tables on the terminal: the list by families, and one of them with small pictures."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Mapping
from pathlib import Path

import numpy as np
from rich.text import Text

from tolsim.errors import RequestError
from tolsim.quantity import show
from tolsim.spread.entry import QUANTITIES
from tolsim.spread.portrait import Portrait, portraits
from tolsim.spread.quantity_words import plain
from tolsim.spread.table import SpreadTable
from tolsim.spread.words import describe, guess_words
from tolsim.terminal import console
from tolsim.text_picture import axis, can_show_blocks, hill

_ROWS, _COLUMNS = 3, 61
_MARGIN = 6


def show_tables(tables: Mapping[str, SpreadTable]) -> None:
    """List spread tables by the kinds of part they are for: name, basis, title."""
    screen = console()
    by_kind: dict[tuple[str, ...], list[SpreadTable]] = {}
    for table in tables.values():
        by_kind.setdefault(table.kinds, []).append(table)
    kinds = list(QUANTITIES)
    width = max((len(name) for name in tables), default=0)
    for family in sorted(by_kind, key=lambda names: [kinds.index(name) for name in names]):
        screen.print(Text(f"{', '.join(family)}:", style="bold"))
        for table in by_kind[family]:
            screen.print(Text("\n".join(_entry(table, width, screen.width))))
        screen.print()
    screen.print(Text("* some or all of its laws are guesses"))
    screen.print(Text("All about one of them, with pictures: tolsim tables NAME"))


def _entry(table: SpreadTable, width: int, columns: int) -> list[str]:
    """One line of the list, and more if the title is long."""
    mark = "*" if table.guesses else " "
    first = f"  {table.name:<{width}} {mark} "
    return textwrap.wrap(
        table.title, columns, initial_indent=first, subsequent_indent=" " * len(first)
    )


def show_table(table: SpreadTable) -> None:
    """Show all that is known about one spread table: its laws in words, what they amount to."""
    screen = console()
    said = describe(table)
    screen.print(Text(said[0], style="bold"))
    for line in said[1:]:
        text = textwrap.fill(line, screen.width, initial_indent="- ", subsequent_indent="  ")
        screen.print(Text(text))
    blocks = can_show_blocks(screen.encoding)
    for name, portrait in portraits(table).items():
        screen.print()
        for line in _portrait(plain(name), portrait, blocks=blocks):
            screen.print(Text(line.rstrip(), no_wrap=True))
    if table.guesses:
        screen.print()
        text = f"{_guessed(table)} Replace them by readings of your own parts."
        screen.print(Text(textwrap.fill(text, screen.width)))


def draw(table: SpreadTable, path: Path) -> None:
    """Write the picture of a table to an SVG or PNG file.

    Raises
    ------
    RequestError
        If the name of the file has another ending.
    """
    from tolsim.report.table_picture import SUFFIXES, draw_table  # plotting only when asked for

    if path.suffix.lower() not in SUFFIXES:
        raise RequestError(f"'{path}' must end in {' or '.join(SUFFIXES)}.")
    rows = {plain(name): portrait for name, portrait in portraits(table).items()}
    draw_table(table.title, rows, _guessed(table), path)


def _guessed(table: SpreadTable) -> str:
    """Which laws are guesses, as a sentence; empty if none is."""
    return f"Guessed: {guess_words(table)}." if table.guesses else ""


def _portrait(name: str, portrait: Portrait, *, blocks: bool) -> Iterator[str]:
    """Picture of new parts, and what cold, heat and age do to them."""
    window = ", by position in the datasheet window (-1 minimum, +1 maximum)"
    yield f"{name[0].upper()}{name[1:]}{'' if portrait.unit or name != 'threshold' else window}:"
    if portrait.new.size:
        yield from _picture(portrait, blocks=blocks)
        half, most = portrait.between(0.5), portrait.between(0.99)
        yield f"  new, at 25 degC: half of the parts {_span(half, portrait.unit)},"
        yield f"  {'':16} 99 of 100 {_span(most, portrait.unit)},"
        yield f"  {'':16} all of them {_span(portrait.ends, portrait.unit)}"
    for words, (low, _, high) in portrait.drift.items():
        yield f"  {words + ':':<16} change of {_span((low, high), '%')}"


def _picture(portrait: Portrait, *, blocks: bool) -> Iterator[str]:
    low, high = portrait.ends
    if not high > low:
        return
    pad = 0.03 * (high - low)
    heights, _ = np.histogram(portrait.new, _COLUMNS, (low - pad, high + pad))
    smooth = np.convolve(heights, [0.25, 0.5, 0.25], "same") * (heights > 0)
    for line in hill(smooth, _ROWS, blocks=blocks):
        yield " " * _MARGIN + line
    yield " " * _MARGIN + ("▔" if blocks else "-") * _COLUMNS
    marks = {value: _number(value, portrait.unit) for value in (low, high, 0.0)}
    yield " " * _MARGIN + axis(low - pad, high + pad, _COLUMNS, marks)


def _number(value: float, unit: str) -> str:
    if unit == "%":
        return f"{value:.3g} %" if abs(value) > 1e-9 else "0 %"  # noqa: PLR2004 - rounding
    return show(value, unit or "1", 3)


def _span(ends: tuple[float, float], unit: str) -> str:
    low, high = (_number(end, unit) for end in ends)
    if low == high:
        return low
    number, _, own = low.rpartition(" ")
    return f"{number if number and high.endswith(' ' + own) else low} to {high}"
