"""Start map, supply contract and repeated starts in plain words, for terminal and report."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from tolsim.answers.wording import list_of_units, percent, percents, shown

Summary = Mapping[str, Any]
Entry = Mapping[str, Any]

WIDTH = 78
LEAST_COLUMN = 8
FIRST_UNITS = 4  # named of those that fail
LETTERS: Mapping[str, str] = {
    "latched": "L",
    "dies away": "D",
    "bursts": "B",
    "other swing": "O",
    "undecided": "U",
    "not run": "N",
}
"""Failures as one letter, in the table of the terminal."""


def axis_title(axis: Entry) -> str:
    """What an axis sets: "ramp time of main", "ambient"."""
    if axis["what"] == "ramp_time":
        rails = " and ".join(axis["rails"])
        return "ramp time of all rails" if axis["all_rails"] else f"ramp time of {rails}"
    return {"supply": "supply deviation"}.get(axis["what"], axis["what"].replace("_", " "))


def axis_value(axis: Entry, value: float) -> str:
    """One value of an axis: "1 ms", "-10 %", "25 °C"."""
    if axis["unit_of_measure"] == "1":
        return f"{100.0 * value:.4g} %"
    return shown(value, axis["unit_of_measure"])


def cell_words(entry: Entry, cell: Entry) -> str:
    """Where a cell lies: "ramp time of main 10 ms, ambient 60 °C"."""
    return ", ".join(
        f"{axis_title(entry[side])} {axis_value(entry[side], cell[side])}"
        for side in ("across", "down")
    )


def good(cell: Entry) -> Entry:
    """The outcome `starts` of a cell."""
    return next(one for one in cell["outcomes"] if one["outcome"] == "starts")


def commonest_failure(cell: Entry) -> Entry | None:
    """The outcome that most of the failing units of a cell have."""
    failing = [one for one in cell["outcomes"] if one["outcome"] != "starts" and one["units"]]
    return max(failing, key=lambda one: one["units"], default=None)


def map_sentences(summary: Summary) -> Iterator[str]:
    """What a start map shows: where all units start, where fewest do, what stops them."""
    entry = summary.get("start_map")
    if not entry:
        return
    cells, units = entry["cells"], entry["units"]
    sides = f"{axis_title(entry['across'])} and {axis_title(entry['down'])}"
    yield (
        f"The same {units} units were switched on under {len(cells)} pairs of {sides}"
        f" ({entry['condition']}, {entry['state']})."
    )
    full = [cell for cell in cells if good(cell)["units"] == units]
    if len(full) == len(cells):
        worst = percents(good(cells[0])["low"], good(cells[0])["high"])
        yield f"All of them start in every cell; of all units {worst} would, in each."
        return
    worst_cell = min(cells, key=lambda cell: good(cell)["units"])
    start = good(worst_cell)
    yield (
        f"All start in {len(full)} of the {len(cells)} cells. Fewest start at"
        f" {cell_words(entry, worst_cell)}: {start['units']} of {units},"
        f" {percent(start['share'])} ({percents(start['low'], start['high'])})."
    )
    failure = commonest_failure(worst_cell)
    if failure is not None:
        first = worst_cell["first_failing"][:FIRST_UNITS]
        failing = units - start["units"]
        named = "unit" if failing == 1 else "units"
        yield (
            f"There most often: {failure['outcome']}, {failure['units']} of the {failing} that do"
            f" not start ({named} {list_of_units(first, failing)})."
        )
    without = [cell for cell in cells if cell["with_orbit"] < units]
    if without:
        most = max(without, key=lambda cell: units - cell["with_orbit"])
        yield (
            f"In {len(without)} cells some units have no steady orbit at all, at most"
            f" {units - most['with_orbit']} of them; they are held against the nominal one."
        )


def map_table(summary: Summary) -> list[str]:
    """The map as lines of at most 78 columns; empty if it has too many columns."""
    entry = summary.get("start_map")
    if not entry:
        return []
    across, down = entry["across"], entry["down"]
    heads = [axis_value(across, value) for value in across["values"]]
    names = [axis_value(down, value) for value in down["values"]]
    first = max(len(name) for name in [*names, axis_title(down)[:20]]) + 1
    wide = max(LEAST_COLUMN, *(len(head) + 2 for head in heads))
    if first + wide * len(heads) > WIDTH:
        return []
    cells = {(cell["across"], cell["down"]): cell for cell in entry["cells"]}
    lines = [f"{axis_title(down)[:20]:<{first}}" + "".join(f"{head:>{wide}}" for head in heads)]
    letters = set()
    for name, low in zip(names, down["values"], strict=True):
        row = f"{name:<{first}}"
        for value in across["values"]:
            cell = cells[(value, low)]
            failure = commonest_failure(cell)
            letter = LETTERS[failure["outcome"]] if failure else " "
            letters |= {failure["outcome"]} if failure else set()
            row += f"{100.0 * good(cell)['share']:.0f} % {letter}".rjust(wide)
        lines.append(row.rstrip())
    told = [f"{LETTERS[one]} {one}" for one in sorted(letters)]
    said = "share that starts" + (f", commonest failure: {', '.join(told)}" if told else "")
    return [*lines, f"({said}; across: {axis_title(across)})"]
