"""Files of meter readings: a list of numbers as meters and spreadsheets write them.

    # reel of March, meter at 100 kHz          lines that begin with # say what they like
    piece;C [nF];D
    1;99,8;0,0004                              ; tab , or | between columns, comma or point
    2;100,4;0,0003                             in numbers, unit in the head or in the cell

Every mistake of a file is told at once, with the number of its line.
"""

from __future__ import annotations

import csv
import hashlib
import re
import statistics
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path
from typing import Final

from tolsim import quantity
from tolsim.errors import Mistake, nearest_name

Tell = Callable[[int, Mistake], None]
"""Called with the number of a line (0: the file as a whole) and what is wrong with it."""

_COMMENTS: Final = ("#", "//", "%")
_NUMBER: Final = re.compile(
    r"([+-]?(?:\d[\d.,]*|[.,]\d+)(?:[eE][+-]?\d+)?)\s*([A-Za-z%µμΩ°].*)?"  # not a date
)
_IN_BLANKS: Final = re.compile(r"\s*[+-]?[\d.,]+\s+[+-]?\d[\d.,]*(?:\s.*)?")
_IN_BRACKETS: Final = re.compile(r"^(.*?)\s*[\[(]\s*([^\])]*)\s*[\])]\s*$")
_NEVER: Final = "\x1f"  # no line of text holds this sign
_EMPTY: Final = ("", "-", "--", "n/a", "na")
_LARGEST: Final = 4_000_000  # bytes; more is no list of readings
_FAR_OFF: Final = 30.0  # times the median: a wrong unit, a short or an open


@dataclass(frozen=True)
class Readings:
    """Readings of one quantity, one per piece.

    Attributes
    ----------
    file : str
        Name of the file.
    text, sha256 : str
        Its content, and the hash of that.
    column : str
        Head of the column taken; empty if there is none.
    values : tuple of float
        SI (degC, h), in the order of the file.
    lines : tuple of int
        Line of each value.
    """

    file: str
    text: str
    sha256: str
    column: str
    values: tuple[float, ...]
    lines: tuple[int, ...]


@dataclass(frozen=True)
class _Row:
    line: int
    cells: tuple[str, ...]


@dataclass(frozen=True)
class _Column:
    """A column: its place, its head without the unit, the unit in its head."""

    place: int
    name: str
    unit: str


def read_readings(
    path: Path, unit: str, tell: Tell, *, column: str | None = None, written_in: str | None = None
) -> Readings | None:
    """Readings in a file.

    Parameters
    ----------
    path : Path
        Text file.
    unit : str
        Unit of measure of the quantity, as `quantity.read` takes it: "F", "H", "1", ...
    tell : callable
        Called with every mistake found and the number of its line.
    column : str, optional
        Head of the column to take; needed if several could be meant.
    written_in : str, optional
        Unit of numbers that carry none, neither in the cell nor in the head.

    Returns
    -------
    Readings or None
        None if a mistake was told.
    """
    try:
        data = path.read_bytes()
    except OSError as error:
        cure = "Give its name relative to the file that names it."
        tell(0, Mistake("a file of readings", cure, got=error.strerror or str(error)))
        return None
    wide = data.startswith((b"\xff\xfe", b"\xfe\xff"))
    if len(data) > _LARGEST or (b"\0" in data and not wide):
        cure = "Save it as text: one reading per line, CSV or tabs."
        tell(0, Mistake("a text file of readings", cure, got="something else"))
        return None
    return parse_readings(data, path.name, unit, tell, column=column, written_in=written_in)


def parse_readings(
    data: bytes,
    file: str,
    unit: str,
    tell: Tell,
    *,
    column: str | None = None,
    written_in: str | None = None,
) -> Readings | None:
    """Readings in the bytes of a file; see `read_readings`."""
    mistakes: list[tuple[int, Mistake]] = []

    def note(line: int, mistake: Mistake) -> None:
        mistakes.append((line, mistake))

    text = _decoded(data)
    rows = list(_rows(text))
    head, body = _head(rows, unit)
    found = _column(head, body, unit, column, note) if rows else None
    values: list[float] = []
    lines: list[int] = []
    for row in body if found is not None else ():
        assert found is not None
        cell = row.cells[found.place].strip() if found.place < len(row.cells) else ""
        if cell.casefold() in _EMPTY:
            continue
        value = _value(cell, found.unit or written_in or "", unit, row.line, note)
        if value is not None:
            values.append(value)
            lines.append(row.line)
    if not values and not mistakes:
        note(0, Mistake("readings, one per line", got="none"))
    if unit != "1":  # deviations may lie on both sides of zero
        _check_sizes(values, lines, note)
    for line, mistake in sorted(mistakes, key=lambda pair: pair[0]):
        tell(line, mistake)
    if mistakes or found is None:
        return None
    digest = hashlib.sha256(text.encode()).hexdigest()  # also of a copy in UTF-8
    return Readings(file, text, digest, found.name, tuple(values), tuple(lines))


