"""The house rule: a module imports only from floors below its own, never sideways or up.

So the solver knows no study and no chance, statistics know only arrays, and nobody
imports the command line.  A new module gets its floor here.
"""

import ast
from pathlib import Path

import tolsim

FLOORS = [
    # words and numbers: they know nothing of circuits
    {"errors", "figure_names", "stats.proportion", "trim.operator"},
    {"answers.unit_files"},
    {"quantity", "library", "records", "answers.results", "laws.law"}
    | {"spread.codes", "spread.coil", "spread.wire", "stats.percentiles", "stats.ranking"}
    | {
        "stats.sample_shape",
        "stats.variance_split",
        "spread.preferred",
        "spread.quantity_words",
        "text_picture",
    },
    {"stats.response", "stats.reweighting", "stats.plausibility", "stats.neighbours"},
    {"laws.lognormal", "laws.sorted_out", "laws.triangular", "laws.truncated_normal"}
    | {"spread.value_codes"}
    | {"laws.measured", "laws.mixture", "laws.moved", "laws.student", "stats.clusters"}
    | {"laws.uniform", "stats", "mosfet_sheet", "winding", "mission", "transition"}
    | {"study.plain_words", "answers.wording", "starts.asked"},
    {"laws.window"},
    {"laws", "answers.lot_words", "answers.start_words"},
    # the design: parts, then what is made of them
    {"parts", "laws.reading"} | {"laws.predictive", "spread.readings"},
    {"prototype", "answers.prototype_words"},
    {"design", "spread.datasheet", "spread.temperature", "spread.ageing", "spread.winding"},
    {"answers.bounds", "answers.counting"},
    {"answers.mission", "answers.power_on", "answers.transitions"},
    {"answers.mission_words", "answers.power_on_words", "answers.transition_words"},
    {"report.mission_section", "report.power_on_section"},
    # the circuit: it knows the design, but neither studies nor spread
    {"circuit.devices"},
    {"circuit.supply_ramp"}
    | {
        "circuit.network",
        "circuit.kernels",
        "circuit.orbit",
        "circuit.periodic",
        "circuit.floquet",
    },
    {"circuit.device_groups", "circuit.stepper"},
    {"circuit.assembly", "circuit.bias", "circuit.charge", "circuit.walk"},
    {"circuit.cycle"},
    {"circuit.thermal", "circuit.critical", "circuit.transient"},
    {"circuit.startup", "circuit.transients.elements", "circuit.transients.compiling"},
    {"circuit.transients", "circuit.transients.laws", "starts.leftover"},
    {"circuit.transients.sources"},
    {"circuit.transients.stepping"},
    {"circuit.transients.kernel"},
    {"circuit.transients.journey"}
    | {"circuit.load_change", "circuit.load_change.handover", "circuit.load_change.probes"},
    {"circuit.load_change.road"}
    | {"circuit.poweron", "circuit.poweron.fates", "circuit.poweron.ramps", "circuit.poweron.path"}
    | {"circuit.poweron.latch", "circuit.poweron.envelope"},
    {"circuit.load_change.passage", "circuit.poweron.switch_on", "circuit.poweron.bursts"}
    | {"circuit.poweron.knobs"},
    {"circuit.poweron.otherwise"},
    {"circuit.shooting"},
    {"circuit.nominal"},
    {"circuit.continuation"},
    # the bulk solver
    {"circuit.bulk.grid"},
    {"circuit.bulk.unit_table", "circuit.bulk.multipliers"},
    {"circuit.bulk.residual"},
    {"circuit.bulk.inverse"},
    {"circuit.bulk.reference", "circuit.bulk.chord"},
    {"circuit.bulk.prediction", "circuit.bulk.newton"},
    {"circuit.bulk.plan"},
    {"circuit.bulk.solve", "circuit.bulk.judges"},
    # figures of an orbit and what they are worth
    {"figures.waves"},
    {"circuit.bulk.choice"},
    {"figures.parts", "figures.transistors"},
    {"figures.stage", "figures.start", "figures.power_on", "figures.load_change"},
    {"figures", "figures.track", "verdicts"},
    {"answers.unit_power_on"},
    {"trim.session"},
    # spread and chance
    {"spread.drift_reading", "spread.table", "spread.measured_reading", "spread.shorthand"},
    {"spread.dependence", "spread.streams"},
    {"spread.dependence_reading", "spread.tries"},
    {"spread.entry", "spread.needs"},
    {"spread.matching"},
    {"spread.reading", "spread.sampling"},
    {"spread.alternatives"},
    {"spread.portrait", "spread.reel_record", "spread.purchase", "spread.part_values"}
    | {"spread.checks", "spread.words"},
    {"self_heating"},
    {"trim.nominal_unit"},
    {"families", "answers.law_words"},
    # the door for study files
    {"study.outline", "study.recording", "study.markings"},
    {"study.nets", "study.limits", "study.checks", "study.lots", "study.supplies"}
    | {"study.mission", "study.mark_check"},
    {"study.trims", "study.transitions"},
    {"study.reading"},
    {"study.prototypes", "study.starts"},
    {"study.file"},
    {"study"},
    # answers
    {"nominals", "answers.provenance", "answers.trims", "answers.supply_words", "answers.ranking"},
    {"second_look", "answers.lots", "answers.reel_words", "answers.trim_words", "trim.drawn"}
    | {"transitions.prepared"}
    | {"report.lots", "report.ways"},
    {"transitions.drawn", "transitions.envelope"},
    {"evaluation", "answers.summary", "answers.lines", "report.content", "report.tables"},
    {"report.laws", "report.bench"},
    {"report.charts"},
    {"report.lot_chart", "report.trim_chart", "report.supply_chart"} | {"report.start_map_chart"},
    {"report.trim_section", "report.reel_section", "report.start_section"}
    | {"report.transition_section"},
    {"report.page", "report.unit_picture", "report.table_picture"} | {"report.power_on_picture"},
    {"report", "unit_changes"},
    {"inputs"},
    # the corridor, and the faces
    {"crosscheck", "heatcheck", "presentation", "recheck", "retelling", "solver_choice"},
    {"workers"},
    {"building", "lawcheck", "modelcheck", "starts.attempt"},
    {"starts.grid", "starts.contract", "starts.repeats"},
    {"starts.answers"},
    {"run", "replay"},
    {"terminal"},
    {"table_screen"},
    {"cli"},
]
FLOOR = {module: height for height, modules in enumerate(FLOORS, 1) for module in modules}
PACKAGE = Path(tolsim.__file__).parent


