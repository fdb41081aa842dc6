"""What trimming did to the units of a run: where adjusters ended, what they left, what drifts.

Entry `trim` of the summary, documented in `tolsim.answers.results`, and one unit's sentence.
"""

from __future__ import annotations

from collections.abc import Callable, Hashable, Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tolsim.answers.bounds import named_figure
from tolsim.answers.unit_files import UnitRows
from tolsim.answers.wording import DIGITS, percent, shown
from tolsim.design import Study, Trim
from tolsim.trim.operator import TrimStatus

Floats = NDArray[np.float64]
Nominal = Mapping[tuple[str, str], Mapping[str, float]]
Flags = NDArray[np.bool_]
Interval = Callable[[Flags], tuple[float, float]]

BINS = 24  # equal parts of the range that positions are counted in
FIRST_UNITS = 5  # named of those that were not set
INNER = (0.005, 0.995)  # the shares between which 99 % of units lie
WORDS = {
    TrimStatus.SET: "set",
    TrimStatus.TOO_COARSE: "too_coarse",
    TrimStatus.EXHAUSTED: "exhausted",
    TrimStatus.NO_READING: "no_reading",
    TrimStatus.UNSETTLED: "unsettled",
}
_ENDED = {
    TrimStatus.SET: "set",
    TrimStatus.TOO_COARSE: "not set, its steps are too coarse",
    TrimStatus.EXHAUSTED: "not set, at the end of its range",
    TrimStatus.NO_READING: "not set, the meter showed nothing further on",
    TrimStatus.UNSETTLED: "not set, the operator gave up",
}


def trim_record(
    study: Study, rows: UnitRows, nominal: Nominal, interval: Interval
) -> list[dict[str, Any]]:
    """One entry per trim, in the order in which they were done.

    Parameters
    ----------
    study : Study
    rows : UnitRows
        Figures of the units.
    nominal : mapping
        (condition, state) -> column -> figure of the nominal unit.
    interval : callable
        Ends of the interval of the share of units with a flag.
    """
    return [
        _entry(study, name, trim, rows, nominal.get((trim.condition, trim.state), {}), interval)
        for name, trim in study.trims.items()
    ]


def _entry(
    study: Study,
    name: str,
    trim: Trim,
    rows: UnitRows,
    nominal: Mapping[str, float],
    interval: Interval,
) -> dict[str, Any]:
    here = rows.cases.index((trim.condition, trim.state))

    def column(figure: str) -> Floats:
        return rows.figure(f"{name}.{figure}")[:, here]

    low, high = trim.range
    status, position = column("trim_status"), column("trim_position")
    after, before, slope = (column(f"trim_{word}") for word in ("error", "before", "slope"))
    was_set = status == TrimStatus.SET
    hit = status == TrimStatus.EXHAUSTED
    # an adjuster that could not be turned at all shows no slope: the nominal one stands in
    known = np.where(np.isnan(slope), nominal.get(f"{name}.trim_slope", np.nan), slope)
    ends = interval(hit)
    where = nominal.get(f"{name}.trim_position")
    return {
        "trim": name,
        "part": trim.part,
        "quantity": trim.quantity,
        "unit_of_measure": trim.unit_of_measure,
        "range": [low, high],
        "resolution": trim.resolution,
        "reading": trim.reading,
        "reading_title": _title(study, trim),
        "reading_unit": trim.reading_unit,
        "target": trim.target,
        "within": trim.within,
        "condition": trim.condition,
        "state": trim.state,
        "endings": {word: int((status == code).sum()) for code, word in WORDS.items()},
        "exhausted_share": {"share": float(hit.mean()), "low": ends[0], "high": ends[1]},
        "at_low_end": int((hit & (position < 0.5)).sum()),  # noqa: PLR2004 - the nearer end
        "first_not_set": rows.unit[~was_set][:FIRST_UNITS],
        "nominal": None if where is None else low + where * (high - low),
        "position_counts": np.histogram(position, BINS, (0.0, 1.0))[0],
        "position": _spread(low + position * (high - low)),
        "turns": _spread(column("trim_turns")),
        "error": _spread(np.where(was_set, after, np.nan)),
        "before": _spread(before),
        "needed_range": _inner(
            low + wanted_places(position, after, known, was_set, hit) * (high - low)
        ),
        "needed_resolution": _resolution(trim, slope),
        "strains": _strains(study, name, rows, here),
        "drift": _drift(name, trim, rows),
    }


def _title(study: Study, trim: Trim) -> str:
    """What is read, for people: "idle current", "Q1 peak drain voltage"."""
    found = named_figure(study, trim.reading)
    if found is None:
        return f"idle voltage of {trim.net}"
    part, figure = found
    return f"{part} {figure.title.lower()}".strip()


