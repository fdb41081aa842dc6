"""The whole road on a small study: folder, resume, replay, reproducibility."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import quick_study

from tolsim import building
from tolsim.answers.results import Results
from tolsim.circuit.shooting import TOLERANCE
from tolsim.errors import RequestError, RunError
from tolsim.replay import draw_power_on, draw_replay, replay_unit, story_text
from tolsim.run import run_study

UNITS = 12


def write(folder: Path, **changes: object) -> Path:
    """A study file on disk."""
    path = folder / "quick.toml"
    path.write_text(quick_study.text(**changes), encoding="utf-8")  # type: ignore[arg-type]
    return path


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Results folder of a finished run in chunks of 5."""
    place = tmp_path_factory.mktemp("run")
    patch = pytest.MonkeyPatch()
    patch.setattr(building, "BLOCK", 5)
    run_study(write(place), jobs=1, out=place / "out")
    patch.undo()
    return place / "out"


def test_folder_holds_what_is_documented(finished: Path) -> None:
    """Summary, tables, report and the study with its spread tables."""
    names = {path.name for path in finished.iterdir()}
    assert {"summary.json", "units.parquet", "factors.parquet", "report.html"} <= names
    assert {"study.toml", "tables", "run.json"} <= names
    summary = json.loads((finished / "summary.json").read_text(encoding="utf-8"))
    counts = summary["yield"]
    assert counts["units"] == UNITS == counts["passed"] + counts["failed"] + counts["undecided"]
    assert 0 <= counts["low"] <= counts["estimate"] <= counts["high"] <= 1
    assert summary["quality"]["energy_balance"]["worst"] < 0.005
    rechecked = summary["quality"]["rechecked"]
    assert rechecked["agreed"] == rechecked["units"] > 0


def test_every_unit_has_a_row_with_verdict_and_figures(finished: Path) -> None:
    """Nothing is left out, and solved units have their figures."""
    units = pd.read_parquet(finished / "units.parquet")
    assert units["unit"].tolist() == list(range(UNITS))
    assert set(units["verdict"]) <= {"pass", "fail", "undecided"}
    solved = units[units["status"] == "settled"]
    figures = [name for name in units.columns if name.endswith(("peak", "frequency", "loss"))]
    figures = [name for name in figures if "power_on" not in name]  # a share is switched on
    assert len(figures) > 20
    assert solved[figures].notna().all(axis=None)


def test_same_seed_same_answer_whatever_the_chunks_and_units(
    finished: Path, tmp_path: Path
) -> None:
    """Unit k is the same to the last bit in a shorter run, nearly so with other chunks."""
    stored = pd.read_parquet(finished / "units.parquet").head(4)
    numbers = [name for name in stored.columns if stored[name].dtype == np.float64]
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(building, "BLOCK", 5)
        shorter = run_study(write(tmp_path), units=4, jobs=2).units
    pd.testing.assert_frame_equal(shorter, stored, check_exact=True)
    other = run_study(write(tmp_path), units=4, jobs=1).units
    numbers.remove("orbit_residual")  # an error itself
    scale = stored[numbers].abs().max().clip(lower=1e-9)
    assert ((other[numbers] - stored[numbers]).abs() / scale).max().max() < TOLERANCE
    assert other["verdict"].tolist() == stored["verdict"].tolist()


