"""What the verbs show on the terminal: at most 80 columns wide, also when piped to a file."""

from __future__ import annotations

import math
import textwrap
from collections import Counter
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn
from rich.table import Table
from rich.text import Text

from tolsim.answers.bounds import Bound, applies, bounds
from tolsim.answers.lines import start_lines, summary_lines
from tolsim.answers.supply_words import supply_words
from tolsim.answers.wording import shown
from tolsim.design import Study
from tolsim.figure_names import FIGURES
from tolsim.self_heating import heating_notes
from tolsim.spread.purchase import value_notes
from tolsim.spread.words import assumptions, guess_words
from tolsim.study import StudyFile

_WIDTH = 80
_MOST_ROWS = 8  # of the list of limits that are near
_POINT = ("frequency", "start_margin", "input_power", "output_power")

Step = Callable[[int, int], None]
"""Called with the units done and the units wanted."""

Cases = Mapping[tuple[str, str], Mapping[str, float]]
"""Figures of the nominal unit by column, for every (condition, state)."""


def console(*, stderr: bool = False) -> Console:
    """Terminal of at most 80 columns."""
    return Console(width=min(_WIDTH, Console().width), stderr=stderr, highlight=False)


def tell(news: str) -> None:
    """Say on stderr what is being done."""
    console(stderr=True).print(Text(news))


def warn_of(mistakes: Sequence[str]) -> None:
    """Name mistakes that stop nothing: they stand in spread tables nobody asked for."""
    if mistakes:
        head = "Mistakes in spread tables, which are left out:"
        _paragraphs(console(stderr=True), head, mistakes)


@contextmanager
def progress(counted: str = "units") -> Iterator[Step]:
    """Progress bar on stderr, with rate and time left; yields what to call with news."""
    columns = (
        TextColumn(counted),
        BarColumn(bar_width=None),
        MofNCompleteColumn(),
        TextColumn("{task.fields[rate]}"),
        TimeRemainingColumn(),
    )
    with Progress(*columns, console=console(stderr=True)) as bar:
        task = bar.add_task(counted, total=None, rate="")

        def step(done: int, wanted: int) -> None:
            speed = bar.tasks[0].speed
            rate = "" if speed is None else f"{speed:.3g}/s"
            bar.update(task, completed=done, total=wanted, rate=rate)

        yield step


def show_study(opened: StudyFile) -> None:
    """Show what a checked study consists of, and what it leaves open."""
    warn_of(opened.warnings)
    screen = console()
    study = opened.study
    screen.print(Text(study.title, style="bold"))
    for line in _contents(study):
        screen.print(Text(line))
    said = [*assumptions(study, opened.tables), *heating_notes(study, opened.tables)]
    _paragraphs(screen, "Assumed:", said)
    _paragraphs(screen, "Hard to buy:", list(value_notes(study)))
    used = {name for name in _tables_of(study) if opened.tables[name].guesses}
    guesses = [f"{name}: {guess_words(opened.tables[name])}" for name in sorted(used)]
    _paragraphs(screen, "Guessed in spread tables:", guesses)


def _contents(study: Study) -> Iterator[str]:
    count = Counter(part.kind for part in study.design.parts.values())
    yield f"{study.kind}, " + ", ".join(f"{number} {kind}" for kind, number in count.items())
    for ref, rail in study.design.rails.items():
        yield f"rail {ref}: {supply_words(rail)}"
    yield "states: " + ", ".join(
        f"{name} (starts here)" if state.starts_here else name
        for name, state in study.states.items()
    )
    yield "conditions: " + ", ".join(study.conditions)
    for name, trim in study.trims.items():
        target = shown(trim.target, trim.reading_unit)
        yield f"trim {name}: {trim.address} until {trim.reading} is {target}"
    lots = f" in lots of {study.lots.units_per_lot}" if study.lots else ""
    yield f"limits: {len(study.limits)}; units: {study.run.units}{lots}; seed: {study.run.seed}"


