"""What changes of load do to the units of a run, from the words in their rows."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from tolsim.answers.counting import Counting
from tolsim.answers.unit_files import UnitRows
from tolsim.design import Study
from tolsim.transition import Requirement

Words = NDArray[np.object_]

COLUMN = "changes"
IN_TIME = ("arrives", "dies", "ends elsewhere", "undecided")  # told by integration
BY_RULE = ("does not ignite", "falls back", "not reached")  # told by figures of the orbit
FIRST_UNITS = 5


def transitions_entry(study: Study, rows: UnitRows) -> dict[str, Any]:
    """The changes of load of a study over its units; empty if it states none.

    The keys are documented in `tolsim.answers.results`.
    """
    if not study.transitions or COLUMN not in rows.source.names:
        return {}
    codes, words = rows.words(COLUMN)
    table = np.array(words, dtype=object)[codes]
    changes = []
    followed = np.zeros(rows.unit.size, dtype=bool)
    for number, transition in enumerate(study.transitions):
        for c, (condition, state) in enumerate(rows.cases):
            if state != transition.after:
                continue
            fates = _fates(table[:, c], number)
            followed |= np.isin(fates, IN_TIME)
            changes.append(
                {
                    "number": number,
                    "from": transition.before,
                    "to": transition.after,
                    "time": transition.time,
                    "condition": condition,
                    "needs": _need(transition.needs),
                    "stays_while": _need(transition.stays_while),
                    "fates": _counted(study, rows, fates),
                }
            )
    return {
        "share": study.run.transition_share,
        "units": int(followed.sum()),
        "of": int(rows.unit.size),
        "phases": study.run.transition_phases,
        "changes": changes,
    }


def _fates(words: Words, number: int) -> Words:
    """Fate of every unit in one transition, from "0 arrives;2 dies"."""
    mark = f"{number} "
    known = {
        word: next((part[len(mark) :] for part in word.split(";") if part.startswith(mark)), "")
        for word in set(words)
    }
    return np.array([known[word] for word in words], dtype=object)


def _need(need: Requirement | None) -> dict[str, Any] | None:
    if need is None:
        return None
    return {"part": need.part, "figure": need.figure, "at_least": need.at_least}


def _counted(study: Study, rows: UnitRows, fates: Words) -> list[dict[str, Any]]:
    """Units by fate: what a rule tells is known of all units, the rest of those followed."""
    found = []
    for kinds, known in (
        (BY_RULE, np.ones(fates.size, dtype=bool)),
        (IN_TIME, np.isin(fates, IN_TIME)),
    ):
        if not known.any():
            continue
        counting = Counting.of(study.lots, rows.unit[known], study.run.confidence)
        for fate in kinds:
            hit = fates[known] == fate
            if not hit.any():
                continue
            low, high = counting.interval(hit)
            found.append(
                {
                    "fate": fate,
                    "units": int(hit.sum()),
                    "of": int(known.sum()),
                    "share": float(hit.mean()),
                    "low": low,
                    "high": high,
                    "first_units": rows.unit[known][hit][:FIRST_UNITS].tolist(),
                }
            )
    return found
