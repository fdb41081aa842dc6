"""Figures of every unit from its orbit: stresses, losses, temperatures, powers."""

from tolsim.figures.stage import measure_orbits
from tolsim.figures.start import measure_idle, measure_start

__all__ = ["measure_idle", "measure_orbits", "measure_start"]
