"""The section [mission] must fit the rest of a study."""

from __future__ import annotations

from collections.abc import Iterator, Mapping

from tolsim.errors import Problem
from tolsim.mission import HOURS_A_YEAR, Mission
from tolsim.quantity import show
from tolsim.study.outline import Outline

CURE = "Conditions and states without hours are judged, but do not count in the mission."


def mission_problems(
    outline: Outline, mission: Mission | None, ages: Mapping[str, float]
) -> Iterator[Problem]:
    """Names the study does not have, states without shares, units older than the mission.

    Parameters
    ----------
    outline : Outline
        Of the study file.
    mission : Mission or None
        Its section [mission], if it could be read.
    ages : mapping
        Age of the units in each condition that states a number, hours.
    """
    if mission is None:
        return
    for key, named, known in (
        ("conditions", mission.conditions, outline.conditions),
        ("states", mission.states, outline.states),
    ):
        for name in named:
            if name not in known:
                what = f"one of the {key} of this study"
                yield outline.unknown(f"mission.{key}", name, name, what, list(known))
    if not mission.states and len(outline.states) > 1:
        expected = "the share of the hours that each state takes"
        cure = f'Write for example {{{next(iter(outline.states))} = "100 %"}}. {CURE}'
        yield outline.problem("mission", "states", "nothing", expected, cure)
    longest = mission.years * HOURS_A_YEAR
    for name, hours in mission.conditions.items():
        if hours > 0.0 and ages.get(name, 0.0) > longest:
            yield outline.problem(
                f"conditions.{name}",
                "age",
                show(ages[name], "h"),
                f"no more than the {mission.years:g} years of the mission ({longest:.0f} h)",
                "An age is counted since the unit was built, running or not.",
            )
