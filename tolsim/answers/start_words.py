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


def contract_sentences(summary: Summary) -> Iterator[str]:
    """What a purchase may ask of the supply, and on what that rests."""
    contract = summary.get("supply_contract")
    if not contract:
        return
    for question in contract["questions"]:
        yield _purchase(contract, question)
        yield _spread(question)
        if question["never"]:
            easy = axis_value(question, question["ends"][0])
            named = list_of_units(question["first_never"][:FIRST_UNITS], question["never"])
            yield (
                f"{question['never']} of {contract['units']} do not start even at {easy}"
                f" ({'unit' if question['never'] == 1 else 'units'} {named})."
            )
        if question["not_single"]:
            named = list_of_units(
                question["first_not_single"][:FIRST_UNITS], question["not_single"]
            )
            yield (
                f"{question['not_single']} of {contract['units']} have no single border"
                f" ({'unit' if question['not_single'] == 1 else 'units'} {named}):"
                " they start and fail in turns, and count with the worst known."
            )


def _purchase(contract: Entry, question: Entry) -> str:
    """The sentence for a purchase specification."""
    bound, ramps = question["bound"], question["question"] == "ramp_time"
    value, rails = bound["value"], question["rails"]
    what = " and ".join(one["rail"] for one in rails)
    volts = shown(rails[0]["voltage"], "V") if len(rails) == 1 else "its voltage"
    easy, hard = question["ends"]
    if value is None:
        thing = "ramp time" if ramps else "supply deviation"
        tried = f"{axis_value(question, easy)} to {axis_value(question, hard)}"
        return f"No {thing} of {what} among those tried ({tried}) serves enough units."
    if ramps:
        asks = f"The supply {what} shall reach {volts} within {axis_value(question, value)}"
        slack = "the slowest ramp tried, slower ones may do"
    else:
        lowest = " and ".join(shown((1.0 + value) * one["voltage"], "V") for one in rails)
        asks = f"The supply {what} shall stand at {lowest} or more when it is switched on"
        asks += f" ({axis_value(question, value)})"
        slack = "the lowest tried, less may do"
    at_end = f" ({slack})" if value == hard else ""
    few = (
        ""
        if bound["enough"]
        else f" {bound['needs']} units would be needed to tell for {percent(contract['covers'])}."
    )
    return (
        f"{asks}{at_end}. This covers {percent(bound['covers'])} of units with"
        f" {100.0 * contract['confidence']:.3g} % confidence, by simulation of"
        f" {contract['units']} unit{'' if contract['units'] == 1 else 's'} in"
        f" {' and '.join(contract['conditions'])}.{few}"
    )


def _spread(question: Entry) -> str:
    """Percentiles between units."""
    middle = next(one for one in question["percentiles"] if one["share"] == 0.5)  # noqa: PLR2004
    what = "slowest ramp" if question["question"] == "ramp_time" else "lowest supply"
    told = "none" if middle["value"] is None else axis_value(question, middle["value"])
    ends = ["open" if end is None else axis_value(question, end) for end in middle["interval"]]
    hard = axis_value(question, question["ends"][1])
    beyond = f"; {question['beyond']} start even at {hard}" if question["beyond"] else ""
    return (
        f"{what[:1].upper()}{what[1:]} from which the middle unit starts: {told}"
        f" ({ends[0]} to {ends[1]}){beyond}."
    )


def map_table(summary: Summary) -> list[str]:
    """The map as lines of at most 78 columns; empty if it has too many columns."""
    entry = summary.get("start_map")
    if not entry:
        return []
    across, down = entry["across"], entry["down"]
    heads = [axis_value(across, value) for value in across["values"]]
    names = [axis_value(down, value) for value in down["values"]]
    first = max(len(name) for name in [*names, axis_title(down)[:24]]) + 1
    wide = max(LEAST_COLUMN, *(len(head) + 4 for head in heads))
    if first + wide * len(heads) > WIDTH:
        return []
    cells = {(cell["across"], cell["down"]): cell for cell in entry["cells"]}
    lines = [
        f"{axis_title(down)[:24]:<{first}}" + "".join(f"{head + '  ':>{wide}}" for head in heads)
    ]
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


def repeat_sentences(summary: Summary) -> Iterator[str]:
    """What chance does from one try to the next, kept apart from what it does between units."""
    entry = summary.get("repeated_starts")
    if not entry:
        return
    rows, tries = entry["units"], entry["tries"]
    off = " to ".join(axis_value(_SECONDS, end) for end in entry["off_time"])
    yield (
        f"{len(rows)} units were switched on {tries} times each, {off} after they ran last, ramp"
        f" times within {percent(entry['ramp_jitter'])} ({entry['condition']}, {entry['state']})."
    )
    for row in [row for row in rows if row["starts"] < tries][:FIRST_UNITS]:
        yield unit_sentence(entry, row)
    steady = sum(row["starts"] == tries for row in rows)
    if steady:
        low = rows[0]["all_low"]
        yield (
            f"{steady} of the {len(rows)} start in all {tries} tries; each of them would in at"
            f" least {percent(low)}."
        )
    split = entry["split"]
    if split["between"] is not None:
        yield (
            f"Of the variance of starting, {percent(split['between'], 0)} lies between units and"
            f" {percent(1.0 - split['between'], 0)} between tries of one unit (over the"
            f" {split['units']} units taken at random)."
        )
    if not entry["charge_counts"]:
        yield (
            "The supplies rise slowly against the oscillation; leftover charge is taken as gone"
            " by the time it begins."
        )


def unit_sentence(entry: Entry, row: Entry) -> str:
    """One unit: "Unit 17 starts in 18 of 20 tries (68.3 to 98.8 %), else latched"."""
    failing = [one for one in row["outcomes"] if one["outcome"] != "starts"]
    otherwise = f"; else {', '.join(one['outcome'] for one in failing)}" if failing else ""
    return (
        f"Unit {row['unit']} starts in {row['starts']} of {entry['tries']} tries"
        f" ({percents(row['low'], row['high'])}){otherwise}."
    )


def tries_story(summary: Summary, number: int) -> list[str]:
    """What repeated starts say of one unit; empty if it was not among them."""
    entry = summary.get("repeated_starts") or {}
    rows = [row for row in entry.get("units", []) if row["unit"] == number]
    return [unit_sentence(entry, row) for row in rows]


_SECONDS: Mapping[str, Any] = {"unit_of_measure": "s"}
