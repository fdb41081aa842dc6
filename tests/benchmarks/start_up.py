"""How long `tolsim --help` takes as a whole process."""

from __future__ import annotations

import subprocess
import sys
import time
from pathlib import Path

RUNS = 7


def main() -> None:
    """Print seconds."""
    seconds = []
    for _ in range(RUNS):
        began = time.perf_counter()
        command = Path(sys.executable).with_name("tolsim")
        subprocess.run([str(command), "--help"], check=True, capture_output=True)
        seconds.append(time.perf_counter() - began)
    print(f"tolsim --help: min {min(seconds):.2f} s, max {max(seconds):.2f} s of {RUNS}")


if __name__ == "__main__":
    main()
