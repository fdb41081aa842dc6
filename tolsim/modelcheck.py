"""The model beside a built board: whether the prototype may be one of the units predicted.

Predicted are the units of the run in the conditions and states of the readings; with a probe
attached or part values measured on that board, some units are solved again with them.  A part
measured on the board has that value in every unit (drifting with temperature and age as its
table says); what this tells about other parts of its reel is not used.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tolsim.answers.bounds import named_figure
from tolsim.answers.prototype_words import board_sentence
from tolsim.answers.unit_files import Columns, UnitRows
from tolsim.design import State, Study
from tolsim.errors import RunError
from tolsim.evaluation import Plan, built
from tolsim.figure_names import FigureInfo
from tolsim.nominals import CaseName, prepare
from tolsim.parts import AnyPart, Capacitor, Resistor
from tolsim.prototype import CASE_TEMPERATURE, BenchReading, Prototype
from tolsim.spread.sampling import draw, factors, tables_of
from tolsim.spread.table import SpreadTable
from tolsim.stats.plausibility import Plausibility, plausibility
from tolsim.stats.ranking import rank_correlation
from tolsim.workers import figures_of_units

Floats = NDArray[np.float64]

UNITS = 512  # solved again, at most
MOST_UNITS = 20_000  # of the run, more sharpen no answer
FEWEST_UNITS = 20
THRESHOLD = 0.01  # joint probability below which the model, or the board, is doubted
FEWEST_FOR_RANGE = 100  # units whose whole range says something
CONFIDENCE = 0.95


def model_check(plan: Plan, units: Columns, drawn: Columns, jobs: int | None) -> dict[str, Any]:
    """Judge every prototype of the study.

    Returns
    -------
    dict
        `prototype` of the summary, see `tolsim.answers.results`.
    """
    boards = [
        _Board(plan, name, board, units, drawn, jobs).answer()
        for name, board in plan.study.prototypes.items()
    ]
    sentence = " ".join(board["sentence"] for board in boards)
    if not boards:
        sentence = "No prototype was measured: the model is unchecked."
    return {
        "measured": bool(boards),
        "threshold": THRESHOLD,
        "boards": boards,
        "sentence": sentence,
    }


@dataclass
class _Board:
    """One prototype."""

    plan: Plan
    name: str
    board: Prototype
    units: Columns
    drawn: Columns
    jobs: int | None

    def answer(self) -> dict[str, Any]:
        """Readings with their percentiles, the joint judgement, and what to suspect."""
        entry: dict[str, Any] = {
            "name": self.name,
            "title": self.board.title,
            "solved_again": self._again,
            "probes": [probe.model_dump() for probe in self.board.probes],
            "fixed": dict(self.board.parts),
            "units": 0,
            "without": 0,
            **_no_answer(),
        }
        if self.plan.study.run.units < FEWEST_UNITS:  # nothing is solved again for no answer
            entry["reason"] = f"fewer than {FEWEST_UNITS} units"
        else:
            try:
                entry |= self._compared()
            except RunError:
                entry["reason"] = "the nominal unit with its probe and parts does not run"
        return entry | {"sentence": board_sentence(entry, single=self._single)}

    def _compared(self) -> dict[str, Any]:
        """Predict the readings and judge them."""
        if self._again:
            predicted, bare, factor_values = self._solved_again()
        else:
            predicted = bare = self._from_rows(np.arange(MOST_UNITS))
            factor_values = self._factors(np.arange(predicted.shape[0]))
        runs = np.isfinite(predicted).all(axis=1)
        counts = {"units": int(runs.sum()), "without": int((~runs).sum())}
        if runs.sum() < FEWEST_UNITS:
            return counts | {"reason": f"only {runs.sum()} units run in all its cases"}
        return counts | self._judged(predicted[runs], bare, factor_values[runs])

    @property
    def _again(self) -> bool:
        return bool(self.board.probes or self.board.parts)

    @property
    def _single(self) -> bool:
        return len(self.plan.study.prototypes) == 1

    def _judged(self, predicted: Floats, bare: Floats, factor_values: Floats) -> dict[str, Any]:
        value = np.array([one.value for one in self.board.readings])
        error = np.array([0.5 * one.uncertainty for one in self.board.readings])
        key = int.from_bytes(hashlib.blake2b(self.name.encode(), digest_size=4).digest())
        rng = np.random.default_rng([self.plan.study.run.seed, key])
        found = plausibility(predicted, value, error, rng)
        in_range = len(predicted) < FEWEST_FOR_RANGE or not found.outside.any()
        passes = found.joint_p >= THRESHOLD and in_range
        worst = int(np.argmax(found.share))
        return {
            "verdict": "pass" if passes else "fail",
            "reason": "",
            "joint_p": found.joint_p,
            "distance": found.distance,
            "chi_square_p": found.chi_square_p,
            "readings": [
                self._entry(one, found, j, predicted[:, j], bare[:, j])
                for j, one in enumerate(self.board.readings)
            ],
            "suspect": self._suspect(worst, predicted[:, worst], factor_values),
        }

    def _entry(
        self, one: BenchReading, found: Plausibility, j: int, predicted: Floats, bare: Floats
    ) -> dict[str, Any]:
        figure = _figure(self.plan.study, one)
        low, middle, high = np.quantile(predicted, (0.05, 0.5, 0.95)).tolist()
        plain = bare[np.isfinite(bare)]
        return {
            "figure": one.figure,
            "title": "Case temperature" if one.figure == CASE_TEMPERATURE else figure.title,
            "part": one.part,
            "condition": one.condition,
            "state": one.state,
            "unit_of_measure": one.unit_of_measure,
            "worse": figure.worse,
            "good_side": _good_side(self.plan.study, one.figure),
            "value": one.value,
            "uncertainty": one.uncertainty,
            "p5": low,
            "p50": middle,
            "p95": high,
            "deviation": float(np.std(predicted)),
            "bare_p50": float(np.median(plain)) if plain.size else None,
            "percentile": float(found.percentile[j]),
            "p": float(found.p[j]),
            "z": float(found.z[j]),
            "outside": bool(found.outside[j]),
            "share": float(found.share[j]),
        }

    def _suspect(self, j: int, predicted: Floats, values: Floats) -> dict[str, Any]:
        """The reading that adds most to the distance, and the factor it follows most."""
        one = self.board.readings[j]
        varying = np.flatnonzero(values.std(axis=0) > 0.0)
        answer: dict[str, Any] = {"reading": one.column, "factor": None, "correlation": None}
        if varying.size and predicted.std() > 0.0:
            r, _, _ = rank_correlation(values[:, varying], predicted, CONFIDENCE)
            leading = int(np.argmax(np.abs(r)))
            answer["factor"] = self._names[varying[leading]]
            answer["correlation"] = float(r[leading])
        return answer

    def _from_rows(self, numbers: NDArray[np.intp]) -> Floats:
        """Predicted readings (n, d) of units of the run, as they are without a probe."""
        rows = UnitRows.of(self.units)
        found = []
        for one in self.board.readings:
            figure = _column_of(rows, (one.condition, one.state))
            found.append(shown_by(one, figure)[numbers[numbers < rows.unit.size]])
        return np.column_stack(found)

    def _factors(self, numbers: NDArray[np.intp]) -> Floats:
        """Values drawn for units of the run (n, k)."""
        order = np.argsort(self.drawn.column("unit").to_numpy(np.int64), kind="stable")[numbers]
        columns = [self.drawn.column(name).to_numpy(float)[order] for name in self._names]
        return np.column_stack(columns)

    @property
    def _names(self) -> list[str]:
        """Factors of the run."""
        return [name for name in self.drawn.names if name != "unit"]

    def _solved_again(self) -> tuple[Floats, Floats, Floats]:
        """Readings of units with probe and measured parts, the same without probe, factors."""
        # switching on in time takes long, and a board that was measured runs
        study = _running(self.plan.study, self.board.readings)
        seed = study.run.seed
        count = min(UNITS, study.run.units)
        numbers = np.arange(count)
        cases = dict.fromkeys((one.condition, one.state) for one in self.board.readings)
        plan = replace(self.plan, study=study)
        if self.board.parts:
            fixed, tables = with_parts(study, self.plan.tables, self.board.parts)
            fixed = _only_cases(fixed, cases)
            plan = Plan(fixed, tables, factors(fixed, tables), prepare(fixed, tables, self.jobs))
        draws = built(plan, draw(plan.factors, seed, 0, count))
        values = np.zeros((count, len(self._names)))  # what was measured explains nothing any more
        for column, name in enumerate(self._names):
            if name in draws.column:
                values[:, column] = draws.values[:, draws.column[name]]
        if self.board.parts:
            bare = self._read(figures_of_units(plan, list(cases), draws, self.jobs))
        else:
            bare = self._from_rows(numbers)
        if not self.board.probes:
            return bare, bare, values
        probed = _only_cases(with_probes(plan.study, self.board), cases, trims=False)
        probed_cases = prepare(probed, plan.tables, self.jobs)
        probed_plan = replace(plan, study=probed, cases=probed_cases, choices={})
        found = figures_of_units(probed_plan, list(cases), draws, self.jobs)
        return self._read(found), bare, values

    def _read(self, figures: Mapping[CaseName, Mapping[str, Floats]]) -> Floats:
        """What the meters would show (n, d)."""
        shown = [
            shown_by(one, _figure_of(figures[one.condition, one.state]))
            for one in self.board.readings
        ]
        return np.column_stack(shown)


def _no_answer() -> dict[str, Any]:
    return {
        "verdict": "no answer",
        "reason": "",
        "joint_p": None,
        "distance": None,
        "chi_square_p": None,
        "readings": [],
        "suspect": None,
    }


def _figure(study: Study, one: BenchReading) -> FigureInfo:
    """The figure behind a reading."""
    hidden = "junction_temperature" if one.figure == CASE_TEMPERATURE else one.figure
    named = named_figure(study, f"{one.part}.{hidden}" if one.part else hidden)
    assert named is not None  # the door has checked it
    return named[1]


def _good_side(study: Study, figure: str) -> str | None:
    """Side on which a figure is far from its limits: "low", "high"; None if neither or unknown."""
    own = [limit for limit in study.limits if limit.figure == figure]
    top = any(limit.at_most is not None or limit.share_of_rating is not None for limit in own)
    floor = any(limit.at_least is not None for limit in own)
    if top == floor:
        return {"start_margin": "high", "start_time": "low"}.get(figure)
    return "low" if top else "high"


def _column_of(rows: UnitRows, case: CaseName) -> Callable[[str], Floats]:
    """Column to figure (N,) of the units of the run in one case."""
    c = rows.cases.index(case)

    def figure(column: str) -> Floats:
        if column not in rows.source.names:
            return np.full(rows.unit.size, np.nan)
        return rows.figure(column)[:, c]

    return figure


def _figure_of(figures: Mapping[str, Floats]) -> Callable[[str], Floats]:
    """Column to figure (n,) of units solved again."""
    missing = np.full(len(next(iter(figures.values()))), np.nan)
    return lambda column: figures.get(column, missing)


def shown_by(one: BenchReading, figure: Callable[[str], Floats]) -> Floats:
    """Reading (n,) out of the figures of n units."""
    if one.figure != CASE_TEMPERATURE:
        return np.asarray(figure(one.column), float)
    junction = np.asarray(figure(f"{one.part}.junction_temperature"), float)
    drop = (one.junction_to_case or 0.0) * np.asarray(figure(f"{one.part}.dissipation"), float)
    return junction - drop


def _running(study: Study, readings: Sequence[BenchReading]) -> Study:
    """The study with nothing switched on in time, unless a reading was taken then."""
    if any(one.figure.startswith(("power_on", "latch")) for one in readings):
        return study
    return study.model_copy(update={"run": study.run.model_copy(update={"power_on_share": 0.0})})


def _only_cases(study: Study, cases: Mapping[CaseName, None], *, trims: bool = True) -> Study:
    """The study with no more conditions and states than these cases and its trims need."""
    wanted = [*cases]
    if trims:
        wanted += [(trim.condition, trim.state) for trim in study.trims.values()]
    conditions, states = {name[0] for name in wanted}, {name[1] for name in wanted}
    return study.model_copy(
        update={
            "conditions": {k: v for k, v in study.conditions.items() if k in conditions},
            "states": {k: v for k, v in study.states.items() if k in states},
            "trims": study.trims if trims else {},
            "mission": None,
        }
    )


def with_probes(study: Study, board: Prototype) -> Study:
    """The study with the probes of a board as parts without spread."""
    parts: dict[str, AnyPart] = dict(study.design.parts)
    for number, probe in enumerate(board.probes, 1):
        name = f"PROBE{number}"
        while f"{name}C" in parts or f"{name}R" in parts:
            name += "_"
        nets = (probe.net, probe.to)
        if probe.capacitance:
            parts[f"{name}C"] = Capacitor(
                kind="capacitor", nets=nets, capacitance=probe.capacitance
            )
        if probe.resistance is not None:
            parts[f"{name}R"] = Resistor(kind="resistor", nets=nets, resistance=probe.resistance)
    design = study.design.model_copy(update={"parts": parts})
    return study.model_copy(update={"design": design})


def with_parts(
    study: Study, tables: Mapping[str, SpreadTable], values: Mapping[str, float]
) -> tuple[Study, dict[str, SpreadTable]]:
    """Study and tables in which measured quantities have their value, without scatter."""
    by_part: dict[str, dict[str, float]] = {}
    for address, value in values.items():
        ref, _, quantity = address.partition(".")
        by_part.setdefault(ref, {})[quantity] = value
    changed = dict(tables)
    owners: dict[str, dict[str, Any]] = {
        "parts": dict(study.design.parts),
        "rails": dict(study.design.rails),
    }
    states = dict(study.states)
    for ref, known in by_part.items():
        for name in tables_of(study, ref):
            changed[_own(name, ref)] = _without_scatter(tables[name], _own(name, ref), known)
        section = owners["parts" if ref in owners["parts"] else "rails"]
        if section[ref].spread:
            own = _own(section[ref].spread, ref)
            section[ref] = section[ref].model_copy(update={"spread": own})
        states = {name: _measured(state, ref, known) for name, state in states.items()}
    for ref, part in owners["parts"].items():
        if part.match and {ref, part.matched_with} & by_part.keys():  # its mate is known now
            owners["parts"][ref] = part.model_copy(update={"match": None, "matched_with": None})
    trims = {name: trim for name, trim in study.trims.items() if trim.address not in values}
    design = study.design.model_copy(update=owners)
    return study.model_copy(update={"design": design, "states": states, "trims": trims}), changed


def _own(table: str, ref: str) -> str:
    """Name of the table of a part that was measured."""
    return f"{table} of {ref} as measured"


def _without_scatter(table: SpreadTable, name: str, known: Mapping[str, float]) -> SpreadTable:
    quantities = {
        quantity: replace(spread, tolerance=None, lot=None) if quantity in known else spread
        for quantity, spread in table.quantities.items()
    }
    return replace(table, name=name, quantities=quantities)


def _measured(state: State, ref: str, known: Mapping[str, float]) -> State:
    """A state in which a part has its measured values."""
    values = {**state.values, **{f"{ref}.{quantity}": value for quantity, value in known.items()}}
    spread = {one: _own(name, ref) if one == ref else name for one, name in state.spread.items()}
    return state.model_copy(update={"values": values, "spread": spread})
