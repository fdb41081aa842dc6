"""All benchmarks, one after the other: `python tests/benchmarks`, or name some of them.

    python tests/benchmarks shooting main_job memory start_up bulk

Speeds are told as ratios within one run; single seconds mean little on a shared machine.
"""

from __future__ import annotations

import os
import runpy
import sys
from pathlib import Path

HERE = Path(__file__).resolve().parent

# one thread each: the arrays of a unit are small, and rates are meant per core
for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(name, "1")


def main() -> None:
    """Run the benchmarks named on the command line, or all."""
    sys.path.insert(0, str(HERE.parent))
    known = sorted(path.stem for path in HERE.glob("*.py") if not path.stem.startswith("_"))
    wanted = sys.argv[1:] or known
    for name in wanted:
        if name not in known:
            sys.exit(f"There is no benchmark '{name}'. Known: {', '.join(known)}.")
    for name in wanted:
        print(f"\n== {name}", flush=True)
        sys.argv = [name]
        runpy.run_path(str(HERE / f"{name}.py"), run_name="__main__")


if __name__ == "__main__":
    main()
