"""What the report needs: numbers and texts that others have computed."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tolsim.answers.ranking import START_MARGIN, worst_case
from tolsim.answers.results import Results
from tolsim.answers.unit_files import UnitRows
from tolsim.design import Rail, Study
from tolsim.figure_names import FIGURES
from tolsim.report.lots import LotStrips, lot_strips
from tolsim.report.ways import Way

Floats = NDArray[np.float64]

PASS, FAIL, UNDECIDED = 0, 1, 2


@dataclass(frozen=True)
class Waveform:
    """One cycle of one voltage or current: the nominal unit and the band of all units.

    Attributes
    ----------
    title : str
        "Q1 drain-source voltage".
    label : str
        Part or net.
    unit_of_measure : str
    state : str
        Load state it belongs to.
    time : ndarray (m,)
        s, over one cycle of the nominal unit.
    nominal, low, high : ndarray (m,)
        Nominal unit; percentiles over units at the same phase.
    """

    title: str
    label: str
    unit_of_measure: str
    state: str
    time: Floats
    nominal: Floats
    low: Floats
    high: Floats


@dataclass(frozen=True)
class InputRow:
    """One number that went in: where it stands, its law and where that comes from.

    Attributes
    ----------
    part, quantity, nominal, law : str
        Texts for people: "C5", "capacitance", "510 pF", "normal, cut at +-5 %".
    table : str
        Spread table used; empty if none.
    basis : str
        "standard", "datasheet", "measured", "common practice" or "guess".
    source : str
    """

    part: str
    quantity: str
    nominal: str
    law: str
    table: str
    basis: str
    source: str

    @property
    def guess(self) -> bool:
        """True if nothing but a guess stands behind the number."""
        return self.basis == "guess"


@dataclass(frozen=True)
class ReportInput:
    """Everything on the page.

    Attributes
    ----------
    title, scenario : str
    summary : mapping
        As documented in `tolsim.answers.results`.
    verdicts : ndarray (N,)
        0 pass, 1 fail, 2 undecided, by unit.
    start_margins : ndarray (N,)
        dB, worst of each unit over the conditions in its start states; NaN if unknown.
    start_margin_limit : float or None
    start_states : tuple of str
        States in which units are switched on.
    waveforms : tuple of Waveform
    inputs : tuple of InputRow
    assumptions, not_modelled, cautions : tuple of str
        Full sentences.
    repeat_command : str
        What to type to get the same numbers again.
    study_text : str
    lots : bool
        True if units differ by what a whole lot of parts shares.
    rails : mapping of str to Rail
        The supplies of the study.
    ways : tuple of Way
        Voltages along the changes of load.
    strips : LotStrips or None
        A figure lot by lot, if the study says how units share reels.
    """

    title: str
    scenario: str
    summary: Mapping[str, Any]
    verdicts: NDArray[np.int8]
    start_margins: Floats
    start_margin_limit: float | None
    start_states: tuple[str, ...]
    waveforms: tuple[Waveform, ...]
    inputs: tuple[InputRow, ...]
    assumptions: tuple[str, ...]
    not_modelled: tuple[str, ...]
    cautions: tuple[str, ...]
    repeat_command: str
    study_text: str
    lots: bool
    rails: Mapping[str, Rail]
    strips: LotStrips | None
    ways: tuple[Way, ...] = ()


def report_input(
    results: Results,
    study: Study,
    *,
    waveforms: Sequence[Waveform] = (),
    inputs: Sequence[InputRow] = (),
    assumptions: Sequence[str] = (),
    not_modelled: Sequence[str] = (),
    cautions: Sequence[str] = (),
    repeat_command: str = "",
    lots: bool = False,
    ways: Sequence[Way] = (),
) -> ReportInput:
    """Gather the content of the report from the results of a run.

    Raises
    ------
    ValueError
        If rows of units are missing.
    """
    rows = UnitRows.of(results.unit_columns)
    starts = tuple(name for name, state in study.states.items() if state.starts_here)
    here = [c for c, (_, state) in enumerate(rows.cases) if state in starts]
    margins = np.full(rows.unit.shape, np.nan)
    if here and START_MARGIN in rows.source.names:
        margins = worst_case(rows.figure(START_MARGIN)[:, here], FIGURES[START_MARGIN])
    limits = [
        limit.at_least
        for limit in study.limits
        if limit.figure == START_MARGIN and limit.at_least is not None
    ]
    return ReportInput(
        title=study.title,
        scenario=study.scenario,
        summary=results.summary,
        verdicts=_verdicts(rows),
        start_margins=margins,
        start_margin_limit=max(limits, default=None),
        start_states=starts,
        waveforms=tuple(waveforms),
        inputs=tuple(inputs),
        assumptions=tuple(assumptions),
        not_modelled=tuple(not_modelled),
        cautions=tuple(cautions),
        repeat_command=repeat_command,
        study_text=results.study_text,
        lots=lots,
        rails=study.design.rails,
        ways=tuple(ways),
        strips=lot_strips(study, rows, results.summary),
    )


def _verdicts(rows: UnitRows) -> NDArray[np.int8]:
    codes, words = rows.words("verdict")
    worst = np.zeros(rows.unit.shape, np.int8)
    for word, verdict in (("undecided", UNDECIDED), ("fail", FAIL)):
        if word in words:
            worst[(codes == words.index(word)).any(axis=1)] = verdict
    return worst
