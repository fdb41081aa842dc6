"""Compile a right-hand side when numba is there; the same function, slower, when not."""

from __future__ import annotations

from collections.abc import Callable
from importlib import import_module
from importlib.util import find_spec
from typing import Any, TypeVar, cast

Function = TypeVar("Function", bound=Callable[..., Any])


def compiled(function: Function) -> Function:
    """Return `function` compiled by numba, or unchanged: numba buys speed and nothing else."""
    if find_spec("numba") is None:
        return function
    return cast("Function", import_module("numba").njit(function))
