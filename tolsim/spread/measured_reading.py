"""`{law = "measured", file = "reel.csv", ...}`: readings of a reel to the law of its parts."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path, PurePosixPath
from typing import Final

import numpy as np

from tolsim import quantity
from tolsim.errors import Mistake, nearest_name
from tolsim.laws.measured import Measured
from tolsim.laws.predictive import SHAPES, Shape, next_piece
from tolsim.laws.reading import Report
from tolsim.spread.readings import Readings, read_readings

NAME: Final = "measured"
_NEEDED: Final = ("file",)
_KEYS: Final = (
    "file",
    "nominal",
    "shape",
    "column",
    "unit",
    "low",
    "high",
    "meter_noise",
    "meter_bias",
    "test_frequency",
)


@dataclass(frozen=True)
class Reel:
    """What a measured law was made from, with the law."""

    law: Measured
    readings: Readings
    path: str  # as the table names it


def read_measured(
    given: Mapping[str, object],
    folder: Path | None,
    unit: str,
    deviation: str,
    report: Report,
) -> Reel | None:
    """Law of the next piece of a measured reel.

    Parameters
    ----------
    given : mapping
        What the table says; keys: the file, `nominal` (marked value of the pieces measured),
        `shape`, `column`, `unit` of bare numbers, the sorting limits `low` and `high` as
        deviations, `meter_noise` (standard deviation of a reading, as a deviation),
        `test_frequency` of the meter.
    folder : Path or None
        Where the table file lies; the file of readings is named relative to it.
    unit : str
        Unit of measure of the quantity.
    deviation : str
        "relative" or "absolute", as the table means its laws.
    report : callable
        Called with every mistake.

    Returns
    -------
    Reel or None
        None if a mistake was reported.
    """
    said: list[Mistake] = []
    _check_keys(given, said)
    of_law = unit if deviation == "absolute" else "1"
    if deviation == "position":
        cure = 'Write deviation = "absolute": readings are volts from the nominal threshold.'
        said.append(Mistake("no readings where positions are meant", cure, "law", '"measured"'))
    nominal = _number(given, "nominal", unit, said)
    if "nominal" not in given and unit != "1":
        cure = f'Say which value the pieces are marked with: nominal = "100 {unit}".'
        said.append(Mistake("the marked value of the pieces", cure, "nominal", "nothing"))
    low, high = (_number(given, key, of_law, said) for key in ("low", "high"))
    noise = _number(given, "meter_noise", of_law, said) or 0.0
    frequency = _number(given, "test_frequency", "Hz", said)
    if noise < 0.0:
        said.append(Mistake("a noise of at least 0", key="meter_noise", got=f"{noise:g}"))
    shape = _shape(given, said)
    readings = _file(given, folder, unit, said)
    for mistake in said:
        report(mistake)
    if said or readings is None:
        return None
    values = np.array(readings.values)
    if nominal is not None:
        values = values - nominal if deviation == "absolute" else values / nominal - 1.0
    if deviation == "relative" and np.any(abs(values) > _FAR):
        worst = float(values[np.argmax(abs(values))])
        cure = "Check nominal, and the unit of the readings."
        report(Mistake("readings near nominal", cure, "nominal", f"{given.get('nominal')}, a "
                       f"piece {worst:+.0%} off"))  # fmt: skip
        return None
    try:
        law = next_piece(
            values,
            shape=shape,
            noise=noise,
            low=low,
            high=high,
            origin=-1.0 if deviation == "relative" else None,
            file=readings.file,
            test_frequency=frequency,
        )
    except Mistake as mistake:
        report(mistake)
        return None
    return Reel(law, readings, str(given["file"]))


_FAR: Final = 0.9  # relative; no reel is as far off as that


def _check_keys(given: Mapping[str, object], said: list[Mistake]) -> None:
    for key in given:
        if key not in (*_KEYS, "law"):
            expected = f"a parameter of the {NAME} law: " + ", ".join(_KEYS)
            near = nearest_name(key, list(_KEYS))
            said.append(Mistake(expected, key=key, got=f'"{key}"', nearest=near))


def _number(given: Mapping[str, object], key: str, unit: str, said: list[Mistake]) -> float | None:
    value = given.get(key)
    if value is None:
        return None
    if unit == "1" and isinstance(value, int | float) and not isinstance(value, bool):
        return float(value)
    try:
        return quantity.read(str(value), unit)
    except Mistake as mistake:
        said.append(Mistake(mistake.expected, mistake.cure, key, f'"{value}"'))
        return None


def _shape(given: Mapping[str, object], said: list[Mistake]) -> Shape:
    shape = given.get("shape", "auto")
    for known in SHAPES:
        if shape == known:
            return known
    near = nearest_name(str(shape), list(SHAPES))
    said.append(Mistake("one of " + ", ".join(SHAPES), key="shape", got=f'"{shape}"', nearest=near))
    return "auto"


def _file(
    given: Mapping[str, object], folder: Path | None, unit: str, said: list[Mistake]
) -> Readings | None:
    """Readings of the file named, mistakes with the number of their line."""
    name = given.get("file")
    if not isinstance(name, str) or not name.strip():
        got = "nothing" if name is None else f"{name!r}"
        said.append(Mistake("the name of a file of readings", key="file", got=got))
        return None
    place = PurePosixPath(name.replace("\\", "/"))
    if folder is None or place.is_absolute() or ".." in place.parts or ":" in name:
        cure = "Put it beside the table file or in a folder below, and name it from there."
        said.append(Mistake("a file below the folder of the table", cure, "file", f'"{name}"'))
        return None
    texts = {key: given.get(key) for key in ("column", "unit")}
    for key, value in texts.items():
        if value is not None and not isinstance(value, str):
            said.append(Mistake("a text", key=key, got=f"{value!r}"))
            texts[key] = None

    def tell(line: int, mistake: Mistake) -> None:
        where = f"file {name}" + (f" line {line}" if line else "")
        said.append(
            Mistake(
                mistake.expected,
                mistake.cure,
                where if mistake.key in ("", "file") else mistake.key,
                mistake.got,
                mistake.nearest,
            )
        )

    column, written_in = texts["column"], texts["unit"]
    return read_readings(
        folder / place,
        unit,
        tell,
        column=column if isinstance(column, str) else None,
        written_in=written_in if isinstance(written_in, str) else None,
    )
