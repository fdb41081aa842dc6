"""A mission: how many hours a year a stage runs in each condition and state, for how long."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Annotated, Final, Self

from pydantic import Field, model_validator

from tolsim.errors import Mistake
from tolsim.quantity import ActivationEnergy, Age, Share, Temperature
from tolsim.records import Frozen, both_or_neither

HOURS_A_YEAR: Final = 8766.0
_SUM_WITHIN: Final = 1e-3  # shares are written with few digits


class Mission(Frozen):
    """Hours of running, condition by condition, shared out among the states of the load.

    `activation_energy` and `reference` turn hours at the temperature of each part into hours at
    `reference` that age it as much (Arrhenius).
    """

    years: Annotated[float, Field(gt=0, le=100)]
    conditions: Mapping[str, Age]  # hours a year
    states: Mapping[str, Share] = {}  # of the hours in any condition; not needed for one state
    activation_energy: ActivationEnergy | None = None  # eV
    reference: Temperature | None = None  # degC

    @property
    def hours_a_year(self) -> float:
        """Hours of running in a year."""
        return sum(self.conditions.values())

    def hours(self, condition: str, state: str) -> float:
        """Hours of running in one case over all years."""
        share = self.states.get(state, 0.0) if self.states else 1.0
        return self.years * self.conditions.get(condition, 0.0) * share

    @model_validator(mode="after")
    def _fits_into_a_year(self) -> Self:
        if not 0.0 < self.hours_a_year <= HOURS_A_YEAR:
            raise Mistake(
                f"hours that add up to more than 0 and at most {HOURS_A_YEAR:g} h, a year",
                key="conditions",
                got=f"{self.hours_a_year:g} h",
            )
        total = sum(self.states.values())
        if self.states and abs(total - 1.0) > _SUM_WITHIN:
            raise Mistake("shares that add up to 100 %", key="states", got=f"{100 * total:.4g} %")
        given = {name for name in type(self).model_fields if getattr(self, name) is not None}
        for mistake in both_or_neither(given, "activation_energy", "reference"):
            raise mistake
        return self
