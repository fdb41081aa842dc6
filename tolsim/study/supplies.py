"""Keys of a rail that belong together, and the recorded ramps that rails name."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from itertools import pairwise
from pathlib import Path

from tolsim.design import Rail
from tolsim.errors import Mistake, Problem
from tolsim.study.outline import Outline, Table
from tolsim.study.recording import Recording, read_recording

_TIMED = ("linear", "smooth", "exponential")
_SOFT = ("resistance", "inductance", "current_limit")


def supply_problems(outline: Outline) -> Iterator[Problem]:
    """Keys of rails that mean nothing without others, or exclude each other."""
    for name, table in outline.rails.items():
        place = f"rails.{name}"
        for mistake in (*_ramp(table), *_series(table)):
            yield Problem.of(mistake, outline.file, place)


def _ramp(table: Table) -> Iterator[Mistake]:
    kind = table.get("ramp")
    if "ramp_time" in table and kind not in (None, *_TIMED) and isinstance(kind, str):
        cure = f'Drop it, or write ramp = "linear" in place of "{kind}".'
        yield Mistake("no ramp_time with this ramp", cure, key="ramp_time", got=f'ramp = "{kind}"')
    if kind in _TIMED and "ramp_time" not in table:
        yield Mistake(
            f"ramp_time beside it, for a {kind} ramp",
            'For example ramp_time = "5 ms".',
            key="ramp",
            got="none",
        )
    for key, name in (("ramp_file", "csv"), ("ramp_points", "points")):
        if kind == name and key not in table:
            yield Mistake(f'{key} beside ramp = "{name}"', f"Give {key} too.", key=key, got="none")
        if key in table and kind != name and not (kind is None and "ramp_time" not in table):
            yield Mistake(f'ramp = "{name}" beside {key}', "Drop one of them.", key="ramp")
    if "ramp_file" in table and "ramp_points" in table:
        cure = "Drop one of them."
        yield Mistake("one of ramp_file and ramp_points", cure, key="ramp_file", got="both")


def _series(table: Table) -> Iterator[Mistake]:
    """Limit, foldback and bulk capacitor.

    A limit that falls with the output voltage is no function of the current: driven by a choke the
    voltage could jump between three values, if no capacitor held it.
    """
    if "foldback" in table and "current_limit" not in table:
        cure = "foldback is the share of the limit that is left at short circuit."
        yield Mistake("current_limit beside foldback", cure, key="current_limit", got="none")
    if "foldback" in table and "bulk_capacitance" not in table:
        cure = "Give the supply's output capacitor: without it such a limit has no steady state."
        yield Mistake("bulk_capacitance beside foldback", cure, key="bulk_capacitance", got="none")
    if "bulk_resistance" in table and "bulk_capacitance" not in table:
        cure = "Give the capacitor it is in series with."
        yield Mistake("bulk_capacitance beside it", cure, key="bulk_resistance", got="none")
    if "bulk_capacitance" in table and not any(key in table for key in _SOFT):
        yield Mistake(
            f"one of {', '.join(_SOFT)} beside it",
            "At the net of an ideal supply a capacitor does nothing.",
            key="bulk_capacitance",
            got="none",
        )


@dataclass
class Recordings:
    """The recorded ramps of a study, read from its folder."""

    folder: Path
    read: dict[str, Recording] = field(default_factory=dict)  # by path in the folder

    def fill(
        self, rails: Mapping[str, Rail], outline: Outline, problems: list[Problem]
    ) -> dict[str, Rail]:
        """Rails with the points of the files they name; every mistake goes to `problems`.

        Files of rails that could not be read themselves are looked at all the same.
        """
        filled = dict(rails)
        for name, table in outline.rails.items():
            place, path, rail = f"rails.{name}", table.get("ramp_file"), rails.get(name)
            if rail is not None and rail.ramp_points:
                problems += [Problem.of(m, outline.file, place) for m in _drawn_wrong(rail)]
            recording = self._one(path, outline, place, problems) if isinstance(path, str) else None
            if rail is not None and recording is not None:
                filled[name] = rail.model_copy(update={"ramp_points": recording.points})
        return filled

    def _one(
        self, path: str, outline: Outline, place: str, problems: list[Problem]
    ) -> Recording | None:
        """One file, read once."""

        def tell(line: int, mistake: Mistake) -> None:
            if line:
                problems.append(Problem.of(mistake, path, f"line {line}"))
            else:
                got = f'"{path}"'
                problems.append(Problem.of(mistake, outline.file, place, "ramp_file", got))

        if path not in self.read:
            recording = read_recording(self.folder, path, tell)
            if recording is None:
                return None
            self.read[path] = recording
        return self.read[path]


def _drawn_wrong(rail: Rail) -> Iterator[Mistake]:
    """What is wrong with points that the study itself gives."""
    times, levels = zip(*rail.ramp_points, strict=True)
    if len(times) < 2 or any(b <= a for a, b in pairwise(times)):  # noqa: PLR2004
        yield Mistake("two or more points, one after the other in time", key="ramp_points")
    if levels[0] != 0.0 or levels[-1] != 1.0:
        cure = "Levels are shares of the rail's voltage."
        got = f"{levels[0]:g} and {levels[-1]:g}"
        yield Mistake("0 at the first point and 1 at the last", cure, key="ramp_points", got=got)