def _decoded(data: bytes) -> str:
    """Text of a file: UTF-8 or UTF-16 with its mark, else the code page of older meters."""
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        return data.decode("utf-16", errors="replace")
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError:
        return data.decode("cp1252", errors="replace")


def _rows(text: str) -> Iterator[_Row]:
    """Lines that hold something, split into cells."""
    numbered = [
        (number, line)
        for number, line in enumerate(text.splitlines(), 1)
        if line.strip() and not line.lstrip().startswith(_COMMENTS)
    ]
    sign = _delimiter([line for _, line in numbered])
    for number, line in numbered:
        cells = line.split() if sign == " " else next(csv.reader([line], delimiter=sign))
        yield _Row(number, tuple(cell.strip() for cell in cells))


def _delimiter(lines: Sequence[str]) -> str:
    """Sign between columns; one that never occurs if there is one column only.

    A comma may also be the decimal sign: it is, if every line is one number with one comma
    and the numbers before the commas do not simply count the pieces.
    """
    for sign in (";", "\t", "|"):
        if sum(sign in line for line in lines) * 2 > len(lines):
            return sign
    bare = [re.sub(r'"[^"]*"', '""', line) for line in lines]  # commas in quotes divide nothing
    commas = [line for line in bare if "," in line]
    if len(commas) * 2 <= len(lines):
        blanks = sum(bool(_IN_BLANKS.fullmatch(line)) for line in bare)
        return " " if blanks * 2 > len(lines) else _NEVER
    numbers = [line.strip() for line in commas if re.match(r"\s*[+-]?\d", line)]
    single = all(re.fullmatch(r"[+-]?[\d.]+,\d+(?:[eE][+-]?\d+)?\s*[^\d,;]*", n) for n in numbers)
    return _NEVER if single and not _counting([n.split(",")[0] for n in numbers]) else ","


def _counting(texts: Sequence[str]) -> bool:
    """True if the texts are 1, 2, 3, ... or 0, 1, 2, ...: numbers of pieces, no readings."""
    if len(texts) <= 1 or not all(text.isdecimal() for text in texts):
        return False
    numbers = [int(text) for text in texts]
    return numbers[0] in (0, 1) and all(b == a + 1 for a, b in pairwise(numbers))


def _head(rows: Sequence[_Row], unit: str) -> tuple[tuple[str, ...], list[_Row]]:
    """Heads of the columns, units of a second head line joined to them, and the rest.

    Before the heads, lines may stand that meters write about themselves.
    """
    first = next((n for n, row in enumerate(rows) if any(map(_number_in, row.cells))), len(rows))
    above, body = list(rows[:first]), list(rows[first:])
    units: tuple[str, ...] = ()
    if len(above) > 1 and any(_measures(cell.strip("[]()"), unit) for cell in above[-1].cells):
        units = tuple(cell.strip("[]()") for cell in above.pop().cells)
    measuring = [
        n
        for n, row in enumerate(above)
        if any(_measures(_split(c, unit)[1], unit) for c in row.cells)
    ]
    if measuring and not units:  # what stands below the heads should be readings
        body = above[measuring[-1] + 1 :] + body
        above = above[: measuring[-1] + 1]
    heads = above[-1].cells if above else ()
    units += ("",) * (len(heads) - len(units))
    pairs = zip(heads, units, strict=False)
    return tuple(f"{name} [{own}]" if own else name for name, own in pairs), body


def _measures(unit_text: str, unit: str) -> bool:
    """True if a text is a unit of measure of the quantity wanted."""
    if not unit_text.strip():
        return False
    try:
        quantity.read(f"1 {unit_text.strip()}", unit)
    except Mistake:
        return False
    return True


def _number_in(cell: str) -> bool:
    return bool(_NUMBER.fullmatch(cell))


