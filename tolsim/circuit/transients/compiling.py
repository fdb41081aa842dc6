"""Compile once, keep the machine code, and never run machine code of other sources.

The compiler's own cache looks at the file of each function alone, not at the functions it calls;
so a change in one file would leave the callers in other files as they were.  Here the folder of
the cache is named by a digest of every source that goes into the code.
"""

from __future__ import annotations

import hashlib
import os
from collections.abc import Callable
from functools import cache
from pathlib import Path
from typing import Any, TypeVar, cast

import numba
import platformdirs

Compiled = TypeVar("Compiled", bound=Callable[..., object])

# sums may be regrouped, so that they vectorise; NaN and infinity keep their meaning
LOOSE = {"reassoc", "contract", "nsz"}
_HERE = Path(__file__).parent
_BELOW = ("devices.py", "stepper.py")  # in the folder above: constants of theirs are compiled in


@cache
def _folder() -> str:
    """Where the machine code of exactly these sources is kept."""
    digest = hashlib.sha256(numba.__version__.encode())
    for file in (*sorted(_HERE.glob("*.py")), *(_HERE.parent / name for name in _BELOW)):
        digest.update(file.read_bytes())
    beside = _HERE / "__pycache__"
    writable = os.access(beside if beside.exists() else _HERE, os.W_OK)
    place = beside if writable else Path(platformdirs.user_cache_dir("tolsim"))
    return str(place / f"compiled-{digest.hexdigest()[:16]}")


def hot(function: Compiled) -> Compiled:
    """Compile a function when it is first called, or load it as it was compiled before.

    Hand it flat tuples of arrays only: taking a tuple out of another one counts references.
    """
    settings: Any = numba.config
    usual = settings.CACHE_DIR
    settings.CACHE_DIR = _folder()
    try:
        return cast("Compiled", numba.njit(cache=True, fastmath=LOOSE)(function))
    finally:
        settings.CACHE_DIR = usual
