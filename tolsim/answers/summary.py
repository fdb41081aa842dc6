"""Count and condense the rows of all units into the summary of a run.

The keys are documented in `tolsim.answers.results`.  Columns are read one by one, so that a run
of 100 000 units needs no more memory than one of its columns.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tolsim.answers.bounds import Bound, applies, bounds, named_figure, rating_of
from tolsim.answers.counting import Counting, sampling_note
from tolsim.answers.lots import lots_entry
from tolsim.answers.mission import mission_entry
from tolsim.answers.power_on import power_on_entry
from tolsim.answers.ranking import rankings
from tolsim.answers.supply_words import supply_entries
from tolsim.answers.transitions import transitions_entry
from tolsim.answers.trims import trim_record
from tolsim.answers.unit_files import Columns, UnitRows
from tolsim.design import Study
from tolsim.figure_names import FigureInfo

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]  # (N,) or (N, cases)
Nominal = Mapping[tuple[str, str], Mapping[str, float]]

FORMAT = 1  # raised when a key changes its meaning
SHARES = {"p1": 0.01, "p5": 0.05, "p50": 0.50, "p95": 0.95, "p99": 0.99}
FIRST_UNITS = 5  # failing units named per entry


def summarise(
    study: Study,
    units: Columns,
    factors: Columns,
    nominal: Nominal,
    quality: Mapping[str, Any],
    provenance: Mapping[str, Any],
) -> dict[str, Any]:
    """Build the summary of a run: plain numbers, texts, lists and dicts only.

    Parameters
    ----------
    study : Study
    units : Columns
        One row per unit, condition and state.
    factors : Columns
        One row per unit.
    nominal : mapping
        (condition, state) -> column -> figure of the unit with every part at nominal.
    quality, provenance : mapping
        Passed through.

    Raises
    ------
    ValueError
        If there is no unit, or rows are missing.
    """
    rows = UnitRows.of(units)
    counting = Counting.of(study.lots, rows.unit, study.run.confidence)
    verdict_codes, verdicts = rows.words("verdict")
    failed = _where(verdict_codes, verdicts, "fail")
    undecided = _where(verdict_codes, verdicts, "undecided")
    unit_failed, unit_undecided = _in_any_case(failed), _in_any_case(undecided)
    summary = {
        "format": FORMAT,
        "title": study.title,
        "kind": study.kind,
        "supplies": supply_entries(study.design.rails),
        "yield": counting.yield_(unit_failed, unit_undecided),
        "cases": [
            {
                "condition": condition,
                "state": state,
                **counting.yield_(failed[:, c], undecided[:, c]),
            }
            for c, (condition, state) in enumerate(rows.cases)
        ],
        "outcomes": _outcomes(rows, failed, counting),
        "limits": _limits(study, rows, counting),
        "figures": _figures(study, rows, nominal, counting),
        "trim": trim_record(study, rows, nominal, counting.interval),
        "power_on": power_on_entry(study, rows, counting),
        "mission": mission_entry(study, rows, counting, nominal),
        "transitions": transitions_entry(study, rows),
        "lots": lots_entry(study, rows, unit_failed, unit_undecided),
        "ranking": rankings(study, rows, factors, unit_failed, unit_undecided),
        "quality": dict(quality) | sampling_note(study.run.sampling),
        "provenance": dict(provenance),
    }
    plain: dict[str, Any] = _plain(summary)
    return plain


def _where(codes: NDArray[np.intp], words: Sequence[str], word: str) -> Flags:
    return np.equal(codes, words.index(word) if word in words else -2)


def _in_any_case(hit: Flags) -> Flags:
    return np.asarray(hit.any(axis=1), bool)


def _counted(unit: NDArray[np.int64], hit: Flags, counting: Counting) -> dict[str, Any]:
    """Count units with an interval, and name the first of them."""
    low, high = counting.interval(hit)
    return {
        "units": int(hit.sum()),
        "share": float(hit.mean()),
        "low": low,
        "high": high,
        "first_units": unit[hit][:FIRST_UNITS].tolist(),
    }


def _outcomes(rows: UnitRows, failed: Flags, counting: Counting) -> list[dict[str, Any]]:
    codes, words = rows.words("outcome")
    broken, which = rows.words("failed_limits")
    no_limit = failed & _where(broken, which, "")
    found = []
    for c, (condition, state) in enumerate(rows.cases):
        for code, outcome in enumerate(words):
            here = codes[:, c] == code
            if here.any():
                found.append(
                    {
                        "condition": condition,
                        "state": state,
                        "outcome": outcome,
                        **_counted(rows.unit, here, counting),
                        "failed": int((here & failed[:, c]).sum()),
                        "no_limit_broken": {
                            "units": int((here & no_limit[:, c]).sum()),
                            "first_units": rows.unit[here & no_limit[:, c]][:FIRST_UNITS],
                        },
                    }
                )
    return found


def _limits(study: Study, rows: UnitRows, counting: Counting) -> list[dict[str, Any]]:
    codes, words = rows.words("failed_limits")
    broken = [{int(number) for number in word.split(";") if number} for word in words]
    by_limit: dict[int, list[Bound]] = {}
    for bound in bounds(study):
        by_limit.setdefault(bound.limit, []).append(bound)
    found = []
    for index, limit in enumerate(study.limits):
        here = np.isin(codes, [code for code, numbers in enumerate(broken) if index in numbers])
        own = by_limit.get(index, [])
        found.append(
            {
                "limit": index,
                "rule": limit.rule,
                "figure": limit.figure,
                "title": own[0].figure.title if own else limit.figure,
                "unit_of_measure": own[0].figure.unit_of_measure if own else "1",
                "parts": [bound.part for bound in own if bound.part],
                "states": list(limit.states),
                "conditions": list(limit.conditions),
                "bound": {
                    "at_most": limit.at_most,
                    "at_least": limit.at_least,
                    "share_of_rating": limit.share_of_rating,
                },
                **_counted(rows.unit, _in_any_case(here), counting),
                "by_case": [
                    {"condition": condition, "state": state, "units": int(here[:, c].sum())}
                    for c, (condition, state) in enumerate(rows.cases)
                    if applies(limit, condition, state)
                ],
                "by_part": _by_part(rows, own, here) if here.any() else [],
            }
        )
    return found


def _by_part(rows: UnitRows, own: list[Bound], here: Flags) -> list[dict[str, Any]]:
    """How many of the failing units each part of a limit accounts for, most first."""
    found = []
    for bound in own:
        if bound.part and bound.column in rows.source.names:
            values = rows.figure(bound.column)
            beyond = np.zeros(values.shape, bool)
            if bound.at_most is not None:
                beyond |= values > bound.at_most
            if bound.at_least is not None:
                beyond |= values < bound.at_least
            count = int((beyond & here).any(axis=1).sum())
            if count:
                found.append({"part": bound.part, "units": count})
    return sorted(found, key=lambda entry: -int(str(entry["units"])))


def _figures(
    study: Study, rows: UnitRows, nominal: Nominal, counting: Counting
) -> list[dict[str, Any]]:
    limits: dict[str, list[Bound]] = {}
    for bound in bounds(study):
        limits.setdefault(bound.column, []).append(bound)
    found = []
    for column in rows.figure_columns:
        named = named_figure(study, column)
        if named is None:
            continue
        part, figure = named
        values = rows.figure(column)
        for c, (condition, state) in enumerate(rows.cases):
            if not np.isfinite(values[:, c]).any():
                continue
            rating = rating_of(study, part, figure)
            found.append(
                {
                    "figure": figure.name,
                    "title": figure.title,
                    "part": part,
                    "condition": condition,
                    "state": state,
                    "unit_of_measure": figure.unit_of_measure,
                    "worse": figure.worse,
                    "nominal": nominal.get((condition, state), {}).get(column),
                    **_spread(values[:, c], figure, counting, rating),
                    **_limit_of(study, limits.get(column, []), figure, condition, state),
                }
            )
    return found


def _spread(
    values: Floats, figure: FigureInfo, counting: Counting, rating: float | None
) -> dict[str, Any]:
    found = counting.percentiles(values, list(SHARES.values()))
    at = dict(zip(SHARES, found.value.tolist(), strict=True))
    worst = at["p99" if figure.worse == "high" else "p1"]
    return {
        "units": found.units,
        "missing": found.missing,
        **at,
        "interval": {
            name: [low, high] for name, low, high in zip(SHARES, found.low, found.high, strict=True)
        },
        "bound_95": counting.bound(values, 0.95, figure.worse),
        "lowest": float(np.nanmin(values)),
        "highest": float(np.nanmax(values)),
        "rating": rating,
        "share_of_rating": worst / rating if rating else None,
    }


def _limit_of(
    study: Study, own: list[Bound], figure: FigureInfo, condition: str, state: str
) -> dict[str, Any]:
    """Tightest limits on a figure in one case; the one on its worse side is `limit`."""
    here = [bound for bound in own if applies(study.limits[bound.limit], condition, state)]
    tops = [bound for bound in here if bound.at_most is not None]
    floors = [bound for bound in here if bound.at_least is not None]
    top = min(tops, key=lambda bound: bound.at_most or 0.0, default=None)
    floor = max(floors, key=lambda bound: bound.at_least or 0.0, default=None)
    chosen = (top or floor) if figure.worse == "high" else (floor or top)
    return {
        "limit": None if chosen is None else chosen.at_most if chosen is top else chosen.at_least,
        "limit_side": None if chosen is None else "at_most" if chosen is top else "at_least",
        "rule": None if chosen is None else study.limits[chosen.limit].rule,
        "at_most": None if top is None else top.at_most,
        "at_least": None if floor is None else floor.at_least,
    }


def _plain(value: Any) -> Any:  # noqa: ANN401 - any value JSON may hold
    """Plain Python values; what is not a finite number becomes None."""
    if isinstance(value, Mapping):
        return {str(key): _plain(entry) for key, entry in value.items()}
    if isinstance(value, list | tuple | np.ndarray):
        return [_plain(entry) for entry in value]
    if isinstance(value, np.bool_ | bool):
        return bool(value)
    if isinstance(value, np.integer):
        return int(value)
    if isinstance(value, float | np.floating):
        return float(value) if np.isfinite(value) else None
    return value
