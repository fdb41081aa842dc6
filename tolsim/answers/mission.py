"""What a mission asks of each unit: mean power, energy, hours beyond a limit, hours of heat.

Every unit is followed through the cases of the study with the hours it spends in each.  The
cases stand for the life as they are: a condition with an age is the unit at that age, so a
mission of new and old hours lists both conditions, each with its own hours.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tolsim.answers.bounds import applies
from tolsim.answers.counting import Counting
from tolsim.answers.unit_files import UnitRows
from tolsim.design import Study
from tolsim.mission import Mission

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]
Nominal = Mapping[tuple[str, str], Mapping[str, float]]

BOLTZMANN = 8.617333262e-5  # eV/K
ZERO_CELSIUS = 273.15
SECONDS = 3600.0
SHARES = {"p5": 0.05, "p50": 0.50, "p95": 0.95}
TEMPERATURES = ("junction_temperature", "body_temperature")
FIRST_UNITS = 5


def arrhenius(celsius: Floats, activation_energy: float, reference: float) -> Floats:
    """How much faster a part ages at `celsius` than at `reference` degC; energy in eV.

    exp[(E / k) (1 / T_reference - 1 / T)] (Arrhenius 1889; JESD91).
    """
    inverse = 1.0 / (reference + ZERO_CELSIUS) - 1.0 / (np.asarray(celsius) + ZERO_CELSIUS)
    return np.asarray(np.exp(activation_energy / BOLTZMANN * inverse))


def mission_entry(
    study: Study, rows: UnitRows, counting: Counting, nominal: Nominal
) -> dict[str, Any]:
    """The mission of a study over its units; empty if it states none.

    The keys are documented in `tolsim.answers.results`.
    """
    mission = study.mission
    if mission is None:
        return {}
    hours = np.array([mission.hours(*case) for case in rows.cases])
    spent = np.flatnonzero(hours > 0.0)
    shares = hours[spent] / hours.sum()
    codes, words = rows.words("verdict")
    verdict = np.array(words, dtype=object)[codes][:, spent]
    return {
        "years": mission.years,
        "hours": float(hours.sum()),
        "cases": [
            {
                "condition": rows.cases[c][0],
                "state": rows.cases[c][1],
                "hours": hours[c],
                "share": hours[c] / hours.sum(),
            }
            for c in spent
        ],
        "power": _powers(mission, rows, counting, nominal, spent, shares),
        "in_order": _in_order(counting, verdict, shares),
        "limits": _limits(study, rows, counting, spent, shares),
        "temperatures": _temperatures(mission, rows, spent, hours[spent]),
        "reference": mission.reference,
        "activation_energy": mission.activation_energy,
    }


def _powers(
    mission: Mission,
    rows: UnitRows,
    counting: Counting,
    nominal: Nominal,
    spent: NDArray[np.intp],
    shares: Floats,
) -> list[dict[str, Any]]:
    """Mean powers over the hours of running, and the energy of a year."""
    found = []
    cases = [rows.cases[c] for c in spent]
    per_year = mission.hours_a_year * SECONDS
    for name, column, factor, unit in (
        ("mean_input_power", "input_power", 1.0, "W"),
        ("mean_output_power", "output_power", 1.0, "W"),
        ("energy_per_year", "input_power", per_year, "J"),
    ):
        if column not in rows.source.names:
            continue
        values = factor * (rows.figure(column)[:, spent] @ shares)
        ideal = [nominal.get(case, {}).get(column, np.nan) for case in cases]
        found.append(
            {
                "figure": name,
                "unit_of_measure": unit,
                "nominal": factor * float(np.dot(ideal, shares)),
                **_percentiles(values, counting),
            }
        )
    return found


def _percentiles(values: Floats, counting: Counting) -> dict[str, Any]:
    """Percentiles over units with their intervals; None where no unit has the figure."""
    if not np.isfinite(values).any():
        nothing = dict.fromkeys(SHARES)
        return {"units": 0, "missing": values.size, **nothing, "interval": {}}
    found = counting.percentiles(values, list(SHARES.values()))
    return {
        "units": found.units,
        "missing": found.missing,
        **dict(zip(SHARES, found.value.tolist(), strict=True)),
        "interval": {
            name: [low, high] for name, low, high in zip(SHARES, found.low, found.high, strict=True)
        },
    }


def _in_order(counting: Counting, verdict: NDArray[np.object_], shares: Floats) -> dict[str, Any]:
    """Share of the hours in which a unit passes every limit."""
    passing = (verdict == "pass") @ shares
    always = np.all(verdict == "pass", axis=1)
    low, high = counting.interval(always)
    return {
        "units": int(always.sum()),
        "of": always.size,
        "share": float(always.mean()),
        "low": low,
        "high": high,
        "of_life": {"mean": float(passing.mean()), "least": float(passing.min())},
        "undecided": float(((verdict == "undecided") @ shares).mean()),
    }


def _limits(
    study: Study, rows: UnitRows, counting: Counting, spent: NDArray[np.intp], shares: Floats
) -> list[dict[str, Any]]:
    """Share of the hours that units spend beyond each limit."""
    codes, words = rows.words("failed_limits")
    broken = [{int(number) for number in word.split(";") if number} for word in words]
    found = []
    for index, limit in enumerate(study.limits):
        if not any(applies(limit, *rows.cases[c]) for c in spent):
            continue
        hit = [code for code, numbers in enumerate(broken) if index in numbers]
        beyond: Flags = np.isin(codes, hit)[:, spent]
        of_life = beyond @ shares
        units: Flags = np.asarray(beyond.any(axis=1))
        low, high = counting.interval(units)
        found.append(
            {
                "limit": index,
                "rule": limit.rule,
                "figure": limit.figure,
                "units": int(units.sum()),
                "share": float(units.mean()),
                "low": low,
                "high": high,
                "first_units": rows.unit[units][:FIRST_UNITS].tolist(),
                "of_life": {"mean": float(of_life.mean()), "most": float(of_life.max())},
            }
        )
    return found


def _temperatures(
    mission: Mission, rows: UnitRows, spent: NDArray[np.intp], hours: Floats
) -> list[dict[str, Any]]:
    """Hours of heat of every part whose temperature is known, hottest first."""
    found = []
    for column in rows.figure_columns:
        part, _, figure = column.partition(".")
        if figure not in TEMPERATURES:
            continue
        celsius = rows.figure(column)[:, spent]
        known = np.isfinite(celsius).all(axis=1)
        if not known.any():
            continue
        celsius = celsius[known]
        entry: dict[str, Any] = {
            "part": part,
            "figure": figure,
            "units": int(known.sum()),
            "missing": int((~known).sum()),
            "mean": _two(celsius @ hours / hours.sum()),
            "highest": _two(celsius.max(axis=1)),
            "equivalent_hours": None,
        }
        if mission.activation_energy is not None and mission.reference is not None:
            faster = arrhenius(celsius, mission.activation_energy, mission.reference)
            entry["equivalent_hours"] = _two(faster @ hours)
        found.append(entry)
    return sorted(found, key=lambda entry: -float(entry["mean"]["p50"]))


def _two(values: Floats) -> dict[str, float]:
    """Middle and 95 % of the units."""
    middle, most = np.quantile(values, [0.5, 0.95])
    return {"p50": float(middle), "p95": float(most)}


def hottest(entries: Sequence[Mapping[str, Any]]) -> list[Mapping[str, Any]]:
    """Temperatures of a mission, the part first that ages fastest."""
    return sorted(entries, key=lambda e: -float((e["equivalent_hours"] or e["mean"])["p95"]))
