"""What the report shows lot by lot: one figure of every unit, and which units fail."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tolsim.answers.bounds import Bound, applies, bounds
from tolsim.answers.ranking import START_MARGIN
from tolsim.answers.unit_files import UnitRows
from tolsim.design import Study

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class LotStrips:
    """The figure that fails most often, by lot.

    Attributes
    ----------
    title, unit_of_measure : str
        "Q1 peak gate voltage", "V".
    at_most, at_least : float or None
        Its limit.
    lot : ndarray (N,)
        Lot of each unit.
    values : ndarray (N,)
        Worst value of each unit over the cases in which the limit counts; NaN if it has none.
    """

    title: str
    unit_of_measure: str
    at_most: float | None
    at_least: float | None
    lot: NDArray[np.int64]
    values: Floats


def lot_strips(study: Study, rows: UnitRows, summary: Mapping[str, Any]) -> LotStrips | None:
    """Strips of the limit broken most often, else of the start margin, else of any limit.

    None without lots, or if no limited figure is known.
    """
    if study.lots is None:
        return None
    bound = _most_broken(study, rows, summary)
    if bound is None:
        return None
    limit = study.limits[bound.limit]
    cases = [c for c, case in enumerate(rows.cases) if applies(limit, *case)]
    pick = np.fmax if bound.at_most is not None else np.fmin
    values = np.asarray(pick.reduce(rows.figure(bound.column)[:, cases], axis=1), np.float64)
    title = bound.figure.title
    return LotStrips(
        title=f"{bound.part} {title[:1].lower()}{title[1:]}" if bound.part else title,
        unit_of_measure=bound.figure.unit_of_measure,
        at_most=bound.at_most,
        at_least=bound.at_least,
        lot=rows.unit // study.lots.units_per_lot,
        values=values,
    )


def _most_broken(study: Study, rows: UnitRows, summary: Mapping[str, Any]) -> Bound | None:
    """The bound most units break; ties go to the start margin, then to the first."""
    broken = {entry["limit"]: entry for entry in summary["limits"]}

    def importance(bound: Bound) -> tuple[int, int, bool]:
        entry = broken[bound.limit]
        by_part = {each["part"]: each["units"] for each in entry["by_part"]}
        own = by_part.get(bound.part, 0) if bound.part else entry["units"]
        return entry["units"], own, bound.column == START_MARGIN

    known = [bound for bound in bounds(study) if bound.column in rows.source.names]
    return max(known, key=importance, default=None)