def module_name(path):
    """Name within the package: "circuit.devices"; a package is called like its folder."""
    parts = path.relative_to(PACKAGE).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def imported(path):
    """Every tolsim module that a file imports, in any spelling, at any depth."""
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom) and node.level:
            names = ["tolsim.(relative import)"]
        elif isinstance(node, ast.ImportFrom):
            both = [(node.module, f"{node.module}.{alias.name}") for alias in node.names]
            names = [full if full.removeprefix("tolsim.") in FLOOR else mod for mod, full in both]
        else:
            continue
        ours = (name for name in names if name == "tolsim" or name.startswith("tolsim."))
        yield from (name.removeprefix("tolsim").removeprefix(".") for name in ours)


def test_every_module_has_a_floor_and_imports_only_from_below():
    wrong = []
    for path in sorted(PACKAGE.rglob("*.py")):
        name = module_name(path)
        targets = [target for target in imported(path) if target]  # "" is the version
        if name not in FLOOR:
            if targets or path.name != "__init__.py":
                wrong.append(f"{name} has no floor: add it to FLOORS")
            continue
        wrong += [
            f"{name} (floor {FLOOR[name]}) may not import {target} (floor {FLOOR.get(target)})"
            for target in targets
            if FLOOR.get(target, len(FLOORS)) >= FLOOR[name]
        ]
    assert wrong == []


def test_no_file_is_too_long_to_read():
    lengths = {
        module_name(p): len(p.read_text("utf-8").splitlines()) for p in PACKAGE.rglob("*.py")
    }
    assert {name: lines for name, lines in lengths.items() if lines > 400} == {}


def test_no_function_is_too_long_to_read():
    """Docstrings are not counted: they may be as long as they need to be."""
    wrong = {}
    for path in PACKAGE.rglob("*.py"):
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if isinstance(node, ast.FunctionDef):
                body = node.body[1:] if ast.get_docstring(node) else node.body
                lines = body[-1].end_lineno - body[0].lineno + 1 if body else 0
                if lines > 60:
                    wrong[f"{module_name(path)}.{node.name}"] = lines
    assert wrong == {}