def _spread(values: Floats) -> dict[str, Any]:
    """Place and width of a distribution; None without a value."""
    known = values[np.isfinite(values)]
    shares = {"low": INNER[0], "p5": 0.05, "p50": 0.5, "p95": 0.95, "high": INNER[1]}
    if not known.size:
        return dict.fromkeys((*shares, "width"))
    found = {key: float(np.quantile(known, share)) for key, share in shares.items()}
    return found | {"width": found["high"] - found["low"]}


def _inner(values: Floats) -> list[float | None]:
    """Ends between which 99 % of the units lie."""
    known = _spread(values)
    return [known["low"], known["high"]]


def wanted_places(
    position: Floats, error: Floats, slope: Floats, was_set: Flags, exhausted: Flags
) -> Floats:
    """Where adjusters ended, and where those of exhausted ranges would have had to, (N,).

    Beyond the range the reading is taken to go on as it did at last; places are in shares of the
    range, errors and slopes of the reading in shares of its target.
    """
    with np.errstate(divide="ignore", invalid="ignore"):
        beyond = position - error / slope
    places = np.where(was_set, position, np.where(exhausted, beyond, np.nan))
    return np.where(np.isfinite(places), places, np.nan)


def _resolution(trim: Trim, slope: Floats) -> float | None:
    """Largest step that still leaves 99 % of units a place within the tolerance.

    Two neighbouring steps must not lie on either side of the band of +-within.
    """
    known = np.abs(slope[np.isfinite(slope) & (slope != 0.0)])
    if not known.size:
        return None
    steep = float(np.quantile(known, 0.99)) * trim.target / (trim.range[1] - trim.range[0])
    return 2.0 * trim.within / steep


def _strains(study: Study, name: str, rows: UnitRows, here: int) -> list[dict[str, Any]]:
    """Hardest strain of each transistor while trimmed in this case."""
    found = []
    for column in rows.figure_columns:
        named = named_figure(study, column)
        if named is None or not named[0] or named[0] == name:
            continue
        part, figure = named
        if not figure.name.startswith("trim_") or part in study.trims:
            continue
        values = rows.figure(column)[:, here]
        if not np.isfinite(values).any():
            continue
        rating = None
        if figure.rating is not None:
            rating = getattr(study.design.parts[part].rating, figure.rating)
        found.append(
            {
                "part": part,
                "figure": figure.name,
                "title": figure.title,
                "unit_of_measure": figure.unit_of_measure,
                "rating": rating,
                "p50": float(np.nanquantile(values, 0.5)),
                "p99": float(np.nanquantile(values, 0.99)),
                "highest": float(np.nanmax(values)),
            }
        )
    return found


def _drift(name: str, trim: Trim, rows: UnitRows) -> list[dict[str, Any]]:
    """Reading over target, less 1, in every case that has it."""
    column = f"{name}.trim_voltage" if trim.net else trim.reading
    if column not in rows.figure_columns:
        return []
    values = rows.figure(column)
    found = []
    for c, (condition, state) in enumerate(rows.cases):
        if np.isfinite(values[:, c]).any():
            spread = _spread(values[:, c] / trim.target - 1.0)
            found.append({"condition": condition, "state": state, **spread})
    return found


def trim_sentence(study: Study, name: str, row: Mapping[Hashable, Any]) -> str:
    """What the operator did to one unit, from its row of the bench case."""
    trim = study.trims[name]
    low, high = trim.range
    turns = int(row[f"{name}.trim_turns"])
    place = place_words(low + row[f"{name}.trim_position"] * (high - low), trim.unit_of_measure)
    ended = _ENDED[TrimStatus(int(row[f"{name}.trim_status"]))]
    return (
        f"Trim {name}: {ended} after {turns} {'turn' if turns == 1 else 'turns'}, {trim.address}"
        f" at {place}; {_title(study, trim)} {signed(row[f'{name}.trim_error'])} off its target of"
        f" {shown(trim.target, trim.reading_unit)} (untrimmed"
        f" {signed(row[f'{name}.trim_before'])})."
    )


def way_sentence(study: Study, name: str, way: Sequence[tuple[float, float]]) -> str:
    """The operator's way with one unit: places and true readings in the order he saw them."""
    trim = study.trims[name]
    unit = trim.unit_of_measure
    seen = ", ".join(
        f"{place_words(place, unit)} {shown(reading, trim.reading_unit)}" for place, reading in way
    )
    return f"  {trim.address} and {_title(study, trim)} on the way: {seen}."


def place_words(value: float | None, unit_of_measure: str) -> str:
    """A position of an adjuster: shares as percentages."""
    if value is not None and unit_of_measure == "1":
        return f"{100.0 * value:.{DIGITS}g} %"
    return shown(value, unit_of_measure)


def signed(share: float | None) -> str:
    """Share with its sign: "+2.1 %", "-0.40 %"."""
    if share is None or not np.isfinite(share):
        return "unknown"
    return f"{'-' if share < 0 else '+'}{percent(abs(share))}"
