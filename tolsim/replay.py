"""One unit of a finished run again: its orbits, its waveforms, and why it failed.

The unit is drawn anew from seed and number and must come out as stored; so what is shown is what
was judged.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from textwrap import wrap

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tolsim import __version__
from tolsim.answers.bounds import Bound, bounds
from tolsim.answers.results import STUDY_FILE, TABLES_FOLDER, Results
from tolsim.answers.start_words import tries_story
from tolsim.answers.trims import trim_sentence, way_sentence
from tolsim.answers.wording import shown
from tolsim.circuit.orbit import Status
from tolsim.circuit.poweron.fates import Fate
from tolsim.design import Study
from tolsim.errors import RequestError
from tolsim.evaluation import Plan, solve_case, trim_drawn
from tolsim.nominals import CaseName, prepare
from tolsim.presentation import Signal, signals
from tolsim.quantity import show
from tolsim.retelling import SwitchedOnAgain, power_on_sentences, switch_on_again
from tolsim.spread.quantity_words import factor_words
from tolsim.spread.sampling import Draws, draw, factors
from tolsim.stats.ranking import rank_correlation, readings_of
from tolsim.study import StudyFile, open_study
from tolsim.trim.operator import TrimStatus
from tolsim.trim.session import Trimmed

UNUSUAL = 6  # factors named in the story
FEWEST_UNITS = 20  # stored units from which a rank correlation means something
CONFIDENCE = 0.95
FINE_DIGITS = 6
DRAW_TOLERANCE = 1e-12
LINE = 80  # columns


@dataclass(frozen=True)
class Replay:
    """One unit in every case.

    Attributes
    ----------
    number : int
    rows : DataFrame
        Its rows of the run.
    story : tuple of str
        What it does and why, as sentences.
    signals : mapping
        (condition, state) -> signals of the unit beside the nominal unit, for cases with an orbit.
    power_on : mapping
        (condition, state) -> the unit switched on again in time beside the nominal unit and the
        nearest passing one, for states that units start in.
    neighbour : int or None
        Number of the nearest passing unit; None if the unit passes or none does.
    """

    number: int
    rows: pd.DataFrame
    story: tuple[str, ...]
    signals: Mapping[CaseName, tuple[Signal, ...]]
    power_on: Mapping[CaseName, SwitchedOnAgain]
    neighbour: int | None


def replay_unit(folder: Path | str, number: int) -> Replay:
    """Solve one unit of a results folder again.

    Raises
    ------
    RequestError
        If the folder holds no run or not that unit, or the unit does not come out as stored.
    """
    place = Path(folder)
    results = Results.open(place)
    rows = _rows_of(results, number)
    opened = open_study(place / STUDY_FILE, place / TABLES_FOLDER)
    seed = results.provenance.get("seed", opened.study.run.seed)
    run = opened.study.run.model_copy(update={"seed": seed})
    study = opened.study.model_copy(update={"run": run})
    names = factors(study, opened.tables)
    draws = draw(names, seed, number, 1)
    _compare_with_stored(results, draws, number)
    plan = Plan(study, opened.tables, names, prepare(study, opened.tables, jobs=None))
    trimmed = trim_drawn(plan, draws)
    draws = replace(draws, moved=trimmed.moved)
    found, solved = {}, {}
    for name, prepared in plan.cases.items():
        case, solution = solved[name] = solve_case(plan, name, draws)
        if prepared.nominal.found and solution.status[0] in (Status.SETTLED, Status.UNSTABLE):
            found[name] = tuple(signals(study, prepared.nominal, case, solution))
    broken = _broken(opened, rows)
    influence = _influence(results, draws.names, broken, _not_set(trimmed))
    neighbour = _neighbour(results, draws, influence)
    power_on = switch_on_again(plan, draws, neighbour, solved)
    story = (
        *_version_story(results),
        *_lot_story(results, study, number),
        *_trim_story(study, rows, trimmed),
        *_outcome_story(opened, rows, broken),
        *tries_story(results.summary, number),
        *_draw_story(draws, influence),
        *_neighbour_story(draws, influence, neighbour),
        *power_on_sentences(plan, power_on, neighbour),
    )
    return Replay(number, rows, story, found, power_on, neighbour)


def _version_story(results: Results) -> list[str]:
    """A warning if another version of tolsim made the results."""
    made_by = results.provenance.get("versions", {}).get("tolsim", __version__)
    if made_by == __version__:
        return []
    return [
        f"Made by tolsim {made_by}, solved again by {__version__}: figures may differ a little."
    ]


def _lot_story(results: Results, study: Study, number: int) -> list[str]:
    """How the other units of its lot do, if units are built in lots."""
    if study.lots is None:
        return []
    lots = results.lots
    own = lots[lots["lot"] == number // study.lots.units_per_lot].iloc[0]
    of_all = f"of all {lots['units'].sum()} units {lots['failed'].sum()} do"
    return [f"Lot {own['lot']}: {own['failed']} of its {own['units']} units fail; {of_all}."]


def _rows_of(results: Results, number: int) -> pd.DataFrame:
    units = results.unit_columns.column("unit").to_numpy()
    here = np.flatnonzero(units == number)
    if not here.size:
        highest = int(units.max()) if units.size else -1
        raise RequestError(f"There is no unit {number} in this run. Its units are 0 to {highest}.")
    columns = results.unit_columns
    return pd.DataFrame({name: columns.column(name).iloc[here] for name in columns.names})


def _compare_with_stored(results: Results, draws: Draws, number: int) -> None:
    """Refuse to tell the story of another unit."""
    stored = results.factor_columns
    row = int(np.flatnonzero(stored.column("unit").to_numpy() == number)[0])
    for column, name in enumerate(draws.names):
        value = float(stored.column(name).iloc[row]) if name in stored.names else np.nan
        drawn = float(draws.values[0, column])
        if not abs(value - drawn) <= DRAW_TOLERANCE * max(1.0, abs(value)):
            raise RequestError(
                f"Unit {number} does not come out as stored: '{name}' is {drawn:.6g}, stored"
                f" {value:.6g}. Another version of tolsim or changed spread tables made this run;"
                " run the study again."
            )


@dataclass(frozen=True)
class _Broken:
    """A limit that the unit does not keep, in one case."""

    bound: Bound
    condition: str
    state: str
    value: float

    def sentence(self, rule: str) -> str:
        """By how much, and which rule."""
        unit, figure, part = self.bound.figure.unit_of_measure, self.bound.figure, self.bound.part
        who = f"{part} {figure.title.lower()}" if part else figure.title
        above = self.bound.at_most is not None and self.value > self.bound.at_most
        limit = self.bound.at_most if above else self.bound.at_least
        side = "above" if above else "below"
        value, edge = shown(self.value, unit), shown(limit, unit)
        if value == edge and limit is not None:  # just over: more digits tell them apart
            value, edge = show(self.value, unit, FINE_DIGITS), show(limit, unit, FINE_DIGITS)
        return f"  {who} {value} is {side} {edge} ({rule})."


def _broken(opened: StudyFile, rows: pd.DataFrame) -> list[_Broken]:
    """Every limit the unit breaks, by case."""
    every = bounds(opened.study)
    found = []
    for row in rows.to_dict("records"):
        numbers = {int(text) for text in str(row["failed_limits"]).split(";") if text}
        for bound in every:
            value = float(row.get(bound.column, np.nan))
            over = bound.at_most is not None and value > bound.at_most
            under = bound.at_least is not None and value < bound.at_least
            if bound.limit in numbers and (over or under):
                found.append(_Broken(bound, str(row["condition"]), str(row["state"]), value))
    return found


def _trim_story(study: Study, rows: pd.DataFrame, trimmed: Trimmed) -> list[str]:
    """What the operator did to the unit, turn by turn."""
    story = []
    for name, log in trimmed.logs.items():
        trim = study.trims[name]
        bench = (rows["condition"] == trim.condition) & (rows["state"] == trim.state)
        story.append(trim_sentence(study, name, rows[bench].to_dict("records")[0]))
        way = [(float(place[0]), float(reading[0])) for place, reading in log.way]
        story.append(way_sentence(study, name, way))
    return story


def _outcome_story(opened: StudyFile, rows: pd.DataFrame, broken: list[_Broken]) -> list[str]:
    """One sentence per case, with every limit it breaks."""
    story = []
    for row in rows.to_dict("records"):
        where = f"{row['condition']} / {row['state']}"
        if row["verdict"] == "pass":
            story.append(f"{where}: {row['outcome']}, within every limit.")
            continue
        status = Status[str(row["status"]).upper().replace(" ", "_")]
        story.append(f"{where}: {row['outcome']}. {status.sentence}")
        story += [
            one.sentence(opened.study.limits[one.bound.limit].rule)
            for one in broken
            if (one.condition, one.state) == (row["condition"], row["state"])
        ]
    return story


@dataclass(frozen=True)
class _Influence:
    """How the factors of all stored units go with one figure."""

    title: str
    names: tuple[str, ...]
    numbers: NDArray[np.int64]  # (N,) units
    factors: NDArray[np.float64]  # (N, k)
    correlation: NDArray[np.float64]  # (k,) rank correlation; 0 where it may be chance

    @property
    def weights(self) -> NDArray[np.float64]:
        """Share of each factor, summing to 1; equal if none can be told apart."""
        squares = self.correlation**2
        total = squares.sum()
        return squares / total if total > 0 else np.full(len(squares), 1 / max(len(squares), 1))


def _not_set(trimmed: Trimmed) -> str | None:
    """The first trim that did not succeed, if any."""
    failed = (name for name, log in trimmed.logs.items() if log.status[0] != TrimStatus.SET)
    return next(failed, None)


def _influence(
    results: Results, names: tuple[str, ...], broken: list[_Broken], not_set: str | None
) -> _Influence:
    """What goes with the first broken limit, else the failed trim, else the start margin."""
    stored, units = results.factor_columns, results.unit_columns
    table = np.column_stack([stored.column(name).to_numpy(float) for name in names])
    numbers = stored.column("unit").to_numpy(np.int64)
    if broken:
        one = broken[0]
        column, title = one.bound.column, f"{one.bound.part} {one.bound.figure.title.lower()}"
        here = (units.column("condition") == one.condition) & (units.column("state") == one.state)
    elif not_set is not None:
        column, title = f"{not_set}.trim_position", f"place of trim {not_set}"
        here = units.column("unit") >= 0
    else:
        column, title = "start_margin", "start margin"
        here = units.column("unit") >= 0
    if column not in units.names:
        return _Influence(title, names, numbers, table, np.zeros(len(names)))
    values = units.column(column)[here].groupby(units.column("unit")[here]).min()
    target = values.reindex(numbers).to_numpy(float)
    known = np.isfinite(target)
    if known.sum() < FEWEST_UNITS:
        return _Influence(title, names, numbers, table, np.zeros(len(names)))
    readings = readings_of(table[known]) if results.summary.get("lots") else None
    r, low, high = rank_correlation(table[known], target[known], CONFIDENCE, readings)
    return _Influence(title, names, numbers, table, np.where((low > 0) | (high < 0), r, 0.0))


def _draw_story(draws: Draws, influence: _Influence) -> list[str]:
    """The draws that matter most for what is wrong with the unit."""
    push = (draws.u[0] - 0.5) * influence.correlation
    if not np.any(push):
        return []
    order = [k for k in np.argsort(-np.abs(push))[:UNUSUAL] if push[k] != 0]
    return [
        f"What moves its {influence.title.strip()} (place among all units, 50 % is the middle):",
        *(
            f"  {factor_words(draws.names[k])} at {100 * draws.u[0, k]:.0f} %: "
            f"{'up' if push[k] > 0 else 'down'}"
            for k in order
        ),
    ]


def _away(draws: Draws, influence: _Influence) -> NDArray[np.float64]:
    """How far every stored unit is from the drawn one, (N, k) standard deviations."""
    table = influence.factors
    spread = np.where(table.std(axis=0) > 0, table.std(axis=0), 1.0)
    return np.asarray((table - draws.values[0]) / spread)


def _neighbour(results: Results, draws: Draws, influence: _Influence) -> int | None:
    """The passing unit whose important factors are nearest; None if the unit passes itself."""
    units = results.unit_columns
    passed = (units.column("verdict") == "pass").groupby(units.column("unit")).all()
    if not passed.any() or passed.get(draws.first, False):
        return None
    gap = (_away(draws, influence) ** 2 * influence.weights).sum(axis=1)
    gap[~passed.reindex(influence.numbers).to_numpy(bool)] = np.inf
    return int(influence.numbers[np.argmin(gap)])


def _neighbour_story(draws: Draws, influence: _Influence, neighbour: int | None) -> list[str]:
    """In what the nearest passing unit differs."""
    if neighbour is None:
        return []
    away = _away(draws, influence)[np.flatnonzero(influence.numbers == neighbour)[0]]
    leading = np.argsort(-np.abs(away) * np.sqrt(influence.weights))[:3]
    moves = ", ".join(f"{factor_words(draws.names[k])} {away[k]:+.1f} sd" for k in leading)
    return [f"Nearest passing unit: {neighbour}, which differs by {moves}."]


def story_text(replay: Replay) -> str:
    """The story as text for the terminal, lines of at most 80 columns."""
    lines = [f"Unit {replay.number}"]
    for sentence in replay.story:
        indent = " " * (len(sentence) - len(sentence.lstrip()) + 2)
        lines += wrap(sentence, LINE, subsequent_indent=indent) or [""]
    return "\n".join(lines)


def draw_replay(replay: Replay, folder: Path | str) -> Path | None:
    """Picture of the waveforms where the unit does worst; None without an orbit."""
    from tolsim.report.unit_picture import draw_unit  # plotting only when a picture is wanted

    words = {
        (str(row["condition"]), str(row["state"])): str(row["outcome"])
        for row in replay.rows.to_dict("records")
    }
    failing = [
        str(row["condition"]) for row in replay.rows.to_dict("records") if row["verdict"] != "pass"
    ]
    conditions = [condition for condition, _ in replay.signals]
    if not conditions:
        return None
    shown_condition = next((name for name in failing if name in conditions), conditions[0])
    cases = {name: waves for name, waves in replay.signals.items() if name[0] == shown_condition}
    path = Path(folder) / f"unit-{replay.number}.png"
    draw_unit(
        replay.number,
        {" / ".join(name): waves for name, waves in cases.items()},
        {" / ".join(name): words[name] for name in cases},
        path,
    )
    return path


def draw_power_on(replay: Replay, folder: Path | str) -> list[Path]:
    """Pictures (PNG and SVG) of its power-on where it fails first, else of the first case."""
    from tolsim.report.power_on_picture import Beside, Panel, draw_tracks

    if not replay.power_on:
        return []
    cases = replay.power_on.items()
    failing = (one for one in cases if one[1].unit.fate != Fate.STARTS)
    name, case = next(failing, next(iter(cases)))
    beside = [Beside("nominal unit", case.nominal)]
    if case.neighbour is not None:
        beside.append(Beside(f"unit {replay.neighbour}, which passes", case.neighbour))
    title = f"Unit {replay.number} switched on in {' / '.join(name)}"
    base = Path(folder) / f"unit-{replay.number}-power-on"
    unit = case.unit
    panels = [
        Panel(one, words, "A" if (one or unit.lead) in unit.currents else "V")
        for one, words in case.titles.items()
    ]
    return draw_tracks(title, unit, beside, panels, base)
