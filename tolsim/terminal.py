"""What the verbs show on the terminal: at most 80 columns wide, also when piped to a file."""

from __future__ import annotations

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

from tolsim.design import Study
from tolsim.quantity import show
from tolsim.spread_table import SpreadTable
from tolsim.spread_text import assumptions, describe
from tolsim.study import StudyFile
from tolsim.wording import failures, percent, percents, shown, verdict_sentence

_WIDTH = 80
_MOST_ROWS = 8  # of a table in the summary; the report has all

Step = Callable[[int, int], None]
"""Called with the units done and the units wanted."""


def console(*, stderr: bool = False) -> Console:
    """Terminal of at most 80 columns."""
    return Console(width=min(_WIDTH, Console().width), stderr=stderr, highlight=False)


@contextmanager
def progress() -> Iterator[Step]:
    """Progress bar on stderr, with rate and time left; yields what to call with news."""
    columns = (
        TextColumn("units"),
        BarColumn(bar_width=None),
        MofNCompleteColumn(),
        TextColumn("{task.fields[rate]}"),
        TimeRemainingColumn(),
    )
    with Progress(*columns, console=console(stderr=True)) as bar:
        task = bar.add_task("units", total=None, rate="")

        def step(done: int, wanted: int) -> None:
            speed = bar.tasks[0].speed
            rate = "" if speed is None else f"{speed:.3g}/s"
            bar.update(task, completed=done, total=wanted, rate=rate)

        yield step


def show_study(opened: StudyFile) -> None:
    """Show what a checked study consists of, and what it leaves open."""
    screen = console()
    study = opened.study
    screen.print(Text(study.title, style="bold"))
    for line in _contents(study):
        screen.print(Text(line))
    _paragraphs(screen, "Assumed:", assumptions(study, opened.tables))
    used = {name for name in _tables_of(study) if opened.tables[name].guesses}
    guesses = [f"{name}: {', '.join(opened.tables[name].guesses)}" for name in sorted(used)]
    _paragraphs(screen, "Guessed in spread tables:", guesses)


def _contents(study: Study) -> Iterator[str]:
    count = Counter(part.kind for part in study.design.parts.values())
    yield f"{study.kind}, " + ", ".join(f"{number} {kind}" for kind, number in count.items())
    yield "rails: " + ", ".join(
        f"{ref} {show(rail.voltage, 'V')}" for ref, rail in study.design.rails.items()
    )
    yield "states: " + ", ".join(
        f"{name} (starts here)" if state.starts_here else name
        for name, state in study.states.items()
    )
    yield "conditions: " + ", ".join(study.conditions)
    yield f"limits: {len(study.limits)}; units: {study.run.units}; seed: {study.run.seed}"


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


def show_tables(tables: Mapping[str, SpreadTable]) -> None:
    """List spread tables: name, kinds of part, basis, title."""
    screen = console()
    grid = _grid("table", "for", "basis", "title")
    for name, table in tables.items():
        grid.add_row(name, ", ".join(table.kinds), table.basis, table.title)
    screen.print(grid)


def show_table(table: SpreadTable) -> None:
    """Show all that is known about one spread table."""
    screen = console()
    for line in describe(table):
        screen.print(Text(line))


def show_summary(summary: Mapping[str, Any], folder: Path) -> None:
    """Show verdict, failures, stresses, ranking and quality of a run."""
    screen = console()
    screen.print(Text(verdict_sentence(summary), style="bold"))
    found = failures(summary)
    if found:
        grid = _grid("failure", "units>", "first")
        for failure in found[:_MOST_ROWS]:
            first = ", ".join(str(number) for number in failure.first_units[:3])
            grid.add_row(failure.name, str(failure.units), first)
        screen.print(grid)
    screen.print(_stresses(summary["figures"]))
    for ranking in summary["ranking"]:
        screen.print(_ranking(ranking))
    screen.print(Text(_quality(summary["quality"])))
    screen.print(Text(f"Report: {folder / 'report.html'}", overflow="fold"))


def _stresses(figures: Sequence[Mapping[str, Any]]) -> Table:
    """Worst case of every figure that has a limit, nearest to its limit first."""
    worst: dict[tuple[str, str], tuple[float, Mapping[str, Any]]] = {}
    for entry in figures:
        tail = entry["p99"] if entry["worse"] == "high" else entry["p1"]
        if entry["limit"] is None or tail is None:
            continue
        use = _use(tail, entry["limit"], entry["limit_side"])
        key = (entry["part"], entry["figure"])
        if key not in worst or use > worst[key][0]:
            worst[key] = (use, entry)
    grid = _grid("figure", "part", "median>", "tail>", "limit>", "where")
    for _, entry in sorted(worst.values(), key=lambda pair: -pair[0])[:_MOST_ROWS]:
        unit = entry["unit_of_measure"]
        name = "p99" if entry["worse"] == "high" else "p1"
        grid.add_row(
            entry["title"],
            entry["part"],
            shown(entry["p50"], unit),
            f"{name} {shown(entry[name], unit)}",
            shown(entry["limit"], unit),
            f"{entry['condition']}, {entry['state']}",
        )
    return grid


def _use(tail: float, limit: float, side: str) -> float:
    """How much of a limit the tail of a figure uses; above 1 it is past the limit."""
    distance = tail - limit if side == "at_most" else limit - tail
    return 1.0 + distance / (abs(limit) or 1.0)


def _ranking(ranking: Mapping[str, Any]) -> Table:
    """Factors that matter most for one target, or why they are not ranked."""
    grid = _grid(f"what moves {ranking['target']}", "share of variance>")
    if ranking["reason"]:
        grid.add_row(ranking["reason"], "")
    for factor in [f for f in ranking["factors"] if f["distinguishable"]][:5]:
        grid.add_row(
            factor["factor"],
            f"{percent(factor['share'])} ({percents(factor['low'], factor['high'])})",
        )
    return grid


def _quality(quality: Mapping[str, Any]) -> str:
    balance, again = quality["energy_balance"], quality["rechecked"]
    return (
        f"Energy balance within {percent(balance['worst'])} in every unit; {again['agreed']} of "
        f"{again['units']} units solved a second way agreed."
    )


def _grid(*heads: str) -> Table:
    """Plain table; a head that ends with > is of a column of numbers."""
    grid = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), title_justify="left")
    for head in heads:
        grid.add_column(head.rstrip(">"), justify="right" if head.endswith(">") else "left")
    return grid
