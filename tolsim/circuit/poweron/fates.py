"""What becomes of a unit that is switched on."""

from __future__ import annotations

from enum import IntEnum


class Fate(IntEnum):
    """How the power-on of a unit ends."""

    NOT_RUN = 0
    STARTS = 1
    LATCHED = 2
    DIES = 3
    BURSTS = 4
    OTHER_SWING = 5
    UNDECIDED = 6

    @property
    def sentence(self) -> str:
        """What it means, for people."""
        return _SENTENCES[self]


_SENTENCES = {
    Fate.NOT_RUN: "Its power-on was not integrated; the modes along the ramp decide.",
    Fate.STARTS: "Switched on from zero charge, it reaches its orbit.",
    Fate.LATCHED: "Switched on, it ends with every switch conducting and no oscillation.",
    Fate.DIES: "Switched on, it ends at rest without oscillation.",
    Fate.BURSTS: "Switched on, its swing comes and goes: bursts.",
    Fate.OTHER_SWING: "Switched on, it swings steadily, but not as its orbit does.",
    Fate.UNDECIDED: "Switched on, it had not settled when the time was up.",
}
