"""The section [lots] must fit the rest of a study."""

from __future__ import annotations

from collections.abc import Iterator

from tolsim.errors import Problem
from tolsim.study.outline import Outline


def lot_problems(outline: Outline, lots: object) -> Iterator[Problem]:
    """Reels that no part is fed from, and a lot that is lost before any unit fails.

    Parameters
    ----------
    outline : Outline
        Of the study file.
    lots : object
        Its section [lots] as written; shapes and types are told elsewhere.
    """
    if not isinstance(lots, dict):
        return
    own = [ref for ref, part in outline.parts.items() if not isinstance(part.get("reel"), str)]
    own += outline.rails
    reels = dict.fromkeys(
        part["reel"] for part in outline.parts.values() if isinstance(part.get("reel"), str)
    )
    named = lots.get("reels", {})
    for name in named if isinstance(named, dict) else ():
        if name not in reels and name not in own:
            what = "a reel of this study, or a part or rail that has none"
            yield outline.unknown("lots.reels", name, name, what, [*reels, *own])
    if lots.get("lost_when") in (0, "0 %", "0%"):
        got, cure = "0 %", "Write the share of failing units that makes a lot useless to you."
        yield outline.problem("lots", "lost_when", got, "a share above 0", cure)
