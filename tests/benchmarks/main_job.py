"""The main job on every shipped study: 500 units, two jobs, report included."""

from __future__ import annotations

import tempfile
import time
from pathlib import Path

from tolsim.library import shipped_studies
from tolsim.run import run_study

UNITS, JOBS = 500, 2


def main() -> None:
    """Print seconds, yield and undecided units of each study."""
    for name, path in shipped_studies().items():
        with tempfile.TemporaryDirectory() as folder:
            began = time.perf_counter()
            results = run_study(path, units=UNITS, jobs=JOBS, out=Path(folder) / name)
            seconds = time.perf_counter() - began
        found = results.yield_
        cases = len(results.cases)
        print(
            f"{name}: {seconds:.0f} s for {UNITS} units in {cases} cases, yield"
            f" {100 * found['estimate']:.1f} %, undecided {found['undecided']}"
        )


if __name__ == "__main__":
    main()
