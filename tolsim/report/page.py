"""Fill the page: content in, one HTML text out."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import numpy as np
from jinja2 import Environment, PackageLoader, StrictUndefined
from numpy.typing import NDArray

from tolsim.answers.lot_words import lot_sentences, lot_tables
from tolsim.answers.unit_files import write_text
from tolsim.answers.wording import DASH, confidence_words, percent, percents, verdict_sentence
from tolsim.report.bench import bench_section
from tolsim.report.charts import start_margin_chart, waveform_chart
from tolsim.report.content import FAIL, PASS, UNDECIDED, ReportInput
from tolsim.report.laws import law_section
from tolsim.report.lot_chart import lot_chart
from tolsim.report.mission_section import mission_section
from tolsim.report.power_on_section import power_on_section
from tolsim.report.reel_section import reel_section
from tolsim.report.start_section import start_section
from tolsim.report.supply_chart import supply_chart
from tolsim.report.tables import (
    case_rows,
    limit_rows,
    limited_stage_rows,
    other_rows,
    ranking_columns,
    stage_rows,
    start_sentences,
    stress_rows,
)
from tolsim.report.transition_section import transition_section
from tolsim.report.trim_section import trim_section

MOST_TILES = 2000
TILES_IN_A_ROW = 50
READABLE = 1e-5  # smaller ratios are written as powers of ten
MOST_CASES = 12  # with more, those in which nothing happens are folded away


def render(content: ReportInput) -> str:
    """Whole page as one text of HTML."""
    pages = Environment(
        loader=PackageLoader("tolsim.report"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    summary = content.summary
    y = summary["yield"]
    cases = case_rows(summary)
    fold = len(cases) > MOST_CASES
    return pages.get_template("report.html").render(
        content=content,
        y=y,
        verdict=verdict_sentence(summary),
        interval_name=confidence_words(summary),
        yield_words=percent(y["estimate"]),
        yield_interval=percents(y["low"], y["high"]),
        tray=_tray(content.verdicts),
        starts=start_sentences(summary, content.start_states),
        start_chart=start_margin_chart(content.start_margins, content.start_margin_limit),
        lot_sentences=list(lot_sentences(summary)),
        lot_chart=lot_chart(content.strips, content.verdicts),
        **lot_tables(summary),
        limits=limit_rows(summary),
        cases=[case for case in cases if not (fold and case["clean"])],
        clean=[case for case in cases if fold and case["clean"]],
        stresses=stress_rows(summary),
        mission=mission_section(summary),
        switching=start_section(summary),
        transitions=transition_section(summary, content.ways),
        trims=trim_section(summary),
        power_on=power_on_section(summary),
        limited=limited_stage_rows(summary),
        stage=stage_rows(summary),
        others=other_rows(summary),
        rankings=ranking_columns(summary),
        laws=law_section(summary),
        bench=bench_section(summary),
        waves=[
            {"wave": wave, "svg": waveform_chart(wave, number)}
            for number, wave in enumerate(content.waveforms)
        ],
        reels=reel_section(summary),
        guesses=sum(row.guess for row in content.inputs),
        quality=_quality(summary["quality"]),
        supply_chart=supply_chart(content.rails),
        provenance=_lines({k: v for k, v in summary["provenance"].items() if k != "tables"}),
        tables=_lines(summary["provenance"].get("tables", {})),
    )


def write_report(content: ReportInput, path: Path | str) -> None:
    """Write the page to a file, whole or not at all."""
    write_text(Path(path), render(content))


def _tray(verdicts: NDArray[np.int8]) -> dict[str, Any]:
    """Every unit as a tile, in order: one SVG path per verdict."""
    shown = verdicts[:MOST_TILES]
    numbers = np.arange(shown.size)
    paths = {}
    for name, verdict in (("passed", PASS), ("failed", FAIL), ("undecided", UNDECIDED)):
        place = numbers[shown == verdict]
        steps = zip(place % TILES_IN_A_ROW * 8, place // TILES_IN_A_ROW * 8, strict=True)
        paths[name] = "".join(f"M{x} {y}h6v6h-6z" for x, y in steps)
    return {
        "paths": paths,
        "width": TILES_IN_A_ROW * 8 - 2,
        "height": -(-shown.size // TILES_IN_A_ROW) * 8 - 2,
        "units": shown.size,
        "all": shown.size == verdicts.size,
    }


def _quality(quality: dict[str, Any]) -> list[tuple[str, str]]:
    """Quality figures in words; what is not known by name is listed as it is."""
    words = []
    known = dict(quality)
    for key, name in (
        ("energy_balance", "Energy balance: gap between DC input and the sum of all losses"),
        ("orbit_residual", "Orbit: relative gap after one cycle"),
    ):
        entry = known.pop(key, None)
        if entry:
            worst, median = _ratio(entry.get("worst")), _ratio(entry.get("median"))
            words.append((name, f"worst unit {worst}, median {median}"))
    again = known.pop("rechecked", None)
    if again:
        text = (
            f"{again['units']} units ({percent(again['share'])}); {again['agreed']} agreed; "
            f"worst difference {_ratio(again['worst_difference'])}"
        )
        words.append(("Solved again in the time domain", text))
    words += _solvers(known.pop("solvers", []), known.pop("crosscheck", {}))
    words += [("Own temperature of parts", _warm(e)) for e in known.pop("self_heating", [])]
    ways = known.pop("solved_by", {})
    if ways:
        text = ", ".join(f"{count} {way}" for way, count in ways.items())
        words.append(("How units were solved (each in every case)", text))
    steps = known.pop("steps", {})
    if steps:
        text = (
            f"{steps['steps_per_cycle']}; when solved again {steps['recheck_steps_per_cycle']},"
            f" over {steps['recheck_cycles']} cycles"
        )
        words.append(("Steps per cycle", text))
    return words + _lines(known)


def _warm(entry: dict[str, Any]) -> str:
    """How warm a passive part runs, and how far units may be from that."""
    if not entry["part"]:
        where = f"{entry['condition']}, {entry['state']}"
        return f"{where}: the nominal unit has no orbit with warm parts; they are taken as cold"
    gap = "" if entry["gap"] is None else f"; right within {entry['gap']:.2g} K for 95 % of units"
    unsettled = "" if entry["settled"] else "; its losses found no balance, values are uncertain"
    return (
        f"{entry['part']}: {entry['rise']:.3g} K above its surroundings by the loss of the nominal"
        f" unit ({entry['condition']}, {entry['state']}), corrected by each unit's own values"
        f"{gap}{unsettled}"
    )


def _solvers(solvers: list[dict[str, Any]], crosscheck: dict[str, Any]) -> list[tuple[str, str]]:
    """Which solver served each case and how far it was off on the pilot units."""
    words = []
    for entry in solvers:
        order = f", {entry['harmonics']} harmonics" if entry["harmonics"] else ""
        text = f"{entry['solver']}{order}; largest errors on pilot units: {_errors(entry, '')}"
        if entry["harmonics"]:
            text += f"; against twice the harmonics: {_errors(entry, 'order_')}"
        words.append((f"Solver, {entry['condition']}, {entry['state']}", text))
    if crosscheck:
        worst = crosscheck["worst"]
        text = (
            f"{crosscheck['units']}; largest difference {_ratio(worst['difference'])}"
            f" ({worst['figure']}, {worst['condition']}, {worst['state']})"
        )
        words.append(("Units solved by both solvers", text))
    return words


def _errors(entry: dict[str, Any], judge: str) -> str:
    """Errors of frequency, peak and rms before a judge."""
    return ", ".join(
        f"{name} {_ratio(entry.get(f'{judge}{name}_error'))}"
        for name in ("frequency", "peak", "rms")
    )


def _ratio(value: float | None) -> str:
    if value is None or not math.isfinite(value):
        return DASH
    return f"{100 * value:.2g} %" if abs(value) >= READABLE else f"{value:.1e}"


def _lines(entries: dict[str, Any], before: str = "") -> list[tuple[str, str]]:
    """Nested entries as (name, text), names joined by commas."""
    lines: list[tuple[str, str]] = []
    for key, value in entries.items():
        name = before + str(key).replace("_", " ")
        if isinstance(value, dict):
            lines += _lines(value, f"{name}, ")
        elif isinstance(value, float):
            lines.append((name, f"{value:.3g}"))
        else:
            lines.append((name, DASH if value is None else str(value)))
    return lines
