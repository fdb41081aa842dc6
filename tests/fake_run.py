"""An invented run with plausible numbers, for tests of results and report: no physics in it."""

from __future__ import annotations

import numpy as np
import pandas as pd

from tolsim.answers.results import Results
from tolsim.answers.summary import summarise
from tolsim.answers.unit_files import FrameColumns
from tolsim.design import Condition, Design, Limit, Rail, Run, State, Study
from tolsim.parts import Capacitor, DeviceModel, Inductor, Load, Mosfet, Rating, Resistor
from tolsim.report import InputRow, ReportInput, Waveform, report_input

STATES = ("dark", "glow", "full")
CONDITIONS = ("room", "cold")
CASES = [(condition, state) for condition in CONDITIONS for state in STATES]


def study(units=500, seed=7, drain_share=0.8, margin=3.0) -> Study:
    """Push-pull stage with the limits the fake rows are judged by."""
    mosfet = {
        "kind": "mosfet",
        "model": DeviceModel(threshold=3.4, gain=11.0),
        "rating": Rating(drain_voltage=100.0, gate_voltage=20.0, junction_temperature=150.0),
        "spread": "hf-mosfet",
    }
    tank = Capacitor(
        kind="capacitor",
        nets=("a", "p"),
        capacitance=510e-12,
        rating=Rating(voltage=500.0, current=4.0, temperature=85.0),
        spread="class1-ceramic-5pct",
    )
    parts = {
        "Q1": Mosfet(drain="a", gate="ga", **mosfet),
        "Q2": Mosfet(drain="b", gate="gb", **mosfet),
        "C5": tank,
        "C6": tank.model_copy(update={"nets": ("b", "q")}),
        "L3": Inductor(kind="inductor", nets=("p", "q"), inductance=2.2e-6, resistance=0.4),
        "R1": Resistor(
            kind="resistor", nets=("vdd", "ga"), resistance=3.3e3, rating=Rating(power=0.6)
        ),
        "LAMP": Load(kind="load", coil="L3", coupling=0.4, inductance=60e-9, resistance=1.5),
    }
    return Study(
        title="Lamp driver LD-40, pilot lot",
        scenario=(
            "Forty-watt push-pull driver for an electrodeless lamp. Fifty sets of parts are "
            "about to be ordered; the question is whether the five-percent tank capacitors do."
        ),
        design=Design(parts=parts, rails={"vdd": Rail(net="vdd", voltage=24.0)}),
        states={
            "dark": State(title="lamp not lit", starts_here=True),
            "glow": State(title="first glow"),
            "full": State(title="full discharge"),
        },
        conditions={"room": Condition(ambient=25.0), "cold": Condition(ambient=-20.0)},
        limits=(
            Limit(
                figure="drain_peak",
                share_of_rating=drain_share,
                rule="peak drain voltage at most 80 % of rating",
            ),
            Limit(figure="start_margin", at_least=margin, states=("dark",), rule="3 dB to start"),
            Limit(
                figure="voltage_peak",
                parts=("C5", "C6"),
                share_of_rating=0.7,
                rule="tank capacitors at most 70 % of rated voltage",
            ),
            Limit(figure="junction_temperature", share_of_rating=0.85, rule="junction derating"),
            Limit(figure="frequency", at_least=5.9e6, at_most=7.4e6, rule="band of the lamp coil"),
        ),
        run=Run(units=units, seed=seed, rank=("Q1.drain_peak",)),
    )


def factors(units=500, seed=7) -> pd.DataFrame:
    """Standard normal or uniform deviations; names as the sampler gives them."""
    rng = np.random.default_rng(seed)
    names = [
        "Q1.threshold tolerance",
        "Q2.threshold tolerance",
        "reel Q: threshold lot shift",
        "Q1.gain tolerance",
        "Q2.gain tolerance",
        "C5.capacitance tolerance",
        "C6.capacitance tolerance",
        "C5.capacitance temperature",
        "L3.inductance tolerance",
        "R1.resistance tolerance",
        "LAMP.coupling tolerance",
        "LAMP.resistance tolerance",
    ]
    table = pd.DataFrame({name: rng.uniform(-1, 1, units) for name in names})
    table.insert(0, "unit", np.arange(units))
    return table