def test_killed_run_leaves_finished_chunks_and_is_taken_up(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The chunks done before the kill are readable, and not solved again."""
    monkeypatch.setattr(building, "BLOCK", 3)
    path = write(tmp_path, units=9)
    evaluate, seen = building.evaluate, []

    def dies_in_the_second(plan: object, first: int, count: int, block: int) -> object:
        seen.append(first)
        if seen == [0, 3]:
            raise KeyboardInterrupt
        return evaluate(plan, first, count, block)  # type: ignore[arg-type]

    monkeypatch.setattr(building, "evaluate", dies_in_the_second)
    with pytest.raises(KeyboardInterrupt):
        run_study(path, jobs=1, out=tmp_path / "out")
    left = Results.open(tmp_path / "out")
    assert not left.complete
    assert left.units["unit"].tolist() == [0, 1, 2]
    results = run_study(path, jobs=1, out=tmp_path / "out")
    assert results.complete
    assert sorted(results.units["unit"]) == list(range(9))
    assert seen == [0, 3, 3, 6]


def test_another_run_in_the_folder_is_refused(finished: Path, tmp_path: Path) -> None:
    """A folder belongs to one study and seed."""
    with pytest.raises(RequestError, match="holds a run of another kind: another seed\\."):
        run_study(write(tmp_path), seed=99, out=finished)
    (tmp_path / "mine").mkdir()
    (tmp_path / "mine" / "thesis.txt").write_text("do not touch", encoding="utf-8")
    with pytest.raises(RequestError, match="is not empty and holds no run"):
        run_study(write(tmp_path), out=tmp_path / "mine")


def test_replay_tells_the_stored_unit(finished: Path) -> None:
    """Same outcome as stored, a story per case, a picture."""
    replay = replay_unit(finished, 7)
    text = story_text(replay)
    assert text.startswith("Unit 7\nroom / lit: ")
    picture = draw_replay(replay, finished)
    assert picture is not None
    assert picture.read_bytes().startswith(b"\x89PNG")
    assert max(map(len, text.splitlines())) <= 80


def test_replay_switches_the_unit_on_again(finished: Path) -> None:
    """Start time and peaks of the replay are those of the run where it has them."""
    units = pd.read_parquet(finished / "units.parquet")
    row = units[(units["power_on"] == "starts") & (units["unit"] < UNITS)].iloc[0]
    replay = replay_unit(finished, int(row["unit"]))
    ((name, case),) = replay.power_on.items()
    assert name == ("room", "lit")
    assert case.unit.fate.name == "STARTS"
    for figure in ("power_on_time", "QA.power_on_drain_peak", "LA.power_on_current_peak"):
        assert case.unit.figures[figure] == pytest.approx(row[figure], rel=1e-3)
    assert "Power-on in room / lit:" in story_text(replay)
    assert [path.suffix for path in draw_power_on(replay, finished)] == [".png", ".svg"]


def test_replay_of_a_failing_unit_names_limit_and_neighbour(finished: Path) -> None:
    """A unit over its limit says by how much, and which unit nearby passes."""
    units = pd.read_parquet(finished / "units.parquet")
    failing = units[units["verdict"] == "fail"]["unit"]
    assert 0 < len(failing) < UNITS, "the study must have both kinds for this test"
    text = story_text(replay_unit(finished, int(failing.iloc[0])))
    assert "is above" in text
    assert "Nearest passing unit: " in text


def test_replay_of_an_unknown_unit(finished: Path) -> None:
    """The range of units is named."""
    with pytest.raises(RequestError, match=r"no unit 400 in this run\. Its units are 0 to 11"):
        replay_unit(finished, 400)


def test_a_run_that_built_nothing_does_not_hold_its_folder(tmp_path: Path) -> None:
    """After a study that could not be solved, the mended one may use the same folder."""
    out = tmp_path / "out"
    out.mkdir()
    (out / "run.json").write_text('{"seed": 99}', encoding="utf-8")
    assert run_study(write(tmp_path), units=3, jobs=1, out=out).complete


def test_study_without_any_orbit(tmp_path: Path) -> None:
    """A stage biased far below threshold, without feedback, says that it cannot run."""
    text = quick_study.text(bias=0.1).replace('"75 pF"', '"0.01 pF"')
    path = tmp_path / "dead.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(RunError, match="settles on no periodic orbit in any case"):
        run_study(path, units=2, jobs=1)


def test_the_bulk_solver_serves_and_is_checked(tmp_path: Path) -> None:
    """Left to choose, the run says what served, how far off it was, and what the other said."""
    results = run_study(write(tmp_path, units=20, solver="auto"), jobs=1)
    (served,) = results.quality["solvers"]
    assert (served["solver"], served["state"]) == ("collocation", "lit")
    assert max(served["peak_error"], served["rms_error"]) < 1e-3
    crosscheck = results.quality["crosscheck"]
    assert crosscheck["units"] >= 16
    assert not crosscheck["warning"]
    assert set(results.units["way"]) == {"collocation"}
    longer = run_study(write(tmp_path, units=24, solver="auto"), jobs=2).units.head(20)
    pd.testing.assert_frame_equal(results.units, longer, check_exact=True)


def test_blocks_in_one_pool_have_the_bits_of_blocks_alone(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """One job takes four blocks together, two jobs take them one by one."""
    monkeypatch.setattr(building, "BLOCK", 8)
    monkeypatch.setattr("tolsim.crosscheck.PART", 8)
    path = write(tmp_path, units=32, solver="auto")
    together, alone = (run_study(path, jobs=jobs, out=tmp_path / str(jobs)) for jobs in (1, 2))
    for table in ("units", "factors"):
        mine, other = getattr(together, table), getattr(alone, table)
        pd.testing.assert_frame_equal(mine, other, check_exact=True)
    files = [len(list((tmp_path / str(jobs) / "chunks").glob("units-*"))) for jobs in (1, 2)]
    assert files == [1, 4]
    assert together.quality["crosscheck"] == alone.quality["crosscheck"]


def test_a_run_is_taken_up_with_another_layout(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Chunks of a shorter or longer run count where they fit; no unit is left out or doubled."""
    monkeypatch.setattr(building, "BLOCK", 2)
    path, out = write(tmp_path), tmp_path / "out"
    for units in (3, 7, 4):
        results = run_study(path, units=units, jobs=1, out=out)
        assert list(results.units["unit"]) == list(range(units))
        assert list(results.factors["unit"]) == list(range(units))


def test_the_last_tasks_are_short_and_gaps_stay_apart() -> None:
    """Long tasks first, then single blocks, so that two jobs end together."""
    assert building.share_out({}, 9 * 128 + 5, 1, 4) == [(0, 512), (512, 512), (1024, 133)]
    sizes = [count for _, count in building.share_out({}, 4096, 2, 4)]
    assert (max(sizes), sizes[-1], sum(sizes)) == (512, 128, 4096)
    assert sizes == sorted(sizes, reverse=True)
    gaps = building.share_out({128: 256}, 700, 1, 4)
    assert gaps == [(0, 128), (384, 316)]
