"""Coils and cores as a workshop knows them: turns, dimensions, wire, inductance factor."""

from __future__ import annotations

import math
from typing import Annotated, Self

from pydantic import Field, model_validator
from scipy.constants import speed_of_light

from tolsim.errors import Mistake
from tolsim.quantity import Frequency, Inductance, Length, show
from tolsim.records import Frozen, exactly_one

LONGEST_WIRE = 0.25  # of a wavelength: from there on the coil resonates with itself


class Coil(Frozen):
    """Geometry of a single-layer air coil; gives its inductance, with wire its resistance too.

    `diameter` is the mean one, from wire centre to wire centre; `length` is turns times
    `pitch`, and either is given.  `leads` is the length of both straight leads together.
    """

    turns: Annotated[float, Field(gt=0, le=10_000)]
    diameter: Length
    length: Length | None = None
    pitch: Length | None = None
    wire: Length | None = None  # diameter of the copper
    frequency: Frequency | None = None  # at which skin and proximity effect are taken
    leads: Length | None = None

    @property
    def winding_length(self) -> float:
        """Turns times pitch, m."""
        return self.length if self.length is not None else self.turns * (self.pitch or 0.0)

    @property
    def gives_resistance(self) -> bool:
        """True if the wire and its frequency are known."""
        return self.wire is not None and self.frequency is not None

    @property
    def wire_length(self) -> float:
        """Length of the wire, leads included, m."""
        return math.hypot(self.turns * math.pi * self.diameter, self.winding_length) + (
            self.leads or 0.0
        )

    @model_validator(mode="after")
    def _can_be_wound(self) -> Self:
        given = {name for name in type(self).model_fields if getattr(self, name) is not None}
        for mistake in exactly_one(given, "length", "pitch"):
            raise mistake
        if self.wire is None:
            for key in sorted(given & {"frequency", "leads"}):
                raise Mistake(f"wire beside {key}", "Give the wire diameter too.", key="wire")
            return self
        pitch = self.winding_length / self.turns
        if self.wire > pitch:
            raise Mistake(
                f"a wire no thicker than the pitch ({show(pitch, 'm')})",
                "Turns of one layer lie beside each other.",
                key="wire",
                got=show(self.wire, "m"),
            )
        if self.wire >= self.diameter:
            raise Mistake("less than the diameter", key="wire", got=show(self.wire, "m"))
        if self.frequency is not None:
            self._must_be_short(self.frequency)
        return self

    def _must_be_short(self, frequency: float) -> None:
        """A coil whose wire is a quarter wave long is no inductor any more."""
        waves = self.wire_length * frequency / speed_of_light
        if waves > LONGEST_WIRE:
            raise Mistake(
                "a wire of less than a quarter wavelength",
                "Such a coil resonates with itself; give what was measured as inductance and q.",
                key="frequency",
                got=f"{show(self.wire_length, 'm')} of wire, {waves:.2g} wavelengths",
            )


class Core(Frozen):
    """Winding on a core of known inductance factor: L = al turns^2."""

    al: Inductance  # per turn squared
    turns: Annotated[int, Field(ge=1, le=10_000)]