def rows(table: pd.DataFrame, checked: Study) -> pd.DataFrame:
    """Figures as smooth functions of the factors, judged by the limits of `study`."""
    f = {name: table[name].to_numpy() for name in table.columns}
    units = len(table)
    shift = f["reel Q: threshold lot shift"]
    blocks = []
    for condition, state in CASES:
        cold = condition == "cold"
        level = {"dark": 1.0, "glow": 0.93, "full": 0.85}[state]
        stretch = 0.05 * f["C5.capacitance tolerance"] + 0.1 * f["L3.inductance tolerance"]
        threshold = 0.3 * f["Q1.threshold tolerance"] + 0.6 * shift + 0.25 * cold
        margin = 5.4 - 2.1 * threshold + 0.5 * f["Q1.gain tolerance"] - 0.9 * (state == "full")
        peak = level * (70.5 + 4.5 * stretch / 0.15 * 2 + 3.0 * f["LAMP.coupling tolerance"])
        peak = peak + 2.5 * f["C5.capacitance tolerance"] * f["LAMP.coupling tolerance"]
        heat = 62 + 24 * (1 - level) / 0.15 + 9 * np.abs(shift) - 45 * cold
        block = {
            "unit": table["unit"].to_numpy(),
            "condition": condition,
            "state": state,
            "status": "settled",
            "frequency": 6.62e6 * (1 - 0.5 * stretch) + 2e4 * (state == "full"),
            "input_power": 44 * level + 2 * stretch,
            "output_power": (44 * level - 6) * (state != "dark") + 0.4 * shift,
            "efficiency": 0.86 * (state != "dark") + 0.01 * shift,
            "start_margin": margin,
            "start_time": 24e-6 * np.exp(0.3 * threshold),
            "Q1.drain_peak": peak,
            "Q2.drain_peak": peak + 0.8 * f["Q2.threshold tolerance"],
            "Q1.gate_peak": 13.2 * level + 0.9 * f["C6.capacitance tolerance"],
            "Q2.gate_peak": 13.2 * level + 0.9 * f["C5.capacitance tolerance"],
            "Q1.junction_temperature": heat,
            "Q2.junction_temperature": heat + 1.5 * f["Q2.gain tolerance"],
            "C5.voltage_peak": 255 * level + 40 * stretch / 0.15,
            "C6.voltage_peak": 255 * level + 35 * f["C6.capacitance tolerance"],
            "C5.current_rms": 2.3 * level + 0.2 * stretch / 0.15,
            "C5.body_temperature": 58 + 8 * level - 45 * cold,
            "R1.dissipation": np.full(units, 0.12) + 0.004 * f["R1.resistance tolerance"],
            "vdd.current_mean": 1.85 * level + 0.05 * stretch,
        }
        blocks.append(_judged(pd.DataFrame(block), checked, condition, state))
    return pd.concat(blocks, ignore_index=True)


def _judged(block: pd.DataFrame, checked: Study, condition: str, state: str) -> pd.DataFrame:
    share = checked.limits[0].share_of_rating or 1.0
    over = (block[["Q1.drain_peak", "Q2.drain_peak"]] > 100 * share).any(axis=1).to_numpy()
    weak = (block["start_margin"] < (checked.limits[1].at_least or 0.0)).to_numpy()
    weak = weak & (state == "dark")
    unit = block["unit"].to_numpy()
    latched = np.isin(unit, [17, 230]) & (condition == "cold" and state == "dark")
    lost = (unit == 41) & (condition == "cold" and state == "glow")
    codes = [
        ";".join(str(i) for i, hit in enumerate(pair) if hit)
        for pair in zip(over, weak, strict=True)
    ]
    outcome = np.where(over, "over stress", "starts" if state == "dark" else "runs")
    outcome = np.where(latched, "latched both on", np.where(lost, "undecided", outcome))
    verdict = np.where(over | weak | latched, "fail", np.where(lost, "undecided", "pass"))
    block.insert(3, "verdict", verdict)
    block.insert(4, "outcome", outcome)
    block.insert(5, "failed_limits", codes)
    figures = [name for name in block.columns if block[name].dtype == float]
    block.loc[latched | lost, figures] = np.nan
    return block


