"""Results by lot: how failures bunch in lots, how many lots are lost, what one batch may hold."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tolsim.answers.ranking import ranked_figures
from tolsim.answers.unit_files import UnitRows
from tolsim.design import Lots, Study
from tolsim.stats.clusters import between_lots, chance_in_batch, share_of_lots
from tolsim.stats.proportion import share_interval

Floats = NDArray[np.float64]
Counts = NDArray[np.int64]
Flags = NDArray[np.bool_]

WORST_LOTS = 8
BATCHES = (1, 5, 10, 20, 50, 100, 200, 500)  # boards, as far as a lot goes


@dataclass(frozen=True)
class LotCounts:
    """Units of each lot; arrays (k,).

    `number` is the lot's own, `group` that of the lots it may share reels with.
    """

    number: Counts
    group: Counts
    units: Counts
    failed: Counts
    undecided: Counts

    @classmethod
    def of(cls, lots: Lots, unit: Counts, failed: Flags, undecided: Flags) -> LotCounts:
        """Count the units with these numbers (N,) by lot."""
        number, place = np.unique(unit // lots.units_per_lot, return_inverse=True)
        return cls(
            number,
            number // lots.lots_together,
            np.bincount(place),
            np.bincount(place, failed).astype(np.int64),
            np.bincount(place, undecided & ~failed).astype(np.int64),
        )

    def whole(self, units_per_lot: int) -> LotCounts:
        """Only lots that are built to their end, unless there is none."""
        here = self.units == units_per_lot
        if not here.any():
            return self
        arrays = (self.number, self.group, self.units, self.failed, self.undecided)
        return LotCounts(*(array[here] for array in arrays))


def lots_entry(study: Study, rows: UnitRows, failed: Flags, undecided: Flags) -> dict[str, Any]:
    """Entry `lots` of the summary; empty if the study does not say how units share reels.

    Parameters
    ----------
    failed, undecided : ndarray (N,)
        Verdicts of the units of `rows`.
    """
    lots, confidence = study.lots, study.run.confidence
    if lots is None:
        return {}
    every = LotCounts.of(lots, rows.unit, failed, undecided)
    whole = every.whole(lots.units_per_lot)
    counts, frequency = np.unique(every.failed, return_counts=True)
    sure = int((~failed & ~undecided).sum())
    least = float(share_interval(sure, failed.size, confidence)[0])
    most = float(share_interval(int((~failed).sum()), failed.size, confidence)[1])
    return {
        "units_per_lot": lots.units_per_lot,
        "lots": every.number.size,
        "lots_together": lots.lots_together,
        "reels": dict(lots.reels),
        "failures": [
            {"failed": int(f), "lots": int(n)} for f, n in zip(counts, frequency, strict=True)
        ],
        "worst": _worst(lots, every),
        "with_failure": _share(whole, 1.0 / lots.units_per_lot, confidence),
        "lost_when": lots.lost_when,
        "lost": _share(whole, lots.lost_when, confidence),
        "batches": _batches(whole, failed, confidence),
        "between": _between(study, rows, failed, undecided, rows.unit // lots.units_per_lot),
        "independent": {"low": least, "high": most},
    }


def _worst(lots: Lots, every: LotCounts) -> list[dict[str, Any]]:
    """Lots with most failing units."""
    order = np.argsort(-every.failed, kind="stable")[:WORST_LOTS]
    return [
        {
            "lot": int(every.number[k]),
            "first_unit": int(every.number[k]) * lots.units_per_lot,
            "units": int(every.units[k]),
            "failed": int(every.failed[k]),
            "undecided": int(every.undecided[k]),
        }
        for k in order
        if every.failed[k]
    ]


def _share(lots: LotCounts, least: float, confidence: float) -> dict[str, Any]:
    """Lots of which a share `least` of the units fails, or more; undecided units may fail too."""
    hit = lots.failed >= least * lots.units - 1e-9
    may = lots.failed + lots.undecided >= least * lots.units - 1e-9
    return {
        "lots": int(hit.sum()),
        "of": hit.size,
        "share": float(hit.mean()),
        "low": share_of_lots(hit, lots.group, confidence).low,
        "high": share_of_lots(may, lots.group, confidence).high,
        "first_lots": lots.number[hit][:WORST_LOTS],
    }


def _batches(lots: LotCounts, failed: Flags, confidence: float) -> list[dict[str, Any]]:
    """Chance that boards of one lot hold a failing one, beside that of boards of many lots."""
    largest = int(lots.units.min())
    found = []
    for boards in dict.fromkeys([*(b for b in BATCHES if b < largest), largest]):
        chance, most = (
            share_of_lots(
                chance_in_batch(bad, lots.units, boards),
                lots.group,
                confidence,
                most=float(lots.units.sum() / boards),
            )
            for bad in (lots.failed, lots.failed + lots.undecided)
        )
        found.append(
            {
                "boards": boards,
                "share": chance.share,
                "low": chance.low,
                "high": most.high,
                "independent": float(1.0 - (1.0 - failed.mean()) ** boards),
            }
        )
    return found


def _between(
    study: Study, rows: UnitRows, failed: Flags, undecided: Flags, lot: Counts
) -> list[dict[str, Any]]:
    """Share of the variance between lots: of pass or fail, and of the figures that are ranked."""
    verdict = np.where(failed, 1.0, np.where(undecided, np.nan, 0.0))
    targets = [
        ("pass/fail", "Pass or fail", verdict),
        *((name, title, values) for name, title, _, values in ranked_figures(study, rows)),
    ]
    found = []
    for name, title, values in targets:
        between = between_lots(values, lot, study.run.confidence)
        found.append(
            {
                "target": name,
                "title": title,
                "share": between.share,
                "low": between.low,
                "high": between.high,
            }
        )
    return found
