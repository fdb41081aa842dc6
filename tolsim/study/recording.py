"""Recorded ramps of a supply: text files of time and voltage, as oscilloscopes write them.

    Model;any;lines before the numbers are the head
    time [ms];CH1 (V)             ; tab or , between columns, comma or point in numbers
    0,00;0,02
    0,05;0,31                     the unit of time stands in the head, or behind the number

Only the shape counts: levels are shares of the final voltage, the mean of the last readings.
Every mistake of a file is told at once, with the number of its line.
"""

from __future__ import annotations

import csv
import re
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path, PurePosixPath
from typing import Final

import numpy as np
from numpy.typing import NDArray

from tolsim.errors import Mistake
from tolsim.quantity import read

Floats = NDArray[np.float64]
Tell = Callable[[int, Mistake], None]
"""Called with the number of a line (0: the file as a whole) and what is wrong with it."""

ENDINGS: Final = (".csv", ".txt", ".tsv", ".dat")
LARGEST: Final = 16_000_000  # bytes
FEWEST: Final = 4  # readings
FINAL_SHARE: Final = 0.05  # of the readings, whose mean is the final voltage
STEADY: Final = 0.05  # of the final voltage, by which those may differ from their mean
LOW_AT_FIRST: Final = 0.2  # of the final voltage, at the first reading
FINENESS: Final = 1e-3  # of the final voltage; points that change less are left out
MOST_TOLD: Final = 20  # lines told one by one
SAMPLE: Final = 50  # lines that tell what stands between columns
_SIGNS: Final = (";", "\t", "|", ",", " ")  # the first of those that serve best
_COMMENTS: Final = ("#", "//", "%")
_CELL: Final = re.compile(r"([+-]?(?:\d+(?:[.,]\d*)?|[.,]\d+)(?:[eE][+-]?\d+)?)\s*([A-Za-zµμ]+)?")
_BRACKETS: Final = re.compile(r"[\[(]\s*([^\])]+?)\s*[\])]\s*$|\bin\s+(\S+)$|/\s*(\S+)$")
_MEASURES: Final = {"s": "time", "V": "voltage"}


@dataclass(frozen=True)
class Recording:
    """A recorded ramp.

    Attributes
    ----------
    text : str
        The file.
    points : tuple of (float, float)
        Time from the first reading, s, and share of the final voltage.
    """

    text: str
    points: tuple[tuple[float, float], ...]


def read_recording(folder: Path, name: str, tell: Tell) -> Recording | None:
    """A recorded ramp beside the study; None after telling what is wrong.

    Parameters
    ----------
    folder : Path
        Folder of the study.
    name : str
        Path of the file in that folder.
    """
    inside = PurePosixPath(name)
    if inside.suffix.lower() not in ENDINGS:
        tell(0, Mistake(f"a text file ending in {', '.join(ENDINGS)}", "Save it as CSV."))
        return None
    if inside.is_absolute() or ".." in inside.parts or "\\" in name or ":" in name:
        cure = "Put it beside the study; results then keep a copy of both."
        tell(0, Mistake("a file in the folder of the study, its path with /", cure))
        return None
    try:
        data = (folder / name).read_bytes()
    except OSError as error:
        here = sorted(path.name for path in folder.glob("*.csv"))
        cure = f"In that folder: {', '.join(here)}." if here else "Give its path from the study."
        got = f'"{name}": {error.strerror or error}'
        tell(0, Mistake("a file of time and voltage", cure, got=got))
        return None
    text = _decoded(data)
    if len(data) > LARGEST or "\0" in text:
        what = f"a text file of at most {LARGEST // 1_000_000} MB"
        tell(0, Mistake(what, "Export fewer readings as CSV.", got=f"{len(data)} bytes"))
        return None
    points = _points(text, tell)
    return None if points is None else Recording(text, points)


def _decoded(data: bytes) -> str:
    """UTF-8 or UTF-16 with its mark, else the code page of older instruments."""
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        return data.decode("utf-16", errors="replace")
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError:
        return data.decode("cp1252", errors="replace")


def _points(text: str, tell: Tell) -> tuple[tuple[float, float], ...] | None:
    """Points of the text of a file."""
    told: list[tuple[int, Mistake]] = []

    def note(line: int, mistake: Mistake) -> None:
        told.append((line, mistake))

    rows = list(_rows(text))
    first = next((k for k, (_, cells) in enumerate(rows) if _numbers(cells)), len(rows))
    heads, body = [cells for _, cells in rows[:first]], rows[first:]
    columns = _columns(heads, body, note)
    readings = list(_readings(body, columns, note)) if columns else []
    if not told and len(readings) < FEWEST:
        note(0, Mistake(f"at least {FEWEST} readings", got=str(len(readings))))
    if told:
        for line, mistake in told[:MOST_TOLD]:
            tell(line, mistake)
        if len(told) > MOST_TOLD:
            more = f"{len(told) - MOST_TOLD} more lines like these"
            tell(0, Mistake("lines of time and voltage", got=more))
        return None
    times, volts = (np.array(column) for column in zip(*readings, strict=True))
    levels = _shares(volts, tell)
    return None if levels is None else _thinned(times - times[0], levels)


def _rows(text: str) -> Iterator[tuple[int, list[str]]]:
    """Lines that hold something, split into cells, with their numbers."""
    lines = [
        (number, line.strip())
        for number, line in enumerate(text.splitlines(), 1)
        if line.strip() and not line.lstrip().startswith(_COMMENTS)
    ]
    sample = [line for _, line in lines[-SAMPLE:]]
    sign = max(_SIGNS, key=lambda one: sum(_numbers(_cells(line, one)) for line in sample))
    for number, line in lines:
        yield number, _cells(line, sign)


