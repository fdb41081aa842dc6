"""Changes from one state of the load to the next: how long they take, what makes them happen."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from tolsim.quantity import DurationOrZero
from tolsim.records import Frozen


class Requirement(Frozen):
    """A figure of a part that must reach a level on the unit's own orbit.

    `spread` is the law of each unit's relative deviation from `at_least`: no two lamps ignite at
    the same voltage.
    """

    part: str
    figure: str
    at_least: float  # in the figure's unit of measure
    spread: Mapping[str, Any] | None = None

    @property
    def column(self) -> str:
        """Where the figure stands in the rows of results."""
        return f"{self.part}.{self.figure}"


class Transition(Frozen):
    """A change of load that a stage goes through while it runs.

    It happens to units that meet `needs` in the state `before` (ignition), and lasts in those
    that meet `stays_while` in the state `after` (maintenance); others fall back.
    """

    before: str
    after: str
    time: DurationOrZero = 0.0  # s, in which the values move; 0: at once
    needs: Requirement | None = None
    stays_while: Requirement | None = None
    falls_back_to: str | None = None  # the state `before` if not given

    @property
    def title(self) -> str:
        """What it is called: "dark to glow"."""
        return f"{self.before} to {self.after}"
