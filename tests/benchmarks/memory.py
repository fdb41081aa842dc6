"""Memory of the statistics for 100 000 units in 6 cases with 150 figures, solved by nobody.

Rows are invented, written chunk by chunk as a run does, merged and summarised; what is measured
is the largest resident size of this process.
"""

from __future__ import annotations

import resource
import tempfile
import time
from pathlib import Path

import fake_run
import numpy as np
import pandas as pd

from tolsim.answers.summary import summarise
from tolsim.answers.unit_files import UnitFiles

UNITS, CHUNK, FIGURES = 100_000, 2_500, 150


def main() -> None:
    """Print seconds and megabytes."""
    study = fake_run.study(units=UNITS)
    rng = np.random.default_rng(1)
    with tempfile.TemporaryDirectory() as folder:
        files = UnitFiles(Path(folder))
        began = time.perf_counter()
        for first in range(0, UNITS, CHUNK):
            files.write_chunk(first, _rows(rng, first), _factors(rng, first))
        files.merge()
        merged = time.perf_counter()
        summarise(study, files.units(), files.factors(), {}, {}, {})
        done = time.perf_counter()
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"{UNITS} units, {len(fake_run.CASES)} cases, {FIGURES} figures:")
    print(f"written and merged in {merged - began:.0f} s, summarised in {done - merged:.0f} s")
    print(f"peak memory {peak:.0f} MB")


def _rows(rng: np.random.Generator, first: int) -> pd.DataFrame:
    tables = []
    for condition, state in fake_run.CASES:
        figures = pd.DataFrame(
            rng.normal(size=(CHUNK, FIGURES)),
            columns=[f"C{k}.voltage_peak" for k in range(FIGURES - 2)]
            + ["start_margin", "Q1.drain_peak"],
        )
        words = {
            "unit": np.arange(first, first + CHUNK),
            "condition": condition,
            "state": state,
            "verdict": "pass",
            "outcome": "runs",
            "failed_limits": "",
            "status": "settled",
        }
        tables.append(pd.concat([pd.DataFrame(words), figures], axis=1))
    return pd.concat(tables, ignore_index=True)


def _factors(rng: np.random.Generator, first: int) -> pd.DataFrame:
    table = pd.DataFrame(rng.uniform(size=(CHUNK, 80)), columns=[f"f{k}" for k in range(80)])
    table.insert(0, "unit", np.arange(first, first + CHUNK))
    return table


if __name__ == "__main__":
    main()