def _cells(line: str, sign: str) -> list[str]:
    cells = line.split() if sign == " " else next(csv.reader([line], delimiter=sign))
    return [cell.strip() for cell in cells]


def _numbers(cells: Sequence[str]) -> bool:
    """Whether a line holds readings: nothing but numbers, at least two."""
    filled = [cell for cell in cells if cell]
    return len(filled) > 1 and all(_CELL.fullmatch(cell) for cell in filled)


@dataclass(frozen=True)
class _Columns:
    """Where time and voltage stand, and the unit of time if the head has it."""

    time: int
    volts: int
    unit: str


def _columns(
    heads: Sequence[Sequence[str]], body: Sequence[tuple[int, Sequence[str]]], note: Tell
) -> _Columns | None:
    """The columns, told apart by the units in the head, else the first two."""
    if not body:
        note(0, Mistake("lines of time and voltage", got="none"))
        return None
    width = len(body[0][1])
    units = {name: _measured(heads, width, unit) for unit, name in _MEASURES.items()}
    clock, volts = units["time"], units["voltage"]
    if len(volts) > 1:
        got = f"{len(volts)} columns of voltage"
        note(0, Mistake("one column of voltage", "Delete the others.", got=got))
        return None
    time = next(iter(clock), 0)
    others = [k for k in (*volts, *range(width)) if k != time and k not in clock]
    if not others:
        note(0, Mistake("a column of time and one of voltage", got=f"{width} column"))
        return None
    return _Columns(time, others[0], clock.get(time, ""))


def _measured(heads: Sequence[Sequence[str]], width: int, unit: str) -> dict[int, str]:
    """Columns whose head has a unit that measures the same as `unit`: place to unit text."""
    found = {}
    for place in range(width):
        for cells in heads:
            cell = cells[place] if place < len(cells) else ""
            match = _BRACKETS.search(cell)
            for text in (*(match.groups() if match else ()), cell):
                if text and _converts(text, unit):
                    found[place] = text
    return found


def _converts(text: str, unit: str) -> bool:
    try:
        read(f"1 {text}", unit)
    except Mistake:
        return False
    return True


def _readings(
    body: Sequence[tuple[int, Sequence[str]]], columns: _Columns, note: Tell
) -> Iterator[tuple[float, float]]:
    """Time, s, and voltage of every line."""
    last, last_line = -np.inf, 0
    scale: dict[str, float] = {}
    for line, cells in body:
        if max(columns.time, columns.volts) >= len(cells):
            note(line, Mistake("time and voltage", got=f"{len(cells)} column"))
            continue
        clock, volts = (_CELL.fullmatch(cells[k]) for k in (columns.time, columns.volts))
        if clock is None or volts is None:
            got = cells[columns.time if clock is None else columns.volts]
            note(line, Mistake("a number", "Delete the line if it is no reading.", got=f'"{got}"'))
            continue
        unit = (clock[2] or columns.unit).strip()
        if unit not in scale:
            try:
                scale[unit] = read(f"1 {unit}", "s")
            except Mistake:
                cure = 'Write the unit into the head of the column: "time [ms]".'
                note(line, Mistake("a unit of time", cure, got=f'"{unit}"' if unit else "none"))
                return
        time = _plain(clock[1]) * scale[unit]
        if time <= last:
            cure = "Sort the lines by time and delete doubles."
            note(line, Mistake(f"a time after that of line {last_line}", cure, got=f"{time:g} s"))
            continue
        last, last_line = time, line
        yield time, _plain(volts[1])


def _plain(number: str) -> float:
    return float(number.replace(",", "."))


def _shares(volts: Floats, tell: Tell) -> Floats | None:
    """Levels as shares of the final voltage, the last one exactly 1."""
    tail = volts[-max(1, round(FINAL_SHARE * len(volts))) :]
    final = float(tail.mean())
    if not final > 0:
        tell(0, Mistake("a voltage above 0 at the end", got=f"{final:.3g}"))
        return None
    levels = volts / final
    wrong = False
    if np.abs(tail / final - 1).max() > STEADY or abs(volts[-2] / final - 1) > STEADY:
        cure = "Record on until the voltage is steady."
        tell(0, Mistake("an end within 5 % of the final voltage", cure, got="a voltage that moves"))
        wrong = True
    if levels[0] > LOW_AT_FIRST:
        cure = "Begin the recording before the supply is switched on."
        got = f"{100 * levels[0]:.0f} % of the final voltage"
        tell(0, Mistake("a first reading near 0 V", cure, got=got))
        wrong = True
    levels[-1] = 1.0
    return None if wrong else levels


def _thinned(times: Floats, levels: Floats) -> tuple[tuple[float, float], ...]:
    """The fewest of the points that keep straight lines within `FINENESS` of all.

    D. H. Douglas, T. K. Peucker, "Algorithms for the reduction of the number of points required
    to represent a digitized line or its caricature", Cartographica 10 (1973) 112-122; distances
    are taken along the level.
    """
    keep = {0, len(times) - 1}
    pending = [(0, len(times) - 1)]
    while pending:
        first, last = pending.pop()
        inside = slice(first + 1, last)
        line = np.interp(times[inside], times[[first, last]], levels[[first, last]])
        away = np.abs(levels[inside] - line)
        if away.size and away.max() > FINENESS:
            middle = first + 1 + int(np.argmax(away))
            keep.add(middle)
            pending += [(first, middle), (middle, last)]
    return tuple((float(times[k]), float(levels[k])) for k in sorted(keep))
