"""The ramps of all rails of a design, for N units: as given, stretched, or shortened at the end."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from tolsim.circuit.devices import Floats
from tolsim.circuit.supply_ramp import RampProfile, profile_of
from tolsim.circuit.transients.journey import Ramps
from tolsim.design import Design


def profiles_of(design: Design) -> dict[str, RampProfile]:
    """The ramp of every rail by name, in the order of the rails."""
    return {name: profile_of(rail) for name, rail in design.rails.items()}


def ramps_of(profiles: Mapping[str, RampProfile], units: int) -> Ramps:
    """The same ramps for N units."""
    longest = max(len(profile.times) for profile in profiles.values())
    times = np.stack([_filled(profile.times, longest) for profile in profiles.values()])
    levels = np.stack([_filled(profile.levels, longest) for profile in profiles.values()])
    shape = (units, *times.shape)
    return Ramps(np.broadcast_to(times, shape).copy(), np.broadcast_to(levels, shape).copy())


def _filled(row: Floats, length: int) -> Floats:
    return np.concatenate([row, np.full(length - len(row), row[-1])])


@dataclass(frozen=True)
class Shortened:
    """Ramps whose late part runs faster: real time up to `knee`, then compressed."""

    ramps: Ramps
    knee: Floats  # (N,) s
    ratio: Floats  # (N,) compressed time over real time after the knee, at most 1

    def real_time(self, time: Floats) -> Floats:
        """Real time of a moment on the compressed clock, (N,) s; past the ramps both run alike."""
        up = np.maximum(self.ramps.up, self.knee)
        inside = self.knee + (np.minimum(time, up) - self.knee) / self.ratio
        return np.where(time <= self.knee, time, inside + np.maximum(time - up, 0.0))


def shortened(ramps: Ramps, knee: Floats, span: Floats) -> Shortened:
    """Let all that is left of the ramps after `knee` (N,) pass within `span` (N,) seconds.

    Ramps that are shorter than that stay as they are.
    """
    left = np.maximum(ramps.up - knee, 0.0)
    ratio = np.where(left > span, span / np.where(left > 0, left, 1.0), 1.0)
    # a corner at the knee keeps the part before it exact
    corner = np.broadcast_to(knee[:, None, None], (*ramps.times.shape[:2], 1))
    levels = np.concatenate([ramps.levels, ramps.at(knee)[:, :, None]], axis=2)
    times = np.concatenate([ramps.times, corner], axis=2)
    order = np.argsort(times, axis=2, kind="stable")
    times = np.take_along_axis(times, order, axis=2)
    levels = np.take_along_axis(levels, order, axis=2)
    late = knee[:, None, None] + (times - knee[:, None, None]) * ratio[:, None, None]
    return Shortened(
        Ramps(np.where(times <= knee[:, None, None], times, late), levels), knee, ratio
    )
