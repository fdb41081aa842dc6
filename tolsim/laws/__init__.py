"""Probability laws of one number: one frozen class each, found by the name used in tables.

A new law is one class here and one word in `LAWS`; the contract tests run it by themselves.
"""

from collections.abc import Mapping
from typing import Final

from tolsim.laws.law import Floats, Law
from tolsim.laws.lognormal import LogNormal
from tolsim.laws.measured import Measured
from tolsim.laws.mixture import NormalMixture
from tolsim.laws.moved import Moved
from tolsim.laws.sorted_out import SortedOut
from tolsim.laws.student import StudentT
from tolsim.laws.triangular import Asymmetric, Triangular
from tolsim.laws.truncated_normal import TruncatedNormal
from tolsim.laws.uniform import Fixed, Uniform
from tolsim.laws.window import Window

LAWS: Final[Mapping[str, type[Law]]] = {
    law.NAME: law
    for law in (
        Asymmetric,
        Fixed,
        LogNormal,
        SortedOut,
        StudentT,
        Triangular,
        TruncatedNormal,
        Uniform,
        Window,
    )
}

__all__ = [
    "LAWS",
    "Asymmetric",
    "Fixed",
    "Floats",
    "Law",
    "LogNormal",
    "Measured",
    "Moved",
    "NormalMixture",
    "SortedOut",
    "StudentT",
    "Triangular",
    "TruncatedNormal",
    "Uniform",
    "Window",
]
