"""The supplies of a study in words: what stands between an ideal source and each rail's net."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from tolsim.circuit.supply_ramp import ramp_kind
from tolsim.design import Rail
from tolsim.quantity import show


def supply_words(rail: Rail) -> str:
    """One rail: "36 V, 100 mohm; rises in 5 ms"."""
    return "; ".join((_series(rail), *_time(rail)))


def _series(rail: Rail) -> str:
    words = [show(rail.voltage, "V")]
    if rail.current_limit is not None:
        limit = f"limited to {show(rail.current_limit, 'A')}"
        if rail.foldback is not None:
            limit += f" ({show(rail.foldback * rail.current_limit, 'A')} at short circuit)"
        words.append(limit)
    if rail.resistance > 0:
        words.append(show(rail.resistance, "ohm"))
    if rail.inductance is not None:
        words.append(f"cable of {show(rail.inductance, 'H')}")
    if rail.bulk_capacitance is not None:
        bulk = f"{show(rail.bulk_capacitance, 'F')} at the net"
        if rail.bulk_resistance > 0:
            bulk += f" with {show(rail.bulk_resistance, 'ohm')} in series"
        words.append(bulk)
    return ", ".join([*words, "ideal"] if len(words) == 1 and rail.resistance == 0 else words)


def _time(rail: Rail) -> Iterator[str]:
    kind = ramp_kind(rail)
    if kind == "csv":
        rise = f"rises as recorded in {rail.ramp_file}"
    elif kind == "points":
        rise = f"rises as drawn, in {show(rail.ramp_points[-1][0], 's')}"
    elif kind == "step":
        rise = "rises at once"
    else:
        shape = {"linear": "evenly", "smooth": "smoothly", "exponential": "exponentially"}[kind]
        rise = f"rises {shape} in {show(rail.ramp_time or 0.0, 's')}"
    yield rise + (f", {show(rail.delay, 's')} after power-on" if rail.delay > 0 else "")
    if rail.bounce is not None:
        bounce = rail.bounce
        times = "once" if bounce.count == 1 else f"{bounce.count} times"
        yield f"contact bounces {times}, every {show(bounce.period, 's')}"
    if rail.dip is not None:
        dip = rail.dip
        low = f"{100 * (1 - dip.depth):.3g} %"
        yield f"dips to {low} for {show(dip.length, 's')}, {show(dip.at, 's')} after power-on"


def supply_entries(rails: Mapping[str, Rail]) -> list[dict[str, Any]]:
    """The entries `supplies` of the summary."""
    return [
        {"rail": name, "net": rail.net, "voltage": rail.voltage, "words": supply_words(rail)}
        for name, rail in rails.items()
    ]