def nominal(checked: Study) -> dict[tuple[str, str], dict[str, float]]:
    """Figures of the unit without any deviation."""
    table = factors(1) * 0
    found = rows(table, checked)
    numbers = found.select_dtypes("number").drop(columns="unit")
    keys = zip(found["condition"], found["state"], strict=True)
    return dict(zip(keys, numbers.to_dict("records"), strict=True))


QUALITY = {
    "energy_balance": {"worst": 0.0031, "median": 0.0004},
    "orbit_residual": {"worst": 8e-9, "median": 3e-11},
    "rechecked": {"units": 25, "share": 0.05, "agreed": 25, "worst_difference": 0.0011},
    "steps": {"steps_per_cycle": 128, "recheck_steps_per_cycle": 256, "recheck_cycles": 8},
    "solved_by": {"predicted": 2990, "blended": 10},
}
PROVENANCE = {
    "seed": 7,
    "versions": {"tolsim": "0.1.0", "numpy": "2.4.6", "scipy": "1.17.1"},
    "study_sha256": "5b1f0c9e" * 8,
    "tables": {"class1-ceramic-5pct": "00aa11bb" * 8, "hf-mosfet": "c0ffee00" * 8},
}


def results() -> Results:
    """Results of the invented run, in memory."""
    checked = study()
    table = factors()
    found = rows(table, checked)
    summary = summarise(
        checked,
        FrameColumns(found),
        FrameColumns(table),
        nominal(checked),
        QUALITY,
        PROVENANCE,
    )
    return Results.in_memory(summary, 'title = "Lamp driver LD-40, pilot lot"\n', found, table)


def waveforms() -> list[Waveform]:
    """Curves that look like the drain, gate and coil of such a stage."""
    period = 1 / 6.6e6
    time = np.linspace(0, period, 129)
    phase = 2 * np.pi * time / period
    drain = 66 * np.clip(np.sin(phase), 0, None) - 0.8 * (np.sin(phase) < 0)
    gate = 4.2 - 9.0 * np.sin(phase + 0.2)
    coil = 250 * np.cos(phase)
    shapes = [
        ("Q1 drain-source voltage", "Q1", "V", drain),
        ("Q1 gate-source voltage", "Q1", "V", gate),
        ("Coil voltage", "L3", "V", coil),
        ("C5 current", "C5", "A", 2.4 * np.sin(phase + 0.4)),
    ]
    return [
        Waveform(title, label, unit, state, time, level * shape, *_band(level * shape))
        for state, level in (("dark", 1.0), ("full", 0.85))
        for title, label, unit, shape in shapes
    ]


def _band(shape: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    reach = 0.06 * np.abs(shape) + 0.02 * np.max(np.abs(shape))
    return shape - reach, shape + reach


INPUTS = [
    InputRow(
        "C5, C6",
        "capacitance",
        "510 pF",
        "normal, cut at ±5 %",
        "class1-ceramic-5pct",
        "standard",
        "tolerance letter J, IEC 60062",
    ),
    InputRow(
        "C5, C6",
        "capacitance, temperature",
        "0 ppm/K",
        "uniform ±30 ppm/K",
        "class1-ceramic-5pct",
        "standard",
        "EIA-198 code C0G",
    ),
    InputRow(
        "Q1, Q2",
        "threshold",
        "3.4 V",
        "lot shift uniform ±0.6 V, within the lot normal, 0.1 V",
        "hf-mosfet",
        "datasheet",
        "window of the sheet at 25 °C",
    ),
    InputRow("Q1, Q2", "gain", "11 A/V²", "uniform ±15 %", "hf-mosfet", "guess", ""),
    InputRow(
        "L3", "inductance", "2.2 µH", "normal, cut at ±10 %", "air-coil-hand", "common practice",
        "hand-wound on a former",
    ),
    InputRow(
        "LAMP", "coupling", "0.40", "uniform ±10 %", "lamp-load", "guess",
        "one lamp measured by the author of the study",
    ),
]  # fmt: skip


def report() -> ReportInput:
    """Content of a page with everything on it."""
    return report_input(
        results(),
        study(),
        waveforms=waveforms(),
        inputs=INPUTS,
        assumptions=["The on-resistance row is missing: drift resistance was taken as zero."],
        not_modelled=[
            "Inductance of leads and traces that the study does not list.",
            "Retries after a failed ignition.",
        ],
        repeat_command="tolsim run study.toml --units 500 --seed 7",
    )