def _tables_of(study: Study) -> set[str]:
    """Names of the spread tables a study uses."""
    records = [*study.design.parts.values(), *study.design.rails.values()]
    named = {record.spread for record in records if record.spread}
    return named.union(*(state.spread.values() for state in study.states.values()))


def _paragraphs(screen: Console, head: str, texts: Sequence[str]) -> None:
    if not texts:
        return
    screen.print()
    screen.print(Text(head, style="bold"))
    for text in texts:
        screen.print(
            Text(textwrap.fill(text, screen.width, initial_indent="- ", subsequent_indent="  "))
        )


def _nominal(figures: Mapping[str, float], name: str) -> str:
    return shown(figures.get(name), FIGURES[name].unit_of_measure)


def _limit(bound: Bound) -> str:
    """The limit in words: "at most 160 V", "at least 3 dB", "140 to 185 kHz"."""
    unit = bound.figure.unit_of_measure
    if bound.at_most is None:
        return f"at least {shown(bound.at_least, unit)}"
    if bound.at_least is None:
        return f"at most {shown(bound.at_most, unit)}"
    return f"{shown(bound.at_least, unit)} to {shown(bound.at_most, unit)}"


def _use(bound: Bound, value: float) -> float:
    """How near a figure is to its limit: 1 at the limit, more beyond it."""
    most = value / bound.at_most if bound.at_most else -math.inf
    least = bound.at_least / value if bound.at_least and value > 0.0 else -math.inf
    return max(most, least)


def show_operating_point(study: Study, cases: Cases) -> None:
    """Show what the nominal unit does in every case, and which limits it comes near to."""
    screen = console()
    screen.print()
    screen.print(Text("Nominal unit:", style="bold"))
    grid = _grid("condition", "state", *(f"{FIGURES[name].title}>" for name in _POINT))
    for (condition, state), figures in cases.items():
        values = (_nominal(figures, name) for name in _POINT)
        grid.add_row(condition, state, *values)
    screen.print(grid)
    lost = [f"{condition} / {state}" for (condition, state), f in cases.items() if not _runs(f)]
    if lost:
        screen.print(Text(f"It settles on no steady orbit in: {', '.join(lost)}."))
    screen.print()
    screen.print(Text("Nearest to their limits:", style="bold"))
    screen.print(_nearest(study, cases))


def _runs(figures: Mapping[str, float]) -> bool:
    return math.isfinite(figures.get("frequency", math.nan))


def _nearest(study: Study, cases: Cases) -> Table:
    """Limits the nominal unit comes nearest to, each in its worst case."""
    worst: dict[tuple[int, str], tuple[float, Bound, tuple[str, str]]] = {}
    for case, figures in cases.items():
        for bound in bounds(study):
            value = figures.get(bound.column, math.nan)
            if not applies(study.limits[bound.limit], *case) or not math.isfinite(value):
                continue
            key, use = (bound.limit, bound.part), _use(bound, value)
            if key not in worst or use > worst[key][0]:
                worst[key] = (use, bound, case)
    grid = _grid("figure", "part", "nominal>", "limit>", "condition", "state")
    for _, bound, case in sorted(worst.values(), key=lambda row: -row[0])[:_MOST_ROWS]:
        nominal = shown(cases[case][bound.column], bound.figure.unit_of_measure)
        grid.add_row(bound.figure.title, bound.part, nominal, _limit(bound), *case)
    return grid


def show_summary(summary: Mapping[str, Any], folder: Path) -> None:
    """Show verdict, failures, stresses, ranking and quality of a run."""
    screen = console()
    for line in summary_lines(summary):
        screen.print(Text(line))
    screen.print()
    screen.print(Text(f"Report: {folder / 'report.html'}", overflow="fold"))


def show_starts(found: Mapping[str, Any]) -> None:
    """Show what switching on was asked for."""
    screen = console()
    for line in start_lines(found):
        screen.print(Text(line))


def _grid(*heads: str) -> Table:
    """Plain table; a head that ends with > is of a column of numbers."""
    grid = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), title_justify="left")
    for head in heads:
        grid.add_column(head.rstrip(">"), justify="right" if head.endswith(">") else "left")
    return grid