def _column(
    head: Sequence[str],
    body: Sequence[_Row],
    unit: str,
    wanted: str | None,
    note: Tell,
) -> _Column | None:
    """The column that holds the readings."""
    width = max((len(row.cells) for row in body), default=0)
    names = [*head, *("" for _ in range(width - len(head)))]
    columns = [_Column(place, *_split(name, unit)) for place, name in enumerate(names)]
    if wanted is not None:
        for one in columns:
            if one.name.casefold() == wanted.casefold() or one.name == _split(wanted, unit)[0]:
                return one
        known = [one.name for one in columns if one.name]
        cure = f"Columns here: {', '.join(known)}." if known else "The file has no head line."
        near = nearest_name(wanted, known)
        note(0, Mistake("the head of a column", cure, "column", f'"{wanted}"', near))
        return None
    fitting = [one for one in columns if _fits(one, body, unit)]
    if len(fitting) == 1:
        return fitting[0]
    numeric = [
        one for one in columns if not one.unit and not _counts(one, body) and _filled(one, body)
    ]
    if not fitting and len(numeric) == 1:
        return numeric[0]
    if len(columns) == 1:
        return columns[0]
    several = fitting or numeric
    shown = ", ".join(one.name or f"number {one.place + 1}" for one in several or columns)
    cure = f'Say which, column = "...": {shown}.'
    note(0, Mistake("one column of readings", cure, "column", f"{len(several)}"))
    return None


def _split(head: str, unit: str) -> tuple[str, str]:
    """Name and unit of a column: "C [nF]", "C (nF)", "C in nF", "C/nF", "C nF", "C_nF"."""
    match = _IN_BRACKETS.match(head) or re.match(r"^(.*?)\s*(?:\bin\b|/)\s*(\S+)$", head)
    if match is None:
        match = re.match(r"^(.*?)[\s_]+([^\s_]+)$", head)
        match = match if match and _measures(match[2], unit) else None
    return (match[1].strip(), match[2].strip()) if match else (head.strip(), "")


def _fits(column: _Column, body: Sequence[_Row], unit: str) -> bool:
    """True if the unit in head or first cell measures the quantity wanted."""
    own = column.unit
    if not own:
        cells = [row.cells[column.place] for row in body if column.place < len(row.cells)]
        matches = [m for m in map(_NUMBER.fullmatch, cells) if m]
        own = (matches[0][2] or "") if matches else ""
    return _measures(own, unit)


def _filled(column: _Column, body: Sequence[_Row]) -> bool:
    cells = [row.cells[column.place] for row in body if column.place < len(row.cells)]
    return any(_number_in(cell) for cell in cells)


def _counts(column: _Column, body: Sequence[_Row]) -> bool:
    """True if the column only numbers the pieces."""
    return _counting([r.cells[column.place] for r in body if column.place < len(r.cells)])


def _value(cell: str, own: str, unit: str, line: int, note: Tell) -> float | None:
    """One reading in `unit`."""
    match = _NUMBER.fullmatch(cell)
    if match is None:
        cure = "Leave the cell empty if the piece was not measured."
        note(line, Mistake("a reading", cure, got=f'"{cell}"'))
        return None
    number, in_cell = _plain(match[1]), (match[2] or "").strip()
    measure = in_cell or own
    if not measure and unit != "1":
        likely = _LIKELY.get(unit, unit)
        cure = f'Write it into the head, "C [{likely}]", or unit = "{likely}" into the law.'
        note(line, Mistake("a reading with a unit of measure", cure, got=f'"{cell}"'))
        return None
    try:
        return quantity.read(f"{number} {measure}".strip(), unit)
    except Mistake as mistake:
        note(line, Mistake(mistake.expected, mistake.cure, got=f'"{cell}"'))
        return None


_LIKELY: Final = {"F": "nF", "H": "uH", "ohm": "ohm"}


def _plain(number: str) -> str:
    """Number with a decimal point: the last of "." and "," is the decimal sign if both occur."""
    point, comma = number.rfind("."), number.rfind(",")
    if point >= 0 and comma >= 0:
        group = "," if point > comma else "."
        number = number.replace(group, "")
    return number.replace(",", ".")


def _check_sizes(values: Sequence[float], lines: Sequence[int], note: Tell) -> None:
    """A reading far off all others is a wrong unit, a short or an open, and no scatter."""
    if len(values) <= 2:  # noqa: PLR2004 - the middle of two says nothing about either
        return
    middle = statistics.median(values)
    if not middle:
        return
    for value, line in zip(values, lines, strict=True):
        ratio = value / middle
        if not 1.0 / _FAR_OFF < ratio < _FAR_OFF:
            cure = "Check its unit and the piece; delete the line if the piece is broken."
            got = f"{value:.4g}, the middle of all is {middle:.4g}"
            note(line, Mistake("a reading near the others", cure, got=got))
