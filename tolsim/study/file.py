"""From the text of a study file to a checked `Study`: the only module that reads studies.

    title = "..."                    scenario, kind, expected_frequency, leak
    [run]                            units, seed, confidence, steps_per_cycle, rank
    [lots]                           units_per_lot, reels, lost_when
    [rails.vdd]                      net, voltage, resistance, current_limit, ramp, ...
    [parts.C1]                       kind, nets, values, ratings, spread table
    [states.full]                    title, starts_here, values, spread
    [conditions.hot]                 ambient, supply, age, since_soldering, board_rise
    [mission]                        years, conditions, states, activation_energy, reference
    [prototype.NAME]                 readings of a built board, probe, its measured parts
    [trim.NAME]                      a part turned per unit until a reading meets its target
    [[transitions]]                  from, to, time, needs, stays_while, falls_back_to
    [start_map]                      units switched on under pairs of values; see `study.starts`
    [supply_contract]                how slow and how low the supply may be
    [repeated_starts]                the same units switched on again and again
    [[limits]]                       figure, parts, at_most | at_least | share_of_rating, rule

Quantities are texts with a unit of measure.  Every mistake of a file is told at once.
"""

from __future__ import annotations

import re
import tomllib
from collections.abc import Callable, Collection, Iterable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import AfterValidator

from tolsim.design import Design, Lots, Rail, Run, Study
from tolsim.errors import Mistake, Problem, StudyError
from tolsim.mission import Mission
from tolsim.quantity import Frequency, Leak
from tolsim.records import Frozen
from tolsim.spread.checks import check_spread
from tolsim.spread.reading import QUANTITIES, read_shelf
from tolsim.spread.table import SpreadTable
from tolsim.study.checks import coupling_problems, study_problems
from tolsim.study.limits import limit_problems
from tolsim.study.lots import lot_problems
from tolsim.study.mark_check import mark_warnings
from tolsim.study.markings import expanded
from tolsim.study.mission import mission_problems
from tolsim.study.nets import net_problems
from tolsim.study.outline import Table, every_text, named_tables
from tolsim.study.prototypes import read_prototypes
from tolsim.study.reading import Reading
from tolsim.study.recording import Recording
from tolsim.study.starts import read_starts
from tolsim.study.supplies import Recordings, supply_problems
from tolsim.study.transitions import read_transitions
from tolsim.study.trims import read_trims

Further = Callable[[Study, Collection[str]], list[Problem]]
"""Checks of a study as far as it could be read, and the names of parts that could not be."""

_PLACE = re.compile(r" \(at (line \d+, column \d+|end of document)\)$")


def _rising(band: tuple[float, float]) -> tuple[float, float]:
    if band[0] >= band[1]:
        raise Mistake("the lower frequency first")
    return band


class _Top(Frozen):
    """The file as a whole; its sections are read one table at a time."""

    title: str
    scenario: str = ""
    kind: Literal["self-oscillating", "driven"] = "self-oscillating"
    expected_frequency: Annotated[tuple[Frequency, Frequency], AfterValidator(_rising)] | None = (
        None
    )
    leak: Leak = 1e-8
    run: Run = Run()
    lots: Lots | None = None
    mission: Mission | None = None
    rails: Mapping[str, Any] = {}
    parts: Mapping[str, Any] = {}
    states: Mapping[str, Any] = {}
    conditions: Mapping[str, Any] = {}
    trim: Mapping[str, Any] = {}
    prototype: Mapping[str, Any] = {}
    transitions: Any = ()
    start_map: Any = None
    supply_contract: Any = None
    repeated_starts: Any = None
    limits: tuple[Any, ...] = ()


@dataclass(frozen=True)
class StudyFile:
    """A study with all that is needed to run it again.

    Attributes
    ----------
    study : Study
        As checked.
    text : str
        The file as read.
    tables : mapping of str to SpreadTable
        Every spread table the study could name.
    warnings : tuple of str
        Mistakes in spread tables within reach that the study does not use; marks that
        contradict the table named beside them.
    recordings : mapping of str to Recording
        Recorded ramps of supplies, by path in the study's folder.
    """

    study: Study
    text: str
    tables: Mapping[str, SpreadTable]
    warnings: tuple[str, ...] = ()
    recordings: Mapping[str, Recording] = field(default_factory=dict)


def load_study(path: Path | str, tables_dir: Path | str | None = None) -> Study:
    """Read and check a study file; see `open_study`."""
    return open_study(path, tables_dir).study


