"""What the bench says about the model, in sentences."""

from __future__ import annotations

from collections.abc import Mapping
from math import ceil, log10
from typing import Any

from tolsim.answers.wording import percent
from tolsim.quantity import show

Entry = Mapping[str, Any]

MIDDLE = 0.5
MOST_DIGITS = 7
FAR = 0.90  # percentile (or 1 minus it) worth telling
AT_START = ("start_margin", "start_time")


def board_sentence(board: Entry, *, single: bool) -> str:
    """Verdict on one board: passes or fails, how unlikely it is, what stands out."""
    who = "the prototype" if single else f'prototype "{board["name"]}"'
    if board["verdict"] == "no answer":
        return f"Model check: no answer for {who}, {board['reason']}."
    number = len(board["readings"])
    joint = f"{number} readings together" if number > 1 else "its reading"
    p = f"p = {board['joint_p']:.2g}"
    if board["verdict"] == "pass":
        return f"Model check: pass, {who} may be one of the units ({joint}: {p}){_luck(board)}."
    suspect = board["suspect"]
    worst = next(one for one in board["readings"] if name_of(one) == suspect["reading"])
    value, low, high = (
        precise(worst[key], worst["uncertainty"], worst["unit_of_measure"])
        for key in ("value", "p5", "p95")
    )
    follows = f"; it follows {suspect['factor']} most" if suspect["factor"] else ""
    return (
        f"Model check: FAIL, {who} is none of the units this model builds ({joint}: {p}). Suspect"
        f" {worst['part']} {worst['title'].lower()} first: {value} read,"
        f" {low} to {high} predicted{follows}."
    ).replace("  ", " ")


def name_of(reading: Entry) -> str:
    """Column of a reading: "Q1.drain_peak"."""
    return f"{reading['part']}.{reading['figure']}" if reading["part"] else str(reading["figure"])


def precise(value: float, uncertainty: float, unit: str) -> str:
    """A value with as many digits as its uncertainty leaves it: "2.017 MHz" for +- 1 kHz."""
    digits = 3
    if uncertainty > 0.0 and value:
        digits = min(max(3, ceil(log10(abs(value) / uncertainty)) + 1), MOST_DIGITS)
    return show(value, unit, digits).replace("degC", "°C")


def _luck(board: Entry) -> str:
    """The reading farthest in the tails, if that is worth telling, and what it means."""
    far = max(board["readings"], key=lambda one: abs(one["percentile"] - MIDDLE))
    share = far["percentile"]
    if max(share, 1.0 - share) < FAR:
        return ""
    what = f"{far['part']} {far['title'].lower()}".strip()
    said = f"; its {what} is higher than in {percent(share, 0)} of the units"
    if share < MIDDLE:
        said = f"; its {what} is lower than in {percent(1.0 - share, 0)} of the units"
    if far["good_side"] is None:
        return said
    lucky = (far["good_side"] == "high") == (share > MIDDLE)
    kind = "starter" if far["figure"] in AT_START else "board"
    return f"{said}: a{' lucky' if lucky else 'n unlucky'} {kind}"