def open_study(path: Path | str, tables_dir: Path | str | None = None) -> StudyFile:
    """Read and check a study file and the spread tables within its reach.

    Parameters
    ----------
    path : path
        TOML file.
    tables_dir : path, optional
        Folder of spread tables, searched after the study's own folder and before the
        shipped ones.

    Returns
    -------
    StudyFile

    Raises
    ------
    StudyError
        With every mistake in the file and in the spread tables it uses.  Mistakes in other
        tables within reach are warnings.
    """
    path = Path(path)
    try:
        text = path.read_bytes().decode("utf-8-sig")  # editors may write a mark first
    except OSError as error:
        cure = "Check the name of the file."
        raise _only(path.name, error.strerror or str(error), "a study file", cure) from None
    except UnicodeDecodeError as error:
        got = f"byte {error.start} in another encoding"
        raise _only(path.name, got, "text in UTF-8", "Save the file as UTF-8.") from None
    shelf = read_shelf(path, None if tables_dir is None else Path(tables_dir))
    if shelf.in_study:
        raise StudyError(shelf.in_study)
    # an entry with mistakes may be meant for any kind: its own mistakes are told instead
    kinds: dict[str, Collection[str]] = dict.fromkeys(shelf.broken, QUANTITIES)
    kinds |= {name: table.kinds for name, table in shelf.tables.items()}
    raw = _parsed(text, path.name)
    used = named_tables(raw)
    texts = every_text(raw)  # whatever names a table, now or in sections to come
    broken = shelf.problems(texts)
    if used - kinds.keys():  # it may be in a file that could not be read
        broken += shelf.loose
    recordings = Recordings(path.parent)
    marked = expanded(raw, path.name)
    tables = shelf.tables | marked.tables

    def of_spread(study: Study, unread: Collection[str]) -> list[Problem]:
        return check_spread(study, tables, path.name, unread)

    try:
        study = read_study(text, kinds, path.name, recordings, of_spread)
    except StudyError as error:
        raise StudyError([*error.problems, *broken]) from None
    if broken:
        raise StudyError(broken)
    warnings = [problem.sentence() for problem in shelf.unused(texts)]
    warnings += mark_warnings(marked.beside, tables, path.name)
    return StudyFile(study, text, tables, tuple(warnings), recordings.read)


def read_study(
    text: str,
    tables: Mapping[str, Collection[str]],
    file: str = "study",
    recordings: Recordings | None = None,
    further: Further | None = None,
) -> Study:
    """Read and check the text of a study.

    Parameters
    ----------
    text : str
        TOML.
    tables : mapping
        Known spread tables: name to the kinds of part each is for.
    file : str
        File name for messages.
    recordings : Recordings, optional
        Where files that the study names are read; the current folder if not given.
    further : callable, optional
        More checks, of what could be read; also told which parts could not.

    Returns
    -------
    Study

    Raises
    ------
    StudyError
        With every mistake.
    """
    marked = expanded(_parsed(text, file), file)
    raw = marked.raw
    reading = Reading(file, raw, list(marked.problems))
    top = reading.record(_Top, raw, "")
    outline = reading.outline({**tables, **{n: t.kinds for n, t in marked.tables.items()}})
    found = reading.records(outline.rails, "rails", Rail)
    rails = (recordings or Recordings(Path())).fill(found, outline, reading.problems)
    parts = reading.parts(outline)
    states = reading.states(outline)
    conditions = reading.conditions(outline)
    limits = reading.limits(outline)
    trims = read_trims(outline, reading.problems)
    transitions = read_transitions(outline, raw.get("transitions"), reading.problems)
    prototypes = read_prototypes(outline, reading)
    starts = read_starts(outline, reading)
    values = {name: state.values for name, state in states.items()}
    reading.problems += study_problems(outline)
    reading.problems += supply_problems(outline)
    reading.problems += net_problems(outline)
    reading.problems += coupling_problems(outline, parts, values)
    reading.problems += limit_problems(outline)
    reading.problems += lot_problems(outline, raw.get("lots"))
    ages = {name: c.age for name, c in conditions.items() if isinstance(c.age, float)}
    reading.problems += mission_problems(outline, top.mission if top else None, ages)
    given = top or _Top(title="")
    study = Study(
        title=given.title,
        scenario=given.scenario,
        design=Design(parts=parts, rails=rails, leak=given.leak),
        states=states,
        conditions=conditions,
        limits=limits,
        run=given.run,
        lots=given.lots,
        mission=given.mission,
        trims=trims,
        transitions=transitions,
        prototypes=prototypes,
        starts=starts,
        expected_frequency=given.expected_frequency,
        kind=given.kind,
    )
    if further is not None:
        reading.problems += further(study, outline.parts.keys() - parts.keys())
    if reading.problems:
        raise StudyError(_in_file_order(reading.problems, raw))
    return study


def _parsed(text: str, file: str) -> dict[str, Any]:
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        reason = str(error)
        place = _PLACE.search(reason)
        key = place[1] if place else ""
        got = _PLACE.sub("", reason)
        cure = "Texts stand in quotes, lists in brackets, one key = value to a line."
        raise StudyError([Problem(file, "", key, got, "valid TOML", "", cure)]) from None


def _only(file: str, got: str, expected: str, cure: str) -> StudyError:
    return StudyError([Problem(file, "", "", got, expected, "", cure)])


def _in_file_order(problems: Iterable[Problem], raw: Table) -> list[Problem]:
    """Problems in the order in which their tables stand in the file, each once."""
    places = [""]
    for section, content in raw.items():
        places.append(section)
        if isinstance(content, dict):
            places += [f"{section}.{name}" for name in content]

    def height(problem: Problem) -> tuple[int, int]:
        table, _, number = problem.table.partition(" #")
        above = [n for n, place in enumerate(places) if f"{table}.".startswith(f"{place}.")]
        return max(above, default=0), int(number.partition(".")[0] or 0)

    return sorted(dict.fromkeys(problems), key=height)
